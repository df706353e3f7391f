"""Oracle: integrals of densities by scipy, dense linear algebra, Bennett's law, IEEE Std 1241."""

import math

import numpy as np
import pytest
from scipy.integrate import quad

from cosim.dsp.detection.converter import (
    Adc,
    clipped_share,
    filter_records,
    quantisation_variance,
    quantise,
    sampled_lags,
    settling_samples,
)
from cosim.dsp.detection.output_noise import (
    OutputNoise,
    draw_lines,
    draw_noise,
    noise_lags,
    plan_noise,
)
from cosim.dsp.detection.projection import project, snr_over_time
from cosim.dsp.detection.reception import ChainOutput, Detector, receive
from cosim.dsp.detection.records import Records
from cosim.dsp.detection.weights import Rule, whitened
from cosim.dsp.noise.paths import generator
from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray
from tests import sources
from tests.validation import Validate

TOPIC = "readout"
STEP = 2e-9
F = np.linspace(-250e6, 250e6, 201)


def coloured(quadratures: int = 2) -> OutputNoise:
    """A floor and a resonance, beside the carrier for I + jQ and about it for one output."""
    centre = 12e6 if quadratures == 2 else 0.0
    return OutputNoise(1e-10, F, 2e-9 / (1 + ((F - centre) / 20e6) ** 2), quadratures)


def table_integral(noise: OutputNoise, weight: ComplexArray) -> complex:
    """Integrate the table times a weight of the frequency, fine enough for the trapezoidal rule."""
    fine = np.linspace(-250e6, 250e6, weight.size)
    return complex(np.trapezoid((noise.at(fine) - noise.white) * weight, fine))


class TestCovariance:
    def test_of_straight_lines(self) -> None:
        noise = coloured()
        lags = noise_lags(noise, STEP, 40)
        for k in (0, 1, 7, 39):
            parts = [
                quad(
                    lambda f, k=k, part=part: (
                        (noise.at(f) - noise.white) * getattr(np, part)(2 * np.pi * f * k * STEP)
                    ),
                    -250e6,
                    250e6,
                    points=list(F[1:-1]),
                    limit=2000,
                )[0]
                for part in ("cos", "sin")
            ]
            wanted = complex(*parts) + (noise.white / STEP if k == 0 else 0)
            # Rounding of sums over 200 intervals.
            assert lags[k] == pytest.approx(wanted, abs=1e-10 * abs(lags[0]))

    def test_white_noise_has_the_band_of_the_grid(self) -> None:
        lags = noise_lags(OutputNoise(white=3e-9), STEP, 5)
        assert lags == pytest.approx([1.5, 0, 0, 0, 0], abs=1e-15)

    def test_the_power_is_the_integral(self, validate: Validate) -> None:
        noise = coloured()
        power = float(np.trapezoid(noise.density, noise.frequencies)) + noise.white / STEP
        got = float(noise_lags(noise, STEP, 1)[0].real)
        quantity = "power of noise over its density's integral"
        validate(quantity, sources.WIENER_KHINCHIN, 1.0, got / power, rel=1e-12)


