"""Oracle: what was reported as written must be readable, wherever its writer is killed or fails."""

import errno
import fcntl
import multiprocessing
import os
import resource
import shutil
import threading
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from cosim.archive import (
    NumberedRun,
    append,
    consolidate,
    files,
    publishing,
    read,
    read_table,
    run_numbers,
    store,
    table,
    write,
    write_part,
)
from cosim.errors import ArchiveError
from tests.archive.faults import Fault, content, real_write, run_in_child, states_at_every_call

pytestmark = pytest.mark.filterwarnings(
    # Python 3.12 and later warn of any fork while numpy's threads exist; the children of these
    # tests use nothing of theirs.
    "ignore:This process:DeprecationWarning"
)


@dataclass(frozen=True, slots=True)
class Run:
    value: float
    samples: np.ndarray


def make(value: float) -> Run:
    return Run(value, np.full(2000, value))


def check(path: Path, values: dict[int, float]) -> None:
    """Check that the archive holds these runs whole, and no others."""
    assert run_numbers(path) == tuple(sorted(values))
    columns = read_table(path)
    assert dict(zip(columns["id"].tolist(), columns["value"].tolist(), strict=True)) == values
    for number, value in values.items():
        run = read(path, {"Run": Run}, number)
        assert run.value == value
        np.testing.assert_array_equal(run.samples, np.full(2000, value))


def publish_everything(path: Path, pipe: int) -> None:
    """Write four runs on every way there is, with a merge, and report each."""
    append(path, make(1.0))
    real_write(pipe, b"\1")
    write_part(path, [NumberedRun(2, make(2.0)), NumberedRun(3, make(3.0))])
    real_write(pipe, b"\2\3")
    append(path, make(4.0))
    real_write(pipe, b"\4")
    consolidate(path)


@pytest.mark.full
def test_killed_at_every_call(tmp_path: Path) -> None:
    states = states_at_every_call(publish_everything, tmp_path)
    # Three publications and a merge, each of at least ten calls.
    assert len(states) > 40
    seen = set()
    for folder, reported in states:
        # Many calls change nothing that the next one could find.
        state = (frozenset(reported), content(folder))
        if state in seen:
            continue
        seen.add(state)
        path = folder / "a.h5"
        if not path.exists():
            assert not reported
        else:
            found = set(run_numbers(path))
            # A run that was being published may be there whole, though nobody was told.
            assert reported <= found
            assert len(found - reported) <= 2
            check(path, {number: float(number) for number in found})
        # The next writer is not hindered by what the killed one has left, and clears it away.
        append(path, make(9.0))
        consolidate(path)
        assert read(path, {"Run": Run}).value == 9.0
        assert [item.name for item in path.parent.iterdir()] == ["a.h5"]
    assert len(seen) > 15


@pytest.mark.full
@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EIO])
def test_failure_of_every_call(tmp_path: Path, number: int) -> None:
    def fail(name: str, args: tuple[Any, ...]) -> None:
        raise OSError(number, os.strerror(number))

    begun = tmp_path / "begun"
    begun.mkdir()
    write(begun / "a.h5", make(1.0))
    write_part(begun / "a.h5", [NumberedRun(2, make(2.0))])
    outcomes = []
    for at in range(1, 1000):
        path = tmp_path / str(at) / "a.h5"
        shutil.copytree(begun, path.parent)

        def work(pipe: int, path: Path = path, at: int = at) -> None:
            fault = Fault(at, fail)
            fault.install()
            step = b"append"
            try:
                append(path, make(3.0))
                step = b"merge"
                consolidate(path)
                step = b"late" if fault.left <= 0 else b"never"
            except ArchiveError as error:
                step += b" failed" if error.hint else b" failed without a hint"
            real_write(pipe, step)

        status, report = run_in_child(work)
        assert status == 0
        if report == b"never":
            break
        outcomes.append(report)
        found = run_numbers(path)
        check(path, {run: float(run) for run in found})
        assert found == (1, 2, 3) or (found == (1, 2) and report == b"append failed")
    # "late": the lock or a temporary name could not be removed, which changes no archive.
    assert set(outcomes) == {b"append failed", b"merge failed", b"late"}


def test_full_disk(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, make(1.0))
    content = path.read_bytes()

    def work(pipe: int) -> None:
        # The process may not write a file longer than this, as on a disk with so much space.
        resource.setrlimit(resource.RLIMIT_FSIZE, (len(content) + 500, len(content) + 500))
        big = Run(2.0, np.random.default_rng(1).random(100_000))
        for attempt in (
            lambda: append(path, big),
            lambda: write(path, big),
            lambda: write_part(path, [NumberedRun(2, big)]),
        ):
            with pytest.raises(ArchiveError, match="no space is left") as caught:
                attempt()
            assert "free some space" in caught.value.hint
        real_write(pipe, b"3")

    assert run_in_child(work) == (0, b"3")
    assert path.read_bytes() == content
    assert append(path, make(2.0)) == 2


