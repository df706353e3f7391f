"""Values to HDF5: a dataclass becomes a group, its fields become datasets and subgroups."""

import dataclasses
import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, TypeAlias

import h5py
import numpy as np
import numpy.typing as npt

from cosim.archive.datasets import Place, create_dataset
from cosim.archive.layout import TEXT, TEXTS, filters, member_name
from cosim.errors import ArchiveError

_NO_METADATA: Mapping[str, Any] = {}
# Decks, which many runs have in common; the words of a result are shorter.
_SHARED_TEXT = 512
_WORD = np.iinfo(np.int64)
_QUOTED = {"quoting": "json"}
_DERIVED = {"derived": True}
_ARRAY_TYPES = "?efdFD" + np.typecodes["AllInteger"]


# Items, type, and whether they are quoted texts.
_Packed: TypeAlias = tuple[Sequence[object], npt.DTypeLike, bool]


@dataclass(frozen=True, slots=True)
class _Context:
    """What the declaration of a field says about its value, and the object it belongs to."""

    owner: Any
    metadata: Mapping[str, Any]
    unit: str


def field_unit(owner: object, metadata: Mapping[str, Any]) -> str:
    """Give the unit that a field's metadata declares for it.

    Parameters
    ----------
    owner : object
        The dataclass instance, asked for the unit when the metadata has `unit_from`.
    metadata : mapping
        The field's metadata.

    Returns
    -------
    str
        The unit, "1" when none is declared.
    """
    if "unit_from" in metadata:
        return str(getattr(owner, metadata["unit_from"]))
    return str(metadata.get("unit", "1"))


def is_instance(value: object) -> bool:
    """Tell whether a value is an instance of a dataclass (and not such a class itself).

    Parameters
    ----------
    value : object
        Any value.

    Returns
    -------
    bool
        True for an instance.
    """
    return dataclasses.is_dataclass(value) and not isinstance(value, type)


def fits_word(value: int) -> bool:
    """Tell whether an integer fits 64 bits with sign.

    Parameters
    ----------
    value : int
        Any integer.

    Returns
    -------
    bool
        True if it does.
    """
    return int(_WORD.min) <= value <= int(_WORD.max)


def is_plain_text(text: str) -> bool:
    """Tell whether HDF5 can hold a text as it is.

    Parameters
    ----------
    text : str
        Any text.

    Returns
    -------
    bool
        False if there is a NUL or a lone surrogate in it.
    """
    if "\0" in text:
        return False
    try:
        text.encode("utf-8")
    except UnicodeEncodeError:
        return False
    return True


def write_object(group: Any, value: Any, notes: Mapping[str, Any] | None = None) -> Place:
    """Write a dataclass instance into a fresh HDF5 group.

    Parameters
    ----------
    group : h5py.Group
        Empty group that receives the fields.
    value : object
        Instance of a dataclass.
    notes : mapping or None
        Further attributes of the group.

    Returns
    -------
    Place
        The group, with what was written.

    Raises
    ------
    ArchiveError
        If a field holds a value that has no place in an archive; the message names it.
    """
    place = Place(group, "", group.file[TEXTS] if TEXTS in group.file else None)
    _write_fields(place, value, notes or {})
    return place


def _write_fields(group: Place, value: Any, notes: Mapping[str, Any]) -> None:
    fields = dataclasses.fields(value)
    contexts = {
        field.name: _Context(value, field.metadata, field_unit(value, field.metadata))
        for field in fields
    }
    # Scales come first, so that the arrays along them find them.
    ordered = sorted(fields, key=lambda field: field.metadata.get("axes") != (field.name,))
    members = {field.name: getattr(value, field.name) for field in ordered}
    _write_members(group, members, contexts, {"kind": type(value).__name__, **notes})


def _write_members(
    group: Place,
    members: Mapping[str, object],
    contexts: Mapping[str, _Context],
    notes: Mapping[str, Any],
) -> None:
    """Write named values into a group; which of them are None stands in an attribute."""
    absent = tuple(name for name, value in members.items() if value is None)
    group.fill({**notes, "none": absent} if absent else notes)
    reserved = frozenset(members)
    for name, value in members.items():
        if value is not None:
            _write_value(group, name, value, contexts[name], reserved)


