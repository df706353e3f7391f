"""Oracles: published closed forms, reached end to end through ngspice.

The drive is a steady carrier A cos(omega t + phi) of which the gate's window cuts out a square
pulse of exactly known length, so that the closed forms hold. The Rabi frequency is 2 MHz at
0.1 V: counter-rotating kicks at the two edges are then below 2 x Omega/(2 omega) = 4e-4 rad, an
infidelity of (4e-4)^2/6 = 3e-8, and the Bloch-Siegert shift is Omega^2/(4 omega) = 200 Hz.
"""

from math import cos, pi, radians, sin, sqrt
from typing import Any

import pytest

import cosim
from cosim.quantum.fidelity import average_gate_fidelity, target_unitary
from cosim.quantum.frame import phase_frame
from cosim.result import GateResult
from tests import sources
from tests.conftest import BenchMaker
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "end to end through ngspice"

KICK = 1e-7  # Three times the bound on the infidelity of the edges, from the module's text.
START, PI_TIME = 5e-9, 250e-9


def steady(amplitude: float = 0.1, phase: float = 0.0) -> str:
    return f"steady carrier\nv1 out 0 sin(0 {amplitude} 5g 0 0 {90 + phase})\n.tran 1n 256n\n.end\n"


def run(
    make_bench: BenchMaker,
    *,
    deck: str | None = None,
    target: str = "x",
    fraction: float = 1.0,
    **qubit: Any,
) -> GateResult:
    window = [f"{START} s", f"{START + fraction * PI_TIME!r} s"]
    tables = {"qubit": qubit, "gate": {"target": target, "window": window}}
    return cosim.run(make_bench(deck or steady(), tables))


def test_the_right_pulse_has_no_error(make_bench: BenchMaker) -> None:
    result = run(make_bench)
    assert result.as_simulated.infidelity < KICK
    assert result.rotation.angle == pytest.approx(pi, abs=1e-3)  # the kicks of both edges


@pytest.mark.parametrize(
    ("target", "fraction", "infidelity"), [("x", 1.0, 1.644799e-4), ("x90", 0.5, 4.112251e-5)]
)
def test_over_rotation(
    make_bench: BenchMaker, validate: Validate, target: str, fraction: float, infidelity: float
) -> None:
    """1 - F_avg = (2/3) sin^2(theta eps/2), eps = 1 %.

    Source: elementary SU(2) algebra with M. A. Nielsen, Phys. Lett. A 303, 249 (2002).
    """
    result = run(make_bench, deck=steady(0.101), target=target, fraction=fraction)
    found = result.as_simulated.infidelity
    quantity = f"1 - F_avg of {target} over-rotated by 1 %"
    validate(quantity, sources.ALGEBRA, infidelity, found, abs=KICK, card="A03")
    assert result.calibrated.infidelity < KICK
    assert result.calibrated.amplitude_scale == pytest.approx(1 / 1.01, abs=1e-4)  # the kicks


@pytest.mark.full
def test_detuning(make_bench: BenchMaker, validate: Validate) -> None:
    """Pi pulse with Delta/Omega = 0.05: 1 - F_avg = 1.665071e-3.

    Source: elementary SU(2) algebra, F_pro = [cos(th/2) cos(th r/2) + sin(th/2) sin(th r/2)/r]^2
    with r = sqrt(1 + x^2), in the frame of the carrier. The result is in that of the qubit, so
    the known phase between them is taken out. The mean of both signs takes out the
    Bloch-Siegert shift, which is 0.2 % of the detuning; what is left of it is quadratic.
    """
    found = []
    for detuning in (100e3, -100e3):
        result = run(make_bench, detuning=f"{detuning} Hz")
        delta, (start, stop) = 2 * pi * detuning, result.window
        in_frame = phase_frame(result.channel.superoperator, -delta * start, delta * stop)
        found.append(1 - average_gate_fidelity(in_frame, target_unitary((1, 0, 0), pi)))
        # A half turn hides the carrier's slip against the qubit, which is told.
        assert result.phase_slip == pytest.approx(-delta * (stop - start), rel=1e-6)
    quantity = "1 - F_avg of X180 detuned by 5 % of the Rabi frequency"
    allowed = KICK + 1e-5 * 1.665e-3
    validate(quantity, sources.ALGEBRA, 1.665071e-3, sum(found) / 2, abs=allowed, card="A04")


