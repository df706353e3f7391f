"""What a worker simulates for the runs of a sweep that share it, and what it makes of it."""

import time
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace

from cosim.capture import Capture, Plan, check_window, make_plan
from cosim.captures import capture_probes
from cosim.circuit.confidential import Roots, kept_lines
from cosim.circuit.deck import Deck
from cosim.circuit.preparation import prepare
from cosim.decision_result import DecisionResult
from cosim.decks import roots_of
from cosim.errors import CosimError, InputError, SimulationError
from cosim.gate import Shots, run_gate
from cosim.readout import ReadoutRuns, readout_frequency, run_readout, simulate_readout
from cosim.readout_chain import make_inquiry
from cosim.readout_decisions import run_decisions
from cosim.readout_input import GROUND
from cosim.readout_output import ReadoutPlan, make_readout_plan
from cosim.readout_result import ReadoutResult
from cosim.result import GateResult
from cosim.sweep.plan import SweepPlan
from cosim.sweep.planned_run import SweepRun
from cosim.sweep.record import FailedRun
from cosim.sweep.trims import Trims, trimmed_bench
from cosim.testbench import Bench, ReadoutBench, Testbench, gate_bench
from cosim.waveform import FloatArray, Waveform

AnyResult = GateResult | ReadoutResult | DecisionResult


@dataclass(frozen=True, slots=True)
class Simulated:
    """What the simulator gave for runs that share it, or why it gave nothing.

    Parameters
    ----------
    bench : Bench or None
        Testbench of the first of these runs that is in order.
    plan : Plan or None
        Of a gate: what was asked of the simulator; None for an imported waveform.
    shots : Shots or None
        Of a gate: what it gave.
    readout : ReadoutRuns or None
        Of a readout; None for a comparator's decisions, which no two runs share.
    error : CosimError or None
        Why it gave nothing.
    wall_time : float
        In s.
    """

    bench: Bench | None
    plan: Plan | None = None
    shots: Shots | None = None
    readout: ReadoutRuns | None = None
    error: CosimError | None = None
    wall_time: float = 0.0


def simulate_groups(
    plan: SweepPlan, groups: Sequence[Sequence[SweepRun]], trims: Trims
) -> Iterator[Simulated]:
    """Simulate once for each group of runs.

    Parameters
    ----------
    plan : SweepPlan
        The plan.
    groups : sequence of sequence of SweepRun
        Runs of it that share a waveform.
    trims : mapping of Trim
        Those of the runs, where the plan trims.

    Yields
    ------
    Simulated
        In the order of the groups.
    """
    if plan.is_readout:
        yield from (_simulate_readouts(plan, members, trims) for members in groups)
        return
    ready = [_ready(plan, members, trims) for members in groups]
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


def _ready(plan: SweepPlan, members: Sequence[SweepRun], trims: Trims) -> Simulated:
    """Plan the simulation of gates that share it, by the first whose testbench is in order."""
    began = time.perf_counter()
    found = Simulated(None)
    for run in members:
        try:
            found = _planned(plan, run, trims)
        except CosimError as error:
            found = Simulated(None, error=error)
            continue
        break
    return replace(found, wall_time=time.perf_counter() - began)


def _planned(plan: SweepPlan, run: SweepRun, trims: Trims) -> Simulated:
    bench = gate_bench(trimmed_bench(plan, run, trims))
    return Simulated(
        bench, None if bench.netlist is None else make_plan(bench, plan.corner(run).deck)
    )


def _simulate_readouts(plan: SweepPlan, members: Sequence[SweepRun], trims: Trims) -> Simulated:
    """Simulate for readouts that share it, by the first whose testbench is in order."""
    began = time.perf_counter()
    found = Simulated(None)
    for run in members:
        try:
            bench = _readout_bench(plan, run, trims)
        except CosimError as error:
            found = Simulated(None, error=error)
            continue
        found = Simulated(bench)
        if bench.readout.decision is None:
            try:
                found = Simulated(bench, readout=simulate_readout(bench, deck=_deck(plan, run)))
            except CosimError as error:
                # What fails here fails for all of them.
                found = Simulated(bench, error=error)
        break
    return replace(found, wall_time=time.perf_counter() - began)


