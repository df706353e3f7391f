"""A study of drift from its testbench to its result."""

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from datetime import datetime

import numpy as np
from scipy.stats import norm, qmc

from cosim.decks import read_deck
from cosim.drift.interval import duty_lost, longest_interval
from cosim.drift.outlook import Outlook
from cosim.drift.response import Frozen, find_responses, moved_together
from cosim.drift.result import DriftResult, DriftSource
from cosim.drift.table import DriftTable, Times, read_drift
from cosim.errors import CosimError, TestbenchError
from cosim.gate import gate_target
from cosim.quantum.operators import OperatorSystem
from cosim.result import Fidelity, GateResult
from cosim.sensitivity.changed_gates import ChangedGate, ChangedGates
from cosim.testbench import Testbench
from cosim.voltage_noises import NetlistNoise

Progress = Callable[[str], None]

# Times of the curves, and gates that are run with all sources moved.
POINTS, CHECKS = 41, 4
# Of the mean infidelity, what these may be off before the result says so.
DOUBTFUL = 0.05
_SEED = 2


@dataclass(frozen=True, slots=True)
class _Intervals:
    """How long a trim keeps the limit, in s."""

    end: float
    average: float


def run_drift(
    bench: Testbench, *, system: OperatorSystem | None = None, progress: Progress | None = None
) -> DriftResult:
    """Find what the time since the last trim does to a gate.

    Parameters
    ----------
    bench : Testbench
        With the table [drift]. Without `floor` in [accuracy] the run at half the step is left out.
    system : OperatorSystem or None
        A user's own system, for a gate with kind = "operators" in [qubit].
    progress : callable or None
        Called with a line now and then.

    Returns
    -------
    DriftResult
        A design estimate.

    Raises
    ------
    InputError
        If the testbench or its deck cannot be used, a source does not fit, or the limit lies below
        what the gate has right after the trim.
    SimulationError
        If the gate, or one with a moved number, cannot be simulated.
    """
    began = time.perf_counter()
    started = datetime.now().astimezone().isoformat(timespec="seconds")
    deck = None if bench.netlist is None else read_deck(bench)
    carrier = bench.drive.carrier
    # Faults of the table come before anything long is run; the carrier may not be known yet.
    read_drift(bench, deck, carrier if isinstance(carrier, float) else 1.0)

    def told(number: int, asked: int) -> None:
        if progress is not None:
            progress(f"run {number} of the netlist, of {asked} in this round")

    gates = ChangedGates(bench, deck, system, told)
    result = gates.result(bench.accuracy.floor)
    here = _run(gates)
    table, times, processes = read_drift(bench, deck, here.drive.carrier_frequency)
    frozen = _freeze(gates, here, getattr(result, table.metric))
    centre = frozen.outcome(_run(gates))
    responses = find_responses(gates, frozen, centre, processes, times.horizon)
    outlook = Outlook(centre, processes, responses)
    intervals = _intervals(outlook, table, times, bench)
    told_at = intervals.end if 0.0 < intervals.end < math.inf else times.horizon
    error = _model_error(gates, frozen, outlook, told_at)
    clock = np.geomspace(times.first, times.horizon, POINTS)
    sources = _sources(outlook, clock.tolist(), told_at)
    spread = np.array([outlook.quantiles(t) for t in clock.tolist()])
    limit = math.nan if table.limit is None else table.limit
    return DriftResult(
        title=bench.title,
        metric=table.metric,
        trimmed=centre.value,
        numerical_floor=getattr(result, table.metric).error_bar,
        right_after=outlook.mean(0.0),
        limit=limit,
        interval_end=intervals.end,
        interval_average=intervals.average,
        trim_duration=times.trim,
        duty_lost_end=duty_lost(times.trim, intervals.end),
        duty_lost_average=duty_lost(times.trim, intervals.average),
        told_at=told_at,
        dominant=sources[0].name,
        time=clock,
        mean=np.array([outlook.mean(t) for t in clock.tolist()]),
        average=np.array([outlook.average(t) for t in clock.tolist()]),
        low=spread[:, 0],
        median=spread[:, 1],
        high=spread[:, 2],
        sources=sources,
        model_error=error,
        netlist_runs=gates.netlist_runs if deck is not None else 0,
        warnings=tuple(dict.fromkeys(_warnings(bench, table, times, intervals, error, result))),
        started=started,
        wall_time=time.perf_counter() - began,
        testbench=bench.to_toml(),
    )


