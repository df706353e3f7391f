"""Text files with columns, as oscilloscopes and simulators write them, as waveforms."""

import io
import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from cosim.errors import WaveformError, near_names
from cosim.formats.cells import (
    decimal_comma_error,
    has_decimal_comma,
    is_number,
    split_cells,
    unit_kind,
)
from cosim.formats.files import read_text, shorten
from cosim.formats.header import COMMENT_MARKS, Column, TextTable, read_head
from cosim.waveform import FloatArray, Waveform


@dataclass(frozen=True, slots=True)
class _Wanted:
    """One column to read: its index, the name the caller gets it by, its unit."""

    index: int
    key: str
    unit: str
    size: float


def read_columns(
    path: str | os.PathLike[str],
    *,
    time: str | None = None,
    values: Sequence[str] = (),
    time_unit: str | None = None,
    unit: str | None = None,
) -> dict[str, Waveform]:
    """Read waveforms from a text file with columns.

    Columns are separated by commas, semicolons, tabs or blanks. Lines that start with "#", "%"
    or ";" are comments. Any lines may stand before the header. Units stand in the header
    ("time (ns)", "t [s]", "v/mV"), in a row of their own below it, or are given here.

    Parameters
    ----------
    path : path
        The file: UTF-8, UTF-16 with a byte order mark, or Latin-1.
    time : str or None
        Name of the column of the time, with or without its unit; default: the first. Columns
        without a name are called "column 1", "column 2" and so on.
    values : sequence of str
        Names of the columns to read; default: all others.
    time_unit : str or None
        Unit of the time, such as "ns"; needed when the file gives none.
    unit : str or None
        Unit of the values, such as "mV"; for the columns to which the file gives none.

    Returns
    -------
    dict of Waveform
        Under the names in `values`, or else those in the file without their unit. Time in s,
        shape (n,); values in V or A, shape (n,).

    Raises
    ------
    MissingFileError, InputError
        If there is no such file or it cannot be read.
    WaveformError
        If a unit is missing or contradicts the file's, a column does not exist, a cell is empty,
        not a number, not finite or has a decimal comma, the time does not rise, or there are
        fewer than two rows. The message names file and line.
    """
    file = str(path)
    table = read_head(read_text(Path(path)), file)
    clock = _time_column(table, time, time_unit)
    wanted = _value_columns(table, clock.index, values, unit)
    columns = _read_numbers(table, [clock, *wanted])
    _check(table, [clock, *wanted], columns, clock.unit)
    t = _scaled(columns[0], clock.size)
    waveforms = {}
    for column, array in zip(wanted, columns[1:], strict=True):
        if not values and _same_name(table, column, clock) and (array == columns[0]).all():
            continue  # Some simulators repeat the time before each vector.
        if column.key in waveforms:
            raise WaveformError(
                f"{file}: two columns are called '{column.key}'",
                hint="name the columns to read with `values`, or rename one in the file",
            )
        if not column.unit:
            raise _missing_unit(table, table.columns[column.index], "unit", '"V" or "mA"')
        waveforms[column.key] = Waveform(t, _scaled(array, column.size), column.unit)
    if not waveforms:
        raise WaveformError(f"{file}: there is no column besides the time")
    return waveforms


def column_names(path: str | os.PathLike[str]) -> tuple[str, ...]:
    """Give the names of the columns of a text file, without their units.

    Parameters
    ----------
    path : path
        The file.

    Returns
    -------
    tuple of str
        In the file's order; "column 2" where there is no name.

    Raises
    ------
    MissingFileError, InputError, WaveformError
        If there is no such file, or it cannot be read as a table.
    """
    return tuple(column.name for column in read_head(read_text(Path(path)), str(path)).columns)


def _time_column(table: TextTable, name: str | None, given: str | None) -> _Wanted:
    index = 0 if name is None else _find(table, name)
    column = table.columns[index]
    kind, size = _unit(table, column, given, ("s",), "time_unit")
    if not kind:
        raise _missing_unit(table, column, "time_unit", '"ns"')
    return _Wanted(index, column.name, given or column.unit, size)


