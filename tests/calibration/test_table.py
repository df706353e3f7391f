"""Oracle: what the table says, and messages that name file, table, key, wanted and got."""

from pathlib import Path
from typing import Any

import pytest
import qutip

from cosim.calibration.table import read_calibrate
from cosim.calibration.trim import calibrate
from cosim.decks import read_deck
from cosim.errors import InputError, TestbenchError
from cosim.quantum.operators import operator_system
from cosim.testbench import make_testbench
from tests.calibration.pulses import LEVEL, bench, knob
from tests.readout.benches import bench as readout_bench

CODE = {"key": "netlist.parameters.idle", "low": 0, "high": 127, "integer": True}
DETUNING = {"key": "qubit.detuning", "low": "-1 MHz", "high": "1 MHz"}


def test_values_units_and_starts_come_from_table_testbench_and_deck(tmp_path: Path) -> None:
    end = {"key": "netlist.parameters.t_end", "low": "15 ns", "high": "23 ns", "step": "100 ps"}
    temperature = {"key": "netlist.temperature", "low": "290 K", "high": "310 K"}
    made = bench(tmp_path, LEVEL, CODE, end, {**DETUNING, "start": "300 kHz"}, temperature)
    table, knobs = read_calibrate(made, read_deck(made))
    assert (table.metric, table.max_runs, table.cost) == ("as_simulated", 12, 1e-5)
    assert [item.start for item in knobs] == pytest.approx(
        [0.09, 1.0, 22e-9, 300e3, 300.15], rel=1e-12, abs=0.0
    )
    assert [item.unit for item in knobs] == ["1", "1", "s", "Hz", "K"]
    assert [item.step for item in knobs] == [0.0, 1.0, pytest.approx(1e-10, abs=0.0), 0.0, 0.0]
    assert [item.simulated for item in knobs] == [True, True, True, False, True]


def test_what_a_knob_can_be_set_to() -> None:
    code = knob(10, 20, 12, 3.0, whole=True)
    assert code.neighbours(0.31) == pytest.approx((0.3, 0.6))
    assert code.neighbours(0.3) == (0.3,)
    assert [code.at(part) for part in code.neighbours(1.0)] == [19.0]  # 10 and whole threes
    assert code.neighbours(-0.2) == (0.0,)
    free = knob(10, 20, 12)
    assert free.neighbours(0.123) == (0.123,)
    # The start need not be one of the steps.
    assert knob(0, 90, 34.42, 0.1).at(34.42 / 90) == pytest.approx(34.42, rel=1e-15)
    assert knob(0, 90, 34.42, 0.1).at(449 * 0.1 / 90) == 44.9


