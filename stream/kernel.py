"""Decorator for compiled kernels: plain Python functions in, numba functions out, cached on disk."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any, TypeVar

import numba
from numba.core import config

__all__ = ["kernel", "small"]

F = TypeVar("F", bound=Callable[..., Any])


@cache
def _cache_folder() -> str:
    """A folder named by the digest of every source file that may hold a kernel.

    numba looks only at the file of the outer function when it decides whether a cached kernel is
    stale, so that a change in an inlined helper of another file would go unnoticed.
    """
    package = Path(__file__).parent
    digest = hashlib.sha256()
    for path in sorted(package.rglob("*.py")):
        if path.parent.name not in ("cli", "runs", "settings"):
            digest.update(path.read_bytes())
    home = os.environ.get("XDG_CACHE_HOME") or os.path.join(os.path.expanduser("~"), ".cache")
    base = os.environ.get("NUMBA_CACHE_DIR") or os.path.join(home, "bedload")
    return os.path.join(base, f"kernels-{digest.hexdigest()[:16]}")


def _compile(function: F, **options: Any) -> F:
    before = config.CACHE_DIR
    config.CACHE_DIR = _cache_folder()
    try:
        compiled: F = numba.njit(cache=True, nogil=True, **options)(function)
    finally:
        config.CACHE_DIR = before
    return compiled


def kernel(function: F) -> F:
    """Compiles `function` at its first call with each signature; the result is kept on disk."""
    return _compile(function)


def small(function: F) -> F:
    """A helper that kernels call, inlined into each of them by the compiler."""
    return _compile(function, forceinline=True)
