"""Oracle: a fine scan of the same readout."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from cosim.calibration.trim import calibrate
from cosim.readout import run_readout, simulate_readout
from tests.readout.benches import bench

pytestmark = [pytest.mark.ngspice, pytest.mark.full]


def test_a_converters_range_is_set_without_the_circuit(tmp_path: Path) -> None:
    # Below 0.27 mV the records are cut off, above it rounding costs more and more.
    knob = {"key": "readout.adc_full_scale", "low": "0.3 mV", "high": "12 mV"}
    made = bench(
        tmp_path,
        readout={
            "adc_bits": 3,
            "adc_full_scale": "8 mV",
            "adc_rate": "1 GHz",
            "shots": 1000,
            "records": 100,
        },
        calibrate={"metric": "assignment_error", "max_runs": 14, "knob": [knob]},
    )
    result = calibrate(made)
    assert result.netlist_runs == 1  # floor = false
    assert result.runs <= 13
    assert result.complete
    assert result.after < 0.4 * result.before
    runs = simulate_readout(made)
    scan = [
        run_readout(
            replace(made, readout=replace(made.readout, adc_full_scale=float(scale))), runs=runs
        ).assignment_error
        for scale in np.geomspace(0.3e-3, 12e-3, 16)
    ]
    # The search ends where a run promises less than a thousandth.
    assert result.after <= min(scan) * 1.003
    assert math.isnan(result.turn_after[0])
    assert result.limits.rest == pytest.approx(result.after, rel=0.01)
