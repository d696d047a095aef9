# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Errors of input: whose fault, what was expected, what was got, how to repair it.

All problems of one input travel in one exception, so that a file is repaired in one go.

"""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass

MAX_SHOWN = 100
"""Problems a message shows; a file with more is another kind of file."""


@dataclass(frozen=True, kw_only=True)
class Problem:
    """
    One thing that is wrong with an input.

    Attributes
    ----------
    what : str
        The fault in one sentence, without a final full stop.
    where : str
        Place of the fault, e.g. ``stack.yaml:12 tasks.seam.damping``; empty: the input as a whole.
    expected : str
        What would have been right, with unit and range; empty: clear from `what`.
    got : str
        What was found, shortened; empty: clear from `what`.
    remedy : str
        What to do about it, as a sentence; empty: clear from `expected`.

    """

    what: str
    where: str = ""
    expected: str = ""
    got: str = ""
    remedy: str = ""

    def __str__(self) -> str:
        """
        Return the problem as text, one line for the fault and one for each detail.

        """
        head = f"{self.where}: {self.what}" if self.where else self.what
        details = (("expected", self.expected), ("got", self.got), ("remedy", self.remedy))
        return "\n".join([head, *(f"    {label + ':':<9} {text}" for label, text in details if text)])


class InputError(ValueError):
    """
    An input is refused; carries every problem found in it.

    Parameters
    ----------
    problems : Problem or iterable of Problem
        At least one; repeated ones are kept once.

    Attributes
    ----------
    problems : tuple of Problem

    """

    def __init__(self, problems: Problem | Iterable[Problem]) -> None:
        found = (problems,) if isinstance(problems, Problem) else tuple(dict.fromkeys(problems))
        if not found:
            raise TypeError("InputError needs at least one Problem")
        self.problems: tuple[Problem, ...] = found
        super().__init__(found)

    def __str__(self) -> str:
        """
        Return the problems as readable text, numbered when there are several.

        """
        if len(self.problems) == 1:
            return str(self.problems[0])
        texts = [f"{i}. {problem}" for i, problem in enumerate(self.problems[:MAX_SHOWN], start=1)]
        if len(self.problems) > MAX_SHOWN:
            texts.append(f"… and {len(self.problems) - MAX_SHOWN} more")
        return "\n".join([f"{len(self.problems)} problems:", *texts])


def nearest(name: str, known: Iterable[str]) -> str:
    """
    Return " Did you mean 'x'?" for the known name closest to `name`, or "" when none is close.

    Parameters
    ----------
    name : str
        The name that is not known.
    known : iterable of str
        The names that are.

    """
    candidates = {other.casefold(): other for other in known}
    close = difflib.get_close_matches(name[:200].casefold(), list(candidates), n=1, cutoff=0.6)
    return f" Did you mean '{candidates[close[0]]}'?" if close else ""
