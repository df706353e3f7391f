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

from cosim.quantum import batch_runs
from cosim.quantum.batch import (
    BatchControls,
    BatchDrive,
    BatchSystem,
    evolve_batch,
    mean_channel,
    propagate_batch,
)
from cosim.quantum.batch_plan import Grid, panel_exponents, qubit_sizes
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


def pair() -> BatchSystem:
    """Two qubits 40 MHz apart, each driven, with an exchange, T1 30 us and T2 20 us each."""
    a = np.array([[0, 1], [0, 0]], dtype=complex)
    first, second = np.kron(a, np.eye(2)), np.kron(np.eye(2), a)
    n = [c.conj().T @ c for c in (first, second)]
    qubit = Qubit(5e9, 2, 0.0, 30e-6, 20e-6)
    weak, pure = np.sqrt(qubit.gamma_1), np.sqrt(2 * qubit.gamma_phi)
    losses = (weak * first, weak * second, pure * n[0], pure * n[1])
    hop = first.conj().T @ second + first @ second.conj().T
    return BatchSystem(2 * np.pi * 40e6 * n[0], (first, second, hop), losses)


def pair_baseline(system: BatchSystem, controls: list[ComplexArray], *, lossy: bool) -> None:
    """Propagate a pair with QuTiP's own sparse operators."""
    edges = STEP * np.arange(controls[0].size + 1)
    parts: list[object] = [qutip.Qobj(system.static).to("csr")]
    for operator, values in zip(system.operators, controls, strict=True):
        half, held = qutip.Qobj(operator).to("csr") / 2, np.append(values, values[-1])
        parts += [[half, held], [half.dag(), held.conj()]]
    hamiltonian = qutip.QobjEvo(parts, tlist=edges, order=0)
    collapse = [qutip.Qobj(c).to("csr") for c in system.collapse] if lossy else []
    qutip.propagator(hamiltonian, edges[-1], collapse, piecewise_t=edges)


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
    ("levels", "lossy", "wanted", "count"),
    [
        (2, False, 1000, BATCH),
        (2, True, 300, BATCH),
        (3, False, 150, BATCH),
        (3, True, 150, BATCH),
        # Nothing is wanted of these; fewer rows, since they take longer.
        (6, False, 0, 64),
        (6, True, 0, 64),
    ],
    ids=["two closed", "two open", "three closed", "three open", "six closed", "six open"],
)
def test_a_batch_of_noise_samples(levels: int, lossy: bool, wanted: int, count: int) -> None:
    assert os.environ.get("OPENBLAS_NUM_THREADS") == "1", "set OPENBLAS_NUM_THREADS=1"
    losses = (30e-6, 20e-6) if lossy else ()
    qubit = Qubit(5e9, levels, -0.3e9, *losses)
    rate = noisy(count)
    loop = LOOP if count == BATCH else 1
    drive = BatchDrive(STEP, rate)

    def run(workers: int = 1) -> ComplexArray:
        if lossy:
            return evolve_batch(qubit, drive, workers=workers).channels
        return propagate_batch(qubit, drive, workers=workers).unitaries

    found = run()  # Compiles, or loads what was compiled.
    # Baseline and batch take turns, so that both see the same state of the machine.
    loops, ours, walls, shared = [], [], [], []
    for _ in range(5 if count == BATCH else 2):
        loops.append(shortest(lambda: [baseline(qubit, row) for row in rate[:loop]], 1))
        ours.append(shortest(run, 2))
        walls.append(shortest(run, 2, time.perf_counter))
        shared.append(shortest(lambda: run(2), 2, time.perf_counter))
    theirs = min(loops) / loop * count
    references = [baseline(qubit, row) for row in rate[:loop]]
    error = np.abs(found[:loop] - np.array(references)).max()
    print(
        f"\n{levels} levels {'open' if lossy else 'closed'}, {count} x {SAMPLES}: loop "
        f"{theirs:.1f} s of one processor ({loop} samples scaled up), batch "
        f"{1e3 * min(ours):.1f} ms: {theirs / min(ours):.0f} times faster (wanted {wanted}), "
        f"agreement {error:.1e}; two threads {min(walls) / min(shared):.2f} times one by the clock"
    )
    assert error < (OPEN if lossy else CLOSED)
    assert np.array_equal(found, run(2))


