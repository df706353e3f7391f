"""What the runs of a sweep tell: yield, quantiles, the worst runs, corners, sensitivities."""

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from cosim.errors import InputError, near_names
from cosim.sweep.batches import DONE
from cosim.sweep.columns import CORNER, PERTURBED, SAMPLE, Table, encode, plain
from cosim.sweep.correlation import Correlation, correlations
from cosim.sweep.goal import Goal, judged
from cosim.sweep.intervals import LEVEL, Yield, make_yield
from cosim.sweep.sensitivity import Sensitivity, Swing, one_at_a_time
from cosim.waveform import FloatArray

PERCENTS = (0, 5, 25, 50, 75, 95, 100)
BoolArray = npt.NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class RankedRun:
    """One of the worst runs.

    Parameters
    ----------
    id : int
        Its number in the archive.
    metric : float
        What is judged.
    error_bar : float
        Of the metric; NaN where there is none.
    inputs : dict
        The plan's columns, in SI units.
    """

    id: int
    metric: float
    error_bar: float
    inputs: dict[str, float | str]


@dataclass(frozen=True, slots=True)
class CornerRow:
    """The runs of one corner.

    Parameters
    ----------
    name : str
        The corner.
    runs : int
        Rows of the table.
    failed : int
        Those without a metric.
    median, worst : float
        Of the metric; NaN where no run has one.
    limit_yield : Yield or None
        Against the limit, among the runs with a metric; None without limit or runs.
    """

    name: str
    runs: int
    failed: int
    median: float
    worst: float
    limit_yield: Yield | None


@dataclass(frozen=True, slots=True)
class SweepSummary:
    """What a sweep tells.

    Parameters
    ----------
    goal : Goal
        What is judged.
    metric : str
        Its name for people.
    unit : str
        Its unit; empty for a plain number.
    inputs : tuple of str
        The plan's columns.
    units : dict
        Unit by column of the plan; columns without a unit are left out.
    planned, reported, missing : int
        Runs of the plan; rows of the table; the difference.
    finished, failed : int
        Runs with a metric; rows without one.
    statuses : dict
        Rows by status.
    limit_yield : Yield or None
        Runs that keep the limit, among those with a metric; None without limit or runs.
    pessimistic_yield : Yield or None
        The same with failed runs counted as missing the limit; None if none has failed.
    everywhere_yield : Yield or None
        Samples that keep the limit at all corners and points of the grid, a failed run counted
        as missing it, and samples with runs still to be made left out; None unless samples recur.
    undecided, undecided_passed : int
        Runs whose metric lies within its own error bar of the limit, and how many of them are
        counted as keeping it.
    quantiles : dict
        Metric by percent of the runs, "0" the best to "100" the worst; empty without runs.
    mean, standard_deviation : float
        Of the metric; NaN without runs, the second also for a single one.
    worst : tuple of RankedRun
        The runs with the greatest metric.
    corners : tuple of CornerRow
        One for each corner, in the order of the table.
    sensitivities : tuple of Sensitivity
        From runs that move one number at a time, over all points.
    swings : tuple of Swing
        The same point by point.
    correlations : tuple of Correlation
        From samples, or a grid without samples.
    r_squared : float
        Of the linear fit behind the correlations.
    notes : tuple of str
        What the reader must know.
    """

    goal: Goal
    metric: str
    unit: str
    inputs: tuple[str, ...]
    units: dict[str, str]
    planned: int
    reported: int
    missing: int
    finished: int
    failed: int
    statuses: dict[str, int]
    limit_yield: Yield | None
    pessimistic_yield: Yield | None
    everywhere_yield: Yield | None
    undecided: int
    undecided_passed: int
    quantiles: dict[str, float]
    mean: float
    standard_deviation: float
    worst: tuple[RankedRun, ...]
    corners: tuple[CornerRow, ...]
    sensitivities: tuple[Sensitivity, ...]
    swings: tuple[Swing, ...]
    correlations: tuple[Correlation, ...]
    r_squared: float
    notes: tuple[str, ...]


