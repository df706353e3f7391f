"""A calibration from its testbench to its result, and the trim put into a testbench."""

import math
import os
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from pathlib import Path
from typing import Any

import numpy as np

from cosim.calibration.gate_runs import GateRuns
from cosim.calibration.judgement import (
    BEYOND,
    Judgement,
    judge_gate,
    judge_readout,
    knob_results,
    limiting,
    numerical_shift,
    turn_of,
)
from cosim.calibration.points import AnyBench, Point
from cosim.calibration.readout_runs import ReadoutTrials
from cosim.calibration.result import CalibrationResult, CalibrationRun, KnobResult
from cosim.calibration.surrogate_search import search_by_surrogate
from cosim.calibration.table import NAME, CalibrateTable, Knob, read_calibrate
from cosim.calibration.vector_search import search_by_vector
from cosim.circuit.deck import Deck
from cosim.decks import read_deck
from cosim.errors import InputError
from cosim.fidelities import error_bar
from cosim.keys import number_key, with_number
from cosim.quantum.operators import OperatorSystem
from cosim.stimuli import FileStimulus
from cosim.testbench import Bench, ReadoutBench, Testbench
from cosim.voltage_noises import NetlistNoise

Progress = Callable[[CalibrationRun], None]


@dataclass(frozen=True, slots=True)
class _Ended:
    """What either of the searches comes to."""

    start: Point
    last: Point
    judgement: Judgement
    shift: np.ndarray
    complete: bool
    history: Sequence[Point]


def calibrate(
    bench: Bench,
    *,
    deck: Deck | None = None,
    system: OperatorSystem | None = None,
    progress: Progress | None = None,
) -> CalibrationResult:
    """Solve for the knobs of a testbench's [calibrate] by running its circuit again.

    Parameters
    ----------
    bench : Testbench or ReadoutBench
        The testbench. Without `floor` in [accuracy] the last run at half the step is left out.
    deck : Deck or None
        Its deck as read; None reads it.
    system : OperatorSystem or None
        A user's own system, for a gate with kind = "operators" in [qubit].
    progress : callable or None
        Called with each run.

    Returns
    -------
    CalibrationResult
        A design estimate. `trimmed` puts it into a testbench.

    Raises
    ------
    InputError
        If the testbench or its deck cannot be used, a knob does nothing, or the start lies outside
        of its bounds.
    SimulationError
        If the circuit cannot be simulated at the start or a step beside it.
    """
    began = time.perf_counter()
    started = datetime.now().astimezone().isoformat(timespec="seconds")
    if not isinstance(bench, (Testbench, ReadoutBench)):
        raise InputError(f"{bench.source or 'the testbench'} has no circuit and no waveform to run")
    if system is not None and not isinstance(bench, Testbench):
        raise InputError(f"{bench.source or 'the testbench'}: a readout takes no operators")
    if deck is None and bench.netlist is not None:
        deck = read_deck(bench)
    table, knobs = read_calibrate(bench, deck)

    def report(point: Point) -> None:
        if progress is not None:
            progress(_run(point, knobs))

    if isinstance(bench, Testbench):
        gates = GateRuns(bench, deck, table, knobs, system, report)
        ended = _calibrate_gate(gates, bench.accuracy.floor)
    else:
        trials = ReadoutTrials(bench, deck, knobs, report)
        ended = _calibrate_readout(trials, table, bench.accuracy.floor)
    judgement, value = ended.judgement, ended.judgement.best.value
    results = knob_results(knobs, judgement, table.cost, ended.shift)
    bar = ended.last.error_bar
    return CalibrationResult(
        title=bench.title,
        metric=table.metric,
        leakage_weight=table.leakage_weight,
        before=ended.start.value,
        after=value,
        numerical_floor=bar,
        before_error_bar=_bar_before(ended),
        leakage_before=ended.start.leakage,
        leakage_after=judgement.best.leakage,
        turn_before=turn_of(ended.start.vector),
        turn_after=turn_of(judgement.best.vector),
        turn_unreached=turn_of(judgement.unreached),
        knobs=results,
        cost=table.cost,
        limits=judgement.limits,
        limited_by=limiting(judgement.limits, value, bar),
        runs=len(ended.history),
        netlist_runs=sum(point.simulated for point in ended.history) if deck is not None else 0,
        complete=ended.complete,
        history=tuple(_run(point, knobs) for point in ended.history),
        warnings=tuple(dict.fromkeys(_warnings(bench, table, knobs, ended, results))),
        started=started,
        wall_time=time.perf_counter() - began,
        testbench=bench.to_toml(),
    )


def _calibrate_gate(runs: GateRuns, floor: bool) -> _Ended:
    found = search_by_vector(runs, runs.table, runs.knobs, 1 if floor else 0)
    last, shift = found.best, np.full(len(runs.knobs), math.nan)
    if floor:
        last = runs.finish(found.best)
        if last.simulated:
            shift = numerical_shift(found.model, last.vector)
    judgement = judge_gate(found.model)
    return _Ended(found.start, last, judgement, shift, found.complete, runs.history)


def _calibrate_readout(runs: ReadoutTrials, table: CalibrateTable, floor: bool) -> _Ended:
    found = search_by_surrogate(runs, table, runs.knobs, 1 if floor else 0)
    last = runs.finish(found.best) if floor else found.best
    shift = np.full(len(runs.knobs), math.nan)
    judgement = judge_readout(found.surrogate)
    return _Ended(found.start, last, judgement, shift, found.complete, runs.history)


