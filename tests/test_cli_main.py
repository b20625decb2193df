"""The command line apart from what its verbs do: help, options, exit statuses, interruptions, faults."""

from __future__ import annotations

import os
import shlex
import signal
import statistics
import subprocess
import sys
from collections.abc import Sequence
from importlib.metadata import version
from pathlib import Path

import pytest

from crossing.cli import main as command
from crossing.cli.main import main
from crossing.errors import InputError

DEMO = Path(__file__).parent.parent / "demo_lightcurves"
EVENT = str(DEMO / "four_epochs.toml")
VERBS = sorted(command._VERBS)
HEAVY = {"numpy", "scipy", "astropy", "numba", "matplotlib", "lmfit", "dynesty", "jinja2", "tqdm", "importlib.metadata"}

Captured = pytest.CaptureFixture[str]


def run(*words: str, code: str | None = None, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    """Run ``python -m crossing``, or a piece of Python in its place."""
    start = ["-m", "crossing"] if code is None else ["-c", code]
    return subprocess.run([sys.executable, *start, *words], capture_output=True, text=True, cwd=cwd, timeout=120)


def one_line(text: str) -> str:
    """The text without its newline, which must be its only one."""
    assert text.endswith("\n")
    assert text.count("\n") == 1
    return text[:-1]


def interrupt(*_: object, **__: object) -> None:
    raise KeyboardInterrupt


def replace_fit(monkeypatch: pytest.MonkeyPatch, function: object) -> None:
    monkeypatch.setattr("crossing.inference.fit_crossing", function)


# Help


@pytest.mark.parametrize("words", [[], *([verb] for verb in VERBS)], ids=lambda words: " ".join(words) or "crossing")
def test_help_comes_within_a_third_of_a_second(words: list[str]) -> None:
    resource = pytest.importorskip("resource")  # not on Windows

    def seconds() -> float:
        before = resource.getrusage(resource.RUSAGE_CHILDREN)
        assert run(*words, "--help").returncode == 0
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        return float(after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)

    # Processor time, because the clock on the wall also measures the neighbours.
    assert statistics.median(seconds() for _ in range(3)) < 0.3


@pytest.mark.parametrize("words", [["--help"], *([verb, "--help"] for verb in VERBS)], ids=" ".join)
def test_help_loads_nothing_heavy(words: list[str]) -> None:
    code = "import sys; from crossing.cli.main import main; main(sys.argv[1:]); print(*sys.modules, file=sys.stderr)"
    done = run(*words, code=code)
    assert done.stdout.count("usage: crossing") == 1
    loaded = set(done.stderr.split())
    assert "crossing.cli.main" in loaded
    assert loaded & HEAVY == set()


@pytest.mark.parametrize("verb", VERBS)
def test_help_of_every_verb_starts_with_two_examples_that_can_be_parsed(verb: str, capsys: Captured) -> None:
    assert main([verb, "--help"]) == 0
    head, first, second, blank, *_ = capsys.readouterr().out.split("\n")
    assert (head, blank) == ("examples:", "")
    for example in (first, second):
        words = shlex.split(example.split(">")[0])
        assert words[:2] == ["crossing", verb]
        assert command._parser(verb).parse_args(words[1:]).verb == verb


@pytest.mark.parametrize("verb", VERBS)
def test_every_verb_has_the_shared_options(verb: str, capsys: Captured) -> None:
    main([verb, "--help"])
    text = capsys.readouterr().out
    for option in ("--out DIR", "--seed N", "--json", "--quiet", "--threads N", "--overwrite"):
        assert option in text


def test_general_help_names_every_verb_and_the_exit_statuses(capsys: Captured) -> None:
    assert main(["--help"]) == 0
    text = " ".join(capsys.readouterr().out.split())
    assert "0 done; 2 bad input; 3 done, but the result is flagged" in text
    for verb in VERBS:
        assert f" {verb} " in text


def test_without_a_verb_the_help_is_printed(capsys: Captured) -> None:
    assert main([]) == 0
    bare = capsys.readouterr()
    main(["--help"])
    assert bare == capsys.readouterr()


def test_version(capsys: Captured) -> None:
    assert main(["--version"]) == 0
    assert capsys.readouterr() == (f"crossing {version('crossing')}\n", "")


# Bad words on the command line


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (["fot", EVENT], "crossing: argument VERB: invalid choice: 'fot' (choose from"),
        (["--sed"], "unrecognized arguments: --sed"),
        (["fit"], "crossing fit: the following arguments are required: EVENT"),
        (["fit", EVENT, "again.toml"], "unrecognized arguments: again.toml"),
        (["fit", EVENT, "--models", "fold"], "unrecognized arguments: --models"),
        (["fit", EVENT, "--over"], "unrecognized arguments: --over"),
        (["fit", EVENT, "--model", "flod"], "crossing fit: argument --model: invalid choice: 'flod'"),
        (["fit", EVENT, "--model"], "crossing fit: argument --model: expected one argument"),
        (["fit", EVENT, "--seed", "-1"], "argument --seed: must be a whole number, 0 or more, got '-1'"),
        (["fit", EVENT, "--seed", "1e3"], "argument --seed: must be a whole number, 0 or more, got '1e3'"),
        (["fit", EVENT, "--seed", "9" * 5000], "argument --seed: must be a whole number, 0 or more"),
        (["fit", EVENT, "--threads", "0"], "argument --threads: must be a whole number, 1 or more, got '0'"),
        (["fit", EVENT, "--out", ""], "argument --out: must be the name of a folder, got nothing"),
        (["fit", EVENT, "two\nlines"], "unrecognized arguments: two lines"),
    ],
)
def test_bad_options_give_one_line_and_status_2(
    words: list[str], says: str, capsys: Captured, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    assert main(words) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert says in one_line(err)
    assert "--help" in err
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("words", "status"), [(["--version"], 0), (["fot"], 2), (["fit", "missing.toml"], 2), (["fit", "--seed", "x"], 2)]
)
def test_status_of_the_process(words: list[str], status: int, tmp_path: Path) -> None:
    done = run(*words, cwd=tmp_path)
    assert done.returncode == status
    assert "Traceback" not in done.stderr
    assert list(tmp_path.iterdir()) == []


