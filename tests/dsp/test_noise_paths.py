"""Oracle: covariances as adaptive integrals of the density, chi-square laws, equality of bits."""

import itertools
import math
import os
import subprocess
import sys

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import chi2

from cosim.dsp.noise.density import (
    Lorentzian,
    PowerLaw,
    SpectralDensity,
    add_densities,
    density_from_points,
)
from cosim.dsp.noise.paths import (
    PathPlan,
    path_covariance,
    plan_paths,
    sample_paths,
    telegraph_paths,
)
from cosim.errors import InputError
from tests import sources
from tests.validation import Validate

TOPIC = "signal"

DT = 0.5e-9
NYQUIST = 1e9
WHITE = SpectralDensity("V", (PowerLaw(1e-9),))
FLICKER = SpectralDensity("V", (PowerLaw(1.0, 1.0, 1.0, 1e-2),))
DRIFT = SpectralDensity("V", (PowerLaw(1.0, 3.0, 1e4, 1e2),))
FADING = SpectralDensity("V", (Lorentzian(2.0, 20e-9),))
CUT = SpectralDensity("V", (PowerLaw(1e-9, high=0.23e9),))
POINTS = density_from_points([1e2, 1e5, 1e7, 2e8, 1e9], [1e-2, 1e-6, 1e-9, 1e-9, 1e-10], "V")
DENSITIES = {
    "white": WHITE,
    "1/f": FLICKER,
    "1/f^3": DRIFT,
    "Lorentzian": FADING,
    "white and 1/f": add_densities([WHITE, FLICKER.scaled(1e-3, "V")]),
}


def integral(density: SpectralDensity, low: float, high: float, lag: float) -> float:
    """Integrate S cos(2 pi f lag) over octaves by adaptive quadrature."""
    edges = [low]
    while edges[-1] < high:
        edges.append(min(2 * edges[-1], high))

    def value(f: float) -> float:
        return float(density.at(f)) * math.cos(2 * math.pi * f * lag)

    parts = [
        quad(value, a, b, limit=2000, epsabs=0.0, epsrel=1e-7)[0]
        for a, b in itertools.pairwise(edges)
    ]
    return math.fsum(parts)


