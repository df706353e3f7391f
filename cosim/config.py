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
            raise UnitError(f"{error.message}; {words} may stand here too") from None
        if self.least is not None and number < self.least:
            raise UnitError(f"wanted at least {self.least:g} {self.unit}, got {value!r}")
        if self.most is not None and number > self.most:
            raise UnitError(f"wanted at most {self.most:g} {self.unit}, got {value!r}")
        if self.above is not None and number <= self.above:
            raise UnitError(f"wanted more than {self.above:g} {self.unit}, got {value!r}")
        return number

    def __get_pydantic_core_schema__(
        self, source: object, handler: GetCoreSchemaHandler
    ) -> CoreSchema:
        return core_schema.no_info_plain_validator_function(self.read)


@dataclasses.dataclass(frozen=True, slots=True)
class Parameter:
    """Marks a field that takes a deck's parameter: a number, or a number with a unit."""

    def __get_pydantic_core_schema__(
        self, source: object, handler: GetCoreSchemaHandler
    ) -> CoreSchema:
        return core_schema.no_info_plain_validator_function(parse_parameter)


def read_toml(path: Path) -> tuple[str, dict[str, Any]]:
    """Read a TOML file.

    Returns
    -------
    text : str
        The file as it stands.
    tables : dict
        Its tables.

    Raises
    ------
    TestbenchError
        If the file is missing, cannot be read or is not TOML.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        raise TestbenchError(f"the testbench {path} does not exist") from None
    except (OSError, UnicodeDecodeError) as error:
        raise TestbenchError(f"the testbench {path} cannot be read: {error}") from None
    try:
        return text, tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise TestbenchError(f"{path} is not a TOML file: {error}") from None


def check_keys(table: Mapping[str, Any], valid: list[str], where: str) -> None:
    """Refuse a key that a table does not have.

    Raises
    ------
    TestbenchError
        Naming the key and the nearest valid ones.
    """
    for key in table:
        if key not in valid:
            raise TestbenchError(f"{where}: unknown key '{key}'; {near_names(key, valid)}")


def read_table(table: object, cls: type[T], *, file: str, name: str) -> T:
    """Turn one TOML table into a frozen dataclass.

    Parameters
    ----------
    table : mapping
        The table as tomllib gives it.
    cls : type
        A frozen dataclass; its field names are the keys.
    file, name : str
        File and table, for messages.

    Returns
    -------
    cls
        Quantities in SI units.

    Raises
    ------
    TestbenchError
        On an unknown key, a missing key, a wrong unit or an impossible value.
    """
    where = f"{file}, table [{name}]"
    if not isinstance(table, Mapping):
        raise TestbenchError(f"{where}: wanted a table, got {table!r}")
    fields = {item.name: item for item in dataclasses.fields(cls) if item.init}  # type: ignore[arg-type]
    check_keys(table, list(fields), where)
    for key, item in fields.items():
        required = item.default is dataclasses.MISSING
        if required and item.default_factory is dataclasses.MISSING and key not in table:
            raise TestbenchError(f"{where}: the key '{key}' is missing")
    hints = get_type_hints(cls, include_extras=True)
    values = {key: _read_value(hints[key], value, where, key) for key, value in table.items()}
    try:
        return cls(**values)
    except InputError as error:
        raise TestbenchError(f"{where}: {error.message}", hint=error.hint) from None


def _read_value(hint: Any, value: object, where: str, key: str) -> Any:
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


def _is_branch(part: int | str) -> bool:
    # Pydantic names the branch of a union in the location; a user knows keys only.
    return isinstance(part, str) and ("[" in part or part in ("str", "float", "int", "bool"))
