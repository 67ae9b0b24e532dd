"""The only place that touches Numba: decorators, bit casts, fused multiply-add, and where compiled code is cached.

The cache folder is keyed by a hash of every kernel source and of the library versions, because Numba does not notice
when a helper in another file changes. The compiled code uses no fast-math (infinity means "never") and no automatic
contraction, so results carry the same bits on every x86-64 and ARM target that has fused multiply-add.
"""

from __future__ import annotations

import hashlib
import os
import sys
from collections.abc import Callable
from importlib import metadata
from pathlib import Path
from typing import Any, TypeVar, cast

from microsim.cache import cache_root

_PACKAGE = Path(__file__).parent
_KERNEL_ROOMS = ("hazards", "engine")


def cache_folder() -> Path:
    """Folder for compiled kernels: per user, per content of the kernel sources and versions."""
    digest = hashlib.sha256()
    for source in (Path(__file__), *(f for room in _KERNEL_ROOMS for f in sorted((_PACKAGE / room).glob("*.py")))):
        content = source.read_bytes()
        if b"microsim._jit" in content or source == Path(__file__):  # others hold no compiled code
            digest.update(content)
    for library in ("numba", "llvmlite", "numpy"):
        digest.update(f"{library}={metadata.version(library)};".encode())
    digest.update(sys.version.encode())
    return cache_root() / "kernels" / digest.hexdigest()[:16]


FOLDER = cache_folder()
os.environ.setdefault("NUMBA_CACHE_DIR", str(FOLDER))

import numba  # noqa: E402  (the cache folder must be known before Numba is imported)
from llvmlite import ir  # noqa: E402
from numba.core import types  # noqa: E402
from numba.extending import intrinsic  # noqa: E402

setattr(numba.config, "CACHE_DIR", os.environ["NUMBA_CACHE_DIR"])  # noqa: B010  (in case Numba was imported before us)

Kernel = TypeVar("Kernel", bound=Callable[..., Any])


# No kernel allocates: without reference counting views cost nothing, and an allocation would fail to compile.
_COMMON: dict[str, Any] = {"error_model": "numpy", "nogil": True, "_nrt": False}
_INNER: dict[str, Any] = {**_COMMON, "no_cpython_wrapper": True, "no_cfunc_wrapper": True}


def _compile(function: Kernel, options: dict[str, Any]) -> Kernel:
    return cast(Kernel, numba.njit(**options)(function))


def helper(function: Kernel) -> Kernel:
    """Compiled where it is used; not cached on its own, so one cached entry holds the whole call tree."""
    return _compile(function, _INNER)


def spliced(function: Kernel) -> Kernel:
    """A step of a kernel that is pasted into its caller before compilation, so that the optimiser sees it once."""
    return _compile(function, {**_COMMON, "inline": "always"})


def inlined(function: Kernel) -> Kernel:
    """A scalar helper that must disappear into its caller's loop so that the loop can be vectorised."""
    return _compile(function, {**_INNER, "forceinline": True})


def entry(function: Kernel) -> Kernel:
    """A kernel that Python calls: cached on disk, releases the interpreter lock."""
    return _compile(function, {**_COMMON, "cache": True})


def is_warm() -> bool:
    """Whether compiled kernels are already in the cache, so that a first run can announce the wait."""
    folder = Path(os.environ["NUMBA_CACHE_DIR"])
    return folder.is_dir() and any(folder.rglob("*.nbc"))


@intrinsic
def bits_of(typing_context: Any, x: Any) -> Any:
    """uint64 with the bit pattern of a float64."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.bitcast(args[0], ir.IntType(64))

    return types.uint64(types.float64), codegen


@intrinsic
def double_of(typing_context: Any, u: Any) -> Any:
    """float64 with the bit pattern of a uint64."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.bitcast(args[0], ir.DoubleType())

    return types.float64(types.uint64), codegen


@intrinsic
def fma(typing_context: Any, a: Any, b: Any, c: Any) -> Any:
    """a * b + c with one rounding."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.fma(*args)

    return types.float64(types.float64, types.float64, types.float64), codegen
