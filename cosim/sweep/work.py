"""What a worker does with a batch of a sweep: waveforms once, a row of the table for each run."""

import platform
import time
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime

import numpy as np

from cosim.archive import Row, RunInfo, Series, cells_of
from cosim.capture import Capture, Plan, check_window, make_plan
from cosim.captures import capture_probes
from cosim.circuit.confidential import Roots, kept_lines, kept_log
from cosim.circuit.preparation import prepare
from cosim.decks import roots_of
from cosim.errors import CosimError, InputError, SimulationError
from cosim.gate import Shots, run_gate
from cosim.result import GateResult
from cosim.sweep.batches import DONE, Batch, Outcome, failed
from cosim.sweep.identity import files_of
from cosim.sweep.plan import SweepPlan, SweepRun
from cosim.sweep.record import FailedRun
from cosim.testbench import Testbench
from cosim.waveform import FloatArray, Waveform

ALL = -1
"""In place of a number of runs that are kept whole: every one."""


@dataclass(frozen=True, slots=True)
class Shared:
    """What the runs of a batch have in common.

    Parameters
    ----------
    plan : SweepPlan
        The plan, with the decks of these runs.
    fidelity : str
        Which of the three fidelities ranks the runs.
    keep : int
        How many of the worst runs of the sweep are kept whole; `ALL` for every one.
    threshold : float
        Infidelity that a run must reach to be among them, as far as known when the batch is sent.
    """

    plan: SweepPlan
    fidelity: str
    keep: int
    threshold: float


@dataclass(frozen=True, slots=True)
class _Shot:
    """What the simulator gave for one waveform, or why it gave none."""

    bench: Testbench | None
    plan: Plan | None = None
    shots: Shots | None = None
    error: CosimError | None = None
    wall_time: float = 0.0


