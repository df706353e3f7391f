"""Oracle: closed forms of 4kTR and 2qI, dividers and poles; the values that sources are given."""

import math

import numpy as np
import pytest
from scipy import constants

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.inventory import independent_sources, unobserved_elements
from cosim.circuit.netlist import deck_from_text
from cosim.circuit.noise_parts import NoiseTemperatures
from cosim.circuit.standstill import deck_at_rest, mean_of, resting_noise
from cosim.circuit.stimulus import with_stimulus
from cosim.errors import ProbeError
from cosim.waveform import Waveform
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"
CARRIER = 1e9
DEVICE = NoiseTemperatures()


def run_of(body: str, probe: str, stop: float = 4e-9, wave: Waveform | None = None) -> CleanRun:
    deck = deck_from_text(f"deck\n{body}\n.end\n")
    if wave is not None:
        deck = with_stimulus(deck, "x1.vin", wave)
    return clean_run(deck, TransientRequest(stop=stop, step=1e-11, temperature=300.0), [probe])


DIODE = "x1 out drive\nvb vb 0 0.2\nib 0 vb sin(1m 0.5m 1g)\nrb out 0 1meg noisy=0\n"
DIODE += ".subckt drive out\nvin in 0 {}\nd1 in 0 dm\nr1 in out 1k noisy=0\n.ends\n"
DIODE += ".model dm d is=1e-14 rs=50 tnom=26.85"


class TestSources:
    def test_all_of_them_through_instances(self) -> None:
        deck = deck_from_text(f"deck\n{DIODE.format('0.6 ac 1')}\n.end\n")
        found = {source.path: (source.name, source.nodes) for source in independent_sources(deck)}
        assert found == {
            "vb": ("vb", ("vb", "0")),
            "ib": ("ib", ("0", "vb")),
            "x1.vin": ("v.x1.vin", ("x1.in", "0")),
        }

    def test_they_stand_at_their_mean_or_at_an_instant(self) -> None:
        run = run_of(DIODE.format("pulse(0 0.6 1n 10p 10p 10n)"), "v(out)")
        texts = [line.text for line in deck_at_rest(run, (2e-9, 2e-9)).lines]
        (pulse,) = (text for text in texts if text.startswith("vin in 0 dc"))
        assert float(pulse.split()[4]) == pytest.approx(0.6, rel=1e-12)
        (wave,) = (text for text in texts if text.startswith("ib"))
        # At 2 ns, a turn; a straight line over a hundredth of one errs by (pi/100)^2/2 of 0.5 mA.
        assert float(wave.split()[-1]) == pytest.approx(1e-3, abs=2.5e-7)
        assert "vb vb 0 0.2" in texts  # what stands is left alone
        half = [line.text for line in deck_at_rest(run, (0.505e-9, 1.505e-9)).lines]
        (pulse,) = (text for text in half if text.startswith("vin in 0 dc"))
        # Half of the stretch lies behind the middle of the edge.
        assert float(pulse.split()[4]) == pytest.approx(0.3, rel=1e-9)

    def test_a_stimulus_stands_too(self) -> None:
        t = np.array([0.0, 1e-9, 2e-9])
        run = run_of(DIODE.format("0"), "v(out)", wave=Waveform(t, np.array([0.0, 0.0, 0.5])))
        (file,) = deck_at_rest(run, (1.5e-9, 1.5e-9)).data_files
        values = [float(row.split()[1]) for row in file.content.decode().splitlines()]
        assert values == pytest.approx([0.25, 0.25], rel=1e-9)

    def test_means(self) -> None:
        time = np.array([0.0, 1.0, 3.0])
        values = np.array([0.0, 2.0, 0.0])
        assert mean_of(time, values, (0.0, 3.0)) == pytest.approx(1.0, rel=1e-15)
        assert mean_of(time, values, (0.5, 0.5)) == pytest.approx(1.0, rel=1e-15)


