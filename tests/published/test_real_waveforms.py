"""Oracle: published formulas for driven qubits, reached by the kernel on real waveforms."""

import math

import numpy as np
import pytest
from scipy import constants

from cosim.adjust import Pulse, calibrate_pulse
from cosim.quantum.channel import apply_channel
from cosim.quantum.evolution import DriveSpline, evolve, propagate_unitary
from cosim.quantum.fidelity import rotation_of, target_unitary
from cosim.quantum.frame import phase_frame
from cosim.quantum.qubit import Qubit
from tests import sources
from tests.quantum.drives import spline
from tests.validation import Validate

TOPIC = "dynamics without rotating wave"


def test_spin_in_an_oscillating_field(validate: Validate) -> None:
    # B02: g = 2.0023193, static 35.7 mT, linear field of 0.1 mT peak across it. The energy of a
    # spin 1/2 in the field is g mu_B B1 cos(w t) sigma_x/2.
    g, static, field = 2.0023193, 35.7e-3, 0.1e-3
    bohr = constants.physical_constants["Bohr magneton"][0]
    larmor = g * bohr * static / constants.h
    t = np.linspace(0.0, 1 / larmor, 201)
    drive = spline(t, g * bohr * field / (2 * constants.hbar) * np.cos(2 * np.pi * larmor * t))
    period = propagate_unitary(Qubit(larmor), drive, 0.0, float(t[-1]))
    # The angle per period of the carrier; what the counter-rotating part adds is of the order of
    # (Rabi frequency/carrier)^2 = 2e-6.
    rabi = rotation_of(period).angle * larmor / (2 * math.pi)
    source = sources.ABRAGAM
    formula = source + ", g mu_B B1/(2 h)"
    quantity = "Rabi frequency of a spin, linear field of 0.1 mT peak"
    validate(quantity, formula, 1.401248e06, rabi, "Hz", rel=1e-5, card="B02")
    quantity = "half turn of a spin, linear field of 0.1 mT peak"
    formula = source + ", h/(g mu_B B1)"
    validate(quantity, formula, 3.568249e-07, 0.5 / rabi, "s", rel=1e-5, card="B02")


@pytest.mark.parametrize(("shape", "peak"), [("truncated", 41.79596e6), ("lifted", 46.70746e6)])
def test_area_of_a_gaussian(validate: Validate, shape: str, peak: float) -> None:
    # B10: standard deviation 5 ns, window 20 ns. The search of the calibration finds the peak of
    # the half turn, from 10 % above. At 200 GHz the kicks of the truncated edges, 6e-5 rad, are
    # orthogonal to the angle, and the counter-rotating part changes it by (Omega/4 omega)^2.
    carrier, sigma, length = 200e9, 5e-9, 20e-9
    t = np.arange(round(length * carrier * 40) + 1) / (carrier * 40)
    gauss = np.exp(-((t - length / 2) ** 2) / (2 * sigma**2))
    lift = math.exp(-(length**2) / (8 * sigma**2)) if shape == "lifted" else 0.0
    start = 1.1 * peak
    rate = 2 * np.pi * start * (gauss - lift) / (1 - lift) * np.cos(2 * np.pi * carrier * t)
    pulse = Pulse(Qubit(carrier), spline(t, rate), 0.0, float(t[-1]))
    found = calibrate_pulse(pulse, target_unitary((1, 0, 0), math.pi), guess=1 / 1.1)
    quantity = f"peak Rabi frequency of a {shape} Gaussian half turn, sigma 5 ns, window 20 ns"
    got = found.scale * start
    # The search stops at 1e-6 in the scale.
    validate(quantity, sources.GAUSSIAN_INTEGRAL, peak, got, "Hz", rel=5e-6, card="B10")


def phase_of_one(drive: DriveSpline, qubit: Qubit) -> float:
    """Phase that |1> gains against |0>, in rad."""
    u = propagate_unitary(qubit, drive, float(drive.t[0]), float(drive.t[-1]))
    return float(np.angle(u[1, 1] / u[0, 0]))


@pytest.mark.parametrize(
    ("levels", "alpha", "shift"),
    [pytest.param(5, -330e6, -383720.9, marks=pytest.mark.full), (2, 0.0, -500000.0)],
)
def test_shift_by_a_drive_off_resonance(
    validate: Validate, levels: int, alpha: float, shift: float
) -> None:
    # B12: peak Rabi frequency 10 MHz, f_01 - f_d = -100 MHz, in a raised-cosine burst, over which
    # the mean of the Rabi frequency's square is 3/8 of its peak's. At 62 GHz the counter-rotating
    # part is 100 MHz/124 GHz of the shift; the card grants 2 % for higher orders.
    qubit = Qubit(62e9, levels, alpha)
    length, drive_frequency = 200e-9, 62.1e9
    t = np.arange(round(length * drive_frequency * 40) + 1) / (drive_frequency * 40)
    envelope = 2 * np.pi * 10e6 * np.sin(np.pi * t / t[-1]) ** 2
    drive = spline(t, envelope * np.cos(2 * np.pi * drive_frequency * t))
    got = -phase_of_one(drive, qubit) / (2 * np.pi * t[-1] * 3 / 8)
    name = "a transmon" if levels > 2 else "two levels"
    quantity = f"shift of {name} by a burst of 10 MHz, f_01 - f_d = -100 MHz"
    formula = "Omega^2 alpha/(2 Delta (Delta + alpha))" if levels > 2 else "Omega^2/(2 Delta)"
    source = f"{sources.SCHNEIDER}, {formula}"
    validate(quantity, source, shift, got, "Hz", rel=0.02, card="B12")


@pytest.mark.full
def test_sweep_through_a_crossing(validate: Validate) -> None:
    # B19: gap 2 x 10 MHz, sweep 1e16 Hz/s from -T to T. For the kernel the gap is the qubit's
    # frequency and the sweep is the drive, along x: H/h = 10 MHz sigma_z' + (v t/2) sigma_x.
    gap, speed, half = 20e6, 1e16, 1e-6
    t = np.array([-half, half])
    drive = DriveSpline(t, np.array([[0.0], [0.0], [np.pi * speed], [-np.pi * speed * half]]))
    channel = evolve(Qubit(gap), drive, -half, half)
    laboratory = phase_frame(channel, -2 * np.pi * gap * half, -2 * np.pi * gap * half)
    along = np.full((2, 2), 0.5, dtype=complex)
    stays = float(np.trace(along @ apply_channel(laboratory, along)).real)
    # Stopping at half the gap over v T = 1e-3 leaves an interference of the order of 1e-3.
    validate(
        "probability to stay on the diabatic state, gap 20 MHz, 1e16 Hz/s",
        sources.ZENER + ", exp(-4 pi^2 a^2/v)",
        0.6738255,
        stays,
        rel=2e-3,
        card="B19",
    )
