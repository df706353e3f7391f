"""Rows of a sweep, and how they are laid out in a file."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from cosim.archive.checksums import CHECKSUM, contents_digest, row_digests
from cosim.archive.datasets import set_text
from cosim.archive.encoding import fits_word, is_instance, write_object
from cosim.archive.layout import DONE, TEXTS, RunInfo, notes_of, run_group_name
from cosim.archive.series import Series, Stack, stacks_of, write_stack
from cosim.archive.table import CORE, Cell, Column, write_table
from cosim.errors import ArchiveError


@dataclass(frozen=True, slots=True)
class Row:
    """One run of a sweep.

    Parameters
    ----------
    number : int
        Run number, from 1.
    kind : str
        Class name of the result; "" for a run without one.
    info : RunInfo
        Status, start time and wall time.
    cells : mapping of str to bool, int, float or str
        The columns of the table besides those of `kind`, `number` and `info`.
    units : mapping of str to str
        Unit by column, usually one mapping for all rows; a number without one gets "1".
    series : mapping of str to Series
        Vectors of the run.
    run : object or None
        Instance of a dataclass that is kept whole, below /runs.

    Raises
    ------
    ArchiveError
        If the number is below 1, or a cell has the name of one of the other columns.
    """

    number: int
    kind: str
    info: RunInfo = DONE
    cells: Mapping[str, Cell] = field(default_factory=dict)
    units: Mapping[str, str] = field(default_factory=dict)
    series: Mapping[str, Series] = field(default_factory=dict)
    run: object | None = None

    def __post_init__(self) -> None:
        if self.number < 1:
            raise ArchiveError(f"run numbers start at 1, got {self.number}")
        for name in (*CORE, CHECKSUM):
            if name in self.cells:
                raise ArchiveError(
                    f"run {self.number}: a cell must not be called '{name}', which is a column of "
                    "every archive",
                    hint="give it another name",
                )


def write_all(file: Any, rows: Sequence[Row]) -> None:
    """Write rows into a fresh file: table, series and records.

    Parameters
    ----------
    file : h5py.File
        The open file, an archive without runs.
    rows : sequence of Row
        The rows, each number once.

    Raises
    ------
    ArchiveError
        If a value has no place in an archive.
    """
    ordered = sorted(rows, key=lambda row: row.number)
    stacks = stacks_of([(row.number, row.series) for row in ordered if row.series])
    table = _table(ordered)
    numbers = table["id"].values
    columns = {name: column.values for name, column in table.items()}
    digests = row_digests(columns, series_blobs(numbers, stacks))
    place = list(table.items())
    place.insert(len(CORE), (CHECKSUM, Column(np.array(digests, dtype=np.object_))))
    write_table(file, dict(place))
    for (name, _), stack in stacks.items():
        write_stack(file, name, stack)
    file.create_group(TEXTS)
    for row in ordered:
        if row.run is not None:
            _write_record(file, row)


def series_blobs(
    numbers: npt.NDArray[np.int64], stacks: Mapping[tuple[str, int], Stack]
) -> list[bytes]:
    """Give for each run the digests of its series, for the checksum of its row.

    Parameters
    ----------
    numbers : ndarray of int64, shape (runs,)
        The runs, rising.
    stacks : mapping of Stack
        By name and length.

    Returns
    -------
    list of bytes
        One for each run, empty without series.
    """
    found: dict[int, bytes] = dict.fromkeys(numbers.tolist(), b"")
    for name, length in sorted(stacks):
        stack = stacks[name, length]
        for number, digest in zip(stack.numbers.tolist(), stack.digests(name), strict=True):
            if number in found:
                found[number] += digest
    return list(found.values())


def _table(rows: Sequence[Row]) -> dict[str, Column]:
    texts = np.object_
    table = {
        "id": Column(np.array([row.number for row in rows], dtype=np.int64), "1"),
        "kind": Column(np.array([row.kind for row in rows], dtype=texts)),
        "status": Column(np.array([row.info.status for row in rows], dtype=texts)),
        "start_time": Column(np.array([row.info.start_time for row in rows], dtype=texts)),
        "wall_time": Column(np.array([row.info.wall_time for row in rows], dtype=float), "s"),
    }
    names = list(rows[0].cells)
    columns: Sequence[Sequence[Cell | None]] = list(
        zip(*[row.cells.values() for row in rows], strict=False)
    )
    if any(list(row.cells) != names for row in rows):
        names = list(dict.fromkeys(name for row in rows for name in row.cells))
        columns = [[row.cells.get(name) for row in rows] for name in names]
    units: dict[str, str] = {}
    seen: Mapping[str, str] | None = None
    for row in rows:
        if row.units is not seen:
            seen = row.units
            for name, unit in seen.items():
                units[name] = unit if units.get(name, unit) == unit else "mixed"
    for name, column in zip(names, columns, strict=True):
        table[name] = _column(column, units.get(name, "1"))
    return table


def _column(values: Sequence[Cell | None], unit: str) -> Column:
    kinds = set(map(type, values))
    if kinds == {float}:
        return Column(np.array(values, dtype=np.float64), unit)
    if kinds == {bool}:
        return Column(np.array(values, dtype=np.bool_))
    whole = [value for value in values if isinstance(value, int)]
    if kinds == {int} and all(map(fits_word, whole)):
        return Column(np.array(values, dtype=np.int64), unit)
    exact = all(float(value) == value for value in whole if abs(value) < 2**1000)
    if str in kinds or not exact or any(abs(value) >= 2**1000 for value in whole):
        words = ["" if v is None or v != v else str(v) for v in values]
        return Column(np.array(words, dtype=np.object_))
    return Column(np.array([np.nan if v is None else float(v) for v in values]), unit)


def _write_record(file: Any, row: Row) -> None:
    if not is_instance(row.run):
        raise ArchiveError(
            f"run {row.number}: the record must be an instance of a dataclass, got "
            f"{type(row.run).__name__}",
            hint="wrap the values in a frozen dataclass with declared fields",
        )
    group = file["runs"].create_group(run_group_name(row.number), track_order=True)
    place = write_object(group, row.run, notes_of(row.info))
    set_text(group.id, CHECKSUM.encode(), contents_digest(sorted(place.contents.items())))