def _write_value(
    group: Place, name: str, value: object, context: _Context, reserved: frozenset[str]
) -> None:
    if is_instance(value):
        _write_fields(group.subgroup(name), value, {})
    elif isinstance(value, np.ndarray):
        _write_array(group, name, value, context, reserved)
    elif isinstance(value, str):
        _write_text(group, name, value)
    elif isinstance(value, (bool, np.bool_)):
        group.dataset(name, np.array(bool(value)))
    elif isinstance(value, (int, np.integer)):
        _write_integer(group, name, int(value), context)
    elif isinstance(value, (float, np.floating)):
        _write_number(group, name, float(value), np.float64, context)
    elif isinstance(value, (complex, np.complexfloating)):
        _write_number(group, name, complex(value), np.complex128, context)
    elif isinstance(value, (tuple, list)):
        _write_sequence(group, name, value, context, reserved)
    elif isinstance(value, Mapping):
        _write_mapping(group, name, value, context, reserved)
    else:
        raise ArchiveError(
            f"{group.name}/{name}: a value of type {type(value).__name__} cannot be archived",
            hint="wanted float, int, complex, bool, str, None, tuple, list, dict with text keys, "
            "a numeric ndarray or a dataclass of these",
        )


def _write_number(
    group: Place, name: str, value: complex, dtype: npt.DTypeLike, context: _Context
) -> None:
    group.dataset(name, np.array(value, dtype=dtype), context.unit)


def _write_integer(group: Place, name: str, value: int, context: _Context) -> None:
    if fits_word(value):
        _write_number(group, name, value, np.int64, context)
        return
    text = np.array(str(value), dtype=TEXT)
    group.dataset(name, text, context.unit, notes={"kind": "int"})


def _write_text(group: Place, name: str, value: str) -> None:
    plain = is_plain_text(value)
    text = np.array(value if plain else json.dumps(value), dtype=TEXT)
    if plain and len(value) >= _SHARED_TEXT and group.texts is not None:
        key = hashlib.sha256(value.encode("utf-8")).hexdigest()
        if key not in group.texts:
            create_dataset(group.texts, key, text, "")
        group.link(name, group.texts[key], text)
    else:
        group.dataset(name, text, notes={} if plain else _QUOTED)


def _write_array(
    group: Place,
    name: str,
    value: npt.NDArray[Any],
    context: _Context,
    reserved: frozenset[str],
) -> None:
    if value.dtype.char not in _ARRAY_TYPES:
        raise ArchiveError(
            f"{group.name}/{name}: an array of type {value.dtype} cannot be archived",
            hint="wanted bool, integers, float64 or complex128; texts go into a tuple",
        )
    unit = "" if value.dtype.kind == "b" else context.unit
    notes = {} if value.ndim else {"kind": "ndarray"}
    dataset = group.dataset(name, value, unit, filters(value.shape), notes)
    if value.ndim == 0:
        return
    if value.ndim == 1 and context.metadata.get("axes") == (name,):
        group.mark_scale(name, dataset)
    else:
        _attach_scales(group, dataset, name, context, reserved)


def _write_sequence(
    group: Place,
    name: str,
    value: Sequence[object],
    context: _Context,
    reserved: frozenset[str],
) -> None:
    """Write a tuple or list: one dataset when its items are scalars of one type, else a group."""
    kind = "list" if isinstance(value, list) else "tuple"
    packed = _packed(value)
    if packed is None:
        members = {f"{index:06d}": item for index, item in enumerate(value)}
        notes = {"kind": kind, "length": len(value)}
        _write_members(group.subgroup(name), members, dict.fromkeys(members, context), notes)
        return
    _write_packed(group, name, packed, kind, context, reserved)


def _write_packed(
    group: Place,
    name: str,
    packed: _Packed,
    kind: str,
    context: _Context,
    reserved: frozenset[str],
) -> None:
    items, dtype, quoted = packed
    packing = None if dtype is TEXT else filters((len(items),))
    unit = "" if dtype is TEXT or dtype is np.bool_ else context.unit
    notes = {"kind": kind, **(_QUOTED if quoted else {})}
    dataset = group.dataset(name, np.array(items, dtype=dtype), unit, packing, notes)
    _attach_scales(group, dataset, name, context, reserved)


