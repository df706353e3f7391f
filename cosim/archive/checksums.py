"""Checksums that stay the same wherever a row, its series or its record is copied to.

The table of one file and that of another may hold the same cell in different types: a column of
integers becomes one of floats where other rows lack it, and one of texts where others have a text.
So a row's checksum is taken over what such a change leaves alone: the name and the number or text
of every cell that is there, in the order of the names, and then over its series.
"""

import hashlib
from collections.abc import Iterable, Iterator, Mapping, Sequence
from typing import Any

import h5py
import numpy as np
import numpy.typing as npt

from cosim.archive.datasets import Array
from cosim.archive.table import EXACT

_LARGE = 1000  # values of an array that is worth a call of its own
_SIZE = 16  # bytes: no two of a hundred thousand rows agree by chance
_SCALE_ATTRIBUTES = (
    b"CLASS",
    b"NAME",
    b"DIMENSION_LIST",
    b"REFERENCE_LIST",
    b"DIMENSION_LABELS",
    b"checksum",
)
# Columns that hold what only looks like a number: their texts are taken as they are.
_TEXTS = ("kind", "status", "start_time")

CHECKSUM = "checksum"


def row_digests(
    columns: Mapping[str, npt.NDArray[Any]], series: Sequence[bytes] | None = None
) -> list[str]:
    """Give the checksum of each row of a table.

    Parameters
    ----------
    columns : mapping of ndarray, each of shape (rows,)
        The columns as they are stored: bools (or their bytes), int64, float64 or str objects. A
        column "checksum" is left out.
    series : sequence of bytes, or None
        For each row what `series_digest` gave for its series, in the order of their names.

    Returns
    -------
    list of str
        32 hexadecimal digits for each row (BLAKE2b of 16 bytes). NaN, "" and a column that is not
        there count alike.
    """
    numbers: dict[str, npt.NDArray[np.float64]] = {}
    texts: dict[str, list[str]] = {}
    for name in sorted(columns):
        if name == CHECKSUM:
            continue
        found, words = _split(name, columns[name])
        if found is not None:
            numbers[name] = found
        if words is not None:
            texts[name] = words
    digests = []
    blobs = list(_number_blobs(numbers, columns["id"].size))
    named = [(name.encode("utf-8", "surrogatepass"), words) for name, words in texts.items()]
    for row, blob in enumerate(blobs):
        digest = hashlib.blake2b(blob, digest_size=_SIZE)
        digest.update(
            b"\0".join([name + b"\0" + words[row].encode() for name, words in named if words[row]])
        )
        if series is not None:
            digest.update(series[row])
        digests.append(digest.hexdigest())
    return digests


def _split(
    name: str, values: npt.NDArray[Any]
) -> tuple[npt.NDArray[np.float64] | None, list[str] | None]:
    """Part a column into its numbers (NaN elsewhere) and its texts ("" elsewhere)."""
    if values.dtype.kind != "O":
        found = values.astype(np.float64)
        large = values.dtype.kind == "i" and bool(np.any(np.abs(found) >= EXACT))
        if not large:
            return found, None
        values = values.astype(np.object_)
    items = values.tolist()
    if name in _TEXTS:
        return None, items
    parts = [_number(item) for item in items]
    if all(part is None for part in parts):
        return None, [str(item) for item in items]
    numbers = np.array([np.nan if part is None else part for part in parts])
    words = [str(item) if part is None else "" for item, part in zip(items, parts, strict=True)]
    return numbers, words if any(words) else None


def _number(item: str | int) -> float | None:
    """Give the number that a cell is, or was before it came among texts; else None."""
    if isinstance(item, int):
        value: float = float(item)
        return value if value == item and abs(item) < EXACT else None
    if item[:1] not in "-0123456789TFi" or not item:
        return None
    if item in ("True", "False"):
        return float(item == "True")
    try:
        value = float(item)
    except ValueError:
        return None
    if repr(value) == item:
        return value
    integer = item.removeprefix("-").isdecimal() and str(int(item)) == item
    return value if integer and abs(value) < EXACT else None


