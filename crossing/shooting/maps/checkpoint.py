"""State of a long computation on disk, from which the same computation goes on."""

from __future__ import annotations

import os
import time
from pathlib import Path
from typing import Any
from zipfile import BadZipFile

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError

__all__ = ["Keeper"]


class Keeper:
    """Keeps the state of a map on disk, whole or not at all, and takes up one that belongs to the same map.

    Parameters
    ----------
    path : pathlib.Path or None
        File; None keeps nothing.
    seconds : float
        Least time between two writings.
    key : str
        Digest of everything that the map depends on.
    shares : int
        Number of shares of a pass.
    """

    def __init__(self, path: Path | None, seconds: float, key: str, shares: int) -> None:
        self.path, self.seconds, self.key, self.shares = path, seconds, key, shares
        self.written = time.monotonic()
        self.finished: list[tuple[NDArray[np.float64], NDArray[np.float64]]] = []
        self.state = self._read()

    def _read(self) -> dict[str, Any] | None:
        if self.path is None or not self.path.exists():
            return None
        try:
            # A file of its own, since np.load leaves a damaged one open.
            with self.path.open("rb") as file, np.load(file, allow_pickle=False) as archive:
                state = {name: archive[name] for name in archive.files}
        except (OSError, ValueError, EOFError, KeyError, BadZipFile):
            return None
        return state if str(state.get("key")) == self.key else None

    def restore(self, number: int, shape: tuple[int, int]) -> tuple[NDArray[np.float64], NDArray[np.float64], int]:
        """Sum, tally and next share of a pass."""
        if self.state is not None and f"total_{number}" in self.state:
            total = np.ascontiguousarray(self.state[f"total_{number}"])
            return total, self.state[f"tally_{number}"].copy(), int(self.state[f"next_{number}"])
        return np.zeros(shape), np.zeros(3), 0

    def save(
        self, number: int, total: NDArray[np.float64], tally: NDArray[np.float64], following: int, force: bool = False
    ) -> None:
        """Write the state if it is time, or if a pass has ended."""
        if self.path is None or (not force and time.monotonic() - self.written < self.seconds):
            return
        if force and self.state is not None and self.state.get(f"next_{number}") == self.shares:
            # It came from the file, which may hold later passes, too.
            self.finished.append((total, tally))
            return
        state: dict[str, Any] = {
            f"total_{number}": total,
            f"tally_{number}": tally,
            f"next_{number}": np.array(following),
        }
        for earlier, (sums, tallies) in enumerate(self.finished):
            state |= {f"total_{earlier}": sums, f"tally_{earlier}": tallies, f"next_{earlier}": np.array(self.shares)}
        temporary = self.path.with_name(f"{self.path.name}.{os.getpid()}.tmp")
        try:
            with temporary.open("wb") as stream:
                np.savez(stream, key=np.array(self.key), **state)
            os.replace(temporary, self.path)
        except OSError as error:
            raise InputError(f"the checkpoint cannot be written ({error.strerror})", source=self.path) from None
        finally:
            temporary.unlink(missing_ok=True)
        self.written = time.monotonic()
        if force:
            self.finished.append((total.copy(), tally.copy()))

    def interrupt(
        self, number: int, total: NDArray[np.float64], tally: NDArray[np.float64], following: int, first: int
    ) -> None:
        """Write the state once more before an interrupt goes on, if anything has been added to it."""
        if following > first:
            self.written = -np.inf
            self.save(number, total, tally, following)

    def remove(self) -> None:
        """Take the file away."""
        if self.path is not None:
            self.path.unlink(missing_ok=True)
