"""A readout chain in closed form: resonator, loss, noise, a pole, converters, decisions.

The field of the resonator is exact, and so is a pole behind it for straight lines between samples.
Time is counted from the start of the pulse.
"""

import math
from dataclasses import dataclass, field, replace

import numpy as np
from scipy.linalg import solve_banded
from scipy.optimize import minimize_scalar

from cosim.dsp.detection.assignment import AssignmentSplit, split_assignment
from cosim.dsp.detection.converter import Adc
from cosim.dsp.detection.outcomes import wrong_shares
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.dsp.detection.projection import project
from cosim.dsp.detection.reception import ChainOutput, Detector, receive
from cosim.dsp.detection.records import Preparation, Records, Transitions, relaxation
from cosim.dsp.noise.thermal import Attenuator
from cosim.errors import TestbenchError
from cosim.outgoing import Amplifier, OutputLine, arriving_noise, emf_envelope
from cosim.quantum.incident import (
    IncidentField,
    incident_amplitude,
    sample_drive,
    two_step_drive,
)
from cosim.quantum.resonator import Resonator, amplitude_for_photons, field_rate, steady_field
from cosim.quantum.resonator_field import evolve_field, fields_with_jump
from cosim.readout_schema import ReadoutTable, ResonatorTable
from cosim.waveform import ComplexArray, FloatArray

# Samples of a record in the time of the fastest of what happens, and in the whole of it.
FINE, LEAST_SAMPLES, MOST_SAMPLES = 40, 256, 8192
# A pole is followed up to this part of the rate of the records.
FASTEST_POLE = 0.1
# Steps of the density of noise behind a pole, in parts of the pole near the carrier and of the
# offset far from it: straight lines between them are right to 0.1 % of the density.
POLE_STEP = 0.04
# The best length of the integration is looked for from this part of the window on.
LEAST_PART = 0.05


@dataclass(frozen=True, slots=True)
class ReadoutTask:
    """What stays the same of a readout.

    Parameters
    ----------
    table : ReadoutTable
        Stages, window, weights and errors of the state.
    resonator : Resonator
        The resonator.
    frequency : float
        Of the drive in Hz.
    step : float
        Between samples of the records in s.
    start, latest : float
        Start of the integration, and its latest end, in s from the start of the pulse.
    records : Records
        EMF at the end of the stages in V, times the gain of [readout], without a pole.
    transitions : Transitions
        During the readout.
    preparation : Preparation
        Before it.
    """

    table: ReadoutTable
    resonator: Resonator
    frequency: float = field(metadata={"unit": "Hz"})
    step: float = field(metadata={"unit": "s"})
    start: float = field(metadata={"unit": "s"})
    latest: float = field(metadata={"unit": "s"})
    records: Records
    transitions: Transitions
    preparation: Preparation


@dataclass(frozen=True, slots=True)
class ChainLimits:
    """What a chain is taken to be.

    Parameters
    ----------
    noise_temperature : float
        Added at the input of its amplifiers, behind the stages, in K.
    stop : float
        End of the integration in s from the start of the pulse.
    bandwidth : float
        Of its pole in Hz; infinite for none.
    adc : Adc or None
        Its converters.
    """

    noise_temperature: float = field(metadata={"unit": "K"})
    stop: float = field(metadata={"unit": "s"})
    bandwidth: float = field(default=math.inf, metadata={"unit": "Hz"})
    adc: Adc | None = None


def make_task(pulse: ResonatorTable, table: ReadoutTable, rate: float | None) -> ReadoutTask:
    """Work out the records of a readout.

    Parameters
    ----------
    pulse : ResonatorTable
        The resonator and its drive.
    table : ReadoutTable
        How it is judged.
    rate : float or None
        Of the converters in Hz, whose interval is a whole number of samples.

    Returns
    -------
    ReadoutTask

    Raises
    ------
    TestbenchError
        If the window does not lie within the pulse, or the records would be too long.
    """
    start, latest = (edge - pulse.start for edge in table.window)
    if start < 0.0:
        raise TestbenchError(
            "table [readout], key 'window': without a circuit, wanted a start that is not before "
            f"the pulse's, {pulse.start:g} s, got {table.window[0]:g} s"
        )
    resonator = pulse.resonator()
    step = _step(pulse, resonator, latest, rate)
    count = math.floor(latest / step + 1e-9) + 1
    drive = _drive(pulse, resonator, step, count)
    jumping = table.decay_times if math.isfinite(table.t1) else 0
    times = np.asarray(latest * (np.arange(jumping) + 0.5) / max(jumping, 1))
    rises = times if table.thermal_population > 0.0 else times[:0]
    line = _line(table, 0.0)

    def emf(outside: ComplexArray) -> ComplexArray:
        volts = 0.5 * emf_envelope(outside, drive.frequency, line)
        # A sample of a record is the mean over its interval.
        return np.asarray(0.5 * (volts[..., :-1] + volts[..., 1:]))

    def jumps(at: FloatArray, before: int, after: int) -> ComplexArray:
        if not at.size:
            return np.zeros((0, count - 1), dtype=np.complex128)
        return emf(fields_with_jump(resonator, drive, at, before, after).outside)

    records = Records(
        step,
        emf(evolve_field(resonator, drive, 0).outside),
        emf(evolve_field(resonator, drive, 1).outside),
        times,
        jumps(times, 1, 0),
        rises,
        jumps(rises, 0, 1),
    )
    return ReadoutTask(
        table,
        resonator,
        drive.frequency,
        step,
        start,
        step * (count - 1),
        records,
        relaxation(table.t1, table.thermal_population),
        Preparation(table.thermal_population, table.preparation_error),
    )


