"""Oracle: closed forms of free induction, echo and spin-locking, through the tables [[noise]].

Every case goes both ways of a run, by filter functions and by seeded samples, where there are two.
"""

import math

import numpy as np
import pytest

from cosim.coupling import DriveLine
from cosim.noise_setup import LineOfNoise
from cosim.noises import DetuningNoise, Noise, PhaseNoise
from cosim.quantum.qubit import Qubit
from cosim.qubit_drive import QubitDrive
from cosim.side_results import NoiseEffect
from cosim.waveform import ComplexArray, Envelope
from tests import sources
from tests.validation import Validate

TOPIC = "dynamics in the rotating-wave approximation"

CARRIER = 5e9
TIME = 4e-6
SLICES = 2000
SAMPLES = 600
# One standard error of the samples in four is one failure in 16,000 draws of a fixed seed.
ERRORS = 4.0
PI_SLICES = 8  # of the echo's pulse
TURNS = 40  # of the spin-lock


def effect(rate: ComplexArray, noise: Noise, time: float = TIME) -> NoiseEffect:
    """Let noise act on a resonant qubit at 1 Hz/V; the envelope is the Rabi frequency in Hz."""
    drive = QubitDrive(
        CARRIER, False, False, Qubit(CARRIER), DriveLine(rabi_per_volt=1.0), (0.0, time)
    )
    envelope = Envelope(0.0, time / (rate.size - 1), rate, CARRIER)
    found = LineOfNoise(envelope, (noise,), SAMPLES, 5, {}).on(drive)
    assert found is not None
    return found.effect


def free() -> ComplexArray:
    return np.zeros(SLICES + 1, dtype=np.complex128)


def echo() -> ComplexArray:
    """A pi pulse in the middle, with flanks over one sample: its area is the sum of the samples."""
    rate = free()
    middle = SLICES // 2
    half = PI_SLICES // 2
    rate[middle - half : middle + half + 1] = 0.5 / ((PI_SLICES + 1) * TIME / SLICES)
    return rate


def lock() -> ComplexArray:
    return np.full(SLICES + 1, TURNS / TIME, dtype=np.complex128)


SEQUENCES = {"free induction": free, "echo": echo, "spin-locking": lock}


@pytest.mark.parametrize("name", SEQUENCES)
def test_white(name: str, validate: Validate) -> None:
    """White noise knows no sequence: the coherence decays by exp(-chi), chi = S T/4."""
    density = 5e3  # Hz^2/Hz
    found = effect(SEQUENCES[name](), DetuningNoise("detuning", white=density))
    chi = (2 * math.pi) ** 2 * density * TIME / 4
    (source,) = found.sources
    validate(
        f"{name} under white noise of the detuning, 3 (1 - F_avg)",
        sources.CYWINSKI,
        chi,
        3 * (source.infidelity + source.unreached),
        # The bound on what lies above half the rate of the slices is good to a part of itself,
        # 1/(pi^2 2000) of the whole, and more around the pulse, whose turn takes 0.4 % of the time.
        rel=1e-3,
    )
    # Along one axis x and y decay by exp(-chi). A lock turns that axis from z to y and back: x
    # decays by exp(-chi), y and z by exp(-chi/2). 1 - F_avg = (3 - their sum)/6.
    expected = (1 - math.exp(-chi)) / 3
    if name == "spin-locking":
        expected = (3 - math.exp(-chi) - 2 * math.exp(-chi / 2)) / 6
    assert found.infidelity == pytest.approx(expected, abs=ERRORS * found.standard_error)
    assert found.standard_error < 0.1 * expected


def test_one_over_f_in_free_induction_and_echo(validate: Validate) -> None:
    level, low = 1e6, 1.0  # Hz^2/Hz at 1 Hz, and Hz
    noise = DetuningNoise("detuning", flicker=level, low=low)
    strength = (2 * math.pi) ** 2 * level * TIME**2 / 2
    logarithm = math.log(1 / (2 * math.pi * low * TIME)) + 1.5 - np.euler_gamma
    for name, factor, allowed in (
        ("free induction", logarithm, 1e-6),
        # The pulse takes 0.4 % of the time, in which the noise does not count for as much.
        ("echo", math.log(2.0), 0.01),
    ):
        found = effect(SEQUENCES[name](), noise)
        chi = strength * factor
        validate(
            f"{name} under 1/f noise of the detuning, 3 (1 - F_avg)",
            sources.ITHIER,
            chi,
            3 * found.first_order,
            rel=allowed,
        )
        expected = (1 - math.exp(-chi)) / 3
        spread = ERRORS * found.standard_error + allowed * expected
        assert found.infidelity == pytest.approx(expected, abs=spread)


