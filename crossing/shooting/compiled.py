"""The one place that decides how kernels are compiled."""

from __future__ import annotations

import sys
from collections.abc import Callable
from typing import Any, TypeVar

import numba

__all__ = ["announce_compilation", "kernel"]

F = TypeVar("F", bound=Callable[..., object])

# "contract" lets multiplications and additions fuse; nothing is reordered and NaN stays NaN.
_OPTIONS: Any = {"nogil": True, "error_model": "numpy", "fastmath": {"contract"}}
_announced = False


def kernel(function: F) -> F:
    """Compile a function of plain numbers and float64 arrays when it is first called, and keep the result on disk.

    Kernels run without the interpreter's lock and are serial: threads call them side by side. Where no cache folder
    can be written (a read-only installation without a home), they are compiled anew in every process.
    """
    compiled: F
    try:
        compiled = numba.njit(cache=True, **_OPTIONS)(function)
    except RuntimeError:
        compiled = numba.njit(**_OPTIONS)(function)
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