def _value_columns(
    table: TextTable, clock: int, values: Sequence[str], given: str | None
) -> list[_Wanted]:
    if values:
        picked = [(_find(table, name), name) for name in values]
        if clock in [index for index, _ in picked]:
            raise WaveformError(
                f"{table.file}: '{table.columns[clock].label}' is the time, and was asked for as "
                f"a value too",
                hint="say which column is the time with `time`",
            )
    else:
        first = split_cells(table.body.partition("\n")[0], table.separator)
        ends_empty = not first[-1]  # Each row ends in a separator.
        count = len(table.columns) - (1 if ends_empty and len(table.columns) > 2 else 0)
        others = [index for index in range(count) if index != clock]
        picked = [(index, table.columns[index].name) for index in others]
    wanted = []
    for index, key in picked:
        column = table.columns[index]
        if not values and column.name == table.columns[clock].name:
            wanted.append(_Wanted(index, key, "", 1.0))
            continue
        kind, size = _unit(table, column, given, ("V", "A"), "unit")
        wanted.append(_Wanted(index, key, kind, size))
    return wanted


def _find(table: TextTable, name: str) -> int:
    for fold in (str, str.lower):
        found = [
            index
            for index, column in enumerate(table.columns)
            if fold(name) in (fold(column.name), fold(column.label))
        ]
        if len(found) == 1:
            return found[0]
        if found:
            raise WaveformError(
                f"{table.file}: '{name}' could be any of the columns "
                f"{', '.join(str(index + 1) for index in found)}",
                hint="give them different names in the file",
            )
    names = [column.name for column in table.columns]
    raise WaveformError(f"{table.file}: there is no column '{name}'", hint=near_names(name, names))


def _unit(
    table: TextTable, column: Column, given: str | None, kinds: tuple[str, ...], keyword: str
) -> tuple[str, float]:
    """SI unit and size of the unit of a column; an empty unit when nobody gives one."""
    wanted = "a unit of time" if kinds == ("s",) else "a unit of voltage or current"
    found = []
    for text, where in (
        (given, f"`{keyword}`"),
        (column.unit, f"{table.file}: column '{column.label}'"),
    ):
        if not text:
            continue
        known = unit_kind(text)
        if known is None or known[0] not in kinds:
            hint = "" if text == given else "name the columns to read with `time` and `values`"
            raise WaveformError(f"{where}: wanted {wanted}, got '{shorten(text)}'", hint=hint)
        found.append(known)
    if len(found) == 2 and found[0] != found[1]:
        raise WaveformError(
            f"{table.file}: column '{column.label}' is in {column.unit}, but `{keyword}` says "
            f"{given}",
            hint=f"leave out `{keyword}`, or correct the file",
        )
    return found[0] if found else ("", 1.0)


def _missing_unit(table: TextTable, column: Column, keyword: str, example: str) -> WaveformError:
    first = table.first_line
    return WaveformError(
        f"{table.file}: wanted a unit for the column '{shorten(column.label)}', got none before "
        f"the first row of numbers in line {first}",
        hint=f"give `{keyword}`, such as {example}, or write it in the header: 'time (ns)'",
    )


def _same_name(table: TextTable, column: _Wanted, clock: _Wanted) -> bool:
    return table.columns[column.index].name == table.columns[clock.index].name


def _scaled(array: FloatArray, size: float) -> FloatArray:
    inverse = round(1.0 / size)
    if size < 1.0 and abs(size * inverse - 1.0) < 1e-12:
        return np.asarray(array / inverse)  # Rounds once: "10" in ns is the float 1e-8.
    return np.asarray(array * size)


