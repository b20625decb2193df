"""The one place that decides how kernels are compiled."""

from __future__ import annotations

import sys
from collections.abc import Callable
from typing import Any, TypeVar

import numba

__all__ = ["announce_compilation", "kernel", "strict_kernel"]

F = TypeVar("F", bound=Callable[..., object])

# "contract" lets multiplications and additions fuse; nothing is reordered and NaN stays NaN.
_OPTIONS: Any = {"nogil": True, "error_model": "numpy", "fastmath": {"contract"}}
_announced = False


def kernel(function: F) -> F:
    """Compile a function of plain numbers and float64 arrays when it is first called, and keep the result on disk.

    Kernels run without the interpreter's lock and are serial: threads call them side by side. Where no cache folder
    can be written (a read-only installation without a home), they are compiled anew in every process.
    """
    return _compiled(function, _OPTIONS)


def strict_kernel(function: F) -> F:
    """Compile like `kernel`, but fuse nothing: the same bits however the compiler puts functions into each other.

    It does that in another way for functions that it has on disk, and a map that is resumed in a new process must not
    differ in its last bits from one that was not interrupted.
    """
    return _compiled(function, {**_OPTIONS, "fastmath": False})


def _compiled(function: F, options: Any) -> F:
    compiled: F
    try:
        compiled = numba.njit(cache=True, **options)(function)
    except RuntimeError:
        compiled = numba.njit(**options)(function)
    return compiled


def announce_compilation(dispatcher: object) -> None:
    """Say once, on a terminal, that kernels are about to be compiled, if `dispatcher` has not been before."""
    global _announced
    signatures = getattr(dispatcher, "signatures", None)
    hits = getattr(getattr(dispatcher, "stats", None), "cache_hits", {})
    if _announced or signatures or hits or not sys.stderr.isatty():
        return
    _announced = True
    sys.stderr.write("crossing: compiling kernels, once for this installation (about a minute)\n")
