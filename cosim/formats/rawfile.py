"""Raw files of ngspice: binary and ASCII, real and complex, several plots in one file."""

import os
import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from cosim.errors import WaveformError, near_names
from cosim.formats.files import read_bytes, shorten

# Units of the vector types that ngspice knows (its manual, chapter on nutmeg vectors).
_UNITS = {
    "time": "s",
    "frequency": "Hz",
    "voltage": "V",
    "current": "A",
    "impedance": "ohm",
    "admittance": "S",
    "power": "W",
    "capacitance": "F",
    "charge": "C",
    "res-sweep": "ohm",
    "decibel": "dB",
}
_FIELD = re.compile(r"([A-Za-z. ]+?)\s*:\s*(.*)")


@dataclass(frozen=True, slots=True)
class RawPlot:
    """One plot of a raw file.

    Parameters
    ----------
    title : str
        Title of the deck.
    name : str
        Name of the plot, such as "Transient Analysis".
    axis : str
        Name of the first vector, over which the others stand: "time", "frequency", "v-sweep".
    vectors : dict of ndarray
        Name as in the file ("v(out)", "i(v1)") to values, shape (n,), float or complex; the axis
        is always real. Only vectors of an unpadded file may be shorter than the axis.
    units : dict of str
        Name to unit: "s", "Hz", "V", "A" and so on; empty for vectors without one.
    """

    title: str
    name: str
    axis: str
    vectors: dict[str, npt.NDArray[Any]]
    units: dict[str, str]


@dataclass(frozen=True, slots=True)
class _Vector:
    name: str
    kind: str
    length: int


@dataclass(slots=True)
class _Head:
    """The head of one plot, as far as it has been read."""

    fields: dict[str, str] = field(default_factory=dict)
    vectors: list[str] = field(default_factory=list)
    binary: bool = False
    end: int = -1


def read_raw(path: str | os.PathLike[str], *, plot: str | None = None) -> RawPlot:
    """Read a plot of a raw file, as `ngspice -r` or its command `write` makes it.

    Parameters
    ----------
    path : path
        The raw file.
    plot : str or None
        Name of the plot, such as "Transient Analysis", in any case; "Transient Analysis 2" is
        the second of that name. Default: the only one.

    Returns
    -------
    RawPlot
        In SI units.

    Raises
    ------
    MissingFileError, InputError
        If there is no such file or it cannot be read.
    WaveformError
        If it is not a raw file of ngspice, it ends too early, or there is no such plot, or more
        than one and none was named.
    """
    file = str(path)
    data = read_bytes(Path(path))
    if not data.lstrip().startswith(b"Title:"):
        other = data.startswith((b"T\x00i\x00", b"\xff\xfeT\x00"))
        raise WaveformError(
            f"{file}: wanted a raw file of ngspice, which starts with 'Title:', got "
            + ("UTF-16 text as LTspice writes it" if other else f"'{_printable(data[:20])}'"),
            hint="export as text with columns, and give the file a name that ends in .csv",
        )
    plots = list(_plots(data, file))
    names = [item.name for item in plots]
    labels = [
        name if names.count(name) == 1 else f"{name} {names[: index + 1].count(name)}"
        for index, name in enumerate(names)
    ]
    if plot is None:
        if len(plots) > 1:
            raise WaveformError(
                f"{file}: the file holds {len(plots)} plots: {', '.join(labels)}",
                hint="say which one with `plot`",
            )
        return plots[0]
    found = [item for item, label in zip(plots, labels, strict=True) if _same(label, plot)]
    if len(found) != 1:
        raise WaveformError(f"{file}: there is no plot '{plot}'", hint=near_names(plot, labels))
    return found[0]


def _same(label: str, name: str) -> bool:
    return label.casefold() == name.strip().casefold()


