"""Oracles: the definition of the decibel, Ohm's law, and handbook values of dBm into 50 ohm."""

import math

import numpy as np
import pytest
from scipy import constants

from cosim.coupling import DriveLine, drive_rate, rate_per_unit, rotating_rate, voltage_gain
from cosim.errors import InputError
from cosim.waveform import Waveform
from tests import sources
from tests.validation import Validate

TOPIC = "coupling"


@pytest.mark.parametrize(("decibels", "gain"), [(0, 1), (20, 0.1), (6.0206, 0.5), (-20, 10)])
def test_attenuation_acts_on_the_amplitude(
    validate: Validate, decibels: float, gain: float
) -> None:
    """Source: 20 dB are a factor of ten in amplitude (IEC 60027-3)."""
    quantity = f"factor on the amplitude of {decibels} dB of attenuation"
    # 6.0206 dB has six digits.
    validate(quantity, "IEC 60027-3, the decibel", gain, voltage_gain(decibels), rel=1e-6)


def test_a_pi_pulse_of_known_power(validate: Validate) -> None:
    """0 dBm into 50 ohm is 0.3162278 V peak; behind 20 dB and with 100 MHz/V: 3.162278 MHz.

    Source: P = V_peak^2/(2 Z), circuit theory; the Rabi frequency is k times the peak.
    """
    peak = math.sqrt(2 * 50 * constants.milli)
    assert peak == pytest.approx(0.3162278, rel=1e-6)  # digits of the handbook value
    rate = rate_per_unit(DriveLine(100e6, 20.0), "V") * peak
    quantity = "Rabi frequency from 0 dBm behind 20 dB at 100 MHz/V"
    rabi = rate / (2 * math.pi)
    validate(quantity, sources.CIRCUITS, 3.162278e6, rabi, "Hz", rel=1e-6, card="F08")


def test_a_current_counts_by_the_impedance() -> None:
    volts, amperes = (rate_per_unit(DriveLine(1e6, 3.0, 75.0), unit) for unit in ("V", "A"))
    assert amperes == pytest.approx(75 * volts)


def test_rates_follow_the_waveform() -> None:
    wave = Waveform(np.array([0.0, 1e-9, 3e-9]), np.array([0.0, 0.5, -1.0]))
    rate = drive_rate(wave, DriveLine(1e6))
    assert rate.unit == "rad/s"
    assert rate.v == pytest.approx(2 * math.pi * 1e6 * wave.v)


def test_the_offset_turns_the_rate_forwards() -> None:
    """A carrier 1 MHz above the qubit leads by 90 degrees after 250 ns."""
    t = np.array([0.0, 250e-9])
    rate = rotating_rate(np.array([1 + 0j, 1 + 0j]), t, DriveLine(1e6), "V", 1e6)
    assert rate / (2 * math.pi * 1e6) == pytest.approx([1, 1j], abs=1e-12)


def test_what_is_not_a_probe_or_a_line_is_refused() -> None:
    with pytest.raises(InputError, match="V or A"):
        rate_per_unit(DriveLine(1e6), "W")
    with pytest.raises(InputError, match="impedance"):
        DriveLine(1e6, impedance=0.0)
