"""Many files of archives into one, in bounded memory; also a program, `python -m`, that does it.

What is held at once is the run numbers, some columns of the table, some blocks of series and one
array of a record. As a program it reads one JSON object from its standard input, with the keys
`archives` (a list of lists of files, in the order in which they were published), `keep` (a list
of run numbers or null), `packed` (whether to compress), `target` (the file to write) and `parent`
(the process that has asked, without which it ends), and prints how many of the runs came from
other archives than the first.
"""

import collections
import contextlib
import json
import os
import sys
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import numpy.typing as npt

from cosim.archive.copying import copy_record
from cosim.archive.files import opened
from cosim.archive.layout import (
    LIBRARY_BOUNDS,
    PLAN,
    TEXTS,
    filters,
    run_group_name,
    write_root,
)
from cosim.archive.series import load_grid, load_rows, stack_group, stack_groups, write_scales
from cosim.archive.table import (
    Column,
    column_names,
    join,
    load_ids,
    load_table,
    write_columns,
)

_OPEN_FILES = 250  # more than the small parts that are there before they are merged
_CELLS = 2**23  # 64 MiB of numbers in the columns that are held at once
_SAMPLES = 2**22  # 32 MiB of complex64 in the block of series that is held at once
_CHUNK = 2**17  # samples of a chunk of series, 1 MB of complex64

Numbers = npt.NDArray[np.int64]


class Sources:
    """Files that are read, of which a limited number is open at a time."""

    def __init__(self, paths: Sequence[Path]) -> None:
        self.paths = paths
        self._open: collections.OrderedDict[int, tuple[Any, Any]] = collections.OrderedDict()

    def __getitem__(self, index: int) -> Any:
        """Give the open file of an index."""
        if index in self._open:
            self._open.move_to_end(index)
        else:
            if len(self._open) >= _OPEN_FILES:
                self._close(*self._open.popitem(last=False)[1])
            manager = opened(self.paths[index])
            self._open[index] = (manager, manager.__enter__())
        return self._open[index][1]

    def close(self) -> None:
        """Close all of them."""
        while self._open:
            self._close(*self._open.popitem()[1])

    @staticmethod
    def _close(manager: Any, file: Any) -> None:
        manager.__exit__(None, None, None)


@dataclass(frozen=True, slots=True)
class Owners:
    """Where each run is taken from.

    Parameters
    ----------
    numbers : ndarray of int64, shape (runs,)
        The runs, rising.
    source : ndarray of int64, shape (runs,)
        Index of the file.
    row : ndarray of int64, shape (runs,)
        Row in the table of that file.
    """

    numbers: Numbers
    source: Numbers
    row: Numbers

    def of(self, numbers: Numbers, source: int) -> npt.NDArray[np.bool_]:
        """Tell which of some runs, as they stand in a file, are taken from that file."""
        if not self.numbers.size:
            return np.zeros(numbers.shape, dtype=np.bool_)
        place = np.minimum(np.searchsorted(self.numbers, numbers), self.numbers.size - 1)
        taken: npt.NDArray[np.bool_] = (self.numbers[place] == numbers) & (
            self.source[place] == source
        )
        return taken


def find_owners(sources: Sources, archives: Sequence[int]) -> Owners:
    """Find the row that holds for each run.

    Within an archive the file that was published last holds. Between archives a run that is done
    wins over one that is not, then the one that started later.

    Parameters
    ----------
    sources : Sources
        The files, in the order of their publication.
    archives : sequence of int
        For each file the archive it belongs to.

    Returns
    -------
    Owners
        Of all runs.
    """
    several = len(set(archives)) > 1
    pieces: list[Numbers] = []
    marks: list[tuple[bool, str]] = []
    for index in range(len(archives)):
        numbers = np.array(load_ids(sources[index]), dtype=np.int64)
        rows = np.arange(numbers.size)
        pieces.append(np.stack([numbers, np.full_like(numbers, index), rows], axis=1))
        if several:
            table = load_table(sources[index], ("status", "start_time"), units=False)
            words = [table[name].values.tolist() for name in ("status", "start_time") if table]
            marks += [(status == "done", start) for status, start in zip(*words, strict=True)]
    entries = np.concatenate(pieces) if pieces else np.empty((0, 3), dtype=np.int64)
    order = np.arange(len(entries))
    if several:
        group = [archives[index] for index in entries[:, 1].tolist()]
        last = {
            (g, n): k for k, (g, n) in enumerate(zip(group, entries[:, 0].tolist(), strict=True))
        }
        held = sorted(last.values(), key=lambda k: (*marks[k], -group[k]))
        order = np.array(held, dtype=np.int64)
    # The first of each number in the reversed order is the last in the order.
    ranked = entries[order[::-1]]
    numbers, first = np.unique(ranked[:, 0], return_index=True)
    return Owners(numbers, ranked[first, 1], ranked[first, 2])


def foreign_runs(owners: Owners, archives: Sequence[Sequence[object]]) -> int:
    """Count the runs that came from other archives than the first of several.

    Parameters
    ----------
    owners : Owners
        Where each run was taken from.
    archives : sequence of sequence
        The files of each archive.

    Returns
    -------
    int
        How many.
    """
    return int((owners.source >= len(archives[0])).sum())


