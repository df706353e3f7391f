"""Oracle: closed forms of decay under noise, against averages over seeded sample paths.

Sampled numbers scatter: each tolerance is four standard errors of the mean, estimated from the
closed form or the samples, plus what the grid leaves. The seeds are fixed.
"""

import math

import numpy as np
import pytest

from cosim.dsp.noise.density import Lorentzian, PowerLaw, SpectralDensity
from cosim.dsp.noise.paths import PathPlan, plan_paths, sample_paths, telegraph_paths
from cosim.errors import InputError
from cosim.quantum.heating import flip_rate
from cosim.waveform import ComplexArray, FloatArray
from tests import sources
from tests.validation import Validate

TOPIC = "dynamics in the rotating-wave approximation"

SAMPLES = 4000
ERRORS = 4.0


def accumulated(paths: FloatArray, dt: float) -> FloatArray:
    """Give the phase of each path of a detuning at the end, each sample for one interval."""
    return paths.sum(axis=1) * dt


def echoed(paths: FloatArray, dt: float) -> FloatArray:
    half = paths.shape[1] // 2
    return accumulated(paths[:, :half], dt) - accumulated(paths[:, half:], dt)


def sampled_chi(
    density: SpectralDensity, name: str, t: float, n: int, seed: int, *, offset: bool = False
) -> tuple[float, float]:
    """Give half the variance of the phase of a sequence, and how far it may be off."""
    plan = plan_paths(density, n, t / n, slowest=0.01 / t)
    paths = sample_paths(plan, seed, 0, SAMPLES, offset=offset)
    phases = (accumulated if name == "FID" else echoed)(paths, t / n)
    chi = float(np.mean(phases**2)) / 2
    error = chi * math.sqrt(2 / SAMPLES)
    # What is slower than a hundredth of 1/t counts as constant: a free induction sees all of it,
    # an echo none. Both are wrong by (pi/100)^2/3 of it at the most.
    slow = plan.slow_variance * t**2 / 2
    if name == "FID" and not offset:
        chi += slow
    # The grid's steps leave less than 1/(4 n^2) of any chi here.
    return chi, ERRORS * error + 3.3e-4 * slow


def turn(axis: FloatArray, angle: FloatArray) -> ComplexArray:
    """Give exp(-i angle axis.sigma/2) for axes of shape (samples, 3)."""
    half = angle / 2
    c, s = np.cos(half), np.sin(half)
    x, y, z = (axis[:, k] for k in range(3))
    rows = [[c - 1j * s * z, -1j * s * (x - 1j * y)], [-1j * s * (x + 1j * y), c + 1j * s * z]]
    return np.array(rows).transpose(2, 0, 1)


def evolve(field: FloatArray, dt: float, state: ComplexArray) -> ComplexArray:
    """Evolve a state under fields of shape (samples, n, 3) in rad/s, each for one interval."""
    states = np.broadcast_to(state, (field.shape[0], 2))[..., None]
    for k in range(field.shape[1]):
        size = np.linalg.norm(field[:, k], axis=1)
        states = turn(field[:, k] / size[:, None], size * dt) @ states
    return states[..., 0]


