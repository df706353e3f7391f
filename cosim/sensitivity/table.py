"""The table [sensitivity], and the numbers that are moved."""

import math
from collections.abc import Collection, Iterator
from dataclasses import dataclass, field
from typing import Annotated, Literal

from cosim.calibration.table import GATE_METRICS, READOUT_METRICS, needs_circuit
from cosim.circuit.deck import Deck
from cosim.circuit.expression import spice_number
from cosim.circuit.hierarchy import structure_of
from cosim.config import Quantity, read_table
from cosim.errors import InputError, TestbenchError, UnitError, near_names
from cosim.keys import NumberKey, known_keys, nominal, number_key
from cosim.testbench import Bench, Testbench

NAME = "sensitivity"

# Numbers that say how a run is made, and not what the circuit or the qubit is.
_OF_THE_RUN = (
    "netlist.stop",
    "netlist.max_step",
    "netlist.steps_per_period",
    "netlist.seed",
    "netlist.time_limit",
)
_TABLES_OF_THE_RUN = ("accuracy", "spectator")
# Of the frequencies that must agree to much less than a percent the table's part means a
# thousandth of it: 50 kHz of 5 GHz.
_SHARP = ("qubit.frequency", "drive.carrier", "resonator.frequency", "resonator.drive_frequency")
_SHARPER = 1e-3


