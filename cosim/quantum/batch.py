"""Batched evolution in the rotating frame: noise samples, corners, trials, detunings.

Of a qubit H/hbar = 2 pi alpha n (n - 1)/2 + (rate a + rate^* a^dag)/2 + detuning a^dag a, with the
rate of `cosim.quantum.reference.evolve_rotating_wave`, plus relaxation and dephasing; other small
systems, pairs above all, are a `BatchSystem` with `BatchControls`. A row's numbers depend on that
row alone, to the last bit: not on the rest of the batch, the chunks or the threads.
"""

import math
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field, replace

import numpy as np

from cosim.errors import InputError
from cosim.quantum import batch_kernel
from cosim.quantum.batch_drive import BatchDrive
from cosim.quantum.batch_rows import Rows, rows_of
from cosim.quantum.batch_system import BatchControls, BatchSystem
from cosim.quantum.kernel import IndexArray
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray, FloatArray

__all__ = [
    "BatchChannels",
    "BatchControls",
    "BatchDrive",
    "BatchSystem",
    "BatchUnitaries",
    "MeanChannel",
    "evolve_batch",
    "mean_channel",
    "propagate_batch",
]

# Working memory of one chunk of rows in bytes.
CHUNK_BYTES = 64 * 2**20
# Without a tolerance the steps are halved for these rows only: the first, and one of so many.
CHECKED_FIRST = 4
CHECKED_EVERY = 32
# A change on halving below this may be rounding of many thousand products.
LEAST_TOLERANCE = 1e-11
# How often steps are halved at most: an error of fourth order falls by 4e9.
MOST_HALVINGS = 8


@dataclass(frozen=True, slots=True)
class BatchChannels:
    """Channels of a batch.

    Parameters
    ----------
    channels : ndarray, shape (batch, levels**2, levels**2)
        Column-stacking superoperators in the frame of the drive.
    step_error : float
        Largest change of an element on halving the steps, over the rows that were checked.
    """

    channels: ComplexArray = field(metadata={"unit": "1"})
    step_error: float = field(metadata={"unit": "1"})


@dataclass(frozen=True, slots=True)
class BatchUnitaries:
    """Propagators of a batch.

    Parameters
    ----------
    unitaries : ndarray, shape (batch, levels, levels)
        In the frame of the drive.
    step_error : float
        Largest change of an element on halving the steps, over the rows that were checked.
    """

    unitaries: ComplexArray = field(metadata={"unit": "1"})
    step_error: float = field(metadata={"unit": "1"})


@dataclass(frozen=True, slots=True)
class MeanChannel:
    """The mean channel of many samples.

    Parameters
    ----------
    channel : ndarray, shape (levels**2, levels**2)
        Mean column-stacking superoperator.
    standard_error : ndarray, shape (levels**2, levels**2)
        Of each complex element: root of the sum of squared deviations over count (count - 1);
        NaN for a single sample.
    count : int
        Number of samples.
    step_error : float
        Largest change of an element on halving the steps, over the samples that were checked.
    """

    channel: ComplexArray = field(metadata={"unit": "1"})
    standard_error: FloatArray = field(metadata={"unit": "1"})
    count: int
    step_error: float = field(metadata={"unit": "1"})


def evolve_batch(
    system: Qubit | BatchSystem,
    drive: BatchDrive | BatchControls,
    *,
    tolerance: float | None = None,
    workers: int = 1,
) -> BatchChannels:
    """Evolve a batch of drives and give the channels.

    Parameters
    ----------
    system : Qubit or BatchSystem
        A qubit of 2 to 6 levels, whose frequency does not matter in the rotating frame; or any
        small system, a pair of qubits say, of up to 9 states.
    drive : BatchDrive for a Qubit, BatchControls for a BatchSystem
    tolerance : float, optional
        Largest change of an element of a superoperator on halving the steps, at least 1e-11. Each
        row's steps are halved until it is met. Without it the drive's samples set the steps, and
        the first 4 rows and every 32nd are checked.
    workers : int
        Threads among which the rows are shared; the numbers do not depend on it.

    Returns
    -------
    BatchChannels

    Raises
    ------
    InputError
        If system and drive do not belong together, the levels, the tolerance or the workers are
        out of range, the tolerance cannot be met by halving the steps 8 times, or a step is far
        too long for the levels or the loss.

    Notes
    -----
    Slices of constant drive are exact up to rounding, and with loss so are runs of 64 or more
    slices, of order 1, that are equal or, of a qubit, undriven. In other slices dissipation acts
    between them by Simpson's rule as in `cosim.quantum.kernel`; its panels are chosen for an error
    of 2e-8 and halved with the steps. What is of second order in the dissipator falls with the
    square of the panels. A smooth drive is sliced in fourth order, see `BatchDrive`.
    """
    parts = list(_evolved(rows_of(system, drive), tolerance, workers, 0, _channels))
    return BatchChannels(np.concatenate([part for part, _ in parts]), max(e for _, e in parts))


