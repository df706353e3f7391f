"""What is asked of the netlist of a readout, run by run, and the records that it answers with."""

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import partial

import numpy as np

from cosim.capture import Capture
from cosim.circuit.analysis import TransientResult
from cosim.circuit.deck import Deck
from cosim.circuit.netlist import with_parameters
from cosim.circuit.stimulus import with_stimuli
from cosim.dsp.detection.records import Records, Transitions, relaxation
from cosim.readout_input import (
    EXCITED,
    GROUND,
    REST,
    SECOND,
    SMALL,
    Answers,
    answer_emf,
    make_answers,
    source_waveforms,
)
from cosim.readout_output import Grid, ReadoutPlan, read_record, simulate_all
from cosim.readout_pulse import PlayedPulse, play_pulse, pulse_source
from cosim.readout_schema import ReadoutTable
from cosim.readout_sensor import SensorRuns, make_sensor_runs, sensor_transitions
from cosim.testbench import ReadoutBench
from cosim.waveform import ComplexArray, FloatArray

STATES = (GROUND, EXCITED)
# Part of the distance of the states by which a chain must bend for its items to be told apart: what
# is less is not resolved by the simulator's tolerances at the small signals of the comparison.
BENT = 0.01


@dataclass(frozen=True, slots=True)
class Inquiry:
    """The runs of a readout.

    Parameters
    ----------
    begin : float
        Time in s from which on the state counts.
    decay_times, excitation_times : ndarray, shape (k,)
        Times in s of the changes of state in the runs "decay 1" and so on, "excitation 1" and so
        on.
    deck_of : callable
        Gives the deck of a run by its name.
    answers : Answers or None
        Of a resonator.
    """

    begin: float = field(metadata={"unit": "s"})
    decay_times: FloatArray = field(metadata={"unit": "s"})
    excitation_times: FloatArray = field(metadata={"unit": "s"})
    deck_of: Callable[[ReadoutPlan, str], Deck]
    answers: Answers | None = None

    @property
    def notices(self) -> tuple[str, ...]:
        """What the reader must know of the answers."""
        return () if self.answers is None else self.answers.notices

    def recorded(self, shot: Capture) -> Capture:
        """Add the files that the answers were made of to those of a run."""
        files = () if self.answers is None else self.answers.files
        return replace(shot, files=(*shot.files, *files))

    @property
    def jumps(self) -> tuple[str, ...]:
        """Names of the runs in which the state changes."""
        decays = [f"decay {number + 1}" for number in range(self.decay_times.size)]
        rises = [f"excitation {number + 1}" for number in range(self.excitation_times.size)]
        return (*decays, *rises)


@dataclass(frozen=True, slots=True)
class Chain:
    """What the netlist answers.

    Parameters
    ----------
    records : Records
        As it gives them.
    linear : Records or None
        What a linear chain would give; None where it is one, or that is not asked for.
    gain : float
        Envelope at the output over that of the EMF, for small signals; NaN of a sensor.
    compression : tuple of two floats
        Size of the answer to |0> and to |1> over that of a linear chain.
    results : tuple of TransientResult
        The runs, |0> and |1> first.
    second : ndarray of complex, shape (n,), or None
        Record of |2> in V, on the grid of `records`; None where it is not known what |2> does.
    """

    records: Records
    linear: Records | None
    gain: float
    compression: tuple[float, float]
    results: tuple[TransientResult, ...]
    second: ComplexArray | None = None


def make_inquiry(
    bench: ReadoutBench, plan: ReadoutPlan, played: PlayedPulse | None = None
) -> Inquiry:
    """Work out what is asked of the netlist.

    Parameters
    ----------
    bench : ReadoutBench
        With [resonator] or [sensor].
    plan : ReadoutPlan
        Its plan.
    played : PlayedPulse or None
        In place of the pulse that another netlist would have to be simulated for.

    Returns
    -------
    Inquiry

    Raises
    ------
    TestbenchError
        If a time does not fit the run.
    InputError, SimulationError
        If a pulse of another netlist cannot be made, or a file cannot be used.
    """
    table, stop = bench.readout, plan.request.stop
    if bench.sensor is not None:
        runs = make_sensor_runs(bench.sensor, table, stop)
        return Inquiry(
            bench.sensor.start,
            runs.decay_times,
            runs.excitation_times,
            partial(_sensing, runs),
        )
    assert bench.resonator is not None  # A testbench has one of the two.
    source = pulse_source(bench)
    if source is not None and played is None:
        played = play_pulse(bench, source, stop)
    answers = make_answers(bench.resonator, table, stop, played=played, folder=bench.folder)
    return Inquiry(
        bench.resonator.start,
        answers.decay_times,
        answers.excitation_times,
        partial(_answering, answers, table),
        answers,
    )


def transitions_of(bench: ReadoutBench) -> Transitions:
    """Give how often the state changes.

    Parameters
    ----------
    bench : ReadoutBench
        With [resonator] or [sensor].

    Returns
    -------
    Transitions
    """
    table = bench.readout
    if bench.sensor is not None:
        return sensor_transitions(bench.sensor, table)
    return relaxation(table.t1, table.thermal_population)