def _run(gates: ChangedGates) -> ChangedGate:
    (gate,) = gates.run([()])
    if isinstance(gate, CosimError):
        raise gate
    return gate


def _freeze(gates: ChangedGates, here: ChangedGate, view: Fidelity) -> Frozen:
    """Fix what a trim has fixed: frame, scale, frequencies; and the noise, which does not drift."""
    qubit = here.drive.qubit
    bench = replace(gates.bench, noise=())
    gates.before = here.pulse.before
    frequency = math.nan
    if not isinstance(qubit, OperatorSystem):
        frequency = qubit.frequency
        # A qubit that is said to follow the carrier stays where the carrier was.
        still = replace(bench.qubit, frequency=frequency - bench.qubit.detuning)
        bench = replace(bench, qubit=still)
    gates.bench = bench
    return Frozen(view, frequency, gate_target(bench).unitary)


def _intervals(outlook: Outlook, table: DriftTable, times: Times, bench: Testbench) -> _Intervals:
    if table.limit is None:
        return _Intervals(math.nan, math.nan)
    after = outlook.mean(0.0)
    if table.limit < after:
        where = f"{bench.source or 'the testbench'}, table [drift], key 'limit'"
        trimmed = outlook.centre.value
        cause = f"{trimmed:.3e} of the trimmed gate"
        if after > trimmed:
            cause += f" and {after - trimmed:.3e} of the trim's own errors"
        raise TestbenchError(
            f"{where}: {table.limit:.3e} lies below the infidelity right after a trim, "
            f"{after:.3e}: {cause}",
            hint="no interval is short enough; trim better, or raise the limit",
        )
    span = (table.limit, times.first, times.horizon)
    end = longest_interval(outlook.mean, *span)
    return _Intervals(end, longest_interval(outlook.average, *span))


def _model_error(gates: ChangedGates, frozen: Frozen, outlook: Outlook, t: float) -> float:
    """Run gates with all sources moved, and hold the sum of their responses against them."""
    processes = outlook.processes
    draw = qmc.Sobol(len(processes), rng=np.random.default_rng(_SEED)).random(CHECKS)
    means = np.array([item.motion.mean(t) for item in processes])
    deviations = np.array([item.motion.deviation(t) for item in processes])
    moves = means + deviations * norm.ppf(draw)
    variants = [moved_together(processes, row) for row in moves]
    found = []
    for gate in gates.run(variants):
        if isinstance(gate, CosimError):
            raise gate
        found.append(frozen.outcome(gate).value)
    return float(np.abs(outlook.at(moves) - found).max() / outlook.mean(t))


def _sources(outlook: Outlook, clock: Sequence[float], t: float) -> tuple[DriftSource, ...]:
    costs = outlook.alone(t)
    alone = np.array([outlook.alone(time) for time in clock])
    found = [
        DriftSource(
            name=process.name,
            keys=tuple(key.path for key, _, _ in process.moves),
            unit=process.unit,
            trim_error=process.motion.trim_error,
            shift=process.motion.mean(t),
            deviation=process.motion.deviation(t),
            cost=float(costs[at]),
            alone=alone[:, at],
        )
        for at, process in enumerate(outlook.processes)
    ]
    return tuple(sorted(found, key=lambda item: -item.cost))


def _warnings(
    bench: Testbench,
    table: DriftTable,
    times: Times,
    intervals: _Intervals,
    error: float,
    result: GateResult,
) -> list[str]:
    found = []
    if math.isinf(intervals.end):
        found.append(
            f"the mean keeps the limit {table.limit:.3g} to the horizon of {times.horizon:.4g} s: "
            "the longest interval lies beyond it"
        )
    if intervals.end == 0.0:
        found.append(
            f"the limit {table.limit:.3g} is exceeded within a millionth of the first time, "
            f"{times.first:.3g} s"
        )
    if error > DOUBTFUL:
        found.append(
            f"gates run with all sources moved differ from the sum of their effects by up to "
            f"{error:.0%} of the mean"
        )
    if any(isinstance(item, NetlistNoise) for item in bench.noise):
        found.append("the netlist's own noise is left out of the infidelity")
    return [*found, *result.warnings]
