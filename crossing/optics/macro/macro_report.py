"""What is known about the macro lens at an event: every quantity by each model, and pooled."""

from __future__ import annotations

from dataclasses import dataclass, field
from html import escape
from typing import TYPE_CHECKING, Any, Final, TypeAlias

import numpy as np

from crossing.optics.macro.local_map import FLAGS as POINT_FLAGS
from crossing.optics.macro.macro_interval import Interval
from crossing.optics.macro.solutions import FLAGS as SOLUTION_FLAGS

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.optics.macro.critical_lines import CriticalLines
    from crossing.optics.macro.local_map import MapPoint
    from crossing.optics.macro.macro_draws import FoldDraws
    from crossing.optics.macro.mirror_pairs import CriticalLine

__all__ = ["CAUTIONS", "FLAGS", "NOTES", "QUANTITIES", "MacroReport", "MacroValues", "ModelReport"]

Sky: TypeAlias = tuple[float, float]

_UNTRUSTED: Final = (
    *("gradient_from_prior", "side_unknown", "fluxes_disagree", "not_mirrored", "line_poorly_known", "draws_drift"),
    *("few_members", "not_followed"),
)
_ALL: Final = {**SOLUTION_FLAGS, **POINT_FLAGS}
FLAGS: Final[dict[str, str]] = {
    "mu_diverges": "the event may lie on either side of the critical curve: lam_t passes through zero within its 68%, "
    "so that the magnification has a lower limit only, and no sign",
    "on_critical_curve": "lam_t is zero to the precision of any lens model, 1e-5: the magnification is not to be used",
    **{name: text for name, text in _ALL.items() if name in _UNTRUSTED},
}
"""Flags that make a report untrustworthy, with what they mean."""

NOTES: Final[dict[str, str]] = {
    "both_sides": "the event is on the other side of the critical curve with a probability above 5%",
    "models_disagree": "models differ in lam_t by more than their own errors and by more than a fifth",
    "no_position_error": "the position has no error: critical curves of models are off by 0.1 to 0.3 arcsec (common "
    "practice), which is not in these numbers",
    **{name: text for name, text in _ALL.items() if name not in _UNTRUSTED},
}
"""What is to be known about a report that can be trusted."""

CAUTIONS: Final[tuple[str, ...]] = (
    "All of this is the smooth macro lens. Stars of the lens break its images and its caustic up: `crossing peak`.",
    "The spread is carried in lam_t and in distances; magnifications are their inverses, and without an end where "
    "lam_t may be zero.",
    "An error of the position is an offset between model and images: the mirror image is counted from the position as "
    "it is given. Redshifts enter scales and delays by their central values.",
)
"""Limits of the claim, repeated in every output."""

QUANTITIES: Final[dict[str, tuple[str, str]]] = {
    "kappa": ("kappa", ""),
    "gamma": ("gamma", ""),
    "lam_t": ("lam_t", ""),
    "lam_r": ("lam_r", ""),
    "mu_t": ("mu_t", ""),
    "mu_r": ("mu_r", ""),
    "mu": ("mu", ""),
    "magnification": ("magnification", ""),
    "gradient": ("gradient_per_arcsec", "1 / arcsec"),
    "gradient_across": ("gradient_across_per_arcsec", "1 / arcsec"),
    "gradient_east": ("gradient_east_per_arcsec", "1 / arcsec"),
    "gradient_north": ("gradient_north_per_arcsec", "1 / arcsec"),
    "stretch_angle": ("stretch_angle_deg", "deg"),
    "critical_distance": ("critical_distance_arcsec", "arcsec"),
    "critical_distance_perp": ("critical_distance_perp_arcsec", "arcsec"),
    "fold_strength": ("fold_strength_arcsec_half", "arcsec(1/2)"),
    "caustic_distance": ("caustic_distance_arcsec", "arcsec"),
    "mirror_east": ("mirror_east_arcsec", "arcsec"),
    "mirror_north": ("mirror_north_arcsec", "arcsec"),
    "pair_separation": ("pair_separation_arcsec", "arcsec"),
    "pair_magnification": ("pair_magnification", ""),
    "pair_delay": ("pair_delay_days", "d"),
}
"""Key in the JSON and unit of every field of `MacroValues` that is an interval."""


