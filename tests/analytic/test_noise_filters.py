"""Oracle: closed forms of filter functions and of their integrals with known densities."""

import math

import numpy as np
import pytest

from cosim.dsp.noise.bands import frequency_grid
from cosim.dsp.noise.density import Lorentzian, PowerLaw, SpectralDensity
from cosim.dsp.noise.oscillator import phase_noise_density
from cosim.quantum.filters import (
    PathSegment,
    filter_area,
    filter_function,
    noise_infidelity,
    phase_filter_functions,
)
from cosim.waveform import ComplexArray
from tests import sources
from tests.validation import Validate

TOPIC = "dynamics in the rotating-wave approximation"

X = np.array([[0, 1], [1, 0]], dtype=np.complex128)
NUMBER = np.diag([0.0, 1.0]).astype(np.complex128)
# First order: 1 - F_avg = chi/3 of a qubit whose coherence decays as exp(-chi), and 2/3 of the
# process infidelity.
CHI, PROCESS = 3.0, 1.5


def idle(
    time: float, *, samples: int = 101, start: float = 0.0, by: ComplexArray | None = None
) -> PathSegment:
    u = np.broadcast_to(np.eye(2) if by is None else by, (samples, 2, 2))
    return PathSegment(start, time / (samples - 1), u)


def echo(time: float) -> list[PathSegment]:
    return [idle(time / 2), idle(time / 2, start=time / 2, by=X)]


def driven(omega: float, time: float, samples: int = 401) -> PathSegment:
    half = omega * np.linspace(0.0, time, samples)[:, None, None] / 2
    return PathSegment(0.0, time / (samples - 1), np.cos(half) * np.eye(2) - 1j * np.sin(half) * X)


def detuned(path: list[PathSegment], density: SpectralDensity, low: float, high: float) -> float:
    """Give the infidelity by detuning noise in a band."""
    grid = frequency_grid(low, high, path[-1].stop, density.corners)
    function = filter_function(path, [NUMBER] * len(path), grid.frequencies)
    return noise_infidelity(function, density.at(grid.frequencies), grid.weights).infidelity


PATHS = {"FID": lambda t: [idle(t)], "echo": echo}


class TestIdleAndEcho:
    @pytest.mark.parametrize(("name", "filtered"), [("FID", 0.4596977), ("echo", 0.02997206)])
    def test_white_noise(self, validate: Validate, name: str, filtered: float) -> None:
        s2, t = 1e5, 1e-5
        path = PATHS[name](t)
        area = filter_area(path, [NUMBER] * len(path)).infidelity
        # Two-sided S2 = S1/2. Rounding, against a number of seven digits.
        validate(
            f"chi of {name} in white noise",
            sources.CYWINSKI,
            0.5,
            CHI * 2 * s2 * area,
            rel=1e-12,
            card="C01",
        )
        f = np.array([1 / (2 * np.pi * t)])
        value = filter_function(path, [NUMBER] * len(path), f).total[0]
        # F = omega^2 |Y|^2/2, and a^dag a without its trace counts |Y|^2/6.
        got = 3 * (2 * np.pi * f[0]) ** 2 * value
        quantity = f"filter function of {name} at omega t = 1"
        validate(quantity, sources.CYWINSKI, filtered, got, rel=2e-7, card="C01")

    def test_white_noise_gives_t2(self, validate: Validate) -> None:
        t = 1e-7
        voltage = SpectralDensity("V", (PowerLaw(1e-8**2),))
        detuning = voltage.scaled((2 * np.pi * 1e10) ** 2, "rad/s")
        s1 = float(detuning.at(1e6))
        area = filter_area([idle(t)], [NUMBER]).infidelity
        validate(
            "two-sided density of the detuning by 10 nV/sqrt(Hz) at 10 GHz/V",
            sources.CYWINSKI,
            197392.1,
            s1 / 2,
            "(rad/s)^2 s",
            rel=2e-7,
            card="C19",
        )
        # Rounding of the card to seven digits.
        got = t / (CHI * s1 * area)
        validate("T2 of it", sources.CYWINSKI, 1.013212e-5, got, "s", rel=5e-7, card="C19")

    @pytest.mark.parametrize(("name", "chi"), [("FID", 1.955107), ("echo", 0.1368218)])
    def test_one_over_f(self, validate: Validate, name: str, chi: float) -> None:
        density = SpectralDensity("rad/s", (PowerLaw((2 * np.pi * 5e3) ** 2, 1.0, low=1.0),))
        # The lower corner's series leaves (2 pi f_l t)^2, the band above 20 MHz 1e-6.
        got = CHI * detuned(PATHS[name](2e-5), density, 1.0, 2e7)
        quantity = f"chi of {name} in 1/f noise"
        validate(quantity, sources.ITHIER, chi, got, rel=5e-6, card="C02")

    @pytest.mark.parametrize(("name", "chi"), [("FID", 2.460778), ("echo", 0.3153459)])
    def test_ornstein_uhlenbeck(self, validate: Validate, name: str, chi: float) -> None:
        density = SpectralDensity("rad/s", (Lorentzian((2 * np.pi * 5e4) ** 2, 1e-5),))
        # Density and filter fall as 1/f^2 each: the band above 20 MHz holds below 1e-6.
        got = CHI * detuned(PATHS[name](8e-6), density, 0.0, 2e7)
        quantity = f"chi of {name} in Ornstein-Uhlenbeck noise"
        validate(quantity, sources.KLAUDER_ANDERSON, chi, got, rel=2e-6, card="B06")

    def test_quasi_static_noise(self, validate: Validate) -> None:
        sigma, t = 2 * np.pi * 2e4, 5e-6
        value = filter_function([idle(t)], [NUMBER], np.zeros(1)).total[0]
        quantity = "chi of FID in quasi-static noise, (t/T2*)^2"
        chi = (sigma * t) ** 2 / 2
        validate(quantity, sources.HANSON, chi, CHI * sigma**2 * value, rel=1e-12)
        # A constant detuning does not get through an echo.
        assert filter_function(echo(t), [NUMBER] * 2, np.zeros(1)).total[0] < 1e-12 * value


