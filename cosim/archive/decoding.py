"""HDF5 to values: groups become the dataclasses that the caller names."""

import dataclasses
import json
from collections.abc import Mapping
from typing import Any

import h5py
import numpy as np

from cosim.archive.layout import member_key, members
from cosim.errors import ArchiveError, CosimError


def read_object(group: Any, types: Mapping[str, type]) -> Any:
    """Read a group that holds a dataclass.

    Parameters
    ----------
    group : h5py.Group
        The group; its attribute `kind` names the class.
    types : mapping of str to type
        The classes by name.

    Returns
    -------
    object
        An instance of the class; for a kind that `types` does not have, a dict of the fields with
        the name of the class under "kind".

    Raises
    ------
    ArchiveError
        If a field that has no default is missing, or the class refuses the values.
    """
    kind = str(group.attrs["kind"])
    found = _read_members(group, types)
    cls = types.get(kind)
    if cls is None:
        return {"kind": kind, **found}
    values: dict[str, Any] = {}
    for field in dataclasses.fields(cls):
        if field.init and field.name in found:
            values[field.name] = found[field.name]
        elif field.init and _has_no_default(field):
            raise ArchiveError(
                f"{group.file.filename}: the {kind} in {group.name} has no field '{field.name}'",
                hint="it was written by a version that did not have this field yet; read it with "
                "that version, or run the simulation again",
            )
    try:
        return cls(**values)
    except (CosimError, ValueError, TypeError, ArithmeticError) as error:
        raise ArchiveError(
            f"{group.file.filename}: the {kind} in {group.name} is not valid: {error}",
            hint="the file was changed, or an older version wrote it; run the simulation again",
        ) from error


def _has_no_default(field: "dataclasses.Field[Any]") -> bool:
    missing = dataclasses.MISSING
    return field.default is missing and field.default_factory is missing


def _read_members(group: Any, types: Mapping[str, type]) -> dict[str, Any]:
    """Read the members of a group, without the scales that were made for it."""
    values: dict[str, Any] = {str(name): None for name in group.attrs.get("none", ())}
    for name, member in members(group):
        if not member.attrs.get("derived", False):
            values[name] = _read_value(member, types)
    return values


def _read_value(member: Any, types: Mapping[str, type]) -> Any:
    if isinstance(member, h5py.Dataset):
        return _read_dataset(member)
    kind = member.attrs["kind"]
    if kind not in ("tuple", "list", "dict"):
        return read_object(member, types)
    values = _read_members(member, types)
    if kind == "dict":
        return {member_key(name): value for name, value in values.items()}
    items = [values[f"{index:06d}"] for index in range(int(member.attrs["length"]))]
    return tuple(items) if kind == "tuple" else items


def _read_dataset(dataset: Any) -> Any:
    kind = dataset.attrs.get("kind")
    text = h5py.check_string_dtype(dataset.dtype) is not None
    quoted = dataset.attrs.get("quoting") == "json"
    value = dataset.asstr()[()] if text else dataset[()]
    if kind == "ndarray" or (dataset.ndim and kind is None):
        return np.asarray(value)
    if dataset.ndim == 0:
        value = json.loads(value) if quoted else value if text else value.item()
        return int(value) if kind == "int" else value
    items = [json.loads(item) for item in value] if quoted else value.tolist()
    if kind == "dict":
        return dict(zip(dataset.dims[0][0].asstr()[()].tolist(), items, strict=True))
    return tuple(items) if kind == "tuple" else items
