"""Oracle: card D19 and the reflection of coil, capacitance and resistance in closed form.

R. J. Schoelkopf et al., Science 280, 1238 (1998); F. Vigneau et al., Appl. Phys. Rev. 10, 021305
(2023); recalled from memory.
"""

import cmath
import math
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.deck import Deck
from cosim.circuit.netlist import load_deck, with_parameters
from cosim.circuit.simulator import simulate
from cosim.waveform import FloatArray
from tests import sources
from tests.netlists.small_signal import ac_analysis
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"

DECK = Path(__file__).parents[2] / "netlists" / "reflectometry_tank" / "reflectometry_tank.cir"
L, C, Z0 = 820e-9, 0.5e-12, 50.0
F0 = 1 / (2 * math.pi * math.sqrt(L * C))
AMPLITUDE = 20e-6
# Reflection of 100 kohm is real where the reactance of coil and capacitance is zero.
F_REAL = math.sqrt(1 / (L * C) - 1 / (100e3 * C) ** 2) / (2 * math.pi)


def reflection(resistance: float, frequency: float, capacitance: float = C) -> complex:
    """(Z - Z0)/(Z + Z0) of the tank."""
    s = 2j * math.pi * frequency
    z = s * L + 1 / (s * capacitance + 1 / resistance)
    return (z - Z0) / (z + Z0)


def record(parameters: Mapping[str, float], stop: float, step: float) -> tuple[FloatArray, ...]:
    """Times and the reflected wave at `out`."""
    request = TransientRequest(stop=stop, step=step, saves=("v(out)",))
    result = simulate(with_parameters(load_deck(DECK), parameters), request)
    assert result.warnings == ()
    return result.time, result.vectors["v(out)"]


def fitted(t: FloatArray, v: FloatArray, frequency: float) -> complex:
    """Phasor of a sine against that of the incident wave, by least squares."""
    angle = 2 * np.pi * frequency * t
    columns = np.stack([np.cos(angle), -np.sin(angle)], axis=1)
    i, q = np.linalg.lstsq(columns, v, rcond=None)[0]
    return complex(i, q) / (AMPLITUDE / 2)


def settled(parameters: Mapping[str, float], frequency: float, points: int) -> complex:
    """Reflection after 400 ns at `points` per period of the resonance, in steps that it knows."""
    step = 1 / (points * F0)
    t, v = record({"t_step": step, "f_in": frequency, **parameters}, 500e-9, step)
    return fitted(t[t > 400e-9], v[t > 400e-9], frequency)


def small_signal(deck: Deck, folder: Path, frequency: float) -> complex:
    """Reflection by `.ac` with elements that no step has changed."""
    band = (frequency, 2 * frequency, 3)
    _, v = ac_analysis(with_parameters(deck, {"t_step": 0.0}), folder, band, ("out",))
    return complex(2 * v["out"][0])


def test_card_of_the_match(tmp_path: Path, validate: Validate) -> None:
    deck = load_deck(DECK)
    source = sources.CIRCUITS
    got = abs(small_signal(with_parameters(deck, {"r_sensor": 100e3}), tmp_path, F_REAL))
    quantity = "reflection of the tank with a sensor of 100 kohm at its resonance"
    # The card has seven digits, the output of ngspice fifteen.
    validate(quantity, source, 0.5060241, got, rel=1e-6, card="D19")
    band = (F_REAL - 0.2e6, F_REAL + 0.2e6, 401)
    bare = with_parameters(deck, {"r_sensor": 100e3, "t_step": 0.0})
    f, v = ac_analysis(bare, tmp_path, band, ("out",))
    quantity = "frequency at which the tank with 100 kohm has no reactance"
    real = float(np.interp(0.0, v["out"].imag, f))
    # Straight lines over 1 kHz bend by 1 Hz; the card gives 100 Hz.
    validate(quantity, source, 2.485379e8, real, "Hz", abs=60.0, card="D19", digits=7)
    f_match = math.sqrt(1 / (L * C) - 1 / (32.8e3 * C) ** 2) / (2 * math.pi)
    # Z = L/(C R) without reactance: 32.8 kohm absorb all, but for rounding of the frequency.
    assert abs(small_signal(with_parameters(deck, {"r_sensor": 32.8e3}), tmp_path, f_match)) < 1e-6
    got = abs(small_signal(with_parameters(deck, {"r_sensor": 1e12}), tmp_path, F0))
    validate(
        "reflection of the tank without a sensor", source, 0.9999999, got, abs=1e-6, card="D19"
    )


