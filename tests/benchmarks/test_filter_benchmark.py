"""Oracle: none; run with --benchmark-only. Filter functions, and sample paths beside evolutions."""

import numpy as np
import pytest
from pytest_benchmark.fixture import BenchmarkFixture

from cosim.dsp.noise.density import PowerLaw, SpectralDensity
from cosim.dsp.noise.paths import plan_paths, sample_paths
from cosim.quantum.filters import PathSegment, phase_filter_functions
from cosim.quantum.hamiltonian import rotating_wave_hamiltonian
from cosim.quantum.qubit import Qubit

DT = 0.25e-9
FREQUENCIES = np.geomspace(1e3, 2e9, 1000)


def control(levels: int, samples: int) -> tuple[PathSegment, np.ndarray, np.ndarray]:
    """Give the path of a raised-cosine pi pulse, its drive and a^dag a."""
    qubit = Qubit(5e9, levels, -0.3e9)
    t = DT * np.arange(samples)
    envelope = 2 * np.pi / t[-1] * np.sin(np.pi * t / t[-1]) ** 2
    h = rotating_wave_hamiltonian(qubit, envelope)
    still = rotating_wave_hamiltonian(qubit, np.zeros(samples))
    energies, basis = np.linalg.eigh((h[1:] + h[:-1]) / 2)
    steps = (basis * np.exp(-1j * energies * DT)[:, None, :]) @ np.conj(basis.transpose(0, 2, 1))
    u = [np.eye(levels, dtype=np.complex128)]
    for step in steps:
        u.append(step @ u[-1])
    return PathSegment(0.0, DT, np.array(u)), h - still, qubit.number()


@pytest.mark.parametrize("samples", [480, 2000])
@pytest.mark.parametrize("levels", [2, 3, 6])
def test_both_phase_filters(benchmark: BenchmarkFixture, levels: int, samples: int) -> None:
    """Two filter functions of 1000 frequencies each: 0.1 s is the goal for one."""
    benchmark.group = f"filter functions, {samples} samples"
    path, drive, number = control(levels, samples)
    found = benchmark(phase_filter_functions, [path], [drive], number, FREQUENCIES)
    assert found.qubit_frame.total.shape == (1000,)


@pytest.mark.benchmark(group="1000 paths of 2000 samples")
@pytest.mark.parametrize("high", [np.inf, 0.37e9], ids=["smooth", "sharp cut"])
def test_paths(benchmark: BenchmarkFixture, high: float) -> None:
    terms = (PowerLaw(1.0, 1.0, 1.0, 1e-2), PowerLaw(1e-6, high=high))
    plan = plan_paths(SpectralDensity("rad/s", terms), 2000, DT)
    paths = benchmark(sample_paths, plan, 1, 0, 1000)
    assert paths.shape == (1000, 2000)