def summarise(
    table: Table,
    inputs: Sequence[str],
    goal: Goal,
    worst: int = 5,
    planned: int | None = None,
    units: Mapping[str, str] | None = None,
    level: float = LEVEL,
) -> SweepSummary:
    """Say what the runs of a sweep tell.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        From `cosim.archive.read_table`: "id", "status", the plan's columns and the results'.
    inputs : sequence of str
        The plan's columns, `SweepPlan.columns`.
    goal : Goal
        What is judged.
    worst : int
        How many of the worst runs to name.
    planned : int, optional
        Runs of the plan; default: the rows of the table.
    units : mapping of str, optional
        Unit by column, from `cosim.archive.read_units`.
    level : float
        Confidence level of the intervals.

    Returns
    -------
    SweepSummary
        Of a table without finished runs one that says so.

    Raises
    ------
    InputError
        If a column does not exist, the one to be judged holds no numbers, or the level is not
        between 0 and 1.
    """
    units = units or {}
    for name in ("id", "status", *inputs):
        if name not in table and table:
            raise InputError(
                f"the table of the runs has no column '{name}'", hint=near_names(name, table)
            )
    rows = len(table["id"]) if table else 0
    if not rows:
        # The archive of a sweep that has just begun has no columns yet.
        table = {name: np.array([]) for name in ("id", "status", goal.column, *inputs)}
    metric, bars = judged(table, goal)
    good = np.isfinite(metric)
    finished, failed = int(good.sum()), int(rows - good.sum())
    passed = metric <= goal.limit
    limited = not math.isnan(goal.limit)
    close = np.abs(metric - goal.limit) <= bars
    independent = _independent(table, inputs)
    done = Counter(table["status"].tolist())
    overall = make_yield(int(passed.sum()), finished, independent, level) if limited else None
    pessimistic = None
    if limited and failed:
        pessimistic = make_yield(int(passed.sum()), rows, independent, level)
    everywhere = None
    if limited and rows and SAMPLE in inputs and not independent:
        everywhere = _everywhere(table[SAMPLE], passed, level)
    told = _influences(table, inputs, metric, bars) if finished else ((), (), (), math.nan, ())
    sensitivities, swings, correlated, r_squared, notes = told
    return SweepSummary(
        goal=goal,
        metric=goal.label,
        unit="" if units.get(goal.column) == "1" else units.get(goal.column, ""),
        inputs=tuple(inputs),
        units={name: units[name] for name in inputs if units.get(name, "") not in ("", "1")},
        planned=rows if planned is None else planned,
        reported=rows,
        missing=0 if planned is None else planned - rows,
        finished=finished,
        failed=failed,
        statuses=dict(done.most_common()),
        limit_yield=overall,
        pessimistic_yield=pessimistic,
        everywhere_yield=everywhere,
        undecided=int(close.sum()),
        undecided_passed=int((close & passed).sum()),
        quantiles=_quantiles(metric[good]),
        mean=float(metric[good].mean()) if finished else math.nan,
        standard_deviation=float(metric[good].std(ddof=1)) if finished > 1 else math.nan,
        worst=_worst(table, inputs, metric, bars, worst),
        corners=_corners(table, inputs, goal, metric, level),
        sensitivities=sensitivities,
        swings=swings,
        correlations=correlated,
        r_squared=r_squared,
        notes=(
            *_count_notes(goal, rows, planned, finished, done.get(DONE, 0)),
            *_yield_notes(overall, everywhere),
            *(_bar_notes(bars[good]) if limited else ()),
            *notes,
        ),
    )


def _independent(table: Table, inputs: Sequence[str]) -> bool:
    """Whether each run is a random sample of its own."""
    if SAMPLE not in inputs:
        return False
    return bool(np.unique(table[SAMPLE]).size == table[SAMPLE].size)


def _everywhere(samples: npt.NDArray[Any], passed: BoolArray, level: float) -> Yield | None:
    """Count samples; one that has not been run everywhere cannot be judged yet."""
    codes = np.unique(samples, return_inverse=True)[1]
    runs = np.bincount(codes)
    complete = runs == runs.max()
    kept = complete & (np.bincount(codes, weights=passed) == runs)
    return make_yield(int(kept.sum()), int(complete.sum()), True, level)


