"""Oracle: the steady reflection of a resonator in closed form, and the normal distribution."""

import math
from pathlib import Path

import numpy as np
import pytest
from scipy.special import ndtr

from cosim.readout import run_readout
from tests.readout.benches import bench

TURN = 2.0 * math.pi


@pytest.mark.ngspice
def test_a_leaked_state_is_decided_by_where_its_answer_lies(tmp_path: Path) -> None:
    """The window begins when the field stands: exp(-kappa t/2) is 2e-7 after 1 us."""
    steady = {
        "netlist": {"stop": "1.45 us"},
        "resonator": {"start": "0 ns", "length": "1.4 us", "chi_2": "3.5 MHz"},
        "readout": {"window": ["1 us", "1.4 us"], "records": 100, "shots": 1000},
    }
    result = run_readout(bench(tmp_path, quanta=40.0, **steady))
    # kappa/2pi = 5 MHz, chi/2pi = 1 MHz, driven midway: 1 - kappa/(kappa/2 + i shift), which the
    # netlist's voltages are the conjugates of.
    pulls = TURN * 1e6 * np.array([-1.0, 1.0, 3.5])
    answers = np.conj(1.0 - TURN * 5e6 / (TURN * 2.5e6 + 1j * pulls))
    along = (answers - answers[0]) / (answers[1] - answers[0])
    x = float(along[2].real)  # 0 for |0>, 1 for |1>, threshold half-way
    wanted = ndtr((x - 0.5) * result.snr)
    assert 0.55 < wanted < 0.99  # neither sure nor a toss of a coin
    # Half a sample of 1 ns of 400 at either end, and what is left of the ring-up.
    assert result.leaked[1] == pytest.approx(wanted, rel=2e-3)
    assert result.leaked.sum() == pytest.approx(1.0, rel=1e-12)
    points = result.traces
    means = [p.mean() for p in (points.points_ground, points.points_excited, points.points_second)]
    drawn = (means[2] - means[0]) / (means[1] - means[0])
    # 2000 points of each state, of a noise of 1/snr: 4 standard errors of their means.
    assert drawn == pytest.approx(along[2], abs=4.0 * 2.0 / (result.snr * math.sqrt(2000)))


@pytest.mark.ngspice
def test_without_its_shift_nothing_is_said_of_it(tmp_path: Path) -> None:
    quick = {"readout": {"records": 100, "shots": 1000}}
    result = run_readout(bench(tmp_path, **quick))
    assert result.leaked.size == 0
    assert result.traces.points_second.size == 0
