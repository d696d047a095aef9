# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Where the user's cache is: for compiled code and computed companions.

"""

from __future__ import annotations

import os
from pathlib import Path


def user_cache() -> Path | None:
    """
    The package's folder in the user's cache directory; it need not exist. None: the user has no home.

    As the XDG base directory specification has it, a relative ``XDG_CACHE_HOME`` is not used.

    """
    given = os.environ.get("XDG_CACHE_HOME", "")
    base = given if os.path.isabs(given) else os.path.join(os.path.expanduser("~"), ".cache")
    return Path(base) / "prioritized_tracking" if os.path.isabs(base) else None
