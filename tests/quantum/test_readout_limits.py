"""Oracles: exact diagonalisation of a transmon and a resonator, and published closed forms."""

import math

import numpy as np
import pytest

from cosim.errors import InputError
from cosim.quantum.qubit import Qubit
from cosim.quantum.readout_limits import (
    check_chi,
    critical_photon_number,
    dephasing_rate,
    dispersive_guards,
    filtered_purcell_rate,
    purcell_rate,
    stark_shift,
    transmon_chi,
    transmon_pulls,
    two_level_chi,
)
from cosim.quantum.resonator import amplitude_for_photons, steady_field
from tests import sources
from tests.quantum.readouts import CHI, FREQUENCY, KAPPA, TURN, reflecting
from tests.validation import Validate

TOPIC = "readout"
DIGITS = 1e-6  # Seven digits in the expected value.
G, DELTA, ALPHA = TURN * 60e6, TURN * -1.5e9, TURN * -0.3e9


def resonances(coupling: float, delta: float, alpha: float, levels: int) -> np.ndarray:
    """Diagonalise a ladder and a resonator that exchange quanta; give the shifts of one photon.

    The bare resonator is the zero of energy for each photon, since quanta are conserved; that of
    each level of the ladder is in the ascending order of its bare index.
    """
    photons = 4
    n, m = np.arange(levels), np.arange(photons)
    b, c = np.diag(np.sqrt(n[1:]), 1), np.diag(np.sqrt(m[1:]), 1)
    bare = delta * n + alpha / 2 * n * (n - 1)
    h = np.kron(np.diag(bare), np.eye(photons))
    h = h + coupling * (np.kron(b.T, c) + np.kron(b, c.T))
    energies, states = np.linalg.eigh(h)

    def energy(level: int, photon: int) -> float:
        return float(energies[np.argmax(np.abs(states[photons * level + photon]))])

    return np.array([energy(level, 1) - energy(level, 0) for level in range(3)])


def test_dispersive_shift_of_a_transmon(validate: Validate) -> None:
    """Card D05: g, Delta, alpha over 2 pi = 60, -1500, -300 MHz."""
    source = sources.KOCH
    chi = transmon_chi(G, DELTA, ALPHA) / TURN
    validate("chi of a transmon", source, -400e3, chi, "Hz", rel=DIGITS, card="D05")
    spin = two_level_chi(G, DELTA) / TURN
    quantity = "chi of a true two-level system"
    validate(quantity, sources.BLAIS, -2.4e6, spin, "Hz", rel=DIGITS, card="D05")
    exact = resonances(G, DELTA, ALPHA, 6)
    # The next order is 4 (g/Delta)**2 and more, 0.6 % each for two levels: 2 % in the card.
    quantity = "distance of the resonances by exact diagonalisation"
    validate(quantity, source, -800e3, (exact[1] - exact[0]) / TURN, "Hz", rel=0.02, card="D05")


@pytest.mark.parametrize("delta", [-1.5e9, 2.4e9, 0.1e9])
def test_all_levels_agree_with_exact_diagonalisation(delta: float) -> None:
    """The last detuning lies between the transitions, where the shift turns its sign."""
    # Weak, so that the next order is (g/Delta)**2 = 1e-4 of the shift at the least detuning.
    pulls = np.array(transmon_pulls(TURN * 1e6, TURN * delta, ALPHA))
    exact = resonances(TURN * 1e6, TURN * delta, ALPHA, 6)
    # A few terms of that order, some with the two-photon transition, which is as near.
    assert pulls == pytest.approx(exact, rel=2e-3)
    chi = transmon_chi(TURN * 1e6, TURN * delta, ALPHA)
    assert chi == pytest.approx((pulls[1] - pulls[0]) / 2)
    assert (chi > 0) == (0 < delta < 0.3e9)


def test_critical_photon_number(validate: Validate) -> None:
    """Card D06."""
    found = critical_photon_number(G, DELTA)
    validate("critical photon number", sources.BLAIS, 156.25, found, rel=DIGITS, card="D06")


