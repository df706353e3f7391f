"""Datasets and their units, made at the lowest level of h5py.

Through the classes of h5py a table of 60 columns, or a record of 120 fields, takes five times as
long, most of it on what is the same for every dataset.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, TypeAlias

import h5py
import numpy as np
import numpy.typing as npt

from cosim.archive.layout import TEXT, TEXT_OBJECT, TEXT_TYPE

Array: TypeAlias = npt.NDArray[Any]

_NOTHING: Mapping[str, Any] = {}

# h5py finds out the type of every array that it writes or reads; most are of these.
NUMBER_TYPES: Mapping[npt.DTypeLike, Any] = {
    np.dtype(np.float64): h5py.h5t.IEEE_F64LE,
    np.dtype(np.int64): h5py.h5t.STD_I64LE,
    np.dtype(np.bool_): h5py.h5t.py_create(np.dtype(np.bool_), logical=True),
}


def _ordered_group() -> Any:
    """Make the properties of a group whose members keep their order."""
    properties = h5py.h5p.create(h5py.h5p.GROUP_CREATE)
    order = h5py.h5p.CRT_ORDER_TRACKED | h5py.h5p.CRT_ORDER_INDEXED
    properties.set_link_creation_order(order)
    properties.set_attr_creation_order(order)
    return properties


_ORDERED_GROUP = _ordered_group()

_SCALAR = h5py.h5s.create(h5py.h5s.SCALAR)


def create_dataset(
    group: Any,
    name: str,
    values: Array,
    unit: str,
    packing: Any = None,
) -> Any:
    """Make a dataset of numbers or texts.

    Parameters
    ----------
    group : h5py.Group
        Where it appears.
    name : str
        Its link name.
    values : ndarray
        Numbers, bools or str objects.
    unit : str
        Its unit; none is noted if that is empty.
    packing : h5py.h5p.PropDCID or None
        Filters and chunks, from `filters`.

    Returns
    -------
    h5py.h5d.DatasetID
        The dataset.
    """
    text = values.dtype.kind == "O"
    number = NUMBER_TYPES.get(values.dtype)
    kind = TEXT_TYPE if text else _number_type(values.dtype)
    space = h5py.h5s.create_simple(values.shape) if values.ndim else _SCALAR
    dataset = h5py.h5d.create(group.id, name.encode(), kind, space, packing)
    if values.size:
        plain = np.ascontiguousarray(values)
        dataset.write(h5py.h5s.ALL, h5py.h5s.ALL, plain, TEXT_OBJECT if text else number)
    if unit:
        set_text(dataset, b"units", unit)
    return dataset


def set_text(item: Any, name: bytes, text: str) -> None:
    """Note a text as an attribute.

    Parameters
    ----------
    item : h5py.h5d.DatasetID or h5py.h5g.GroupID
        A dataset or group that does not have it yet.
    name : bytes
        Name of the attribute.
    text : str
        Its text.
    """
    note = h5py.h5a.create(item, name, TEXT_TYPE, _SCALAR)
    note.write(np.array(text, dtype=TEXT))


@dataclass(frozen=True, slots=True)
class Place:
    """A group that is being filled, with a list of all that goes into it.

    Parameters
    ----------
    group : h5py.Group
        The group.
    path : str
        Its path below the record that it belongs to, "/run/versions"; "" for the record itself.
    texts : h5py.Group or None
        The texts that runs share, in files that have them.
    contents : dict
        By path, the attributes and the values (None for a group) of all that was written in the
        record, for its checksum.
    scales : dict
        The scales in the group, by name.
    """

    group: Any
    path: str
    texts: Any
    contents: dict[str, tuple[dict[str, Array], Array | None]] = field(default_factory=dict)
    scales: dict[str, Any] = field(default_factory=dict)

    @property
    def name(self) -> str:
        """Path in the file."""
        return str(self.group.name)

    def fill(self, notes: Mapping[str, Any]) -> None:
        """Note attributes of the group: texts, tuples of texts, numbers or bools."""
        self.contents[self.path] = (_set_notes(self.group.id, notes), None)

    def subgroup(self, name: str) -> "Place":
        """Make a group in the group."""
        made = h5py.h5g.create(self.group.id, name.encode(), gcpl=_ORDERED_GROUP)
        return Place(h5py.Group(made), f"{self.path}/{name}", self.texts, self.contents)

    def dataset(
        self,
        name: str,
        values: Array,
        unit: str = "",
        packing: Any = None,
        notes: Mapping[str, Any] = _NOTHING,
    ) -> Any:
        """Make a dataset as `create_dataset` does, and note attributes of it."""
        dataset = create_dataset(self.group, name, values, unit, packing)
        noted = _set_notes(dataset, notes)
        if unit:
            noted["units"] = _as_array(unit)
        self.contents[f"{self.path}/{name}"] = (noted, values)
        return dataset

    def mark_scale(self, name: str, dataset: Any) -> None:
        """Make a dataset of the group a scale of this name."""
        h5py.h5ds.set_scale(dataset, name.encode())
        self.scales[name] = dataset

    def link(self, name: str, text: Any, value: Array) -> None:
        """Link a shared text into the group."""
        self.group[name] = text
        self.contents[f"{self.path}/{name}"] = ({}, value)


def _set_notes(item: Any, notes: Mapping[str, Any]) -> dict[str, Array]:
    arrays = {name: _as_array(value) for name, value in notes.items()}
    for name, values in arrays.items():
        text = values.dtype.kind == "O"
        kind = TEXT_TYPE if text else _number_type(values.dtype)
        space = h5py.h5s.create_simple(values.shape) if values.ndim else _SCALAR
        h5py.h5a.create(item, name.encode(), kind, space).write(values)
    return arrays


def _number_type(dtype: np.dtype[Any]) -> Any:
    return NUMBER_TYPES.get(dtype) or h5py.h5t.py_create(dtype, logical=True)


def _as_array(value: Any) -> Array:
    text = isinstance(value, str) or (isinstance(value, tuple) and isinstance(value[0], str))
    return np.array(value, dtype=TEXT if text else None)