def propagate_batch(
    system: Qubit | BatchSystem,
    drive: BatchDrive | BatchControls,
    *,
    tolerance: float | None = None,
    workers: int = 1,
) -> BatchUnitaries:
    """Evolve a batch of drives without relaxation and dephasing.

    Parameters
    ----------
    system, drive, tolerance, workers
        As in `evolve_batch`, the tolerance for elements of the propagator; t1 and t2 or the
        collapse operators are left out of account.

    Returns
    -------
    BatchUnitaries

    Raises
    ------
    InputError
        As in `evolve_batch`.
    """
    if isinstance(system, Qubit):
        lossless: Qubit | BatchSystem = replace(system, t1=math.inf, t2=math.inf)
    else:
        lossless = system.without_collapse()
    parts = list(_evolved(rows_of(lossless, drive), tolerance, workers, 0, _unitaries))
    return BatchUnitaries(np.concatenate([part for part, _ in parts]), max(e for _, e in parts))


def mean_channel(
    system: Qubit | BatchSystem,
    drives: BatchDrive | BatchControls | Iterable[BatchDrive | BatchControls],
    *,
    tolerance: float | None = None,
    workers: int = 1,
) -> MeanChannel:
    """Average the channels of many samples without keeping them.

    Parameters
    ----------
    system : Qubit or BatchSystem
    drives : BatchDrive or BatchControls, or iterable of them
        All samples, or portions of them made one after the other; how they are portioned does
        not change a bit of the result.
    tolerance, workers
        As in `evolve_batch`.

    Returns
    -------
    MeanChannel

    Raises
    ------
    InputError
        As in `evolve_batch`, or if there is no sample.
    """
    size = system.levels**2
    mean = np.zeros((size, size), dtype=np.complex128)
    squares = np.zeros((size, size))
    count = 0
    step_error = 0.0
    for drive in (drives,) if isinstance(drives, BatchDrive | BatchControls) else drives:
        batch = rows_of(system, drive)
        for values, error in _evolved(batch, tolerance, workers, count, _channels):
            batch_kernel.add_moments(count, mean, squares, values)
            count += values.shape[0]
            step_error = max(step_error, error)
    if count == 0:
        raise InputError("mean channel: wanted at least one sample, got no drive at all")
    # Rounding may leave a sum of squares that is zero a little below it.
    squares = np.maximum(squares, 0.0)
    spread = squares / (count * (count - 1)) if count > 1 else np.full_like(squares, np.nan)
    return MeanChannel(mean, np.sqrt(spread), count, step_error)


Solver = Callable[[Rows, IndexArray, int, int], ComplexArray]


def _evolved(
    batch: Rows, tolerance: float | None, workers: int, before: int, solve: Solver
) -> Iterator[tuple[ComplexArray, float]]:
    """Give the chunks of a batch in order, each with its step error.

    `before` counts the samples that went before, so that the choice of checked rows does not
    depend on how samples are portioned.
    """
    _check(tolerance, workers)
    chunk = max(1, CHUNK_BYTES // batch.row_bytes)
    for begin in range(0, batch.batch, chunk):
        part = batch.take(begin, min(begin + chunk, batch.batch))
        rows = np.arange(part.batch)
        found = solve(part, rows, 0, workers)
        if batch.exact:
            yield found, 0.0
        elif tolerance is None:
            index = rows + begin + before
            rows = rows[(index < CHECKED_FIRST) | (index % CHECKED_EVERY == 0)]
            finer = _finer(part, rows, 1, workers, solve)
            yield found, float(np.abs(finer - found[rows]).max(initial=0.0))
        else:
            yield found, _halve_until(part, tolerance, workers, solve, found)


def _halve_until(
    batch: Rows, tolerance: float, workers: int, solve: Solver, found: ComplexArray
) -> float:
    """Halve each row's steps until it no longer changes, in place; give the largest change."""
    rows = np.arange(batch.batch)
    largest = 0.0
    changes = np.zeros(0)
    for level in range(1, MOST_HALVINGS + 1):
        finer = _finer(batch, rows, level, workers, solve)
        changes = np.abs(finer - found[rows]).max(axis=(1, 2))
        found[rows] = finer
        largest = max(largest, float(changes[changes <= tolerance].max(initial=0.0)))
        rows = rows[changes > tolerance]
        if rows.size == 0:
            return largest
    raise InputError(
        f"tolerance: wanted {tolerance:.3g}, but after {MOST_HALVINGS} halvings of the steps "
        f"{rows.size} of {batch.batch} rows still change by up to {changes.max():.3g}",
        hint="give the drive on a finer grid, or ask for less",
    )


def _finer(batch: Rows, rows: IndexArray, level: int, workers: int, solve: Solver) -> ComplexArray:
    """Solve with halved steps, in portions that keep the memory of the chunk."""
    portions = np.array_split(rows, min(2**level, max(1, rows.size)))
    return np.concatenate([solve(batch, some, level, workers) for some in portions])


def _unitaries(rows: Rows, some: IndexArray, level: int, workers: int) -> ComplexArray:
    return rows.unitaries(some, level, workers)


def _channels(rows: Rows, some: IndexArray, level: int, workers: int) -> ComplexArray:
    return rows.channels(some, level, workers)


def _check(tolerance: float | None, workers: int) -> None:
    if tolerance is not None and not LEAST_TOLERANCE <= tolerance < 1:
        raise InputError(
            f"tolerance: wanted {LEAST_TOLERANCE:g}, where rounding begins, to 1, got {tolerance!r}"
        )
    if workers != int(workers) or workers < 1:
        raise InputError(f"workers: wanted a whole number of at least 1, got {workers!r}")
