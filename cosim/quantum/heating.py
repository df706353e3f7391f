"""Flips of a qubit by noise at its own frequency."""

import math

from cosim.errors import InputError


def flip_rate(rate_density: float) -> float:
    """Give the rate at which white noise of the drive flips a qubit, up and down alike.

    Parameters
    ----------
    rate_density : float
        One-sided density of the drive rate 2 pi k v(t) at the qubit's frequency in (rad/s)**2/Hz,
        that is (2 pi k)**2 S_v(f_q).

    Returns
    -------
    float
        rate_density/2 in 1/s, from |0> to |1> and from |1> to |0> each; (n + 1) times that from
        |n> to |n + 1> of a ladder.

    Raises
    ------
    InputError
        If the density is negative or not finite.

    Notes
    -----
    Golden rule for a classical force: H/hbar = rate(t) (a + a^dag), and the two-sided density
    S2(omega) = S1(f)/2 times |<1|a + a^dag|0>|**2 = 1 is the rate. R. J. Schoelkopf et al., "Qubits
    as spectrometers of quantum noise" (2003).
    """
    if not (math.isfinite(rate_density) and rate_density >= 0):
        raise InputError(
            f"flip rate: wanted a density of at least zero in (rad/s)**2/Hz, got {rate_density!r}"
        )
    return rate_density / 2