def _readout_bench(plan: SweepPlan, run: SweepRun, trims: Trims) -> ReadoutBench:
    bench = trimmed_bench(plan, run, trims)
    assert isinstance(bench, ReadoutBench)  # The caller has seen to it.
    return bench


def _deck(plan: SweepPlan, run: SweepRun) -> Deck | None:
    return plan.corner(run).deck


def make_result(plan: SweepPlan, run: SweepRun, found: Simulated, trims: Trims) -> AnyResult:
    """Make the result of one run from what was simulated for it.

    Parameters
    ----------
    plan : SweepPlan
        The plan.
    run : SweepRun
        One of the runs that share it.
    found : Simulated
        From `simulate_groups`.
    trims : mapping of Trim
        As there.

    Returns
    -------
    GateResult, ReadoutResult or DecisionResult
        The same that `cosim.run` gives for the testbench of the run.

    Raises
    ------
    InputError, SimulationError
        If the run fails.
    """
    if found.bench is None and not plan.is_readout:
        _planned(plan, run, trims)  # Each of the runs has its own word to say on what is wrong.
    bench = trimmed_bench(plan, run, trims)
    if found.error is not None:
        raise found.error
    if isinstance(bench, ReadoutBench):
        if found.readout is None:
            return run_decisions(bench, deck=_deck(plan, run))
        return run_readout(bench, runs=found.readout)
    bench = gate_bench(bench)
    if found.shots is not None:
        check_window(bench, found.shots.plan.request.stop)
    return run_gate(bench, shots=found.shots)


def what_is_known(
    plan: SweepPlan, run: SweepRun, found: Simulated, trims: Trims, error: BaseException
) -> FailedRun:
    """Give what is known of a run that failed, without its status.

    Parameters
    ----------
    plan : SweepPlan
        The plan.
    run : SweepRun
        The run.
    found : Simulated
        What was simulated for it.
    trims : mapping of Trim
        As for `simulate_groups`. Of a run whose trim failed the testbench and the deck are those
        that the trim began with.
    error : exception
        What it raised.

    Returns
    -------
    FailedRun
    """
    try:
        untrimmed = run.trim_key in trims and trims[run.trim_key].result is None
        bench = plan.trim_bench(run) if untrimmed else trimmed_bench(plan, run, trims)
    except CosimError:
        return FailedRun("", "", (), "", "", {})
    if untrimmed and isinstance(bench, Testbench) and bench.netlist is not None:
        found = _at_trim(bench)
    asked = _asked(bench, plan.corner(run).deck, found)
    if asked is None:
        return FailedRun("", "", (), bench.to_toml(), "", {})
    waves: dict[str, Waveform] = {}
    if found.shots is not None:
        waves = {"probe": found.shots.first.waveform}
    elif isinstance(error, SimulationError):
        waves = dict(_partial(error.partial))
    return FailedRun("", "", (), bench.to_toml(), _sent(*asked, roots_of(bench)), waves)


def _at_trim(bench: Testbench) -> Simulated:
    try:
        return Simulated(bench, make_plan(bench))
    except CosimError:
        return Simulated(bench)  # The trim failed by that, and its message says so.


def _asked(
    bench: Bench, deck: Deck | None, found: Simulated
) -> tuple[Plan | ReadoutPlan, Deck] | None:
    """Give what was asked of the simulator, of a readout for |0>."""
    if isinstance(bench, ReadoutBench):
        try:
            plan = make_readout_plan(bench, readout_frequency(bench), deck)
            return plan, make_inquiry(bench, plan).deck_of(plan, GROUND)
        except CosimError:
            return None  # The run failed by that, and its message says so.
    return None if found.plan is None else (found.plan, found.plan.deck)


def _sent(plan: Plan | ReadoutPlan, deck: Deck, roots: Roots) -> str:
    try:
        prepared = prepare(deck, plan.request)
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
