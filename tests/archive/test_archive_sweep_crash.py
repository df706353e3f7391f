"""Oracle: rows that were reported are readable, wherever their writer is killed or fails."""

import errno
import fcntl
import json
import multiprocessing
import os
import resource
import shutil
import subprocess
import sys
from collections.abc import Callable
from multiprocessing.synchronize import Event
from pathlib import Path

import h5py
import numpy as np
import pytest

from cosim.archive import (
    Row,
    Series,
    append,
    compact,
    consolidate,
    consolidation,
    create,
    read_plan,
    read_table,
    run_numbers,
    sweeps,
    verify,
    write_rows,
)
from cosim.archive.files import list_parts
from cosim.errors import ArchiveError
from tests.archive.faults import Fault, content, real_write, run_in_child, states_at_every_call
from tests.archive.sweep_rows import PLAN, TYPES, check_rows, record, row

pytestmark = pytest.mark.filterwarnings(
    # Python 3.12 and later warn of any fork while numpy's threads exist; the children of these
    # tests use nothing of theirs.
    "ignore:This process:DeprecationWarning"
)


Step = Callable[[Path, int], None]


def publish(*numbers: int) -> Step:
    """Give a step that writes some rows and reports them."""

    def step(path: Path, pipe: int) -> None:
        write_rows(path, [row(number, whole=number % 4 == 0) for number in numbers])
        real_write(pipe, bytes(numbers))

    return step


def begin(path: Path, pipe: int) -> None:
    create(path, PLAN)
    real_write(pipe, b"\0")


# All that an archive goes through.
STEPS: tuple[Step, ...] = (
    begin,
    publish(2, 1),
    publish(4, 3),
    publish(6, 5),
    publish(8, 7),  # That makes four parts, which become one.
    publish(9, 10),
    lambda path, pipe: compact(path),
    publish(12, 11),
    lambda path, pipe: consolidate(path, {4, 12}),
    # Resumed: one run again, and two more.
    publish(2, 13),
    publish(14),
    lambda path, pipe: consolidate(path),
)


def sweep(path: Path, pipe: int) -> None:
    """Run a sweep through all that an archive goes through, and report what is published."""
    for step in STEPS:
        step(path, pipe)


def check_archive(path: Path, reported: set[int]) -> None:
    """Check the plan, and everything that was reported, its checksums, and what came unreported."""
    if not path.exists():
        assert not reported
        return
    found = set(run_numbers(path))
    assert reported - {0} <= found
    # What was being published may be there whole, though nobody was told.
    assert len(found - reported) <= 2
    check_rows(path, found)
    assert verify(path).damaged == ()
    assert read_plan(path, TYPES).title == PLAN.title


@pytest.mark.full
def test_killed_at_every_call(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sweeps, "_MANY_PARTS", 3)
    states = states_at_every_call(sweep, tmp_path)
    # Thirteen publications of at least nine calls each.
    assert len(states) > 110
    seen = set()
    for folder, reported in states:
        # Many calls change nothing that the next one could find.
        state = (frozenset(reported), content(folder))
        if state in seen:
            continue
        seen.add(state)
        path = folder / "a.h5"
        check_archive(path, reported)
        if path.exists():
            # The next writer is not hindered by what is left, and clears it away.
            found = run_numbers(path)
            write_rows(path, [row(2), row(20)])
            consolidate(path)
            assert set(run_numbers(path)) == {*found, 2, 20}
            # The checksums were compared with the data above; these rows are new.
            assert verify(path).damaged == ()
            check_rows(path, {2, 20})
            assert [item.name for item in path.parent.iterdir()] == ["a.h5"]
    assert len(seen) > 40