class TestCovariance:
    @pytest.mark.parametrize("name", DENSITIES)
    @pytest.mark.parametrize("count", [24, 200])
    def test_of_smooth_densities(self, name: str, count: int) -> None:
        density = DENSITIES[name]
        plan = plan_paths(density, count, DT)
        found = path_covariance(plan)
        for lag in (0, 1, count // 3, count - 1):
            wanted = integral(density, plan.slow_band[1], NYQUIST, lag * DT)
            # Gauss's rule leaves 1e-6, the period of the transform what the plan says.
            assert found[lag] == pytest.approx(wanted, abs=5e-6 * found[0])
        assert plan.covariance_error < 2e-6
        assert plan.variance == pytest.approx(found[0], rel=1e-12)

    @pytest.mark.parametrize("density", [CUT, POINTS], ids=["sharp cut", "points"])
    def test_of_densities_with_corners(self, density: SpectralDensity) -> None:
        count = 300
        plan = plan_paths(density, count, DT)
        found = path_covariance(plan)
        assert 0 < plan.covariance_error <= 1e-3
        for lag in (0, 1, 7, count // 2, count - 1):
            wanted = integral(density, plan.slow_band[1], NYQUIST, lag * DT)
            # The plan's own estimate is against a period four times longer, not infinite.
            allowed = (2 * plan.covariance_error + 5e-6) * found[0]
            assert found[lag] == pytest.approx(wanted, abs=allowed)
        # The power of a band that ends inside a line's is counted whole: rounding of Gauss's rule.
        whole = density.variance(plan.slow_band[1], NYQUIST)
        assert plan.variance == pytest.approx(whole, rel=1e-5)

    def test_a_tighter_tolerance_needs_a_longer_period(self) -> None:
        loose, tight = (plan_paths(CUT, 300, DT, tolerance=value) for value in (1e-2, 1e-4))
        assert tight.covariance_error < loose.covariance_error
        assert tight.period > loose.period

    def test_paths_have_the_covariance_of_the_plan(self) -> None:
        plan = plan_paths(add_densities([WHITE, FADING.scaled(0.5, "V")]), 60, DT)
        paths = sample_paths(plan, 5, 0, 20_000)
        got = paths.T @ paths / paths.shape[0]
        lags = np.abs(np.subtract.outer(np.arange(60), np.arange(60)))
        wanted = path_covariance(plan)[lags]
        # Each element deviates by sqrt((c0^2 + c^2)/20000), 1 % of c0 at the most; the largest of
        # 1830 normal numbers by 5 of these with a probability of 1e-3, and the seed is fixed.
        assert np.abs(got - wanted).max() < 5 * 0.01 * wanted[0, 0]
        assert np.abs(paths.mean(axis=0)).max() < 5 * math.sqrt(wanted[0, 0] / 20_000)

    def test_power_at_half_the_sampling_rate(self) -> None:
        plan = plan_paths(SpectralDensity("V", (PowerLaw(1.0, low=NYQUIST * (1 - 1e-4)),)), 200, DT)
        assert plan.variance == pytest.approx(1e-4 * NYQUIST, rel=1e-6)
        paths = sample_paths(plan, 6, 0, 4000)
        # One line, whose samples alternate and have one Gaussian amplitude: sqrt(2/4000), four.
        assert np.abs(paths[:, 1:] + paths[:, :-1]).max() < 1e-9 * np.abs(paths).max()
        got = np.mean(paths[:, 0] ** 2) / plan.variance
        assert got == pytest.approx(1.0, abs=4 * math.sqrt(2 / 4000))

    def test_gaussian(self) -> None:
        plan = plan_paths(FLICKER, 40, DT)
        end = sample_paths(plan, 8, 0, 20_000)[:, -1] / math.sqrt(plan.variance)
        # Standard deviation of the fourth moment of a normal number: sqrt(96/20000) = 0.07.
        assert np.mean(end**4) == pytest.approx(3.0, abs=5 * 0.07)


class TestPeriodogram:
    def test_mean_is_the_density(self, validate: Validate) -> None:
        n, count = 256, 400
        plan = plan_paths(WHITE, n, DT)
        spectra = np.abs(np.fft.rfft(sample_paths(plan, 3, 0, count), axis=1)) ** 2 * 2 * DT / n
        lines = spectra[:, 4 : n // 2]  # What is slower than 10 records is not in the paths.
        # Each line of white noise is exponential, the sum over samples chi-square of 2 x 400
        # degrees of freedom; none of 124 lines is out of bounds but with a probability of 1e-4.
        low, high = chi2.ppf([1e-4 / 248, 1 - 1e-4 / 248], 2 * count) / (2 * count)
        mean = lines.mean(axis=0) / 1e-9
        assert low < mean.min()
        assert mean.max() < high
        # All lines together: 2 x 400 x 124 degrees of freedom, 0.45 % rms, four of these.
        quantity = "mean periodogram of white paths over the density"
        got = float(lines.mean() / 1e-9)
        validate(quantity, sources.WIENER_KHINCHIN, 1.0, got, abs=4 / math.sqrt(count * 124))

    def test_parseval_over_an_octave(self, validate: Validate) -> None:
        """The power of 1/f noise in a band of lines, from paths and from the density."""
        n, count = 512, 400
        plan = plan_paths(FLICKER, n, DT)
        x = sample_paths(plan, 4, 0, count)
        x = (x - x.mean(axis=1, keepdims=True)) * np.hanning(n)
        power = np.abs(np.fft.rfft(x, axis=1)) ** 2 * 2 / n / np.sum(np.hanning(n) ** 2)
        got = float(power[:, 32:64].sum(axis=1).mean())
        # The lines 32 to 63 stand for 31.5 to 63.5 over the record: ln(63.5/31.5).
        wanted = math.log(63.5 / 31.5)
        # 32 lines of 400 samples, correlated over 1.9 lines by the window: 1.2 %, four of these.
        quantity = "power of 1/f paths in an octave over the level"
        validate(quantity, sources.WIENER_KHINCHIN, wanted, got, rel=0.05)


class TestUnreached:
    def test_nothing_is_dropped(self) -> None:
        density = SpectralDensity("V", (PowerLaw(1.0, 1.0, 1.0, 1.0, 1e12),))
        plan = plan_paths(density, 200, DT)
        assert plan.slow_band == pytest.approx((0.0, 1e6), rel=1e-12)
        assert plan.missed_band == pytest.approx((NYQUIST, math.inf), rel=1e-12)
        assert plan_paths(POINTS, 200, DT).slow_band[0] == 1e2
        assert plan.slow_variance == pytest.approx(math.log(1e6), rel=1e-12)
        assert plan.missed_variance == pytest.approx(math.log(1e3), rel=1e-12)
        total = plan.slow_variance + plan.variance + plan.missed_variance
        assert total == pytest.approx(math.log(1e12), rel=1e-6)  # Gauss's rule.
        assert plan_paths(WHITE, 200, DT).missed_variance == math.inf

    def test_the_slow_part_is_an_offset(self) -> None:
        plan = plan_paths(FLICKER, 30, DT)
        without = sample_paths(plan, 2, 0, 4000)
        offset = sample_paths(plan, 2, 0, 4000, offset=True) - without
        assert np.ptp(offset, axis=1).max() < 1e-12 * np.abs(offset).max()
        # Relative standard deviation of a variance of 4000 samples: sqrt(2/4000), four of these.
        got = offset[:, 0].var() / plan.slow_variance
        assert got == pytest.approx(1.0, abs=4 * math.sqrt(2 / 4000))

    def test_a_slowest_frequency_of_ones_own(self) -> None:
        for slowest in (1e3, 5e7, 3e8):
            plan = plan_paths(FLICKER, 200, DT, slowest=slowest)
            assert plan.slow_band[1] == slowest
            wanted = math.log(NYQUIST / slowest)
            assert plan.variance == pytest.approx(wanted, rel=1e-5)


class TestSeeds:
    @pytest.mark.parametrize("count", [20, 300])
    def test_a_path_depends_on_its_number_alone(self, count: int) -> None:
        plan = plan_paths(FLICKER, count, DT)
        whole = sample_paths(plan, 7, 0, 50)
        for first, size in ((0, 1), (13, 8), (16, 16), (49, 1), (3, 40)):
            part = sample_paths(plan, 7, first, size)
            assert (part == whole[first : first + size]).all()
        assert sample_paths(plan, 7, 5, 0).shape == (0, count)

    def test_seeds_and_streams_differ(self) -> None:
        plan = plan_paths(WHITE, 200, DT)
        one = sample_paths(plan, 7, 0, 1)[0]
        for other in (
            sample_paths(plan, 8, 0, 1)[0],
            sample_paths(plan, 7, 1, 1)[0],
            sample_paths(plan, 7, 0, 1, stream=1)[0],
        ):
            # 200 products of independent numbers: 1/sqrt(200), five of these.
            assert abs(np.corrcoef(one, other)[0, 1]) < 5 / math.sqrt(200)

    @pytest.mark.parametrize("threads", ["1", "2"])
    def test_another_process_draws_the_same(self, threads: str) -> None:
        """777 samples: a product of matrices of that size by a BLAS tells its threads apart."""
        program = (
            "from cosim.dsp.noise.density import *; from cosim.dsp.noise.paths import *;"
            "s = SpectralDensity('V', (PowerLaw(1.0, 1.0, 1.0, 1e-2),));"
            "print(sample_paths(plan_paths(s, 777, 0.5e-9), 7, 21, 2).tobytes().hex())"
        )
        done = subprocess.run(
            [sys.executable, "-c", program],
            capture_output=True,
            text=True,
            check=True,
            timeout=60,
            env={**os.environ, "OPENBLAS_NUM_THREADS": threads},
        )
        here = sample_paths(plan_paths(FLICKER, 777, DT), 7, 21, 2).tobytes().hex()
        assert done.stdout.strip() == here


class TestTelegraph:
    def test_covariance(self) -> None:
        rate, count = 3e6, 20_000
        paths = telegraph_paths(2.0, rate, 50, 10e-9, 1, 0, count)
        assert set(np.unique(paths)) == {-2.0, 2.0}
        got = (paths[:, :1] * paths).mean(axis=0) / 4
        # exp(-2 rate t); each product is +1 or -1: 1/sqrt(20000), five of these.
        wanted = np.exp(-2 * rate * 10e-9 * np.arange(50))
        assert np.abs(got - wanted).max() < 5 / math.sqrt(count)
        # The same with the second sample as the origin: stationary.
        got = (paths[:, 1:2] * paths[:, 1:]).mean(axis=0) / 4
        assert np.abs(got - wanted[:-1]).max() < 5 / math.sqrt(count)

    def test_the_number_of_a_path(self) -> None:
        whole = telegraph_paths(1.0, 1e6, 30, 1e-8, 9, 0, 20)
        assert (telegraph_paths(1.0, 1e6, 30, 1e-8, 9, 7, 5) == whole[7:12]).all()
        still = telegraph_paths(1.0, 0.0, 30, 1e-8, 9, 0, 20)
        assert (still == still[:, :1]).all()


class TestErrors:
    def test_plans(self) -> None:
        with pytest.raises(InputError, match="at least two samples at a positive interval"):
            plan_paths(WHITE, 1, DT)
        with pytest.raises(InputError, match="at least two samples at a positive interval"):
            plan_paths(WHITE, 10, 0.0)
        with pytest.raises(InputError, match=r"half the sampling rate, 1e\+09 Hz, got 2000000000"):
            plan_paths(WHITE, 10, DT, slowest=2e9)
        endless = SpectralDensity("V", (PowerLaw(1.0, 1.0),))
        with pytest.raises(InputError, match=r"below 2e\+07 Hz is infinite") as info:
            plan_paths(endless, 10, DT)
        assert "lower corner" in info.value.hint

    def test_a_density_that_does_not_reach(self) -> None:
        density = density_from_points([1e3, 1e8], [1.0, 1.0], "V")
        message = r"known from 1000 to 1e\+08 Hz, but a path of 200 samples at 5e-10 s needs"
        with pytest.raises(InputError, match=message):
            plan_paths(density, 200, DT)
        fine = density_from_points([1e3, 1e8], [1.0, 1.0], "V", above="zero")
        assert isinstance(plan_paths(fine, 200, DT), PathPlan)

    def test_draws(self) -> None:
        plan = plan_paths(WHITE, 10, DT)
        for numbers in ((-1, 0, 1), (0, -1, 1), (0, 0, -1)):
            with pytest.raises(InputError, match="of at least zero, got -1"):
                sample_paths(plan, *numbers)
        with pytest.raises(InputError, match="a stream of at least zero"):
            sample_paths(plan, 0, 0, 1, stream=-1)
        with pytest.raises(InputError, match="telegraph paths"):
            telegraph_paths(1.0, -1.0, 10, DT, 0, 0, 1)
