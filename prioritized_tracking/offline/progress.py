# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Progress bars on standard error; silent where that is no terminal.

"""

from __future__ import annotations

import contextlib
import shutil
import sys
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager
from typing import Any

from tqdm import tqdm


@contextlib.contextmanager
def fraction_bar() -> Iterator[Callable[[float, str], None]]:
    """
    Give a function that takes the fraction done and what is being done; the bar appears with its first call.

    """
    bars: list[Any] = []

    def show(fraction: float, doing: str) -> None:
        if not bars:
            bars.append(_bar(100, unit="%", leave=False))
        bars[0].set_description(doing, refresh=False)
        bars[0].update(round(100 * fraction) - bars[0].n)

    try:
        yield show
    finally:
        for bar in bars:
            bar.close()


def cycle_bar(law: str, cycles: int) -> AbstractContextManager[Any]:
    """
    Return a bar over the cycles of a law.

    """
    bar: AbstractContextManager[Any] = _bar(cycles, unit=" cycles", desc=law, unit_scale=True)
    return bar


def _bar(total: int, **appearance: Any) -> Any:
    """
    Return a bar that is seen on terminals that report no size, too (containers).

    """
    size = shutil.get_terminal_size()
    return tqdm(
        total=total,
        file=sys.stderr,
        disable=None,
        ncols=min(size.columns, 100),
        nrows=size.lines,
        **appearance,
    )
