"""Oracle: Rabi's formula and the perturbation series of a far-detuned drive."""

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from cosim.adjust import Pulse
from cosim.coupling import DriveLine, drive_rate
from cosim.errors import InputError, TestbenchError
from cosim.neighbours import idle_effect, spectator_effects
from cosim.noise_setup import LineOfNoise
from cosim.noises import AmplitudeNoise, DetuningNoise, Noise, PhaseNoise
from cosim.quantum.evolution import DriveSpline
from cosim.quantum.qubit import Qubit
from cosim.qubit_drive import QubitDrive
from cosim.schema import SpectatorTable
from cosim.side_results import IdleEffect
from cosim.voltage_noises import ProbeNoise
from cosim.waveform import Envelope, Waveform
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


def line(duration: float, *noises: Noise, level: float = 1.0, samples: int = 1000) -> LineOfNoise:
    """The envelope of such a pulse, of so many volts, with noise on it."""
    iq = np.full(401, level, dtype=np.complex128)
    return LineOfNoise(Envelope(0.0, duration / 400, iq, CARRIER), noises, samples, 3, {})


QUIET = line(DURATION)


def spin(offset: float, **keys: object) -> SpectatorTable:
    return SpectatorTable("spin", RABI, offset=offset, **keys)  # type: ignore[arg-type]


# The counter-rotating part turns the state by up to Omega/(4 omega_c) in amplitude, which adds to
# that of the flip: 2 sqrt(P) Omega/(4 omega_c) in P.
COUNTER = RABI / (4 * CARRIER)


@pytest.mark.parametrize("ratio", [1.0, 4.0, math.sqrt(3.0), math.sqrt(15.0)])
def test_a_detuned_neighbour_is_flipped_as_rabi_has_it(ratio: float, validate: Validate) -> None:
    drive, pulse, _ = played()
    found = spectator_effects([spin(ratio * RABI)], drive, pulse, QUIET)[0].effect
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


@pytest.mark.full
def test_a_far_neighbour_turns_by_the_stark_shift(validate: Validate) -> None:
    drive, pulse, _ = played(40 * DURATION)
    offset = 40 * RABI
    found = spectator_effects([spin(offset)], drive, pulse, QUIET)[0].effect
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
    found = spectator_effects(both, drive, pulse, QUIET)
    twin, far = (item.effect for item in found)
    assert (twin.name, far.name) == ("twin", "spectator 2")
    # The same qubit under the same pulse: a pi pulse but for the counter-rotating part.
    assert twin.infidelity < 10 * COUNTER**2
    assert twin.rotation.angle == pytest.approx(math.pi, abs=4 * COUNTER)
    assert all(item.warnings == () for item in found)


def test_a_spectator_on_the_carrier_is_named() -> None:
    drive, pulse, _ = played()
    (found,) = spectator_effects([spin(2e6, name="q3")], drive, pulse, QUIET)
    (text,) = found.warnings
    assert text.startswith("'q3': it lies 2e+06 Hz from the carrier, within the pulse's own width")


def test_an_unknown_target_names_its_table() -> None:
    drive, pulse, _ = played()
    with pytest.raises(TestbenchError, match=r"\[\[spectator\]\] number 1, key 'target'"):
        spectator_effects([spin(1e6, target="x91")], drive, pulse, QUIET)


def test_a_transmon_neighbour_leaks() -> None:
    drive, pulse, _ = played()
    # Its second transition lies on the carrier: that is driven, sqrt(2) as strongly, by a pulse
    # of pi on the first of the target.
    table = SpectatorTable("transmon", RABI, offset=200e6, anharmonicity=-200e6)
    found = spectator_effects([table], drive, pulse, QUIET)[0].effect
    # |1> goes to |2> with probability sin^2(sqrt(2) pi/2); half of the subspace is |1>.
    expected = math.sin(math.sqrt(2) * math.pi / 2) ** 2 / 2
    # The other transitions are 40 Rabi frequencies away: (1/40)^2 of their populations.
    assert found.leakage == pytest.approx(expected, abs=5e-3)


