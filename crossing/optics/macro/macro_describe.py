"""The macro lens at an event in full: all that its models say, each and pooled."""

from __future__ import annotations

import hashlib
import platform
from collections.abc import Sequence
from dataclasses import dataclass, fields
from importlib.metadata import version
from typing import TYPE_CHECKING, Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.macro.critical_lines import CriticalLines, critical_lines
from crossing.optics.macro.dispersion import HaloSolution
from crossing.optics.macro.halo_map import halo_map
from crossing.optics.macro.local_map import MapPoint, local_solution
from crossing.optics.macro.macro_draws import FoldDraws, fold_draws, follow_map, mostly_known, state_draws
from crossing.optics.macro.macro_interval import Interval, axis_interval, interval, reciprocal
from crossing.optics.macro.macro_report import FLAGS, QUANTITIES, MacroReport, ModelReport
from crossing.optics.macro.map_files import split_plane
from crossing.optics.macro.map_solution import MapSolution
from crossing.optics.macro.mirror_pairs import MirrorSolution
from crossing.optics.macro.sky_frame import sky_from_offsets
from crossing.optics.macro.solutions import located, resolve
from crossing.optics.scales import LensScales

if TYPE_CHECKING:
    from crossing.event import Event, MacroRecord
    from crossing.optics.macro.lens_map import LensMap
    from crossing.optics.macro.state import MacroSolution

__all__ = ["default_redshifts", "describe_macro"]

Array: TypeAlias = npt.NDArray[np.float64]
Sky: TypeAlias = tuple[float, float]

# No lens model tells lam_t more precisely.
_ON_THE_CURVE: Final = 1e-5
_LIKELY_OTHER: Final = 0.05
_DISAGREE: Final = 0.2
_MOST_REDSHIFTS: Final = 20
_ROUNDING: Final = 1e-12
_NO_GRADIENT = "no gradient of lam_t is given; add gradient, or give lens maps"
_NO_FOLD = "lam_t does not change along the stretch, so that there is no fold"
_NO_ANGLE = "numbers alone do not tell how the stretch lies on the sky"
_NO_POSITION = "the event has no position"
_NO_REDSHIFTS = "needs the redshifts of lens and source; add [lens] and [source]"
_INFINITE = "infinite on the critical curve"
_BEYOND = "not within reach of the map; see the notes"


def describe_macro(
    event: Event, seed: int = 0, *, draws: int = 16384, source_redshifts: Sequence[float] | None = None
) -> MacroReport:
    """Everything that the macro models of an event say at its position.

    Parameters
    ----------
    event : Event
        The event; its macro records, redshifts and cosmology are read, with the files that they name.
    seed : int
        Seed of the draws.
    draws : int
        Draws of each model that has anything uncertain.
    source_redshifts : sequence of float, optional
        Redshifts whose critical curves are traced beside the event's own, where a model has a map or a profile; by
        default one nearer and one farther than the event's.

    Returns
    -------
    MacroReport
        Each model and all of them pooled.

    Raises
    ------
    InputError
        If the event has no macro lens, a model cannot be used, or a redshift is not behind the lens.
    """
    if not event.macro:
        raise InputError(
            "must be given for this; add kappa and gamma, or another of its ways", source=event.path, where="macro"
        )
    scales = _scales(event)
    redshifts = _redshifts(scales, source_redshifts)
    total = sum(record.weight for record in event.macro)
    models, curves = [], []
    for index, solution in enumerate(resolve(event)):
        with located(event, index):
            model, lines = _Model(event, index, solution, scales, total).described(seed, draws, redshifts)
        models.append(model)
        curves += [] if lines is None else [lines]
    record = event.macro[0]
    options = {"seed": seed, "draws": draws, "source_redshifts": list(redshifts)}
    return MacroReport(
        **_pooled(models, scales),
        event=event.name,
        position=record.position,
        position_error=record.position_error,
        lens_redshift=None if event.lens_redshift is None else event.lens_redshift.central,
        source_redshift=None if event.source_redshift is None else event.source_redshift.central,
        einstein_radius_uas=None if scales is None else scales.einstein_radius_uas,
        einstein_radius_source_au=None if scales is None else scales.einstein_radius_source_au,
        models=tuple(models),
        curves=tuple(curves),
        provenance=_provenance(event, options),
    )