def _plots(data: bytes, file: str) -> Iterator[RawPlot]:
    start = 0
    while data[start:].strip():
        head = _head(data, start, file)
        vectors, points, parts = _layout(head, file)
        read = _binary if head.binary else _ascii
        arrays, start = read(data, head.end, vectors, points, parts, file)
        for vector, array in zip(vectors[:1], arrays[:1], strict=True):
            if np.iscomplexobj(array) and not array.imag.any():
                arrays[0] = np.ascontiguousarray(array.real)
            elif np.iscomplexobj(array):
                raise WaveformError(f"{file}: the axis '{vector.name}' is not real")
        yield RawPlot(
            title=head.fields.get("title", ""),
            name=head.fields.get("plotname", ""),
            axis=vectors[0].name,
            vectors={v.name: array for v, array in zip(vectors, arrays, strict=True)},
            units={v.name: _UNITS.get(v.kind, "") for v in vectors},
        )


def _head(data: bytes, start: int, file: str) -> _Head:
    """Read the lines from "Title:" to "Binary:" or "Values:"."""
    head = _Head()
    in_vectors = False
    position = start
    while position < len(data):
        end = data.find(b"\n", position)
        end = len(data) if end < 0 else end
        raw, position = data[position:end], end + 1
        try:
            line = raw.decode("utf-8").rstrip("\r")
        except UnicodeDecodeError:
            line = raw.decode("latin-1").rstrip("\r")
        mark = line.strip().lower()
        if mark in ("binary:", "values:"):
            head.binary, head.end = mark == "binary:", position
            return head
        if in_vectors and line[:1].isspace() and mark:
            head.vectors.append(line.strip())
            continue
        found = _FIELD.fullmatch(line.strip())
        if found is None:
            if not mark:
                continue
            raise WaveformError(
                f"{file}: wanted a raw file of ngspice, got the line '{_printable(raw)}' in its "
                f"head"
            )
        name = found[1].lower()
        in_vectors = name == "variables"
        if in_vectors and found[2]:  # Older programs start the list on this very line.
            head.vectors.append(found[2])
        elif not in_vectors:
            head.fields.setdefault(name, found[2].strip())
    raise WaveformError(f"{file}: the file ends within the head of a plot, before any values")


def _layout(head: _Head, file: str) -> tuple[list[_Vector], int, int]:
    """The vectors, the number of points, and 2 for complex or 1 for real values."""
    flags = head.fields.get("flags", "").lower().split()
    if "offset" in head.fields or "forward" in flags:
        raise WaveformError(
            f"{file}: this raw file is one of LTspice, whose values are packed in another way",
            hint="export as text with columns, and give the file a name that ends in .csv",
        )
    if ("real" in flags) == ("complex" in flags):
        raise WaveformError(
            f"{file}: wanted 'real' or 'complex' in the flags, got "
            f"'{shorten(head.fields.get('flags', ''))}'"
        )
    counts = []
    for key in ("no. variables", "no. points"):
        text = head.fields.get(key, "")
        if not re.fullmatch(r"[0-9]{1,15}", text):
            raise WaveformError(f"{file}: wanted '{key}: ' and a count, got '{shorten(text)}'")
        counts.append(int(text))
    count, points = counts
    if count == 0 or len(head.vectors) != count:
        raise WaveformError(
            f"{file}: the head promises {count} vectors and names {len(head.vectors)}"
        )
    vectors = []
    for line in head.vectors:
        cells = line.split("\t") if line.count("\t") >= 2 else line.split()
        if len(cells) < 3:
            raise WaveformError(f"{file}: wanted index, name and type of a vector, got '{line}'")
        kind, *rest = " ".join(cells[2:]).split() or [""]
        length = points
        dims = next((text[5:] for text in rest if text.startswith("dims=")), "")
        if "unpadded" in flags and re.fullmatch(r"[0-9]{1,9}(,[0-9]{1,9})*", dims):
            product = int(np.prod([int(part) for part in dims.split(",")], dtype=float))
            length = min(points, product)
        vectors.append(_Vector(cells[1].strip(), kind.lower(), length))
    names = [vector.name for vector in vectors]
    twice = [name for name in names if names.count(name) > 1]
    if twice:
        raise WaveformError(f"{file}: two vectors are called '{twice[0]}'")
    return vectors, points, 2 if "complex" in flags else 1


