"""The readout path: resonator or sensor, netlist, records, decisions."""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np
from scipy.constants import Boltzmann

from cosim.circuit.deck import Deck
from cosim.dsp.detection.aftermath import decision_latency, repeat_agreement
from cosim.dsp.detection.assignment import (
    AssignmentSplit,
    scan_integration,
    split_assignment,
)
from cosim.dsp.detection.converter import Adc
from cosim.dsp.detection.leaked import leaked_decisions, leaked_point, leaked_points
from cosim.dsp.detection.reception import ChainOutput, Detector
from cosim.dsp.detection.records import Preparation, Records, Transitions
from cosim.dsp.detection.shots import integrated_shots, record_shots, shot_points
from cosim.errors import TestbenchError
from cosim.outgoing import added_quanta, arriving_noise, efficiency
from cosim.readout_aftermath import find_aftermath
from cosim.readout_chain import (
    STATES,
    Chain,
    Inquiry,
    make_chain,
    make_inquiry,
    run_all,
    transitions_of,
)
from cosim.readout_entry import noisy_input, readout_noise_tables
from cosim.readout_guards import chain_warnings, shot_warnings
from cosim.readout_input import Answers, input_frequency_of
from cosim.readout_noise import (
    ChainNoise,
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
)
from cosim.readout_progress import RunProgress
from cosim.readout_result import ReadoutNoise, ReadoutResult, ReadoutTraces
from cosim.readout_schema import ReadoutTable
from cosim.record import Clock, make_record
from cosim.testbench import ReadoutBench
from cosim.waveform import ComplexArray, FloatArray

Progress = Callable[[float], None]

POINTS = 2000  # of each state, for figures
_DENSITY_POINTS = 101


@dataclass(frozen=True, slots=True)
class ReadoutRuns:
    """All that the simulator gives for a readout; what is judged of it needs no further run.

    Readouts that differ in the converter's resolution, the weights, the shots, the preparation and
    the rates of transitions only have these in common.

    Parameters
    ----------
    frequency : float
        That the time step follows, in Hz; 0 in baseband.
    plan : ReadoutPlan
        The deck and the transient.
    inquiry : Inquiry
        What was asked.
    grid : Grid
        Of the records.
    chain : Chain
        What was answered.
    noise : ChainNoise
        At the outputs.
    half : Records or None
        Of |0> and |1> at half the step; None when left out.
    laps : mapping of str to float
        Wall-clock times of the stages in s.
    """

    frequency: float
    plan: ReadoutPlan
    inquiry: Inquiry
    grid: Grid
    chain: Chain
    noise: ChainNoise
    half: Records | None
    laps: Mapping[str, float]


def simulate_readout(
    bench: ReadoutBench, *, deck: Deck | None = None, progress: Progress | None = None
) -> ReadoutRuns:
    """Run the netlist of a readout for all that is asked of it, with its noise.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench.
    deck : Deck or None
        As `cosim.decks.read_deck` gives it, where it has been read already.
    progress : callable or None
        Called with the simulated time in s, all runs added up, now and then.

    Returns
    -------
    ReadoutRuns

    Raises
    ------
    InputError
        If the testbench or the deck cannot be used.
    SimulationError
        If ngspice fails.
    """
    if bench.readout.decision is not None:
        raise TestbenchError(
            f"{bench.source or 'the testbench'}, table [readout]: wanted the outputs 'probe', or "
            "'i' and 'q', got 'decision'",
            hint="cosim.run takes both kinds",
        )
    clock = Clock()
    table = bench.readout
    frequency = readout_frequency(bench)
    plan = make_readout_plan(bench, frequency, deck)
    plan = replace(plan, progress=RunProgress(progress))
    clock.lap("deck")
    inquiry = make_inquiry(bench, plan)
    grid = record_grid(table, inquiry.begin)
    clock.lap("resonator")
    chain = make_chain(plan, table, grid, inquiry)
    clock.lap("simulator_overhead")
    clock.laps["ngspice"] = sum(result.wall_time for result in chain.results)
    clock.laps["simulator_overhead"] -= clock.laps["ngspice"]
    noise = _noise(bench, plan, grid, inquiry, chain)
    clock.lap("noise")
    half = _half_step(table, plan, grid, inquiry) if bench.accuracy.floor else None
    clock.lap("floor")
    return ReadoutRuns(frequency, plan, inquiry, grid, chain, noise, half, clock.laps)


