"""The comparison of documents finds what it must find, and nothing else."""

from __future__ import annotations

from typing import Any

import pytest
from documents import differences

SAMPLE: dict[str, Any] = {"a": 1, "b": {"x": 1.0}, "c": [{"k": "text"}], "bands": {"blue": {"m": 1.0}}, "none": None}


@pytest.mark.parametrize(
    ("changes", "found"),
    [
        ({}, []),
        ({"a": 7, "b": {"x": -2.5}, "c": [], "bands": {"red": {"m": 0.0}, "green": {"m": 0.0}}}, []),
        ({"a": 1.0}, ["document.a: int became float"]),
        ({"a": True}, ["document.a: int became bool"]),
        ({"none": 1.0}, ["document.none: NoneType became float"]),
        ({"new": 1}, ["document.new: new"]),
        ({"b": {"y": 1.0}}, ["document.b.x: missing", "document.b.y: new"]),
        ({"b": {"x": 1.0, "maybe": 2}}, []),
        ({"c": [{"k": "text"}, {"k": 3}]}, ["document.c[1].k: str became int"]),
        ({"bands": {"red": {"m": 1.0}, "green": {}}}, ["document.bands[green].m: missing"]),
    ],
)
def test_differences(changes: dict[str, Any], found: list[str]) -> None:
    assert differences(SAMPLE, SAMPLE | changes, free_keys=["bands"], optional=["maybe"]) == found
