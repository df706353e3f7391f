"""Oracles: scikit-rf's cascades of two-ports, the RC low-pass, the noise of resistors in ngspice.

A ladder with mismatched ends stands between resonator and amplifier, once as a file and once in the
netlist.
"""

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import skrf
from scipy.constants import Boltzmann, Planck
from skrf.media import DefinedGammaZ0

from cosim.dsp.line import envelope_at_far_end
from cosim.dsp.noise.thermal import Attenuator
from cosim.errors import CosimError
from cosim.outgoing import Amplifier, emf_envelope
from cosim.readout import run_readout, simulate_readout
from cosim.readout_input import make_answers
from cosim.readout_line import way_out
from tests import sources
from tests.readout.benches import FREQUENCY, LINEAR, bench
from tests.validation import Validate

TOPIC = "readout"
IF = 200e6
L, C, DB, KELVIN = 8e-9, 8e-12, 3.0, 40.0  # At 200 MHz |S11| and |S22| are some 0.2.
SHUNT = 50.0 * (10 ** (DB / 20) + 1) / (10 ** (DB / 20) - 1)
SERIES = 25.0 * (10 ** (DB / 10) - 1) / 10 ** (DB / 20)
# The ladder, and behind it the amplifier of gain 10 at its input; the load of both is quiet.
LADDER = f"""ladder and linear amplifier of gain 10
vin emf 0 dc 0
r0 emf a 50
l1 a b {L}
c1 b 0 {C}
rp1 b 0 {SHUNT:.12g}
rp2 b in {SERIES:.12g}
rp3 in 0 {SHUNT:.12g}
rin in 0 50 noisy=0
e1 amp 0 in 0 20
r1 amp out 50 noisy=0
rl out 0 50 noisy=0
.end
"""
FEW = {"shots": 1000, "records": 100}
FAST = {"kappa_in": "50 MHz", "chi": "10 MHz"}  # The field stands after some 50 ns.


def media(first: float = 0.05e9, last: float = 12e9, count: int = 240) -> DefinedGammaZ0:
    return DefinedGammaZ0(frequency=skrf.Frequency(first, last, count, unit="Hz"), z0=50)


def ladder(line: DefinedGammaZ0, slower: float = 1.0) -> skrf.Network:
    """The ladder of LADDER, for frequencies that are higher by a factor."""
    return (
        line.inductor(L / slower) ** line.shunt_capacitor(C / slower) ** line.attenuator(-DB, d=0)
    )


def at(network: skrf.Network, frequency: float) -> np.ndarray:
    place = int(np.argmin(np.abs(network.f - frequency)))
    assert network.f[place] == pytest.approx(frequency, rel=1e-12)
    found: np.ndarray = network.s[place]
    return found


@pytest.mark.ngspice
def test_volts_behind_a_ladder_in_the_netlist(tmp_path: Path, validate: Validate) -> None:
    made = bench(tmp_path, LADDER, readout=FEW, resonator=FAST)
    runs = simulate_readout(made)
    answers = runs.inquiry.answers
    assert answers is not None
    line = media(IF, 2 * IF, 2)
    expected = at(ladder(line), IF)[1, 0] * 10.0 / 2.0
    # The field stands, and half of the demodulator's filter, 42 ns, ends before the pulse does.
    place = int(0.8 * runs.grid.count)
    t = runs.grid.start + (place + 0.5) * runs.grid.step
    emf = answers.emf["0"][round(t / answers.drive.step)]
    got = runs.chain.records.ground[place] / emf
    source = sources.SCIKIT_RF
    # The trapezoidal rule shifts the ladder by (omega h)^2/12 = 5e-4.
    validate(
        "volts behind a mismatched ladder over the EMF", source, abs(expected), abs(got), rel=1e-3
    )
    turned = math.degrees(np.angle(got / expected))
    validate("phase of them against the cascade", source, 0.0, turned, "deg", abs=0.1)


