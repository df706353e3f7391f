"""A finite impulse response filter, by least squares, that undoes what a linear path does."""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy.special import erf

from cosim.errors import WaveformError
from cosim.waveform import ComplexArray, FloatArray, Waveform

# From the -3 dB frequency of a Gaussian filter to the standard deviation of its impulse response
# in s: exp(-(2 pi f sigma)^2/2) = 1/sqrt(2).
_SIGMA = float(np.sqrt(np.log(2.0)) / (2.0 * np.pi))
# Beyond this ratio of singular values an unregularised fit has no meaning in double precision.
WORST_CONDITION = 1e10


@dataclass(frozen=True, slots=True)
class Design:
    """Taps, and how they came about.

    Parameters
    ----------
    taps : ndarray, shape (k,)
        Weights of the sample itself and of those before it.
    residual : float
        Root mean square of response minus target, over the root mean square of the target.
    condition : float
        Largest over smallest singular value of the shifted responses.
    rank : int
        Directions that the regularisation leaves free: singular values above it.
    """

    taps: FloatArray = field(metadata={"unit": "1", "axes": ("tap",)})
    residual: float = field(metadata={"unit": "1"})
    condition: float = field(metadata={"unit": "1"})
    rank: int


@dataclass(frozen=True, slots=True)
class Fit:
    """The factorised problem: several targets and regularisations cost little more than one.

    Parameters
    ----------
    left : ndarray, shape (2 n, k)
        Left singular vectors of the shifted responses, real parts above imaginary ones.
    singular : ndarray, shape (k,)
        Singular values, falling.
    right : ndarray, shape (k, k)
        Right singular vectors, in rows.
    """

    left: FloatArray
    singular: FloatArray
    right: FloatArray

    @property
    def condition(self) -> float:
        """Largest over smallest singular value."""
        smallest = float(self.singular[-1])
        return float(self.singular[0]) / smallest if smallest > 0.0 else float("inf")

    def solve(self, target: ComplexArray, prior: FloatArray, regularisation: float) -> Design:
        """Find the taps of least |A h - y|^2 + (regularisation s_1)^2 |h - prior|^2.

        Parameters
        ----------
        target : ndarray of complex, shape (n,)
            What the response ought to be.
        prior : ndarray, shape (k,)
            Taps that are kept where the response does not say otherwise.
        regularisation : float
            Over the largest singular value s_1.

        Returns
        -------
        Design
            The taps are real: they act on the samples of one converter.

        Raises
        ------
        WaveformError
            If the fit is ill-conditioned and nothing regularises it.
        """
        if regularisation == 0.0 and self.condition > WORST_CONDITION:
            raise WaveformError(
                f"the least-squares fit of {prior.size} taps is ill-conditioned: its singular "
                f"values span {self.condition:.1e}",
                hint="take fewer taps, a higher bandwidth of what is played, or a "
                "'regularisation' above 0, such as 1e-4",
            )
        wanted = np.concatenate((target.real, target.imag))
        ridge = regularisation * float(self.singular[0])
        image = self.left.T @ wanted
        at_prior = self.right @ prior
        inside = (self.singular * image + ridge**2 * at_prior) / (self.singular**2 + ridge**2)
        # |y - A h|^2 = |y|^2 - |U^T y|^2 + |U^T y - S V h|^2 for orthonormal U.
        outside = max(0.0, float(wanted @ wanted - image @ image))
        missed = outside + float(np.sum((image - self.singular * inside) ** 2))
        size = float(wanted @ wanted)
        return Design(
            self.right.T @ inside,
            float(np.sqrt(missed / size)) if size > 0.0 else float("nan"),
            self.condition,
            int(np.sum(self.singular > ridge)),
        )


def factorise(response: ComplexArray, count: int, stride: int) -> Fit:
    """Prepare the fit of a filter's taps.

    Parameters
    ----------
    response : ndarray of complex, shape (n,)
        What the unfiltered samples make of the path, on a grid of `stride` points per sample.
    count : int
        Number of taps.
    stride : int
        Grid points per sample.

    Returns
    -------
    Fit
        Of columns that are the response, each one sample later than the one before.

    Raises
    ------
    WaveformError
        If the taps last longer than the response, or there is none.
    """
    if count < 1 or count * stride > response.size:
        raise WaveformError(
            f"{count} taps last longer than the record of {response.size / stride:g} samples"
        )
    if not np.any(response):
        raise WaveformError("the path does not respond, so that no filter can shape its response")
    columns = np.zeros((response.size, count), dtype=np.complex128)
    for tap in range(count):
        columns[tap * stride :, tap] = response[: response.size - tap * stride]
    stacked = np.concatenate((columns.real, columns.imag))
    left, singular, right = np.linalg.svd(stacked, full_matrices=False)
    return Fit(left, singular, right)


def unit_tap(count: int, place: float) -> FloatArray:
    """Give the taps that only delay, by a part of a sample on a straight line between two taps.

    Parameters
    ----------
    count : int
        Number of taps.
    place : float
        Delay in samples; held to the taps that there are.

    Returns
    -------
    ndarray, shape (count,)
        Of sum 1.
    """
    place = min(max(place, 0.0), count - 1.0)
    return np.asarray(np.maximum(0.0, 1.0 - np.abs(np.arange(count) - place)))


def filter_samples(samples: FloatArray, taps: FloatArray) -> FloatArray:
    """Send samples through a filter that was at rest before the first of them.

    Parameters
    ----------
    samples : ndarray, shape (n,)
        The first one is the rest, which the filter leaves alone.
    taps : ndarray, shape (k,)
        Of the filter.

    Returns
    -------
    ndarray, shape (n,)
        rest + sum over k of taps[k] (samples[n - k] - rest).
    """
    rest = samples[0]
    return np.asarray(rest + np.convolve(samples - rest, taps)[: samples.size])


def superpose(response: ComplexArray, weights: Sequence[float], stride: int) -> ComplexArray:
    """Add up shifted copies of a response, as a linear path would.

    Parameters
    ----------
    response : ndarray of complex, shape (n,)
        To one pulse.
    weights : sequence of float
        Weight of the copy that is k samples late, for k = 0, 1, ...
    stride : int
        Grid points per sample.

    Returns
    -------
    ndarray of complex, shape (n,)
        Over the time of the response.
    """
    total = np.zeros(response.size, dtype=np.complex128)
    for late, weight in enumerate(weights):
        if weight != 0.0 and late * stride < response.size:
            total[late * stride :] += weight * response[: response.size - late * stride]
    return total


def band_limited(shape: Waveform, times: FloatArray, bandwidth: float) -> FloatArray:
    """Send straight lines between samples through a Gaussian filter without delay.

    Parameters
    ----------
    shape : Waveform
        Straight lines between its samples, constant before and behind.
    times : ndarray, shape (n,)
        In s, at which the result is wanted.
    bandwidth : float
        -3 dB frequency in Hz.

    Returns
    -------
    ndarray, shape (n,)
        The filtered waveform, exact: a line that bends by a slope d at t_k adds d times the
        integral of the Gaussian's step response.
    """
    sigma = _SIGMA / bandwidth
    slopes = np.concatenate(([0.0], np.diff(shape.v) / np.diff(shape.t), [0.0]))
    total = np.full(times.size, shape.v[0])
    for at, bend in zip(shape.t, np.diff(slopes), strict=True):
        if bend != 0.0:
            x = (times - at) / sigma
            density = np.exp(-0.5 * x**2) / np.sqrt(2.0 * np.pi)
            total += bend * sigma * (0.5 * x * (1.0 + erf(x / np.sqrt(2.0))) + density)
    return np.asarray(total)
