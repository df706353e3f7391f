"""Oracle: adaptive quadrature of the densities, and their definitions."""

import math

import numpy as np
import pytest
from scipy.integrate import quad

from cosim.dsp.noise.bands import frequency_grid
from cosim.dsp.noise.density import (
    Lorentzian,
    PowerLaw,
    SpectralDensity,
    add_densities,
    density_from_points,
)
from cosim.dsp.noise.oscillator import (
    amplitude_noise_density,
    frequency_noise_density,
    jitter_density,
    phase_noise_density,
    timing_jitter,
)
from cosim.errors import InputError
from tests import sources
from tests.validation import Validate

TOPIC = "signal"

POINTS = density_from_points([1e3, 1e5, 1e8], [1e-10, 1e-13, 1e-13], "rad")


def white(level: float, high: float = math.inf) -> SpectralDensity:
    return SpectralDensity("V", (PowerLaw(level, high=high),))


class TestVariance:
    @pytest.mark.parametrize("exponent", [-2.0, 0.0, 0.7, 1.0, 1 + 1e-9, 1.5, 3.0])
    def test_power_laws(self, exponent: float) -> None:
        term = PowerLaw(2e-9, exponent, 1e4, 3.0, 2e6)
        wanted = quad(
            lambda x: math.exp(x) * float(term.at(np.array(math.exp(x)))),
            math.log(10.0),
            math.log(2e6),
            epsrel=1e-11,
        )[0]
        assert term.variance(10.0, 1e9) == pytest.approx(wanted, rel=1e-9)  # quad's own bound
        whole = term.variance(0.0, math.inf)
        # Bands add up: rounding.
        assert term.variance(0, 50.0) + term.variance(50.0, 1e9) == pytest.approx(whole, rel=1e-12)

    def test_power_laws_without_corners(self) -> None:
        assert PowerLaw(3.0).variance(0.0, 2.0) == 6.0
        assert PowerLaw(3.0).variance(1.0, math.inf) == math.inf
        assert PowerLaw(3.0, 1.0).variance(0.0, 1.0) == math.inf
        assert PowerLaw(3.0, 1.0).variance(1.0, math.inf) == math.inf
        assert PowerLaw(3.0, 2.0, 10.0).variance(5.0, math.inf) == pytest.approx(60.0)
        assert PowerLaw(3.0, 0.5).variance(0.0, 4.0) == pytest.approx(12.0)
        assert PowerLaw(0.0, 1.0).variance(0.0, 1.0) == 0.0

    def test_lorentzian(self) -> None:
        term = Lorentzian(4.0, 1e-6)
        assert term.variance(0.0, math.inf) == pytest.approx(4.0, rel=1e-12)
        wanted = quad(lambda f: float(term.at(np.array(f))), 1e4, 1e6, epsrel=1e-11)[0]
        assert term.variance(1e4, 1e6) == pytest.approx(wanted, rel=1e-9)
        # Half of the power lies below the corner, 1/(2 pi tc).
        assert term.variance(0.0, term.corners[0]) == pytest.approx(2.0, rel=1e-12)
        # Far above it the density is 4 s^2/(tc (2 pi f)^2).
        assert term.variance(1e12, 1.001e12) == pytest.approx(
            4 * 4.0 / 1e-6 / (2 * math.pi) ** 2 * (1 / 1e12 - 1 / 1.001e12), rel=1e-9
        )