class TestDrivenPulse:
    OMEGA = 2 * np.pi * 10e6

    def pulse(self) -> PathSegment:
        return driven(self.OMEGA, np.pi / self.OMEGA)

    def test_filter_of_a_detuning(self, validate: Validate) -> None:
        f = np.array([0.0, 10e6])
        found = PROCESS * filter_function([self.pulse()], [NUMBER], f).total * 4 * self.OMEGA**2
        # Fourth order of 400 steps.
        for f, wanted, got in zip(("0", "Omega"), (4.0, math.pi**2 / 2), found, strict=True):
            quantity = f"G Omega^2 of a driven pi pulse at {f}"
            validate(quantity, sources.GREEN, wanted, got, rel=1e-8, card="C04")

    def test_lorentzian_noise(self, validate: Validate) -> None:
        density = SpectralDensity("rad/s", (Lorentzian((2 * np.pi * 1e5) ** 2, 2e-8),))
        got = PROCESS * detuned([self.pulse()], density, 0.0, 2e9)
        quantity = "process infidelity of a pi pulse in Lorentzian noise"
        # Rounding of the card to five digits.
        validate(quantity, sources.GREEN, 8.3973e-05, got, rel=1e-5, card="C04")
        slow = SpectralDensity("rad/s", (Lorentzian((2 * np.pi * 1e5) ** 2, 1.0),))
        # With a memory of 1 s the noise is constant over 50 ns but for 1e-7.
        got = PROCESS * detuned([self.pulse()], slow, 0.0, 2e9)
        validate("the same, quasi-static", sources.GREEN, 1e-4, got, rel=1e-6, card="C04")

    def test_spectral_line_in_both_frames(self, validate: Validate) -> None:
        phi = 0.01
        f = {"1 MHz": 1e6, "47 MHz": 47e6}
        drive = self.OMEGA / 2 * X
        filters = phase_filter_functions([self.pulse()], [drive], NUMBER, np.array([*f.values()]))
        wanted = {
            "qubit's": (filters.qubit_frame, (5.02644e-05, 5.34976e-07)),
            "oscillator's": (filters.oscillator_frame, (5.02644e-07, 1.18176e-05)),
        }
        for frame, (function, numbers) in wanted.items():
            for name, number, value in zip(f, numbers, function.total, strict=True):
                quantity = f"process infidelity by a phase spur at {name}, {frame} frame"
                got = PROCESS * value * phi**2 / 2
                # Rounding of the card to six digits.
                validate(quantity, sources.BALL, number, got, rel=2e-6, card="C07")

    def test_the_frames_agree_at_the_rabi_frequency(self) -> None:
        f = np.array([10e6, 20e6])
        filters = phase_filter_functions([self.pulse()], [self.OMEGA / 2 * X], NUMBER, f)
        ratio = filters.oscillator_frame.total / filters.qubit_frame.total
        # (f/f_Rabi)^2, to the fourth order of 400 steps.
        assert ratio == pytest.approx([1.0, 4.0], rel=1e-7)

    def test_white_amplitude_noise(self, validate: Validate) -> None:
        s1, tau = 1e-13, 50e-9
        operator = self.OMEGA / 2 * X
        area = filter_area([self.pulse()], [operator]).infidelity
        quantity = "infidelity of a pi pulse in white amplitude noise"
        lead = math.pi**2 * s1 / (12 * tau)
        validate(quantity, sources.LINDBLAD_WHITE, 1.644934e-06, s1 * area, rel=3e-7, card="C05")
        # The integral over a finite band and what the area leaves for the band above.
        grid = frequency_grid(0.0, 1e9, tau)
        function = filter_function([self.pulse()], [operator], grid.frequencies)
        flat = np.full(grid.frequencies.shape, s1)
        below = noise_infidelity(function, flat, grid.weights).infidelity
        # Above, the mean filter is Omega^2/(3 (2 pi f)^2) for a pulse that starts and ends at once.
        above = s1 * self.OMEGA**2 / (3 * (2 * math.pi) ** 2 * 1e9)
        assert 0 < above < 0.01 * lead
        # The oscillating part of the tail is smaller by 1/(2 pi f tau).
        assert below + above == pytest.approx(s1 * area, rel=1e-4)


