"""Oracle: the fault that each test causes, and a sweep of the same plan that nothing disturbs."""

import os
import resource
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import BrokenExecutor, Executor, Future
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import psutil
import pytest

from cosim import archive
from cosim.circuit.client import client_of_this_process
from cosim.errors import ArchiveError
from cosim.sweep import run as run_module
from cosim.sweep.engine import Engine
from cosim.sweep.local import local_engine
from cosim.sweep.record import SWEEP_KINDS
from cosim.sweep.run import SweepState, run_sweep
from tests.sweep.benches import DECK, FAILING, HERE, LEVELS, differing, rows, write_bench

pytestmark = pytest.mark.ngspice

ROOT = Path(__file__).parents[2]
PATIENCE = 60.0  # s to wait for an event of the system before the test fails
# The command, which publishes every two runs so that a short sweep has parts.
COMMAND = """from cosim import cli
from cosim.sweep import run
if __name__ == "__main__":
    run.FLUSH_ROWS = 2
    cli.main()
"""
MANY = LEVELS.replace("count = 6", "count = 16")


def wait_for(event: Callable[[], object]) -> None:
    end = time.monotonic() + PATIENCE
    while not event():
        assert time.monotonic() < end
        time.sleep(0.01)


def test_each_kind_of_failure_is_a_row(tmp_path: Path) -> None:
    deck = DECK.replace(".tran", ".lib parts.lib good\n.tran")
    sweep = """[sweep]
keep = 0
[sweep.corners.good]
[sweep.corners.refused]
sections = { "parts.lib" = "refused" }
[sweep.corners.slow]
"netlist.stop" = "40 us"
"netlist.time_limit" = "0.5 s"
[sweep.corners.window]
"gate.window" = ["1 ns", "99 ns"]
[sweep.corners.last]
temperature = "290 K"
"""
    toml, path = write_bench(tmp_path, sweep, deck=deck), tmp_path / "a.h5"
    (tmp_path / "parts.lib").write_text(
        ".lib good\n.param u=1\n.endl\n.lib refused\nv9 q 0 dc 0 external\nr9 q 0 1\n.endl\n"
    )
    state = run_sweep(toml, path, engine=HERE)
    assert (state.finished, state.failed) == (2, {"input error": 2, "timeout": 1})
    found = rows(path)
    statuses = ["done", "input error", "timeout", "input error", "done"]
    assert [row["status"] for row in found] == statuses
    words = ["", "'external'", "within 0.5 s", "99 ns does not lie within", ""]
    for row, word in zip(found, words, strict=True):
        assert word in row["error"]
    assert archive.record_numbers(path) == (2, 3, 4)
    # Its time limit has passed.
    assert archive.read_table(path)["wall_time"][2] >= 0.5
    late = archive.read(path, SWEEP_KINDS, 3)
    assert 'time_limit = "0.5 s"' in late.testbench
    assert "b1 in 0 v=" in late.deck_sent


def test_a_simulator_that_is_killed_is_a_crash_of_its_run(tmp_path: Path) -> None:
    sweep = """[sweep]
[sweep.corners.good]
[sweep.corners.killed]
"netlist.stop" = "40 us"
[sweep.corners.last]
temperature = "290 K"
"""
    client_of_this_process().start()
    host = next(
        child for child in psutil.Process().children() if "host" in " ".join(child.cmdline())
    )
    stop = threading.Event()

    def kill_what_lasts() -> None:
        # A good run takes less than a tenth of this.
        while not stop.wait(0.05):
            for child in host.children():
                if time.time() - child.create_time() > 2.0:
                    child.kill()

    killer = threading.Thread(target=kill_what_lasts)
    killer.start()
    try:
        state = run_sweep(write_bench(tmp_path, sweep), tmp_path / "a.h5", engine=HERE)
    finally:
        stop.set()
        killer.join()
    assert [row["status"] for row in rows(tmp_path / "a.h5")] == ["done", "crash", "done"]
    assert state.failed == {"crash": 1}


class Fragile(Executor):
    """Does batches at once; one with the culprit breaks it."""

    def __init__(self, culprit: int, broken: list[int]) -> None:
        self.culprit = culprit
        self.broken = broken

    def submit(self, work: Any, batch: Any, /, *_: Any, **__: Any) -> "Future[Any]":
        future: Future[Any] = Future()
        if self.culprit in [task.number for task in batch.tasks]:
            self.broken.append(len(batch.tasks))
            future.set_exception(BrokenExecutor("a worker died"))
        else:
            future.set_result(work(batch))
        return future


@pytest.mark.full
def test_a_run_that_ends_its_worker_is_tried_once_more_and_named(tmp_path: Path) -> None:
    broken: list[int] = []
    engine = Engine(open=lambda: Fragile(3, broken), slots=lambda: 1)
    path = tmp_path / "a.h5"
    state = run_sweep(write_bench(tmp_path, LEVELS), path, engine=engine)
    # In its batch of two, alone, and once more.
    assert broken == [2, 1, 1]
    assert (state.finished, state.failed, state.missing) == (5, {"worker_died": 1}, 0)
    assert [row["status"] for row in rows(path)].index("worker_died") == 2
    record = archive.read(path, SWEEP_KINDS, 3)
    assert record.status == "worker_died"
    assert "died during this run and no other" in record.error
    again = run_sweep(tmp_path / "bench.toml", path, engine=HERE, resume=True, retry_failed=True)
    assert (again.made, again.finished, again.failed) == (1, 6, {})


