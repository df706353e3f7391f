"""The archive of a sweep: its plan first, then rows in immutable parts beside it."""

import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from cosim.archive.checksums import CHECKSUM, contents_digest
from cosim.archive.consolidation import compact_parts
from cosim.archive.decoding import read_object
from cosim.archive.encoding import is_instance, write_object
from cosim.archive.files import is_merged, list_parts, missing, new_part_path, opened, snapshot
from cosim.archive.layout import PLAN, TEXTS
from cosim.archive.publishing import image_of, locked, publish, unwritable
from cosim.archive.rows import Row, write_all
from cosim.archive.series import Series, load_series
from cosim.archive.store import owners_of, resolved
from cosim.errors import ArchiveError

# A reader opens every part, at some milliseconds each.
_MANY_PARTS = 100


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
        place = write_object(group, plan)
        group.attrs[CHECKSUM] = contents_digest(sorted(place.contents.items()))
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
            compact_parts(target, (*parts, part))
    return part


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