class TestPoints:
    def test_the_points_and_between_them(self) -> None:
        assert POINTS.at([1e3, 1e5, 1e8]) == pytest.approx([1e-10, 1e-13, 1e-13], rel=1e-12)
        # Straight over the logarithms: 1e4 lies in the middle of the first piece.
        assert POINTS.at(1e4) == pytest.approx(math.sqrt(1e-10 * 1e-13), rel=1e-12)
        assert POINTS.at(3e6) == pytest.approx(1e-13, rel=1e-12)
        assert POINTS.corners == (1e3, 1e5, 1e8)
        # A sampling rate that was divided by two may end a bit past the last point.
        assert POINTS.at(1e8 * (1 + 1e-12)) == pytest.approx(1e-13, rel=1e-12)

    def test_outside_is_an_error_with_the_numbers(self) -> None:
        with pytest.raises(InputError, match=r"known from 1000 to 1e\+08 Hz.* needs 500 to 2e\+08"):
            POINTS.at([500.0, 2e8])
        with pytest.raises(InputError, match="the band of the integral needs 1000 to 2e"):
            POINTS.variance(1e3, 2e8)

    @pytest.mark.parametrize(
        ("choice", "below", "above"),
        [("zero", 0.0, 0.0), ("hold", 1e-10, 1e-13), ("extend", 1e-10 * 10**1.5, 1e-13)],
    )
    def test_what_lies_outside_can_be_said(self, choice, below: float, above: float) -> None:
        density = density_from_points(
            [1e3, 1e5, 1e8], [1e-10, 1e-13, 1e-13], "rad", below=choice, above=choice
        )
        assert density.at([1e2, 1e9]) == pytest.approx([below, above], rel=1e-12)

    @pytest.mark.parametrize(
        ("f", "s", "message"),
        [
            ([1.0, 2.0], [1.0, -1.0], r"positive values, got -1 at 2 Hz"),
            ([1.0, 2.0], [0.0, 1.0], r"positive values, got 0 at 1 Hz"),
            ([1.0, 3.0, 2.0], [1.0] * 3, r"point 3 is at 2 Hz after 3 Hz"),
            ([1.0, 1.0], [1.0] * 2, r"point 2 is at 1 Hz after 1 Hz"),
            ([0.0, 1.0], [1.0] * 2, r"point 1 is at 0 Hz, which is not positive"),
            ([1.0, math.nan], [1.0] * 2, r"point 2 is not finite"),
            ([1.0], [1.0], r"at least two points"),
            ([1.0, 2.0], [1.0], r"shapes \(2,\) and \(1,\)"),
        ],
    )
    def test_bad_points(self, f: list[float], s: list[float], message: str) -> None:
        with pytest.raises(InputError, match=message):
            density_from_points(f, s, "V")

    def test_a_choice_that_does_not_exist(self) -> None:
        with pytest.raises(InputError, match="wanted below as one of error, zero, hold, extend"):
            density_from_points([1.0, 2.0], [1.0, 1.0], "V", below="zeros")


class TestSums:
    def test_white_and_one_over_f_cross_at_the_corner(self) -> None:
        density = SpectralDensity("V", (PowerLaw(1e-16), PowerLaw(1e-16, 1.0, 1e6, 1.0, 1e9)))
        assert density.at([1e6, 1e3, 1e10]) == pytest.approx([2e-16, 1.001e-13, 1e-16], rel=1e-12)
        assert density.variance(0.0, 1e9) == pytest.approx(1e-7 + 1e-10 * math.log(1e9), rel=1e-12)
        with pytest.raises(InputError, match="diverges at 0 Hz"):
            SpectralDensity("V", (PowerLaw(1.0, 1.0),)).at(0.0)

    def test_addition_and_scaling(self) -> None:
        total = add_densities([white(1.0), white(2.0, 10.0)])
        assert total.at([5.0, 20.0]) == pytest.approx([3.0, 1.0])
        assert total.scaled(4.0, "rad/s").at(5.0) == 12.0
        assert total.scaled(4.0, "rad/s").unit == "rad/s"
        both = add_densities([POINTS, SpectralDensity("rad", (PowerLaw(1.0),))])
        assert (both.low, both.high) == (1e3, 1e8)
        with pytest.raises(InputError, match=r"over one unit, got \['V', 'rad'\]"):
            add_densities([POINTS, white(1.0)])

    def test_bad_terms(self) -> None:
        for make in (
            lambda: PowerLaw(-1.0),
            lambda: PowerLaw(1.0, math.nan),
            lambda: PowerLaw(1.0, reference=0.0),
            lambda: PowerLaw(1.0, low=2.0, high=1.0),
            lambda: Lorentzian(-1.0, 1.0),
            lambda: Lorentzian(1.0, 0.0),
            lambda: SpectralDensity("V", (), 2.0, 1.0),
            lambda: white(1.0).scaled(-1.0, "V"),
            lambda: white(1.0).at([math.nan]),
        ):
            with pytest.raises(InputError, match="spectral density: wanted"):
                make()


