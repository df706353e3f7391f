"""Runs of an archived sweep made again: one alone, or a sample to check the archive by."""

import math
import os
import tomllib
from dataclasses import dataclass, replace

import numpy as np

from cosim import archive
from cosim.dispatch import run
from cosim.errors import ArchiveError, InputError, SimulationError
from cosim.sweep.batches import DONE
from cosim.sweep.goal import ASSIGNMENT_ERROR, judged, make_goal
from cosim.sweep.plan import SweepPlan
from cosim.sweep.planning import make_sweep
from cosim.sweep.record import SWEEP_KINDS, SweepRecord, check_same_plan, make_sweep_record
from cosim.sweep.simulated import AnyResult
from cosim.sweep.trims import Trim, find_trim, trimmed_bench
from cosim.testbench import load_testbench, make_testbench

# Two computers round differently in their mathematical libraries; anything larger is a difference.
ROUNDING = 1e-9
# Newton's iteration in ngspice makes of that a change of a waveform of 1e-6 and of the density of
# injected noise, a difference of two runs, of 1e-4. A rare assignment error changes by up to ten
# times as much, in parts of itself.
READOUT_ROUNDING = 1e-3

VIEWS = ("as_simulated", "free_frame", "calibrated")


@dataclass(frozen=True, slots=True)
class Repetition:
    """A run of a sweep that was made again.

    Parameters
    ----------
    number : int
        Its number in the archive.
    difference : float
        Largest difference of the three average gate fidelities to the archived ones, or that of
        the assignment error; NaN where one of two is none, or the repetition failed.
    allowed : float
        What is put down to rounding, or to the numerical errors that the error bars cover.
    error : str
        Message of a repetition that failed; mostly empty.
    what : str
        What is compared, for people.
    """

    number: int
    difference: float
    allowed: float
    error: str = ""
    what: str = "fidelities"

    @property
    def same(self) -> bool:
        """Whether the archive and the repetition agree."""
        return self.difference <= self.allowed


def read_record(path: str | os.PathLike[str]) -> SweepRecord:
    """Read the plan that the archive of a sweep was begun with.

    Parameters
    ----------
    path : path
        The archive.

    Returns
    -------
    SweepRecord

    Raises
    ------
    ArchiveError
        If there is no such archive, or it is not one of a sweep.
    """
    record = archive.read_plan(path, SWEEP_KINDS)
    if not isinstance(record, SweepRecord):
        raise ArchiveError(
            f"{os.fspath(path)} holds single runs and no sweep",
            hint="give the archive of a sweep, from `qcosim sweep`",
        )
    return record


def archived_plan(
    path: str | os.PathLike[str], testbench: str | os.PathLike[str] | None = None
) -> SweepPlan:
    """Make the plan of an archived sweep again, from the deck where it stands now.

    Parameters
    ----------
    path : path
        The archive.
    testbench : path or None
        The testbench's file, where it has moved; None takes the archived text and folder.

    Returns
    -------
    SweepPlan
        The same as the archived one.

    Raises
    ------
    ArchiveError
        If the testbench, the deck or another file is not what it was; it names what changed.
    InputError
        If one of them cannot be read.
    """
    record = read_record(path)
    if testbench is not None:
        bench = load_testbench(testbench)
    else:
        tables = tomllib.loads(record.testbench)
        bench = make_testbench(tables, folder=record.folder)
        bench = replace(bench, source=record.source, circuit=record.circuit)
    plan = make_sweep(bench)
    check_same_plan(record, make_sweep_record(plan, bench), os.fspath(path))
    return plan


def rerun(
    path: str | os.PathLike[str],
    number: int,
    *,
    testbench: str | os.PathLike[str] | None = None,
) -> AnyResult:
    """Make one run of an archived sweep again, alone, with all that a single run gives.

    Parameters
    ----------
    path : path
        The archive.
    number : int
        Number of the run, from 1; it need not have been made yet. Its trim is made again too.
    testbench : path or None
        As in `archived_plan`.

    Returns
    -------
    GateResult, ReadoutResult or DecisionResult

    Raises
    ------
    ArchiveError
        As `archived_plan`.
    InputError
        If there is no such run.
    SimulationError
        If the run fails.
    """
    return _rerun(archived_plan(path, testbench), number, {})


def _rerun(plan: SweepPlan, number: int, trims: dict[str, Trim]) -> AnyResult:
    if not 1 <= number <= len(plan):
        raise InputError(f"the sweep has the runs 1 to {len(plan)}, there is no run {number}")
    one = plan.run(number - 1)
    if one.trim and one.trim_key not in trims:
        trims[one.trim_key] = find_trim(plan, one)
    return run(trimmed_bench(plan, one, trims))


def repeat_sample(
    path: str | os.PathLike[str],
    count: int,
    *,
    seed: int = 1,
    testbench: str | os.PathLike[str] | None = None,
) -> tuple[Repetition, ...]:
    """Make a random sample of the finished runs of a sweep again and compare.

    Parameters
    ----------
    path : path
        The archive.
    count : int
        How many runs; all if there are fewer.
    seed : int
        Of the choice.
    testbench : path or None
        As in `archived_plan`.

    Returns
    -------
    tuple of Repetition
        In the order of the numbers.

    Raises
    ------
    ArchiveError
        As `archived_plan`.
    InputError
        If the testbench or the deck cannot be read.
    """
    plan = archived_plan(path, testbench)
    goals = [make_goal(column) for column in _compared(read_record(path))]
    columns = [goal.column for goal in goals]
    table = archive.read_table(path, columns=("id", "status"))
    if not table or not (table["status"] == DONE).any():
        return ()
    table = archive.read_table(path)
    done = np.flatnonzero(table["status"] == DONE)
    chosen = np.random.default_rng(seed).choice(done, min(count, done.size), replace=False)
    what = "assignment errors" if plan.is_readout else "fidelities"
    bars = np.array([judged(table, goal)[1] for goal in goals])
    found = []
    trims: dict[str, Trim] = {}
    for at in sorted(chosen.tolist()):
        number = int(table["id"][at])
        kept = [float(table[column][at]) for column in columns]
        rounding = READOUT_ROUNDING * kept[0] if plan.is_readout else ROUNDING
        wide = float(np.nanmax([ROUNDING, rounding, *bars[:, at]]))
        try:
            cells, _ = archive.cells_of(_rerun(plan, number, trims))
        except (InputError, SimulationError) as error:
            found.append(Repetition(number, math.nan, wide, str(error)))
            continue
        made = [float(cells[column]) for column in columns]
        # The greatest of numbers with a NaN among them is NaN, and then they are not the same.
        difference = float(np.max(np.abs(np.subtract(made, kept))))
        found.append(Repetition(number, difference, wide, what=what))
    return tuple(found)


def _compared(record: SweepRecord) -> tuple[str, ...]:
    if record.fidelity == ASSIGNMENT_ERROR:
        return (ASSIGNMENT_ERROR,)
    return tuple(f"{view}.average_gate_fidelity" for view in VIEWS)
