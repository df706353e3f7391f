"""Tables written back as the text that they can be read from."""

import dataclasses
import math
from collections.abc import Mapping
from typing import Any, get_args, get_origin, get_type_hints

import tomli_w

from cosim.config import Level, Quantity, key_of


def write_tables(title: str, tables: Mapping[str, object]) -> str:
    """Write frozen dataclasses as the TOML text that reads back as the same ones.

    Parameters
    ----------
    title : str
        Value of the key `title`.
    tables : mapping
        Table name to frozen dataclass, or to a tuple of them for an array of tables; a mapping is
        written as it stands.

    Returns
    -------
    str
        Quantities as text in SI units, with all digits.
    """
    written: dict[str, Any] = {"title": title}
    for name, table in tables.items():
        if isinstance(table, tuple):
            written[name] = [_written_table(item) for item in table]
        elif isinstance(table, Mapping):
            written[name] = table
        else:
            written[name] = _written_table(table)
    return tomli_w.dumps(written)


def _written_table(table: object) -> dict[str, Any]:
    hints = get_type_hints(type(table), include_extras=True)
    written = {}
    for item in dataclasses.fields(table):  # type: ignore[arg-type]
        value = getattr(table, item.name)
        # What is left out in TOML is what TOML cannot say: nothing, and infinity.
        if value not in (None, {}, (), math.inf):
            written[key_of(hints[item.name], item.name)] = _written(value, hints[item.name])
    return written


def _unit_of(hint: Any) -> str:
    found = [mark.unit for mark in getattr(hint, "__metadata__", ()) if isinstance(mark, Quantity)]
    inner = [unit for part in get_args(hint) if (unit := _unit_of(part))]
    return (found + inner + [""])[0]


def _written(value: Any, hint: Any) -> Any:
    if isinstance(value, Level):
        return f"{value.value!r} {value.unit}"
    if dataclasses.is_dataclass(value):
        return _written_table(value)
    if isinstance(value, tuple):
        hints = _hints_of_items(hint, len(value))
        return [_written(item, part) for item, part in zip(value, hints, strict=True)]
    unit = _unit_of(hint)
    if isinstance(value, float) and unit:
        return f"{value!r} {unit}"
    return value


def _hints_of_items(hint: Any, count: int) -> tuple[Any, ...]:
    """Give the annotation of each item of a tuple that is annotated, or may also be None."""
    for part in (hint, *get_args(hint)):
        if get_origin(part) is tuple:
            found = get_args(part)
            return (found[0],) * count if found[-1] is ... else found
    return (None,) * count
