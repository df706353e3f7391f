"""Oracle: none; run with --benchmark-only to compare the kernel with QuTiP within one run."""

from collections.abc import Callable

import pytest
from pytest_benchmark.fixture import BenchmarkFixture

from cosim.quantum.evolution import evolve, propagate_unitary
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_reference
from cosim.waveform import ComplexArray
from tests.quantum.drives import CARRIER, smooth_burst

# 59,520 intervals: 120 ns of a 6.2 GHz carrier at 80 samples per period.
DURATION = 120e-9


@pytest.mark.benchmark(group="two levels, unitary")
def test_unitary(benchmark: BenchmarkFixture) -> None:
    drive = smooth_burst(10e6, DURATION)
    u = benchmark(propagate_unitary, Qubit(CARRIER), drive, 0.0, DURATION)
    assert u.shape == (2, 2)


@pytest.mark.parametrize("levels", [2, 3, 4])
@pytest.mark.parametrize("solver", [evolve, evolve_reference], ids=["kernel", "qutip"])
def test_channel(
    benchmark: BenchmarkFixture, solver: Callable[..., ComplexArray], levels: int
) -> None:
    benchmark.group = f"{levels} levels, t1 and t2"
    qubit = Qubit(CARRIER, levels, -0.3e9, 30e-6, 20e-6)
    drive = smooth_burst(10e6, DURATION)
    channel = benchmark(solver, qubit, drive, 0.0, DURATION)
    assert channel.shape == (levels**2, levels**2)
