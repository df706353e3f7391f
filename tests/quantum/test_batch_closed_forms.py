"""Oracle: closed forms of driven and idle qubits, orders of convergence, physicality."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cosim.quantum.batch import BatchDrive, evolve_batch, mean_channel, propagate_batch
from cosim.quantum.channel import PAULI, apply_channel, check_channel, pauli_transfer_matrix
from cosim.quantum.fidelity import average_gate_fidelity, process_fidelity
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray, FloatArray
from tests import sources
from tests.validation import Validate

TOPIC = "dynamics in the rotating-wave approximation"
# The same examples in every run, so that a failure can be repeated; no limit on time.
PROPERTY = settings(derandomize=True, deadline=None, max_examples=30)
TWO = Qubit(5e9)
# The cards carry seven digits.
DIGITS = 1e-6


def constant(rabi: float, time: float, samples: int) -> tuple[float, ComplexArray]:
    return time / samples, np.full(samples, 2 * np.pi * rabi, dtype=complex)


class TestTwoLevels:
    def test_rabi_formula_over_a_batch_of_detunings(self, validate: Validate) -> None:
        step, rate = constant(10e6, 50e-9, 64)
        detuning = 2 * np.pi * np.linspace(-40e6, 40e6, 17)
        found = propagate_batch(TWO, BatchDrive(step, rate, detuning[:, None])).unitaries
        turn = np.hypot(rate[0].real, detuning)
        wanted = (rate[0].real / turn) ** 2 * np.sin(turn * 25e-9) ** 2
        assert np.abs(np.abs(found[:, 1, 0]) ** 2 - wanted).max() < 1e-13  # Rounding.

        card = BatchDrive(step, rate, 2 * np.pi * 5e6)
        excited = float(abs(propagate_batch(TWO, card).unitaries[0, 1, 0]) ** 2)
        quantity = "population of |1> at 10 MHz, detuned by 5 MHz, after 50 ns, by the batch"
        validate(quantity, sources.RABI, 0.772813, excited, rel=DIGITS, card="B01")

    @pytest.mark.parametrize("order", [1, 4])
    def test_trials_of_size_and_detuning_together(self, order: int) -> None:
        # A calibration's grid: each row has its own size of one constant pulse, and a detuning.
        step, rate = constant(10e6, 50e-9, 65)
        scale, detuning = np.meshgrid(np.linspace(0.5, 1.5, 9), np.linspace(-6e7, 6e7, 5))
        rates = rate * scale.reshape(-1, 1)
        drive = BatchDrive(step, rates, detuning.reshape(-1, 1), order)
        found = np.abs(propagate_batch(TWO, drive).unitaries[:, 1, 0]) ** 2
        channels = evolve_batch(TWO, drive).channels[:, 3, 0].real
        size = np.abs(rates[:, 0])
        turn = np.hypot(size, detuning.reshape(-1))
        wanted = (size / turn) ** 2 * np.sin(turn * drive.duration / 2) ** 2
        assert np.ptp(wanted) > 0.5
        # Rounding of 65 products.
        assert np.abs(found - wanted).max() < 1e-13
        assert np.abs(channels - wanted).max() < 1e-13

    @pytest.mark.parametrize("phase", [0.0, 0.7, np.pi / 2])
    def test_a_phase_turns_the_axis(self, phase: float) -> None:
        step, rate = constant(5e6, 50e-9, 10)
        found = propagate_batch(TWO, BatchDrive(step, rate * np.exp(1j * phase))).unitaries[0]
        # A quarter turn about (cos phi, -sin phi, 0): the convention of the drive's phase.
        axis = math.cos(phase) * PAULI[1] - math.sin(phase) * PAULI[2]
        wanted = (np.eye(2) - 1j * axis) / math.sqrt(2)
        assert np.abs(found - wanted).max() < 1e-14  # Rounding.

    def test_quasi_static_detuning_washes_out_a_coherence(self, validate: Validate) -> None:
        t2_star, time, count = 1e-6, 0.7e-6, 20_000
        spread = math.sqrt(2) / t2_star
        detuning = np.random.default_rng(8).normal(size=count) * spread
        idle = BatchDrive(time, np.zeros(1, dtype=complex), detuning[:, None])
        found = mean_channel(TWO, idle)
        # |0><1| stands in row and column 2.
        coherence, error = found.channel[2, 2], float(found.standard_error[2, 2])
        wanted = math.exp(-((time / t2_star) ** 2))
        # The error of a sampled mean, from the closed form of the variance.
        assert error == pytest.approx(math.sqrt((1 - wanted**2) / count), rel=0.03)
        quantity = "coherence after 0.7 T2* of quasi-static detuning, 20,000 samples"
        source = sources.GAUSSIAN_INTEGRAL
        # Four standard errors of the fixed sample.
        validate(quantity, source, wanted, float(coherence.real), abs=4 * error, digits=3)


class TestLoss:
    def test_idle(self, validate: Validate) -> None:
        for population in (0.0, 0.2):
            qubit = Qubit(5e9, t1=30e-6, t2=20e-6, thermal_population=population)
            idle = BatchDrive(10e-9, np.zeros(10, dtype=complex))
            channel = evolve_batch(qubit, idle).channels[0]
            for quantity, wanted, got, rel in (
                ("F_pro", 0.9966743, process_fidelity(channel, np.eye(2)), DIGITS),
                ("1 - F_avg", 0.002217138, 1 - average_gate_fidelity(channel, np.eye(2)), 1e-5),
            ):
                quantity += f" of an idle of 100 ns by the batch, thermal {population}"
                source = "trace of the Pauli transfer matrix, computed from the formula"
                validate(quantity, source, wanted, got, rel=rel, card="A08")

    def test_driven_pi_pulse(self, validate: Validate) -> None:
        step, rate = constant(10e6, 50e-9, 100)
        qubit = Qubit(5e9, t1=30e-6, t2=20e-6)
        channel = evolve_batch(qubit, BatchDrive(step, rate)).channels[0]
        got = 1 - average_gate_fidelity(channel, PAULI[1])
        quantity = "1 - F_avg of X180 of 50 ns, T1 30 us, T2 20 us, by the batch"
        validate(quantity, sources.ABAD, 0.0011099, got, rel=1e-3, card="A09", digits=5)

    def test_bloch_equations_without_a_drive(self) -> None:
        t1, t2, p, time = 2e-6, 1.5e-6, 0.2, 0.4e-6
        qubit = Qubit(5e9, t1=t1, t2=t2, thermal_population=p)
        idle = BatchDrive(time / 8, np.zeros(8, dtype=complex))
        found = pauli_transfer_matrix(evolve_batch(qubit, idle).channels[0])
        along, across = math.exp(-time / t1), math.exp(-time / t2)
        wanted = np.diag([1, across, across, along])
        wanted[3, 0] = (1 - 2 * p) * (1 - along)
        # Nothing turns, so that the placing of the dissipation costs nothing: rounding.
        assert np.abs(found - wanted).max() < 1e-13

    @pytest.mark.parametrize(
        ("levels", "anharmonicity"),
        [
            (3, -0.3e9),
            pytest.param(6, -0.01e9, marks=pytest.mark.full),
            pytest.param(6, 0.0, marks=pytest.mark.full),
        ],
    )
    def test_higher_levels_decay_as_an_oscillator(self, levels: int, anharmonicity: float) -> None:
        qubit = Qubit(5e9, levels, anharmonicity, t1=1e-6, t2=2e-6)
        time, top = 0.3e-6, levels - 1
        channel = evolve_batch(qubit, BatchDrive(time / 4, np.zeros(4, dtype=complex))).channels[0]
        ground = np.zeros((levels, levels), dtype=complex)
        ground[top, top] = 1
        populations = apply_channel(channel, ground).diagonal().real
        x = math.exp(-time / 1e-6)
        # Each quantum survives with probability x, independently: the binomial law (textbook).
        wanted = [math.comb(top, n) * x**n * (1 - x) ** (top - n) for n in range(levels)]
        # Rounding of up to some thousand panels.
        assert populations == pytest.approx(wanted, abs=1e-11)

    @pytest.mark.parametrize("t1", [math.inf, 0.2e-6])
    def test_a_driven_oscillator_stays_coherent(self, validate: Validate, t1: float) -> None:
        # R. J. Glauber, Phys. Rev. 131, 2766 (1963), with the damped oscillator's equation of
        # motion, beta' = -(i delta + 1/(2 t1)) beta - i rate^*/2.
        qubit = Qubit(5e9, 6, 0.0, t1=t1, t2=2 * t1)
        time, rate, delta = 20e-9, 3e7 * np.exp(0.6j), 4e7
        channel = evolve_batch(qubit, BatchDrive(time / 400, np.full(400, rate), delta)).channels[0]
        decay = 1j * delta + 1 / (2 * t1)
        beta = -0.5j * np.conj(rate) * (1 - np.exp(-decay * time)) / decay
        vacuum = np.zeros((6, 6), dtype=complex)
        vacuum[0, 0] = 1
        found = apply_channel(channel, vacuum)
        n = np.arange(6)
        norms = np.sqrt([math.factorial(int(k)) for k in n])
        state = np.exp(-(abs(beta) ** 2) / 2) * beta**n / norms
        assert abs(beta) > 0.2
        # |beta| = 0.26 leaves an amplitude |beta|**6/sqrt(6!) = 1e-5 above the levels kept, which
        # acts back on the two lowest with further powers of |beta|.
        assert np.abs(found - np.outer(state, state.conj()))[:2, :2].max() < 1e-6
        loss = "without loss" if t1 == math.inf else f"T1 {t1 * 1e6:g} us"
        quantity = f"population of |1> of an oscillator driven in the batch, {loss}"
        wanted = float(abs(state[1]) ** 2)
        validate(quantity, sources.GLAUBER, wanted, float(found[1, 1].real), abs=1e-6, digits=12)


class TestOrder:
    """Halving the steps of a smooth drive with chirp, against one with very many."""

    TIME = 40e-9

    def rate(self, t: FloatArray) -> ComplexArray:
        x = t / self.TIME
        # Unlike at both ends: else the first order of held slices would cancel.
        return np.asarray(2 * np.pi * 25e6 * (0.3 + 0.7 * x) * np.exp(1.5j * np.sin(6 * x)))

    def errors(self, qubit: Qubit, place: float, order: int) -> FloatArray:
        def run(count: int) -> ComplexArray:
            step = self.TIME / count
            index = np.arange(count) + place if order == 1 else np.arange(count + 1.0)
            drive = BatchDrive(step, self.rate(index * step), order=order)
            return evolve_batch(qubit, drive).channels[0]

        step = self.TIME / 16384
        exact = evolve_batch(
            qubit, BatchDrive(step, self.rate(np.arange(16385) * step), order=4)
        ).channels[0]
        return np.array([np.abs(run(count) - exact).max() for count in (128, 256, 512)])

    @pytest.mark.parametrize("levels", [2, 3, 4])
    @pytest.mark.parametrize(
        ("place", "order", "slope", "name"),
        [
            (0.0, 1, 1.0, "slices held from their start"),
            (0.5, 1, 2.0, "slices held from their middle"),
            (0.0, 4, 4.0, "smooth steps"),
        ],
    )
    def test_closed(
        self, validate: Validate, levels: int, place: float, order: int, slope: float, name: str
    ) -> None:
        errors = self.errors(Qubit(5e9, levels, -0.2e9), place, order)
        assert errors[-1] > 1e-10  # Above rounding.
        got = float(np.log2(errors[1] / errors[2]))
        source = "expansion in the step, computed from the formula"
        quantity = f"order of the batch's {name}, {levels} levels"
        # The next order is a few percent at these steps.
        validate(quantity, source, slope, got, abs=0.1, digits=12)

    @pytest.mark.parametrize("levels", [2, 3])
    def test_open(self, levels: int) -> None:
        errors = self.errors(Qubit(5e9, levels, -0.2e9, 30e-6, 20e-6), 0.0, 4)
        # The panels follow the steps only where these are the shorter ones.
        assert np.log2(errors[0] / errors[1]) == pytest.approx(4.0, abs=0.2)


class TestPhysical:
    @pytest.mark.full
    @PROPERTY
    @given(
        levels=st.integers(2, 5),
        seed=st.integers(0, 2**31),
        size=st.floats(0, 3e9),
        step=st.floats(1e-12, 2e-9),
        order=st.sampled_from([1, 4]),
        t1=st.floats(1e-7, 1e-3),
        ratio=st.floats(0.05, 2.0),
        population=st.floats(0.0, 0.5),
    )
    def test_trace_and_positivity(
        self,
        levels: int,
        seed: int,
        size: float,
        step: float,
        order: int,
        t1: float,
        ratio: float,
        population: float,
    ) -> None:
        rng = np.random.default_rng(seed)
        rate = size * (rng.normal(size=(2, 9)) + 1j * rng.normal(size=(2, 9)))
        drive = BatchDrive(step, rate, 0.3 * size * rng.normal(size=(2, 9)), order)
        qubit = Qubit(5e9, levels, -0.25e9, t1, ratio * t1, population)
        for channel in evolve_batch(qubit, drive).channels:
            # Unitaries and exponentials of the dissipator are channels, so only rounding is left.
            check_channel(channel, tolerance=1e-11)

    @PROPERTY
    @given(levels=st.integers(2, 6), seed=st.integers(0, 2**31), size=st.floats(0, 1e10))
    def test_unitary_for_any_size_of_drive(self, levels: int, seed: int, size: float) -> None:
        rng = np.random.default_rng(seed)
        rate = size * (rng.normal(size=(2, 7)) + 1j * rng.normal(size=(2, 7)))
        found = propagate_batch(Qubit(5e9, levels, -0.25e9), BatchDrive(1e-9, rate)).unitaries
        product = found.conj().transpose(0, 2, 1) @ found
        # Rounding; up to 200 rad in a slice.
        assert np.abs(product - np.eye(levels)).max() < 1e-11