@pytest.mark.parametrize("quadratures", [1, 2])
@pytest.mark.parametrize("rule", ["boxcar", "matched", "whitened"])
def test_variances_are_quadratic_forms(quadratures: int, rule: Rule) -> None:
    """Cumulated signal over noise against dense matrices, for every length."""
    n = 60
    t = STEP * np.arange(n)
    excited = (1 - np.exp(-t / 30e-9)) * (1.0 if quadratures == 1 else 0.4 + 0.9j)
    noise = coloured(quadratures)
    other = OutputNoise(3e-10, quadratures=quadratures)
    output = ChainOutput(
        Records(STEP, np.zeros(n, complex), excited + 0j),
        noise,
        None if rule == "whitened" else other,
    )
    received = receive(output, Detector(weights=rule))
    snr = snr_over_time(received, rule)
    lag = np.arange(n)[:, None] - np.arange(n)[None, :]
    matrices = [
        np.where(lag >= 0, r[np.abs(lag)], r[np.abs(lag)].conj()) / quadratures
        for r in (noise_lags(x, STEP, n) for x in output.noises)
    ]
    for k in (2, 17, n):
        found = project(received, rule, k)
        w = found.weights
        signal = abs(np.vdot(w, excited[:k]))
        sigmas = [math.sqrt(np.vdot(w, m[:k, :k] @ w).real) for m in matrices]
        # Rounding of transforms of 120 numbers.
        assert found.sigmas == pytest.approx(sigmas, rel=1e-10)
        assert found.snr == pytest.approx(signal / np.mean(sigmas), rel=1e-10)
        assert snr[k - 1] == pytest.approx(found.snr, rel=1e-9)
        assert np.abs(w).sum() == pytest.approx(1.0, rel=1e-12)
    if rule == "whitened":
        best = np.linalg.solve(matrices[0], excited)
        wanted = math.sqrt(np.vdot(excited, best).real)
        # No weights do better than the inverse of the covariance.
        assert snr[-1] == pytest.approx(wanted, rel=1e-9)
        assert snr[-1] > project(received, "matched").snr


def test_whitened_weights_need_noise_everywhere() -> None:
    narrow = OutputNoise(0.0, np.array([-1e6, 1e6]), np.array([1e-9, 1e-9]))
    lags = noise_lags(narrow, STEP, 300)
    with pytest.raises(InputError, match="too narrow for the grid"):
        whitened(np.ones(300, complex), lags)


class TestPaths:
    @pytest.mark.parametrize("quadratures", [1, 2])
    def test_covariance_of_paths(self, quadratures: int) -> None:
        noise, count, paths = coloured(quadratures), 64, 4000
        plan = plan_noise(noise, STEP, count)
        draws = draw_lines(generator(7, 0, 0), paths, plan.amplitudes.size)
        found = draw_noise(plan, draws, count)
        lags = noise_lags(noise, STEP, count)
        assert plan.error < 1e-12
        for k in (0, 1, 5, 40):
            products = found[:, k] * found[:, 0].conj()
            # Four standard errors of the mean of products of two Gaussians.
            error = 4 * abs(lags[0]) * math.sqrt(2 / paths)
            assert products.mean() == pytest.approx(lags[k], abs=error)
        # Circular: I and Q are alike and in quadrature.
        squares = abs((found[:, 20] ** 2).mean())
        if quadratures == 2:
            assert squares < 4 * abs(lags[0]) * math.sqrt(2 / paths)
        else:
            assert (found.imag == 0).all()

    def test_a_short_period_where_the_covariance_fades(self) -> None:
        white = plan_noise(OutputNoise(white=1e-9), STEP, 1000)
        assert white.amplitudes.size == 1000
        slow = np.array([-2e5, 2e5])
        flicker = plan_noise(OutputNoise(1e-12, slow, np.array([1e-7, 1e-7])), STEP, 1000)
        assert flicker.amplitudes.size >= 2000


