"""Archive files as a whole: named, listed, and opened while others may be writing."""

import contextlib
import errno
import os
import stat
import time
import uuid
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import Any, TypeVar

import h5py

from cosim.archive.layout import HDF5_LOCK, check_root
from cosim.errors import ArchiveError, CosimError, near_names

_SNAPSHOT_TRIES = 50
_MERGED = "m.h5"
_HDF5_ERRORS = (OSError, RuntimeError, LookupError, ValueError, TypeError)

T = TypeVar("T")


def parts_folder(path: Path) -> Path:
    """Give the folder that holds the parts of an archive.

    Parameters
    ----------
    path : path
        NAME.h5.

    Returns
    -------
    Path
        NAME.h5.parts, which need not exist.
    """
    return path.with_name(path.name + ".parts")


def list_parts(path: Path) -> tuple[Path, ...]:
    """List the parts of an archive.

    Parameters
    ----------
    path : path
        NAME.h5.

    Returns
    -------
    tuple of Path
        In the order in which they were published.

    Raises
    ------
    ArchiveError
        If their folder may not be read.
    """
    try:
        names = os.listdir(parts_folder(path))
    except (FileNotFoundError, NotADirectoryError):
        return ()
    except OSError as error:
        raise _unreadable(parts_folder(path), error) from error
    return tuple(
        parts_folder(path) / name
        for name in sorted(names)
        if name.endswith(".h5") and not name.startswith(".")
    )


def new_part_path(path: Path, parts: Sequence[Path] = ()) -> Path:
    """Give a name for a part that was never used before and sorts behind the others.

    Parameters
    ----------
    path : path
        NAME.h5.
    parts : sequence of Path
        The parts that are there, in their order.

    Returns
    -------
    Path
        A file in the folder of the parts.
    """
    # A name that came back would hide the loss of the first part of that name from a reader; and
    # the clock may have been set back since the last part.
    stamp = max([time.time_ns(), *(_stamp(part) + 1 for part in parts[-1:])])
    return parts_folder(path) / f"{stamp:020d}-{uuid.uuid4().hex[:8]}.h5"


def merged_part_path(parts: Sequence[Path]) -> Path:
    """Give a name for a part that takes the place of others.

    Parameters
    ----------
    parts : sequence of Path
        Neighbours in the order of publication, at least one.

    Returns
    -------
    Path
        A name that sorts behind the parts before the last of them, and before what follows it.
    """
    return parts[-1].with_name(f"{_stamp(parts[-1]):020d}-{uuid.uuid4().hex[:8]}{_MERGED}")


def is_merged(part: Path) -> bool:
    """Tell whether a part was made from others.

    Parameters
    ----------
    part : Path
        The part.

    Returns
    -------
    bool
        True if `merged_part_path` gave its name.
    """
    return part.name.endswith(_MERGED)


def _stamp(part: Path) -> int:
    digits = part.name.partition("-")[0]
    return int(digits) if digits.isdecimal() else 0


def snapshot(path: Path, action: Callable[[tuple[Path, ...]], T]) -> T:
    """Read an archive that others may be writing.

    The parts are listed before NAME.h5 is opened: a part that is merged in between is found in
    both, never in neither. When a listed part has vanished, everything starts again.

    Parameters
    ----------
    path : Path
        NAME.h5.
    action : callable
        Gets NAME.h5 and the parts in the order of their publication, and reads them.

    Returns
    -------
    object
        What `action` returned.

    Raises
    ------
    ArchiveError
        If there is no archive, or one of its files cannot be read.
    """
    for _ in range(_SNAPSHOT_TRIES):
        parts = list_parts(path)
        try:
            return action((path, *parts))
        except FileNotFoundError:
            if not path.exists():
                raise missing(path) from None
    raise ArchiveError(
        f"{path}: the parts of the archive change faster than they can be read",
        hint="wait until its writer has finished, and try again",
    )


def missing(path: Path) -> ArchiveError:
    """Give the error that says that there is no archive.

    Parameters
    ----------
    path : Path
        NAME.h5.

    Returns
    -------
    ArchiveError
        The error to raise.
    """
    if list_parts(path):
        return ArchiveError(
            f"{path}: there is no such file, though its parts are in {parts_folder(path)}",
            hint="move the .h5 file and its folder of parts together",
        )
    beside = [item.name for item in path.parent.glob("*.h5")] if path.parent.is_dir() else []
    return ArchiveError(
        f"{path}: there is no such archive",
        hint=f"in that folder, {near_names(path.name, beside)}",
    )


@contextlib.contextmanager
def opened(path: Path) -> Iterator[Any]:
    """Open a file of an archive for reading.

    Parameters
    ----------
    path : Path
        NAME.h5 or a part.

    Yields
    ------
    h5py.File
        The open file.

    Raises
    ------
    FileNotFoundError
        If it is not there.
    ArchiveError
        If it cannot be opened, is no archive, is of a newer schema, or turns out to be damaged.
    """
    with HDF5_LOCK:
        try:
            mode = os.stat(path).st_mode
            if stat.S_ISREG(mode):
                # The files never change, so that HDF5's locks, which some file systems lack, are
                # not needed.
                file = h5py.File(path, "r", locking=False)
            else:
                what = "a folder" if stat.S_ISDIR(mode) else "not a regular file"
                raise ArchiveError(
                    f"{path}: wanted an archive, this is {what}", hint="give a .h5 file"
                )
        except (FileNotFoundError, CosimError):
            raise
        except OSError as error:
            if error.errno == errno.ESTALE:
                # A file that another machine has removed, of which NFS still has the name.
                raise FileNotFoundError(
                    errno.ENOENT, os.strerror(errno.ENOENT), str(path)
                ) from error
            raise _unreadable(path, error) from error
        with file:
            try:
                check_root(file, str(path))
                yield file
            except CosimError:
                raise
            except _HDF5_ERRORS as error:
                raise ArchiveError(
                    f"{path}: the archive is damaged: {error}",
                    hint="take it from a backup, or run the simulation again",
                ) from error


def _unreadable(path: Path, error: OSError) -> ArchiveError:
    if error.errno in (errno.EACCES, errno.EPERM):
        return ArchiveError(
            f"{path}: no permission to read it", hint="ask the owner of the file, or use a copy"
        )
    if error.errno is not None and error.errno != 0:
        return ArchiveError(f"{path}: {os.strerror(error.errno)}", hint="check the path")
    if os.path.getsize(path) == 0:
        return ArchiveError(f"{path}: the file is empty", hint="give a file that was written whole")
    if not h5py.is_hdf5(path):
        return ArchiveError(
            f"{path}: not an HDF5 file", hint="give an archive, NAME.h5, that `qcosim run` wrote"
        )
    what = "truncated" if "truncated" in str(error) else "damaged"
    return ArchiveError(
        f"{path}: the HDF5 file is {what} ({error})",
        hint="copy it again from where it came, or run the simulation again",
    )


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
