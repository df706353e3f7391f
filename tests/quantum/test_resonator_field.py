"""Oracles: SciPy's integrator on the equation of the field, closed forms, photons counted."""

import math
from itertools import pairwise

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from cosim.errors import InputError
from cosim.quantum.incident import (
    IncidentField,
    Plateau,
    incident_amplitude,
    sample_drive,
    two_step_drive,
)
from cosim.quantum.resonator import (
    Resonator,
    amplitude_for_photons,
    field_rate,
    scattering,
    steady_field,
)
from cosim.quantum.resonator_field import evolve_field, fields_with_jump
from cosim.waveform import ComplexArray
from tests import sources
from tests.quantum.readouts import (
    CHI,
    FREQUENCY,
    KAPPA,
    TURN,
    hanging,
    reflecting,
    resonance,
    transmitting,
)
from tests.validation import Validate

TOPIC = "readout"
DIGITS = 1e-6  # Seven digits in the expected value.


def noisy_drive(seed: int = 4, step: float = 2e-9, count: int = 120) -> IncidentField:
    """Give a drive whose samples are random, so that no symmetry helps."""
    draw = np.random.default_rng(seed).normal(size=(2, count))
    return IncidentField(step, 1e4 * (draw[0] + 1j * draw[1]), 6.0007e9)


def integrated(
    resonator: Resonator,
    drive: IncidentField,
    level: int,
    first: float,
    last: float,
    start: complex,
) -> complex:
    """Integrate the field with SciPy from one time to another, from corner to corner."""
    inner = drive.t[(drive.t > first) & (drive.t < last)]
    y = np.array([start], dtype=np.complex128)
    rate = complex(field_rate(resonator, level, drive.frequency))
    edges = np.concatenate([[first], inner, [last]])
    for begin, end in pairwise(edges):

        def slope(t: float, a: ComplexArray) -> ComplexArray:
            incident = np.interp(t, drive.t, drive.samples)
            return -rate * a + math.sqrt(resonator.driven_rate) * incident

        y = solve_ivp(slope, (begin, end), y, rtol=1e-12, atol=1e-14, method="DOP853").y[:, -1]
    return complex(y[0])


def test_ring_up(validate: Validate) -> None:
    """Card D04: kappa/2 pi = 5 MHz, driven on resonance from t = 0 on, after 100 ns."""
    resonator = reflecting()
    top = resonance(resonator, 0)
    drive = sample_drive(two_step_drive(1e4, 400e-9), top, 1e-9, 401)
    steady = complex(steady_field(resonator, 0, 1e4, top))
    part = (evolve_field(resonator, drive, 0).inside / steady).real
    source = sources.INPUT_OUTPUT
    quantity = "part of the steady field after 100 ns"
    validate(quantity, source, 0.7921204, part[100], rel=DIGITS, card="D04")
    quantity = "part of the steady photons after 100 ns"
    validate(quantity, source, 0.6274548, part[100] ** 2, rel=DIGITS, card="D04")
    # What is left of the way to the steady field is an exponential, straight on a log scale.
    late = float(np.interp(math.log(10), -np.log(1 - part[:300]), drive.t[:300]))
    validate("time to 90 % of the field", source, 1.465871e-7, late, "s", rel=DIGITS, card="D04")
    tau = -1e-7 / math.log(1 - part[100])
    validate("time constant of the field", source, 6.366198e-8, tau, "s", rel=DIGITS, card="D04")