@pytest.mark.parametrize(
    ("knobs", "study", "words"),
    [
        ([], {}, r"wanted tables \[\[calibrate\.knob\]\]"),
        ([LEVEL], {"metric": "fidelity"}, "key 'metric'"),
        ([LEVEL], {"metric": "assignment_error"}, "of a gate wanted 'as_simulated' or"),
        ([LEVEL], {"max_run": 3}, "did you mean 'max_runs'"),
        ([LEVEL], {"max_runs": 3}, "1 knobs take at least 4 runs, got 3"),
        ([LEVEL], {"cost": 0.0}, "more than 0"),
        ([LEVEL], {"leakage_weight": -1.0}, "at least 0"),
        ([LEVEL, LEVEL], {}, "there are two knobs 'netlist.parameters.level'"),
        ([{**LEVEL, "key": "netlist.parameters.levle"}], {}, "level"),
        ([{**LEVEL, "key": "qubit.detunin"}], {}, "did you mean 'qubit.detuning'"),
        ([{**LEVEL, "key": "gate.target"}], {}, "no number"),
        ([{**LEVEL, "lo": 1}], {}, "unknown key 'lo'"),
        ([{"key": "qubit.detuning", "low": "0 Hz"}], {}, "the key 'high' is missing"),
        ([{**LEVEL, "low": 0.2}], {}, "'high' must be more than 'low', got 0.2 to 0.2"),
        ([{**LEVEL, "low": 0.1}], {}, "the start 0.09 lies outside of 0.1 to 0.2"),
        ([{**LEVEL, "start": 0.3}], {}, "the start 0.3 lies outside"),
        ([{**LEVEL, "step": 0.0}], {}, "key 'step': wanted more than 0"),
        ([{**LEVEL, "step": 1.0}], {}, "key 'step': .* at most the distance"),
        ([{**DETUNING, "low": -1.0}], {}, "key 'low': wanted a frequency as a text"),
        ([{**DETUNING, "step": 1.0}], {}, "key 'step': wanted a frequency as a text"),
        ([{**DETUNING, "high": "1 V"}], {}, "key 'high'.*wanted a frequency"),
        ([{"key": "qubit.t1", "low": "-1 s", "high": "1 s"}], {}, "key 'low': wanted at least"),
        ([{"key": "qubit.t1", "low": "1 us", "high": "1 s"}], {}, "says a value of 'qubit.t1'"),
        ([{**CODE, "high": 127.0}], {}, "key 'high': .* is an integer, got 127.0"),
        ([{**CODE, "low": 0.5}], {}, "key 'low': .* is an integer, got 0.5"),
        ([{**CODE, "start": 64.5}], {}, "key 'start': .* is an integer, got 64.5"),
        ([{**CODE, "step": 0.5}], {}, "key 'step': .* is an integer, got 0.5"),
        ([{**CODE, "high": "127"}], {}, "key 'high': .* is an integer, got '127'"),
        (
            [{"key": "netlist.parameters.level", "low": 0, "high": 1, "integer": True}],
            {},
            "an integer knob begins at an integer, got 0.09",
        ),
    ],
)
def test_bad_input_is_named(
    tmp_path: Path, knobs: list[dict[str, Any]], study: dict[str, Any], words: str
) -> None:
    made = bench(tmp_path, *knobs, study=study)
    with pytest.raises(TestbenchError, match=words) as found:
        read_calibrate(made, read_deck(made))
    assert "table [" in str(found.value)


def test_a_testbench_without_the_table_says_what_to_add(tmp_path: Path) -> None:
    made = readout_bench(tmp_path)
    with pytest.raises(TestbenchError, match=r"has no table \[calibrate\]\n.*knob"):
        read_calibrate(made, read_deck(made))


def test_a_readout_has_no_infidelity(tmp_path: Path) -> None:
    knobs = [{"key": "readout.adc_bits", "low": 4, "high": 12, "start": 6}]
    made = readout_bench(tmp_path, calibrate={"metric": "free_frame", "knob": knobs})
    with pytest.raises(TestbenchError, match="of a readout wanted 'assignment_error'"):
        read_calibrate(made, read_deck(made))


def test_a_key_that_is_an_integer_by_itself_is_one_here(tmp_path: Path) -> None:
    steps = {"key": "netlist.steps_per_period", "low": 64, "high": 200}
    made = bench(tmp_path, steps)
    _, (found,) = read_calibrate(made, read_deck(made))
    assert (found.integer, found.step, found.start) == (True, 1.0, 64.0)


def test_what_cannot_be_run_is_refused(tmp_path: Path) -> None:
    design = make_testbench(
        {
            "qubit": {"kind": "spin", "frequency": "5 GHz", "rabi_per_volt": "125 MHz/V"},
            "gate": {"target": "x90"},
            "specify": {},
        },
        folder=tmp_path,
    )
    with pytest.raises(InputError, match="no circuit"):
        calibrate(design)
    system = operator_system(qutip.num(2), qutip.sigmax())
    with pytest.raises(InputError, match="a readout takes no operators"):
        calibrate(readout_bench(tmp_path), system=system)
