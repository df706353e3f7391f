"""Oracle: QuTiP's master equation of the qubit together with the resonator's photons."""

import math

import numpy as np
import pytest
import qutip

from cosim.quantum.incident import IncidentField, sample_drive, two_step_drive
from cosim.quantum.readout_limits import dephasing_rate, stark_shift
from cosim.quantum.resonator import Resonator, amplitude_for_photons
from cosim.quantum.resonator_field import evolve_field, fields_with_jump
from cosim.waveform import ComplexArray, FloatArray
from tests.quantum.readouts import CHI, FREQUENCY, KAPPA, TURN

# QuTiP in units of 1/ns; of a coherent state with 0.4 photons 1e-9 lie beyond this number.
NANO, PHOTONS = 1e-9, 12
DRIVE = FREQUENCY + 0.4e6
RESONATOR = Resonator(
    "transmission", FREQUENCY, 0.3 * KAPPA, 0.6 * KAPPA, 0.1 * KAPPA, CHI, 3 * CHI
)
A = qutip.destroy(PHOTONS)


def pulse() -> IncidentField:
    """Give a pulse of 150 ns at some 0.4 photons, and 150 ns after it."""
    amplitude = amplitude_for_photons(RESONATOR, 0.4, DRIVE)
    plateaus = two_step_drive(amplitude * np.exp(0.7j), 150e-9)
    return sample_drive(plateaus, DRIVE, 1e-9, 301)


def master_equation(
    drive: IncidentField,
    start: qutip.Qobj,
    decay: float,
    watched: list[qutip.Qobj],
    levels: int = 2,
) -> list[ComplexArray]:
    """Evolve qubit and photons in the frame of the drive, with straight lines between samples.

    `decay` is the qubit's rate from |1> to |0> in 1/ns; watched operators are those of the whole.
    """
    qubit = qutip.qeye(levels)
    a = qutip.tensor(qubit, A)
    offset = TURN * (RESONATOR.frequency - drive.frequency)
    pulls = [(offset + RESONATOR.pull(level)) * NANO for level in range(levels)]
    still = qutip.tensor(qutip.qdiags([pulls], [0]), A.dag() * A)
    times = drive.t / NANO
    force = math.sqrt(RESONATOR.driven_rate * NANO) * drive.samples * math.sqrt(NANO)
    push = qutip.coefficient(1j * force, tlist=times, order=1)
    pull = qutip.coefficient(-1j * np.conj(force), tlist=times, order=1)
    losses = [math.sqrt(RESONATOR.kappa * NANO) * a]
    if decay:
        lower = qutip.basis(levels, 0) * qutip.basis(levels, 1).dag()
        losses.append(math.sqrt(decay) * qutip.tensor(lower, qutip.qeye(PHOTONS)))
    state = qutip.tensor(start * start.dag(), qutip.fock_dm(PHOTONS, 0))
    # Steps of a tenth of a sample: a longer one would not see the corners of the drive.
    options = {"rtol": 1e-10, "atol": 1e-12, "max_step": 0.1, "nsteps": 100000}
    result = qutip.mesolve(
        [still, [a.dag(), push], [a, pull]], state, times, losses, e_ops=watched, options=options
    )
    return [np.asarray(values, dtype=np.complex128) for values in result.expect]


def projector(level: int, levels: int = 2) -> qutip.Qobj:
    return qutip.basis(levels, level) * qutip.basis(levels, level).dag()


@pytest.mark.parametrize("level", [0, 1, 2])
def test_the_field_of_each_state(level: int) -> None:
    drive = pulse()
    watched = [
        qutip.tensor(qutip.qeye(3), A),
        qutip.tensor(qutip.qeye(3), A.dag() * A),
    ]
    field, photons = master_equation(drive, qutip.basis(3, level), 0.0, watched, 3)
    found = evolve_field(RESONATOR, drive, level)
    assert np.abs(found.inside).max() > 0.5
    # The photons left out, 1e-9 of the state, count some ten times; QuTiP's corners of 0.1 ns less.
    assert found.inside == pytest.approx(field, abs=1e-7)
    assert found.photons == pytest.approx(photons.real, abs=1e-7)


def test_the_coherence_of_a_qubit_that_is_read() -> None:
    """|rho_01| falls by the integral of the rate, and turns by that of the shift."""
    drive = pulse()
    plus = (qutip.basis(2, 0) + qutip.basis(2, 1)).unit()
    # <0|rho|1> is the expectation of |1><0|.
    flip = qutip.tensor(qutip.basis(2, 1) * qutip.basis(2, 0).dag(), qutip.qeye(PHOTONS))
    (coherence,) = master_equation(drive, plus, 0.0, [flip])
    low, high = (evolve_field(RESONATOR, drive, level).inside for level in (0, 1))
    rate = dephasing_rate(RESONATOR, low, high)
    shift = stark_shift(RESONATOR, low, high)

    def integral(values: FloatArray) -> FloatArray:
        steps = (values[1:] + values[:-1]) / 2 * drive.step
        return np.concatenate([[0.0], np.cumsum(steps)])

    wanted = 0.5 * np.exp(1j * integral(shift) - integral(rate))
    assert abs(wanted[-1]) < 0.4
    # The trapezoidal rule at 1 ns against 1/kappa = 32 ns: (kappa h)**2/12 = 8e-5 of an exponent
    # of order one.
    assert coherence == pytest.approx(wanted, abs=1e-4)


def test_decays_average_to_the_master_equation() -> None:
    """The mean field over all times of decay, 1/T1 exp(-t/T1) each, is that of the ensemble."""
    drive, t1 = pulse(), 80e-9
    (field,) = master_equation(
        drive, qutip.basis(2, 1), NANO / t1, [qutip.tensor(qutip.qeye(2), A)]
    )
    edges = np.linspace(0.0, drive.t[-1], 3001)
    middle = (edges[1:] + edges[:-1]) / 2
    weights = np.exp(-edges[:-1] / t1) - np.exp(-edges[1:] / t1)
    mean = weights @ fields_with_jump(RESONATOR, drive, middle).inside
    mean = mean + np.exp(-edges[-1] / t1) * evolve_field(RESONATOR, drive, 1).inside
    unmoved = evolve_field(RESONATOR, drive, 1).inside
    assert np.abs(mean - unmoved).max() > 0.05
    # Cells of 0.1 ns about their middle, against rates of 1/30 ns: 1e-6.
    assert mean == pytest.approx(field, abs=3e-6)
