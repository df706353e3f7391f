"""Oracle: published formulas for converters, modulators and oscillators."""

import math

import numpy as np
import pytest

from cosim.quantum.qubit import Qubit
from cosim.specification.blocks import PhaseNoiseTable, WidebandTable
from cosim.specification.converters import rounding_errors, staircase
from cosim.specification.distortion import Distortion, distorted_losses
from cosim.specification.notes import needed_attenuation
from cosim.specification.pulse import Envelope, IdealPulse, make_pulse
from cosim.specification.request import PulseTable
from cosim.specification.small_errors import (
    imbalance,
    integrated_phase,
    jitter_snr,
    quantisation_snr,
)
from cosim.specification.spectra import mask_level
from tests import sources
from tests.specification.benches import square_pulse
from tests.validation import Validate

TOPIC = "signal"
DURATION = 1e-6
IEEE_1241 = "IEEE Std 1241, aperture jitter, recalled from memory; computed from the formula"
OPPENHEIM = (
    "A. V. Oppenheim, R. W. Schafer, Discrete-Time Signal Processing, zero-order hold, recalled "
    "from memory; computed from the formula"
)
LEESON = (
    'D. B. Leeson, "A simple model of feedback oscillator noise spectrum", Proc. IEEE 54, 329 '
    "(1966), recalled from memory; computed from the formula"
)


def sine(frequency: float, cells: int) -> IdealPulse:
    """A pulse whose envelope is a sine of full scale, for the converters alone."""
    t = np.linspace(0.0, DURATION, 200_001)
    area = np.sin(2 * math.pi * frequency * t) / (2 * math.pi * frequency)
    envelope = Envelope(t, area.astype(np.complex128))
    return IdealPulse(Qubit(6e9), envelope, DURATION, math.pi, 1.0, 0.0, 0.0, 0.0, cells)


def tone(held: np.ndarray, pulse: IdealPulse, frequency: float) -> float:
    """Amplitude of a record over the cells of a pulse at a frequency."""
    wave = np.exp(-2j * math.pi * frequency * pulse.middles) * pulse.within
    return float(2 * abs((held * wave).sum()) / pulse.cells)


@pytest.mark.parametrize(("part", "droop"), [(0.25, -0.9120976), (0.40, -2.420071)])
def test_staircase_droops_and_has_images(validate: Validate, part: float, droop: float) -> None:
    rate = 100e6
    pulse = sine(part * rate, 6400)
    stairs = staircase(pulse, rate)
    held = stairs.over_cells(stairs.levels)
    found = 20 * math.log10(tone(held, pulse, part * rate))
    quantity = f"droop of the DAC's staircase at {part} of its rate"
    # A sample is 64 cells long, at whose middles the tone is compared: (pi part/64)^2/6 = 7e-5.
    validate(quantity, OPPENHEIM, droop, found, "dB", abs=2e-3, card="C10")
    if part == 0.25:
        image = 20 * math.log10(tone(held, pulse, rate - part * rate)) - found
        quantity = "first image of the DAC's staircase at a quarter of its rate"
        validate(quantity, OPPENHEIM, -9.542425, image, "dB", abs=8e-3, card="C10")


def test_rounding_has_the_power_of_a_step_squared_over_twelve(validate: Validate) -> None:
    # A sine that meets the sampling at 997 phases, of which no two are alike.
    pulse = sine(7e6, 997)
    what = rounding_errors(pulse, 997e6, 1.0, 2.0**-10, 400, 1, 1)
    inside = what.rounding[:, pulse.within > 0].real
    found = 10 * math.log10(0.5 / float((inside**2).mean()))
    quantity = "signal over noise of a full-scale sine of 10 bits"
    # 400 places of the codes against 997 samples: 1e-3 of the power.
    validate(quantity, sources.BENNETT, 61.96691, found, "dB", abs=0.02, card="C09")
    assert quantisation_snr(10) == pytest.approx(61.96691, abs=1e-5)


def test_jitter_limits_the_signal_over_noise(validate: Validate) -> None:
    found = jitter_snr(1e9, 1e-13)
    validate(
        "signal over noise for jitter of 0.1 ps",
        IEEE_1241,
        64.0364,
        found,
        "dB",
        rel=1e-5,
        card="C08",
    )


