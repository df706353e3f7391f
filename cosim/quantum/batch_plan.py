"""Where dissipation acts in a batch: panels of Simpson's rule over the slices of a row."""

import math
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from scipy.linalg import expm

from cosim.errors import InputError
from cosim.quantum.batch_kernel import row_sizes
from cosim.quantum.kernel import IndexArray
from cosim.quantum.qubit import Qubit
from cosim.quantum.steps import dissipator_rates
from cosim.waveform import ComplexArray, FloatArray

Matrix = TypeVar("Matrix", ComplexArray, FloatArray)

# What each of the panels' two errors may cost in the channel of a row, by estimate, and the
# longest half panel in radians, beyond which the estimate does not hold.
PANEL_ERROR = 2e-8
PANEL_TURN = 0.5
# Most parts of slices in an evolution, as the other kernel's most steps.
MOST_PARTS = 30_000_000


@dataclass(frozen=True, slots=True)
class RowSizes:
    """What sets the panels of each row.

    Parameters
    ----------
    decay : float
        Fastest decay in 1/s.
    slow, fast : ndarray, shape (m,)
        How fast the drive turns the system, and how fast it turns without, in rad/s.
    largest, jumps : ndarray, shape (m,)
        Largest rate, and the root of the sum of its squared jumps between slices, in rad/s.
    """

    decay: float
    slow: FloatArray
    fast: FloatArray
    largest: FloatArray
    jumps: FloatArray


@dataclass(frozen=True, slots=True)
class Grid:
    """The slices over which panels are laid.

    Parameters
    ----------
    step : float
        Time between samples in s.
    samples : int
        Number of samples.
    order : int
        Of the drive, 1 or 4.
    """

    step: float
    samples: int
    order: int

    @property
    def duration(self) -> float:
        """Length of the evolution in s."""
        return self.step * (self.samples if self.order == 1 else self.samples - 1)


@dataclass(frozen=True, slots=True)
class Panels:
    """Dissipation between the parts of slices, as `batch_kernel.channel_rows` takes it.

    Parameters
    ----------
    parts : int
        Equal parts into which each slice is cut.
    kick : ndarray of int64, shape (slices parts + 1,)
        Which of the times acts before each part and after the last, or -1.
    times : ndarray, shape (kinds,)
        For which the dissipator acts, in s.
    """

    parts: int
    kick: IndexArray
    times: FloatArray


def qubit_sizes(qubit: Qubit, rate: ComplexArray, detuning: FloatArray) -> RowSizes:
    """Give what sets the panels of a qubit's rows.

    Parameters
    ----------
    qubit : Qubit
        With loss.
    rate : ndarray, shape (1 or m, n)
        In rad/s.
    detuning : ndarray, shape (1 or m, 1 or n)
        In rad/s.

    Returns
    -------
    RowSizes
    """
    largest, jumps = row_sizes(rate)
    fast = 2 * math.pi * abs(qubit.anharmonicity) * (qubit.levels - 2)
    return RowSizes(
        float(dissipator_rates(qubit)[0].max()),
        math.sqrt(qubit.levels - 1) * largest,
        fast + np.abs(detuning).max(axis=1),
        largest,
        jumps,
    )


def panel_exponents(sizes: RowSizes, grid: Grid) -> IndexArray:
    """Choose for each row how long half a panel may be.

    Parameters
    ----------
    sizes : RowSizes
    grid : Grid

    Returns
    -------
    ndarray of int64, shape (1 or m,)
        e: half a panel is 2**e units, a unit being a slice of order 1 or a step of order 4. For
        order 4 never negative: within a step the frame is known in second order only.

    Notes
    -----
    Half panels s of Simpson's rule leave decay s**4/180 times the change of the integrand's third
    derivative, of the order of turning**3 as the drive goes on. What turns fast, by anharmonicity
    and detuning, leaves the ends of the integral alone, as far as the drive brings no more. The
    second order in the dissipator adds (decay s)**2/12, and more as the drive goes on. Jumps
    between slices add decay s**2 jumps/12, jumps being the root of the sum of their squares as
    for noise, and decay unit**2/12 times twice the largest rate for a slow rise and fall; within
    a slice there are none. These are estimates; halving the steps is the proof.
    """
    decay, slow = sizes.decay, sizes.slow
    unit = grid.step if grid.order == 1 else 2 * grid.step
    turning = slow + sizes.fast
    with np.errstate(divide="ignore", over="ignore"):
        on = 1 + slow * grid.duration
        ends = 90 * PANEL_ERROR / (decay * turning**3 * on)
        smooth = np.minimum(ends**0.25, PANEL_TURN / turning)
        smooth = np.minimum(smooth, np.sqrt(12 * PANEL_ERROR / on) / decay)
        rough = np.sqrt(12 * PANEL_ERROR / (decay * sizes.jumps))
    rough[decay * unit**2 * 2 * sizes.largest / 12 > PANEL_ERROR] = 0.0
    # Nothing is gained by panels longer than the evolution.
    longest = math.log2(max(1.0, grid.duration / unit / 2))
    smooth = np.minimum(np.log2(smooth / unit), longest)
    with np.errstate(divide="ignore"):
        rough = np.maximum(np.minimum(np.log2(rough / unit), longest), -1)
    # Far below what `lay_panels` lets pass.
    exponents = np.floor(np.maximum(np.minimum(smooth, rough), -60)).astype(np.int64)
    return np.asarray(np.maximum(exponents, 0) if grid.order == 4 else exponents)


