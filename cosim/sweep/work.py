"""What a worker does with a batch of a sweep: waveforms once, a row of the table for each run."""

import platform
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime

import numpy as np

from cosim.archive import Row, RunInfo, Series, cells_of
from cosim.circuit.confidential import kept_log
from cosim.decks import roots_of
from cosim.errors import InputError
from cosim.result import GateResult
from cosim.sweep.batches import DONE, Batch, Outcome, failed
from cosim.sweep.goal import make_goal
from cosim.sweep.identity import files_of
from cosim.sweep.plan import SweepPlan
from cosim.sweep.planned_run import SweepRun
from cosim.sweep.record import FailedRun
from cosim.sweep.simulated import AnyResult, Simulated, make_result, simulate_groups, what_is_known
from cosim.sweep.trims import Trim, Trims, find_trim, trim_cells
from cosim.waveform import Envelope

ALL = -1
"""In place of a number of runs that are kept whole: every one."""


@dataclass(frozen=True, slots=True)
class Shared:
    """What the runs of a batch have in common.

    Parameters
    ----------
    plan : SweepPlan
        The plan, with the decks of these runs.
    metric : str
        Column that ranks the runs.
    keep : int
        How many of the worst runs of the sweep are kept whole; `ALL` for every one.
    threshold : float
        Infidelity, or assignment error, that a run must reach to be among them, as far as known
        when the batch is sent.
    trims : mapping of Trim
        What has been found before by `SweepRun.trim_key`; the worker finds the others.
    """

    plan: SweepPlan
    metric: str
    keep: int
    threshold: float
    trims: Trims = field(default_factory=dict)


def run_batch(batch: Batch) -> tuple[Outcome, ...]:
    """Run a batch of a sweep: the work that the engines carry.

    Runs that share a waveform share one simulation, and those that differ in the parameters of
    their deck share its load. A trim is found once for all runs of the batch that have it.

    Parameters
    ----------
    batch : Batch
        With `Shared`; the numbers of its tasks are those of the archive, from 1.

    Returns
    -------
    tuple of Outcome
        One for each task, each with a `cosim.archive.Row` as its result, also where it failed.

    Raises
    ------
    InputError
        If a file that the runs read is not what it was when the sweep was planned.
    """
    shared: Shared = batch.shared
    plan = shared.plan
    runs = [plan.run(task.number - 1) for task in batch.tasks]
    check_files(plan, runs)
    trims = dict(shared.trims)
    taken: dict[int, float] = {}  # The time of a trim is that of the first of its runs.
    groups: dict[str, list[SweepRun]] = {}
    for run in runs:
        if run.trim and run.trim_key not in trims:
            trims[run.trim_key] = find_trim(plan, run)
            taken[run.number] = trims[run.trim_key].wall_time
        groups.setdefault(run.waveform_key, []).append(run)
    outcomes: list[Outcome] = []
    results: dict[int, AnyResult] = {}
    shared_by = list(groups.values())
    for members, found in zip(shared_by, simulate_groups(plan, shared_by, trims), strict=True):
        spent = found.wall_time
        for run in members:
            spent += taken.get(run.number, 0.0)
            outcome = _outcome(plan, run, found, trims, spent, results)
            outcomes.append(outcome)
            spent = 0.0
            # No more of them is held than is sent back.
            results = {number: results[number] for number in _worst(results, outcomes, shared)}
    # What was read while the runs were made must not be of another file either.
    check_files(plan, runs)
    for number, result in results.items():
        at = next(k for k, outcome in enumerate(outcomes) if outcome.number == number)
        row = replace(outcomes[at].result, run=result)
        outcomes[at] = replace(outcomes[at], result=row)
    return tuple(outcomes)


def failed_row(plan: SweepPlan, outcome: Outcome) -> Row:
    """Make the row of a run that ended without one: its worker died, or its files changed.

    Parameters
    ----------
    plan : SweepPlan
        The plan.
    outcome : Outcome
        What the engine says of it.

    Returns
    -------
    Row
        With a `FailedRun`.
    """
    run = plan.run(outcome.number - 1)
    return _failed_row(plan, run, outcome, FailedRun("", "", (), "", "", {}))


