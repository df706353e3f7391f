"""Oracle: invariants of channels, fidelities and the evolution, on drawn examples."""

import math

import numpy as np
import qutip
from hypothesis import given, settings
from hypothesis import strategies as st

from cosim.quantum.channel import check_channel, nearest_unitary, unitary_superoperator
from cosim.quantum.evolution import evolve
from cosim.quantum.fidelity import (
    average_gate_fidelity,
    channel_distance,
    leakage,
    process_fidelity,
    rotation_of,
    seepage,
    target_unitary,
    unitarity,
)
from cosim.quantum.frame import free_frame
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray
from tests.quantum.drives import spline

# The same examples in every run, so that a failure can be repeated; no limit on time.
PROPERTY = settings(derandomize=True, deadline=None, max_examples=40)
SEEDS = st.integers(0, 2**31)
LEVELS = st.integers(2, 5)
ANGLES = st.floats(-2 * math.pi, 2 * math.pi)
ROUNDING = 1e-12


def random_channel(levels: int, seed: int) -> ComplexArray:
    return np.asarray(qutip.rand_super_bcsz(levels, seed=seed).full())


def random_unitary(levels: int, seed: int) -> ComplexArray:
    return np.asarray(qutip.rand_unitary(levels, seed=seed).full())


class TestEvolution:
    @PROPERTY
    @given(
        levels=LEVELS,
        seed=SEEDS,
        t1=st.floats(1e-8, 1e-3),
        ratio=st.floats(0.05, 2.0),
        population=st.floats(0.0, 0.5),
        rabi=st.floats(0.0, 2e8),
    )
    def test_is_trace_preserving_and_completely_positive(
        self, levels: int, seed: int, t1: float, ratio: float, population: float, rabi: float
    ) -> None:
        # Noise on an uneven grid is as hard as a drive can be.
        rng = np.random.default_rng(seed)
        t = np.cumsum(rng.uniform(1e-13, 5e-12, 200))
        drive = spline(t, 2 * np.pi * rabi * rng.normal(size=200))
        qubit = Qubit(5e9, levels, -0.25e9, t1, ratio * t1, population)
        channel = evolve(qubit, drive, t[0], t[-1])
        check = check_channel(channel, tolerance=1e-11)  # Rounding of some hundred products.
        assert check.trace_error < 1e-11
        assert -1e-11 < leakage(channel) < 1 + 1e-11
        assert -1e-11 < seepage(channel) < 1 + 1e-11


class TestFidelities:
    @PROPERTY
    @given(levels=LEVELS, first=SEEDS, second=SEEDS)
    def test_lie_between_zero_and_one(self, levels: int, first: int, second: int) -> None:
        superop, target = random_channel(levels, first), random_unitary(2, second)
        for value in (
            process_fidelity(superop, target),
            average_gate_fidelity(superop, target),
            leakage(superop),
            seepage(superop),
            unitarity(superop),
        ):
            assert -ROUNDING <= value <= 1 + ROUNDING

    @PROPERTY
    @given(first=SEEDS, second=SEEDS, third=SEEDS)
    def test_do_not_change_under_a_common_unitary(
        self, first: int, second: int, third: int
    ) -> None:
        superop, target = random_channel(2, first), random_unitary(2, second)
        turn = random_unitary(2, third)
        turned = unitary_superoperator(turn) @ superop
        value = average_gate_fidelity(superop, target)
        assert abs(average_gate_fidelity(turned, turn @ target) - value) < ROUNDING
        assert abs(unitarity(turned) - unitarity(superop)) < ROUNDING

    @PROPERTY
    @given(levels=LEVELS, seed=SEEDS)
    def test_of_a_unitary_with_itself_is_one(self, levels: int, seed: int) -> None:
        u = random_unitary(levels, seed)
        assert abs(average_gate_fidelity(unitary_superoperator(u), u) - 1) < ROUNDING

    @PROPERTY
    @given(first=SEEDS, second=SEEDS)
    def test_free_frame_is_never_worse(self, first: int, second: int) -> None:
        superop, target = random_channel(3, first), random_unitary(2, second)
        found = free_frame(superop, target)
        assert found.average_gate_fidelity >= average_gate_fidelity(superop, target) - ROUNDING
        assert -math.pi < found.before <= math.pi
        assert -math.pi < found.after <= math.pi

    @PROPERTY
    @given(seed=SEEDS, other=SEEDS)
    def test_nearest_unitary_is_nearer_than_any_other(self, seed: int, other: int) -> None:
        superop = random_channel(3, seed)
        best = process_fidelity(superop, nearest_unitary(superop))
        assert best >= process_fidelity(superop, random_unitary(2, other)) - ROUNDING


class TestChannelDistance:
    @PROPERTY
    @given(levels=LEVELS, seed=SEEDS)
    def test_is_exactly_zero_for_equal_channels(self, levels: int, seed: int) -> None:
        superop = random_channel(levels, seed)
        assert channel_distance(superop, superop.copy()) == 0.0

    @PROPERTY
    @given(first=SEEDS, second=SEEDS)
    def test_of_unitaries_is_their_average_infidelity(self, first: int, second: int) -> None:
        u, v = random_unitary(2, first), random_unitary(2, second)
        distance = channel_distance(unitary_superoperator(u), unitary_superoperator(v))
        assert abs(distance - (1 - average_gate_fidelity(unitary_superoperator(u), v))) < ROUNDING

    @PROPERTY
    @given(first=SEEDS, second=SEEDS)
    def test_is_symmetric(self, first: int, second: int) -> None:
        one, two = random_channel(3, first), random_channel(2, second)
        assert channel_distance(one, two) == channel_distance(two, one)


class TestRotations:
    @PROPERTY
    @given(x=st.floats(-1, 1), y=st.floats(-1, 1), z=st.floats(0.1, 1), angle=ANGLES, phase=ANGLES)
    def test_axis_and_angle_give_the_unitary_back(
        self, x: float, y: float, z: float, angle: float, phase: float
    ) -> None:
        u = np.exp(1j * phase) * target_unitary((x, y, z), angle)
        found = rotation_of(u)
        again = target_unitary(found.axis, found.angle)
        assert 0 <= found.angle <= math.pi
        assert abs(abs(np.trace(again.conj().T @ u)) - 2) < ROUNDING
