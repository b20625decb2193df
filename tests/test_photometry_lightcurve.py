"""The light curve itself: what it holds, what it refuses, and what it tells."""

from __future__ import annotations

import dataclasses
import json
import pickle
from typing import Any

import numpy as np
import pytest

from crossing.photometry import FLAGS, LevelGroup, LightCurve, flag_bit, flag_names
from crossing.photometry.flags import UNUSED


def example(**changes: Any) -> LightCurve:
    values: dict[str, Any] = {
        "time": [60000.0, 60001.0, 60002.0],
        "band": ["red", "blue", "red"],
        "flux": [10.0, -2.0, 30.0],
        "flux_err": [1.0, 1.0, 6.0],
        "is_upper_limit": [False, False, True],
        "flags": [0, 1, 0],
        "level": [0, 1, 0],
        "levels": (LevelGroup(band="red", kind="absolute"), LevelGroup(band="blue", kind="free", source="b.csv")),
    }
    return LightCurve(**{**values, **changes})


def test_arrays_are_plain_contiguous_and_read_only() -> None:
    big_endian = np.array([1.0, 2.0, 3.0], dtype=">f8")
    curve = example(flux=big_endian)
    assert curve.flux.dtype == np.dtype(np.float64)
    assert curve.flux.dtype.isnative
    assert curve.flux.flags.c_contiguous
    with pytest.raises(ValueError, match="read-only"):
        curve.flux[0] = 7.0
    big_endian[0] = 99.0
    assert curve.flux[0] == 1.0
    with pytest.raises(dataclasses.FrozenInstanceError):
        curve.time_scale = "utc"  # type: ignore[misc]


def test_counts_used_and_bands() -> None:
    curve = example()
    assert len(curve) == 3
    assert curve.used.tolist() == [True, False, True]
    assert curve.bands == ("red", "blue")
    expected = {"rows": 3, "used": 2, "upper_limits": 1, "excluded": 1, "duplicate": 0, "from_magnitude": 0}
    assert curve.counts() == expected
    assert repr(curve) == "<LightCurve red/blue: 3 rows, 2 used, 1 upper limits, 1 excluded>"
    assert curve.source.tolist() == [-1, -1, -1]
    assert curve.row.tolist() == [0, 0, 0]


def test_select_keeps_the_meaning_of_levels() -> None:
    curve = example()
    part = curve.select(curve.band == "blue")
    assert part.flux.tolist() == [-2.0]
    assert part.levels[part.level[0]].band == "blue"
    assert len(curve.select(np.zeros(3, dtype=bool))) == 0
    with pytest.raises(ValueError, match=r"mask must be boolean with shape \(3,\), got int64 \(2,\)"):
        curve.select([0, 1])


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ({"flux": [1.0]}, r"flux must have the shape \(3,\) of time, got \(1,\)"),
        ({"time": [60002.0, 60001.0, 60003.0]}, "time must be finite and sorted"),
        ({"time": [60002.0, 60003.0, np.nan]}, "time must be finite and sorted"),
        ({"level": [0, 1, 2]}, "level must be an index into the 2 levels"),
        ({"level": [0, 0, 0]}, "band must be that of the row's level"),
        ({"time_scale": "UTC"}, "time_scale must be unspecified or one of utc, tai"),
    ],
)
def test_inconsistent_arrays(changes: dict[str, Any], says: str) -> None:
    with pytest.raises(ValueError, match=says):
        example(**changes)


@pytest.mark.parametrize("name", ["", " red", "a\nb"])
def test_band_names(name: str) -> None:
    with pytest.raises(ValueError, match="band must be a printable name"):
        LevelGroup(band=name, kind="free")


def test_from_arrays_sorts_and_makes_levels() -> None:
    curve = LightCurve.from_arrays([3.0, 1.0, 2.0], ["b", "a", "b"], [30, 10, 20], [3, 1, 2])
    assert curve.flux.tolist() == [10.0, 20.0, 30.0]
    assert [curve.levels[k].band for k in curve.level] == ["a", "b", "b"]
    assert {group.kind for group in curve.levels} == {"absolute"}
    free = LightCurve.from_arrays([1.0], "a", [1.0], [1.0], kind="difference")
    assert free.levels == (LevelGroup(band="a", kind="free"),)
    tied = LightCurve.from_arrays(
        [1.0], "a", [1.0], [1.0], kind="difference", reference_epochs=[0.0], reference_err=0.5, is_upper_limit=True
    )
    assert tied.levels == (LevelGroup(band="a", kind="reference", reference_epochs=(0.0,), reference_err=0.5),)
    assert tied.is_upper_limit.tolist() == [True]
    with pytest.raises(ValueError, match="kind must be flux or difference, got 'magnitude'"):
        LightCurve.from_arrays([1.0], "a", [1.0], [1.0], kind="magnitude")


def test_equal_times_keep_their_order() -> None:
    curve = LightCurve.from_arrays([1.0] * 4, list("dbca"), [1.0, 2.0, 3.0, 4.0], np.ones(4))
    assert curve.flux.tolist() == [1.0, 2.0, 3.0, 4.0]


def test_to_dict_is_json() -> None:
    document = json.loads(json.dumps(example(flux=[10.0, np.nan, 30.0]).to_dict(), allow_nan=False))
    assert document["flux"] == [10.0, None, 30.0]
    assert document["levels"][1] == {
        "band": "blue", "kind": "free", "reference_epochs": [], "reference_err": None, "source": "b.csv"
    }  # fmt: skip
    assert document["time_scale"] == "unspecified"


def test_html_and_pickle() -> None:
    curve = example()
    assert "<table" in curve._repr_html_()
    again = pickle.loads(pickle.dumps(curve))
    assert again.levels == curve.levels
    np.testing.assert_array_equal(again.flux, curve.flux)


def test_flags_are_one_registry() -> None:
    bits = [flag.bit for flag in FLAGS]
    assert all(bit & (bit - 1) == 0 for bit in bits)
    assert len(set(bits)) == len(FLAGS) == len({flag.name for flag in FLAGS})
    assert flag_bit("excluded") == 1
    assert flag_names(1 | 4) == ("excluded", "from_magnitude")
    assert flag_names(0) == ()
    assert flag_bit("from_magnitude") & UNUSED == 0
    with pytest.raises(KeyError):
        flag_bit("no such flag")
