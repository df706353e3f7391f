"""Numbers and settings of a testbench by dotted keys: "qubit.t1", "netlist.parameters.vdd"."""

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, fields, is_dataclass, replace
from typing import Any, TypeVar, get_args, get_type_hints

from cosim.circuit.alteration import with_instances, with_parameters
from cosim.circuit.deck import Deck
from cosim.circuit.hierarchy import structure_of
from cosim.config import Level, Quantity, read_value
from cosim.errors import InputError, TestbenchError, UnitError, near_names
from cosim.readout_schema import READOUT_TABLES
from cosim.schema import TABLES
from cosim.testbench import Bench
from cosim.units import parse_parameter, parse_quantity

AnyBench = TypeVar("AnyBench", bound=Bench)

# The tables of testbenches of both kinds; each has some of them.
_TABLES: dict[str, Any] = {**TABLES, **READOUT_TABLES}
# Fields of [netlist] that hold a table of their own, by name.
_MAPS = ("parameters", "instances", "sections")
# Arrays of tables, of which a key names one by its number: "stimulus.1.period", "noise.2.white".
_ARRAYS = ("stimulus", "noise", "spectator")
# Types of fields that hold a number without a unit.
_PLAIN: tuple[Any, ...] = (float, float | None)
DEFAULT_TEMPERATURE = 300.15  # K; ngspice's 27 degrees Celsius


@dataclass(frozen=True, slots=True)
class NumberKey:
    """A number of a testbench, or a parameter of its deck.

    Parameters
    ----------
    path : str
        Its dotted key in the spelling that all comparisons use.
    table, field : str
        Where it stands: "netlist" and "parameters", "qubit" and "t1", "stimulus" and "period".
    item : str
        Name of the parameter; path of the instance; number of the stimulus or noise, from 1.
    name : str
        Name of an instance's parameter.
    quantity : Quantity or None
        Its unit and limits; None for a plain number or a parameter of the deck.
    whole : bool
        Whether it is an integer.
    """

    path: str
    table: str
    field: str
    item: str = ""
    name: str = ""
    quantity: Quantity | None = None
    whole: bool = False

    def read(self, raw: object, where: str) -> float:
        """Read a value of this number as the file gives it, in SI units.

        Raises
        ------
        TestbenchError
            If it has the wrong unit, lies outside of the limits or is no number.
        """
        try:
            return self.checked(self.parse(raw))
        except UnitError as error:
            raise TestbenchError(f"{where}: {error.message}", hint=error.hint) from None

    def parse(self, raw: object) -> float:
        """Read a value or a difference of two: the limits are not looked at.

        Raises
        ------
        UnitError
            If it has the wrong unit or is no number.
        """
        if self.table == "netlist" and self.field in _MAPS:
            return parse_parameter(raw)
        return parse_quantity(raw, "1" if self.quantity is None else self.quantity.unit)

    def checked(self, value: float) -> float:
        """Hold a value against the limits; give it as what the field holds.

        Raises
        ------
        UnitError
            If it lies outside of them, or is no integer where one is due.
        """
        if not math.isfinite(value):
            raise UnitError(f"wanted a finite number, got {value!r}")
        if self.whole:
            if value != round(value):
                raise UnitError(f"'{self.path}' is an integer, got {value!r}")
            return int(value)
        if self.quantity is not None:
            self.quantity.check(value, f"{value!r} {self.quantity.unit}")
        return value


def number_key(bench: Bench, deck: Deck | None, text: str, where: str) -> NumberKey:
    """Find a number by its dotted key.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    deck : Deck or None
        Its deck; None when it imports a waveform.
    text : str
        The key.
    where : str
        File and table, for messages.

    Returns
    -------
    NumberKey

    Raises
    ------
    TestbenchError
        If there is no such key, or it is no number; the nearest are named.
    """
    table, _, rest = text.strip().partition(".")
    field, _, item = rest.partition(".")
    if table == "netlist" and field in ("parameters", "instances") and deck is not None:
        return _deck_key(deck, text, field, item, where)
    cls: Any = _TABLES.get(table)
    rows = getattr(bench, table, ()) if table in _ARRAYS else ()
    if field.isdecimal() and 1 <= int(field) <= len(rows):
        cls = type(rows[int(field) - 1])
        field, item = item, str(int(field))
    elif item or getattr(bench, table, None) is None:
        cls = None
    hints = get_type_hints(cls, include_extras=True) if cls else {}
    if field not in hints:
        raise TestbenchError(
            f"{where}, key 'key': there is no number '{text}'; "
            f"{near_names(text, known_keys(bench, deck))}"
        )
    quantity, whole = _kind(hints[field])
    if hints[field] is Level:
        quantity = Quantity(getattr(rows[int(item) - 1], field).unit)
    if quantity is None and not whole and hints[field] not in _PLAIN:
        raise TestbenchError(
            f"{where}, key 'key': '{text}' is no number that can be varied; "
            f"{near_names(text, known_keys(bench, deck))}"
        )
    path = f"{table}.{item}.{field}" if item else f"{table}.{field}"
    return NumberKey(path, table, field, item, "", quantity, whole)