class TestOscillatorIdle:
    def test_white_phase_noise(self, validate: Validate) -> None:
        band, t = 100e6, 1e-6
        density = phase_noise_density([1.0, band], [-120.0, -120.0])
        grid = frequency_grid(1.0, band, t)
        drive = np.zeros((2, 2), dtype=np.complex128)
        filters = phase_filter_functions([idle(t)], [drive], NUMBER, grid.frequencies)
        found = noise_infidelity(
            filters.oscillator_frame, density.at(grid.frequencies), grid.weights
        ).infidelity
        variance = 6 * found
        exact = 4e-12 * (band - math.sin(2 * math.pi * band * t) / (2 * math.pi * t))
        # Gauss's rule, 1e-6 of the oscillating half.
        quantity = "phase variance of an idle in white phase noise"
        validate(quantity, sources.BALL, exact, variance, "rad^2", rel=2e-6, card="C06")
        # First order: the exponential leaves var/4, 1e-4.
        quantity = "infidelity of an idle in white phase noise"
        validate(quantity, sources.BALL, 6.666e-05, found, rel=2e-4, card="C06")
        # Without a drive the qubit's own frame sees nothing of the oscillator.
        assert not filters.qubit_frame.total.any()

    def test_white_frequency_noise(self, validate: Validate) -> None:
        band, t = 1e9, 1e-6
        density = phase_noise_density([1.0, 1e6, band], [10.0, -110.0, -170.0])
        grid = frequency_grid(1.0, band, t, density.corners)
        function = filter_function([idle(t)], [NUMBER], grid.frequencies)
        square = (2 * np.pi * grid.frequencies) ** 2
        found = noise_infidelity(function, square * density.at(grid.frequencies), grid.weights)
        variance = 6 * found.infidelity
        # The band ends: 2 f t = 2e-6 is missing below, 1/(pi^2 f t) = 1.0e-4 above.
        quantity = "phase variance of an idle in white frequency noise"
        validate(quantity, sources.BALL, 3.947842e-4, variance, "rad^2", rel=1.1e-4, card="C06")
        quantity = "infidelity of an idle in white frequency noise"
        # The same, and var/4 of the exponential.
        validate(quantity, sources.BALL, 6.579087e-05, found.infidelity, rel=2.1e-4, card="C06")


class TestSpinLock:
    @pytest.mark.full
    def test_density_at_the_rabi_frequency(self, validate: Validate) -> None:
        density = SpectralDensity("rad/s", (Lorentzian((2 * np.pi * 2e4) ** 2, 1e-6),))
        omega, t = 2 * np.pi * 1e6, 200e-6
        rate = float(density.at(1e6)) / 4
        quantity = "loss rate of a locked spin, S1(f = Omega/2 pi)/4"
        validate(quantity, sources.ITHIER, 390.1182, rate, "1/s", rel=2e-7, card="B07")
        quantity = "loss rate of a locked spin with T1 = 50 us"
        total = rate + 1 / (2 * 50e-6)
        validate(quantity, sources.ITHIER, 10390.12, total, "1/s", rel=5e-7, card="B07")

        # Whole turns of a lock: the locked component loses exp(-rate t), the other two half of
        # that in the exponent each, 1 - F_avg = rate t/3 to first order.
        def infidelity(turns: int) -> float:
            path = [driven(omega, turns / 1e6, 40 * turns + 1)]
            return detuned(path, density, 0.0, 20e6)

        # The ends of the lock cost a constant; what 100 more turns add is the rate.
        got = CHI * (infidelity(200) - infidelity(100)) / (t / 2)
        quantity = "loss rate of a locked spin from the filter function"
        validate(quantity, sources.ITHIER, 390.1182, got, "1/s", rel=1e-3, card="B07")
