"""Oracle: closed forms of pairs of qubits, the ladder's own batch, single rows, error texts."""

import math

import numpy as np
import pytest

from cosim.errors import InputError
from cosim.quantum import batch
from cosim.quantum.batch import (
    BatchControls,
    BatchDrive,
    BatchSystem,
    evolve_batch,
    mean_channel,
    propagate_batch,
)
from cosim.quantum.channel import PAULI, apply_channel, check_channel
from cosim.quantum.hamiltonian import anharmonic_energies
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray, FloatArray
from tests import sources
from tests.validation import Validate

TOPIC = "dynamics in the rotating-wave approximation"
ONE = np.eye(2, dtype=complex)
# |1> is the excited state; a takes it to |0>.
LOWER = np.array([[0, 1], [0, 0]], dtype=complex)
FIRST, SECOND = np.kron(LOWER, ONE), np.kron(ONE, LOWER)
N1, N2 = FIRST.conj().T @ FIRST, SECOND.conj().T @ SECOND
HOP = FIRST.conj().T @ SECOND + FIRST @ SECOND.conj().T
EXCHANGE = sum(np.kron(s, s) for s in PAULI[1:]) / 4
NOTHING = np.zeros((4, 4), dtype=complex)


def ladder(qubit: Qubit) -> BatchSystem:
    """A qubit given by its operators."""
    return BatchSystem(
        np.diag(anharmonic_energies(qubit)).astype(complex),
        (qubit.annihilation(), qubit.number()),
        tuple(qubit.collapse_operators()),
    )


def noisy(count: int, samples: int, size: float, seed: int = 4) -> ComplexArray:
    """Complex controls about `size` in rad/s with white noise of a fifth."""
    rng = np.random.default_rng(seed)
    noise = rng.normal(size=(2, count, samples))
    return np.asarray(size * (1 + 0.2 * (noise[0] + 1j * noise[1])))


def driven_pair() -> BatchSystem:
    """Two qubits of unlike frequencies and lifetimes, each driven, with an exchange."""
    collapse = (FIRST * 300.0, SECOND * 200.0, N1 * 150.0, N2 * 250.0)
    return BatchSystem(2 * np.pi * 30e6 * N1, (FIRST, SECOND, HOP), collapse)


def pair_controls(count: int, samples: int, order: int = 1) -> BatchControls:
    size = 2 * np.pi * 5e6
    coupling = size * np.linspace(0.2, 0.6, count)[:, None]
    drives = noisy(count, samples, size), noisy(count, samples, size, 5)
    return BatchControls(0.2e-9, (*drives, coupling), order)


class TestLadder:
    """The same qubit as a ladder and by its operators."""

    @pytest.mark.parametrize("levels", [2, 3, 4])
    @pytest.mark.parametrize("order", [1, 4])
    def test_closed(self, levels: int, order: int) -> None:
        qubit = Qubit(5e9, levels, -0.3e9)
        rate, detuning = noisy(3, 41, 1e8), np.linspace(-3e7, 3e7, 3)[:, None]
        wanted = propagate_batch(qubit, BatchDrive(0.1e-9, rate, detuning, order)).unitaries
        found = propagate_batch(ladder(qubit), BatchControls(0.1e-9, (rate, detuning), order))
        # Rounding of 41 products.
        assert np.abs(found.unitaries - wanted).max() < 1e-13

    @pytest.mark.parametrize("levels", [2, 3])
    @pytest.mark.parametrize("order", [1, 4])
    def test_open(self, levels: int, order: int) -> None:
        qubit = Qubit(5e9, levels, -0.3e9, 3e-6, 2e-6, 0.05)
        rate, detuning = noisy(2, 41, 1e8), np.linspace(-3e7, 3e7, 2)[:, None]
        drive = BatchDrive(0.1e-9, rate, detuning, order)
        controls = BatchControls(0.1e-9, (rate, detuning), order)
        wanted = evolve_batch(qubit, drive, tolerance=1e-9).channels
        found = evolve_batch(ladder(qubit), controls, tolerance=1e-9)
        # Each within its tolerance.
        assert np.abs(found.channels - wanted).max() < 2e-9
        assert found.step_error <= 1e-9

    def test_corners_of_the_anharmonicity_are_a_column(self) -> None:
        rate, corners = noisy(1, 60, 2e8)[0], np.array([-0.25e9, -0.3e9, -0.35e9])
        n = np.arange(3.0)
        operators = (Qubit(5e9, 3).annihilation(), np.diag(n * (n - 1) / 2))
        system = BatchSystem(np.zeros((3, 3)), operators)
        controls = BatchControls(0.1e-9, (rate, 2 * np.pi * corners[:, None]))
        found = propagate_batch(system, controls).unitaries
        for row, corner in enumerate(corners):
            qubit = Qubit(5e9, 3, float(corner))
            wanted = propagate_batch(qubit, BatchDrive(0.1e-9, rate)).unitaries[0]
            assert np.abs(found[row] - wanted).max() < 1e-13  # Rounding of 60 products.


