"""The head of a text table: separator, header, row of units, and where the numbers start."""

import re
from dataclasses import dataclass

from cosim.errors import WaveformError
from cosim.formats.cells import (
    decimal_comma_error,
    has_decimal_comma,
    is_number,
    split_cells,
    unit_kind,
)
from cosim.formats.files import shorten

COMMENT_MARKS = "#%;"

# In this order: a comma may stand within a tab's cell, a blank within a comma's.
_SEPARATORS = ("\t", ";", ",", None)

_BRACKETED = re.compile(r"(.*?)(\s*)(?:\(([^()\[\]]*)\)|\[([^()\[\]]*)\])")
# "V(out)" is a node's voltage, not a column V in the unit "out".
_SIMULATOR_VECTOR = re.compile(r"[vi]\w{0,3}", re.I)


@dataclass(frozen=True, slots=True)
class Column:
    """A column of a text table.

    Parameters
    ----------
    name : str
        Name without its unit; "column 2" when the file gives none.
    label : str
        Name as it stands in the file.
    unit : str
        Unit as it stands in the file; empty when the file gives none.
    """

    name: str
    label: str
    unit: str


@dataclass(frozen=True, slots=True)
class TextTable:
    """A text table whose head has been understood.

    Parameters
    ----------
    file : str
        Path, for messages.
    separator : str or None
        Between two cells; None stands for blanks.
    columns : tuple of Column
        The columns, one for each cell of the first row of numbers.
    first_line : int
        Line number of the first row of numbers, from 1.
    body : str
        Text from there to the end, with "\\n" at the end of lines.
    """

    file: str
    separator: str | None
    columns: tuple[Column, ...]
    first_line: int
    body: str


def read_head(text: str, file: str) -> TextTable:
    """Find where the numbers start, what separates them and what they are called.

    Parameters
    ----------
    text : str
        From `read_text`.
    file : str
        Path, for messages.

    Returns
    -------
    TextTable
        With one column for each cell of the first row of numbers.

    Raises
    ------
    WaveformError
        If there is no row of numbers, numbers have decimal commas, or a row before the first one
        looks like a row with a fault.
    """
    before: list[tuple[int, str]] = []
    start, number = 0, 0
    while start <= len(text):
        end = text.find("\n", start)
        end = len(text) if end < 0 else end
        line, number = text[start:end], number + 1
        if line.strip() and line.lstrip()[0] not in COMMENT_MARKS:
            separator, found = _numbers(line)
            if found:
                columns = _name_columns(before, split_cells(line, separator), separator, file)
                return TextTable(file, separator, columns, number, text[start:])
            _refuse_decimal_commas(line, f"{file}:{number}")
        if line.strip():
            before.append((number, line.strip()))
        start = end + 1
    number, line = before[-1]
    raise WaveformError(
        f"{file}: wanted rows of at least two numbers, got none in {number} lines; the last is "
        f"'{shorten(line)}'",
        hint="columns of numbers are separated by commas, semicolons, tabs or blanks",
    )


def _numbers(line: str) -> tuple[str | None, bool]:
    """The separator of a row of at least two cells, all of them numbers or empty."""
    for separator in _SEPARATORS:
        if separator is not None and separator not in line:
            continue
        cells = split_cells(line, separator)
        filled = [cell for cell in cells if cell]
        if len(cells) >= 2 and filled and all(map(is_number, filled)):
            return separator, True
    return None, False


def _refuse_decimal_commas(line: str, where: str) -> None:
    for separator in _SEPARATORS:
        cells = [cell for cell in split_cells(line, separator) if cell]
        commas = [cell for cell in cells if has_decimal_comma(cell)]
        if len(cells) >= 2 and commas and all(is_number(c) or has_decimal_comma(c) for c in cells):
            raise decimal_comma_error(where, commas[0])


