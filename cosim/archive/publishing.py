"""Archive files are published: locked, made in memory, and put in their place by a rename.

HDF5 makes no promise for a file whose writer was killed, and a full disk can crash its library.
So no HDF5 file is ever changed in place: a new one is made in memory, or in a process of its own,
and put in the place of the old one by a rename, which either happens or does not.
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
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import Any

import h5py

from cosim.archive.files import parts_folder
from cosim.archive.layout import HDF5_LOCK, LIBRARY_BOUNDS, write_root
from cosim.errors import ArchiveError, CosimError

# Bytes by which a file in memory grows; with the 64 kB of h5py it is copied often.
_BLOCK = 2**20
_LOCK_TIMEOUT = 60.0
_NO_SPACE = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG)
_NO_LOCKS = (errno.ENOLCK, errno.ENOSYS, errno.EOPNOTSUPP)


@contextlib.contextmanager
def refusals(path: Path) -> Iterator[None]:
    """Say which file it was when HDF5 refuses to write.

    Parameters
    ----------
    path : Path
        The name that stands in messages.

    Yields
    ------
    None
        While something is written.

    Raises
    ------
    ArchiveError
        If HDF5 refuses.
    """
    try:
        yield
    except CosimError:
        raise
    except (OSError, RuntimeError, LookupError, ValueError) as error:
        raise ArchiveError(
            f"{path}: not written, HDF5 refused: {error}",
            hint="write to a new file; if that fails too, a value has no place in an archive",
        ) from error


def image_of(path: Path, write: Callable[[Any], None]) -> bytes:
    """Make an archive file in memory.

    Parameters
    ----------
    path : Path
        The name that stands in messages.
    write : callable
        Gets the open file, an archive without runs, and fills it.

    Returns
    -------
    bytes
        Its content.

    Raises
    ------
    ArchiveError
        If HDF5 refuses.
    """
    with HDF5_LOCK, refusals(path):
        # The name is that of no file: HDF5 refuses one that this process has open.
        with h5py.File(
            uuid.uuid4().hex,
            "w",
            libver=LIBRARY_BOUNDS,
            driver="core",
            backing_store=False,
            block_size=_BLOCK,
        ) as file:
            write_root(file)
            write(file)
            file.flush()
            image: bytes = file.id.get_file_image()
            return image


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
    with HDF5_LOCK, refusals(path):
        with h5py.File(image, "w" if new else "r+", libver=LIBRARY_BOUNDS) as file:
            if new:
                write_root(file)
            yield file


@contextlib.contextmanager
def locked(path: Path, tidy: bool = True, needed: bool = True) -> Iterator[bool]:
    """Keep other writers of an archive out, and clear away what killed ones have left.

    Parameters
    ----------
    path : path
        NAME.h5.
    tidy : bool
        False leaves what others have left, which saves a listing of the folder.
    needed : bool
        False goes on without a lock where the file system has none.

    Yields
    ------
    bool
        True while the lock is held, False where there is none.

    Raises
    ------
    ArchiveError
        If another writer holds the lock for a minute, or the folder does not allow one.
    """
    side = path.with_name(f".{path.name}.lock")
    try:
        handle = _take_lock(side)
    except OSError as error:
        if error.errno not in _NO_LOCKS or needed:
            raise unwritable(path, error) from error
        yield False
        return
    try:
        for folder in (path.parent, parts_folder(path)) if tidy else ():
            for item in folder.glob(f".{glob.escape(path.name)}.*.tmp"):
                with contextlib.suppress(OSError):
                    item.unlink()
        yield True
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
            with contextlib.suppress(OSError):
                os.unlink(side)
            raise
        os.close(handle)
    raise ArchiveError(
        f"{side}: another process has been writing this archive for {_LOCK_TIMEOUT:.0f} s",
        hint="wait for it to finish, or write to another file",
    )


def temporary_path(path: Path, archive: Path) -> Path:
    """Give the name of a file that is about to appear.

    Parameters
    ----------
    path : Path
        Where it is to appear.
    archive : Path
        NAME.h5 that it belongs to.

    Returns
    -------
    Path
        In the same folder; the next writer of the archive clears such files away.
    """
    return path.with_name(f".{archive.name}.{uuid.uuid4().hex[:8]}.tmp")


def publish(path: Path, image: io.BytesIO | bytes, archive: Path) -> None:
    """Put a finished file in its place: temporary name, fsync, rename, fsync of the folder.

    Parameters
    ----------
    path : Path
        Where the file appears.
    image : io.BytesIO or bytes
        Its content.
    archive : Path
        NAME.h5 that it belongs to, whose lock is held.

    Raises
    ------
    ArchiveError
        If it cannot be written; what stood at `path` is untouched.
    """
    temporary = temporary_path(path, archive)
    try:
        try:
            buffer = memoryview(image) if isinstance(image, bytes) else image.getbuffer()
            with buffer as content:
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


def publish_file(temporary: Path, path: Path) -> None:
    """Put a finished file, which is on the disk already, in its place.

    Parameters
    ----------
    temporary : Path
        The file, in the same folder.
    path : Path
        Where it appears.

    Raises
    ------
    ArchiveError
        If it cannot be renamed; what stood at `path` is untouched.
    """
    try:
        with contextlib.suppress(FileNotFoundError):
            os.chmod(temporary, stat.S_IMODE(os.stat(path).st_mode))
        os.replace(temporary, path)
        _sync_folder(path.parent)
    except OSError as error:
        raise unwritable(path, error) from error


def remove_parts(path: Path, parts: Sequence[Path]) -> None:
    """Remove parts whose runs stand in another file by now, and their folder if it is empty.

    Parameters
    ----------
    path : Path
        NAME.h5.
    parts : sequence of Path
        The parts.

    Raises
    ------
    ArchiveError
        If they cannot be removed.
    """
    try:
        for part in parts:
            os.unlink(part)
    except OSError as error:
        raise unwritable(parts_folder(path), error) from error
    with contextlib.suppress(OSError):
        os.rmdir(parts_folder(path))


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
    if error.errno in _NO_LOCKS:
        return ArchiveError(
            f"{path}: not written, the file system cannot lock files",
            hint="write to a local folder and move the archive afterwards",
        )
    reason = os.strerror(error.errno) if error.errno else str(error)
    return ArchiveError(f"{path}: not written: {reason}", hint="choose another file name")