def _blocks(vectors: list[_Vector]) -> Iterator[tuple[int, int, list[int]]]:
    """Ranges of points over which the same vectors have values; one range in a padded file."""
    start = 0
    for stop in sorted({vector.length for vector in vectors} - {0}):
        yield start, stop, [i for i, vector in enumerate(vectors) if vector.length >= stop]
        start = stop


def _binary(
    data: bytes, start: int, vectors: list[_Vector], points: int, parts: int, file: str
) -> tuple[list[npt.NDArray[Any]], int]:
    kind = np.dtype("<f8") if parts == 1 else np.dtype("<c16")
    room = len(data) - start
    if points == 0 and data[start : start + 6] != b"Title:" and room > 0:
        raise _unfinished(file, room // (kind.itemsize * len(vectors)))
    pieces: list[list[npt.NDArray[Any]]] = [[] for _ in vectors]
    for first, stop, present in _blocks(vectors):
        size = kind.itemsize * len(present)
        if size * (stop - first) > len(data) - start:
            raise _truncated(file, first + (len(data) - start) // size, points)
        block = np.frombuffer(data, kind, (stop - first) * len(present), start)
        for column, index in enumerate(present):
            pieces[index].append(block[column :: len(present)])
        start += size * (stop - first)
    return [_joined(part, kind) for part in pieces], start


def _ascii(
    data: bytes, start: int, vectors: list[_Vector], points: int, parts: int, file: str
) -> tuple[list[npt.NDArray[Any]], int]:
    following = data.find(b"\nTitle:", start - 1)
    end = len(data) if following < 0 else following + 1
    tokens = data[start:end].replace(b",", b" ").split()
    if points == 0 and tokens:
        raise _unfinished(file, len(tokens) // (1 + parts * len(vectors)))
    kind = np.dtype(float) if parts == 1 else np.dtype(complex)
    pieces: list[list[npt.NDArray[Any]]] = [[] for _ in vectors]
    position = 0
    for first, stop, present in _blocks(vectors):
        width = 1 + parts * len(present)
        count = (stop - first) * width
        if position + count > len(tokens):
            raise _truncated(file, first + (len(tokens) - position) // width, points)
        try:
            table = np.array(tokens[position : position + count], dtype=float)
        except ValueError as error:
            raise WaveformError(f"{file}: wanted numbers behind 'Values:': {error}") from None
        table = table.reshape(-1, width)
        if (table[:, 0] != np.arange(first, stop)).any():
            wrong = first + int(np.flatnonzero(table[:, 0] != np.arange(first, stop))[0])
            raise WaveformError(
                f"{file}: wanted the values of point {wrong}, got those of "
                f"{table[wrong - first, 0]:g}: the file is damaged"
            )
        for column, index in enumerate(present):
            values = np.ascontiguousarray(table[:, 1 + parts * column : 1 + parts * (column + 1)])
            pieces[index].append(values.view(kind)[:, 0])
        position += count
    if position < len(tokens):
        raise WaveformError(
            f"{file}: the file has more values than its {points} points of {len(vectors)} vectors"
        )
    return [_joined(part, kind) for part in pieces], end


def _joined(pieces: list[npt.NDArray[Any]], kind: np.dtype[Any]) -> npt.NDArray[Any]:
    native = kind.newbyteorder("=")
    return np.concatenate(pieces).astype(native, copy=False) if pieces else np.empty(0, native)


def _truncated(file: str, found: int, points: int) -> WaveformError:
    return WaveformError(
        f"{file}: the file ends after {found} of {points} points",
        hint="the disk was full or the copy broke off; run the simulation or copy the file again",
    )


def _unfinished(file: str, found: int) -> WaveformError:
    return WaveformError(
        f"{file}: the head says 0 points and about {found} follow: the simulation was ended "
        f"before its end",
        hint="run the simulation to its end",
    )


def _printable(data: bytes) -> str:
    return shorten("".join(c if c.isprintable() else "?" for c in data.decode("latin-1")))
