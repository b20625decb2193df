"""Which column of a file is which: names, the mapping that the user gives, and slips in both."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from dataclasses import replace
from typing import Final

from crossing.errors import InputError
from crossing.photometry.rawtable import RawColumn, RawTable, split_unit

__all__ = ["VALUE_COLUMNS", "pick_columns"]

VALUE_COLUMNS: Final = {
    "flux": ("flux", "flux_err"),
    "difference": ("flux", "flux_err"),
    "magnitude": ("mag", "mag_err"),
}
"""Names of value and error for each kind of file."""

_OPTIONAL: Final = ("is_upper_limit", "excluded", "limit_sigma")
_KNOWN: Final = ("time", "band", "flux", "flux_err", "mag", "mag_err", *_OPTIONAL)
# Names that mean the same elsewhere. They are suggested, never taken: a guess about limits would be a costly one.
_OTHER_NAMES: Final = {
    "time": ("mjd", "jd", "bjd", "hjd", "date", "obsmjd", "mjd_obs", "t"),
    "band": ("filter", "filt", "passband", "bandpass"),
    "flux": ("f", "fnu", "f_nu", "flux_density", "difference", "diff_flux", "value"),
    "flux_err": ("e_flux", "err", "error", "sigma", "flux_error", "fluxerr", "eflux", "dflux", "flux_unc", "unc"),
    "mag": ("magnitude", "ab_mag", "m"),
    "mag_err": ("e_mag", "err", "error", "sigma", "mag_error", "magerr", "emag", "dmag", "mag_unc", "unc"),
    "is_upper_limit": ("upper_limit", "is_limit", "limit", "limit_flag", "uplim", "ul", "upper"),
    "excluded": ("exclude", "is_excluded"),
    "limit_sigma": ("limit_snr", "nsigma", "n_sigma"),
}


def pick_columns(table: RawTable, kind: str, mapping: Mapping[str, str], band: str | None) -> dict[str, RawColumn]:
    """Columns of a light curve under their own names.

    Parameters
    ----------
    table : RawTable
        The file's table.
    kind : {"flux", "difference", "magnitude"}
        What its numbers are.
    mapping : mapping of str to str
        Names in the file for those that differ, each with an optional ``[unit]``.
    band : str or None
        Band of all rows, for a file without such a column.

    Returns
    -------
    dict of str to RawColumn
        ``time``, the value, and those of ``band``, the error, ``is_upper_limit``, ``excluded`` and ``limit_sigma``
        that are there.

    Raises
    ------
    InputError
        If a column is missing or ambiguous, a key of `mapping` is not known, or a column looks like an optional one
        under a wrong name.
    """
    _check_mapping(mapping)
    value, error = VALUE_COLUMNS[kind]
    wanted = ("time", "band", value, error, *_OPTIONAL)
    found = {name: _find(table, name, mapping) for name in wanted}
    present = {name: column for name, column in found.items() if column is not None}
    if band is not None and "band" in present:
        raise InputError(f"is in the file; do not give band = {band!r} as well", where="column band")
    for name in ("time", value, *(("band",) if band is None else ())):
        if name not in present:
            raise _missing(table, name, kind)
    taken = {id(column.values) for column in present.values()}
    if len(taken) < len(present):
        raise InputError("one column of the file stands for two; give each its own", where="columns")
    left = [column.name for column in table.columns if id(column.values) not in taken]
    for name in (error, *_OPTIONAL):
        if name not in present:
            _refuse_lookalike(name, left)
    return present


def _check_mapping(mapping: Mapping[str, str]) -> None:
    for key, name in mapping.items():
        if key not in _KNOWN:
            nearest = difflib.get_close_matches(str(key), _KNOWN, n=1, cutoff=0.0)[0]
            raise InputError(f"is not a known column; the nearest known one is {nearest}", where=f"columns.{key}")
        if not isinstance(name, str) or not name.strip():
            raise InputError(f"must be the name of a column of the file, got {name!r}", where=f"columns.{key}")


def _find(table: RawTable, name: str, mapping: Mapping[str, str]) -> RawColumn | None:
    """Column called `name` by the mapping or else by the file, whatever the case of its letters."""
    title, unit = split_unit(mapping.get(name, name))
    matches = [column for column in table.columns if column.name == title]
    matches = matches or [column for column in table.columns if column.name.lower() == title.lower()]
    if len(matches) > 1:
        raise InputError(f"the name {title!r} stands {len(matches)} times; rename one column", where="header")
    if not matches:
        if name in mapping:
            raise InputError(f"is {title!r}, and the file has only {_listing(table)}", where=f"columns.{name}")
        return None
    column = matches[0]
    if unit is not None and column.unit is not None and unit != column.unit:
        raise InputError(f"says the unit {unit}, and the file says {column.unit}; keep one", where=f"columns.{name}")
    return replace(column, unit=column.unit or unit)


def _missing(table: RawTable, name: str, kind: str) -> InputError:
    have = {column.name.lower() for column in table.columns}
    values = {values[0] for values in VALUE_COLUMNS.values()}
    for other, (other_value, _) in VALUE_COLUMNS.items():
        if name in values and name != other_value and other_value in have:
            problem = f'is missing and there is {other_value}: kind is "{kind}"; say kind = "{other}"'
            return InputError(problem, where=f"column {name}")
    guess = next((c.name for c in table.columns if _alike(c.name, name)), "ITS NAME")
    also = ', or give one band for all rows with band="NAME"' if name == "band" else ""
    problem = f'is missing, the file has only {_listing(table)}; say columns = {{{name} = "{guess}"}}{also}'
    return InputError(problem, where=f"column {name}")


def _refuse_lookalike(name: str, left: list[str]) -> None:
    for title in left:
        if _alike(title, name):
            raise InputError(
                f'looks like {name} under another name; rename it, remove it, or say columns = {{{name} = "{title}"}}',
                where=f"column {title}",
            )


def _alike(title: str, name: str) -> bool:
    word = title.lower().replace(" ", "_").replace("-", "_")
    return word in _OTHER_NAMES[name] or difflib.SequenceMatcher(a=word, b=name).ratio() >= 0.85


def _listing(table: RawTable) -> str:
    names = [column.name or "(no name)" for column in table.columns]
    return ", ".join(names[:8]) + (f" and {len(names) - 8} more" if len(names) > 8 else "")
