"""Copies of groups from one file to another, with their scales, and with their shared texts."""

from typing import Any

import h5py

from cosim.archive.layout import TEXTS, members

_REFERENCES = (b"DIMENSION_LIST", b"REFERENCE_LIST")


def copy_record(source: Any, name: str, target: Any, new: str, texts: Any) -> None:
    """Copy the group of a run or of the plan into another file.

    Parameters
    ----------
    source : h5py.Group
        The group that holds it.
    name : str
        Its link name there.
    target : h5py.Group
        The group in the other file that gets it.
    new : str
        Its link name there.
    texts : h5py.Group
        The texts of the other file, to which shared ones are added.
    """
    shared = {}
    if TEXTS in source.file:
        for key in source.file[TEXTS]:
            shared[_address(source.file[TEXTS], key)] = key
    _copy_group(source[name], target, new, texts, shared)


def _address(group: Any, name: str) -> int:
    address: int = h5py.h5o.get_info(group.id, name.encode()).addr
    return address


def _copy_group(group: Any, target: Any, name: str, texts: Any, shared: dict[int, str]) -> None:
    copied = target.create_group(name, track_order=True)
    for key, value in group.attrs.items():
        copied.attrs.create(key, value, dtype=group.attrs.get_id(key).dtype)
    arrays = []
    for key, member in members(group):
        if isinstance(member, h5py.Group):
            _copy_group(member, copied, key, texts, shared)
            continue
        address = _address(group, key)
        if address in shared:
            text = shared[address]
            if text not in texts:
                group.copy(member, texts, name=text)
            copied[key] = texts[text]
            continue
        group.copy(member, copied, name=key)
        if member.ndim:
            arrays.append(key)
    _attach_scales(copied, arrays)


def _attach_scales(copied: Any, arrays: list[str]) -> None:
    """Give the arrays of a copied group their scales again.

    HDF5 copies the references between arrays and scales as they are, addresses in the old file,
    with or without its option to expand references. The labels of the dimensions name the scales.
    """
    for key in arrays:
        for attribute in _REFERENCES:
            if h5py.h5a.exists(copied[key].id, attribute):
                h5py.h5a.delete(copied[key].id, attribute)
    for key in arrays:
        if not h5py.h5ds.is_scale(copied[key].id):
            for dimension in copied[key].dims:
                dimension.attach_scale(copied[dimension.label])