def _name_columns(
    before: list[tuple[int, str]], first: list[str], separator: str | None, file: str
) -> tuple[Column, ...]:
    count = len(first)
    plain = [(number, line) for number, line in before if line[0] not in COMMENT_MARKS]
    rows: list[list[str] | None] = []
    if plain:
        number, line = plain[-1]
        _refuse_broken_row(split_cells(line, separator), f"{file}:{number}")
        if (cells := _header_cells(line, separator, first)) is not None:
            rows.append(cells)
            if len(plain) > 1:
                rows.append(_header_cells(plain[-2][1], separator, first))
        elif separator == "," and 2 * len(split_cells(line, separator)) == count:
            raise decimal_comma_error(f"{file}: below the header", ",".join(first[:2]))
    else:
        # A header behind a comment mark, as some programs write it; the nearest one that fits.
        comments = [line.lstrip(COMMENT_MARKS + " \t") for _, line in reversed(before)]
        found = [_header_cells(line, separator, first) for line in comments]
        rows += [cells for cells in found if cells and not any(map(is_number, cells))][:2]
    if rows and rows[0] is not None and _is_unit_row(rows[0]):
        names = rows[1] if len(rows) > 1 and rows[1] is not None else [""] * count
        units = [cell.strip("()[] ") for cell in rows[0]]
        pairs = [(name, name, unit) for name, unit in zip(names, units, strict=True)]
    else:
        names = rows[0] if rows and rows[0] is not None else [""] * count
        pairs = [(*_split_unit(name), name) for name in names]
        pairs = [(name, label, unit) for name, unit, label in pairs]
    return tuple(
        Column(name or f"column {index}", label or f"column {index}", unit)
        for index, (name, label, unit) in enumerate(pairs, start=1)
    )


def _header_cells(line: str, separator: str | None, first: list[str]) -> list[str] | None:
    """The cells of a header, when some separator gives as many as the first row has."""
    count = len(first)
    for other in (separator, *_SEPARATORS):
        if '"' in line:
            cells = split_cells(line, other)
        else:
            # A comma or a blank in brackets, as in "v(a, b)", separates nothing.
            blind = re.sub(r"\([^()]*\)", lambda match: "\x00" * len(match[0]), line)
            cells, start = [], 0
            for part in re.finditer(r"\s+" if other is None else re.escape(other), blind):
                cells.append(line[start : part.start()].strip())
                start = part.end()
            cells.append(line[start:].strip())
        if other is None:
            cells = _join_units(cells)
        if len(cells) == count + 1 and not cells[-1]:
            cells.pop()
        elif len(cells) == count - 1 and not first[-1]:
            cells.append("")  # Rows may end in a separator where the header does not.
        if len(cells) == count and any(cells):
            return cells
    return None


def _join_units(cells: list[str]) -> list[str]:
    joined: list[str] = []
    for cell in cells:
        if joined and re.fullmatch(r"\([^()]*\)|\[[^\[\]]*\]", cell):
            joined[-1] += f" {cell}"
        else:
            joined.append(cell)
    return joined


def _refuse_broken_row(cells: list[str], where: str) -> None:
    # A channel number may stand in a header ("x-axis,1,2"), a first number may not.
    if len(cells) >= 2 and is_number(cells[0]):
        text = next((other for other in cells if not is_number(other)), "")
        if text:
            raise WaveformError(
                f"{where}: wanted a header or a row of numbers before the first row of numbers, "
                f"got the number '{shorten(cells[0])}' beside the text '{shorten(text)}'",
                hint="repair the row, or make it a comment with '#'",
            )


def _is_unit_row(cells: list[str]) -> bool:
    bare = [cell.strip("()[] ") for cell in cells]
    kinds = [unit_kind(cell) for cell in bare if cell not in ("", "-", "1")]
    times = [kind for kind in kinds if kind is not None and kind[0] == "s"]
    return bool(times) and None not in kinds


def _split_unit(label: str) -> tuple[str, str]:
    """Name and unit of "time (ns)", "t [s]" and "t/ns"."""
    match = _BRACKETED.fullmatch(label)
    if match:
        name, gap, unit = match[1], match[2], (match[3] or match[4] or "").strip()
        vector = match[3] is not None and not gap and _SIMULATOR_VECTOR.fullmatch(name)
        if name and not vector and unit_kind(unit) is not None:
            return name, unit
    name, slash, unit = label.rpartition("/")
    kind = unit_kind(unit) if slash and name else None
    if kind is not None and kind[0] in ("s", "V", "A"):
        return name.strip(), unit.strip()
    return label, ""
