"""What moving one input of a sweep at a time does to its metric."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from cosim.sweep.columns import PERTURBED, SAMPLE, Table, encode, grid_points, plain
from cosim.waveform import FloatArray

MOST_SWINGS = 200


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
        for row, runs in enumerate(
            (here & (values < centers[codes]), nominal, here & (values > centers[codes]))
        ):
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
    sizes = np.where(usable.sum(axis=0) > 1, found[most, columns] - found[least, columns], np.nan)
    bars = errors[most, columns] + errors[least, columns]
    swings = []
    for at in np.argsort(-sizes, kind="stable").tolist():  # NaN comes last.
        resolved = None if math.isnan(bars[at] + sizes[at]) else bool(sizes[at] > bars[at])
        swings.append(
            Swing(
                key,
                points[at],
                float(places[0, at]),
                float(places[1, at]),
                float(places[2, at]),
                float(found[0, at]),
                float(found[1, at]),
                float(found[2, at]),
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


def _swing_notes(sensitivities: Sequence[Sensitivity], swings: Sequence[Swing]) -> tuple[str, ...]:
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