class TestPairs:
    def test_exchange_of_spins(self, validate: Validate) -> None:
        # B17: H = J S1.S2 gives the root of SWAP after 1/(4 J), J/h = 10 MHz, and by the algebra
        # of the singlet exp(-i J t/4) (1 + (exp(i J t) - 1)(1 - SWAP)/2) for any other J.
        system = BatchSystem(NOTHING, (EXCHANGE,))
        strengths = 2 * np.pi * 10e6 * np.array([0.5, 1.0, 1.5])
        time = 25e-9
        controls = BatchControls(time / 50, (np.repeat(strengths[:, None], 50, axis=1),))
        found = propagate_batch(system, controls).unitaries
        swap = np.eye(4)[[0, 2, 1, 3]]
        for u, strength in zip(found, strengths, strict=True):
            turn = np.exp(1j * strength * time)
            wanted = np.exp(-0.25j * strength * time) * (
                np.eye(4) + (turn - 1) * (np.eye(4) - swap) / 2
            )
            assert np.abs(u - wanted).max() < 1e-13  # Rounding of 50 products.
        root = (1 + 1j) / 2 * np.eye(4) + (1 - 1j) / 2 * swap
        fidelity = float(abs(np.trace(root.conj().T @ found[1])) ** 2 / 16)
        quantity = "F_pro of root of SWAP after 25 ns at J = 10 MHz, by the batch"
        validate(quantity, sources.LOSS + ", 1/(4 J)", 1.0, fidelity, abs=1e-12, card="B17")

    def test_a_shift_of_the_doubly_excited_state(self) -> None:
        # zeta n1 n2 turns the phase of |11> alone.
        system = BatchSystem(NOTHING, (N1 @ N2,))
        shifts = 2 * np.pi * np.array([[1e6], [5e6]])
        found = propagate_batch(system, BatchControls(100e-9, (shifts,))).unitaries
        for u, shift in zip(found, shifts[:, 0], strict=True):
            wanted = np.diag([1, 1, 1, np.exp(-1j * shift * 100e-9)])
            assert np.abs(u - wanted).max() < 1e-13  # Rounding; up to 3 rad.

    def test_a_pair_driven_across(self, validate: Validate) -> None:
        # The first qubit is driven at the frequency of the second, delta away, coupled by g. Along
        # the axis of the dressed first qubit the coupling is (g sin/2) Z X, sin = rate/hypot(rate,
        # delta): the second turns at +/- g sin, for any rate, to first order in g.
        g, delta, time = 2 * np.pi * 1e6, 2 * np.pi * 200e6, 1e-6
        system = BatchSystem(delta * N1 + g * HOP, (FIRST,))
        rates = 2 * np.pi * 1e6 * np.array([20.0, 50.0, 100.0])
        found = propagate_batch(system, BatchControls(time, (rates[:, None],))).unitaries
        for u, rate in zip(found, rates, strict=True):
            # Ascending: the dressed states of the first qubit alone.
            own = delta * np.diag([0, 1]) + rate / 2 * (LOWER + LOWER.T)
            states = np.linalg.eigh(own)[1]
            sine = rate / math.hypot(rate, delta)
            for k in range(2):
                side = np.kron(states[:, k : k + 1], ONE)
                block = side.conj().T @ u @ side
                block = block / np.sqrt(np.linalg.det(block))
                angle = 2 * math.acos(min(1.0, abs(np.trace(block).real) / 2))
                wanted = g * sine * time
                # Second order: shifts of g^2/delta for 1 us, 0.03 rad about another axis, add
                # 0.03^2/(2 angle) at most, and mixing of (g/delta)^2 = 2.5e-5 in the trace.
                tolerance = 0.0315**2 / (2 * wanted) + 5e-5
                quantity = (
                    f"turn of the second qubit in 1 us, first driven at {rate / 2e6 / np.pi:.0f} "
                    f"MHz, 200 MHz away, g = 1 MHz, dressed state {k}"
                )
                source = sources.RIGETTI + ", g rate/hypot(rate, delta)"
                validate(quantity, source, wanted, angle, "rad", abs=tolerance, digits=12)

    @pytest.mark.parametrize("order", [1, 4])
    def test_exchange_with_loss(self, order: int) -> None:
        # One excitation and equal losses: exp(-t/T1) sin(int g)^2 has gone over.
        t1, step, samples = 2e-6, 0.5e-9, 201
        x = np.linspace(0, np.pi, samples)
        g = 2 * np.pi * 3e6 * np.sin(x) ** 2
        loss = 1 / math.sqrt(t1)
        system = BatchSystem(NOTHING, (HOP,), (loss * FIRST, loss * SECOND))
        scales = np.array([0.5, 1.0, 1.3])
        drive = BatchControls(step, (g * scales[:, None],), order)
        found = evolve_batch(system, drive, tolerance=1e-9).channels
        start = np.zeros((4, 4), dtype=complex)
        start[2, 2] = 1  # |10>
        time = drive.duration
        area = float(np.sum(g)) * step  # Of the samples; that of the smooth curve to 1e-9, too.
        for channel, scale in zip(found, scales, strict=True):
            populations = apply_channel(channel, start).diagonal().real
            kept = math.exp(-time / t1)
            wanted = kept * math.sin(scale * area) ** 2
            # The tolerance, over the elements that add up, and the spline's area for order 4.
            assert populations[1] == pytest.approx(wanted, abs=1e-8)
            assert populations[0] == pytest.approx(1 - kept, abs=1e-8)
            check_channel(channel, tolerance=1e-11)

    def test_independent_losses_multiply(self) -> None:
        t1 = (3e-6, 5e-6)
        system = BatchSystem(NOTHING, (HOP,), (FIRST / math.sqrt(t1[0]), SECOND / math.sqrt(t1[1])))
        idle = BatchControls(10e-9, (np.zeros(50),))
        start = np.zeros((4, 4), dtype=complex)
        start[3, 3] = 1
        found = apply_channel(evolve_batch(system, idle).channels[0], start).diagonal().real
        first, second = (math.exp(-0.5e-6 / t) for t in t1)
        wanted = [(1 - first) * (1 - second), (1 - first) * second, first * (1 - second)]
        # Nothing turns, so that the placing of the loss costs nothing: rounding.
        assert found == pytest.approx([*wanted, first * second], abs=1e-13)


