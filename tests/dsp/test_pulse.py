"""Oracle: one-pole pulses, Gaussians and image-reject formulas in closed form (sources beside)."""

import dataclasses
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cosim.dsp.demodulation import demodulate
from cosim.dsp.pulse import PulseMeasures, measure_pulse
from cosim.errors import WaveformError
from cosim.waveform import FloatArray, Waveform
from tests import sources
from tests.dsp.signals import CARRIER, STEP
from tests.validation import Validate

TOPIC = "signal"


def one_pole(t: FloatArray, start: float, length: float, tau: float) -> FloatArray:
    """A rectangular pulse of height 1 behind a one-pole low-pass."""
    rise = 1 - np.exp(-np.clip(t - start, 0, length) / tau)
    return rise * np.exp(-np.maximum(t - start - length, 0) / tau)


def raised_cosine(t: FloatArray, start: float, stop: float, edge: float) -> FloatArray:
    part = np.clip(np.minimum(t - start, stop - t) / edge, 0, 1)
    return 0.5 - 0.5 * np.cos(np.pi * part)


def carrier(t: FloatArray, phase: float = 0.0, frequency: float = CARRIER) -> FloatArray:
    return np.cos(2 * np.pi * frequency * t + phase)


class TestEdges:
    def test_one_pole_pulse(self, validate: Validate) -> None:
        # tau ln 9 from 10 to 90 %, 50 % after tau ln 2: "common practice"; amplitude 1 as the
        # pulse of 20 tau settles to 2e-9.
        t = np.arange(0, 400e-9, STEP)
        tau = 10e-9
        shape = one_pole(t, 30e-9, 200e-9, tau)
        found = measure_pulse(Waveform(t, 0.3 * shape * carrier(t)), CARRIER)
        # The parabola over the middle third of the plateau still sees 6e-6 of settling, which is
        # 6e-5 tau at the crossing of 90 %.
        assert found.amplitude == pytest.approx(0.3, rel=2e-5)
        for name, got in (("rise", found.rise_time), ("fall", found.fall_time)):
            quantity = f"{name} time of a pulse behind one pole of 10 ns"
            source = sources.CIRCUITS + ", tau ln 9"
            validate(quantity, source, tau * math.log(9), got, "s", rel=1e-4, card="F01")
        assert found.start == pytest.approx(30e-9 + tau * math.log(2), abs=2e-13)
        assert found.stop == pytest.approx(230e-9 + tau * math.log(2), abs=2e-13)
        assert found.duration == pytest.approx(200e-9, abs=4e-13)

    def test_fast_one_pole_pulse_is_rounded_by_the_filter(self) -> None:
        t = np.arange(0, 80e-9, STEP)
        shape = one_pole(t, 30e-9, 20e-9, 1e-9)
        found = measure_pulse(Waveform(t, 0.3 * shape * carrier(t)), CARRIER)
        # The crossing of 10 % comes 0.1 ns behind a corner, within the filter's 0.15 ns.
        assert found.rise_time == pytest.approx(1e-9 * math.log(9), rel=5e-3)
        # The crossing of 50 % is out of the filter's reach.
        assert found.start == pytest.approx(30e-9 + 1e-9 * math.log(2), abs=5e-13)

    def test_missing_area_of_one_pole_pulse(self, validate: Validate) -> None:
        # A pi pulse cut at its nominal end is short by pi (tau/T)(1 - exp(-T/tau)), and exact
        # with its tail: linear filter and area theorem.
        t = np.arange(0, 60e-9, STEP)
        tau, length = 1e-9, 20e-9
        shape = one_pole(t, 10e-9, length, tau)
        envelope = demodulate(Waveform(t, shape * carrier(t)), CARRIER)
        angle = np.concatenate(([0.0], np.cumsum(envelope.iq.real))) * envelope.dt * np.pi / length
        at_end = int(np.rint(30e-9 / envelope.dt))
        # Half a sample of 81 ps belongs to the sum up to the end. The end is a corner, which the
        # filter rounds: 4e-4 of the missing area.
        cut = angle[at_end] + 0.5 * (angle[at_end + 1] - angle[at_end])
        quantity = "angle that X180 of 20 ns lacks behind 1 ns of RC, cut at its end"
        source = sources.FILTER_AREA
        validate(quantity, source, 0.1570796, float(np.pi - cut), "rad", rel=1e-3, card="F16")
        quantity = "angle that X180 of 20 ns lacks behind 1 ns of RC, with its tail"
        lacks = float(np.pi - angle[-1])
        validate(quantity, source, 0.0, lacks, "rad", abs=1e-6 * np.pi, card="F16")

    @pytest.mark.parametrize("phase", [0.0, 0.8, -2.2])
    def test_gaussian(self, validate: Validate, phase: float) -> None:
        t = np.arange(0, 100e-9, STEP)
        sigma, centre = 5e-9, 50e-9
        shape = np.exp(-(((t - centre) / sigma) ** 2) / 2)
        found = measure_pulse(Waveform(t, 0.2 * shape * carrier(t, phase)), CARRIER)
        # A parabola through the logarithm of a Gaussian is exact; filter and spline 1e-6.
        assert found.amplitude == pytest.approx(0.2, rel=2e-6)
        # exp(-x^2/2) = y at x = sqrt(2 ln(1/y)). Linear interpolation between points 10 ps apart
        # is off by (10 ps/sigma)^2/8 sigma = 2.5e-15 s; 1e-6 of the level is 1e-14 s.
        half = sigma * math.sqrt(2 * math.log(2))
        edge = sigma * (math.sqrt(2 * math.log(10)) - math.sqrt(2 * math.log(1 / 0.9)))
        assert found.start == pytest.approx(centre - half, abs=5e-14)
        assert found.stop == pytest.approx(centre + half, abs=5e-14)
        quantity = "rise time of a Gaussian pulse of 5 ns standard deviation"
        formula = sources.GAUSSIAN_INTEGRAL.replace("Gaussian integral", "Gaussian shape")
        validate(quantity, formula, edge, found.rise_time, "s", abs=2e-13)
        assert found.fall_time == pytest.approx(edge, abs=2e-13)
        assert found.phase_error == pytest.approx(phase, abs=1e-6)
        assert abs(found.frequency_error) < 100

    def test_square_burst(self) -> None:
        t = np.arange(0, 60e-9, STEP)
        shape = np.where((t >= 20e-9) & (t < 40e-9), 0.3, 0.0)
        found = measure_pulse(Waveform(t, shape * carrier(t, 0.3)), CARRIER)
        # No overshoot of the filter in the level; edges as fast as the filter, 0.93 periods.
        assert found.amplitude == pytest.approx(0.3, rel=1e-4)
        assert found.rise_time == pytest.approx(0.93 / CARRIER, rel=0.05)
        # The switch may fall anywhere within a period's half swing.
        assert found.start == pytest.approx(20e-9, abs=0.2 / CARRIER)
        assert found.stop == pytest.approx(40e-9, abs=0.2 / CARRIER)
        assert found.extinction > 120

    def test_pulse_without_edges(self) -> None:
        t = np.arange(0, 30e-9, STEP)
        found = measure_pulse(Waveform(t, carrier(t)), CARRIER)
        assert found.start == 0.0
        assert found.stop == t[-1]
        assert math.isnan(found.rise_time)
        assert math.isnan(found.fall_time)
        assert math.isnan(found.extinction)


