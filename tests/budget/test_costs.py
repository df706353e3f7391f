"""Oracle: the free frame of a channel, QuTiP, a simplex search, and SU(2) algebra."""

import math

import numpy as np
import pytest
from scipy.optimize import minimize

from cosim.adjust import SCALE_RANGE
from cosim.budget.costs import (
    Costing,
    block_infidelity,
    cost_envelopes,
    error_vectors,
    free_blocks,
)
from cosim.quantum.channel import unitary_superoperator
from cosim.quantum.fidelity import average_gate_fidelity, target_unitary
from cosim.quantum.frame import free_frame
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_rotating_wave
from cosim.waveform import ComplexArray, FloatArray

TARGETS = {
    "x": target_unitary((1.0, 0.0, 0.0), math.pi),
    "y90": target_unitary((0.0, 1.0, 0.0), math.pi / 2),
    "z90": target_unitary((0.0, 0.0, 1.0), math.pi / 2),
    "tilted": target_unitary((1.0, 0.3, 0.0), 2.0),
}


def random_unitaries(levels: int, count: int, near: ComplexArray, spread: float) -> ComplexArray:
    """Give unitaries near a target on the two lowest levels."""
    rng = np.random.default_rng(7)
    made = []
    for _ in range(count):
        raw = rng.standard_normal((levels, levels)) + 1j * rng.standard_normal((levels, levels))
        values, vectors = np.linalg.eigh(raw + raw.conj().T)
        small = vectors @ np.diag(np.exp(1j * spread * values)) @ vectors.conj().T
        whole = np.eye(levels, dtype=np.complex128)
        whole[:2, :2] = near
        made.append(whole @ small)
    return np.array(made)


@pytest.mark.parametrize("name", TARGETS)
@pytest.mark.parametrize("levels", [2, 4])
def test_the_free_frame_is_that_of_a_channel(name: str, levels: int) -> None:
    target = TARGETS[name]
    unitaries = random_unitaries(levels, 20, target, 0.02)
    blocks = unitaries[:, :2, :2]
    plain = block_infidelity(blocks, target)
    framed = block_infidelity(free_blocks(blocks, target), target)
    for place, unitary in enumerate(unitaries):
        channel = unitary_superoperator(unitary)
        assert plain[place] == pytest.approx(
            1.0 - average_gate_fidelity(channel, target), abs=1e-14
        )
        best = 1.0 - free_frame(channel, target).average_gate_fidelity
        # Leakage bends the relation of the four phases: its square, about (1e-2)^2 here.
        assert framed[place] == pytest.approx(best, abs=1e-13 if levels == 2 else 3e-2 * best)


def test_error_vectors_are_rotations_before_the_reference() -> None:
    reference = TARGETS["tilted"]
    wanted = np.array([[0.3, -0.2, 0.1], [0.0, 0.0, 0.0], [0.0, 1e-7, 0.0], [0.0, 0.0, -3.0]])
    blocks = []
    for vector in wanted:
        angle = float(np.linalg.norm(vector))
        axis = vector if angle else (1.0, 0.0, 0.0)
        # Any phase: it does not matter.
        blocks.append(np.exp(0.7j) * reference @ target_unitary(axis, angle))
    found = error_vectors(np.array(blocks), reference)
    assert found == pytest.approx(wanted, abs=1e-14)


def costing(levels: int, adjusted: tuple[str, ...]) -> tuple[Costing, ComplexArray]:
    t = np.linspace(0.0, 40e-9, 401)
    qubit = Qubit(5e9, levels, -300e6 if levels > 2 else 0.0)
    shape = np.sin(math.pi * t / 40e-9) ** 2
    slope = math.pi / 40e-9 * np.sin(2.0 * math.pi * t / 40e-9)
    drag = 0.5j / (2.0 * math.pi * -300e6) * slope if levels > 2 else 0.0
    # A peak of 1: half a turn in 40 ns takes 25 MHz at the peak.
    made = Costing(qubit, TARGETS["x"], t, 2.0 * math.pi * 25e6, adjusted)
    return made, (shape + drag).astype(np.complex128)


@pytest.mark.parametrize("levels", [2, 4])
def test_an_evolution_is_that_of_the_independent_solver(levels: int) -> None:
    """QuTiP's master equation on the same envelope."""
    made, pulse = costing(levels, ())
    rows = np.array([pulse, 1.03 * pulse * np.exp(0.2j)])
    costs = cost_envelopes(made, rows)
    for place, row in enumerate(rows):
        channel = evolve_rotating_wave(made.qubit, made.volts * row, made.t)
        wanted = 1.0 - average_gate_fidelity(channel, made.target)
        # The solver's own error at its default tolerance, see its docstring.
        assert costs.infidelity["as_simulated"][place] == pytest.approx(wanted, abs=2e-8)


@pytest.mark.parametrize("adjusted", [("amplitude",), ("detuning",), ("amplitude", "detuning")])
@pytest.mark.parametrize("levels", [2, 4])
def test_the_calibration_is_the_best_there_is(adjusted: tuple[str, ...], levels: int) -> None:
    """The simplex of Nelder and Mead on the same infidelity."""
    made, pulse = costing(levels, adjusted)
    turn = np.exp(2j * math.pi * 1.2e6 * made.t)
    rows = np.array([pulse, 0.97 * pulse * np.exp(0.1j), 1.02 * pulse * turn])
    costs = cost_envelopes(made, rows)
    for place, row in enumerate(rows):

        def loss(x: FloatArray, row: ComplexArray = row) -> float:
            scale = 1.0 + 0.01 * x[0] * ("amplitude" in adjusted)
            offset = 1e6 * x[1] * ("detuning" in adjusted)
            tuned = scale * row * np.exp(2j * math.pi * offset * made.t)
            blocks = made.unitaries(tuned[None])[:, :2, :2]
            return float(block_infidelity(free_blocks(blocks, made.target), made.target)[0])

        options = {"xatol": 1e-6, "fatol": 1e-14, "maxiter": 200}
        best = minimize(loss, np.zeros(2), method="Nelder-Mead", options=options).fun
        # The simplex ends within 1e-12 of its minimum.
        assert costs.infidelity["calibrated"][place] == pytest.approx(best, rel=1e-3, abs=1e-11)


def test_a_calibration_stays_in_its_range() -> None:
    made, pulse = costing(2, ("amplitude",))
    costs = cost_envelopes(made, np.array([0.5 * pulse]))
    assert costs.scale[0] <= SCALE_RANGE[1]
    assert costs.infidelity["calibrated"][0] <= costs.infidelity["free_frame"][0]
