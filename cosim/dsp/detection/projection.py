"""Integrated points, the axis that tells the states apart, and signal against noise over time."""

from dataclasses import dataclass, field

import numpy as np
from scipy.fft import fft, ifft, next_fast_len
from scipy.interpolate import CubicSpline
from scipy.linalg import cholesky, solve_triangular, toeplitz

from cosim.dsp.detection.reception import Received
from cosim.dsp.detection.weights import Rule, boxcar, check_length, matched, too_narrow, whitened
from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray

# Points of the tables over the time of a transition, one more than intervals; linear between them.
TABLE = 1025


@dataclass(frozen=True, slots=True)
class Projection:
    """What the integrated signal is for each state, along the axis that tells them apart.

    The point of a record x is z = sum(conj(w) x), its value Re(z exp(-i axis)): higher for state
    1. Its noise is Gaussian.

    Parameters
    ----------
    weights : ndarray of complex, shape (n,)
        Dimensionless, with a sum of magnitudes of 1.
    step : float
        Sampling interval in s.
    start, stop : float
        Window of the integration in s of the records' time.
    axis : float
        Angle in rad of the axis in the plane of I and Q.
    points : ndarray of complex, shape (2,)
        Mean points of state 0 and state 1 in V.
    values : ndarray, shape (2,)
        Mean values in V.
    sigmas : ndarray, shape (2,)
        Standard deviations of the values in V.
    path_times : ndarray, shape (1025,)
        Times of a transition in s, from 0 to `stop`.
    path_points : ndarray of complex, shape (2, 1025)
        Mean points in V of a record that starts in state 0 (1) and changes then: a cubic spline
        through the simulated times.
    path_sigmas : ndarray, shape (2, 1025)
        Standard deviations of the values in V.
    coarse_points : ndarray of complex, shape (2, 1025)
        As `path_points`, through every other simulated time.
    simulated : tuple of 2 ints
        Number of simulated times before `stop`.
    quadratures : int
        1 for a single real output.
    """

    weights: ComplexArray = field(metadata={"unit": "1"})
    step: float = field(metadata={"unit": "s"})
    start: float = field(metadata={"unit": "s"})
    stop: float = field(metadata={"unit": "s"})
    axis: float = field(metadata={"unit": "rad"})
    points: ComplexArray = field(metadata={"unit": "V"})
    values: FloatArray = field(metadata={"unit": "V"})
    sigmas: FloatArray = field(metadata={"unit": "V"})
    path_times: FloatArray = field(metadata={"unit": "s", "axes": ("path_times",)})
    path_points: ComplexArray = field(metadata={"unit": "V", "axes": ("state", "path_times")})
    path_sigmas: FloatArray = field(metadata={"unit": "V", "axes": ("state", "path_times")})
    coarse_points: ComplexArray = field(metadata={"unit": "V", "axes": ("state", "path_times")})
    simulated: tuple[int, int] = field(metadata={"unit": "1"})
    quadratures: int = field(metadata={"unit": "1"})

    @property
    def snr(self) -> float:
        """Distance of the two means over the mean of the two standard deviations."""
        return float((self.values[1] - self.values[0]) / self.sigmas.mean())

    @property
    def mid_threshold(self) -> float:
        """Half-way between the two means, in V."""
        return float(self.values.mean())

    @property
    def integration_time(self) -> float:
        """Length of the window in s."""
        return self.stop - self.start

    def along(self, points: ComplexArray) -> FloatArray:
        """Give the values of points.

        Parameters
        ----------
        points : ndarray of complex, any shape
            In V.

        Returns
        -------
        ndarray, of the same shape
            In V.
        """
        return np.asarray((points * np.exp(-1j * self.axis)).real)


def project(received: Received, rule: Rule, count: int | None = None) -> Projection:
    """Integrate the samples and turn the plane to the axis between the states.

    Parameters
    ----------
    received : Received
    rule : {"matched", "boxcar", "whitened"}
    count : int or None
        How many samples from the first are integrated; None for all.

    Returns
    -------
    Projection

    Raises
    ------
    InputError
        If the two states cannot be told apart, or there are fewer samples.
    """
    n = received.means.shape[1] if count is None else count
    if not 1 <= n <= received.means.shape[1]:
        raise InputError(f"projection: wanted 1 to {received.means.shape[1]} samples, got {n}")
    weights = _weights(received, rule, n)
    points = received.means[:, :n] @ np.conj(weights)
    difference = points[1] - points[0]
    if difference == 0:
        raise InputError(
            "projection: the integrated signals of the two states are equal",
            hint="check that the state changes something, and that the weights do not cancel it",
        )
    axis = float(np.angle(difference))
    variances = _variances(received, weights)
    stop = received.start + n * received.step
    times = np.linspace(0.0, stop, TABLE)
    tables = [_paths(received, weights, points, s, times) for s in (0, 1)]
    inside = np.interp(
        times,
        received.start + received.step * np.arange(n + 1),
        np.append(0.0, np.cumsum(np.abs(weights) ** 2)),
    )
    # Of the variance that part is the first state's whose weights come before the transition:
    # exact for noise without memory.
    before = inside / inside[-1]
    mixed = [variances[s] * before + variances[1 - s] * (1 - before) for s in (0, 1)]
    return Projection(
        weights,
        received.step,
        received.start,
        stop,
        axis,
        points,
        np.asarray((points * np.exp(-1j * axis)).real),
        np.sqrt(variances),
        times,
        np.array([table[0] for table in tables]),
        np.sqrt(mixed),
        np.array([table[1] for table in tables]),
        (tables[0][2], tables[1][2]),
        received.quadratures,
    )


