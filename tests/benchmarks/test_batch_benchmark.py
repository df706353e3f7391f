"""Oracle: QuTiP's piecewise propagator on the same samples, in a loop over some of them.

Run by name with -s; the baseline's loop is short and scaled up to the batch by its length.
"""

import os
import time
from collections.abc import Callable, Iterator
from functools import partial

import numpy as np
import psutil
import pytest
import qutip

from cosim.quantum.batch import BatchDrive, evolve_batch, mean_channel, propagate_batch
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray

SAMPLES = 2000
STEP = 50e-12
BATCH = 1000
LOOP = 4
# Agreement with QuTiP, from the promise of the panels where there is loss.
CLOSED, OPEN = 1e-10, 1e-7


def noisy(count: int, samples: int = SAMPLES) -> ComplexArray:
    """A half turn in 100 ns with white noise of a twentieth in size and phase, in rad/s."""
    rng = np.random.default_rng(2)
    noise = rng.normal(size=(2, count, samples))
    return np.asarray(2 * np.pi * 5e6 * (1 + 0.05 * (noise[0] + 1j * noise[1])))


def baseline(qubit: Qubit, rate: ComplexArray) -> ComplexArray:
    # QuTiP's own sparse operators: with dense ones its open propagator takes twice as long.
    a = qutip.destroy(qubit.levels)
    edges = STEP * np.arange(rate.size + 1)
    held = np.append(rate, rate[-1])
    static = np.pi * qubit.anharmonicity * a.dag() * a.dag() * a * a
    parts = [static, [a / 2, held], [a.dag() / 2, held.conj()]]
    hamiltonian = qutip.QobjEvo(parts, tlist=edges, order=0)
    collapse = []
    if not qubit.lossless:
        pure = np.sqrt(2 * qubit.gamma_phi) * a.dag() * a
        collapse = [np.sqrt(qubit.gamma_1) * a, pure]
    found = qutip.propagator(hamiltonian, edges[-1], collapse, piecewise_t=edges)
    return np.asarray(found.full())


def shortest(
    work: Callable[[], object], repeats: int, clock: Callable[[], float] = time.process_time
) -> float:
    """The least time of some repeats in s; that of the processor is blind to other processes."""
    times = []
    for _ in range(repeats):
        start = clock()
        work()
        times.append(clock() - start)
    return min(times)


@pytest.mark.parametrize(
    ("levels", "lossy", "wanted"),
    [(2, False, 1000), (2, True, 300), (3, False, 150), (3, True, 150)],
    ids=["two closed", "two open", "three closed", "three open"],
)
def test_a_batch_of_noise_samples(levels: int, lossy: bool, wanted: int) -> None:
    assert os.environ.get("OPENBLAS_NUM_THREADS") == "1", "set OPENBLAS_NUM_THREADS=1"
    losses = (30e-6, 20e-6) if lossy else ()
    qubit = Qubit(5e9, levels, -0.3e9, *losses)
    rate = noisy(BATCH)
    drive = BatchDrive(STEP, rate)

    def run(workers: int = 1) -> ComplexArray:
        if lossy:
            return evolve_batch(qubit, drive, workers=workers).channels
        return propagate_batch(qubit, drive, workers=workers).unitaries

    found = run()  # Compiles, or loads what was compiled.
    # Baseline and batch take turns, so that both see the same state of the machine.
    loops, ours, walls, shared = [], [], [], []
    for _ in range(5):
        loops.append(shortest(lambda: [baseline(qubit, row) for row in rate[:LOOP]], 1))
        ours.append(shortest(run, 2))
        walls.append(shortest(run, 2, time.perf_counter))
        shared.append(shortest(lambda: run(2), 2, time.perf_counter))
    theirs = min(loops) / LOOP * BATCH
    references = [baseline(qubit, row) for row in rate[:LOOP]]
    error = np.abs(found[:LOOP] - np.array(references)).max()
    print(
        f"\n{levels} levels {'open' if lossy else 'closed'}, {BATCH} x {SAMPLES}: loop "
        f"{theirs:.1f} s of one processor ({LOOP} samples scaled up), batch "
        f"{1e3 * min(ours):.1f} ms: {theirs / min(ours):.0f} times faster (wanted {wanted}), "
        f"agreement {error:.1e}; two threads {min(walls) / min(shared):.2f} times one by the clock"
    )
    assert error < (OPEN if lossy else CLOSED)
    assert np.array_equal(found, run(2))


def test_cost_is_linear() -> None:
    qubit = Qubit(5e9, 3, -0.3e9, 30e-6, 20e-6)
    closed = Qubit(5e9, 2)
    print()
    for name, solve in (
        ("two levels closed", lambda drive: propagate_batch(closed, drive)),
        ("three levels open", lambda drive: evolve_batch(qubit, drive)),
    ):
        for what, shapes in (
            ("samples", [(32, 2000), (320, 2000), (3200, 2000)]),
            ("time points", [(320, 100), (320, 1000), (320, 10_000)]),
        ):
            solve(BatchDrive(STEP, noisy(2, 100)))
            costs = []
            for count, samples in shapes:
                drive = BatchDrive(STEP, noisy(count, samples))
                costs.append(shortest(partial(solve, drive), 3) / (count * samples))
            shown = ", ".join(f"{1e9 * cost:.0f}" for cost in costs)
            print(f"{name}: ns per slice over two decades of {what}: {shown}")


def test_memory_of_a_hundred_thousand_samples() -> None:
    qubit = Qubit(5e9, 3, -0.3e9, 30e-6, 20e-6)
    process = psutil.Process()
    largest = 0

    def portions() -> Iterator[BatchDrive]:
        nonlocal largest
        rng = np.random.default_rng(5)
        for _ in range(100):
            noise = rng.normal(size=(2, 1000, 100))
            yield BatchDrive(1e-9, 2 * np.pi * 5e6 * (1 + 0.02 * (noise[0] + 1j * noise[1])))
            largest = max(largest, process.memory_info().rss)

    start = time.perf_counter()
    found = mean_channel(qubit, portions())
    wall = time.perf_counter() - start
    print(
        f"\n{found.count} samples of 100 slices, three levels open: {wall:.1f} s, "
        f"{largest / 2**20:.0f} MiB resident with all libraries, largest standard error "
        f"{found.standard_error.max():.1e}, step error {found.step_error:.1e}"
    )
    assert largest < 2**30
