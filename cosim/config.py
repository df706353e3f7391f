"""One TOML table to one frozen dataclass and back, checked at the door.

A field says what it takes by its annotation: `Quantity("s")` inside `Annotated` reads a text
with a unit, everything else is checked by pydantic in its strict mode. A fault names the file,
the table, the key, what was wanted, what was got, and the nearest valid name.
"""

import dataclasses
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any, TypeVar, get_type_hints

from pydantic import GetCoreSchemaHandler, TypeAdapter, ValidationError
from pydantic_core import CoreSchema, core_schema

from cosim.errors import InputError, TestbenchError, UnitError, near_names
from cosim.units import parse_parameter, parse_quantity

T = TypeVar("T")


@dataclasses.dataclass(frozen=True, slots=True)
class Quantity:
    """Marks a field that is a text with a unit in the file and a float inside.

    Parameters
    ----------
    unit : str
        Unit inside; see `cosim.units.parse_quantity`.
    least, most : float or None
        Smallest and greatest value allowed, in `unit`.
    above : float or None
        The value must be greater than this, in `unit`.
    words : tuple of str
        Words that may stand in place of a quantity, such as "in deck".
    """

    unit: str
    least: float | None = None
    most: float | None = None
    above: float | None = None
    words: tuple[str, ...] = ()

    def read(self, value: object) -> float | str:
        """Read one value of the file.

        Raises
        ------
        UnitError
            If it is neither a quantity of this unit nor one of the words.
        """
        if isinstance(value, str) and value in self.words:
            return value
        try:
            number = parse_quantity(value, self.unit)
        except UnitError as error:
            if not self.words:
                raise
            words = " or ".join(f'"{word}"' for word in self.words)
            message = f"{error.message}; {words} may stand here too"
            raise UnitError(message, hint=error.hint) from None
        self.check(number, repr(value))
        return number

    def check(self, number: float, written: str) -> None:
        """Hold a number against the limits; `written` is what the message quotes.

        Raises
        ------
        UnitError
            If it lies outside of them.
        """
        unit = "" if self.unit == "1" else f" {self.unit}"
        if self.least is not None and number < self.least:
            raise UnitError(f"wanted at least {self.least:g}{unit}, got {written}")
        if self.most is not None and number > self.most:
            raise UnitError(f"wanted at most {self.most:g}{unit}, got {written}")
        if self.above is not None and number <= self.above:
            raise UnitError(f"wanted more than {self.above:g}{unit}, got {written}")

    def __get_pydantic_core_schema__(
        self, source: object, handler: GetCoreSchemaHandler
    ) -> CoreSchema:
        return core_schema.no_info_plain_validator_function(self.read)


@dataclasses.dataclass(frozen=True, slots=True)
class Level:
    """A voltage or a current, where another key says which of the two is due.

    Parameters
    ----------
    value : float
        In `unit`.
    unit : "V" or "A"
        Which of the two it is.
    """

    value: float
    unit: str

    @classmethod
    def read(cls, value: object) -> "Level":
        """Read one value of the file.

        Raises
        ------
        UnitError
            If it is neither a voltage nor a current.
        """
        if isinstance(value, Level):
            return value
        for unit in ("V", "A"):
            try:
                return cls(parse_quantity(value, unit), unit)
            except UnitError:
                continue
        raise UnitError(f'wanted a voltage or a current, such as "1.1 V" or "10 uA", got {value!r}')

    @classmethod
    def __get_pydantic_core_schema__(
        cls, source: object, handler: GetCoreSchemaHandler
    ) -> CoreSchema:
        return core_schema.no_info_plain_validator_function(cls.read)


@dataclasses.dataclass(frozen=True, slots=True)
class Key:
    """Marks a field whose key in the file is a word that Python keeps for itself.

    Parameters
    ----------
    name : str
        The key.
    """

    name: str


@dataclasses.dataclass(frozen=True, slots=True)
class Parameter:
    """Marks a field that takes a deck's parameter: a number, or a number with a unit."""

    def __get_pydantic_core_schema__(
        self, source: object, handler: GetCoreSchemaHandler
    ) -> CoreSchema:
        return core_schema.no_info_plain_validator_function(parse_parameter)


@dataclasses.dataclass(frozen=True, slots=True)
class NameOrTable:
    """Marks a field that takes a name, or a table of its own.

    Parameters
    ----------
    cls : type
        The frozen dataclass of the table.
    """

    cls: type[Any]

    def read(self, value: object) -> Any:
        """Read one value of the file.

        Raises
        ------
        TestbenchError
            If the table does not fit its dataclass.
        """
        if isinstance(value, (str, self.cls)):
            return value
        if not isinstance(value, Mapping):
            raise UnitError(f"wanted a name or a table, got {value!r}")
        fields = _field_names(self.cls)
        for key in value:
            if key not in fields:
                raise UnitError(f"unknown key '{key}'; {near_names(key, fields)}")
        hints = get_type_hints(self.cls, include_extras=True)
        values = {key: read_value(hints[key], item, "here", key) for key, item in value.items()}
        missing = [key for key in fields if key not in value]
        if missing:
            raise UnitError(f"the key '{missing[0]}' is missing")
        return self.cls(**values)

    def __get_pydantic_core_schema__(
        self, source: object, handler: GetCoreSchemaHandler
    ) -> CoreSchema:
        return core_schema.no_info_plain_validator_function(self.read)