def _quantiles(metric: FloatArray) -> dict[str, float]:
    if not metric.size:
        return {}
    values = np.percentile(metric, PERCENTS).tolist()
    return {str(percent): value for percent, value in zip(PERCENTS, values, strict=True)}


def _worst(
    table: Table, inputs: Sequence[str], metric: FloatArray, bars: FloatArray, count: int
) -> tuple[RankedRun, ...]:
    order = np.argsort(-metric, kind="stable")  # NaN comes last.
    return tuple(
        RankedRun(
            int(table["id"][at]),
            float(metric[at]),
            float(bars[at]),
            {name: value for name in inputs if (value := plain(table[name][at])) is not None},
        )
        for at in order[:count].tolist()
        if np.isfinite(metric[at])
    )


def _corners(
    table: Table, inputs: Sequence[str], goal: Goal, metric: FloatArray, level: float
) -> tuple[CornerRow, ...]:
    if CORNER not in inputs:
        return ()
    names, codes = encode(table[CORNER])
    rows = []
    for number, name in enumerate(names):
        here = codes == number
        found = metric[here]
        found = found[np.isfinite(found)]
        counted = None
        if not math.isnan(goal.limit):
            part = {SAMPLE: table[SAMPLE][here]} if SAMPLE in inputs else {}
            passed = int((found <= goal.limit).sum())
            counted = make_yield(passed, found.size, _independent(part, list(part)), level)
        median = float(np.median(found)) if found.size else math.nan
        worst = float(found.max()) if found.size else math.nan
        runs = int(here.sum())
        rows.append(CornerRow(name, runs, runs - found.size, median, worst, counted))
    return tuple(rows)


def _influences(
    table: Table, inputs: Sequence[str], metric: FloatArray, bars: FloatArray
) -> tuple[
    tuple[Sensitivity, ...], tuple[Swing, ...], tuple[Correlation, ...], float, tuple[str, ...]
]:
    if PERTURBED in inputs:
        sensitivities, swings, notes = one_at_a_time(table, inputs, metric, bars)
        return sensitivities, swings, (), math.nan, notes
    correlated, r_squared, notes = correlations(table, inputs, metric, bars)
    return (), (), correlated, r_squared, notes


def _count_notes(goal: Goal, rows: int, planned: int | None, finished: int, done: int) -> list[str]:
    notes = []
    failed = rows - finished
    if planned is not None and planned > rows:
        notes.append(f"{planned - rows} of {planned} runs are still to be made")
    if not finished:
        notes.append("no run has finished: there is nothing to summarise")
    if done > finished:
        notes.append(f"{done - finished} runs are done but have no '{goal.column}'")
    if finished and failed:
        notes.append(
            f"{failed} of {rows} runs failed: mean, quantiles and sensitivities are of the others, "
            "which may be the better ones"
        )
    if goal.complement and goal.limit > 0.5:
        notes.append(
            f"the limit {goal.limit:g} is one on the {goal.label}: a fidelity of at least "
            f"{goal.limit:g} is a limit of {1.0 - goal.limit:.3g}"
        )
    return notes


def _yield_notes(overall: Yield | None, everywhere: Yield | None) -> list[str]:
    if overall is None or overall.random:
        return []
    if everywhere is not None:
        return [
            "the samples recur at each corner and point of the grid: the share of all runs is no "
            "probability and has no interval; the yields of the corners, and of the samples that "
            "keep the limit everywhere, have one where the samples do not recur"
        ]
    return [
        "the runs are chosen points, not random samples: the yield is the fraction of these "
        "points, not a probability, and has no confidence interval"
    ]


def _bar_notes(bars: FloatArray) -> list[str]:
    without = int(np.isnan(bars).sum())
    if not without:
        return []
    if without == bars.size:
        return ["the runs have no error bars: what lies within them of the limit is not known"]
    return [f"{without} of {bars.size} runs have no error bar and count as decided"]
