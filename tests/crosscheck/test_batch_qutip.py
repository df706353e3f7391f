"""Oracle: QuTiP's piecewise propagator on the same samples, and this package's other kernels."""

import numpy as np
import pytest
import qutip

from cosim.quantum.batch import (
    BatchControls,
    BatchDrive,
    BatchSystem,
    evolve_batch,
    propagate_batch,
)
from cosim.quantum.channel import pauli_transfer_matrix, unitary_superoperator
from cosim.quantum.evolution import evolve
from cosim.quantum.hamiltonian import anharmonic_energies
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_rotating_wave
from cosim.waveform import ComplexArray, FloatArray
from tests.quantum.drives import spline

STEP = 50e-12


def noise(count: int, samples: int) -> tuple[ComplexArray, FloatArray]:
    """Rates of 5 MHz with white noise of a twentieth in size and phase, and noisy detunings."""
    rng = np.random.default_rng(11)
    size = 1 + 0.05 * rng.normal(size=(count, samples))
    phase = 0.3 + 0.05 * rng.normal(size=(count, samples))
    detuning = 2 * np.pi * 0.5e6 * rng.normal(size=(count, samples))
    return 2 * np.pi * 5e6 * size * np.exp(1j * phase), detuning


def piecewise(qubit: Qubit, rate: ComplexArray, detuning: FloatArray, step: float) -> ComplexArray:
    """Propagate with QuTiP; the samples hold on their slices."""
    a = qutip.Qobj(qubit.annihilation())
    edges = step * np.arange(rate.size + 1)
    rate, detuning = np.append(rate, rate[-1]), np.append(detuning, detuning[-1])
    hamiltonian = qutip.QobjEvo(
        [
            qutip.Qobj(np.diag(anharmonic_energies(qubit))),
            [a / 2, rate],
            [a.dag() / 2, rate.conj()],
            [a.dag() * a, detuning],
        ],
        tlist=edges,
        order=0,
    )
    collapse = [qutip.Qobj(c) for c in qubit.collapse_operators()]
    found = qutip.propagator(hamiltonian, edges[-1], collapse, piecewise_t=edges)
    return np.asarray(found.full())


@pytest.mark.parametrize("levels", [2, 3, 4, 6])
def test_closed_slices(levels: int) -> None:
    qubit = Qubit(5e9, levels, -0.3e9)
    rate, detuning = noise(2, 300)
    found = propagate_batch(qubit, BatchDrive(STEP, rate, detuning)).unitaries
    for row in range(2):
        wanted = piecewise(qubit, rate[row], detuning[row], STEP)
        # Both exponentiate each slice: rounding of 300 products.
        assert np.abs(found[row] - wanted).max() < 1e-12


@pytest.mark.parametrize("levels", [2, 3, 4])
def test_open_slices(levels: int) -> None:
    qubit = Qubit(5e9, levels, -0.3e9, 30e-6, 20e-6, 0.1)
    rate, detuning = noise(2, 300)
    drive = BatchDrive(STEP, rate, detuning)
    found = evolve_batch(qubit, drive)
    exact = evolve_batch(qubit, drive, tolerance=1e-10).channels
    for row in range(2):
        wanted = piecewise(qubit, rate[row], detuning[row], STEP)
        # The panels' error, as promised; a thousandth of the loss of 8e-4 that QuTiP sees.
        assert np.abs(found.channels[row] - wanted).max() < 1e-8
        # The halved ones, with a margin for the rounding of many small steps.
        assert np.abs(exact[row] - wanted).max() < 2e-10


@pytest.mark.parametrize("levels", [2, 3])
def test_held_slices(levels: int) -> None:
    # A constant top and a pause within noise.
    qubit = Qubit(5e9, levels, -0.3e9, 30e-6, 20e-6, 0.1)
    rate, detuning = noise(2, 200)
    rate[:, 20:100], detuning[:, 20:100] = rate[:, 20:21], detuning[:, 20:21]
    rate[:, 110:180] = 0
    exact = evolve_batch(qubit, BatchDrive(STEP, rate, detuning), tolerance=1e-10).channels
    for row in range(2):
        wanted = piecewise(qubit, rate[row], detuning[row], STEP)
        # The tolerance, with a margin for the rounding of many small steps.
        assert np.abs(exact[row] - wanted).max() < 2e-10