def test_signal_to_noise_of_a_step(validate: Validate) -> None:
    """Card D09: the exact pointers under a boxcar of 400 ns; noise of a quarter per quadrature."""
    resonator = reflecting()
    amplitude = amplitude_for_photons(resonator, 5.0, FREQUENCY)
    step, count, tau, eta = 0.1e-9, 4001, 400e-9, 0.4
    drive = sample_drive(two_step_drive(amplitude, tau), FREQUENCY, step, count)
    low, high = (evolve_field(resonator, drive, level) for level in (0, 1))
    steady = [complex(steady_field(resonator, level, amplitude, FREQUENCY)) for level in (0, 1)]
    apart = abs(steady[1] - steady[0]) ** 2
    source = sources.CLERK
    quantity = "squared distance of the steady pointers"
    validate(quantity, source, 2.758621, apart, rel=DIGITS, card="D09")
    snr = 2 * math.sqrt(eta * KAPPA * tau * apart)
    validate("steady SNR after 400 ns", source, 7.447507, snr, rel=DIGITS, card="D09")
    # Between samples straight lines replace an exponential: (kappa h/2)**2/12 = 2e-7.
    area = abs(np.trapezoid(high.outside - low.outside, dx=step))
    snr = 2 * math.sqrt(eta) * area / math.sqrt(tau)
    quantity = "SNR of a boxcar of 400 ns from a step on"
    validate(quantity, source, 5.403141, snr, rel=2e-6, card="D09")


@pytest.mark.parametrize("geometry", ["reflection", "transmission", "hanger"])
@pytest.mark.parametrize("level", [0, 1, 2])
def test_any_drive_agrees_with_an_integrator(geometry: str, level: int) -> None:
    kappas = {
        "reflection": (KAPPA, 0.0),
        "transmission": (0.2 * KAPPA, 0.7 * KAPPA),
        "hanger": (0.0, KAPPA),
    }[geometry]
    resonator = Resonator(geometry, FREQUENCY, *kappas, 0.1 * KAPPA, CHI, -2.3 * CHI)
    drive = noisy_drive(count=40)
    found = evolve_field(resonator, drive, level, initial=0.3 - 0.2j)
    wanted = integrated(resonator, drive, level, 0.0, drive.t[-1], 0.3 - 0.2j)
    # The integrator's tolerance of 1e-12 over some hundred steps.
    assert found.inside[-1] == pytest.approx(wanted, rel=1e-9)


@pytest.mark.parametrize("geometry", ["reflection", "transmission", "hanger"])
def test_a_long_drive_ends_in_the_steady_response(geometry: str) -> None:
    """Source of the signs: b_out = b_in - sqrt(k) a at every port."""
    resonator = {
        "reflection": reflecting(KAPPA, 0.2 * KAPPA),
        "transmission": transmitting(0.3 * KAPPA, 0.7 * KAPPA),
        "hanger": hanging(KAPPA, 0.2 * KAPPA),
    }[geometry]
    drive = IncidentField(1e-9, np.full(1501, 2e4j), 6.0023e9)
    found = evolve_field(resonator, drive, 1)
    # After 1500 ns, 23 time constants of the field, 1e-10 of the ring-up is left.
    wanted = 2e4j * complex(scattering(resonator, 1, 6.0023e9))
    assert found.outside[-1] == pytest.approx(wanted, rel=1e-8)
    arriving = drive.samples[-1] if geometry != "transmission" else 0.0
    there = arriving - math.sqrt(resonator.output_rate) * found.inside[-1]
    assert found.outside[-1] == pytest.approx(there, rel=1e-12)


@pytest.mark.parametrize(("before", "after"), [(1, 0), (0, 1), (2, 1)])
def test_a_jump_agrees_with_an_integrator(before: int, after: int) -> None:
    resonator = Resonator("transmission", FREQUENCY, 0.3 * KAPPA, KAPPA, 0.0, CHI, 3.0 * CHI)
    drive = noisy_drive(count=60)
    times = np.array([0.0, 37.21e-9, 60e-9, 117.9e-9])
    found = fields_with_jump(resonator, drive, times, before, after, initial=0.1j)
    assert found.inside.shape == found.outside.shape == (4, 60)
    for row, jump in zip(found.inside, times, strict=True):
        there = integrated(resonator, drive, before, 0.0, jump, 0.1j) if jump else 0.1j
        wanted = integrated(resonator, drive, after, jump, drive.t[-1], there)
        assert row[-1] == pytest.approx(wanted, rel=1e-9)  # the integrator's, as above


def test_jumps_outside_of_the_record() -> None:
    resonator, drive = reflecting(), noisy_drive()
    found = fields_with_jump(resonator, drive, [-1.0, 0.0, drive.t[-1] * 1.01, math.inf])
    for row, level in zip(found.outside, (0, 0, 1, 1), strict=True):
        wanted = evolve_field(resonator, drive, level).outside
        # Rounding of fields of 1e4.
        assert row == pytest.approx(wanted, rel=1e-12, abs=1e-8)


