"""A square pi/2 pulse whose window is the pulse, and what its detuning costs in closed form."""

import math
from pathlib import Path
from typing import Any

import numpy as np

from cosim.testbench import Testbench
from tests.calibration.pulses import bench

# Rabi frequency of a quarter turn in 20 ns, in Hz.
RABI = 12.5e6
THETA = math.pi / 2


def drifting(folder: Path, *sources: dict[str, Any], **study: Any) -> Testbench:
    """The pulse of tests/calibration at its best, with a table [drift]."""
    more = {name: study.pop(name) for name in ("qubit", "accuracy", "gate") if name in study}
    tables = {
        "netlist": {"parameters": {"level": 0.1, "phase": 0}},
        "gate": {"window": ["2 ns", "22 ns"]},
        "accuracy": {"floor": False},
        "drift": {"horizon": "100 s", "source": list(sources), **study},
    }
    for name, table in more.items():
        tables[name] = {**tables.get(name, {}), **table}
    return bench(folder, **tables)


def detuned(offset: np.ndarray | float) -> np.ndarray:
    """1 - F_avg of the pulse detuned by an offset in Hz, in the frame of the carrier."""
    x = np.asarray(offset, dtype=float) / RABI
    r = np.sqrt(1 + x**2)
    half = THETA / 2
    overlap = math.cos(half) * np.cos(half * r) + math.sin(half) * np.sin(half * r) / r
    found: np.ndarray = (2 / 3) * (1 - overlap**2)
    return found