@pytest.mark.parametrize(
    ("fraction", "detuning"),
    [
        (0.5, 1e6),
        pytest.param(0.7, 1.5e6, marks=pytest.mark.full),
        pytest.param(1.0, 2e6, marks=pytest.mark.full),
    ],
)
def test_rabi_formula_off_resonance(
    make_bench: BenchMaker, validate: Validate, fraction: float, detuning: float
) -> None:
    """P1 = Omega^2/(Omega^2 + Delta^2) sin^2(pi sqrt(Omega^2 + Delta^2) t), cyclic frequencies.

    Source: I. I. Rabi, Phys. Rev. 51, 652 (1937).
    """
    result = run(make_bench, fraction=fraction, detuning=f"{detuning} Hz")
    matrix = result.channel.pauli_transfer_matrix
    found = (1 - matrix[3, 3] - matrix[3, 0]) / 2
    omega, total = 2e6, sqrt(2e6**2 + detuning**2)
    expected = (omega / total) ** 2 * sin(pi * total * fraction * PI_TIME) ** 2
    # The Bloch-Siegert shift of 200 Hz and the kicks move the population by less than 4e-4.
    quantity = f"population of |1> at 2 MHz, detuned by {detuning / 1e6} MHz, {fraction} of 250 ns"
    validate(quantity, sources.RABI, expected, found, abs=4e-4, card="B01")


@pytest.mark.parametrize(
    ("target", "fraction", "infidelity"),
    [pytest.param("x", 1.0, 2.666311e-4, marks=pytest.mark.full), ("x90", 0.5, 1.333222e-4)],
)
def test_phase_error(
    make_bench: BenchMaker, validate: Validate, target: str, fraction: float, infidelity: float
) -> None:
    """Axis off by 0.02 rad: (2/3) sin^2 phi for pi, (2/3)(1 - cos^4(phi/2)) for pi/2.

    Source: elementary SU(2) algebra. Both signs are averaged, since a kick along the axis' own
    direction adds to the angle in one and takes from it in the other.
    """
    both = [
        run(make_bench, deck=steady(0.1, s * 0.02 * 180 / pi), target=target, fraction=fraction)
        for s in (1, -1)
    ]
    mean = sum(result.as_simulated.infidelity for result in both) / 2
    quantity = f"1 - F_avg of {target} with its axis off by 0.02 rad"
    validate(quantity, sources.ALGEBRA, infidelity, mean, abs=KICK, card="A05")
    for result in both:
        assert result.free_frame.infidelity < KICK


@pytest.mark.parametrize(
    "phase",
    [
        0.0,
        40.0,
        pytest.param(90.0, marks=pytest.mark.full),
        pytest.param(-90.0, marks=pytest.mark.full),
    ],
)
def test_the_sign_of_the_phase_axis(
    make_bench: BenchMaker, validate: Validate, phase: float
) -> None:
    """A cos(omega t + phi) rotates about (cos phi, -sin phi, 0) when |0> is the ground state.

    Source: rotating-wave algebra, H_rot = (Omega/2)[cos(phi) sx + s sin(phi) sy] with s = -1.
    """
    result = run(make_bench, deck=steady(0.1, phase), target="x90", fraction=0.5)
    expected = (cos(radians(phase)), -sin(radians(phase)), 0.0)
    for name, wanted, got in zip("xyz", expected, result.rotation.axis, strict=True):
        quantity = f"{name} of the axis at a carrier phase of {phase:g} degrees"
        # A cosine of 90 degrees is zero but for its rounding; the kicks of both edges.
        wanted = round(wanted, 15)
        validate(quantity, sources.ROTATING_FRAME, wanted, got, abs=5e-4, card="B03", digits=12)
    named = {90.0: "-y90", -90.0: "y90"}
    if phase in named:
        right = run(make_bench, deck=steady(0.1, phase), target=named[phase], fraction=0.5)
        wrong = run(make_bench, deck=steady(0.1, phase), target=named[-phase], fraction=0.5)
        assert right.as_simulated.infidelity < KICK
        # Rotations that differ by 180 degrees: F_pro = 0, F_avg = 1/3; a free frame hides that.
        quantity = f"F_avg of y90 against the opposite turn, phase {phase:g} degrees"
        found = wrong.as_simulated.average_gate_fidelity
        validate(quantity, sources.ALGEBRA, 1 / 3, found, abs=1e-3, card="B03")
        assert wrong.free_frame.infidelity < KICK


