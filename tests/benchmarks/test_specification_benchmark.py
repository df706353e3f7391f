"""Oracle: none; what a specification costs, in evolutions of one pulse by QuTiP.

Run with -s. The first specification of each kind compiles and reads the kernels, and is not timed.
"""

import math
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

import cosim
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_rotating_wave
from cosim.specification.gate_specification import specify_gate
from cosim.specification.readout_specification import specify_readout

EXAMPLES = Path(__file__).parents[2] / "examples"


def processor_time(work: Callable[[], object]) -> float:
    """Least processor time of three, in s: other jobs of the machine come and go."""
    times = []
    for _ in range(3):
        begin = time.process_time()
        work()
        times.append(time.process_time() - begin)
    return min(times)


@pytest.mark.parametrize("name", ["specify_x180", "specify_readout"])
def test_a_specification(name: str) -> None:
    bench = cosim.load_testbench(EXAMPLES / f"{name}.toml")
    solve = specify_gate if name == "specify_x180" else specify_readout
    solve(bench)
    seconds = processor_time(lambda: solve(bench))
    qubit = Qubit(5e9, 4, -300e6, 150e-6, 120e-6)
    t = np.linspace(0.0, 40e-9, 401)
    rate = math.pi / 20e-9 * np.sin(math.pi * t / 40e-9) ** 2 + 0j
    one = processor_time(lambda: evolve_rotating_wave(qubit, rate, t))
    print(f"\n{name}: {seconds:.2f} s of processor time, {seconds / one:.0f} pulses by QuTiP")
    assert seconds > 0.0
