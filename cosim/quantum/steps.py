"""Where the kernel steps: the drive's own pieces, cut where they are too long for the accuracy."""

import math
from dataclasses import dataclass

import numpy as np

from cosim.errors import InputError, WaveformError
from cosim.quantum import kernel
from cosim.quantum.hamiltonian import anharmonic_energies
from cosim.quantum.qubit import Qubit
from cosim.waveform import FloatArray

# Longest step in radians of the frame's rotation: 56 steps per carrier period. Measured error of
# the channel after 120 ns at a Rabi frequency of 100 MHz: 2e-10, and 2e-11 with 80 steps.
PHASE_STEP = 2 * math.pi / 56
# Most steps of one evolution: 2 GB of memory, a minute with two levels.
MOST_STEPS = 30_000_000
# Longest step in radians of the drive's rotation, and in radians of the anharmonic energies.
RATE_STEP = 0.02
ENERGY_STEP = 0.4
# Error in the channel that one piece beside a jump of the drive may cost.
EDGE_ERROR = 1e-11
# Longest half panel of dissipation: in radians of the frame's rotation, in radians of the drive and
# of the anharmonic energies, and the error that one jump of the drive may cost in the channel.
PANEL_PHASE = 0.6
PANEL_TURN = 0.3
PANEL_ERROR = 1e-10


@dataclass(frozen=True, slots=True)
class DriveSpline:
    """A real drive rate as a piecewise cubic, in the layout of scipy.interpolate.PPoly.

    rate(t) = sum_m c[m, i] (t - t[i])**(3 - m) on [t[i], t[i + 1]].

    Parameters
    ----------
    t : ndarray, shape (n,)
        Knots in s, strictly rising.
    c : ndarray, shape (4, n - 1)
        Coefficients of 2 pi k v(t), rad/s and powers of s.

    Raises
    ------
    WaveformError
        If the shapes do not fit, a value is not finite or the knots do not rise.
    """

    t: FloatArray
    c: FloatArray

    def __post_init__(self) -> None:
        t = np.ascontiguousarray(self.t, dtype=np.float64)
        c = np.ascontiguousarray(self.c, dtype=np.float64)
        object.__setattr__(self, "t", t)
        object.__setattr__(self, "c", c)
        if t.ndim != 1 or t.size < 2 or c.shape != (4, t.size - 1):
            raise WaveformError(
                f"drive: wanted knots (n,) with n >= 2 and coefficients (4, n - 1), got shapes "
                f"{t.shape} and {c.shape}"
            )
        if not np.isfinite(t).all():
            bad = int(np.flatnonzero(~np.isfinite(t))[0])
            raise WaveformError(f"drive: knot {bad} of {t.size} is not finite")
        if not np.isfinite(c).all():
            bad = int(np.flatnonzero(~np.isfinite(c).all(axis=0))[0])
            raise WaveformError(
                f"drive: the coefficients of piece {bad} of {t.size - 1} (from {t[bad]:.6g} s) "
                "are not finite"
            )
        if not (np.diff(t) > 0).all():
            bad = int(np.flatnonzero(np.diff(t) <= 0)[0])
            raise WaveformError(
                f"drive: the knots must rise, but knot {bad + 1} is at {t[bad + 1]:.6g} s after "
                f"{t[bad]:.6g} s"
            )


@dataclass(frozen=True, slots=True)
class StepPlan:
    """Where the kernel steps and where dissipation acts.

    Parameters
    ----------
    begin, length : ndarray, shape (n,)
        Start and length of each step in s.
    piece : ndarray of int64, shape (n,)
        Piece of the drive in which each step lies.
    kick : ndarray, shape (n + 1,)
        Time of dissipation before each step and after the last in s; zeros for a lossless qubit.
    """

    begin: FloatArray
    length: FloatArray
    piece: kernel.IndexArray
    kick: FloatArray


def plan_steps(
    qubit: Qubit,
    drive: DriveSpline,
    start: float,
    stop: float,
    *,
    scale: float = 1.0,
    phase_step: float = PHASE_STEP,
    refine: int = 1,
) -> StepPlan:
    """Choose the steps of an evolution: the drive's own pieces, cut where they are too long.

    Parameters
    ----------
    qubit : Qubit
    drive : DriveSpline
    start, stop : float
        Window in s; it may start and end within a piece.
    scale : float
        Largest factor on the drive.
    phase_step : float
        Longest step in radians of the frame's rotation.
    refine : int
        Cut every step and every panel of dissipation into this many more.

    Returns
    -------
    StepPlan

    Raises
    ------
    InputError
        If the window is empty, a number is not finite and positive, or there would be more than
        `MOST_STEPS` steps.
    WaveformError
        If the window leaves the drive's time range.
    """
    start, stop = check_window(drive, start, stop)
    if refine < 1 or not phase_step > 0:
        raise InputError(
            f"wanted refine >= 1 and phase_step > 0, got {refine!r} and {phase_step!r}"
        )
    first = max(0, int(np.searchsorted(drive.t, start, side="right")) - 1)
    last = int(np.searchsorted(drive.t, stop, side="left"))
    edges = drive.t[first : last + 1].copy()
    edges[0], edges[-1] = start, stop
    steps = np.diff(edges)
    rates = abs(scale) * _largest_rates(drive, first, last)
    spread = float(np.ptp(anharmonic_energies(qubit)))
    longest = phase_step / qubit.omega
    if spread > 0:
        longest = min(longest, ENERGY_STEP / spread)
    half = _longest_half_panel(qubit, float(rates.max()))
    if not qubit.lossless:
        longest = min(longest, half)
    # Where the spline overshoots beside a jump only the pieces concerned need shorter steps.
    turning = 2 * math.sqrt(qubit.levels - 1) * rates
    limits = 1 / np.maximum(1 / longest, turning / RATE_STEP)
    # The slack keeps a step that equals the limit but for rounding from being cut.
    cuts = np.ceil(steps / limits * (1 - 1e-6))
    cuts = np.maximum(cuts, _edge_cuts(qubit, abs(scale) * drive.c[0, first:last], steps))
    if not cuts.sum() * refine <= MOST_STEPS:
        raise InputError(
            f"the evolution from {start:.6g} s to {stop:.6g} s would take {cuts.sum():.3g} steps, "
            f"at most {MOST_STEPS:.3g} are made: the drive rate comes up to {rates.max():.3g} "
            f"rad/s, T1 is {qubit.t1:.3g} s and T2 {qubit.t2:.3g} s",
            hint="check rabi_per_volt, attenuation, t1 and t2",
        )
    cuts = cuts.astype(np.int64) * refine
    piece = np.repeat(np.arange(first, last, dtype=np.int64), cuts)
    length = np.repeat(steps / cuts, cuts)
    within = np.arange(piece.size) - np.repeat(np.cumsum(cuts) - cuts, cuts)
    begin = np.repeat(edges[:-1], cuts) + within * length
    if qubit.lossless:
        return StepPlan(begin, length, piece, np.zeros(begin.size + 1))
    return StepPlan(*kernel.place_kicks(begin, length, piece, half / refine))


