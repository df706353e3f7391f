"""Oracle: SU(2) algebra and published formulas, and where the formulas for small errors fail.

Each curve is what evolving the pulse with the error gives; the closed forms of rectangular pulses
on two levels are exact, and the formulas for small errors are their leading order.
"""

import math

import numpy as np
import pytest
from scipy.constants import Boltzmann, Planck

from cosim.quantum.qubit import Qubit
from cosim.specification.addition import alignment
from cosim.specification.allocation import combined
from cosim.specification.building import make_curves
from cosim.specification.curves import noise_curve
from cosim.specification.distortion import Distortion, distorted_losses
from cosim.specification.gate_specification import specify_gate
from cosim.specification.notes import equal_temperature
from cosim.specification.pulse import channel_infidelity, clean_channels, make_pulse
from cosim.specification.request import BLOCKS, PulseTable
from cosim.specification.small_errors import (
    axis_error,
    detuning_error,
    formula_coefficients,
    rotation_cost,
)
from cosim.specification.spectra import white_noise
from tests import sources
from tests.specification.benches import (
    DURATION,
    RABI_PER_VOLT,
    curve,
    design,
    request_of,
    square_pulse,
)
from tests.validation import Validate

TOPIC = "dynamics in the rotating-wave approximation"
# The phase of a detuned carrier is held over a cell, of which a pulse has 128: (pi/128)^2/6 = 1e-4.
CELLS = 2e-4


@pytest.mark.parametrize(("angle", "exact"), [(math.pi, 0.0001644799), (math.pi / 2, 4.112251e-05)])
def test_over_rotation(validate: Validate, angle: float, exact: float) -> None:
    found = curve("amplitude", {}, square_pulse(angle)).cost(0.01)
    turns = f"{math.degrees(angle):.0f} degrees"
    quantity = f"specified amplitude: cost of 1 % at {turns}"
    # The digits of the card.
    validate(quantity, sources.ALGEBRA, exact, found, rel=1e-6, card="A03")
    assert rotation_cost(0.01 * angle) == pytest.approx(exact, rel=1e-4, abs=0.0)


@pytest.mark.parametrize(("angle", "exact"), [(math.pi, 0.001665071), (math.pi / 2, 0.0008329712)])
def test_detuning_in_the_oscillators_frame(validate: Validate, angle: float, exact: float) -> None:
    pulse = square_pulse(angle)
    offset = 0.05 * pulse.peak / (2 * math.pi)
    found = curve("carrier", {}, pulse, "oscillator").cost(offset)
    quantity = f"specified carrier: cost of Delta/Omega = 0.05 at {math.degrees(angle):.0f} degrees"
    validate(quantity, sources.ALGEBRA, exact, found, rel=CELLS, card="A04")
    lead = rotation_cost(detuning_error(angle, DURATION, offset, "oscillator"))
    assert lead == pytest.approx((2 * 0.05 * math.sin(angle / 2)) ** 2 / 6, rel=1e-12, abs=0.0)


def test_detuning_in_the_qubits_frame_counts_the_slip() -> None:
    # For a half turn the slip Delta T stands at right angles to the error 2 Delta/Omega.
    pulse = square_pulse()
    offset = 1e-4 * pulse.peak / (2 * math.pi)
    slip = 2 * math.pi * offset * DURATION
    wanted = (slip**2 + (2e-4) ** 2) / 6
    assert curve("carrier", {}, pulse).cost(offset) == pytest.approx(wanted, rel=CELLS, abs=0.0)
    lead = rotation_cost(detuning_error(math.pi, DURATION, offset, "qubit"))
    assert lead == pytest.approx(wanted, rel=1e-9, abs=0.0)


@pytest.mark.parametrize(("angle", "exact"), [(math.pi, 0.0002666311), (math.pi / 2, 0.0001333222)])
def test_axis_error(validate: Validate, angle: float, exact: float) -> None:
    found = curve("phase", {}, square_pulse(angle)).cost(0.02)
    quantity = f"specified phase: cost of 20 mrad at {math.degrees(angle):.0f} degrees"
    validate(quantity, sources.ALGEBRA, exact, found, rel=1e-6, card="A05")
    assert rotation_cost(axis_error(angle, 0.02)) == pytest.approx(exact, rel=2e-4, abs=0.0)


def test_duration_and_jitter(validate: Validate) -> None:
    pulse = square_pulse(duration=20e-9)
    found = curve("timing", {}, pulse).cost(5e-11)
    quantity = "specified duration: cost of 50 ps of 20 ns"
    validate(quantity, sources.ALGEBRA, 1.028079e-05, found, rel=1e-6, card="A06")
    found = curve("jitter", {}, pulse).cost(5e-12)
    quantity = "specified jitter: cost of 5 ps on each edge of 20 ns"
    # Evenly spread normal numbers have the right second moment and nearly the right fourth.
    validate(quantity, sources.ALGEBRA, 2.056167e-07, found, rel=1e-6, card="A06")


