"""A study of sensitivities from its testbench to its result."""

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from datetime import datetime

import numpy as np

from cosim.calibration.judgement import turn_of
from cosim.decks import read_deck
from cosim.errors import CosimError, InputError
from cosim.gate import best_calibration, gate_target
from cosim.quantum.channel import nearest_unitary
from cosim.quantum.coherent_error import error_vector
from cosim.quantum.fidelity import average_gate_fidelity, rotation_of
from cosim.quantum.frame import free_frame, phase_frame
from cosim.quantum.operators import OperatorSystem
from cosim.sensitivity.changed_gates import ChangedGate, ChangedGates, Changes
from cosim.sensitivity.changed_readouts import ChangedReadouts
from cosim.sensitivity.response import ROUNDING, Outcome, Pair, moved_by, respond
from cosim.sensitivity.result import SensitivityItem, SensitivityResult
from cosim.sensitivity.table import Entry, read_sensitivity
from cosim.testbench import Bench, ReadoutBench, Testbench
from cosim.voltage_noises import NetlistNoise

# Changes that suit a difference, of the error vector of a gate and of a readout's metric, relative:
# beyond the first the response is bent, and the step is made to give the second. The last is how
# many times more than the noise it has to be.
STRONG, AIM = (0.1, 0.5), (0.02, 0.1)
CLEAR = 30.0
# A step is made so many times longer at most.
LONGEST = 10.0
# Where the number cannot go a tolerance to both sides it is moved by this part of one to either, as
# far as that is clear of the noise: a difference to one side is bent in first order.
NEARER = 0.01
# The density of a circuit's injected noise is a difference of two runs and known to about this.
READOUT_NOISE = 1e-4

Progress = Callable[[str], None]
Run = Callable[[Sequence[Changes]], list[Outcome | CosimError]]


@dataclass(frozen=True, slots=True)
class _Centre:
    """The testbench as it stands, and how others are run."""

    outcome: Outcome
    floor: float
    noise: float
    warnings: tuple[str, ...]
    run: Run


def run_sensitivity(
    bench: Bench, *, system: OperatorSystem | None = None, progress: Progress | None = None
) -> SensitivityResult:
    """Find what each number of a testbench and its deck does to the metric.

    Parameters
    ----------
    bench : Testbench or ReadoutBench
        With or without the table [sensitivity]. Without `floor` in [accuracy] the run at half the
        step is left out.
    system : OperatorSystem or None
        A user's own system, for a gate with kind = "operators" in [qubit].
    progress : callable or None
        Called with a line now and then.

    Returns
    -------
    SensitivityResult
        A design estimate.

    Raises
    ------
    InputError
        If the testbench or its deck cannot be used.
    SimulationError
        If the testbench as it stands cannot be simulated.
    """
    began = time.perf_counter()
    started = datetime.now().astimezone().isoformat(timespec="seconds")
    deck = None if bench.netlist is None else read_deck(bench)
    _, metric, entries = read_sensitivity(bench, deck)

    def told(number: int, asked: int) -> None:
        if progress is not None:
            progress(f"run {number} of the netlist, of {asked} in this round")

    gates: ChangedGates | ChangedReadouts
    if isinstance(bench, Testbench):
        gates = ChangedGates(bench, deck, system, told)
        centre = _gate_centre(bench, gates, metric)
    elif isinstance(bench, ReadoutBench) and deck is not None and system is None:
        gates = ChangedReadouts(bench, deck, told)
        entries = tuple(replace(e, simulated=gates.simulated(e.key)) for e in entries)
        centre = _readout_centre(gates)
    else:
        raise InputError(f"{bench.source or 'the testbench'} has neither a gate nor a readout")
    items = _items(centre, entries)
    return SensitivityResult(
        title=bench.title,
        metric=metric,
        value=centre.outcome.value,
        numerical_floor=centre.floor,
        noise=centre.noise,
        items=tuple(sorted(items, key=lambda item: -item.largest)),
        netlist_runs=gates.netlist_runs if deck is not None else 0,
        warnings=tuple(dict.fromkeys(_warnings(bench, centre, items))),
        started=started,
        wall_time=time.perf_counter() - began,
        testbench=bench.to_toml(),
    )


def _gate_centre(bench: Testbench, gates: ChangedGates, metric: str) -> _Centre:
    result = gates.result(bench.accuracy.floor)

    def run(variants: Sequence[Changes]) -> list[Outcome | CosimError]:
        found = gates.run(variants)
        return [g if isinstance(g, CosimError) else outcome_of(g, metric) for g in found]

    (here,) = gates.run([()])
    if isinstance(here, CosimError):
        raise here
    outcome = outcome_of(here, metric)
    tight = gates.tighter()
    noise = ROUNDING
    if tight is not None:
        moved = outcome_of(tight, metric).vector - outcome.vector
        noise = max(noise, float(np.linalg.norm(moved)))
    bar = getattr(result, metric).error_bar
    return _Centre(outcome, bar, noise, result.warnings, run)


