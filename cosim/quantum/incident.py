"""The field that drives a readout resonator: a pulse in steps, or any samples."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy.constants import hbar

from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray


@dataclass(frozen=True, slots=True)
class IncidentField:
    """The field that travels towards the resonator, in the frame of its own carrier.

    The carrier is exp(-i 2 pi f t); between the samples the field goes in straight lines, and
    t = 0 is the first sample.

    Parameters
    ----------
    step : float
        Sample interval in s.
    samples : ndarray of complex, shape (n,)
        Field in sqrt(photon/s): the square of its size is the flux of photons.
    frequency : float
        Of the carrier in Hz.

    Raises
    ------
    InputError
        If the step or the frequency is not positive, or the samples are not a finite sequence of
        at least two.
    """

    step: float = field(metadata={"unit": "s"})
    samples: ComplexArray = field(
        metadata={"unit": "sqrt(1/s)", "axes": ("t",), "axis_units": {"t": "s"}}
    )
    frequency: float = field(metadata={"unit": "Hz"})

    def __post_init__(self) -> None:
        samples = np.ascontiguousarray(self.samples, dtype=np.complex128)
        object.__setattr__(self, "samples", samples)
        for name, value, unit in (("step", self.step, "s"), ("frequency", self.frequency, "Hz")):
            if not (math.isfinite(value) and value > 0):
                raise InputError(
                    f"incident field {name}: wanted a positive number of {unit}, got {value!r}"
                )
        if samples.ndim != 1 or samples.size < 2 or not np.isfinite(samples).all():
            raise InputError(
                "incident field samples: wanted at least two finite samples in one dimension, got "
                f"shape {samples.shape}"
            )

    @property
    def t(self) -> FloatArray:
        """Times of the samples in s, shape (n,)."""
        return np.asarray(self.step * np.arange(self.samples.size), dtype=np.float64)


@dataclass(frozen=True, slots=True)
class Plateau:
    """A stretch of constant field.

    Parameters
    ----------
    length : float
        In s, positive.
    level : complex
        Field in sqrt(photon/s).

    Raises
    ------
    InputError
        If the length is not positive or the field is not finite.
    """

    length: float = field(metadata={"unit": "s"})
    level: complex = field(metadata={"unit": "sqrt(1/s)"})

    def __post_init__(self) -> None:
        if not (math.isfinite(self.length) and self.length > 0):
            raise InputError(f"plateau length: wanted a positive time in s, got {self.length!r}")
        if not np.isfinite(self.level):
            raise InputError(f"plateau level: wanted a finite field, got {self.level!r}")


def incident_amplitude(power: float, frequency: float) -> float:
    """Give the field of a wave of known power.

    Parameters
    ----------
    power : float
        Power at the resonator, behind all loss of the line, in W.
    frequency : float
        In Hz.

    Returns
    -------
    float
        sqrt(P/(hbar omega)) in sqrt(photon/s).

    Raises
    ------
    InputError
        If the power is negative or the frequency not positive.
    """
    if not (math.isfinite(power) and power >= 0):
        raise InputError(f"incident power: wanted at least 0 W, got {power!r}")
    if not (math.isfinite(frequency) and frequency > 0):
        raise InputError(f"drive frequency: wanted a positive number of Hz, got {frequency!r}")
    return math.sqrt(power / (hbar * 2 * math.pi * frequency))


def two_step_drive(
    level: complex,
    length: float,
    *,
    boost: float = 1.0,
    boost_length: float = 0.0,
    ring_down: float = 0.0,
    ring_down_length: float = 0.0,
) -> tuple[Plateau, ...]:
    """Give a pulse whose first step fills the resonator, or whose last one empties it.

    Parameters
    ----------
    level : complex
        Field in sqrt(photon/s) of the long part.
    length : float
        Of the pulse without the part that empties the resonator, in s.
    boost : float
        Factor on the field during the first step, which fills the resonator faster.
    boost_length : float
        Length of the first step in s, below `length`; 0 for none.
    ring_down : float
        Factor on the field behind the pulse, negative to empty the resonator.
    ring_down_length : float
        Length of that step in s; 0 for none.

    Returns
    -------
    tuple of Plateau
        One to three.

    Raises
    ------
    InputError
        If the first step is not shorter than the pulse, or as in `Plateau`.
    """
    if not 0 <= boost_length < length:
        raise InputError(
            f"pulse boost_length: wanted at least 0 s and less than the length {length:.6g} s, got "
            f"{boost_length!r} s"
        )
    steps = [Plateau(length - boost_length, level)]
    if boost_length != 0:
        steps.insert(0, Plateau(boost_length, boost * level))
    if ring_down_length != 0:
        steps.append(Plateau(ring_down_length, ring_down * level))
    return tuple(steps)


def sample_drive(
    plateaus: Sequence[Plateau], frequency: float, step: float, count: int, start: float = 0.0
) -> IncidentField:
    """Sample a drive of plateaus on a uniform grid.

    Each sample is the mean over its cell (half a step to either side, within the record), so that
    the area below straight lines from sample to sample is exact and an edge keeps its time to
    second order; edges are one or two steps long. A drive that begins with the record begins at
    its full height.

    Parameters
    ----------
    plateaus : sequence of Plateau
        One after another; no field before and after them.
    frequency : float
        Of the carrier in Hz.
    step : float
        Sample interval in s.
    count : int
        Number of samples, at least two.
    start : float
        Time of the first plateau in s, from the first sample.

    Returns
    -------
    IncidentField

    Raises
    ------
    InputError
        If the grid is not one, or the drive begins before it or ends after it.
    """
    if not (math.isfinite(step) and step > 0) or count < 2:
        raise InputError(
            f"drive: wanted a positive step in s and at least two samples, got {step!r} and "
            f"{count!r}"
        )
    end = start + sum(plateau.length for plateau in plateaus)
    last = step * (count - 1)
    # A millionth of a step is rounding of the times, not a drive that is cut.
    if not -1e-6 * step <= start <= end <= last + 1e-6 * step:
        raise InputError(
            f"drive: from {start:.6g} s to {end:.6g} s it does not lie within the record, which "
            f"ends at {last:.6g} s",
            hint="shorten the drive or lengthen the run",
        )
    t = step * np.arange(count)
    left, right = np.maximum(t - step / 2, 0.0), np.minimum(t + step / 2, last)
    samples = np.zeros(count, dtype=np.complex128)
    begin = start
    for plateau in plateaus:
        finish = begin + plateau.length
        overlap = np.minimum(right, finish) - np.maximum(left, begin)
        samples += plateau.level * np.maximum(overlap, 0.0) / (right - left)
        begin = finish
    return IncidentField(step, samples, frequency)
