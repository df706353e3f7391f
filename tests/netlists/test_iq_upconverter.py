"""Oracle: published formulas for image rejection and carrier leakage, and the area of the pulse.

Image rejection: B. Razavi, RF Microelectronics, section on image-reject receivers (recalled from
memory). Carrier leakage of an offset: mixer algebra, as in the first test of leakage below.
"""

import math
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from cosim.circuit.analysis import Tolerances, TransientRequest
from cosim.circuit.netlist import deck_from_text, load_deck, with_parameters, with_terminations
from cosim.circuit.simulator import simulate
from cosim.waveform import FloatArray
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"

DECK = Path(__file__).parents[2] / "netlists" / "iq_upconverter" / "iq_upconverter.cir"
CARRIER = 5e9
OFFSET = 125e6
# A tone of 8 samples per period: the rounding errors of both channels are alike, so that they
# make no image of their own. The plateau lasts from 5 ns to 69 ns.
TONE = {"f_if": OFFSET, "t_start": 1e-9, "t_rise": 4e-9, "t_flat": 64e-9, "bits": 16.0}


def output(parameters: Mapping[str, float], stop: float, *, points: int = 80) -> FloatArray:
    """Voltage at the loaded output at multiples of the carrier period over `points`."""
    deck = with_terminations(with_parameters(load_deck(DECK), parameters), ("out",), 50.0)
    step = 1 / (CARRIER * points)
    tolerances = Tolerances() if points == 80 else Tolerances().tighter()
    request = TransientRequest(stop=stop, step=step, saves=("v(out)",), tolerances=tolerances)
    result = simulate(deck, request)
    grid = step * np.arange(round(stop / step))
    return np.asarray(CubicSpline(result.time, result.vectors["v(out)"])(grid))


def line(v: FloatArray, frequency: float) -> complex:
    """Peak amplitude at one frequency between 36 ns and 68 ns, when the filters have settled."""
    step = 1 / (CARRIER * 80)
    n = np.arange(round(36e-9 / step), round(68e-9 / step))
    return complex(2 * np.mean(v[n] * np.exp(-2j * np.pi * frequency * step * n)))


def area(v: FloatArray, frequency: float, *, points: int = 80) -> complex:
    """Area under the complex envelope at one frequency, in V s."""
    step = 1 / (CARRIER * points)
    t = step * np.arange(v.size)
    return complex(2 * np.trapezoid(v * np.exp(-2j * np.pi * frequency * t), dx=step))


@pytest.mark.parametrize(
    ("gain_db", "phase_degrees", "published_db"),
    [
        pytest.param(0.1, 1.0, 39.61402, marks=pytest.mark.full),
        pytest.param(0.1, 0.0, 44.79698, marks=pytest.mark.full),
        pytest.param(0.0, 1.0, 41.18283, marks=pytest.mark.full),
        (0.5, 3.0, 28.1997),
    ],
)
def test_image_rejection(
    validate: Validate, gain_db: float, phase_degrees: float, published_db: float
) -> None:
    g = 10 ** (gain_db / 20)
    p = math.radians(phase_degrees)
    v = output({**TONE, "gain_imbalance": g, "phase_imbalance": phase_degrees}, 68e-9)
    measured = 20 * math.log10(abs(line(v, CARRIER + OFFSET)) / abs(line(v, CARRIER - OFFSET)))
    formula = (1 + g * g + 2 * g * math.cos(p)) / (1 + g * g - 2 * g * math.cos(p))
    # The last digit of the published values.
    assert 10 * math.log10(formula) == pytest.approx(published_db, abs=1e-5)
    # The residual image without imbalance is below -150 dBc, which is 1e-5 dB at 45 dB.
    quantity = f"image rejection of the upconverter, {gain_db} dB and {phase_degrees:g} degrees off"
    validate(quantity, sources.RAZAVI, published_db, measured, "dB", abs=1e-4, card="F10")