@pytest.mark.parametrize("points", [20, 40, 80])
@pytest.mark.parametrize("resistance", [32.8e3, 100e3])
def test_resonance_stands_where_it_should_at_every_step(resistance: float, points: int) -> None:
    got = settled({"r_sensor": resistance}, F0, points)
    # At the frequency of the pre-warping the elements have their exact reactances; what is left
    # of the transient after 25 of its time constants, and Newton, leave 1e-5 of the incident wave.
    assert abs(got - reflection(resistance, F0)) < 1e-5


@pytest.mark.parametrize("points", [20, 40, 80])
def test_without_prewarping_the_resonance_moves(points: int, validate: Validate) -> None:
    step = 1 / (points * F0)
    # The deck is told of no step, so that the trapezoidal rule moves its resonance.
    t, v = record({"t_step": 0.0, "r_sensor": 100e3, "f_in": F0}, 500e-9, step)
    got = fitted(t[t > 400e-9], v[t > 400e-9], F0)
    seen = math.tan(math.pi * F0 * step) / (math.pi * step)
    quantity = f"phase of the tank's reflection with {points} steps per period and no pre-warping"
    expected = cmath.phase(reflection(100e3, seen))
    # As above, 1e-5 of the wave at |reflection| 0.5; the response at `seen` is exact.
    validate(quantity, sources.NAGEL, expected, cmath.phase(got), "rad", abs=5e-5, digits=5)
    assert abs(got - reflection(100e3, F0)) > 0.02


def test_away_from_resonance_and_with_more_capacitance() -> None:
    for offset in (-2e6, 2e6):
        got = settled({"r_sensor": 50e3}, F0 + offset, 80)
        # The slope of the reactance errs by 2 (pi/80)^2/3 = 1.0e-3; the reactance is up to
        # 4 pi L 2 MHz = 21 ohm beside some 80 ohm: 2 Z0 0.021/80^2 = 3.3e-4 of the wave.
        assert abs(got - reflection(50e3, F0 + offset)) < 5e-4
    got = settled({"c_sensor": 2e-15}, F0, 80)
    # Elements that are a factor smaller keep their proportion: exact at F0 for any capacitance.
    assert abs(got - reflection(100e3, F0, C + 2e-15)) < 1e-5


def test_an_event_changes_the_reflection_with_the_time_constant_of_the_tank() -> None:
    step = 1 / (80 * F0)
    event = {"r_sensor": 100e3, "r_late": 50e3, "t_event": 400e-9}
    t, v = record({**event, "t_step": step}, 800e-9, step)
    period = 1 / F0
    before = fitted(t[(t > 300e-9) & (t < 400e-9)], v[(t > 300e-9) & (t < 400e-9)], F0)
    after = fitted(t[t > 700e-9], v[t > 700e-9], F0)
    assert abs(before - reflection(100e3, F0)) < 1e-5
    assert abs(after - reflection(50e3, F0)) < 1e-5
    starts = 405e-9 + period * np.arange(8)
    change = [
        abs(fitted(t[(t >= a) & (t < a + period)], v[(t >= a) & (t < a + period)], F0) - after)
        for a in starts
    ]
    rate = -np.polyfit(starts, np.log(change), 1)[0]
    # Field decay w0/(2 Q): Z0/(2 L) of the line and 1/(2 R C) of the sensor. Fits of one period
    # each see the counter-rotating part of a decay by 1/(Q) of their value: 4 % of scatter, which
    # averages over the eight; the next order of the decay is 1/(8 Q^2) = 1e-3.
    assert rate == pytest.approx(Z0 / (2 * L) + 1 / (2 * 50e3 * C), rel=2e-2)