def default_redshifts(scales: LensScales) -> tuple[float, ...]:
    """The event's source redshift, with one nearer and one farther."""
    behind = scales.z_source - scales.z_lens
    return round(scales.z_lens + behind / 2, 3), scales.z_source, round(scales.z_source + 2 * behind, 3)


def _scales(event: Event) -> LensScales | None:
    lens, source = event.lens_redshift, event.source_redshift
    if lens is None or source is None:
        return None
    try:
        return LensScales(lens.central, source.central, event.cosmology)
    except InputError as error:
        raise error.located(source=event.path) from None


def _redshifts(scales: LensScales | None, asked: Sequence[float] | None) -> tuple[float, ...]:
    if scales is None:
        return ()
    if asked is None:
        return default_redshifts(scales)
    if len(asked) > _MOST_REDSHIFTS:
        raise InputError(f"source redshifts must be {_MOST_REDSHIFTS} at most, got {len(asked)}; ask for fewer")
    for one in asked:
        if not scales.z_lens < one < np.inf:
            raise InputError(f"source redshifts must lie behind the lens at {scales.z_lens:g}, got {one:g}; remove it")
    return tuple(sorted({scales.z_source, *(float(one) for one in asked)}))


@dataclass(frozen=True, slots=True)
class _Model:
    """One macro model on its way into the report."""

    event: Event
    index: int
    solution: MacroSolution
    scales: LensScales | None
    total: float

    @property
    def record(self) -> MacroRecord:
        return self.event.macro[self.index]

    def described(self, seed: int, size: int, redshifts: tuple[float, ...]) -> tuple[ModelReport, CriticalLines | None]:
        """The model, and its critical curves where it has some."""
        solution, record = self.solution, self.record
        chart = self._map(redshifts)
        point = lines = None
        if chart is not None and record.position is not None:
            point, lines = local_solution(chart, record.position), critical_lines(chart, redshifts, record.position)
        rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(self.index,)))
        local = state_draws(solution.central) if solution.certain else solution.draw_local(rng, size)
        # 1 - 0.7 - 0.3 is not quite zero.
        draws = fold_draws(local._replace(lam_t=np.where(np.abs(local.lam_t) < _ROUNDING, 0.0, local.lam_t)))
        draws = mostly_known(draws if point is None else follow_map(draws, point))
        weight = np.full(len(draws.lam_t), 1 / len(draws.lam_t))
        values = _summary(draws, weight, solution.central.images, self.scales, record.position)
        if point is not None:
            values["critical_point"] = point.critical_point
        values["absent"] = self._absent(values, point)
        flags, notes = self._flags(point)
        halo = solution if isinstance(solution, HaloSolution) else None
        report = ModelReport(
            **values,
            name=solution.name or (f"model {self.index + 1}" if len(self.event.macro) > 1 else "model"),
            way=record.way,
            weight=record.weight / self.total,
            flags=flags,
            notes=notes,
            point=point,
            line=solution.line if isinstance(solution, MirrorSolution) else None,
            pairs=tuple((pair.first, pair.second) for pair in record.mirror_pairs),
            dispersion=None if halo is None else _dispersion(halo),
            mass=None if halo is None else halo.mass,
            draws=draws,
        )
        return report, lines

    def _map(self, redshifts: tuple[float, ...]) -> LensMap | None:
        if isinstance(self.solution, MapSolution):
            return self.solution.lens_map
        if not isinstance(self.solution, HaloSolution):
            return None
        own = self.solution.scales
        far = LensScales(own.z_lens, max(redshifts), own.cosmology)
        return halo_map(self.solution, far.D_ls / far.D_s / (own.D_ls / own.D_s))

    def _flags(self, point: MapPoint | None) -> tuple[tuple[str, ...], tuple[str, ...]]:
        found = [*self.solution.flags, *(() if point is None else point.flags)]
        if point is not None and self.record.position_error is None:
            found.append("no_position_error")
        return tuple(name for name in found if name in FLAGS), tuple(name for name in found if name not in FLAGS)

    def _absent(self, values: dict[str, Any], point: MapPoint | None) -> dict[str, str]:
        """Why quantities are not known, by their keys in the JSON."""
        out = {}
        keys = {name: key for name, (key, _) in QUANTITIES.items()}
        keys |= {name: f"{name}_deg" for name in ("critical_point", "mirror_position")}
        for name, key in keys.items():
            if values[name] is None:
                out[key] = self._reason(name, point)
        if self.scales is None:
            out |= dict.fromkeys(("einstein_radius_uas", "einstein_radius_source_au"), _NO_REDSHIFTS)
        return out

    def _reason(self, name: str, point: MapPoint | None) -> str:
        state = self.solution.central
        if name in ("mu_t", "mu_r", "mu", "magnification"):
            return _INFINITE
        if state.gradient is None and name != "stretch_angle":
            return _NO_GRADIENT
        if name == "pair_delay" and self.scales is None:
            return _NO_REDSHIFTS
        on_sky = ("stretch_angle", "gradient_east", "gradient_north", "mirror_east", "mirror_north")
        if (name in on_sky or name in ("critical_point", "mirror_position")) and state.stretch_angle is None:
            return _NO_ANGLE
        if self.record.position is None and name in ("critical_point", "mirror_position"):
            return _NO_POSITION
        if state.gradient is not None and state.gradient[0] == 0:
            return _NO_FOLD
        return _INFINITE if point is None else _BEYOND


