"""Oracle: the documented tables of a readout, their units and their rules."""

from typing import Any

import pytest

import cosim
from cosim.errors import TestbenchError
from cosim.testbench import ReadoutBench, gate_bench

TABLES: dict[str, dict[str, Any]] = {
    "netlist": {"file": "amplifier.cir", "stop": "600 ns"},
    "resonator": {
        "geometry": "hanger",
        "frequency": "6.5 GHz",
        "kappa_out": "5 MHz",
        "chi": "-1 MHz",
        "photons": 5.0,
        "start": "20 ns",
        "length": "500 ns",
    },
    "readout": {
        "source": "Vin",
        "stages": [["1 dB", "20 mK"], ["2 dB", "4 K"]],
        "gain": "20 dB",
        "noise_temperature": "3 K",
        "i": "v(i)",
        "q": "v(q)",
        "window": ["60 ns", "520 ns"],
        "t1": "30 us",
    },
}
SENSOR = {
    "parameter": "g_sensor",
    "late_parameter": "g_late",
    "event_parameter": "t_event",
    "value_0": 1e-6,
    "value_1": 2e-6,
}
# Below its resonator: chi is negative.
QUBIT = {"qubit_frequency": "5 GHz", "coupling": "80 MHz", "anharmonicity": "-300 MHz"}
DECISION = {"i": None, "q": None, "decision": "v(q)", "threshold": "0.5 V"}
ADC = {"adc_bits": 8, "adc_full_scale": "1 V", "adc_rate": "1 GHz"}


def altered(**tables: dict[str, Any] | None) -> dict[str, Any]:
    """The tables with keys added or replaced, and without those that are None."""
    made = {name: dict(table) for name, table in TABLES.items()}
    for name, table in tables.items():
        if table is None:
            del made[name]
        else:
            merged = {**made.get(name, {}), **table}
            made[name] = {key: value for key, value in merged.items() if value is not None}
    return made


def read(**tables: dict[str, Any] | None) -> ReadoutBench:
    bench = cosim.make_testbench(altered(**tables))
    assert isinstance(bench, ReadoutBench)
    return bench


def test_quantities_are_in_si_units() -> None:
    bench = read()
    assert bench.resonator is not None
    assert (bench.resonator.kappa_out, bench.resonator.chi) == (5e6, -1e6)
    assert bench.resonator.drive == 6.5e9
    assert bench.readout.stages == ((1.0, 0.02), (2.0, 4.0))
    assert bench.readout.window == pytest.approx((60e-9, 520e-9), abs=0.0)
    assert bench.readout.t1 == pytest.approx(30e-6, abs=0.0)


def test_it_is_written_and_read_again(tmp_path: Any) -> None:
    bench = read()
    path = tmp_path / "again.toml"
    path.write_text(bench.to_toml(), encoding="utf-8")
    again = cosim.load_testbench(path)
    assert isinstance(again, ReadoutBench)
    assert (again.resonator, again.readout, again.netlist) == (
        bench.resonator,
        bench.readout,
        bench.netlist,
    )


def test_a_sensor_in_place_of_a_resonator() -> None:
    bench = read(resonator=None, sensor=SENSOR, readout={"source": None})
    assert bench.sensor is not None
    assert bench.sensor.value_1 == 2e-6


def test_a_gate_is_insisted_on() -> None:
    with pytest.raises(TestbenchError, match=r"takes a testbench with \[gate\]"):
        gate_bench(read())


@pytest.mark.parametrize(
    ("tables", "message"),
    [
        ({"resonator": {"chi": "0 MHz"}}, "the same for both states"),
        ({"resonator": {"kappa_out": 5}}, r"table \[resonator\], key 'kappa_out'"),
        ({"resonator": {"geometry": "transmission"}}, "kappa_in: wanted more than 0"),
        ({"resonator": {"kappa_in": "1 MHz"}}, "'hanger', got 1e\\+06 Hz over 2 pi"),
        ({"resonator": {"photons": 2e6}}, "more than 0 and at most 1e\\+06, got 2e\\+06"),
        ({"resonator": {"power": "-120 dBm"}}, "'photons', 'power' and 'pulse'"),
        ({"resonator": {"coupling": "60 MHz"}}, "'qubit_frequency' and 'coupling'"),
        (
            {"resonator": {**QUBIT, "chi": "1 MHz"}},
            r"table \[resonator\]: resonator chi: got 1e\+06 Hz",
        ),
        ({"resonator": {**QUBIT, "qubit_frequency": "6.5 GHz"}}, "at a transition of the qubit"),
        ({"resonator": {"boost": 2.0}}, "'boost' and 'boost_length' go together"),
        ({"resonator": {"boost": 2.0, "boost_length": "1 us"}}, "less than the pulse's 'length'"),
        ({"resonator": {"ring_down": -1.0}}, "'ring_down' and 'ring_down_length' go together"),
        ({"resonator": None}, r"one of the tables \[resonator\] and \[sensor\], got none"),
        ({"sensor": SENSOR}, r"\[resonator\] and \[sensor\], got both"),
        ({"readout": {"source": None}}, "the key 'source' is missing"),
        ({"readout": {"signal": "if"}}, "'intermediate_frequency' goes with"),
        ({"readout": {"signal": "baseband"}}, "'source_q' goes with"),
        ({"readout": {"probe": "v(if)"}}, "one of the outputs"),
        ({"readout": {"i": None}}, "'q' goes with 'i'"),
        ({"readout": {"adc_bits": 8}}, "go together"),
        ({"readout": {**DECISION, **ADC}}, "'decision' and a converter do not go together"),
        ({"readout": {"window": ["2 us", "1 us"]}}, "the end must come after the start"),
        ({"readout": {"preparation_error": 0.7}}, "wanted 0 to 0.5"),
        ({"readout": {"shots": 3}}, "wanted 1000 to"),
        ({"readout": {"wieghts": "boxcar"}}, "weights"),
        ({"gate": {"target": "x90"}}, r"\[gate\] does not go with \[readout\]"),
        ({"netlist": None}, r"the table \[netlist\] is missing"),
    ],
)
def test_what_is_refused(tables: dict[str, Any], message: str) -> None:
    with pytest.raises(TestbenchError, match=message):
        read(**tables)


def test_tables_of_a_readout_without_it() -> None:
    tables = altered(readout=None)
    tables["gate"] = {"target": "x90"}
    with pytest.raises(TestbenchError, match=r"\[resonator\] goes with \[readout\] only"):
        cosim.make_testbench(tables)
