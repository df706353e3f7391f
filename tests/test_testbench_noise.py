"""Oracle: what the tables [[noise]] and [[spectator]] say, read by hand."""

import math
import tomllib
from typing import Any

import pytest

from cosim.errors import TestbenchError
from cosim.testbench import Testbench, make_testbench

BASE = """
[waveform]
file = "wave.csv"
[drive]
probe = "v"
carrier = "5 GHz"
[qubit]
kind = "spin"
frequency = "5 GHz"
rabi_per_volt = "85 MHz/V"
[gate]
target = "x90"
"""
NETLIST = "acts_on = 'probe'\nfrom = 'netlist'\n"


def bench(text: str) -> Testbench:
    return make_testbench(tomllib.loads(BASE + text))


@pytest.mark.parametrize(
    ("keys", "frequency", "expected"),
    [
        ('acts_on = "detuning"\nwhite = "100 Hz^2/Hz"', 1e6, (2 * math.pi) ** 2 * 100),
        ('acts_on = "detuning"\nwhite = "10 Hz/sqrt(Hz)"', 1e6, (2 * math.pi) ** 2 * 100),
        ('acts_on = "detuning"\nflicker = "1 kHz^2/Hz"', 1e3, (2 * math.pi) ** 2 * 1e3),
        (
            'acts_on = "amplitude"\n'
            'sidebands = [["1 kHz", "-120 dBc/Hz"], ["1 MHz", "-120 dBc/Hz"]]',
            1e5,
            2e-12,
        ),
        (
            'acts_on = "phase"\nsidebands = [["1 kHz", "-90 dBc/Hz"], ["1 MHz", "-150 dBc/Hz"]]',
            1e3,
            2e-9,
        ),
        (
            'acts_on = "phase"\njitter = "1 ps"\nclock = "1 GHz"',
            1e6,
            (2 * math.pi * 5e9 * 1e-12) ** 2 / 5e8,
        ),
        (
            'acts_on = "phase"\n'
            'points = [["1 kHz", "1e-12 rad^2/Hz"], ["1 MHz", "1e-12 rad^2/Hz"]]',
            1e4,
            1e-12,
        ),
        # Each quadrature has twice the density of the voltage.
        ('acts_on = "probe"\nwhite = "2 nV/sqrt(Hz)"', 1e6, 8e-18),
    ],
)
def test_a_density_is_read_in_its_unit(keys: str, frequency: float, expected: float) -> None:
    (noise,) = bench(f"[[noise]]\n{keys}\n").noise
    density = noise.density(5e9)
    assert density is not None
    # A sum and a product of floats; pytest's own absolute tolerance would hide a small density.
    assert float(density.at([frequency])[0]) == pytest.approx(expected, rel=1e-12, abs=0.0)


def test_what_is_constant_during_a_gate_has_a_spread() -> None:
    text = '[[noise]]\nacts_on = "detuning"\ndeviation = "20 kHz"\n'
    text += '[[noise]]\nacts_on = "phase"\ndeviation = "1 deg"\n'
    first, second = bench(text).noise
    assert first.spread == pytest.approx(2 * math.pi * 20e3, rel=1e-15)
    assert second.spread == pytest.approx(math.pi / 180, rel=1e-15)
    assert first.density(5e9) is None