def test_two_gates_at_once_by_two_tones_on_one_line() -> None:
    """Each tone turns its own qubit by pi; the other tone shifts it, which virtual Z absorbs."""
    spacing, duration = 100e6, 1e-6
    rabi = 0.5 / duration  # Hz at 1 V
    # The spline of 40 points per period errs by 2e-6, far below what is compared here.
    t = np.linspace(0.0, duration, round(duration * CARRIER * 40) + 1)
    wave = np.cos(2 * math.pi * CARRIER * t) + np.cos(2 * math.pi * (CARRIER + spacing) * t)
    drive = QubitDrive(
        CARRIER, False, False, Qubit(CARRIER), DriveLine(rabi_per_volt=rabi), (0.0, duration)
    )
    rate = drive_rate(Waveform(t, wave), drive.line)
    spline = CubicSpline(rate.t, rate.v)
    pulse = Pulse(drive.qubit, DriveSpline(spline.x, spline.c), 0.0, duration)
    grid = np.linspace(0.0, duration, 4001)
    iq = 1.0 + np.exp(2j * math.pi * spacing * grid)
    # The amplitude of both fluctuates alike: each pi pulse loses (pi s)^2/6 by it.
    spread = 3e-3
    noise = AmplitudeNoise("amplitude", deviation=spread)
    both = LineOfNoise(Envelope(0.0, grid[1], iq, CARRIER), (noise,), 16, 1, {})
    tables = [
        SpectatorTable("spin", rabi, offset=spacing, target="x"),
        SpectatorTable("spin", rabi, offset=-spacing, target="identity"),
    ]
    driven, idle = (item.effect for item in spectator_effects(tables, drive, pulse, both))
    lost = (math.pi * spread) ** 2 / 6
    # A tone 200 Rabi frequencies away turns by 1/200 off axis at the most, 1/200^2 in population.
    assert driven.free_frame_infidelity == pytest.approx(lost, abs=200.0**-2)
    assert driven.noise is not None
    # Its part by noise has no such remainder but at the ends, first order in 1/200 of itself.
    assert driven.noise.infidelity == pytest.approx(lost, rel=0.02)
    assert driven.rotation.angle == pytest.approx(math.pi, abs=4 / 200)
    assert idle.free_frame_infidelity < 200.0**-2
    undriven = SpectatorTable("spin", rabi, offset=spacing / 2, target="x")
    assert spectator_effects([undriven], drive, pulse, both)[0].effect.infidelity > 0.3


def silent(duration: float) -> tuple[QubitDrive, Pulse]:
    drive, pulse, _ = played(duration)
    return drive, Pulse(pulse.qubit, DriveSpline(pulse.drive.t, 0.0 * pulse.drive.c), 0.0, duration)


@pytest.mark.full
def test_noise_of_the_line_flips_a_neighbour_by_the_golden_rule(validate: Validate) -> None:
    duration, density, samples = 1e-6, 4e-12, 800  # s; V^2/Hz
    drive, pulse = silent(duration)
    noises = (ProbeNoise("probe", white=density), DetuningNoise("detuning", white=1e6))
    table = SpectatorTable("spin", 2 * RABI, offset=50e6)
    noise = line(duration, *noises, level=0.0, samples=samples)
    found = spectator_effects([table], drive, pulse, noise)[0].effect
    assert found.noise is not None
    (source,) = found.noise.sources  # The detuning's is the other qubit's own.
    expected = 2 * (2 * math.pi * 2 * RABI) ** 2 * density / 2 * duration / 3
    validate(
        "loss of a neighbour by white noise of the line, to first order",
        sources.GOLDEN_RULE,
        expected,
        source.infidelity + source.unreached,
        # The sum over frequencies, and the bound on what is left of it above the band.
        rel=2e-3,
    )
    # The samples see the same, within four standard errors and second order.
    allowed = 4 * found.noise.standard_error + 2 * expected**2
    assert found.noise.infidelity == pytest.approx(expected, abs=allowed)
    # Without a drive and with one tone of noise the channel is that of noise alone.
    assert found.infidelity == pytest.approx(found.noise.infidelity, abs=1e-9)
    detuned = line(duration, noises[1], level=0.0)
    assert spectator_effects([table], drive, pulse, detuned)[0].effect.noise is None


