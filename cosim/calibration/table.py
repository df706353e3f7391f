"""The table [calibrate], and its knobs as numbers of the testbench."""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Annotated, Any, Literal

from cosim.circuit.deck import Deck
from cosim.config import Quantity, numbered, read_table
from cosim.errors import TestbenchError, UnitError
from cosim.keys import NumberKey, nominal, number_key
from cosim.testbench import Bench, Testbench
from cosim.units import parse_quantity

NAME = "calibrate"
KNOBS = "calibrate.knob"
# Runs that a search cannot do without besides one for each knob: the start, a step, the floor.
LEAST_RUNS = 3

GATE_METRICS = ("as_simulated", "free_frame", "calibrated")
READOUT_METRICS = ("assignment_error",)

# Keys besides those of the tables [netlist], [[stimulus]] and [waveform] that change what is
# simulated: the probe's load, and the carrier, from which the time step follows.
_OF_WAVEFORM = ("drive.termination", "drive.carrier")
_WAVEFORM_TABLES = ("netlist", "stimulus", "waveform")
# Units that a deck's parameter may be given in; what it means is the deck's own affair.
_UNITS = ("s", "Hz", "V", "A", "ohm", "F", "H", "W", "m", "K", "rad", "dB")

Number = int | float | str


@dataclass(frozen=True, slots=True)
class KnobTable:
    """One table [[calibrate.knob]]: what may be turned, and how far.

    Parameters
    ----------
    key : str
        Dotted key of a number of the testbench or of a parameter of its deck.
    low, high : int, float or str
        Bounds; a text with a unit where the number has one.
    integer : bool
        Whether it takes whole numbers only, such as the codes of a converter.
    start : int, float, str or None
        Where the search begins; default: the value of the testbench or its deck.
    step : int, float, str or None
        Resolution of the trim: what it can be set to is `low` and whole steps from there; default:
        1 for an integer, else it can be set to anything.
    """

    key: str
    low: Number
    high: Number
    integer: bool = False
    start: Number | None = None
    step: Number | None = None


@dataclass(frozen=True, slots=True)
class CalibrateTable:
    """The table [calibrate] without its knobs.

    Parameters
    ----------
    metric : str
        "as_simulated", "free_frame" or "calibrated": which infidelity of a gate; or
        "assignment_error" of a readout.
    leakage_weight : float
        What a gate's leakage L1 costs beside its part in the infidelity.
    max_runs : int
        Most runs, with the one at half the step that tells the numerical floor.
    cost : float
        Infidelity, or assignment error, that the resolution of a trim may cost: what the
        resolution that is needed is told for.
    """

    metric: Literal["as_simulated", "free_frame", "calibrated", "assignment_error"]
    leakage_weight: Annotated[float, Quantity("1", least=0.0)] = 0.0
    max_runs: int = 12
    cost: Annotated[float, Quantity("1", above=0.0)] = 1e-5


@dataclass(frozen=True, slots=True)
class Knob:
    """A number that is solved for.

    Parameters
    ----------
    key : NumberKey
        Which one.
    low, high, start : float
        Bounds, and where the search begins, in SI units.
    step : float
        Resolution; 0 for none.
    integer : bool
        Whether it takes whole numbers only.
    unit : str
        Its unit; "1" for a plain number.
    simulated : bool
        Whether the circuit has to run again for it.
    """

    key: NumberKey
    low: float
    high: float
    start: float
    step: float
    integer: bool
    unit: str
    simulated: bool

    @property
    def range(self) -> float:
        """Distance of the bounds."""
        return self.high - self.low

    @property
    def grid(self) -> float:
        """Resolution as a part of the range; 0 for none."""
        return self.step / self.range

    def at(self, place: float) -> float:
        """Give the value, in SI units, at a part of the range."""
        value = min(max(self.low + place * self.range, self.low), self.high)
        if self.step:
            # The start need not be one of the steps; what is one is written without the rounding
            # errors of the product.
            near = self.low + round((value - self.low) / self.step) * self.step
            near = float(f"{near:.12g}")
            value = near if abs(near - value) < 1e-9 * self.range else value
        return float(round(value)) if self.integer else value

    def place(self, value: float) -> float:
        """Give the part of the range at which a value, in SI units, lies."""
        return (value - self.low) / self.range

    def neighbours(self, place: float) -> tuple[float, ...]:
        """Give what it can be set to on both sides of a part of the range; itself without steps."""
        if not self.step:
            return (place,)
        count = place / self.grid
        last = math.floor(1.0 / self.grid * (1.0 + 1e-12))
        near = (math.floor(count + 1e-9), math.ceil(count - 1e-9))
        return tuple(self.grid * item for item in sorted({min(max(n, 0), last) for n in near}))


