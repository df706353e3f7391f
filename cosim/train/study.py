"""A train of pulses from its testbench to its result, and again with a pre-distortion."""

import math
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import datetime

import numpy as np

from cosim.adjust import SCALE_RANGE
from cosim.capture import Capture
from cosim.dsp.predistortion import unit_tap
from cosim.errors import TestbenchError
from cosim.gate import gate_target
from cosim.testbench import Bench, gate_bench
from cosim.train.correction import (
    STRIDE,
    Response,
    design_filter,
    ideal_step,
    ideal_train,
    largest_departure,
    largest_value,
    measure_response,
    unexplained,
)
from cosim.train.playing import Train, converted, make_train, play
from cosim.train.response import respond, settle_step
from cosim.train.result import Predistortion, StepSettling, TrainResponse, TrainResult
from cosim.train.table import NAME
from cosim.units import format_quantity
from cosim.waveform import Envelope, FloatArray, Waveform

Progress = Callable[[str], None]

_PLAIN = unit_tap(1, 0.0)


@dataclass
class _Runs:
    """Runs of the circuit, counted and told."""

    train: Train
    progress: Progress | None
    count: int = 0
    step: float = math.nan
    notices: list[str] = field(default_factory=list)

    def play(
        self, what: str, waves: dict[str, Waveform], taps: FloatArray, *, half_step: bool = False
    ) -> tuple[Capture, Envelope]:
        if self.progress is not None:
            self.progress(what)
        if self.train.filtering is not None:
            waves = converted(self.train, waves, taps)
        shot, envelope = play(self.train, waves, half_step=half_step)
        self.count += 1
        self.notices += [text for text in shot.notices if not half_step]
        self.step = self.step if half_step else shot.step
        return shot, envelope

    def train_twice(self, what: str, taps: FloatArray) -> tuple[Capture, Envelope, Capture | None]:
        """The whole train, and once more at half the step where the testbench wants it."""
        waves = self.train.pulses()
        shot, envelope = self.play(what, waves, taps)
        second = None
        if self.train.bench.accuracy.floor:
            second, _ = self.play(f"{what}, half the step", waves, taps, half_step=True)
        return shot, envelope, second


def run_train(bench: Bench, *, progress: Progress | None = None) -> TrainResult:
    """Play a testbench's train through its netlist, and where it asks for one, pre-distorted.

    Parameters
    ----------
    bench : Testbench
        With [train] and a [[stimulus]] that plays one pulse. Without `floor` in [accuracy] the
        runs at half the step are left out.
    progress : callable or None
        Called with what each run of the circuit is for.

    Returns
    -------
    TrainResult
        A design estimate.

    Raises
    ------
    InputError
        If the testbench, its deck or the table cannot be used.
    SimulationError
        If ngspice or the evolution fails.
    """
    began = time.perf_counter()
    started = datetime.now().astimezone().isoformat(timespec="seconds")
    bench = gate_bench(bench)
    train, notices = make_train(bench)
    if not train.step_fits:
        raise TestbenchError(
            f"{bench.source or 'the testbench'}, table [{NAME}], key 'step': a step of "
            f"{format_quantity(train.table.step or 0.0, 's')} does not end within the run of "
            f"{format_quantity(train.stop, 's')}",
            hint="make the train longer, or the step shorter",
        )
    _check_full_scale(train)
    runs = _Runs(train, progress)
    shot, envelope, second = runs.train_twice("train", _PLAIN)
    predistortion, step_after = None, None
    if train.filtering is None:
        before = respond(train, shot, envelope, second)
        step_before = _step(runs, None, _PLAIN, 0.0)
    else:
        _, alone = runs.play(
            "one pulse", train.pulses(only_first=True, level=train.filtering.level), _PLAIN
        )
        response = measure_response(train, alone)
        ideal = ideal_train(train, response, response.late, envelope.t)
        before = respond(train, shot, envelope, second, ideal=ideal)
        predistortion, told = _predistort(runs, response, envelope)
        notices += told
        step_before = _step(runs, response, _PLAIN, predistortion.line_delay)
        step_after = _step(runs, response, predistortion.taps, predistortion.delay)
    shift = train.table.shift_per_volt is not None
    return TrainResult(
        title=bench.title,
        target=gate_target(bench).name,
        kind="shift" if shift else "drive",
        factors=np.array(train.factors),
        spacing=train.table.spacing,
        begin=train.begin,
        before=before,
        predistortion=predistortion,
        step_before=step_before,
        step_after=step_after,
        netlist_runs=runs.count,
        step=runs.step,
        warnings=tuple(
            dict.fromkeys((*runs.notices, *notices, *_warnings(train, before, predistortion)))
        ),
        started=started,
        wall_time=time.perf_counter() - began,
        testbench=bench.to_toml(),
    )


