"""Oracle: a brute-force search over both angles, and gates whose best frame is known."""

import math

import numpy as np
import pytest
import qutip

from cosim.errors import InputError
from cosim.quantum.channel import unitary_superoperator
from cosim.quantum.fidelity import average_gate_fidelity, process_fidelity, target_unitary
from cosim.quantum.frame import free_frame, phase_frame
from cosim.quantum.targets import TARGETS
from cosim.waveform import ComplexArray


def z(angle: float, levels: int = 2) -> ComplexArray:
    return np.diag(np.exp(-1j * angle * np.arange(levels)))


class TestPhaseFrame:
    def test_multiplies_by_z_on_both_sides(self) -> None:
        u = qutip.rand_unitary(3, seed=21).full()
        framed = phase_frame(unitary_superoperator(u), 0.4, -1.1)
        wanted = unitary_superoperator(z(-1.1, 3) @ u @ z(0.4, 3))
        assert np.allclose(framed, wanted, atol=1e-15)  # Rounding.

    def test_refuses_angles_that_are_not_finite(self) -> None:
        with pytest.raises(InputError, match="nan"):
            phase_frame(np.eye(4, dtype=complex), math.nan, 0.0)


class TestFreeFrame:
    @pytest.mark.parametrize("seed", range(6))
    @pytest.mark.parametrize("name", ["x", "x90", "-y90", "z90", "identity"])
    def test_no_grid_point_is_better(self, name: str, seed: int) -> None:
        # Channels far from any gate have several maxima of about equal height.
        superop = np.asarray(qutip.rand_super_bcsz(2, seed=seed).full())
        target = target_unitary(TARGETS[name].axis, TARGETS[name].angle)
        found = free_frame(superop, target)
        angles = np.linspace(-np.pi, np.pi, 48, endpoint=False)
        grid = max(
            process_fidelity(phase_frame(superop, before, after), target)
            for before in angles
            for after in angles
        )
        # Rounding below; above by no more than the grid's spacing can hide, (pi/48)**2 times the
        # largest curvature (at most 4) of a fidelity.
        assert grid - 1e-14 <= found.process_fidelity <= grid + 4 * (np.pi / 48) ** 2

    @pytest.mark.parametrize("axis", [(1, 0, 0), (0.6, 0, 0.8), (1, 2, 3)])
    def test_recovers_the_frame_of_a_shifted_gate(self, axis: tuple[float, ...]) -> None:
        target = target_unitary(axis, 1.3)
        superop = unitary_superoperator(z(-0.4) @ target @ z(0.9))
        found = free_frame(superop, target)
        assert found.average_gate_fidelity == pytest.approx(1, abs=1e-14)
        # The maximum is quadratic, so angles are known to the root of the rounding at worst.
        assert found.before == pytest.approx(-0.9, abs=1e-7)
        assert found.after == pytest.approx(0.4, abs=1e-7)

    def test_hides_a_wrong_sign_of_y90(self) -> None:
        superop = unitary_superoperator(target_unitary((0, -1, 0), math.pi / 2))
        target = target_unitary((0, 1, 0), math.pi / 2)
        # That a free frame hides this is why sign tests use the fidelity as simulated.
        assert average_gate_fidelity(superop, target) == pytest.approx(1 / 3, abs=1e-14)
        assert free_frame(superop, target).average_gate_fidelity == pytest.approx(1, abs=1e-14)

    def test_diagonal_target_takes_the_pair_of_least_norm(self) -> None:
        superop = unitary_superoperator(target_unitary((0, 0, 1), 0.5))
        found = free_frame(superop, target_unitary((0, 0, 1), math.pi / 2))
        # The missing turn of pi/2 - 0.5 is shared evenly; Z(theta) = exp(-i theta a^dag a) turns
        # by -theta about z, since |1> is the state with the larger index.
        wanted = -(math.pi / 2 - 0.5) / 2
        assert (found.before, found.after) == pytest.approx((wanted, wanted), abs=1e-12)
        assert found.process_fidelity == pytest.approx(1, abs=1e-14)

    def test_half_turn_target_takes_the_pair_of_least_norm(self) -> None:
        superop = unitary_superoperator(target_unitary((math.cos(0.2), -math.sin(0.2), 0), math.pi))
        found = free_frame(superop, target_unitary((1, 0, 0), math.pi))
        # A drive of phase 0.2 turns about (cos 0.2, -sin 0.2, 0) = Z(0.2) X Z(-0.2).
        assert (found.before, found.after) == pytest.approx((0.2, -0.2), abs=1e-12)

    def test_a_perfect_gate_needs_no_frame(self) -> None:
        for rotation in TARGETS.values():
            target = target_unitary(rotation.axis, rotation.angle)
            found = free_frame(unitary_superoperator(target), target)
            assert (found.before, found.after) == pytest.approx((0, 0), abs=1e-7)
            assert found.process_fidelity == pytest.approx(1, abs=1e-14)

    def test_refuses_a_two_qubit_target(self) -> None:
        with pytest.raises(InputError, match="one-qubit"):
            free_frame(np.eye(16, dtype=complex), np.eye(4, dtype=complex))
