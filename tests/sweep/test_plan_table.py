"""Oracle: the keys and values that stand in the tables themselves; what a user would ask for."""

import copy
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from cosim.errors import DeckError, InputError, TestbenchError, UnknownNameError
from cosim.sweep.planning import make_sweep
from cosim.sweep.table import read_sweep
from cosim.testbench import Testbench, load_testbench, make_testbench

DECK = """a deck with two corners
.lib models.lib tt
.param vdd=1.1 half={vdd/2} noise=0
.subckt cell d g w=1u
m1 d g 0 0 nch w={w} l=0.1u
.ends
vdd dd 0 {vdd}
vin g 0 dc {half}
r1 dd out 1k
x1 out g cell
.tran 1p 1n
.end
"""
MODELS = """* models
.lib tt
.model nch nmos level=1 vto=0.4 kp=200u
.endl
.lib ss
.model nch nmos level=1 vto=0.45 kp=180u
.endl
"""
TABLES: dict[str, Any] = {
    "netlist": {"file": "deck.cir", "steps_per_period": 80},
    "drive": {"probe": "v(out)", "termination": "in deck", "carrier": "6 GHz"},
    "qubit": {
        "kind": "spin",
        "frequency": "6 GHz",
        "rabi_per_volt": "85 MHz/V",
        "t1": "10 ms",
        "t2": "40 us",
    },
    "gate": {"target": "x90"},
    "stimulus": [{"source": "vin", "points": [["0 ns", "0 V"], ["1 ns", "1 V"]]}],
}
PATTERN = {
    "source": "vin",
    "pattern": "01",
    "period": "0.4 ns",
    "low": "0 V",
    "high": "1 V",
    "edge": "50 ps",
}


def bench(folder: Path, sweep: dict[str, Any], **tables: Any) -> Testbench:
    (folder / "deck.cir").write_text(DECK, encoding="utf-8")
    (folder / "models.lib").write_text(MODELS, encoding="utf-8")
    return make_testbench({**copy.deepcopy(TABLES), **tables, "sweep": sweep}, folder=folder)


def grid(key: str, *values: object) -> dict[str, Any]:
    return {"grid": [{"key": key, "values": list(values)}]}


def drawn(runs: int = 4, **entry: Any) -> dict[str, Any]:
    return {"monte_carlo": {"runs": runs, "vary": [entry]}}


def column(sweep: dict[str, Any], key: str, folder: Path) -> list[Any]:
    return [run.values[key] for run in make_sweep(bench(folder, sweep))]