def merge_files(
    file: Any,
    sources: Sources,
    owners: Owners,
    keep: Collection[int] | None,
    packed: bool,
) -> None:
    """Write the runs of many files, and the plan of the first, into a fresh file.

    Parameters
    ----------
    file : h5py.File
        The open file, an archive without runs.
    sources : Sources
        The files.
    owners : Owners
        Where each run is taken from.
    keep : collection of int or None
        Numbers of the runs whose records are kept; None for all.
    packed : bool
        Whether series are compressed.
    """
    texts = file.require_group(TEXTS)
    if PLAN in sources[0]:
        copy_record(sources[0], PLAN, file, PLAN, texts)
    _merge_tables(file, sources, owners)
    _merge_series(file, sources, owners, packed)
    for index in range(len(sources.paths)):
        records = list(sources[index]["runs"])
        numbers = np.array([int(name) for name in records], dtype=np.int64)
        for number in np.sort(numbers[owners.of(numbers, index)]).tolist():
            if keep is None or number in keep:
                name = run_group_name(number)
                copy_record(sources[index]["runs"], name, file["runs"], name, texts)
    if not len(texts):
        del file[TEXTS]


def _merge_tables(file: Any, sources: Sources, owners: Owners) -> None:
    if not owners.numbers.size:
        return
    used = [int(index) for index in np.unique(owners.source)]
    names = dict.fromkeys(name for index in used for name in column_names(sources[index]))
    group = file.create_group("table", track_order=True)
    wanted = list(names)
    count = max(1, _CELLS // owners.numbers.size)
    for start in range(0, len(wanted), count):
        block = wanted[start : start + count]
        tables = []
        for index in used:
            rows = owners.row[owners.source == index]
            table = load_table(sources[index], {*block, "id"})
            tables.append(
                {name: Column(column.values[rows], column.unit) for name, column in table.items()}
            )
        joined = join(tables)
        order = np.argsort(joined["id"].values)
        ordered = {name: Column(joined[name].values[order], joined[name].unit) for name in block}
        write_columns(group, ordered)


def _merge_series(file: Any, sources: Sources, owners: Owners, packed: bool) -> None:
    found: dict[tuple[str, int], list[tuple[int, Any]]] = {}
    for index in range(len(sources.paths)):
        for name, length, group in stack_groups(sources[index]):
            found.setdefault((name, length), []).append((index, group.name))
    for (name, length), places in sorted(found.items()):
        _merge_stack(file, sources, owners, (name, length), dict(places), packed)


def _merge_stack(
    file: Any,
    sources: Sources,
    owners: Owners,
    key: tuple[str, int],
    places: Mapping[int, str],
    packed: bool,
) -> None:
    pieces, grids, units, types = [], [], set(), set()
    for index, place in places.items():
        group = sources[index][place]
        numbers = group["id"][()]
        rows = np.flatnonzero(owners.of(numbers, index))
        pieces.append(np.stack([numbers[rows], np.full_like(rows, index), rows], axis=1))
        grids.append(load_grid(group)[rows])
        if rows.size:
            units.add(str(group["values"].attrs["units"]))
            types.add(group["values"].dtype)
    entries = np.concatenate(pieces)
    if not len(entries):
        return
    order = np.argsort(entries[:, 0])
    entries, grid = entries[order], np.concatenate(grids)[order]
    name, length = key
    group = stack_group(file, name, length)
    shape = (len(entries), length)
    chunk = min(len(entries), max(1, _CHUNK // length))
    packing = filters(shape, (chunk, length)) if packed else None
    kind = h5py.h5t.py_create(np.result_type(*types), logical=True)
    space = h5py.h5s.create_simple(shape)
    values = h5py.Dataset(h5py.h5d.create(group.id, b"values", kind, space, packing))
    values.attrs["units"] = units.pop() if len(units) == 1 else "mixed"
    write_scales(group, values.id, entries[:, 0].copy(), grid)
    # Whole chunks, so that none is packed twice.
    height = max(1, _SAMPLES // (length * chunk)) * chunk
    for start in range(0, len(entries), height):
        block = entries[start : start + height]
        samples = np.empty((len(block), length), values.dtype)
        for index in np.unique(block[:, 1]).tolist():
            here = np.flatnonzero(block[:, 1] == index)
            samples[here] = load_rows(sources[index][places[index]], block[here, 2])
        values[start : start + len(block)] = samples


@contextlib.contextmanager
def sources_of(paths: Sequence[Path]) -> Iterator[Sources]:
    """Open files for merging.

    Parameters
    ----------
    paths : sequence of Path
        The files.

    Yields
    ------
    Sources
        The files, closed afterwards.
    """
    sources = Sources(paths)
    try:
        yield sources
    finally:
        sources.close()


def run_program(order: Mapping[str, Any]) -> int:
    """Do what the program was asked for.

    Parameters
    ----------
    order : mapping
        What stood on its standard input.

    Returns
    -------
    int
        How many of the runs came from other archives than the first.
    """
    paths = [Path(name) for archive in order["archives"] for name in archive]
    archives = [index for index, archive in enumerate(order["archives"]) for _ in archive]
    keep = None if order["keep"] is None else frozenset(order["keep"])
    with sources_of(paths) as sources:
        owners = find_owners(sources, archives)
        with h5py.File(order["target"], "x", libver=LIBRARY_BOUNDS, locking=False) as file:
            write_root(file)
            _check_parent(order["parent"])
            merge_files(file, sources, owners, keep, order["packed"])
    _check_parent(order["parent"])
    handle = os.open(order["target"], os.O_RDONLY)
    os.fsync(handle)
    os.close(handle)
    return foreign_runs(owners, order["archives"])


def _check_parent(parent: int) -> None:
    """End when nobody waits for the file any more."""
    if os.getppid() != parent:
        raise SystemExit("the process that asked for the merge has ended")


if __name__ == "__main__":
    print(run_program(json.load(sys.stdin)))
