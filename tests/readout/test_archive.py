"""Oracle: the result that was written; what the archive gives back is equal to the last bit."""

import math
from dataclasses import fields, is_dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import cosim
from cosim.readout import run_readout
from tests.readout.benches import bench
from tests.readout.test_sensor import run

pytestmark = pytest.mark.ngspice


def leaves(value: Any, name: str = "") -> dict[str, Any]:
    """All that a result holds, by its path."""
    if is_dataclass(value):
        parts = [(item.name, getattr(value, item.name)) for item in fields(value)]
    elif isinstance(value, dict):
        parts = list(value.items())
    elif isinstance(value, (tuple, list)):
        parts = [(str(place), item) for place, item in enumerate(value)]
    else:
        return {name: value}
    found = {name: type(value)}
    for key, part in parts:
        found |= leaves(part, f"{name}/{key}")
    return found


def check_round_trip(result: cosim.ReadoutResult, path: Path) -> None:
    cosim.save(result, path)
    again = cosim.load(path)
    assert type(again) is cosim.ReadoutResult
    before, after = leaves(result), leaves(again)
    assert before.keys() == after.keys()
    for name, value in before.items():
        found = after[name]
        assert type(found) is type(value), name
        if isinstance(value, np.ndarray):
            assert found.dtype == value.dtype, name
            assert np.array_equal(found, value, equal_nan=True), name
        elif isinstance(value, float) and math.isnan(value):
            assert math.isnan(found), name
        else:
            assert found == value, name


@pytest.mark.full
def test_a_sensor_without_photons_or_quanta_comes_back(tmp_path: Path) -> None:
    result = run(tmp_path, 3e-6, seeds=2, tunnel_time="100 ns")
    # What such a result is made of, so that the comparison is not one of empty fields.
    assert math.isnan(result.added_noise_quanta)
    assert math.isnan(result.residual_photons)
    assert math.isnan(result.repeat_agreement)
    assert math.isnan(result.numerical_floor)
    assert result.traces.photons_ground.size == 0
    assert result.errors.decay > 0.0
    check_round_trip(result, tmp_path / "run.h5")


def test_a_resonator_with_decays_comes_back(tmp_path: Path) -> None:
    readout = {"t1": "20 us", "decay_times": 2, "shots": 1000, "records": 100}
    result = run_readout(bench(tmp_path, readout=readout))
    assert result.errors.decay > 0.0
    assert result.split.projection.axis != 0.0
    assert result.traces.photons_excited.size > 0
    check_round_trip(result, tmp_path / "run.h5")
