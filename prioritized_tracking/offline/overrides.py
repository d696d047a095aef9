# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Changes to a stack given on the command line, `--set key=value`, typed as in the file.

"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from prioritized_tracking.errors import Problem
from prioritized_tracking.parameters.yaml_dialect import Node, compose


def parse_overrides(texts: Sequence[str], problems: list[Problem]) -> dict[str, Any]:
    """
    Return dotted keys and typed values; adds to `problems` what cannot be read.

    Parameters
    ----------
    texts : sequence of str
        Each ``key=value``, the value written as in a stack file.
    problems : list of Problem
        Extended.

    """
    changes: dict[str, Any] = {}
    for text in texts:
        key, equals, value = text.partition("=")
        key = key.strip()
        if not equals or not key or not value.strip():
            problems.append(
                Problem(
                    what="a change is not understood", where="--set", expected="key=value", got=f"'{text}'"
                )
            )
            continue
        node, faults = compose(value, f"--set {key}")
        problems.extend(faults)
        if node is not None and not faults:
            changes |= _flat(key, node)
    return changes


def _flat(key: str, node: Node) -> dict[str, Any]:
    """
    Return a value as {key: value}, a block as one entry for each of its leaves.

    """
    if node.kind != "map":
        return {key: node.value}
    leaves: dict[str, Any] = {}
    for name, item in node.value.items():
        leaves |= _flat(f"{key}.{name}", item)
    return leaves
