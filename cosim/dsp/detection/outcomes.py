"""The probabilities of the decisions, in closed form for every course that the state may take."""

import math
from dataclasses import dataclass, field

import numpy as np
from scipy.optimize import minimize_scalar
from scipy.special import ndtr

from cosim.dsp.detection.projection import Projection
from cosim.dsp.detection.records import Course, Preparation, Transitions
from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray

# Below this step of its argument the mean of the normal distribution is taken by Simpson's rule,
# whose error is 0.55 step^4/2880 = 2e-10; above, from the integral, which loses digits to
# cancellation where the step is small.
_SMALL = 0.03
# Of the table's points every eighth is taken where two times are averaged over.
_COARSE = 8
# Below this the series of `_lean` is exact to turns^3/720 and its closed form loses digits.
_SERIES = 1e-3


@dataclass(frozen=True, slots=True)
class Odds:
    """Probabilities of one decision for one state at the start of the records.

    Parameters
    ----------
    kept : float
        Probability that what the chain sees stays as it is until the end of the window.
    decided_and_kept : float
        Joint probability of that and of the decision.
    decided_and_changed : float
        Joint probability of a change of what it sees and of the decision.
    """

    kept: float = field(metadata={"unit": "1"})
    decided_and_kept: float = field(metadata={"unit": "1"})
    decided_and_changed: float = field(metadata={"unit": "1"})

    @property
    def decided(self) -> float:
        """Probability of the decision."""
        return self.decided_and_kept + self.decided_and_changed


def check_transitions(projection: Projection, transitions: Transitions) -> None:
    """Refuse rates of transitions for which no record was simulated.

    Parameters
    ----------
    projection : Projection
    transitions : Transitions

    Raises
    ------
    InputError
        If there is a rate without records.
    """
    courses = (transitions.course(0), transitions.course(1))
    needed = [(course.rate, course.seen) for course in courses]
    needed += [(course.back, 1 - course.seen) for course in courses if course.rate > 0]
    for rate, seen in needed:
        name = ("excitations", "decays")[seen]
        if rate > 0 and projection.simulated[seen] == 0:
            raise InputError(
                f"detection: the state changes at {rate:.6g} 1/s, but the records hold no "
                f"'{name}' before the end of the window, {projection.stop:.6g} s",
                hint="give the chain's response for some times of the transition",
            )


def state_odds(
    projection: Projection,
    transitions: Transitions,
    threshold: float,
    state: int,
    decision: int,
    *,
    coarse: bool = False,
) -> Odds:
    """Give the probabilities of a decision for one state at the start.

    Parameters
    ----------
    projection : Projection
    transitions : Transitions
        At most one happens within the window, and a reversion.
    threshold : float
        In V: the decision is 1 above it.
    state, decision : int
        0 or 1.
    coarse : bool
        Whether every other simulated time of a transition is left out.

    Returns
    -------
    Odds

    Notes
    -----
    The time of the transition is exponential; over each interval of the table the value is taken
    to change along a straight line, for which the mean of the normal distribution is exact. That
    earlier times within an interval are more frequent is counted to first order. A record that
    goes back is the sum of what the two transitions change: exact for a chain that is linear in
    what the state changes, and wherever it has settled in between. With a strongly saturating one
    that settles within a quarter of the window, a probability of 0.545 came out as 0.535.
    """
    course = transitions.course(state)
    seen, rate = course.seen, course.rate
    sign = 1.0 if decision else -1.0
    level = sign * (projection.values[seen] - threshold) / projection.sigmas[seen]
    kept = 1 + course.share * math.expm1(-rate * projection.stop)
    alone = float(ndtr(level)) * kept
    if rate == 0:
        return Odds(kept, alone, 0.0)
    points = projection.coarse_points if coarse else projection.path_points
    path = projection.along(points[seen])
    levels = sign * (path - threshold) / projection.path_sigmas[seen]
    left = np.exp(-rate * projection.path_times)
    shares = -course.share * left[:-1] * np.expm1(-rate * np.diff(projection.path_times))
    lean = _lean(rate * float(projection.path_times[1]))
    means = _mean_normal(levels) + lean * np.diff(ndtr(levels))
    if course.back == 0:
        return Odds(kept, alone, float(shares @ means))
    middles = (projection.path_times[:-1] + projection.path_times[1:]) / 2
    shares *= np.exp(-course.back * (projection.stop - middles))
    twice = _changed_twice(projection, course, points, sign, threshold)
    return Odds(kept, alone, float(shares @ means) + twice)


