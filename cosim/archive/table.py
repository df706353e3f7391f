"""The table of runs: one dataset per column, so that 100,000 rows list without their waveforms."""

import dataclasses
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import h5py
import numpy as np
import numpy.typing as npt

from cosim.archive.datasets import NUMBER_TYPES, create_dataset
from cosim.archive.encoding import field_unit, fits_word, is_instance, is_plain_text
from cosim.archive.layout import (
    TEXT,
    NumberedRun,
    member_key,
    member_name,
)

Cell: TypeAlias = bool | int | float | str

# What each row has, besides the scalar fields of its run.
CORE = ("id", "kind", "status", "start_time", "wall_time")

# Longer texts are decks and logs; they stay with their run.
_LONGEST_TEXT = 200

# Up to here every integer is a float64.
EXACT = 2**53


@dataclass(frozen=True, slots=True)
class Column:
    """One column of the table.

    Parameters
    ----------
    values : ndarray, shape (rows,)
        bool, int64, float64 or str objects.
    unit : str
        Unit of a numeric column, "" for text and bool.
    """

    values: npt.NDArray[Any]
    unit: str = ""


def row_of(entry: NumberedRun) -> dict[str, Column]:
    """Give the table of one row that stands for a run.

    Parameters
    ----------
    entry : NumberedRun
        The run. Its own field `status`, `start_time` or `wall_time` takes the place of what its
        `info` says.

    Returns
    -------
    dict of str to Column
        The row.
    """
    info = entry.info
    row = {
        "id": _cell(entry.number, "1"),
        "kind": _cell(type(entry.run).__name__, ""),
        "status": _cell(info.status, ""),
        "start_time": _cell(info.start_time, ""),
        "wall_time": _cell(info.wall_time, "s"),
    }
    # The run's own status, start_time and wall_time come after those of `info`, in their place.
    cells, units = cells_of(entry.run, ("id", "kind"))
    return row | {name: _cell(value, units[name]) for name, value in cells.items()}


def cells_of(run: object, but: Collection[str] = CORE) -> tuple[dict[str, Cell], dict[str, str]]:
    """Give the scalar fields of a dataclass, of those in it, and of its dictionaries.

    A field whose metadata says `table: False` stays out, with all that is in it, and so do texts
    of more than 200 characters or several lines.

    Parameters
    ----------
    run : object
        An instance of a dataclass.
    but : collection of str
        Names of cells that stay out.

    Returns
    -------
    cells : dict of str to bool, int, float or str
        By the path of the field, "free_frame.average_gate_fidelity". An integer that does not
        fit 64 bits is a text.
    units : dict of str to str
        Unit by the same names; "" for text and bool.
    """
    cells: dict[str, Cell] = {}
    units: dict[str, str] = {}
    for name, value, unit in _cells(run, ""):
        if name not in but:
            cells[name] = value
            units[name] = unit
    return cells, units


def _cells(value: Any, prefix: str) -> Iterator[tuple[str, Cell, str]]:
    for field in dataclasses.fields(value):
        if field.metadata.get("table", True):
            unit = field_unit(value, field.metadata)
            yield from _walk(prefix + field.name, getattr(value, field.name), unit)


def _walk(name: str, value: object, unit: str) -> Iterator[tuple[str, Cell, str]]:
    if isinstance(value, str):
        if len(value) <= _LONGEST_TEXT and "\n" not in value and is_plain_text(value):
            yield name, value, ""
    elif isinstance(value, (bool, np.bool_)):
        yield name, bool(value), ""
    elif isinstance(value, (float, np.floating)):
        yield name, float(value), unit
    elif isinstance(value, (int, np.integer)):
        # A seed may be longer than any number that HDF5 knows; as text it keeps all its digits.
        number = int(value)
        yield (name, number, unit) if fits_word(number) else (name, str(number), "")
    elif is_instance(value):
        yield from _cells(value, f"{name}.")
    elif isinstance(value, Mapping):
        for key, item in value.items():
            yield from _walk(f"{name}.{key}", item, unit)


def _cell(value: Cell, unit: str) -> Column:
    dtype: npt.DTypeLike = np.float64
    if isinstance(value, str):
        dtype = np.object_
    elif isinstance(value, bool):
        dtype = np.bool_
    elif isinstance(value, int):
        dtype = np.int64
    return Column(np.array([value], dtype=dtype), unit)


def row_count(table: Mapping[str, Column]) -> int:
    """Give the number of rows.

    Parameters
    ----------
    table : mapping of str to Column
        A table.

    Returns
    -------
    int
        Number of rows; 0 for a table without columns.
    """
    return table["id"].values.size if table else 0


def stack(tables: Sequence[Mapping[str, Column]]) -> dict[str, Column]:
    """Put tables below each other, sorted by id; of rows with one id the last one stays.

    Parameters
    ----------
    tables : sequence of mapping
        Tables whose columns may differ. Where one lacks a column the rows get NaN or "" (and the
        integers and bools of the others become float64); a column that is text in one is text in
        all.

    Returns
    -------
    dict of str to Column
        One table; empty when there are no rows.
    """
    joined = join([table for table in tables if row_count(table)])
    if not joined:
        return {}
    ids = joined["id"].values
    # The first of each id in the reversed column is the last in the column.
    _, first = np.unique(ids[::-1], return_index=True)
    keep = ids.size - 1 - first
    return {name: Column(column.values[keep], column.unit) for name, column in joined.items()}