class TestWhatATableMeans:
    def test_a_testbench_passes_the_table_on(self, tmp_path: Path) -> None:
        sweep = {**grid("qubit.detuning", "0 Hz", "100 kHz"), "mismatch": {"threshold": "1 mV um"}}
        made = bench(tmp_path, sweep)
        assert made.studies == {"sweep": sweep}
        (tmp_path / "again.toml").write_text(made.to_toml(), encoding="utf-8")
        again = load_testbench(tmp_path / "again.toml")
        assert again.studies == {"sweep": sweep}
        assert "sweep" not in bench(tmp_path, {}).to_toml()

    def test_axes(self, tmp_path: Path) -> None:
        def axis(**entry: Any) -> list[Any]:
            return column({"grid": [entry]}, entry["key"], tmp_path)

        assert axis(key="netlist.parameters.VDD".lower(), values=["1.0 V", 1.1]) == [1.0, 1.1]
        assert axis(key="qubit.t2", start="1 us", stop="100 us", count=3, spacing="log") == (
            pytest.approx([1e-6, 1e-5, 1e-4], rel=1e-15)
        )
        assert axis(key="drive.attenuation", start="0 dB", stop="20 dB", count=5) == [
            0.0,
            5.0,
            10.0,
            15.0,
            20.0,
        ]
        assert axis(key="netlist.temperature", values=["4 K", "27 degC"]) == [4.0, 300.15]
        assert axis(key="netlist.steps_per_period", values=[80, 160]) == [80, 160]
        assert axis(key="netlist.instances.x1.w", values=["1 um", "2 um"]) == [1e-6, 2e-6]

    def test_a_run_is_the_testbench_with_its_values(self, tmp_path: Path) -> None:
        sweep = {
            "corners": {
                "typical": {},
                "slow": {
                    "sections": {"models.lib": "ss"},
                    "parameters": {"VDD": "1.0 V"},
                    "temperature": "4 K",
                    "thermal_population": 0.02,
                    "qubit": {"t1": "1 ms"},
                    "drive.attenuation": "3 dB",
                    "netlist.instances.x1.w": "3 um",
                },
            },
            **grid("qubit.detuning", "-1 MHz", "1 MHz"),
        }
        plan = make_sweep(bench(tmp_path, sweep))
        assert plan.columns == ("corner", "qubit.detuning")
        assert [tuple(run.values.values()) for run in plan] == [
            ("typical", -1e6),
            ("typical", 1e6),
            ("slow", -1e6),
            ("slow", 1e6),
        ]
        last = plan.testbench(plan.run(3))
        assert last.netlist.sections == {"models.lib": "ss"}
        assert last.netlist.parameters == {"vdd": 1.0}
        assert last.netlist.temperature == 4.0
        assert last.netlist.instances == {"x1": {"w": 3e-6}}
        assert (last.qubit.thermal_population, last.qubit.t1) == (0.02, 1e-3)
        assert (last.qubit.detuning, last.drive.attenuation) == (1e6, 3.0)
        assert last.studies == {}
        assert plan.testbench(plan.run(0)).qubit.t1 == 10e-3

    def test_a_stimulus_can_be_moved(self, tmp_path: Path) -> None:
        sweep = {
            "grid": [
                {"key": "stimulus.1.period", "values": ["0.4 ns", "0.5 ns"]},
                {"key": "stimulus.1.high", "values": ["1 V", "1.2 V"]},
            ]
        }
        plan = make_sweep(bench(tmp_path, sweep, stimulus=[PATTERN]))
        (moved,) = plan.testbench(plan.run(3)).stimulus
        assert (moved.period, moved.high.value, moved.high.unit) == (0.5e-9, 1.2, "V")

    def test_one_at_a_time(self, tmp_path: Path) -> None:
        entries = [
            {"key": "netlist.parameters.vdd", "step": "10 mV"},
            {"key": "qubit.rabi_per_volt", "relative": 0.01},
            {"key": "netlist.parameters.half", "relative": 0.1},
        ]
        plan = make_sweep(bench(tmp_path, {"one_at_a_time": entries}))
        rows = [tuple(run.values.values()) for run in plan]
        keys = [entry["key"] for entry in entries]
        assert plan.columns == (*keys, "perturbed")
        # The deck's own value of a parameter that follows from another one counts as nominal.
        assert rows[0] == (1.1, 85e6, 0.55, "")
        want = [
            (1.09, 85e6, 0.55, keys[0]),
            (1.11, 85e6, 0.55, keys[0]),
            (1.1, 0.99 * 85e6, 0.55, keys[1]),
            (1.1, 1.01 * 85e6, 0.55, keys[1]),
            (1.1, 85e6, 0.9 * 0.55, keys[2]),
            (1.1, 85e6, 1.1 * 0.55, keys[2]),
        ]
        for row, wanted in zip(rows[1:], want, strict=True):
            assert row[:3] == pytest.approx(wanted[:3], rel=1e-14)  # Roundings of sums.
            assert row[3] == wanted[3]
        assert plan.testbench(plan.run(3)).netlist.parameters == {}

    def test_constants_of_mismatch(self, tmp_path: Path) -> None:
        mismatch = {"threshold": "3.5 mV um", "current_factor": "1.2 % um"}
        sweep = {"monte_carlo": {"runs": 2}, "mismatch": mismatch}
        table = read_sweep(bench(tmp_path, sweep)).mismatch
        assert table.threshold == 3.5e-9
        assert table.current_factor == 1.2e-8
        assert table.per == "pair"


