"""Hamiltonians in the frame that rotates at the qubit's frequency, phase zero at t = 0.

With and without the rotating-wave approximation; all of them divided by hbar, in rad/s. Levels
above |1> keep their anharmonic energies in the frame.
"""

import numpy as np
import numpy.typing as npt

from cosim.errors import InputError
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray, FloatArray


def anharmonic_energies(qubit: Qubit) -> FloatArray:
    """Give what is left of the level energies in the frame rotating at the qubit's frequency.

    Parameters
    ----------
    qubit : Qubit

    Returns
    -------
    ndarray, shape (levels,)
        2 pi anharmonicity n (n - 1)/2 in rad/s.

    Notes
    -----
    J. Koch et al., "Charge-insensitive qubit design derived from the Cooper pair box", Phys. Rev.
    A 76, 042319 (2007), to first order in the charging energy.
    """
    n = np.arange(float(qubit.levels))
    return np.asarray(2 * np.pi * qubit.anharmonicity * n * (n - 1) / 2)


def full_hamiltonian(qubit: Qubit, rate: npt.ArrayLike, t: npt.ArrayLike) -> ComplexArray:
    """Give H/hbar of a driven qubit without the rotating-wave approximation.

    Parameters
    ----------
    qubit : Qubit
    rate : array_like, shape (...)
        Instantaneous drive rate 2 pi k v(t) in rad/s, real.
    t : array_like, shape (...)
        Times in s that belong to `rate`.

    Returns
    -------
    ndarray, shape (..., levels, levels)
        anharmonic part + rate (a exp(-i omega_q t) + a^dag exp(i omega_q t)) in rad/s.

    Raises
    ------
    InputError
        If `rate` is complex or the shapes do not go together.

    Notes
    -----
    Textbook interaction picture of H = omega_q a^dag a + rate (a + a^dag).
    """
    if np.iscomplexobj(rate):
        raise InputError("the full Hamiltonian wants a real drive rate in rad/s, got a complex one")
    rate = np.asarray(rate, dtype=np.float64)
    t = np.asarray(t, dtype=np.float64)
    _check_shapes(rate.shape, t.shape)
    # This is the rotating-wave form of an envelope that still holds the whole carrier.
    return rotating_wave_hamiltonian(qubit, 2 * rate * np.exp(-1j * qubit.omega * t))


def rotating_wave_hamiltonian(qubit: Qubit, rate: npt.ArrayLike) -> ComplexArray:
    """Give H/hbar of a driven qubit in the rotating-wave approximation.

    Parameters
    ----------
    qubit : Qubit
    rate : array_like, shape (...)
        Complex envelope of the drive rate in the qubit's frame in rad/s,
        2 pi k (I + jQ) exp(j (omega_c - omega_q) t).

    Returns
    -------
    ndarray, shape (..., levels, levels)
        anharmonic part + (rate a + rate^* a^dag)/2 in rad/s.

    Notes
    -----
    F. Motzoi et al., "Simple pulses for elimination of leakage in weakly nonlinear qubits", Phys.
    Rev. Lett. 103, 110501 (2009), equation (1), with rate^* = E_x + i E_y.
    """
    rate = np.asarray(rate, dtype=np.complex128)
    a = qubit.annihilation()
    raising = a.conj().T
    drive = rate[..., None, None] * a / 2
    drive = drive + np.conj(rate)[..., None, None] * raising / 2
    return np.asarray(np.diag(anharmonic_energies(qubit)) + drive)


def _check_shapes(first: tuple[int, ...], second: tuple[int, ...]) -> None:
    try:
        np.broadcast_shapes(first, second)
    except ValueError:
        raise InputError(
            f"drive rate and time must have one shape, got {first} and {second}"
        ) from None