def _readout_centre(readouts: ChangedReadouts) -> _Centre:
    value, floor, warnings = readouts.nominal()

    def run(variants: Sequence[Changes]) -> list[Outcome | CosimError]:
        empty = np.zeros(0)
        return [
            item if isinstance(item, CosimError) else Outcome(item, empty)
            for item in readouts.run(variants)
        ]

    noise = READOUT_NOISE
    if readouts.bench.readout.decision is not None:  # The floor is the standard error then.
        noise = floor / value
    return _Centre(Outcome(value, np.zeros(0)), floor, noise, warnings, run)


def outcome_of(gate: ChangedGate, metric: str) -> Outcome:
    """Judge a gate by one of the three fidelities.

    Parameters
    ----------
    gate : ChangedGate
        From `ChangedGates.run`.
    metric : str
        "as_simulated", "free_frame" or "calibrated".

    Returns
    -------
    Outcome
        1 - F_avg, and the error vector in that frame.
    """
    target = gate_target(gate.bench)
    channel = gate.pulse.channel()
    framed = channel
    if metric != "as_simulated":
        free = free_frame(channel, target.unitary)
        if metric == "calibrated":
            angle = rotation_of(nearest_unitary(channel)).angle
            best = best_calibration(
                gate.bench, gate.drive, gate.pulse, free, channel, angle, target
            )
            channel, free = best.channel, best.frame
        framed = phase_frame(channel, free.before, free.after)
    value = 1.0 - average_gate_fidelity(framed, target.unitary)
    return Outcome(value, error_vector(framed, target.unitary))


def _items(centre: _Centre, entries: Sequence[Entry]) -> list[SensitivityItem]:
    wide = [entry.tolerance for entry in entries]
    pairs, notes = _pairs(centre, entries, wide)
    steps = [_better_step(centre, *both) for both in zip(entries, pairs, strict=True)]
    again = [at for at, step in enumerate(steps) if step != wide[at]]
    second, _ = _pairs(centre, [entries[at] for at in again], [steps[at] for at in again])
    near = dict(zip(again, second, strict=True))
    items = []
    for at, (entry, pair, note) in enumerate(zip(entries, pairs, notes, strict=True)):
        # A step that could not be run leaves that of the tolerance.
        used = near[at] if at in near and len(near[at].sides) == 2 else pair
        found = respond(centre.outcome, pair, used, _noise(centre, entry))
        turn = np.full(3, math.nan)
        if centre.outcome.vector.size:
            turn = turn_of(found.slope * entry.tolerance)
        items.append(
            SensitivityItem(
                key=entry.key.path,
                unit=entry.unit,
                value=entry.value,
                tolerance=entry.tolerance,
                step=used.step,
                first=found.first,
                first_error=found.first_error,
                second=found.second,
                second_error=found.second_error,
                cost_low=found.cost_low,
                cost_high=found.cost_high,
                bound=found.bound,
                status=found.status,
                turn=turn,
                simulated=entry.simulated,
                note=note,
            )
        )
    return items


def _noise(centre: _Centre, entry: Entry) -> float:
    if entry.simulated:
        return centre.noise
    return ROUNDING if centre.outcome.vector.size else min(centre.noise, READOUT_NOISE)


def _pairs(
    centre: _Centre, entries: Sequence[Entry], steps: Sequence[float]
) -> tuple[list[Pair], list[str]]:
    """Run below and above each number, all of them in one family; say what failed."""
    variants: list[Changes] = []
    for entry, step in zip(entries, steps, strict=True):
        variants += [((entry.key, entry.value + side * step),) for side in (-1.0, 1.0)]
    found = centre.run(variants) if variants else []
    pairs, notes = [], []
    for at, step in enumerate(steps):
        both = found[2 * at : 2 * at + 2]
        low, high = (None if isinstance(item, CosimError) else item for item in both)
        pairs.append(Pair(step, low, high))
        notes.append("; ".join(item.message for item in both if isinstance(item, CosimError)))
    return pairs, notes


def _better_step(centre: _Centre, entry: Entry, pair: Pair) -> float:
    """Give the step that suits a difference: not bent, and clear of the noise."""
    of_readout = int(not centre.outcome.vector.size)
    change, step = moved_by(centre.outcome, pair), entry.tolerance
    if not pair.sides:
        return step
    if len(pair.sides) == 1 and change > 0.0:
        least = CLEAR * _noise(centre, entry)
        step *= min(1.0, max(least, min(NEARER * change, AIM[of_readout])) / change)
    elif change > STRONG[of_readout]:
        step *= AIM[of_readout] / change
    elif change < CLEAR * _noise(centre, entry):
        step *= min(LONGEST, AIM[of_readout] / change) if change > 0.0 else LONGEST
    return max(1.0, round(step)) if entry.key.whole else step


def _warnings(bench: Bench, centre: _Centre, items: Sequence[SensitivityItem]) -> list[str]:
    found = []
    for item in items:
        if item.note:
            side = "on one side" if item.status != "failed" else "on both sides"
            found.append(f"'{item.key}' could not be moved {side}: {item.note}")
    if isinstance(bench, Testbench):
        if any(isinstance(n, NetlistNoise) for n in bench.noise):
            found.append("the netlist's own noise is left out of the metric")
    return [*found, *centre.warnings]