@pytest.mark.full
def test_a_worker_that_is_killed_once_costs_no_run(tmp_path: Path) -> None:
    victims: list[int] = []

    def kill(state: SweepState) -> None:
        # The first call comes before any worker has started.
        if state.elapsed > 0.0 and not victims:
            for child in psutil.Process().children():
                if "spawn_main" in " ".join(child.cmdline()):
                    victims.append(child.pid)
                    child.kill()
                    return

    path = tmp_path / "a.h5"
    state = run_sweep(write_bench(tmp_path, MANY), path, engine=local_engine(2), on_progress=kill)
    assert len(victims) == 1
    assert (state.finished, state.failed) == (16, {})


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory: pytest.TempPathFactory) -> list[dict[str, Any]]:
    folder = tmp_path_factory.mktemp("undisturbed")
    run_sweep(write_bench(folder, MANY), folder / "a.h5", engine=HERE)
    return rows(folder / "a.h5")


@contextmanager
def begun(folder: Path) -> Iterator[tuple["subprocess.Popen[bytes]", list[psutil.Process]]]:
    """Start the command and wait for its first part; gives its process and those below it."""
    write_bench(folder, MANY)
    (folder / "command.py").write_text(COMMAND)
    words = ["command.py", "sweep", "bench.toml", "--archive", "a.h5", "--workers", "2"]
    with (folder / "out").open("wb") as out:
        process = subprocess.Popen(
            [sys.executable, *words],
            cwd=folder,
            stdout=out,
            stderr=subprocess.STDOUT,
            env=os.environ | {"PYTHONPATH": str(ROOT)},
        )
    try:
        wait_for(lambda: process.poll() is not None or list((folder / "a.h5.parts").glob("*.h5")))
        assert process.poll() is None, (folder / "out").read_text()
        yield process, psutil.Process(process.pid).children(recursive=True)
    finally:
        process.kill()
        process.wait(PATIENCE)


def check_and_resume(folder: Path, expected: list[dict[str, Any]]) -> None:
    path = folder / "a.h5"
    reported = rows(path)
    # It was interrupted indeed, and not before its first part.
    assert 2 <= len(reported) < 16
    assert differing(reported, [expected[row["id"] - 1] for row in reported]) == []
    assert archive.verify(path).damaged == ()
    state = run_sweep(folder / "bench.toml", path, engine=HERE, resume=True)
    assert (state.made, state.finished) == (16 - len(reported), 16)
    assert differing(rows(path), expected) == []
    worst = sorted(expected, key=lambda row: row["free_frame.average_gate_fidelity"])[:2]
    assert sorted(archive.record_numbers(path)) == sorted(row["id"] for row in worst)


@pytest.mark.full
@pytest.mark.parametrize(
    ("signals", "code"),
    [
        ([signal.SIGINT], 130),
        ([signal.SIGINT, signal.SIGINT], 130),
        ([signal.SIGTERM], -signal.SIGTERM),
        ([signal.SIGKILL], -signal.SIGKILL),
    ],
    ids=["Ctrl-C", "Ctrl-C twice", "SIGTERM", "SIGKILL"],
)
def test_a_sweep_that_is_ended_leaves_its_runs_and_no_process(
    tmp_path: Path, undisturbed: list[dict[str, Any]], signals: list[signal.Signals], code: int
) -> None:
    with begun(tmp_path) as (process, below):
        for number in signals:
            process.send_signal(number)
            time.sleep(0.05)
        assert process.wait(PATIENCE) == code, (tmp_path / "out").read_text()
        assert len(below) >= 4  # Two workers and the host of each.
        wait_for(lambda: not any(child.is_running() for child in below))
    text = (tmp_path / "out").read_text()
    assert "Traceback" not in text
    assert ("--resume goes on with it" in text) == (code == 130)
    check_and_resume(tmp_path, undisturbed)


@pytest.mark.full
def test_a_full_disk_stops_the_sweep_with_a_message(
    tmp_path: Path, undisturbed: list[dict[str, Any]]
) -> None:
    with begun(tmp_path) as (process, below):
        # From now on the system refuses a file of more than a kilobyte.
        resource.prlimit(process.pid, resource.RLIMIT_FSIZE, (1024, 1024))
        assert process.wait(PATIENCE) == 2, (tmp_path / "out").read_text()
        wait_for(lambda: not any(child.is_running() for child in below))
    text = (tmp_path / "out").read_text()
    assert "no space is left" in text
    assert "Traceback" not in text
    check_and_resume(tmp_path, undisturbed)


def test_parts_that_cannot_be_merged_are_a_notice(tmp_path: Path) -> None:
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)

    def fill_up(state: SweepState) -> None:
        if state.missing == 0:
            resource.setrlimit(resource.RLIMIT_FSIZE, (1024, hard))

    path = tmp_path / "a.h5"
    toml = write_bench(tmp_path, FAILING)
    try:
        state = run_sweep(toml, path, engine=HERE, on_progress=fill_up)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert "not merged" in state.notice
    assert len(rows(path)) == 4
    assert run_sweep(toml, path, engine=HERE, resume=True).notice == ""
    assert not (tmp_path / "a.h5.parts").exists()
    assert len(archive.record_numbers(path)) == 2


def test_an_error_of_the_archive_ends_the_sweep_at_once(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(run_module, "FLUSH_ROWS", 1)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)

    def fill_up(state: SweepState) -> None:
        if state.made:
            resource.setrlimit(resource.RLIMIT_FSIZE, (1024, hard))

    path = tmp_path / "a.h5"
    try:
        with pytest.raises(ArchiveError, match="no space is left"):
            run_sweep(write_bench(tmp_path, LEVELS), path, engine=HERE, on_progress=fill_up)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    # Those of the first batch are there; what came in after the disk was full was not reported.
    assert [row["id"] for row in rows(path)] == [1, 2]
