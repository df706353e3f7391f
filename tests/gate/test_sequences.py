"""Oracles: published sequences of pulses, reached end to end through ngspice.

As in the tests of single pulses the Rabi frequency is 2 MHz at 0.1 V and 5 GHz: the kicks at hard
edges are below Omega/(2 omega) = 2e-4 rad each, and the Bloch-Siegert shift is 200 Hz.
"""

import math
from typing import Any

import pytest
from scipy.interpolate import CubicSpline

import cosim
from cosim.coupling import DriveLine, rotating_rate
from cosim.result import GateResult
from tests import sources
from tests.conftest import BenchMaker
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "end to end through ngspice"

START, RABI = 5e-9, 2e6
HALF_TURN = 0.5 / RABI


def run(
    make_bench: BenchMaker, source: str, duration: float, target: str, **qubit: Any
) -> GateResult:
    """Run a behavioural source, written as a function of `time`, within a window at 5 ns."""
    stop = START + duration
    deck = f"pulses\nb1 out 0 v={{{source}}}\n.tran 1n {stop + 2e-9!r}\n.end\n"
    tables = {
        "netlist": {"steps_per_period": 40},
        "qubit": qubit,
        "gate": {"target": target, "window": [f"{START!r} s", f"{stop!r} s"]},
    }
    return cosim.run(make_bench(deck, tables))


def excited(result: GateResult) -> float:
    """Population of |1> that starts in |0>."""
    matrix = result.channel.pauli_transfer_matrix
    return float(1 - matrix[3, 3] - matrix[3, 0]) / 2


def ramsey(detuning: float, pulse: float, wait: float) -> float:
    """Ramsey's transition probability; Rabi frequency and detuning in Hz, times in s."""
    total = math.hypot(RABI, detuning)
    half = math.pi * total * pulse
    turn = math.pi * detuning * wait
    inner = math.cos(turn) * math.cos(half) - detuning / total * math.sin(turn) * math.sin(half)
    return (2 * RABI / total * math.sin(half) * inner) ** 2


@pytest.mark.full
@pytest.mark.parametrize("detuning", [0.0, 0.3e6, 0.7e6, -0.7e6, 1.1e6])
def test_ramsey_fringe(make_bench: BenchMaker, validate: Validate, detuning: float) -> None:
    """Two quarter turns of 125 ns, 500 ns apart, on a detuned qubit."""
    pulse, wait = HALF_TURN / 2, 500e-9
    first, second = START + pulse, START + pulse + wait
    gate = f"((time<{first!r}) || (time>{second!r}) ? 1 : 0)"
    source = f"0.1*cos(2*pi*5g*time)*{gate}"
    result = run(make_bench, source, 2 * pulse + wait, "x", detuning=f"{detuning} Hz")
    # Four edges of 2e-4 rad on the steepest part of a fringe, and 200 Hz over 750 ns: 1e-3 rad.
    # The source has no corners that the simulator knows, so that each inner edge may be off by a
    # time step of 5 ps: 6e-5 rad, and less than half a sample of the carrier's quarter turn.
    validate(
        f"population of |1> after X90, 500 ns, X90 at 2 MHz, detuned by {detuning / 1e6:.1f} MHz",
        sources.RAMSEY,
        ramsey(detuning, pulse, wait),
        excited(result),
        abs=1.5e-3,
    )


@pytest.mark.full
@pytest.mark.parametrize("error", [0.1, 0.2])
def test_bb1_from_a_behavioural_source(
    make_bench: BenchMaker, validate: Validate, error: float
) -> None:
    """Phases step by behavioural functions; both signs of them are averaged.

    The cross term of the Bloch-Siegert shift with the amplitude error has the sign of the phases;
    what is left is the shift's own infidelity.
    """
    first = math.acos(-1 / 4)
    edges = [START + count * HALF_TURN for count in (1, 3, 4)]
    found = []
    for sign in (1, -1):
        phases = [sign * value for value in (first, 3 * first, first, 0.0)]
        steps = [
            f"{after - before!r}*u(time-{edge!r})"
            for before, after, edge in zip(phases, phases[1:], edges, strict=False)
        ]
        phase = "+".join([f"{phases[0]!r}", *(f"({step})" for step in steps)])
        source = f"{0.1 * (1 + error)!r}*cos(2*pi*5g*time+{phase})"
        result = run(make_bench, source, 5 * HALF_TURN, "x")
        found.append(1 - result.as_simulated.process_fidelity)
    # Leading order of card and series: 5 pi^6 eps^6/512; at 10 and 20 % the exact product of the
    # four rotations is 1.5 and 6 % less.
    exact = {0.1: 9.244852e-06, 0.2: 5.648243e-04}[error]
    # 200 Hz over 1250 ns are 1.6e-3 rad and the edges 1e-3 rad at the most: 5e-7 and 3e-7.
    validate(
        f"1 - F_pro of X180 by BB1 at an amplitude error of {error:.0%}",
        sources.CUMMINS + "; product of the four rotations",
        exact,
        sum(found) / 2,
        abs=1e-6,
        card="B08",
    )


class TestDrag:
    TOPIC = "DRAG"

    @pytest.mark.full
    def test_controls_of_a_gaussian(self, make_bench: BenchMaker, validate: Validate) -> None:
        """B13: the first-order quadrature, from the deck's volts to the qubit's two controls.

        Peak 30 MHz, standard deviation 4 ns, anharmonicity -300 MHz, seen one standard deviation
        before the peak. H = (E_x/2)(a + a^dag) + (E_y/2) i (a^dag - a), so that I + jQ is
        E_x - i E_y; v = I cos - Q sin.
        """
        sigma, alpha, middle = 4e-9, 2 * math.pi * -300e6, 30e-9
        shape = f"exp(-(time-{middle})*(time-{middle})/(2*{sigma}*{sigma}))"
        slope = f"(-(time-{middle})/({sigma}*{sigma}))*{shape}"
        deck = (
            f"gaussian\nb1 out 0 v={{0.3*({shape}*cos(2*pi*5g*time)"
            f"-({slope})/({alpha!r})*sin(2*pi*5g*time))}}\n.tran 1n 60n\n.end\n"
        )
        qubit = {"kind": "transmon", "anharmonicity": "-300 MHz", "rabi_per_volt": "100 MHz/V"}
        envelope = cosim.run(make_bench(deck, {"qubit": qubit})).envelope
        rate = rotating_rate(envelope.iq, envelope.t, DriveLine(100e6), "V", 0.0) / (2 * math.pi)
        curve = CubicSpline(envelope.t, rate)
        control = complex(curve(middle - sigma))
        # The demodulator is flat to 1e-6 of the peak, and the spline through its samples.
        for name, wanted, got in (
            ("E_x", 1.819592e7, control.real),
            ("E_y", 2.413309e6, -control.imag),
        ):
            quantity = f"{name} of DRAG on a Gaussian, one standard deviation before its peak"
            validate(quantity, sources.MOTZOI, wanted, got, "Hz", abs=100.0, card="B13")
        # Q = +(dI/dt)/alpha with alpha < 0, as the testbench's conventions say; 1e-6 of the peak
        # over the spacing of the samples is a few 1e-4 of the slope.
        ahead = float(curve.derivative()(middle - sigma).real)
        assert control.imag == pytest.approx(ahead / alpha, rel=1e-3)