def _deck_key(deck: Deck, text: str, field: str, item: str, where: str) -> NumberKey:
    name = ""
    if field == "instances":
        item, _, name = item.rpartition(".")
    item, name = item.strip().lower(), name.strip().lower()
    try:
        if field == "parameters":
            with_parameters(deck, {item: 1.0})
        else:
            with_instances(deck, {item: {name: 1.0}})
    except InputError as error:
        raise TestbenchError(
            f"{where}, key 'key', '{text}': {error.message}", hint=error.hint
        ) from None
    path = ".".join(part for part in ("netlist", field, item, name) if part)
    return NumberKey(path, "netlist", field, item, name)


def known_keys(bench: Bench, deck: Deck | None) -> Iterator[str]:
    """Give the dotted keys of all numbers of a testbench, and of its deck's parameters.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    deck : Deck or None
        Its deck.

    Yields
    ------
    str
    """
    for table, value in _tables_of(bench):
        hints = get_type_hints(type(value), include_extras=True) if value is not None else {}
        for field, hint in hints.items():
            if _kind(hint) != (None, False) or hint in (*_PLAIN, Level):
                yield f"{table}.{field}"
    if deck is not None:
        for name in structure_of(deck.lines).parameters.expressions:
            yield f"netlist.parameters.{name}"


def _tables_of(bench: Bench) -> list[tuple[str, Any]]:
    """Give the tables of a testbench by name; None where it has none of that name."""
    found = [(name, getattr(bench, name, None)) for name in _TABLES]
    for name in _ARRAYS:
        rows = getattr(bench, name, ())
        found += [(f"{name}.{at}", item) for at, item in enumerate(rows, start=1)]
    return found


def _kind(hint: Any) -> tuple[Quantity | None, bool]:
    """Give the unit of a field, and whether it is an integer; tuples and tables have neither."""
    marks = [mark for mark in getattr(hint, "__metadata__", ()) if isinstance(mark, Quantity)]
    parts = get_args(hint)
    if not marks and type(None) in parts:
        for part in parts:
            marks += [m for m in getattr(part, "__metadata__", ()) if isinstance(m, Quantity)]
    whole = hint is int or (int in parts and type(None) in parts)
    return (marks[0] if marks else None), whole


def nominal(bench: Bench, deck: Deck | None, key: NumberKey) -> float | None:
    """Give the value that a testbench, or its deck, has for a number.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    deck : Deck or None
        Its deck with the sections of this testbench.
    key : NumberKey
        The number.

    Returns
    -------
    float or None
        In SI units; None where neither says a finite number.
    """
    value: Any
    if key.table in _ARRAYS:
        value = getattr(getattr(bench, key.table)[int(key.item) - 1], key.field)
        value = value.value if isinstance(value, Level) else value
    elif key.field == "parameters":
        given = {name.lower(): item for name, item in getattr(bench, key.table).parameters.items()}
        value = given.get(key.item)
        if value is None and deck is not None:
            deck = with_parameters(deck, given)
            value = structure_of(deck.lines).parameters.value(key.item)
    elif key.field == "instances":
        instances = getattr(bench, key.table).instances
        value = _lowered(_lowered(instances).get(key.item, {})).get(key.name)
    else:
        value = getattr(getattr(bench, key.table), key.field)
        if value is None and key.path == "netlist.temperature" and deck is not None:
            value = DEFAULT_TEMPERATURE if deck.temperature is None else deck.temperature
    number = isinstance(value, (int, float)) and math.isfinite(value)
    return float(value) if number else None


def _lowered(mapping: Mapping[str, Any]) -> dict[str, Any]:
    return {name.strip().lower(): value for name, value in mapping.items()}