class TestLevels:
    def test_amplitude_is_the_peak(self, validate: Validate) -> None:
        # 0 dBm into 50 ohm is 0.3162278 V peak, 0.2236068 V rms: P = V_peak^2/(2 Z).
        t = np.arange(0, 60e-9, STEP)
        shape = raised_cosine(t, 10e-9, 50e-9, 5e-9)
        rms = math.sqrt(1e-3 * 50)
        found = measure_pulse(Waveform(t, math.sqrt(2) * rms * shape * carrier(t)), CARRIER)
        quantity = "peak voltage of 0 dBm in 50 ohm, as the pulse is measured"
        validate(quantity, sources.CIRCUITS, 0.3162278, found.amplitude, "V", rel=1e-6, card="F08")
        power = 10 * math.log10(found.amplitude**2 / (2 * 50) / 1e-3)
        assert power == pytest.approx(0.0, abs=1e-5)

    def test_extinction(self) -> None:
        t = np.arange(0, 80e-9, STEP)
        shape = 1e-3 + 0.3 * raised_cosine(t, 20e-9, 60e-9, 3e-9)
        found = measure_pulse(Waveform(t, shape * carrier(t)), CARRIER)
        # Far from the pulse the filter adds nothing of it; 1e-6 of either level is 1e-5 dB.
        assert found.extinction == pytest.approx(20 * math.log10(0.301 / 1e-3), abs=2e-5)

    @pytest.mark.parametrize(
        ("gain_db", "skew_deg", "expected"),
        [
            (0.1, 1.0, 39.61402),
            (0.1, 0.0, 44.79698),
            (0.0, 1.0, 41.18283),
            (0.5, 3.0, 28.19970),
        ],
    )
    @pytest.mark.parametrize("baseband", [0.2e9, -0.35e9])
    def test_image_rejection(
        self, validate: Validate, gain_db: float, skew_deg: float, expected: float, baseband: float
    ) -> None:
        # Gain ratio g and quadrature error p: (1 + g^2 + 2 g cos p)/(1 + g^2 - 2 g cos p) in
        # power; B. Razavi, "RF Microelectronics", image-reject receivers (recalled from memory).
        t = np.arange(0, 130e-9, STEP)
        g, p = 10 ** (gain_db / 20), math.radians(skew_deg)
        low, high = 2 * np.pi * baseband * t, 2 * np.pi * CARRIER * t
        wave = np.cos(low) * np.cos(high) - g * np.sin(low) * np.sin(high + p)
        shape = raised_cosine(t, 10e-9, 120e-9, 5e-9)
        found = measure_pulse(Waveform(t, shape * wave), CARRIER, baseband_frequency=baseband)
        # 3e-7 of the filter against an image of 6e-3: 5e-5, or 4e-4 dB.
        quantity = f"image of a modulator off by {gain_db} dB and {skew_deg:g} degrees"
        validate(quantity, sources.RAZAVI, -expected, found.image, "dBc", abs=5e-4, card="F10")
        wanted = abs(1 + g * np.exp(1j * p)) / 2
        assert found.amplitude == pytest.approx(wanted, rel=1e-5)
        assert found.carrier_leakage < -100

    def test_image_of_gaussian_pulse(self) -> None:
        t = np.arange(0, 130e-9, STEP)
        shape = np.exp(-(((t - 65e-9) / 15e-9) ** 2) / 2)
        low, high = 2 * np.pi * 0.2e9 * t, 2 * np.pi * CARRIER * t
        wave = np.cos(low) * np.cos(high) - 10 ** (0.1 / 20) * np.sin(low) * np.sin(
            high + math.radians(1)
        )
        found = measure_pulse(Waveform(t, shape * wave), CARRIER, baseband_frequency=0.2e9)
        # The shape is followed by a polynomial of degree four.
        assert found.image == pytest.approx(-39.61402, abs=1e-2)

    def test_carrier_leakage(self, validate: Validate) -> None:
        # Offset d on one input of a mixer with tones of peak A: 20 log10(d/A), mixer algebra.
        t = np.arange(0, 130e-9, STEP)
        low, high = 2 * np.pi * 0.25e9 * t, 2 * np.pi * CARRIER * t
        wave = (0.5 * np.cos(low) + 1e-3) * np.cos(high) - 0.5 * np.sin(low) * np.sin(high)
        shape = np.where((t > 10e-9) & (t < 120e-9), 1.0, 0.0)
        found = measure_pulse(Waveform(t, shape * wave), CARRIER, baseband_frequency=0.25e9)
        # 1e-6 of filter and spline is 1e-5 dB, and so are the digits of the expected value; the
        # image is the filter's ripple of -130 dB.
        leak = found.carrier_leakage
        quantity = "carrier of an offset of 1 mV beside tones of 0.5 V"
        validate(quantity, sources.MIXER, -53.9794, leak, "dBc", abs=5e-5, card="F11", digits=6)
        assert found.image < -120

    def test_image_needs_periods_of_the_tone(self) -> None:
        t = np.arange(0, 60e-9, STEP)
        shape = raised_cosine(t, 10e-9, 50e-9, 5e-9)
        wave = Waveform(t, shape * carrier(t, frequency=CARRIER + 20e6))
        found = measure_pulse(wave, CARRIER, baseband_frequency=20e6)
        assert math.isnan(found.image)
        assert math.isnan(found.carrier_leakage)
        assert math.isnan(measure_pulse(wave, CARRIER).image)


