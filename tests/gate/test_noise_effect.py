"""Oracle: closed forms for rectangular pulses and idles, on both paths of the bridge."""

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.constants import Boltzmann, Planck

from cosim.coupling import DriveLine
from cosim.errors import TestbenchError
from cosim.noise_effect import NoisyGate, noisy_gate
from cosim.noises import AmplitudeNoise, DetuningNoise, Noise, PhaseNoise
from cosim.quantum.qubit import Qubit
from cosim.qubit_drive import QubitDrive
from cosim.voltage_noises import LineNoise, ProbeNoise
from cosim.waveform import Envelope
from tests import sources
from tests.validation import Validate

TOPIC = "dynamics in the rotating-wave approximation"

CARRIER = 5e9
SAMPLES = 2000
SEED = 3


def gate(turns: float, duration: float, *noises: Noise, samples: int = SAMPLES) -> NoisyGate:
    """A rectangular resonant pulse of so many turns with 1 Hz/V, without relaxation."""
    line = DriveLine(rabi_per_volt=1.0)
    drive = QubitDrive(CARRIER, False, False, Qubit(CARRIER), line, (0.0, duration))
    iq = np.full(401, turns / duration, dtype=np.complex128)
    envelope = Envelope(0.0, duration / 400, iq, CARRIER)
    return noisy_gate(drive, envelope, noises, samples=samples, seed=SEED)


def check_sampled(found: NoisyGate, expected: float) -> None:
    """Four standard errors: one failure in 16,000 draws of a fixed seed."""
    effect = found.effect
    assert abs(effect.infidelity - expected) < 4 * effect.standard_error
    assert 0.0 < effect.standard_error < 0.1 * expected
    assert effect.agree


def test_a_constant_relative_amplitude_error(validate: Validate) -> None:
    found = gate(0.5, 50e-9, AmplitudeNoise("amplitude", deviation=0.01))
    expected = (1 - math.exp(-((math.pi * 0.01) ** 2) / 2)) / 3
    # The quadrature's own tolerance.
    validate(
        "random amplitude, through [[noise]]",
        sources.GAUSSIAN_INTEGRAL,
        expected,
        found.effect.infidelity,
        abs=1e-10,
    )
    assert found.effect.method == "quadrature"
    assert found.effect.standard_error == 0.0


def test_an_idle_with_quasi_static_detuning(validate: Validate) -> None:
    spread = DetuningNoise("detuning", t2_star=10e-6)
    found = gate(0.0, 5e-6, spread)
    expected = (1 - math.exp(-0.25)) / 3
    validate(
        "idle with T2*, through [[noise]]",
        sources.HANSON,
        expected,
        found.effect.infidelity,
        abs=1e-10,
    )
    assert spread.spread == pytest.approx(math.sqrt(2) / 10e-6, rel=1e-12)


def test_an_idle_with_white_detuning_noise() -> None:
    density = 1e3  # Hz^2/Hz; 1/T_phi = (2 pi)^2 density/4
    duration = 1e-6
    found = gate(0.0, duration, DetuningNoise("detuning", white=density))
    rate = (2 * math.pi) ** 2 * density / 4
    check_sampled(found, (1 - math.exp(-rate * duration)) / 3)
    # First order counts the whole of rate x duration; the band ends at half the sampling rate,
    # above which a sinc^2 of 200 turns has 1/(pi^2 200) of its area.
    first, _ = found.effect.first_order, found.effect.sources[0]
    assert first == pytest.approx(rate * duration / 3, rel=1 / (math.pi**2 * 200) * 1.1)


def test_white_amplitude_noise_on_a_pi_pulse() -> None:
    density, duration = 1e-11, 50e-9
    found = gate(0.5, duration, AmplitudeNoise("amplitude", white=density))
    # C05's formula: the angle's variance is pi^2 S/(2 tau).
    expected = (1 - math.exp(-(math.pi**2) * density / (4 * duration))) / 3
    check_sampled(found, expected)
    source = found.effect.sources[0]
    # What the filter misses above half the sampling rate is named.
    assert source.infidelity + source.unreached == pytest.approx(
        math.pi**2 * density / (12 * duration), rel=1e-3
    )


def test_a_band_that_ends_above_the_samples_is_bounded_and_named() -> None:
    density, duration = 1e-10, 50e-9
    found = gate(0.5, duration, AmplitudeNoise("amplitude", white=density, low=5e9, high=2e10))
    (source,) = found.effect.sources
    # No sample carries it, 400 slices of a gate of 50 ns end at 4 GHz; the sinc^2 of the angle's
    # variance leaves at most 1/(pi^2 4 GHz 50 ns) of the whole there, that of all white noise.
    whole = math.pi**2 * density / (4 * duration) / 3
    assert source.infidelity == 0.0
    assert 0.0 < source.unreached < 2 * whole / (math.pi**2 * 4e9 * duration)
    assert found.effect.agree
    assert any("where the samples end" in text for text in found.warnings)


def test_white_voltage_noise_flips_up_and_down() -> None:
    density, duration = 2e2, 1e-6  # V^2/Hz at 1 Hz/V
    found = gate(0.0, duration, ProbeNoise("probe", white=density))
    # The golden rule: rates (2 pi k)^2 S/2 up and down, which is a loss of their sum times T/3.
    first = (2 * math.pi) ** 2 * density * duration / 3
    source = found.effect.sources[0]
    assert source.infidelity + source.unreached == pytest.approx(first, rel=1e-3)
    # Two independent white rotations make a depolarisation: x and y keep exp(-r T/2), z exp(-r T).
    rate = (2 * math.pi) ** 2 * density
    kept = (2 * math.exp(-rate * duration / 2) + math.exp(-rate * duration)) / 3
    check_sampled(found, (1 - kept) / 2)


