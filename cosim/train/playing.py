"""From a testbench's own stimuli to a train of them, and one transient of the whole of it."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.capture import Capture, capture_probe, make_plan, time_step
from cosim.circuit.deck import Deck
from cosim.config import Level
from cosim.decks import netlist_of, read_deck
from cosim.dsp.demodulation import demodulate, half_length
from cosim.dsp.predistortion import filter_samples
from cosim.dsp.resampling import interpolant
from cosim.dsp.trains import hold_samples, pulse_span, repeat_shape, sample_waveform
from cosim.errors import SimulatorTimeoutError, TestbenchError, WaveformError
from cosim.line import through_line
from cosim.stimuli import PointsStimulus, Stimulus, stimulus_waves
from cosim.testbench import Testbench
from cosim.train.table import NAME, PredistortionTable, TrainTable, read_train
from cosim.units import format_quantity
from cosim.waveform import ComplexArray, Envelope, FloatArray, Waveform

# A number of steps, samples or periods this close to a whole one is one.
_WHOLE = 1e-6
# Time steps by which a spline sees the corner at which a pulse begins.
LOOK_AHEAD = 3
# Samples of the period from which a carrier at rest is read.
_REST_SAMPLES = 160


@dataclass(frozen=True, slots=True)
class Train:
    """A train ready to be played.

    Parameters
    ----------
    bench : Testbench
        With the time step and the stop of the train, and no window.
    deck : Deck
        Its deck as read.
    table : TrainTable
        The table [train].
    filtering : PredistortionTable or None
        Its pre-distortion.
    factors : tuple of float
        Of the pulse in each slot.
    shapes : mapping of Waveform
        One pulse, by the source that plays it.
    begin : float
        Where the first slot begins at the qubit, in s.
    carrier : float
        In Hz.
    """

    bench: Testbench
    deck: Deck
    table: TrainTable
    filtering: PredistortionTable | None
    factors: tuple[float, ...]
    shapes: Mapping[str, Waveform]
    begin: float
    carrier: float

    @property
    def stop(self) -> float:
        """End of the run in s."""
        assert self.bench.netlist is not None
        assert self.bench.netlist.stop is not None
        return self.bench.netlist.stop

    @property
    def first(self) -> int:
        """Number of the first slot with a pulse: before it there is rest only."""
        return next(slot for slot, factor in enumerate(self.factors) if factor)

    @property
    def pulse_begin(self) -> float:
        """Time in s at which a pulse of the first slot leaves its rest; the circuit is at rest."""
        return max(0.0, min(pulse_span(shape)[0] for shape in self.shapes.values()))

    @property
    def step_fits(self) -> bool:
        """Whether the step that is asked for lies within the run."""
        return self.table.step is None or self.pulse_begin + self.table.step <= self.stop

    def span(self, slot: int, late: float = 0.0) -> tuple[float, float]:
        """Give start and end of a slot at the qubit in s, `late` by some s."""
        start = self.begin + late + slot * self.table.spacing
        # A slot that is early by the delay of the line loses a part in which there is rest.
        return max(start, 0.0), start + self.table.spacing

    def samples(self, waves: Mapping[str, Waveform]) -> dict[str, FloatArray]:
        """Sample waveforms as the converter does, over the whole run."""
        assert self.filtering is not None
        count = math.ceil(self.stop * self.filtering.rate) + 1
        return {
            name: sample_waveform(wave, self.filtering.rate, count) for name, wave in waves.items()
        }

    def pulses(self, *, only_first: bool = False, level: float = 1.0) -> dict[str, Waveform]:
        """Give what each source is meant to play: the train, or its first pulse at a level."""
        factors = [
            level * factor if slot == self.first or not only_first else 0.0
            for slot, factor in enumerate(self.factors)
        ]
        return {
            name: repeat_shape(shape, factors, self.table.spacing)
            for name, shape in self.shapes.items()
        }

    def steps(self, level: float) -> dict[str, Waveform]:
        """Give a step to a part of each pulse's largest departure from its rest, for each source.

        It is as quick as the pulse's own departure from its rest to half of that.
        """
        found = {}
        length = self.table.step or 0.0
        for name, shape in self.shapes.items():
            away = shape.v - shape.v[0]
            top = float(away[np.argmax(np.abs(away))])
            start, _ = pulse_span(shape)
            half = float(shape.t[np.argmax(np.abs(away) >= 0.5 * abs(top))])
            v = shape.v[0] + level * top * np.array([0.0, 1.0, 1.0])
            t = np.array([start, start + max(2.0 * (half - start), 1e-15), start + length])
            found[name] = Waveform(t, v, shape.unit)
        return found


def make_train(bench: Testbench) -> tuple[Train, tuple[str, ...]]:
    """Read a testbench's train.

    Parameters
    ----------
    bench : Testbench
        With [train], and with a [[stimulus]] that plays one pulse.

    Returns
    -------
    Train
        Ready to be played.
    tuple of str
        What the reader must know.

    Raises
    ------
    InputError
        If the table is wrong, there is no stimulus to repeat, or a pulse does not fit its slot.
    """
    table, filtering = read_train(bench)
    where = f"{bench.source or 'the testbench'}, table [{NAME}]"
    if bench.netlist is None:
        raise TestbenchError(f"{where}: a train is played by a netlist, and there is none")
    carrier = bench.drive.carrier
    if not isinstance(carrier, float):
        raise TestbenchError(
            f"{where}: the carrier is estimated, but its phase must be known over all slots",
            hint="give the carrier of [drive] in Hz",
        )
    if bench.qubit.kind == "operators":
        raise TestbenchError(f"{where}: a train takes a spin or a transmon, not operators")
    if table.shift_per_volt is not None and (bench.drive.i is None or bench.drive.q is not None):
        raise TestbenchError(
            f"{where}, key 'shift_per_volt': a line that shifts the qubit has no carrier",
            hint="name its voltage as the key 'i' of [drive], without 'probe' and 'q'",
        )
    deck = read_deck(bench)
    shapes = _shapes(bench, table, where)
    _check_levels(shapes, filtering, where)
    begin = bench.gate.window[0] if bench.gate.window is not None else 0.0
    bench, notices = _timed(bench, deck, table, filtering, begin, carrier)
    for name in ("noise", "spectator"):
        if getattr(bench, name):
            notices += (f"the tables [[{name}]] are left out: a train is judged without them",)
    factors = table.factors()
    return Train(bench, deck, table, filtering, factors, shapes, begin, carrier), notices


def _shapes(bench: Testbench, table: TrainTable, where: str) -> dict[str, Waveform]:
    """Give one pulse of each source of the train, and check that it fits into a slot."""
    shapes: dict[str, Waveform] = {}
    wanted = {name.lower() for name in table.sources}
    for stimulus in bench.stimulus:
        own = {name.lower() for name in stimulus.driven}
        if wanted and not own & wanted:
            continue
        if getattr(stimulus, "repeat", False):
            raise TestbenchError(
                f"{where}: the [[stimulus]] of '{stimulus.driven[0]}' has repeat = true, so that "
                "it is no single pulse",
                hint="leave out 'repeat': the train repeats it",
            )
        waves = stimulus_waves(stimulus, folder=Path(bench.folder), stop=0.0)
        # A line of a bus that does not move has nothing to repeat.
        moving = {name: wave for name, wave in waves.items() if np.ptp(wave.v) > 0.0}
        shapes |= {k: wave for k, wave in moving.items() if not wanted or k.lower() in wanted}
    missing = wanted - {name.lower() for name in shapes}
    if missing or not shapes:
        told = f"the source '{min(missing)}' has none" if missing else "there is none"
        raise TestbenchError(
            f"{where}: a train repeats a [[stimulus]] that plays a pulse, and {told}",
            hint='give one, such as source = "vin" with points = [["1 ns", "0 V"], ...], for the '
            "source that plays or triggers the pulse",
        )
    for name, shape in shapes.items():
        try:
            repeat_shape(shape, (1.0,), table.spacing)
        except WaveformError as error:
            raise TestbenchError(f"{where}, source '{name}': {error.message}") from None
    return shapes


def _check_levels(
    shapes: Mapping[str, Waveform], filtering: PredistortionTable | None, where: str
) -> None:
    if filtering is None:
        return
    limit = filtering.full_scale
    for name, shape in shapes.items():
        if shape.unit != limit.unit:
            raise TestbenchError(
                f"{where}: 'full_scale' is in {limit.unit}, but the source '{name}' plays "
                f"{shape.unit}"
            )


def _timed(
    bench: Testbench,
    deck: Deck,
    table: TrainTable,
    filtering: PredistortionTable | None,
    begin: float,
    carrier: float,
) -> tuple[Testbench, tuple[str, ...]]:
    """Set time step and end of the run; where it is free the step is a whole part of a slot."""
    netlist = netlist_of(bench)
    notices: list[str] = []
    baseband = bench.drive.probe is None
    largest, _ = time_step(netlist, deck, 0.0 if baseband else carrier, "with a baseband pair")
    unit = table.spacing if filtering is None else 1.0 / filtering.rate
    what = "slot" if filtering is None else "sample"
    if baseband:
        step = unit / math.ceil(unit / largest * (1.0 - _WHOLE))
        netlist = replace(netlist, max_step=step)
        margin = step
    else:
        if not _is_whole(unit / largest):
            notices.append(
                f"a {what} of {format_quantity(unit, 's', 6)} is {unit / largest:.6g} time steps, "
                "not a whole number: edges fall between time points otherwise from slot to slot"
            )
        margin = 2.0 * half_length(carrier)
    if table.shift_per_volt is None and not _is_whole(table.spacing * carrier):
        notices.append(
            f"a slot is {table.spacing * carrier:.6g} periods of the carrier, not a whole number: "
            "its phase within the pulse differs from slot to slot, which counts as pattern "
            "dependence"
        )
    late = 0.0 if filtering is None else filtering.taps / filtering.rate
    stop = begin + len(table.factors()) * table.spacing + late + margin
    netlist = replace(netlist, stop=stop)
    gate = replace(bench.gate, window=None, idle=None)
    return replace(bench, netlist=netlist, gate=gate, noise=bench.noise), tuple(notices)


def _is_whole(number: float) -> bool:
    return abs(number - round(number)) <= _WHOLE * max(1.0, abs(number))


def converted(train: Train, waves: Mapping[str, Waveform], taps: FloatArray) -> dict[str, Waveform]:
    """Give what the converters play for waveforms that they are meant to play.

    Parameters
    ----------
    train : Train
        With a converter.
    waves : mapping of Waveform
        By source.
    taps : ndarray, shape (k,)
        Of the filter before the converter; (1,) of one that does nothing.

    Returns
    -------
    dict of Waveform
        Filtered samples, held.
    """
    assert train.filtering is not None
    rate, edge = train.filtering.rate, train.filtering.rise
    return {
        name: hold_samples(filter_samples(samples, taps), rate, edge, waves[name].unit)
        for name, samples in train.samples(waves).items()
    }


def play(
    train: Train, waves: Mapping[str, Waveform], *, half_step: bool = False
) -> tuple[Capture, Envelope]:
    """Simulate the deck with waveforms at the train's sources.

    Parameters
    ----------
    train : Train
        From `make_train`.
    waves : mapping of Waveform
        By source.
    half_step : bool
        Run at half the step and tighter tolerances.

    Returns
    -------
    Capture
        What is at the qubit's end of the line.
    Envelope
        I + jQ of that, less what it is at rest, before anything is played; of a baseband pair
        without a line that of the circuit itself.

    Raises
    ------
    SimulationError, DeckError
        If the simulator fails.
    """
    bench = train.bench
    played = {name.lower() for name in waves}
    others: list[Stimulus] = []
    for item in bench.stimulus:
        if not played & {name.lower() for name in item.driven}:
            others.append(item)
            continue
        # Lines of a bus that the train does not move stay where they are.
        still = stimulus_waves(item, folder=Path(bench.folder), stop=train.stop)
        others += [_points(k, wave) for k, wave in still.items() if k.lower() not in played]
    own = tuple(_points(name, wave) for name, wave in waves.items())
    plan = make_plan(replace(bench, stimulus=(*others, *own)), train.deck)
    try:
        shot = capture_probe(plan.half_step() if half_step else plan)
    except SimulatorTimeoutError as error:
        raise SimulatorTimeoutError(
            f"{error.message}: the train of {len(train.factors)} slots lasts "
            f"{format_quantity(train.stop, 's')}",
            hint="make it shorter, its spacing less, or 'time_limit' in [netlist] longer",
            log=error.log,
        ) from None
    shot = through_line(bench, shot)
    if bench.drive.probe is not None or bench.drive.line is not None:
        envelope = demodulate(shot.waveform, train.carrier)
        return shot, replace(envelope, iq=envelope.iq - _rest(train, shot.waveform))
    count = math.floor(train.stop / shot.step * (1.0 + 1e-9)) + 1
    ends = shot.extra["i"].t
    t = np.clip(np.arange(count) * shot.step, ends[0], ends[-1])
    parts = [
        np.asarray(interpolant(shot.extra[name])(t)) for name in ("i", "q") if name in shot.extra
    ]
    iq = parts[0] + (1j * parts[1] if len(parts) > 1 else 0.0)
    rest = iq[min(max(int(train.pulse_begin / shot.step) - LOOK_AHEAD, 0), iq.size - 1)]
    return shot, Envelope(
        0.0, shot.step, (iq - rest).astype(np.complex128), train.carrier, shot.extra["i"].unit
    )


def _points(name: str, wave: Waveform) -> PointsStimulus:
    points = tuple(
        (time, Level(value, wave.unit))
        for time, value in zip(wave.t.tolist(), wave.v.tolist(), strict=True)
    )
    return PointsStimulus(name, points)


def _rest(train: Train, waveform: Waveform) -> complex:
    """Give I + jQ of a carrier over its last period before anything is played.

    The demodulator looks ahead by the length of its filter, and would see the pulse.
    """
    begin, period = train.pulse_begin, 1.0 / train.carrier
    if begin < waveform.t[0] + period:
        return 0j
    t = begin - period + period / _REST_SAMPLES * np.arange(_REST_SAMPLES)
    turn = np.exp(-2j * np.pi * np.mod(train.carrier * t, 1.0))
    return complex(2.0 * np.mean(interpolant(waveform)(t) * turn))


def sampled(envelope: Envelope, times: FloatArray) -> ComplexArray:
    """Give an envelope at other times.

    Parameters
    ----------
    envelope : Envelope
        On its own grid.
    times : ndarray, shape (n,)
        In s; what lies outside of the envelope is held to its ends.

    Returns
    -------
    ndarray of complex, shape (n,)
        In the envelope's unit.
    """
    inside = np.clip(times, envelope.t0, envelope.t0 + envelope.dt * (envelope.iq.size - 1))
    return np.asarray(CubicSpline(envelope.t, envelope.iq)(inside), dtype=np.complex128)
