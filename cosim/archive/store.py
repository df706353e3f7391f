"""Write, append, read, list and merge: what the rooms above use."""

import io
import os
from collections.abc import Iterable, Mapping, Sequence
from contextlib import suppress
from pathlib import Path
from typing import Any

import h5py
import numpy.typing as npt

from cosim.archive.decoding import read_object
from cosim.archive.encoding import is_instance, write_object
from cosim.archive.files import (
    edited,
    list_parts,
    locked,
    new_part_path,
    opened,
    parts_folder,
    publish,
    snapshot,
    unwritable,
)
from cosim.archive.layout import DONE, NumberedRun, RunInfo, members, run_group_name
from cosim.archive.table import Column, load_ids, load_table, row_of, stack, write_table
from cosim.errors import ArchiveError


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
    target = _resolved(path)
    with locked(target):
        if list_parts(target):
            raise ArchiveError(
                f"{target}: the archive has parts in {parts_folder(target)}, which would be mixed "
                "with the new one",
                hint="choose another name, or move the old archive with its parts away",
            )
        with suppress(FileNotFoundError), opened(target):
            pass
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
    target = _resolved(path)
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
    target = _resolved(path)
    with locked(target):
        run_numbers(target)
        part = new_part_path(target)
        try:
            part.parent.mkdir(exist_ok=True)
        except OSError as error:
            raise unwritable(part, error) from error
        _publish_runs(part, runs, target)
    return part


def consolidate(path: str | os.PathLike[str]) -> int:
    """Merge the parts of an archive into NAME.h5 and remove them.

    Works in memory, which must hold the whole archive twice.

    Parameters
    ----------
    path : path
        NAME.h5.

    Returns
    -------
    int
        How many parts were merged.

    Raises
    ------
    ArchiveError
        If a file cannot be read or written. Whatever happens, no run is lost: the parts stay
        until NAME.h5 holds them.
    """
    target = _resolved(path)
    with locked(target):
        run_numbers(target)
        parts = list_parts(target)
        if parts:
            image = io.BytesIO(target.read_bytes())
            with edited(image, target) as file:
                for part in parts:
                    with opened(part) as source:
                        _copy_runs(source, file)
                write_table(file, _load_tables((target, *parts)))
            publish(target, image, target)
        try:
            for part in parts:
                os.unlink(part)
        except OSError as error:
            raise unwritable(parts_folder(target), error) from error
        with suppress(OSError):
            os.rmdir(parts_folder(target))
    return len(parts)


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
    owners = _owners(files)
    if not owners:
        raise ArchiveError(f"{files[0]}: the archive holds no runs yet", hint="run it first")
    number = max(owners) if run is None else run
    if number not in owners:
        raise ArchiveError(
            f"{files[0]}: there is no run {number}", hint=f"runs: {_ranges(sorted(owners))}"
        )
    with opened(owners[number]) as file:
        return read_object(file["runs"][run_group_name(number)], types)


def _owners(files: Iterable[Path]) -> dict[int, Path]:
    """Find the file that holds each run; of several, the one that was published last."""
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


def read_table(path: str | os.PathLike[str]) -> dict[str, npt.NDArray[Any]]:
    """Read the table of all runs, without reading any run.

    Parameters
    ----------
    path : path
        NAME.h5; its parts are found beside it.

    Returns
    -------
    dict of str to ndarray, each of shape (runs,)
        The columns, sorted by "id": bool, int64, float64 (NaN where a run has no such value) or
        str objects. First "id", "kind", "status", "start_time" and "wall_time" (s), then the
        scalar fields of the runs, "free_frame.average_gate_fidelity". Empty without runs.

    Raises
    ------
    ArchiveError
        If there is no such archive, or it cannot be read.
    """
    return {name: column.values for name, column in snapshot(Path(path), _load_tables).items()}


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
    return {name: column.unit for name, column in snapshot(Path(path), _load_tables).items()}


def _load_tables(files: Iterable[Path]) -> dict[str, Column]:
    tables = []
    for path in files:
        with opened(path) as file:
            tables.append(load_table(file))
    return stack(tables)


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

    return tuple(sorted(snapshot(Path(path), _owners)))


def _resolved(path: str | os.PathLike[str]) -> Path:
    """Follow links, so that a rename replaces the file and not the link to it."""
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
        write_object(group, entry.run)
        group.attrs["status"] = entry.info.status
        group.attrs["start_time"] = entry.info.start_time
        group.attrs["wall_time"] = entry.info.wall_time


def _copy_runs(source: Any, file: Any) -> None:
    """Copy the runs of a part into another file, in place of those of the same numbers there."""
    for name, group in members(source["runs"]):
        if name in file["runs"]:
            del file["runs"][name]
        source.copy(group, file["runs"], name=name)
        _attach_copied_scales(file["runs"][name])


def _attach_copied_scales(copied: Any) -> None:
    """Give the arrays of a copied group their scales again.

    HDF5 copies the references between arrays and scales as they are, addresses in the old file,
    with or without its option to expand references. The labels of the dimensions name the scales.
    """
    arrays = []
    for _, member in members(copied):
        if isinstance(member, h5py.Group):
            _attach_copied_scales(member)
        elif member.ndim:
            arrays.append(member)
            for attribute in ("DIMENSION_LIST", "REFERENCE_LIST"):
                if attribute in member.attrs:
                    del member.attrs[attribute]
    for array in arrays:
        if not h5py.h5ds.is_scale(array.id):
            for dimension in array.dims:
                dimension.attach_scale(copied[dimension.label])
