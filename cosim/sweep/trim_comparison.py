"""What the runs of a sweep tell of its trims: yields side by side, and what a trim leaves."""

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from cosim.sweep.columns import (
    CORNER,
    EACH,
    FROZEN,
    SAMPLE,
    TRIM,
    Table,
    encode,
    grid_points,
    plain,
)
from cosim.sweep.goal import Goal, judged
from cosim.sweep.intervals import LEVEL, Yield
from cosim.sweep.statistics import SweepSummary, summarise
from cosim.sweep.trims import PARTS

_RUNS, _AFTER = "trim.netlist_runs", "trim.after"


@dataclass(frozen=True, slots=True)
class KnobSpread:
    """Where the trims have put a knob.

    Parameters
    ----------
    key : str
        The knob.
    low, median, high : float
        Over the trims, in SI units.
    """

    key: str
    low: float
    median: float
    high: float


@dataclass(frozen=True, slots=True)
class TrimPoint:
    """The runs of one trim at one corner and point of the grid.

    Parameters
    ----------
    point : dict
        Corner and numbers of the grid, in SI units; empty where there is one point only.
    runs, failed : int
        Rows of the table, and those without a metric.
    median, worst : float
        Of the metric; NaN where no run has one.
    limit_yield, pessimistic_yield : Yield or None
        Among the runs with a metric, and with failed ones counted as missing the limit; None
        without limit or runs, the second also without failed ones.
    """

    point: dict[str, float | str]
    runs: int
    failed: int
    median: float
    worst: float
    limit_yield: Yield | None
    pessimistic_yield: Yield | None


@dataclass(frozen=True, slots=True)
class TrimPart:
    """The runs of one trim.

    Parameters
    ----------
    trim : str
        "frozen", one calibration for all, or "each", one for each die.
    summary : SweepSummary
        What these runs tell.
    trims : int
        Calibrations that have found something.
    netlist_runs : int
        Runs of the circuit that they took together.
    knobs : tuple of KnobSpread
        What they have found.
    after : float
        Median over them of their own metric, where they were made; NaN without any.
    left : dict of float
        Medians of the parts of it: "resolution" of the knobs, "bounds", "unreached" by any knob,
        and the "rest".
    warnings : dict of int
        What the trims warn of, by its first words, and how many do.
    points : tuple of TrimPoint
        At each corner and point of the grid.
    """

    trim: str
    summary: SweepSummary
    trims: int
    netlist_runs: int
    knobs: tuple[KnobSpread, ...]
    after: float
    left: dict[str, float]
    warnings: dict[str, int]
    points: tuple[TrimPoint, ...]


def compare_trims(
    table: Table,
    inputs: Sequence[str],
    goal: Goal,
    knobs: Sequence[str],
    planned: Mapping[str, int],
    *,
    worst: int = 5,
    units: Mapping[str, str] | None = None,
    level: float = LEVEL,
) -> tuple[TrimPart, ...]:
    """Say what the runs of a sweep tell, by their trims.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        From `cosim.archive.read_table`.
    inputs : sequence of str
        The plan's columns, with "trim".
    goal : Goal
        What is judged.
    knobs : sequence of str
        Columns of the knobs.
    planned : mapping of int
        Runs of the plan by trim.
    worst : int
        How many of the worst runs to name.
    units : mapping of str, optional
        Unit by column.
    level : float
        Confidence level of the intervals.

    Returns
    -------
    tuple of TrimPart
        One for each trim of the plan, that of each die last.

    Raises
    ------
    InputError
        As `cosim.sweep.statistics.summarise`.
    """
    others = [name for name in inputs if name != TRIM]
    found = []
    for trim in (name for name in (FROZEN, EACH) if name in planned):
        part = runs_of_trim(table, trim)
        summary = summarise(part, others, goal, worst, planned[trim], units, level)
        first = _first_of_trims(part, others, trim)
        own = {name: _finite(part, name, first) for name in (*knobs, _RUNS, _AFTER)}
        found.append(
            TrimPart(
                trim=trim,
                summary=summary,
                trims=own[_RUNS].size,
                netlist_runs=int(own[_RUNS].sum()),
                knobs=tuple(_spread(name, own[name]) for name in knobs if own[name].size),
                after=float(np.median(own[_AFTER])) if own[_AFTER].size else float("nan"),
                left={
                    name: float(np.median(values))
                    for name in PARTS
                    if (values := _finite(part, f"trim.{name}", first)).size
                },
                warnings=_warnings(part, first),
                points=_points(part, others, goal, level),
            )
        )
    return tuple(found)