def run_batch(batch: Batch) -> tuple[Outcome, ...]:
    """Run a batch of a sweep: the work that the engines carry.

    Runs that share a waveform share one simulation, and those that differ in the parameters of
    their deck share its load.

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
    groups: dict[str, list[SweepRun]] = {}
    for run in runs:
        groups.setdefault(run.waveform_key, []).append(run)
    outcomes: list[Outcome] = []
    results: dict[int, GateResult] = {}
    for members, shot in zip(groups.values(), _shots(plan, list(groups.values())), strict=True):
        spent = shot.wall_time
        for run in members:
            outcome = _outcome(plan, run, shot, spent, results)
            outcomes.append(outcome)
            spent = 0.0
            # No more of them is held than is sent back.
            results = {number: results[number] for number in _worst(results, shared)}
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


def _shots(plan: SweepPlan, groups: Sequence[Sequence[SweepRun]]) -> Iterator[_Shot]:
    """Simulate the waveform of each group of runs."""
    ready = [_ready(plan, members) for members in groups]
    plans = [item.plan for item in ready if item.plan is not None]
    firsts = _Captures(plans)
    # The runs at half the step are a family of their own.
    halved = [
        item.plan.half_step()
        for item in ready
        if item.plan is not None and item.bench is not None and item.bench.accuracy.floor
    ]
    seconds = _Captures(halved)
    for item in ready:
        if item.plan is None or item.bench is None:
            yield item
            continue
        first, spent = firsts.next()
        second = None
        if item.bench.accuracy.floor:
            second, more = seconds.next()
            spent += more
        error = next((shot for shot in (first, second) if isinstance(shot, CosimError)), None)
        shots = None
        if isinstance(first, Capture) and not isinstance(second, CosimError):
            shots = Shots(item.plan, first, second)
        yield replace(item, shots=shots, error=error, wall_time=item.wall_time + spent)


class _Captures:
    """The captures of some plans, made together and handed out one by one."""

    def __init__(self, plans: Sequence[Plan]) -> None:
        self._captures = iter(tuple(_timed(capture_probes(plans))))

    def next(self) -> tuple[Capture | CosimError, float]:
        return next(self._captures)


def _timed(
    captures: Iterator[Capture | CosimError],
) -> Iterator[tuple[Capture | CosimError, float]]:
    """Give each capture with its time in s; a failed one has none of its own."""
    began = time.perf_counter()
    for found in captures:
        spent = time.perf_counter() - began
        if isinstance(found, Capture) and found.result is not None:
            spent = found.result.wall_time + found.result.overhead_time
        yield found, spent
        began = time.perf_counter()


def _ready(plan: SweepPlan, members: Sequence[SweepRun]) -> _Shot:
    """Plan the simulation of runs that share it, by the first whose testbench is in order."""
    began = time.perf_counter()
    shot = _Shot(None)
    for run in members:
        try:
            bench, made = _simulation(plan, run)
        except CosimError as error:
            shot = _Shot(None, error=error)
            continue
        shot = _Shot(bench, made)
        break
    return replace(shot, wall_time=time.perf_counter() - began)


def _simulation(plan: SweepPlan, run: SweepRun) -> tuple[Testbench, Plan | None]:
    bench = plan.testbench(run)
    return bench, None if bench.netlist is None else make_plan(bench, plan.corner(run).deck)


def _outcome(
    plan: SweepPlan, run: SweepRun, shot: _Shot, spent: float, results: dict[int, GateResult]
) -> Outcome:
    began = time.perf_counter()
    number = run.number + 1
    try:
        result = _gate(plan, run, shot)
    # A library that calls sys.exit has failed; it must not end the worker.
    except (Exception, SystemExit) as error:
        outcome = failed(number, error, spent + time.perf_counter() - began)
        known = _known(plan, run, shot, error)
        return replace(outcome, result=_failed_row(plan, run, outcome, known))
    outcome = Outcome(number, DONE, wall_time=spent + time.perf_counter() - began)
    results[number] = result
    return replace(outcome, result=_row(plan, run, outcome, result))


def _gate(plan: SweepPlan, run: SweepRun, shot: _Shot) -> GateResult:
    if shot.bench is None:
        _simulation(plan, run)  # Each of the runs has its own word to say on what is wrong.
    if shot.error is not None:
        raise shot.error
    bench = plan.testbench(run)
    if shot.shots is not None:
        check_window(bench, shot.shots.plan.request.stop)
    return run_gate(bench, shots=shot.shots)


def _row(plan: SweepPlan, run: SweepRun, outcome: Outcome, result: GateResult) -> Row:
    cells, units = cells_of(result)
    cells = {**_own_cells(run), **cells, "warnings": "\n".join(result.warnings)}
    simulator = result.run.versions.get("ngspice", "")
    cells |= {"error": "", "host": platform.node(), "simulator": simulator}
    envelope = result.envelope
    series = Series(
        start=envelope.t0,
        step=envelope.dt,
        # As the archive keeps it: half as much on its way to the parent, and in its memory.
        values=envelope.iq.astype(np.complex64),
        unit=envelope.unit,
        carrier_frequency=envelope.carrier_frequency,
    )
    return Row(
        number=outcome.number,
        kind=type(result).__name__,
        info=RunInfo(outcome.status, result.run.started, outcome.wall_time),
        cells=cells,
        units={**plan.units, **units},
        series={"envelope": series},
    )


def _own_cells(run: SweepRun) -> dict[str, bool | int | float | str]:
    return {"identity": run.identity, "seed": run.seed, **run.values}


def _failed_row(plan: SweepPlan, run: SweepRun, outcome: Outcome, known: FailedRun) -> Row:
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
        cells={**_own_cells(run), "error": text, "host": platform.node()},
        units=plan.units,
        series={},  # The default of a row does not pickle.
        run=record,
    )


def _known(plan: SweepPlan, run: SweepRun, shot: _Shot, error: BaseException) -> FailedRun:
    """Give what is known of a run that failed, without its status."""
    try:
        bench = plan.testbench(run)
    except CosimError:
        return FailedRun("", "", (), "", "", {})
    if shot.plan is None:
        return FailedRun("", "", (), bench.to_toml(), "", {})
    roots = roots_of(bench)
    waves: dict[str, Waveform] = {}
    if shot.shots is not None:
        waves = {"probe": shot.shots.first.waveform}
    elif isinstance(error, SimulationError):
        waves = dict(_partial(error.partial))
    return FailedRun("", "", (), bench.to_toml(), _sent(shot.plan, roots), waves)


def _sent(plan: Plan, roots: Roots) -> str:
    try:
        prepared = prepare(plan.deck, plan.request)
    except CosimError:
        return ""  # The run failed by that, and its message says so.
    lines = kept_lines(prepared.lines, prepared.origins, plan.deck.files, roots)
    return "\n".join(lines) + "\n"


def _partial(vectors: Mapping[str, FloatArray]) -> Iterator[tuple[str, Waveform]]:
    """Give what was computed until a failure, as far as it makes a waveform."""
    time_axis = vectors.get("time")
    for name, values in vectors.items():
        if name != "time" and time_axis is not None:
            try:
                # Some of it may be missing, or not finite: that is then why it failed.
                yield name, Waveform(time_axis, values, unit="A" if "#branch" in name else "V")
            except InputError:
                continue


def _worst(results: Mapping[int, GateResult], shared: Shared) -> tuple[int, ...]:
    """Give the numbers of the runs that are kept whole."""
    if shared.keep == ALL:
        return tuple(results)
    losses = {
        number: getattr(result, shared.fidelity).infidelity for number, result in results.items()
    }
    reached = [number for number, loss in losses.items() if loss >= shared.threshold]
    return tuple(sorted(reached, key=lambda number: -losses[number])[: shared.keep])
