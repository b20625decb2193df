"""Progress bars: on terminals only, and never when they are silenced."""

from __future__ import annotations

import io
from collections.abc import Iterator
from contextlib import redirect_stderr

import pytest

from crossing.progress import quiet, track


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def test_items_pass_unchanged_and_nothing_is_printed_without_a_terminal(capsys: pytest.CaptureFixture[str]) -> None:
    assert list(track(range(5), "scanning")) == [0, 1, 2, 3, 4]
    assert capsys.readouterr() == ("", "")


def test_a_terminal_shows_the_name_on_stderr(capsys: pytest.CaptureFixture[str]) -> None:
    with redirect_stderr(Terminal()) as terminal:
        assert list(track(iter("abc"), "scanning fold", total=3)) == ["a", "b", "c"]
    assert "scanning fold" in terminal.getvalue()
    assert "/3" in terminal.getvalue()
    assert capsys.readouterr() == ("", "")


def test_the_bar_is_gone_at_the_end() -> None:
    with redirect_stderr(Terminal()) as terminal:
        list(track(range(3), "scanning"))
    *before, last = terminal.getvalue().split("\r")
    assert any("scanning" in text for text in before)
    assert last.strip() == ""


def test_quiet_silences_what_is_inside_and_ends_with_the_block() -> None:
    with redirect_stderr(Terminal()) as terminal:
        with quiet():
            assert list(track(range(3), "hidden")) == [0, 1, 2]
            with quiet(False):
                list(track(range(3), "inner"))
            list(track(range(3), "hidden"))
        list(track(range(3), "outer"))
    assert "hidden" not in terminal.getvalue()
    assert "inner" in terminal.getvalue()
    assert "outer" in terminal.getvalue()


def test_quiet_ends_when_the_work_fails() -> None:
    with pytest.raises(RuntimeError, match="broken"), quiet():
        raise RuntimeError("broken")
    with redirect_stderr(Terminal()) as terminal:
        list(track(range(3), "after"))
    assert "after" in terminal.getvalue()


def test_items_are_taken_one_by_one_and_may_be_left() -> None:
    taken = []

    def source() -> Iterator[int]:
        for number in range(100):
            taken.append(number)
            yield number

    for number in track(source(), "searching"):
        if number == 3:
            break
    assert taken == [0, 1, 2, 3]
