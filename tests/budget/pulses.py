"""Pulses made of an ideal one and known imperfections, and gates that play them."""

import math
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from scipy.optimize import minimize

import cosim
from cosim.budget.result import BudgetItem, BudgetResult
from cosim.budget.study import budget_of
from cosim.capture import Capture
from cosim.gate import Shots, run_gate
from cosim.result import GateResult
from cosim.testbench import Testbench, gate_bench
from cosim.waveform import ComplexArray, FloatArray, Waveform

CARRIER = 5e9
STOP = 140e-9
# For each period of the carrier: the demodulator then finds an amplitude to 1e-6.
SAMPLES = 40
# And to 1e-7, for closed forms.
FINE = 80
START, END, EDGE = 20e-9, 120e-9, 4e-9
DURATION = END - START
# An x turn of half a circle: rabi_per_volt * volts * seconds = 1/2.
LEVEL = 0.1
RABI_PER_VOLT = 0.5 / (LEVEL * DURATION)

Envelope = Callable[[FloatArray], ComplexArray | FloatArray]


def step(t: FloatArray, middle: float, length: float) -> FloatArray:
    """Rise by a raised cosine, or at once."""
    if length == 0.0:
        return np.heaviside(t - middle, 0.5)
    return 0.5 + 0.5 * np.sin(math.pi * np.clip((t - middle) / length, -0.5, 0.5))


def flat_top(
    t: FloatArray, *, rise: float = EDGE, fall: float = EDGE, longer: float = 0.0
) -> FloatArray:
    """A flat pulse of area DURATION + longer, about the middle of the record."""
    half = 0.5 * longer
    return step(t, START - half, rise) - step(t, END + half, fall)


def along(t: FloatArray) -> FloatArray:
    """Give the place in the pulse, from -1/2 to 1/2 between its half heights."""
    return (t - 0.5 * (START + END)) / DURATION


def bench_of(
    target: str = "x",
    *,
    budget: Mapping[str, Any] | None = None,
    qubit: Mapping[str, Any] | None = None,
    gate: Mapping[str, Any] | None = None,
    further: Mapping[str, Any] | None = None,
) -> Testbench:
    tables: dict[str, Any] = {
        "title": "made pulse",
        "waveform": {"file": "made.csv"},
        "drive": {"probe": "v", "carrier": f"{CARRIER} Hz"},
        "qubit": {
            "kind": "spin",
            "frequency": f"{CARRIER} Hz",
            "rabi_per_volt": f"{RABI_PER_VOLT} Hz/V",
        }
        | dict(qubit or {}),
        "gate": {"target": target} | dict(gate or {}),
        "accuracy": {"floor": False},
        "budget": dict(budget or {}),
    }
    return gate_bench(cosim.make_testbench(tables | dict(further or {})))


def played(
    envelope: Envelope,
    bench: Testbench,
    *,
    harmonics: Mapping[int, float] | None = None,
    samples: int = SAMPLES,
) -> GateResult:
    """Run a gate on v = Re[envelope exp(2 pi i f_c t)], with harmonics of its carrier."""
    t = np.arange(round(STOP * CARRIER * samples) + 1) / (CARRIER * samples)
    iq = np.asarray(envelope(t), dtype=np.complex128)
    v = (iq * np.exp(2j * math.pi * CARRIER * t)).real
    for order, level in (harmonics or {}).items():
        v = v + level * (iq * np.exp(2j * math.pi * order * CARRIER * t)).real
    shot = Capture(Waveform(t, v), {}, t[1] - t[0], (), (), None)
    return run_gate(bench, shots=Shots(None, shot, None))  # type: ignore[arg-type]


def budget(
    envelope: Envelope,
    bench: Testbench | None = None,
    *,
    fidelity: str = "as_simulated",
    samples: int = SAMPLES,
) -> BudgetResult:
    bench = bench_of() if bench is None else bench
    return budget_of(played(envelope, bench, samples=samples), bench, fidelity=fidelity)


def item(result: BudgetResult, name: str) -> BudgetItem:
    (found,) = (item for item in result.items if item.name == name)
    return found


def exact_unitary(envelope: Envelope, *, detuning: float = 0.0) -> ComplexArray:
    """Evolve a qubit of two levels under an analytic envelope in the rotating wave.

    A product of exponentials in closed form over slices of 10 ps, in which nothing here changes by
    more than 1e-4; the qubit lies `detuning` above the carrier, in Hz.
    """
    count = round(STOP / 10e-12)
    t = (np.arange(count) + 0.5) * STOP / count
    rate = 2.0 * math.pi * RABI_PER_VOLT * np.asarray(envelope(t), dtype=np.complex128)
    rate = rate * np.exp(-2j * math.pi * detuning * t)
    # H = (I sigma_x - Q sigma_y)/2.
    size = np.abs(rate)
    half = 0.5 * size * STOP / count
    axis = np.divide(rate, size, out=np.zeros_like(rate), where=size > 0.0)
    made = np.eye(2, dtype=np.complex128)
    for angle, n in zip(half, axis, strict=True):
        c, s = math.cos(angle), math.sin(angle)
        made = np.array([[c, -1j * s * n], [-1j * s * n.conjugate(), c]]) @ made
    return made


def exact_cost(
    envelope: Envelope, target: ComplexArray, *, free: bool = False, detuning: float = 0.0
) -> float:
    """Cost an analytic envelope, with the best phase references by search where they are free."""
    made = exact_unitary(envelope, detuning=detuning)

    def loss(angles: FloatArray) -> float:
        before, after = (np.diag([1.0, np.exp(-1j * angle)]) for angle in angles)
        overlap = abs(np.trace(target.conj().T @ after @ made @ before)) ** 2
        return 1.0 - (overlap + 2.0) / 6.0

    if not free:
        return loss(np.zeros(2))
    starts = [(a, b) for a in (-1.0, 0.0, 1.0) for b in (-1.0, 0.0, 1.0)]
    options = {"xatol": 1e-9, "fatol": 1e-15}
    found = [minimize(loss, start, method="Nelder-Mead", options=options).fun for start in starts]
    return float(min(found))
