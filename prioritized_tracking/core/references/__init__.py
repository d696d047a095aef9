# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
References over path time: poses and joint positions, held or along a path.

"""

from __future__ import annotations

from .path_time import Progress
from .references import JointHold, JointPath, JointSample, PoseHold, PosePath, PoseSample

__all__ = ["JointHold", "JointPath", "JointSample", "PoseHold", "PosePath", "PoseSample", "Progress"]
