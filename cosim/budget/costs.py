"""What envelopes cost, many at once: the three fidelities in the rotating wave, without loss."""

import math
from dataclasses import dataclass, field

import numpy as np

from cosim.adjust import SCALE_RANGE
from cosim.quantum.batch import propagate_batch
from cosim.quantum.batch_drive import BatchDrive, fourth_order
from cosim.quantum.channel import PAULI
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray, FloatArray

VIEWS = ("as_simulated", "free_frame", "calibrated")

# An element of a target below this is zero.
_ZERO = 1e-9
# Half-widths of the brackets of the search for the best scale, and for the best carrier offset in
# turns over the window; the infidelity is a parabola there.
_SCALE_STEP = 0.005
_TURN_STEP = 0.01
# Newton's method squares its error; the infidelity's own error is the square of that again.
_ROUNDS = 4
# Farther than this many brackets the parabola means nothing.
_LONGEST = 20.0


@dataclass(frozen=True, slots=True)
class Costing:
    """How envelopes are costed.

    Parameters
    ----------
    qubit : Qubit
        Relaxation and dephasing are left out of account.
    target : ndarray of complex, shape (2, 2)
        Unitary.
    t : ndarray, shape (n,)
        Uniform times in s over the window, n odd.
    volts : float
        Drive rate in rad/s per unit of the envelope.
    adjusted : tuple of str
        What the calibrated fidelity may adjust: "amplitude", "detuning".
    """

    qubit: Qubit
    target: ComplexArray
    t: FloatArray
    volts: float
    adjusted: tuple[str, ...]

    def unitaries(self, iq: ComplexArray) -> ComplexArray:
        """Evolve envelopes.

        Parameters
        ----------
        iq : ndarray of complex, shape (batch, n)
            In the qubit's own frame.

        Returns
        -------
        ndarray, shape (batch, levels, levels)
        """
        step = float(self.t[1] - self.t[0])
        # Slices of fourth order, whose steps need no check here: halving those of an envelope at
        # its own rate changes a cost by less than 1e-10.
        slices = fourth_order(self.volts * iq, 0)
        return propagate_batch(self.qubit, BatchDrive(step, slices)).unitaries


@dataclass(frozen=True, slots=True)
class Costs:
    """What envelopes cost.

    Parameters
    ----------
    infidelity : dict of ndarray, each of shape (batch,)
        By the name of the fidelity: 1 - F_avg, leakage included.
    framed : dict of ndarray, each of shape (batch, 2, 2)
        The block of the computational subspace in that view.
    scale, detuning : ndarray, shape (batch,)
        What the calibrated fidelity adjusts; the detuning in Hz.
    """

    infidelity: dict[str, FloatArray]
    framed: dict[str, ComplexArray]
    scale: FloatArray
    detuning: FloatArray = field(default_factory=lambda: np.zeros(0))


def cost_envelopes(costing: Costing, iq: ComplexArray) -> Costs:
    """Cost envelopes in each of the three fidelities.

    Parameters
    ----------
    costing : Costing
    iq : ndarray of complex, shape (batch, n)
        In the qubit's own frame.

    Returns
    -------
    Costs
    """
    blocks = costing.unitaries(iq)[:, :2, :2]
    scale, detuning = _calibration(costing, iq, blocks)
    tuned = blocks
    if costing.adjusted:
        tuned = costing.unitaries(adjusted_envelopes(costing.t, iq, scale, detuning))[:, :2, :2]
    framed = {
        "as_simulated": blocks,
        "free_frame": free_blocks(blocks, costing.target),
        "calibrated": free_blocks(tuned, costing.target),
    }
    infidelity = {name: block_infidelity(block, costing.target) for name, block in framed.items()}
    return Costs(infidelity, framed, scale, detuning)


def adjusted_envelopes(
    t: FloatArray, iq: ComplexArray, scale: FloatArray, detuning: FloatArray
) -> ComplexArray:
    """Scale envelopes and offset their carriers.

    Parameters
    ----------
    t : ndarray, shape (n,)
        In s.
    iq : ndarray of complex, shape (batch, n)
    scale, detuning : ndarray, shape (batch,)
        Factor, and offset in Hz.

    Returns
    -------
    ndarray, shape (batch, n)
    """
    turned = scale[:, None] * iq
    if np.any(detuning):
        turned = turned * np.exp(2j * math.pi * detuning[:, None] * t)
    return np.asarray(turned)


def block_infidelity(blocks: ComplexArray, target: ComplexArray) -> FloatArray:
    """Give 1 - F_avg of unitaries by their blocks on the computational subspace.

    Parameters
    ----------
    blocks : ndarray of complex, shape (batch, 2, 2)
    target : ndarray, shape (2, 2)

    Returns
    -------
    ndarray, shape (batch,)
        With leakage.

    Notes
    -----
    F_avg = (|Tr(T^dag M)|^2 + Tr(M M^dag))/6: L. H. Pedersen, N. M. Moller, K. Molmer, Phys. Lett.
    A 367, 47 (2007).
    """
    overlap = np.abs(np.einsum("ij,bij->b", target.conj(), blocks)) ** 2
    kept = np.einsum("bij,bij->b", blocks, blocks.conj()).real
    return np.asarray(1.0 - (overlap + kept) / 6.0)


