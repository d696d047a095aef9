# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Companion of a pose path: the joint path that goes with it, through singularities.

"""

from __future__ import annotations

from .companion import solve_companion
from .report import Companion, Peak

__all__ = ["Companion", "Peak", "solve_companion"]
