"""A whole sweep, archive included: its parent's process time per run, memory, and rate.

Process time is that of the operating system, threads included, so that a busy machine does not
count. Rates are ratios within one run.
"""

import multiprocessing
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import psutil
import pytest

import cosim.sweep.run
from cosim import archive
from cosim.archive import read_table
from cosim.capture import make_plan
from cosim.circuit.preparation import prepare
from cosim.circuit.simulator import simulate_prepared
from cosim.sweep.cluster import scheduler_engine
from cosim.sweep.local import local_engine
from cosim.sweep.run import SweepState, run_sweep
from cosim.testbench import Testbench, load_testbench
from tests.sweep.dask_processes import scheduler
from tests.sweep.stub_sweep import LENGTH, stub_batch

EXAMPLES = Path(__file__).parents[2] / "examples"
SLOTS = 64
RUNS = 24_000
WARM = 1_000


def bench_of(runs: int) -> Testbench:
    """The modulator with a grid of as many points, each with a waveform of its own."""
    bench = load_testbench(EXAMPLES / "x90_spin.toml")
    axis = {"key": "netlist.parameters.vdd", "start": "1.0 V", "stop": "1.2 V", "count": runs}
    return replace(
        bench,
        accuracy=replace(bench.accuracy, floor=False),
        studies={"sweep": {"grid": [axis], "keep": 0}},
    )


def test_one_parent_feeds_64_slots(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Stub runs of 100 ms: wanted are 1.5 ms of the parent's time per run, 5 MB of growth."""
    monkeypatch.setattr(cosim.sweep.run, "run_batch", stub_batch)
    process = psutil.Process()
    marks: list[tuple[int, float, float, int]] = []

    def note(state: SweepState) -> None:
        # The last rows are written together with the merge of the archive, in a child.
        if state.missing and (not marks or state.made - marks[-1][0] >= WARM):
            memory = process.memory_info().rss
            marks.append((state.made, time.perf_counter(), time.process_time(), memory))

    with scheduler(tmp_path, workers=1, threads=SLOTS) as file:
        engine = scheduler_engine(file)
        state = run_sweep(bench_of(RUNS), tmp_path / "s.h5", engine=engine, on_progress=note)
    assert state.finished == RUNS
    (runs, began, own, _), (end_runs, end, end_own, _) = marks[1], marks[-1]
    made = end_runs - runs
    used = [memory / 2**20 for *_, memory in marks]
    print(
        f"\n{made} stub runs of {1e3 * LENGTH:g} ms on {SLOTS} slots: {made / (end - began):.0f} "
        f"runs/s, parent {1e3 * (end_own - own) / made:.3f} ms per run; memory "
        f"after {runs} runs {used[1]:.1f} MiB, {max(used[1:]) - used[1]:+.1f} at most until run "
        f"{end_runs}, {used[-1] - used[len(used) // 2]:+.1f} over the second half"
    )
    print("MiB at every mark:", " ".join(f"{number:.0f}" for number in used))
    began = time.perf_counter()
    assert len(read_table(tmp_path / "s.h5")["id"]) == RUNS
    print(f"table of {RUNS} runs read in {time.perf_counter() - began:.2f} s")


def feed(bench: Testbench, runs: int, start: "multiprocessing.synchronize.Barrier") -> None:
    """Feed one host by hand, and wait for the other process before and after."""
    plan = make_plan(bench)
    prepared = prepare(plan.deck, plan.request)
    simulate_prepared(prepared, plan.request)
    start.wait()
    for _ in range(runs):
        simulate_prepared(prepared, plan.request)
    start.wait()


def by_hand(bench: Testbench, runs: int) -> float:
    """Runs per second of two bare hosts: ngspice on the same deck and nothing else."""
    context = multiprocessing.get_context("spawn")
    start = context.Barrier(3)
    feeders = [context.Process(target=feed, args=(bench, runs // 2, start)) for _ in range(2)]
    for feeder in feeders:
        feeder.start()
    start.wait()
    began = time.perf_counter()
    start.wait()
    rate = runs / (time.perf_counter() - began)
    for feeder in feeders:
        feeder.join()
    return rate


@pytest.mark.ngspice
def test_two_workers_against_two_hosts(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The modulator over its supply: wanted are 0.9 of the rate, 3 % of the time for writing."""
    bench = load_testbench(EXAMPLES / "x90_spin.toml")
    bench = replace(bench, accuracy=replace(bench.accuracy, floor=False))
    writing = 0.0

    def timed(write: Callable[..., Path]) -> Callable[..., Path]:
        def wrapped(path: Path, rows: list[archive.Row]) -> Path:
            nonlocal writing
            began = time.perf_counter()
            part = write(path, rows)
            writing += time.perf_counter() - began
            return part

        return wrapped

    monkeypatch.setattr(archive, "write_rows", timed(archive.write_rows))
    ratios = []
    for turn in range(3):
        bare = by_hand(bench, 16)
        marks: list[tuple[int, float]] = []

        def note(state: SweepState, marks: list[tuple[int, float]] = marks) -> None:
            if not marks or state.made > marks[-1][0]:
                marks.append((state.made, time.perf_counter()))

        axis = {"key": "netlist.parameters.vdd", "start": "1.05 V", "stop": "1.15 V", "count": 32}
        swept = replace(bench, studies={"sweep": {"grid": [axis], "keep": 0}})
        writing = 0.0
        began = time.perf_counter()
        path = tmp_path / f"{turn}.h5"
        monkeypatch.setattr(cosim.sweep.run, "FLUSH_INTERVAL", 0.0)
        monkeypatch.setattr(cosim.sweep.run, "LARGEST_BATCH", 2)
        run_sweep(swept, path, engine=local_engine(2), on_progress=note)
        whole = time.perf_counter() - began
        # From the first runs of both workers on, which hold the start and the compilation.
        (first, start), (last, end) = marks[2], marks[-1]
        rate = (last - first) / (end - start)
        ratios.append(rate / bare)
        print(
            f"\ntwo hosts fed by hand {bare:.3f} runs/s, sweep on two workers {rate:.3f}: "
            f"{rate / bare:.2f}; archive writing {100 * writing / whole:.2f} % of the sweep"
        )
    print(f"median ratio {sorted(ratios)[1]:.2f}")