def free_blocks(blocks: ComplexArray, target: ComplexArray) -> ComplexArray:
    """Put the best phase references before and after unitaries.

    Parameters
    ----------
    blocks : ndarray of complex, shape (batch, 2, 2)
        Their blocks on the computational subspace.
    target : ndarray, shape (2, 2)

    Returns
    -------
    ndarray, shape (batch, 2, 2)
        Z(after) M Z(before), with the pair of least norm where only one combination matters.

    Notes
    -----
    The phases of four terms of Tr(T^dag M) obey one relation that both unitaries share, so that two
    angles make all of them equal; with leakage up to its square.
    """
    phase = np.angle(target.conj() * blocks)
    if abs(target[0, 1]) < _ZERO:
        before = after = 0.5 * _wrapped(phase[:, 1, 1] - phase[:, 0, 0])
    elif abs(target[0, 0]) < _ZERO:
        after = 0.5 * _wrapped(phase[:, 1, 0] - phase[:, 0, 1])
        before = -after
    else:
        after = _wrapped(phase[:, 1, 0] - phase[:, 0, 0])
        before = _wrapped(phase[:, 0, 1] - phase[:, 0, 0])
    framed = blocks.copy()
    framed[:, 1, :] *= np.exp(-1j * after)[:, None]
    framed[:, :, 1] *= np.exp(-1j * before)[:, None]
    return framed


def error_vectors(blocks: ComplexArray, reference: ComplexArray) -> FloatArray:
    """Give the rotations by which unitaries differ from a reference.

    Parameters
    ----------
    blocks : ndarray of complex, shape (batch, 2, 2)
    reference : ndarray, shape (2, 2)

    Returns
    -------
    ndarray, shape (batch, 3)
        In rad about x, y and z: reference^dag M = exp(-i v . sigma/2), which comes before the
        reference. A small v costs |v|^2/6.
    """
    product = np.einsum("ji,bjk->bik", reference.conj(), blocks)
    determinant = product[:, 0, 0] * product[:, 1, 1] - product[:, 0, 1] * product[:, 1, 0]
    product = product / np.sqrt(determinant)[:, None, None]
    sines = -np.einsum("kij,bji->bk", PAULI[1:], product).imag / 2.0
    cosine = np.einsum("bii->b", product).real / 2.0
    sines = np.where(cosine < 0.0, -1.0, 1.0)[:, None] * sines
    length = np.linalg.norm(sines, axis=1)
    angle = 2.0 * np.arctan2(length, np.abs(cosine))
    # A rotation by nothing has no axis.
    factor = np.divide(angle, length, out=np.full(length.size, 2.0), where=length > 1e-12)
    return np.asarray(factor[:, None] * sines)


def _wrapped(angle: FloatArray) -> FloatArray:
    return np.asarray(np.angle(np.exp(1j * angle)))


def _calibration(
    costing: Costing, iq: ComplexArray, blocks: ComplexArray
) -> tuple[FloatArray, FloatArray]:
    """Find the best scale and carrier offset of each envelope, by Newton's method.

    Offsets count from the frame that is wanted; where scale and offset do the same the step of
    least length is taken.
    """
    rows = iq.shape[0]
    point = np.column_stack((np.ones(rows), np.zeros(rows)))
    span = float(costing.t[-1] - costing.t[0])
    widths = {"amplitude": (0, _SCALE_STEP), "detuning": (1, _TURN_STEP / span)}
    free = [widths[name] for name in ("amplitude", "detuning") if name in costing.adjusted]
    if free:
        for _ in range(_ROUNDS):
            point = _newton(costing, iq, point, free)
            point[:, 0] = np.clip(point[:, 0], *SCALE_RANGE)
        worse = _free_infidelity(costing, iq, point) > block_infidelity(
            free_blocks(blocks, costing.target), costing.target
        )
        point[worse] = (1.0, 0.0)
    return point[:, 0], point[:, 1]


def _free_infidelity(costing: Costing, iq: ComplexArray, point: FloatArray) -> FloatArray:
    made = costing.unitaries(adjusted_envelopes(costing.t, iq, point[:, 0], point[:, 1]))
    return block_infidelity(free_blocks(made[:, :2, :2], costing.target), costing.target)


def _newton(
    costing: Costing, iq: ComplexArray, point: FloatArray, free: list[tuple[int, float]]
) -> FloatArray:
    rows, count = iq.shape[0], len(free)
    moves = np.zeros((0, 2))
    for place, width in free:
        for sign in (1.0, -1.0):
            move = np.zeros((1, 2))
            move[0, place] = sign * width
            moves = np.vstack((moves, move))
    if count == 2:
        moves = np.vstack((moves, moves[0] + moves[2]))
    moves = np.vstack((np.zeros((1, 2)), moves))
    points = (point[None] + moves[:, None]).reshape(-1, 2)
    values = _free_infidelity(costing, np.tile(iq, (len(moves), 1)), points)
    values = values.reshape(len(moves), rows)
    gradient = np.stack([0.5 * (values[1 + 2 * k] - values[2 + 2 * k]) for k in range(count)])
    bend = np.zeros((rows, count, count))
    for k in range(count):
        bend[:, k, k] = values[1 + 2 * k] + values[2 + 2 * k] - 2.0 * values[0]
    if count == 2:
        cross = values[5] - values[1] - values[3] + values[0]
        bend[:, 0, 1] = bend[:, 1, 0] = cross
    moved = point.copy()
    for row in range(rows):
        size, axes = np.linalg.eigh(bend[row])
        slopes = axes.T @ gradient[:, row]
        # Along a direction that does nothing, or bends the wrong way, it stays.
        step = np.where(
            size > 1e-9 * max(size.max(), 1e-30), -slopes / np.where(size == 0, 1, size), 0.0
        )
        step = np.clip(step, -_LONGEST, _LONGEST)
        for (place, width), change in zip(free, axes @ step, strict=True):
            moved[row, place] += width * float(change)
    return moved
