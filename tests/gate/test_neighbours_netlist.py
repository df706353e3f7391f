"""Oracle: 4kTR behind a pole at another qubit and at rest, by the golden rule."""

import math
from pathlib import Path

import pytest
from scipy import constants

from cosim.gate import run_gate
from cosim.result import GateResult
from cosim.testbench import make_testbench
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "end to end through ngspice"

CARRIER, OFFSET = 1e9, 40e6
RABI = 20e9  # Hz/V
KELVIN, OHM, FARAD = 300.0, 1e3, 0.2e-12
WINDOW = (2e-9, 22e-9)
REST = (24e-9, 44e-9)
DECK = "deck\nv1 in 0 sin(0 1u 1g)\nr1 in out 1k\nc1 out 0 0.2p\n.end\n"


def run(folder: Path, **noise: object) -> GateResult:
    (folder / "deck.cir").write_text(DECK)
    tables = {
        "netlist": {
            "file": "deck.cir",
            "stop": "46 ns",
            "steps_per_period": 100,
            "temperature": f"{KELVIN} K",
        },
        "drive": {"probe": "v(out)", "carrier": f"{CARRIER!r} Hz", "termination": "in deck"},
        "qubit": {"kind": "spin", "frequency": "carrier", "rabi_per_volt": f"{RABI!r} Hz/V"},
        "gate": {
            "target": "identity",
            "window": [f"{edge!r} s" for edge in WINDOW],
            "idle": [f"{edge!r} s" for edge in REST],
        },
        "accuracy": {"floor": False, "noise_samples": 400},
        "noise": [{"acts_on": "probe", "from": "netlist", "name": "r"} | noise],
        "spectator": [
            {"kind": "spin", "offset": "0 Hz", "rabi_per_volt": f"{RABI / 2!r} Hz/V"},
            {"kind": "spin", "offset": f"{OFFSET!r} Hz", "rabi_per_volt": f"{RABI!r} Hz/V"},
        ],
    }
    return run_gate(make_testbench(tables, folder=folder))


def rate(frequency: float, rabi: float) -> float:
    """Flips in 1/s, each way."""
    pole = 1 + (2 * math.pi * frequency * OHM * FARAD) ** 2
    return (2 * math.pi * rabi) ** 2 * 4 * constants.k * KELVIN * OHM / pole / 2


def test_small_signal_noise_reaches_all(tmp_path: Path, validate: Validate) -> None:
    found = run(tmp_path, method="stationary")
    time = WINDOW[1] - WINDOW[0]
    for item, rabi in zip(found.spectators, (RABI / 2, RABI), strict=True):
        assert item.noise is not None
        (source,) = item.noise.sources
        validate(
            f"loss of a qubit {(item.frequency - CARRIER) / 1e6:.0f} MHz beside by 1 kohm at 300 K",
            f"{sources.JOHNSON_NYQUIST}; {sources.GOLDEN_RULE}",
            2 * rate(item.frequency, rabi) * time / 3,
            source.infidelity + source.unreached,
            # The density is taken as the same on both sides of the carrier, of which the mean lies
            # up to 1.2 times above that at the carrier, at half of it; and the filter of 20 ns sees
            # 2 % there. At 40 MHz beside, the pole makes 5 % between the two sides.
            rel=0.06,
        )
    assert found.idle is not None
    validate(
        "flips at rest by 1 kohm at 300 K",
        f"{sources.JOHNSON_NYQUIST}; {sources.GOLDEN_RULE}",
        rate(CARRIER, RABI),
        found.idle.flip_rate,
        "1/s",
        # At one turn per stretch, 50 MHz beside the carrier, the mean of both sides.
        rel=5e-3,
    )


def test_injected_runs_are_shared(tmp_path: Path) -> None:
    """The same runs act on every qubit: half the coupling at the same frequency, a quarter."""
    found = run(tmp_path, method="injection", seeds=3)
    assert found.noise is not None
    assert found.idle is not None
    assert found.idle.noise is not None
    (at_rest,) = found.idle.noise.sources
    # Of two levels up and down alike: a flip costs 2/3, dephasing nothing on top.
    assert found.idle.flip_rate * (REST[1] - REST[0]) == pytest.approx(at_rest.flips, rel=1e-12)
    assert at_rest.flips == pytest.approx(1.5 * at_rest.infidelity, rel=1e-3, abs=0.0)
    half, beside = found.spectators
    assert half.noise is not None
    assert beside.noise is not None
    own = found.noise.sources[0]
    (other,) = half.noise.sources
    # The next order of a loss is its square, and the turn by 1 uV of carrier is 1e-3 rad.
    allowed = own.infidelity + 1e-3
    assert other.infidelity == pytest.approx(own.infidelity / 4, rel=allowed, abs=0.0)
    assert beside.noise.infidelity != own.infidelity
    # Another stretch of the same runs: another number of the same kind.
    rest = found.idle.noise.sources[0]
    assert rest.method == "injection"
    assert 0.05 < rest.infidelity / own.infidelity < 20.0


def test_two_gates_at_once(tmp_path: Path) -> None:
    """Equal tones 100 MHz apart, a pi pulse each: what one does to the other's qubit."""
    start, time, offset = 20e-9, 100e-9, 100e6
    tones = "cos(6.283185307179586*1e9*time)+cos(6.283185307179586*1.1e9*time)"
    (tmp_path / "deck.cir").write_text(
        f"deck\nve env 0 pwl(0 0 {start!r} 0 20.01n 1 120n 1 120.01n 0)\n"
        f"b1 out 0 v=v(env)*({tones})\n.end\n"
    )
    rabi = 0.5 / time
    tables = {
        "netlist": {"file": "deck.cir", "stop": "140 ns", "steps_per_period": 80},
        "drive": {"probe": "v(out)", "carrier": "1 GHz", "termination": "in deck"},
        "qubit": {"kind": "spin", "frequency": "carrier", "rabi_per_volt": f"{rabi!r} Hz/V"},
        "gate": {"target": "x", "calibrate": []},
        "accuracy": {"floor": False},
        "spectator": [
            {
                "kind": "spin",
                "offset": f"{offset!r} Hz",
                "rabi_per_volt": f"{rabi!r} Hz/V",
                "target": "x",
            }
        ],
    }
    found = run_gate(make_testbench(tables, folder=tmp_path))
    (other,) = found.spectators
    assert found.pulse.amplitude == pytest.approx(1.0, rel=1e-3)
    assert found.warnings == ()
    # The other tone tilts the axis: an infidelity of the order of (rabi/offset)^2, 2.5e-3, with a
    # factor of at most 2/3 by its flips and the phase of pi/2 rabi/offset that it shifts.
    for loss in (found.free_frame.infidelity, other.free_frame_infidelity):
        assert 0.0 < loss < (rabi / offset) ** 2