def snr_over_time(received: Received, rule: Rule) -> FloatArray:
    """Give signal over noise for each length of the integration.

    Parameters
    ----------
    received : Received
    rule : {"matched", "boxcar", "whitened"}
        Learned anew for each length.

    Returns
    -------
    ndarray, shape (n,)
        `Projection.snr` for the first 1, 2, ... n samples, dimensionless; of whitened weights
        with the mean of the two variances, where those differ.

    Raises
    ------
    InputError
        As `project`.
    """
    difference = received.means[1] - received.means[0]
    if rule == "whitened":
        # A whitened difference: the squares of its first k samples add up to the power of the
        # best weights for k samples.
        n = difference.size
        check_length(n)
        mean = received.lags.mean(axis=0) / received.quadratures
        try:
            lower = cholesky(toeplitz(mean[:n]), lower=True)
        except np.linalg.LinAlgError as error:
            raise too_narrow() from error
        white = solve_triangular(lower, difference, lower=True)
        return np.asarray(np.sqrt(np.cumsum(np.abs(white) ** 2)))
    weights = _weights(received, rule, difference.size)
    signal = np.abs(np.cumsum(np.conj(weights) * difference))
    sigmas = [np.sqrt(_running_variance(r, weights, received.quadratures)) for r in received.lags]
    sigma = np.mean(sigmas, axis=0)
    # Matched weights are zero as long as the records are equal.
    return np.asarray(np.divide(signal, sigma, out=np.zeros_like(signal), where=sigma > 0))


def transition_nodes(times: FloatArray, stop: float) -> tuple[FloatArray, slice]:
    """Give the nodes between which records with a transition are interpolated.

    Parameters
    ----------
    times : ndarray, shape (k,)
        Simulated times of a transition in s, rising.
    stop : float
        End of the window in s.

    Returns
    -------
    nodes : ndarray, shape (m,)
        0, the simulated times between 0 and `stop`, and `stop`, in s.
    used : slice
        The simulated times among them.

    Notes
    -----
    Both ends are known without a simulation: a state that changes when the records begin gives
    the record of the other state, and one that changes at the end its own.
    """
    # A time at an end takes the end's place.
    low = int(np.searchsorted(times, 1e-9 * stop, side="right"))
    high = int(np.searchsorted(times, stop * (1 - 1e-9), side="left"))
    used = slice(low, max(low, high))
    return np.concatenate([[0.0], times[used], [stop]]), used


def _weights(received: Received, rule: Rule, count: int) -> ComplexArray:
    if rule == "boxcar":
        return boxcar(count)
    difference = received.means[1, :count] - received.means[0, :count]
    if rule == "matched":
        return matched(difference)
    return whitened(difference, received.lags.mean(axis=0))


def _variances(received: Received, weights: ComplexArray) -> FloatArray:
    """Variance of the value for each state in V**2: weights, covariance, weights."""
    n = weights.size
    period = next_fast_len(2 * n)
    own = ifft(np.abs(fft(weights, period)) ** 2)[:n]
    # own[m] = sum of w_{j+m} conj(w_j); both signs of the lag count.
    power = 2 * (received.lags[:, :n] @ np.conj(own)).real - (received.lags[:, 0] * own[0]).real
    return np.asarray(power / received.quadratures)


def _running_variance(lags: ComplexArray, weights: ComplexArray, quadratures: int) -> FloatArray:
    """Variance of the value in V**2 of the first 1, 2, ... n samples, shape (n,)."""
    n = weights.size
    period = next_fast_len(2 * n)
    later = lags.copy()
    later[0] /= 2
    # Each sample adds its own variance and twice its covariance with those before.
    met = ifft(fft(later, period) * fft(weights, period))[:n]
    return np.asarray(np.cumsum(2 * (np.conj(weights) * met).real) / quadratures)


def _paths(
    received: Received, weights: ComplexArray, points: ComplexArray, state: int, times: FloatArray
) -> tuple[ComplexArray, ComplexArray, int]:
    """Points over the time of a transition, those through every other node, number of nodes."""
    stop = float(times[-1])
    nodes, used = transition_nodes(received.transition_times[state], stop)
    inner = received.transition_means[state][used, : weights.size] @ np.conj(weights)
    values = np.concatenate([[points[1 - state]], inner, [points[state]]])
    fine = CubicSpline(nodes, values)(times)
    kept = np.append(np.arange(0, nodes.size - 1, 2), nodes.size - 1)
    coarse = CubicSpline(nodes[kept], values[kept])(times)
    return fine, coarse, inner.size
