"""Oracles: xarray reading the archive, and what a testbench asks for being done."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import xarray

import cosim
from cosim.result import as_numbers
from tests.conftest import BenchMaker

pytestmark = pytest.mark.ngspice

DECK = """two stages in cascade
.param level=0.1 spread={agauss(0,0.01,1)}
.subckt stage in out w=1
r1 in out 50
r2 out 0 {50*w}
.ends
v1 src 0 sin(0 {level*(1+spread)} 1g 0 0 90)
x1 src mid stage
x2 mid out stage
.temp 26.85
.tran 1n 30n 0 5p
.end
"""
TABLES = {
    "netlist": {"save": ["v(mid)", "i(v1)"]},
    "drive": {"carrier": "1 GHz"},
    "qubit": {"frequency": "1 GHz", "rabi_per_volt": "500 MHz/V"},
    "gate": {"target": "x90", "window": ["2 ns", "27 ns"]},
}


def test_waveforms_and_channel_open_in_xarray(make_bench: BenchMaker, tmp_path: Path) -> None:
    result = cosim.run(make_bench(DECK, TABLES))
    path = tmp_path / "a.h5"
    assert cosim.save(result, path) == 1
    assert cosim.save(result, path) == 2
    for group, name, values, unit in (
        ("waveform", "v", result.waveform.v, "V"),
        ("envelope", "iq", result.envelope.iq, "V"),
        ("extra/v(mid)", "v", result.extra["v(mid)"].v, "V"),
        ("channel", "pauli_transfer_matrix", result.channel.pauli_transfer_matrix, "1"),
    ):
        with xarray.open_dataset(path, engine="h5netcdf", group=f"runs/000002/{group}") as data:
            assert np.array_equal(data[name].values, values)
            assert data[name].attrs["units"] == unit
            if group != "channel":
                assert data["t"].attrs["units"] == "s"
                assert data[name].dims == ("t",)
            else:
                assert list(data["pauli_in"].values) == ["I", "X", "Y", "Z"]


def test_what_is_loaded_equals_what_was_saved(make_bench: BenchMaker, tmp_path: Path) -> None:
    result = cosim.run(make_bench(DECK, TABLES))
    cosim.save(result, tmp_path / "a.h5")
    again = cosim.load(tmp_path / "a.h5")
    assert as_numbers(again) == as_numbers(result)
    assert again.run.deck_sent == result.run.deck_sent
    assert again.run.versions == result.run.versions
    assert again.run.deck_files[0].text == DECK
    assert np.array_equal(again.waveform.v, result.waveform.v)
    assert again.extra["i(v1)"].unit == "A"


def test_the_archived_testbench_gives_the_run_again(make_bench: BenchMaker, tmp_path: Path) -> None:
    result = cosim.run(make_bench(DECK, TABLES))
    (tmp_path / "again.toml").write_text(result.run.testbench, encoding="utf-8")
    again = cosim.run(tmp_path / "again.toml")
    assert as_numbers(again) == as_numbers(result)


def test_the_largest_step_is_rounded_down_to_a_part_of_the_period(make_bench: BenchMaker) -> None:
    bench = make_bench(DECK, TABLES)
    assert cosim.run(bench).run.steps_per_period == pytest.approx(200)  # the deck's own 5 ps
    coarse = replace(bench, netlist=replace(bench.netlist, max_step=12e-12))
    result = cosim.run(coarse)
    assert result.run.steps_per_period == pytest.approx(84)  # 1 ns / 12 ps = 83.3
    assert result.run.step == pytest.approx(1e-9 / 84)
    few = replace(bench, netlist=replace(bench.netlist, steps_per_period=32))
    assert any("32 time steps" in text for text in cosim.run(few).warnings)


def test_seed_instances_and_termination(make_bench: BenchMaker) -> None:
    bench = make_bench(DECK, TABLES)
    amplitude = cosim.run(bench).pulse.amplitude
    assert cosim.run(bench).pulse.amplitude == amplitude
    other = replace(bench, netlist=replace(bench.netlist, seed=2))
    assert cosim.run(other).pulse.amplitude != amplitude
    # A ladder of 50 ohm resistors passes 1/5; with 25 ohm at its end 1/8, as with a load of
    # 50 ohm, and opening the first shunt leaves 50/(50 + 50 + 50) = 1/3. Source: Ohm's law.
    shunt = replace(bench, netlist=replace(bench.netlist, instances={"x2": {"w": 0.5}}))
    assert cosim.run(shunt).pulse.amplitude / amplitude == pytest.approx(5 / 8, rel=1e-6)
    loaded = replace(bench, drive=replace(bench.drive, termination=50.0))
    assert cosim.run(loaded).pulse.amplitude / amplitude == pytest.approx(5 / 8, rel=1e-6)
    opened = replace(bench, netlist=replace(bench.netlist, instances={"x1": {"w": 1e9}}))
    assert cosim.run(opened).pulse.amplitude / amplitude == pytest.approx(5 / 3, rel=1e-6)


def test_an_estimated_carrier_and_a_current_probe(make_bench: BenchMaker) -> None:
    bench = make_bench(DECK, TABLES)
    given = cosim.run(bench)
    drive = replace(bench.drive, carrier="estimate")
    qubit = replace(bench.qubit, frequency="carrier")
    found = cosim.run(replace(bench, drive=drive, qubit=qubit))
    assert found.carrier_frequency == pytest.approx(1e9, abs=1e3)
    assert found.qubit_frequency == found.carrier_frequency
    # 1 kHz over the window of 25 ns turns the frame by 1.6e-4 rad.
    assert found.rotation.angle == pytest.approx(given.rotation.angle, abs=2e-4)
    # Through the last resistor of 50 ohm flows v(out)/50 ohm, which the same impedance turns
    # back into v(out).
    current = replace(bench, drive=replace(bench.drive, probe="i(x2.r2)"))
    result = cosim.run(current)
    assert result.waveform.unit == "A"
    assert result.rotation.angle == pytest.approx(given.rotation.angle, rel=1e-6)


def test_the_testbenchs_temperature_wins_and_that_is_said(make_bench: BenchMaker) -> None:
    bench = make_bench(DECK, TABLES)
    warm = replace(bench, netlist=replace(bench.netlist, temperature=350.0))
    result = cosim.run(warm)
    assert any("temp" in text for text in result.warnings)
    assert any("TEMP = 76.85" in line for line in result.run.log)


def test_more_levels_than_the_transmon_has_are_told(make_bench: BenchMaker) -> None:
    """A hard square pulse at half the anharmonicity needs more than three levels."""
    strong = {"kind": "transmon", "anharmonicity": "-100 MHz", "levels": 3}
    tables = {**TABLES, "qubit": {**TABLES["qubit"], **strong, "rabi_per_volt": "2.5 GHz/V"}}
    result = cosim.run(make_bench(DECK, tables))
    assert any("levels are too few" in text for text in result.warnings)
    assert result.leakage > 1e-3
