"""Oracle: the meaning of the names on states, common practice of the field."""

import math

import numpy as np
import pytest

from cosim.errors import InputError
from cosim.quantum.fidelity import target_unitary
from cosim.quantum.targets import TARGETS, target_rotation


class TestTargetRotation:
    def test_x90_takes_the_ground_state_to_minus_y(self) -> None:
        rotation = target_rotation("X90")
        psi = target_unitary(rotation.axis, rotation.angle) @ np.array([1, 0])
        # exp(-i pi X/4)|0> = (|0> - i|1>)/sqrt(2).
        assert np.allclose(psi, np.array([1, -1j]) / math.sqrt(2), atol=1e-15)

    def test_a_minus_turns_back(self) -> None:
        for name in ("x", "y90", "z90", "x180"):
            there, back = target_rotation(name), target_rotation("-" + name)
            product = target_unitary(there.axis, there.angle) @ target_unitary(
                back.axis, back.angle
            )
            assert np.allclose(product, np.eye(2), atol=1e-15)

    def test_full_names_are_half_turns(self) -> None:
        assert target_rotation("y") == target_rotation("y180")
        assert target_rotation("y").angle == math.pi
        assert target_rotation("identity").angle == 0.0

    def test_names_near_ones(self) -> None:
        with pytest.raises(InputError, match=r"'x9'.*did you mean 'x90'"):
            target_rotation("x9")

    def test_the_table_cannot_be_changed(self) -> None:
        with pytest.raises(TypeError):
            TARGETS["x"] = TARGETS["y"]  # type: ignore[index]
