"""Every malformed event file gives one line that names file, key and remedy."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from crossing.errors import InputError
from crossing.event import read_event

EVENTS = sorted((Path(__file__).parent / "malformed" / "events").glob("*.toml"))


def expected_fragments(path: Path) -> list[str]:
    return re.findall(r"^# expect: (.+)$", path.read_bytes().decode(errors="replace"), re.MULTILINE)


def test_the_corpus_is_large_and_says_what_it_expects():
    assert len(EVENTS) >= 35
    assert all(expected_fragments(path) for path in EVENTS)


@pytest.mark.parametrize("path", EVENTS, ids=lambda path: path.stem)
def test_one_line_names_file_and_key(path):
    with pytest.raises(InputError, match=re.escape(f"{path}: ")) as caught:
        read_event(path)
    line = str(caught.value)
    assert line.isprintable()
    assert len(line) < 600 + len(str(path))
    for fragment in expected_fragments(path):
        assert fragment in line