def _summary(
    draws: FoldDraws, weight: Array, images: int, scales: LensScales | None, position: Sky | None
) -> dict[str, Any]:
    """Fields of `MacroValues`, but for the reasons of what is not known."""
    det, factor = draws.lam_t * draws.lam_r, np.nan if scales is None else scales.time_delay_factor
    mirror, slope, nearest = draws.mirror_sky, draws.gradient_sky, draws.nearest_sky
    mirror_sky = interval(mirror[0], weight), interval(mirror[1], weight)
    sides = _sides(draws, weight)
    return {
        "images": images,
        "parity": max(sides, key=lambda name: sides[name]),
        "parity_probabilities": sides,
        "kappa": interval(1 - (draws.lam_t + draws.lam_r) / 2, weight),
        "gamma": interval((draws.lam_r - draws.lam_t) / 2, weight),
        "lam_t": interval(draws.lam_t, weight),
        "lam_r": interval(draws.lam_r, weight),
        "mu_t": reciprocal(draws.lam_t, weight),
        "mu_r": reciprocal(draws.lam_r, weight),
        "mu": reciprocal(det, weight),
        "magnification": _size(det, weight),
        "gradient": interval(draws.gradient_x, weight),
        "gradient_across": interval(draws.gradient_y, weight),
        "gradient_east": interval(slope[0], weight),
        "gradient_north": interval(slope[1], weight),
        "stretch_angle": axis_interval(draws.stretch_angle, weight),
        "critical_distance": interval(draws.critical_distance, weight),
        "critical_distance_perp": interval(draws.critical_distance_perp, weight),
        "critical_point": _place(position, interval(nearest[0], weight), interval(nearest[1], weight)),
        "fold_strength": interval(draws.fold_strength, weight),
        "caustic_distance": interval(draws.caustic_distance, weight),
        "mirror_position": _place(position, *mirror_sky),
        "mirror_east": mirror_sky[0],
        "mirror_north": mirror_sky[1],
        "pair_separation": interval(draws.separation, weight),
        "pair_magnification": interval(draws.pair_magnification, weight),
        "pair_delay": interval(factor * draws.arrival, weight),
    }


def _sides(draws: FoldDraws, weight: Array) -> dict[str, float]:
    """Probability of each parity."""
    det = draws.lam_t * draws.lam_r
    parts = {
        "minimum": (det > 0) & (draws.lam_t > 0),
        "saddle": det < 0,
        "maximum": (det > 0) & (draws.lam_t < 0),
        "critical": det == 0,
    }
    total = weight.sum()
    sides = {name: float(weight[part].sum() / total) for name, part in parts.items()}
    return {name: share for name, share in sides.items() if share > 0 or name in ("minimum", "saddle")}


def _size(det: Array, weight: Array) -> Interval | None:
    """Interval of the magnification's size; without an end where its sign has none."""
    signed = reciprocal(det, weight)
    if signed is None or signed.bound == "lower":
        return signed
    if signed.bound == "upper" and signed.high is not None:
        return Interval(median=-signed.median, low=-signed.high, high=None, bound="lower")
    return interval(1 / np.where(det == 0, np.nan, np.abs(det)), weight)


def _place(position: Sky | None, east: Interval | None, north: Interval | None) -> Sky | None:
    if position is None or east is None or north is None:
        return None
    ra, dec = sky_from_offsets(position, east.median, north.median)
    return float(ra), float(dec)


