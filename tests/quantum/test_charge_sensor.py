"""Oracles: the widths and slopes of Coulomb peaks in closed form, and times that are kept."""

import math

import numpy as np
import pytest
from scipy.constants import Boltzmann, Planck

from cosim.errors import InputError
from cosim.quantum.charge_sensor import (
    CoulombPeak,
    SensorElement,
    peak_conductance,
    peak_slope,
    sensor_on_peak,
    sensor_on_slope,
    value_records,
)
from tests import sources
from tests.validation import Validate

TOPIC = "readout"
KELVIN = Boltzmann / Planck  # Hz for one kelvin.
WARM = CoulombPeak(2e-6, temperature=0.1)
SHORT = CoulombPeak(2e-6, width=5e9)


def test_width_of_a_warm_peak(validate: Validate) -> None:
    """The full width of 1/cosh**2(E/2kT) is 4 arcosh(sqrt 2) kT = 3.525494 kT."""
    half = 3.525494 / 2 * 0.1 * KELVIN
    got = float(peak_conductance(WARM, half)) / 2e-6
    # Seven digits of the width, where the logarithmic slope is 1.25.
    quantity = "height of a warm Coulomb peak 3.525494 kT/2 off its top"
    validate(quantity, sources.BEENAKKER, 0.5, got, rel=1e-6)
    assert float(peak_conductance(SHORT, 2.5e9)) == pytest.approx(1e-6, rel=1e-12, abs=0.0)


def test_a_level_far_from_the_top_is_no_overflow() -> None:
    assert peak_conductance(WARM, [-1e15, 0.0, 1e15]).tolist() == [0.0, 2e-6, 0.0]


@pytest.mark.parametrize("peak", [WARM, SHORT])
@pytest.mark.parametrize("offset", [-3e9, 0.0, 0.4e9, 6e9])
def test_the_slope_is_the_derivative(peak: CoulombPeak, offset: float) -> None:
    step = 1e5
    low, high = peak_conductance(peak, [offset - step, offset + step])
    # Differences of numbers of 2e-6 with 16 digits over 2e5 Hz.
    assert peak_slope(peak, offset) == pytest.approx((high - low) / (2 * step), rel=1e-5, abs=1e-26)


def test_the_steepest_point_of_a_warm_peak() -> None:
    """tanh(E/2kT) = 1/sqrt(3), where the slope is 4/(3 sqrt 3) of height/(2kT)."""
    place = 2 * 0.1 * KELVIN * math.atanh(1 / math.sqrt(3))
    wanted = -4 / (3 * math.sqrt(3)) * 2e-6 / (2 * 0.1 * KELVIN)
    assert peak_slope(WARM, place) == pytest.approx(wanted, rel=1e-12, abs=0.0)
    assert abs(peak_slope(WARM, 0.98 * place)) < abs(wanted)
    assert abs(peak_slope(WARM, 1.02 * place)) < abs(wanted)


def test_small_shifts_follow_the_slope_and_large_ones_the_peak() -> None:
    offset = 2.7e9
    slope = peak_slope(WARM, offset)
    height = float(peak_conductance(WARM, offset))
    for shift, near in ((1e6, True), (3e9, False)):
        curved = sensor_on_peak(WARM, offset, (0.0, shift)).values[1]
        straight = sensor_on_slope("conductance", height, slope, (0.0, shift)).values[1]
        # The second derivative counts shift/(2 k T) = 2e-4 of the change at 1 MHz.
        change = abs(straight - height)
        assert (abs(curved - straight) < 1e-3 * change) == near


class TestRecords:
    element = SensorElement("capacitance", (1e-15, 3e-15, 2e-15))

    def test_moves_keep_their_times(self) -> None:
        """The sum over the record tells how long each state lasted."""
        times = np.array([[3.3e-9, 7.9e-9], [4.0e-9, math.inf], [math.inf, math.inf]])
        record = value_records(self.element, 1e-9, 20, (0, 1, 2), times)
        assert record.shape == (3, 20)
        assert record[2] == pytest.approx(np.full(20, 1e-15), rel=1e-12, abs=0.0)
        # Cells of the samples reach from -0.5 ns to 19.5 ns.
        sums = [3.8 * 1 + 4.6 * 3 + 11.6 * 2, 4.5 * 1 + 15.5 * 3]
        assert record[:2].sum(axis=1) == pytest.approx(np.array(sums) * 1e-15, rel=1e-12, abs=0.0)
        assert record[0, :3] == pytest.approx([1e-15] * 3, rel=1e-12, abs=0.0)
        assert record[0, 5:7] == pytest.approx([3e-15] * 2, rel=1e-12, abs=0.0)
        assert record[0, 9:] == pytest.approx([2e-15] * 11, rel=1e-12, abs=0.0)

    def test_wrong_moves_are_refused(self) -> None:
        with pytest.raises(InputError, match="states from 0 to 2, got 3"):
            value_records(self.element, 1e-9, 5, (0, 3), [[1e-9]])
        with pytest.raises(
            InputError, match="times of 1 moves in each shot, got an array of shape"
        ):
            value_records(self.element, 1e-9, 5, (0, 1), [1e-9])
        with pytest.raises(InputError, match="do not fall within a shot"):
            value_records(self.element, 1e-9, 5, (0, 1, 0), [[2e-9, 1e-9]])
        with pytest.raises(InputError, match="positive step"):
            value_records(self.element, 0.0, 5, (0, 1), [[1e-9]])


def test_what_is_no_sensor_is_refused() -> None:
    with pytest.raises(InputError, match="quantity: wanted one of conductance, capacitance"):
        SensorElement("inductance", (1.0, 2.0))
    with pytest.raises(InputError, match="values: wanted at least two numbers of at least 0 S"):
        SensorElement("conductance", (1.0, -2.0))
    with pytest.raises(InputError, match="values: all are 1 F"):
        SensorElement("capacitance", (1.0, 1.0))
    with pytest.raises(InputError, match="values: wanted at least two numbers"):
        sensor_on_slope("conductance", 1e-6, -1e-15, (0.0, 2e9))
    with pytest.raises(InputError, match="height: wanted more than 0 S"):
        CoulombPeak(0.0, temperature=0.1)
    with pytest.raises(InputError, match="width: wanted at least 0 Hz"):
        CoulombPeak(1e-6, width=math.nan)
    for temperature, width in ((0.0, 0.0), (0.1, 1e9)):
        with pytest.raises(InputError, match="a temperature or a width above 0, one of them"):
            CoulombPeak(1e-6, temperature, width)