def _number_blobs(numbers: Mapping[str, npt.NDArray[np.float64]], rows: int) -> Iterator[bytes]:
    names = list(numbers)
    matrix = np.empty((rows, len(names)), dtype="<f8")
    for index, name in enumerate(names):
        matrix[:, index] = numbers[name]
    there = ~np.isnan(matrix)
    heads: dict[bytes, bytes] = {}
    for values, mask in zip(matrix, there, strict=True):
        key = mask.tobytes()
        if key not in heads:
            chosen = [name for name, has in zip(names, mask, strict=True) if has]
            heads[key] = "\0".join([*chosen, ""]).encode("utf-8", "surrogatepass")
        yield heads[key] + values[mask].tobytes()


def series_digest(name: str, grid: tuple[float, float, float], values: npt.NDArray[Any]) -> bytes:
    """Give the digest of one series of one run.

    Parameters
    ----------
    name : str
        Name of the series.
    grid : tuple of three floats
        Start (s), step (s) and carrier frequency (Hz).
    values : ndarray, shape (n,)
        float32 or complex64, as stored; a real value counts like a complex one.

    Returns
    -------
    bytes
        16 bytes.
    """
    digest = hashlib.blake2b(name.encode("utf-8", "surrogatepass"), digest_size=_SIZE)
    # All NaN are one: which of them stands in the file depends on the machine.
    plain = [float("nan") if value != value else value for value in grid]
    digest.update(np.array(plain, dtype="<f8").tobytes())
    digest.update(np.ascontiguousarray(values, dtype="<c8").tobytes())
    return digest.digest()


def record_digest(group: Any) -> str:
    """Give the checksum of all that is in a group: datasets, scales, units and kinds.

    Parameters
    ----------
    group : h5py.Group
        The group of a run or of the plan.

    Returns
    -------
    str
        64 hexadecimal digits (SHA-256). Attributes "checksum" do not count, nor do references
        between arrays and scales, which are addresses in a file.
    """
    items: dict[str, Any] = {}
    _collect(items, "", group.id)
    return contents_digest(
        (path, (_notes_of(item), None if _is_group(item) else _values_of(item)))
        for path, item in sorted(items.items())
    )


def contents_digest(
    contents: Iterable[tuple[str, tuple[Mapping[str, Array], Array | None]]],
) -> str:
    """Give the checksum of what was written into a group, without reading it again.

    Parameters
    ----------
    contents : iterable of tuples
        Path, and attributes and values, in the order of the paths; values are None for a group.

    Returns
    -------
    str
        As `record_digest` gives it.
    """
    digest = hashlib.sha256()
    small: list[bytes] = []
    for path, (notes, values) in contents:
        small.append(f"\0{path}\0".encode("utf-8", "surrogateescape"))
        for name in sorted(notes):
            small += (f"\0{name}\0".encode(), *_pieces(notes[name]))
        if values is not None and values.size > _LARGE and values.dtype.kind != "O":
            small.append(_head(values))
            digest.update(b"".join(small))
            digest.update(np.ascontiguousarray(values).reshape(-1).view(np.uint8).data)
            small.clear()
        elif values is not None:
            small += _pieces(values)
    digest.update(b"".join(small))
    return digest.hexdigest()


def _is_group(item: Any) -> bool:
    return isinstance(item, h5py.h5g.GroupID)


def _collect(items: dict[str, Any], path: str, item: Any) -> None:
    items[path] = item
    for name in item if _is_group(item) else ():
        child = f"{path}/{name.decode('utf-8', 'surrogateescape')}"
        _collect(items, child, h5py.h5o.open(item, name))


def _notes_of(item: Any) -> dict[str, Array]:
    names: list[bytes] = []
    h5py.h5a.iterate(item, names.append)
    notes = {}
    for name in names:
        if name not in _SCALE_ATTRIBUTES:
            attribute = h5py.h5a.open(item, name)
            values = np.empty(attribute.shape, dtype=attribute.dtype)
            attribute.read(values)
            notes[name.decode()] = values
    return notes


def _values_of(dataset: Any) -> Array:
    values = np.empty(dataset.shape, dtype=dataset.dtype)
    if values.size:
        dataset.read(h5py.h5s.ALL, h5py.h5s.ALL, values)
    return values


def _pieces(values: Array) -> list[bytes]:
    if values.dtype.kind != "O":
        return [_head(values), values.tobytes()]
    texts = [t.encode() if isinstance(t, str) else t or b"" for t in values.ravel().tolist()]
    return [_head(values), *(text + b"\0" for text in texts)]


def _head(values: Array) -> bytes:
    return f"{values.dtype.str}{values.shape}".encode()
