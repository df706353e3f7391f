"""How long a trim keeps a limit."""

import math
from collections.abc import Callable

import numpy as np
from scipy.optimize import brentq

# Relative accuracy of an interval.
_ACCURACY = 1e-6
# Points on which the first time above the limit is looked for.
_POINTS = 61


def longest_interval(
    infidelity: Callable[[float], float], limit: float, first: float, horizon: float
) -> float:
    """Find the longest time up to which an infidelity keeps a limit.

    Parameters
    ----------
    infidelity : callable
        Of the time since the trim, in s; within the limit right after it.
    limit : float
        That must not be exceeded.
    first, horizon : float
        Where to look, in s; down to a millionth of `first`.

    Returns
    -------
    float
        In s; infinite where the limit is kept to the horizon, and zero where it is exceeded as
        early as can be looked.
    """
    times = np.geomspace(first, horizon, _POINTS).tolist()
    if infidelity(times[0]) > limit:
        times = np.geomspace(1e-6 * first, first, _POINTS).tolist()
        if infidelity(times[0]) > limit:
            return 0.0
    before = times[0]
    for time in times[1:]:
        if infidelity(time) > limit:
            found = brentq(
                lambda x: infidelity(math.exp(x)) - limit,
                math.log(before),
                math.log(time),
                xtol=_ACCURACY,
            )
            return math.exp(float(found))
        before = time
    return math.inf


def duty_lost(trim: float, interval: float) -> float:
    """Give the part of the time that trims take.

    Parameters
    ----------
    trim, interval : float
        How long a trim takes, and the gates between two of them, in s.

    Returns
    -------
    float
        0 for an infinite interval.
    """
    return trim / (trim + interval) if math.isfinite(interval) else 0.0
