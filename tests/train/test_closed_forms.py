"""Oracle: superposition of exponentials on lines with one pole, in closed form.

Intersymbol interference of a single pole: each pulse leaves a voltage that decays by
exp(-spacing/tau) from slot to slot (elementary).
"""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from cosim.quantum.fidelity import channel_distance
from cosim.qubit_drive import couple
from cosim.train.playing import make_train, play
from cosim.train.slots import evolve_slots
from cosim.train.study import run_train
from tests.train.lines import HIGH_PASS, LOW_PASS, MIXED, bench, slot_areas
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "end to end through ngspice"
SOURCE = "superposition of exponentials behind one pole, elementary"

SPACING = 20e-9
# 50 MHz/V over 5 nV s: a quarter turn, 2 pi 50e6 5e-9 = pi/2, were the line without memory.
PER_VOLT = 2.0 * np.pi * 50e6
PATTERN = "0110100111000101"
FACTORS = tuple(map(float, PATTERN))


def shifting(**more: object) -> dict[str, object]:
    return {"spacing": "20 ns", "pattern": PATTERN, "shift_per_volt": "-50 MHz/V", **more}


def errors(areas: np.ndarray, factors: tuple[float, ...] = FACTORS) -> np.ndarray:
    """Angle by which each slot turns too far about z, in rad."""
    return PER_VOLT * areas - np.pi / 2.0 * np.array(factors)


def test_slots_behind_one_pole(tmp_path: Path, validate: Validate) -> None:
    tau = 10e-9
    result = run_train(bench(tmp_path, LOW_PASS, shifting()))
    wanted = errors(slot_areas(FACTORS, tau, SPACING))
    turns = result.before.turn[:, 2]
    # The trapezoidal rule at tau/200, (h/tau)^2/12 = 2e-6 of what is left.
    assert turns == pytest.approx(wanted, abs=2e-5)
    assert result.before.turn[:, :2] == pytest.approx(0.0, abs=1e-9)
    last = int(np.flatnonzero(FACTORS)[-1])
    found = float(turns[last])
    validate(
        "angle that a pole takes from a pulse in a train",
        SOURCE,
        wanted[last],
        found,
        "rad",
        rel=1e-4,
    )
    # An infidelity of a turn about z is (2/3) sin^2 of half of it.
    infidelity = 2.0 / 3.0 * np.sin(0.5 * wanted) ** 2
    assert result.before.as_simulated == pytest.approx(infidelity, abs=1e-6)
    assert result.before.worst_slot == int(np.argmax(infidelity)) + 1
    whole = 2.0 / 3.0 * np.sin(0.5 * wanted.sum()) ** 2
    assert result.before.sequence == pytest.approx(whole, abs=1e-5)
    alike = errors(slot_areas((1.0,), tau, SPACING), (1.0,))[0] * sum(FACTORS)
    assert result.before.memoryless == pytest.approx(2.0 / 3.0 * np.sin(0.5 * alike) ** 2, abs=1e-5)
    assert result.before.product == pytest.approx(1.0 - np.prod(1.0 - infidelity), abs=1e-5)


def test_memory_behind_one_pole(tmp_path: Path, validate: Validate) -> None:
    """Pairs of slots that differ in one earlier pulse, by superposition."""
    tau = 10e-9
    order = run_train(
        bench(tmp_path, LOW_PASS, {"spacing": "20 ns", "order": 4, "shift_per_volt": "-50 MHz/V"})
    )
    factors = tuple(order.factors.tolist())
    wanted = errors(slot_areas(factors, tau, SPACING), factors)
    vectors = np.sqrt(2.0 / 3.0) * np.sin(0.5 * wanted)
    for lag in range(1, 5):
        padded = [(0.0,) * 40 + factors[:at] for at in range(len(factors))]
        pairs = [
            (vectors[one] - vectors[two]) ** 2
            for one in range(len(factors))
            for two in range(one)
            if factors[one] == factors[two]
            and (lag == 1 or padded[one][1 - lag :] == padded[two][1 - lag :])
            and padded[one][-40:] != padded[two][-40:]
        ]
        assert order.before.lag_costs[lag - 1] == pytest.approx(max(pairs), rel=2e-3, abs=1e-9)
    assert order.before.settling is not None
    validate(
        "time constant of what pulses leave behind one pole",
        SOURCE,
        tau,
        float(order.before.settling.time_constants[0]),
        "s",
        rel=1e-3,  # The trapezoidal rule and the search are far better.
    )
    tail = order.before.tail
    assert tail is not None
    assert tail.settling is not None
    validate(
        "time constant behind a pulse, one pole",
        SOURCE,
        tau,
        tail.settling.time_constants[0],
        "s",
        rel=1e-3,
    )


