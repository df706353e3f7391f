"""The first half of the drive path: from a testbench to the waveform at the probe."""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.confidential import (
    Roots,
    check_roots,
    kept_files,
    withhold,
)
from cosim.circuit.netlist import (
    Deck,
    DeckFile,
)
from cosim.circuit.probe import Probe, evaluate_probe
from cosim.circuit.simulator import simulate
from cosim.decks import altered_deck, netlist_of, read_deck, roots_of
from cosim.dsp.upconversion import upconvert
from cosim.errors import TestbenchError
from cosim.port import open_port
from cosim.schema import NetlistTable
from cosim.stimuli import apply_stimuli
from cosim.testbench import Testbench
from cosim.waveform import Waveform

# Below this many steps per carrier period the waveform means nothing; design rule of the grid.
LEAST_STEPS_PER_PERIOD = 20
ADVISED_STEPS_PER_PERIOD = 64
DEFAULT_STEPS_PER_PERIOD = 80


@dataclass(frozen=True, slots=True)
class Plan:
    """A deck made ready for a testbench, and what will be asked of the simulator.

    Parameters
    ----------
    deck : Deck
        With parameters, sections, instances, stimuli and terminations applied.
    probes : tuple of Probe
        What is read: the probe, or I and Q of a baseband pair.
    carrier_frequency : float
        In Hz; NaN when it is to be estimated.
    baseband : bool
        Whether the probes are a baseband pair, which the bridge upconverts.
    request : TransientRequest
        The transient on the fixed grid.
    notices : tuple of str
        What the reader must know.
    confidential : Roots
        Folders whose files are kept as path and SHA-256 only.
    kept : tuple of str
        Further vectors that the testbench asked to keep.
    """

    deck: Deck
    probes: tuple[Probe, ...]
    carrier_frequency: float
    baseband: bool
    request: TransientRequest
    notices: tuple[str, ...]
    confidential: Roots
    kept: tuple[str, ...]

    def half_step(self) -> "Plan":
        """The same run at half the step and tighter tolerances, for the numerical floor."""
        request = replace(
            self.request,
            step=self.request.step / 2.0,
            tolerances=self.request.tolerances.tighter(),
        )
        return replace(self, request=request)


@dataclass(frozen=True, slots=True)
class Capture:
    """The waveform at the probe and where it comes from.

    Parameters
    ----------
    waveform : Waveform
        Probe on its own grid, in V or A; of a baseband pair the upconverted wave.
    extra : dict of Waveform
        Further vectors that the testbench asked to keep, and I and Q of a baseband pair.
    step : float
        Time step of the simulator in s; the median step of an imported waveform.
    files : tuple of DeckFile
        The files that were read.
    notices : tuple of str
        What the reader must know.
    result : TransientResult or None
        The simulator's run, without what is confidential; None for an imported waveform.
    """

    waveform: Waveform
    extra: dict[str, Waveform]
    step: float
    files: tuple[DeckFile, ...]
    notices: tuple[str, ...]
    result: TransientResult | None


def make_plan(bench: Testbench, deck: Deck | None = None) -> Plan:
    """Read the deck of a testbench and work out the transient; nothing is simulated.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    deck : Deck or None
        What `read_deck` gave for it; None reads it.

    Returns
    -------
    Plan
        Ready for `capture_probe`.

    Raises
    ------
    DeckError, ProbeError, TestbenchError
        If the deck, the probe or a time is wrong, or the testbench has no netlist.
    """
    table = netlist_of(bench)
    folder = Path(bench.folder)
    deck = read_deck(bench) if deck is None else deck
    roots = roots_of(bench)
    check_roots(deck, roots)  # Before names are looked up in lines that are cut in two.
    deck = altered_deck(bench, deck)
    stop = stop_of(table, deck)
    check_window(bench, stop)
    drive = bench.drive
    carrier = drive.carrier if isinstance(drive.carrier, float) else math.nan
    step, notices = time_step(
        table,
        deck,
        0.0 if math.isnan(carrier) or drive.probe is None else carrier,
        "with a baseband pair" if drive.probe is None else 'with carrier = "estimate"',
    )
    if bench.stimulus:
        deck, coarse = apply_stimuli(deck, bench.stimulus, folder=folder, stop=stop, step=step)
        notices += coarse
    withheld = check_roots(deck, roots)  # With the files of the stimuli.
    deck, probes, loaded = open_port(bench, deck)
    terms = [name for probe in probes for _, name in probe.terms]
    request = TransientRequest(
        stop=stop,
        step=step,
        initial=table.initial or ("uic" if deck.tran is not None and deck.tran.uic else "op"),
        saves=tuple(dict.fromkeys([*terms, *table.save])),
        temperature=table.temperature,
        seed=table.seed,
        time_limit=table.time_limit,
        output_step=step,
    )
    notices = (*withheld, *loaded, *notices)
    return Plan(deck, probes, carrier, drive.probe is None, request, notices, roots, table.save)


def stop_of(table: NetlistTable, deck: Deck) -> float:
    """Give the end of the transient.

    Parameters
    ----------
    table : NetlistTable
        The table [netlist].
    deck : Deck
        Its deck.

    Returns
    -------
    float
        In s.

    Raises
    ------
    TestbenchError
        If neither says one.
    """
    if table.stop is not None:
        return table.stop
    if deck.tran is not None:
        return deck.tran.stop
    raise TestbenchError(
        f"{deck.path} has no .tran card, so the testbench must say when to stop",
        hint='add to [netlist], for instance: stop = "130 ns"',
    )


