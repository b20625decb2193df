"""Velocity dispersion of a cluster's members from the table of their line-of-sight velocities."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.constants import LIGHT_SPEED

if TYPE_CHECKING:
    from astropy.table import QTable, Table

    from crossing.event.records import MembersRecord

__all__ = ["MemberDispersion", "member_dispersion", "read_members"]

Array: TypeAlias = npt.NDArray[np.float64]

_FEWEST: Final = 5
# Velocities this far from rest on the whole are recession velocities, not motions within a cluster [km/s].
_NOT_AT_REST: Final = 3000.0
_COLUMNS: Final = ("velocity", "velocity_err", "redshift")
_KMS: Final = LIGHT_SPEED / 1e3


@dataclass(frozen=True, slots=True, kw_only=True)
class MemberDispersion:
    """Dispersion of line-of-sight velocities in the cluster's rest frame."""

    dispersion: float
    """Biweight scale less the mean square of the measuring errors, in quadrature [km/s]."""
    error: float
    """Its standard deviation by the jackknife [km/s]."""
    location: float
    """Biweight location of the velocities [km/s]."""
    members: int
    """Number of members."""

    def to_dict(self) -> dict[str, Any]:
        """All fields by name."""
        return {name: getattr(self, name) for name in ("dispersion", "error", "location", "members")}

    def to_table(self) -> QTable:
        """One row."""
        from astropy.table import QTable

        return QTable(rows=[self.to_dict()])


def member_dispersion(velocity: npt.ArrayLike, velocity_err: npt.ArrayLike | None = None) -> MemberDispersion:
    """Dispersion of members by the biweight scale.

    Parameters
    ----------
    velocity : array_like, shape (members,)
        Line-of-sight velocities in the cluster's rest frame [km/s].
    velocity_err : array_like, optional
        Their standard errors [km/s], one or one a member.

    Returns
    -------
    MemberDispersion
        With its error.

    Raises
    ------
    InputError
        If there are fewer than 5 members, a velocity is not finite, they do not differ, or differ less than their
        errors say.

    References
    ----------
    .. [1] Beers T. C., Flynn K., Gebhardt K., 1990, AJ 100, 32
    """
    from astropy.stats import biweight_location, biweight_scale

    v = np.asarray(velocity, dtype=np.float64).ravel()
    if len(v) < _FEWEST:
        raise InputError(f"`velocity` must hold at least {_FEWEST} members, got {len(v)}; give the dispersion instead")
    if not np.all(np.isfinite(v)):
        raise InputError(f"`velocity` must be finite, got {v[~np.isfinite(v)][0]:g}; remove that member")
    scale = float(biweight_scale(v))
    if not scale > 0:
        raise InputError(f"`velocity` must differ between members, got {v[0]:g} for most; check the column")
    noise = 0.0 if velocity_err is None else float(np.mean(np.square(velocity_err)))
    if not noise < scale**2:
        raise InputError(
            f"`velocity_err` must be smaller than the scatter of the velocities, {scale:.3g} km/s, got "
            f"{np.sqrt(noise):.3g}; check its unit"
        )
    n = len(v)
    left = np.array([float(biweight_scale(np.delete(v, k))) for k in range(n)])
    error = np.sqrt((n - 1) / n * np.sum((left - left.mean()) ** 2))
    true = np.sqrt(scale**2 - noise)
    return MemberDispersion(
        dispersion=float(true),
        error=float(error * scale / true),
        location=float(biweight_location(v)),
        members=n,
    )


def read_members(record: MembersRecord, lens_redshift: float) -> MemberDispersion:
    """Dispersion from a table of members.

    Parameters
    ----------
    record : MembersRecord
        File and names of columns: ``velocity`` [km/s] with respect to the cluster and in its rest frame, or
        ``redshift``; optionally ``velocity_err`` [km/s], at rest as well.
    lens_redshift : float
        Redshift of the cluster.

    Returns
    -------
    MemberDispersion
        With its error.

    Raises
    ------
    InputError
        If the file cannot be read as a table, lacks a column, or its velocities cannot be those of members.
    """
    try:
        table = _read_table(record)
        names = {key: record.columns.get(key, key) for key in _COLUMNS}
        err = _column(table, names["velocity_err"]) if names["velocity_err"] in table.colnames else None
        # A column that is named counts before one that happens to be there.
        asked_redshift = "redshift" in record.columns and "velocity" not in record.columns
        if names["velocity"] in table.colnames and not asked_redshift:
            velocity = _column(table, names["velocity"])
        elif names["redshift"] in table.colnames:
            velocity = _KMS * (_column(table, names["redshift"], "") - lens_redshift) / (1 + lens_redshift)
        else:
            raise InputError(
                f"must have a column {names['velocity']!r} or {names['redshift']!r}, got "
                f"{', '.join(table.colnames)}; name it under columns"
            )
        found = member_dispersion(velocity, err)
        if abs(found.location) > _NOT_AT_REST:
            raise InputError(
                f"must hold velocities with respect to the cluster, got {found.location:.0f} km/s on the whole; give "
                "them in its rest frame, or the redshifts"
            )
    except InputError as error:
        raise error.located(source=record.path) from None
    return found


def _read_table(record: MembersRecord) -> Table:
    from astropy.table import Table

    if not record.path.is_file():
        raise InputError("must exist, got no such file; check members.file")
    kind = None if record.path.suffix.lower() in (".fits", ".fit", ".vot", ".xml") else "ascii"
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return Table.read(record.path, format=kind)
    except Exception:  # astropy's readers raise many classes for broken files, in words about their own guesses
        raise InputError("must be a table with a header, in CSV, ECSV or FITS; convert it") from None


def _column(table: Table, name: str, unit: str = "km/s") -> Array:
    from astropy import units as u

    column = table[name]
    if hasattr(column, "mask") and np.any(column.mask):
        raise InputError(f"column {name!r} must be full, got an empty cell; remove that member")
    try:
        values = u.Quantity(column) if column.unit is not None else u.Quantity(np.asarray(column, np.float64), unit)
        return np.asarray(values.to_value(unit), dtype=np.float64)
    except (ValueError, TypeError, u.UnitsError):
        raise InputError(f"column {name!r} must hold numbers in {unit or 'no unit'}; convert it") from None