def check_files(plan: SweepPlan, runs: Sequence[SweepRun]) -> None:
    """Look whether the files that runs read, besides the deck, are as they were planned.

    Parameters
    ----------
    plan : SweepPlan
        The plan.
    runs : sequence of SweepRun
        Some of its runs.

    Raises
    ------
    InputError
        Naming what differs.
    """
    for corner in {plan.corner(run).name: plan.corner(run) for run in runs}.values():
        found = files_of(corner.bench, corner.deck)
        if found != corner.files:
            now, then = found.waveform, corner.files.waveform
            changed = [role for role in then if then[role] != now.get(role)]
            changed += ["line"] if found.line != corner.files.line else []
            raise InputError(
                "a file of the testbench changed while the sweep was running: "
                f"{', '.join(changed)}",
                hint="bring it back as it was, and resume with --retry-failed",
            )


def _outcome(
    plan: SweepPlan,
    run: SweepRun,
    found: Simulated,
    trims: Trims,
    spent: float,
    results: dict[int, AnyResult],
) -> Outcome:
    began = time.perf_counter()
    number = run.number + 1
    trim = trims.get(run.trim_key)
    try:
        result = make_result(plan, run, found, trims)
    # A library that calls sys.exit has failed; it must not end the worker.
    except (Exception, SystemExit) as error:
        outcome = failed(number, error, spent + time.perf_counter() - began)
        known = what_is_known(plan, run, found, trims, error)
        return replace(outcome, result=_failed_row(plan, run, outcome, known, trim))
    outcome = Outcome(number, DONE, wall_time=spent + time.perf_counter() - began)
    results[number] = result
    return replace(outcome, result=_row(plan, run, outcome, result, trim))


def _row(
    plan: SweepPlan, run: SweepRun, outcome: Outcome, result: AnyResult, trim: Trim | None
) -> Row:
    cells, units = cells_of(result)
    own, more = trim_cells(trim)
    cells = {**_own_cells(run), **own, **cells, "warnings": "\n".join(result.warnings)}
    simulator = result.run.versions.get("ngspice", "")
    cells |= {"error": "", "host": platform.node(), "simulator": simulator}
    return Row(
        number=outcome.number,
        kind=type(result).__name__,
        info=RunInfo(outcome.status, result.run.started, outcome.wall_time),
        cells=cells,
        units={**plan.units, **more, **units},
        series={"envelope": _series(result.envelope)} if isinstance(result, GateResult) else {},
    )


def _series(envelope: Envelope) -> Series:
    return Series(
        start=envelope.t0,
        step=envelope.dt,
        # As the archive keeps it: half as much on its way to the parent, and in its memory.
        values=envelope.iq.astype(np.complex64),
        unit=envelope.unit,
        carrier_frequency=envelope.carrier_frequency,
    )


def _own_cells(run: SweepRun) -> dict[str, bool | int | float | str]:
    return {"identity": run.identity, "seed": run.seed, **run.values}


def _failed_row(
    plan: SweepPlan, run: SweepRun, outcome: Outcome, known: FailedRun, trim: Trim | None = None
) -> Row:
    own, more = trim_cells(trim)
    roots = roots_of(plan.corner(run).bench)
    text = outcome.error
    if roots.folders:
        text = (
            "the message is left out, since it may quote a confidential file; `qcosim rerun` "
            "shows it"
        )
    record = replace(known, status=outcome.status, error=text, log=kept_log(outcome.log, roots))
    started = datetime.now().astimezone().isoformat(timespec="seconds")
    return Row(
        number=outcome.number,
        kind="",
        info=RunInfo(outcome.status, started, outcome.wall_time),
        cells={**_own_cells(run), **own, "error": text, "host": platform.node()},
        units={**plan.units, **more},
        series={},  # The default of a row does not pickle.
        run=record,
    )


def _worst(
    results: Mapping[int, AnyResult], outcomes: Sequence[Outcome], shared: Shared
) -> tuple[int, ...]:
    """Give the numbers of the runs that are kept whole."""
    if shared.keep == ALL:
        return tuple(results)
    goal = make_goal(shared.metric)
    losses = {
        outcome.number: goal.metric(float(outcome.result.cells[shared.metric]))
        for outcome in outcomes
        if outcome.number in results
    }
    reached = [number for number, loss in losses.items() if loss >= shared.threshold]
    return tuple(sorted(reached, key=lambda number: -losses[number])[: shared.keep])