@pytest.mark.parametrize("name", ["FID", "echo"])
class TestFreeInductionAndEcho:
    @pytest.mark.full
    def test_ornstein_uhlenbeck(self, validate: Validate, name: str) -> None:
        density = SpectralDensity("rad/s", (Lorentzian((2 * math.pi * 5e4) ** 2, 1e-5),))
        wanted = {"FID": 2.460778, "echo": 0.3153459}[name]
        chi, allowed = sampled_chi(density, name, 8e-6, 800, 11)
        quantity = f"chi of {name} over sampled Ornstein-Uhlenbeck paths"
        source = sources.KLAUDER_ANDERSON
        validate(quantity, source, wanted, chi, abs=allowed, card="B06")
        # The cosine of a Gaussian phase: its scatter is below 1/sqrt(2).
        plan = plan_paths(density, 800, 1e-8, slowest=1e3)
        paths = sample_paths(plan, 11, 0, SAMPLES, offset=True)
        got = float(np.mean(np.cos((accumulated if name == "FID" else echoed)(paths, 1e-8))))
        quantity = f"coherence of {name} over sampled Ornstein-Uhlenbeck paths"
        wanted = {"FID": 0.08536849, "echo": 0.7295365}[name]
        allowed = ERRORS / math.sqrt(2 * SAMPLES)
        validate(quantity, source, wanted, got, abs=allowed, card="B06")

    def test_white(self, validate: Validate, name: str) -> None:
        density = SpectralDensity("rad/s", (PowerLaw(2e5),))
        chi, allowed = sampled_chi(density, name, 1e-5, 200, 12)
        quantity = f"chi of {name} over sampled white paths"
        validate(quantity, sources.CYWINSKI, 0.5, chi, abs=allowed, card="C01")

    @pytest.mark.full
    def test_one_over_f(self, validate: Validate, name: str) -> None:
        level = (2 * math.pi * 5e3) ** 2
        density = SpectralDensity("rad/s", (PowerLaw(level, 1.0, low=1.0),))
        wanted = {"FID": 1.955107, "echo": 0.1368218}[name]
        chi, allowed = sampled_chi(density, name, 2e-5, 1000, 13)
        quantity = f"chi of {name} over sampled 1/f paths"
        validate(quantity, sources.ITHIER, wanted, chi, abs=allowed, card="C02")
        # The quasi-static part as drawn offsets.
        chi, allowed = sampled_chi(density, name, 2e-5, 1000, 13, offset=True)
        assert chi == pytest.approx(wanted, abs=allowed)


class TestTelegraph:
    @pytest.mark.parametrize(
        ("speed", "rate", "wanted"), [("slow", 2e4, 0.06060364), ("fast", 5e6, 0.9527455)]
    )
    def test_random_telegraph(
        self, validate: Validate, speed: str, rate: float, wanted: float
    ) -> None:
        v, t, n = 2 * math.pi * 5e4, 5e-6, 500
        paths = telegraph_paths(v, rate, n + 1, t / n, 14, 0, SAMPLES)
        # The mean of the two ends of each interval: exact unless the signal flips twice in it,
        # where the phase is off by v dt at the most, and 10 ns are 3e-3 rad.
        phases = accumulated((paths[:, 1:] + paths[:, :-1]) / 2, t / n)
        coherence = np.cos(phases)
        error = float(coherence.std()) / math.sqrt(SAMPLES)
        quantity = f"coherence under {speed} random telegraph noise, sampled"
        got = float(coherence.mean())
        validate(quantity, sources.PALADINO, wanted, got, abs=ERRORS * error, card="C20")
        assert error < 0.02


class TestSpinLock:
    OMEGA = 2 * math.pi * 10e6

    def rate(self, density: SpectralDensity, seed: int) -> tuple[float, float, PathPlan]:
        """Give the loss rate of a spin locked for 10 us, its standard error and the plan."""
        t, n, samples = 10e-6, 2000, 1000
        plan = plan_paths(density, n, t / n)
        field = np.zeros((samples, n, 3))
        field[:, :, 0] = self.OMEGA
        field[:, :, 2] = sample_paths(plan, seed, 0, samples, offset=True)
        states = evolve(field, t / n, np.array([1, 1]) / math.sqrt(2))
        locked = 2 * (states[:, 0].conj() * states[:, 1]).real
        mean = float(locked.mean())
        error = float(locked.std()) / math.sqrt(samples) / mean
        return -math.log(mean) / t, error / t, plan

    def test_white(self, validate: Validate) -> None:
        level = 1.6e5
        got, error, _ = self.rate(SpectralDensity("rad/s", (PowerLaw(level),)), 21)
        quantity = "loss rate of a locked spin over sampled white paths"
        # The steps of 5 ns pass sinc^2(f dt) = 0.992 of the noise at 10 MHz.
        allowed = ERRORS * error + 0.01 * level / 4
        validate(quantity, sources.ITHIER, level / 4, got, "1/s", abs=allowed)

    def test_one_over_f(self, validate: Validate) -> None:
        level = 1.6e12
        density = SpectralDensity("rad/s", (PowerLaw(level, 1.0, low=1.0),))
        got, error, plan = self.rate(density, 22)
        quantity = "loss rate of a locked spin over sampled 1/f paths"
        # Noise below the Rabi frequency tilts the lock: a loss of its variance over Omega^2, once.
        tilt = (plan.slow_variance + plan.variance) / self.OMEGA**2 / 10e-6
        assert tilt < 0.05 * level / 4e7
        allowed = ERRORS * error + 0.01 * level / 4e7 + tilt
        validate(quantity, sources.ITHIER, level / 10e6 / 4, got, "1/s", abs=allowed)

    def test_ornstein_uhlenbeck(self, validate: Validate) -> None:
        density = SpectralDensity("rad/s", (Lorentzian((2 * math.pi * 0.4e6) ** 2, 50e-9),))
        got, error, plan = self.rate(density, 23)
        wanted = float(density.at(10e6)) / 4
        quantity = "loss rate of a locked spin over sampled Ornstein-Uhlenbeck paths"
        # The steps, and the tilt as above.
        tilt = (plan.slow_variance + plan.variance) / self.OMEGA**2 / 10e-6
        allowed = ERRORS * error + 0.01 * wanted + tilt
        validate(quantity, sources.ITHIER, wanted, got, "1/s", abs=allowed)