def chain_output(task: ReadoutTask, chain: ChainLimits) -> ChainOutput:
    """Give records and noise of a chain.

    Parameters
    ----------
    task : ReadoutTask
    chain : ChainLimits

    Returns
    -------
    ChainOutput
        In V across a matched load, behind the gain of [readout].
    """
    noise = arriving_noise(_line(task.table, chain.noise_temperature), [task.frequency])
    # Half of the EMF is across the load, a quarter of its power.
    white = float(noise.emf_density[0]) / 4.0
    if math.isinf(chain.bandwidth):
        return ChainOutput(task.records, OutputNoise(white=white))
    r = task.records
    behind = Records(
        r.step,
        _behind_pole(r.ground[None], r.step, chain.bandwidth)[0],
        _behind_pole(r.excited[None], r.step, chain.bandwidth)[0],
        r.decay_times,
        _behind_pole(r.decays, r.step, chain.bandwidth),
        r.excitation_times,
        _behind_pole(r.excitations, r.step, chain.bandwidth),
    )
    f = _offsets(r.step, chain.bandwidth)
    z = np.exp(-2j * math.pi * f * r.step)
    decay = math.exp(-2.0 * math.pi * chain.bandwidth * r.step)
    # The noise of the grid goes through the same filter as the records do.
    first, second = _pole_weights(chain.bandwidth, r.step)
    passed = np.abs((first + second * z) / (1.0 - decay * z)) ** 2
    return ChainOutput(behind, OutputNoise(frequencies=f, density=white * passed))


def judge(task: ReadoutTask, chain: ChainLimits) -> AssignmentSplit:
    """Give the decisions of a chain in closed form.

    Parameters
    ----------
    task : ReadoutTask
    chain : ChainLimits

    Returns
    -------
    AssignmentSplit
    """
    return split_assignment(
        chain_output(task, chain), detector_of(task, chain), task.transitions, task.preparation
    )


def error_of(task: ReadoutTask, chain: ChainLimits) -> float:
    """Give the assignment error of a chain, the same as `judge` does and no more.

    Parameters
    ----------
    task : ReadoutTask
    chain : ChainLimits

    Returns
    -------
    float
    """
    received = receive(chain_output(task, chain), detector_of(task, chain))
    projection = project(received, task.table.weights)
    threshold = projection.mid_threshold
    return sum(wrong_shares(projection, task.transitions, task.preparation, threshold)) / 2.0


def best_stop(task: ReadoutTask, chain: ChainLimits) -> float:
    """Find the end of the integration with the least error.

    Parameters
    ----------
    task : ReadoutTask
    chain : ChainLimits
        Its own end does not matter.

    Returns
    -------
    float
        In s from the start of the pulse, on a sample; the error is flat about it.
    """
    every = sample_interval(task, chain)
    first = task.start + LEAST_PART * (task.latest - task.start)

    def at(stop: float) -> float:
        return error_of(task, replace(chain, stop=stop))

    best = minimize_scalar(
        at, bounds=(first, task.latest), method="bounded", options={"xatol": 2.0 * every}
    )
    stop = min(every * round(float(best.x) / every), task.latest)
    # Where the error falls to the very end, the search stops short of it.
    return task.latest if at(task.latest) <= at(stop) else stop


def sample_interval(task: ReadoutTask, chain: ChainLimits) -> float:
    """Give the interval of the samples that are integrated, in s.

    Parameters
    ----------
    task : ReadoutTask
    chain : ChainLimits

    Returns
    -------
    float
        Of the converters, or of the records where there are none.
    """
    return task.step if chain.adc is None else 1.0 / chain.adc.rate


def detector_of(task: ReadoutTask, chain: ChainLimits) -> Detector:
    """Give how the records of a chain become decisions.

    Parameters
    ----------
    task : ReadoutTask
    chain : ChainLimits

    Returns
    -------
    Detector
    """
    return Detector(task.table.weights, "mid", task.start, chain.stop, chain.adc)


