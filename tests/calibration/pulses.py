"""A pulse in closed form that is run like a testbench, and a deck that plays the same."""

import math
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from scipy.linalg import expm

from cosim.calibration.points import Point
from cosim.calibration.table import CalibrateTable, Knob
from cosim.errors import SimulationError
from cosim.keys import NumberKey
from cosim.quantum.channel import PAULI, unitary_superoperator
from cosim.quantum.coherent_error import error_vector
from cosim.quantum.fidelity import average_gate_fidelity, target_unitary
from cosim.testbench import Testbench, make_testbench

X90 = target_unitary((1.0, 0.0, 0.0), math.pi / 2)
DECK = """a burst of a carrier
.param level=0.09 phase=5 t_end=22n idle=1 fail=1000
.tran 5p 24n
.param phi={phase*0.017453292519943295}
b1 out 0 v={level}*cos(6.283185307179586*5g*time+{phi})*(time>2n && time<{t_end} ? 1 : 0)
r1 out 0 50
b2 mark 0 v=ln({fail}-time*1g)
r2 mark 0 1k
.end
"""
LEVEL = {"key": "netlist.parameters.level", "low": 0.05, "high": 0.2}
PHASE = {"key": "netlist.parameters.phase", "low": -30, "high": 30}


def bench(folder: Path, *knobs: dict[str, Any], study: Any = None, **more: Any) -> Testbench:
    """A burst of 20 ns at 5 GHz; k A T = 1/4 at a level of 0.1 V, and a phase of 0 is about x."""
    (folder / "deck.cir").write_text(DECK, encoding="utf-8")
    base: dict[str, dict[str, Any]] = {
        "netlist": {"file": "deck.cir", "steps_per_period": 64},
        "drive": {"probe": "v(out)", "termination": "in deck", "carrier": "5 GHz"},
        "qubit": {"kind": "spin", "frequency": "5 GHz", "rabi_per_volt": "125 MHz/V"},
        "gate": {"target": "x90"},
        "accuracy": {"floor": True},
        "calibrate": {"metric": "as_simulated", "knob": list(knobs), **(study or {})},
    }
    for name, table in more.items():
        base[name] = {**base.get(name, {}), **table}
    made = make_testbench(base, folder=folder)
    assert isinstance(made, Testbench)
    return made


def knob(
    low: float,
    high: float,
    start: float,
    step: float = 0.0,
    *,
    name: str = "k",
    whole: bool = False,
) -> Knob:
    """A knob of no testbench."""
    key = NumberKey(f"qubit.{name}", "qubit", name)
    return Knob(key, low, high, start, step, whole, "1", True)


def square(amplitude: float, phase: float = 0.0, detuning: float = 0.0) -> np.ndarray:
    """A square pulse: an amplitude of 1 is a quarter turn; phase and detuning times T in rad."""
    drive = math.cos(phase) * PAULI[1] - math.sin(phase) * PAULI[2]
    return np.asarray(expm(-0.5j * (0.5 * math.pi * amplitude * drive + detuning * PAULI[3])))


class Analytic:
    """Runs a unitary of the knobs' values in place of a testbench."""

    def __init__(
        self, knobs: Sequence[Knob], unitary: Callable[..., np.ndarray], fails: float = math.inf
    ) -> None:
        self.knobs, self.unitary, self.fails = knobs, unitary, fails
        self.history: list[Point] = []

    def values(self, place: Sequence[float]) -> list[float]:
        return [knob.at(part) for knob, part in zip(self.knobs, place, strict=True)]

    def cost(self, *values: float) -> float:
        return 1.0 - average_gate_fidelity(unitary_superoperator(self.unitary(*values)), X90)

    def run(self, places: Sequence[tuple[float, ...]], purpose: str) -> list[Point]:
        points = []
        for place in places:
            values = self.values(place)
            vector = error_vector(unitary_superoperator(self.unitary(*values)), X90)
            point = Point(place, purpose, self.cost(*values), vector)
            if values[0] > self.fails:
                if purpose in ("start", "difference"):
                    raise SimulationError("no convergence")
                point = Point(place, purpose, math.inf, np.zeros(0), fault="no convergence")
            points.append(point)
        self.history += points
        return points

    def finish(self, point: Point) -> Point:
        return point


def table(max_runs: int = 12) -> CalibrateTable:
    return CalibrateTable("as_simulated", max_runs=max_runs)