def with_number(bench: AnyBench, key: NumberKey, value: float) -> AnyBench:
    """Set one number of a testbench.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    key : NumberKey
        The number.
    value : float
        In SI units.

    Returns
    -------
    Testbench
        A copy.

    Raises
    ------
    TestbenchError
        If the value lies outside of its limits, or does not go with the others.
    """
    try:
        value = key.checked(value)
        if key.table in _ARRAYS:
            rows: list[Any] = list(getattr(bench, key.table))
            old = rows[int(key.item) - 1]
            was = getattr(old, key.field)
            new = replace(was, value=value) if isinstance(was, Level) else value
            rows[int(key.item) - 1] = replace(old, **{key.field: new})
            replaced: dict[str, Any] = {key.table: tuple(rows)}
            return replace(bench, **replaced)
        table = getattr(bench, key.table)
        content: Any = value
        if key.field == "parameters":
            content = {**_lowered(table.parameters), key.item: value}
        elif key.field == "instances":
            content = _lowered(table.instances)
            content[key.item] = {**_lowered(content.get(key.item, {})), key.name: value}
        changed = {key.table: replace(table, **{key.field: content})}
        return replace(bench, **changed)
    except InputError as error:
        where = bench.source or "the testbench"
        raise TestbenchError(
            f"{where}, table [{key.table}], '{key.path}' = {value!r}: {error.message}",
            hint=error.hint,
        ) from None


def with_setting(bench: AnyBench, path: str, raw: object, where: str) -> AnyBench:
    """Set one key of a testbench to what a corner says.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    path : str
        Dotted key of any table's field, or of an entry of the deck's parameters, instances or
        sections.
    raw : object
        What the file says.
    where : str
        File and corner, for messages.

    Returns
    -------
    Testbench
        A copy; tables of parameters, instances and sections keep what the corner does not name.

    Raises
    ------
    TestbenchError
        If there is no such key, or the value does not fit.
    """
    table, _, rest = path.strip().partition(".")
    field, _, item = rest.partition(".")
    if table not in _TABLES or getattr(bench, table, None) is None:
        names = [name for name in _TABLES if getattr(bench, name, None) is not None]
        raise TestbenchError(f"{where}: unknown key '{path}'; {near_names(table, names)}")
    hints = get_type_hints(_TABLES[table], include_extras=True)
    if field not in hints or (item and field not in _MAPS):
        names = [f"{table}.{name}" for name in hints]
        raise TestbenchError(f"{where}: unknown key '{path}'; {near_names(path, names)}")
    content: Any = raw
    if item and field == "instances":
        instance, _, name = item.rpartition(".")
        content = {instance: {name: raw}}
    elif item:
        content = {item: raw}
    content = read_value(hints[field], content, where, f"{table}.{field}")
    old = getattr(getattr(bench, table), field)
    if field == "instances":
        merged = {path: _lowered(values) for path, values in _lowered(old).items()}
        for instance, values in _lowered(content).items():
            merged[instance] = {**merged.get(instance, {}), **_lowered(values)}
        content = merged
    elif field == "parameters":
        content = {**_lowered(old), **_lowered(content)}
    elif field == "sections":
        content = {**old, **content}
    try:
        return replace(bench, **{table: replace(getattr(bench, table), **{field: content})})
    except InputError as error:
        raise TestbenchError(f"{where}, key '{path}': {error.message}", hint=error.hint) from None


def flattened(bench: Bench) -> dict[str, Any]:
    """Give all that a testbench says as one flat mapping, for hashes and comparisons.

    Parameters
    ----------
    bench : Testbench
        The testbench.

    Returns
    -------
    dict
        Dotted key, as in `NumberKey.path` -> number, text, None, list or dict of those.
    """
    flat: dict[str, Any] = {}
    for table, value in _tables_of(bench):
        for item in fields(value) if value is not None else ():
            content = getattr(value, item.name)
            if item.name in ("parameters", "instances") and table == "netlist":
                for name, inner in _lowered(content).items():
                    inner = _lowered(inner) if isinstance(inner, dict) else inner
                    if item.name == "parameters":
                        flat[f"netlist.parameters.{name}"] = inner
                    else:
                        for key, number in inner.items():
                            flat[f"netlist.instances.{name}.{key}"] = number
            else:
                flat[f"{table}.{item.name}"] = _plain(content)
    return flat


def _plain(value: Any) -> Any:
    if isinstance(value, Level):
        return value.value  # Its unit follows from the source.
    if is_dataclass(value) and not isinstance(value, type):
        return {item.name: _plain(getattr(value, item.name)) for item in fields(value)}
    if isinstance(value, tuple):
        return [_plain(item) for item in value]
    return value