def dissipator_rates(qubit: Qubit) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Give the rates of the dissipator, element by element.

    Parameters
    ----------
    qubit : Qubit

    Returns
    -------
    decay, down, up : ndarray, shape (levels, levels)
        D[rho]_ij = -decay_ij rho_ij + down_ij rho_i+1,j+1 + up_ij rho_i-1,j-1, in 1/s.

    Notes
    -----
    The Lindblad form of `Qubit.collapse_operators` written out.
    """
    n = np.arange(float(qubit.levels))
    falling = (1 - qubit.thermal_population) * qubit.gamma_1
    rising = qubit.thermal_population * qubit.gamma_1
    # The highest level kept has nowhere to rise to.
    room = np.where(n < qubit.levels - 1, n + 1, 0.0)
    out = falling * n + rising * room
    decay = (out[:, None] + out[None, :]) / 2 + qubit.gamma_phi * (n[:, None] - n[None, :]) ** 2
    down = falling * np.sqrt(np.outer(n + 1, n + 1))
    up = rising * np.sqrt(np.outer(n, n))
    return decay, down, up


def _longest_half_panel(qubit: Qubit, rate: float) -> float:
    """Give the longest half panel s of dissipation in s for a drive of at most `rate` rad/s.

    Where the generator is smooth the panels' error is decay s (frequency s)**3/180, which the two
    limits on angles keep small. Where the drive jumps within a panel it is of second order,
    decay s (frequency s)/12; only the levels |0> and |1> are counted in that.
    """
    turning = 2 * math.sqrt(qubit.levels - 1) * rate
    turning += 2 * math.pi * abs(qubit.anharmonicity) * (qubit.levels - 2)
    half = PANEL_PHASE / qubit.omega
    if turning > 0:
        half = min(half, PANEL_TURN / turning)
    jump = float(dissipator_rates(qubit)[0][:2, :2].max()) * 2 * math.sqrt(2) * rate
    return min(half, math.sqrt(12 * PANEL_ERROR / jump)) if jump > 0 else half


def _largest_rates(drive: DriveSpline, first: int, last: int) -> FloatArray:
    """Give the largest size of the rate at four points of each of some pieces, in rad/s."""
    c = drive.c[:, first:last]
    h = np.diff(drive.t[first : last + 1])
    largest = np.abs(c[3])
    for part in (1 / 3, 2 / 3, 1.0):
        x = part * h
        largest = np.maximum(largest, np.abs(((c[0] * x + c[1]) * x + c[2]) * x + c[3]))
    return np.asarray(largest)


def _edge_cuts(qubit: Qubit, cubic: FloatArray, steps: FloatArray) -> FloatArray:
    """Give the least number of cuts of pieces with a large cubic term, as beside a jump.

    Three Gauss nodes leave cubic h**4 (omega h)**3/16800 of the rate's integral, by their error
    h**7 f^(6)/2016000 (textbook) for f = cubic x**3 exp(i omega x); two cuts take 2**-6 of it.
    """
    left = math.sqrt(qubit.levels - 1) * np.abs(cubic) * steps**4
    left = left * (qubit.omega * steps) ** 3 / 16800
    return np.asarray(np.ceil(np.maximum(left / EDGE_ERROR, 1.0) ** (1 / 6) * (1 - 1e-6)))


def check_window(drive: DriveSpline, start: float, stop: float) -> tuple[float, float]:
    """Check a window of time against a drive.

    Parameters
    ----------
    drive : DriveSpline
    start, stop : float
        In s.

    Returns
    -------
    start, stop : float
        In s, brought into the drive's range where they leave it by rounding only.

    Raises
    ------
    InputError
        If the window is empty or not finite.
    WaveformError
        If it leaves the drive's range.
    """
    if not (math.isfinite(start) and math.isfinite(stop) and stop > start):
        raise InputError(
            f"evolution window: wanted finite start < stop in s, got {start!r} and {stop!r}"
        )
    low, high = float(drive.t[0]), float(drive.t[-1])
    # Times from a simulator and from the testbench may differ in the last digits.
    slack = 1e-9 * (high - low)
    if start < low - slack or stop > high + slack:
        raise WaveformError(
            f"evolution window: wanted {start:.9g} s to {stop:.9g} s, but the drive is known only "
            f"from {low:.9g} s to {high:.9g} s",
            hint="simulate the circuit for longer, or narrow the window",
        )
    return max(start, low), min(stop, high)