class TestNoise:
    @pytest.mark.parametrize("kelvin", [300.0, 4.2])
    @pytest.mark.parametrize(
        ("probe", "factor"), [("v(out)", 1.0), ("0.5*v(out) - 0.25*v(out)", 0.25)]
    )
    def test_johnson_noise(
        self, validate: Validate, kelvin: float, probe: str, factor: float
    ) -> None:
        body = "v1 in 0 sin(0 1 1g)\nr1 in out 1k\nc1 out 0 0.2p"
        run = run_of(body, probe)
        found = resting_noise(
            run, run.probes[0], CARRIER, (1e-9, 3e-9), NoiseTemperatures(resistor=kelvin)
        )
        grid = found.noise.frequency
        pole = 1 + (2 * math.pi * grid * 1e3 * 0.2e-12) ** 2
        wanted = 4 * constants.k * kelvin * 1e3 * factor**2 / pole
        middle = int(np.argmin(np.abs(grid - CARRIER)))
        # ngspice's own constant of Boltzmann is 3.5e-7 off.
        validate(
            f"small-signal noise of 1 kohm at {kelvin:g} K in a low-pass, probe {probe}",
            sources.JOHNSON_NYQUIST + ", 4 k T R, and one pole",
            float(wanted[middle]),
            float(found.noise.output_density[middle]),
            "V^2/Hz",
            rel=1e-6,
        )
        np.testing.assert_allclose(found.noise.output_density, wanted, rtol=1e-6)
        assert found.shift == {}

    def test_shot_noise_of_a_diode_that_a_pulse_switched_on(self, validate: Validate) -> None:
        """`.noise` of the deck as it stands, off at t = 0, would give next to none."""
        body = DIODE.format("pulse(0 0.7 1n 10p 10p 10n)").replace("vin in 0", "vin s 0")
        body = body.replace("d1 in 0", "rs s in 1k noisy=0\nd1 in 0").replace("rs=50 ", "")
        run = run_of(body, "v(x1.in)")
        found = resting_noise(run, run.probes[0], CARRIER, (3e-9, 3e-9), DEVICE)
        voltage = float(run.result.vectors["v(x1.in)"][-1])
        current = (0.7 - voltage) / 1e3 - voltage / 1.001e6
        # The diode's slope beside the resistor in front of it, and the two behind.
        slope = current * constants.e / (constants.k * 300.0)
        conductance = slope + 1e-3 + 1 / 1.001e6
        middle = int(np.argmin(np.abs(found.noise.frequency - CARRIER)))
        validate(
            "small-signal shot noise of a diode, of sources frozen after a pulse",
            sources.SCHOTTKY,
            2 * constants.e * current / conductance**2,
            float(found.noise.by_device["d.x1.d1"]["shot"][middle]),
            "V^2/Hz",
            # The run's own tolerance of 1e-3 of a voltage drop of 40 mV/26 mV in the exponent.
            rel=2e-3,
        )
        assert found.shift["d.x1.d1"] < 1e-3
        early = resting_noise(run, run.probes[0], CARRIER, (0.5e-9, 0.5e-9), DEVICE)
        assert (
            early.noise.by_device["d.x1.d1"]["shot"][middle]
            < 1e-6 * (found.noise.by_device["d.x1.d1"]["shot"][middle])
        )

    def test_a_state_that_is_remembered_is_seen_to_be_another(self) -> None:
        """A charge that a run keeps is none of the operating point at rest."""
        body = "vd d 0 1\nrl d out 100\nm1 out g 0 0 n w=10u l=1u\nc1 g 0 1p\n"
        body += "ig 0 g pulse(0 1m 0.1n 10p 10p 0.7n)\nrg g 0 1g noisy=0\n"
        body += ".model n nmos level=1 vto=0.4 kp=600u"
        run = run_of(body, "v(out)", stop=3e-9)
        found = resting_noise(run, run.probes[0], CARRIER, (2e-9, 3e-9), DEVICE)
        assert found.shift["m1"] > 0.99

    def test_a_current_is_refused(self) -> None:
        run = run_of("v1 in 0 1\nr1 in 0 1k", "i(v1)")
        with pytest.raises(ProbeError, match=r"of voltages, not of i\(v1\)"):
            resting_noise(run, run.probes[0], CARRIER, (1e-9, 2e-9), DEVICE)


def test_elements_of_which_a_run_does_not_tell() -> None:
    body = "v1 a 0 1\nr1 a b 1k\nr2 b 0 r={v(a)+1}\nb1 c 0 v=v(a)*v(b)\ns1 c d a 0 sw\n"
    body += "e1 e 0 a 0 2\ng1 e 0 poly(2) a 0 b 0 0 0 0 0 1\ne2 f 0 vol='v(a)^2'\nl1 f 0 1n\n"
    body += "x1 a s\n.subckt s a\nb2 a 0 i=v(a)^2\n.ends\n.model sw sw"
    deck = deck_from_text(f"deck\n{body}\n.end\n")
    assert unobserved_elements(deck) == ("r2", "b1", "s1", "g1", "e2", "b.x1.b2")
