"""What is wrong with a gate as a vector: nearly linear in what is set wrong, squares to a cost."""

import math

import numpy as np

from cosim.errors import InputError
from cosim.quantum.channel import PAULI, choi, levels_of
from cosim.waveform import ComplexArray, FloatArray

# From the sine of half an error angle to the square root of an average infidelity of one qubit.
ROOT = math.sqrt(2.0 / 3.0)
# Half an error angle up to which the vector is exact; its length goes on rising beyond.
EXACT = math.pi / 4.0


def error_vector(
    superop: ComplexArray, target: ComplexArray, *, leakage_weight: float = 0.0
) -> FloatArray:
    """Give the coherent error of a channel as a vector whose square is what it costs.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
        One qubit of d levels, in the frame that it is to be judged in.
    target : ndarray, shape (2, 2)
        Unitary.
    leakage_weight : float
        What leaked population costs beside its part in the infidelity.

    Returns
    -------
    ndarray, shape (6 + 4 (d - 2),)
        With K the operator of the channel's largest part and U^dag K = a0 - i (a . sigma), a0
        positive: sqrt(2/3) Re a (x, y, z), sqrt(2/3) Im a, and sqrt((1 + w)/2) times the amplitudes
        that leave for the other levels, real and imaginary parts. A turn by a small angle theta
        about n before the ideal gate is theta n/sqrt(6). The square is 1 - F_avg + w L1 less what
        is incoherent. Beyond errors of a quarter turn the first six go on in a straight line in
        the angle: they then still tell the way back, and square to more.

    Raises
    ------
    InputError
        If the shapes do not fit.

    Notes
    -----
    With F_pro = |Tr(U^dag K)|^2/4 and F_avg = (2 F_pro + 1 - L1)/3 of a unitary channel (M. A.
    Nielsen, Phys. Lett. A 303, 249 (2002), with leakage), 1 - F_avg = (2/3) |a|^2 + L1, for 1 =
    a0^2 + |a|^2 + L1.
    """
    d = levels_of(superop)
    u = np.asarray(target, dtype=np.complex128)
    if u.shape != (2, 2):
        raise InputError(f"error vector: wanted a one-qubit target of shape (2, 2), got {u.shape}")
    # Inputs of the computational subspace alone, as [input, output, input, output].
    part = choi(superop).reshape(d, d, d, d)[:2, :, :2, :].reshape(2 * d, 2 * d)
    values, vectors = np.linalg.eigh((part + part.conj().T) / 2.0)
    kraus = math.sqrt(max(0.0, float(values[-1]))) * vectors[:, -1].reshape(2, d).T
    overlap = np.trace(u.conj().T @ kraus[:2]) / 2.0
    if abs(overlap) > 0.0:
        kraus = kraus * (abs(overlap) / overlap)
    inner = u.conj().T @ kraus[:2]
    a = np.array([0.5j * np.trace(pauli @ inner) for pauli in PAULI[1:]])
    leaked = math.sqrt((1.0 + leakage_weight) / 2.0) * kraus[2:].reshape(-1)
    a = ROOT * _straightened(abs(overlap), float(np.linalg.norm(a))) * a
    return np.concatenate([a.real, a.imag, leaked.real, leaked.imag])


def _straightened(kept: float, lost: float) -> float:
    """Factor on the sine of half the angle: 1 up to `EXACT`, then its tangent over the sine."""
    half = math.atan2(lost, kept)
    if half <= EXACT:
        return 1.0
    return (math.sin(EXACT) + math.cos(EXACT) * (half - EXACT)) / math.sin(half)
