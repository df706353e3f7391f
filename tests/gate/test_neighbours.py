"""Oracle: Rabi's formula and the perturbation series of a far-detuned drive."""

import math

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from cosim.adjust import Pulse
from cosim.coupling import DriveLine, drive_rate
from cosim.errors import TestbenchError
from cosim.neighbours import idle_effect, spectator_effects, spectator_warnings
from cosim.noises import DetuningNoise
from cosim.quantum.evolution import DriveSpline
from cosim.quantum.qubit import Qubit
from cosim.qubit_drive import QubitDrive
from cosim.schema import SpectatorTable
from cosim.voltage_noises import ProbeNoise
from cosim.waveform import Waveform
from tests import sources
from tests.validation import Validate

TOPIC = "dynamics without rotating wave"

CARRIER = 5e9
RABI = 5e6  # Hz, at the peak of 1 V
DURATION = 0.5 / RABI


def played(duration: float = DURATION) -> tuple[QubitDrive, Pulse, Waveform]:
    """A rectangular pi pulse on a qubit at 5 GHz."""
    t = np.linspace(0.0, duration, round(duration * CARRIER * 80) + 1)
    wave = Waveform(t, np.cos(2 * math.pi * CARRIER * t))
    line = DriveLine(rabi_per_volt=RABI)
    drive = QubitDrive(CARRIER, False, False, Qubit(CARRIER), line, (0.0, duration))
    rate = drive_rate(wave, line)
    spline = CubicSpline(rate.t, rate.v)
    return drive, Pulse(drive.qubit, DriveSpline(spline.x, spline.c), 0.0, duration), wave


def spin(offset: float, **keys: object) -> SpectatorTable:
    return SpectatorTable("spin", RABI, offset=offset, **keys)  # type: ignore[arg-type]


# The counter-rotating part turns the state by up to Omega/(4 omega_c) in amplitude, which adds to
# that of the flip: 2 sqrt(P) Omega/(4 omega_c) in P.
COUNTER = RABI / (4 * CARRIER)


@pytest.mark.parametrize("ratio", [1.0, 4.0, math.sqrt(3.0), math.sqrt(15.0)])
def test_a_detuned_neighbour_is_flipped_as_rabi_has_it(ratio: float, validate: Validate) -> None:
    drive, pulse, _ = played()
    (found,) = spectator_effects([spin(ratio * RABI)], drive, pulse)
    flip = math.sin(math.pi / 2 * math.sqrt(1 + ratio**2)) ** 2 / (1 + ratio**2)
    # At these ratios the neighbour returns exactly; the formula leaves its rounding.
    flip = 0.0 if ratio in (math.sqrt(3.0), math.sqrt(15.0)) else flip
    # With the phase absorbed a unitary of flip probability P has F_avg = 1 - 2 P/3.
    validate(
        f"flip of a neighbour at {ratio:.3f} Rabi frequencies",
        sources.RUSS,
        flip,
        1.5 * found.free_frame_infidelity,
        abs=2 * COUNTER + COUNTER**2,
        card="B20" if ratio == 4.0 else "",
    )


def test_a_far_neighbour_turns_by_the_stark_shift(validate: Validate) -> None:
    drive, pulse, _ = played(40 * DURATION)
    offset = 40 * RABI
    (found,) = spectator_effects([spin(offset)], drive, pulse)
    # A qubit above the carrier is pushed up: its frequency grows by sqrt(delta^2 + Omega^2) -
    # delta, and it runs behind exp(-i phi a^dag a) by phi = 2 pi shift T. Bloch and Siegert's
    # counter-rotating part adds Omega^2/(2 (omega_c + omega_q)) to the shift.
    shift = math.hypot(offset, RABI) - offset
    shift += RABI**2 / (2 * (2 * CARRIER + offset))
    turn = math.remainder(2 * math.pi * shift * 40 * DURATION, 2 * math.pi)
    # What is left of the flip moves the best frame by up to its amplitude squared.
    validate(
        "Stark phase of a far neighbour", sources.BLOCH_SIEGERT, turn, found.phase, "rad", abs=2e-3
    )
    assert found.free_frame_infidelity < found.infidelity


def test_targets_of_their_own_and_names() -> None:
    drive, pulse, _ = played()
    both = [spin(0.0, target="x", name="twin"), spin(30e6)]
    twin, far = spectator_effects(both, drive, pulse)
    assert (twin.name, far.name) == ("twin", "spectator 2")
    # The same qubit under the same pulse: a pi pulse but for the counter-rotating part.
    assert twin.infidelity < 10 * COUNTER**2
    assert twin.rotation.angle == pytest.approx(math.pi, abs=4 * COUNTER)
    assert spectator_warnings([twin, far], drive) == ()


def test_a_spectator_on_the_carrier_is_named() -> None:
    drive, pulse, _ = played()
    found = spectator_effects([spin(2e6, name="q3")], drive, pulse)
    (text,) = spectator_warnings(found, drive)
    assert text.startswith("'q3' lies 2e+06 Hz from the carrier")


def test_an_unknown_target_names_its_table() -> None:
    drive, pulse, _ = played()
    with pytest.raises(TestbenchError, match=r"\[\[spectator\]\] number 1, key 'target'"):
        spectator_effects([spin(1e6, target="x91")], drive, pulse)


def test_a_transmon_neighbour_leaks() -> None:
    drive, pulse, _ = played()
    # Its second transition lies on the carrier: that is driven, sqrt(2) as strongly, by a pulse
    # of pi on the first of the target.
    table = SpectatorTable("transmon", RABI, offset=200e6, anharmonicity=-200e6)
    (found,) = spectator_effects([table], drive, pulse)
    # |1> goes to |2> with probability sin^2(sqrt(2) pi/2); half of the subspace is |1>.
    expected = math.sin(math.sqrt(2) * math.pi / 2) ** 2 / 2
    # The other transitions are 40 Rabi frequencies away: (1/40)^2 of their populations.
    assert found.leakage == pytest.approx(expected, abs=5e-3)


def test_rest_under_a_leaking_carrier_and_noise() -> None:
    drive, pulse, wave = played(1e-6)
    quiet = Waveform(wave.t, 1e-3 * wave.v)
    weak = Pulse(pulse.qubit, DriveSpline(pulse.drive.t, 1e-3 * pulse.drive.c), 0.0, 1e-6)
    noises = (
        ProbeNoise("probe", white=1e-18),
        DetuningNoise("detuning", white=100.0),
    )
    found = idle_effect((0.0, 1e-6), drive, weak, quiet, noises)
    angle = 2 * math.pi * 1e-3 * RABI * 1e-6
    # On resonance what leaks rotates: 1 - F_avg = (2/3) sin^2(angle/2); counter-rotating part as
    # above, in proportion to the drive.
    assert found.infidelity == pytest.approx(2 / 3 * math.sin(angle / 2) ** 2, rel=1e-3)
    assert found.residual == pytest.approx(1e-3, rel=1e-12)
    # Golden rule, and S/4 of the detuning in rad/s.
    assert found.flip_rate == pytest.approx((2 * math.pi * RABI) ** 2 * 1e-18 / 2, rel=1e-12)
    assert found.dephasing_rate == pytest.approx((2 * math.pi) ** 2 * 100.0 / 4, rel=1e-12)
