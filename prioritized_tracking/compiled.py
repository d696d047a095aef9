# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Compile plain array functions with numba, where it is installed and can keep what it compiles.

The functions are written in the subset of NumPy that numba knows; without numba the same source
runs interpreted, with the same results. What was compiled is kept in the user's cache directory, in
a folder named after the sources of all compiled functions: nothing in it can be out of date.
``NUMBA_CACHE_DIR`` moves it, ``NUMBA_DISABLE_JIT=1`` turns compiling off (both are numba's own).

"""

from __future__ import annotations

import hashlib
import os
import pickle
import shutil
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

from prioritized_tracking.user_cache import user_cache

Function = TypeVar("Function", bound=Callable[..., Any])

#: Folders of other versions are removed when they have not been used for this long, s.
_KEEP = 30 * 24 * 3600.0


def _source_hash() -> str:
    """
    Name for the sources of all compiled functions.

    """
    digest = hashlib.sha256()
    package = Path(__file__).parent
    for folder in ("core", "charts"):
        for path in sorted((package / folder).rglob("*.py")):
            digest.update(path.read_bytes())
    return digest.hexdigest()[:16]


def _cache_folder() -> Path:
    """
    Folder for compiled code of this version; made if need be.

    Raises
    ------
    OSError
        It cannot be made or written to.

    """
    base = os.environ.get("NUMBA_CACHE_DIR") or user_cache()
    if base is None:
        raise FileNotFoundError("the user has no home")
    folder = Path(base) / f"compiled-{_source_hash()}"
    if not folder.is_dir():
        folder.mkdir(parents=True, exist_ok=True)
        _remove_old(folder)
    if not os.access(folder, os.W_OK):
        raise PermissionError(f"{folder} cannot be written to")
    os.utime(folder)
    return folder


def _remove_old(folder: Path) -> None:
    """
    Remove the folders of versions that have not been used for a long time.

    """
    for other in folder.parent.glob("compiled-*"):
        if other != folder and time.time() - other.stat().st_mtime > _KEEP:
            shutil.rmtree(other, ignore_errors=True)


def _choose() -> tuple[Any, Path | None, str]:
    """
    (numba or None, cache folder, what to tell the user).

    """
    try:
        import numba
    except ImportError:
        return None, None, "interpreted: numba is not installed (pip install 'prioritized_tracking[fast]')"
    except Exception as error:  # numba refuses some versions of numpy and Python in its own way
        return None, None, f"interpreted: numba cannot be used ({error})"
    if os.environ.get("NUMBA_DISABLE_JIT", "0") not in ("", "0"):
        return None, None, "interpreted: NUMBA_DISABLE_JIT is set"
    try:
        return numba, _cache_folder(), f"compiled with numba {numba.__version__}"
    except OSError as error:
        return None, None, f"interpreted: no folder for compiled code ({error}); set NUMBA_CACHE_DIR to one"


_numba, FOLDER, STATUS = _choose()


def compiled(function: Function) -> Function:
    """
    Compile a function when it is first called, or leave it as it is.

    Parameters
    ----------
    function : of arrays, numbers and named tuples of them; calls only compiled functions.

    """
    if _numba is None:
        return function
    before = _numba.config.CACHE_DIR
    _numba.config.CACHE_DIR = str(FOLDER)  # read when the function is decorated
    try:
        dispatcher: Function = _numba.njit(cache=True, nogil=True, error_model="numpy")(function)
    finally:
        _numba.config.CACHE_DIR = before
    return dispatcher


def is_compiled() -> bool:
    """
    Whether functions are compiled in this process.

    """
    return _numba is not None


def is_cold() -> bool:
    """
    Whether the first call will have to compile, which takes about half a minute.

    """
    return FOLDER is not None and not any(FOLDER.rglob("*.nbi"))


def warm_up(use: Callable[[], object]) -> None:
    """
    Call what uses compiled functions, so that all of them are compiled, or read from the cache, now.

    Optimised a little less than numba would: twice as quick to compile, as quick to run. What turns
    out to be damaged in the cache is thrown away and compiled again.

    Parameters
    ----------
    use : calls every function that will be needed, with arguments of the same types.

    """
    if _numba is None:
        use()
        return
    level = _numba.config.OPT
    if "NUMBA_OPT" not in os.environ:
        _numba.config.OPT = type(level)(2)
    try:
        try:
            use()
        except (EOFError, pickle.UnpicklingError, OSError, IndexError, KeyError, AttributeError):
            for path in FOLDER.rglob("*.nb*") if FOLDER is not None else ():
                path.unlink(missing_ok=True)
            use()
    finally:
        _numba.config.OPT = level
