"""Errors: one line, the places that are known, and what callers may catch."""

from __future__ import annotations

import pickle
from pathlib import Path

import pytest

from crossing.errors import CrossingError, InputError


@pytest.mark.parametrize(
    ("error", "line"),
    [
        (InputError("must be positive, got -1"), "must be positive, got -1"),
        (InputError("must be x", source=Path("a/event.toml")), "a/event.toml: must be x"),
        (InputError("must be x", where="row 7"), "row 7: must be x"),
        (InputError("must be x", source="e.toml", where="lens.redshift"), "e.toml: lens.redshift: must be x"),
        (InputError("two\n lines\tof\r\n  it", source="a\nb.toml"), "a b.toml: two lines of it"),
        (InputError("must be x", source="", where=""), "must be x"),
    ],
)
def test_the_message_is_one_line_that_names_the_places(error: InputError, line: str) -> None:
    assert str(error) == line


def test_places_are_filled_in_and_never_replaced() -> None:
    bare = InputError("must be x")
    full = bare.located(source="event.toml", where="lens.redshift")
    assert str(full) == "event.toml: lens.redshift: must be x"
    assert (full.problem, full.source, full.where) == ("must be x", "event.toml", "lens.redshift")
    assert str(full.located(source="other.toml", where="row 1")) == str(full)
    assert str(InputError("must be x", where="row 7").located(source="a.csv")) == "a.csv: row 7: must be x"
    assert (bare.source, bare.where) == (None, None)


def test_bad_input_is_a_value_error_too() -> None:
    assert issubclass(InputError, CrossingError)
    with pytest.raises(ValueError, match="must be x"):
        raise InputError("must be x")
    assert not issubclass(CrossingError, ValueError)


def test_errors_pass_between_processes() -> None:
    error = InputError("must be x", source="event.toml", where="row 7")
    back = pickle.loads(pickle.dumps(error))
    assert type(back) is InputError
    assert str(back) == str(error)
    assert (back.problem, back.source, back.where) == (error.problem, error.source, error.where)
