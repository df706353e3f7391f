"""Oracle: commutation relations, the rates of the master equation, and the texts of the errors."""

import math

import numpy as np
import pytest

from cosim.errors import InputError
from cosim.quantum.qubit import Qubit


class TestQubit:
    def test_annihilation_obeys_the_oscillator_commutator(self) -> None:
        a = Qubit(5e9, levels=5).annihilation()
        commutator = a @ a.conj().T - a.conj().T @ a
        # The highest level kept is where truncation breaks the relation; rounding elsewhere.
        assert np.allclose(commutator[:4, :4], np.eye(4), atol=1e-15)

    def test_number_is_raising_times_lowering(self) -> None:
        qubit = Qubit(5e9, levels=4)
        a = qubit.annihilation()
        assert np.allclose(a.conj().T @ a, qubit.number(), atol=1e-15)  # Rounding.

    def test_collapse_operators_carry_the_rates(self) -> None:
        qubit = Qubit(5e9, 3, -0.3e9, t1=30e-6, t2=20e-6, thermal_population=0.1)
        down, up, dephasing = qubit.collapse_operators()
        gamma_phi = 1 / 20e-6 - 1 / 60e-6
        # Rounding only: the same formulas in another order.
        assert down[0, 1] ** 2 == pytest.approx(0.9 / 30e-6, rel=1e-12)
        assert up[1, 0] ** 2 == pytest.approx(0.1 / 30e-6, rel=1e-12)
        assert dephasing[1, 1] ** 2 == pytest.approx(2 * gamma_phi, rel=1e-12)

    def test_a_lossless_qubit_has_no_collapse_operators(self) -> None:
        assert Qubit(5e9).lossless
        assert Qubit(5e9).collapse_operators() == []

    def test_t1_alone_means_no_pure_dephasing(self) -> None:
        qubit = Qubit(5e9, t1=30e-6)
        assert qubit.gamma_phi == 0
        assert len(qubit.collapse_operators()) == 1

    def test_with_levels_changes_nothing_else(self) -> None:
        qubit = Qubit(5e9, 2, -0.3e9, 30e-6, 20e-6, 0.05)
        assert qubit.with_levels(4) == Qubit(5e9, 4, -0.3e9, 30e-6, 20e-6, 0.05)

    @pytest.mark.parametrize(
        ("values", "words"),
        [
            ({"frequency": 0.0}, "frequency"),
            ({"frequency": math.nan}, "frequency"),
            ({"levels": 1}, "levels"),
            ({"levels": 13}, "13"),
            ({"anharmonicity": math.inf}, "anharmonicity"),
            ({"t1": -1.0}, "t1"),
            ({"t1": math.nan}, "t1"),
            ({"t1": 10e-6, "t2": 21e-6}, "2 t1 = 2e-05 s"),
            ({"thermal_population": 0.6}, "0.6"),
        ],
    )
    def test_bad_values_are_named(self, values: dict[str, float], words: str) -> None:
        with pytest.raises(InputError, match=words):
            Qubit(**{"frequency": 5e9, **values})  # type: ignore[arg-type]
