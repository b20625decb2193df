"""Output files: whole or not at all, and never over a file of somebody else."""

from __future__ import annotations

import errno
import json
import multiprocessing
import os
import threading
from pathlib import Path

import pytest

from crossing import outputs
from crossing.errors import InputError
from crossing.outputs import OutputFolder, write_whole


def run(path: Path, files: dict[str, bytes], command: str = "fit", overwrite: bool = False) -> None:
    folder = OutputFolder(path, command, overwrite=overwrite)
    folder.check(files)
    with folder.transaction() as out:
        for name, data in files.items():
            out.write_bytes(name, data)


def listing(path: Path) -> set[str]:
    return {entry.name for entry in path.iterdir()}


def test_files_appear_together_at_the_end_with_a_list_of_digests(tmp_path: Path) -> None:
    folder = OutputFolder(tmp_path / "new" / "deeper", "fit")
    folder.check(["a.txt", "b.ecsv"])
    assert not (tmp_path / "new").exists()
    with folder.transaction() as out:
        out.write_bytes("a.txt", b"first")
        assert out.path("b.ecsv").suffix == ".ecsv"
        out.path("b.ecsv").write_text("second")
        assert not (folder.path / "a.txt").exists()
    assert out.written == (folder.path / "a.txt", folder.path / "b.ecsv")
    assert listing(folder.path) == {"a.txt", "b.ecsv", ".crossing-fit.json"}
    manifest = json.loads((folder.path / ".crossing-fit.json").read_text())
    # SHA-256 of the ASCII text "first", from the sha256sum program
    assert manifest["files"]["a.txt"] == ["a7937b64b8caa58f03721bb6bacf5c78cb235febe0e70b1b84cd99541461a08e"]
    assert manifest["command"] == "fit"


def test_a_second_run_replaces_its_own_files_only(tmp_path: Path) -> None:
    run(tmp_path, {"a.txt": b"1", "b.txt": b"1"})
    run(tmp_path, {"a.txt": b"2"})
    run(tmp_path, {"a.txt": b"3", "b.txt": b"3"})
    assert (tmp_path / "a.txt").read_bytes() == b"3"
    with pytest.raises(InputError, match=r"a\.txt: is there already, and crossing map did not write it.*--overwrite"):
        run(tmp_path, {"a.txt": b"4"}, command="map")
    run(tmp_path, {"a.txt": b"5"}, command="map", overwrite=True)
    with pytest.raises(InputError, match=r"a\.txt: was changed since crossing fit wrote it"):
        run(tmp_path, {"a.txt": b"6"})
    assert (tmp_path / "a.txt").read_bytes() == b"5"


def test_a_changed_file_is_kept_unless_overwrite_says_so(tmp_path: Path) -> None:
    run(tmp_path, {"a.txt": b"1"})
    (tmp_path / "a.txt").write_bytes(b"notes of the user")
    with pytest.raises(InputError, match="changed since"):
        run(tmp_path, {"a.txt": b"2"})
    assert (tmp_path / "a.txt").read_bytes() == b"notes of the user"
    run(tmp_path, {"a.txt": b"2"}, overwrite=True)
    assert (tmp_path / "a.txt").read_bytes() == b"2"


def test_a_file_that_appears_during_the_run_is_kept(tmp_path: Path) -> None:
    folder = OutputFolder(tmp_path, "fit")
    folder.check(["a.txt", "b.txt"])

    def work() -> None:
        with folder.transaction() as out:
            out.write_bytes("b.txt", b"result")
            out.write_bytes("a.txt", b"result")
            (tmp_path / "a.txt").write_bytes(b"somebody else")

    with pytest.raises(InputError, match="did not write it"):
        work()
    assert listing(tmp_path) == {"a.txt"}
    assert (tmp_path / "a.txt").read_bytes() == b"somebody else"


@pytest.mark.parametrize("error", [KeyboardInterrupt(), ValueError("work failed"), InputError("bad row")])
def test_nothing_is_left_when_the_work_fails(tmp_path: Path, error: BaseException) -> None:
    folder = OutputFolder(tmp_path / "out" / "deep", "fit")

    def work() -> None:
        with folder.transaction() as out:
            out.write_bytes("a.txt", b"half")
            raise error

    with pytest.raises(type(error)):
        work()
    assert listing(tmp_path) == set()


