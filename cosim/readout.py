"""The readout path: resonator, field, netlist, records, decisions."""

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.constants import Boltzmann

from cosim.circuit.analysis import TransientResult
from cosim.dsp.detection.aftermath import decision_latency, repeat_agreement
from cosim.dsp.detection.assignment import scan_integration, split_assignment
from cosim.dsp.detection.converter import Adc
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.dsp.detection.reception import ChainOutput, Detector
from cosim.dsp.detection.records import Preparation, Records, Transitions, relaxation
from cosim.dsp.detection.shots import integrated_shots, record_shots, shot_points
from cosim.errors import TestbenchError
from cosim.outgoing import OutputLine, added_quanta, arriving_noise
from cosim.quantum.readout_limits import dephasing_rate
from cosim.quantum.resonator import steady_field, wait_for_photons
from cosim.readout_guards import chain_warnings, dispersive_warnings, shot_warnings
from cosim.readout_input import (
    EXCITED,
    GROUND,
    REST,
    SMALL,
    Answers,
    answer_emf,
    drive_level,
    input_frequency_of,
    make_answers,
    output_line,
    source_waveforms,
)
from cosim.readout_noise import (
    ChainNoise,
    NoisyInput,
    arriving_only,
    netlist_noise_at_output,
    quadratures_of,
)
from cosim.readout_output import (
    Grid,
    ReadoutPlan,
    capture_of,
    make_readout_plan,
    read_record,
    record_grid,
    simulate_answers,
)
from cosim.readout_result import ReadoutNoise, ReadoutResult, ReadoutTraces
from cosim.readout_schema import ReadoutTable, ResonatorTable
from cosim.record import Clock, make_record
from cosim.testbench import ReadoutBench
from cosim.voltage_noises import NetlistNoise
from cosim.waveform import ComplexArray

Progress = Callable[[float], None]

# Part of the distance of the states by which a chain must bend for its items to be told apart: what
# is less is not resolved by the simulator's tolerances at the small signals of the comparison.
BENT = 0.01
POINTS = 2000  # of each state, for figures
LEFT = 0.01  # photons, after which the next gate may begin
_DENSITY_POINTS = 101
_STATES = (GROUND, EXCITED)


@dataclass(frozen=True, slots=True)
class Chain:
    """What the netlist makes of the answers.

    Parameters
    ----------
    output : ChainOutput
        Records and noise.
    rest : ndarray of complex, shape (n,)
        The record without a signal, in V.
    gain : float
        Envelope at the output over that of the EMF, for small signals.
    compression : tuple of two floats
        Size of the answer to |0> and to |1> over that of a linear chain.
    """

    output: ChainOutput
    rest: ComplexArray
    gain: float
    compression: tuple[float, float]


