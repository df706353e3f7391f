"""Names of one-qubit rotation targets."""

import math
from collections.abc import Mapping
from types import MappingProxyType

from cosim.errors import InputError, near_names
from cosim.quantum.fidelity import Rotation


def _named_rotations() -> Mapping[str, Rotation]:
    axes = {"x": (1.0, 0.0, 0.0), "y": (0.0, 1.0, 0.0), "z": (0.0, 0.0, 1.0)}
    table = {"identity": Rotation((0.0, 0.0, 1.0), 0.0)}
    for letter, axis in axes.items():
        opposite = (0.0 - axis[0], 0.0 - axis[1], 0.0 - axis[2])
        for sign, vector in (("", axis), ("-", opposite)):
            for degrees, angle in (("", math.pi), ("180", math.pi), ("90", math.pi / 2)):
                table[f"{sign}{letter}{degrees}"] = Rotation(vector, angle)
    return MappingProxyType(table)


TARGETS = _named_rotations()


def target_rotation(name: str) -> Rotation:
    """Give the rotation that a target's name stands for.

    Parameters
    ----------
    name : str
        "x", "x90", "-x90", "x180", the same with y and z, "identity"; upper case counts as lower.

    Returns
    -------
    Rotation
        Axis and angle in rad.

    Raises
    ------
    InputError
        If the name is unknown; the message gives near names.

    Notes
    -----
    R_n(theta) = exp(-i theta n.sigma/2); "x" is 180 degrees, "x90" +90 degrees about X (common
    practice).
    """
    rotation = TARGETS.get(name.strip().lower())
    if rotation is None:
        raise InputError(f"target: unknown name {name!r}; {near_names(name, TARGETS)}")
    return rotation
