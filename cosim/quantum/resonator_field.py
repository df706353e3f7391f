"""The field of a readout resonator in time, for each state of the qubit and for jumps between them.

Fields go as exp(-i omega t): circuit simulators and Touchstone files use the conjugate.
"""

import math
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
from scipy.linalg.blas import ztbsv

from cosim.errors import InputError
from cosim.quantum.incident import IncidentField
from cosim.quantum.resonator import Resonator, field_rate
from cosim.waveform import ComplexArray, FloatArray

# Below this size of its argument (1 - exp(-z))/z and its like lose digits, and a series takes over:
# its first term left out is below 1e-16.
SERIES_BELOW = 0.05


@dataclass(frozen=True, slots=True)
class Field:
    """The field in a resonator and the one that leaves it, in the frame of the drive's carrier.

    Parameters
    ----------
    step : float
        Sample interval in s.
    frequency : float
        Of the carrier exp(-i 2 pi f t) in Hz.
    inside : ndarray of complex, shape (n,) or (k, n)
        Field in the resonator in sqrt(photon).
    outside : ndarray of complex, shape as `inside`
        Field that goes to the output in sqrt(photon/s).
    """

    step: float = field(metadata={"unit": "s"})
    frequency: float = field(metadata={"unit": "Hz"})
    inside: ComplexArray = field(metadata={"unit": "1"})
    outside: ComplexArray = field(metadata={"unit": "sqrt(1/s)"})

    @property
    def photons(self) -> FloatArray:
        """Mean photon number in the resonator, shape as `inside`."""
        return np.asarray(np.abs(self.inside) ** 2, dtype=np.float64)


def evolve_field(
    resonator: Resonator, drive: IncidentField, level: int, initial: complex = 0.0
) -> Field:
    """Follow the field for one state of the qubit, exactly for a drive of straight lines.

    Parameters
    ----------
    resonator : Resonator
        The resonator.
    drive : IncidentField
        Samples of shape (n,).
    level : int
        State of the qubit, 0 to 2.
    initial : complex
        Field in the resonator at the first sample, in sqrt(photon).

    Returns
    -------
    Field
        With `inside` and `outside` of shape (n,).

    Raises
    ------
    InputError
        As in `Resonator.pull`.

    Notes
    -----
    da/dt = -(kappa/2 + i Delta) a + sqrt(k) b_in, integrated over each step with the exponential.
    """
    inside = _inside(resonator, drive, level, initial)
    return Field(drive.step, drive.frequency, inside, _outside(resonator, drive, inside))


def fields_with_jump(
    resonator: Resonator,
    drive: IncidentField,
    times: npt.ArrayLike,
    before: int = 1,
    after: int = 0,
    initial: complex = 0.0,
) -> Field:
    """Follow the field of a qubit that jumps once: a decay, or an excitation.

    Parameters
    ----------
    resonator, drive, initial
        As in `evolve_field`.
    times : array_like, shape (k,)
        Of the jumps in s, from the first sample, anywhere between samples too; later than the
        record or infinite for none, before the record for a jump at its start.
    before, after : int
        States of the qubit.

    Returns
    -------
    Field
        With `inside` and `outside` of shape (k, n).

    Raises
    ------
    InputError
        If a time is not a number, or as in `Resonator.pull`.
    """
    moments = np.maximum(np.atleast_1d(np.asarray(times, dtype=np.float64)), 0.0)
    if moments.ndim != 1 or np.isnan(moments).any():
        raise InputError("jump times: wanted numbers of s in one dimension")
    old, new = (_inside(resonator, drive, level, initial) for level in (before, after))
    # The new field solves the equation after the jump; what is missing to it at the jump decays.
    # All fields are equal before a jump at the end of the record, so that no later one matters.
    held = np.minimum(moments, drive.t[-1])
    missing = _between(resonator, drive, old, before, held)
    missing -= _between(resonator, drive, new, after, held)
    delay = drive.t - moments[:, None]
    rate = complex(field_rate(resonator, after, drive.frequency))
    late = new + missing[:, None] * np.exp(-rate * np.maximum(delay, 0.0))
    inside = np.where(delay >= 0, late, old)
    return Field(drive.step, drive.frequency, inside, _outside(resonator, drive, inside))


def _inside(
    resonator: Resonator, drive: IncidentField, level: int, initial: complex
) -> ComplexArray:
    rate = complex(field_rate(resonator, level, drive.frequency))
    first, second = _weights(np.asarray(rate * drive.step, dtype=np.complex128))
    force = math.sqrt(resonator.driven_rate) * drive.samples
    kicks = drive.step * ((first - second) * force[:-1] + second * force[1:])
    # a[n] - decay a[n - 1] = kick[n] is a triangle of two diagonals, solved from the top down.
    bands = np.ones((2, drive.samples.size), dtype=np.complex128, order="F")
    bands[1] = -np.exp(-rate * drive.step)
    inside = ztbsv(1, bands, np.concatenate([[initial], kicks]), lower=1, diag=1)
    return np.asarray(inside, dtype=np.complex128)


def _between(
    resonator: Resonator, drive: IncidentField, inside: ComplexArray, level: int, t: FloatArray
) -> ComplexArray:
    """Give the field at any times in the record, shape (k,), from that at the samples."""
    index = np.minimum((t / drive.step).astype(np.intp), drive.samples.size - 2)
    part = t - index * drive.step
    rate = complex(field_rate(resonator, level, drive.frequency))
    first, second = _weights(np.asarray(rate * part, dtype=np.complex128))
    force = math.sqrt(resonator.driven_rate) * drive.samples
    slope = (force[index + 1] - force[index]) / drive.step
    pushed = part * (first * force[index] + second * part * slope)
    return np.asarray(np.exp(-rate * part) * inside[index] + pushed)


def _outside(resonator: Resonator, drive: IncidentField, inside: ComplexArray) -> ComplexArray:
    leaving = -math.sqrt(resonator.output_rate) * inside
    return leaving if resonator.geometry == "transmission" else drive.samples + leaving


def _weights(z: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
    """Give (1 - exp(-z))/z and (exp(-z) - 1 + z)/z**2, the integrals of exp(-z (1 - u)) (1, u)."""
    small = np.abs(z) < SERIES_BELOW
    safe = np.where(small, 1.0, z)
    first = -np.expm1(-safe) / safe
    second = (1 - first) / safe
    terms = [(-1.0) ** k / math.factorial(k + 2) for k in range(10, -1, -1)]
    series = np.polyval(terms, np.where(small, z, 0.0))
    return np.where(small, 1 - z * series, first), np.where(small, series, second)
