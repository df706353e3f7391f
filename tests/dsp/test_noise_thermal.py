"""Oracle: the laws of Johnson and Nyquist, Callen and Welton, Planck and Schottky, as numbers."""

import math

import numpy as np
import pytest
from scipy.constants import Boltzmann, Planck

from cosim.dsp.noise.thermal import (
    Attenuator,
    johnson_density,
    line_power_density,
    planck_power_density,
    shot_noise_density,
    symmetrised_power_density,
    thermal_photons,
    wave_voltage_density,
)
from cosim.errors import InputError
from tests import sources
from tests.validation import Validate

TOPIC = "signal"
F = 6e9


@pytest.mark.parametrize(
    ("kelvin", "volts", "dbm"),
    [
        (300.0, 9.10159e-10, -173.828),
        (4.2, 1.076915e-10, -192.3667),
        (0.02, 7.431417e-12, -215.5889),
    ],
)
def test_johnson_noise(validate: Validate, kelvin: float, volts: float, dbm: float) -> None:
    got = math.sqrt(johnson_density(50.0, kelvin))
    quantity = f"Johnson noise of 50 ohm at {kelvin:g} K"
    # Rounding of the card to six or seven digits.
    validate(quantity, sources.JOHNSON_NYQUIST, volts, got, "V/sqrt(Hz)", rel=1e-6, card="C11")
    # Far below k T/h the Planck part is k T; at 1 kHz it lacks h f/2 k T, 1.2e-6 at 20 mK.
    power = float(planck_power_density(1e3, kelvin))
    got = 10 * math.log10(power / 1e-3)
    quantity = f"available noise power at {kelvin:g} K"
    validate(quantity, sources.JOHNSON_NYQUIST, dbm, got, "dBm/Hz", rel=5e-7, card="C11")
    # Into a match the travelling wave has half the voltage of the open circuit.
    wave = float(wave_voltage_density(np.array(power), 50.0))
    assert wave == pytest.approx(johnson_density(50.0, kelvin) / 4, rel=2e-6)


@pytest.mark.parametrize(
    ("kelvin", "symmetrised", "planck"),
    [(0.02, 0.1439775, 1.608681e-07), (4.2, 4.201645, 4.057668), (300.0, 300.0, 299.856)],
)
def test_quantum_noise(
    validate: Validate, kelvin: float, symmetrised: float, planck: float
) -> None:
    got = float(symmetrised_power_density(F, kelvin)) / Boltzmann
    quantity = f"symmetrised noise temperature at 6 GHz and {kelvin:g} K"
    # Rounding of the card; at 300 K (h f/k T)^2/12 is 8e-8.
    validate(quantity, sources.CALLEN_WELTON, symmetrised, got, "K", rel=5e-7, card="C12")
    got = float(planck_power_density(F, kelvin)) / Boltzmann
    quantity = f"Planck noise temperature at 6 GHz and {kelvin:g} K"
    validate(quantity, sources.PLANCK, planck, got, "K", rel=5e-7, card="C12")
    coth = Planck * F / 2 / math.tanh(Planck * F / (2 * Boltzmann * kelvin))
    assert float(symmetrised_power_density(F, kelvin)) == pytest.approx(coth, rel=1e-12)


def test_cold_resistor(validate: Validate) -> None:
    got = 4 * 50.0 * float(symmetrised_power_density(F, 0.02))
    quantity = "symmetrised voltage noise of 50 ohm at 6 GHz and 20 mK"
    validate(quantity, sources.CALLEN_WELTON, 3.975647e-22, got, "V^2/Hz", rel=5e-7, card="C12")
    # No temperature, no overflow.
    assert planck_power_density(F, 0.0) == 0.0
    assert symmetrised_power_density(F, 0.0) == pytest.approx(Planck * F / 2, rel=1e-12)
    assert thermal_photons(F, 1e-5) == 0.0


def test_shot_noise(validate: Validate) -> None:
    for amperes, wanted in ((1e-9, 1.790071e-14), (-1e-6, 5.660701e-13)):
        got = math.sqrt(shot_noise_density(amperes))
        quantity = f"shot noise of {abs(amperes):g} A"
        validate(quantity, sources.SCHOTTKY, wanted, got, "A/sqrt(Hz)", rel=5e-7, card="C13")
    assert shot_noise_density(1e-6, 0.5) == pytest.approx(shot_noise_density(1e-6) / 2)
    # A tunnel junction's shot noise equals its thermal noise 4 k T/R at V = 2 k T/q.
    volts = 0.000723856
    got = shot_noise_density(volts / 50.0)
    wanted = johnson_density(50.0, 4.2) / 50.0**2
    quantity = "thermal noise at 4.2 K against shot noise at 0.723856 mV"
    validate(quantity, sources.SCHOTTKY, wanted, got, "A^2/Hz", rel=1e-6, card="C13")


class TestLine:
    def test_an_attenuator_adds_what_it_takes(self, validate: Validate) -> None:
        stage = Attenuator(100.0, 4.2)
        power = line_power_density(F, 300.0, [stage])
        t = [float(planck_power_density(F, kelvin)) / Boltzmann for kelvin in (300.0, 4.2)]
        quantity = "noise temperature behind 20 dB at 4.2 K and 6 GHz, source at 300 K"
        got = float(power) / Boltzmann
        validate(quantity, sources.POZAR, t[0] / 100 + 0.99 * t[1], got, "K", rel=1e-12)

    @pytest.mark.parametrize("ratio", [1.0, 2.0, 1e4])
    def test_equilibrium_is_kept(self, ratio: float) -> None:
        stages = [Attenuator(ratio, 1.0), Attenuator(3.0, 1.0)]
        f = np.array([1e6, 6e9, 1e11])
        assert line_power_density(f, 1.0, stages) == pytest.approx(
            planck_power_density(f, 1.0), rel=1e-12
        )

    def test_the_order_counts(self) -> None:
        cold, warm = Attenuator(100.0, 0.02), Attenuator(100.0, 4.0)
        right = line_power_density(F, 300.0, [warm, cold])
        wrong = line_power_density(F, 300.0, [cold, warm])
        assert wrong > 20 * right


def test_errors() -> None:
    for call in (
        lambda: Attenuator(0.5, 1.0),
        lambda: Attenuator(2.0, -1.0),
        lambda: johnson_density(-50.0, 1.0),
        lambda: johnson_density(50.0, math.inf),
        lambda: shot_noise_density(math.nan),
        lambda: thermal_photons(0.0, 1.0),
        lambda: planck_power_density([1.0, -1.0], 1.0),
        lambda: wave_voltage_density(np.ones(1), 0.0),
    ):
        with pytest.raises(InputError, match="wanted"):
            call()
