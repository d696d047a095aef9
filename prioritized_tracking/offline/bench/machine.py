# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Which machine the figures are from.

"""

from __future__ import annotations

import os
import platform
from importlib import metadata
from pathlib import Path
from typing import Any

from prioritized_tracking.offline.summary import versions


def machine() -> dict[str, Any]:
    """
    Processor, number of processors this process may use, system, and how busy it is (load average, 1 min).

    """
    usable = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count()
    load = os.getloadavg()[0] if hasattr(os, "getloadavg") else None
    return {
        "processor": _processor(),
        "processors": usable,
        "system": f"{platform.system()} {platform.release()}",
        "load_average": load,
        "versions": {**versions(), "numba": _version("numba")},
    }


def describe(found: dict[str, Any]) -> str:
    """
    The machine in one line.

    """
    names = ("python", "numpy", "numba", "pin")
    known = [f"{name} {found['versions'][name]}" for name in names if found["versions"].get(name)]
    load = "" if found["load_average"] is None else f"; load average {found['load_average']:.2g}"
    return f"{found['processor']}, {found['processors']} processors; {', '.join(known)}{load}"


def _processor() -> str:
    """
    Name of the processor, as the system gives it.

    """
    try:
        for line in Path("/proc/cpuinfo").read_text(encoding="utf-8").splitlines():
            if line.lower().startswith("model name"):
                return line.partition(":")[2].strip()
    except OSError:
        pass
    return platform.processor() or platform.machine()


def _version(name: str) -> str | None:
    try:
        return metadata.version(name)
    except metadata.PackageNotFoundError:
        return None
