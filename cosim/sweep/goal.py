"""What the runs of a sweep are judged by."""

import math
from dataclasses import dataclass
from typing import TypeVar

import numpy as np

from cosim.errors import InputError, near_names
from cosim.sweep.batches import DONE
from cosim.sweep.columns import Table
from cosim.waveform import FloatArray

ASSIGNMENT_ERROR = "assignment_error"
"""Column that ranks the runs of a readout."""

Number = TypeVar("Number", float, FloatArray)


@dataclass(frozen=True, slots=True)
class Goal:
    """Which column of the table is judged, and what it must keep.

    Parameters
    ----------
    column : str
        A column of numbers.
    complement : bool
        Whether 1 less the column is judged, an infidelity in place of a fidelity. The metric is
        the better the smaller it is.
    limit : float
        What the metric may be at most; NaN where nothing is asked for.
    error_columns : tuple of str
        Columns whose sum is the error bar of `column`; those that the table has not add nothing.
    """

    column: str = "free_frame.average_gate_fidelity"
    complement: bool = True
    limit: float = math.nan
    error_columns: tuple[str, ...] = ("free_frame.error_bar",)

    def __post_init__(self) -> None:
        if math.isinf(self.limit):
            raise InputError(f"the limit on {self.label} must be finite, got {self.limit}")

    @property
    def label(self) -> str:
        """Name of the metric for people."""
        view, dot, name = self.column.rpartition(".")
        name = {"average_gate_fidelity": "F_avg", "process_fidelity": "F_pro"}.get(name, name)
        words = f"infidelity 1 - {name}" if self.complement else name.replace("_", " ")
        return f"{words}, {view.replace('_', ' ')}" if dot else words

    def metric(self, value: Number) -> Number:
        """Give the metric of a value of the column, or of several."""
        return 1.0 - value if self.complement else value


def make_goal(column: str, limit: float = math.nan) -> Goal:
    """Make the goal that suits a column: fidelities are judged by their distance from 1.

    Parameters
    ----------
    column : str
        Column of the table, such as "calibrated.process_fidelity" or "leakage".
    limit : float
        What the metric may be at most, of a fidelity the infidelity.

    Returns
    -------
    Goal

    Raises
    ------
    InputError
        If the limit is not finite.
    """
    view, dot, name = column.rpartition(".")
    bars = {"average_gate_fidelity": "error_bar", "process_fidelity": "process_error_bar"}
    if name in bars:
        return Goal(column, True, limit, (f"{view}{dot}{bars[name]}",))
    # What the time step does to it, and what chance does where noisy runs are counted.
    own = ("numerical_floor", "standard_error") if column == ASSIGNMENT_ERROR else ()
    return Goal(column, False, limit, own)


def judged(table: Table, goal: Goal) -> tuple[FloatArray, FloatArray]:
    """Take the metric of each run out of the table.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        From `cosim.archive.read_table`.
    goal : Goal
        What is judged.

    Returns
    -------
    metric : ndarray, shape (runs,)
        NaN for runs that are not done, or have no such number.
    bars : ndarray, shape (runs,)
        Its error bar; NaN where there is none.

    Raises
    ------
    InputError
        If the table has no such column, or it holds no numbers.
    """
    numbers = [name for name, values in table.items() if values.dtype.kind in "fiu"]
    if goal.column not in table:
        raise InputError(
            f"the table of the runs has no column '{goal.column}' that could be judged",
            hint=near_names(goal.column, numbers),
        )
    if goal.column not in numbers:
        raise InputError(
            f"the column '{goal.column}' holds no numbers", hint="valid are columns of numbers"
        )
    values = table[goal.column].astype(float)
    done = np.asarray(table["status"] == DONE, dtype=bool) & np.isfinite(values)
    metric = np.where(done, goal.metric(values), np.nan)
    found = [table[name].astype(float) for name in goal.error_columns if name in numbers]
    bars = np.full(metric.shape, np.nan)
    if found:
        # A part that does not exist adds nothing; where the others are nothing too, as with a noise
        # that is no matter of chance, there is no bar.
        whole, known = np.nansum(found, axis=0), np.isfinite(found)
        there = done & (known.all(axis=0) | (whole > 0.0))
        bars = np.where(there, whole, np.nan)
    return metric, bars
