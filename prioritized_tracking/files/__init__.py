# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Files of references: CSV tables of poses and joint positions, and plain text, with every fault named.

"""

from __future__ import annotations

from .tables import read_joints_csv, read_pose_csv, write_joints_csv, write_pose_csv
from .text_files import read_text, whole_file, write_text

__all__ = [
    "read_joints_csv",
    "read_pose_csv",
    "read_text",
    "whole_file",
    "write_joints_csv",
    "write_pose_csv",
    "write_text",
]