def join(tables: Sequence[Mapping[str, Column]]) -> dict[str, Column]:
    """Put tables below each other as they are.

    Parameters
    ----------
    tables : sequence of mapping
        Tables as for `stack`, each with a column "id" at least.

    Returns
    -------
    dict of str to Column
        One table with the rows of all; empty when there are none.
    """
    names = dict.fromkeys(name for table in tables for name in table)
    sizes = [row_count(table) for table in tables]
    return {
        name: _join([(t.get(name), rows) for t, rows in zip(tables, sizes, strict=True)])
        for name in names
    }


def _join(pieces: Sequence[tuple[Column | None, int]]) -> Column:
    present = [column for column, _ in pieces if column is not None]
    kinds = {column.values.dtype.kind for column in present}
    complete = len(present) == len(pieces)
    blank: float | str = np.nan
    dtype: npt.DTypeLike = np.float64
    if complete and kinds in ({"b"}, {"i"}):
        dtype = present[0].values.dtype
    elif "O" in kinds or any(_is_inexact(column.values) for column in present):
        # Integers that no float64 holds keep their digits as text.
        blank, dtype = "", np.object_
    parts = []
    for column, rows in pieces:
        if column is None:
            parts.append(np.full(rows, blank, dtype=dtype))
        elif dtype is np.object_ and column.values.dtype.kind != "O":
            texts = ["" if item != item else str(item) for item in column.values.tolist()]
            parts.append(np.array(texts, dtype=np.object_))
        else:
            parts.append(column.values.astype(dtype))
    units = {column.unit for column in present if column.values.dtype.kind in "if"}
    unit = "" if dtype is np.object_ else units.pop() if len(units) == 1 else "mixed"
    return Column(np.concatenate(parts), unit if kinds != {"b"} else "")


def _is_inexact(values: npt.NDArray[Any]) -> bool:
    """Tell whether there are integers that float64 might round."""
    return values.dtype.kind == "i" and bool(np.any(np.abs(values.astype(float)) >= EXACT))


def write_table(file: Any, table: Mapping[str, Column]) -> None:
    """Write the table into an open file, in place of the one that is there.

    Parameters
    ----------
    file : h5py.File
        The open file.
    table : mapping of str to Column
        A table.
    """
    if "table" in file:
        del file["table"]
    write_columns(file.create_group("table", track_order=True), table)


def write_columns(group: Any, table: Mapping[str, Column]) -> None:
    """Add columns to the group of a table.

    They are not compressed, which would save a third of their space at best, and make a table of
    100,000 rows take several times as long to read.

    Parameters
    ----------
    group : h5py.Group
        The group, which has the column "id" or gets it here, as the first.
    table : mapping of str to Column
        The columns.
    """
    scale = h5py.h5d.open(group.id, b"id") if "id" in group else None
    for name, column in table.items():
        dataset = create_dataset(group, member_name(name), column.values, column.unit)
        if scale is None:
            scale = dataset
            h5py.h5ds.set_scale(dataset, b"id")
        else:
            h5py.h5ds.attach_scale(dataset, scale, 0)


def column_names(file: Any) -> list[str]:
    """Give the names of the table's columns in an open file.

    Parameters
    ----------
    file : h5py.File
        The open file.

    Returns
    -------
    list of str
        In their order; empty when there is no table.
    """
    return [member_key(name) for name in file["table"]] if "table" in file else []


def load_table(
    file: Any,
    columns: Collection[str] | None = None,
    raw: bool = False,
    units: bool = True,
) -> dict[str, Column]:
    """Read the table of an open file.

    Parameters
    ----------
    file : h5py.File
        The open file.
    columns : collection of str or None
        Names of the columns to read; None for all. One that is not there is left out.
    raw : bool
        Whether bools are given as the bytes that stand in the file.
    units : bool
        Whether the units are read, which takes as long as the values of a small table.

    Returns
    -------
    dict of str to Column
        The table; empty when there are no rows.
    """
    if "table" not in file:
        return {}
    group = file["table"]
    names = {member_key(name): name for name in group}
    return {
        key: _load_column(h5py.h5d.open(group.id, name.encode()), raw, units)
        for key, name in names.items()
        if columns is None or key in columns
    }


def _load_column(dataset: Any, raw: bool, units: bool) -> Column:
    unit = ""
    if units and h5py.h5a.exists(dataset, b"units"):
        noted = np.empty((), dtype=TEXT)
        h5py.h5a.open(dataset, b"units").read(noted)
        text = noted.item()
        unit = text.decode() if isinstance(text, bytes) else str(text)
    dtype = dataset.dtype
    if dtype.kind == "b" and raw:
        dtype = np.dtype(np.uint8)
    values = np.empty(dataset.shape, dtype=dtype)
    if values.size:
        dataset.read(h5py.h5s.ALL, h5py.h5s.ALL, values, NUMBER_TYPES.get(dtype))
    if dtype.kind != "O":
        return Column(values, unit)
    texts = [item.decode() if isinstance(item, bytes) else item for item in values.tolist()]
    return Column(np.array(texts, dtype=np.object_), unit)


def load_ids(file: Any) -> list[int]:
    """Read the run numbers of an open file.

    Parameters
    ----------
    file : h5py.File
        The open file.

    Returns
    -------
    list of int
        In the order of the rows.
    """
    if "table" not in file or "id" not in file["table"]:
        return []
    numbers: list[int] = file["table"]["id"][()].tolist()
    return numbers
