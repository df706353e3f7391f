"""Oracle: QuTiP's master equation of a transmon that exchanges quanta with a resonator.

No dispersive shift is put in: that the field follows it, its sign and the Purcell decay all come
out of g, Delta and alpha.
"""

import math

import numpy as np
import pytest
import qutip

from cosim.quantum.incident import sample_drive, two_step_drive
from cosim.quantum.readout_limits import purcell_rate, transmon_chi, transmon_pulls
from cosim.quantum.resonator import Resonator, amplitude_for_photons
from cosim.quantum.resonator_field import evolve_field, fields_with_jump
from cosim.waveform import ComplexArray
from tests.quantum.readouts import TURN

NANO = 1e-9
LEVELS, PHOTONS = 4, 7
BARE, KAPPA = 7e9, TURN * 5e6
# g/Delta = 0.02: the next orders of the shift are (g/Delta)**2 = 4e-4 of it.
G, DELTA, ALPHA = TURN * 30e6, TURN * -1.5e9, TURN * -0.3e9
PULLS = transmon_pulls(G, DELTA, ALPHA)
RESONATOR = Resonator(
    "reflection",
    BARE + (PULLS[0] + PULLS[1]) / 2 / TURN,
    KAPPA,
    0.0,
    0.0,
    transmon_chi(G, DELTA, ALPHA),
    PULLS[2] - (PULLS[0] + PULLS[1]) / 2,
)
# 160 ns at a tenth of a photon, driven off resonance, so that a wrong sign would show.
DRIVE = RESONATOR.frequency + 1.5e6


def full_field(level: int) -> tuple[ComplexArray, ComplexArray]:
    """Give the mean field of the exchange model and of the dispersive one, from the same pulse."""
    amplitude = amplitude_for_photons(RESONATOR, 0.1, DRIVE)
    pulse = sample_drive(two_step_drive(amplitude, 160e-9), DRIVE, 1e-9, 161)
    b = qutip.tensor(qutip.destroy(LEVELS), qutip.qeye(PHOTONS))
    a = qutip.tensor(qutip.qeye(LEVELS), qutip.destroy(PHOTONS))
    offset = TURN * (BARE - DRIVE) * NANO
    n = b.dag() * b
    h = offset * (a.dag() * a + n) + DELTA * NANO * n + ALPHA * NANO / 2 * n * (n - 1)
    h = h + G * NANO * (a.dag() * b + a * b.dag())
    _, states = h.eigenstates()
    bare = qutip.tensor(qutip.basis(LEVELS, level), qutip.basis(PHOTONS, 0))
    start = max(states, key=lambda state: abs(bare.overlap(state)))
    force = math.sqrt(KAPPA * NANO) * amplitude * math.sqrt(NANO)
    options = {"rtol": 1e-8, "atol": 1e-10, "nsteps": 1000000}
    result = qutip.mesolve(
        h + 1j * force * (a.dag() - a),
        start * start.dag(),
        pulse.t / NANO,
        [math.sqrt(KAPPA * NANO) * a],
        e_ops=[a],
        options=options,
    )
    alone = evolve_field(RESONATOR, pulse, level).inside
    if level == 1:
        edges = np.linspace(0.0, pulse.t[-1], 401)
        weights = np.diff(-np.expm1(-purcell_rate(KAPPA, G, DELTA) * edges))
        jumps = fields_with_jump(RESONATOR, pulse, (edges[1:] + edges[:-1]) / 2).inside
        alone = weights @ jumps + (1 - weights.sum()) * alone
    return np.asarray(result.expect[0], dtype=np.complex128), alone


@pytest.mark.full
@pytest.mark.parametrize("level", [0, 1, 2])
def test_the_field_follows_the_dispersive_shift(level: int) -> None:
    full, alone = full_field(level)
    other = full_field(0 if level else 1)[0]
    assert np.abs(full - other).max() > 0.015
    # A field of 0.31, of which the qubit holds (g/Delta)**2/2 = 2e-4; the next orders of the shift
    # are less. It is 1 % of what tells the states apart.
    assert full == pytest.approx(alone, abs=1e-4)
