"""Oracle: the keys and values that stand in the file itself, and a round trip through TOML."""

import copy
import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from cosim.errors import TestbenchError
from cosim.schema import TargetTable
from cosim.testbench import load_testbench, make_testbench

GOOD: dict[str, Any] = {
    "title": "a gate",
    "netlist": {
        "file": "deck.cir",
        "stop": "130 ns",
        "max_step": "2 ps",
        "temperature": "4.2 K",
        "parameters": {"vdd": "1.1 V", "amp": 93},
        "sections": {"models.lib": "ff"},
        "instances": {"x1.xdac": {"wn": "2 um"}},
        "include_paths": ["kits"],
        "save": ["v(x1.out)"],
    },
    "drive": {
        "probe": "v(p) - v(n)",
        "termination": "50 ohm",
        "carrier": "6.2 GHz",
        "attenuation": "20 dB",
    },
    "qubit": {
        "kind": "transmon",
        "frequency": "6.2 GHz",
        "levels": 5,
        "anharmonicity": "-300 MHz",
        "rabi_per_volt": "85 MHz/V",
        "t1": "10 ms",
        "t2": "40 us",
        "thermal_population": 0.01,
    },
    "gate": {"target": "x90", "window": ["5 ns", "125 ns"]},
    "accuracy": {"floor": False},
}


def changed(path: str, value: object) -> dict[str, Any]:
    tables = copy.deepcopy(GOOD)
    *tables_path, key = path.split("/")
    inner = tables
    for name in tables_path:
        inner = inner[name]
    if value is None:
        del inner[key]
    else:
        inner[key] = value
    return tables


def test_quantities_are_si_inside() -> None:
    bench = make_testbench(GOOD)
    assert bench.netlist.stop == 130e-9
    assert bench.netlist.max_step == 2e-12
    assert bench.netlist.parameters == {"vdd": 1.1, "amp": 93.0}
    assert bench.netlist.instances == {"x1.xdac": {"wn": 2e-6}}
    assert bench.drive.termination == bench.drive.reference_impedance == 50.0
    assert bench.qubit.rabi_per_volt == 85e6
    assert bench.gate.window == (5e-9, 125e-9)
    assert not bench.accuracy.floor


def test_defaults() -> None:
    tables = copy.deepcopy(GOOD)
    tables["qubit"] = {
        "kind": "spin",
        "frequency": "carrier",
        "rabi_per_volt": "1 MHz/V",
    }
    del tables["accuracy"]
    bench = make_testbench(tables)
    assert math.isinf(bench.qubit.t1)
    assert bench.qubit.frequency == "carrier"
    assert bench.accuracy.floor
    assert bench.gate.calibrate == ("amplitude",)


def test_a_relaxation_time_alone_is_enough() -> None:
    assert math.isinf(make_testbench(changed("qubit/t2", None)).qubit.t2)


def test_the_testbench_written_reads_back_as_the_same(tmp_path: Path) -> None:
    bench = make_testbench(changed("gate/target", {"axis": [1, 0, 1], "angle": "180 deg"}))
    assert bench.gate.target == TargetTable((1.0, 0.0, 1.0), math.pi)
    (tmp_path / "again.toml").write_text(bench.to_toml(), encoding="utf-8")
    again = load_testbench(tmp_path / "again.toml")
    assert replace(again, folder=".", source="") == bench


@pytest.mark.parametrize(
    ("path", "value", "words"),
    [
        ("netlist/temperature", "4.2", ["[netlist]", "'temperature'", '"4.2 K"', "without a unit"]),
        ("netlist/temperature", "-1 K", ["more than 0", "'-1 K'"]),
        ("netlist/temprature", "4.2 K", ["unknown key 'temprature'", "'temperature'"]),
        ("netlist/steps_per_period", 80, ["'max_step' or 'steps_per_period'"]),
        ("netlist/parameters", {"amp": "1u"}, ["'parameters.amp'", '"1 um"']),
        ("netlist/instances", {"x1": {"w": True}}, ["'instances.x1.w'", "True"]),
        ("netlist/file", None, ["[netlist]", "'file' is missing"]),
        ("netlist/initial", "ic", ["'initial'", "'op'", "'uic'", "'ic'"]),
        ("netlist", 3, ["[netlist]", "3"]),
        ("drive/termination", "open", ["'termination'", '"in deck"', '"open"']),
        ("drive/carrier", "6.2 s", ["'carrier'", '"estimate"']),
        ("drive", None, ["[drive] is missing"]),
        ("drives", {}, ["unknown table [drives]", "'drive'"]),
        ("extra", 1, ["unknown key 'extra'"]),
        ("qubit/anharmonicity", "300 MHz", ["'anharmonicity'", "negative"]),
        ("qubit/kind", "ion", ["'kind'", "'spin'", "'transmon'"]),
        ("qubit/levels", 9, ["'levels'", "3 to 6", "9"]),
        ("qubit/levels", "4", ["'levels'", "'4'"]),
        ("qubit/anharmonicity", None, ["transmon", "'anharmonicity'"]),
        ("qubit/kind", "spin", ["two levels"]),
        ("qubit/t2", "1 s", ["'t2'", "twice t1", "0.01"]),
        ("qubit/t1", "1 fs", ["'t1'", "at least 1e-12"]),
        ("drive/attenuation", "-10000 dB", ["'attenuation'", "at least -200"]),
        ("netlist/max_step", "1e-320 s", ["'max_step'", "at least"]),
        ("qubit/thermal_population", 0.7, ["'thermal_population'", "0.7"]),
        ("gate/window", ["5 ns"], ["'window"]),
        ("gate/window", ["5 ns", "4 ns"], ["'window'", "after the start"]),
        ("gate/target", {"axis": [1, 0], "angle": "90 deg"}, ["'target'", "axis"]),
        ("gate/target", {"axis": [1, 0, 0], "angle": "90"}, ["'target'", '"90 deg"']),
        ("gate/target", {"axis": [1, 0, 0]}, ["'target'", "'angle' is missing"]),
        ("gate/calibrate", ["phase"], ["'calibrate", "'amplitude'"]),
        ("accuracy/floor", "yes", ["'floor'", "'yes'"]),
        ("title", 3, ["'title'"]),
    ],
)
def test_faults_name_table_key_wanted_and_got(path: str, value: object, words: list[str]) -> None:
    with pytest.raises(TestbenchError) as caught:
        make_testbench(changed(path, value))
    for word in words:
        assert word in str(caught.value)


def test_a_fault_in_a_file_names_the_file(tmp_path: Path) -> None:
    file = tmp_path / "bench.toml"
    file.write_text("[netlist]\nfile = 3\n[drive]\n[qubit]\n[gate]\n", encoding="utf-8")
    with pytest.raises(TestbenchError, match=r"bench\.toml, table \[netlist\], key 'file'"):
        load_testbench(file)
    file.write_text("[netlist\n", encoding="utf-8")
    with pytest.raises(TestbenchError, match="not a TOML file"):
        load_testbench(file)
    with pytest.raises(TestbenchError, match="does not exist"):
        load_testbench(tmp_path / "none.toml")
    with pytest.raises(TestbenchError, match="not a regular file"):
        load_testbench(tmp_path)
    file.write_text("a = " + "[" * 100_000, encoding="utf-8")
    with pytest.raises(TestbenchError, match="not a TOML file"):
        load_testbench(file)
