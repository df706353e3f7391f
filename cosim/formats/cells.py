"""Cells of a text table: how a line is split, what is a number and what is a unit."""

import csv
import re
from functools import cache

from cosim.errors import UnitError, WaveformError
from cosim.units import parse_quantity

# What oscilloscopes write in full.
_WORDS = {
    "s": ("sec", "second", "seconds"),
    "V": ("volt", "volts"),
    "A": ("amp", "amps", "ampere", "amperes"),
}
_KINDS = ("s", "V", "A", "Hz", "ohm", "K", "dB", "rad", "m")

_NUMBER = re.compile(
    r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?|[+-]?(?:nan|inf(?:inity)?)", re.I | re.A
)
_DECIMAL_COMMA = re.compile(r"[+-]?\d+,\d+(?:[eE][+-]?\d+)?", re.A)


def split_cells(line: str, separator: str | None) -> list[str]:
    """Split a line into cells.

    Parameters
    ----------
    line : str
        One line.
    separator : str or None
        Between two cells; None stands for blanks.

    Returns
    -------
    list of str
        The cells, without quotes and the blanks around them.
    """
    if separator is None:
        return [cell.strip('"') for cell in line.split()]
    if '"' not in line:
        return [cell.strip() for cell in line.split(separator)]
    try:
        cells = next(csv.reader([line], delimiter=separator, skipinitialspace=True), [])
    except csv.Error:
        cells = line.split(separator)
    return [cell.strip() for cell in cells]


def is_number(cell: str) -> bool:
    """Tell whether a cell is a decimal number, "nan" or "inf".

    Parameters
    ----------
    cell : str
        Text of the cell.

    Returns
    -------
    bool
        True for a number.
    """
    return _NUMBER.fullmatch(cell) is not None


def has_decimal_comma(cell: str) -> bool:
    """Tell whether a cell is a number with a decimal comma.

    Parameters
    ----------
    cell : str
        Text of the cell.

    Returns
    -------
    bool
        True for "0,5" and the like.
    """
    return _DECIMAL_COMMA.fullmatch(cell) is not None


def decimal_comma_error(where: str, cell: str) -> WaveformError:
    """Make the error for a number with a decimal comma.

    Parameters
    ----------
    where : str
        File and line.
    cell : str
        The number.

    Returns
    -------
    WaveformError
        To be raised.
    """
    return WaveformError(
        f"{where}: wanted numbers with a decimal point, got the decimal comma in '{cell}'",
        hint="export with decimal points, or replace the commas",
    )


@cache
def unit_kind(text: str) -> tuple[str, float] | None:
    """Read a unit.

    Parameters
    ----------
    text : str
        Such as "ns", "mV" or "Volt".

    Returns
    -------
    tuple of str and float, or None
        The SI unit and the size of the given one in it; None when it is not known.
    """
    spelling = text.strip().replace("\N{GREEK SMALL LETTER MU}", "\N{MICRO SIGN}")
    for kind, words in _WORDS.items():
        if spelling.lower() in words:
            return kind, 1.0
    for kind in _KINDS:
        try:
            return kind, parse_quantity(f"1 {spelling}", kind)
        except UnitError:
            continue
    return None
