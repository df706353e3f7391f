"""The netlist of a readout: its runs, and the records that its outputs give."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
from scipy.integrate import cumulative_trapezoid

from cosim.capture import Capture, stop_of, time_step
from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.confidential import Roots, check_roots, kept_files, withhold
from cosim.circuit.deck import Deck
from cosim.circuit.family import simulate_family
from cosim.circuit.netlist import resolve_saves
from cosim.circuit.preparation import prepare
from cosim.circuit.probe import Probe, evaluate_probe, parse_probe
from cosim.decks import altered_deck, netlist_of, read_deck, roots_of
from cosim.dsp.demodulation import MIN_SAMPLES_PER_PERIOD, demodulate, half_length
from cosim.errors import CosimError, DeckError, InputError, TestbenchError
from cosim.readout_input import check_readout_window
from cosim.readout_progress import RunProgress
from cosim.readout_schema import ReadoutTable
from cosim.stimuli import apply_stimuli
from cosim.testbench import ReadoutBench
from cosim.units import format_quantity
from cosim.waveform import ComplexArray, FloatArray, Waveform

DEFAULT_SAMPLES = 400  # of a record, where no converter says more
PER_CONVERSION = 4  # samples of a record in one of the converter's: its filter is simulated


@dataclass(frozen=True, slots=True)
class ReadoutPlan:
    """A deck made ready for a readout, and what will be asked of the simulator.

    Parameters
    ----------
    deck : Deck
        With parameters, sections, instances and stimuli applied; its source as it stands there.
    request : TransientRequest
        The transient on the fixed grid.
    probes : tuple of Probe
        One output, or I and Q.
    confidential : Roots
        Folders whose files are kept as path and SHA-256 only.
    notices : tuple of str
        What the reader must know.
    progress : RunProgress
        Is told of every run.
    """

    deck: Deck
    request: TransientRequest
    probes: tuple[Probe, ...]
    confidential: Roots
    notices: tuple[str, ...]
    progress: RunProgress = field(default_factory=RunProgress, compare=False)

    def half_step(self) -> "ReadoutPlan":
        """The same runs at half the step and tighter tolerances, for the numerical floor."""
        request = replace(
            self.request,
            step=self.request.step / 2.0,
            tolerances=self.request.tolerances.tighter(),
            output_step=self.request.step / 2.0,
        )
        return replace(self, request=request)


@dataclass(frozen=True, slots=True)
class Grid:
    """The samples of a record.

    Parameters
    ----------
    start : float
        Time in s at which the first sample's cell begins.
    step : float
        In s.
    count : int
        Samples.
    """

    start: float
    step: float
    count: int

    @property
    def time(self) -> FloatArray:
        """Times in s of the ends of the cells, from the first, shape (count,)."""
        return np.asarray(self.step * np.arange(1, self.count + 1), dtype=np.float64)


def make_readout_plan(
    bench: ReadoutBench, frequency: float, deck: Deck | None = None
) -> ReadoutPlan:
    """Read the deck of a readout and work out its transient; nothing is simulated.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench.
    frequency : float
        At which the answer enters in Hz; 0 where the step cannot follow from it.
    deck : Deck or None
        As `cosim.decks.read_deck` gives it, where it has been read already.

    Returns
    -------
    ReadoutPlan

    Raises
    ------
    DeckError, ProbeError, TestbenchError
        If the deck, an output or a time is wrong.
    """
    table = netlist_of(bench)
    deck = read_deck(bench) if deck is None else deck
    roots = roots_of(bench)
    check_roots(deck, roots)
    deck = altered_deck(bench, deck)
    stop = stop_of(table, deck)
    asked = bench.sensor or bench.resonator
    check_readout_window(bench.readout, asked.start if asked else 0.0, stop)
    step, notices = time_step(table, deck, frequency, "in baseband")
    _check_carrier(bench, stop, step)
    if bench.stimulus:
        deck, coarse = apply_stimuli(
            deck, bench.stimulus, folder=Path(bench.folder), stop=stop, step=step
        )
        notices += coarse
    withheld = check_roots(deck, roots)
    probes = _probes(bench, deck)
    names = [name for probe in probes for _, name in probe.terms]
    request = TransientRequest(
        stop=stop,
        step=step,
        initial=table.initial or ("uic" if deck.tran is not None and deck.tran.uic else "op"),
        saves=tuple(dict.fromkeys([*names, *table.save])),
        temperature=table.temperature,
        seed=table.seed,
        time_limit=table.time_limit,
        output_step=step,
    )
    return ReadoutPlan(deck, request, probes, roots, (*deck.notices, *withheld, *notices))


def simulate_all(plan: ReadoutPlan, decks: Sequence[Deck]) -> list[TransientResult]:
    """Run all decks of a readout, with one load for those that differ little enough.

    Parameters
    ----------
    plan : ReadoutPlan
        From `make_readout_plan`.
    decks : sequence of Deck
        Its deck for each of the runs.

    Returns
    -------
    list of TransientResult
        In the order of the decks.

    Raises
    ------
    InputError, SimulationError
        If a deck is wrong or a run fails.
    """
    ready = [prepare(deck, plan.request) for deck in decks]
    found = []
    requests = [plan.request] * len(ready)
    told = plan.progress
    for outcome in simulate_family(ready, requests, progress=lambda _, time: told.within(time)):
        if isinstance(outcome, CosimError):
            raise outcome
        found.append(outcome)
        told.end(plan.request.stop)
    return found


def record_grid(table: ReadoutTable, begin: float) -> Grid:
    """Give the grid of the records, which end with the window.

    Parameters
    ----------
    table : ReadoutTable
        With the window, and the converter or the rate.
    begin : float
        Time in s from which on the state counts, at which they begin unless the window does
        before.

    Returns
    -------
    Grid

    Raises
    ------
    InputError
        If the window holds less than two samples.
    """
    first, last = table.window
    if table.adc_rate is not None:
        rate = PER_CONVERSION * table.adc_rate
    else:
        rate = table.output_rate or DEFAULT_SAMPLES / (last - first)
    if (last - first) * rate < 2.0:
        raise InputError(
            f"table [readout]: the window of {1e9 * (last - first):g} ns holds less than two "
            f"samples at {rate:g} Hz"
        )
    # The window begins with a sample.
    before = max(0, math.ceil((first - begin) * rate * (1.0 - 1e-9)))
    count = before + math.floor((last - first) * rate * (1.0 + 1e-9))
    return Grid(first - before / rate, 1.0 / rate, count)


def read_record(
    plan: ReadoutPlan, table: ReadoutTable, grid: Grid, result: TransientResult
) -> ComplexArray:
    """Read the outputs of one run as a record.

    Parameters
    ----------
    plan : ReadoutPlan
        With the probes.
    table : ReadoutTable
        At which frequency the output is.
    grid : Grid
        Of the record.
    result : TransientResult
        The run.

    Returns
    -------
    ndarray of complex, shape (count,)
        I + jQ in V, each the mean over its cell: what an integrator gives that is reset.

    Raises
    ------
    WaveformError
        If the output cannot be demodulated.
    """
    waves = [evaluate_probe(probe, result.vectors) for probe in plan.probes]
    return outputs_record(result.time, waves, table, grid)


def outputs_record(
    time: FloatArray, waves: Sequence[FloatArray], table: ReadoutTable, grid: Grid
) -> ComplexArray:
    """Make a record of the voltages of one output, or of I and Q; else as `read_record`.

    Parameters
    ----------
    time : ndarray, shape (n,)
        In s.
    waves : sequence of ndarray, each of shape (n,)
        In V.
    table, grid
        As in `read_record`.

    Returns
    -------
    ndarray of complex, shape (count,)
        I + jQ in V.

    Raises
    ------
    WaveformError
        If the output cannot be demodulated.
    """
    if table.output_frequency is not None:
        found = [demodulate(Waveform(time, v, unit="V"), table.output_frequency) for v in waves]
        iq = found[0].iq
        if len(found) > 1:
            # 2 (I + jQ) turns forwards with the sum and backwards with the other one's conjugate.
            side = 1j if table.sideband != "lower" else -1j
            iq = 0.5 * (iq + side * found[1].iq)
            iq = iq if table.sideband != "lower" else np.conj(iq)
        return cell_means(found[0].t, iq, grid)
    iq = waves[0].astype(np.complex128)
    if len(waves) > 1:
        iq = iq + 1j * waves[1]
    return cell_means(time, iq, grid)


def cell_means(time: FloatArray, iq: ComplexArray, grid: Grid) -> ComplexArray:
    """Average over the cells of a record.

    Parameters
    ----------
    time : ndarray, shape (n,)
        In s.
    iq : ndarray of complex, shape (n,)
        Straight lines between these.
    grid : Grid
        Of the record.

    Returns
    -------
    ndarray of complex, shape (count,)
        In the unit of `iq`.
    """
    edges = grid.start + grid.step * np.arange(grid.count + 1)
    area = cumulative_trapezoid(iq, time, initial=0)
    at = np.interp(edges, time, area.real) + 1j * np.interp(edges, time, area.imag)
    return np.asarray(np.diff(at) / grid.step)


def capture_of(plan: ReadoutPlan, result: TransientResult) -> Capture:
    """Give one run for the record, without what is confidential.

    Parameters
    ----------
    plan : ReadoutPlan
        The plan.
    result : TransientResult
        Its run.

    Returns
    -------
    Capture
        The first output.
    """
    result = withhold(result, plan.deck, plan.confidential)
    wave = Waveform(result.time, evaluate_probe(plan.probes[0], result.vectors), unit="V")
    files = kept_files(plan.deck.files, plan.confidential)
    return Capture(wave, {}, plan.request.step, files, plan.notices, result)


def _check_carrier(bench: ReadoutBench, stop: float, step: float) -> None:
    """Refuse an output's frequency that is too fast for the steps or too slow for the window.

    The record must also keep off the ends of a carrier, where the demodulator sees it switched.
    """
    frequency = bench.readout.output_frequency
    if frequency is None:
        return
    first, last = bench.readout.window
    most = 1.0 / (MIN_SAMPLES_PER_PERIOD * step)
    if frequency > most * (1.0 + 1e-6):
        raise TestbenchError(
            f"table [readout], key 'output_frequency': wanted at most "
            f"{format_quantity(most, 'Hz')}, {MIN_SAMPLES_PER_PERIOD} time steps of "
            f"{format_quantity(step, 's', 5)} in a period (half the rate of the steps, "
            f"{format_quantity(0.5 / step, 'Hz')}, is the end of what they can tell), got "
            f"{format_quantity(frequency, 'Hz')}",
            hint=f'say max_step = "{1e12 / (64.0 * frequency):.4g} ps" in [netlist]',
        )
    least = half_length(frequency)
    if last - first < least:
        raise TestbenchError(
            f"table [readout], key 'window': wanted at least {1e9 * least:.4g} ns, half of the "
            f"demodulator's filter at {format_quantity(frequency, 'Hz')}, got "
            f"{1e9 * (last - first):.4g} ns, {frequency * (last - first):.3g} of its periods",
            hint="a longer window, a higher 'output_frequency', or outputs in baseband",
        )
    if last > stop - least:
        raise TestbenchError(
            f"table [readout], key 'window': it ends at {1e9 * last:.6g} ns, and the run must go "
            f"on for {1e9 * least:.3g} ns, half of the demodulator's filter at "
            f"{frequency:.6g} Hz",
            hint=f'say stop = "{1e9 * (last + least):.6g} ns" or later in [netlist]',
        )
    if bench.sensor is not None and min(bench.sensor.start, bench.readout.window[0]) < least:
        raise TestbenchError(
            f"table [sensor], key 'start': wanted at least {1e9 * least:.3g} ns, half of the "
            "demodulator's filter, since the carrier begins with the run"
        )


def _probes(bench: ReadoutBench, deck: Deck) -> tuple[Probe, ...]:
    probes = []
    for key in ("probe", "decision", "i", "q"):
        text = getattr(bench.readout, key)
        if text is None:
            continue
        try:
            probe = parse_probe(text)
            resolve_saves(deck, [name for _, name in probe.terms])
        except DeckError as error:
            where = f"{bench.source or 'the testbench'}, table [readout], key '{key}'"
            error.args = (f"{where}: {error.message}",)
            raise
        if probe.unit != "V":
            raise TestbenchError(
                f"table [readout], key '{key}': wanted a voltage, got '{text}', which is a current",
                hint="add a resistor that makes a voltage of it, as the next stage would",
            )
        probes.append(probe)
    return tuple(probes)