def test_before_a_jump_nothing_tells_of_it() -> None:
    resonator, drive = hanging(KAPPA), noisy_drive()
    found = fields_with_jump(resonator, drive, [101.3e-9])
    earlier = drive.t < 101.3e-9
    assert (found.outside[0, earlier] == evolve_field(resonator, drive, 1).outside[earlier]).all()


@pytest.mark.parametrize("factor", [1e-4, 0.9, 1.1, 30.0])
def test_no_step_is_too_long_or_too_short(factor: float) -> None:
    """A constant drive has a closed form at any step, on both sides of where a series sets in."""
    resonator = reflecting()
    rate = complex(field_rate(resonator, 1, 6.004e9))
    step = factor * 0.05 / abs(rate)
    drive = IncidentField(step, np.full(50, 1e4), 6.004e9)
    found = evolve_field(resonator, drive, 1).inside
    wanted = complex(steady_field(resonator, 1, 1e4, 6.004e9)) * -np.expm1(-rate * drive.t)
    assert found == pytest.approx(wanted, rel=1e-11, abs=0.0)  # sums of 50 numbers


@pytest.mark.parametrize("geometry", ["reflection", "transmission", "hanger"])
def test_photons_are_counted(geometry: str) -> None:
    """In = out + back + lost + stored, over a drive and the ring-down after it."""
    resonator = {
        "reflection": reflecting(KAPPA, 0.2 * KAPPA),
        "transmission": transmitting(0.3 * KAPPA, 0.7 * KAPPA, 0.2 * KAPPA),
        "hanger": hanging(KAPPA, 0.2 * KAPPA),
    }[geometry]
    step = 0.05e-9
    drive = sample_drive(two_step_drive(3e4, 150e-9), 6.001e9, step, 6001)
    found = evolve_field(resonator, drive, 1)
    k = resonator.driven_rate
    back = {
        "reflection": np.zeros(6001),
        "transmission": np.abs(drive.samples - math.sqrt(k) * found.inside) ** 2,
        "hanger": k * found.photons,
    }[geometry]
    lost = resonator.kappa_internal * found.photons
    flux = np.abs(drive.samples) ** 2 - np.abs(found.outside) ** 2 - back - lost
    total = np.trapezoid(np.abs(drive.samples) ** 2, dx=step)
    # The trapezoidal rule at the falling edge, over two samples of 3000, is off by half a part of
    # them in each term.
    assert np.trapezoid(flux, dx=step) == pytest.approx(found.photons[-1], abs=4e-4 * total)


def test_ring_down_leaves_what_kappa_leaves() -> None:
    resonator = reflecting()
    drive = sample_drive(two_step_drive(3e4, 200e-9), FREQUENCY, 1e-9, 401)
    photons = evolve_field(resonator, drive, 0).photons
    wanted = photons[202] * math.exp(-resonator.kappa * 198e-9)
    assert photons[-1] == pytest.approx(wanted)


def test_a_ring_down_of_the_right_length_empties_the_resonator() -> None:
    """Driven at the resonance, a step back by the factor -1 crosses zero after ln(2) 2/kappa."""
    resonator = reflecting()
    top = resonance(resonator, 1)
    length = math.log(2) * 2 / KAPPA
    pulse = two_step_drive(3e4, 1e-6, boost_length=0.0, ring_down=-1.0, ring_down_length=length)
    drive = sample_drive(pulse, top, length / 50, 1300, start=0.0)
    photons = evolve_field(resonator, drive, 1).photons
    end = math.ceil((1e-6 + length) / drive.step) + 1
    # An edge that is spread over two steps moves the crossing by less than (kappa h/2)**2.
    assert photons[end:].max() < 1e-4 * photons.max()


