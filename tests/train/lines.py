"""Testbenches of lines with one pole, and what superposition makes of a train on them."""

from pathlib import Path
from typing import Any

import numpy as np
from scipy.integrate import quad

from cosim.testbench import Testbench, gate_bench, make_testbench
from cosim.waveform import FloatArray

LOW_PASS = """A line with one pole
.param tau=10n
vin in 0 0
r1 in out 1k
c1 out 0 {tau/1k}
.end
"""
HIGH_PASS = """A coupling capacitor
.param tau=500n
vin in 0 0
c1 in out {tau/1k}
r1 out 0 1k
.end
"""
# A soft limiter behind the source, for what no linear filter undoes.
BENT = """A source that bends, and a line with one pole
.param tau=2n
vin in 0 0
b1 bent 0 v={v(in)-0.3*v(in)**3}
r1 bent out 1k
c1 out 0 {tau/1k}
.end
"""
MIXED = """A line with one pole, and an ideal mixer behind it
.param tau=4n f_lo=1g
vin in 0 0
r1 in bb 1k
c1 bb 0 {tau/1k}
b1 out 0 v={v(bb)*cos(6.283185307179586*f_lo*time)}
.end
"""

# One pulse: edges of 2 ns around a plateau of 8 ns, 0.5 V.
POINTS = [["2 ns", "0 V"], ["4 ns", "0.5 V"], ["12 ns", "0.5 V"], ["14 ns", "0 V"]]
T = np.array([2.0, 4.0, 12.0, 14.0]) * 1e-9
V = np.array([0.0, 0.5, 0.5, 0.0])
AREA = 5e-9


def bench(
    folder: Path, deck: str, train: dict[str, Any], **tables: dict[str, Any] | list[Any]
) -> Testbench:
    """Make a testbench of a line that shifts the qubit."""
    (folder / "line.cir").write_text(deck, encoding="utf-8")
    given: dict[str, Any] = {
        "title": "line",
        "netlist": {"file": "line.cir", "max_step": "50 ps"},
        "stimulus": [{"source": "vin", "points": POINTS}],
        "drive": {"i": "v(out)", "termination": "in deck", "carrier": "5 GHz"},
        "qubit": {"kind": "spin", "frequency": "5 GHz", "rabi_per_volt": "1 MHz/V"},
        "gate": {"target": "z90", "calibrate": []},
        "train": train,
    }
    return gate_bench(make_testbench({**given, **tables}, folder=folder))


def left_by_a_pulse(tau: float, spacing: float) -> float:
    """Voltage behind one pole at the end of the slot of one pulse."""
    inside, _ = quad(
        lambda t: np.interp(t, T, V) * np.exp((t - spacing) / tau) / tau,
        T[0],
        T[-1],
        points=T[1:-1].tolist(),
        epsabs=1e-14,
    )
    return float(inside)


def slot_areas(factors: tuple[float, ...], tau: float, spacing: float) -> FloatArray:
    """Integral of the voltage behind one pole, tau y' + y = x, over each slot, by superposition.

    It is the area of what is played less tau times the change of y over the slot.
    """
    one, keep = left_by_a_pulse(tau, spacing), np.exp(-spacing / tau)
    areas, voltage = [], 0.0
    for factor in factors:
        after = keep * voltage + factor * one
        areas.append(factor * AREA - tau * (after - voltage))
        voltage = after
    return np.array(areas)
