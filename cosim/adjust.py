"""What a laboratory's own calibration would absorb: frame, amplitude, carrier offset."""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import minimize, minimize_scalar

from cosim.errors import InputError
from cosim.quantum.evolution import DriveSpline, evolve
from cosim.quantum.frame import FreeFrame, free_frame, phase_frame
from cosim.quantum.operators import OperatorSystem
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_operators
from cosim.waveform import ComplexArray

# The range of the one real amplitude scale.
SCALE_RANGE = (0.8, 1.25)

# Half-width of the bracket of the scale search; the infidelity is a parabola there.
_BRACKET = 0.005

# A vertex this close to the middle of its bracket is exact to 1e-6 in the scale, for the third
# derivative of the infidelity vanishes at the optimum; 1e-6 of a pi pulse costs 2e-12.
_CLOSE = 1e-3


@dataclass(frozen=True, slots=True)
class Pulse:
    """A drive on a qubit within the window of the gate.

    Parameters
    ----------
    qubit : Qubit or OperatorSystem
        The qubit, or a system given by a user's own operators.
    drive : DriveSpline
        Drive rate in rad/s.
    start, stop : float
        Window in s.
    phase : float
        Phase of the drive in rad that is taken out of the channel.
    before : ndarray of complex, shape (levels^2, levels^2), or None
        A channel before it: what noise does.
    """

    qubit: Qubit | OperatorSystem
    drive: DriveSpline
    start: float
    stop: float
    phase: float = 0.0
    before: ComplexArray | None = None

    def channel(self, *, scale: float = 1.0, detuning: float = 0.0) -> ComplexArray:
        """Evolve, with the drive scaled and the carrier offset.

        An offset of the carrier by x seen from the qubit is an offset of the qubit by -x, and
        the frame of the target goes with it.

        Parameters
        ----------
        scale : float
            Factor on the drive.
        detuning : float
            Offset of the carrier in Hz.

        Returns
        -------
        ndarray of complex, shape (levels^2, levels^2)
            Superoperator, column-stacking.

        Raises
        ------
        InputError
            If the window does not lie within the drive, or a system given by operators is to be
            detuned.
        """
        if isinstance(self.qubit, OperatorSystem):
            if detuning != 0.0:
                raise InputError("a system given by operators cannot be detuned")
            return evolve_operators(self.qubit, self.drive, self.start, self.stop, scale=scale)
        qubit = replace(self.qubit, frequency=self.qubit.frequency - detuning)
        channel = evolve(qubit, self.drive, self.start, self.stop, scale=scale)
        channel = phase_frame(channel, self.phase, -self.phase) if self.phase else channel
        return channel if self.before is None else channel @ self.before

    def lossless(self) -> "Pulse":
        """The same pulse on the same qubit without relaxation, dephasing and noise."""
        if isinstance(self.qubit, OperatorSystem):
            return replace(self, qubit=self.qubit.without_collapse())
        return replace(self, qubit=replace(self.qubit, t1=math.inf, t2=math.inf), before=None)


@dataclass(frozen=True, slots=True)
class Calibration:
    """The best scale and carrier offset, with the channel and frame that belong to them.

    Parameters
    ----------
    scale : float
        Factor on the drive.
    detuning : float
        Offset of the carrier in Hz.
    channel : ndarray of complex, shape (levels^2, levels^2)
        Superoperator at these.
    frame : FreeFrame
        Best virtual Z angles at these.
    """

    scale: float
    detuning: float
    channel: ComplexArray
    frame: FreeFrame


