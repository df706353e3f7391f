"""The table of a sweep as a file for spreadsheets."""

import csv
import os
from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from cosim.errors import InputError
from cosim.sweep.columns import Table

_ROWS_AT_ONCE = 4096


def write_csv(table: Table, units: Mapping[str, str], path: str | os.PathLike[str]) -> int:
    """Write the table of an archive: a header with names and units, then one row per run.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        From `cosim.archive.read_table`.
    units : mapping of str
        Unit by column, from `cosim.archive.read_units`.
    path : path
        The file, in UTF-8. Numbers have all their digits, so that they read back the same; one
        that does not exist is an empty cell.

    Returns
    -------
    int
        Rows written, without the header.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    rows = len(next(iter(table.values()))) if table else 0
    header = [_heading(name, units.get(name, "")) for name in table]
    try:
        with open(path, "w", encoding="utf-8", newline="") as file:
            writer = csv.writer(file, lineterminator="\n")
            writer.writerow(header)
            for start in range(0, rows, _ROWS_AT_ONCE):
                part = slice(start, start + _ROWS_AT_ONCE)
                writer.writerows(
                    zip(*(_cells(values[part]) for values in table.values()), strict=True)
                )
    except OSError as error:
        raise InputError(f"{os.fspath(path)} cannot be written: {error}") from None
    return rows


def _heading(name: str, unit: str) -> str:
    return f"{name} ({unit})" if unit not in ("", "1") else name


def _cells(values: npt.NDArray[Any]) -> list[Any]:
    cells: list[Any] = values.tolist()
    if values.dtype.kind == "f":
        for at in np.flatnonzero(np.isnan(values)).tolist():
            cells[at] = None
    return cells
