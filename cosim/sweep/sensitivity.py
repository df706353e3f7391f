"""What of the inputs of a sweep moves its metric, and by how much."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.stats import rankdata

from cosim.sweep.intervals import LEVEL, normal_quantile
from cosim.waveform import FloatArray

CORNER, SAMPLE, PERTURBED = "corner", "sample", "perturbed"
# Below this a linear fit leaves too much unexplained for its coefficients to rank the inputs: a
# usual rule in sensitivity analysis.
LEAST_R_SQUARED = 0.7
MOST_SWINGS = 200
# A spread below this part of the values themselves is that of rounding.
_ROUNDING = 1e-12

Table = Mapping[str, npt.NDArray[Any]]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Swing:
    """What moving one number down and up does at one corner and point of the grid.

    Parameters
    ----------
    key : str
        The number that is moved.
    point : dict
        Corner and numbers of the grid, in SI units; empty where there is one point only.
    low_input, nominal_input, high_input : float
        Values of the number, in SI units; NaN where a run is missing.
    low, nominal, high : float
        The metric there; NaN where a run is missing or has failed.
    derivative : float
        Central difference (high - low)/(high_input - low_input): metric per SI unit. Its error is
        h^2 f'''/6 for the step h, to leading order.
    swing : float
        Greatest less least of the three metrics.
    resolved : bool or None
        Whether the swing exceeds the sum of the error bars of the two runs it lies between; None
        if these have none.
    """

    key: str
    point: dict[str, float | str]
    low_input: float
    nominal_input: float
    high_input: float
    low: float
    nominal: float
    high: float
    derivative: float
    swing: float
    resolved: bool | None


@dataclass(frozen=True, slots=True)
class Sensitivity:
    """What moving one number does over all corners and points of the grid.

    Parameters
    ----------
    key : str
        The number that is moved.
    points : int
        Corners and points of the grid at which there is a swing.
    derivative : float
        Mean of the central differences: metric per SI unit.
    swing : float
        The largest swing.
    resolved : bool or None
        Whether the largest swing exceeds its error bars; None if there are none.
    largest : Swing
        Where the swing is largest.
    """

    key: str
    points: int
    derivative: float
    swing: float
    resolved: bool | None
    largest: Swing


@dataclass(frozen=True, slots=True)
class Correlation:
    """How the metric goes with one number over the samples, or the points of a grid.

    Corners shift the metric as a whole; that is taken out first, so that the numbers say what
    happens within a corner.

    Parameters
    ----------
    key : str
        The number that varies.
    spearman : float
        Rank correlation, -1 to 1; with several corners that of the ranks within each.
    significant : bool or None
        Whether the rank correlation is larger than independent samples give by chance in 95 % of
        all cases: |rho| sqrt(n - 1) > 1.96, n the number of different samples. None over a grid,
        where nothing is left to chance.
    standardised : float
        Coefficient of the number in a linear fit over all that varies, times its standard
        deviation, over that of the metric; NaN where the fit does not determine it.
    effect : float
        The same in units of the metric: its change per standard deviation of the number.
    resolved : bool or None
        Whether the effect exceeds the median error bar of the runs; None if there are none, or
        there is no effect.
    """

    key: str
    spearman: float
    significant: bool | None
    standardised: float
    effect: float
    resolved: bool | None


def encode(values: npt.NDArray[Any]) -> tuple[list[Any], IntArray]:
    """Number the different entries of a column.

    Parameters
    ----------
    values : ndarray, shape (runs,)
        Texts or numbers.

    Returns
    -------
    list
        The different entries, in the order of their first appearance for texts, sorted for
        numbers.
    ndarray of int, shape (runs,)
        The place of each run's entry in that list.
    """
    if values.dtype.kind in "fiub":
        different, codes = np.unique(values, return_inverse=True)
        return different.tolist(), codes.astype(np.int64)
    # Sorting objects, as numpy does to find the different ones, takes ten times as long.
    places: dict[str, int] = {}
    numbers = [places.setdefault(str(value), len(places)) for value in values.tolist()]
    return list(places), np.array(numbers, dtype=np.int64)


def grid_points(table: Table, names: Sequence[str]) -> tuple[IntArray, IntArray]:
    """Number the different combinations of some columns.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        The runs, at least one.
    names : sequence of str
        The columns.

    Returns
    -------
    codes : ndarray of int, shape (runs,)
        Number of each run's combination.
    first : ndarray of int, shape (combinations,)
        A run of each combination.
    """
    codes = np.zeros(len(next(iter(table.values()))), dtype=np.int64)
    for name in names:
        different, more = encode(table[name])
        # Renumbered after each column, so that the product never overflows.
        codes = np.unique(codes * len(different) + more, return_inverse=True)[1]
    _, first, codes = np.unique(codes, return_index=True, return_inverse=True)
    return codes.astype(np.int64), first.astype(np.int64)


def one_at_a_time(
    table: Table, inputs: Sequence[str], metric: FloatArray, bars: FloatArray
) -> tuple[tuple[Sensitivity, ...], tuple[Swing, ...], tuple[str, ...]]:
    """Rank numbers by what moving each of them alone does to the metric.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        The runs, at least one; "perturbed" names the number that is moved in a run, "" at the
        nominal point.
    inputs : sequence of str
        The plan's own columns.
    metric, bars : ndarray, shape (runs,)
        Metric and error bar of each run; NaN where there is none.

    Returns
    -------
    tuple of Sensitivity
        Over all points, the largest swing first; numbers without any swing last.
    tuple of Swing
        Point by point, the largest first; at most `MOST_SWINGS`.
    tuple of str
        What the reader must know.
    """
    names, moved = encode(table[PERTURBED])
    keys = [name for name in names if name]
    fixed = [name for name in inputs if name not in (*keys, PERTURBED, SAMPLE)]
    codes, first = grid_points(table, fixed)
    sensitivities: list[Sensitivity] = []
    swings: list[Swing] = []
    for key in keys:
        values = table[key].astype(float)
        here = moved == names.index(key)
        nominal = moved == names.index("") if "" in names else np.zeros_like(here)
        # Every run but those that move the number tells its nominal value.
        centers = np.full(first.size, np.nan)
        centers[codes[~here]] = values[~here]
        places: FloatArray = np.full((3, first.size), np.nan)
        found, errors = places.copy(), places.copy()
        for row, runs in enumerate((here & (values < centers[codes]), nominal,
                                    here & (values > centers[codes]))):
            places[row, codes[runs]] = values[runs]
            found[row, codes[runs]] = metric[runs]
            errors[row, codes[runs]] = bars[runs]
        several = first.size > 1
        points = [_point(table, fixed, at) if several else {} for at in first.tolist()]
        ranked = _swings(key, points, places, found, errors)
        sensitivities.append(_overall(key, ranked))
        swings += [item for item in ranked if not math.isnan(item.swing)]
    sensitivities.sort(key=lambda item: _last_if_nan(item.swing))
    swings.sort(key=lambda item: _last_if_nan(item.swing))
    return tuple(sensitivities), tuple(swings[:MOST_SWINGS]), _swing_notes(sensitivities, swings)


def _point(table: Table, names: Sequence[str], run: int) -> dict[str, float | str]:
    return {name: value for name in names if (value := plain(table[name][run])) is not None}


def plain(value: Any) -> float | str | None:
    """Turn an entry of a column into a plain number or text.

    Parameters
    ----------
    value : object
        The entry.

    Returns
    -------
    float, str or None
        None for a number that does not exist, as it is in JSON.
    """
    if isinstance(value, (float, int, np.number)):
        return None if math.isnan(value) else float(value)
    return str(value)


def _swings(
    key: str,
    points: Sequence[dict[str, float | str]],
    places: FloatArray,
    found: FloatArray,
    errors: FloatArray,
) -> list[Swing]:
    """Make the swings at all points, the largest first; arrays have the shape (3, points)."""
    derivatives = (found[2] - found[0]) / (places[2] - places[0])
    usable = np.isfinite(found)
    least = np.where(usable, found, np.inf).argmin(axis=0)
    most = np.where(usable, found, -np.inf).argmax(axis=0)
    columns = np.arange(found.shape[1])
    sizes = np.where(
        usable.sum(axis=0) > 1, found[most, columns] - found[least, columns], np.nan
    )
    bars = errors[most, columns] + errors[least, columns]
    swings = []
    for at in np.argsort(-sizes, kind="stable").tolist():  # NaN comes last.
        resolved = None if math.isnan(bars[at] + sizes[at]) else bool(sizes[at] > bars[at])
        swings.append(
            Swing(
                key,
                points[at],
                *places[:, at].tolist(),
                *found[:, at].tolist(),
                float(derivatives[at]),
                float(sizes[at]),
                resolved,
            )
        )
    return swings


def _overall(key: str, ranked: Sequence[Swing]) -> Sensitivity:
    derivatives = [item.derivative for item in ranked if not math.isnan(item.derivative)]
    mean = float(np.mean(derivatives)) if derivatives else math.nan
    count = sum(not math.isnan(item.swing) for item in ranked)
    return Sensitivity(key, count, mean, ranked[0].swing, ranked[0].resolved, ranked[0])


def _last_if_nan(size: float) -> float:
    return math.inf if math.isnan(size) else -size


def _swing_notes(
    sensitivities: Sequence[Sensitivity], swings: Sequence[Swing]
) -> tuple[str, ...]:
    notes = []
    unresolved = [item.key for item in sensitivities if item.resolved is False]
    if unresolved:
        notes.append(
            f"not resolved, the swing lies below the error bars of the runs: "
            f"{', '.join(unresolved)}"
        )
    for item in sensitivities:
        at = item.largest
        if item.resolved is not False and (at.low - at.nominal) * (at.high - at.nominal) > 0.0:
            notes.append(
                f"{item.key}: the metric has its {'least' if at.low > at.nominal else 'greatest'} "
                "value between the two moved values, so that its derivative says little"
            )
    silent = [item.key for item in sensitivities if math.isnan(item.swing)]
    if silent:
        notes.append(f"too few runs have finished for a swing: {', '.join(silent)}")
    if len(swings) > MOST_SWINGS:
        notes.append(f"of {len(swings)} swings the {MOST_SWINGS} largest are listed")
    return tuple(notes)


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
        The largest standardised coefficient first, or the largest rank correlation where the
        linear fit explains less than `LEAST_R_SQUARED`.
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
    x, y = x[usable], metric[usable]
    groups = encode(table[CORNER][usable])[1] if CORNER in inputs else np.zeros(y.size, np.int64)
    x, varies = _standardise(x, groups)
    notes = [f"{name} does not vary" for name, moves in zip(names, varies, strict=True) if not moves]
    names = [name for name, moves in zip(names, varies, strict=True) if moves]
    if not names:
        return (), math.nan, tuple(notes)
    spread = float(np.std(y - _means(y[:, np.newaxis], groups)[:, 0]))
    y_scaled, moves = _standardise(y[:, np.newaxis], groups)
    if not moves.all():
        return (), math.nan, (*notes, "the metric is the same in all runs")
    raw = np.column_stack([table[name][usable].astype(float) for name in names])
    rho = _rank_correlation(raw, y, groups)
    slopes, r_squared, note = _fit(x[:, varies], y_scaled[:, 0], int(groups.max()) + 1)
    notes += note
    chance = _chance(table, inputs, usable)
    bar = float(np.median(bars[np.isfinite(bars)])) if np.isfinite(bars).any() else math.nan
    found = [
        Correlation(
            name,
            float(rank),
            None if chance is None else bool(abs(rank) > chance),
            float(slope),
            float(slope) * spread,
            None if math.isnan(bar * slope) else bool(abs(slope) * spread > bar),
        )
        for name, rank, slope in zip(names, rho, slopes, strict=True)
    ]
    linear = r_squared >= LEAST_R_SQUARED
    found.sort(key=lambda item: -abs(item.standardised if linear else item.spearman))
    if r_squared < LEAST_R_SQUARED:
        notes.append(
            f"a linear fit explains only {100 * r_squared:.0f} % of the metric's variance: its "
            "coefficients say little, the rank correlations count where the metric rises or falls "
            "throughout, and an optimum within the range shows in neither"
        )
    unresolved = [item.key for item in found if item.resolved is False]
    if unresolved:
        notes.append(
            "not resolved, one standard deviation changes the metric by less than the runs' "
            f"error bars: {', '.join(unresolved)}"
        )
    return tuple(found), r_squared, tuple(notes)


def _means(values: FloatArray, groups: IntArray) -> FloatArray:
    """Give each run the mean of its group; `values` has the shape (runs, columns)."""
    count = np.bincount(groups).astype(float)
    means = [np.bincount(groups, weights=column) / count for column in values.T]
    return np.column_stack(means)[groups]


def _standardise(values: FloatArray, groups: IntArray) -> tuple[FloatArray, npt.NDArray[np.bool_]]:
    """Take out the means of the groups and scale each column to a standard deviation of 1."""
    centered = values - _means(values, groups)
    spread = centered.std(axis=0)
    varies = spread > _ROUNDING * np.abs(values).max(axis=0)
    return centered / np.where(varies, spread, 1.0), varies


def _rank_correlation(x: FloatArray, y: FloatArray, groups: IntArray) -> FloatArray:
    """Correlate the ranks within the groups, as parts of the groups' sizes."""
    ranks: FloatArray = np.empty((y.size, x.shape[1] + 1))
    for group in range(int(groups.max()) + 1):
        here = groups == group
        ranked = rankdata(np.column_stack((x[here], y[here])), axis=0)
        ranks[here] = (ranked - ranked.mean(axis=0)) / len(ranked)
    norms = np.sqrt((ranks**2).sum(axis=0))
    products = ranks[:, :-1].T @ ranks[:, -1]
    return np.asarray(products / (norms[:-1] * norms[-1]))


def _fit(x: FloatArray, y: FloatArray, groups: int) -> tuple[FloatArray, float, list[str]]:
    """Fit y by the columns of x, all standardised; NaN where they do not determine the fit."""
    if len(y) <= x.shape[1] + groups:
        note = f"{len(y)} runs are too few for a linear fit in {x.shape[1]} numbers"
        return np.full(x.shape[1], np.nan), math.nan, [note]
    slopes, _, rank, _ = np.linalg.lstsq(x, y)
    r_squared = float(1.0 - ((y - x @ slopes) ** 2).sum() / (y**2).sum())
    if rank < x.shape[1]:
        note = "numbers that vary together have no standardised coefficients of their own"
        return np.full(x.shape[1], np.nan), r_squared, [note]
    return slopes, r_squared, []


def _chance(table: Table, inputs: Sequence[str], usable: npt.NDArray[np.bool_]) -> float | None:
    """Give the rank correlation that chance reaches; None without samples."""
    if SAMPLE not in inputs:
        return None
    different = np.unique(table[SAMPLE][usable]).size  # Corners repeat the samples.
    return normal_quantile(LEVEL) / math.sqrt(max(different - 1, 1))
