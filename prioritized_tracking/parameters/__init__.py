# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The stack file: its schema, and its reader, which reports every problem at once.

"""

from __future__ import annotations

from .stack_file import StackFile, all_parameters, find_parameter, read_stack, resolve, stack_of_values

__all__ = ["StackFile", "all_parameters", "find_parameter", "read_stack", "resolve", "stack_of_values"]