def make_chain(plan: ReadoutPlan, table: ReadoutTable, grid: Grid, inquiry: Inquiry) -> Chain:
    """Run the netlist for all that is asked, and once more for weak signals where it bends.

    Parameters
    ----------
    plan : ReadoutPlan
        The deck and the transient.
    table : ReadoutTable
        With the outputs.
    grid : Grid
        Of the records.
    inquiry : Inquiry
        From `make_inquiry`.

    Returns
    -------
    Chain

    Raises
    ------
    InputError, SimulationError
        If a run fails, or an output cannot be read.
    """
    more = []
    if inquiry.answers is not None:
        known = [SECOND] if SECOND in inquiry.answers.emf else []
        more = [*known, REST, *(f"small {name}" for name in STATES)]
    names = [*STATES, *inquiry.jumps, *more]
    results = run_all(plan, inquiry, names)
    found = {
        name: read_record(plan, table, grid, result)
        for name, result in zip(names, results, strict=True)
    }
    records = _records(found, grid, inquiry)
    if inquiry.answers is None:
        return Chain(records, None, math.nan, (1.0, 1.0), tuple(results))
    rest = found[REST]
    straight = {name: rest + (found[f"small {name}"] - rest) / SMALL for name in STATES}
    apart = float(np.abs(straight[EXCITED] - straight[GROUND]).max())
    bent = max(float(np.abs(found[name] - straight[name]).max()) for name in STATES)
    linear = None
    if bent > BENT * apart:
        weak = run_all(plan, inquiry, [f"small {name}" for name in inquiry.jumps])
        for name, result in zip(inquiry.jumps, weak, strict=True):
            record = read_record(plan, table, grid, result)
            straight[name] = rest + (record - rest) / SMALL
        linear = _records(straight, grid, inquiry)
        results += weak
    sizes = [
        float(np.linalg.norm(found[name] - rest) / np.linalg.norm(straight[name] - rest))
        for name in STATES
    ]
    gain = _gain(straight[EXCITED] - straight[GROUND], grid, inquiry.answers)
    bends = sizes[0], sizes[1]
    return Chain(records, linear, gain, bends, tuple(results), found.get(SECOND))


def run_all(plan: ReadoutPlan, inquiry: Inquiry, names: Sequence[str]) -> list[TransientResult]:
    """Run the netlist for some of what is asked.

    Parameters
    ----------
    plan : ReadoutPlan
        The deck and the transient.
    inquiry : Inquiry
        From `make_inquiry`.
    names : sequence of str
        Of the runs.

    Returns
    -------
    list of TransientResult
        In the order of the names.

    Raises
    ------
    InputError, SimulationError
        If a run fails.
    """
    return simulate_all(plan, [inquiry.deck_of(plan, name) for name in names])


def deck_with_answer(
    plan: ReadoutPlan, table: ReadoutTable, answers: Answers, emf: ComplexArray
) -> Deck:
    """Let the deck's source play an answer.

    Parameters
    ----------
    plan : ReadoutPlan
        The deck and the transient.
    table : ReadoutTable
        With the source.
    answers : Answers
        With the grid.
    emf : ndarray of complex, shape (n,)
        I + jQ in V on that grid.

    Returns
    -------
    Deck
    """
    request = plan.request
    waves = source_waveforms(emf, answers, table, request.step, request.stop)
    return with_stimuli(plan.deck, waves)


def _answering(answers: Answers, table: ReadoutTable, plan: ReadoutPlan, name: str) -> Deck:
    return deck_with_answer(plan, table, answers, answer_emf(answers, name))


def _sensing(runs: SensorRuns, plan: ReadoutPlan, name: str) -> Deck:
    return with_parameters(plan.deck, runs.parameters[name])


def _gain(difference: ComplexArray, grid: Grid, answers: Answers) -> float:
    """Compare the energies of what tells the states apart, which no delay changes."""
    sent = np.abs(answers.emf[EXCITED] - answers.emf[GROUND]) ** 2
    t = grid.start + grid.time - 0.5 * grid.step
    arrived = float(np.interp(t, answers.drive.t, sent).sum())
    return math.sqrt(float(np.sum(np.abs(difference) ** 2)) / arrived)


def _records(found: Mapping[str, ComplexArray], grid: Grid, inquiry: Inquiry) -> Records:
    def rows(kind: str, count: int) -> ComplexArray:
        made = [found[f"{kind} {number}"] for number in range(1, count + 1)]
        return np.array(made) if made else np.zeros((0, grid.count), dtype=np.complex128)

    return Records(
        grid.step,
        found[GROUND],
        found[EXCITED],
        inquiry.decay_times - grid.start,
        rows("decay", inquiry.decay_times.size),
        inquiry.excitation_times - grid.start,
        rows("excitation", inquiry.excitation_times.size),
    )