def read_toml(path: Path) -> dict[str, Any]:
    """Read a TOML file.

    Parameters
    ----------
    path : Path
        The file.

    Returns
    -------
    dict
        Its tables.

    Raises
    ------
    TestbenchError
        If the file is missing, cannot be read or is not TOML.
    """
    try:
        if path.exists() and not path.is_file():
            raise TestbenchError(f"the testbench {path} is not a regular file")
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        raise TestbenchError(f"the testbench {path} does not exist") from None
    except TestbenchError:
        raise
    except (OSError, ValueError) as error:
        raise TestbenchError(f"the testbench {path} cannot be read: {error}") from None
    try:
        return tomllib.loads(text)
    except (ValueError, RecursionError) as error:
        raise TestbenchError(f"{path} is not a TOML file: {error}") from None


def check_keys(table: Mapping[str, Any], valid: list[str], where: str) -> None:
    """Refuse a key that a table does not have.

    Parameters
    ----------
    table : mapping
        The table.
    valid : list of str
        Keys that it has.
    where : str
        File and table, for the message.

    Raises
    ------
    TestbenchError
        Naming the key and the nearest valid ones.
    """
    for key in table:
        if key not in valid:
            raise TestbenchError(f"{where}: unknown key '{key}'; {near_names(key, valid)}")


def read_table(
    table: object, cls: type[T], *, file: str, name: str, number: int | None = None
) -> T:
    """Turn one TOML table into a frozen dataclass.

    Parameters
    ----------
    table : mapping
        The table as tomllib gives it.
    cls : type
        A frozen dataclass; its field names are the keys.
    file, name : str
        File and table, for messages.
    number : int or None
        Which table of an array of tables of this name it is, from 1.

    Returns
    -------
    cls
        Quantities in SI units.

    Raises
    ------
    TestbenchError
        On an unknown key, a missing key, a wrong unit or an impossible value.
    """
    where = f"{file}, table [{name}]" if number is None else numbered(file, name, number)
    if not isinstance(table, Mapping):
        raise TestbenchError(f"{where}: wanted a table, got {table!r}")
    hints = get_type_hints(cls, include_extras=True)
    fields = {key_of(hints[name], name): name for name in _field_names(cls)}
    check_keys(table, list(fields), where)
    for item in dataclasses.fields(cls):  # type: ignore[arg-type]
        required = item.default is item.default_factory is dataclasses.MISSING
        key = key_of(hints[item.name], item.name)
        if required and key not in table:
            raise TestbenchError(f"{where}: the key '{key}' is missing")
    values = {
        fields[key]: read_value(hints[fields[key]], value, where, key)
        for key, value in table.items()
    }
    try:
        return cls(**values)
    except InputError as error:
        raise TestbenchError(f"{where}: {error.message}", hint=error.hint) from None


def numbered(file: str, name: str, number: int) -> str:
    """Name one table of an array of tables, for messages.

    Parameters
    ----------
    file, name : str
        File and name of the tables.
    number : int
        Which one, from 1.

    Returns
    -------
    str
        "bench.toml, table [[stimulus]] number 2".
    """
    return f"{file}, table [[{name}]] number {number}"


def read_value(hint: Any, value: object, where: str, key: str) -> Any:
    """Turn one value of the file into what a field's annotation says.

    Parameters
    ----------
    hint : type
        The annotation, with its extras.
    value : object
        The value as tomllib gives it.
    where, key : str
        File and table, and key, for messages.

    Returns
    -------
    object
        In SI units.

    Raises
    ------
    TestbenchError
        If the value does not fit; it names the key.
    """
    try:
        return TypeAdapter(hint).validate_python(_frozen(value), strict=True)
    except ValidationError as error:
        first = error.errors()[0]
        path = ".".join([key, *(str(part) for part in first["loc"] if not _is_branch(part))])
        cause = first.get("ctx", {}).get("error")
        at = f"{where}, key '{path}'"
        if isinstance(cause, InputError):
            raise TestbenchError(f"{at}: {cause.message}", hint=cause.hint) from None
        message = first["msg"][:1].lower() + first["msg"][1:]
        raise TestbenchError(f"{at}: {message}, got {first['input']!r}") from None


def _frozen(value: object) -> object:
    # TOML has arrays only; the dataclasses hold tuples.
    if isinstance(value, list):
        return tuple(_frozen(item) for item in value)
    if isinstance(value, dict):
        return {key: _frozen(item) for key, item in value.items()}
    return value


def key_of(hint: Any, name: str) -> str:
    """Give the key of a field in the file.

    Parameters
    ----------
    hint : type
        The field's annotation, with its extras.
    name : str
        The field's name.

    Returns
    -------
    str
        What `Key` says, else the name.
    """
    marks = [mark.name for mark in getattr(hint, "__metadata__", ()) if isinstance(mark, Key)]
    return marks[0] if marks else name


def _field_names(cls: type[Any]) -> list[str]:
    return [item.name for item in dataclasses.fields(cls)]


def _is_branch(part: int | str) -> bool:
    # Pydantic names the branch of a union in the location; a user knows keys only.
    return isinstance(part, str) and ("[" in part or part in ("str", "float", "int", "bool"))
