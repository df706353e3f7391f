"""The table of runs: one dataset per column, so that 100,000 rows list without their waveforms."""

import dataclasses
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import h5py
import numpy as np
import numpy.typing as npt

from cosim.archive.encoding import field_unit, fits_word, is_instance, is_plain_text
from cosim.archive.layout import (
    TEXT,
    NumberedRun,
    member_key,
    member_name,
    members,
    storage_options,
)

# Longer texts are decks and logs; they stay with their run.
_LONGEST_TEXT = 200


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
    row |= {name: cell for name, cell in _cells(entry.run, "") if name not in ("id", "kind")}
    return row


def _cells(value: Any, prefix: str) -> Iterator[tuple[str, Column]]:
    """Walk the scalar fields of a dataclass, of those in it, and of its dictionaries.

    A field whose metadata says `table: False` stays out, with all that is in it.
    """
    for field in dataclasses.fields(value):
        if not field.metadata.get("table", True):
            continue
        unit = field_unit(value, field.metadata)
        yield from _walk(prefix + field.name, getattr(value, field.name), unit)


def _walk(name: str, value: object, unit: str) -> Iterator[tuple[str, Column]]:
    if is_instance(value):
        yield from _cells(value, f"{name}.")
    elif isinstance(value, Mapping):
        for key, item in value.items():
            yield from _walk(f"{name}.{key}", item, unit)
    elif isinstance(value, str):
        if len(value) <= _LONGEST_TEXT and "\n" not in value and is_plain_text(value):
            yield name, _cell(value, "")
    elif isinstance(value, (bool, np.bool_)):
        yield name, _cell(bool(value), "")
    elif isinstance(value, (int, np.integer)):
        # A seed may be longer than any number that HDF5 knows; as text it keeps all its digits.
        number = int(value)
        yield name, _cell(number, unit) if fits_word(number) else _cell(str(number), "")
    elif isinstance(value, (float, np.floating)):
        yield name, _cell(float(value), unit)


def _cell(value: bool | int | float | str, unit: str) -> Column:
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
    filled = [(table, row_count(table)) for table in tables if row_count(table)]
    names = dict.fromkeys(name for table, _ in filled for name in table)
    joined = {name: _join([(t.get(name), rows) for t, rows in filled]) for name in names}
    if not joined:
        return {}
    ids = joined["id"].values
    # The first of each id in the reversed column is the last in the column.
    _, first = np.unique(ids[::-1], return_index=True)
    keep = ids.size - 1 - first
    return {name: Column(column.values[keep], column.unit) for name, column in joined.items()}


def _join(pieces: Sequence[tuple[Column | None, int]]) -> Column:
    present = [column for column, _ in pieces if column is not None]
    kinds = {column.values.dtype.kind for column in present}
    complete = len(present) == len(pieces)
    blank: float | str = np.nan
    dtype: npt.DTypeLike = np.float64
    if "O" in kinds:
        blank, dtype = "", np.object_
    elif complete and kinds in ({"b"}, {"i"}):
        dtype = present[0].values.dtype
    parts = []
    for column, rows in pieces:
        if column is None:
            parts.append(np.full(rows, blank, dtype=dtype))
        elif dtype is np.object_ and column.values.dtype.kind != "O":
            texts = [str(item) for item in column.values.tolist()]
            parts.append(np.array(texts, dtype=np.object_))
        else:
            parts.append(column.values.astype(dtype))
    units = {column.unit for column in present if column.values.dtype.kind in "if"}
    unit = "" if dtype is np.object_ else units.pop() if len(units) == 1 else "mixed"
    return Column(np.concatenate(parts), unit if kinds != {"b"} else "")


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
    group = file.create_group("table", track_order=True)
    for name, column in table.items():
        text = column.values.dtype.kind == "O"
        dtype = TEXT if text else column.values.dtype
        options = {} if text else storage_options(column.values.size)
        dataset = group.create_dataset(
            member_name(name), data=column.values, dtype=dtype, **options
        )
        if column.unit:
            dataset.attrs["units"] = column.unit
        if name == "id":
            dataset.make_scale("id")
        else:
            dataset.dims[0].attach_scale(group["id"])


def load_table(file: Any) -> dict[str, Column]:
    """Read the table of an open file.

    Parameters
    ----------
    file : h5py.File
        The open file.

    Returns
    -------
    dict of str to Column
        The table; empty when there are no rows.
    """
    table: dict[str, Column] = {}
    for name, dataset in members(file["table"]) if "table" in file else ():
        text = h5py.check_string_dtype(dataset.dtype) is not None
        values = dataset.asstr()[()] if text else dataset[()]
        table[member_key(name)] = Column(np.asarray(values), str(dataset.attrs.get("units", "")))
    return table


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
    return [int(number) for number in file["table"]["id"][()]]
