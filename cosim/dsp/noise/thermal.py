"""Noise of resistors, attenuators and currents, classical and quantum.

Power densities are available powers per Hz, one-sided. Towards the qubit, noise that is sampled as
a classical signal is the Planck part only: the zero point cannot excite and belongs to T1. The
symmetrised form is what an amplifier with a phase-preserving output sees.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
from scipy.constants import Boltzmann, Planck, elementary_charge

from cosim.errors import InputError
from cosim.waveform import FloatArray


@dataclass(frozen=True, slots=True)
class Attenuator:
    """A matched attenuator at one temperature.

    Parameters
    ----------
    power_ratio : float
        Power in over power out, at least 1.
    temperature : float
        Of its resistors in K, not negative.

    Raises
    ------
    InputError
        If a number is out of range.
    """

    power_ratio: float
    temperature: float = field(metadata={"unit": "K"})

    def __post_init__(self) -> None:
        if not (math.isfinite(self.power_ratio) and self.power_ratio >= 1):
            raise InputError(
                f"attenuator: wanted a power ratio of at least 1, got {self.power_ratio!r}",
                hint="the ratio is power in over power out: 20 dB is 100",
            )
        _check("attenuator", "temperature in K", self.temperature)


def johnson_density(resistance: float, temperature: float) -> float:
    """Give the open-circuit voltage noise of a resistor, classically.

    Parameters
    ----------
    resistance : float
        In ohm.
    temperature : float
        In K.

    Returns
    -------
    float
        4 k T R in V**2/Hz, one-sided.

    Raises
    ------
    InputError
        If a number is negative or not finite.

    Notes
    -----
    J. B. Johnson, Phys. Rev. 32, 97 (1928); H. Nyquist, Phys. Rev. 32, 110 (1928).
    """
    _check("resistor", "resistance in ohm", resistance)
    _check("resistor", "temperature in K", temperature)
    return 4 * Boltzmann * temperature * resistance


def shot_noise_density(current: float, fano: float = 1.0) -> float:
    """Give the noise of a current of independent electrons.

    Parameters
    ----------
    current : float
        In A; its sign does not matter.
    fano : float
        Fano factor, 1 for a Poisson process.

    Returns
    -------
    float
        2 q |I| F in A**2/Hz, one-sided.

    Raises
    ------
    InputError
        If a number is not finite or the Fano factor is negative.

    Notes
    -----
    W. Schottky, Ann. Phys. 362, 541 (1918).
    """
    _check("shot noise", "current in A", abs(current))
    _check("shot noise", "Fano factor", fano)
    return 2 * elementary_charge * abs(current) * fano


def thermal_photons(frequencies: npt.ArrayLike, temperature: float) -> FloatArray:
    """Give the mean number of thermal quanta of a mode.

    Parameters
    ----------
    frequencies : array_like, any shape
        In Hz, positive.
    temperature : float
        In K; 0 gives none.

    Returns
    -------
    ndarray, shape as `frequencies`
        1/(exp(h f/k T) - 1).

    Raises
    ------
    InputError
        If a frequency is not positive or the temperature negative.

    Notes
    -----
    M. Planck's law.
    """
    f = _frequencies(frequencies)
    _check("thermal noise", "temperature in K", temperature)
    if temperature == 0:
        return np.zeros_like(f)
    # exp(-x)/(1 - exp(-x)) goes to zero where exp(x) would overflow.
    x = Planck * f / (Boltzmann * temperature)
    return np.asarray(np.exp(-x) / -np.expm1(-x))


def planck_power_density(frequencies: npt.ArrayLike, temperature: float) -> FloatArray:
    """Give the available thermal power per Hz without the zero point.

    Parameters
    ----------
    frequencies, temperature
        As in `thermal_photons`.

    Returns
    -------
    ndarray, shape as `frequencies`
        h f n(f, T) in W/Hz.

    Raises
    ------
    InputError
        As in `thermal_photons`.
    """
    f = _frequencies(frequencies)
    return np.asarray(Planck * f * thermal_photons(f, temperature))


def symmetrised_power_density(frequencies: npt.ArrayLike, temperature: float) -> FloatArray:
    """Give the available power per Hz with the zero point.

    Parameters
    ----------
    frequencies, temperature
        As in `thermal_photons`.

    Returns
    -------
    ndarray, shape as `frequencies`
        (h f/2) coth(h f/2 k T) = h f (n + 1/2) in W/Hz.

    Raises
    ------
    InputError
        As in `thermal_photons`.

    Notes
    -----
    H. B. Callen, T. A. Welton, "Irreversibility and generalized noise", Phys. Rev. 83, 34 (1951).
    """
    f = _frequencies(frequencies)
    return np.asarray(Planck * f * (thermal_photons(f, temperature) + 0.5))


def line_power_density(
    frequencies: npt.ArrayLike, source_temperature: float, attenuators: Sequence[Attenuator]
) -> FloatArray:
    """Give the thermal power per Hz that leaves a line towards the qubit.

    Parameters
    ----------
    frequencies : array_like, any shape
        In Hz, positive.
    source_temperature : float
        In K, of the matched source at the warm end.
    attenuators : sequence of Attenuator
        From the source to the qubit.

    Returns
    -------
    ndarray, shape as `frequencies`
        In W/Hz, Planck part: each attenuator passes 1/A and adds (1 - 1/A) h f n(f, T).

    Raises
    ------
    InputError
        As in `thermal_photons`.

    Notes
    -----
    Kirchhoff's law of emission and absorption; D. M. Pozar, Microwave Engineering, section on the
    noise of a lossy line, with Planck's law in place of k T.
    """
    power = planck_power_density(frequencies, source_temperature)
    for stage in attenuators:
        own = planck_power_density(frequencies, stage.temperature)
        power = power / stage.power_ratio + (1 - 1 / stage.power_ratio) * own
    return power


def wave_voltage_density(power: FloatArray, impedance: float) -> FloatArray:
    """Give the voltage noise of a travelling wave.

    Parameters
    ----------
    power : ndarray
        Power density in W/Hz.
    impedance : float
        Of the line in ohm.

    Returns
    -------
    ndarray, shape as `power`
        power x impedance in V**2/Hz, that of the incident wave: a quarter of the open-circuit
        density 4 k T R of the same matched source.

    Raises
    ------
    InputError
        If the impedance is not positive.
    """
    if not (math.isfinite(impedance) and impedance > 0):
        raise InputError(f"line: wanted a positive impedance in ohm, got {impedance!r}")
    return np.asarray(power * impedance)


def _check(what: str, name: str, value: float) -> None:
    if not (math.isfinite(value) and value >= 0):
        raise InputError(f"{what}: wanted a {name} of at least zero, got {value!r}")


def _frequencies(frequencies: npt.ArrayLike) -> FloatArray:
    f = np.asarray(frequencies, dtype=np.float64)
    if not (np.isfinite(f).all() and (f > 0).all()):
        raise InputError("thermal noise: wanted positive, finite frequencies in Hz")
    return f