def run_readout(bench: ReadoutBench, *, progress: Progress | None = None) -> ReadoutResult:
    """Run a testbench with a readout from the resonator to the assignment error.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench.
    progress : callable or None
        Called with a simulated time in s now and then.

    Returns
    -------
    ReadoutResult
        A design estimate.

    Raises
    ------
    InputError
        If the testbench or the deck cannot be used.
    SimulationError
        If ngspice fails.
    """
    if bench.resonator is None or bench.readout.decision is not None:
        raise TestbenchError(
            f"{bench.source or 'the testbench'}: a run takes a [resonator] and the outputs "
            "'probe', or 'i' and 'q'"
        )
    del progress
    clock = Clock()
    pulse, table = bench.resonator, bench.readout
    plan = make_readout_plan(bench, input_frequency_of(pulse, table))
    clock.lap("deck")
    answers = make_answers(pulse, table, plan.request.stop)
    grid = record_grid(table, pulse.start)
    clock.lap("resonator")
    chain, results = _chain(plan, table, grid, answers)
    clock.lap("simulator_overhead")
    clock.laps["ngspice"] = sum(result.wall_time for result in results)
    clock.laps["simulator_overhead"] -= clock.laps["ngspice"]
    line = output_line(table)
    noise = _noise(bench, plan, grid, answers, chain, line)
    clock.lap("noise")
    output = ChainOutput(chain.output.records, noise.output, None, chain.output.linear)
    detector = _detector(table, grid)
    transitions = relaxation(table.t1, table.thermal_population)
    preparation = Preparation(table.thermal_population, table.preparation_error)
    split = split_assignment(output, detector, transitions, preparation)
    scan = scan_integration(output, detector, transitions, preparation)
    clock.lap("detection")
    chances = (transitions, preparation)
    shots = integrated_shots(split, *chances, table.shots, table.seed)
    records = record_shots(output, detector, split, *chances, table.records, table.seed)
    points = shot_points(split, *chances, POINTS, table.seed)
    clock.lap("shots")
    floor = _floor(bench, plan, grid, answers, noise, detector, output.records)
    clock.lap("floor")
    added, kelvin = _referred(noise, chain, table, line, pulse.drive)
    ends = [float(answers.fields[name].photons[-1]) for name in (GROUND, EXCITED)]
    resonator = pulse.resonator()
    f = np.linspace(-0.5 / grid.step, 0.5 / grid.step, _DENSITY_POINTS)
    warnings = (
        *plan.notices,
        *dispersive_warnings(pulse, max(float(answers.fields[n].photons.max()) for n in _STATES)),
        *chain_warnings(chain.compression, noise, added, line, split),
        *shot_warnings(split, shots, records),
    )
    return ReadoutResult(
        title=bench.title,
        assignment_error=split.assignment_error,
        assignment_matrix=split.assignment_matrix,
        snr=split.snr,
        errors=split.errors,
        integration_time=split.projection.integration_time,
        best_integration_time=scan.best_time,
        best_assignment_error=scan.best_error,
        added_noise_quanta=added,
        noise_temperature=kelvin,
        noise_method=noise.method,
        residual_photons=max(ends),
        wait=wait_for_photons(resonator, max(ends), LEFT),
        latency=decision_latency(detector.adc, table.adc_cycles) if detector.adc else 0.0,
        repeat_agreement=repeat_agreement(split, *chances).mean,
        dephasing_rate=_dephasing(pulse),
        shots=shots,
        records=records,
        numerical_floor=floor,
        split=split,
        scan=scan,
        noise=ReadoutNoise(
            f,
            noise.output.at(f),
            noise.relative_error,
            noise.devices,
            noise.reason,
            noise.left_out,
        ),
        traces=_traces(output.records, grid, answers, points),
        warnings=tuple(dict.fromkeys(warnings)),
        run=make_record(
            bench, capture_of(plan, results[1]), input_frequency_of(pulse, table) or math.nan, clock
        ),
    )


def _chain(
    plan: ReadoutPlan, table: ReadoutTable, grid: Grid, answers: Answers
) -> tuple[Chain, list[TransientResult]]:
    """Run the netlist for all answers, and once more for weak ones where it bends."""
    small = [f"small {name}" for name in _STATES]
    names = [name for name in answers.emf if not name.startswith("small")]
    results = _run(plan, table, answers, [*names, *small])
    records = {
        name: read_record(plan, table, grid, result)
        for name, result in zip([*names, *small], results, strict=True)
    }
    rest = records[REST]
    linear = {name: rest + (records[f"small {name}"] - rest) / SMALL for name in _STATES}
    apart = float(np.abs(linear[EXCITED] - linear[GROUND]).max())
    bent = max(float(np.abs(records[name] - linear[name]).max()) for name in _STATES)
    straight = None
    if bent > BENT * apart:
        jumps = [name for name in names if name.startswith(("decay", "excitation"))]
        weak = _run(plan, table, answers, [f"small {name}" for name in jumps])
        for name, result in zip(jumps, weak, strict=True):
            record = read_record(plan, table, grid, result)
            linear[name] = rest + (record - rest) / SMALL
        straight = _records(linear, grid, answers)
    difference = answers.emf[EXCITED] - answers.emf[GROUND]
    t = grid.start + grid.time - 0.5 * grid.step
    sent = np.interp(t, answers.drive.t, np.abs(difference) ** 2)
    gain = math.sqrt(float(np.sum(np.abs(linear[EXCITED] - linear[GROUND]) ** 2) / sent.sum()))
    sizes = [
        float(np.linalg.norm(records[name] - rest) / np.linalg.norm(linear[name] - rest))
        for name in _STATES
    ]
    quiet = OutputNoise(quadratures=quadratures_of(table))
    output = ChainOutput(_records(records, grid, answers), quiet, None, straight)
    return Chain(output, rest, gain, (sizes[0], sizes[1])), results


def _run(
    plan: ReadoutPlan, table: ReadoutTable, answers: Answers, names: Sequence[str]
) -> list[TransientResult]:
    request = plan.request
    waves = [
        source_waveforms(answer_emf(answers, name), answers, table, request.step, request.stop)
        for name in names
    ]
    return simulate_answers(plan, waves)


