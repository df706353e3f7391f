"""Oracle: closed forms of modulated tones and pulses, Fourier series of a trapezoidal wave, and
scipy.signal's analytic signal and Kaiser design as independent libraries."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import fftconvolve, firwin, hilbert

from cosim.dsp.demodulation import demodulate, half_length
from cosim.errors import WaveformError
from cosim.waveform import ComplexArray, Envelope, FloatArray, Waveform
from tests import sources
from tests.dsp.signals import CARRIER, STEP, simulator_grid, trapezoid, trapezoid_corners
from tests.validation import Validate

TOPIC = "signal"

GUARD = half_length(CARRIER)


def inside(envelope: Envelope, stop: float) -> FloatArray:
    return (envelope.t > GUARD) & (envelope.t < stop - GUARD)


class TestTone:
    # The pass band reaches to a quarter of the carrier on either side.
    @pytest.mark.parametrize("offset", [0.0, 1e6, -0.4e9, 1.0e9, 1.549e9, -1.549e9])
    @pytest.mark.parametrize("phase", [0.0, 0.7, np.pi / 2, -2.5])
    def test_pass_band(self, offset: float, phase: float) -> None:
        t = np.arange(0, 20e-9, STEP)
        wave = Waveform(t, 0.3 * np.cos(2 * np.pi * (CARRIER + offset) * t + phase))
        envelope = demodulate(wave, CARRIER)
        expected = 0.3 * np.exp(1j * (2 * np.pi * offset * envelope.t + phase))
        # 130 dB of the filter are 3e-7; the spline takes (omega h)^4/720 = 5e-8 at the carrier
        # and three times that at 1.3 of it.
        error = np.abs(envelope.iq - expected)[inside(envelope, 20e-9)]
        assert error.max() < 0.3 * 1e-6

    # A constant, the subharmonic region, and the harmonics; 2 f_c is also what an ideal mixer
    # would leave of the carrier.
    @pytest.mark.parametrize("factor", [0.0, 0.1, 0.25, 2.0, 3.0, 4.0, 5.0])
    def test_stop_band(self, factor: float) -> None:
        t = np.arange(0, 20e-9, STEP)
        envelope = demodulate(Waveform(t, np.cos(2 * np.pi * factor * CARRIER * t + 0.3)), CARRIER)
        # 130 dB of the filter.
        assert np.abs(envelope.iq[inside(envelope, 20e-9)]).max() < 1e-6

    def test_sign_of_phase(self, validate: Validate) -> None:
        # v = A cos(omega t + phi) has I = A cos(phi), Q = +A sin(phi): P. Krantz et al., Appl.
        # Phys. Rev. 6, 021318 (2019), section V (recalled from memory).
        t = np.arange(0, 1e-6, 1 / 50e6 / 80)
        envelope = demodulate(Waveform(t, np.cos(2 * np.pi * 50e6 * t + np.pi / 6)), 50e6)
        middle = envelope.iq[envelope.iq.size // 2]
        # A plain mean over 105 ns, not a multiple of half a period, is off by 3e-2 here.
        source = sources.KRANTZ + ", section V"
        for name, wanted, got in (("I", 0.8660254, middle.real), ("Q", 0.5, middle.imag)):
            quantity = f"{name} of a cosine of 1 V with a phase of 30 degrees"
            validate(quantity, source, wanted, got, "V", abs=1e-6, card="F17")
        quadrature = demodulate(Waveform(t, np.cos(2 * np.pi * 50e6 * t + np.pi / 2)), 50e6)
        assert quadrature.iq[envelope.iq.size // 2].imag == pytest.approx(1.0, abs=1e-6)

    def test_phase_refers_to_time_zero(self) -> None:
        t = np.arange(0, 20e-9, STEP) + 7.7e-9
        envelope = demodulate(Waveform(t, np.cos(2 * np.pi * CARRIER * t + 0.4)), CARRIER)
        # As in `test_pass_band`.
        assert np.angle(envelope.iq[envelope.iq.size // 2]) == pytest.approx(0.4, abs=1e-6)

    @pytest.mark.parametrize(("samples", "tolerance"), [(20, 3e-5), (40, 1.5e-6), (300, 5e-7)])
    def test_coarse_and_fine_samples(self, samples: int, tolerance: float) -> None:
        t = np.arange(0, 20e-9, 1 / CARRIER / samples)
        envelope = demodulate(Waveform(t, np.cos(2 * np.pi * CARRIER * t)), CARRIER)
        # The spline takes (omega h)^4/720: 1.4e-5 at 20, 8e-7 at 40 samples per period.
        assert np.abs(envelope.iq - 1)[inside(envelope, 20e-9)].max() < tolerance


class TestPulse:
    @pytest.mark.parametrize("phase", [0.0, 1.1, 2.9])
    def test_gaussian(self, phase: float) -> None:
        t = np.arange(0, 30e-9, STEP)

        def shape(x: FloatArray) -> FloatArray:
            return np.exp(-(((x - 15e-9) / 3e-9) ** 2))

        wave = Waveform(t, shape(t) * np.cos(2 * np.pi * CARRIER * t + phase))
        envelope = demodulate(wave, CARRIER)
        # Everywhere, the ends included, where the pulse has died away to 1e-11.
        assert np.abs(envelope.iq - shape(envelope.t) * np.exp(1j * phase)).max() < 1e-6

    def test_constant_at_ends_is_rejected(self) -> None:
        t = np.arange(0, 30e-9, STEP)
        shape = np.exp(-(((t - 15e-9) / 2.5e-9) ** 2))
        wave = shape * np.cos(2 * np.pi * CARRIER * t)
        plain = demodulate(Waveform(t, wave), CARRIER)
        biased = demodulate(Waveform(t, wave + 0.9), CARRIER)
        # 130 dB of 0.9 V.
        assert np.abs(biased.iq - plain.iq).max() < 5e-7

    def test_analytic_signal_of_library(self) -> None:
        # A whole number of periods and a burst that is zero at both ends, so that the discrete
        # Hilbert transform is exact.
        t = np.arange(128 * 80) * STEP
        shape = np.exp(-(((t - 64 / CARRIER) * CARRIER / 10) ** 2))
        v = shape * np.cos(2 * np.pi * CARRIER * t + 0.6)
        library = hilbert(v) * np.exp(-2j * np.pi * CARRIER * t)
        envelope = demodulate(Waveform(t, v), CARRIER)
        common = envelope.iq.size - 1
        # Filter and spline as in `test_pass_band`.
        assert np.abs(envelope.iq[:common] - library[::40][:common]).max() < 1e-6

    def test_kaiser_filter_of_library(self) -> None:
        # Mixer and low-pass at the full rate, designed by scipy.signal for the same band edges.
        t = np.arange(0, 24e-9, STEP)
        v = np.where((t > 8e-9) & (t < 16e-9), np.sin(2 * np.pi * CARRIER * (t - 8e-9)), 0.0)
        rate = 1 / STEP
        taps = firwin(1363, CARRIER / 2, window=("kaiser", 0.1102 * (130 - 8.7)), fs=rate)
        full = fftconvolve(2 * v * np.exp(-2j * np.pi * CARRIER * t), taps, mode="same")
        envelope = demodulate(Waveform(t, v), CARRIER)
        common = slice(30, envelope.iq.size - 30)
        # The same length and window; the switch lies on a sample, so that the averages over
        # cells, which the library's chain does not take, make no difference either.
        assert np.abs(envelope.iq[common] - full[::40][common]).max() < 1e-6

    def test_trapezoidal_wave_with_corners_off_the_grid(self, validate: Validate) -> None:
        start, stop = 1.0301e-9, 12e-9
        t = simulator_grid(trapezoid_corners(start, stop), stop)
        envelope = demodulate(Waveform(t, trapezoid(t, start)), CARRIER)
        # Fourier series of a trapezoid: 2 A d sinc(d) sinc(r), d the part of the period at half
        # height, r that of a rise; C. R. Paul, "Introduction to Electromagnetic Compatibility",
        # chapter on signal spectra (recalled from memory).
        middle = start + (10e-12 + 73e-12) / 2
        d, r = 73e-12 * CARRIER, 10e-12 * CARRIER
        expected = 2 * d * np.sinc(d) * np.sinc(r) * np.exp(-2j * np.pi * CARRIER * middle)
        part = envelope.iq[(envelope.t > start + 2 * GUARD) & (envelope.t < stop - GUARD)]
        # Values on the grid instead of means over its cells would be off by up to 5e-4: the
        # harmonics 79 and 81 fold onto the carrier. Means suppress them 80-fold.
        assert np.abs(part - expected).max() < 5e-6
        quantity = "carrier of a trapezoidal wave of 1 V, 45 % of the period high"
        level = float(np.abs(part).mean())
        validate(quantity, sources.PAUL, float(np.abs(expected)), level, "V", abs=5e-6)

    def test_window_is_a_part_of_the_whole(self) -> None:
        t = np.arange(0, 20e-9, STEP)
        wave = Waveform(t, np.cos(2 * np.pi * CARRIER * t + t / 1e-9))
        whole = demodulate(wave, CARRIER)
        part = demodulate(wave, CARRIER, start=whole.t[40], stop=whole.t[80])
        assert part.t == pytest.approx(whole.t[40:81])
        # The same sums at the same times: rounding only.
        assert np.abs(part.iq - whole.iq[40:81]).max() < 1e-10

    def test_narrow_bandwidth_removes_neighbour(self) -> None:
        t = np.arange(0, 100e-9, STEP)
        wave = np.cos(2 * np.pi * CARRIER * t) + np.cos(2 * np.pi * (CARRIER + 0.7e9) * t)
        envelope = demodulate(Waveform(t, wave), CARRIER, bandwidth=0.2e9)
        guard = half_length(CARRIER, 0.2e9)
        part = envelope.iq[(envelope.t > guard) & (envelope.t < 100e-9 - guard)]
        # The stop edge is at 0.6 GHz.
        assert np.abs(part - 1).max() < 1e-6
        assert 1 / envelope.dt == pytest.approx(8 * 0.2e9)


class TestErrors:
    def test_too_coarse(self) -> None:
        t = np.arange(0, 20e-9, 1 / CARRIER / 15)
        with pytest.raises(WaveformError, match=r"too coarse.* 15 samples per period"):
            demodulate(Waveform(t, np.cos(2 * np.pi * CARRIER * t)), CARRIER)

    def test_too_short(self) -> None:
        t = np.arange(0, 1e-9, STEP)
        with pytest.raises(WaveformError, match="too short"):
            demodulate(Waveform(t, np.cos(2 * np.pi * CARRIER * t)), CARRIER)

    @pytest.mark.parametrize("bandwidth", [0.0, -1.0, 3e9, float("nan")])
    def test_bandwidth(self, bandwidth: float) -> None:
        t = np.arange(0, 20e-9, STEP)
        with pytest.raises(WaveformError, match="bandwidth"):
            demodulate(Waveform(t, np.cos(t)), CARRIER, bandwidth=bandwidth)

    @pytest.mark.parametrize("carrier", [0.0, -6e9, float("nan"), float("inf")])
    def test_carrier(self, carrier: float) -> None:
        t = np.arange(0, 20e-9, STEP)
        with pytest.raises(WaveformError, match="positive frequency"):
            demodulate(Waveform(t, np.cos(t)), carrier)

    @pytest.mark.parametrize(("start", "stop"), [(-1e-9, None), (None, 3e-8), (2e-9, 1e-9)])
    def test_window(self, start: float | None, stop: float | None) -> None:
        t = np.arange(0, 20e-9, STEP)
        with pytest.raises(WaveformError, match="not inside the record"):
            demodulate(Waveform(t, np.cos(t)), CARRIER, start=start, stop=stop)


def smooth_envelope(t: FloatArray, seed: int) -> ComplexArray:
    """Three Gaussian pulses at random offsets of up to 0.6 GHz, zero at both ends of 40 ns."""
    rng = np.random.default_rng(seed)
    total = np.zeros(t.size, dtype=np.complex128)
    for _ in range(3):
        width, centre = rng.uniform(1e-9, 2e-9), rng.uniform(14e-9, 26e-9)
        level = rng.uniform(0.05, 0.3) * np.exp(2j * np.pi * rng.uniform())
        turn = np.exp(2j * np.pi * rng.uniform(-0.6e9, 0.6e9) * t)
        total += level * turn * np.exp(-(((t - centre) / width) ** 2))
    return total


def on_carrier(t: FloatArray, iq: ComplexArray) -> Waveform:
    return Waveform(t, (iq * np.exp(2j * np.pi * CARRIER * t)).real)


class TestProperties:
    @settings(derandomize=True, deadline=None, max_examples=15)
    @given(seed=st.integers(0, 10_000))
    def test_round_trip(self, seed: int) -> None:
        t = np.arange(0, 40e-9, STEP)
        envelope = demodulate(on_carrier(t, smooth_envelope(t, seed)), CARRIER)
        # Filter and spline, as in `test_pass_band`, on a sum of at most 0.9.
        assert np.abs(envelope.iq - smooth_envelope(envelope.t, seed)).max() < 1e-6

    @settings(derandomize=True, deadline=None, max_examples=10)
    @given(a=st.floats(-5, 5), b=st.floats(-5, 5), seed=st.integers(0, 10_000))
    def test_linear(self, a: float, b: float, seed: int) -> None:
        t = np.arange(0, 40e-9, STEP)
        one, two = (on_carrier(t, smooth_envelope(t, seed + i)) for i in range(2))
        mixed = demodulate(Waveform(t, a * one.v + b * two.v), CARRIER).iq
        parts = a * demodulate(one, CARRIER).iq + b * demodulate(two, CARRIER).iq
        # Rounding of the running integral: 2e4 cells times 1e-16.
        assert np.abs(mixed - parts).max() < 1e-10

    @settings(derandomize=True, deadline=None, max_examples=10)
    @given(angle=st.floats(-np.pi, np.pi), seed=st.integers(0, 10_000))
    def test_phase_shift(self, angle: float, seed: int) -> None:
        t = np.arange(0, 40e-9, STEP)
        turned = demodulate(on_carrier(t, smooth_envelope(t, seed) * np.exp(1j * angle)), CARRIER)
        plain = demodulate(on_carrier(t, smooth_envelope(t, seed)), CARRIER)
        # Twice the tolerance of the round trip.
        assert np.abs(turned.iq - plain.iq * np.exp(1j * angle)).max() < 2e-6

    @settings(derandomize=True, deadline=None, max_examples=10)
    @given(shift=st.floats(-1e-7, 1e-7), seed=st.integers(0, 10_000))
    def test_time_shift(self, shift: float, seed: int) -> None:
        t = np.arange(0, 40e-9, STEP)
        wave = on_carrier(t, smooth_envelope(t, seed))
        moved = demodulate(Waveform(t + shift, wave.v), CARRIER)
        turn = np.exp(-2j * np.pi * CARRIER * shift)
        assert moved.t0 == shift
        # The waveform is the same, so only the rounding of times near 1e-7 s is left.
        assert np.abs(moved.iq - demodulate(wave, CARRIER).iq * turn).max() < 1e-9