@pytest.mark.parametrize("lossy", [False, True], ids=["closed", "open"])
def test_a_batch_of_pairs(lossy: bool) -> None:
    system, count, samples = pair(), 50, 500
    drives = noisy(2 * count, samples)
    coupling = 2 * np.pi * 3e6 * np.linspace(0.5, 1.5, count)[:, None]
    drive = BatchControls(STEP, (drives[:count], drives[count:], coupling))
    solve = evolve_batch if lossy else propagate_batch
    solve(system, drive.take(0, 1))  # Compiles, or loads what was compiled.
    ours = shortest(lambda: solve(system, drive), 3)
    row = [drives[0], drives[count], np.full(samples, coupling[0, 0]) + 0j]
    theirs = shortest(lambda: pair_baseline(system, row, lossy=lossy), 2) * count
    print(
        f"\npair {'open' if lossy else 'closed'}, {count} x {samples}: loop {theirs:.1f} s (one "
        f"sample scaled up), batch {1e3 * ours:.0f} ms: {theirs / ours:.0f} times faster"
    )


@pytest.mark.parametrize("levels", [2, 3, 6])
def test_lossy_slices_that_are_equal(levels: int, monkeypatch: pytest.MonkeyPatch) -> None:
    qubit, count, samples = Qubit(5e9, levels, -0.3e9, 30e-6, 20e-6), 32, 1000
    rate = 2 * np.pi * 5e6 * np.linspace(0.8, 1.2, count)[:, None] * np.ones(samples) + 0j
    detuning = 2 * np.pi * 0.1e6 * np.linspace(-1, 1, count)[:, None]
    cases = {
        "constant drive": BatchDrive(STEP, rate, detuning),
        "no drive": BatchDrive(STEP, 0 * rate, detuning),
    }
    print()
    for name, drive in cases.items():
        times, found = [], []
        for least in (batch_runs.LEAST_RUN, samples + 1):
            monkeypatch.setattr(batch_runs, "LEAST_RUN", least)
            solve = partial(evolve_batch, qubit, drive)
            found.append(solve().channels)
            times.append(shortest(solve, 3))
        monkeypatch.undo()
        theirs = shortest(lambda: baseline(qubit, rate[0, :200]), 2) * samples / 200 * count
        print(
            f"{levels} levels open, {name}, {count} x {samples}: {times[1] / times[0]:.1f} times "
            f"faster than panels ({theirs / times[0]:.0f} times the loop, panels "
            f"{theirs / times[1]:.0f})"
        )
        # The promise of the panels.
        assert np.abs(found[0] - found[1]).max() < OPEN


def test_cost_is_linear() -> None:
    qubit = Qubit(5e9, 3, -0.3e9, 30e-6, 20e-6)
    closed = Qubit(5e9, 2)
    print()
    for name, solve in (
        ("two levels closed", lambda drive: propagate_batch(closed, drive)),
        ("three levels open", lambda drive: evolve_batch(qubit, drive)),
    ):
        for what, shapes in (
            ("samples", [(100, 2000), (1000, 2000), (10_000, 2000)]),
            ("time points", [(320, 100), (320, 1000), (320, 10_000)]),
        ):
            solve(BatchDrive(STEP, noisy(2, 100)))
            costs, panels = [], []
            for count, samples in shapes:
                drive = BatchDrive(STEP, noisy(count, samples))
                costs.append(shortest(partial(solve, drive), 2) / (count * samples))
                sizes = qubit_sizes(qubit, drive.rate, np.zeros((1, 1)))
                panels.append(2.0 ** np.median(panel_exponents(sizes, Grid(STEP, samples, 1))))
            shown = ", ".join(f"{1e9 * cost:.0f}" for cost in costs)
            # One promise for the whole evolution makes the panels of long ones shorter.
            halves = ", ".join(f"{panel:g}" for panel in panels) if "open" in name else "no"
            print(
                f"{name}: ns per slice over two decades of {what}: {shown} (with loss after every "
                f"so many slices: {halves})"
            )


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
