"""Confidence intervals of a fraction, such as a yield."""

import math
from dataclasses import dataclass, field

from scipy.special import betaincinv, ndtri

from cosim.errors import InputError

LEVEL = 0.95
_NONE = (math.nan, math.nan)


@dataclass(frozen=True, slots=True)
class Yield:
    """How many of a set of runs, or of samples, keep a limit.

    Parameters
    ----------
    passed : int
        Those that keep it.
    total : int
        Those that were judged, at least one.
    fraction : float
        passed/total.
    random : bool
        Whether each of them is a random sample of its own: then the fraction estimates a
        probability. A fraction of the points of a grid does not, and has no interval; nor have
        samples that recur at several corners or points, since their fates hang together.
    level : float
        Confidence level of the intervals.
    clopper_pearson : tuple of two floats
        The exact interval, which covers the probability at least as often as the level says;
        NaN unless random.
    wilson : tuple of two floats
        The score interval, which is shorter and keeps the level on average; NaN unless random.
    """

    passed: int
    total: int
    fraction: float
    random: bool
    level: float = LEVEL
    clopper_pearson: tuple[float, float] = field(default=_NONE)
    wilson: tuple[float, float] = field(default=_NONE)


def make_yield(passed: int, total: int, random: bool, level: float = LEVEL) -> Yield | None:
    """Count out a yield.

    The intervals hold for independent samples. Latin hypercube and Sobol samples spread more
    evenly than these, so that their intervals are wider than needed as a rule.

    Parameters
    ----------
    passed, total : int
        Those that keep the limit, and all that were judged.
    random : bool
        Whether each is a random sample of its own.
    level : float
        Confidence level.

    Returns
    -------
    Yield or None
        None if nothing was judged.

    Raises
    ------
    InputError
        If the counts or the level make no sense.
    """
    if total == 0 and passed == 0:
        return None
    _check(passed, total, level)
    intervals = (_NONE, _NONE)
    if random:
        intervals = clopper_pearson(passed, total, level), wilson(passed, total, level)
    return Yield(passed, total, passed / total, random, level, *intervals)


def clopper_pearson(passed: int, total: int, level: float = LEVEL) -> tuple[float, float]:
    """Give the exact two-sided confidence interval of a probability.

    Parameters
    ----------
    passed, total : int
        Successes among independent trials.
    level : float
        Confidence level, between 0 and 1.

    Returns
    -------
    tuple of two floats
        Lower and upper limit, quantiles of beta distributions: C. J. Clopper, E. S. Pearson,
        Biometrika 26, 404 (1934).

    Raises
    ------
    InputError
        If the counts or the level make no sense.
    """
    _check(passed, total, level)
    failed, tail = total - passed, (1.0 - level) / 2.0
    low = betaincinv(passed, failed + 1, tail) if passed else 0.0
    high = betaincinv(passed + 1, failed, 1.0 - tail) if failed else 1.0
    return float(low), float(high)


def wilson(passed: int, total: int, level: float = LEVEL) -> tuple[float, float]:
    """Give the two-sided score interval of a probability, without continuity correction.

    Parameters
    ----------
    passed, total : int
        Successes among independent trials.
    level : float
        Confidence level, between 0 and 1.

    Returns
    -------
    tuple of two floats
        Lower and upper limit: E. B. Wilson, J. Am. Stat. Assoc. 22, 209 (1927).

    Raises
    ------
    InputError
        If the counts or the level make no sense.
    """
    _check(passed, total, level)
    z = normal_quantile(level)
    share, weight = passed / total, z * z / total
    middle = (share + weight / 2.0) / (1.0 + weight)
    half = math.sqrt(weight * (share * (1.0 - share) + weight / 4.0)) / (1.0 + weight)
    # At the ends one limit is 0 or 1 exactly, which rounding would miss.
    low = middle - half if passed else 0.0
    high = middle + half if passed < total else 1.0
    return low, high


def normal_quantile(level: float) -> float:
    """Give the standard deviations on either side that hold a part of a normal distribution.

    Parameters
    ----------
    level : float
        The part, between 0 and 1.

    Returns
    -------
    float
        1.96 for 0.95.
    """
    return float(ndtri((1.0 + level) / 2.0))


def _check(passed: int, total: int, level: float) -> None:
    if not 0 <= passed <= total or total == 0:
        raise InputError(
            f"a confidence interval of {passed} out of {total}: wanted a count from 0 to the "
            "total, and a total of at least 1"
        )
    if not 0.0 < level < 1.0:
        raise InputError(
            f"a confidence level of {level:g}: wanted one between 0 and 1", hint="such as 0.95"
        )
