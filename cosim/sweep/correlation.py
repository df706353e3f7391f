"""How the metric of a sweep goes with its inputs over samples or a grid."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.stats import rankdata

from cosim.sweep.columns import CORNER, PERTURBED, SAMPLE, IntArray, Table, encode
from cosim.sweep.intervals import LEVEL, normal_quantile
from cosim.waveform import FloatArray

# Below this a linear fit leaves too much unexplained for its coefficients to rank the inputs: a
# usual rule in sensitivity analysis.
LEAST_R_SQUARED = 0.7
SAME = "the metric is the same in all runs"
# A spread below this part of the values themselves is that of rounding.
_ROUNDING = 1e-12


@dataclass(frozen=True, slots=True)
class Correlation:
    """How the metric goes with one number over the samples, or the points of a grid.

    Corners shift the metric as a whole; that is taken out first, so that the numbers say what
    happens within a corner.

    Parameters
    ----------
    key : str
        The number that varies.
    share : float
        Part of the metric's variance that a parabola in this number alone explains (R^2 of that
        fit): a parabola, since an infidelity has its least value within the range as often as
        not, where lines and ranks see nothing. NaN for too few runs.
    spearman : float
        Rank correlation, -1 to 1; with several corners that of the ranks within each.
    standardised : float
        Coefficient of the number in a linear fit over all that varies, times its standard
        deviation, over that of the metric; NaN where the fit does not determine it.
    significant : bool or None
        Whether share or rank correlation is larger than chance makes either of them in 5 % of all
        sets of independent samples. None over a grid, where nothing is left to chance.
    effect : float
        Standard deviation of the metric that goes with the number: that of all runs times the
        root of the share.
    resolved : bool or None
        Whether the effect exceeds the median error bar of the runs; None if there are none.
    """

    key: str
    share: float
    spearman: float
    standardised: float
    significant: bool | None
    effect: float
    resolved: bool | None


def correlations(
    table: Table, inputs: Sequence[str], metric: FloatArray, bars: FloatArray
) -> tuple[tuple[Correlation, ...], float, tuple[str, ...]]:
    """Rank the numbers that vary over samples, or over a grid, by how the metric goes with them.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        The runs, at least one.
    inputs : sequence of str
        The plan's own columns.
    metric, bars : ndarray, shape (runs,)
        Metric and error bar of each run; NaN where there is none.

    Returns
    -------
    tuple of Correlation
        The largest share first.
    float
        R^2 of the linear fit within the corners; NaN without one.
    tuple of str
        What the reader must know.
    """
    names = [
        name
        for name in inputs
        if name not in (CORNER, SAMPLE, PERTURBED) and table[name].dtype.kind in "fiu"
    ]
    if not names:
        return (), math.nan, ()
    x = np.column_stack([table[name].astype(float) for name in names])
    usable = np.isfinite(metric) & np.isfinite(x).all(axis=1)
    if usable.sum() < 3:
        return (), math.nan, ("too few runs have finished to say what the metric goes with",)
    x, y = x[usable], metric[usable, np.newaxis]
    groups = encode(table[CORNER][usable])[1] if CORNER in inputs else np.zeros(len(y), np.int64)
    scaled, _, varies = _standardise(x, groups)
    notes = [
        f"{name} does not vary" for name, moves in zip(names, varies, strict=True) if not moves
    ]
    names = [name for name, moves in zip(names, varies, strict=True) if moves]
    wanted, spread, moved = _standardise(y, groups)
    if not names or not moved[0]:
        return (), math.nan, tuple(notes if moved[0] else [*notes, SAME])
    count = int(groups.max()) + 1
    ranks = _rank_correlation(x[:, varies], y, groups)
    slopes, r_squared, note = _fit(scaled[:, varies], wanted[:, 0], count)
    shares = _shares(scaled[:, varies], wanted[:, 0], groups)
    chance = _chance(table, inputs, usable)
    bar = float(np.median(bars[np.isfinite(bars)])) if np.isfinite(bars).any() else math.nan
    found = []
    for at, name in enumerate(names):
        share, rank = float(shares[at]), float(ranks[at])
        effect = math.sqrt(share) * float(spread[0])
        significant = None if chance is None else share > chance[0] or abs(rank) > chance[1]
        resolved = None if math.isnan(bar * effect) else effect > bar
        slope = float(slopes[at])
        found.append(Correlation(name, share, rank, slope, significant, effect, resolved))
    # NaN, too few runs for a share, would leave the order to chance.
    found.sort(key=lambda item: -abs(item.spearman if math.isnan(item.share) else item.share))
    return tuple(found), r_squared, (*notes, *note, *_correlation_notes(found, r_squared))


def _correlation_notes(found: Sequence[Correlation], r_squared: float) -> list[str]:
    notes = []
    if r_squared < LEAST_R_SQUARED:
        notes.append(
            f"a linear fit explains only {100 * r_squared:.0f} % of the metric's variance: its "
            "coefficients say little; the shares count, which take in an optimum within the range, "
            "and the rank correlations where the metric rises or falls throughout"
        )
    unresolved = [item.key for item in found if item.resolved is False]
    if unresolved:
        notes.append(
            "not resolved, what goes with them lies below the error bars of the runs: "
            f"{', '.join(unresolved)}"
        )
    return notes


def _means(values: FloatArray, groups: IntArray) -> FloatArray:
    """Give each run the mean of its group; `values` has the shape (runs, columns)."""
    count = np.bincount(groups).astype(float)
    means = [np.bincount(groups, weights=column) / count for column in values.T]
    return np.column_stack(means)[groups]


def _standardise(
    values: FloatArray, groups: IntArray
) -> tuple[FloatArray, FloatArray, npt.NDArray[np.bool_]]:
    """Take out the means of the groups and scale each column to a standard deviation of 1.

    Also gives these deviations, and which columns vary at all.
    """
    centered = values - _means(values, groups)
    spread = centered.std(axis=0)
    varies = spread > _ROUNDING * np.abs(values).max(axis=0)
    return centered / np.where(varies, spread, 1.0), spread, varies


def _rank_correlation(x: FloatArray, y: FloatArray, groups: IntArray) -> FloatArray:
    """Correlate the ranks within the groups, as parts of the groups' sizes."""
    ranks: FloatArray = np.empty((len(y), x.shape[1] + 1))
    for group in range(int(groups.max()) + 1):
        here = groups == group
        ranked = rankdata(np.hstack((x[here], y[here])), axis=0)
        ranks[here] = (ranked - ranked.mean(axis=0)) / len(ranked)
    norms = np.sqrt((ranks**2).sum(axis=0))
    products = ranks[:, :-1].T @ ranks[:, -1]
    return np.asarray(products / (norms[:-1] * norms[-1]))


