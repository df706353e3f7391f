"""What decisions tell of the comparator that made them: its offset and its noise.

A comparator decides "one" for an input x with probability Phi((x - offset)/noise), Phi the normal
distribution. Its own noise is seen at no node; how often it decides so over the input tells it
(D. J. Finney, Probit Analysis, 1947; recalled from memory).
"""

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
from scipy.special import chdtrc, log_ndtr

from cosim.errors import InputError
from cosim.waveform import FloatArray

_STEPS = 100
_PRECISION = 1e-12  # of the log-likelihood per trial; beyond it are rounding errors.
_LOG_PEAK = -0.5 * np.log(2.0 * np.pi)  # of the normal density


@dataclass(frozen=True, slots=True)
class ProbitFit:
    """A normal distribution fitted to decisions.

    Parameters
    ----------
    offset : float
        Input at which both decisions are as likely, in the unit of the levels (V).
    noise : float
        Standard deviation of the noise referred to the input, in the same unit.
    offset_error, noise_error : float
        Standard errors of both, from the Fisher information.
    trials : int
        Number of decisions.
    deviance : float
        Twice the difference to the log-likelihood of a probability of its own for each level.
    plausibility : float
        Probability of a deviance as large or larger if the model holds, from the chi-square law.
        It means something only where each level has several decisions of both kinds; nan with
        fewer than three levels, where nothing is left to judge by.
    """

    offset: float = field(metadata={"unit": "V"})
    noise: float = field(metadata={"unit": "V"})
    offset_error: float = field(metadata={"unit": "V"})
    noise_error: float = field(metadata={"unit": "V"})
    trials: int
    deviance: float
    plausibility: float


def fit_probit(
    levels: FloatArray,
    ones: npt.NDArray[np.int_] | npt.NDArray[np.bool_],
    trials: npt.NDArray[np.int_] | None = None,
) -> ProbitFit:
    """Fit offset and noise to decisions over the input, by maximum likelihood.

    Parameters
    ----------
    levels : ndarray, shape (n,)
        Inputs in V, in any order; one may come several times.
    ones : ndarray of int or bool, shape (n,)
        How often the decision was "one" at each.
    trials : ndarray of int, shape (n,), optional
        Number of decisions at each, 1 if left out.

    Returns
    -------
    ProbitFit

    Raises
    ------
    InputError
        If the shapes do not fit, a count is impossible, or the decisions fix no curve: all alike,
        changing sharply at one level (the noise is then smaller than the distance of the levels
        there), or no more likely "one" at higher levels.
    """
    x, k, n = _checked(levels, ones, trials)
    zeros, hits = x[k < n], x[k > 0]
    if zeros.size == 0 or hits.size == 0:
        raise InputError(
            f"all {int(n.sum())} decisions are alike, so they tell neither offset nor noise",
            hint="Sweep the input across the offset.",
        )
    if zeros.max() <= hits.min() or hits.max() <= zeros.min():
        raise InputError(
            "the decisions change without overlap, so the noise cannot be told: it is smaller "
            f"than the distance of the levels around {(zeros.max() + hits.min()) / 2:.6g} V",
            hint="Take levels closer to one another, or more decisions.",
        )
    # In units of the levels' own spread, so that the steps are those of numbers around 1.
    middle, spread = float(np.average(x, weights=n)), float(np.std(x))
    a, b, information, likelihood = _most_likely((x - middle) / spread, k, n)
    if b <= 0:
        raise InputError(
            "the decision is no more often 'one' at higher levels",
            hint="Swap the two outputs, or turn the sign of the levels.",
        )
    covariance = np.linalg.inv(information)
    to_offset, to_noise = np.array([-1 / b, a / b**2]), np.array([0.0, -1 / b**2])
    full = _binomial(k, n)
    deviance = max(2.0 * (full - likelihood), 0.0)
    freedom = x.size - 2
    return ProbitFit(
        offset=middle - spread * a / b,
        noise=spread / b,
        offset_error=spread * float(np.sqrt(to_offset @ covariance @ to_offset)),
        noise_error=spread * float(np.sqrt(to_noise @ covariance @ to_noise)),
        trials=int(n.sum()),
        deviance=deviance,
        plausibility=float(chdtrc(freedom, deviance)) if freedom > 0 else float("nan"),
    )


def _checked(
    levels: FloatArray,
    ones: npt.NDArray[np.int_] | npt.NDArray[np.bool_],
    trials: npt.NDArray[np.int_] | None,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Give levels, counts of ones and of trials as floats, equal levels gathered."""
    x = np.asarray(levels, dtype=np.float64)
    k = np.asarray(ones, dtype=np.float64)
    n = np.ones_like(x) if trials is None else np.asarray(trials, dtype=np.float64)
    if x.ndim != 1 or x.size == 0 or k.shape != x.shape or n.shape != x.shape:
        raise InputError(
            "levels, ones and trials must be of one length; got shapes "
            f"{x.shape}, {k.shape} and {n.shape}"
        )
    if not np.isfinite(x).all():
        raise InputError("a level is not finite")
    if not ((k >= 0) & (k <= n) & (n > 0) & (k == np.rint(k)) & (n == np.rint(n))).all():
        raise InputError("counts must be whole, with at least one trial and at most as many ones")
    unique, place = np.unique(x, return_inverse=True)
    ones_there, trials_there = (np.bincount(place, weights=w).astype(np.float64) for w in (k, n))
    return unique, ones_there, trials_there


def _most_likely(
    u: FloatArray, k: FloatArray, n: FloatArray
) -> tuple[float, float, FloatArray, float]:
    """Maximise the likelihood of Phi(a + b u) by Fisher scoring; it has one maximum only."""
    design = np.stack([np.ones_like(u), u])

    def likelihood(beta: FloatArray) -> float:
        z = beta @ design
        return float(np.sum(k * log_ndtr(z) + (n - k) * log_ndtr(-z)))

    beta = np.zeros(2)
    best = likelihood(beta)
    for _ in range(_STEPS):
        z = beta @ design
        density, below, above = _LOG_PEAK - z**2 / 2, log_ndtr(z), log_ndtr(-z)
        score = design @ (k * np.exp(density - below) - (n - k) * np.exp(density - above))
        information = (n * np.exp(2 * density - below - above) * design) @ design.T
        step = np.linalg.solve(information, score)
        while (value := likelihood(beta + step)) < best and np.abs(step).max() > _PRECISION:
            step = step / 2
        gained = value - best
        if gained > 0:
            beta, best = beta + step, value
        if gained <= _PRECISION * n.sum():
            return float(beta[0]), float(beta[1]), information, best
    raise InputError("the decisions fix no normal distribution: the fit does not end")


def _binomial(k: FloatArray, n: FloatArray) -> float:
    """Give the log-likelihood of a probability of its own at each level."""
    part = k / n
    safe = np.clip(part, 1e-300, 1.0)
    rest = np.clip(1.0 - part, 1e-300, 1.0)
    return float(np.sum(k * np.log(safe) + (n - k) * np.log(rest)))