def _packed(value: Sequence[object]) -> _Packed | None:
    """Pack scalars of one type; None for anything else."""
    if not value:
        return None
    if all(isinstance(item, str) for item in value):
        if all(is_plain_text(str(item)) for item in value):
            return value, TEXT, False
        return [json.dumps(item) for item in value], TEXT, True
    if all(isinstance(item, bool) for item in value):
        return value, np.bool_, False
    if all(isinstance(item, float) for item in value):
        return value, np.float64, False
    if all(isinstance(item, int) and type(item) is not bool and fits_word(item) for item in value):
        return value, np.int64, False
    return None


def _write_mapping(
    group: Place,
    name: str,
    value: Mapping[Any, object],
    context: _Context,
    reserved: frozenset[str],
) -> None:
    """Write a dict: one dataset along its keys when its items are scalars of one type."""
    wrong = [key for key in value if not isinstance(key, str)]
    if wrong:
        raise ArchiveError(
            f"{group.name}/{name}: the keys of a dict must be texts, got {wrong[0]!r}",
            hint="write the keys as str",
        )
    items = tuple(value.values())
    long = any(isinstance(item, str) and len(item) >= _SHARED_TEXT for item in items)
    packed = None if long or not all(map(is_plain_text, value)) else _packed(items)
    if packed is not None:
        axis = f"{name}_key"
        labelled = {"axes": (axis,), "labels": {axis: tuple(value)}}
        _write_packed(group, name, packed, "dict", replace(context, metadata=labelled), reserved)
        return
    members = {member_name(key): item for key, item in value.items()}
    contexts = dict.fromkeys(members, context)
    _write_members(group.subgroup(name), members, contexts, {"kind": "dict"})


def _attach_scales(
    group: Place, dataset: Any, name: str, context: _Context, reserved: frozenset[str]
) -> None:
    """Give each dimension of an array a scale of its own name in the array's own group.

    Readers find a scale only in the group of its array, and take one name on two dimensions of
    an array for a mistake; hence the copies and the underscores.
    """
    axes: tuple[str, ...] = tuple(context.metadata.get("axes", ()))
    if len(axes) != dataset.rank:
        # Items of a dict or sequence may have dimensions that the declaration does not speak of.
        axes = tuple(f"{name}_index{k}" for k in range(dataset.rank))
        axes = (f"{name}_index",) if dataset.rank == 1 else axes
    used: list[str] = []
    for dimension, axis in enumerate(axes):
        scale = _scale(group, axis, dataset.shape[dimension], context, reserved, used)
        h5py.h5ds.attach_scale(dataset, group.scales[scale], dimension)
        h5py.h5ds.set_label(dataset, dimension, scale.encode())
        used.append(scale)


def _scale(
    group: Place,
    axis: str,
    length: int,
    context: _Context,
    reserved: frozenset[str],
    used: Sequence[str],
) -> str:
    """Find or make the scale of an axis in a group, and give its name."""
    made = group.scales
    if axis in reserved and axis in made and axis not in used and made[axis].shape == (length,):
        return axis
    name = axis
    while name in reserved or name in used or (name in made and made[name].shape != (length,)):
        name += "_"
    if name in made:
        return name
    values, unit = _scale_values(axis, length, context)
    if isinstance(values, tuple):
        dataset = group.dataset(name, np.array(values, dtype=TEXT), notes=_DERIVED)
    else:
        dataset = group.dataset(name, values, unit, filters((length,)), _DERIVED)
    group.mark_scale(name, dataset)
    return name


def _scale_values(
    axis: str, length: int, context: _Context
) -> tuple[tuple[str, ...] | npt.NDArray[Any], str]:
    """Give the values along an axis: its labels, an attribute of the owner, or an index."""
    labels = tuple(context.metadata.get("labels", {}).get(axis, ()))
    if labels and len(labels) == length:
        return labels, ""
    values = getattr(context.owner, axis, None)
    if isinstance(values, np.ndarray) and values.shape == (length,) and values.dtype.kind in "iuf":
        unit = context.metadata.get("axis_units", {}).get(axis)
        if unit is None:
            fields = dataclasses.fields(context.owner)
            declared = {field.name: field.metadata for field in fields}
            unit = field_unit(context.owner, declared.get(axis, _NO_METADATA))
        return values, str(unit)
    return np.arange(length, dtype=np.int64), "1"
