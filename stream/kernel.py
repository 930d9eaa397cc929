"""Decorator for compiled kernels: plain Python functions in, numba functions out, cached on disk."""

from __future__ import annotations

import hashlib
import os
import tempfile
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any, TypeVar

import numba
from llvmlite import ir
from numba.core import config as numba_config
from numba.core import types
from numba.extending import intrinsic

__all__ = [
    "cache_folder",
    "compiled_before",
    "kernel",
    "load_u64",
    "prefetch",
    "small",
    "store_u64",
    "trailing_zeros",
]

F = TypeVar("F", bound=Callable[..., Any])
_intrinsic: Callable[[Callable[..., Any]], Callable[..., Any]] = (
    intrinsic  # called without its first argument
)


@cache
def cache_folder() -> str | None:
    """A folder named by the digest of this file, of every other with kernels, and of their neighbours.

    numba looks only at the file of the outer function when it decides whether a cached kernel is
    stale, so that a change in an inlined helper of another file would go unnoticed. None where no such
    folder can be written in, as under a service user without a home: kernels are then compiled at each start.
    """
    package = Path(__file__).parent
    sources = {path: path.read_bytes() for path in sorted(package.rglob("*.py"))}
    compiled = {
        path for path, source in sources.items() if b"\n@kernel\n" in source or b"\n@small\n" in source
    }
    folders = {path.parent for path in compiled} - {package}
    digest = hashlib.sha256(Path(__file__).read_bytes())
    for path, source in sources.items():
        if path in compiled or path.parent in folders:
            digest.update(source)
    base = _caches()
    folder = base and os.path.join(base, f"kernels-{digest.hexdigest()[:16]}")
    return folder if folder and _writable(folder) else None


def _caches() -> str | None:
    """Where this user keeps caches, if anywhere: a user without a home has none."""
    if told := os.environ.get("NUMBA_CACHE_DIR"):
        return told
    if told := os.environ.get("XDG_CACHE_HOME"):
        return os.path.join(told, "bedload")
    home = os.path.expanduser("~")
    return os.path.join(home, ".cache", "bedload") if os.path.isabs(home) else None


def _writable(folder: str) -> bool:
    try:
        os.makedirs(folder, exist_ok=True)
        tempfile.TemporaryFile(dir=folder).close()
    except OSError:
        return False
    return True


config: Any = numba_config


def _compile(function: F, **options: Any) -> F:
    folder, before = cache_folder(), config.CACHE_DIR
    config.CACHE_DIR = folder or before
    try:
        decorate = numba.njit(cache=folder is not None, nogil=True, error_model="numpy", **options)
        compiled: F = decorate(function)
    finally:
        config.CACHE_DIR = before
    return compiled


def compiled_before(module: str) -> bool:
    """Whether a kernel of the file `module`.py was compiled and kept on disk, perhaps by another process.

    A learner's method, as settings write it, does for its file. numba makes its folders when kernels are
    declared, so that only files in them tell.
    """
    folder = cache_folder()
    return folder is not None and any(Path(folder).glob(f"*/{module.replace('-', '_')}.*.nbi"))


def kernel(function: F) -> F:
    """Compiles `function` at its first call with each signature; the result is kept on disk."""
    return _compile(function)


def small(function: F) -> F:
    """A helper that kernels call, inlined into each of them by the compiler."""
    return _compile(function, forceinline=True)


@_intrinsic
def load_u64(typing: Any, data: Any, index: Any) -> Any:
    """The 8 bytes of uint8[...] `data` from `index`, little-endian, at any alignment, unchecked."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        array = context.make_array(signature.args[0])(context, builder, args[0])
        place = builder.bitcast(builder.gep(array.data, [args[1]]), ir.IntType(64).as_pointer())
        word = builder.load(place)
        word.align = 1
        return word

    return types.uint64(data, types.intp), generate


@_intrinsic
def store_u64(typing: Any, data: Any, index: Any, word: Any) -> Any:
    """Writes 8 bytes to uint8[...] `data` from `index`, little-endian, at any alignment, unchecked."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        array = context.make_array(signature.args[0])(context, builder, args[0])
        place = builder.bitcast(builder.gep(array.data, [args[1]]), ir.IntType(64).as_pointer())
        builder.store(args[2], place).align = 1
        return context.get_dummy_value()

    return types.void(data, types.intp, types.uint64), generate


@_intrinsic
def prefetch(typing: Any, data: Any, index: Any) -> Any:
    """Asks for the cache line of element `index` of a flat array; changes nothing."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        array = context.make_array(signature.args[0])(context, builder, args[0])
        byte = ir.IntType(8).as_pointer()
        place = builder.bitcast(builder.gep(array.data, [args[1]]), byte)
        flag = ir.IntType(32)
        kind = ir.FunctionType(ir.VoidType(), [byte, flag, flag, flag])
        function = builder.module.declare_intrinsic("llvm.prefetch", [byte], kind)
        builder.call(function, [place, flag(0), flag(3), flag(1)])
        return context.get_dummy_value()

    return types.void(data, types.intp), generate


@_intrinsic
def trailing_zeros(typing: Any, word: Any) -> Any:
    """How many zero bits a uint64 ends with; 64 for zero."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.cttz(args[0], ir.Constant(ir.IntType(1), 0))

    return types.int64(types.uint64), generate