def test_an_old_run_stays_whole_when_a_new_one_fails(tmp_path: Path) -> None:
    run(tmp_path, {"a.txt": b"old"})
    before = listing(tmp_path)

    def work() -> None:
        with OutputFolder(tmp_path, "fit").transaction() as out:
            out.write_bytes("a.txt", b"new")
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        work()
    assert (tmp_path / "a.txt").read_bytes() == b"old"
    assert listing(tmp_path) == before


@pytest.mark.parametrize(
    ("code", "says"),
    [
        (errno.ENOSPC, "the disk is full; free some space"),
        (errno.EDQUOT, "the disk is full"),
        (errno.EROFS, "permission denied; choose another folder"),
        (errno.EIO, "Input/output error"),
    ],
)
def test_system_errors_are_one_line(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, code: int, says: str) -> None:
    def fail(path: Path, data: bytes) -> None:
        raise OSError(code, os.strerror(code), str(path))

    monkeypatch.setattr(Path, "write_bytes", fail)
    with pytest.raises(InputError, match=says) as caught:
        run(tmp_path / "out", {"a.txt": b"1"})
    assert str(caught.value).startswith(str(tmp_path / "out" / "a.txt"))
    assert "\n" not in str(caught.value)
    assert listing(tmp_path) == set()


def test_a_full_disk_of_the_system_is_one_line(tmp_path: Path) -> None:
    full = Path("/dev/full")
    if not full.exists():
        pytest.skip("this system has no /dev/full")

    def work() -> None:
        with OutputFolder(tmp_path, "fit").transaction(), full.open("wb") as stream:
            stream.write(b"1")

    with pytest.raises(InputError, match="the disk is full"):
        work()


def test_errors_of_the_work_itself_pass_unchanged(tmp_path: Path) -> None:
    def work() -> None:
        with OutputFolder(tmp_path, "fit").transaction():
            (tmp_path / "no such input").read_bytes()

    with pytest.raises(FileNotFoundError):
        work()


def test_a_failure_between_two_renamings_leaves_whole_files_and_a_way_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    run(tmp_path, {"a.txt": b"old", "b.txt": b"old"})
    real = os.replace

    def fail(source: Path, target: Path) -> None:
        if Path(target).name == "b.txt":
            raise OSError(errno.EIO, "Input/output error", str(source), None, str(target))
        real(source, target)

    monkeypatch.setattr(outputs.os, "replace", fail)
    with pytest.raises(InputError, match=r"b\.txt: cannot be written"):
        run(tmp_path, {"a.txt": b"new", "b.txt": b"new"})
    assert (tmp_path / "a.txt").read_bytes() == b"new"
    assert (tmp_path / "b.txt").read_bytes() == b"old"
    assert listing(tmp_path) == {"a.txt", "b.txt", ".crossing-fit.json"}
    monkeypatch.undo()
    run(tmp_path, {"a.txt": b"newer", "b.txt": b"newer"})


def test_folders_that_cannot_be_used(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "file").write_text("x")
    for path in (tmp_path / "file", tmp_path / "file" / "below"):
        with pytest.raises(InputError, match="must be a folder, got a file"):
            OutputFolder(path, "fit").check(["a.txt"])
    with pytest.raises(InputError, match="cannot be written"):
        run_unchecked(tmp_path / "file" / "below")
    (tmp_path / "a.txt").mkdir()
    with pytest.raises(InputError, match="is a folder where a file must go"):
        OutputFolder(tmp_path, "fit", overwrite=True).check(["a.txt"])
    # os.access is replaced because the tests may run as a user to whom everything is allowed
    monkeypatch.setattr(outputs.os, "access", lambda path, mode: False)
    with pytest.raises(InputError, match="cannot be written to; choose another folder with --out"):
        OutputFolder(tmp_path / "new", "fit").check(["a.txt"])


def run_unchecked(path: Path) -> None:
    with OutputFolder(path, "fit").transaction() as out:
        out.write_bytes("a.txt", b"1")


