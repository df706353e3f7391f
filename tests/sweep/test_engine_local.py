"""Oracle: the orders that the stub runs were given, and the system's list of processes."""

import os
import signal
import subprocess
import sys
import textwrap
import time
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, ThreadPoolExecutor
from contextlib import AbstractContextManager
from pathlib import Path

import psutil
import pytest

from cosim.errors import InputError, SimulationError
from cosim.sweep.batches import Batch, Outcome
from cosim.sweep.engine import PER_SLOT, Engine, run_batches
from cosim.sweep.local import THREAD_VARIABLES, local_engine
from tests.sweep.stubs import batches, sweep

ROOT = Path(__file__).parents[2]
PATIENCE = 60.0  # s to wait for an event of the system before the test fails


def statuses(outcomes: dict[int, Outcome]) -> list[str]:
    return [outcomes[number].status for number in sorted(outcomes)]


def test_failures_are_rows_and_the_sweep_goes_on() -> None:
    orders = [("square", 3), ("no convergence", None), ("divide", 0), ("timeout", None)]
    outcomes = sweep(batches([*orders, ("square", 4)], 2), local_engine(2))
    assert statuses(outcomes) == ["done", "no convergence", "fault", "timeout", "done"]
    assert outcomes[2].log == ("stderr x",)
    assert (outcomes[1].result, outcomes[5].result) == (9, 16)


@pytest.mark.full
@pytest.mark.parametrize("word", ["kill", "leave"])
def test_the_run_that_ends_its_worker_is_named_and_no_other(word: str) -> None:
    orders: list[object] = [("square", k) for k in range(1, 13)]
    orders[4] = (word, None)
    outcomes = sweep(batches(orders, 2), local_engine(2))
    assert outcomes.pop(5).status == "worker_died"
    assert {number: outcome.result for number, outcome in outcomes.items()} == {
        k: k * k for k in range(1, 13) if k != 5
    }


def test_a_run_is_retried_before_it_is_blamed(tmp_path: Path) -> None:
    # Ends its worker once in its batch; alone it is well.
    orders = [("square", 1), ("kill once", str(tmp_path / "trace")), ("square", 3)]
    assert statuses(sweep(batches(orders, 3), local_engine(2))) == ["done"] * 3
    assert (tmp_path / "trace").read_text() == "xx"


@pytest.mark.full
def test_two_culprits_are_both_named() -> None:
    orders = [("kill", None), ("square", 2), ("square", 3), ("leave", None)]
    expected = ["worker_died", "done", "done", "worker_died"]
    assert statuses(sweep(batches(orders, 4), local_engine(2))) == expected


def test_what_does_not_pickle_is_a_fault_of_its_run_alone() -> None:
    orders = [("square", 2), ("unpicklable", None), ("square", 3), ("square", lambda: None)]
    outcomes = sweep(batches(orders, 2), local_engine(1))
    assert statuses(outcomes) == ["done", "fault", "done", "fault"]
    assert "pickle" in outcomes[2].error
    assert "pickle" in outcomes[4].error


@pytest.mark.full
def test_the_number_of_workers_changes_no_number() -> None:
    orders: list[object] = [("square", 0.1 * k) for k in range(20)]
    orders[7] = ("divide", 0)
    runs = [sweep(batches(orders, size), local_engine(n)) for n, size in ((1, 1), (2, 3), (2, 7))]
    first, *others = [
        [(number, run[number].status, run[number].result) for number in sorted(run)] for run in runs
    ]
    assert all(other == first for other in others)


def test_workers_have_one_thread_and_the_parent_keeps_its_own() -> None:
    before = {name: os.environ.get(name) for name in THREAD_VARIABLES}
    outcomes = sweep(batches([("where", THREAD_VARIABLES)]), local_engine(1))
    process, variables = outcomes[1].result
    assert process != os.getpid()
    assert variables == dict.fromkeys(THREAD_VARIABLES, "1")
    assert {name: os.environ.get(name) for name in THREAD_VARIABLES} == before


@pytest.mark.full
def test_no_more_batches_are_taken_than_there_is_room_for() -> None:
    taken: list[int] = []
    reported: list[int] = []
    ahead: list[int] = []

    def plan() -> Iterator[Batch]:
        for batch in batches([("square", k) for k in range(40)]):
            taken.append(batch.tasks[0].number)
            ahead.append(len(taken) - len(reported))
            yield batch

    def note(outcome: Outcome) -> None:
        reported.append(outcome.number)

    run_batches(plan(), local_engine(2), on_result=note)
    assert len(reported) == 40
    assert max(ahead) == 2 * PER_SLOT


def test_any_executor_will_do() -> None:
    engine = Engine(open=lambda: ThreadPoolExecutor(2), slots=lambda: 2)
    outcomes = sweep(batches([("square", 2), ("timeout", None), ("square", 3)]), engine)
    assert statuses(outcomes) == ["done", "timeout", "done"]


def test_an_error_of_the_caller_ends_the_sweep_and_its_workers() -> None:
    def refuse(outcome: Outcome) -> None:
        raise OSError(28, "No space left on device")

    with pytest.raises(OSError, match="No space left"):
        run_batches(
            batches([("square", 1), ("sleep", 1000.0), ("sleep", 1000.0)]),
            local_engine(2),
            on_result=refuse,
        )
    assert not worker_processes(os.getpid())