def test_static_and_white_amplitude_noise(validate: Validate) -> None:
    pulse = square_pulse()
    found = curve("amplitude_noise", {}, pulse).cost(math.sqrt(1e-13))
    quantity = "specified amplitude noise: cost of 1e-13 1/Hz, white"
    validate(quantity, sources.GAUSSIAN_INTEGRAL, 1.64493e-06, found, rel=1e-5, card="C05")


def test_flicker_noise_of_the_amplitude() -> None:
    # The mean over T of noise S/f from f0 on has the variance S (3/2 - gamma - ln(2 pi f0 T)).
    one = curve("flicker_noise", {"low": "1 mHz"}, square_pulse())
    variance = 1.5 - np.euler_gamma - math.log(2 * math.pi * 1e-3 * DURATION)
    # The sampled density ends at half the rate of the cells.
    assert one.order == pytest.approx(rotation_cost(math.pi) * variance, rel=2e-3, abs=0.0)


def test_white_noise_at_the_qubit(validate: Validate) -> None:
    # An idle is flipped at (2 pi k)^2 S/2 each way and loses 2/3 of that; so does any pulse of
    # two levels, for white noise has no preferred direction in any frame.
    density = 1e-15
    found = curve("wideband", {}, square_pulse()).cost(math.sqrt(density))
    wanted = (2 * math.pi * RABI_PER_VOLT) ** 2 * density * DURATION / 3
    quantity = "specified noise at the qubit: cost of white voltage noise over a pulse"
    # Noise is constant over a cell, in which the pulse turns the qubit by pi/128.
    validate(quantity, sources.GOLDEN_RULE, wanted, found, rel=1e-4, digits=12)


def test_decoherence_is_that_of_any_gate_of_that_length(validate: Validate) -> None:
    pulse = make_pulse(PulseTable("square", 50e-9), Qubit(6e9, t1=30e-6, t2=20e-6), math.pi)
    lossy, clean = clean_channels(pulse)
    found = channel_infidelity(pulse, lossy) - channel_infidelity(pulse, clean)
    quantity = "specified gate: cost of T1 and T2, fixed"
    validate(quantity, sources.ABAD, 0.0011099, found, rel=1e-3, card="A09")


@pytest.mark.parametrize(
    ("frame", "fm", "exact"),
    [
        ("qubit", 1e6, 5.02644e-05),
        ("oscillator", 1e6, 5.02644e-07),
        ("qubit", 47e6, 5.34976e-07),
        ("oscillator", 47e6, 1.18176e-05),
    ],
)
def test_phase_modulation_in_both_frames(
    validate: Validate, frame: str, fm: float, exact: float
) -> None:
    pulse = square_pulse()
    psi = 2 * math.pi * np.arange(16)[:, None] / 16
    phase = 0.01 * np.cos(2 * math.pi * fm * pulse.middles + psi)
    found = 1.5 * float(distorted_losses(pulse, Distortion(phase=phase), frame).mean())
    quantity = f"1 - F_pro by phase modulation at {fm / 1e6:g} MHz, {frame}'s frame"
    # First order in the phase, which is constant over a cell: 1/54 of a turn at 47 MHz.
    validate(quantity, sources.BALL, exact, found, rel=1e-2, card="C07")


def test_white_frequency_noise_of_an_oscillator(validate: Validate) -> None:
    # L falls as 1/f^2: white frequency noise of density S1, which costs a half turn
    # 1 - F_pro = S1 tau/8 whatever the turn, for the filter's area is tau.
    pulse = square_pulse()
    nyquist = 0.4 / pulse.step
    table = {
        "low": "1 Hz",
        "high": f"{nyquist / 1e9} GHz",
        "points": [["1 kHz", "-50 dBc/Hz"], ["10 GHz", "-190 dBc/Hz"]],
    }
    found = curve("phase_noise", table, pulse, "oscillator").cost(10 ** (-110 / 20))
    source = f"{sources.BALL}; S1 = 2 (2 pi)^2 L0 f0^2"
    quantity = "specified phase noise: cost of white frequency noise, oscillator's frame"
    # What is faster than the band, 2/(pi 2 pi f tau) = 0.2 %, and cells of finite length.
    validate(quantity, source, 789.5684 * DURATION / 12, found, rel=1e-2, card="C06")


