"""Write, append, read and list: what the rooms above use for archives of single runs."""

import io
import os
from collections.abc import Collection, Iterable, Mapping, Sequence
from contextlib import suppress
from pathlib import Path
from typing import Any

import numpy.typing as npt

from cosim.archive.checksums import CHECKSUM
from cosim.archive.decoding import read_object
from cosim.archive.encoding import is_instance, write_object
from cosim.archive.files import list_parts, new_part_path, opened, parts_folder, snapshot
from cosim.archive.layout import DONE, PLAN, NumberedRun, RunInfo, notes_of, run_group_name
from cosim.archive.publishing import edited, locked, publish, unwritable
from cosim.archive.table import (
    Column,
    column_names,
    load_ids,
    load_table,
    row_of,
    stack,
    write_table,
)
from cosim.errors import ArchiveError, near_names


def write(path: str | os.PathLike[str], run: object, *, info: RunInfo = DONE) -> None:
    """Write a new archive with one run, number 1, in place of an older archive of that name.

    Parameters
    ----------
    path : path
        NAME.h5.
    run : object
        An instance of a dataclass.
    info : RunInfo
        Status, start time and wall time for the table.

    Raises
    ------
    ArchiveError
        If a value has no place in an archive, the file cannot be written, or `path` is something
        else than an archive or one with parts. What was there is then untouched.
    """
    target = resolved(path)
    with locked(target):
        if list_parts(target):
            raise ArchiveError(
                f"{target}: the archive has parts in {parts_folder(target)}, which would be mixed "
                "with the new one",
                hint="choose another name, or move the old archive with its parts away",
            )
        with suppress(FileNotFoundError), opened(target) as file:
            if PLAN in file:
                raise ArchiveError(
                    f"{target}: the archive holds a sweep, which one run would replace",
                    hint="choose another name, or move the sweep away",
                )
        _publish_runs(target, [NumberedRun(1, run, info)], target)


def append(path: str | os.PathLike[str], run: object, *, info: RunInfo = DONE) -> int:
    """Add a run to an archive, which is made if it does not exist.

    The file is made anew in memory, so this is for archives of up to some hundred megabytes;
    sweeps publish parts.

    Parameters
    ----------
    path : path
        NAME.h5.
    run, info
        As in `write`.

    Returns
    -------
    int
        The number that the run got, one above the highest.

    Raises
    ------
    ArchiveError
        If `path` is something else than an archive or cannot be read or written, or a value has
        no place in an archive. What was there is then untouched.
    """
    target = resolved(path)
    with locked(target):
        if not target.exists() and not list_parts(target):
            _publish_runs(target, [NumberedRun(1, run, info)], target)
            return 1
        entry = NumberedRun(max(run_numbers(target), default=0) + 1, run, info)
        with opened(target) as file:
            table = load_table(file)
        image = io.BytesIO(target.read_bytes())
        with edited(image, target) as file:
            _write_runs(file, [entry])
            write_table(file, stack([table, row_of(entry)]))
        publish(target, image, target)
    return entry.number


def write_part(path: str | os.PathLike[str], runs: Sequence[NumberedRun]) -> Path:
    """Publish runs of an existing archive as an immutable file beside it.

    When this returns, the runs are on the disk and every reader sees them. A run whose number
    exists already takes the place of the older one.

    Parameters
    ----------
    path : path
        NAME.h5, which must exist.
    runs : sequence of NumberedRun
        The runs, at least one.

    Returns
    -------
    Path
        The part.

    Raises
    ------
    ArchiveError
        If there is no such archive, or as in `append`; nothing is then published.
    """
    if not runs:
        raise ArchiveError("a part needs at least one run, got none", hint="publish when there is")
    target = resolved(path)
    with locked(target):
        run_numbers(target)
        part = new_part_path(target, list_parts(target))
        try:
            part.parent.mkdir(exist_ok=True)
        except OSError as error:
            raise unwritable(part, error) from error
        _publish_runs(part, runs, target)
    return part


def read(path: str | os.PathLike[str], types: Mapping[str, type], run: int | None = None) -> Any:
    """Read one run.

    Parameters
    ----------
    path : path
        NAME.h5; its parts are found beside it.
    types : mapping of str to type
        The classes by their names. A class that is not in it comes as a dict of its fields, with
        its name under "kind".
    run : int or None
        Run number; None for the highest.

    Returns
    -------
    object
        The instance that was written. Numpy scalars come back as Python's own.

    Raises
    ------
    ArchiveError
        If there is no such archive or run, or it cannot be read.
    """
    target = Path(path)
    return snapshot(target, lambda files: _read_run(files, types, run))


def _read_run(files: Sequence[Path], types: Mapping[str, type], run: int | None) -> Any:
    owners = owners_of(files)
    if not owners:
        raise ArchiveError(f"{files[0]}: the archive holds no runs yet", hint="run it first")
    number = max(owners) if run is None else run
    if number not in owners:
        raise ArchiveError(
            f"{files[0]}: there is no run {number}", hint=f"runs: {_ranges(sorted(owners))}"
        )
    with opened(owners[number]) as file:
        name = run_group_name(number)
        if name not in set(file["runs"]) and number in rows_only(file):
            raise ArchiveError(
                f"{files[0]}: of run {number} only its row in the table is kept, not the whole run",
                hint=f"`qcosim rerun {files[0]} {number} --archive OTHER.h5` makes it again, whole",
            )
        return read_object(file["runs"][name], types)


