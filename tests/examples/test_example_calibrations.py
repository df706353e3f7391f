"""Oracles: the committed table expected.toml, and a scan of the example's own circuit.

The table is made by `python -m tests.examples.committed`.
"""

import itertools
from dataclasses import replace

import pytest

import cosim
from cosim.calibration.trim import trimmed
from cosim.capture import make_plan
from cosim.captures import capture_probes
from cosim.decks import read_deck
from cosim.gate import Shots, run_gate
from cosim.testbench import gate_bench
from tests.examples.committed import (
    CALIBRATIONS,
    EXAMPLES,
    TOLERANCE,
    calibration_example,
    calibration_figures,
    expected,
)

TOLERATED = TOLERANCE["as_simulated.average_gate_fidelity"]
# The phase, in degrees, by which the scan leaves what was found: a third of what costs 1e-5.
ASIDE = 0.2


@pytest.mark.ngspice
@pytest.mark.full
@pytest.mark.parametrize("name", CALIBRATIONS)
def test_calibrations_give_the_committed_trim_and_no_scan_finds_better(name: str) -> None:
    result = calibration_example(name)
    assert calibration_figures(result) == pytest.approx(expected(name), abs=TOLERATED)
    assert result.complete
    assert result.netlist_runs <= 12
    assert result.warnings == ()
    bench = gate_bench(trimmed(cosim.load_testbench(EXAMPLES / f"{name}.toml"), result))
    bench = replace(bench, accuracy=replace(bench.accuracy, floor=False))
    deck = read_deck(bench)
    code, phase = (knob.found for knob in result.knobs)
    benches = []
    for step, turn in itertools.product((-1, 0, 1), (-ASIDE, 0.0, ASIDE)):
        values = {"amp": code + step, "lo_phase": phase + turn}
        netlist = replace(bench.netlist, parameters={**bench.netlist.parameters, **values})
        benches.append(replace(bench, netlist=netlist))
    plans = [make_plan(item, deck) for item in benches]
    scan = [
        run_gate(item, shots=Shots(plan, shot, None)).as_simulated.infidelity
        for item, plan, shot in zip(benches, plans, capture_probes(plans), strict=True)
    ]
    assert scan[4] == pytest.approx(result.after, abs=1e-12)  # the same deck again
    assert result.after <= min(scan) + result.numerical_floor
    # The next codes cost what the result says of the code's parabola, which bends by some percent.
    slope, stiffness = result.knobs[0].slope, result.knobs[0].stiffness
    for found, step in ((scan[1], -1.0), (scan[7], 1.0)):
        wanted = slope * step + stiffness
        assert found - result.after == pytest.approx(wanted, rel=0.05)
