"""Oracle: 4kT(2/3)gm, 2qI and 4kTR in closed form, against the parts of ngspice's `.noise`."""

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import constants

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.bias import clean_run, conductance
from cosim.circuit.inventory import device_names, noisy_devices
from cosim.circuit.netlist import deck_from_text
from cosim.circuit.noise import NoiseRequest, NoiseResult, simulate_noise
from cosim.circuit.noise_parts import NoiseTemperatures, band_power
from cosim.circuit.noise_temperature import at_noise_temperatures
from cosim.errors import InputError
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"
# ngspice's Boltzmann constant and elementary charge are those of 2014, at most 3.5e-7 off.
CONSTANTS = 5e-7

AMPLIFIER = """v1 in 0 dc 0.7 ac 1
vd vdd 0 1.5
rd vdd out 1k
m1 out in 0 0 n w=10u l=1u
.model n nmos level=1 vto=0.4 kp=600u tnom=26.85"""

EVERYTHING = """v1 in 0 dc 0.7 ac 1
vd vdd 0 1.5
r_load_1 vdd x1.a 1k
x1 vdd in out s
q1 vdd out e qn
r2 e 0 1k
r3 out 0 10k noisy=0
j1 vdd 0 e jn
s1 out 0 vdd 0 sm
.subckt s vdd in out
m1 out in 0 0 n w=10u l=0.1u
m2 out in vdd vdd p w=20u l=0.1u
mb a in 0 0 b w=10u l=0.1u
d_1 a out dm
.ends
.model n nmos level=1 vto=0.4 kp=600u rd=5 rs=5 kf=1e-25 tox=2n
.model p pmos level=3 vto=-0.4 kp=200u tox=2n rs=3 rd=3
.model b nmos level=14 vth0=0.4 toxe=2n
.model dm d is=1e-14 rs=10 kf=1e-12
.model qn npn bf=100 rb=10 re=1 rc=3
.model jn njf rs=2
.model sm sw ron=1k roff=10k vt=5"""


def analyse(body: str, temperature: float = 300.0, start: float = 1e3) -> NoiseResult:
    """Analyse the noise of a body at "out" by device."""
    request = NoiseRequest("v(out)", "v1", start, 1e9, 5, temperature=temperature, by_device=True)
    return simulate_noise(deck_from_text(f"deck\n{body}\n.end\n"), request)


class TestClosedForms:
    def test_channel_of_a_transistor_in_saturation(self, validate: Validate) -> None:
        result = analyse(AMPLIFIER)
        gm = 600e-6 * 10 * 0.3  # S: kp W/L (Vgs - vto)
        quantity = "noise of a channel in saturation through 1 kohm at 300 K"
        wanted = 4 * constants.k * 300.0 * (2 / 3) * gm * 1e6
        got = result.by_device["m1"]["channel"][0]
        validate(quantity, sources.VAN_DER_ZIEL, wanted, got, "V^2/Hz", rel=CONSTANTS)
        wanted = 4 * constants.k * 300.0 * 1e3
        assert result.by_device["rd"]["thermal"][0] == pytest.approx(wanted, rel=CONSTANTS, abs=0.0)

    def test_shot_noise_of_a_diode(self, validate: Validate) -> None:
        body = "i1 0 out dc 1m ac 1\nv1 x 0 dc 0 ac 1\nr1 x 0 1\nd1 out 0 dm\n.model dm d is=1e-14"
        result = analyse(body)
        # gd = (I + is)/Vt; the density 2 q I/gd^2 of the voltage is 2 (k T)^2/(q I).
        wanted = 2 * (constants.k * 300.0) ** 2 / (constants.e * 1e-3)
        quantity = "shot noise of a diode at 1 mA on its own conductance at 300 K"
        got = result.by_device["d1"]["shot"][0]
        # gmin of 1e-12 S and is/I are far below the two constants' digits, which enter squared.
        validate(quantity, sources.SCHOTTKY, wanted, got, "V^2/Hz", rel=3 * CONSTANTS)

    def test_shot_noise_of_a_bipolar_transistor(self) -> None:
        body = (
            "v1 in 0 dc 0.7 ac 1\nvd vdd 0 3\nrd vdd out 1k\nq1 out in 0 qn\n"
            ".model qn npn bf=100 is=1e-15 tnom=26.85"
        )
        parts = analyse(body).by_device["q1"]
        current = 1e-15 * math.exp(0.7 * constants.e / (constants.k * 300.0))
        # The base is held, so that only the collector's shot noise is there. The exponent of 27
        # multiplies the error of k/q.
        wanted = 2 * constants.e * current * 1e6
        assert parts["shot"] == pytest.approx(wanted, rel=30 * CONSTANTS, abs=0.0)


class TestParts:
    def test_they_add_up_to_the_total(self) -> None:
        result = analyse(EVERYTHING)
        total = sum(sum(parts.values()) for parts in result.by_device.values())
        assert total == pytest.approx(result.output_density, rel=1e-9, abs=0.0)  # rounding of sums
        found = {name: set(parts) for name, parts in result.by_device.items()}
        field_effect = {"channel", "series", "flicker"}
        assert found == {
            "r_load_1": {"thermal", "flicker"},
            "r2": {"thermal", "flicker"},
            "q1": {"shot", "series", "flicker"},
            "j1": field_effect,
            "s1": {"thermal"},
            "m.x1.m1": field_effect,
            "m.x1.m2": field_effect,
            "m.x1.mb": field_effect | {"shot"},
            "d.x1.d_1": {"shot", "series", "flicker"},
        }

    def test_without_the_question_there_are_none(self) -> None:
        request = NoiseRequest("v(out)", "v1", 1e3, 1e9, 5, temperature=300.0)
        plain = simulate_noise(deck_from_text(f"deck\n{AMPLIFIER}\n.end\n"), request)
        assert plain.by_device == {}
        assert plain.device_temperature is None
        assert np.array_equal(plain.output_density, analyse(AMPLIFIER).output_density)
        with pytest.raises(InputError, match="by_device=True"):
            at_noise_temperatures(plain, NoiseTemperatures(4.2))


