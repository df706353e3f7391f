"""Oracle: the orders that the stub runs were given, and the same plan on a pool of this computer.

The scheduler and its two workers are real, each in a process of its own, over TCP.
"""

import os
import signal
import stat
import subprocess
import sys
import textwrap
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import replace
from functools import partial
from pathlib import Path

import psutil
import pytest

from cosim.errors import InputError, MissingDependencyError, SimulationError
from cosim.sweep.batches import Outcome
from cosim.sweep.cluster import SYSTEMS, JobRequest, job_script, queue_engine, scheduler_engine
from cosim.sweep.engine import run_batches
from cosim.sweep.local import local_engine
from tests.sweep.dask_processes import ROOT, scheduler
from tests.sweep.stubs import batches, sweep

PATIENCE = 60.0  # s to wait for an event of the system before the test fails
REQUEST = JobRequest(
    cores=1,
    memory="1GB",
    time_limit="00:10:00",
    queue="short",
    account="chips",
    directives=("--exclusive",),
    prologue=("export MARK=1",),
    interface="lo",
)


@pytest.fixture(scope="module")
def address(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    with scheduler(tmp_path_factory.mktemp("dask"), workers=2) as file:
        yield file


def rows(outcomes: dict[int, Outcome]) -> list[tuple[int, str, object, tuple[str, ...]]]:
    return [(n, o.status, o.result, o.log) for n, o in sorted(outcomes.items())]


@pytest.mark.full
def test_the_same_plan_gives_the_same_rows_on_every_engine(address: str) -> None:
    orders: list[object] = [("square", 0.1 * k) for k in range(30)]
    orders[4] = ("no convergence", None)
    orders[7] = ("divide", 0)
    alone = rows(sweep(batches(orders, 1), local_engine(1)))
    pair = rows(sweep(batches(orders, 4), local_engine(2)))
    cluster = rows(sweep(batches(orders, 4), scheduler_engine(address)))
    assert [row[1] for row in alone].count("done") == 28
    assert pair == alone
    assert cluster == alone


@pytest.mark.full
def test_the_run_that_ends_its_worker_is_named_and_no_other(address: str) -> None:
    orders: list[object] = [("square", k) for k in range(1, 13)]
    orders[4] = ("kill", None)
    outcomes = sweep(batches(orders, 2), scheduler_engine(address))
    assert outcomes.pop(5).status == "worker_died"
    assert {number: outcome.result for number, outcome in outcomes.items()} == {
        k: k * k for k in range(1, 13) if k != 5
    }


@pytest.mark.full
def test_what_does_not_pickle_is_a_fault_of_its_run_alone(address: str) -> None:
    orders: list[object] = [("square", 2), ("square", threading.Lock()), ("square", 3)]
    outcomes = sweep(batches(orders, 3), scheduler_engine(address))
    assert [outcomes[n].status for n in (1, 2, 3)] == ["done", "fault", "done"]
    assert "pickle" in outcomes[2].error


@pytest.mark.full
def test_decks_that_were_sent_are_not_kept(address: str) -> None:
    me = psutil.Process()
    sizes: dict[int, int] = {}

    def note(outcome: Outcome) -> None:
        assert outcome.status == "done"
        if outcome.number in (101, 501):
            sizes[outcome.number] = me.memory_info().rss

    plan = batches([("square", k) for k in range(510)])
    decks = (replace(batch, shared=os.urandom(100_000)) for batch in plan)
    run_batches(decks, scheduler_engine(address), on_result=note)
    # The 400 decks between are 40 MB; a tenth is for what the allocator keeps.
    assert sizes[501] - sizes[101] < 4e6


@pytest.mark.full
def test_workers_have_one_thread_for_linear_algebra(address: str) -> None:
    names = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
    outcomes = sweep(batches([("where", names)]), scheduler_engine(address))
    assert outcomes[1].result[1] == dict.fromkeys(names, "1")


@pytest.mark.full
@pytest.mark.ngspice
def test_workers_under_a_nanny_run_ngspice(address: str) -> None:
    orders = [("divider", volts) for volts in (2.0, 3.0, 4.0, 5.0)]
    outcomes = sweep(batches(orders), scheduler_engine(address))
    # The divider is resistive: nothing but rounding lies between the result and the half.
    assert [outcomes[n].result for n in (1, 2, 3, 4)] == pytest.approx([1.0, 1.5, 2.0, 2.5], 1e-9)


@pytest.mark.full
def test_an_error_of_the_caller_leaves_the_cluster_fit_for_use(address: str) -> None:
    def refuse(outcome: Outcome) -> None:
        raise OSError(28, "No space left on device")

    engine = scheduler_engine(address)
    with pytest.raises(OSError, match="No space left"):
        run_batches(batches([("square", k) for k in range(9)]), engine, on_result=refuse)
    assert sweep(batches([("square", 3)]), engine)[1].result == 9


SCRIPT = """
    from cosim.sweep.cluster import scheduler_engine
    from cosim.sweep.engine import run_batches
    from tests.sweep.stubs import batches

    def note(outcome):
        print(outcome.number, outcome.status, flush=True)

    try:
        run_batches(batches({orders}), scheduler_engine({address!r}), on_result=note)
    except KeyboardInterrupt:
        print("interrupted", flush=True)
        raise SystemExit(130)
"""


@pytest.mark.full
def test_ctrl_c_cancels_what_has_not_begun(address: str, tmp_path: Path) -> None:
    trace = tmp_path / "trace"
    orders = f'[("square", 1)] + [("mark", {str(trace)!r})] * 3'
    file = tmp_path / "job.py"
    file.write_text(textwrap.dedent(SCRIPT.format(orders=orders, address=address)))
    process = subprocess.Popen(
        [sys.executable, str(file)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=os.environ | {"PYTHONPATH": str(ROOT)},
    )
    assert process.stdout is not None
    assert process.stdout.readline() == "1 done\n"
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=PATIENCE)
    assert process.returncode == 130, err
    assert out == "interrupted\n"
    # Runs that were sent earlier come first: when these are done, nothing else is waiting. Two
    # workers can have begun two of the three.
    sweep(batches([("square", 1)] * 4), scheduler_engine(address))
    assert not trace.exists() or trace.stat().st_size <= 2


@pytest.mark.full
def test_a_scheduler_that_ends_is_told_and_what_came_is_kept(tmp_path: Path) -> None:
    seen: list[int] = []
    with scheduler(tmp_path, workers=1) as file:
        engine = scheduler_engine(file)

        def note(outcome: Outcome) -> None:
            seen.append(outcome.number)
            (process,) = (
                child
                for child in psutil.Process().children()
                if {"distributed.cli.dask_scheduler", file} <= set(child.cmdline())
            )
            process.kill()

        with pytest.raises(SimulationError, match=r"connection to it was lost|takes no more runs"):
            run_batches(batches([("square", 1), ("sleep", 5.0)]), engine, on_result=note)
    assert seen == [1]


def test_an_address_where_nothing_answers(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("cosim.sweep.cluster.CONNECT_LIMIT", 0.5)
    engine = scheduler_engine("tcp://127.0.0.1:9")
    with pytest.raises(SimulationError, match=r"scheduler tcp://127.0.0.1:9 does not answer"):
        sweep(batches([("square", 1)]), engine)


@pytest.mark.parametrize(
    ("module", "make"),
    [
        ("distributed", partial(scheduler_engine, "tcp://127.0.0.1:9")),
        ("dask_jobqueue", partial(queue_engine, "slurm", REQUEST, 1)),
        ("dask_jobqueue", partial(job_script, "slurm", REQUEST)),
    ],
)
def test_a_missing_extra_names_itself(
    monkeypatch: pytest.MonkeyPatch, module: str, make: Callable[[], object]
) -> None:
    monkeypatch.setitem(sys.modules, module, None)
    with pytest.raises(MissingDependencyError, match=rf'needs {module}[^"]*"qcosim\[cluster\]"'):
        make()


# Options of each batch system's submit command, from their manual pages (recalled from memory).
HEADERS = {
    "slurm": {"#SBATCH -p short", "#SBATCH -A chips", "#SBATCH -t 00:10:00", "#SBATCH --exclusive"},
    "pbs": {"#PBS -q short", "#PBS -A chips", "#PBS -l walltime=00:10:00", "#PBS --exclusive"},
    "lsf": {"#BSUB -q short", '#BSUB -P "chips"', "#BSUB -W 00:10:00", "#BSUB --exclusive"},
}


@pytest.mark.parametrize("system", list(SYSTEMS))
def test_the_script_of_a_job_can_be_read_first(system: str) -> None:
    script = job_script(system, replace(REQUEST, cores=4))
    assert HEADERS[system] <= set(script.splitlines())
    assert "\nexport MARK=1\n" in script
    assert "--nthreads 1 " in script
    assert "--nworkers 4 " in script


@pytest.mark.full
def test_what_a_queue_cannot_be_asked() -> None:
    with pytest.raises(InputError, match=r"no batch system 'slurn'\n  did you mean 'slurm'"):
        queue_engine("slurn", REQUEST, jobs=1)
    with pytest.raises(InputError, match="at least 1 job, got 0"):
        queue_engine("slurm", REQUEST, jobs=0)
    with pytest.raises(InputError, match="at least 1 core, got 0"):
        JobRequest(cores=0, memory="1GB")


SBATCH = """#!/bin/sh
# A stand-in for the batch system: a job is a process group of its own, and runs at once.
cp "$1" "{folder}/script.$$"
setsid sh "{folder}/script.$$" >"{folder}/log.$$" 2>&1 &
echo "$!" >>"{folder}/submitted"
echo "Submitted batch job $!"
"""
SCANCEL = """#!/bin/sh
echo "$1" >>"{folder}/cancelled"
kill -TERM -- "-$1"
"""


def runs(process: int) -> bool:
    """Whether a process goes on; one that nobody has asked for its end yet does not."""
    try:
        return psutil.Process(process).status() != psutil.STATUS_ZOMBIE
    except psutil.NoSuchProcess:
        return False


@pytest.mark.full
def test_a_sweep_through_a_queue(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    for name, text in (("sbatch", SBATCH), ("scancel", SCANCEL)):
        tool = tmp_path / name
        tool.write_text(text.format(folder=tmp_path))
        tool.chmod(tool.stat().st_mode | stat.S_IXUSR)
    monkeypatch.setenv("PATH", f"{tmp_path}{os.pathsep}{os.environ['PATH']}")
    monkeypatch.setenv("PYTHONPATH", str(ROOT))
    monkeypatch.chdir(tmp_path)
    orders = [*[("square", k) for k in range(10)], ("where", ("MARK",))]
    outcomes = sweep(batches(orders, 2), queue_engine("slurm", REQUEST, jobs=2))
    assert [outcomes[n].result for n in range(1, 11)] == [k * k for k in range(10)]
    assert outcomes[11].result[1] == {"MARK": "1"}
    submitted = (tmp_path / "submitted").read_text().split()
    assert len(submitted) == 2
    assert sorted((tmp_path / "cancelled").read_text().split()) == sorted(submitted)
    end = time.monotonic() + PATIENCE
    while any(runs(int(job)) for job in submitted):
        assert time.monotonic() < end, "a job goes on after the sweep"
        time.sleep(0.05)