def test_one_over_f_in_spin_locking(validate: Validate) -> None:
    level = 1e10  # Hz^2/Hz at 1 Hz
    noise = DetuningNoise("detuning", flicker=level, low=1e5)
    found = effect(lock(), noise)
    chi = (2 * math.pi) ** 2 * level / (TURNS / TIME) * TIME / 4
    # A lock of 40 turns sees the density over a band of 1/40 of its frequency; below the lower
    # corner, 40 times lower, nothing acts.
    validate(
        "spin-locking under 1/f noise of the detuning, 3 (1 - F_avg)",
        sources.ITHIER,
        chi,
        3 * found.first_order,
        rel=0.03,
    )
    spread = ERRORS * found.standard_error + found.first_order**2
    assert found.infidelity == pytest.approx(found.first_order, abs=spread)


def test_quasi_static(validate: Validate) -> None:
    t2_star = 2e-6
    noise = DetuningNoise("detuning", t2_star=t2_star)
    found = effect(free(), noise)
    expected = (1 - math.exp(-((TIME / t2_star) ** 2))) / 3
    # The quadrature's own tolerance.
    quantity = "free induction with T2*, 1 - F_avg"
    validate(quantity, sources.HANSON, expected, found.infidelity, abs=1e-9)
    echoed = effect(echo(), noise)
    # What the echo does not refocus happens within its pulse of 9 samples: the turn by the
    # detuning over 2/pi of that.
    width = (PI_SLICES + 1) * TIME / SLICES
    left = 2 * math.pi * math.sqrt(2) / (2 * math.pi * t2_star) * width
    assert echoed.infidelity < left**2
    assert echoed.infidelity < 1e-3 * found.infidelity


def test_quasi_static_in_spin_locking(validate: Validate) -> None:
    """What is left is of second order, delta^2/(2 Omega), of a Gaussian delta."""
    t2_star = 0.2e-6
    sigma, omega = math.sqrt(2) / t2_star, 2 * math.pi * TURNS / TIME
    found = effect(lock(), DetuningNoise("detuning", t2_star=t2_star))
    # After whole turns 1 - F_avg = (1 - <cos(phi)>)/3 with phi = sqrt(Omega^2 + delta^2) T, past
    # them by delta^2 T/(2 Omega).
    factor = (1 - 1j * sigma**2 * TIME / omega) ** -0.5
    expected = (1 - factor.real) / 3
    # The next order in the phase is delta^4 T/(8 Omega^3).
    allowed = 3 * sigma**4 * TIME / (8 * omega**3)
    validate(
        "spin-locking with T2*, 1 - F_avg",
        sources.ITHIER,
        expected,
        found.infidelity,
        abs=allowed,
    )


@pytest.mark.parametrize(
    ("frequency", "qubit", "oscillator"),
    [(1e6, 5.02644e-05, 5.02644e-07), (47e6, 5.34976e-07, 1.18176e-05)],
)
def test_a_spur_of_the_phase_in_both_frames(
    frequency: float, qubit: float, oscillator: float, validate: Validate
) -> None:
    """A pi pulse at 10 MHz under a spur of 0.01 rad: a hundred times apart where it is slow."""
    edge = 1e-4 * frequency
    density = 0.01**2 / 2 / (2 * edge)
    noise = PhaseNoise(
        "phase",
        points=((frequency - edge, density), (frequency + edge, density)),
        below="zero",
        above="zero",
    )
    found = effect(np.full(401, 10e6, dtype=np.complex128), noise, 50e-9)
    (source,) = found.sources
    for name, wanted, got in (
        ("qubit's", qubit, source.infidelity),
        ("oscillator's", oscillator, source.oscillator_frame),
    ):
        validate(
            f"spur at {frequency / 1e6:.0f} MHz through [[noise]], {name} frame, 1 - F_pro",
            sources.BALL,
            wanted,
            1.5 * got,
            # The card's six digits, and (1e-4)^2 of the band.
            rel=1e-5,
            card="C07",
        )