@pytest.mark.parametrize(
    "offsets",
    [
        pytest.param((1e-3, 0.0), marks=pytest.mark.full),
        pytest.param((0.0, 1e-3), marks=pytest.mark.full),
        (1e-3, 1e-3),
    ],
)
def test_offset_leaks_carrier(validate: Validate, offsets: tuple[float, float]) -> None:
    leak_i, leak_q = offsets
    v = output({**TONE, "leakage_i": leak_i, "leakage_q": leak_q}, 68e-9)
    tone = abs(line(v, CARRIER + OFFSET))
    leak = line(v, CARRIER)
    # Offset d beside a tone of peak A in each quadrature: carrier at 20 log10(d/A); offsets in
    # I and Q add in quadrature, with the phase of I + jQ. Settling leaves below 1e-7 of the tone.
    wanted = 20 * math.log10(math.hypot(leak_i, leak_q) / tone)
    found = 20 * math.log10(abs(leak) / tone)
    quantity = f"carrier of the upconverter, offsets of {leak_i:g} V in I and {leak_q:g} V in Q"
    validate(quantity, sources.MIXER, wanted, found, "dBc", abs=1e-4, card="F11")
    assert np.angle(leak) == pytest.approx(math.atan2(leak_q, leak_i), abs=1e-5)


@pytest.mark.full
def test_area_of_the_pulse_and_its_step_error(validate: Validate) -> None:
    coarse = area(output({}, 50e-9), CARRIER)
    fine = area(output({}, 50e-9, points=160), CARRIER, points=160)
    # A raised cosine with flanks of 12 ns and no plateau has the area peak times 12 ns. 24 samples
    # rounded to 12 bits of 1 V miss it by at most half a step, 1.2e-4 V of 0.4 V: 3e-4 relative;
    # their sum in this pulse by 1e-4.
    quantity = "area under the upconverter's raised cosine of 0.4 V, flanks of 12 ns"
    validate(quantity, sources.FILTER_AREA, 4.8e-9, abs(coarse), "V s", rel=1e-4, digits=12)
    # 1e-5 is what a gate needs to be blind to the step.
    assert abs(coarse / fine - 1) < 1e-5


def test_overshoot_of_the_reconstruction_filter(validate: Validate) -> None:
    # F09: the deck's own ladder behind a step, without converters and mixers.
    text = DECK.read_text()
    ladder = text[text.index(".subckt filter5") : text.index(".ends filter5")]
    deck = deck_from_text(
        f"step\n.param z0=50 f_filter=300meg pi={{4*atan(1)}}\n{ladder}.ends filter5\n"
        "v1 in 0 pulse(0 2 0 1f 1f 1 2)\nx1 in out filter5\n.end\n"
    )
    result = simulate(deck, TransientRequest(stop=12e-9, step=2e-12, saves=("v(out)",)))
    curve = CubicSpline(result.time, result.vectors["v(out)"])
    turns = curve.derivative().roots(extrapolate=False)
    overshoot = 100 * (float(curve(turns[turns > 0.5e-9][0])) - 1)
    quantity = "overshoot of the upconverter's filter, a Butterworth ladder of order 5"
    # Four digits in the handbook's table.
    validate(quantity, sources.ZVEREV, 12.78, overshoot, "%", rel=5e-4, card="F09", digits=4)


@pytest.mark.full
def test_quadrature_spares_the_upper_transition() -> None:
    # A fast clock and a fine grid, so that aliases and rounding stay below the lines in question.
    fine = {"f_clk": 5e9, "bits": 16.0}
    shaped = output(fine, 50e-9)
    plain = output({**fine, "drag": 0.0}, 50e-9)
    # Fourier transform of I + jQ, Q = w (dI/dt)/(2 pi alpha), at the offset f from the carrier:
    # that of I times 1 - w f/alpha. With w = 1/2: a half at f = alpha, where the transition from
    # |1> to |2> lies, three halves at -alpha. Aliases of 5 GHz are below 1 % of these lines.
    for offset, factor in ((-300e6, 0.5), (300e6, 1.5)):
        ratio = area(shaped, CARRIER + offset) / area(plain, CARRIER + offset)
        assert ratio == pytest.approx(factor, abs=0.02)
