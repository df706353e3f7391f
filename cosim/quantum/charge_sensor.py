"""A charge sensor: an element of a circuit whose value depends on where the electrons are.

Energies are frequencies in Hz, E/h: `cosim.coupling.level_shift` makes them of gate voltages.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
import numpy.typing as npt
from scipy.constants import Boltzmann, Planck

from cosim.errors import InputError
from cosim.waveform import FloatArray

QUANTITIES = {"conductance": "S", "capacitance": "F"}


@dataclass(frozen=True, slots=True)
class SensorElement:
    """The value of an element for each charge state.

    Parameters
    ----------
    quantity : str
        "conductance" or "capacitance".
    values : tuple of float
        One for each charge state in S or F, not negative and not all equal. Where spin decides by
        tunnelling, both spins begin in one charge state.

    Raises
    ------
    InputError
        If the quantity is another one or a value is out of range.
    """

    quantity: str
    values: tuple[float, ...]

    def __post_init__(self) -> None:
        if self.quantity not in QUANTITIES:
            raise InputError(
                f"sensor quantity: wanted one of {', '.join(QUANTITIES)}, got '{self.quantity}'"
            )
        if len(self.values) < 2 or not all(math.isfinite(v) and v >= 0 for v in self.values):
            raise InputError(
                "sensor values: wanted at least two numbers of at least 0 "
                f"{QUANTITIES[self.quantity]}, got {self.values!r}"
            )
        if len(set(self.values)) == 1:
            raise InputError(
                f"sensor values: all are {self.values[0]:.6g} {QUANTITIES[self.quantity]}",
                hint="a sensor that does not tell the states apart cannot read them",
            )


@dataclass(frozen=True, slots=True)
class CoulombPeak:
    """A peak of a sensor's conductance against the energy of its level.

    Parameters
    ----------
    height : float
        Conductance at the top in S, more than 0.
    temperature : float
        Of its leads in K, where heat makes its width; 0 otherwise.
    width : float
        Full width at half height in Hz, where the level's lifetime makes it; 0 otherwise.

    Raises
    ------
    InputError
        If a number is out of range, or not one of the widths is given.

    Notes
    -----
    C. W. J. Beenakker, "Theory of Coulomb-blockade oscillations in the conductance of a quantum
    dot", Phys. Rev. B 44, 1646 (1991): 1/cosh**2(E/2kT) of a single level, or its Lorentzian.
    """

    height: float = field(metadata={"unit": "S"})
    temperature: float = field(default=0.0, metadata={"unit": "K"})
    width: float = field(default=0.0, metadata={"unit": "Hz"})

    def __post_init__(self) -> None:
        if not (math.isfinite(self.height) and self.height > 0):
            raise InputError(f"Coulomb peak height: wanted more than 0 S, got {self.height!r}")
        for name, unit in (("temperature", "K"), ("width", "Hz")):
            value = getattr(self, name)
            if not (math.isfinite(value) and value >= 0):
                raise InputError(f"Coulomb peak {name}: wanted at least 0 {unit}, got {value!r}")
        if (self.temperature > 0) == (self.width > 0):
            raise InputError(
                "Coulomb peak: wanted a temperature or a width above 0, one of them, got "
                f"{self.temperature!r} K and {self.width!r} Hz",
                hint="give the one that is the larger by far: peaks with both have no closed form",
            )


def peak_conductance(peak: CoulombPeak, offsets: npt.ArrayLike) -> FloatArray:
    """Give the conductance of a sensor on its Coulomb peak.

    Parameters
    ----------
    peak : CoulombPeak
        The peak.
    offsets : array_like
        Energy of the sensor's level from that of the top in Hz.

    Returns
    -------
    ndarray, shape as `offsets`
        In S.
    """
    f = np.asarray(offsets, dtype=np.float64)
    if peak.width > 0:
        return np.asarray(peak.height / (1 + (2 * f / peak.width) ** 2))
    # Of |x|, with exponentials that only become small: cosh would overflow far from the peak.
    x = np.exp(-Planck * np.abs(f) / (Boltzmann * peak.temperature))
    return np.asarray(peak.height * 4 * x / (1 + x) ** 2)


def peak_slope(peak: CoulombPeak, offset: float) -> float:
    """Give the slope of a Coulomb peak.

    Parameters
    ----------
    peak : CoulombPeak
        The peak.
    offset : float
        Energy of the sensor's level from that of the top in Hz.

    Returns
    -------
    float
        In S/Hz.
    """
    here = float(peak_conductance(peak, offset))
    if peak.width > 0:
        return -8 * offset / peak.width**2 * here**2 / peak.height
    scale = Planck / (2 * Boltzmann * peak.temperature)
    return -2 * scale * math.tanh(scale * offset) * here


def sensor_on_peak(peak: CoulombPeak, offset: float, shifts: Sequence[float]) -> SensorElement:
    """Give the conductances of a sensor whose level the charge states shift.

    Parameters
    ----------
    peak : CoulombPeak
        The peak.
    offset : float
        Energy of the sensor's level from that of the top, where it is tuned to, in Hz.
    shifts : sequence of float
        For each charge state the shift of the level in Hz.

    Returns
    -------
    SensorElement
        Of the whole peak, so that large shifts are not linear.

    Raises
    ------
    InputError
        If fewer than two states are given, or the conductances are all equal.
    """
    values = peak_conductance(peak, offset + np.asarray(shifts, dtype=np.float64))
    return SensorElement("conductance", tuple(float(value) for value in values))


def sensor_on_slope(
    quantity: str, value: float, slope: float, shifts: Sequence[float]
) -> SensorElement:
    """Give the values of a sensor from the slope that was measured at its working point.

    Parameters
    ----------
    quantity : str
        "conductance" or "capacitance".
    value : float
        At the working point in S or F.
    slope : float
        In S/Hz or F/Hz: `cosim.coupling.slope_per_hertz` makes it of one against a gate voltage.
    shifts : sequence of float
        For each charge state the shift of the sensor's level in Hz.

    Returns
    -------
    SensorElement
        value + slope x shift.

    Raises
    ------
    InputError
        As in `SensorElement`; also if a shift is so large that a value would be negative.
    """
    return SensorElement(quantity, tuple(value + slope * shift for shift in shifts))


def value_records(
    element: SensorElement,
    step: float,
    count: int,
    states: Sequence[int],
    times: npt.ArrayLike,
) -> FloatArray:
    """Give the element's value in time for shots in which the charge moves.

    Parameters
    ----------
    element : SensorElement
        The element.
    step : float
        Sample interval in s.
    count : int
        Number of samples.
    states : sequence of int
        The charge states one after another, of length m + 1: (0, 1, 0) for an electron that leaves
        and is replaced.
    times : array_like, shape (k, m)
        Of the m moves in each shot in s, not falling; infinite for moves that do not happen.

    Returns
    -------
    ndarray, shape (k, count)
        In S or F, mean over each sample's cell of one step about it, so that a move between two
        samples keeps its time.

    Raises
    ------
    InputError
        If a state does not exist, or the times are not of that shape or fall.
    """
    for state in states:
        if not 0 <= state < len(element.values):
            raise InputError(
                f"sensor: wanted states from 0 to {len(element.values) - 1}, got {state!r}"
            )
    moves = np.asarray(times, dtype=np.float64)
    if moves.ndim != 2 or moves.shape[1] != len(states) - 1:
        raise InputError(
            f"sensor: wanted the times of {len(states) - 1} moves in each shot, got an array of "
            f"shape {moves.shape}"
        )
    # Compared rather than subtracted: two moves that never happen are both infinite.
    if np.isnan(moves).any() or (moves[:, 1:] < moves[:, :-1]).any():
        raise InputError("sensor: wanted times of moves that do not fall within a shot")
    if not (math.isfinite(step) and step > 0):
        raise InputError(f"sensor: wanted a positive step in s, got {step!r}")
    ends = step * (np.arange(count) + 0.5)
    record = np.full((moves.shape[0], count), element.values[states[0]])
    for move, (old, new) in enumerate(pairwise(states)):
        after = np.clip((ends - moves[:, move : move + 1]) / step, 0.0, 1.0)
        record += (element.values[new] - element.values[old]) * after
    return record
