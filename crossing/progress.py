"""Progress on standard error, and only when that is a terminal."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from contextvars import ContextVar
from typing import TypeVar

__all__ = ["quiet", "track"]

T = TypeVar("T")
_QUIET: ContextVar[bool] = ContextVar("crossing_quiet", default=False)


@contextmanager
def quiet(on: bool = True) -> Iterator[None]:
    """Silence the progress bars of everything inside the ``with`` block."""
    token = _QUIET.set(on)
    try:
        yield
    finally:
        _QUIET.reset(token)


def track(items: Iterable[T], what: str, total: int | None = None) -> Iterator[T]:
    """Pass `items` on, with a progress bar named `what` where a terminal can show it."""
    from tqdm import tqdm  # half a second of imports that most calls never need

    disable = True if _QUIET.get() else None
    yield from tqdm(items, desc=what, total=total, leave=False, disable=disable)
