"""Oracles: the testbench's own square pulse, and the field behind an exponential edge."""

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from cosim.checks import check_testbench
from cosim.errors import CosimError
from cosim.quantum.resonator import field_rate
from cosim.readout import run_readout
from cosim.readout_input import make_answers
from cosim.readout_pulse import PlayedPulse, incident_field, play_pulse, pulse_source
from cosim.sweep.identity import files_of
from cosim.testbench import ReadoutBench
from tests import sources
from tests.readout.benches import bench
from tests.validation import Validate

TOPIC = "readout"
CARRIER = 1e9  # The field does not depend on it, the generator's time points do.
AMPLITUDE, DB = 0.1, 120.0  # Some twenty photons.
START, LENGTH, STOP = 20e-9, 200e-9, 300e-9
TAU = 15e-9
# Power of the wave at the resonator, behind the attenuator, in dBm.
POWER = 10 * math.log10(AMPLITUDE**2 / (2 * 50.0) / 1e-3) - DB
SQUARE = f"""an ideal gated carrier
.param amp={AMPLITUDE}
bout rf 0 v={{time > {START} && time < {START + LENGTH} ? amp*cos(2*pi*{CARRIER}*time) : 0}}
.end
"""
# The gate's edges go through an RC before the carrier is multiplied.
SHAPED = f"""a carrier gated through an RC
vgate gate 0 pulse(0 1 {START} 10p 10p {LENGTH} 1)
rg gate slow 1k
cg slow 0 {TAU / 1e3}
bout rf 0 v={{{AMPLITUDE}*v(slow)*cos(2*pi*{CARRIER}*time)}}
.end
"""
GENERATOR = f"""
[netlist]
file = "generator.cir"
stop = "{STOP} s"
steps_per_period = 64

[drive]
probe = "v(rf)"
carrier = "{CARRIER} Hz"
termination = "in deck"
attenuation = "{DB} dB"
"""
RESONATOR: dict[str, Any] = {
    "frequency": f"{CARRIER} Hz",
    "photons": None,
    "start": f"{START} s",
    "length": f"{LENGTH} s",
}
READOUT: dict[str, Any] = {"window": [f"{START} s", "220 ns"], "shots": 1000, "records": 100}


def asked(
    folder: Path, deck: str = SQUARE, generator: str = GENERATOR, **more: Any
) -> ReadoutBench:
    """A readout with the pulse of a generator."""
    (folder / "generator.cir").write_text(deck, encoding="utf-8")
    (folder / "generator.toml").write_text(generator, encoding="utf-8")
    resonator = {**RESONATOR, "pulse": "generator.toml", **more}
    return bench(folder, netlist={"stop": f"{STOP} s"}, resonator=resonator, readout=READOUT)


def played(made: ReadoutBench) -> PlayedPulse:
    source = pulse_source(made)
    assert source is not None
    return play_pulse(made, source, STOP)


def own(folder: Path) -> ReadoutBench:
    resonator = {**RESONATOR, "power": f"{POWER} dBm"}
    return bench(folder, netlist={"stop": f"{STOP} s"}, resonator=resonator, readout=READOUT)


@pytest.mark.ngspice
@pytest.mark.full
def test_a_square_pulse_of_a_netlist_is_the_testbenchs_own(tmp_path: Path) -> None:
    ours, theirs = run_readout(own(tmp_path)), run_readout(asked(tmp_path))
    # The edge lies anywhere in a time step of 1/64 period, of 200 periods, and the demodulator
    # rounds it over 8.6 of them, to both sides alike; the rest is interpolation: 1e-3 of the
    # signal, and as much of SNR and of what follows from it.
    assert theirs.snr == pytest.approx(ours.snr, rel=1e-3)
    assert theirs.errors.separation == pytest.approx(ours.errors.separation, rel=5e-3)
    assert theirs.dephasing_rate == pytest.approx(ours.dephasing_rate, rel=1e-3)
    scale = np.abs(ours.traces.ground).max()
    # At the edges themselves, of which the port sends a part back at once, 1 %.
    assert np.abs(theirs.traces.ground - ours.traces.ground).max() < 2e-2 * scale
    # What is needed to do it again is in the record.
    names = [Path(file.path).name for file in theirs.run.deck_files]
    assert names == ["deck.cir", "generator.toml", "generator.cir"]
    assert "attenuation" in theirs.run.deck_files[1].text


