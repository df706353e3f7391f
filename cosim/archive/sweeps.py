"""The archive of a sweep: its plan first, then rows in immutable parts beside it."""

import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from cosim.archive.checksums import CHECKSUM, record_digest
from cosim.archive.decoding import read_object
from cosim.archive.encoding import is_instance, write_object
from cosim.archive.files import (
    is_merged,
    list_parts,
    merged_part_path,
    missing,
    new_part_path,
    opened,
    snapshot,
)
from cosim.archive.layout import PLAN, TEXTS
from cosim.archive.merging import find_owners, merge_files, sources_of
from cosim.archive.publishing import image_of, locked, publish, remove_parts, unwritable
from cosim.archive.rows import Row, write_all
from cosim.archive.series import Series, load_series
from cosim.archive.store import owners_of, resolved
from cosim.errors import ArchiveError

# A reader opens every part, at about a millisecond each.
_MANY_PARTS = 200
_SMALL_PART = 8 * 2**20  # bytes of a part that is merged into another one
_MERGED_PART = 32 * 2**20  # bytes of the parts that are merged into one, in memory


def create(path: str | os.PathLike[str], plan: object) -> None:
    """Write a new archive that holds a plan and no runs yet.

    Parameters
    ----------
    path : path
        NAME.h5, which must not exist, nor its parts.
    plan : object
        An instance of a dataclass.

    Raises
    ------
    ArchiveError
        If there is an archive or a part of one already, the plan is no dataclass or has a value
        that has no place in an archive, or the file cannot be written.
    """
    target = resolved(path)
    if not is_instance(plan):
        raise ArchiveError(
            f"a plan must be an instance of a dataclass, got {type(plan).__name__}",
            hint="wrap the values in a frozen dataclass with declared fields",
        )

    def write(file: Any) -> None:
        file.create_group(TEXTS)
        group = file.create_group(PLAN, track_order=True)
        write_object(group, plan)
        group.attrs[CHECKSUM] = record_digest(group)
        if not len(file[TEXTS]):
            del file[TEXTS]

    image = image_of(target, write)
    with locked(target, needed=False):
        for item in (target, *list_parts(target)):
            if item.exists():
                raise ArchiveError(
                    f"{target}: not written, {item} exists already",
                    hint="resume that sweep, choose another name, or move the archive away",
                )
        publish(target, image, target)


def read_plan(path: str | os.PathLike[str], types: Mapping[str, type]) -> Any:
    """Read the plan of a sweep.

    Parameters
    ----------
    path : path
        NAME.h5.
    types : mapping of str to type
        The classes by their names, as in `read`.

    Returns
    -------
    object or None
        The plan; None for an archive without one.

    Raises
    ------
    ArchiveError
        If there is no such archive, or it cannot be read.
    """

    def load(files: Sequence[Path]) -> Any:
        with opened(files[0]) as file:
            return read_object(file[PLAN], types) if PLAN in file else None

    return snapshot(Path(path), load)


def write_rows(path: str | os.PathLike[str], rows: Sequence[Row]) -> Path:
    """Publish rows of a sweep as an immutable file beside its archive.

    When this returns, the rows are on the disk and every reader sees them. A row whose number
    exists already takes the place of the older one, with its series and its record. When there
    are many small parts, they are then merged into larger ones.

    Parameters
    ----------
    path : path
        NAME.h5, which must exist.
    rows : sequence of Row
        The rows, at least one, each number once.

    Returns
    -------
    Path
        The part, which a merge may have replaced by a larger one since.

    Raises
    ------
    ArchiveError
        If there is no such archive, a value has no place in an archive, or the part cannot be
        written; nothing is then published.
    """
    target = resolved(path)
    if not rows:
        raise ArchiveError("a part needs at least one row, got none", hint="publish when there is")
    if len({row.number for row in rows}) < len(rows):
        raise ArchiveError("a run number stands twice in one part", hint="give each run once")
    if not target.exists():
        raise missing(target)
    image = image_of(target, lambda file: write_all(file, rows))
    with locked(target, tidy=False, needed=False) as alone:
        parts = list_parts(target)
        part = new_part_path(target, parts)
        try:
            part.parent.mkdir(exist_ok=True)
        except OSError as error:
            raise unwritable(part, error) from error
        publish(part, image, target)
        if alone and sum(not is_merged(item) for item in parts) >= _MANY_PARTS:
            _compact(target, (*parts, part))
    return part


def compact(path: str | os.PathLike[str]) -> int:
    """Merge the small parts of an archive into larger ones, which are parts still.

    Parameters
    ----------
    path : path
        NAME.h5.

    Returns
    -------
    int
        By how many parts there are fewer.

    Raises
    ------
    ArchiveError
        If a part cannot be read or written; no run is lost.
    """
    target = resolved(path)
    if not target.exists():
        raise missing(target)
    with locked(target):
        return _compact(target, list_parts(target))


def _compact(target: Path, parts: Sequence[Path]) -> int:
    groups = _neighbours([(part, part.stat().st_size) for part in parts])
    for group in groups:
        merged = merged_part_path(group)

        def write(file: Any, group: Sequence[Path] = group) -> None:
            with sources_of(group) as sources:
                owners = find_owners(sources, [0] * len(group))
                merge_files(file, sources, owners, None, packed=False)

        publish(merged, image_of(merged, write), target)
        remove_parts(target, group)
    return sum(len(group) - 1 for group in groups)


def _neighbours(parts: Sequence[tuple[Path, int]]) -> list[list[Path]]:
    """Choose neighbours that become one part, from the newest on.

    A part that is merged already joins again only if those after it are not much smaller, so that
    a row is copied a few times in all and not once for each merge.
    """
    groups: list[list[Path]] = [[]]
    total = 0
    for part, size in reversed(parts):
        small = size <= (4 * total if is_merged(part) else _SMALL_PART)
        if not small or total + size > _MERGED_PART:
            groups.append([])
            total = 0
            small = not is_merged(part) and size <= _SMALL_PART
        if small:
            groups[-1].insert(0, part)
            total += size
    return [group for group in groups if len(group) > 1]


def read_series(path: str | os.PathLike[str], run: int) -> dict[str, Series]:
    """Read the series of one run.

    Parameters
    ----------
    path : path
        NAME.h5; its parts are found beside it.
    run : int
        Run number.

    Returns
    -------
    dict of str to Series
        By name; complex64 or float32, as they are kept. Empty for a run without series.

    Raises
    ------
    ArchiveError
        If there is no such archive or run, or it cannot be read.
    """

    def load(files: Sequence[Path]) -> dict[str, Series]:
        owner = owners_of(files).get(run)
        if owner is None:
            raise ArchiveError(
                f"{files[0]}: there is no run {run}", hint="`qcosim show` lists the runs"
            )
        with opened(owner) as file:
            return load_series(file, run)

    return snapshot(Path(path), load)


def archive_files(path: Path) -> tuple[Path, ...]:
    """List the files of an archive, NAME.h5 first.

    Parameters
    ----------
    path : Path
        NAME.h5, which must exist.

    Returns
    -------
    tuple of Path
        In the order of their publication.

    Raises
    ------
    ArchiveError
        If there is no such archive, or its folder of parts may not be read.
    """
    parts = list_parts(path)
    if not path.exists():
        raise missing(path)
    return (path, *parts)