def check_window(bench: Testbench, stop: float, start: float = 0.0) -> None:
    """Refuse a gate's window that does not lie within the run.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    stop, start : float
        End and start of the run in s.

    Raises
    ------
    TestbenchError
        Naming both.
    """
    window = bench.gate.window
    slack = 1e-9 * (stop - start)
    if window is not None and (window[0] < start - slack or window[1] > stop + slack):
        raise TestbenchError(
            f"{bench.source or 'the testbench'}, table [gate], key 'window': "
            f"{window[0] * 1e9:g} ns to {window[1] * 1e9:g} ns does "
            f"not lie within the run of {start * 1e9:g} ns to {stop * 1e9:g} ns"
        )


def time_step(
    table: NetlistTable, deck: Deck, frequency: float, without: str
) -> tuple[float, tuple[str, ...]]:
    """Give the time step of the transient: a whole part of a carrier's period.

    Parameters
    ----------
    table : NetlistTable
        The table [netlist].
    deck : Deck
        Its deck.
    frequency : float
        Of the carrier in Hz; 0 where there is none that is known.
    without : str
        Why, for the message: "with a baseband pair".

    Returns
    -------
    float
        In s.
    tuple of str
        A warning when it is coarse.

    Raises
    ------
    TestbenchError
        If there is no carrier and neither testbench nor deck says a step, or it is too coarse.
    """
    largest = table.max_step
    if largest is None and table.steps_per_period is None and deck.tran is not None:
        largest = deck.tran.max_step
    if frequency == 0.0:
        if largest is None:
            raise TestbenchError(
                f"{without} the time step cannot follow from the carrier",
                hint='add to [netlist], for instance: max_step = "2 ps"',
            )
        return largest, ()
    period = 1.0 / frequency
    if table.steps_per_period is not None:
        count = table.steps_per_period
    elif largest is not None:
        count = math.ceil(period / largest * (1.0 - 1e-9))
    else:
        count = DEFAULT_STEPS_PER_PERIOD
    return period / count, check_steps(count, period)


def check_steps(count: float, period: float) -> tuple[str, ...]:
    """Judge the number of time steps per carrier period.

    Parameters
    ----------
    count : float
        Steps per period.
    period : float
        Carrier period in s.

    Returns
    -------
    tuple of str
        A warning when the number is small, else nothing.

    Raises
    ------
    TestbenchError
        Below `LEAST_STEPS_PER_PERIOD`.
    """
    if count < LEAST_STEPS_PER_PERIOD:
        raise TestbenchError(
            f"the time step of {period / count * 1e12:.4g} ps is too large for the carrier of "
            f"{1e-9 / period:.4g} GHz: {count:.3g} steps per period, wanted at least "
            f"{LEAST_STEPS_PER_PERIOD}",
            hint=f'say max_step = "{period / DEFAULT_STEPS_PER_PERIOD * 1e12:.3g} ps" or '
            f"steps_per_period = {DEFAULT_STEPS_PER_PERIOD} in [netlist]",
        )
    if count < ADVISED_STEPS_PER_PERIOD:
        return (
            f"only {count:.3g} time steps per carrier period; at least "
            f"{ADVISED_STEPS_PER_PERIOD} are advised",
        )
    return ()


def capture_probe(plan: Plan, *, progress: Callable[[float], None] | None = None) -> Capture:
    """Simulate the deck and read the probe.

    Parameters
    ----------
    plan : Plan
        From `make_plan`.
    progress : callable or None
        Called with the simulated time in s now and then.

    Returns
    -------
    Capture
        The waveform at the probe.

    Raises
    ------
    SimulationError, DeckError
        If the simulator fails; the log is in the error.
    """
    return captured(plan, simulate(plan.deck, plan.request, progress=progress))


def captured(plan: Plan, result: TransientResult) -> Capture:
    """Read the probe of a run.

    Parameters
    ----------
    plan : Plan
        From `make_plan`.
    result : TransientResult
        The run of its deck.

    Returns
    -------
    Capture
        The waveform at the probe; what is confidential is taken out of the run.

    Raises
    ------
    WaveformError
        If a baseband pair cannot be upconverted.
    """
    result = withhold(result, plan.deck, plan.confidential)
    files = kept_files(plan.deck.files, plan.confidential)
    wanted = {name.lower() for name in plan.kept}
    extra = {
        name: Waveform(result.time, values, unit=_unit_of(name))
        for name, values in result.vectors.items()
        if name.lower() in wanted
    }
    waves = [
        Waveform(result.time, evaluate_probe(probe, result.vectors), unit=probe.unit)
        for probe in plan.probes
    ]
    wave = waves[0]
    if plan.baseband:
        extra |= dict(zip(("i", "q"), waves, strict=False))
        wave = upconvert(wave, waves[1] if len(waves) > 1 else None, plan.carrier_frequency)
    notices = (*plan.deck.notices, *plan.notices, *result.warnings)
    return Capture(wave, extra, plan.request.step, files, notices, result)


def _unit_of(save: str) -> str:
    """Unit of a saved vector: volts for nodes, amperes for currents, by name for a device's own."""
    inner = save[save.rfind("[") + 1 :].lower() if save.startswith("@") else save
    return {"v": "V", "i": "A"}.get(inner[:1].lower(), "1")