@pytest.mark.parametrize(
    ("keys", "message"),
    [
        ("white = '1 Hz^2/Hz'", "key 'acts_on': it is missing"),
        ("acts_on = 'phse'\nwhite = '1 rad^2/Hz'", "(?s)got 'phse'.*phase"),
        ("acts_on = 'detuning'", "give one of .* got none"),
        ("acts_on = 'detuning'\nwhite = '1 Hz^2/Hz'\nt2_star = '1 us'", "got 't2_star' and"),
        ("acts_on = 'detuning'\nwhite = '-1 Hz^2/Hz'", "not negative"),
        ("acts_on = 'detuning'\nwhite = '1 rad^2/Hz'", "spectral density of a frequency"),
        ("acts_on = 'detuning'\nwhit = '1 Hz^2/Hz'", "unknown key 'whit'"),
        ("acts_on = 'phase'\njitter = '1 ps'", "'jitter' and 'clock' go together"),
        ("acts_on = 'amplitude'\ndeviation = 0.0", "wanted more than 0"),
        (NETLIST + "method = 'smal'", "key 'method'.*got 'smal'"),
        (NETLIST + "method = 'stationary'\ngamma = 1.0", "go with injection, not with"),
        (NETLIST + "method = 'frozen'\ngammas = { m1 = 1.0 }", "go with injection, not with"),
        (NETLIST + "method = 'frozen'\nby_device = true", "go with injection, not with"),
        (NETLIST + "instant = '3 ns'", "key 'instant' goes with method = \"frozen\""),
        (NETLIST + "gammas = { 'm.x1.m1' = 0.0 }", r"key 'gammas\.m\.x1\.m1': wanted more than 0"),
        (NETLIST + "gammas = { m1 = 'two' }", r"key 'gammas\.m1'.*got 'two'"),
        (NETLIST + "gamma = 0.0", "key 'gamma': wanted more than 0"),
        (NETLIST + "seeds = 1", "key 'seeds': wanted 2 to 100000, got 1"),
        (NETLIST + "white = '1 V^2/Hz'", "unknown key 'white'"),
        (NETLIST + "channel_temperature = '0 K'", "wanted more than 0 K"),
        ("acts_on = 'detuning'\nwhite = '1 Hz^2/Hz'\nlow = '2 Hz'\nhigh = '1 Hz'", "low < high"),
        ("acts_on = 'probe'\npoints = [['2 Hz', '1 V^2/Hz'], ['1 Hz', '1 V^2/Hz']]", "must rise"),
        ("acts_on = 'probe'\npoints = [['1 Hz', '1 V^2/Hz'], ['2 Hz', '-1 V^2/Hz']]", "positive"),
    ],
)
def test_a_wrong_noise_is_refused(keys: str, message: str) -> None:
    with pytest.raises(TestbenchError, match=message) as caught:
        bench(f"[[noise]]\n{keys}\n")
    assert "[[noise]] number 1" in str(caught.value)


@pytest.mark.parametrize(
    ("keys", "message"),
    [
        ("kind = 'spin'\nrabi_per_volt = '1 MHz/V'", "'frequency' or 'offset'"),
        ("kind = 'transmon'\nrabi_per_volt = '1 MHz/V'\noffset = '1 MHz'", "anharmonicity"),
        ("kind = 'operators'\nrabi_per_volt = '1 MHz/V'\noffset = '1 MHz'", "key 'kind'"),
        ("kind = 'spin'\noffset = '1 MHz'", "'rabi_per_volt' is missing"),
    ],
)
def test_a_wrong_spectator_is_refused(keys: str, message: str) -> None:
    with pytest.raises(TestbenchError, match=message) as caught:
        bench(f"[[spectator]]\n{keys}\n")
    assert "[[spectator]] number 1" in str(caught.value)


def test_the_tables_survive_being_written() -> None:
    text = """
[[noise]]
acts_on = "phase"
name = "LO"
sidebands = [["1 kHz", "-90 dBc/Hz"], ["1 MHz", "-150 dBc/Hz"]]
above = "hold"
[[noise]]
acts_on = "detuning"
white = "1e3 Hz^2/Hz"
flicker = "1e6 Hz^2/Hz"
low = "1 mHz"
[[noise]]
acts_on = "probe"
from = "netlist"
method = "injection"
gamma = 1.1
gammas = { "m.x1.m1" = 0.9, nch = 1.2 }
[[noise]]
acts_on = "probe"
from = "netlist"
method = "frozen"
instant = "3 ns"
[[spectator]]
kind = "transmon"
name = "q2"
offset = "-40 MHz"
anharmonicity = "-250 MHz"
rabi_per_volt = "80 MHz/V"
"""
    first = bench(text)
    again: dict[str, Any] = tomllib.loads(first.to_toml())
    second = make_testbench(again)
    assert second.noise == first.noise
    assert second.spectator == first.spectator
    assert second.spectator[0].qubit(5e9).frequency == 4.96e9