def _dispersion(halo: HaloSolution) -> Interval:
    low, median, high = (float(one) for one in halo.dispersion.quantile([0.16, 0.5, 0.84]))
    return Interval(median=median, low=low, high=high)


def _pooled(models: Sequence[ModelReport], scales: LensScales | None) -> dict[str, Any]:
    """Fields of `MacroValues`, flags and notes of all models together."""
    flags = list(dict.fromkeys(name for model in models for name in model.flags))
    notes = list(dict.fromkeys(name for model in models for name in model.notes))
    first = models[0]
    draws = FoldDraws(
        **{one.name: np.concatenate([getattr(model.draws, one.name) for model in models]) for one in fields(FoldDraws)}
    )
    weight = np.concatenate([np.full(len(one.draws.lam_t), one.weight / len(one.draws.lam_t)) for one in models])
    images = 2 if all(model.images == 2 for model in models) else 1
    values = _summary(draws, weight, images, scales, None)
    if len(models) == 1:
        values |= {name: getattr(first, name) for name in ("critical_point", "mirror_position", "absent")}
    else:
        values |= _pooled_places(models, values, draws, weight)
    if values["mu"] is None or values["mu"].bound != "two-sided":
        flags.insert(0, "mu_diverges")
    elif abs(values["lam_t"].median) < _ON_THE_CURVE:
        flags.insert(0, "on_critical_curve")
    elif len([share for share in values["parity_probabilities"].values() if share > _LIKELY_OTHER]) > 1:
        notes.append("both_sides")
    if _disagree(models):
        notes.append("models_disagree")
    return {**values, "flags": tuple(flags), "notes": tuple(notes)}


def _pooled_places(
    models: Sequence[ModelReport], values: dict[str, Any], draws: FoldDraws, weight: Array
) -> dict[str, Any]:
    """Places on the sky and reasons for what is not known, by several models."""
    out: dict[str, Any] = {"critical_point": None, "mirror_position": None}
    best = max(models, key=lambda model: model.weight)
    for name in out:
        known = [model for model in models if getattr(model, name) is not None]
        if known:
            out[name] = getattr(best if best in known else max(known, key=lambda model: model.weight), name)
    keys = {key: values[name] for name, (key, _) in QUANTITIES.items()}
    keys |= {f"{name}_deg": place for name, place in out.items()}
    keys |= dict.fromkeys(("einstein_radius_uas", "einstein_radius_source_au"))
    reasons = {key: model.absent[key] for key in keys for model in models if key in model.absent}
    out["absent"] = {key: reason for key, reason in reasons.items() if keys[key] is None}
    return out


def _disagree(models: Sequence[ModelReport]) -> bool:
    """Whether two models differ in lam_t by more than their errors and by much."""
    known = [model.lam_t for model in models if model.lam_t is not None]
    for number, one in enumerate(known):
        for other in known[:number]:
            apart, largest = abs(one.median - other.median), max(abs(one.median), abs(other.median))
            error = np.hypot(_half_width(one), _half_width(other))
            if apart > error and apart > _DISAGREE * largest:
                return True
    return False


def _half_width(value: Interval) -> float:
    return ((value.high or 0.0) - (value.low or 0.0)) / 2


def _provenance(event: Event, options: dict[str, Any]) -> dict[str, Any]:
    """Versions, options with the seed, and SHA-256 of every file that was read."""
    files = [split_plane(text)[0] for record in event.macro for one in record.maps for text in one.planes.values()]
    files += [record.halo.members.path for record in event.macro if record.halo and record.halo.members]
    inputs = [{"path": str(event.path), "sha256": event.sha256}]
    for path in dict.fromkeys(files):
        with path.open("rb") as stream:
            digest = hashlib.file_digest(stream, "sha256").hexdigest()
        # As the event file was named, so that results do not depend on where its folder lies.
        folder = event.path.parent
        shown = folder / path.relative_to(folder.absolute()) if path.is_relative_to(folder.absolute()) else path
        inputs.append({"path": str(shown), "sha256": digest})
    packages = ("crossing", "numpy", "scipy", "astropy")
    return {
        "versions": {"python": platform.python_version()} | {name: version(name) for name in packages},
        "options": options,
        "inputs": inputs,
    }