def test_volts_behind_files_of_a_ladder_and_an_amplifier(
    tmp_path: Path, validate: Validate
) -> None:
    """The amplifier sends nothing back, so that the cascade is the product."""
    line = media()
    first = ladder(line, FREQUENCY / IF)
    last = line.isolator() ** line.line(0.1, "m") ** line.attenuator(23.0, d=0)
    last = last ** line.shunt_capacitor(0.2e-12)
    whole = first ** line.attenuator(-10.0, d=0) ** last
    first.write_touchstone(str(tmp_path / "cable"))
    last.write_touchstone(str(tmp_path / "amplifier"))
    readout = {
        "line": "cable.s2p",
        "line_temperature": f"{KELVIN} K",
        "stages": [["10 dB", "1 K"]],
        "amplifier": "amplifier.s2p",
        "gain": None,
        "window": ["20 ns", "420 ns"],
    }
    made = bench(tmp_path, readout=readout, resonator=FAST)
    assert made.resonator is not None
    answers = make_answers(made.resonator, made.readout, 470e-9, folder=str(tmp_path))
    place = round(350e-9 / answers.drive.step)
    bare = way_out(bench(tmp_path, readout={"gain": None, "noise_temperature": None}).readout, 6e9)
    emf = emf_envelope(answers.fields["1"].outside[place], FREQUENCY, bare.line)
    got = answers.emf["1"][place] / emf
    expected = at(whole, FREQUENCY)[1, 0]
    source = sources.SCIKIT_RF
    name = "a mismatched ladder, 10 dB and an amplifier as files"
    # The pulse's edges, of a single sample, ring at the end of the samples' band: 3e-5 after 70 ns.
    validate(f"EMF behind {name}", source, abs(expected), abs(got), rel=1e-4)
    validate(f"phase of it, {name}", source, 0.0, math.degrees(np.angle(got / expected)), abs=1e-2)


def test_a_step_through_a_low_pass() -> None:
    """(1 - exp(-(1/tau + j omega) t)) H for H = 1/(1 + j omega tau), of exp(+j omega t)."""
    tau, carrier, step = 30e-12, 6e9, 5e-12
    f = np.linspace(0.0, 100e9, 2001)
    t = step * np.arange(4000)
    high = t > 4e-9
    found = envelope_at_far_end(high, step, carrier, f, 1 / (1 + 2j * math.pi * f * tau))
    rate = 1 / tau + 2j * math.pi * carrier
    # Straight lines from sample to sample put the edge half a step before the first high one.
    since = np.maximum(t - 4e-9 - 0.5 * step, 0.0)
    expected = (1 - np.exp(-rate * since)) / (1 + 2j * math.pi * carrier * tau)
    inside = since > 10 * step
    # The table ends where 5 % of a wave still pass, at half of the band of the samples.
    assert np.abs(found - expected)[inside].max() < 0.02
    assert np.abs(found - expected)[t > 5e-9].max() < 1e-3


def test_a_narrow_table_does_as_well_as_a_wide_one() -> None:
    """A cable of 3 ns between connectors that send a tenth of the wave back, around 6 GHz."""
    step, carrier = 0.1e-9, 6e9
    t = step * np.arange(2000)
    rising = 1 - np.exp(-np.maximum(t - 20e-9, 0.0) / 10e-9)
    found = []
    for reach in (0.3e9, 4.5e9):
        line = media(carrier - reach, carrier + reach, round(reach / 5e6) + 1)
        bump = line.shunt_capacitor(0.1e-12)
        s21 = (bump ** line.line(0.9, "m") ** bump).s[:, 1, 0]
        found.append(envelope_at_far_end(rising, step, carrier, line.frequency.f, s21))
    assert abs(found[1][-1]) == pytest.approx(1.0, abs=0.05)
    # What the edge's corner sends beyond the narrow band.
    assert np.abs(found[0] - found[1]).max() < 2e-3