class TestGate:
    def test_white_amplitude_noise(self, validate: Validate) -> None:
        tau, n = 50e-9, 50
        level = 1e-10
        plan = plan_paths(SpectralDensity("1", (PowerLaw(level),)), n, tau / n)
        eps = sample_paths(plan, 31, 0, SAMPLES, offset=True)
        angle = math.pi * eps.mean(axis=1)
        error = 2 / 3 * np.sin(angle / 2) ** 2
        wanted = (1 - math.exp(-(math.pi**2) * level / (4 * tau))) / 3
        quantity = "infidelity of a pi pulse over sampled white amplitude paths"
        # Relative scatter of a chi-square number: sqrt(2/4000), four of these. The offset counts
        # 3 % too much of a fifth.
        allowed = (ERRORS * math.sqrt(2 / SAMPLES) + 6e-3) * wanted
        source = sources.LINDBLAD_WHITE
        validate(quantity, source, wanted, float(error.mean()), abs=allowed)


class TestHeating:
    def test_white_noise_against_the_golden_rule(self, validate: Validate) -> None:
        """Flips under the real force, in the frame of the qubit, without rotating wave."""
        frequency, n, samples = 0.1e9, 500, 1000
        dt, level = 1e-9, 1e6
        plan = plan_paths(SpectralDensity("rad/s", (PowerLaw(level),)), n, dt)
        force = sample_paths(plan, 41, 0, samples, offset=True)
        phase = 2 * math.pi * frequency * dt * (np.arange(n) + 0.5)
        # rate (sigma exp(-i omega t) + its conjugate): a field 2 rate (cos, sin, 0).
        field = 2 * force[..., None] * np.stack([np.cos(phase), np.sin(phase), 0 * phase], axis=-1)
        rate = flip_rate(level)
        wanted = (1 - math.exp(-2 * rate * n * dt)) / 2
        # Force and phase are constant in each step, so that <z> falls by exp(-level dt) in each.
        for start in (0, 1):
            states = evolve(field, dt, np.eye(2)[start].astype(complex))
            flipped = np.abs(states[:, 1 - start]) ** 2
            error = float(flipped.std()) / math.sqrt(samples)
            quantity = f"population flipped from |{start}> by white noise of the drive"
            got = float(flipped.mean())
            validate(quantity, sources.GOLDEN_RULE, wanted, got, abs=ERRORS * error)
            assert error < 0.03 * wanted

    def test_rate_from_volts(self, validate: Validate) -> None:
        # 85 MHz/V and 1 nV/sqrt(Hz), in the units of the drive rate: (2 pi k)^2 S_v/2 each way.
        rate = flip_rate((2 * math.pi * 85e6) ** 2 * 1e-18)
        quantity = "flip rate by 1 nV/sqrt(Hz) at 85 MHz/V"
        # Rounding to seven digits.
        validate(quantity, sources.GOLDEN_RULE, 0.1426158, rate, "1/s", rel=5e-7)

    def test_a_density_that_is_none(self) -> None:
        for wrong in (-1.0, math.nan):
            with pytest.raises(InputError, match="density of at least zero"):
                flip_rate(wrong)