@pytest.mark.full
def test_failure_of_every_call(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sweeps, "_MANY_PARTS", 3)

    def fail(name: str, args: tuple[object, ...]) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    before, reported, failures = tmp_path / "start", set[int](), 0
    before.mkdir()
    seen = set()
    for number, step in enumerate(STEPS):
        for at in range(1, 1000):
            # Each step goes on from what the one before has left on the disk.
            path = tmp_path / f"{number}-{at}" / "a.h5"
            shutil.copytree(before, path.parent)

            def work(pipe: int, path: Path = path, at: int = at, number: int = number) -> None:
                fault = Fault(at, fail)
                fault.install()
                try:
                    STEPS[number](path, pipe)
                    if fault.left <= 0:
                        # What was passed over does not hinder the next step.
                        for step in STEPS[number + 1 : number + 2]:
                            step(path, pipe)
                except ArchiveError as error:
                    if not error.hint:
                        raise
                real_write(pipe, b"\xff" if fault.left <= 0 else b"\xfe")

            status, report = run_in_child(work)
            assert status == 0
            told = reported | set(report[:-1])
            state = (frozenset(told), content(path.parent))
            if state not in seen:
                seen.add(state)
                check_archive(path, told)
            if report[-1:] == b"\xfe":
                before, reported = path.parent, told
                break
            failures += 1
    assert failures > 110


@pytest.mark.full
def test_full_disk_at_every_size(tmp_path: Path) -> None:
    """The process may write no longer file, as on a disk with so much space."""
    sizes = [2**k for k in range(10, 18)]
    stopped = 0
    for size in sizes:
        path = tmp_path / f"{size}.h5"

        def work(pipe: int, path: Path = path, size: int = size) -> None:
            resource.setrlimit(resource.RLIMIT_FSIZE, (size, size))
            try:
                sweep(path, pipe)
            except ArchiveError as error:
                if "no space is left" not in str(error) or "free some space" not in error.hint:
                    raise
                real_write(pipe, b"\xff")

        status, report = run_in_child(work)
        assert status == 0
        stopped += report.endswith(b"\xff")
        check_archive(path, set(report) - {0xFF})
        assert not [item for item in tmp_path.rglob("*.tmp")]
    assert 0 < stopped < len(sizes)


def large_sweep(path: Path) -> list[str]:
    """Write a sweep of five parts, and give its checksums."""
    create(path, PLAN)
    for number in range(1, 6):
        write_rows(path, [row(number, whole=True), row(10 + number)])
    return list(read_table(path)["checksum"])


