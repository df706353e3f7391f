"""The drive of a batch: sampled rates and detunings, and the constant slices made of them."""

import math
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.errors import InputError
from cosim.quantum.kernel import IndexArray
from cosim.waveform import ComplexArray, FloatArray

Array = TypeVar("Array", ComplexArray, FloatArray)

# Largest turn in one slice in rad; beyond it no ten digits are left of the phase.
MOST_TURN = 1e6


@dataclass(frozen=True, slots=True)
class BatchDrive:
    """Drives of a batch in the rotating frame, on one uniform grid.

    H/hbar contains (rate a + rate^* a^dag)/2 + detuning a^dag a.

    Parameters
    ----------
    step : float
        Time between samples in s.
    rate : ndarray of complex, shape (n,) or (batch, n)
        Complex drive rate in rad/s with the meaning of `cosim.coupling.rotating_rate`:
        2 pi k (I + jQ) exp(j (omega_c - omega_frame) t); one for all rows, or one for each.
    detuning : array_like, shape (), (n,), (batch, 1) or (batch, n)
        Qubit's frequency minus that of the frame in rad/s, broadcast against (batch, n) by
        numpy's rules.
    order : int
        1: a sample is the constant drive of its slice of length `step`, n slices in all.
        4: the samples are those of a smooth drive, at the edges and in the middle of steps of
        twice the length, n odd and at least 5; the evolution is that of their cubic spline from
        the first to the last.

    Raises
    ------
    InputError
        If the shapes do not fit, a number is not finite, step or order are out of range, or the
        drive turns by more than 1e6 rad in a step.

    Notes
    -----
    The fourth order is that of two exponentials for each step, free of commutators, with
    Simpson's rule for the moments: A. Alvermann, H. Fehske, "High-order commutator-free
    exponential time-propagation of driven quantum systems", J. Comput. Phys. 230, 5930 (2011);
    recalled from memory and checked by its order.
    """

    step: float
    rate: ComplexArray
    detuning: FloatArray | float = 0.0
    order: int = 1

    def __post_init__(self) -> None:
        rate = np.ascontiguousarray(self.rate, dtype=np.complex128)
        if np.iscomplexobj(self.detuning):
            raise InputError("batch drive: wanted a real detuning in rad/s, got a complex one")
        detuning = np.ascontiguousarray(self.detuning, dtype=np.float64)
        if not (math.isfinite(self.step) and self.step > 0):
            raise InputError(f"batch drive: wanted a step > 0 in s, got {self.step!r}")
        if self.order not in (1, 4):
            raise InputError(f"batch drive: wanted order 1 or 4, got {self.order!r}")
        if np.ndim(self.rate) not in (1, 2) or rate.size == 0 or np.ndim(self.detuning) > 2:
            raise InputError(
                f"batch drive: wanted a rate of shape (n,) or (batch, n) and a detuning that goes "
                f"with it, got shapes {np.shape(self.rate)} and {np.shape(self.detuning)}"
            )
        rate, detuning = np.atleast_2d(rate), np.atleast_2d(detuning)
        batch, samples = max(rate.shape[0], detuning.shape[0]), rate.shape[1]
        if (
            rate.shape[0] not in (1, batch)
            or detuning.shape[0] not in (1, batch)
            or detuning.shape[1] not in (1, samples)
        ):
            raise InputError(
                f"batch drive: the detuning must be of shape (), (n,), (batch, 1) or (batch, n), "
                f"but the shapes are {np.shape(self.detuning)} and, of the rate, "
                f"{np.shape(self.rate)}",
                hint="constant detunings of the rows stand in a column: detuning[:, None]",
            )
        for name, values in (("rate", rate), ("detuning", detuning)):
            # Complex numbers as pairs; what is not a number survives both extremes.
            parts = values.view(np.float64)
            largest = max(float(parts.max()), -float(parts.min()))
            if not math.isfinite(largest):
                row, column = np.argwhere(~np.isfinite(values))[0]
                raise InputError(
                    f"batch drive: the {name} is not finite in row {row}, sample {column}"
                )
            if largest * self.step > MOST_TURN:
                raise InputError(
                    f"batch drive: the {name} comes up to {largest:.3g} rad/s, which turns by "
                    f"{largest * self.step:.3g} rad in a step of {self.step:.3g} s; at most "
                    f"{MOST_TURN:g} are made",
                    hint="rates are in rad/s and steps in s: check their units",
                )
        if self.order == 4 and (samples < 5 or samples % 2 == 0):
            raise InputError(
                f"batch drive: order 4 wants an odd number of samples, at least 5 (edges and "
                f"middles of the steps), got {samples}",
                hint="add or leave out a sample",
            )
        object.__setattr__(self, "rate", rate)
        object.__setattr__(self, "detuning", detuning)

    @property
    def batch(self) -> int:
        """Number of rows."""
        return int(max(self.rate.shape[0], np.shape(self.detuning)[0]))

    @property
    def samples(self) -> int:
        """Number of samples n in time."""
        return int(self.rate.shape[1])

    @property
    def duration(self) -> float:
        """Length of the evolution in s."""
        return self.step * (self.samples if self.order == 1 else self.samples - 1)

    def take(self, begin: int, end: int) -> "BatchDrive":
        """Give some rows.

        Parameters
        ----------
        begin, end : int
            First row, and the one after the last.

        Returns
        -------
        BatchDrive
        """
        rate, detuning = self.rate, np.asarray(self.detuning)
        if end - begin == self.batch:
            return self
        return BatchDrive(
            self.step,
            rate[begin:end] if rate.shape[0] > 1 else rate,
            detuning[begin:end] if detuning.shape[0] > 1 else detuning,
            self.order,
        )

    def pick(self, rows: IndexArray) -> tuple[ComplexArray, FloatArray]:
        """Give the samples of some rows.

        Parameters
        ----------
        rows : ndarray of int64, shape (m,)
            Rising indices of rows.

        Returns
        -------
        rate : ndarray, shape (1 or m, n)
        detuning : ndarray, shape (1 or m, 1 or n)
            In rad/s; not copied when all rows are wanted.
        """
        rate, detuning = self.rate, np.asarray(self.detuning)
        if rows.size < self.batch:
            rate = rate[rows] if rate.shape[0] > 1 else rate
            detuning = detuning[rows] if detuning.shape[0] > 1 else detuning
        return rate, detuning

    def slices(self, rows: IndexArray, level: int) -> tuple[ComplexArray, FloatArray, float]:
        """Give the constant slices of some rows.

        Parameters
        ----------
        rows : ndarray of int64, shape (m,)
            Rising indices of rows.
        level : int
            How often the steps of order 4 are halved; of no effect for order 1, whose slices
            are exact.

        Returns
        -------
        rate : ndarray, shape (1 or m, slices)
        detuning : ndarray, shape (1 or m, 1 or slices)
            In rad/s.
        step : float
            Length of a slice in s.
        """
        rate, detuning = self.pick(rows)
        if self.order == 1:
            return rate, detuning, self.step
        if detuning.shape[1] > 1:
            detuning = fourth_order(detuning, level)
        return fourth_order(rate, level), detuning, float(self.step / 2**level)


def fourth_order(values: Array, level: int) -> Array:
    """Turn samples at edges and middles of steps into two constant slices for each step.

    Parameters
    ----------
    values : ndarray, shape (m, n)
        n odd.
    level : int
        How often the steps are halved, on the cubic spline of the samples.

    Returns
    -------
    ndarray, shape (m, (n - 1) 2**level)
    """
    if level:
        count = values.shape[1] - 1
        spline = CubicSpline(np.arange(count + 1.0), values, axis=1)
        values = spline(np.arange(count * 2**level + 1) / 2**level)
    first, middle, last = values[:, :-2:2], values[:, 1::2], values[:, 2::2]
    out = np.empty((values.shape[0], values.shape[1] - 1), dtype=values.dtype)
    # Simpson's rule gives the mean (f0 + 4 f1 + f2)/6 of a step and its first moment about the
    # middle, step (f2 - f0)/12; mean -/+ 4 moment/step are the two slices.
    out[:, 0::2] = (3 * first + 4 * middle - last) / 6
    out[:, 1::2] = (3 * last + 4 * middle - first) / 6
    return out
