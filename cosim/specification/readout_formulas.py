"""The textbook formulas for a readout in steady state, to stand beside the exact limits."""

import math

from scipy.constants import Boltzmann, Planck
from scipy.special import erfcinv


def snr_for_error(error: float) -> float:
    """Give the signal over noise at which half-way decisions between two Gaussians err so often.

    Parameters
    ----------
    error : float
        Separation error, above 0 and below 1/2.

    Returns
    -------
    float
        Distance of the means over the standard deviation: error = erfc(SNR/(2 sqrt 2))/2.
    """
    return 2.0 * math.sqrt(2.0) * float(erfcinv(2.0 * error))


def steady_added_quanta(error: float, rate: float, duration: float) -> float:
    """Give the noise that a chain may add where the resonator has rung up at once.

    Parameters
    ----------
    error : float
        Separation error that is allowed.
    rate : float
        SNR^2 over time of an ideal detection in 1/s, 4 kappa |delta a|^2.
    duration : float
        Of the integration in s.

    Returns
    -------
    float
        Quanta at the resonator's output; below zero where even an ideal detection errs more.

    Notes
    -----
    SNR^2 = rate duration/(1 + 2 n_add): A. A. Clerk et al., Rev. Mod. Phys. 82, 1155 (2010).
    """
    return 0.5 * (rate * duration / snr_for_error(error) ** 2 - 1.0)


def noise_temperature_of(quanta: float, frequency: float) -> float:
    """Give the noise temperature that adds so many quanta.

    Parameters
    ----------
    quanta : float
    frequency : float
        In Hz.

    Returns
    -------
    float
        quanta h f/k in K.
    """
    return quanta * Planck * frequency / Boltzmann


def lost_time(bandwidth: float) -> float:
    """Give the time by which a single pole shortens an integration.

    Parameters
    ----------
    bandwidth : float
        Of -3 dB in Hz.

    Returns
    -------
    float
        1/(2 pi bandwidth) in s, its delay: the signal is missing for so long.
    """
    return 1.0 / (2.0 * math.pi * bandwidth)


def bits_for_noise(ratio: float, excess: float, reach: float) -> float:
    """Give the bits with which rounding raises the noise by a factor.

    Parameters
    ----------
    ratio : float
        Largest mean of a quadrature over the noise of a sample of it.
    excess : float
        Factor on the power of the noise less 1, above 0.
    reach : float
        Standard deviations of the noise that the range holds beside the mean.

    Returns
    -------
    float
        log2 of the range over the step, step^2/12 = excess x variance.

    Notes
    -----
    W. R. Bennett, "Spectra of quantized signals", Bell Syst. Tech. J. 27, 446 (1948).
    """
    step = math.sqrt(12.0 * excess)
    return math.log2(2.0 * (ratio + reach) / step)