def test_leakage_is_a_rotation_for_as_long_as_it_lasts(validate: Validate) -> None:
    # A constant tone of relative amplitude x about the same axis adds x Omega (T + idle).
    pulse = square_pulse()
    one = curve("leakage", {"before": "100 ns", "after": "30 ns"}, pulse)
    wanted = (2 / 3) * math.sin(0.5 * 1e-3 * pulse.peak * (DURATION + 130e-9)) ** 2
    quantity = "specified leakage: cost of -60 dBc, 130 ns beside the pulse"
    validate(quantity, sources.ALGEBRA, wanted, one.cost(1e-3), rel=1e-6, digits=12)
    # One tone of amplitude d/A for a direct voltage d on an input: the level in dBc.
    assert BLOCKS["leakage"].value(0.001 / 0.5) == pytest.approx(-53.9794, abs=1e-4)


def test_errors_about_one_axis_add_in_amplitude(validate: Validate) -> None:
    pulse = square_pulse()
    names = ("amplitude", "timing", "phase")
    curves = make_curves(request_of({name: {} for name in names}), pulse, RABI_PER_VOLT, 64)
    found = alignment([curves[name] for name in names]).cosines
    assert found[0, 1] == pytest.approx(1.0, abs=1e-6)
    # Two signs of a small error leave the second order: its size at a cost of 1e-8.
    assert found[0, 2] < 1e-3
    single = 1.666653e-05
    same = combined([single, single], found[:2, :2])
    crossed = combined([single, single], found[np.ix_([0, 2], [0, 2])])
    source = "SU(2) algebra"
    # The card's numbers are exact for 10 mrad, the sum is their leading order.
    validate("rule of addition: same axis", source, 6.666444e-05, same, rel=1e-4, card="A17")
    validate("rule of addition: orthogonal", source, 3.333264e-05, crossed, rel=1e-3, card="A17")


def test_temperature_of_a_noise_density() -> None:
    f, kelvin = 5e9, 0.1
    density = 50 * Planck * f / math.expm1(Planck * f / (Boltzmann * kelvin))
    assert equal_temperature(density, 50.0, f) == pytest.approx(kelvin, rel=1e-9)


class TestWhereTheFormulasFail:
    def test_an_error_that_is_not_small(self) -> None:
        # The exact inverse of (2/3) sin^2(pi x/2) against that of its leading order.
        pulse, share = square_pulse(), 0.3
        exact = 2 / math.pi * math.asin(math.sqrt(1.5 * share))
        assert curve("amplitude", {}, pulse).limit(share) == pytest.approx(exact, rel=2e-4)
        formula = math.sqrt(6 * share) / math.pi
        assert exact / formula > 1.09

    def test_noise_that_is_not_small(self) -> None:
        # (1 - exp(-v/2))/3 of a Gaussian angle of variance v = pi^2 S/(2 tau), against v/6.
        share = 0.1
        density = -2 * math.log(1 - 3 * share) * 2 * DURATION / math.pi**2
        pulse, rows = square_pulse(), 8000
        noise = white_noise(pulse, "gain", 1.0, 1, 1, rows)
        one = noise_curve("amplitude_noise", pulse, "qubit", 0.0, noise, rows)
        # 4000 pairs tell what lies beyond the first order, a fifth here, to 6 %.
        assert one.limit(share) ** 2 == pytest.approx(density, rel=0.03, abs=0.0)
        assert density > 1.15 * 12 * DURATION * share / math.pi**2

    def test_a_third_level(self) -> None:
        # White amplitude noise reaches the second transition, of which two levels know nothing.
        blocks = {"amplitude_noise": {}}
        pulse = {"shape": "raised cosine", "duration": "40 ns", "drag": 0.5}
        transmon = {"kind": "transmon", "levels": 3, "anharmonicity": "-300 MHz"}
        with_three = specify_gate(design(blocks, pulse=pulse, qubit=transmon))
        with_two = specify_gate(design(blocks, pulse={**pulse, "drag": 0.0}))
        tight, loose = (one.block("amplitude_noise") for one in (with_three, with_two))
        assert tight.limit < 0.5 * loose.limit
        assert loose.formula == pytest.approx(tight.formula, rel=0.02, abs=0.0)

    def test_rounding_of_equal_samples(self) -> None:
        # All samples of a square pulse are rounded alike, so that their errors do not average
        # out: rms lsb/sqrt(12) of the amplitude, however many samples there are.
        pulse = square_pulse()
        request = request_of({"dac_bits": {"rate": "2 GHz"}})
        one = make_curves(request, pulse, RABI_PER_VOLT, 64)["dac_bits"]
        wanted = (math.pi * 2 * 2**-8) ** 2 / 12 / 6
        # 32 places, one at random in each of as many equal parts of a step.
        assert one.cost(2**-8) == pytest.approx(wanted, rel=0.1, abs=0.0)
        formula = formula_coefficients(request, pulse, RABI_PER_VOLT)["dac_bits"] * 2**-16
        assert formula == pytest.approx(wanted / 100, rel=1e-9, abs=0.0)