def test_measurement_induced_dephasing(validate: Validate) -> None:
    """Card D10: kappa, chi over 2 pi = 5, 1 MHz, half a photon, probed midway."""
    resonator = reflecting()
    amplitude = amplitude_for_photons(resonator, 0.5, FREQUENCY)
    low, high = (complex(steady_field(resonator, level, amplitude, FREQUENCY)) for level in (0, 1))
    rate = float(dephasing_rate(resonator, low, high))
    shift = float(stark_shift(resonator, low, high))
    source = sources.GAMBETTA_DEPHASING
    quantity = "dephasing by half a photon"
    validate(quantity, source, 4.333231e6, rate, "1/s", rel=DIGITS, card="D10")
    quantity = "shift of the qubit by half a photon"
    validate(quantity, source, 724137.9, shift / TURN, "Hz", rel=DIGITS, card="D10")
    # The SNR of card D09 per time: SNR**2 = 4 eta kappa tau |a1 - a0|**2.
    ratio = 4 * KAPPA * abs(high - low) ** 2 / rate
    quantity = "SNR**2 over efficiency, dephasing rate and time"
    validate(quantity, sources.CLERK, 8.0, ratio, rel=DIGITS, card="D10")
    # For chi << kappa the exact rate goes over into 8 chi**2 n/kappa; what is left is
    # 4 chi**2/kappa**2 = 1.6e-7.
    weak = reflecting(chi=CHI / 1000)
    amplitude = amplitude_for_photons(weak, 0.5, FREQUENCY)
    low, high = (complex(steady_field(weak, level, amplitude, FREQUENCY)) for level in (0, 1))
    found = float(dephasing_rate(weak, low, high)) * 1e6
    quantity = "dephasing by half a photon, small chi, scaled by 1e6"
    validate(quantity, source, 5.026548e6, found, "1/s", rel=DIGITS, card="D10")


def test_other_pairs_of_levels_dephase_by_their_own_shift() -> None:
    resonator = reflecting()
    with pytest.raises(InputError, match="chi_2"):
        dephasing_rate(resonator, 1.0, 1.0j, (1, 2))
    assert dephasing_rate(resonator, 1.0, -1.0j, (1, 0)) == pytest.approx(-2 * CHI)


def test_purcell_decay(validate: Validate) -> None:
    """Card D16: qubit 6 GHz, resonator 7 GHz, g, kappa over 2 pi = 60, 2 MHz, filter of Q = 30."""
    kappa, qubit, resonator = TURN * 2e6, TURN * 6e9, TURN * 7e9
    t1 = 1 / purcell_rate(kappa, G, qubit - resonator)
    validate("T1 by Purcell", sources.HOUCK, 2.210485e-5, t1, "s", rel=DIGITS, card="D16")
    t1 = 1 / filtered_purcell_rate(kappa, G, qubit, resonator, 30.0)
    quantity = "T1 by Purcell behind a filter"
    validate(quantity, sources.SETE, 2.210485e-4, t1, "s", rel=DIGITS, card="D16")
    # One quantum shared by a qubit and a resonator that decays; the card grants the closed form
    # 2 %, of which 3 (g/Delta)**2 = 1.1 % are its next order.
    h = np.array([[qubit - resonator, G], [G, -0.5j * kappa]])
    exact = -2 * np.linalg.eigvals(h).imag
    quantity = "T1 by Purcell from the decaying modes"
    validate(quantity, sources.HOUCK, 2.210485e-5, 1 / exact.min(), "s", rel=0.02, card="D16")


class TestGuards:
    qubit = Qubit(4.5e9, 3, -0.3e9)

    def test_the_numbers(self) -> None:
        resonator = reflecting(chi=TURN * -0.4e6)
        found = dispersive_guards(resonator, self.qubit, G, photons=7.0)
        assert found.photons == 7.0
        assert found.critical_photons == pytest.approx(156.25)
        assert found.coupling_ratio == pytest.approx(0.04)
        assert found.expected_chi == pytest.approx(TURN * -0.4e6)
        assert found.purcell_rate == pytest.approx(KAPPA * 0.0016)

    def test_a_spin_needs_no_anharmonicity(self) -> None:
        found = check_chi(reflecting(chi=TURN * -2e6), Qubit(4.5e9), G)
        assert found == pytest.approx(TURN * -2.4e6)

    def test_a_contrary_sign_is_refused(self) -> None:
        with pytest.raises(InputError, match=r"chi: got 400000 Hz, .* make -400000 Hz"):
            check_chi(reflecting(chi=TURN * 0.4e6), self.qubit, G)
        # Between the transitions the sign is the other one.
        near = Qubit(FREQUENCY - 0.15e9 + 0.3e9, 3, -0.3e9)
        with pytest.raises(InputError, match="chi: got -"):
            check_chi(reflecting(chi=TURN * -0.4e6), near, G)

    def test_where_no_dispersive_shift_exists(self) -> None:
        with pytest.raises(
            InputError, match=r"detuning of \|0>-\|1> from the resonator other than"
        ):
            check_chi(reflecting(), Qubit(FREQUENCY, 3, -0.3e9), G)
        with pytest.raises(InputError, match=r"detuning of \|1>-\|2>"):
            transmon_chi(G, -ALPHA, ALPHA)
        with pytest.raises(InputError, match=r"detuning of \|2>-\|3>"):
            transmon_pulls(G, -2 * ALPHA, ALPHA)
        with pytest.raises(InputError, match="coupling g"):
            critical_photon_number(0.0, DELTA)
        with pytest.raises(InputError, match="coupling g"):
            check_chi(reflecting(), self.qubit, math.nan)
        with pytest.raises(InputError, match="quality"):
            filtered_purcell_rate(KAPPA, G, TURN * 6e9, TURN * 7e9, 0.0)
