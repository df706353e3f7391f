"""How a target is shared among blocks: by weights, or so that the power is least.

The rule. Errors that stay the same may have any sign, so that two of them count as (sqrt(e1) +
sqrt(e2))^2 where they turn the qubit about the same axis and as e1 + e2 where the axes are at right
angles; in general as e1 + 2 c sqrt(e1 e2) + e2 with c the largest |cosine| between the two error
rotations over signs and phases. What fluctuates is independent of all else and counts as its own
infidelity. The verification by simulation then tells how far this holds.
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy.interpolate import PchipInterpolator
from scipy.optimize import brentq, minimize

from cosim.errors import TestbenchError
from cosim.specification.addition import Alignment
from cosim.specification.building import AnyCurve
from cosim.specification.converters import RateCurve
from cosim.waveform import FloatArray

PowerLaw = PchipInterpolator

# Points of the table of each curve between which the least power is sought.
POINTS = 9
# A block may get between this part of the budget and nearly all of it.
LEAST_SHARE = 1e-5


@dataclass(frozen=True, slots=True)
class Shares:
    """The infidelities that blocks are given.

    Parameters
    ----------
    names : tuple of str
        Of all blocks.
    costs : ndarray, shape (n,)
        What each may cost alone; of those that are given, what they do cost.
    multiplier : float
        Power in W that a unit of the infidelity saves at the optimum; NaN where weights decide.
    """

    names: tuple[str, ...]
    costs: FloatArray = field(metadata={"unit": "1"})
    multiplier: float = field(default=math.nan, metadata={"unit": "W"})


def combined(costs: Sequence[float] | FloatArray, cosines: FloatArray) -> float:
    """Add infidelities by the rule of this module.

    Parameters
    ----------
    costs : array_like, shape (n,)
        Each alone.
    cosines : ndarray, shape (n, n)
        Largest |cosine| between two; 1 on the diagonal, 0 with and between what fluctuates.

    Returns
    -------
    float
        sum_jk cosines_jk sqrt(costs_j costs_k).
    """
    roots = np.sqrt(np.asarray(costs, dtype=np.float64))
    return float(roots @ cosines @ roots)


def all_cosines(names: Sequence[str], aligned: Alignment) -> FloatArray:
    """Give the cosines between all blocks.

    Parameters
    ----------
    names : sequence of str
        Of all blocks.
    aligned : Alignment
        Of those whose errors stay the same.

    Returns
    -------
    ndarray, shape (n, n)
        Zero between what fluctuates and anything else.
    """
    found = np.eye(len(names))
    places = [names.index(name) for name in aligned.names]
    found[np.ix_(places, places)] = aligned.cosines
    return found


def share_by_weights(
    names: Sequence[str],
    weights: Mapping[str, float],
    given: Mapping[str, float],
    cosines: FloatArray,
    budget: float,
) -> Shares:
    """Share a budget in proportion to weights.

    Parameters
    ----------
    names : sequence of str
        Of all blocks.
    weights : mapping of str to float
        Of those that are open.
    given : mapping of str to float
        What the others cost.
    cosines : ndarray, shape (n, n)
        From `all_cosines`.
    budget : float
        That all together may cost; more than those that are given do.

    Returns
    -------
    Shares
    """

    def costs(unit: float) -> FloatArray:
        return np.array([given.get(name, unit * weights.get(name, 0.0)) for name in names])

    if not weights:
        return Shares(tuple(names), costs(0.0))
    top = 2.0 * budget / min(weights.values())
    unit = brentq(
        lambda one: combined(costs(one), cosines) - budget, 0.0, top, rtol=1e-12, xtol=1e-300
    )
    return Shares(tuple(names), costs(float(unit)))


def share_for_power(
    names: Sequence[str],
    laws: Mapping[str, PowerLaw],
    given: Mapping[str, float],
    cosines: FloatArray,
    budget: float,
) -> Shares:
    """Share a budget so that the power is least.

    Parameters
    ----------
    names : sequence of str
        Of all blocks.
    laws : mapping of str to callable
        From `power_laws` for the same budget, of the open blocks at least.
    given, cosines, budget
        As in `share_by_weights`.

    Returns
    -------
    Shares
        With the multiplier of the constraint.

    Raises
    ------
    TestbenchError
        If no optimum is found.

    Notes
    -----
    With s the square root of a share the power of a block is a convex function of s and the
    constraint a convex quadratic form, so that what fulfils the conditions of Karush, Kuhn and
    Tucker is the minimum: H. W. Kuhn, A. W. Tucker, "Nonlinear programming" (1951).
    """
    open_names = [name for name in names if name not in given]
    laws_open = [laws[name] for name in open_names]
    places = [names.index(name) for name in open_names]
    fixed = np.array([given.get(name, 0.0) for name in names])

    def costs(z: FloatArray) -> FloatArray:
        found = fixed.copy()
        found[places] = budget * np.exp(z)
        return found

    def power(z: FloatArray) -> float:
        return sum(math.exp(float(law(value))) for law, value in zip(laws_open, z, strict=True))

    def slopes(z: FloatArray) -> FloatArray:
        """Of each power over the logarithm of the share."""
        return np.array(
            [
                math.exp(float(law(value))) * float(law(value, 1))
                for law, value in zip(laws_open, z, strict=True)
            ]
        )

    def used(z: FloatArray) -> float:
        return 1.0 - combined(costs(z), cosines) / budget

    def used_slopes(z: FloatArray) -> FloatArray:
        roots = np.sqrt(costs(z))
        return np.asarray(-(roots * (cosines @ roots))[places] / budget)

    start = share_by_weights(names, dict.fromkeys(open_names, 1.0), given, cosines, budget)
    z0 = np.log(start.costs[places] / budget)
    unit = power(z0)
    found = minimize(  # type: ignore[call-overload]  # The stubs know no constraints as a dict.
        lambda z: power(z) / unit,
        z0,
        jac=lambda z: slopes(z) / unit,
        constraints=[{"type": "ineq", "fun": used, "jac": used_slopes}],
        bounds=[(math.log(LEAST_SHARE), 0.0)] * len(z0),
        method="SLSQP",
        options={"maxiter": 300, "ftol": 1e-13},
    )
    if not found.success:
        raise TestbenchError(
            f"[specify]: the least power was not found: {found.message}",
            hint="look at the power laws: one may be many orders steeper than the others",
        )
    z = np.asarray(found.x)
    # At the optimum dP = multiplier x d(cost) in every share.
    gain = -used_slopes(z)
    multiplier = float(-(slopes(z) @ gain) / (gain @ gain)) / budget
    return Shares(tuple(names), costs(z), multiplier)


def power_laws(
    names: Sequence[str],
    curves: Mapping[str, AnyCurve],
    powers: Mapping[str, tuple[float, float, float]],
    budget: float,
) -> dict[str, PowerLaw]:
    """Give the power of each block over its share.

    Parameters
    ----------
    names : sequence of str
        Of the open blocks.
    curves : mapping
        Of these at least.
    powers : mapping of str to (float, float, float)
        Of these: a in W, n, and the error at which they take a.
    budget : float
        To which shares are relative.

    Returns
    -------
    dict of str to PchipInterpolator
        log(P/W) as a function of log(share/budget).

    Raises
    ------
    TestbenchError
        If a block cannot cost the budget, so that no power is too little for it.
    """
    return {name: _power_law(name, curves[name], powers[name], budget) for name in names}


def _power_law(
    name: str, curve: AnyCurve, law: tuple[float, float, float], budget: float
) -> PowerLaw:
    """Give log(P/W) of a block as a function of log(share/budget), smooth between points."""
    a, n, at = law
    top = curve.limit(budget)
    if not math.isfinite(top):
        raise TestbenchError(
            f"[specify.{name}]: no error that can be followed costs the whole budget of "
            f"{budget:.3g}, so that the least power is none",
            hint="give this block a 'value', or leave its table out",
        )
    if isinstance(curve, RateCurve):
        # Converters sample a whole number of times, so that their costs go in steps.
        shares = np.exp(np.linspace(math.log(LEAST_SHARE), 0.0, POINTS))
        limits = np.array([curve.limit(budget * float(share)) for share in shares])
        limits = np.maximum.accumulate(limits * np.exp(1e-9 * np.arange(POINTS)))
    else:
        # The cost goes nearly with the square of the error.
        limits = top * np.exp(0.5 * np.linspace(math.log(LEAST_SHARE) - 0.5, 0.0, POINTS))
        costs = [curve.cost(float(limit)) for limit in limits[:-1]]
        shares = np.maximum.accumulate(np.array([*costs, budget]) / budget)
        kept = np.diff(shares, prepend=0.0) > 0.0
        limits, shares = limits[kept], shares[kept]
    return PchipInterpolator(np.log(shares), math.log(a) - n * np.log(limits / at))