def runs_of_trim(table: Table, trim: str) -> dict[str, npt.NDArray[Any]]:
    """Take the runs of one trim out of a table.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        The runs; it may be empty.
    trim : str
        "frozen" or "each".

    Returns
    -------
    dict of ndarray
        The same columns; empty without such runs.
    """
    here = table[TRIM] == trim if TRIM in table else np.zeros(0, dtype=bool)
    return {name: values[here] for name, values in table.items()} if here.any() else {}


def _first_of_trims(table: Table, inputs: Sequence[str], trim: str) -> npt.NDArray[np.int64]:
    """Give a run of each trim that has found something."""
    if not table or _RUNS not in table:
        return np.zeros(0, dtype=np.int64)
    known = np.flatnonzero(np.isfinite(table[_RUNS].astype(float)))
    if not known.size or trim == FROZEN:
        return known[:1]
    names = [name for name in (CORNER, SAMPLE) if name in inputs]
    _, first = grid_points({name: table[name][known] for name in (*names, "id")}, names)
    return known[first]


def _finite(table: Table, name: str, rows: npt.NDArray[np.int64]) -> npt.NDArray[np.float64]:
    return table[name][rows].astype(float) if name in table else np.zeros(0)


def _warnings(table: Table, rows: npt.NDArray[np.int64]) -> dict[str, int]:
    """Count the warnings of trims; what follows the first colon is of one die alone."""
    if "trim.warnings" not in table:
        return {}
    counts: Counter[str] = Counter()
    for text in table["trim.warnings"][rows].tolist():
        heads = (line.partition(":")[0] for line in str(text).splitlines())
        # What the run itself warns of stands in its row.
        counts.update({head for head in heads if head != "the trimmed run"})
    return dict(counts.most_common())


def _spread(key: str, values: npt.NDArray[np.float64]) -> KnobSpread:
    return KnobSpread(key, float(values.min()), float(np.median(values)), float(values.max()))


def _points(table: Table, inputs: Sequence[str], goal: Goal, level: float) -> tuple[TrimPoint, ...]:
    if not table:
        return ()
    names = [name for name in inputs if name != SAMPLE and not _is_drawn(table, name)]
    codes, first = grid_points(table, names)
    found = []
    for code, row in enumerate(first.tolist()):
        part = {name: values[codes == code] for name, values in table.items()}
        # A point without any result has no column of it either.
        metric = judged(part, goal)[0]
        own = summarise(part, [SAMPLE] if SAMPLE in inputs else [], goal, 0, level=level)
        here = {name: value for name in names if (value := plain(table[name][row])) is not None}
        median = float(np.nanmedian(metric)) if own.finished else float("nan")
        most = float(np.nanmax(metric)) if own.finished else float("nan")
        yields = (own.limit_yield, own.pessimistic_yield)
        found.append(TrimPoint(here, own.reported, own.failed, median, most, *yields))
    return tuple(found)


def _is_drawn(table: Table, name: str) -> bool:
    """Whether a column belongs to the samples: none of its values is had by two of them."""
    if SAMPLE not in table or name == CORNER:
        return False
    if np.unique(table[SAMPLE]).size < 2:
        return False
    first = grid_points(table, [name, SAMPLE])[1]
    return first.size == len(encode(table[name])[0])
