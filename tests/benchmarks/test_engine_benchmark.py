"""What a sweep costs the parent: its process time per run, with stub runs of fixed length.

The parent's time is that of the operating system, threads included, so that a busy machine does
not count. At most 1.5 ms is meant, the archive included.
"""

import time
from pathlib import Path

import pytest

from cosim.sweep.batches import Outcome
from cosim.sweep.cluster import scheduler_engine
from cosim.sweep.engine import Engine, run_batches
from cosim.sweep.local import local_engine
from tests.sweep.dask_processes import scheduler
from tests.sweep.stubs import batches

LENGTH = 0.1  # s of a stub run on the cluster
SLOTS = 64


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