@dataclass(frozen=True, slots=True, kw_only=True)
class MacroValues:
    """The lens at the event with its 68% intervals; None where a quantity is not known, for the reason in `absent`."""

    images: int
    """Macro images meant: 1, or 2 for the merging pair; values that belong to one image are then the minimum's."""
    parity: str
    """The most probable of ``minimum``, ``saddle``, ``maximum``, ``critical``."""
    parity_probabilities: dict[str, float]
    """Probability of each: the weights of both sides of the critical curve."""
    kappa: Interval | None
    """Convergence."""
    gamma: Interval | None
    """Shear, of the sign that makes lam_t = 1 - kappa - gamma."""
    lam_t: Interval | None
    """Eigenvalue along the stretch."""
    lam_r: Interval | None
    """Eigenvalue across it."""
    mu_t: Interval | None
    """Signed stretch 1 / lam_t."""
    mu_r: Interval | None
    """Signed stretch 1 / lam_r."""
    mu: Interval | None
    """Signed magnification of one image."""
    magnification: Interval | None
    """Its size."""
    gradient: Interval | None
    """Change of lam_t along the stretch, towards larger lam_t [1/arcsec]."""
    gradient_across: Interval | None
    """Change of lam_t a quarter turn from there, counted from east to north [1/arcsec]."""
    gradient_east: Interval | None
    """Change of lam_t to the east [1/arcsec]."""
    gradient_north: Interval | None
    """Change of lam_t to the north [1/arcsec]."""
    stretch_angle: Interval | None
    """Position angle of the stretch, from north to east [deg]."""
    critical_distance: Interval | None
    """Distance to the critical curve along the stretch [arcsec], of lam_t's sign."""
    critical_distance_perp: Interval | None
    """Shortest distance to it [arcsec], of lam_t's sign."""
    critical_point: Sky | None
    """RA, Dec [deg] of the nearest point of the critical curve."""
    fold_strength: Interval | None
    """K [arcsec**(1/2)]."""
    caustic_distance: Interval | None
    """Distance of the source inside the caustic [arcsec]."""
    mirror_position: Sky | None
    """RA, Dec [deg] of the mirror image."""
    mirror_east: Interval | None
    """Mirror image less the event, to the east [arcsec]."""
    mirror_north: Interval | None
    """Mirror image less the event, to the north [arcsec]."""
    pair_separation: Interval | None
    """Distance between the two images [arcsec]."""
    pair_magnification: Interval | None
    """Magnification of both together, by the law of the fold."""
    pair_delay: Interval | None
    """Days by which the saddle image follows the minimum (or the maximum the saddle)."""
    absent: dict[str, str]
    """Keys of the JSON that are null, and why."""

    def values_dict(self) -> dict[str, Any]:
        """JSON of the quantities."""
        own = {key: getattr(self, name) for name, (key, _) in QUANTITIES.items()}
        return {
            "images": self.images,
            "parity": self.parity,
            "parity_probabilities": self.parity_probabilities,
            **{key: None if value is None else value.to_dict() for key, value in own.items()},
            "critical_point_deg": self.critical_point and list(self.critical_point),
            "mirror_position_deg": self.mirror_position and list(self.mirror_position),
            "absent": self.absent,
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class ModelReport(MacroValues):
    """The lens by one macro model."""

    name: str
    """Name."""
    way: str
    """How it was given."""
    weight: float
    """Weight, normalised."""
    flags: tuple[str, ...]
    """Names in `FLAGS` that apply."""
    notes: tuple[str, ...]
    """Names in `NOTES` that apply."""
    point: MapPoint | None
    """What the map says at the stated position, with both the linear expansion and the map's own values."""
    line: CriticalLine | None
    """The critical line between mirrored knots."""
    pairs: tuple[tuple[Sky, Sky], ...]
    """RA, Dec [deg] of both images of each mirrored knot."""
    dispersion: Interval | None
    """Velocity dispersion of the cluster [km/s]."""
    mass: float | None
    """M200c of an NFW sphere [Msun], central."""
    draws: FoldDraws = field(repr=False)
    """Draws of equal weight."""

    def to_dict(self) -> dict[str, Any]:
        """JSON of one model."""
        point = self.point
        return {
            "name": self.name,
            "way": self.way,
            "weight": self.weight,
            **self.values_dict(),
            "linear_error": point and point.linear_error,
            "linear_is_valid": point and point.linear_is_valid,
            "quality": point and point.quality.to_dict(),
            "critical_line": self.line and _line_dict(self.line),
            "dispersion_km_s": self.dispersion and self.dispersion.to_dict(),
            "mass_m200c_msun": self.mass,
            "flags": list(self.flags),
            "notes": list(self.notes),
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class MacroReport(MacroValues):
    """Result of `describe_macro`; the quantities are those of all models, pooled by their weights."""

    event: str
    """Name of the event."""
    position: Sky | None
    """RA, Dec [deg] of the event."""
    position_error: float | None
    """Its standard deviation per coordinate [arcsec]."""
    lens_redshift: float | None
    """Redshift of the lens."""
    source_redshift: float | None
    """Redshift of the source."""
    einstein_radius_uas: float | None
    """Angular Einstein radius of one solar mass [microarcsec]."""
    einstein_radius_source_au: float | None
    """The same in the source plane [au]."""
    models: tuple[ModelReport, ...]
    """Each macro model."""
    curves: tuple[CriticalLines, ...] = field(repr=False)
    """Critical curves and caustics of each model that has a map or a profile."""
    flags: tuple[str, ...]
    """Names in `FLAGS` that apply to it or to a model."""
    notes: tuple[str, ...]
    """Names in `NOTES` that apply to it or to a model."""
    provenance: dict[str, Any]
    """Versions, options and input hashes."""

    @property
    def status(self) -> str:
        """``ok``, or the flags that apply."""
        return ", ".join(self.flags) or "ok"

    @property
    def flag_meanings(self) -> dict[str, str]:
        """The flags that apply, with what they mean."""
        return {name: FLAGS[name] for name in self.flags}

    @property
    def note_meanings(self) -> dict[str, str]:
        """The notes that apply, with what they mean."""
        return {name: NOTES[name] for name in self.notes}

    def to_dict(self) -> dict[str, Any]:
        """The JSON document of ``crossing macro``."""
        return {
            "verb": "macro",
            "event": self.event,
            "status": self.status,
            "flags": list(self.flags),
            "flag_meanings": self.flag_meanings,
            "notes": self.note_meanings,
            "position_deg": self.position and list(self.position),
            "position_error_arcsec": self.position_error,
            "lens_redshift": self.lens_redshift,
            "source_redshift": self.source_redshift,
            **self.values_dict(),
            "einstein_radius_uas": self.einstein_radius_uas,
            "einstein_radius_source_au": self.einstein_radius_source_au,
            "models": [model.to_dict() for model in self.models],
            "curves": [
                {
                    "model": found.name,
                    "curve": line.curve,
                    "kind": line.kind,
                    "source_redshift": line.source_redshift,
                    "closed": line.closed,
                    "area_arcsec2": line.area,
                    "vertices": len(line.ra),
                }
                for found in self.curves
                for line in found.lines
            ],
            "cautions": list(CAUTIONS),
            "provenance": self.provenance,
        }

    def to_table(self) -> QTable:
        """One row a model, and a last one for all of them pooled."""
        from astropy.table import QTable

        rows: list[MacroValues] = [*self.models, self]
        table = QTable()
        table["model"] = [*(model.name for model in self.models), "pooled"]
        table["weight"] = [*(model.weight for model in self.models), 1.0]
        table["parity"] = [row.parity for row in rows]
        for side in ("minimum", "saddle", "maximum"):
            table[f"p_{side}"] = [row.parity_probabilities.get(side, 0.0) for row in rows]
        for name, (key, unit) in QUANTITIES.items():
            for part in ("median", "low", "high"):
                table[f"{key}_{part}"] = [_number(getattr(getattr(row, name), part, None)) for row in rows]
                if unit:
                    table[f"{key}_{part}"].unit = unit
        for name in ("critical_point", "mirror_position"):
            for k, axis in enumerate(("ra", "dec")):
                places = [getattr(row, name) for row in rows]
                table[f"{name}_{axis}"] = [np.nan if place is None else place[k] for place in places]
                table[f"{name}_{axis}"].unit = "deg"
        table.meta = {"event": self.event, "status": self.status, "cautions": list(CAUTIONS)}
        return table

    def lines_table(self) -> QTable | None:
        """All critical curves as polylines, one row a vertex; None where no model has a map or a profile."""
        from astropy.table import vstack

        if not self.curves:
            return None
        tables = []
        for found in self.curves:
            table = found.to_table()
            table.add_column(np.full(len(table), found.name), name="model", index=0)
            table.meta = {}
            tables.append(table)
        joined: QTable = vstack(tables)
        ra, dec = self.curves[0].reference
        joined.meta = {"event": self.event, "reference_ra": ra, "reference_dec": dec}
        return joined

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the surroundings of the event: critical curves, stretch and mirror image by each model.

        Parameters
        ----------
        ax : matplotlib.axes.Axes, optional
            Where to draw; a new figure if None.
        """
        from crossing.optics.macro.macro_figure import plot_nearby

        return plot_nearby(self, ax)

    def _repr_html_(self) -> str:
        flags = "".join(f"<p><strong>{escape(name)}</strong>: {escape(FLAGS[name])}</p>" for name in self.flags)
        rows: list[tuple[str, MacroValues]] = [*((model.name, model) for model in self.models), ("pooled", self)]
        body = "".join(
            f"<tr><td>{escape(name)}</td><td>{_cell(row.lam_t)}</td><td>{_cell(row.lam_r)}</td><td>{_cell(row.mu)}</td>"
            f"<td>{escape(row.parity)}</td><td>{_cell(row.critical_distance)}</td><td>{_cell(row.pair_delay)}</td></tr>"
            for name, row in rows
        )
        return (
            f"<div>{flags}<p>{escape(self.event)}: macro lens</p><table><tr><th>model</th><th>lam_t</th><th>lam_r</th>"
            f"<th>mu</th><th>parity</th><th>critical curve [arcsec]</th><th>delay [d]</th></tr>{body}</table></div>"
        )


def _line_dict(line: CriticalLine) -> dict[str, Any]:
    """JSON of the critical line between mirrored knots."""
    return {
        "point_deg": list(line.point),
        "point_error_arcsec": line.point_error,
        "position_angle_deg": line.position_angle,
        "position_angle_error_deg": line.position_angle_error,
        "stretch_angle_deg": line.stretch_angle,
        "stretch_angle_error_deg": line.stretch_angle_error,
        "chi2": line.chi2,
        "dof": line.dof,
    }


def _number(value: float | None) -> float:
    return float("nan") if value is None else float(value)


def _cell(value: Interval | None) -> str:
    return "-" if value is None else f"{value.median:.3g}"
