"""From runs on both sides of a number to derivatives of the metric and costs, with their errors.

The infidelity of a gate is the square of its error vector and a rest. Near an optimum its first
derivative vanishes and its change is quadratic, too small to be told from what the simulator's
tolerances do; the vector is linear there. So differences are taken of the vector.
"""

import math
from dataclasses import dataclass

import numpy as np

from cosim.waveform import FloatArray

# What rounding does to the error vector of one evolution, and to a metric.
ROUNDING = 1e-9
VALUE_ROUNDING = 1e-13
# Below these a change is one of the last bits.
_SAME_VECTOR, _SAME_VALUE = 1e-12, 1e-15

RESOLVED, UNRESOLVED, NO_EFFECT, FAILED = "resolved", "not resolved", "no effect", "failed"


@dataclass(frozen=True, slots=True)
class Outcome:
    """What a run gives.

    Parameters
    ----------
    value : float
        The metric.
    vector : ndarray, shape (m,)
        Coherent error, whose square is part of the value; of no length for a readout.
    """

    value: float
    vector: FloatArray

    @property
    def rest(self) -> float:
        """What of the value is not in the square of the vector."""
        return self.value - float(self.vector @ self.vector)


@dataclass(frozen=True, slots=True)
class Pair:
    """Runs below and above; None where there is none.

    Parameters
    ----------
    step : float
        How far the number is moved, positive.
    low, high : Outcome or None
        What came out.
    """

    step: float
    low: Outcome | None
    high: Outcome | None

    @property
    def sides(self) -> tuple[Outcome, ...]:
        """Those that there are."""
        return tuple(item for item in (self.low, self.high) if item is not None)


@dataclass(frozen=True, slots=True)
class Response:
    """What a number does to the metric.

    Parameters
    ----------
    first, first_error : float
        First derivative per unit and a bound of its error by the simulator's tolerances.
    second, second_error : float
        The second derivative, likewise; NaN where one side failed.
    cost_low, cost_high : float
        Change of the metric with the number one tolerance lower, and higher.
    bound : float
        Changes below this cannot be told from what the simulator's tolerances do.
    status : str
        "resolved", "not resolved", "no effect" or "failed".
    slope : ndarray, shape (m,)
        First derivative of the error vector.
    """

    first: float
    first_error: float
    second: float
    second_error: float
    cost_low: float
    cost_high: float
    bound: float
    status: str
    slope: FloatArray


def moved_by(center: Outcome, pair: Pair) -> float:
    """Give how far a pair moves the error vector, or the root of the rest.

    Parameters
    ----------
    center : Outcome
        In between.
    pair : Pair
        Both sides.

    Returns
    -------
    float
        The larger of both sides; for a readout relative to the metric.
    """
    if not center.vector.size:
        return max((abs(side.value / center.value - 1.0) for side in pair.sides), default=0.0)
    moves = [float(np.linalg.norm(side.vector - center.vector)) for side in pair.sides]
    rests = [math.sqrt(abs(side.rest - center.rest)) for side in pair.sides]
    return max((*moves, *rests), default=0.0)


def respond(center: Outcome, wide: Pair, near: Pair, noise: float) -> Response:
    """Work out derivatives and costs.

    Parameters
    ----------
    center : Outcome
        Of the number where it stands.
    wide : Pair
        One tolerance to both sides.
    near : Pair
        At the step that suits differences; it may be the same.
    noise : float
        What the simulator's tolerances do to the error vector; to a readout's metric, relative.

    Returns
    -------
    Response

    Notes
    -----
    With f = |e|^2 + r, f' = 2 e.e' + r' and f'' = 2 |e'|^2 + 2 e.e'' + r'', where e' and e'' are
    differences of second order. An error n of each e makes one of at most 2 |e| n + n^2 in f.
    """
    if not wide.sides or not near.sides:
        nan = math.nan
        return Response(nan, nan, nan, nan, nan, nan, nan, FAILED, np.full(center.vector.size, nan))
    e, s = center.vector, near.step
    slope, bend = _differences(e, near, [side.vector for side in near.sides])
    rest = np.array([center.rest])
    ramp, bow = _differences(rest, near, [np.array([side.rest]) for side in near.sides])
    error = _error(center, noise) + VALUE_ROUNDING
    second = 2.0 * float(slope @ slope) + 2.0 * float(e @ bend) + float(bow[0])
    size, length = float(np.linalg.norm(e)), float(np.linalg.norm(slope))
    second_error = (
        4.0 * length * noise / s + 8.0 * size * noise / s**2 if e.size else 4.0 * error / s**2
    ) + 4.0 * VALUE_ROUNDING / s**2
    bound = max(_error(side, noise) for side in (center, *wide.sides)) + VALUE_ROUNDING
    costs = [
        math.nan if side is None else side.value - center.value for side in (wide.low, wide.high)
    ]
    both = len(near.sides) == 2
    return Response(
        first=2.0 * float(e @ slope) + float(ramp[0]),
        first_error=error / s,
        second=second if both else math.nan,
        second_error=second_error if both else math.nan,
        cost_low=costs[0],
        cost_high=costs[1],
        bound=bound,
        status=_status(center, (wide, near), costs, bound),
        slope=slope,
    )


def _differences(
    center: FloatArray, pair: Pair, sides: list[FloatArray]
) -> tuple[FloatArray, FloatArray]:
    """First and second differences; of one side alone the second is zero."""
    if len(sides) == 2:
        low, high = sides
        return (high - low) / (2.0 * pair.step), (high - 2.0 * center + low) / pair.step**2
    sign = 1.0 if pair.low is None else -1.0
    return sign * (sides[0] - center) / pair.step, np.zeros_like(center)


def _error(outcome: Outcome, noise: float) -> float:
    if not outcome.vector.size:
        return noise * outcome.value
    return 2.0 * float(np.linalg.norm(outcome.vector)) * noise + noise**2


def _status(center: Outcome, pairs: tuple[Pair, Pair], costs: list[float], bound: float) -> str:
    same = all(
        abs(side.value - center.value) < _SAME_VALUE
        and not (np.abs(side.vector - center.vector) > _SAME_VECTOR).any()
        for pair in pairs
        for side in pair.sides
    )
    if same:
        return NO_EFFECT
    return RESOLVED if max(abs(c) for c in costs if not math.isnan(c)) > bound else UNRESOLVED