class TestFrequencyAndPhase:
    @pytest.mark.parametrize("offset", [1e3, -2e6, 40e6])
    def test_frequency_error(self, offset: float) -> None:
        t = np.arange(0, 130e-9, STEP)
        shape = raised_cosine(t, 10e-9, 120e-9, 5e-9)
        wave = Waveform(t, shape * carrier(t, 0.3, CARRIER + offset))
        found = measure_pulse(wave, CARRIER)
        # 1e-6 rad over 100 ns.
        assert found.frequency_error == pytest.approx(offset, abs=10)

    def test_phase_is_that_at_the_given_carrier(self) -> None:
        t = np.arange(0, 60e-9, STEP)
        shape = raised_cosine(t, 10e-9, 50e-9, 5e-9)
        wave = Waveform(t + 3.3e-9, shape * carrier(t + 3.3e-9, -1.2))
        assert measure_pulse(wave, CARRIER).phase_error == pytest.approx(-1.2, abs=1e-6)
        wanted = Waveform(t, shape * carrier(t, 0.9, CARRIER + 0.2e9))
        found = measure_pulse(wanted, CARRIER, baseband_frequency=0.2e9)
        assert found.phase_error == pytest.approx(0.9, abs=1e-6)

    @settings(derandomize=True, deadline=None, max_examples=15)
    @given(
        gain=st.floats(1e-3, 1e3),
        angle=st.floats(-3.1, 3.1),
        shift=st.floats(-5e-8, 5e-8),
    )
    def test_scale_turn_and_shift(self, gain: float, angle: float, shift: float) -> None:
        t = np.arange(0, 50e-9, STEP)
        shape = raised_cosine(t, 10e-9, 40e-9, 6e-9) * (1 - 0.1 * t / 50e-9)
        plain = measure_pulse(Waveform(t, shape * carrier(t)), CARRIER)
        later = t + shift
        found = measure_pulse(Waveform(later, gain * shape * carrier(later, angle)), CARRIER)
        # Filter and spline, 1e-6 each of the level; with edges of 1 V in 4 ns, 1e-14 s.
        assert found.amplitude == pytest.approx(gain * plain.amplitude, rel=2e-6)
        assert found.start - shift == pytest.approx(plain.start, abs=1e-13)
        assert found.rise_time == pytest.approx(plain.rise_time, abs=1e-12)
        assert found.phase_error == pytest.approx(angle, abs=2e-6)


