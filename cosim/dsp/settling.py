"""What settles slowly: exponentials fitted to a tail, or to what pulses leave to those behind."""

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
from scipy.optimize import minimize

from cosim.errors import WaveformError
from cosim.waveform import FloatArray

IntArray = npt.NDArray[np.intp]

# Each exponential must lower the sum of squares at least so much to be believed.
_GAIN = 4.0
_GRID = 40
# Two constants closer than this are one, with a curve that is no exponential.
_APART = 1.5


@dataclass(frozen=True, slots=True)
class Settling:
    """A constant and one or two exponentials.

    Parameters
    ----------
    time_constants : ndarray, shape (k,)
        In s, rising; none where nothing settles.
    amplitudes : ndarray, shape (k, m)
        Of each exponential, for each of the m components, in their unit.
    offset : ndarray, shape (m,)
        The constant.
    residual : float
        Root mean square of what the fit leaves, over all components.
    spread : float
        The same without exponentials: about the mean.
    longest : float
        Longest time constant that was tried, in s: one that stands there is at least so long.
    """

    time_constants: FloatArray = field(metadata={"unit": "s", "axes": ("exponential",)})
    amplitudes: FloatArray = field(metadata={"axes": ("exponential", "component")})
    offset: FloatArray = field(metadata={"axes": ("component",)})
    residual: float
    spread: float
    longest: float = field(metadata={"unit": "s"})


def fit_tail(times: FloatArray, values: FloatArray, *, floor: float = 0.0) -> Settling:
    """Fit exponentials to what is left behind a change, values = offset + sum b exp(-t/tau).

    Parameters
    ----------
    times : ndarray, shape (n,)
        In s, from the change on.
    values : ndarray, shape (n, m)
        Components over time.
    floor : float
        Root mean square below which nothing is fitted.

    Returns
    -------
    Settling
        Amplitudes are those at t = 0.

    Raises
    ------
    WaveformError
        If there are fewer than six times.
    """
    if times.size < 6:
        raise WaveformError(f"a tail is fitted to at least six samples, got {times.size}")
    span = float(times[-1] - times[0])
    step = span / (times.size - 1)
    return _fit(lambda tau: np.exp(-times / tau), values, (step, 5.0 * span), floor)


def fit_memory(
    factors: FloatArray, spacing: float, chosen: IntArray, values: FloatArray, *, floor: float
) -> Settling:
    """Fit exponentials to what earlier pulses of a train do to later ones.

    Each pulse leaves something behind in proportion to its factor, which decays: the value of
    slot n is offset + sum over m < n of b f_m exp(-(n - m) spacing/tau).

    Parameters
    ----------
    factors : ndarray, shape (n,)
        Of all slots.
    spacing : float
        Length of a slot in s.
    chosen : ndarray of int, shape (p,)
        Slots whose values are known.
    values : ndarray, shape (p, m)
        Components of each.
    floor : float
        Root mean square below which nothing is fitted.

    Returns
    -------
    Settling
        Amplitudes are those of one pulse of factor 1, at its own slot.
    """

    def basis(tau: float) -> FloatArray:
        keep = np.exp(-spacing / tau)
        left = np.zeros(factors.size)
        for slot in range(1, factors.size):
            left[slot] = keep * (left[slot - 1] + factors[slot - 1])
        return np.asarray(left[chosen])

    longest = 5.0 * factors.size * spacing
    return _fit(basis, values, (0.1 * spacing, longest), floor)


def _fit(
    basis: Callable[[float], FloatArray],
    values: FloatArray,
    limits: tuple[float, float],
    floor: float,
) -> Settling:
    """Search the time constants; all else is linear and follows (variable projection)."""
    centred = values - values.mean(axis=0)
    spread = float(np.sqrt(np.mean(centred**2)))
    none = np.zeros((0, values.shape[1]))
    best = Settling(np.zeros(0), none, values.mean(axis=0), spread, spread, limits[1])
    low, high = np.log(limits)

    def solved(logs: FloatArray) -> Settling:
        taus: FloatArray = np.asarray(np.exp(np.sort(np.clip(logs, low, high))), dtype=np.float64)
        columns = np.column_stack([np.ones(values.shape[0]), *map(basis, taus.tolist())])
        found, *_ = np.linalg.lstsq(columns, values, rcond=1e-10)
        rest = float(np.sqrt(np.mean((values - columns @ found) ** 2)))
        return Settling(taus, np.asarray(found[1:]), np.asarray(found[0]), rest, spread, limits[1])

    grid = np.linspace(low, high, _GRID)
    coarse = grid[::2]
    pairs = [np.array([one, two]) for at, one in enumerate(coarse) for two in coarse[at + 1 :]]
    for starts in ([np.array([log]) for log in grid], pairs):
        # Fewer values than unknowns would fit anything.
        count = starts[0].size
        if best.residual <= floor or values.shape[0] <= 1 + 2 * count or spread == 0.0:
            break
        start = min(starts, key=lambda logs: solved(logs).residual)
        search = minimize(  # type: ignore[call-overload]  # The stubs want no array in options.
            lambda logs: solved(logs).residual / spread,
            start,
            method="Nelder-Mead",
            options={"xatol": 1e-6, "fatol": 1e-12, "maxiter": 400},
        )
        found = solved(search.x)
        if np.any(found.time_constants[1:] < _APART * found.time_constants[:-1]):
            continue
        more = count - best.time_constants.size
        if found.residual**2 * _GAIN**more <= best.residual**2:
            best = found
    return best
