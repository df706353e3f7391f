"""Every checksum of an archive computed again."""

import os
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from cosim.archive.checksums import CHECKSUM, record_digest, row_digests, series_digest
from cosim.archive.files import opened, snapshot
from cosim.archive.layout import PLAN, run_group_name
from cosim.archive.series import load_grid, stack_groups
from cosim.archive.store import rows_only
from cosim.archive.table import load_table
from cosim.errors import ArchiveError

_SAMPLES = 2**22  # 32 MiB of series are held at once


@dataclass(frozen=True, slots=True)
class Verification:
    """What a check of an archive has found.

    Parameters
    ----------
    rows : int
        Runs in the table.
    records : int
        Runs that are kept whole.
    damaged : tuple of str
        What is not as it was written, with its file; empty if all is well.
    """

    rows: int
    records: int
    damaged: tuple[str, ...]


def verify(path: str | os.PathLike[str]) -> Verification:
    """Open every file of an archive and compute every checksum again.

    Parameters
    ----------
    path : path
        NAME.h5; its parts are found beside it.

    Returns
    -------
    Verification
        What was found. Runs that were written without checksums are read, and nothing more.

    Raises
    ------
    ArchiveError
        If there is no such archive.
    """
    return snapshot(Path(path), _verify_files)


def _verify_files(files: Sequence[Path]) -> Verification:
    rows: set[int] = set()
    records: set[int] = set()
    damaged: list[str] = []
    for path in files:
        try:
            with opened(path) as file:
                numbers, whole, found = _verify_file(file)
        except ArchiveError as error:
            damaged.append(str(error.args[0]))
            continue
        # A later file holds what is true of a run, its record included.
        records = (records - numbers) | whole
        rows |= numbers
        damaged += [f"{path}: {what}" for what in found]
    return Verification(len(rows), len(records), tuple(damaged))


def _verify_file(file: Any) -> tuple[set[int], set[int], list[str]]:
    damaged = []
    table = load_table(file, raw=True)
    columns = {name: column.values for name, column in table.items()}
    numbers = columns["id"].tolist() if columns else []
    if CHECKSUM in columns:
        series = _series_of(file, numbers)
        for number, kept, found in zip(
            numbers, columns[CHECKSUM], row_digests(columns, series), strict=True
        ):
            if kept and kept != found:
                damaged.append(f"the row or a series of run {number}")
    whole = {int(name) for name in file["runs"]}
    for number in sorted(set(numbers).difference(whole, rows_only(file))):
        damaged.append(f"the record of run {number}, which is lost")
    for number in sorted(whole):
        if not _is_record_whole(file["runs"][run_group_name(number)]):
            damaged.append(f"the record of run {number}")
    if PLAN in file and not _is_record_whole(file[PLAN]):
        damaged.append("the plan")
    return set(numbers), whole, damaged


def _is_record_whole(group: Any) -> bool:
    found = record_digest(group)
    return str(group.attrs.get(CHECKSUM, found)) == found


def _series_of(file: Any, numbers: Sequence[int]) -> list[bytes]:
    digests: dict[int, bytes] = dict.fromkeys(numbers, b"")
    for name, length, group in sorted(stack_groups(file), key=lambda item: item[:2]):
        for number, digest in _stack_digests(name, length, group):
            digests[number] = digests.get(number, b"") + digest
    return [digests[number] for number in numbers]


def _stack_digests(name: str, length: int, group: Any) -> Iterator[tuple[int, bytes]]:
    numbers, grid = group["id"][()].tolist(), load_grid(group).tolist()
    values = group["values"]
    height = max(1, _SAMPLES // length)
    for start in range(0, len(numbers), height):
        block = np.asarray(values[start : start + height])
        for row, samples in enumerate(block, start):
            yield numbers[row], series_digest(name, tuple(grid[row]), samples)
