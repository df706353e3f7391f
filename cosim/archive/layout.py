"""Names and root attributes of an archive: what stands where in each file."""

import math
import re
import threading
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from math import nan
from typing import Any

import h5py

from cosim.errors import ArchiveError

FORMAT = "cosim archive"
SCHEMA_VERSION = 1

# Objects as HDF5 1.8 defined them: a dataset or scale may then have more than 64 kB of attributes
# (the back references of a table of 4,085 columns are more), and small groups take less space.
LIBRARY_BOUNDS = ("v108", "latest")

# Group of the long texts that the runs of a sweep share; files of single runs have none.
TEXTS = "texts"
# What a sweep was planned with.
PLAN = "plan"

TEXT = h5py.string_dtype()

# Elements of a chunk: half of HDF5's cache of chunks when they are complex. The 2,000 elements that
# h5py guesses for a waveform take a quarter more space and a fifth more time.
_CHUNK = 2**15

# HDF5 for one thread of this process at a time, from the opening of a file to its close: h5py's own
# lock is let go between two calls, and two threads that took turns there ended in a segmentation
# fault now and then (measured: one run in six of a reader beside a writer).
HDF5_LOCK = threading.RLock()
TEXT_TYPE = h5py.h5t.py_create(TEXT, logical=True)
TEXT_OBJECT = h5py.h5t.py_create(TEXT)


@dataclass(frozen=True, slots=True)
class RunInfo:
    """What is known of a run besides its result.

    Parameters
    ----------
    status : str
        "done", or why the run has no result.
    start_time : str
        ISO 8601 with the time zone; empty when unknown.
    wall_time : float
        Wall-clock time in s; NaN when unknown.
    """

    status: str = "done"
    start_time: str = ""
    wall_time: float = nan


DONE = RunInfo()


def notes_of(info: RunInfo) -> dict[str, str | float]:
    """Give the attributes of a run's group.

    Parameters
    ----------
    info : RunInfo
        What is known of the run besides its result.

    Returns
    -------
    dict
        By name.
    """
    return {"status": info.status, "start_time": info.start_time, "wall_time": info.wall_time}


@dataclass(frozen=True, slots=True)
class NumberedRun:
    """A run with its place in the archive.

    Parameters
    ----------
    number : int
        Run number, from 1.
    run : object
        The result, an instance of a dataclass.
    info : RunInfo
        What is known of it besides the result.

    Raises
    ------
    ArchiveError
        If the number is below 1.
    """

    number: int
    run: object
    info: RunInfo = DONE

    def __post_init__(self) -> None:
        if self.number < 1:
            raise ArchiveError(f"run numbers start at 1, got {self.number}")


def run_group_name(number: int) -> str:
    """Give the name of a run's group below /runs.

    Parameters
    ----------
    number : int
        Run number.

    Returns
    -------
    str
        Six digits, more when they do not suffice.
    """
    return f"{number:06d}"


# HDF5 takes "/" for a path and "." for the group itself, and cannot hold NUL or lone surrogates.
_UNSAFE = re.compile(r"[%/\x00\ud800-\udfff]|^\.$")
_ESCAPED = re.compile(r"%([0-9A-F]+);")


def member_name(key: str) -> str:
    """Give the HDF5 link name of a dictionary's key or a table's column.

    Parameters
    ----------
    key : str
        Any text.

    Returns
    -------
    str
        The key itself, with "%", "/" and what HDF5 cannot hold as "%" + hexadecimal code + ";".
    """
    return _UNSAFE.sub(lambda match: f"%{ord(match[0]):X};", key) or "%"


def member_key(name: str) -> str:
    """Give the key back from its HDF5 link name.

    Parameters
    ----------
    name : str
        A name that `member_name` gave.

    Returns
    -------
    str
        The key.
    """
    if name == "%":
        return ""
    return _ESCAPED.sub(lambda match: chr(int(match[1], 16)), name)


def members(group: Any) -> Iterator[tuple[str, Any]]:
    """Walk the members of a group; h5py's own walk gives None for one that is damaged.

    Parameters
    ----------
    group : h5py.Group
        The group.

    Yields
    ------
    tuple of str and h5py object
        Link name and member.
    """
    for name in group:
        yield name, group[name]


def filters(shape: Sequence[int], chunks: Sequence[int] = ()) -> Any:
    """Give the filters and the chunks of a numeric dataset.

    Parameters
    ----------
    shape : sequence of int
        Its shape.
    chunks : sequence of int
        Shape of its chunks; empty for those that suit arrays which are read as a whole.

    Returns
    -------
    h5py.h5p.PropDCID or None
        Properties to make the dataset with; None for a small one, which is not packed.
    """
    if math.prod(shape) <= 1000:
        return None
    # gzip-1 with shuffle gives 0.64 of the size of a waveform and gzip-4 no less than 0.63, at a
    # fraction of the speed; the checksum makes a damaged block an error and not a wrong number.
    properties = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
    properties.set_chunk(tuple(chunks) or _chunks(shape))
    properties.set_shuffle()
    properties.set_deflate(1)
    properties.set_fletcher32()
    return properties


def _chunks(shape: Sequence[int]) -> tuple[int, ...]:
    """Give the shape of a chunk, whole along the last dimensions as far as it goes."""
    chunks: list[int] = []
    room = _CHUNK
    for length in reversed(shape):
        chunks.append(max(1, min(length, room)))
        room //= chunks[-1]
    return tuple(reversed(chunks))


def write_root(file: Any) -> None:
    """Write the root attributes and the empty group of runs into a new file.

    Parameters
    ----------
    file : h5py.File
        The open file.
    """
    try:
        package_version = version("qcosim")
    except PackageNotFoundError:
        package_version = "unknown"
    file.attrs["format"] = FORMAT
    file.attrs["schema_version"] = SCHEMA_VERSION
    file.attrs["created"] = datetime.now(UTC).isoformat(timespec="seconds")
    file.attrs["package_version"] = package_version
    file.create_group("runs", track_order=True)


def check_root(file: Any, name: str) -> None:
    """Check that an open HDF5 file is an archive which this version can read.

    Parameters
    ----------
    file : h5py.File
        The open file.
    name : str
        Its name in messages.

    Raises
    ------
    ArchiveError
        If it is something else, or of a newer schema.
    """
    if file.attrs.get("format") != FORMAT:
        raise ArchiveError(
            f"{name}: an HDF5 file, but not a cosim archive",
            hint="give a file that `qcosim run` wrote",
        )
    schema = int(file.attrs["schema_version"])
    if schema > SCHEMA_VERSION:
        raise ArchiveError(
            f"{name}: the archive has schema version {schema}, this version reads up to "
            f"{SCHEMA_VERSION}",
            hint=f"install qcosim {file.attrs['package_version']}, which wrote it, or newer",
        )