@pytest.mark.ngspice
def test_an_exponential_edge_fills_the_resonator_as_the_formula_has_it(
    tmp_path: Path, validate: Validate
) -> None:
    """a' = -r a + f (1 - e^-t/tau): a = f (1 - e^-rt)/r - f (e^-t/tau - e^-rt)/(r - 1/tau)."""
    made = asked(tmp_path, SHAPED)
    assert made.resonator is not None
    pulse = played(made)
    answers = make_answers(made.resonator, made.readout, STOP, played=pulse)
    resonator = made.resonator.resonator()
    level = incident_field(own_table(tmp_path), resonator, STOP).samples.max()
    force = math.sqrt(resonator.driven_rate) * level
    for since in (10e-9, 40e-9, 150e-9):
        for state in (0, 1):
            rate = complex(field_rate(resonator, state, CARRIER))
            rising = (1 - np.exp(-rate * since)) / rate
            late = (np.exp(-since / TAU) - np.exp(-rate * since)) / (rate - 1 / TAU)
            inside = answers.fields[str(state)].inside
            got = complex(np.interp(START + since, answers.drive.t, inside))
            validate(
                f"field of |{state}> {1e9 * since:.0f} ns after an RC edge of a generator",
                sources.FILTER_AREA,
                abs(force * (rising - late)),
                abs(got),
                # The corner of the edge is rounded by the demodulator, and 10 ps long.
                rel=2e-3,
            )


def own_table(folder: Path) -> Any:
    return own(folder).resonator


@pytest.mark.ngspice
def test_the_check_counts_the_runs_of_the_pulse(tmp_path: Path) -> None:
    path = tmp_path / "ro.toml"
    path.write_text(asked(tmp_path).to_toml(), encoding="utf-8")
    found = {one.name: one.value for one in check_testbench(path)[0]}
    assert found["pulse_runs"] == 1  # Without error bars; two with them.
    assert found["transients"] == 5


def test_a_run_is_another_one_with_another_pulse(tmp_path: Path) -> None:
    made = asked(tmp_path)
    before = files_of(made, None)
    assert files_of(asked(tmp_path), None) == before
    other = files_of(asked(tmp_path, SHAPED), None)
    third = files_of(asked(tmp_path, generator=GENERATOR + "# Another one.\n"), None)
    assert len({one.waveform["pulse"] for one in (before, other, third)}) == 3


def test_a_pulse_of_columns(tmp_path: Path) -> None:
    """The same square pulse, sampled 40 times in a period and read from a file."""
    t = np.arange(0.0, 310e-9, 25e-12)
    v = AMPLITUDE * np.cos(2 * math.pi * CARRIER * t) * ((t >= START) & (t < START + LENGTH))
    rows = "\n".join(f"{a:.6e},{b:.6e}" for a, b in zip(t, v, strict=True))
    (tmp_path / "pulse.csv").write_text(f"time (s),rf (V)\n{rows}\n", encoding="utf-8")
    tables = GENERATOR[GENERATOR.index("[drive]") :].replace('termination = "in deck"\n', "")
    text = '[waveform]\nfile = "pulse.csv"\n\n' + tables.replace("v(rf)", "rf")
    found = played(asked(tmp_path, generator=text)).drive.samples
    mine = own_table(tmp_path)
    wanted = incident_field(mine, mine.resonator(), STOP).samples
    level = np.abs(wanted).max()
    # Half a sample of 25 ps of the 200 ns, on the whole; away from the edges the level.
    assert found.sum() == pytest.approx(wanted.sum(), rel=2e-4)
    inside = slice(len(wanted) // 6, len(wanted) // 2)
    assert np.abs(found - wanted)[inside].max() < 1e-4 * level


@pytest.mark.ngspice
@pytest.mark.parametrize(
    ("generator", "more", "words"),
    [
        (GENERATOR.replace(f"{STOP} s", "200 ns"), {}, "to 300 ns, the end of the readout's run"),
        (GENERATOR.replace(f"{CARRIER} Hz", "1.1 GHz"), {}, "is driven at 1e+09 Hz"),
        (GENERATOR, {"photons": 5.0}, "give one of 'photons', 'power' and 'pulse'"),
        (GENERATOR, {"boost": 2.0, "boost_length": "10 ns"}, "has its own steps"),
        (GENERATOR, {"pulse": "nothing.toml"}, "nothing.toml"),
        ("[readout]\n", {}, "has [readout]"),
    ],
)
def test_wrong_pulses_are_named(
    tmp_path: Path, generator: str, more: dict[str, Any], words: str
) -> None:
    with pytest.raises(CosimError) as caught:
        played(asked(tmp_path, generator=generator, **more))
    assert words in str(caught.value)