def test_a_boost_fills_faster() -> None:
    """Boosted by 2 for ln(2) 2/kappa on resonance, the field is the steady one from then on."""
    resonator = reflecting()
    top = resonance(resonator, 1)
    first = math.log(2) * 2 / KAPPA
    pulse = two_step_drive(3e4, 600e-9, boost=2.0, boost_length=first)
    drive = sample_drive(pulse, top, first / 100, 1400)
    found = evolve_field(resonator, drive, 1)
    steady = complex(steady_field(resonator, 1, 3e4, top))
    filled = slice(102, int(600e-9 / drive.step) - 1)
    # The edge of two steps, each 0.7 % of the field's time constant: half of its square.
    wanted = pytest.approx(np.full(filled.stop - filled.start, steady), rel=1e-4)
    assert found.inside[filled] == wanted
    response = complex(scattering(resonator, 1, top))
    assert found.outside[filled.stop - 1] == pytest.approx(3e4 * response, rel=1e-4)


class TestSampledDrives:
    @pytest.mark.parametrize("start", [0.0, 7e-9, 7.31e-9])
    def test_area_and_time_of_a_pulse_are_kept(self, start: float) -> None:
        pulse = two_step_drive(
            1e4j, 50.4e-9, boost=3.0, boost_length=10.3e-9, ring_down=-2.0, ring_down_length=5.1e-9
        )
        drive = sample_drive(pulse, 6e9, 1e-9, 101, start)
        area = 1e4j * (3.0 * 10.3e-9 + 40.1e-9 - 2.0 * 5.1e-9)
        assert np.trapezoid(drive.samples, dx=1e-9) == pytest.approx(area, rel=1e-12)
        edges = start + np.cumsum([0.0, 10.3e-9, 40.1e-9, 5.1e-9])
        moment = 1e4j * np.dot([3.0, 1.0, -2.0], np.diff(edges**2) / 2)
        # A cell's mean sits at its sample: off by h**2/8 at most for each edge, here
        # of 3, 2, 3 and 2 fields.
        assert abs(np.trapezoid(drive.samples * drive.t, dx=1e-9) - moment) < 10 / 8 * 1e-18 * 1e4

    def test_a_drive_from_the_first_sample_on_is_at_its_height(self) -> None:
        drive = sample_drive((Plateau(5e-9, 2.0), Plateau(5e-9, 1.0)), 6e9, 1e-9, 12)
        assert drive.samples.real.tolist() == [2, 2, 2, 2, 2, 1.5, 1, 1, 1, 1, 0.5, 0]

    @pytest.mark.parametrize(
        ("start", "count"), [(-1e-9, 401), (301e-9, 401), (0.0, 100)], ids=["early", "late", "long"]
    )
    def test_a_drive_beyond_the_record_is_refused(self, start: float, count: int) -> None:
        with pytest.raises(InputError, match="does not lie within the record"):
            sample_drive(two_step_drive(1.0, 100e-9), 6e9, 1e-9, count, start)


def test_what_is_no_drive_is_refused() -> None:
    with pytest.raises(InputError, match="boost_length: wanted at least 0 s and less than"):
        two_step_drive(1.0, 1e-7, boost=2.0, boost_length=1e-7)
    with pytest.raises(InputError, match="plateau length"):
        Plateau(0.0, 1.0)
    with pytest.raises(InputError, match="plateau level"):
        Plateau(1e-9, math.nan)
    with pytest.raises(InputError, match="at least two finite samples"):
        IncidentField(1e-9, np.array([1.0, math.nan]), 6e9)
    with pytest.raises(InputError, match="step: wanted a positive number of s"):
        IncidentField(0.0, np.ones(3), 6e9)
    with pytest.raises(InputError, match="positive step in s and at least two samples"):
        sample_drive(two_step_drive(1.0, 1e-9), 6e9, 1e-9, 1)
    with pytest.raises(InputError, match="incident power"):
        incident_amplitude(-1.0, 6e9)
    with pytest.raises(InputError, match="drive frequency"):
        incident_amplitude(1.0, 0.0)
    with pytest.raises(InputError, match="jump times"):
        fields_with_jump(reflecting(), noisy_drive(), [math.nan])


def test_a_lone_time_is_a_jump_too() -> None:
    assert fields_with_jump(reflecting(), noisy_drive(), 50 * TURN * 1e-10).inside.shape == (1, 120)