def wrong_shares(
    projection: Projection,
    transitions: Transitions,
    preparation: Preparation,
    threshold: float,
    *,
    coarse: bool = False,
) -> tuple[float, float]:
    """Give P(1|0) and P(0|1).

    Parameters
    ----------
    projection : Projection
    transitions : Transitions
    preparation : Preparation
    threshold : float
        In V.
    coarse : bool
        Whether every other simulated time of a transition is left out.

    Returns
    -------
    tuple of 2 floats
        Of the prepared state, not of the state at the start.
    """

    wrong = [
        state_odds(projection, transitions, threshold, state, 1 - state, coarse=coarse).decided
        for state in (0, 1)
    ]
    first, second = preparation.wrong
    return (
        (1 - first) * wrong[0] + first * (1 - wrong[1]),
        (1 - second) * wrong[1] + second * (1 - wrong[0]),
    )


def best_threshold(
    projection: Projection,
    transitions: Transitions,
    preparation: Preparation,
    prior_excited: float = 0.5,
) -> float:
    """Find the threshold with the fewest wrong decisions.

    Parameters
    ----------
    projection : Projection
    transitions : Transitions
    preparation : Preparation
    prior_excited : float
        How often state 1 is prepared.

    Returns
    -------
    float
        In V: the least of (1 - prior) P(1|0) + prior P(0|1), looked for from three standard
        deviations below the mean of state 0 to three above that of state 1.
    """

    def cost(threshold: float) -> float:
        wrong = wrong_shares(projection, transitions, preparation, threshold)
        return (1 - prior_excited) * wrong[0] + prior_excited * wrong[1]

    low = float(projection.values[0] - 3 * projection.sigmas[0])
    high = float(projection.values[1] + 3 * projection.sigmas[1])
    # A coarse look first, since outside the two means the cost is flat.
    grid = np.linspace(low, high, 17)
    least = int(np.argmin([cost(float(x)) for x in grid]))
    bounds = (grid[max(least - 1, 0)], grid[min(least + 1, grid.size - 1)])
    width = float(bounds[1] - bounds[0])
    found = minimize_scalar(cost, bounds=bounds, method="bounded", options={"xatol": 1e-5 * width})
    return float(found.x)


def _changed_twice(
    projection: Projection, course: Course, points: ComplexArray, sign: float, threshold: float
) -> float:
    """Joint probability of a change, of the way back within the window, and of a decision.

    Rows of the tables are the first time, columns the second.
    """
    first, second = course.seen, 1 - course.seen
    t = projection.path_times[::_COARSE]
    step = float(t[1])
    path = projection.along(points[:, ::_COARSE])
    power = projection.path_sigmas[:, ::_COARSE] ** 2
    value = path[first][:, None] + path[second][None, :] - projection.values[second]
    variance = power[first][:, None] + power[second][None, :] - projection.sigmas[second] ** 2
    levels = sign * (value - threshold) / np.sqrt(variance)
    means = _mean_normal(levels) + _lean(course.back * step) * np.diff(ndtr(levels))
    waits = t[None, :-1] - t[:, None]
    weights = np.where(waits > -step / 2, np.exp(-course.back * np.maximum(waits, 0.0)), 0.0)
    inner = -math.expm1(-course.back * step) * (weights * means).sum(axis=1)
    shares = -course.share * np.exp(-course.rate * t[:-1]) * math.expm1(-course.rate * step)
    lean = _lean(course.rate * step)
    return float(shares @ ((inner[:-1] + inner[1:]) / 2 + lean * np.diff(inner)))


def _lean(turns: float) -> float:
    """How far the mean of an exponential time lies from the middle of an interval, in its length.

    `turns` is rate times length; from 0 to 1 the mean is 1/turns - 1/(exp(turns) - 1).
    """
    if turns < _SERIES:
        return -turns / 12
    return 1 / turns - 0.5 - math.exp(-turns) / -math.expm1(-turns)


def _mean_normal(levels: FloatArray) -> FloatArray:
    """Mean of the normal distribution function over each step of its argument on the last axis."""
    a, b = levels[..., :-1], levels[..., 1:]
    ends = ndtr(levels)
    # The integral of the distribution function.
    integral = levels * ends + np.exp(-(levels**2) / 2) / math.sqrt(2 * math.pi)
    step = b - a
    small = np.abs(step) < _SMALL
    simpson = (ends[..., :-1] + 4 * ndtr((a + b) / 2) + ends[..., 1:]) / 6
    return np.asarray(np.where(small, simpson, np.diff(integral) / np.where(small, 1.0, step)))
