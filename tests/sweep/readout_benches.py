"""Testbenches of swept readouts that take ngspice some 0.1 s a run."""

from pathlib import Path
from typing import Any

from cosim.testbench import ReadoutBench, make_testbench
from tests.readout.benches import tables

# A linear amplifier of adjustable gain. A run fails where `fail`, in ns, lies within the run: the
# logarithm then loses its argument.
DECK = """linear amplifier
.param gain=20 fail=1000
vin emf 0 dc 0
r0 emf in 50
rin in 0 50
e1 amp 0 in 0 {gain}
r1 amp out 50
rl out 0 50 noisy=0
b2 mark 0 v=ln({fail}-time*1g)
r2 mark 0 1k noisy=0
.end
"""
NOISE = [{"acts_on": "probe", "from": "netlist", "method": "injection", "seeds": 2}]
GAIN = {"key": "netlist.parameters.gain", "values": [20, 30]}
T1 = {"key": "readout.t1", "values": ["20 us", "50 us"]}
ADC = {"adc_bits": 8, "adc_full_scale": "2 mV", "adc_rate": "250 MHz"}
Sweep = dict[str, Any]


def swept_tables(sweep: Sweep, **more: Any) -> dict[str, Any]:
    """The tables of a testbench; keys in the tables of `more` are added or replaced, or removed."""
    few = {"shots": 1000, "records": 100, "decay_times": 2, "t1": "20 us"}
    made: dict[str, Any] = {**tables(), "sweep": sweep}
    made["netlist"] = {**made["netlist"], "steps_per_period": 20}
    made["readout"] = {**made["readout"], **few}
    made["noise"] = more.pop("noise", [])
    for name, table in more.items():
        merged = {**made[name], **table}
        made[name] = {key: value for key, value in merged.items() if value is not None}
    return made


def swept_bench(folder: Path, sweep: Sweep, **more: Any) -> ReadoutBench:
    """Write the deck and give the testbench."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "deck.cir").write_text(DECK, encoding="utf-8")
    bench = make_testbench(swept_tables(sweep, **more), folder=folder)
    assert isinstance(bench, ReadoutBench)
    return bench


def write_swept(folder: Path, sweep: Sweep, **more: Any) -> Path:
    """Write the deck and the testbench; gives the testbench."""
    text = swept_bench(folder, sweep, **more).to_toml()
    (folder / "bench.toml").write_text(text, encoding="utf-8")
    return folder / "bench.toml"
