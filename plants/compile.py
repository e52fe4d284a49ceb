"""Compilation of the numerical kernels, and where the compiled code is kept.

The compiler's own cache looks only at the file of the outermost function, so that a change in
an inlined helper in another file would go unseen. The cache folder is therefore named by a
digest of every source that holds kernels.
"""

from __future__ import annotations

import hashlib
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, TypeVar, cast

import numba

if TYPE_CHECKING:
    from collections.abc import Callable

_Function = TypeVar("_Function", bound="Callable[..., object]")

_KERNEL_SOURCES = (
    "plants/*.py",
    "harness/controllers/*.py",
    "harness/engine/*.py",
    "harness/analysis/linear.py",
)


def _user_cache() -> Path:
    if "NUMBA_CACHE_DIR" in os.environ:
        return Path(os.environ["NUMBA_CACHE_DIR"])
    if sys.platform == "win32":
        return (
            Path(os.environ.get("LOCALAPPDATA", Path.home() / "AppData" / "Local")) / "dryrig"
        )
    return Path(os.environ.get("XDG_CACHE_HOME", Path.home() / ".cache")) / "dryrig"


def _source_digest() -> str:
    root = Path(__file__).resolve().parent.parent
    digest = hashlib.sha256()
    for pattern in _KERNEL_SOURCES:
        for source in sorted(root.glob(pattern)):
            digest.update(source.name.encode())
            digest.update(source.read_bytes())
    return digest.hexdigest()[:16]


_CACHE = _user_cache() / f"kernels-{_source_digest()}"
# The configuration module is filled at run time; its names are unknown to the type checker.
setattr(numba.config, "CACHE_DIR", str(_CACHE))  # noqa: B010


def kernel(function: _Function) -> _Function:
    """Compile a kernel on its first call, or load it from the cache.

    ``NUMBA_DISABLE_JIT=1`` leaves the function as plain Python, with the same results.
    Fast-math stays off, so that results are bit-identical on one machine and version.

    Parameters
    ----------
    function : callable
        A function of floats, integers and arrays.

    Returns
    -------
    callable
        The same function, compiled.
    """
    return cast(
        "_Function",
        numba.njit(cache=True, fastmath=False, nogil=True, error_model="numpy")(function),
    )


def inlined_kernel(function: _Function) -> _Function:
    """Compile a kernel that is built into its caller.

    A call hands over seven words for each array, which costs a few nanoseconds; but what is
    built in is compiled once more with each caller, so this is for what a tick calls once.

    Parameters
    ----------
    function : callable
        A function of floats, integers and arrays.

    Returns
    -------
    callable
        The same function, compiled.
    """
    return cast(
        "_Function",
        numba.njit(
            cache=True, fastmath=False, nogil=True, error_model="numpy", forceinline=True
        )(function),
    )


def is_compiled() -> bool:
    """Return whether this version's kernels have been compiled on this machine before."""
    return os.environ.get("NUMBA_DISABLE_JIT") == "1" or any(_CACHE.rglob("*.nbi"))
