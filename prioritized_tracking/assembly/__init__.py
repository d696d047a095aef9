# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
From a stack file to a controller: the border at which everything that needs the arm is checked.

"""

from __future__ import annotations

from .loading import build_controller, compute_companion, load

__all__ = ["build_controller", "compute_companion", "load"]
