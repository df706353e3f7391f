"""The clean evolution that noise is measured against, in the rotating wave on the envelope."""

import math
from dataclasses import dataclass

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.coupling import rotating_rate
from cosim.quantum.batch import propagate_batch
from cosim.quantum.batch_drive import BatchDrive
from cosim.quantum.control_path import PathSegment
from cosim.quantum.qubit import Qubit
from cosim.qubit_drive import QubitDrive
from cosim.waveform import ComplexArray, Envelope, FloatArray

# Slices in a turn of a carrier off the qubit's frequency: held over a slice, it shifts the qubit
# by (pi/64)^2 2/3, or 0.16 %, too little.
PER_TURN = 64.0


@dataclass(frozen=True, slots=True)
class Nominal:
    """The clean evolution in the rotating wave, on slices of equal length.

    Parameters
    ----------
    qubit : Qubit
        The qubit, whose frame it is.
    middles : ndarray, shape (n,)
        Middles of the slices in s.
    step : float
        Length of a slice in s.
    rate : ndarray of complex, shape (n,)
        Drive rate in rad/s in the middle of each slice.
    turn : ndarray of complex, shape (n,)
        exp(2 pi i offset t) of the carrier in the qubit's frame.
    edge_rate, edge_turn : ndarray of complex, shape (n + 1,)
        The same at the edges.
    path : PathSegment
        The evolution up to each edge.
    final : ndarray of complex, shape (d, d)
        That of the whole.
    """

    qubit: Qubit
    middles: FloatArray
    step: float
    rate: ComplexArray
    turn: ComplexArray
    edge_rate: ComplexArray
    edge_turn: ComplexArray
    path: PathSegment
    final: ComplexArray

    @property
    def duration(self) -> float:
        """Length of the whole in s."""
        return self.step * self.rate.size

    @property
    def nyquist(self) -> float:
        """Half the rate of the slices in Hz."""
        return 0.5 / self.step

    def drive_hamiltonian(self, rate: ComplexArray) -> ComplexArray:
        """Give the Hamiltonian of a drive.

        Parameters
        ----------
        rate : ndarray of complex, shape (n,)
            In rad/s.

        Returns
        -------
        ndarray, shape (n, d, d)
            (rate a + rate^* a^dag)/2 in rad/s.
        """
        a = self.qubit.annihilation()
        half = 0.5 * rate[:, None, None]
        return np.asarray(half * a + half.conj() * a.conj().T)


def nominal_evolution(qubit: Qubit, drive: QubitDrive, envelope: Envelope) -> Nominal:
    """Evolve a qubit under the clean envelope.

    Parameters
    ----------
    qubit : Qubit
        Relaxation and dephasing are left out of account.
    drive : QubitDrive
        Line, carrier and window.
    envelope : Envelope
        At the probe.

    Returns
    -------
    Nominal
    """
    start, stop = drive.window
    offset = drive.carrier_frequency - qubit.frequency
    step = min(envelope.dt, 1.0 / (PER_TURN * abs(offset))) if offset else envelope.dt
    count = max(16, round((stop - start) / step))
    step = (stop - start) / count
    edges: FloatArray = start + step * np.arange(count + 1, dtype=np.float64)
    middles: FloatArray = edges[:-1] + 0.5 * step
    spline = CubicSpline(envelope.t, envelope.iq)
    rate = rotating_rate(spline(middles), middles, drive.line, envelope.unit, offset)
    edge_rate = rotating_rate(spline(edges), edges, drive.line, envelope.unit, offset)
    slices = propagate_batch(qubit, BatchDrive(step, rate[:, None])).unitaries
    path = np.empty((count + 1, qubit.levels, qubit.levels), dtype=np.complex128)
    path[0] = np.eye(qubit.levels)
    for k in range(count):
        path[k + 1] = slices[k] @ path[k]
    turns = [np.exp(2j * math.pi * offset * t) for t in (middles, edges)]
    segment = PathSegment(start, step, path)
    return Nominal(qubit, middles, step, rate, turns[0], edge_rate, turns[1], segment, path[-1])


def superoperators(unitaries: ComplexArray) -> ComplexArray:
    """Give the superoperators of unitaries.

    Parameters
    ----------
    unitaries : ndarray, shape (batch, d, d)

    Returns
    -------
    ndarray, shape (batch, d^2, d^2)
        conj(U) kron U, column-stacking.
    """
    batch, d, _ = unitaries.shape
    product = np.einsum("bij,bkl->bikjl", unitaries.conj(), unitaries)
    return np.asarray(product.reshape(batch, d * d, d * d))


def unitary_losses(unitaries: ComplexArray) -> tuple[FloatArray, FloatArray]:
    """Give what unitaries lose that should do nothing.

    Parameters
    ----------
    unitaries : ndarray, shape (batch, d, d)

    Returns
    -------
    tuple of two ndarrays, shape (batch,)
        1 - F_avg against the identity, and leakage, on the two lowest levels.
    """
    block = unitaries[:, :2, :2]
    kept = np.einsum("bij,bij->b", block, block.conj()).real
    trace = np.abs(np.einsum("bii->b", block)) ** 2
    return np.asarray(1.0 - (trace + kept) / 6.0), np.asarray(1.0 - kept / 2.0)


def channel_losses(channel: ComplexArray, levels: int) -> tuple[float, float]:
    """Give what a channel loses that should do nothing.

    Parameters
    ----------
    channel : ndarray, shape (d^2, d^2)
        Column-stacking.
    levels : int
        d.

    Returns
    -------
    tuple of two floats
        1 - F_avg against the identity, and leakage, on the two lowest levels.
    """
    d = levels
    blocks = channel.reshape(d, d, d, d)  # column n, row m of E in that order of columns
    # E[j' d + i', j d + i] maps |i><j| to |i'><j'|.
    trace = sum(blocks[j, i, j, i] for i in range(2) for j in range(2)).real
    kept = sum(blocks[k, k, i, i] for i in range(2) for k in range(2)).real
    # Rounding may leave something below zero of nothing.
    return max(0.0, float(1.0 - (trace + kept) / 6.0)), max(0.0, float(1.0 - kept / 2.0))