class TestPairs:
    """Two qubits, each driven, with an exchange, a shift of |11> and losses of their own."""

    @staticmethod
    def piecewise(
        system: BatchSystem, controls: list[ComplexArray], step: float, *, lossy: bool
    ) -> ComplexArray:
        """Propagate with QuTiP; the samples hold on their slices."""
        edges = step * np.arange(controls[0].size + 1)
        parts: list[object] = [qutip.Qobj(system.static)]
        for operator, values in zip(system.operators, controls, strict=True):
            held = np.append(values, values[-1])
            parts += [
                [qutip.Qobj(operator) / 2, held],
                [qutip.Qobj(operator).dag() / 2, held.conj()],
            ]
        hamiltonian = qutip.QobjEvo(parts, tlist=edges, order=0)
        collapse = [qutip.Qobj(c) for c in system.collapse] if lossy else []
        found = qutip.propagator(hamiltonian, edges[-1], collapse, piecewise_t=edges)
        return np.asarray(found.full())

    @pytest.mark.parametrize(
        ("levels", "samples"), [pytest.param(2, 200, marks=pytest.mark.full), (3, 30)]
    )
    def test_slices(self, levels: int, samples: int) -> None:
        a = np.diag(np.sqrt(np.arange(1.0, levels)), 1)
        one = np.eye(levels)
        first, second = np.kron(a, one), np.kron(one, a)
        n1, n2 = first.T @ first, second.T @ second
        anharmonic = np.pi * -0.3e9 * (n1 @ n1 - n1 + n2 @ n2 - n2)
        operators = (first, second, first.T @ second + first @ second.T, n1 @ n2)
        losses = (200.0 * first, 150.0 * second, 100.0 * n1, 120.0 * n2)
        system = BatchSystem(2 * np.pi * 40e6 * n1 + anharmonic, operators, losses)
        rate, detuning = noise(2, 2 * samples)
        drives = rate[:, :samples], rate[:, samples:]
        coupling, shift = 2 * np.pi * 3e6 * np.array([[1.0], [1.5]]), detuning[:, :samples]
        drive = BatchControls(STEP, (*drives, coupling, shift))
        closed = propagate_batch(system, drive).unitaries
        lossy = evolve_batch(system, drive)
        exact = evolve_batch(system, drive, tolerance=1e-9).channels
        for row in range(2):
            controls = [drives[0][row], drives[1][row], np.full(samples, coupling[row, 0]) + 0j]
            controls.append(shift[row] + 0j)
            wanted = self.piecewise(system, controls, STEP, lossy=False)
            # Both exponentiate each slice: rounding of 200 products.
            assert np.abs(closed[row] - wanted).max() < 1e-12
            wanted = self.piecewise(system, controls, STEP, lossy=True)
            # The panels' error, as promised, and the tolerance.
            assert np.abs(lossy.channels[row] - wanted).max() < 1e-7
            assert np.abs(exact[row] - wanted).max() < 1e-9


@pytest.mark.parametrize("levels", [2, 3])
@pytest.mark.parametrize("lossy", [False, True])
def test_a_smooth_drive_against_the_rotating_wave_solver(levels: int, lossy: bool) -> None:
    losses = (30e-6, 20e-6, 0.1) if lossy else ()
    qubit = Qubit(6.2e9, levels, -0.3e9, *losses)
    t = np.linspace(0.0, 60e-9, 241)
    x = np.sin(np.pi * t / 60e-9)
    rate = 2 * np.pi * 12e6 * x**2 * np.exp(1j * (0.4 + 2e7 * t))
    drive = BatchDrive(t[1], rate, order=4)
    wanted = evolve_rotating_wave(qubit, rate, t, rtol=1e-11)
    found = evolve_batch(qubit, drive, tolerance=1e-9)
    # The same spline through the same samples; the solver's error is about 100 rtol.
    assert np.abs(found.channels[0] - wanted).max() < 3e-9
    # Steps of the samples alone: as good as their step error says.
    plain = evolve_batch(qubit, drive)
    assert np.abs(plain.channels[0] - wanted).max() < 1.5 * plain.step_error + 3e-9


def test_the_full_kernel_where_the_carrier_is_fast() -> None:
    # At 620 GHz the counter-rotating part is a shift of 1e-6 rad.
    qubit = Qubit(620e9, 2, t1=30e-6, t2=20e-6)
    stop, offset = 20e-9, 5e6
    fine = np.arange(round(stop * 620e9 * 40) + 1) / (620e9 * 40)
    envelope = 2 * np.pi * 25e6 * np.sin(np.pi * fine / stop) ** 2
    carrier = 2 * np.pi * (620e9 + offset) * fine + 0.4
    full = evolve(qubit, spline(fine, envelope * np.cos(carrier)), 0.0, stop)

    t = np.linspace(0.0, stop, 401)
    rate = 2 * np.pi * 25e6 * np.sin(np.pi * t / stop) ** 2
    turned = rate * np.exp(1j * (0.4 + 2 * np.pi * offset * t))
    found = evolve_batch(qubit, BatchDrive(t[1], turned, order=4)).channels[0]
    difference = pauli_transfer_matrix(full) - pauli_transfer_matrix(found)
    # The Bloch-Siegert shift: the integral of rate**2/(4 omega) is 1.2e-5 rad; a sign or a phase
    # that differs would be of order one.
    assert np.abs(difference).max() < 3e-5
    assert np.abs(pauli_transfer_matrix(found) - np.eye(4)).max() > 0.5


def test_a_detuned_qubit_is_the_carrier_seen_from_its_frame() -> None:
    # The same pulse in the frame of the carrier, 4 MHz above the qubit, and in the qubit's.
    qubit = Qubit(6.2e9, 3, -0.3e9)
    t = np.linspace(0.0, 60e-9, 1201)
    rate = 2 * np.pi * 8e6 * np.sin(np.pi * t / 60e-9) ** 2
    offset = 2 * np.pi * 4e6
    own = evolve_rotating_wave(qubit, rate * np.exp(1j * offset * t), t, rtol=1e-11)
    seen = propagate_batch(qubit, BatchDrive(t[1], rate + 0j, -offset, 4)).unitaries[0]
    back = np.exp(-1j * offset * t[-1] * np.arange(3))[:, None] * seen
    # The splines of the turning and of the still envelope differ by their fourth order.
    assert np.abs(unitary_superoperator(back) - own).max() < 1e-7
