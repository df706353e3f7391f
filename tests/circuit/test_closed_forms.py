"""Oracle: closed forms of linear circuits and handbook values, against decks run in ngspice."""

import math

import numpy as np
import pytest
from scipy import constants
from scipy.interpolate import CubicSpline

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.netlist import deck_from_text
from cosim.circuit.simulator import simulate
from cosim.dsp.demodulation import demodulate
from cosim.waveform import FloatArray, Waveform
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"


def run(
    text: str, stop: float, step: float, node: str = "out", initial: str = "op"
) -> tuple[FloatArray, FloatArray]:
    """Time in s and voltage of a node in V."""
    request = TransientRequest(stop=stop, step=step, saves=(f"v({node})",), initial=initial)
    result = simulate(deck_from_text("deck\n" + text + "\n.end\n"), request)
    return result.time, result.vectors[f"v({node})"]


def crossing(t: FloatArray, v: FloatArray, level: float) -> float:
    """First time at which a voltage reaches a level; the samples are joined by a cubic spline."""
    return float(CubicSpline(t, v).solve(level, extrapolate=False)[0])


class TestFirstOrder:
    """F01: 50 ohm and 1 pF, tau = 50 ps; a step of 1 V at t = 0 with an edge of 1 fs."""

    step = "v1 in 0 pulse(0 1 0 1f 1f 1 2)\nr1 in out 50\nc1 out 0 1p"

    def test_step(self, validate: Validate) -> None:
        t, v = run(self.step, 0.6e-9, 0.25e-12)
        source = sources.CIRCUITS
        # The rule's error, (h/tau)^2/12 of the voltage, is 2e-6; the edge's is 1e-5 of tau.
        rise = crossing(t, v, 0.9) - crossing(t, v, 0.1)
        quantity = "10 to 90 % rise time of 50 ohm and 1 pF"
        validate(quantity, source + ", tau ln 9", 1.098612e-10, rise, "s", rel=1e-4, card="F01")
        settled = crossing(t, v, 1 - 1e-3)
        quantity = "settling of 50 ohm and 1 pF to 1e-3"
        formula = source + ", tau ln(1000)"
        # An error of 2e-6 V moves the crossing by 2e-3 tau at this flat place at the most.
        validate(quantity, formula, 3.453878e-10, settled, "s", rel=3e-4, card="F01")
        tau = crossing(t, v, 1 - math.exp(-1))
        validate("time constant of 50 ohm and 1 pF", source, 5e-11, tau, "s", rel=1e-4, card="F01")

    def test_corner(self, validate: Validate) -> None:
        corner = 3.183099e9
        text = f"v1 in 0 sin(0 1 {corner})\nr1 in out 50\nc1 out 0 1p"
        t, v = run(text, 6e-9, 1 / (corner * 200))
        envelope = demodulate(Waveform(t, v), corner)
        level = abs(envelope.iq[envelope.iq.size // 2])
        # 200 steps per period: the rule moves the corner by (omega h)^2/12 = 8e-5, which is
        # half of that in the level.
        quantity = "level of 50 ohm and 1 pF at 1/(2 pi R C)"
        validate(quantity, sources.CIRCUITS, math.sqrt(0.5), level, "V", rel=1e-4, card="F01")


class TestOscillation:
    def test_series_rlc(self, validate: Validate) -> None:
        # F19: 10 ohm, 10 nH, 1 pF, step on the capacitor.
        text = "v1 in 0 pulse(0 1 0 1f 1f 1 2)\nr1 in a 10\nl1 a out 10n\nc1 out 0 1p"
        step = 1e-12
        t, v = run(text, 8e-9, step)
        curve = CubicSpline(t, v - 1)
        turns = curve.derivative().roots(extrapolate=False)
        turns = turns[turns > 0.1e-9]
        sizes = np.abs(curve(turns))
        source = sources.CIRCUITS
        # Steps of 1/628 period: the rule shifts frequency and damping by (omega h)^2/12 = 8e-6.
        ring = (turns.size - 1) / 2 / (turns[-1] - turns[0])
        quantity = "ringing frequency of 10 ohm, 10 nH, 1 pF"
        formula = source + ", w_d^2 = 1/(L C) - (R/2 L)^2"
        validate(quantity, formula, 1.589559e9, ring, "Hz", rel=1e-4, card="F19")
        tau = (turns[-1] - turns[0]) / math.log(sizes[0] / sizes[-1])
        quantity = "time constant of its envelope, 10 ohm, 10 nH, 1 pF"
        validate(quantity, source + ", 2 L/R", 2e-9, tau, "s", rel=1e-4, card="F19")
        quantity = "overshoot of a step on 10 ohm, 10 nH, 1 pF"
        formula = source + ", exp(-pi R/(2 L w_d))"
        validate(quantity, formula, 85.44679, 100 * sizes[0], "%", rel=1e-4, card="F19")

    @staticmethod
    def frequency(step: float) -> float:
        """Frequency of a free 5 GHz oscillation of 1 nH with a capacitor."""
        capacitance = 1 / ((2 * math.pi * 5e9) ** 2 * 1e-9)
        text = f"l1 out 0 1n\nc1 out 0 {capacitance!r} ic=1"
        t, v = run(text, 40e-9, step, initial="uic")
        inside = (t > 1e-9) & (t < 39.9e-9)
        v = v[inside]
        # On a uniform grid v[n+1] + v[n-1] = 2 cos(w h) v[n] exactly.
        cosine = (v[2:] + v[:-2]) @ v[1:-1] / (2 * v[1:-1] @ v[1:-1])
        return math.acos(cosine) / step / (2 * math.pi)

    def test_law_of_the_trapezoidal_rule(self, validate: Validate) -> None:
        # F02: 20 steps per period. Newton's tolerance is all that is left.
        found = self.frequency(1e-11)
        quantity = "frequency of a free LC of 5 GHz at steps of 10 ps"
        validate(quantity, sources.NAGEL, 4.959475e9, found, "Hz", rel=1e-6, card="F02")
        quantity = "relative error of a free LC of 5 GHz at steps of 10 ps"
        error = found / 5e9 - 1
        validate(quantity, sources.NAGEL, -0.008105015, error, rel=1e-4, card="F02")

    def test_extrapolation_over_the_step(self, validate: Validate) -> None:
        coarse, fine = self.frequency(2e-12), self.frequency(1e-12)
        got = fine + (fine - coarse) / 3
        quantity = "frequency of a free LC of 5 GHz, from steps of 2 ps and 1 ps"
        # atan(x) = x - x^3/3 + x^5/5 with x = omega h/2: of the next order, (omega h)^4/80 = 2e-7,
        # a quarter is left; Newton's tolerance is below that.
        validate(quantity, sources.RICHARDSON, 5e9, got, "Hz", rel=1e-7, card="F02", digits=12)


OVERSHOOT = {2: 4.321, 3: 8.147, 4: 10.83, 5: 12.78}


def butterworth(order: int, corner: float) -> str:
    """A doubly terminated ladder of 50 ohm that starts with a capacitor."""
    lines = ["rs in n1 50"]
    node = 1
    for k in range(1, order + 1):
        g = 2 * math.sin((2 * k - 1) * math.pi / (2 * order))
        if k % 2:
            lines.append(f"c{k} n{node} 0 {g / (2 * math.pi * corner * 50)!r}")
        else:
            lines.append(f"l{k} n{node} n{node + 1} {g * 50 / (2 * math.pi * corner)!r}")
            node += 1
    return "\n".join([*lines, f"rl n{node} 0 50", f"vout n{node} out 0"])


class TestFilters:
    """F09: Butterworth ladders at 300 MHz."""

    @pytest.mark.parametrize("order", OVERSHOOT)
    def test_overshoot(self, validate: Validate, order: int) -> None:
        text = f"v1 in 0 pulse(0 2 0 1f 1f 1 2)\n{butterworth(order, 300e6)}"
        t, v = run(text, 12e-9, 2e-12)
        curve = CubicSpline(t, v)
        turns = curve.derivative().roots(extrapolate=False)
        top = float(curve(turns[turns > 0.5e-9][0]))
        quantity = f"overshoot of a Butterworth filter of order {order}"
        got = 100 * (top - 1)
        # Four digits in the handbook's table; the rule's error is far below them.
        validate(
            quantity, sources.ZVEREV, OVERSHOOT[order], got, "%", rel=5e-4, card="F09", digits=4
        )

    def test_stop_band(self, validate: Validate) -> None:
        text = f"v1 in 0 sin(0 2 600meg)\n{butterworth(3, 300e6)}"
        t, v = run(text, 60e-9, 1 / (600e6 * 200))
        envelope = demodulate(Waveform(t, v), 600e6)
        loss = -20 * math.log10(abs(envelope.iq[envelope.iq.size // 2]))
        quantity = "loss of a Butterworth filter of order 3 at twice its corner"
        source = sources.ZVEREV + ", 10 log10(1 + 2^6)"
        # Four digits in the handbook's table.
        validate(quantity, source, 18.13, loss, "dB", rel=5e-4, card="F09", digits=4)


def test_coaxial_line(validate: Validate) -> None:
    # F12: PTFE, 0.51 mm in 1.68 mm. Inductance and capacitance per metre from the geometry go in;
    # delay and impedance are what the simulator's lossless line makes of them.
    ratio, permittivity = math.log(1.68 / 0.51), 2.04
    inductance = constants.mu_0 / (2 * math.pi) * ratio
    capacitance = 2 * math.pi * constants.epsilon_0 * permittivity / ratio
    model = f".model coax ltra(rel=1 r=0 g=0 l={inductance!r} c={capacitance!r} len=1)"
    text = (
        f"v1 in 0 pulse(0 2 1n 0.2n 0.2n 1 2)\nrs in a 50\no1 a 0 out 0 coax\nrl out 0 50\n{model}"
    )
    step = 5e-12
    t, near = run(text, 9e-9, step, node="a")
    _, far = run(text, 9e-9, step)
    quantity = "delay of a metre of coax, 0.51 mm in 1.68 mm, permittivity 2.04"
    # The middles of straight edges, which rise from sample to sample, and are flat elsewhere.
    middles = []
    for v in (near, far):
        edge = (v > 0.1 * v[-1]) & (v < 0.9 * v[-1]) & (t < 7e-9)
        middles.append(float(np.interp(v[-1] / 2, v[edge], t[edge])))
    delay = middles[1] - middles[0]
    source = sources.POZAR + ", coaxial line"
    validate(quantity, source, 4.764248, delay * 1e9, "ns", rel=1e-4, card="F12")
    # While nothing has come back the line is a resistor of its impedance.
    seen = float(near[np.searchsorted(t, 3e-9)])
    impedance = 50 * seen / (2 - seen)
    quantity = "impedance of coax, 0.51 mm in 1.68 mm, permittivity 2.04"
    # Newton's relative tolerance of 1e-4 in the worst case.
    validate(quantity, source, 50.04518, impedance, "ohm", rel=1e-4, card="F12")
