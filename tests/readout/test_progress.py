"""Oracle: the number of runs that a readout asks for, times their length."""

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from cosim.readout import run_readout
from tests.readout.benches import bench

pytestmark = pytest.mark.ngspice
STOP = 470e-9
NOISE = {"acts_on": "probe", "from": "netlist", "seeds": 2, "method": "injection"}


@pytest.mark.parametrize(
    ("more", "runs"),
    [
        # |0>, |1>, nothing, and a weak signal for both; two decays; both states at half the step.
        ({"accuracy": {"floor": True}, "readout": {"t1": "10 us", "decay_times": 2}}, 9),
        # One more for |2>; for both seeds the netlist's own noise and what arrives, once all of it.
        ({"resonator": {"chi_2": "3 MHz"}, "noise": [NOISE]}, 11),
    ],
    ids=["decays", "noise"],
)
def test_the_times_of_all_runs_add_up(tmp_path: Path, more: dict[str, Any], runs: int) -> None:
    more = {**more, "readout": {**more.get("readout", {}), "records": 100, "shots": 1000}}
    times: list[float] = []
    run_readout(bench(tmp_path, **more), progress=times.append)
    assert (np.diff(times) >= 0.0).all()
    assert times[-1] == pytest.approx(runs * STOP, rel=1e-9, abs=0.0)