WRONG: list[tuple[dict[str, Any], list[str]]] = [
    ({"corner": {}}, ["unknown key 'corner'", "'corners'"]),
    ({"grid": {"key": "qubit.t1"}}, ["[[sweep.grid]]", "two brackets"]),
    ({"grid": [{"key": "qubit.t1"}]}, ["[[sweep.grid]] number 1", "'values', or 'start'"]),
    (grid("qubit.detunning", "1 Hz"), ["no number 'qubit.detunning'", "qubit.detuning"]),
    (grid("qubit.detuning.x", "1 Hz"), ["no number 'qubit.detuning.x'"]),
    (grid("netlist.parameters.vd", 1), ["no top-level parameter 'vd'", "'vdd'"]),
    (grid("netlist.instances.x1.wide", 1), ["declares no parameter 'wide'", "'w'"]),
    (grid("netlist.instances.x2.w", 1), ["'x2' does not exist", "'x1'"]),
    (grid("gate.window", "1 ns"), ["'gate.window' is no number"]),
    (grid("gate.target", "x"), ["'gate.target' is no number"]),
    (grid("accuracy.floor", 1), ["'accuracy.floor' is no number"]),
    (grid("netlist.sections.models.lib", "ss"), ["netlist.sections"]),
    (grid("waveform.file", 1), ["no number 'waveform.file'"]),
    (grid("stimulus.2.period", "1 ns"), ["no number 'stimulus.2.period'"]),
    (grid("qubit.detuning", "1 V"), ["'values.0'", "a frequency", '"V"']),
    (grid("qubit.detuning", 1e6), ["'values.0'", "with its unit"]),
    (grid("netlist.parameters.vdd", "1u"), ["'values.0'", "SPICE suffixes"]),
    (grid("qubit.t1", "1 us", "-1 us"), ["'values.1'", "at least"]),
    (grid("qubit.t1", "1 us"), ["'qubit.t1' = 1e-06", "at most twice t1"]),
    (grid("qubit.detuning", "1 MHz", "1000 kHz"), ["stands there twice"]),
    (
        {"grid": [{"key": "qubit.t1", "start": "1 s", "stop": "2 s", "count": 1}]},
        ["'count'", "at least 2"],
    ),
    (
        {"grid": [dict(key="qubit.detuning", start="0 Hz", stop="1 Hz", count=3, spacing="log")]},
        ["one sign"],
    ),
    (
        {
            "grid": [
                {"key": "qubit.t2", "values": ["1 us"]},
                {"key": "qubit.t2", "values": ["2 us"]},
            ]
        },
        ["'qubit.t2' stands there twice"],
    ),
    (drawn(key="qubit.t2", distribution="gauss", sigma="1 us"), ["'distribution'", "'normal'"]),
    (drawn(key="qubit.t2", distribution="normal"), ["'sigma' is missing"]),
    (drawn(key="qubit.t2", distribution="normal", sigma="-1 us"), ["'sigma'", "more than zero"]),
    (drawn(key="qubit.t2", distribution="normal", sigma="1 V"), ["'sigma'", "a time"]),
    (drawn(key="qubit.t2", distribution="uniform", sigma="1 us"), ["no key 'sigma'"]),
    (
        drawn(key="qubit.t2", distribution="uniform", low="2 us", high="1 us"),
        ["'high' must lie above 'low'"],
    ),
    (drawn(key="qubit.t2", distribution="lognormal", sigma="1 us"), ["'sigma'", "plain number"]),
    (
        drawn(key="netlist.temperature", distribution="normal", mean="4 K", sigma="1 degC"),
        ["a difference of temperatures"],
    ),
    (
        drawn(key="netlist.stop", distribution="normal", sigma="1 ns"),
        ["a nominal value of 'netlist.stop'", "'mean'"],
    ),
    (
        drawn(key="qubit.detuning", distribution="lognormal", sigma=0.1),
        ["above zero", "'qubit.detuning' is 0"],
    ),
    (
        drawn(runs=64, key="qubit.t2", distribution="normal", sigma="40 us"),
        ["sample", "at least 1e-12 s", "narrow the distribution"],
    ),
    ({"monte_carlo": {"runs": 0}}, ["'runs'", "at least 1"]),
    ({"monte_carlo": {"runs": 2.5}}, ["'runs'", "2.5"]),
    ({"monte_carlo": {"runs": 8, "method": "halton"}}, ["'method'", "'sobol'"]),
    ({"monte_carlo": {"runs": 8}}, ["would all be the same"]),
    ({"mismatch": {"threshold": "3 mV um"}}, ["[sweep.monte_carlo]"]),
    ({"monte_carlo": {"runs": 8}, "mismatch": {}}, ["'threshold', 'current_factor'"]),
    (
        {"monte_carlo": {"runs": 8}, "mismatch": {"threshold": "3 mV"}},
        ["'threshold'", "3.5 mV um"],
    ),
    (
        {"monte_carlo": {"runs": 8}, "mismatch": {"threshold": "-3 mV um"}},
        ["'threshold'", "at least 0"],
    ),
    ({"corners": {"a": {"sections": {"models.lib": "sx"}}}}, ["[sweep.corners.a]", "sx"]),
    ({"corners": {"a": {"section": {"models.lib": "ss"}}}}, ["corners.a", "section"]),
    ({"corners": {"a": {"qubit.t11": "1 s"}}}, ["unknown key 'qubit.t11'", "'qubit.t1'"]),
    ({"corners": {"a": {"temperature": "4"}}}, ["corners.a", "'netlist.temperature'", "4.2 K"]),
    ({"corners": {"a": {"parameters": {"vd": 1}}}}, ["corners.a", "'vd'", "'vdd'"]),
    ({"corners": {"a": {}, "b": {}}}, ["corners.b", "the same as the corner 'a'"]),
    ({"corners": {"a": 3}}, ["[sweep.corners.a]", "wanted a table"]),
    (
        {
            "corners": {"a": {}, "b": {"parameters": {"vdd": 1.0}}},
            **grid("netlist.parameters.vdd", 1.0, 1.2),
        },
        ["the corner 'b' sets 'netlist.parameters.vdd'"],
    ),
    (
        {
            **grid("qubit.t2", "1 us", "2 us"),
            **drawn(key="qubit.t2", distribution="uniform", low="1 us", high="2 us"),
        },
        ["stands in [[sweep.grid]] too", "around each value"],
    ),
    ({"one_at_a_time": [{"key": "qubit.t2"}]}, ["'step' or 'relative'"]),
    ({"one_at_a_time": [{"key": "qubit.detuning", "relative": 0.1}]}, ["is 0", "'step'"]),
    ({"one_at_a_time": [{"key": "qubit.detuning", "step": "1 s"}]}, ["'step'", "a frequency"]),
    ({"one_at_a_time": [{"key": "qubit.t2", "step": "50 us"}]}, ["'qubit.t2'", "at least"]),
    (
        {
            "one_at_a_time": [{"key": "qubit.t2", "step": "1 us"}],
            **drawn(key="qubit.t2", distribution="normal", sigma="1 us"),
        },
        ["give one of them"],
    ),
]


