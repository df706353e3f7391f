"""What a sweep costs its parent in process time per run, and its rate against bare hosts.

Process time is that of the operating system, threads included, so that a busy machine does not
count. The runs of the first kind are stubs of fixed length; the others are ngspice's.
"""

import multiprocessing
import time
from functools import partial
from multiprocessing.synchronize import Barrier
from pathlib import Path

import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.deck import PreparedDeck
from cosim.circuit.netlist import load_deck, prepare, with_terminations
from cosim.circuit.simulator import simulate_prepared
from cosim.sweep.batches import Batch, Outcome, Task, run_each
from cosim.sweep.cluster import scheduler_engine
from cosim.sweep.engine import Engine, run_batches
from cosim.sweep.local import local_engine
from tests.sweep.dask_processes import scheduler
from tests.sweep.stubs import batches

LENGTH = 0.1  # s of a stub run on the cluster
SLOTS = 64
NETLISTS = Path(__file__).parents[2] / "netlists"


def report(name: str, engine: Engine, runs: int, length: float, size: int) -> None:
    """Print the rate and the parent's time per run, after a warm-up of one batch per slot."""
    warm = SLOTS * size
    seen = 0
    began: tuple[float, float] = (0.0, 0.0)

    def note(outcome: Outcome) -> None:
        nonlocal seen, began
        assert outcome.status == "done"
        seen += 1
        if seen == warm:
            began = time.perf_counter(), time.process_time()

    run_batches(batches([("sleep", length)] * (warm + runs), size), engine, on_result=note)
    wall, own = time.perf_counter() - began[0], time.process_time() - began[1]
    print(
        f"\n{name}, {size} runs in a batch, {1e3 * length:g} ms each: "
        f"{runs / wall:.0f} runs/s, parent {1e3 * own / runs:.3f} ms per run"
    )


@pytest.mark.parametrize("size", [1, 8])
def test_two_local_workers(size: int) -> None:
    report("two local workers", local_engine(2), 1000, 0.002, size)


@pytest.mark.parametrize("size", [1, 8])
def test_a_cluster_of_64_threads(tmp_path: Path, size: int) -> None:
    with scheduler(tmp_path, workers=1, threads=SLOTS) as file:
        report("64 threads of one Dask worker", scheduler_engine(file), 4000, LENGTH, size)


def modulator() -> tuple[PreparedDeck, TransientRequest]:
    deck = load_deck(NETLISTS / "pulse_modulator" / "pulse_modulator.cir")
    deck = with_terminations(deck, ("rf_p", "rf_n"), 50.0)
    request = TransientRequest(stop=10e-9, step=1 / 6.2e9 / 80, saves=("v(rf_p)", "v(rf_n)"))
    return prepare(deck, request), request


def simulate_shared(shared: tuple[PreparedDeck, TransientRequest], arguments: object) -> int:
    return simulate_prepared(*shared).time.size


def feed(deck: PreparedDeck, request: TransientRequest, runs: int, start: Barrier) -> None:
    """Feed one host, and wait for the other process before and after."""
    simulate_prepared(deck, request)
    start.wait()
    for _ in range(runs):
        simulate_prepared(deck, request)
    start.wait()


def by_hand(deck: PreparedDeck, request: TransientRequest, runs: int) -> float:
    """Runs per second of two hosts, each fed by a process that does nothing else."""
    context = multiprocessing.get_context("spawn")
    start = context.Barrier(3)
    words = (deck, request, runs // 2, start)
    feeders = [context.Process(target=feed, args=words) for _ in range(2)]
    for feeder in feeders:
        feeder.start()
    start.wait()
    began = time.perf_counter()
    start.wait()
    rate = runs / (time.perf_counter() - began)
    for feeder in feeders:
        feeder.join()
    return rate


def by_engine(deck: PreparedDeck, request: TransientRequest, runs: int, size: int) -> float:
    """Runs per second of two workers, from the moment both have made a batch."""
    warm = 2 * size
    times: list[float] = []

    def note(outcome: Outcome) -> None:
        assert outcome.status == "done", outcome.error
        times.append(time.perf_counter())

    tasks = [Task(number) for number in range(warm + runs)]
    work = partial(run_each, simulate_shared)
    cut = range(0, len(tasks), size)
    plan = [Batch(work, tuple(tasks[k : k + size]), (deck, request)) for k in cut]
    run_batches(plan, local_engine(2), on_result=note)
    return runs / (times[-1] - times[warm - 1])


@pytest.mark.ngspice
def test_two_workers_against_two_hosts_fed_by_hand() -> None:
    deck, request = modulator()
    ratios = []
    for _ in range(5):
        bare = by_hand(deck, request, 16)
        ratios.append(by_engine(deck, request, 16, 2) / bare)
        print(f"\nby hand {bare:.2f} runs/s, two workers {ratios[-1]:.2f} times that")
    print(f"median of the ratios {sorted(ratios)[2]:.2f}   (at least 0.9 is meant)")