class TestRows:
    @pytest.mark.parametrize("order", [1, 4])
    def test_batch_equals_single_runs_to_the_last_bit(self, order: int) -> None:
        system, drive = driven_pair(), pair_controls(6, 41, order)
        channels = evolve_batch(system, drive, workers=2).channels
        unitaries = propagate_batch(system, drive).unitaries
        for row in (0, 5):
            single = drive.take(row, row + 1)
            assert np.array_equal(evolve_batch(system, single).channels[0], channels[row])
            assert np.array_equal(propagate_batch(system, single).unitaries[0], unitaries[row])

    def test_chunks_change_no_bit(self, monkeypatch: pytest.MonkeyPatch) -> None:
        system, drive = driven_pair(), pair_controls(7, 21)
        whole = mean_channel(system, drive)
        monkeypatch.setattr(batch, "CHUNK_BYTES", 2 * (100 * 4 * 21 + 64 * 256))
        chunked = mean_channel(system, drive, workers=2)
        assert np.array_equal(whole.channel, chunked.channel)
        assert np.array_equal(whole.standard_error, chunked.standard_error)

    @pytest.mark.parametrize("order", [1, 4])
    def test_a_tolerance_is_met(self, order: int) -> None:
        system, drive = driven_pair(), pair_controls(2, 81, order)
        exact = evolve_batch(system, drive, tolerance=1e-10).channels
        plain = evolve_batch(system, drive)
        for tolerance in (1e-5, 1e-8):
            found = evolve_batch(system, drive, tolerance=tolerance)
            assert 0 < found.step_error <= tolerance
            assert np.abs(found.channels - exact).max() < tolerance
        true = float(np.abs(plain.channels - exact).max())
        # Fourth order: halving takes all but a sixteenth, with next orders beside it.
        assert plain.step_error == pytest.approx(true, rel=0.3)

    def test_fourth_order(self) -> None:
        def errors(count: int) -> FloatArray:
            x = np.linspace(0, 1, count + 1)
            size = 2 * np.pi * 25e6
            first = size * (0.3 + 0.7 * x) * np.exp(1.5j * np.sin(6 * x))
            controls = (first, size * np.cos(3 * x), 0.2 * size * x)
            drive = BatchControls(40e-9 / count, controls, 4)
            return propagate_batch(driven_pair(), drive).unitaries

        exact = errors(8192)
        found = [float(np.abs(errors(count) - exact).max()) for count in (128, 256)]
        assert found[1] > 1e-9  # Above rounding.
        # The next order is a few percent at these steps.
        assert math.log2(found[0] / found[1]) == pytest.approx(4.0, abs=0.15)