def run_readout(
    bench: ReadoutBench, *, progress: Progress | None = None, runs: ReadoutRuns | None = None
) -> ReadoutResult:
    """Run a testbench with a readout from the resonator or sensor to the assignment error.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench.
    progress : callable or None
        Called with the simulated time in s, all runs added up, now and then.
    runs : ReadoutRuns or None
        What has been simulated already, for this testbench or one that has it in common.

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
    clock = Clock()
    runs = simulate_readout(bench, progress=progress) if runs is None else runs
    clock.note_laps(runs.laps)
    table = bench.readout
    inquiry, grid, chain, noise = runs.inquiry, runs.grid, runs.chain, runs.noise
    output = ChainOutput(chain.records, noise.output, None, chain.linear)
    detector = _detector(table, grid)
    preparation = Preparation(table.thermal_population, table.preparation_error)
    chances = transitions_of(bench), preparation
    split = split_assignment(output, detector, *chances)
    scan = scan_integration(output, detector, *chances)
    clock.lap("detection")
    shots = integrated_shots(split, *chances, table.shots, table.seed)
    records = record_shots(output, detector, split, *chances, table.records, table.seed)
    points = shot_points(split, *chances, POINTS, table.seed)
    clock.lap("shots")
    leaked_at = _leaked(output, detector, split, chain, table.seed)
    floor = _floor(chain.records, runs.half, noise, detector)
    added, kelvin, unsure = _referred(noise, table, inquiry.answers)
    after = find_aftermath(bench.resonator, inquiry.answers, table.t1, runs.plan.request.stop)
    f = np.linspace(-0.5 / grid.step, 0.5 / grid.step, _DENSITY_POINTS)
    warnings = (
        *runs.plan.notices,
        *inquiry.notices,
        *after.warnings,
        *chain_warnings(chain.compression, noise, added, split),
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
        efficiency=math.nan if math.isnan(added) else efficiency(max(added, 0.0)),
        noise_temperature=kelvin,
        noise_temperature_error=unsure,
        standard_error=_noise_error(output, noise.relative_error, detector, chances),
        noise_method=noise.method,
        residual_photons=after.residual_photons,
        residual_stark_shift=after.residual_stark_shift,
        wait=after.wait,
        latency=decision_latency(detector.adc, table.adc_cycles) if detector.adc else 0.0,
        repeat_agreement=_agreement(split, *chances),
        dephasing_rate=after.dephasing_rate,
        purcell_time=after.purcell_time,
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
        traces=_traces(chain.records, grid, inquiry, (*points, leaked_at[1])),
        leaked=leaked_at[0],
        warnings=tuple(dict.fromkeys(warnings)),
        run=make_record(
            bench,
            inquiry.recorded(capture_of(runs.plan, chain.results[1])),
            runs.frequency or math.nan,
            clock,
        ),
    )


def readout_frequency(bench: ReadoutBench) -> float:
    """Give the frequency that the time step follows.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench.

    Returns
    -------
    float
        In Hz; 0 in baseband.
    """
    if bench.resonator is not None:
        return input_frequency_of(bench.resonator, bench.readout)
    return bench.readout.output_frequency or 0.0


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
    inquiry: Inquiry,
    chain: Chain,
) -> ChainNoise:
    table = bench.readout
    tables = readout_noise_tables(bench)
    entry = None
    if inquiry.answers is not None:
        arriving = arriving_noise(inquiry.answers.line, [inquiry.answers.drive.frequency])
        if not tables:
            return arriving_only(arriving, chain.gain, table)
        entry = noisy_input(arriving, table)
    elif not tables:
        raise TestbenchError(
            f"{bench.source or 'the testbench'}: with a [sensor] all noise is the netlist's own, "
            "and there is no table [[noise]]",
            hint='add [[noise]] with acts_on = "probe" and from = "netlist"',
        )
    decks = [inquiry.deck_of(plan, name) for name in STATES]
    return netlist_noise_at_output(plan, table, grid, tables[0], decks, entry)


def _referred(
    noise: ChainNoise,
    table: ReadoutTable,
    answers: Answers | None,
) -> tuple[float, float, float]:
    """Refer the noise to the resonator's output in quanta, and to the netlist's source in K.

    The third is the standard error of the second.
    """
    if answers is None or quadratures_of(table) == 1:
        return math.nan, math.nan, 0.0
    line, frequency = answers.line, answers.drive.frequency
    # What arrives is known, so that it tells the gain that noise has on its way to the output.
    arriving = arriving_noise(line, [frequency])
    beside = noise.near - noise.netlist
    own = noise.netlist / beside * float(arriving.emf_density[0])
    added = float(arriving.added_quanta[0]) + float(added_quanta(own, frequency, line))
    kelvin = 1.0 / (8.0 * line.impedance * Boltzmann)
    whole_error = noise.relative_error * noise.near
    beside_error = math.sqrt(max(0.0, whole_error**2 - noise.netlist_error**2))
    unsure = math.hypot(noise.netlist_error / beside, noise.netlist / beside**2 * beside_error)
    return added, own * kelvin, unsure * float(arriving.emf_density[0]) * kelvin


def _agreement(split: AssignmentSplit, transitions: Transitions, preparation: Preparation) -> float:
    """Repeat agreement; a state that is converted to be seen is not there for a second readout."""
    if transitions.converts:
        return math.nan
    return repeat_agreement(split, transitions, preparation).mean


def _leaked(
    output: ChainOutput, detector: Detector, split: AssignmentSplit, chain: Chain, seed: int
) -> tuple[FloatArray, ComplexArray]:
    """Decide |2>, and draw some of its points; not known, none without its record."""
    if chain.second is None:
        return np.zeros(0), np.zeros(0, dtype=np.complex128)
    point = leaked_point(output, detector, split, chain.second)
    return leaked_decisions(split, point), leaked_points(split, point, POINTS, seed)


def _half_step(table: ReadoutTable, plan: ReadoutPlan, grid: Grid, inquiry: Inquiry) -> Records:
    """Simulate the two states once more at half the step."""
    half = plan.half_step()
    results = run_all(half, inquiry, STATES)
    ground, excited = (read_record(half, table, grid, result) for result in results)
    return Records(grid.step, ground, excited)


def _floor(first: Records, half: Records | None, noise: ChainNoise, detector: Detector) -> float:
    """Give the change of the error at half the step.

    Only what tells the states apart is compared: decays change both alike.
    """
    if half is None:
        return math.nan
    errors = [
        split_assignment(
            ChainOutput(Records(first.step, one.ground, one.excited), noise.output),
            detector,
            Transitions(),
            Preparation(),
        ).assignment_error
        for one in (first, half)
    ]
    return abs(errors[1] - errors[0])


def _noise_error(
    output: ChainOutput,
    relative_error: float,
    detector: Detector,
    chances: tuple[Transitions, Preparation],
) -> float:
    """Give the change of the error with a density of the noise one standard error off."""
    if relative_error == 0.0:
        return 0.0
    # A density known to no better than itself has no lower end; a tenth of it stands for that.
    factors = 1.0 + relative_error, max(1.0 - relative_error, 0.1)
    one = output.noise
    more, less = (
        split_assignment(
            replace(output, noise=replace(one, white=k * one.white, density=k * one.density)),
            detector,
            *chances,
        ).assignment_error
        for k in factors
    )
    return 0.5 * abs(more - less)


def _traces(
    records: Records, grid: Grid, inquiry: Inquiry, points: tuple[ComplexArray, ...]
) -> ReadoutTraces:
    time, photons = np.zeros(0), [np.zeros(0), np.zeros(0)]
    if inquiry.answers is not None:
        time = inquiry.answers.drive.t
        photons = [inquiry.answers.fields[name].photons for name in STATES]
    return ReadoutTraces(
        grid.start + grid.time - 0.5 * grid.step,
        records.ground,
        records.excited,
        time,
        photons[0],
        photons[1],
        *points,
    )