@dataclass(frozen=True, slots=True)
class SensitivityTable:
    """The table [sensitivity].

    Parameters
    ----------
    metric : str or None
        "as_simulated", "free_frame" or "calibrated": which infidelity of a gate (default: as
        simulated); or "assignment_error" of a readout.
    keys : tuple of str
        Numbers to be moved, by their dotted keys; default: all that have a value other than zero
        and bear on the metric.
    skip : tuple of str
        Numbers, or whole tables such as "noise", that are not.
    tolerance : float
        How far each is moved, as a part of its value; of the qubit's and the carrier's frequency a
        thousandth of that, and of decibels what makes that part of a voltage.
    tolerances : mapping
        Dotted key to its own tolerance, an absolute one with the unit of the number.
    """

    metric: Literal["as_simulated", "free_frame", "calibrated", "assignment_error"] | None = None
    keys: tuple[str, ...] = ()
    skip: tuple[str, ...] = ()
    tolerance: Annotated[float, Quantity("1", above=0.0, most=0.5)] = 0.01
    tolerances: dict[str, int | float | str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Entry:
    """A number that is moved.

    Parameters
    ----------
    key : NumberKey
        Which one.
    value : float
        Where it stands, in SI units.
    tolerance : float
        How far it is moved to both sides, positive.
    unit : str
        Of it; "1" for a plain number, as a deck's parameters are.
    simulated : bool
        Whether the circuit has to run again for it.
    """

    key: NumberKey
    value: float
    tolerance: float
    unit: str
    simulated: bool


def read_sensitivity(
    bench: Bench, deck: Deck | None
) -> tuple[SensitivityTable, str, tuple[Entry, ...]]:
    """Read the table [sensitivity] of a testbench, and find its numbers.

    Parameters
    ----------
    bench : Bench
        The testbench; without the table its defaults hold.
    deck : Deck or None
        Its deck as read; None when it imports a waveform.

    Returns
    -------
    SensitivityTable
        What is asked for.
    str
        The metric.
    tuple of Entry
        What is moved.

    Raises
    ------
    TestbenchError
        If a key or value is wrong, a number has no tolerance, or nothing is left to be moved.
    """
    file = bench.source or "the testbench"
    where = f"{file}, table [{NAME}]"
    table = read_table(bench.studies.get(NAME, {}), SensitivityTable, file=file, name=NAME)
    wanted = GATE_METRICS if isinstance(bench, Testbench) else READOUT_METRICS
    metric = table.metric or wanted[0]
    if metric not in wanted:
        kind = "gate" if isinstance(bench, Testbench) else "readout"
        raise TestbenchError(
            f"{where}, key 'metric': of a {kind} wanted {' or '.join(wanted)}, got '{metric}'"
        )
    own = _own_tolerances(bench, deck, table, where)
    skipped = _skipped(bench, deck, table, where)
    named = [number_key(bench, deck, text, f"{where}, 'keys'") for text in table.keys]
    keys = named or list(_default_keys(bench, deck, own))
    entries = [
        _entry(bench, deck, key, table, own, where)
        for key in dict.fromkeys(keys)
        if not any(key.path == name or key.path.startswith(f"{name}.") for name in skipped)
    ]
    if not entries:
        raise TestbenchError(f"{where}: no number is left to be moved")
    idle = [path for path in own if all(entry.key.path != path for entry in entries)]
    if idle:
        raise TestbenchError(f"{where}, key 'tolerances': '{idle[0]}' is not one of the numbers")
    return table, metric, tuple(entries)


def _own_tolerances(
    bench: Bench, deck: Deck | None, table: SensitivityTable, where: str
) -> dict[str, float]:
    found = {}
    for text, raw in table.tolerances.items():
        key = number_key(bench, deck, text, f"{where}, 'tolerances'")
        try:
            value = key.parse(raw)
        except UnitError as error:
            raise TestbenchError(
                f"{where}, key 'tolerances', '{text}': {error.message}", hint=error.hint
            ) from None
        if not value > 0.0:
            raise TestbenchError(
                f"{where}, key 'tolerances', '{text}': wanted more than zero, got {raw!r}"
            )
        found[key.path] = value
    return found


def _skipped(
    bench: Bench, deck: Deck | None, table: SensitivityTable, where: str
) -> tuple[str, ...]:
    known = list(known_keys(bench, deck))
    tables = {".".join(path.split(".")[:end]) for path in known for end in (1, 2)}
    for text in table.skip:
        if text not in known and text not in tables:
            raise TestbenchError(
                f"{where}, key 'skip': there is no number or table '{text}'; "
                f"{near_names(text, [*known, *sorted(tables)])}"
            )
    return table.skip


def _default_keys(bench: Bench, deck: Deck | None, own: Collection[str]) -> Iterator[NumberKey]:
    """Give the numbers that have a value, and those that a tolerance is given for."""
    primary = _primary_parameters(deck)
    for text in known_keys(bench, deck):
        key = number_key(bench, deck, text, NAME)
        if key.path in own:
            yield key
        elif key.field == "parameters":
            if key.item in primary and nominal(bench, deck, key):
                yield key
        elif (
            not key.whole
            and key.path not in _OF_THE_RUN
            and key.table not in _TABLES_OF_THE_RUN
            and not (key.path == "drive.carrier" and _no_baseband(bench))
            and nominal(bench, deck, key)
        ):
            yield key


def _primary_parameters(deck: Deck | None) -> set[str]:
    """Give the deck's parameters that are a number, and do not follow from others."""
    if deck is None:
        return set()
    expressions = structure_of(deck.lines).parameters.expressions
    return {name for name, text in expressions.items() if spice_number(text) is not None}


def _no_baseband(bench: Bench) -> bool:
    """Whether the circuit makes the carrier itself: [drive] then only says which it is."""
    return isinstance(bench, Testbench) and bench.drive.probe is not None


def _entry(
    bench: Bench,
    deck: Deck | None,
    key: NumberKey,
    table: SensitivityTable,
    own: dict[str, float],
    where: str,
) -> Entry:
    value = nominal(bench, deck, key)
    if value is None:
        raise TestbenchError(f"{where}: '{key.path}' has no value that could be moved")
    tolerance = own.get(key.path)
    if tolerance is None:
        tolerance = _default_tolerance(key, value, table.tolerance)
        if tolerance == 0.0:
            raise TestbenchError(
                f"{where}: '{key.path}' is zero, of which no part can be taken",
                hint=f'say how far to move it: tolerances = {{ "{key.path}" = ... }}',
            )
    if key.whole and tolerance != round(tolerance):
        raise InputError(f"{where}, 'tolerances': '{key.path}' is an integer, got {tolerance:g}")
    return Entry(key, value, tolerance, unit_of(key), needs_circuit(key))


def _default_tolerance(key: NumberKey, value: float, part: float) -> float:
    if unit_of(key) == "dB":
        return 20.0 * math.log10(1.0 + part)
    part *= _SHARPER if key.path in _SHARP else 1.0
    return float(max(1.0, round(part * abs(value)))) if key.whole else part * abs(value)


def unit_of(key: NumberKey) -> str:
    """Give the unit of a number.

    Parameters
    ----------
    key : NumberKey
        Which one.

    Returns
    -------
    str
        "1" for a plain number, as a deck's parameters are.
    """
    return "1" if key.quantity is None else key.quantity.unit