class TestConverter:
    ADC = Adc(8, 2.0, 50e6)

    def test_noise_behind_filter_and_sampling(self) -> None:
        """The variance of an average over samples, against the integral over the frequency."""
        noise, count = coloured(), 30
        lags = sampled_lags(self.ADC, noise, STEP, count)
        weight = count - np.arange(count)
        got = (2 * (lags * weight).sum().real - count * lags[0].real) / count**2
        fine = np.linspace(-250e6, 250e6, 400_001)[1:-1]
        corner = math.tan(math.pi * self.ADC.corner * STEP)
        passed = 1 / (1 + (np.tan(math.pi * fine * STEP) / corner) ** (2 * self.ADC.order))
        phase = np.exp(2j * np.pi * np.outer(np.arange(count) / self.ADC.rate, fine[::10]))
        window = np.abs(phase.mean(axis=0)) ** 2
        wanted = np.trapezoid((noise.at(fine) * passed)[::10] * window, fine[::10])
        # The trapezoidal rule on a periodic function that is smooth over its step.
        assert got == pytest.approx(wanted, rel=1e-6)

    def test_the_filter_passes_a_constant_and_delays_a_ramp(self) -> None:
        t = STEP * np.arange(400)
        rows = np.array([np.full(400, 0.3 - 0.2j), 1e6 * t + 0j])
        found = filter_records(self.ADC, STEP, rows)
        assert found[0] == pytest.approx(rows[0], rel=1e-12)
        delay = (rows[1, -1] - found[1, -1]).real / 1e6
        # The bilinear transform pre-warps the corner: (tan(x)/x - 1 at x = pi corner step) = 5e-3.
        assert delay == pytest.approx(self.ADC.group_delay, rel=6e-3)

    def test_it_forgets_its_start(self) -> None:
        impulse = np.zeros((1, 400), complex)
        impulse[0, 1] = 1.0
        found = np.abs(filter_records(self.ADC, STEP, impulse)[0])
        # The promise is about the slowest pole; its residue is of the order of the peak.
        assert found[settling_samples(self.ADC, STEP) :].max() < 1e-5 * found.max()

    @pytest.mark.parametrize("bits", [4, 8, 12])
    def test_signal_to_quantisation_noise(self, validate: Validate, bits: int) -> None:
        adc = Adc(bits, 2.0, 50e6)
        # Many phases, none twice; full scale up to the highest level.
        phase = 2 * np.pi * np.modf(np.arange(1 << 18) * (math.sqrt(5) - 1) / 2)[0]
        signal = (adc.full_scale / 2 - adc.lsb / 2) * np.sin(phase) - adc.lsb / 2 + 0j
        error = (quantise(adc, signal) - signal).real
        got = 10 * math.log10(np.var(signal.real) / np.mean(error**2))
        quantity = f"signal over quantisation noise, {bits} bits"
        wanted = 20 * math.log10(2**bits) + 10 * math.log10(1.5)
        # Half a step less than full scale on either side, and a sine's turning points, where its
        # error is not uniform: 1/2^bits and 1/2^(bits/2) in power, times about one.
        allowed = 10 * math.log10(1 + 2.0 ** (-bits) + 2.0 ** (-bits / 2))
        validate(quantity, sources.BENNETT, wanted, got, "dB", abs=allowed)

    def test_rounding_of_noise(self, validate: Validate) -> None:
        adc = Adc(8, 2.0, 50e6)
        draws = generator(3, 0, 0).standard_normal((2, 200_000)) * 1.5 * adc.lsb
        noisy = draws[0] + 1j * draws[1]
        error = quantise(adc, noisy) - noisy
        assert np.isin(np.rint(quantise(adc, noisy).real / adc.lsb), np.arange(-128, 128)).all()
        got = float(np.mean(np.abs(error) ** 2) / 2)
        wanted = quantisation_variance(adc.lsb)
        quantity = "power of rounding, one quadrature"
        # Four standard errors: the square of a uniform error has a relative variance of 4/5.
        allowed = 4 * math.sqrt(0.8 / 400_000)
        validate(quantity, sources.BENNETT, wanted, got, "V**2", rel=allowed)

    def test_clipping(self) -> None:
        adc = Adc(2, 4.0, 50e6)
        levels = quantise(adc, np.array([-9.0, -1.4, -0.4, 0.4, 9.0]) + 0j)
        assert levels.real.tolist() == [-2.0, -1.0, 0.0, 0.0, 1.0]
        means: FloatArray = np.array([0.0, 1.0])
        draws = generator(4, 0, 0).standard_normal((2, 100_000)) + means[:, None]
        counted = np.mean((draws < -2.5) | (draws > 1.5))
        # Four standard errors of a count of 2e5.
        assert clipped_share(adc, means + 0j, 1.0, 1) == pytest.approx(counted, abs=4e-3)