def _read_numbers(table: TextTable, wanted: list[_Wanted]) -> list[FloatArray]:
    used = {column.index for column in wanted}
    # A column that is not used may hold text; it is still read, so that rows keep their length.
    kinds = [(f"c{i}", "f8" if i in used else "U1") for i in range(len(table.columns))]
    text = table.body
    try:
        # The look for a single character is fast, that for two is not.
        if any(mark in text and "\n" + mark in text for mark in COMMENT_MARKS):
            raise ValueError("comments stand among the rows")
        rows = _load(text, table.separator, kinds)
    except ValueError:
        # Once more without comments and blank lines; what fails then is a fault of the file.
        kept = _rows(table)
        try:
            rows = _load("\n".join(line for _, line in kept), table.separator, kinds)
        except ValueError as error:
            _refuse_faulty_row(table, kept, wanted)
            raise WaveformError(f"{table.file}: the columns cannot be read: {error}") from None
    return [np.ascontiguousarray(rows[f"c{column.index}"]) for column in wanted]


def _load(text: str, separator: str | None, kinds: list[tuple[str, str]]) -> np.ndarray:
    quote = '"' if '"' in text else None
    return np.loadtxt(
        io.StringIO(text),
        dtype=kinds,
        delimiter=separator,
        comments=None,
        quotechar=quote,
        ndmin=1,
    )


def _refuse_faulty_row(
    table: TextTable, rows: list[tuple[int, str]], wanted: list[_Wanted]
) -> None:
    """Raise for the first row that is not as wanted, with its line number."""
    count = len(table.columns)
    for number, line in rows:
        where = f"{table.file}:{number}"
        cells = split_cells(line, table.separator)
        for column in wanted:
            label = shorten(table.columns[column.index].label)
            cell = cells[column.index] if column.index < len(cells) else ""
            if not cell:
                raise WaveformError(
                    f"{where}: the column '{label}' is empty",
                    hint="remove the row or fill the gap; a gap is not interpolated",
                )
            if has_decimal_comma(cell):
                raise decimal_comma_error(where, cell)
            if not is_number(cell):
                raise WaveformError(
                    f"{where}: wanted a number in the column '{label}', got '{shorten(cell)}'"
                )
        if len(cells) != count:
            raise WaveformError(
                f"{where}: wanted {count} columns as in line {table.first_line}, got {len(cells)}",
                hint="a decimal comma or a thousands separator looks like this too",
            )


def _check(
    table: TextTable, wanted: list[_Wanted], columns: list[FloatArray], time_unit: str
) -> None:
    """Raise unless all numbers are finite and the time, as written, rises."""
    t = columns[0]
    if t.size < 2:
        raise WaveformError(
            f"{table.file}: a waveform needs at least two rows of numbers, got {t.size}"
        )
    for column, array in zip(wanted, columns, strict=True):
        bad = np.flatnonzero(~np.isfinite(array))
        if bad.size:
            raise WaveformError(
                f"{table.file}:{_line_number(table, int(bad[0]))}: wanted a finite number in the "
                f"column '{table.columns[column.index].label}', got {array[bad[0]]}",
                hint="remove the row or fill the gap; a gap is not interpolated",
            )
    bad = np.flatnonzero(np.diff(t) <= 0.0)
    if bad.size:
        row = int(bad[0]) + 1
        fault = "stands still" if t[row] == t[row - 1] else "runs back"
        raise WaveformError(
            f"{table.file}:{_line_number(table, row)}: the time must rise, but it {fault}: "
            f"{t[row]:.12g} {time_unit} after {t[row - 1]:.12g} {time_unit}",
            hint="a time written with too few digits stands still; export more digits",
        )


def _rows(table: TextTable) -> list[tuple[int, str]]:
    """Line number and text of all rows, without comments and blank lines."""
    return [
        (number, line)
        for number, line in enumerate(table.body.split("\n"), start=table.first_line)
        if line.strip() and line.lstrip()[0] not in COMMENT_MARKS
    ]


def _line_number(table: TextTable, row: int) -> int:
    return _rows(table)[row][0]