@pytest.mark.parametrize(("sweep", "words"), WRONG, ids=[words[-1] for _, words in WRONG])
def test_what_is_wrong_is_told(sweep: dict[str, Any], words: list[str], tmp_path: Path) -> None:
    with pytest.raises(InputError) as caught:
        make_sweep(bench(tmp_path, sweep))
    for word in words:
        assert word in str(caught.value)


def test_a_testbench_without_a_sweep(tmp_path: Path) -> None:
    with pytest.raises(TestbenchError, match="no table \\[sweep\\] that says what to run"):
        make_sweep(bench(tmp_path, {}))
    with pytest.raises(TestbenchError, match=r"wanted a table \[sweep\]"):
        make_testbench({**TABLES, "sweep": 3})


def test_errors_of_decks_keep_their_kind(tmp_path: Path) -> None:
    with pytest.raises(UnknownNameError, match=r"sweep\.corners\.a"):
        make_sweep(bench(tmp_path, {"corners": {"a": {"parameters": {"vd": 1}}}}))
    made = bench(tmp_path, grid("qubit.t2", "1 us"))
    (tmp_path / "deck.cir").unlink()
    with pytest.raises(DeckError):
        make_sweep(made)


def test_mismatch_needs_transistors(tmp_path: Path) -> None:
    made = bench(tmp_path, {"monte_carlo": {"runs": 2}, "mismatch": {"threshold": "1 mV um"}})
    text = "t\nvin a 0 1\nr1 a out 1k\nr2 out 0 1k\n.tran 1p 1n\n.end\n"
    (tmp_path / "deck.cir").write_text(text, encoding="utf-8")
    with pytest.raises(TestbenchError, match="no MOS transistors"):
        make_sweep(made)


def test_a_log_axis_has_equal_ratios(tmp_path: Path) -> None:
    sweep = {"grid": [dict(key="qubit.t2", start="1 us", stop="50 us", count=9, spacing="log")]}
    values = np.array(column(sweep, "qubit.t2", tmp_path))
    ratios = values[1:] / values[:-1]
    assert ratios == pytest.approx(math.pow(50.0, 1 / 8), rel=1e-13)  # Roundings of powers.