def lay_panels(grid: Grid, exponent: int, level: int, decay: float) -> Panels:
    """Lay the panels over the slices.

    Parameters
    ----------
    grid : Grid
    exponent : int
        From `panel_exponents`, less one for each halving.
    level : int
        Halvings of the steps; they cut the steps of order 4 themselves.
    decay : float
        Fastest decay in 1/s, for the error's text.

    Returns
    -------
    Panels

    Raises
    ------
    InputError
        If there would be more than `MOST_PARTS` parts of slices.
    """
    if grid.order == 1:
        parts = 2 ** max(0, -exponent)
        if grid.samples * parts > MOST_PARTS:
            raise InputError(
                f"batch: {grid.samples} slices of {grid.step:.3g} s would be cut into "
                f"{grid.samples * parts:.3g} parts, at most {MOST_PARTS:.3g} are made: the drive "
                f"turns too fast beside a loss of up to {decay:.3g} per second",
                hint="check the drive rate, the detuning, t1 and t2, or keep fewer levels",
            )
        if grid.samples * parts == 1:
            parts = 2  # Simpson's rule needs two halves.
        units, stride, unit = grid.samples * parts, 1, grid.step / parts
        half = max(1, 2**exponent)
    else:
        parts, stride = 1, 2
        units = (grid.samples - 1) // 2 * 2**level
        unit = 2 * grid.step / 2**level
        half = 2 ** (exponent + level)
    weights = simpson_weights(units, int(half))
    times, kinds = np.unique(weights, return_inverse=True)
    kick = np.full(units * stride + 1, -1, dtype=np.int64)
    # The first of the different weights is zero where panels span several units.
    shift = 1 if times[0] == 0 else 0
    kick[::stride] = kinds.reshape(-1) - shift
    return Panels(parts, kick, unit * times[shift:])


def simpson_weights(count: int, half: int) -> FloatArray:
    """Give the weights of the composite Simpson rule on an even grid.

    Parameters
    ----------
    count : int
        Number of intervals, at least 2.
    half : int
        Intervals in half a panel. What is left at the end is done with single intervals, an odd
        number of them with the three-eighths rule.

    Returns
    -------
    ndarray, shape (count + 1,)
        Non-negative, in units of an interval, with the sum `count`.
    """
    half = min(half, count // 2)
    panels = count // (2 * half)
    if count - 2 * half * panels == 1:
        panels -= 1
    weights = np.zeros(count + 1)
    end = 2 * half * panels
    _add_panels(weights[: end + 1 : half], half)
    last = count - 3 if (count - end) % 2 else count
    _add_panels(weights[end : last + 1], 1)
    if last < count:
        weights[last:] += np.array([3, 9, 9, 3]) / 8
    return weights


def _add_panels(weights: FloatArray, half: int) -> None:
    """Add the weights of adjoining panels, in place; a single point is no panel."""
    weights[:-2:2] += half / 3
    weights[1:-1:2] += 4 * half / 3
    weights[2::2] += half / 3


def qubit_tables(qubit: Qubit, times: FloatArray) -> FloatArray:
    """Give exp(D time) - 1 of a qubit's dissipator for some times, diagonal by diagonal of rho.

    Parameters
    ----------
    qubit : Qubit
    times : ndarray, shape (kinds,)
        In s.

    Returns
    -------
    ndarray, shape (kinds, levels, levels, levels)
        rho_ij grows by sum_m tables[., i, j, m] rho_m,m+j-i.
    """
    decay, down, up = dissipator_rates(qubit)
    d = qubit.levels
    tables = np.zeros((times.size, d, d, d))
    for offset in range(-d + 1, d):
        # The elements rho_m,m+offset form a chain that the dissipator couples.
        m = np.arange(max(0, -offset), d - max(0, offset))
        chain = np.diag(-decay[m, m + offset])
        chain += np.diag(down[m, m + offset][:-1], 1) + np.diag(up[m, m + offset][1:], -1)
        for kind, time in enumerate(times):
            tables[kind, m[:, None], (m + offset)[:, None], m[None, :]] = growth(chain * time)
    return tables


def growth(matrix: Matrix) -> Matrix:
    """Give exp(matrix) - 1 without loss of digits where the matrix is small.

    Parameters
    ----------
    matrix : ndarray, shape (n, n)

    Returns
    -------
    ndarray, shape (n, n)
    """
    n = matrix.shape[0]
    # The upper right block of this exponential is (exp(matrix) - 1)/matrix.
    augmented = np.block([[matrix, np.eye(n)], [np.zeros((n, 2 * n))]])
    return np.asarray(matrix @ expm(augmented)[:n, n:])
