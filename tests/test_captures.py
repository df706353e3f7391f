"""Oracle: `capture_probe` on each plan alone, compared bit by bit."""

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from cosim.capture import Capture, Plan, capture_probe, make_plan
from cosim.captures import capture_probes
from cosim.errors import CosimError, SimulationError, UnknownNameError
from cosim.testbench import make_testbench

pytestmark = pytest.mark.ngspice

DECK = """a gated carrier, an amplifier and a supply
.param level=0.5 gain=1.2 vdd=1.1 shift=2
.include kit/cards.inc
vdd vdd 0 {vdd}
vgate gate 0 pulse(0 1 0.5n 0.1n 0.1n 2n)
vlo lo 0 sin(0 {level} 5g)
b1 mix 0 v=v(gate)*v(lo)
x1 mix out vdd amp
b9 check 0 v=ln(v(vdd)+{shift})
r9 check 0 1k
.subckt amp in out vdd
rin in mid 50
cin mid 0 0.2p
m1 drain mid 0 0 card w=2u l=1u
rd vdd drain 5k
b1 pre 0 v={gain}*v(drain)
rout pre out 50
.ends
rload out 0 50
.tran 10p 3n 0 2.5p
.end
"""
CARDS = ".model card nmos level=54 version=4.5 vth0=0.4\n"


POINTS = {"source": "vgate", "points": [["0 ns", "0 V"], ["1 ns", "1 V"], ["3 ns", "1 V"]]}


def plan(folder: Path, stimuli: Sequence[dict[str, object]] = (), **netlist: object) -> Plan:
    tables = {
        "netlist": {"file": "deck.cir", "stop": "3 ns", "max_step": "2.5 ps", **netlist},
        "drive": {"probe": "v(out)", "termination": "in deck", "carrier": "5 GHz"},
        "qubit": {"kind": "spin", "frequency": "5 GHz", "rabi_per_volt": "20 MHz/V"},
        "gate": {"target": "x"},
        "accuracy": {"floor": False},
        "stimulus": list(stimuli),
    }
    return make_plan(make_testbench(tables, folder=folder))


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "kit").mkdir()
    (tmp_path / "kit" / "cards.inc").write_text(CARDS, encoding="utf-8")
    (tmp_path / "deck.cir").write_text(DECK, encoding="utf-8")
    return tmp_path


def capture(plan: Plan) -> Capture | CosimError:
    try:
        return capture_probe(plan)
    except CosimError as error:
        return error


def assert_equal(shared: Capture | CosimError, alone: Capture | CosimError) -> None:
    assert type(shared) is type(alone)
    if isinstance(alone, CosimError):
        assert isinstance(shared, CosimError)
        assert (str(shared), shared.log) == (str(alone), alone.log)
        return
    assert isinstance(shared, Capture)
    waves = [(shared.waveform, alone.waveform)]
    assert shared.extra.keys() == alone.extra.keys()
    waves += [(shared.extra[name], wave) for name, wave in alone.extra.items()]
    for one, other in waves:
        assert np.array_equal(one.t, other.t)
        assert np.array_equal(one.v, other.v)
        assert one.unit == other.unit
    for name in ("step", "files", "notices"):
        assert getattr(shared, name) == getattr(alone, name)
    assert shared.result is not None
    assert alone.result is not None
    for name in ("deck", "warnings", "commands", "data", "remarks", "origins", "log"):
        assert getattr(shared.result, name) == getattr(alone.result, name), name


@pytest.mark.full
def test_plans_of_a_batch_give_what_each_gives_alone(folder: Path) -> None:
    plans = [
        plan(folder, parameters={"vdd": 1.1}),
        plan(folder, parameters={"vdd": 1.0, "level": 0.4}),
        plan(folder, parameters={"gain": 0.7}),
        plan(folder, instances={"x1.rd": {"value": 4000.0}}),
        plan(folder, mismatch={"x1.m1": {"threshold": 0.01, "current_factor": 1.02}}),
        plan(folder, mismatch={"x1.m1": {"threshold": -0.01, "current_factor": 0.98}}),
        plan(folder, temperature="250 K"),
        plan(folder, temperature="250 K", parameters={"vdd": 1.0}),
        plan(folder, parameters={"vdd": 1.1}, save=["i(vdd)"]),
        plan(folder, parameters={"shift": -5.0}),
        plan(folder, parameters={"vdd": 0.9}, seed=7),
        plan(folder, [POINTS], parameters={"vdd": 1.1}),
        plan(folder, [POINTS], parameters={"vdd": 1.0}),
    ]
    alone = [capture(one) for one in plans]
    assert [number for number, one in enumerate(alone) if isinstance(one, CosimError)] == [9]
    assert isinstance(alone[9], SimulationError)
    assert alone[9].log
    for shared, one in zip(capture_probes(plans), alone, strict=True):
        assert_equal(shared, one)


def test_a_plan_that_cannot_be_prepared_costs_itself_only(folder: Path) -> None:
    plans = [plan(folder, parameters={"vdd": volts}) for volts in (1.1, 1.0, 0.9)]
    request = replace(plans[1].request, saves=("v(nowhere)",))
    plans[1] = replace(plans[1], request=request)
    found = list(capture_probes(plans))
    assert isinstance(found[1], UnknownNameError)
    for number in (0, 2):
        assert_equal(found[number], capture(plans[number]))


def test_what_is_confidential_leaves_no_line(folder: Path) -> None:
    plans = [plan(folder, parameters={"vdd": v}, confidential=["kit"]) for v in (1.1, 1.0)]
    for shared, one in zip(capture_probes(plans), plans, strict=True):
        assert_equal(shared, capture(one))
        assert isinstance(shared, Capture)
        assert shared.result is not None
        assert not any("vth0" in line for line in (*shared.result.deck, *shared.result.log))
        assert all("vth0" not in file.text for file in shared.files)
    assert any("vth0" in line.text for line in plans[0].deck.lines)


@pytest.mark.full
def test_progress_names_the_plan(folder: Path) -> None:
    plans = [plan(folder, stop="100 ns", parameters={"vdd": v}) for v in (1.1, 1.0)]
    seen: list[tuple[int, float]] = []
    list(capture_probes(plans, progress=lambda place, time: seen.append((place, time))))
    assert {place for place, _ in seen} == {0, 1}
