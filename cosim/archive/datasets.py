"""Datasets and their units, made at the lowest level of h5py.

Through the classes of h5py a table of 60 columns, or a record of 120 fields, takes five times as
long, most of it on what is the same for every dataset.
"""

from collections.abc import Mapping
from typing import Any

import h5py
import numpy as np
import numpy.typing as npt

from cosim.archive.layout import TEXT, TEXT_OBJECT, TEXT_TYPE

_SCALAR = h5py.h5s.create(h5py.h5s.SCALAR)


def create_dataset(
    group: Any,
    name: str,
    values: npt.NDArray[Any],
    unit: str,
    options: Mapping[str, Any] | None = None,
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
    options : mapping or None
        Filters and chunks, from `storage_options`.

    Returns
    -------
    h5py.h5d.DatasetID
        The dataset.
    """
    if options:
        made = group.create_dataset(name, data=values, dtype=values.dtype, **options)
        dataset = made.id
    else:
        text = values.dtype.kind == "O"
        kind = TEXT_TYPE if text else h5py.h5t.py_create(values.dtype, logical=True)
        space = h5py.h5s.create_simple(values.shape) if values.ndim else _SCALAR
        dataset = h5py.h5d.create(group.id, name.encode(), kind, space)
        if values.size:
            plain = np.ascontiguousarray(values)
            dataset.write(h5py.h5s.ALL, h5py.h5s.ALL, plain, TEXT_OBJECT if text else None)
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
