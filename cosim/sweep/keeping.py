"""Which runs of a sweep are kept whole: the worst, and those that failed."""

import os
from collections.abc import Mapping
from typing import Any

import numpy as np

from cosim import archive
from cosim.sweep.batches import DONE
from cosim.sweep.goal import ASSIGNMENT_ERROR, make_goal
from cosim.sweep.record import SWEEP_KINDS, SweepRecord
from cosim.sweep.work import ALL


def kept_whole(path: str | os.PathLike[str], record: SweepRecord | None = None) -> set[int] | None:
    """Tell which runs of an archived sweep are kept whole.

    Parameters
    ----------
    path : path
        The archive.
    record : SweepRecord or None
        Its plan, of which the metric and the number to keep are taken; None reads it.

    Returns
    -------
    set of int or None
        Their numbers, for `cosim.archive.consolidate`; None for all, as in an archive of single
        runs.

    Raises
    ------
    ArchiveError
        If the archive cannot be read.
    """
    plan = archive.read_plan(path, SWEEP_KINDS) if record is None else record
    if not isinstance(plan, SweepRecord) or plan.keep == "all":
        return None
    metric = metric_of(plan)
    return whole_numbers(read_ranks(path, metric), metric, keep_of(plan))


def read_ranks(path: str | os.PathLike[str], metric: str) -> dict[str, Any]:
    """Read who is done, and how well.

    Parameters
    ----------
    path : path
        The archive.
    metric : str
        Column that ranks the runs.

    Returns
    -------
    dict of str to ndarray, each of shape (runs,)
        The columns "id", "status" and the metric; without that where no run is done.

    Raises
    ------
    ArchiveError
        If the archive cannot be read.
    """
    table = archive.read_table(path, columns=("id", "status"))
    if table and (table["status"] == DONE).any():
        table = archive.read_table(path, columns=("id", "status", metric))
    return table


def metric_of(record: SweepRecord) -> str:
    """Give the column that ranks the runs of a sweep.

    Parameters
    ----------
    record : SweepRecord
        Its plan.

    Returns
    -------
    str
    """
    if record.fidelity == ASSIGNMENT_ERROR:
        return ASSIGNMENT_ERROR
    return f"{record.fidelity}.average_gate_fidelity"


def keep_of(record: SweepRecord) -> int:
    """Give how many of the worst runs of a sweep are kept whole.

    Parameters
    ----------
    record : SweepRecord
        Its plan.

    Returns
    -------
    int
        `ALL` for every one.
    """
    return ALL if record.keep == "all" else int(record.keep)


def whole_numbers(table: Mapping[str, Any], metric: str, keep: int) -> set[int]:
    """Tell which runs of a sweep are kept whole: those that failed, and the worst.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        The columns "id", "status" and, if a run is done, the metric.
    metric : str
        Column that ranks the runs.
    keep : int
        How many of the worst.

    Returns
    -------
    set of int
        Their numbers.
    """
    if not table:
        return set()
    numbers, done = table["id"], table["status"] == DONE
    whole = set(numbers[~done].tolist())
    if metric in table and keep > 0:
        losses = np.where(done, make_goal(metric).metric(table[metric]), -np.inf)
        order = np.argsort(-losses, kind="stable")[:keep]
        whole |= set(numbers[order][np.isfinite(losses[order])].tolist())
    return whole