class TestErrors:
    @pytest.mark.parametrize(
        ("wave", "words"),
        [
            ("zero", "no pulse"),
            ("constant", "no pulse"),
            ("noise", "no pulse"),
            ("third harmonic", "no pulse"),
            ("half again", "not at the frequency wanted"),
        ],
    )
    def test_no_pulse(self, wave: str, words: str) -> None:
        t = np.arange(0, 60e-9, STEP)
        v = {
            "zero": 0 * t,
            "constant": 0 * t + 0.9,
            "noise": np.random.default_rng(0).standard_normal(t.size),
            "third harmonic": carrier(t, frequency=3 * CARRIER),
            "half again": carrier(t, frequency=1.45 * CARRIER),
        }[wave]
        with pytest.raises(WaveformError, match=words):
            measure_pulse(Waveform(t, v), CARRIER)

    def test_wrong_sideband(self) -> None:
        t = np.arange(0, 60e-9, STEP)
        wave = Waveform(t, carrier(t, frequency=CARRIER + 0.2e9))
        with pytest.raises(WaveformError, match="sign of the baseband frequency"):
            measure_pulse(wave, CARRIER, baseband_frequency=-0.2e9)

    def test_baseband_outside_pass_band(self) -> None:
        t = np.arange(0, 60e-9, STEP)
        with pytest.raises(WaveformError, match="outside the pass band"):
            measure_pulse(Waveform(t, carrier(t)), CARRIER, baseband_frequency=2e9)

    def test_envelope_of_another_carrier(self) -> None:
        t = np.arange(0, 60e-9, STEP)
        wave = Waveform(t, carrier(t))
        with pytest.raises(WaveformError, match="belongs to a carrier"):
            measure_pulse(wave, CARRIER, envelope=demodulate(wave, CARRIER + 1e6))


def test_every_field_has_a_unit() -> None:
    for item in dataclasses.fields(PulseMeasures):
        assert item.metadata["unit"] in {"V", "s", "dB", "dBc", "Hz", "rad"}


def test_given_envelope_changes_nothing() -> None:
    t = np.arange(0, 60e-9, STEP)
    wave = Waveform(t, raised_cosine(t, 10e-9, 50e-9, 5e-9) * carrier(t))
    given_one = measure_pulse(wave, CARRIER, envelope=demodulate(wave, CARRIER))
    own = measure_pulse(wave, CARRIER)
    # The same numbers in the same order.
    assert given_one.duration == own.duration
    assert given_one.amplitude == own.amplitude