def test_an_executor_that_drops_runs_says_so() -> None:
    class Dropping(ThreadPoolExecutor):
        def submit(self, function, batch):  # type: ignore[no-untyped-def, override]
            future = super().submit(time.sleep, 0.0)
            future.result()
            dropped = type(future)()
            dropped.cancel()
            dropped.set_running_or_notify_cancel()
            return dropped

    def open_it() -> AbstractContextManager[Executor]:
        return Dropping(1)

    with pytest.raises(SimulationError, match="from run 1 on: it was closed"):
        sweep(batches([("square", 1)]), Engine(open=open_it, slots=lambda: 1))


def test_no_workers_is_refused() -> None:
    with pytest.raises(InputError, match="at least 1 worker, got 0"):
        local_engine(0)


@pytest.mark.ngspice
def test_workers_of_the_pool_run_ngspice() -> None:
    outcomes = sweep(batches([("divider", v) for v in (2.0, 3.0, 4.0, 5.0)], 2), local_engine(2))
    # The divider is resistive: nothing but rounding lies between the result and the half.
    assert [outcomes[n].result for n in (1, 2, 3, 4)] == pytest.approx([1.0, 1.5, 2.0, 2.5], 1e-9)


def command(process: psutil.Process) -> str:
    try:
        return " ".join(process.cmdline())
    except psutil.Error:
        return ""  # It has just ended.


def worker_processes(parent: int) -> list[psutil.Process]:
    children = psutil.Process(parent).children(recursive=True)
    return [child for child in children if "spawn_main" in command(child)]


def wait_until(condition: Callable[[], bool]) -> bool:
    end = time.monotonic() + PATIENCE
    while not condition():
        if time.monotonic() > end:
            return False
        time.sleep(0.02)
    return True


SCRIPT = """
    import signal
    from cosim.sweep.engine import run_batches
    from cosim.sweep.local import local_engine
    from tests.sweep.stubs import batches, sweep

    def note(outcome):
        print(outcome.number, outcome.status, flush=True)

    def main():
        orders = {orders}
        try:
            run_batches(batches(orders), local_engine(2), on_result=note)
        except KeyboardInterrupt:
            print("interrupted", flush=True)
            raise SystemExit(130)

    {last}
"""
GUARDED = 'if __name__ == "__main__": main()'


def start(tmp_path: Path, orders: str, last: str = GUARDED) -> "subprocess.Popen[str]":
    file = tmp_path / "job.py"
    file.write_text(textwrap.dedent(SCRIPT.format(orders=orders, last=last)), encoding="utf-8")
    return subprocess.Popen(
        [sys.executable, str(file)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=os.environ | {"PYTHONPATH": str(ROOT), "TMPDIR": str(tmp_path)},
        start_new_session=True,
    )


def gone(processes: list[psutil.Process]) -> bool:
    return not any(p.is_running() and p.status() != psutil.STATUS_ZOMBIE for p in processes)


def first_line(process: "subprocess.Popen[str]") -> str:
    assert process.stdout is not None
    return process.stdout.readline().strip()


@pytest.mark.full
@pytest.mark.ngspice
def test_ctrl_c_leaves_no_child_and_loses_no_report(tmp_path: Path) -> None:
    orders = '[("divider", 2.0), ("sleep", 1000.0), ("divider", 3.0), ("sleep", 1000.0)]'
    process = start(tmp_path, orders)
    lines = [first_line(process), first_line(process)]
    children = psutil.Process(process.pid).children(recursive=True)
    assert len(worker_processes(process.pid)) == 2
    assert any("host.py" in command(child) for child in children)
    # As a terminal does: to the whole group, workers included.
    os.killpg(process.pid, signal.SIGINT)
    out, err = process.communicate(timeout=PATIENCE)
    assert process.returncode == 130, err
    assert [*lines, *out.split("\n")] == ["1 done", "3 done", "interrupted", ""]
    assert err == ""
    assert wait_until(lambda: gone(children))
    assert wait_until(lambda: not list(tmp_path.glob("qcosim-*")))


@pytest.mark.full
def test_workers_do_not_outlive_a_parent_that_is_killed(tmp_path: Path) -> None:
    process = start(tmp_path, '[("square", 1), ("sleep", 1000.0), ("sleep", 1000.0)]')
    assert first_line(process) == "1 done"
    assert wait_until(lambda: len(worker_processes(process.pid)) == 2)
    children = worker_processes(process.pid)
    process.kill()
    process.communicate()
    assert wait_until(lambda: gone(children))


def test_an_unguarded_script_is_told_what_to_do(tmp_path: Path) -> None:
    process = start(tmp_path, '[("square", 1)]', last="main()")
    out, err = process.communicate(timeout=PATIENCE)
    assert process.returncode == 1
    assert "done" not in out
    assert "worker_died" not in out
    assert 'below the line `if __name__ == "__main__":`' in err


@pytest.mark.full
def test_the_parents_memory_stays_flat() -> None:
    me = psutil.Process()
    sizes: dict[int, int] = {}

    def note(outcome: Outcome) -> None:
        assert outcome.status == "done"
        if outcome.number in (1001, 5001):
            sizes[outcome.number] = me.memory_info().rss

    plan = (batch for batch in batches((("square", k) for k in range(6000)), 4))
    run_batches(plan, local_engine(2), on_result=note)
    # The goal of the design for 20,000 runs after a warm-up of 1000; the plan itself stands whole.
    assert sizes[5001] - sizes[1001] < 5e6