@pytest.mark.full
def test_full_disk_while_a_child_merges(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(consolidation, "_IN_MEMORY", 0)
    path = tmp_path / "a.h5"
    checksums = large_sweep(path)
    parts = list_parts(path)
    content = path.read_bytes()
    reference = tmp_path / "b.h5"
    large_sweep(reference)
    consolidate(reference)
    whole = reference.stat().st_size
    # At the start, in the middle, and just before the end of what the child writes.
    for size in (512, whole // 3, whole - 1000):

        def work(pipe: int, size: int = size) -> None:
            resource.setrlimit(resource.RLIMIT_FSIZE, (size, size))
            with pytest.raises(ArchiveError, match="the process that writes") as caught:
                consolidate(path)
            assert "as it was" in caught.value.hint
            real_write(pipe, b"1")

        assert run_in_child(work) == (0, b"1")
        assert list_parts(path) == parts
        assert path.read_bytes() == content
        assert not list(tmp_path.glob(".*"))
    assert consolidate(path) == 5
    assert list(read_table(path)["checksum"]) == checksums


@pytest.mark.parametrize("end", ["killed", "no such program"])
def test_child_that_ends_before_it_is_done(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, end: str
) -> None:
    monkeypatch.setattr(consolidation, "_IN_MEMORY", 0)
    path = tmp_path / "a.h5"
    checksums = large_sweep(path)
    parts = list_parts(path)
    program = tmp_path / "program"
    if end == "killed":
        # It leaves half a file, as if its machine had run out of memory.
        program.write_text(
            f"#!{sys.executable}\nimport json, os, sys\n"
            "open(json.load(sys.stdin)['target'], 'wb').write(b'half')\nos.kill(os.getpid(), 9)\n"
        )
        program.chmod(0o755)
    with monkeypatch.context() as patch:
        patch.setattr(sys, "executable", str(program))
        with pytest.raises(ArchiveError) as caught:
            consolidate(path)
    assert caught.value.hint
    assert ("ended by 9" in str(caught.value)) == (end == "killed")
    assert list_parts(path) == parts
    assert list(read_table(path)["checksum"]) == checksums
    assert not list(tmp_path.glob(".*"))


def test_too_little_space_for_a_merge(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(consolidation, "_IN_MEMORY", 0)
    path = tmp_path / "a.h5"
    large_sweep(path)
    monkeypatch.setattr(
        consolidation.shutil, "disk_usage", lambda _: type("Usage", (), {"free": 10_000})
    )
    with pytest.raises(ArchiveError, match="of free space, got 0"):
        consolidate(path)
    assert len(list_parts(path)) == 5


def test_child_without_its_parent_writes_nothing(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    large_sweep(path)
    target = tmp_path / "merged.h5"
    order = {"archives": [[str(path)]], "keep": None, "target": str(target), "parent": 1}
    done = subprocess.run(
        [sys.executable, "-m", "cosim.archive.merging"],
        input=json.dumps(order),
        capture_output=True,
        text=True,
        check=False,
        cwd=Path(__file__).parents[2],
    )
    assert done.returncode == 1
    assert "has ended" in done.stderr


def list_again_and_again(path: Path, rounds: int, done: Event) -> None:
    least = 0
    for _ in range(rounds):
        count = len(run_numbers(path))
        assert count >= least, f"{count} runs after {least}"
        least = count
    assert list(read_table(path, ("gain",))["gain"][:1]) == [1]
    done.set()


@pytest.mark.parametrize("rounds", [40, pytest.param(1000, marks=pytest.mark.full)])
def test_listings_by_another_process(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, rounds: int
) -> None:
    monkeypatch.setattr(sweeps, "_MANY_PARTS", 7)
    path = tmp_path / "a.h5"
    create(path, PLAN)
    write_rows(path, [row(1)])
    context = multiprocessing.get_context("fork")
    done = context.Event()
    reader = context.Process(target=list_again_and_again, args=(path, rounds, done))
    reader.start()
    number = 1
    while not done.is_set() and reader.is_alive():
        number += 1
        write_rows(path, [row(number)])
        if number % 40 == 0:
            consolidate(path)
    reader.join()
    assert reader.exitcode == 0
    assert number > 5
    assert run_numbers(path) == tuple(range(1, number + 1))


def test_file_system_without_locks(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def flock(handle: int, operation: int) -> None:
        raise OSError(errno.ENOLCK, os.strerror(errno.ENOLCK))

    monkeypatch.setattr(fcntl, "flock", flock)
    monkeypatch.setattr(sweeps, "_MANY_PARTS", 2)
    path = tmp_path / "a.h5"
    create(path, PLAN)
    for number in range(1, 6):
        write_rows(path, [row(number)])
    # Nothing that replaces a file is done without a lock.
    assert len(list_parts(path)) == 5
    for action in (consolidate, compact, lambda path: append(path, record(9))):
        with pytest.raises(ArchiveError, match="cannot lock files"):
            action(path)
    check_rows(path, set(range(1, 6)))
    assert len(list(tmp_path.iterdir())) == 2


def test_part_that_another_machine_has_removed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "a.h5"
    create(path, PLAN)
    part = write_rows(path, [row(1)])
    real_file = h5py.File

    def stale(name: Path, *args: object, **options: object) -> object:
        if name == part:
            monkeypatch.undo()
            consolidate(path)
            raise OSError(errno.ESTALE, os.strerror(errno.ESTALE))
        return real_file(name, *args, **options)

    monkeypatch.setattr(h5py, "File", stale)
    assert run_numbers(path) == (1,)


@pytest.mark.full
def test_memory_of_a_merge_is_bounded(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The peak of the child's memory grows by far less than the archive does."""
    monkeypatch.setattr(consolidation, "_IN_MEMORY", 0)
    peaks = []
    for name, parts in (("small", 1), ("large", 13)):
        path = tmp_path / f"{name}.h5"
        create(path, PLAN)
        for part in range(parts):
            values = np.random.default_rng(part).random((10, 80_000))
            rows = [
                Row(10 * part + k + 1, "R", series={"v": Series(0.0, 1.0, vector, "V")})
                for k, vector in enumerate(values)
            ]
            write_rows(path, rows)

        def work(pipe: int, path: Path = path) -> None:
            consolidate(path)
            peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss
            real_write(pipe, str(peak).encode())

        status, report = run_in_child(work)
        assert status == 0
        peaks.append(int(report) * 1024)
    # 42 MB of series against 3 MB; of each, up to 16 MB are held, once as read and once gathered.
    assert peaks[1] - peaks[0] < 45e6
