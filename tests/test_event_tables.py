from __future__ import annotations

from pathlib import Path

import pytest

from crossing.errors import InputError
from crossing.event.parsers import epochs, number, text, uncertain
from crossing.event.tables import Table


def table(**data: object) -> Table:
    return Table(data, source=Path("dir/event.toml"), where="star")


def test_get_and_need():
    assert table(a=1).get("a", number()) == 1.0
    assert table().get("a", number()) is None
    assert table(a=1).need("a", number()) == 1.0
    with pytest.raises(InputError, match=r"^dir/event.toml: star.a: must be given; add a = \.\.\.$"):
        table().need("a", number())


@pytest.mark.parametrize(
    ("raw", "parse", "place"),
    [
        ("x", number(), "star.a"),
        ({"value": 1, "error": "x"}, uncertain(), "star.a.error"),
        ([1, "x"], epochs, r"star.a\[1\]"),
    ],
)
def test_problems_name_file_and_key(raw, parse, place):
    with pytest.raises(InputError, match=rf"^dir/event.toml: {place}: must be a plain number"):
        table(a=raw).get("a", parse)


def test_only():
    table(a=1).only("a", "b")
    with pytest.raises(InputError, match=r"^dir/event.toml: star.radus: is not a known key; the nearest .* is radius$"):
        table(radus=1).only("radius", "temperature")
    root = Table({"evnt": {}}, source=Path("e.toml"))
    with pytest.raises(InputError, match=r"^e.toml: evnt: is not a known key"):
        root.only("event")


def test_inner_tables():
    assert table().table("a") is None
    inner = table(a={"b": 1}).table("a")
    assert inner is not None
    assert (inner.where, list(inner)) == ("star.a", ["b"])
    assert [item.where for item in table(a={}).tables("a")] == ["star.a"]
    assert [item.where for item in table(a=[{}, {}]).tables("a")] == ["star.a[0]", "star.a[1]"]
    assert table().tables("a") == []
    for raw in ([], [1], [{}, 1], 1, "x"):
        with pytest.raises(InputError, match=r"star.a: must be one table \[star.a\] or several"):
            table(a=raw).tables("a")
        with pytest.raises(InputError, match=r"star.a: must be one table, \[star.a\], got"):
            table(a=raw).table("a")


def test_one_of():
    assert table(a=1, c=1).one_of("a", "b") == "a"
    with pytest.raises(InputError, match="star: must hold exactly one of a and b, got none of them"):
        table(c=1).one_of("a", "b")
    with pytest.raises(InputError, match="star: must hold exactly one of a, b and c, got a and b; remove all but one"):
        table(a=1, b=1).one_of("a", "b", "c")


def test_paths_start_from_the_folder_of_the_file():
    assert table(a="x.csv").file("a", text) == Path("dir/x.csv")
    assert table(a="/data/x.csv").file("a", text) == Path("/data/x.csv")
    assert table().file("a", text) is None


def test_odd_keys_are_quoted():
    assert table().place("a b") == "star.'a b'"
    assert table().place("a\nb") == r"star.'a\nb'"
