# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Torque control of robot arms along exact tool paths, by several charts in order of priority.

``load`` builds a controller from a stack file; see the README for what can be done with it.

"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from prioritized_tracking.errors import InputError, Problem

if TYPE_CHECKING:
    from prioritized_tracking.assembly import load
    from prioritized_tracking.core.command import Command, TaskReport
    from prioritized_tracking.core.cycle import Controller

__version__ = "0.1.0"

__all__ = ["Command", "Controller", "InputError", "Problem", "TaskReport", "__version__", "load"]

_LAZY = {
    "load": "assembly",
    "Controller": "core.cycle",
    "Command": "core.command",
    "TaskReport": "core.command",
}


def __getattr__(name: str) -> Any:
    """
    Import what needs the numerical libraries when it is first used, so that ``--help`` is quick.

    """
    if name not in _LAZY:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    from importlib import import_module

    return getattr(import_module(f".{_LAZY[name]}", __name__), name)
