"""Oracle: the Fourier series of an ideal switch, 2/pi per sideband of its fundamental."""

import math

import numpy as np
import pytest
from scipy import constants

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.generators import noise_currents, noise_grid, noise_samples
from cosim.circuit.injection import device_noise
from cosim.circuit.netlist import deck_from_text
from cosim.circuit.noise import NoiseRequest, simulate_noise
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.stationarity import check_stationarity
from cosim.errors import ConvergenceError, InputError
from cosim.waveform import ComplexArray, FloatArray
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"

CARRIER = 1e9
POINTS = 200
STEP = 1 / (POINTS * CARRIER)
LOAD = 500.0
PROBE = "v(op) - v(on)"
TAIL = "m.x1.mt"
# A pair driven by 10 V, of which 0.1 V and less turn the whole current over: a switch.
MIXER = """single-balanced mixer
vdd vdd 0 3
vb bias 0 1 ac 1
vlop lop 0 sin(2 10 1g)
vlon lon 0 sin(2 -10 1g)
rp vdd op 500
rn vdd on 500
x1 op on lop lon bias mix
.subckt mix op on lop lon bias
m1 op lop tail 0 sw w=100u l=0.1u
m2 on lon tail 0 sw w=100u l=0.1u
mt tail bias 0 0 cs w=20u l=1u
.ends
.model sw nmos level=1 vto=0.4 kp=500u tnom=26.85
.model cs nmos level=1 vto=0.4 kp=200u tnom=26.85
.end
"""
TAIL_GM = 200e-6 * 20 * 0.6  # S: kp W/L (Vgs - vto)
BAND = 0.4e9
PERIODS = 100


@pytest.fixture(scope="module")
def mixer() -> CleanRun:
    """Give the clean run of the mixer over 102 periods of its oscillator."""
    request = TransientRequest(stop=102 / CARRIER, step=STEP, temperature=300.0)
    return clean_run(deck_from_text(MIXER), request, [PROBE])


def spectrum(time: FloatArray, values: FloatArray) -> ComplexArray:
    """Fourier series over a hundred periods; bins are a hundredth of the carrier apart."""
    even = 2 / CARRIER + STEP * np.arange(PERIODS * POINTS)
    # Straight lines err by (pi/200)^2/2, 1e-4 at the carrier.
    return np.fft.fft(np.interp(even, time, values)) / even.size


class TestTail:
    def test_small_signals_say_that_it_is_silent(self) -> None:
        request = NoiseRequest("v(op,on)", "vb", 1e6, 1e9, 2, temperature=300.0, by_device=True)
        parts = simulate_noise(deck_from_text(MIXER), request).by_device
        # At t = 0 the pair is balanced and the tail's noise common to both sides, to the digit.
        assert parts[TAIL]["channel"].max() <= 1e-24 * parts["m.x1.m1"]["channel"].max()

    def test_conversion(self, validate: Validate, mixer: CleanRun) -> None:
        settings = NoiseSettings(bandwidth=BAND)
        currents = noise_currents(mixer, settings, [TAIL])
        drawn = noise_samples(mixer, settings, currents, 3)[0]
        noise = device_noise(mixer, 3, settings, devices=[TAIL])
        assert noise.devices == (TAIL,)
        near = np.arange(-39, 40)
        into = spectrum(noise_grid(mixer), drawn)[near]
        out = spectrum(noise.time, noise.samples[PROBE])[PERIODS + near]
        gain = np.vdot(into, out) / np.vdot(into, into)
        quantity = "gain of a tail's noise to one sideband of a mixer's carrier, over its load"
        # The turn-over takes 1 % of a period; interpolation errs by 1e-4. No draw is in it: the
        # current that was drawn is compared with what came out.
        validate(quantity, sources.MIXER, 2 / math.pi, abs(gain) / LOAD, rel=1e-3)
        # It is this and nothing else that is around the carrier.
        assert np.linalg.norm(out - gain * into) < 0.02 * np.linalg.norm(out)

    def test_density_around_the_carrier(self, validate: Validate, mixer: CleanRun) -> None:
        settings = NoiseSettings(bandwidth=BAND)
        near = np.arange(-30, 31)
        power = []
        for seed in range(4):
            noise = device_noise(mixer, seed, settings, devices=[TAIL])
            out = spectrum(noise.time, noise.samples[PROBE])[PERIODS + near]
            power.append(2 * np.abs(out) ** 2 * PERIODS / CARRIER)
        wanted = 4 * constants.k * 300.0 * (2 / 3) * TAIL_GM * (LOAD * 2 / math.pi) ** 2
        quantity = "noise of a switched tail around the carrier, mean density over 0.6 GHz"
        source = sources.VAN_DER_ZIEL + "; " + sources.MIXER
        # The bins of both sidebands are one another's conjugates: 4 seeds times 61 degrees of
        # freedom, four standard deviations of the mean of as many squares.
        rel = 4 * math.sqrt(2 / (4 * 61))
        validate(quantity, source, wanted, float(np.mean(power)), "V^2/Hz", rel=rel)

    def test_one_and_twenty_microampere_agree(self, mixer: CleanRun) -> None:
        quiet, loud = (NoiseSettings(bandwidth=BAND, scale=scale) for scale in (10.0, 200.0))
        currents = noise_currents(mixer, quiet, [TAIL])
        drawn = noise_samples(mixer, quiet, currents, 3)[0]
        assert 0.5e-6 < float(np.std(drawn)) < 2e-6
        first, second = (
            device_noise(mixer, 3, settings, devices=[TAIL]).samples[PROBE]
            for settings in (quiet, loud)
        )
        # A current that is turned over is linear, whatever its size: four digits.
        assert np.std(second - first) < 1e-4 * np.std(first)

    def test_steps_that_fail_are_no_noise(self, mixer: CleanRun) -> None:
        # 50 uA into a node without capacitance, at which the solution jumps from side to side.
        with pytest.raises(ConvergenceError, match=r"took 20\d+ time points, without it 20408"):
            device_noise(mixer, 3, NoiseSettings(bandwidth=BAND, scale=500.0), devices=[TAIL])