def test_relaxation_and_dephasing_during_the_pulse(
    make_bench: BenchMaker, validate: Validate
) -> None:
    """Pi pulse of 50 ns, T1 = 30 us, T2 = 20 us: 1 - F_avg = 1.1099e-3.

    Source: T. Abad et al., Phys. Rev. Lett. 129, 150504 (2022) for the first order
    T/(6 T1) + T/(3 T2) = 1.1111e-3; the full value from an independent master equation.
    """
    tables = {
        "qubit": {"rabi_per_volt": "100 MHz/V", "t1": "30 us", "t2": "20 us"},
        "gate": {"target": "x", "window": ["5 ns", "55 ns"]},
    }
    result = cosim.run(make_bench(steady(), tables))
    # At a Rabi frequency of 10 MHz the kicks cost at most (2e-3)^2/6 = 7e-7.
    found = result.as_simulated.infidelity
    quantity = "1 - F_avg of X180 of 50 ns, T1 30 us, T2 20 us"
    validate(quantity, sources.ABAD, 1.1099e-3, found, abs=7e-7, card="A09", digits=5)
    assert 0.5 * (1 - sqrt(result.unitarity)) == pytest.approx(1.11e-3, rel=0.01)


RC_PULSE = """pulse through an RC low-pass of 1 ns
v1 in 0 pulse(0 1 4.9995n 1p 1p 19.999n)
r1 in env 1k
c1 env 0 1p
b1 out 0 v=v(env)*0.1*cos(2*pi*5g*time)
.tran 1n 60n
.end
"""


def test_an_rc_filtered_pulse(make_bench: BenchMaker, validate: Validate) -> None:
    """Lag 1 ns, pulse 20 ns: short by pi (tau/T)(1 - e^(-T/tau)), 1 - F_avg = 4.103886e-3.

    With the complete tail the angle is exactly pi. Source: linear filter and area theorem.
    """
    qubit = {"rabi_per_volt": "250 MHz/V"}
    cut = {"qubit": qubit, "gate": {"target": "x", "window": ["5 ns", "25 ns"]}}
    whole = {"qubit": qubit, "gate": {"target": "x", "window": ["0 ns", "60 ns"]}}
    # Bloch-Siegert shift 31 kHz at a Rabi frequency of 25 MHz: (2 x 31e3/25e6)^2/6 = 1e-6; the
    # kick at the cut edge, Omega/(2 omega) = 2.5e-3 rad, is orthogonal to the missing angle.
    short = cosim.run(make_bench(RC_PULSE, cut))
    found = short.as_simulated.infidelity
    quantity = "1 - F_avg of X180 of 20 ns behind 1 ns of RC, cut at its end"
    validate(quantity, sources.FILTER_AREA, 4.103886e-3, found, abs=3e-6, card="F16")
    assert any("the window cuts the pulse" in text for text in short.warnings)
    full = cosim.run(make_bench(RC_PULSE, whole))
    quantity = "1 - F_avg of X180 of 20 ns behind 1 ns of RC, with its tail"
    found = full.as_simulated.infidelity
    validate(quantity, sources.FILTER_AREA, 0.0, found, abs=3e-6, card="F16")
    assert not any("cuts" in text for text in full.warnings)