class TestOscillator:
    def test_definitions(self, validate: Validate) -> None:
        phase = phase_noise_density([1e3, 1e6], [-100.0, -100.0])
        got = math.sqrt(phase.variance(1e3, 1e6))
        quantity = "integrated phase of -100 dBc/Hz from 1 kHz to 1 MHz"
        validate(quantity, sources.IEEE_1139, 0.01413506, got, "rad", rel=5e-7, card="C21")
        got = timing_jitter(phase, 6e9, 1e3, 1e6)
        quantity = "jitter of it at 6 GHz"
        validate(quantity, sources.IEEE_1139, 3.749442e-13, got, "s", rel=5e-7, card="C21")
        assert phase.unit == "rad"
        amplitude = amplitude_noise_density([1e3, 1e6], [-130.0, -130.0])
        assert amplitude.at(1e4) == pytest.approx(2e-13)

    def test_white_frequency_noise(self, validate: Validate) -> None:
        phase = phase_noise_density([1e3, 1e6, 1e9], [-50.0, -110.0, -170.0])
        got = float(frequency_noise_density(phase).at(1e5))
        quantity = "frequency noise of an oscillator with -110 dBc/Hz at 1 MHz"
        unit = "(rad/s)^2/Hz"
        validate(quantity, sources.BALL, 789.5684, got, unit, rel=5e-7, card="C06")
        wanted = (2 * np.pi * 3e7) ** 2 * phase.at(3e7)
        assert frequency_noise_density(phase).at(3e7) == pytest.approx(wanted, rel=1e-12)

    def test_jitter_of_a_clock(self) -> None:
        density = jitter_density(1e-13, 6e9, 1e9)
        # The variance of the phase at an edge is that of the time error: rounding.
        assert density.variance(0, 1e12) == pytest.approx((2 * np.pi * 6e9 * 1e-13) ** 2, rel=1e-12)
        assert density.at([4.99e8, 5.01e8])[1] == 0.0
        # There and back.
        assert timing_jitter(density, 6e9, 0.0, 5e8) == pytest.approx(1e-13, rel=1e-12)

    def test_errors(self) -> None:
        for numbers in ((-1e-12, 1e9, 1e9), (1e-12, 0.0, 1e9), (1e-12, 1e9, math.inf)):
            with pytest.raises(InputError, match="jitter: wanted"):
                jitter_density(*numbers)
        with pytest.raises(InputError, match="density of a phase in rad, got 'V'"):
            frequency_noise_density(white(1.0))
        with pytest.raises(InputError, match="Lorentzian"):
            frequency_noise_density(SpectralDensity("rad", (Lorentzian(1.0, 1.0),)))
        with pytest.raises(InputError, match="positive frequency"):
            timing_jitter(POINTS, 0.0, 1e3, 1e4)


class TestFrequencyGrid:
    @pytest.mark.parametrize(("low", "high"), [(1.0, 3e8), (0.0, 3e8), (2.5e7, 3e8), (2.0, 1e3)])
    def test_integrals_of_densities_and_cosines(self, low: float, high: float) -> None:
        terms = (Lorentzian(1.0, 1e-4), PowerLaw(1e-9, low=3e5, high=2e7))
        density = SpectralDensity("V", terms)
        grid = frequency_grid(low, high, 1e-7, density.corners)
        # Gauss's rule on octaves and turns, 1e-6; a cosine of the whole record as well.
        wanted = density.variance(low, high)
        assert grid.weights @ density.at(grid.frequencies) == pytest.approx(wanted, rel=1e-6)
        turn = 2 * np.pi * 1e-7
        wanted = (math.sin(turn * high) - math.sin(turn * low)) / turn
        got = grid.weights @ np.cos(turn * grid.frequencies)
        assert got == pytest.approx(wanted, abs=2e-6 * (high - low))
        assert (np.diff(grid.frequencies) > 0).all()

    def test_errors(self) -> None:
        for low, high, duration in ((1.0, 1.0, 1.0), (-1.0, 1.0, 1.0), (0.0, math.inf, 1.0)):
            with pytest.raises(InputError, match="wanted a band"):
                frequency_grid(low, high, duration)
        with pytest.raises(InputError, match=r"makes 1e\+06 turns, more than 66666"):
            frequency_grid(0.0, 1e12, 1e-6)
