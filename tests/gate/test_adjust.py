"""Oracle: pulses of which the best scale and carrier offset are known beforehand."""

import math

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from cosim.adjust import SCALE_RANGE, Pulse, calibrate_pulse
from cosim.quantum.evolution import DriveSpline
from cosim.quantum.fidelity import target_unitary
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray

CARRIER, DURATION = 5e9, 40e-9
X90: ComplexArray = target_unitary((1, 0, 0), math.pi / 2)
X180: ComplexArray = target_unitary((1, 0, 0), math.pi)


def pulse(angle: float, *, qubit: Qubit | None = None, phase: float = 0.0) -> Pulse:
    """A raised-cosine pulse that turns by `angle`: half the peak rate times the duration."""
    t = np.arange(0, DURATION + 1e-15, 1 / (80 * CARRIER))
    envelope = 2 * angle / DURATION * np.sin(np.pi * t / DURATION) ** 2
    spline = CubicSpline(t, envelope * np.cos(2 * np.pi * CARRIER * t + phase))
    drive = DriveSpline(spline.x, spline.c)
    return Pulse(qubit or Qubit(CARRIER), drive, 0.0, float(t[-1]))


@pytest.mark.parametrize("error", [0.0, 0.001, 0.01, -0.01, 0.1, -0.15, 0.2])
@pytest.mark.parametrize(("target", "angle"), [(X90, math.pi / 2), (X180, math.pi)])
def test_the_scale_undoes_an_amplitude_error(
    target: ComplexArray, angle: float, error: float
) -> None:
    found = calibrate_pulse(pulse(angle * (1 + error), phase=0.3), target)
    # The counter-rotating part moves the angle by a relative (Omega/4 omega)^2 < 1e-5.
    assert found.scale == pytest.approx(1 / (1 + error), rel=2e-5)
    # The Bloch-Siegert shift, 12 kHz on the mean at a peak of 25 MHz, tilts the axis of a half
    # turn by 2 pi 12 kHz x 40 ns = 3e-3, which no scale undoes: (3e-3)^2/6 = 1.5e-6.
    assert found.frame.average_gate_fidelity == pytest.approx(1, abs=1.5e-6)


def test_an_over_rotation_past_the_half_turn_is_seen() -> None:
    """A pulse of 185 degrees looks like one of 175 about the opposite axis."""
    found = calibrate_pulse(pulse(math.radians(185)), X180, guess=180 / 175)
    assert found.scale == pytest.approx(180 / 185, rel=2e-5)  # as above


def test_the_scale_stays_in_its_range() -> None:
    found = calibrate_pulse(pulse(math.pi / 4), X90, guess=2.0)
    assert SCALE_RANGE[0] <= found.scale <= SCALE_RANGE[1]
    assert found.scale == pytest.approx(SCALE_RANGE[1], abs=1e-4)  # the search's own tolerance
    assert found.frame.average_gate_fidelity < 0.99


def test_decoherence_does_not_move_the_scale() -> None:
    clean = calibrate_pulse(pulse(1.6), X90)
    noisy = calibrate_pulse(pulse(1.6, qubit=Qubit(CARRIER, t1=5e-6, t2=2e-6)), X90)
    assert noisy.scale == clean.scale
    assert noisy.frame.average_gate_fidelity < clean.frame.average_gate_fidelity - 1e-3


def test_the_carrier_offset_finds_a_detuned_qubit() -> None:
    """A detuned half turn does not reach the opposite pole, whatever the amplitude."""
    qubit = Qubit(CARRIER + 2e6)
    alone = calibrate_pulse(pulse(3.0, qubit=qubit), X180)
    both = calibrate_pulse(pulse(3.0, qubit=qubit), X180, with_detuning=True)
    assert 1 - alone.frame.average_gate_fidelity > 1e-3
    assert 1 - both.frame.average_gate_fidelity < 1e-9
    # The Bloch-Siegert shift belongs to the offset: 31 kHz at the peak of 25 MHz.
    assert both.detuning == pytest.approx(2e6, abs=31e3)
    assert both.scale == pytest.approx(math.pi / 3.0, rel=1e-4)


@pytest.mark.parametrize(
    "detuning", [3e6, *(pytest.param(d, marks=pytest.mark.full) for d in (-20e6, 40e6, -60e6))]
)
def test_the_pair_is_found_from_far_away(detuning: float) -> None:
    """No amplitude mends a strongly detuned half turn, so the offset must come first."""
    found = calibrate_pulse(
        pulse(math.pi, qubit=Qubit(CARRIER + detuning)),
        X180,
        guess=1.2,
        with_detuning=True,
        resonance=detuning,
    )
    assert 1 - found.frame.average_gate_fidelity < 1e-9
    assert found.detuning == pytest.approx(detuning, abs=40e3)  # the Bloch-Siegert shift
    assert found.scale == pytest.approx(1.0, rel=1e-3)  # its second order


def test_the_offset_alone() -> None:
    detuned = pulse(math.pi, qubit=Qubit(CARRIER + 5e6))
    found = calibrate_pulse(detuned, X180, with_amplitude=False, with_detuning=True, resonance=5e6)
    assert found.scale == 1.0
    assert found.detuning == pytest.approx(5e6, abs=40e3)  # the Bloch-Siegert shift
    assert 1 - found.frame.average_gate_fidelity < 1e-9


@pytest.mark.full
def test_a_quarter_turn_stays_at_resonance() -> None:
    """Scale and offset do the same to it when Z is free: the pair next to resonance is told."""
    found = calibrate_pulse(
        pulse(math.pi / 2, qubit=Qubit(CARRIER - 8e6)), X90, with_detuning=True, resonance=-8e6
    )
    assert found.detuning == pytest.approx(-8e6, abs=0.2e6)  # two simplex steps of 0.01 turn/T
    assert found.scale == pytest.approx(1.0, abs=0.01)  # likewise, its first step
