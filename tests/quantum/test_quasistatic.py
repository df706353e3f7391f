"""Oracle: Gaussian averages in closed form, and adaptive quadrature of the same functions."""

import math

import numpy as np
import pytest
from scipy.integrate import quad

from cosim.errors import EvolutionError, InputError
from cosim.quantum.channel import unitary_superoperator
from cosim.quantum.fidelity import average_gate_fidelity, target_unitary
from cosim.quantum.quasistatic import gaussian_average
from cosim.waveform import ComplexArray, FloatArray
from tests import sources
from tests.validation import Validate

TOPIC = "dynamics in the rotating-wave approximation"

IDENTITY = np.eye(2, dtype=np.complex128)


def channels(axis: tuple[float, float, float], angles: FloatArray) -> ComplexArray:
    return np.array([unitary_superoperator(target_unitary(axis, angle)) for angle in angles])


class TestGaussianAverage:
    def test_random_amplitude(self, validate: Validate) -> None:
        turn = target_unitary((1, 0, 0), math.pi)
        found = gaussian_average(
            lambda points: channels((1, 0, 0), math.pi * (1 + points[:, 0])), [0.01]
        )
        infidelity = 1 - average_gate_fidelity(found.value, turn)
        quantity = "infidelity of a pi pulse of random amplitude, 1 % rms"
        # Rounding of the card to seven digits.
        source = sources.GAUSSIAN_INTEGRAL
        validate(quantity, source, 0.0001644528, infidelity, rel=5e-7, card="A07")

    def test_white_amplitude_noise(self, validate: Validate) -> None:
        # White noise turns a pi pulse by a Gaussian angle of variance pi^2 S1/(2 tau).
        sigma = math.sqrt(1e-13 / (2 * 50e-9))
        quantity = "equivalent rms amplitude error of white noise"
        validate(quantity, sources.LINDBLAD_WHITE, 0.001, sigma, rel=1e-12, card="C05")
        turn = target_unitary((1, 0, 0), math.pi)
        found = gaussian_average(
            lambda points: channels((1, 0, 0), math.pi * (1 + points[:, 0])),
            [sigma],
            tolerance=1e-13,
        )
        infidelity = 1 - average_gate_fidelity(found.value, turn)
        quantity = "infidelity of a pi pulse in white amplitude noise, all orders"
        # Rounding of the card to six digits, 3e-7, and of 1 - F, 1e-16 of 1.6e-6.
        validate(quantity, sources.LINDBLAD_WHITE, 1.64493e-6, infidelity, rel=1e-6, card="C05")

    def test_ramsey(self, validate: Validate) -> None:
        sigma, t = 2 * math.pi * 2e4, 5e-6
        found = gaussian_average(lambda points: channels((0, 0, 1), points[:, 0] * t), [sigma])
        # Row and column of <0|rho|1>.
        quantity = "coherence after 5 us of quasi-static detuning, 20 kHz rms"
        got = found.value[2, 2].real
        validate(quantity, sources.HANSON, 0.8208687, got, rel=5e-7, card="B05")
        validate(quantity, sources.HANSON, math.exp(-((sigma * t) ** 2) / 2), got, rel=1e-9)
        quantity = "T2* of 20 kHz rms"
        got = t / math.sqrt(-math.log(got))
        validate(quantity, sources.HANSON, 1.125395e-5, got, "s", rel=5e-7, card="B05")
        assert found.change <= 1e-9

    def test_spin_lock(self, validate: Validate) -> None:
        omega, sigma, t = 2 * math.pi * 1e6, 2 * math.pi * 2e5, 2.3e-6

        def locked(delta: FloatArray | float) -> FloatArray:
            total = omega**2 + np.square(delta)
            return (omega**2 + np.square(delta) * np.cos(np.sqrt(total) * t)) / total

        def weighted(x: float) -> float:
            return float(locked(sigma * x)) * math.exp(-(x**2) / 2) / math.sqrt(2 * math.pi)

        found = gaussian_average(lambda points: locked(points[:, 0]), [sigma], tolerance=1e-8)
        wanted = quad(weighted, -12, 12, epsabs=1e-12, limit=200)[0]
        quantity = "locked spin in quasi-static detuning, a fifth of the Rabi frequency"
        # Ten times the change that was asked for.
        validate(quantity, sources.RABI, wanted, float(found.value), abs=1e-7)

    @pytest.mark.parametrize("count", [2, 3])
    def test_independent_parameters(self, count: int) -> None:
        sigma = [0.3, 0.5, 0.2][:count]
        found = gaussian_average(lambda points: np.exp(1j * points.sum(axis=1)), sigma)
        # Ten times the change that was asked for.
        wanted = math.exp(-sum(value**2 for value in sigma) / 2)
        assert found.value == pytest.approx(wanted, abs=1e-8)
        # Products of even powers: <x^2 y^4> = 3 s^2 r^4, exact from three nodes on.
        powers = gaussian_average(lambda points: points[:, 0] ** 2 * points[:, 1] ** 4, sigma)
        assert powers.nodes == 8
        assert powers.value == pytest.approx(3 * sigma[0] ** 2 * sigma[1] ** 4, rel=1e-12)

    def test_a_parameter_that_does_not_vary(self) -> None:
        found = gaussian_average(lambda points: np.cos(points[:, 0]) + points[:, 1], [0.4, 0.0])
        assert found.value == pytest.approx(math.exp(-0.08), abs=1e-8)
        assert found.points == found.nodes
        still = gaussian_average(lambda points: 3 + points, [0.0])
        assert still.value == pytest.approx([3.0])
        assert still.points == 1

    def test_nodes_are_doubled_as_far_as_needed(self) -> None:
        few = gaussian_average(lambda points: np.cos(points[:, 0]), [0.1])
        many = gaussian_average(lambda points: np.cos(points[:, 0]), [6.0])
        assert few.nodes == 8
        assert many.nodes > 16
        assert many.value == pytest.approx(math.exp(-18.0), abs=1e-8)

    def test_errors(self) -> None:
        def tone(points: FloatArray) -> FloatArray:
            return np.cos(points.sum(axis=1))

        with pytest.raises(
            EvolutionError, match=r"below 1e-09 .* at 256 nodes .* of 100\n"
        ) as info:
            gaussian_average(tone, [100.0])
        assert "draw the parameter at random" in info.value.hint
        with pytest.raises(EvolutionError, match=r"at 64 nodes"):
            gaussian_average(tone, [20.0, 20.0, 20.0])
        for wrong in ([], [1.0] * 4, [-1.0], [math.nan]):
            with pytest.raises(InputError, match="standard deviations"):
                gaussian_average(tone, wrong)
        with pytest.raises(InputError, match="positive tolerance"):
            gaussian_average(tone, [1.0], tolerance=0.0)
        with pytest.raises(InputError, match=r"one value for each of 4 points, got .* \(\)"):
            gaussian_average(lambda points: np.array(1.0), [1.0])
        with pytest.raises(InputError, match="not finite at"):
            gaussian_average(lambda points: np.full(len(points), np.nan), [1.0])

    def test_channel_of_unitaries_stays_identity_without_noise(self) -> None:
        found = gaussian_average(lambda points: channels((0, 0, 1), points[:, 0]), [0.0])
        assert found.value == pytest.approx(unitary_superoperator(IDENTITY))