def test_phase_noise_becomes_jitter(validate: Validate) -> None:
    table = PhaseNoiseTable(low=1e3, high=1e6, offset=1e5, points=((1e3, -100.0), (1e6, -100.0)))
    phase = 10 ** (-100 / 20) * integrated_phase(table, 1e3, 1e6)
    validate(
        "specified phase noise, integrated",
        sources.IEEE_1139,
        0.01413506,
        phase,
        "rad",
        rel=1e-6,
        card="C21",
    )
    jitter = phase / (2 * math.pi * 6e9)
    validate(
        "the same as jitter", sources.IEEE_1139, 3.749442e-13, jitter, "s", rel=1e-6, card="C21"
    )


def test_leesons_shape(validate: Validate) -> None:
    table = PhaseNoiseTable(low=1.0, offset=1e6, corner=150e6, flicker_corner=1e5)
    floor = -130.0495 + mask_level(table, 1e15)
    # 1e15 Hz is so far out that the corner's 150 MHz adds nothing to the floor.
    validate(
        "Leeson's shape: floor for -130.0495 dBc/Hz at 1 MHz",
        LEESON,
        -173.9855,
        floor,
        "dBc/Hz",
        abs=1e-3,
        card="F05",
    )
    slope = mask_level(table, 1e4) - mask_level(table, 1e3)
    assert slope == pytest.approx(-30.0 + 10 * math.log10(1.1 / 1.01) + 0.0, abs=0.05)


def test_an_image_is_that_of_either_imbalance(validate: Validate) -> None:
    gain, phase = imbalance(10 ** (-44.79698 / 20))[0], imbalance(10 ** (-41.18283 / 20))[1]
    quantity = "imbalance of the gain for an image rejection of 44.79698 dB"
    found = 20 * math.log10(gain)
    # The rejections carry seven digits.
    validate(quantity, sources.RAZAVI, 0.1, found, "dB", rel=1e-6, card="F10")
    quantity = "deviation from quadrature for an image rejection of 41.18283 dB"
    validate(quantity, sources.RAZAVI, 1.0, math.degrees(phase), "degree", rel=1e-6, card="F10")


@pytest.mark.parametrize("image", [1e-3, 0.05])
def test_an_image_of_direct_conversion_is_less_amplitude(image: float) -> None:
    # Direct conversion: Q larger than I by a ratio is (1 + g)/2 of the signal and (1 - g)/2 of
    # its mirror, which for a pulse in I alone is nothing but less amplitude.
    pulse = square_pulse()
    lost = distorted_losses(pulse, Distortion(image=np.array([[-image + 0j]])))
    assert lost[0] == pytest.approx((2 / 3) * math.sin(0.5 * math.pi * image) ** 2, rel=1e-9)


def test_staircase_of_a_spin_costs_nothing_and_of_a_transmon_much() -> None:
    # In one quadrature all parts of a pulse commute on two levels, so that its area decides.
    table = PulseTable("raised cosine", 40e-9)
    for levels, costs in ((2, False), (3, True)):
        pulse = make_pulse(table, Qubit(5e9, levels, -300e6), math.pi)
        stairs = staircase(pulse, 100e6)
        assert stairs.levels.size == 4
        held = stairs.over_cells(stairs.levels)
        ideal = np.diff(pulse.envelope.up_to(pulse.edges)) / pulse.step
        scale = ideal.real.sum() / held.real.sum()
        lost = distorted_losses(pulse, Distortion(rounding=(scale * held - ideal)[None]))
        clean = distorted_losses(pulse, Distortion())
        # Rounding of some hundred products.
        assert (lost[0] - clean[0] > 1e-3) == costs
        assert costs or abs(lost[0] - clean[0]) < 1e-12


def test_attenuation_brings_a_warm_source_down() -> None:
    # Far above h f/k both temperatures are classical: T = T_s/A + (1 - 1/A) T_a.
    table = WidebandTable(source=300.0, temperature=4.0)
    f, density = 1e6, 1.380649e-23 * 50.0 * 7.0
    ratio = (300.0 - 4.0) / (7.0 - 4.0)
    found = needed_attenuation(table, density, f)
    # h f/2k beside 4 K: 6e-6.
    assert found == pytest.approx(10 * math.log10(ratio), abs=1e-3)
    assert math.isinf(needed_attenuation(table, density / 2.0, f))
    assert needed_attenuation(table, 100.0 * density, f) == 0.0