def test_a_fast_line_remembers_nothing(tmp_path: Path) -> None:
    """exp(-6 ns/50 ps) of a pulse, 1e-52, is left at the end of its slot."""
    quick = bench(
        tmp_path,
        LOW_PASS,
        shifting(),
        netlist={"file": "line.cir", "max_step": "50 ps", "parameters": {"tau": "50 ps"}},
    )
    result = run_train(quick)
    assert result.before.memory_depth == 0
    assert result.before.spread < 1e-9
    # Time points come at the same places in every slot, so that even the simulator's errors agree.
    assert np.nanmax(result.before.lag_costs) < 1e-10
    assert result.before.sequence == pytest.approx(result.before.memoryless, abs=1e-8)


def test_pulses_droop_behind_a_capacitor(tmp_path: Path, validate: Validate) -> None:
    tau = 500e-9
    train = {"spacing": "20 ns", "count": 24, "shift_per_volt": "-50 MHz/V"}
    result = run_train(bench(tmp_path, HIGH_PASS, train))
    factors = (1.0,) * 24
    # What passes is what is played less what one pole keeps of it.
    lost = slot_areas(factors, tau, SPACING)
    wanted = -PER_VOLT * lost
    assert result.before.turn[:, 2] == pytest.approx(wanted, abs=1e-5)
    assert result.before.settling is not None
    validate(
        "settling of a train behind a coupling capacitor",
        SOURCE,
        tau,
        float(result.before.settling.time_constants[0]),
        "s",
        rel=1e-3,  # The trapezoidal rule and the search are far better.
    )


def test_a_step_droops_behind_a_capacitor(tmp_path: Path) -> None:
    stepped = shifting(step="250 ns")
    result = run_train(bench(tmp_path, HIGH_PASS, stepped))
    step = result.step_before
    assert step is not None
    # Held against its end, exp(-(250 ns)/tau): what is above it at t is exp((250 ns - t)/tau) - 1;
    # the edge of 1 ns moves it by half of that over tau.
    late = step.t > 10e-9
    wanted = np.exp((step.t[-1] - step.t[late]) / 500e-9) - 1.0
    assert step.error[late] == pytest.approx(wanted, abs=2e-3)
    assert step.settling.time_constants[0] == pytest.approx(500e-9, rel=0.02, abs=0.0)


DRIVEN = {
    "drive": {"probe": "v(out)", "termination": "in deck", "carrier": "1 GHz"},
    "netlist": {"file": "line.cir", "steps_per_period": 80},
    "qubit": {"kind": "spin", "frequency": "1 GHz", "rabi_per_volt": "50 MHz/V"},
    "gate": {"target": "x90", "calibrate": []},
}


def test_a_driven_qubit_turns_by_the_area_of_its_slot(tmp_path: Path) -> None:
    """A resonant envelope turns by 2 pi k times its area (rotating wave)."""
    tau = 4e-9
    driven = bench(tmp_path, MIXED, {"spacing": "20 ns", "pattern": "01101"}, **DRIVEN)
    train, notices = make_train(driven)
    assert notices == ()
    shot, _ = play(train, train.pulses())
    evolved = evolve_slots(train, shot)
    factors = (0.0, 1.0, 1.0, 0.0, 1.0)
    wanted = errors(slot_areas(factors, tau, SPACING), factors)
    raw = replace(evolved, framed=evolved.raw)
    # Counter-rotating terms of 25 MHz at 1 GHz: 25e6/(4 x 1e9) at each edge of a slot.
    assert raw.turns()[:, 0] == pytest.approx(wanted, abs=7e-3)
    # Slots follow one another without a gap: their product is one evolution of all of them.
    pulse = couple(train.bench, shot).pulse(shot.waveform)
    whole = replace(pulse, start=train.span(0)[0], stop=train.span(4)[1]).channel()
    product = evolved.raw[0]
    for channel in evolved.raw[1:]:
        product = channel @ product
    assert channel_distance(product, whole) < 1e-12


def test_slots_of_a_driven_qubit_share_frame_and_scale(tmp_path: Path) -> None:
    tables = {**DRIVEN, "gate": {"target": "x90"}}
    driven = bench(tmp_path, MIXED, {"spacing": "20 ns", "pattern": "11010"}, **tables)
    result = run_train(driven)
    before = result.before
    # The first pulse keeps 1 - Y tau/area of its area in its slot; the scale makes up for that.
    kept = slot_areas((1.0,), 4e-9, SPACING)[0] / 5e-9
    assert before.amplitude_scale == pytest.approx(1.0 / kept, rel=1e-2)  # counter-rotating terms
    assert before.infidelity[0] < 1e-9
    assert before.infidelity[1] > 1e-5
    assert result.kind == "drive"
    # Two slots back exp(-20/4) of what one slot back does: in infidelity its square, 4.5e-5.
    assert before.lag_costs[1] < 0.05 * before.lag_costs[0]
