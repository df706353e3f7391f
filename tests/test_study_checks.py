"""Oracle: keys that are wrong on purpose, in each study's table; the errors of the readers."""

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import pytest

from cosim.checks import check_testbench
from cosim.decks import read_deck
from cosim.errors import TestbenchError
from cosim.keys import number_key, with_number
from cosim.study_checks import check_studies
from cosim.testbench import Testbench, make_testbench

EXAMPLES = Path(__file__).parents[1] / "examples"


def tables_of(name: str) -> dict[str, Any]:
    found: dict[str, Any] = tomllib.loads((EXAMPLES / f"{name}.toml").read_text(encoding="utf-8"))
    return found


def bench_of(name: str, **studies: Mapping[str, Any]) -> Testbench:
    """An example with tables of studies in place of its own, or beside them."""
    made = make_testbench({**tables_of(name), **studies}, folder=EXAMPLES)
    assert isinstance(made, Testbench)
    return made


@pytest.mark.parametrize("name", ["calibrate_modulator", "drift_x180", "train_flux"])
def test_the_examples_tables_are_in_order(name: str) -> None:
    bench = bench_of(name)
    assert check_studies(bench, read_deck(bench)) == (name.partition("_")[0],)


@pytest.mark.parametrize(
    ("example", "study", "wrong"),
    [
        ("calibrate_modulator", "calibrate", "metrik"),
        ("drift_x180", "drift", "horizn"),
        ("train_flux", "train", "spacin"),
        ("x90_spin", "budget", "fidelty"),
        ("x90_spin", "sensitivity", "metrik"),
        ("x90_spin", "specify", "targett"),
    ],
)
def test_a_mistyped_key_is_found_and_named(example: str, study: str, wrong: str) -> None:
    own = tables_of(example).get(study, {})
    bench = bench_of(example, **{study: {**own, wrong: "x"}})
    with pytest.raises(TestbenchError, match=rf"(?s)\[{study}\].*'{wrong}'"):
        check_studies(bench, read_deck(bench))


def test_a_knob_that_does_not_exist_is_found() -> None:
    own = tables_of("calibrate_modulator")["calibrate"]
    knob = {"key": "netlist.parameters.amq", "low": 1, "high": 2}
    bench = bench_of("calibrate_modulator", calibrate={**own, "knob": [knob]})
    with pytest.raises(TestbenchError, match="amp"):
        check_studies(bench, read_deck(bench))


def test_a_study_of_gates_is_refused_to_a_readout() -> None:
    bench = make_testbench({**tables_of("readout_dispersive"), "budget": {}}, folder=EXAMPLES)
    with pytest.raises(TestbenchError, match=r"this takes a testbench with \[gate\]"):
        check_studies(bench, read_deck(bench))


@pytest.mark.ngspice
def test_the_check_looks_at_them(tmp_path: Path) -> None:
    text = (EXAMPLES / "calibrate_modulator.toml").read_text(encoding="utf-8")
    text = text.replace("../netlists", str(EXAMPLES.parent / "netlists"))
    (tmp_path / "good.toml").write_text(text, encoding="utf-8")
    findings, _ = check_testbench(tmp_path / "good.toml")
    assert {item.name: item.value for item in findings}["studies"] == ["calibrate"]
    (tmp_path / "wrong.toml").write_text(text.replace("max_runs", "most"), encoding="utf-8")
    with pytest.raises(TestbenchError, match=r"\[calibrate\]"):
        check_testbench(tmp_path / "wrong.toml")


def test_a_value_outside_of_its_limits_names_its_own_table() -> None:
    bench = bench_of("x90_spin")
    key = number_key(bench, None, "qubit.t1", "here")
    with pytest.raises(TestbenchError, match=r"table \[qubit\], 'qubit.t1' = -1.0"):
        with_number(bench, key, -1.0)