@pytest.mark.full
def test_a_fluctuating_amplitude_makes_the_stark_phase_of_a_far_neighbour_fluctuate() -> None:
    drive, pulse, _ = played(40 * DURATION)
    spread, offset = 0.01, 40 * RABI
    # 401 samples of a constant carry it; slices are set by the offset, 64 in a turn of it.
    noise = line(40 * DURATION, AmplitudeNoise("amplitude", deviation=spread))
    found = spectator_effects([spin(offset)], drive, pulse, noise)[0].effect
    shift = math.hypot(offset, RABI) - offset
    turn = 2 * math.pi * shift * 40 * DURATION * 2 * spread  # twice: it goes with the square
    assert found.noise is not None
    # To first order in the spread, 1 %, and in (Rabi/offset)^2; what is left of the flip adds a
    # quarter of (pi spread/40)^2 at the most.
    flip = (math.pi * spread / 40) ** 2 / 4
    expected = (1 - math.exp(-(turn**2) / 2)) / 3
    assert found.noise.infidelity == pytest.approx(expected, rel=5e-3, abs=flip)


def test_all_qubits_see_the_same_noise() -> None:
    drive, pulse, _ = played()
    noises = (PhaseNoise("phase", white=1e-12, high=1e9), ProbeNoise("probe", white=1e-14))
    noise = line(DURATION, *noises, samples=64)
    own = noise.on(drive)
    twin = spectator_effects([spin(0.0)], drive, pulse, noise)[0].effect
    assert own is not None
    assert twin.noise is not None
    assert twin.noise.infidelity == own.effect.infidelity


def test_a_second_transition_on_the_carrier_is_named() -> None:
    drive, pulse, _ = played(DURATION)
    table = SpectatorTable("transmon", RABI, offset=302e6, anharmonicity=-300e6)
    found = spectator_effects([table], drive, pulse, line(DURATION))[0]
    assert found.warnings[0].startswith(
        "'spectator 1': its second transition lies 2e+06 Hz from the carrier"
    )
    # A pi pulse on a transition with sqrt(2) of the coupling empties |1>, half of the population,
    # but for (1 - cos(sqrt(2) pi))/2 and the offset of two in five of the Rabi frequency.
    assert found.effect.leakage > 0.1


def test_levels_that_are_too_few_are_named_with_their_table() -> None:
    drive, pulse, _ = played(0.1 * DURATION)
    # The peak Rabi frequency of 500 MHz is beyond an anharmonicity of 100 MHz.
    table = SpectatorTable("transmon", 100 * RABI, offset=50e6, anharmonicity=-100e6, levels=3)
    found = spectator_effects([table], drive, pulse, line(0.1 * DURATION))[0]
    assert any(
        "3 levels are too few" in text and "[[spectator]] number 1" in text
        for text in found.warnings
    )


def rest(offset: float, duration: float, *noises: Noise, left: float = 1e-3) -> IdleEffect:
    """A qubit at 5 GHz + offset under what is left of 1 V, without relaxation."""
    drive, pulse, wave = played(duration)
    qubit = Qubit(CARRIER + offset)
    weak = Pulse(qubit, DriveSpline(pulse.drive.t, left * pulse.drive.c), 0.0, duration)
    quiet = Waveform(wave.t, left * wave.v)
    noise = line(duration, *noises, level=left, samples=64)
    own = replace(drive, qubit=qubit)
    return idle_effect((0.0, duration), own, weak, quiet, 1.0, noise)[0]