def added_quanta_of(task: ReadoutTask, temperature: float) -> tuple[float, float]:
    """Give the noise that stages and chain add, in quanta at the resonator's output.

    Parameters
    ----------
    task : ReadoutTask
    temperature : float
        Noise temperature of the chain in K.

    Returns
    -------
    tuple of two floats
        What they add, and the least that a chain of this gain could.
    """
    found = arriving_noise(_line(task.table, temperature), [task.frequency])
    return float(found.added_quanta[0]), found.least_added_quanta


def steady_rate(task: ReadoutTask, pulse: ResonatorTable) -> float:
    """Give SNR^2 over time in steady state, of an ideal detection of the resonator's output.

    Parameters
    ----------
    task : ReadoutTask
    pulse : ResonatorTable
        With photons or power.

    Returns
    -------
    float
        4 kappa_out |a1 - a0|^2 in 1/s; times the efficiency 1/(1 + 2 n_add) and the time.

    Notes
    -----
    A. A. Clerk et al., "Introduction to quantum noise, measurement, and amplification", Rev. Mod.
    Phys. 82, 1155 (2010).
    """
    level = _level(pulse, task.resonator)
    fields = [
        complex(steady_field(task.resonator, state, level, task.frequency)) for state in (0, 1)
    ]
    return 4.0 * task.resonator.output_rate * abs(fields[1] - fields[0]) ** 2


def _line(table: ReadoutTable, temperature: float) -> OutputLine:
    stages: list[Attenuator | Amplifier] = [
        Attenuator(10.0 ** (decibels / 10.0), kelvin) for decibels, kelvin in table.stages
    ]
    return OutputLine((*stages, Amplifier(table.gain, temperature)), impedance=table.impedance)


def _level(pulse: ResonatorTable, resonator: Resonator) -> float:
    if pulse.power is not None:
        return incident_amplitude(1e-3 * 10.0 ** (pulse.power / 10.0), pulse.drive)
    if pulse.photons is None:
        raise TestbenchError(
            "table [resonator]: without a circuit, wanted 'photons' or 'power'",
            hint="a pulse from a file is that of a circuit",
        )
    return amplitude_for_photons(resonator, pulse.photons, pulse.drive)


def _drive(pulse: ResonatorTable, resonator: Resonator, step: float, count: int) -> IncidentField:
    steps = two_step_drive(
        _level(pulse, resonator),
        pulse.length,
        boost=pulse.boost,
        boost_length=pulse.boost_length,
        ring_down=pulse.ring_down,
        ring_down_length=pulse.ring_down_length,
    )
    return sample_drive(steps, pulse.drive, step, count, 0.0)


def _step(pulse: ResonatorTable, resonator: Resonator, latest: float, rate: float | None) -> float:
    rates = [abs(complex(field_rate(resonator, state, pulse.drive))) for state in (0, 1)]
    step = min(1.0 / (FINE * max(rates)), latest / LEAST_SAMPLES)
    if rate is None:
        step = latest / math.ceil(latest / step)
    else:
        # The filter in front of the converters needs a few samples in their interval.
        step = 1.0 / (rate * max(4, math.ceil(1.0 / (rate * step))))
    if latest / step > MOST_SAMPLES:
        raise TestbenchError(
            f"[specify]: records of {latest:g} s at {step:g} s would have {latest / step:.0f} "
            f"samples; at most {MOST_SAMPLES} are followed",
            hint="shorten the window, or lower the rate of the converters",
        )
    return step


def _pole_weights(bandwidth: float, step: float) -> tuple[float, float]:
    """Weights of a sample and of the one before it, for straight lines between them."""
    z = 2.0 * math.pi * bandwidth * step
    whole = -math.expm1(-z)
    second = whole / z - math.exp(-z)
    return whole - second, second


def _behind_pole(rows: ComplexArray, step: float, bandwidth: float) -> ComplexArray:
    """Send records through a single pole that has settled on their first sample."""
    if rows.shape[0] == 0:
        return rows
    first, second = _pole_weights(bandwidth, step)
    begin = rows[:, :1]
    moved = (rows - begin).T
    forced = first * moved
    forced[1:] += second * moved[:-1]
    bands = np.ones((2, moved.shape[0]))
    bands[1] = -math.exp(-2.0 * math.pi * bandwidth * step)
    return np.asarray(begin + solve_banded((1, 0), bands, forced).T)


def _offsets(step: float, bandwidth: float) -> FloatArray:
    """Offsets up to half the rate of the records, close together where a pole bends the density."""
    farthest = math.asinh(0.5 / (step * bandwidth))
    count = math.ceil(farthest / POLE_STEP)
    return np.asarray(bandwidth * np.sinh(farthest * np.arange(-count, count + 1) / count))
