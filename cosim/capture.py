"""The first half of the drive path: from a testbench to the waveform at the probe."""

import math
import os
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.netlist import (
    Deck,
    deck_from_text,
    load_deck,
    with_instances,
    with_parameters,
    with_terminations,
)
from cosim.circuit.probe import Probe, evaluate_probe, parse_probe
from cosim.circuit.simulator import simulate
from cosim.errors import TestbenchError
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
        With parameters, sections, instances and terminations applied.
    probe : Probe
        What is read.
    request : TransientRequest
        The transient on the fixed grid.
    steps_per_period : float
        Carrier period over step; NaN when the carrier is to be estimated.
    notices : tuple of str
        What the reader must know.
    """

    deck: Deck
    probe: Probe
    request: TransientRequest
    steps_per_period: float
    notices: tuple[str, ...]

    def half_step(self) -> "Plan":
        """The same run at half the step and tighter tolerances, for the numerical floor."""
        request = replace(
            self.request,
            step=self.request.step / 2.0,
            tolerances=self.request.tolerances.tighter(),
        )
        return replace(self, request=request, steps_per_period=2.0 * self.steps_per_period)


@dataclass(frozen=True, slots=True)
class Capture:
    """The waveform at the probe and the run that made it.

    Parameters
    ----------
    waveform : Waveform
        Probe on the simulator's own grid, in V or A.
    extra : dict of Waveform
        Further vectors that the testbench asked to keep.
    result : TransientResult
        The run.
    """

    waveform: Waveform
    extra: dict[str, Waveform]
    result: TransientResult


def make_plan(bench: Testbench) -> Plan:
    """Read the deck of a testbench and work out the transient; nothing is simulated.

    Parameters
    ----------
    bench : Testbench
        The testbench.

    Returns
    -------
    Plan
        Ready for `capture_probe`.

    Raises
    ------
    DeckError, ProbeError, TestbenchError
        If the deck, the probe or a time is wrong.
    """
    table = bench.netlist
    folder = Path(bench.folder)
    include_paths = tuple(str(folder / Path(path).expanduser()) for path in table.include_paths)
    if bench.circuit:
        deck = deck_from_text(
            bench.circuit,
            name=table.file,
            folder=folder,
            include_paths=include_paths,
            sections=table.sections,
            compatibility=table.compatibility,
        )
    else:
        deck = load_deck(
            _short(folder / Path(table.file).expanduser()),
            include_paths=include_paths,
            sections=table.sections,
            compatibility=table.compatibility,
        )
    deck = with_instances(with_parameters(deck, table.parameters), table.instances)
    probe = parse_probe(bench.drive.probe)
    if isinstance(bench.drive.termination, float):
        if not probe.nodes:
            raise TestbenchError(
                f"the probe '{probe.text}' is a current, so no termination can be added to it",
                hint='say termination = "in deck", and the impedance as "impedance"',
            )
        deck = with_terminations(deck, probe.nodes, bench.drive.termination)
    stop = _stop(bench, deck)
    _check_window(bench, stop)
    step, steps_per_period, notices = _step(bench, deck)
    saves = tuple(dict.fromkeys([*(name for _, name in probe.terms), *table.save]))
    initial = table.initial or ("uic" if deck.tran is not None and deck.tran.uic else "op")
    request = TransientRequest(
        stop=stop,
        step=step,
        initial=initial,
        saves=saves,
        temperature=table.temperature,
        seed=table.seed,
        time_limit=table.time_limit,
    )
    return Plan(deck, probe, request, steps_per_period, notices)


def _short(path: Path) -> Path:
    # "examples/../netlists/a.cir" reads better as "netlists/a.cir", where that is the same file.
    short = Path(os.path.normpath(path))
    return short if os.path.realpath(short) == os.path.realpath(path) else path


def _stop(bench: Testbench, deck: Deck) -> float:
    if bench.netlist.stop is not None:
        return bench.netlist.stop
    if deck.tran is not None:
        return deck.tran.stop
    raise TestbenchError(
        f"{deck.path} has no .tran card, so the testbench must say when to stop",
        hint='add to [netlist], for instance: stop = "130 ns"',
    )


def _check_window(bench: Testbench, stop: float) -> None:
    window = bench.gate.window
    if window is not None and (window[0] < 0.0 or window[1] > stop * (1.0 + 1e-9)):
        raise TestbenchError(
            f"table [gate], key 'window': {window[0] * 1e9:g} ns to {window[1] * 1e9:g} ns does "
            f"not lie within the run of 0 ns to {stop * 1e9:g} ns"
        )


def _step(bench: Testbench, deck: Deck) -> tuple[float, float, tuple[str, ...]]:
    table = bench.netlist
    largest = table.max_step
    if largest is None and table.steps_per_period is None and deck.tran is not None:
        largest = deck.tran.max_step
    if isinstance(bench.drive.carrier, str):
        if largest is None:
            raise TestbenchError(
                'with carrier = "estimate" the time step cannot follow from the carrier',
                hint='add to [netlist], for instance: max_step = "2 ps"',
            )
        return largest, math.nan, ()
    period = 1.0 / bench.drive.carrier
    if table.steps_per_period is not None:
        count = table.steps_per_period
    elif largest is not None:
        count = math.ceil(period / largest * (1.0 - 1e-9))
    else:
        count = DEFAULT_STEPS_PER_PERIOD
    notices = check_steps(count, period)
    return period / count, float(count), notices


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
    result = simulate(plan.deck, plan.request, progress=progress)
    values = evaluate_probe(plan.probe, result.vectors)
    read = {name for _, name in plan.probe.terms}
    extra = {
        name: Waveform(result.time, values, unit="V" if name.startswith("v(") else "A")
        for name, values in result.vectors.items()
        if name not in read
    }
    return Capture(Waveform(result.time, values, unit=plan.probe.unit), extra, result)