def _check_full_scale(train: Train) -> None:
    if train.filtering is None:
        return
    limit, alone = train.filtering.full_scale, largest_value(train, _PLAIN)
    if alone > limit.value:
        raise TestbenchError(
            f"{train.bench.source or 'the testbench'}, table [{NAME}.predistortion], key "
            f"'full_scale': the train itself reaches {alone:.4g} {limit.unit}, more than "
            f"{limit.value:.4g} {limit.unit}",
            hint="lower the pulse of [[stimulus]], or raise 'full_scale'",
        )


def _predistort(
    runs: _Runs, response: Response, plain: Envelope
) -> tuple[Predistortion, tuple[str, ...]]:
    """Design the filter, and play the train with it."""
    train = runs.train
    filtering = train.filtering
    assert filtering is not None
    found, notices = design_filter(train, response)
    taps = found.design.taps
    grid = 1.0 / (filtering.rate * STRIDE)
    line_delay, delay = response.late * grid, found.late * grid
    shot, envelope, second = runs.train_twice("train, pre-distorted", taps)
    ideal = ideal_train(train, response, found.late, envelope.t)
    after = respond(train, shot, envelope, second, late=delay - line_delay, ideal=ideal)
    peaks = largest_departure(train, _PLAIN), largest_departure(train, taps)
    return Predistortion(
        taps=taps,
        rate=filtering.rate,
        delay=delay,
        line_delay=line_delay,
        regularisation=found.regularisation,
        regularisation_asked=filtering.regularisation,
        condition=found.design.condition,
        rank=found.design.rank,
        level=filtering.level,
        predicted=found.design.residual,
        peak_before=peaks[0],
        peak_after=peaks[1],
        full_scale_used=largest_value(train, taps) / filtering.full_scale.value,
        headroom=20.0 * math.log10(peaks[1] / peaks[0]),
        worst_peak=float(np.abs(taps).sum()),
        nonlinear_before=unexplained(train, response, plain, _PLAIN, ideal),
        nonlinear_after=unexplained(train, response, envelope, taps, ideal),
        after=after,
    ), notices


def _step(
    runs: _Runs, response: Response | None, taps: FloatArray, delay: float
) -> StepSettling | None:
    train = runs.train
    if train.table.step is None:
        return None
    level = 1.0 if train.filtering is None else train.filtering.level
    steps = train.steps(level)
    _, envelope = runs.play("step", steps, taps)
    if response is None:
        return settle_step(train, envelope, delay=delay, height=None, ideal=None)
    ideal, height = ideal_step(train, response, envelope, delay, steps)
    return settle_step(train, envelope, delay=delay, height=height, ideal=ideal)


def _warnings(
    train: Train, before: TrainResponse, predistortion: Predistortion | None
) -> tuple[str, ...]:
    told = []
    for name, response in _responses(before, predistortion).items():
        if response.amplitude_scale in SCALE_RANGE:
            told.append(
                f"{name}: the amplitude scale of the first pulse stands at the end of its range, "
                f"{response.amplitude_scale:g}: the amplitude of the pulse does not suit its target"
            )
    if before.memory_deeper:
        told.append(
            f"the farthest slot back that the train resolves, {before.memory_depth}, still "
            "matters; a longer train tells how far it goes"
        )
    if predistortion is not None:
        told += _out_of_reach(before, predistortion)
    if math.isnan(before.numerical_floor):
        told.append(
            "without `floor` in [accuracy] nothing tells the memory from the simulator's own errors"
        )
    qubit = train.bench.qubit
    frequency = qubit.frequency if isinstance(qubit.frequency, float) else train.carrier
    offset = frequency + qubit.detuning - train.carrier
    if train.table.shift_per_volt is None and abs(offset) > 0.0:
        turns = offset * train.table.spacing * len(train.factors)
        told.append(
            f"the qubit lies {format_quantity(offset, 'Hz')} from the carrier, which is "
            f"{360.0 * turns:.4g}° over the train: the axis of the pulses moves in its frame"
        )
    return tuple(told)


def _out_of_reach(before: TrainResponse, predistortion: Predistortion) -> list[str]:
    """Tell of what decays slower than the filter lasts."""
    length = predistortion.taps.size / predistortion.rate
    found = [] if before.settling is None else before.settling.time_constants.tolist()
    slow = [tau for tau in found if tau > length]
    if not slow:
        return []
    return [
        f"the taps last {format_quantity(length, 's')}, and a part of what pulses leave decays "
        f"with {format_quantity(max(slow), 's', 3)} or more: a filter of that length does not "
        "reach it"
    ]


def _responses(
    before: TrainResponse, predistortion: Predistortion | None
) -> dict[str, TrainResponse]:
    found = {"train": before}
    return found if predistortion is None else {**found, "pre-distorted": predistortion.after}
