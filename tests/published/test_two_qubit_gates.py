"""Oracle: published times of two-qubit gates, with a user's own operators on QuTiP's solver.

The coupling is the drive operator, so that its pulse is the rate. Both states of a pair that it
couples are degenerate, as the gates want; operators are taken only if the two lowest states are
not, so these are set 10 Hz apart, which turns the gate by 3e-6 rad. Energies that only depend on
the number of excitations turn phases that the frame takes out; they are chosen such that the
coupled pair is the lowest.
"""

import math

import numpy as np
import qutip

from cosim.quantum.evolution import DriveSpline
from cosim.quantum.fidelity import process_fidelity
from cosim.quantum.operators import operator_system
from cosim.quantum.reference import evolve_operators
from cosim.waveform import ComplexArray
from tests import sources
from tests.quantum.drives import constant
from tests.validation import Validate

TOPIC = "dynamics without rotating wave"
SPLIT = 2 * math.pi * 10.0
FAR = 2 * math.pi * 1e9
# The 10 Hz for 50 ns, squared, and the solver's 1e-10.
ROUNDING = 1e-9


def pulse(coupling: float, duration: float) -> DriveSpline:
    """A constant coupling in Hz."""
    return constant(2 * math.pi * coupling, 0.0, duration)


def two_spins(coupling: qutip.Qobj, split: float, duration: float, strength: float) -> ComplexArray:
    """Channel of two spins under a coupling, on |01>, |10>, |00>, |11> in that order."""
    one, n = qutip.qeye(2), qutip.num(2)
    first, second = qutip.tensor(n, one), qutip.tensor(one, n)
    both = first + second - 2 * first * second  # 1 for |01> and |10>
    energy = -FAR * both + split * first
    # The pair |00>, |11> is set apart as well; what is coupled within each pair stays resonant.
    energy += FAR / 3 * first * second
    system = operator_system(energy, coupling)
    return evolve_operators(system, pulse(strength, duration), 0.0, duration)


def exchange() -> qutip.Qobj:
    sigma = (qutip.sigmax(), qutip.sigmay(), qutip.sigmaz())
    return sum(qutip.tensor(s, s) for s in sigma) / 4


def test_resonant_exchange(validate: Validate) -> None:
    # B16: H = g (s+ s- + h.c.), g/2pi = 10 MHz: |01> goes to -i|10> in 1/(4 g).
    hop = qutip.tensor(qutip.sigmap(), qutip.sigmam())
    source = sources.KRANTZ + ", eqs. (108) to (110), 1/(4 g)"
    for name, duration, part in (("iSWAP", 2.5e-8, 1.0), ("root of iSWAP", 1.25e-8, 0.5)):
        channel = two_spins(hop + hop.dag(), SPLIT, duration, 10e6)
        c, s = math.cos(part * math.pi / 2), math.sin(part * math.pi / 2)
        target = np.eye(4, dtype=complex)
        target[:2, :2] = [[c, -1j * s], [-1j * s, c]]
        got = process_fidelity(channel, target)
        quantity = f"F_pro of {name} after {duration * 1e9:.4g} ns at g = 10 MHz"
        validate(quantity, source, 1.0, got, abs=ROUNDING, card="B16")


def test_exchange_of_spins(validate: Validate) -> None:
    # B17: H = J S1.S2, J/h = 10 MHz; the root of SWAP after 1/(4 J), SWAP after 1/(2 J).
    for name, duration, part in (("SWAP", 5e-8, 1.0), ("root of SWAP", 2.5e-8, 0.5)):
        channel = two_spins(exchange(), SPLIT, duration, 10e6)
        turn = np.exp(1j * math.pi * part)
        target = np.eye(4, dtype=complex)
        target[:2, :2] = [[(1 + turn) / 2, (1 - turn) / 2], [(1 - turn) / 2, (1 + turn) / 2]]
        got = process_fidelity(channel, target)
        quantity = f"F_pro of {name} after {duration * 1e9:.4g} ns at J = 10 MHz"
        validate(quantity, sources.LOSS + ", 1/(4 J)", 1.0, got, abs=ROUNDING, card="B17")


def test_exchange_across_a_large_difference_of_frequencies(validate: Validate) -> None:
    # B17: with |01> and |10> 0.4 GHz apart only J S1z S2z counts: CZ up to local Z in 1/(2 J).
    # The spins still exchange (J/(2 x 400 MHz))^2 = 1.6e-4 of their populations at the most.
    channel = two_spins(exchange(), 2 * math.pi * 0.4e9, 5e-8, 10e6)
    corner = channel.reshape(4, 4, 4, 4)  # [column', row', column, row] of the density matrix
    coherence = [corner[0, k, 0, k] for k in range(4)]
    conditional = coherence[2] * coherence[3] / (coherence[0] * coherence[1])
    quantity = "conditional phase after 50 ns at J = 10 MHz, frequencies 0.4 GHz apart"
    got = abs(float(np.angle(conditional)))
    validate(quantity, sources.LOSS + ", 1/(2 J)", math.pi, got, "rad", rel=1e-3, card="B17")


def test_sudden_cz_through_the_second_excited_state(validate: Validate) -> None:
    # B15: |11> and |02> degenerate, coupling sqrt(2) g, g = 10 MHz: |11> is back with a minus
    # sign after 1/(2 sqrt(2) g), and all in |02> after half of that.
    a = qutip.tensor(qutip.destroy(2), qutip.qeye(3))
    b = qutip.tensor(qutip.qeye(2), qutip.destroy(3))
    na, nb = a.dag() * a, b.dag() * b
    alpha = 2 * math.pi * -300e6
    total = na + nb
    # The second qubit is 300 MHz above the first. One excitation is lowest, two are next.
    energy = 3 * FAR * (total - 1) ** 2 - alpha * nb + alpha / 2 * nb * (nb - 1)
    energy += SPLIT * na * nb
    system = operator_system(energy, a.dag() * b + a * b.dag())
    order = np.argsort(energy.diag().real)
    label = {(k // 3, k % 3): int(np.flatnonzero(order == k)[0]) for k in range(6)}
    pair, leaked = label[1, 1], label[0, 2]
    source = sources.STRAUCH + ", pi/(sqrt(2) g)"
    for name, duration, element, wanted in (
        ("population of |02> at half the time of a sudden CZ", 3.535534e-08 / 2, leaked, 1.0),
        ("population of |11> after a sudden CZ", 3.535534e-08, pair, 1.0),
    ):
        channel = evolve_operators(system, pulse(10e6, duration), 0.0, duration)
        corner = channel.reshape(6, 6, 6, 6)
        got = corner[element, element, pair, pair].real
        validate(name + ", g = 10 MHz", source, wanted, got, abs=ROUNDING, card="B15")
    zero = label[0, 0]
    got = corner[zero, pair, zero, pair].real
    quantity = "real part of <11|U|11>/<00|U|00> after a sudden CZ, g = 10 MHz"
    validate(quantity, source, -1.0, got, abs=ROUNDING, card="B15")
