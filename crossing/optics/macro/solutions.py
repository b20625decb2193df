"""The alternatives for the macro lens of an event, in whatever way each of them is given."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Final

from crossing.errors import InputError
from crossing.optics.macro.given import GivenSolution
from crossing.optics.macro.state import LocalDraws, LocalState, MacroSolution

if TYPE_CHECKING:
    from crossing.event import Event, MacroRecord

__all__ = ["FLAGS", "LocalDraws", "LocalState", "MacroSolution", "located", "resolve"]

FLAGS: Final[dict[str, str]] = {
    "round_halo": "a round mass without external shear has no fold: lam_t does not change along the stretch",
    "concentration_from_prior": "the concentration is not given; 3 to 8, uniform in its logarithm, is assumed",
    "few_members": "the dispersion comes from fewer than 15 members",
    "mu_r_from_prior": "the magnification across the stretch is unknown; 1 to 4, uniform in its logarithm, is assumed",
    "gradient_from_prior": "positions alone do not tell how steep lam_t is; a broad prior is assumed",
    "side_unknown": "neither a centre, a side nor the turn of the stretch tells on which side lam_t is positive",
    "position_error_assumed": "the error of the knots' positions is not given; 0.03 arcsec is assumed",
    "fluxes_disagree": "the two images of a knot differ in flux by more than a smooth fold and the errors allow",
    "not_mirrored": "the pairs do not fit one fold: a wrong pair, or errors that are too small",
    "line_poorly_known": "the direction of the critical curve is uncertain by more than 30 degrees",
    "draws_drift": "the draws of the posterior of the pairs had not settled",
}
"""What is to be known about a solution, with what it means."""

_KEPT: Final = 16


@dataclass(frozen=True, slots=True)
class _Question:
    """What a solution depends on; equal questions have the same answer."""

    key: str
    event: Event = field(compare=False)
    record: MacroRecord = field(compare=False)


def resolve(event: Event) -> tuple[MacroSolution, ...]:
    """All alternatives for the macro lens of an event.

    Parameters
    ----------
    event : Event
        The event; only its macro records, redshifts and cosmology are read.

    Returns
    -------
    tuple of MacroSolution
        In the order of ``event.macro``, each with its central values and draws. What takes time is kept until the
        records or the files that they name change.

    Raises
    ------
    InputError
        If a record cannot be turned into a lens; the message names file and key.
    """
    found = []
    for index, record in enumerate(event.macro):
        with located(event, index):
            found.append(_solution(event, record))
    return tuple(found)


@contextmanager
def located(event: Event, index: int) -> Iterator[None]:
    """Errors within name the file of the event and the place of its macro record `index`."""
    record = event.macro[index]
    alone = "macro" if len(event.macro) == 1 else f"macro.models[{index}]"
    try:
        yield
    except InputError as error:
        raise error.located(source=event.path, where=record.place or alone) from None


def _solution(event: Event, record: MacroRecord) -> MacroSolution:
    needs_work = bool(record.maps or record.halo or record.mirror_pairs)
    return _solved(_question(event, record)) if needs_work else GivenSolution(record)


def _question(event: Event, record: MacroRecord) -> _Question:
    files = [Path(text.split("[")[0]) for chart in record.maps for text in chart.planes.values()]
    if any(chart.realisations for chart in record.maps):
        from crossing.optics.macro.map_realisations import realisation_files

        files += [path for chart in record.maps for path in realisation_files(chart)]
    if record.halo is not None and record.halo.members is not None:
        files.append(record.halo.members.path)
    states = [(str(path), path.stat().st_mtime_ns, path.stat().st_size) if path.exists() else None for path in files]
    parts = (record, event.lens_redshift, event.source_redshift, event.cosmology, states)
    return _Question(repr(parts), event, record)


@lru_cache(maxsize=_KEPT)
def _solved(question: _Question) -> MacroSolution:
    event, record = question.event, question.record
    if record.maps:
        from crossing.optics.macro.map_solution import map_solution

        return map_solution(event, record)
    if record.halo is not None:
        from crossing.optics.macro.dispersion import halo_solution

        return halo_solution(event, record)
    from crossing.optics.macro.mirror_pairs import mirror_solution

    return mirror_solution(event, record)