def test_the_installed_command_is_the_same(tmp_path: Path) -> None:
    script = Path(sys.executable).with_name("crossing")
    if not script.exists():
        pytest.skip("crossing is not installed beside this Python")
    done = subprocess.run([script, "fit", "missing.toml"], capture_output=True, text=True, cwd=tmp_path)
    assert (done.returncode, done.stdout, done.stderr) == (2, "", run("fit", "missing.toml", cwd=tmp_path).stderr)


def test_threads_are_handed_to_the_libraries_before_they_are_loaded(monkeypatch: pytest.MonkeyPatch) -> None:
    for name in command._THREAD_VARIABLES:
        monkeypatch.setenv(name, "7")
    main(["fit", "missing.toml"])
    assert {os.environ[name] for name in command._THREAD_VARIABLES} == {"7"}
    main(["fit", "missing.toml", "--threads", "3"])
    assert {os.environ[name] for name in command._THREAD_VARIABLES} == {"3"}


# Interruptions and faults


def test_ctrl_c_gives_130_and_one_line(capsys: Captured, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    replace_fit(monkeypatch, interrupt)
    assert main(["fit", EVENT, "--out", str(tmp_path / "out")]) == 130
    out, err = capsys.readouterr()
    assert out == ""
    assert one_line(err) == "crossing fit: interrupted; nothing was written"
    assert list(tmp_path.iterdir()) == []


@pytest.mark.skipif(sys.platform == "win32", reason="no such signal")
def test_a_real_interrupt_stops_a_real_fit(tmp_path: Path) -> None:
    # The signal falls into the fit itself: the wrapper says when it starts, and its seconds are spent there.
    code = (
        "import sys, crossing.inference as i\n"
        "fit = i.fit_crossing\n"
        "def wrapped(*a, **k):\n"
        "    print('started', file=sys.stderr, flush=True)\n"
        "    while True: fit(*a, **k)\n"
        "i.fit_crossing = wrapped\n"
        "from crossing.cli.main import main\n"
        "sys.exit(main(sys.argv[1:]))\n"
    )
    words = ["fit", EVENT, "--model", "fold", "--out", str(tmp_path / "out")]
    with subprocess.Popen(
        [sys.executable, "-c", code, *words], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    ) as process:
        assert process.stderr is not None
        assert process.stderr.readline() == "started\n"
        process.send_signal(signal.SIGINT)
        out, err = process.communicate(timeout=60)
    assert process.returncode == 130
    assert out == ""
    assert one_line(err) == "crossing fit: interrupted; nothing was written"
    assert list(tmp_path.iterdir()) == []


def test_a_fault_gives_1_and_one_line(capsys: Captured, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*_: object, **__: object) -> None:
        raise ZeroDivisionError("a fault\nof two lines")

    replace_fit(monkeypatch, broken)
    monkeypatch.delenv("CROSSING_DEBUG", raising=False)
    assert main(["fit", EVENT, "--out", str(tmp_path / "out")]) == 1
    out, err = capsys.readouterr()
    assert out == ""
    assert "fault of the program, please report it (ZeroDivisionError: a fault of two lines)" in one_line(err)
    assert "Traceback" not in err
    assert list(tmp_path.iterdir()) == []
    monkeypatch.setenv("CROSSING_DEBUG", "1")
    assert main(["fit", EVENT, "--out", str(tmp_path / "out")]) == 1
    assert "Traceback" in capsys.readouterr().err


def test_bad_input_found_late_gives_2(capsys: Captured, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object, **__: object) -> None:
        raise InputError("must be x", source="knot.csv", where="row 7")

    replace_fit(monkeypatch, refuse)
    assert main(["fit", EVENT, "--out", str(tmp_path / "out")]) == 2
    assert capsys.readouterr() == ("", "crossing fit: knot.csv: row 7: must be x\n")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("closed", [["--json"], []], ids=["json", "text"])
def test_a_reader_that_leaves_a_pipe_is_no_fault(closed: Sequence[str], tmp_path: Path) -> None:
    code = (
        "import os, sys\n"
        "from crossing.cli.main import main\n"
        "read, write = os.pipe()\n"
        "os.close(read)\n"
        "os.dup2(write, 1)\n"
        "sys.exit(main(sys.argv[1:]))\n"
    )
    done = run("fit", EVENT, "--model", "constant", "--out", str(tmp_path / "out"), *closed, code=code)
    assert done.returncode == 1
    assert "Traceback" not in done.stderr
    assert "Exception" not in done.stderr
    assert (tmp_path / "out" / "fit.json").exists()