def test_rest_under_a_leaking_carrier() -> None:
    found = rest(0.0, 1e-6)
    angle = 2 * math.pi * 1e-3 * RABI * 1e-6
    # On resonance what leaks rotates: 1 - F_avg = (2/3) sin^2(angle/2); counter-rotating part as
    # above, in proportion to the drive.
    assert found.infidelity == pytest.approx(2 / 3 * math.sin(angle / 2) ** 2, rel=1e-3)
    assert found.residual == pytest.approx(1e-3, rel=1e-12)
    assert found.extinction == pytest.approx(60.0, rel=1e-12)
    assert found.noise is None
    assert found.flip_rate == found.dephasing_rate == 0.0
    assert found.rotation is not None
    assert found.rotation.angle == pytest.approx(angle, rel=1e-3)
    # Of the cosine's first and last half turn the counter-rotating part, 2 RABI/CARRIER, is left.
    assert found.rotation.axis == pytest.approx((1.0, 0.0, 0.0), abs=2e-3)


def test_what_is_left_of_the_carrier_shifts_a_detuned_qubit(validate: Validate) -> None:
    offset, left = 20e6, 0.2
    found = rest(offset, 2e-6, left=left)
    rabi = left * RABI
    shift = math.hypot(offset, rabi) - offset + rabi**2 / (2 * (2 * CARRIER + offset))
    validate(
        "Stark shift at rest by a carrier 20 Rabi frequencies away",
        sources.BLOCH_SIEGERT,
        shift,
        found.stark_shift,
        "Hz",
        # What is left of the flip, up to (1/20)^2, moves the best phase over 2 us by up to half
        # of that.
        abs=(rabi / offset) ** 2 / (2 * 2 * math.pi * 2e-6),
    )


def test_noise_at_rest_makes_rates() -> None:
    noises = (ProbeNoise("probe", white=1e-18), DetuningNoise("detuning", white=100.0))
    found = rest(0.0, 1e-6, *noises)
    # Golden rule, and S/4 of the detuning in rad/s.
    assert found.flip_rate == pytest.approx((2 * math.pi * RABI) ** 2 * 1e-18 / 2, rel=1e-12)
    assert found.dephasing_rate == pytest.approx((2 * math.pi) ** 2 * 100.0 / 4, rel=1e-12)
    assert found.noise is not None
    clean = rest(0.0, 1e-6)
    # The loss by noise is part of the infidelity; the two hardly interfere, as 1 - 2/3 x.
    whole = clean.infidelity + found.noise.infidelity
    assert found.infidelity == pytest.approx(whole, rel=2 * clean.infidelity)


@pytest.mark.full
@pytest.mark.parametrize("kind", ["amplitude", "phase"])
def test_noise_of_a_leaking_carrier_flips_a_detuned_qubit(kind: str) -> None:
    """Two ways: the golden rule, and the filter function of all that happens in the stretch."""
    noise: Noise = (
        AmplitudeNoise("amplitude", white=1e-11)
        if kind == "amplitude"
        else PhaseNoise("phase", white=1e-11)
    )
    duration, left = 2.5e-6, 0.02
    found = rest(20e6, duration, noise, left=left)
    rate = (2 * math.pi * left * RABI) ** 2 * 1e-11 / 8
    assert found.flip_rate == pytest.approx(rate, rel=1e-12, abs=0.0)
    assert found.noise is not None
    (source,) = found.noise.sources
    # Up and down, as a loss. The Stark shift by what is left, Rabi/offset = 1/200, fluctuates too,
    # second order in that; and a stretch of 50 turns resolves the offset to 2 %.
    assert source.infidelity + source.unreached == pytest.approx(2 * rate * duration / 3, rel=0.02)


def test_noise_at_rest_names_its_stretch() -> None:
    drive, pulse, wave = played(1e-6)
    slow = DetuningNoise("detuning", name="flux", points=((1e3, 1.0), (1e6, 1.0)), above="zero")
    _, warnings = idle_effect((2e-7, 8e-7), drive, pulse, wave, 1.0, line(1e-6, slow, samples=16))
    assert any(text.startswith("at rest: noise 'flux'") for text in warnings)
    with pytest.raises(InputError):
        idle_effect((2e-7, 2e-6), drive, pulse, wave, 1.0, QUIET)
