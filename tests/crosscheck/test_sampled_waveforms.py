"""Oracles: DOP853 and QuTiP on the modulator's own waveform, and on an analytic one.

Between them lies all that the drive path adds to the kernel: the simulator's grid and the
interpolant.
"""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import cosim
from cosim.capture import capture_probe, make_plan
from cosim.coupling import DriveLine, drive_rate
from cosim.dsp.resampling import interpolant
from cosim.quantum.channel import pauli_transfer_matrix, unitary_superoperator
from cosim.quantum.evolution import DriveSpline, evolve
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_reference
from cosim.waveform import FloatArray, Waveform
from tests.crosscheck.test_evolution_scipy import integrate

EXAMPLES = Path(__file__).parents[2] / "examples"
CARRIER = 6.2e9


@pytest.mark.ngspice
@pytest.mark.full
def test_the_modulators_own_waveform() -> None:
    bench = cosim.load_testbench(EXAMPLES / "x90_spin.toml")
    assert bench.netlist is not None
    # A shorter pulse at the same step, and a drive as much stronger that it still turns far.
    parameters = {**bench.netlist.parameters, "t_start": 4e-9, "t_stop": 12e-9}
    short = replace(bench.netlist, parameters=parameters, stop=26e-9)
    gate = replace(bench.gate, window=(2e-9, 25e-9))
    waveform = capture_probe(make_plan(replace(bench, netlist=short, gate=gate))).waveform
    curve = interpolant(drive_rate(waveform, DriveLine(85e6, 6.0)))
    drive = DriveSpline(curve.x, curve.c)
    qubit = Qubit(CARRIER, t1=10e-3, t2=40e-6)
    found = pauli_transfer_matrix(evolve(qubit, drive, 2e-9, 25e-9))
    # It turns by more than 30 degrees, about an axis in the plane.
    assert found[3, 3] < 0.85
    # The promise for square-edged waveforms is 1e-6; both integrators and the kernel are far
    # below that, and what is found here is 1e-8 at most.
    for wanted in (
        integrate(qubit, drive, 2e-9, 25e-9),
        evolve_reference(qubit, drive, 2e-9, 25e-9),
    ):
        assert np.abs(found - pauli_transfer_matrix(wanted)).max() < 1e-8


@pytest.mark.full
@pytest.mark.parametrize("step", [2e-12, 1 / (80 * CARRIER)])
def test_samples_of_an_analytic_waveform(step: float) -> None:
    """A raised-cosine pulse of 40 ns, sampled as a simulator would, against itself.

    The samples' cubic spline errs by (omega h)^4/720 = 5e-8 on the carrier on the mean; the
    promise for 2 ps is 1e-6.
    """
    duration, peak, omega = 40e-9, 2 * np.pi * 25e6, 2 * np.pi * CARRIER

    def rate(t: FloatArray) -> FloatArray:
        return np.asarray(
            peak * np.sin(np.pi * t / duration) ** 2 * np.cos(omega * t + 0.3), dtype=np.float64
        )

    def derivative(t: float, y: FloatArray) -> FloatArray:
        turn = complex(rate(np.float64(t)) * np.exp(-1j * omega * t))
        return np.array([-1j * turn * y[1], -1j * np.conj(turn) * y[0]])

    times = np.arange(0.0, duration + step, step)
    curve = interpolant(Waveform(times, rate(times), "rad/s"))
    found = evolve(Qubit(CARRIER), DriveSpline(curve.x, curve.c), 0.0, duration)
    columns = []
    for start in (np.array([1, 0j]), np.array([0j, 1])):
        # A tenth of the counter-rotating part's period of 81 ps.
        limits = {"rtol": 1e-11, "atol": 1e-13, "max_step": 8e-12}
        solution = solve_ivp(derivative, (0, duration), start, method="DOP853", **limits)
        columns.append(solution.y[:, -1])
    wanted = unitary_superoperator(np.array(columns).T)
    difference = pauli_transfer_matrix(found) - pauli_transfer_matrix(wanted)
    assert np.abs(difference).max() < 1e-6