class TestNoiseTemperature:
    def test_of_a_resistor_is_that_of_a_resistor_that_is_cold(self) -> None:
        body = "v1 in 0 dc 0 ac 1\nr1 in out 1k\nc1 out 0 1p"
        warm, cold = analyse(body), analyse(body, temperature=4.2)
        scaled = at_noise_temperatures(warm, NoiseTemperatures(resistor=4.2))
        assert scaled.output_density == pytest.approx(cold.output_density, rel=1e-9, abs=0.0)
        assert scaled.input_density == pytest.approx(cold.input_density, rel=1e-9, abs=0.0)
        # ngspice's way to integrate is followed but for its treatment of the grid's ends.
        assert scaled.total_output == pytest.approx(cold.total_output, rel=1e-4, abs=0.0)

    def test_thermal_parts_follow_and_others_stay(self) -> None:
        before = analyse(EVERYTHING)
        after = at_noise_temperatures(before, NoiseTemperatures(30.0, 60.0, 150.0))
        factor = {"thermal": 0.1, "channel": 0.2, "series": 0.5, "shot": 1.0, "flicker": 1.0}
        for name, parts in before.by_device.items():
            for part, density in parts.items():
                wanted = factor[part] * density
                assert after.by_device[name][part] == pytest.approx(wanted, rel=1e-12, abs=0.0)
        total = sum(sum(parts.values()) for parts in after.by_device.values())
        assert after.output_density == pytest.approx(total, rel=1e-12, abs=0.0)

    def test_the_device_temperature_is_the_default(self) -> None:
        before = analyse(EVERYTHING)
        assert before.device_temperature == 300.0
        after = at_noise_temperatures(before, NoiseTemperatures())
        assert after.output_density == pytest.approx(before.output_density, rel=1e-12, abs=0.0)

    @pytest.mark.parametrize("kelvin", [-1.0, math.inf, math.nan])
    def test_impossible_temperatures_are_refused(self, kelvin: float) -> None:
        with pytest.raises(InputError, match="must be finite and at least 0 K"):
            NoiseTemperatures(channel=kelvin)

    def test_a_temperature_that_only_ngspice_knows_is_asked_for(self) -> None:
        deck = deck_from_text(f"deck\n{AMPLIFIER}\n.temp {{agauss(27,1,1)}}\n.end\n")
        request = NoiseRequest("v(out)", "v1", 1e3, 1e9, 5, by_device=True)
        with pytest.raises(InputError, match="only ngspice can work out"):
            simulate_noise(deck, request)
        assert simulate_noise(deck, replace(request, temperature=250.0)).device_temperature == 250.0


@pytest.mark.parametrize("power", [-2.0, -1.0, 0.0, 1.5])
def test_band_power_of_power_laws(power: float) -> None:
    f = np.geomspace(1.0, 1e3, 7)
    wanted = math.log(1e3) if power == -1 else (1e3 ** (power + 1) - 1) / (power + 1)
    assert band_power(f, f**power) == pytest.approx(wanted, rel=1e-9, abs=0.0)  # rounding
    assert band_power(f, np.zeros(7)) == 0.0


class TestInventory:
    def test_devices_and_what_is_left_out(self) -> None:
        body = EVERYTHING + (
            "\nrb out 0 r={1k*(1+v(in))}\n.if (agauss(0,1,1) > 0)\nr9 out 0 1\n.endif"
        )
        deck = deck_from_text(f"deck\n{body}\n.end\n")
        inventory = noisy_devices(deck)
        found = {device.name: (device.kind, device.nodes) for device in inventory.devices}
        assert found == {
            "r_load_1": ("resistor", ("vdd", "x1.a")),
            "r2": ("resistor", ("e", "0")),
            "q1": ("bipolar", ("vdd", "out", "e")),
            "j1": ("jfet", ("vdd", "0", "e")),
            "m.x1.m1": ("mos", ("out", "in", "0", "0")),
            "m.x1.m2": ("mos", ("out", "in", "vdd", "vdd")),
            "m.x1.mb": ("mos", ("x1.a", "in", "0", "0")),
            "d.x1.d_1": ("diode", ("x1.a", "out")),
        }
        named = "\n".join(inventory.left_out)
        for name in ("s1", "rb", "r9", "m.x1.m1: its series", "q1: its series", "d.x1.d_1: its"):
            assert name in named
        assert ("i1", "i") not in device_names(deck)
        assert ("m.x1.m1", "m") in device_names(deck)

    def test_a_resistor_has_its_multiplier_and_its_temperature_coefficient(self) -> None:
        body = "v1 in 0 dc {v} ac 1\nr1 in out 1k m=4 tc1=1e-3 dtemp=100\nr2 out 0 1k"
        request = TransientRequest(stop=1e-9, step=1e-11, temperature=300.15)
        for volt, wanted in ((1.0, 4 / 1.1e3), (0.0, 4 / 1e3)):
            deck = deck_from_text(f"deck\n{body.replace('{v}', str(volt))}\n.end\n")
            clean = clean_run(deck, request, ["v(out)"])
            # By current and voltage, to rounding; without a voltage the coefficient is not known.
            got = conductance(clean, clean.inventory.devices[0])
            assert got == pytest.approx(wanted, rel=1e-9, abs=0.0)
