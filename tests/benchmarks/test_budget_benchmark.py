"""What an error budget costs beside one run of the netlist that it takes apart."""

import time
from dataclasses import replace
from pathlib import Path

import pytest

import cosim
from cosim.budget.study import budget_of

EXAMPLES = Path(__file__).parents[2] / "examples"


@pytest.mark.ngspice
@pytest.mark.parametrize("name", ["x90_spin", "x90_bsim4", "x180_transmon", "x180_noise"])
def test_a_budget_over_one_run_of_ngspice(name: str) -> None:
    bench = cosim.load_testbench(EXAMPLES / f"{name}.toml")
    bench = replace(bench, accuracy=replace(bench.accuracy, floor=False))
    result = cosim.run(bench)
    assert isinstance(result, cosim.GateResult)
    # The first budget compiles or loads the kernel, once per process.
    budget_of(result, bench)
    # By turns, so that a busy machine slows both.
    circuits, times = [], []
    for _ in range(5):
        circuits.append(cosim.run(bench).run.wall_times["ngspice"])
        begun = time.perf_counter()
        made = budget_of(result, bench)
        times.append(time.perf_counter() - begun)
    cost, circuit = sorted(times)[2], sorted(circuits)[2]
    print(
        f"\n{name}: budget of {len(made.items)} items {1e3 * cost:.0f} ms, ngspice "
        f"{circuit:.2f} s, ratio {100 * cost / circuit:.1f} %; rotating wave leaves out "
        f"{made.rotating_wave_difference:.1e} of {made.total_infidelity:.1e}, interaction "
        f"{made.interaction:.1e}"
    )
