"""Oracle: pulses made wrong in one known way, which must be told; right ones must be quiet."""

import math
import re

import pytest

import cosim
from cosim.errors import InputError, TestbenchError
from tests.conftest import BenchMaker, Tables

pytestmark = pytest.mark.ngspice

DECK = """a gated carrier of 40 ns
.param level=0.1 f=1g
.func window(t) {min(max((t-3n)/4n,0),1)*min(max((43n-t)/4n,0),1)}
b1 out 0 v={level*cos(2*pi*f*time)*window(time)}
.tran 1n 50n
.end
"""


def run(make_bench: BenchMaker, **tables: dict[str, object]) -> cosim.GateResult:
    base: Tables = {
        "drive": {"carrier": "1 GHz"},
        "qubit": {"frequency": "1 GHz", "rabi_per_volt": "69.4 MHz/V"},
        "gate": {"target": "x90", "window": ["1 ns", "48 ns"]},
    }
    for name, table in tables.items():
        base[name] = {**base.get(name, {}), **table}
    return cosim.run(make_bench(DECK, base))


def told(result: cosim.GateResult, words: str) -> bool:
    return any(words in text for text in result.warnings)


def test_a_right_pulse_is_quiet(make_bench: BenchMaker) -> None:
    assert run(make_bench).warnings == ()


def test_a_carrier_that_is_not_the_bursts(make_bench: BenchMaker) -> None:
    result = run(make_bench, drive={"carrier": "1.1 GHz"}, qubit={"frequency": "1.1 GHz"})
    assert told(result, "off the carrier by -1e+08 Hz")


def test_a_scale_at_the_end_of_its_range(make_bench: BenchMaker) -> None:
    assert told(run(make_bench, netlist={"parameters": {"level": 0.05}}), "end of its range")


def test_a_window_that_cuts(make_bench: BenchMaker) -> None:
    assert told(run(make_bench, gate={"window": ["1 ns", "30 ns"]}), "the window cuts the pulse")
    with pytest.raises(TestbenchError, match="less than one period"):
        run(make_bench, gate={"window": ["10 ns", "10.1 ns"]})


def test_a_window_that_misses_the_pulse(make_bench: BenchMaker) -> None:
    assert told(run(make_bench, gate={"window": ["41 ns", "49 ns"]}), "of the pulse lies in")


def test_a_forgotten_attenuation(make_bench: BenchMaker) -> None:
    """Five turns and a quarter look like a quarter turn."""
    result = run(make_bench, qubit={"rabi_per_volt": "1457 MHz/V"})
    (text,) = result.warnings
    assert "check 'attenuation' and 'rabi_per_volt'" in text
    # k A T = 1457 MHz/V x 0.1 V x 36 ns = 5.245 turns; the filter's ringing adds 1e-3 of it.
    assert float(re.findall(r"qubit by (\d+) degrees", text)[0]) == pytest.approx(1888, abs=3)


def test_a_load_that_stands_twice(make_bench: BenchMaker) -> None:
    deck = DECK.replace(".tran", "rload out 0 50\n.tran")
    tables = {
        "drive": {"carrier": "1 GHz", "termination": "50 ohm"},
        "qubit": {"frequency": "1 GHz", "rabi_per_volt": "69.4 MHz/V"},
        "gate": {"target": "x90", "window": ["1 ns", "48 ns"]},
    }
    assert told(cosim.run(make_bench(deck, tables)), "stands at the probed node 'out' already")
    quiet = {**tables, "drive": {"carrier": "1 GHz", "termination": "in deck"}}
    assert cosim.run(make_bench(deck, quiet)).warnings == ()


def test_an_over_rotation_past_the_half_turn_is_told_as_one(make_bench: BenchMaker) -> None:
    result = run(make_bench, qubit={"rabi_per_volt": "144.2 MHz/V"}, gate={"target": "x"})
    assert math.degrees(result.rotation.angle) == pytest.approx(187.0, abs=0.5)
    assert result.rotation.axis[0] == pytest.approx(1.0, abs=1e-2)


def test_a_strong_drive_leaves_the_rotating_wave(make_bench: BenchMaker) -> None:
    result = run(make_bench, qubit={"rabi_per_volt": "5 GHz/V"})
    assert result.rotating_wave_error > 1e-4
    assert told(result, "the rotating-wave path differs")


@pytest.mark.parametrize("detuning", ["300 MHz", "20 GHz"])
def test_a_qubit_far_from_the_carrier(make_bench: BenchMaker, detuning: str) -> None:
    """The twin is right or absent, never aliased: the pulse does nothing to such a qubit."""
    result = run(make_bench, qubit={"detuning": detuning})
    assert result.rotation.angle < 0.1
    error = result.rotating_wave_error
    assert error < 1e-4 or (math.isnan(error) and told(result, "too far from the carrier"))


def test_an_absurd_drive_is_refused(make_bench: BenchMaker) -> None:
    with pytest.raises(InputError, match="rabi_per_volt"):
        run(make_bench, qubit={"rabi_per_volt": "1e16 Hz/V"})


def test_a_detuned_carrier_shows_as_phase_slip(make_bench: BenchMaker) -> None:
    """200 kHz over the window of 47 ns; the free frame hides most of it."""
    result = run(make_bench, qubit={"detuning": "200 kHz"})
    assert result.free_frame.infidelity < 0.1 * result.as_simulated.infidelity
    # The pulse itself takes part in the slip: a fraction of its own 40 ns.
    assert result.phase_slip == pytest.approx(-2 * math.pi * 200e3 * 47e-9, rel=0.5)