def test_any_failure_while_a_run_is_encoded(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "a.h5"
    write(path, make(1.0))
    for error, reported in ((MemoryError, MemoryError), (RuntimeError, ArchiveError)):

        def fail(
            group: object, value: object, notes: object, error: type[Exception] = error
        ) -> None:
            raise error("no more")

        monkeypatch.setattr("cosim.archive.store.write_object", fail)
        with pytest.raises(reported, match="no more"):
            append(path, make(2.0))
    check(path, {1: 1.0})
    assert [item.name for item in tmp_path.iterdir()] == ["a.h5"]


def append_many(path: Path, first: int, count: int) -> None:
    for index in range(count):
        append(path, make(float(first + index)))


def test_two_processes_append_at_once(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    context = multiprocessing.get_context("fork")
    writers = [context.Process(target=append_many, args=(path, n, 15)) for n in (100, 200, 300)]
    for writer in writers:
        writer.start()
    for writer in writers:
        writer.join()
    assert [writer.exitcode for writer in writers] == [0, 0, 0]
    assert run_numbers(path) == tuple(range(1, 46))
    expected = {float(first + index) for first in (100, 200, 300) for index in range(15)}
    assert set(read_table(path)["value"].tolist()) == expected
    assert [item.name for item in tmp_path.iterdir()] == ["a.h5"]


@pytest.mark.full
def test_reader_beside_a_writer_that_publishes_and_merges(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, make(1.0))
    published = [1]
    stop = threading.Event()

    def publish_and_merge() -> None:
        for number in range(2, 50):
            write_part(path, [NumberedRun(number, make(float(number)))])
            published.append(number)
            if number % 5 == 0:
                consolidate(path)
        stop.set()

    writer = threading.Thread(target=publish_and_merge)
    writer.start()
    rounds = 0
    while not stop.is_set():
        reported = set(published)
        assert reported <= set(run_numbers(path))
        assert reported <= set(read_table(path)["id"].tolist())
        assert read(path, {"Run": Run}, max(reported)).value == max(reported)
        rounds += 1
    writer.join()
    assert rounds > 2
    check(path, {number: float(number) for number in range(1, 50)})


def test_part_that_vanishes_between_listing_and_reading(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "a.h5"
    write(path, make(1.0))
    write_part(path, [NumberedRun(2, make(2.0))])
    listed = files.list_parts

    def list_and_merge(archive: Path) -> tuple[Path, ...]:
        parts = listed(archive)
        monkeypatch.undo()
        consolidate(archive)
        return parts

    monkeypatch.setattr(files, "list_parts", list_and_merge)
    assert run_numbers(path) == (1, 2)


def test_merge_between_reading_the_archive_and_its_parts(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "a.h5"
    write(path, make(1.0))
    write_part(path, [NumberedRun(2, make(2.0))])

    def read_and_merge(file: Any) -> list[int]:
        monkeypatch.undo()
        numbers = table.load_ids(file)
        consolidate(path)
        return numbers

    monkeypatch.setattr(store, "load_ids", read_and_merge)
    assert run_numbers(path) == (1, 2)


def test_lock_whose_file_was_removed_meanwhile_is_taken_again(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "a.h5"
    real_flock = fcntl.flock

    def flock(handle: int, operation: int) -> None:
        # The holder before has released its lock between this writer's open and its flock.
        monkeypatch.undo()
        (tmp_path / ".a.h5.lock").unlink()
        real_flock(handle, operation)

    monkeypatch.setattr(fcntl, "flock", flock)
    with publishing.locked(path):
        assert (tmp_path / ".a.h5.lock").exists()


def test_lock_that_is_held_is_an_error_in_the_end(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "a.h5"
    write(path, make(1.0))
    monkeypatch.setattr(publishing, "_LOCK_TIMEOUT", 0.05)
    with (
        publishing.locked(path),
        pytest.raises(ArchiveError, match="another process has been writing"),
    ):
        append(path, make(2.0))
    assert append(path, make(2.0)) == 2


def test_a_link_stays_a_link_and_the_mode_stays(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, make(1.0))
    path.chmod(0o640)
    link = tmp_path / "link.h5"
    link.symlink_to(path)
    append(link, make(2.0))
    assert link.is_symlink()
    assert path.stat().st_mode & 0o777 == 0o640
    check(path, {1: 1.0, 2: 2.0})