class TestStationarity:
    def test_the_mixer_is_refused_by_name(self, mixer: CleanRun) -> None:
        found = check_stationarity(mixer, 10e-9, 20e-9)
        assert not found.stationary
        assert set(found.breaking) == {"m.x1.m1", "m.x1.m2"}
        assert found.changes[TAIL] < 0.01
        assert "m.x1.m1 by 100%" in found.sentence()

    def test_a_gated_tail_is_refused_though_small_signals_call_it_silent(self) -> None:
        gated = MIXER.replace("vb bias 0 1 ac 1", "vb bias 0 pulse(0 1 3n 1n 1n 5n) ac 1")
        deck = deck_from_text(gated)
        request = NoiseRequest("v(op,on)", "vb", 1e6, 1e9, 2, by_device=True)
        parts = simulate_noise(deck, request).by_device
        shares = {name: sum(part[0] for part in own.values()) for name, own in parts.items()}
        assert shares[TAIL] == 0.0
        run = clean_run(deck, TransientRequest(stop=12e-9, step=STEP), [PROBE])
        assert TAIL in check_stationarity(run, 1e-9, 8e-9, shares).breaking

    def test_an_amplifier_of_small_signals_is_accepted(self) -> None:
        body = (
            "v1 in 0 dc 0.7 sin(0.7 {a} 1g) ac 1\nvd vdd 0 1.5\nrd vdd out 1k\n"
            "x1 out in s\n.subckt s out in\nm1 out in 0 0 n w=10u l=1u\n.ends\n"
            ".model n nmos level=1 vto=0.4 kp=600u"
        )
        for amplitude, wanted in ((1e-3, True), (0.05, False)):
            text = f"deck\n{body.replace('{a}', str(amplitude))}\n.end\n"
            run = clean_run(
                deck_from_text(text), TransientRequest(stop=5e-9, step=5e-12), ["v(out)"]
            )
            found = check_stationarity(run, 1e-9, 5e-9, {"m.x1.m1": 1.0, "rd": 1.0})
            assert found.stationary is wanted
            # gm goes with Vgs - vto: 2 a/(0.3 V + a), and the model's temperature is 0.15 K off.
            change = 2 * amplitude / (0.3 + amplitude)
            assert found.changes["m.x1.m1"] == pytest.approx(change, rel=0.01)

    def test_junctions_count_by_their_current(self) -> None:
        body = (
            "v1 in 0 dc 0.7 sin(0.7 {a} 1g)\nvc c 0 1\nd1 in 0 dm\nq1 c in 0 qm\n"
            ".model dm d is=1e-14 tt=1n\n.model qm npn is=1e-14 tf=1n cjc=1p"
        )
        for amplitude, wanted in ((1e-4, True), (0.01, False)):
            text = f"deck\n{body.replace('{a}', str(amplitude))}\n.end\n"
            run = clean_run(deck_from_text(text), TransientRequest(stop=2e-9, step=5e-12), ["v(c)"])
            found = check_stationarity(run, 1e-9, 2e-9)
            assert found.stationary is wanted
            # exp(-2 a/Vt), of the current across the junction: with that of the capacitance,
            # a thousand times the noise's band in time constants, it would be refused.
            change = 1 - math.exp(-2 * amplitude * constants.e / (constants.k * 300.15))
            for name in ("d1", "q1"):
                assert found.changes[name] == pytest.approx(change, rel=0.01)

    def test_windows_and_limits_that_make_no_sense(self, mixer: CleanRun) -> None:
        with pytest.raises(InputError, match="fewer than two time points"):
            check_stationarity(mixer, 1e-6, 2e-6)
        with pytest.raises(InputError, match=r"must lie in \(0, 1\)"):
            check_stationarity(mixer, 0.0, 1e-9, limit=0.0)

    def test_a_circuit_of_resistors_is_accepted(self) -> None:
        deck = deck_from_text("deck\nv1 in 0 sin(0 1 1g)\nr1 in out 1k\nc1 out 0 1p\n.end\n")
        run = clean_run(deck, TransientRequest(stop=1e-9, step=1e-11), ["v(out)"])
        found = check_stationarity(run, 0.0, 1e-9, {"r1": 1.0})
        assert found.stationary
        assert found.changes == {}
