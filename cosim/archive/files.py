"""Archive files as a whole: found, opened, locked, and published by a rename.

HDF5 makes no promise for a file whose writer was killed, and a full disk can crash its library.
So no HDF5 file is ever changed in place: a new one is made in memory and put in the place of the
old one by a rename, which either happens or does not.
"""

import contextlib
import errno
import fcntl
import glob
import io
import os
import stat
import time
import uuid
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, TypeVar

import h5py

from cosim.archive.layout import LIBRARY_BOUNDS, check_root, write_root
from cosim.errors import ArchiveError, CosimError, near_names

_LOCK_TIMEOUT = 60.0
_SNAPSHOT_TRIES = 50
_NO_SPACE = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG)
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


def new_part_path(path: Path) -> Path:
    """Give a name for a part that was never used before and sorts behind the others.

    Parameters
    ----------
    path : path
        NAME.h5.

    Returns
    -------
    Path
        A file in the folder of the parts.
    """
    # A name that came back would hide the loss of the first part of that name from a reader.
    name = f"{time.time_ns():020d}-{uuid.uuid4().hex[:8]}.h5"
    return parts_folder(path) / name


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
                raise _missing(path) from None
    raise ArchiveError(
        f"{path}: the parts of the archive change faster than they can be read",
        hint="wait until its writer has finished, and try again",
    )


def _missing(path: Path) -> ArchiveError:
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
    try:
        mode = os.stat(path).st_mode
        if stat.S_ISREG(mode):
            # The files never change, so HDF5's locks, which some file systems lack, are not needed.
            file = h5py.File(path, "r", locking=False)
        else:
            what = "a folder" if stat.S_ISDIR(mode) else "not a regular file"
            raise ArchiveError(f"{path}: wanted an archive, this is {what}", hint="give a .h5 file")
    except (FileNotFoundError, CosimError):
        raise
    except OSError as error:
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


@contextlib.contextmanager
def edited(image: io.BytesIO, path: Path) -> Iterator[Any]:
    """Open a file in memory for writing; an empty one becomes an archive without runs.

    Parameters
    ----------
    image : io.BytesIO
        Content of the file.
    path : Path
        The name that stands in messages.

    Yields
    ------
    h5py.File
        The open file.

    Raises
    ------
    ArchiveError
        If HDF5 refuses.
    """
    new = not image.getbuffer().nbytes
    try:
        with h5py.File(image, "w" if new else "r+", libver=LIBRARY_BOUNDS) as file:
            if new:
                write_root(file)
            yield file
    except CosimError:
        raise
    except (OSError, RuntimeError, LookupError, ValueError) as error:
        raise ArchiveError(
            f"{path}: not written, HDF5 refused: {error}",
            hint="write to a new file; if that fails too, a value has no place in an archive",
        ) from error


@contextlib.contextmanager
def locked(path: Path) -> Iterator[None]:
    """Keep other writers of an archive out, and clear away what killed ones have left.

    Parameters
    ----------
    path : path
        NAME.h5.

    Yields
    ------
    None
        While the lock is held.

    Raises
    ------
    ArchiveError
        If another writer holds the lock for a minute, or the folder does not allow one.
    """
    side = path.with_name(f".{path.name}.lock")
    try:
        handle = _take_lock(side)
    except OSError as error:
        raise unwritable(path, error) from error
    try:
        for folder in (path.parent, parts_folder(path)):
            for item in folder.glob(f".{glob.escape(path.name)}.*.tmp"):
                with contextlib.suppress(OSError):
                    item.unlink()
        yield
    finally:
        # Removed while it is still held: whoever waits for it sees that its file is gone.
        with contextlib.suppress(OSError):
            os.unlink(side)
        with contextlib.suppress(OSError):
            os.close(handle)


def _take_lock(side: Path) -> int:
    deadline = time.monotonic() + _LOCK_TIMEOUT
    while time.monotonic() < deadline:
        handle = os.open(side, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o666)
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            if os.fstat(handle).st_nlink:
                return handle
        except BlockingIOError:
            time.sleep(0.01)
        except OSError:
            os.close(handle)
            raise
        os.close(handle)
    raise ArchiveError(
        f"{side}: another process has been writing this archive for {_LOCK_TIMEOUT:.0f} s",
        hint="wait for it to finish, or write to another file",
    )


def publish(path: Path, image: io.BytesIO, archive: Path) -> None:
    """Put a finished file in its place: temporary name, fsync, rename, fsync of the folder.

    Parameters
    ----------
    path : Path
        Where the file appears.
    image : io.BytesIO
        Its content.
    archive : Path
        NAME.h5 that it belongs to, whose lock is held.

    Raises
    ------
    ArchiveError
        If it cannot be written; what stood at `path` is untouched.
    """
    temporary = path.with_name(f".{archive.name}.{uuid.uuid4().hex[:8]}.tmp")
    try:
        try:
            with image.getbuffer() as content:
                _write_file(temporary, content, path)
            os.replace(temporary, path)
        except BaseException:
            with contextlib.suppress(OSError):
                os.unlink(temporary)
            raise
        _sync_folder(path.parent)
    except OSError as error:
        raise unwritable(path, error) from error


def _write_file(temporary: Path, content: memoryview, path: Path) -> None:
    handle = os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o666)
    try:
        with contextlib.suppress(FileNotFoundError):
            os.fchmod(handle, stat.S_IMODE(os.stat(path).st_mode))
        written = 0
        while written < len(content):
            written += os.write(handle, content[written:])
        os.fsync(handle)
    finally:
        os.close(handle)


def _sync_folder(folder: Path) -> None:
    handle = os.open(folder, os.O_RDONLY | os.O_CLOEXEC)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def unwritable(path: Path, error: OSError) -> ArchiveError:
    """Give the error that says why a file cannot be written, and what to do.

    Parameters
    ----------
    path : Path
        The file.
    error : OSError
        What the system said.

    Returns
    -------
    ArchiveError
        The error to raise.
    """
    if isinstance(error, ArchiveError):
        return error
    if error.errno in _NO_SPACE:
        return ArchiveError(
            f"{path}: not written, no space is left on the disk or in the quota",
            hint="free some space, or write to another folder; the archive is as it was",
        )
    if error.errno in (errno.EACCES, errno.EPERM, errno.EROFS):
        return ArchiveError(
            f"{path}: not written, no permission to write in {path.parent}",
            hint="choose another folder",
        )
    if error.errno == errno.ENOENT:
        return ArchiveError(
            f"{path}: not written, the folder {path.parent} does not exist", hint="make it first"
        )
    if error.errno == errno.ENOLCK:
        return ArchiveError(
            f"{path}: not written, the file system cannot lock files",
            hint="write to a local folder and move the archive afterwards",
        )
    reason = os.strerror(error.errno) if error.errno else str(error)
    return ArchiveError(f"{path}: not written: {reason}", hint="choose another file name")