class TestNoise:
    def test_a_matched_file_is_an_attenuator(self, tmp_path: Path) -> None:
        line = media()
        line.attenuator(-3.0, d=0).write_touchstone(str(tmp_path / "pad"))
        readout = {"line": "pad.s2p", "line_temperature": "4 K", "gain": None}
        table = bench(tmp_path, readout=readout).readout
        way = way_out(table, FREQUENCY, tmp_path)
        stage = way.line.stages[0]
        assert isinstance(stage, Attenuator)
        # Digits of the file.
        assert stage.power_ratio == pytest.approx(10**0.3, rel=1e-6)
        assert stage.temperature == 4.0
        assert way.notices(10e6)[1:] == ()

    def test_the_file_of_an_amplifier_gives_its_gain(self, tmp_path: Path) -> None:
        media().attenuator(23.0, d=0).write_touchstone(str(tmp_path / "hemt"))
        readout = {"amplifier": "hemt.s2p", "gain": None, "noise_temperature": "4 K"}
        way = way_out(bench(tmp_path, readout=readout).readout, FREQUENCY, tmp_path)
        assert isinstance(way.line.stages[0], Amplifier)
        assert way.line.stages[0].gain == pytest.approx(23.0, abs=1e-6)

    @pytest.mark.ngspice
    def test_a_ladder_of_a_file_adds_what_its_resistors_do(
        self, tmp_path: Path, validate: Validate
    ) -> None:
        """In the netlist nothing comes back to the ladder: (1 - |S21|^2 - |S22|^2) kT.

        The file's has the noise that its far end reflects as well, |S22|^2 kT.
        """
        noise = {"acts_on": "probe", "from": "netlist", "resistor_temperature": f"{KELVIN} K"}
        front = {"gain": "10 dB", "noise_temperature": "0.2 K", **FEW}
        netlist = run_readout(bench(tmp_path, LADDER, noise=[noise], readout=front))
        s = at(ladder(media(IF, 2 * IF, 2)), IF)
        through, back = abs(s[1, 0]) ** 2, abs(s[1, 1]) ** 2
        validate(
            "noise temperature of a mismatched ladder at 40 K, by its resistors",
            sources.BOSMA,
            KELVIN * (1 - through - back) / through,
            netlist.noise_temperature,
            "K",
            rel=2e-3,  # of the small-signal table, and of the trapezoidal gain
        )
        scaled = ladder(media(), FREQUENCY / IF)
        scaled.write_touchstone(str(tmp_path / "ladder"))
        file: dict[str, Any] = {"line": "ladder.s2p", "line_temperature": f"{KELVIN} K"}
        file |= {"gain": None, "noise_temperature": None}
        way = way_out(bench(tmp_path, LINEAR, readout=file).readout, FREQUENCY, tmp_path)
        stage = way.line.stages[0]
        assert isinstance(stage, Attenuator)
        added = (stage.power_ratio - 1) * stage.temperature
        assert added == pytest.approx(netlist.noise_temperature + KELVIN * back / through, rel=2e-3)
        assert Boltzmann * KELVIN > 100 * Planck * FREQUENCY  # Else kT would not do.


class TestFaults:
    @pytest.mark.parametrize(
        ("readout", "words"),
        [
            ({"line": "none.s2p", "line_temperature": "1 K"}, "none.s2p"),
            ({"line": "pad.s2p"}, "'line' and 'line_temperature' go together"),
            ({"amplifier": "pad.s2p"}, "give 'gain' or 'amplifier'"),
            ({"line": "hemt.s2p", "line_temperature": "1 K"}, "not passive"),
            ({"line": "low.s2p", "line_temperature": "1 K"}, "does not hold the carrier"),
        ],
    )
    def test_wrong_files_are_named(
        self, tmp_path: Path, readout: dict[str, Any], words: str
    ) -> None:
        media().attenuator(-3.0, d=0).write_touchstone(str(tmp_path / "pad"))
        media().attenuator(20.0, d=0).write_touchstone(str(tmp_path / "hemt"))
        media(last=3e9).attenuator(-3.0, d=0).write_touchstone(str(tmp_path / "low"))
        with pytest.raises(CosimError) as caught:
            way_out(bench(tmp_path, readout=readout).readout, FREQUENCY, tmp_path)
        assert words in str(caught.value)

    def test_mismatch_and_slope_are_told(self, tmp_path: Path) -> None:
        steep = media().shunt_capacitor(2e-12)
        steep.write_touchstone(str(tmp_path / "steep"))
        readout = {"line": "steep.s2p", "line_temperature": "1 K"}
        way = way_out(bench(tmp_path, readout=readout).readout, FREQUENCY, tmp_path)
        texts = way.notices(1e9)
        assert any("at its near end" in text for text in texts)
        assert any("at its far end" in text for text in texts)
        assert any("varies by" in text for text in texts)