class TestErrors:
    def test_bad_systems(self) -> None:
        with pytest.raises(InputError, match="static part is not Hermitian"):
            BatchSystem(FIRST, (HOP,))
        with pytest.raises(InputError, match="2 to 9 states"):
            BatchSystem(np.eye(10), (np.eye(10),))
        with pytest.raises(InputError, match="square static part"):
            BatchSystem(np.zeros((2, 3)), (np.eye(2),))
        with pytest.raises(InputError, match="at least one operator"):
            BatchSystem(NOTHING, ())
        with pytest.raises(InputError, match=r"operators\[1\] must have the shape \(4, 4\)"):
            BatchSystem(NOTHING, (HOP, LOWER))
        with pytest.raises(InputError, match=r"collapse\[0\] is not finite"):
            BatchSystem(NOTHING, (HOP,), (np.nan * FIRST,))

    def test_bad_controls(self) -> None:
        good = np.ones((3, 7))
        for step in (0.0, -1.0, np.nan):
            with pytest.raises(InputError, match="step > 0"):
                BatchControls(step, (good,))
        with pytest.raises(InputError, match="order 1 or 4"):
            BatchControls(1e-9, (good,), 2)
        for wrong in ((), (good, np.ones((2, 1))), (np.ones((2, 3, 4)),), (np.ones((0, 3)),)):
            with pytest.raises(InputError, match="that go together"):
                BatchControls(1e-9, wrong)
        with pytest.raises(InputError, match="odd number of samples"):
            BatchControls(1e-9, (good[:, :6],), 4)
        spoilt = good.copy()
        spoilt[2, 4] = np.inf
        with pytest.raises(InputError, match="control 1 is not finite in row 2, sample 4"):
            BatchControls(1e-9, (good, spoilt))

    def test_what_does_not_belong_together(self) -> None:
        system, one = BatchSystem(NOTHING, (HOP,)), np.ones(5)
        with pytest.raises(InputError, match="a control for each of 1 operators, got 2"):
            propagate_batch(system, BatchControls(1e-9, (one, one)))
        with pytest.raises(InputError, match="got BatchSystem with BatchDrive"):
            propagate_batch(system, BatchDrive(1e-9, one))
        with pytest.raises(InputError, match="got Qubit with BatchControls"):
            evolve_batch(Qubit(5e9), BatchControls(1e-9, (one,)))
        with pytest.raises(InputError, match=r"control 0 comes up to (.|\n)*check their units"):
            propagate_batch(system, BatchControls(1.0, (1e8 * one,)))