def _run(point: Point, knobs: Sequence[Knob]) -> CalibrationRun:
    values = [knob.at(part) for knob, part in zip(knobs, point.place, strict=True)]
    return CalibrationRun(
        point.purpose, np.array(values), point.value, point.simulated, point.fault
    )


def _bar_before(ended: _Ended) -> float:
    """Bound the error of the start by the distance of the two runs at the end."""
    best, last = ended.judgement.best, ended.last
    if math.isnan(last.error_bar) or not best.vector.size or not last.simulated:
        return math.nan
    moved = last.vector - best.vector
    value = ended.start.value
    incoherent = min(max(0.0, ended.start.rest), value)
    return error_bar(1.0 - value, 1.0 - value, float(moved @ moved), incoherent)


def _warnings(
    bench: Bench,
    table: CalibrateTable,
    knobs: Sequence[Knob],
    ended: _Ended,
    results: Sequence[KnobResult],
) -> list[str]:
    judgement = ended.judgement
    found = []
    if not ended.complete:
        found.append(
            f"the {table.max_runs} runs of max_runs were used up before the search had ended"
        )
    for knob, result, optimum in zip(knobs, results, judgement.optimum, strict=True):
        if result.bound:
            text = (
                f"the bounds exclude the optimum: '{result.key}' stands at its {result.bound} "
                f"bound {result.found:.6g}, where the metric changes by {result.slope:.3g} per unit"
            )
            if judgement.best.vector.size:  # What is linear can be followed beyond.
                expected = f"{knob.low + float(optimum) * knob.range:.4g}"
                less = f"{judgement.limits.bounds:.2g} less"
                if abs(float(optimum) - 0.5) > 0.5 + BEYOND * (1.0 - 1e-9):
                    # No model is asked farther away than that.
                    expected, less = f"{expected} or beyond", f"at least {less}"
                text += f"; the best is expected at {expected}, for {less}"
            found.append(text)
    if judgement.alike:
        names = " and ".join(f"'{knobs[at].key.path}'" for at in judgement.alike)
        found.append(
            f"{names} do the same to the metric: one of them would do, and how the trim is shared "
            "among them is arbitrary"
        )
    if isinstance(bench, Testbench) and any(isinstance(n, NetlistNoise) for n in bench.noise):
        found.append(
            "the netlist's own noise has no part in the search, nor in the metric told here: run "
            "the trimmed testbench for what it costs"
        )
    gain = ended.start.value - judgement.best.value
    if 0.0 <= gain < ended.last.error_bar:
        found.append(
            f"the trim gains {gain:.1e}, which is less than the error bar of "
            f"{ended.last.error_bar:.1e}: the start was as good as can be told"
        )
    for point in ended.history:
        if point.fault:
            pairs = zip(knobs, point.place, strict=True)
            where = ", ".join(f"{knob.key.path} = {knob.at(part):.6g}" for knob, part in pairs)
            found.append(f"the run at {where} failed: {point.fault}")
    return found + [f"the trimmed run: {text}" for text in ended.last.warnings]


def trimmed(bench: AnyBench, result: CalibrationResult) -> AnyBench:
    """Put a trim into a testbench: the one it was found for, or another with the same knobs.

    Parameters
    ----------
    bench : Testbench or ReadoutBench
        The testbench.
    result : CalibrationResult
        From `calibrate`.

    Returns
    -------
    Bench
        A copy, whose [calibrate] begins at the trim.

    Raises
    ------
    TestbenchError
        If the testbench has no such number.
    """
    deck: Deck | None = None
    if bench.netlist is not None and any(knob.key.startswith("netlist.") for knob in result.knobs):
        deck = read_deck(bench)
    for knob in result.knobs:
        key = number_key(bench, deck, knob.key, bench.source or "the testbench")
        bench = with_number(bench, key, knob.found)
    if NAME not in bench.studies:
        return bench
    study = dict(bench.studies[NAME])
    rows = study.get("knob", [])
    study["knob"] = [{name: row[name] for name in row if name != "start"} for row in rows]
    changed: dict[str, Any] = {"studies": {**bench.studies, NAME: study}}
    return replace(bench, **changed)


def moved(bench: AnyBench, folder: str | os.PathLike[str]) -> AnyBench:
    """Make a testbench's paths relative to another folder, to be written there.

    Parameters
    ----------
    bench : Testbench or ReadoutBench
        The testbench.
    folder : path
        The other folder.

    Returns
    -------
    Bench
        A copy.
    """

    def path(name: str) -> str:
        given = Path(name).expanduser()
        if given.is_absolute():
            return name
        return os.path.relpath(Path(bench.folder) / given, folder)

    changed: dict[str, Any] = {"folder": os.fspath(folder)}
    if bench.netlist is not None:
        table = bench.netlist
        changed["netlist"] = replace(
            table,
            file=table.file if bench.circuit else path(table.file),
            include_paths=tuple(map(path, table.include_paths)),
            confidential=tuple(map(path, table.confidential)),
        )
    changed["stimulus"] = tuple(
        replace(item, file=path(item.file)) if isinstance(item, FileStimulus) else item
        for item in bench.stimulus
    )
    if isinstance(bench, Testbench):
        if bench.waveform is not None:
            changed["waveform"] = replace(bench.waveform, file=path(bench.waveform.file))
        if bench.drive.line is not None:
            changed["drive"] = replace(bench.drive, line=path(bench.drive.line))
    return replace(bench, **changed)