def rows_only(file: Any) -> set[int]:
    """Find the runs of an open file of which only the row in the table was kept.

    Parameters
    ----------
    file : h5py.File
        The open file.

    Returns
    -------
    set of int
        Their numbers. A run without a checksum, which was written whole, is never among them.
    """
    table = load_table(file, ("id", CHECKSUM), units=False)
    if CHECKSUM not in table:
        return set()
    pairs = zip(table["id"].values.tolist(), table[CHECKSUM].values.tolist(), strict=True)
    return {number for number, checksum in pairs if checksum}.difference(map(int, file["runs"]))


def owners_of(files: Iterable[Path]) -> dict[int, Path]:
    """Find the file that holds each run; of several, the one that was published last.

    Parameters
    ----------
    files : iterable of Path
        NAME.h5 and its parts, in the order of their publication.

    Returns
    -------
    dict of int to Path
        File by run number.
    """
    owners: dict[int, Path] = {}
    for path in files:
        with opened(path) as file:
            owners |= dict.fromkeys(load_ids(file), path)
    return owners


def _ranges(numbers: Sequence[int]) -> str:
    """Give sorted numbers as text, "1 to 3, 5"."""
    runs: list[list[int]] = []
    for number in numbers:
        if runs and number == runs[-1][-1] + 1:
            runs[-1][1:] = [number]
        else:
            runs.append([number])
    shown = [" to ".join(str(number) for number in run) for run in runs]
    return ", ".join(shown[:12]) + (f" and {len(shown) - 12} more ranges" if shown[12:] else "")


def read_table(
    path: str | os.PathLike[str], columns: Collection[str] | None = None
) -> dict[str, npt.NDArray[Any]]:
    """Read the table of all runs, without reading any run.

    Parameters
    ----------
    path : path
        NAME.h5; its parts are found beside it.
    columns : collection of str or None
        Names of the columns to read; None for all.

    Returns
    -------
    dict of str to ndarray, each of shape (runs,)
        The columns, sorted by "id", which is always among them: bool, int64, float64 (NaN where a
        run has no such value) or str objects. First "id", "kind", "status", "start_time" and
        "wall_time" (s), in a sweep "checksum", then the scalar fields of the runs,
        "free_frame.average_gate_fidelity". Empty without runs.

    Raises
    ------
    ArchiveError
        If there is no such archive or column, or it cannot be read.
    """
    table = _read_columns(Path(path), columns, units=False)
    return {name: column.values for name, column in table.items()}


def read_units(path: str | os.PathLike[str]) -> dict[str, str]:
    """Read the units of the table's columns.

    Parameters
    ----------
    path : path
        NAME.h5; its parts are found beside it.

    Returns
    -------
    dict of str to str
        Unit by column; "" for text and bool, "mixed" where the runs differ.

    Raises
    ------
    ArchiveError
        If there is no such archive, or it cannot be read.
    """
    return {
        name: column.unit for name, column in _read_columns(Path(path), None, units=True).items()
    }


def _read_columns(path: Path, columns: Collection[str] | None, units: bool) -> dict[str, Column]:
    names: dict[str, None] = {}

    def load(files: Iterable[Path]) -> dict[str, Column]:
        tables = []
        for item in files:
            with opened(item) as file:
                names.update(dict.fromkeys(column_names(file)))
                chosen = None if columns is None else {*columns, "id"}
                tables.append(load_table(file, chosen, units=units))
        return stack(tables)

    table = snapshot(path, load)
    for name in columns or () if names else ():
        if name not in names:
            raise ArchiveError(
                f"{path}: the table has no column '{name}'", hint=near_names(name, list(names))
            )
    return table


def run_numbers(path: str | os.PathLike[str]) -> tuple[int, ...]:
    """List the numbers of the runs in an archive.

    Parameters
    ----------
    path : path
        NAME.h5; its parts are found beside it.

    Returns
    -------
    tuple of int
        Rising.

    Raises
    ------
    ArchiveError
        If there is no such archive, or it cannot be read.
    """

    return tuple(sorted(snapshot(Path(path), owners_of)))


def record_numbers(path: str | os.PathLike[str]) -> tuple[int, ...]:
    """List the numbers of the runs that are kept whole, and not as a row of the table only.

    Parameters
    ----------
    path : path
        NAME.h5; its parts are found beside it.

    Returns
    -------
    tuple of int
        Rising.

    Raises
    ------
    ArchiveError
        If there is no such archive, or it cannot be read.
    """

    def load(files: Iterable[Path]) -> set[int]:
        whole: set[int] = set()
        for item in files:
            with opened(item) as file:
                # What a later file says of a run takes the place of all that was known of it.
                whole = whole.difference(load_ids(file)) | {int(name) for name in file["runs"]}
        return whole

    return tuple(sorted(snapshot(Path(path), load)))


def resolved(path: str | os.PathLike[str]) -> Path:
    """Follow links, so that a rename replaces the file and not the link to it.

    Parameters
    ----------
    path : path
        NAME.h5.

    Returns
    -------
    Path
        The file itself, which need not exist.
    """
    return Path(os.path.realpath(path))


def _publish_runs(path: Path, runs: Sequence[NumberedRun], archive: Path) -> None:
    image = io.BytesIO()
    with edited(image, path) as file:
        _write_runs(file, runs)
        write_table(file, stack([row_of(entry) for entry in runs]))
    publish(path, image, archive)


def _write_runs(file: Any, runs: Sequence[NumberedRun]) -> None:
    for entry in runs:
        if not is_instance(entry.run):
            raise ArchiveError(
                f"a run must be an instance of a dataclass, got {type(entry.run).__name__}",
                hint="wrap the values in a frozen dataclass with declared fields",
            )
        group = file["runs"].create_group(run_group_name(entry.number), track_order=True)
        write_object(group, entry.run, notes_of(entry.info))