def _records(found: Mapping[str, ComplexArray], grid: Grid, answers: Answers) -> Records:
    def rows(kind: str, count: int) -> ComplexArray:
        made = [found[f"{kind} {number}"] for number in range(1, count + 1)]
        return np.array(made) if made else np.zeros((0, grid.count), dtype=np.complex128)

    return Records(
        grid.step,
        found[GROUND],
        found[EXCITED],
        answers.decay_times - grid.start,
        rows("decay", answers.decay_times.size),
        answers.excitation_times - grid.start,
        rows("excitation", answers.excitation_times.size),
    )


def _detector(table: ReadoutTable, grid: Grid) -> Detector:
    adc = None
    if (
        table.adc_bits is not None
        and table.adc_full_scale is not None
        and table.adc_rate is not None
    ):
        adc = Adc(table.adc_bits, table.adc_full_scale, table.adc_rate)
    first, last = table.window
    stop = min(last - grid.start, grid.count * grid.step)
    return Detector(weights=table.weights, start=max(0.0, first - grid.start), stop=stop, adc=adc)


def _noise(
    bench: ReadoutBench,
    plan: ReadoutPlan,
    grid: Grid,
    answers: Answers,
    chain: Chain,
    line: OutputLine,
) -> ChainNoise:
    table = bench.readout
    arriving = arriving_noise(line, [answers.drive.frequency])
    tables = [one for one in bench.noise if isinstance(one, NetlistNoise)]
    if len(tables) != len(bench.noise) or len(tables) > 1:
        raise TestbenchError(
            f"{bench.source or 'the testbench'}: a readout takes one table [[noise]], with "
            'acts_on = "probe" and from = "netlist"; what arrives with the signal is said in '
            "[readout]"
        )
    if not tables:
        return arriving_only(arriving, chain.gain, table)
    request = plan.request
    waves = [
        source_waveforms(answers.emf[name], answers, table, request.step, request.stop)
        for name in _STATES
    ]
    # The EMF's one-sided density; the two sources of a baseband pair have twice that, since both
    # sides of the carrier fall on the same frequency.
    density = float(arriving.emf_density[0]) / (1.0 if table.signal == "baseband" else 2.0)
    entry = NoisyInput((waves[0], waves[1]), density)
    frequency = input_frequency_of(bench.resonator, table) if bench.resonator else 0.0
    return netlist_noise_at_output(plan, table, grid, tables[0], entry, frequency)


def _referred(
    noise: ChainNoise, chain: Chain, table: ReadoutTable, line: OutputLine, frequency: float
) -> tuple[float, float]:
    """Refer the noise to the resonator's output in quanta, and to the netlist's source in K."""
    if quadratures_of(table) == 1:
        return math.nan, math.nan
    at_source = noise.near / chain.gain**2
    arriving = arriving_noise(line, [frequency])
    whole = float(added_quanta(at_source, frequency, line))
    own = float(arriving.quanta[0] - arriving.added_quanta[0])
    beyond = (at_source - float(arriving.emf_density[0])) / (8.0 * line.impedance)
    return whole - own, beyond / Boltzmann


def _dephasing(pulse: ResonatorTable) -> float:
    resonator = pulse.resonator()
    level = drive_level(pulse, resonator)
    ground, excited = (steady_field(resonator, state, level, pulse.drive) for state in (0, 1))
    return float(dephasing_rate(resonator, ground, excited))


def _floor(
    bench: ReadoutBench,
    plan: ReadoutPlan,
    grid: Grid,
    answers: Answers,
    noise: ChainNoise,
    detector: Detector,
    first: Records,
) -> float:
    """Simulate the two states once more at half the step; give the change of the error.

    Only what tells the states apart is compared: decays change both alike.
    """
    if not bench.accuracy.floor:
        return math.nan
    half = plan.half_step()
    results = _run(half, bench.readout, answers, _STATES)
    ground, excited = (read_record(half, bench.readout, grid, result) for result in results)
    errors = [
        split_assignment(
            ChainOutput(Records(grid.step, *pair), noise.output),
            detector,
            Transitions(),
            Preparation(),
        ).assignment_error
        for pair in ((first.ground, first.excited), (ground, excited))
    ]
    return abs(errors[1] - errors[0])


def _traces(records: Records, grid: Grid, answers: Answers, points: ComplexArray) -> ReadoutTraces:
    ground, excited = (answers.fields[name].photons for name in _STATES)
    return ReadoutTraces(
        grid.start + grid.time - 0.5 * grid.step,
        records.ground,
        records.excited,
        answers.drive.t,
        ground,
        excited,
        points[0],
        points[1],
    )