def test_a_link_is_not_followed(tmp_path: Path) -> None:
    (tmp_path / "kept").write_bytes(b"precious")
    out = tmp_path / "out"
    run(out, {"a.txt": b"precious"})
    (out / "a.txt").unlink()
    (out / "a.txt").symlink_to(tmp_path / "kept")
    with pytest.raises(InputError, match="did not write it"):
        run(out, {"a.txt": b"2"})
    run(out, {"a.txt": b"2"}, overwrite=True)
    assert (tmp_path / "kept").read_bytes() == b"precious"
    assert not (out / "a.txt").is_symlink()


@pytest.mark.parametrize("content", ["", "[]", '{"files": []}', '{"files": {"a": 1}}', "[" * 10**5, "\0", '"files"'])
def test_a_strange_list_of_outputs(tmp_path: Path, content: str) -> None:
    (tmp_path / ".crossing-fit.json").write_text(content)
    with pytest.raises(InputError, match="is not the list of outputs that crossing fit keeps"):
        run(tmp_path, {"a.txt": b"1"})
    run(tmp_path, {"a.txt": b"1"}, overwrite=True)
    run(tmp_path, {"a.txt": b"2"})


@pytest.mark.parametrize("name", ["", "..", "a/b", "/a", ".crossing-fit.json"])
def test_names_are_plain(tmp_path: Path, name: str) -> None:
    with pytest.raises(ValueError, match="name must be a plain file name"):
        OutputFolder(tmp_path, "fit").check([name])


def test_misuse(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="command must be letters"):
        OutputFolder(tmp_path, "../fit")

    def work() -> None:
        with OutputFolder(tmp_path, "fit").transaction() as out:
            out.path("a.txt")

    with pytest.raises(RuntimeError, match=r"wrote nothing there: a\.txt"):
        work()


def writer(path: str, letter: str, rounds: int) -> None:
    for _ in range(rounds):
        run(Path(path), {"shared.txt": letter.encode() * 100_000, f"own_{letter}.txt": letter.encode()})


def test_two_runs_at_once_leave_whole_files_and_one_true_list(tmp_path: Path) -> None:
    context = multiprocessing.get_context("spawn")
    jobs = [context.Process(target=writer, args=(str(tmp_path), letter, 15)) for letter in "ab"]
    for job in jobs:
        job.start()
    for job in jobs:
        job.join(60)
    assert [job.exitcode for job in jobs] == [0, 0]
    shared = (tmp_path / "shared.txt").read_bytes()
    assert shared in {b"a" * 100_000, b"b" * 100_000}
    assert listing(tmp_path) == {"shared.txt", "own_a.txt", "own_b.txt", ".crossing-fit.json"}
    run(tmp_path, {"shared.txt": b"1", "own_a.txt": b"1", "own_b.txt": b"1"})


def test_waiting_for_another_run_ends(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    fcntl = pytest.importorskip("fcntl")
    handle = os.open(tmp_path, os.O_RDONLY)
    fcntl.flock(handle, fcntl.LOCK_EX)
    monkeypatch.setattr(outputs, "_LOCK_SECONDS", 0.1)
    with pytest.raises(InputError, match="another run is writing here"):
        run(tmp_path, {"a.txt": b"1"})
    assert listing(tmp_path) == set()
    monkeypatch.setattr(outputs, "_LOCK_SECONDS", 60.0)
    timer = threading.Timer(0.1, os.close, [handle])
    timer.start()
    run(tmp_path, {"a.txt": b"1"})
    timer.join()


def test_write_whole(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    target = tmp_path / "curve.ecsv"
    write_whole(target, b"1")
    with pytest.raises(InputError, match=r"curve\.ecsv: is there already; choose another name"):
        write_whole(target, b"2")
    write_whole(target, b"2", overwrite=True)
    with pytest.raises(InputError, match=r"curve\.ecsv: cannot be written: No such file or directory"):
        write_whole(tmp_path / "missing" / "curve.ecsv", b"1")

    def fail(source: Path, target: Path) -> None:
        raise OSError(errno.EACCES, "Permission denied", str(source), None, str(target))

    monkeypatch.setattr(outputs.os, "replace", fail)
    with pytest.raises(InputError, match=r"curve\.ecsv: cannot be written: permission denied"):
        write_whole(target, b"3", overwrite=True)
    assert listing(tmp_path) == {"curve.ecsv"}
    assert target.read_bytes() == b"2"