def _fit(x: FloatArray, y: FloatArray, groups: int) -> tuple[FloatArray, float, list[str]]:
    """Fit y by the columns of x, all standardised; NaN where they do not determine the fit."""
    if len(y) <= x.shape[1] + groups:
        note = f"{len(y)} runs are too few for a linear fit in {x.shape[1]} numbers"
        return np.full(x.shape[1], np.nan), math.nan, [note]
    slopes, _, rank, _ = np.linalg.lstsq(x, y, rcond=None)
    r_squared = float(1.0 - ((y - x @ slopes) ** 2).sum() / (y**2).sum())
    if rank < x.shape[1]:
        note = "numbers that vary together have no standardised coefficients of their own"
        return np.full(x.shape[1], np.nan), r_squared, [note]
    return np.asarray(slopes, dtype=float), r_squared, []


def _shares(x: FloatArray, y: FloatArray, groups: IntArray) -> FloatArray:
    """Give R^2 of a parabola in each column; all are standardised within the groups."""
    if len(y) <= 3 + int(groups.max()):
        return np.full(x.shape[1], np.nan)
    squares = x**2 - _means(x**2, groups)
    shares = []
    for first, second in zip(x.T, squares.T, strict=True):
        parabola = np.column_stack((first, second))
        rest = y - parabola @ np.linalg.lstsq(parabola, y, rcond=None)[0]
        shares.append(max(0.0, 1.0 - float(rest @ rest) / float(y @ y)))
    return np.array(shares)


def _chance(
    table: Table, inputs: Sequence[str], usable: npt.NDArray[np.bool_]
) -> tuple[float, float] | None:
    """Give the share and the rank correlation that chance reaches; None without samples.

    One in forty reaches each, so that one in twenty reaches either. The share of a parabola that
    means nothing has the beta distribution with 1 and (n - 3)/2, the distribution function of
    which is 1 - (1 - share)^((n - 3)/2); a rank correlation is normal with variance 1/(n - 1).
    """
    if SAMPLE not in inputs:
        return None
    tail = (1.0 - LEVEL) / 2.0
    count = np.unique(table[SAMPLE][usable]).size  # Corners repeat the samples.
    share = 1.0 - tail ** (2.0 / (count - 3)) if count > 3 else 1.0
    return share, normal_quantile(1.0 - tail) / math.sqrt(max(count - 1, 1))