def read_calibrate(bench: Bench, deck: Deck | None) -> tuple[CalibrateTable, tuple[Knob, ...]]:
    """Read the table [calibrate] of a testbench, and find its knobs.

    Parameters
    ----------
    bench : Bench
        The testbench.
    deck : Deck or None
        Its deck as read; None when it imports a waveform.

    Returns
    -------
    CalibrateTable
        What is solved for.
    tuple of Knob
        By what.

    Raises
    ------
    TestbenchError
        If there is no such table, a key or value is wrong, or bounds and start do not fit.
    """
    file = bench.source or "the testbench"
    if NAME not in bench.studies:
        raise TestbenchError(
            f"{file} has no table [{NAME}]",
            hint='add it with metric = "as_simulated" and one [[calibrate.knob]] for each knob',
        )
    given = dict(bench.studies[NAME])
    rows = given.pop("knob", [])
    table = read_table(given, CalibrateTable, file=file, name=NAME)
    where = f"{file}, table [{NAME}]"
    wanted = GATE_METRICS if isinstance(bench, Testbench) else READOUT_METRICS
    if table.metric not in wanted:
        kind = "gate" if isinstance(bench, Testbench) else "readout"
        raise TestbenchError(
            f"{where}, key 'metric': of a {kind} wanted {_listed(wanted)}, got '{table.metric}'"
        )
    if table.leakage_weight and table.metric not in GATE_METRICS:
        raise TestbenchError(f"{where}, key 'leakage_weight': a readout has no leakage")
    if not isinstance(rows, list) or not rows:
        raise TestbenchError(
            f"{where}: wanted tables [[{KNOBS}]], with two brackets, got {rows!r}",
            hint="each names a number that may be turned: key, low and high",
        )
    knobs = tuple(_read_knob(bench, deck, row, file, at) for at, row in enumerate(rows, start=1))
    paths = [knob.key.path for knob in knobs]
    twice = [path for at, path in enumerate(paths) if path in paths[:at]]
    if twice:
        raise TestbenchError(f"{where}: there are two knobs '{twice[0]}'")
    if table.max_runs < len(knobs) + LEAST_RUNS:
        raise TestbenchError(
            f"{where}, key 'max_runs': {len(knobs)} knobs take at least "
            f"{len(knobs) + LEAST_RUNS} runs, got {table.max_runs}"
        )
    return table, knobs


def _listed(words: tuple[str, ...]) -> str:
    return " or ".join(f"'{word}'" for word in words)


def _read_knob(bench: Bench, deck: Deck | None, row: object, file: str, number: int) -> Knob:
    table = read_table(row, KnobTable, file=file, name=KNOBS, number=number)
    where = numbered(file, KNOBS, number)
    key = number_key(bench, deck, table.key, where)
    integer = table.integer or key.whole
    given: dict[str, Any] = {"low": table.low, "high": table.high}
    given |= {"start": table.start} if table.start is not None else {}
    if integer:
        _insist_on_integers({**given, "step": table.step}, key.path, where)
    values = {name: key.read(raw, f"{where}, key '{name}'") for name, raw in given.items()}
    low, high = values["low"], values["high"]
    if not low < high:
        raise TestbenchError(
            f"{where}, '{key.path}': 'high' must be more than 'low', got {table.low!r} to "
            f"{table.high!r}"
        )
    start = values["start"] if "start" in values else nominal(bench, deck, key)
    if start is None:
        raise TestbenchError(
            f"{where}: neither the testbench nor its deck says a value of '{key.path}'",
            hint="say where the search begins: start = ...",
        )
    if integer and start != round(start):
        raise TestbenchError(
            f"{where}, '{key.path}': an integer knob begins at an integer, got {start!r}",
            hint="say where the search begins: start = ...",
        )
    if not low <= start <= high:
        raise TestbenchError(
            f"{where}, '{key.path}': the start {start:g} lies outside of {low:g} to {high:g}",
            hint="widen the bounds, or say where the search begins: start = ...",
        )
    step = _step(table, key, integer, high - low, where)
    return Knob(key, low, high, start, step, integer, _unit(key, table.low), needs_circuit(key))


def _insist_on_integers(given: Mapping[str, Any], path: str, where: str) -> None:
    for name, raw in given.items():
        if raw is not None and not isinstance(raw, int):
            raise TestbenchError(
                f"{where}, key '{name}': '{path}' is an integer, got {raw!r}",
                hint="write whole numbers without a point, or leave out 'integer'",
            )


def _step(table: KnobTable, key: NumberKey, integer: bool, span: float, where: str) -> float:
    if table.step is None:
        return 1.0 if integer else 0.0
    try:
        step = key.parse(table.step)
    except UnitError as error:
        raise TestbenchError(f"{where}, key 'step': {error.message}", hint=error.hint) from None
    if not 0.0 < step <= span:
        raise TestbenchError(
            f"{where}, key 'step': wanted more than 0 and at most the distance of the bounds, "
            f"got {table.step!r}"
        )
    return step


def _unit(key: NumberKey, low: Number) -> str:
    if key.quantity is not None:
        return key.quantity.unit
    for unit in _UNITS if isinstance(low, str) else ():
        try:
            parse_quantity(low, unit)
        except UnitError:
            continue
        return unit
    return "1"


def needs_circuit(key: NumberKey) -> bool:
    """Tell whether the circuit of a gate has to run again for a number.

    Parameters
    ----------
    key : NumberKey
        Which one.

    Returns
    -------
    bool
    """
    return key.table in _WAVEFORM_TABLES or key.path in _OF_WAVEFORM
