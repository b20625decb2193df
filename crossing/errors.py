"""The errors that the package raises on purpose."""

from __future__ import annotations

__all__ = ["CrossingError", "InputError"]


class CrossingError(Exception):
    """Base of every error that the package raises on purpose."""


class InputError(CrossingError, ValueError):
    """Something that the user gave cannot be used; the command line answers with exit status 2.

    Parameters
    ----------
    problem : str
        What is wrong and what to do, without a closing full stop.
    source : str or os.PathLike, optional
        File in which the problem sits.
    where : str, optional
        Key (``lens.redshift``) or row (``row 7``) of that file.

    Notes
    -----
    ``str(error)`` is always a single line: ``source: where: problem``. It is a `ValueError` as well, because bad
    arguments of functions raise it: an ``except ValueError`` around checks of our own must let it pass.
    """

    def __init__(self, problem: str, *, source: object | None = None, where: str | None = None) -> None:
        parts = [str(part) for part in (source, where, problem) if part is not None and str(part)]
        super().__init__(" ".join(": ".join(parts).split()))
        self.problem = problem
        self.source = source
        self.where = where

    def located(self, *, source: object | None = None, where: str | None = None) -> InputError:
        """Copy of this error with the places that it does not name yet filled in."""
        return InputError(self.problem, source=self.source or source, where=self.where or where)