def test_the_phase_is_given_in_both_frames() -> None:
    """A slow phase costs all of itself against the qubit, and next to nothing against its own."""
    duration = 50e-9
    slow = PhaseNoise("phase", points=((1e3, 1e-10), (1e5, 1e-10)), below="zero", above="zero")
    found = gate(0.5, duration, slow)
    variance = 1e-10 * (1e5 - 1e3)
    source = found.effect.sources[0]
    # A pi pulse about an axis that is off by phi: 1 - F_avg = (2/3) sin^2(phi), and phi hardly
    # moves within 50 ns, by (2 pi 1e5 50e-9)^2 of itself at most.
    assert source.infidelity == pytest.approx(2 * variance / 3, rel=2e-3)
    assert source.oscillator_frame < 1e-3 * source.infidelity
    check_sampled(found, source.infidelity)


@pytest.mark.full
def test_sources_add_up_and_the_seed_decides() -> None:
    noises = (
        DetuningNoise("detuning", name="a", white=2e2),
        AmplitudeNoise("amplitude", name="b", deviation=2e-3),
        PhaseNoise("phase", name="c", white=1e-12, high=1e9),
    )
    found = gate(0.25, 50e-9, *noises)
    assert [item.name for item in found.effect.sources] == ["a", "b", "c"]
    assert found.effect.first_order == sum(item.infidelity for item in found.effect.sources)
    assert found.effect.agree
    again = gate(0.25, 50e-9, *noises)
    assert again.effect.infidelity == found.effect.infidelity
    assert np.array_equal(again.correction, found.correction)
    # The correction is a channel: it keeps the trace.
    trace = np.eye(2).reshape(-1) @ found.correction
    np.testing.assert_allclose(trace, np.eye(2).reshape(-1), atol=1e-12)  # rounding of the mean


def test_strong_noise_is_said_to_be_strong() -> None:
    found = gate(0.0, 1e-6, DetuningNoise("detuning", white=1e6))
    assert not found.effect.agree
    assert "first order" in found.warnings[0]


def test_noise_that_is_counted_twice_is_named() -> None:
    line = DriveLine(rabi_per_volt=1.0)
    qubit = Qubit(CARRIER, t2=10e-6)
    drive = QubitDrive(CARRIER, False, False, qubit, line, (0.0, 1e-6))
    envelope = Envelope(0.0, 2.5e-9, np.zeros(401, dtype=np.complex128), CARRIER)
    noise = DetuningNoise("detuning", white=1e4)
    found = noisy_gate(drive, envelope, (noise,), samples=10, seed=1)
    assert any("counted twice" in text for text in found.warnings)


def test_a_density_that_does_not_cover_the_band_names_its_table() -> None:
    known = DetuningNoise("detuning", name="flux", points=((1e3, 1.0), (1e6, 1.0)))
    with pytest.raises(TestbenchError, match=r"\[\[noise\]\] number 1, 'flux': .*known from 1000"):
        gate(0.25, 50e-9, known)
    slower = gate(0.25, 50e-9, replace(known, above="zero"), samples=16)
    assert "below 1000 Hz" in slower.warnings[0]
    endless = DetuningNoise("detuning", flicker=1e6)
    with pytest.raises(TestbenchError, match="number 1"):
        gate(0.25, 50e-9, endless)
    assert gate(0.25, 50e-9, replace(endless, low=1e-3), samples=16).effect.infidelity > 0.0


def test_attenuators_at_their_stages(validate: Validate) -> None:
    """20 dB at 4 K and 20 dB at 0.1 K behind a source at 300 K, at 5 GHz."""
    noise = LineNoise("line", ((20.0, 4.0), (20.0, 0.1)), source=300.0)
    rabi = 1e9  # Hz/V
    line = DriveLine(rabi_per_volt=rabi, attenuation=40.0)
    duration = 10e-6
    drive = QubitDrive(CARRIER, False, False, Qubit(CARRIER), line, (0.0, duration))
    envelope = Envelope(0.0, duration / 400, np.zeros(401, dtype=np.complex128), CARRIER)
    found = noisy_gate(drive, envelope, (noise,), samples=16, seed=1)

    def planck(kelvin: float) -> float:
        return Planck * CARRIER / math.expm1(Planck * CARRIER / (Boltzmann * kelvin))

    power = (planck(300.0) / 100 + 0.99 * planck(4.0)) / 100 + 0.99 * planck(0.1)
    # The golden rule, up and down, as a loss: (rate up + rate down) T/3.
    expected = (2 * math.pi * rabi) ** 2 * 50.0 * power * duration / 3
    source = found.effect.sources[0]
    validate(
        "flips by the noise of two attenuator stages",
        sources.PLANCK,
        expected,
        source.infidelity + source.unreached,
        # The sum over frequencies and what is left of it above the band.
        rel=1e-3,
    )
    wrong = replace(drive, line=replace(line, attenuation=30.0))
    with pytest.raises(TestbenchError, match="its stages make 40 dB"):
        noisy_gate(wrong, envelope, (noise,), samples=16, seed=1)
