"""Oracle: the object that was written; reading gives it back, to the last bit."""

import math
import string
from dataclasses import dataclass, field
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from cosim.archive import read, write
from cosim.errors import ArchiveError
from cosim.waveform import Envelope, Waveform

QUICK = settings(derandomize=True, deadline=None, max_examples=60)


@dataclass(frozen=True, slots=True)
class Anything:
    value: Any


@dataclass(frozen=True, slots=True)
class Point:
    x: float = field(metadata={"unit": "V"})
    label: str | None = None


@dataclass(frozen=True, slots=True)
class Trace:
    time: np.ndarray = field(metadata={"unit": "s", "axes": ("time",)})
    value: np.ndarray = field(metadata={"unit": "V", "axes": ("time",)})
    others: dict[str, np.ndarray] = field(metadata={"unit": "A", "axes": ("time",)})
    points: tuple[Point, ...] = ()


TYPES = {cls.__name__: cls for cls in (Anything, Point, Trace, Waveform, Envelope)}


def same(a: Any, b: Any) -> bool:
    """Tell whether two values are of one type and equal, NaN being equal to itself."""
    if isinstance(a, np.ndarray):
        alike = isinstance(b, np.ndarray) and a.dtype == b.dtype and a.shape == b.shape
        return bool(alike and a.tobytes() == np.asarray(b, order="C").tobytes())
    if type(a) is not type(b):
        return False
    if isinstance(a, float):
        return a == b or (math.isnan(a) and math.isnan(b))
    if isinstance(a, complex):
        return same(a.real, b.real) and same(a.imag, b.imag)
    if isinstance(a, (tuple, list)):
        return len(a) == len(b) and all(same(x, y) for x, y in zip(a, b, strict=True))
    if isinstance(a, dict):
        return a.keys() == b.keys() and all(same(a[key], b[key]) for key in a)
    if hasattr(a, "__dataclass_fields__"):
        return all(same(getattr(a, name), getattr(b, name)) for name in a.__dataclass_fields__)
    return bool(a == b)


def round_trip(value: Any) -> Any:
    with TemporaryDirectory() as folder:
        path = Path(folder) / "run.h5"
        write(path, value)
        return read(path, TYPES)


# Lone surrogates are in: file names that are no UTF-8 come to Python with them.
texts = st.text(st.characters(codec=None), max_size=20)
scalars = (
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.complex_numbers()
    | texts
    | st.builds(Point, x=st.floats(), label=st.none() | texts)
)
arrays = hnp.arrays(
    st.sampled_from([np.float64, np.complex128, np.int64, np.uint8, np.int32, np.bool_]),
    hnp.array_shapes(min_dims=0, max_dims=3, min_side=0, max_side=5),
)
values = st.recursive(
    scalars | arrays,
    lambda inner: (
        st.lists(inner, max_size=4)
        | st.lists(inner, max_size=4).map(tuple)
        | st.dictionaries(texts, inner, max_size=4)
        | st.builds(Anything, inner)
    ),
    max_leaves=8,
)


@QUICK
@given(values)
def test_any_value_comes_back(value: Any) -> None:
    assert same(round_trip(Anything(value)).value, value)


@QUICK
@given(
    st.lists(st.integers(), max_size=5)
    | st.lists(st.floats(), max_size=5)
    | st.lists(st.booleans(), max_size=5)
    | st.lists(texts, max_size=5)
)
def test_items_of_one_type_come_back(items: list[Any]) -> None:
    assert same(round_trip(Anything(items)).value, items)
    assert same(round_trip(Anything(tuple(items))).value, tuple(items))


@pytest.mark.full
@QUICK
@given(
    st.integers(0, 6),
    st.dictionaries(st.text(string.ascii_lowercase + "_./%", max_size=6), st.booleans()),
)
def test_arrays_along_a_shared_axis_come_back(length: int, keys: dict[str, bool]) -> None:
    # Half of the arrays have another length than the declared axis; "time" and "value" may be
    # among the keys.
    keys = {"time": True, **keys}
    others = {key: np.arange(length + (not along), dtype=float) for key, along in keys.items()}
    trace = Trace(np.arange(length) * 1e-9, np.ones(length), others, (Point(1.0), Point(2.0, "b")))
    assert same(round_trip(trace), trace)


@pytest.mark.parametrize("size", [2, 1000, 1001, 60_000])
def test_waveform_and_envelope(size: int) -> None:
    rng = np.random.default_rng(1)
    waveform = Waveform(np.cumsum(rng.random(size) + 0.1), rng.standard_normal(size), "A")
    envelope = Envelope(1e-9, 0.25e-9, rng.random(size) + 1j * rng.random(size), 6e9)
    assert same(round_trip(waveform), waveform)
    assert same(round_trip(envelope), envelope)


def test_long_texts() -> None:
    deck = "* déck\n" + "r1 a b 1k\n" * 100_000
    log = tuple(f"line {index} Ω" for index in range(20_000))
    assert same(round_trip(Anything((deck, log))).value, (deck, log))


def test_numpy_scalars_come_back_as_python_ones() -> None:
    value = (np.float32(0.5), np.int16(-3), np.bool_(True), np.complex128(1j))
    assert same(round_trip(Anything(value)).value, (0.5, -3, True, 1j))


def test_other_numeric_arrays_keep_their_type() -> None:
    for dtype in (np.float32, np.complex64, np.uint64, ">f8"):
        array = np.arange(4).astype(dtype)
        assert same(round_trip(Anything(array)).value, array)
    matrix = np.asfortranarray(np.arange(6.0).reshape(2, 3))
    assert same(round_trip(Anything(matrix)).value, np.ascontiguousarray(matrix))


@pytest.mark.parametrize(
    "value",
    [
        {1, 2},
        b"raw",
        Path("a"),
        {1: 2.0},
        np.array(["a"]),
        np.array([None]),
        np.array([1], dtype="M8[s]"),
        np.array([1.0], dtype=np.longdouble),
        Point,
    ],
    ids=lambda value: type(value).__name__,
)
def test_what_has_no_place_is_refused_by_name(tmp_path: Path, value: Any) -> None:
    with pytest.raises(ArchiveError, match=r"value/inner: .* (cannot be archived|must be texts)"):
        write(tmp_path / "run.h5", Anything({"inner": value}))
    assert list(tmp_path.iterdir()) == []


def test_a_run_must_be_a_dataclass(tmp_path: Path) -> None:
    with pytest.raises(ArchiveError, match="instance of a dataclass, got dict"):
        write(tmp_path / "run.h5", {"a": 1.0})