def calibrate_pulse(
    pulse: Pulse,
    target: ComplexArray,
    *,
    guess: float = 1.0,
    with_amplitude: bool = True,
    with_detuning: bool = False,
    resonance: float = 0.0,
) -> Calibration:
    """Find the amplitude scale, and on request the carrier offset, of best free-frame fidelity.

    Parameters
    ----------
    pulse : Pulse
        Drive, qubit and window.
    target : ndarray of complex, shape (2, 2)
        Target unitary.
    guess : float
        Scale to start from, such as wanted angle over angle found.
    with_amplitude, with_detuning : bool
        What to adjust: one amplitude scale, one constant carrier offset.

    resonance : float
        Offset in Hz that brings the carrier to the qubit, where the search of it begins.

    Returns
    -------
    Calibration
        The scale lies in `SCALE_RANGE`. Where scale and offset do the same (a quarter turn with
        free Z angles), the pair next to resonance is given.

    Raises
    ------
    InputError
        If the window does not lie within the drive.
    """

    # Relaxation and dephasing lower the fidelity and do not move its optimum: for T1 = T2 = 1 us
    # and a pulse of 0.1 us the fidelity at the optimum found without them is 6e-13 lower.
    lossless = pulse.lossless()

    def infidelity(scale: float, detuning: float = 0.0) -> float:
        channel = lossless.channel(scale=scale, detuning=detuning)
        return 1.0 - free_frame(channel, target).average_gate_fidelity

    duration = pulse.stop - pulse.start
    scale, detuning = 1.0, 0.0
    if with_amplitude:
        scale = _best_scale(infidelity, guess)
    if with_detuning and with_amplitude:
        scale, detuning = _best_pair(infidelity, scale, guess, duration, resonance)
    elif with_detuning:
        detuning = _best_detuning(infidelity, duration, resonance)
    channel = pulse.channel(scale=scale, detuning=detuning)
    return Calibration(scale, detuning, channel, free_frame(channel, target))


def _best_scale(infidelity: Callable[[float], float], guess: float) -> float:
    # The vertex of a parabola through three points is the optimum when the guess was good; else
    # it is the next guess. A pulse far from its target gets the bounded search over all scales.
    scale = guess
    for _ in range(3):
        if not SCALE_RANGE[0] + _BRACKET <= scale <= SCALE_RANGE[1] - _BRACKET:
            break
        low, middle, high = (infidelity(scale + step) for step in (-_BRACKET, 0.0, _BRACKET))
        curvature = low - 2.0 * middle + high
        step = 0.5 * _BRACKET * (low - high) / curvature if curvature > 0.0 else math.inf
        if abs(step) > 2.0 * _BRACKET:
            break
        scale += step
        if abs(step) < _CLOSE:
            return scale
    found = minimize_scalar(
        infidelity, bounds=SCALE_RANGE, method="bounded", options={"xatol": 1e-6}
    )
    return float(found.x)


def _best_detuning(
    infidelity: Callable[[float, float], float], duration: float, resonance: float
) -> float:
    # From two turns over the pulse below resonance to two above.
    found = minimize_scalar(
        lambda x: infidelity(1.0, resonance + float(x) / duration),
        bounds=(-2.0, 2.0),
        method="bounded",
        options={"xatol": 1e-7},
    )
    return resonance + float(found.x) / duration


def _best_pair(
    infidelity: Callable[[float, float], float],
    scale: float,
    guess: float,
    duration: float,
    resonance: float,
) -> tuple[float, float]:
    # At resonance first. The best scale without an offset, which may stand at the end of its
    # range since no amplitude mends a detuned pulse, is tried too, and must be really better.
    at_resonance = _best_scale(lambda value: infidelity(value, resonance), guess)
    best = _simplex(infidelity, (at_resonance, resonance), duration)
    other = _simplex(infidelity, (scale, 0.0), duration)
    return other if infidelity(*other) < infidelity(*best) - 1e-9 else best


def _simplex(
    infidelity: Callable[[float, float], float], start: tuple[float, float], duration: float
) -> tuple[float, float]:
    # The offset is scaled by the inverse duration, so that both steps matter alike; the corners
    # lie inside the range of the scale.
    unit = 0.01 / duration
    first = min(max(start[0], SCALE_RANGE[0]), SCALE_RANGE[1] - 0.005)
    corners = np.array([[first, 0.0], [first + 0.005, 0.0], [first, 1.0]])
    found = minimize(  # type: ignore[call-overload]  # The stubs want no array in options.
        lambda x: infidelity(float(x[0]), start[1] + float(x[1]) * unit),
        corners[0],
        method="Nelder-Mead",
        bounds=[SCALE_RANGE, (None, None)],
        options={"initial_simplex": corners, "xatol": 1e-5, "fatol": 1e-12, "maxiter": 300},
    )
    return float(found.x[0]), start[1] + float(found.x[1]) * unit
