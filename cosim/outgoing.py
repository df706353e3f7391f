"""The way of a readout's fields: from a wave to the resonator, and from it to the deck's source.

Fields of the quantum side are in sqrt(photon/s) and go as exp(-i omega t); envelopes of the circuit
side are I + jQ in V, peak, of exp(+j omega t).
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
from scipy.constants import Boltzmann, Planck, hbar

from cosim.coupling import voltage_gain
from cosim.dsp.noise.thermal import Attenuator, symmetrised_power_density
from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray


@dataclass(frozen=True, slots=True)
class Amplifier:
    """A matched amplifier that keeps the phase.

    Parameters
    ----------
    gain : float
        In dB.
    noise_temperature : float
        T_N in K: at its input it adds k T_N in W/Hz, that is k T_N/(h f) quanta, beside what
        arrives there, vacuum included. 0 is that of an amplifier no phase-preserving one can be.

    Raises
    ------
    InputError
        If a number is out of range.
    """

    gain: float = field(metadata={"unit": "dB"})
    noise_temperature: float = field(metadata={"unit": "K"})

    def __post_init__(self) -> None:
        if not math.isfinite(self.gain):
            raise InputError(f"amplifier gain: wanted a finite number of dB, got {self.gain!r}")
        if not (math.isfinite(self.noise_temperature) and self.noise_temperature >= 0):
            raise InputError(
                f"amplifier noise_temperature: wanted at least 0 K, got {self.noise_temperature!r}"
            )


@dataclass(frozen=True, slots=True)
class OutputLine:
    """What lies between the resonator and the source in the deck, matched throughout.

    Parameters
    ----------
    stages : tuple of Attenuator or Amplifier
        From the resonator on; empty where the deck begins at the resonator.
    temperature : float
        Of the field that the resonator's ports see, in K: 0 for vacuum.
    impedance : float
        Z0 in ohm, of the line and of the resistor behind which the deck's source stands.

    Raises
    ------
    InputError
        If a number is out of range.
    """

    stages: tuple[Attenuator | Amplifier, ...] = ()
    temperature: float = field(default=0.0, metadata={"unit": "K"})
    impedance: float = field(default=50.0, metadata={"unit": "ohm"})

    def __post_init__(self) -> None:
        if not (math.isfinite(self.temperature) and self.temperature >= 0):
            raise InputError(
                f"output line temperature: wanted at least 0 K, got {self.temperature!r}"
            )
        _check_impedance(self.impedance)


@dataclass(frozen=True, slots=True)
class ArrivingNoise:
    """The noise that arrives at the deck's source together with the signal.

    Parameters
    ----------
    frequencies : ndarray, shape (n,)
        In Hz, absolute.
    power_density : ndarray, shape (n,)
        Available power in W/Hz, one-sided and symmetrised.
    emf_density : ndarray, shape (n,)
        Density of the complex envelope I + jQ of the source's EMF in V**2/Hz, two-sided about the
        carrier: the variance of I + jQ in a band B is emf_density x B, half of it in I.
    quanta : ndarray, shape (n,)
        All of it at the resonator's output, in quanta: 1/2 for vacuum alone.
    added_quanta : ndarray, shape (n,)
        What the stages add to the field that the resonator sends, in quanta at its output.
    least_added_quanta : float
        |1 - 1/G|/2, the least that any stages of this gain can add and keep the phase.
    """

    frequencies: FloatArray = field(metadata={"unit": "Hz"})
    power_density: FloatArray = field(metadata={"unit": "W/Hz"})
    emf_density: FloatArray = field(metadata={"unit": "V^2/Hz"})
    quanta: FloatArray = field(metadata={"unit": "1"})
    added_quanta: FloatArray = field(metadata={"unit": "1"})
    least_added_quanta: float = field(metadata={"unit": "1"})


def power_gain(stages: Sequence[Attenuator | Amplifier]) -> float:
    """Give the gain of stages one after another.

    Parameters
    ----------
    stages : sequence of Attenuator or Amplifier
        In any order.

    Returns
    -------
    float
        Power out over power in.
    """
    gain = 1.0
    for stage in stages:
        gain *= _gain(stage)
    return gain


def emf_envelope(field_out: npt.ArrayLike, frequency: float, line: OutputLine) -> ComplexArray:
    """Turn the field that leaves a resonator into the EMF of the deck's source.

    Parameters
    ----------
    field_out : array_like of complex, any shape
        b in sqrt(photon/s), of exp(-i 2 pi f t).
    frequency : float
        Of the carrier in Hz.
    line : OutputLine
        The way to the deck; its phase and its delay are not counted.

    Returns
    -------
    ndarray of complex, shape as `field_out`
        I + jQ of the EMF in V, peak: 2 sqrt(2 Z0 hbar omega G) conj(b). Into a matched load half of
        it appears.

    Raises
    ------
    InputError
        If the frequency is not positive.

    Notes
    -----
    P = hbar omega |b|**2 and V = sqrt(2 Z0 P) into a matched load, half of the open-circuit EMF.
    """
    scale = _volts_per_field(frequency, line.impedance) * math.sqrt(power_gain(line.stages))
    return np.asarray(2 * scale * np.conj(field_out), dtype=np.complex128)


def incident_samples(
    iq: npt.ArrayLike, frequency: float, attenuation: float = 0.0, impedance: float = 50.0
) -> ComplexArray:
    """Turn the envelope of a wave into the field that drives a resonator.

    Parameters
    ----------
    iq : array_like of complex, any shape
        I + jQ of the incident wave in V, peak, at the probe: the voltage across a matched load.
    frequency : float
        Of the carrier in Hz.
    attenuation : float
        Between the probe and the resonator in dB.
    impedance : float
        Of the line in ohm.

    Returns
    -------
    ndarray of complex, shape as `iq`
        b in sqrt(photon/s): conj(I + jQ) of the attenuated wave over sqrt(2 Z0 hbar omega).

    Raises
    ------
    InputError
        If the frequency or the impedance is not positive.
    """
    scale = voltage_gain(attenuation) / _volts_per_field(frequency, impedance)
    return np.asarray(scale * np.conj(iq), dtype=np.complex128)


def arriving_noise(line: OutputLine, frequencies: npt.ArrayLike) -> ArrivingNoise:
    """Give the noise that arrives at the deck's source with the signal.

    It contains what the field's own fluctuations, vacuum among them, and all stages make. A
    resistor Z0 behind the source stands for the line, so that it has to be free of noise of its own
    where this noise is used.

    Parameters
    ----------
    line : OutputLine
        The way to the deck.
    frequencies : array_like, shape (n,)
        In Hz, absolute, positive.

    Returns
    -------
    ArrivingNoise

    Raises
    ------
    InputError
        If a frequency is not positive.

    Notes
    -----
    h f (n + 1/2) = (h f/2) coth(h f/2 k T) of every matched part: H. B. Callen, T. A. Welton, Phys.
    Rev. 83, 34 (1951). Least added noise: C. M. Caves, "Quantum limits on noise in linear
    amplifiers", Phys. Rev. D 26, 1817 (1982). The EMF is twice the wave's voltage and the density
    of an envelope twice the one-sided density of its signal: 8 Z0 times the power density.
    """
    f = np.atleast_1d(np.asarray(frequencies, dtype=np.float64))
    own = symmetrised_power_density(f, line.temperature)
    power = own
    for stage in line.stages:
        if isinstance(stage, Amplifier):
            power = _gain(stage) * (power + Boltzmann * stage.noise_temperature)
        else:
            emitted = symmetrised_power_density(f, stage.temperature)
            power = power / stage.power_ratio + (1 - 1 / stage.power_ratio) * emitted
    gain = power_gain(line.stages)
    return ArrivingNoise(
        f,
        power,
        np.asarray(8 * line.impedance * power),
        np.asarray(power / (gain * Planck * f)),
        np.asarray((power / gain - own) / (Planck * f)),
        least_added_quanta(gain),
    )


def added_quanta(
    emf_density: npt.ArrayLike, frequencies: npt.ArrayLike, line: OutputLine
) -> FloatArray:
    """State noise at the deck's source in quanta at the resonator's output.

    Parameters
    ----------
    emf_density : array_like, shape (n,)
        Density of the envelope of the EMF in V**2/Hz, two-sided about the carrier, of noise beyond
        what arrives: the netlist's own, referred to its source.
    frequencies : array_like, shape (n,)
        In Hz, absolute.
    line : OutputLine
        The way from the resonator to the deck.

    Returns
    -------
    ndarray, shape (n,)
        density/(8 Z0 G h f).

    Raises
    ------
    InputError
        If a frequency is not positive.
    """
    f = np.asarray(frequencies, dtype=np.float64)
    if not (np.isfinite(f).all() and (f > 0).all()):
        raise InputError("added noise: wanted positive, finite frequencies in Hz")
    power = np.asarray(emf_density, dtype=np.float64) / (8 * line.impedance)
    return np.asarray(power / (power_gain(line.stages) * Planck * f))


def least_added_quanta(gain: float) -> float:
    """Give the least noise that a chain can add and keep the phase.

    Parameters
    ----------
    gain : float
        Power out over power in, in photons, more than 0.

    Returns
    -------
    float
        |1 - 1/gain|/2 in quanta at its input.

    Raises
    ------
    InputError
        If the gain is not positive.

    Notes
    -----
    C. M. Caves, "Quantum limits on noise in linear amplifiers", Phys. Rev. D 26, 1817 (1982).
    """
    if not gain > 0:
        raise InputError(f"added noise: wanted a gain above 0, got {gain!r}")
    return abs(1 - 1 / gain) / 2


def efficiency(added: float) -> float:
    """Give the part of the resonator's information that a chain leaves.

    Parameters
    ----------
    added : float
        Noise that the chain adds, in quanta at the resonator's output.

    Returns
    -------
    float
        1/(1 + 2 added), the factor on SNR**2 against detection of one quadrature without loss.

    Raises
    ------
    InputError
        If the noise is negative.

    Notes
    -----
    A. A. Clerk et al., "Introduction to quantum noise, measurement, and amplification", Rev. Mod.
    Phys. 82, 1155 (2010).
    """
    if not added >= 0:
        raise InputError(f"added noise: wanted at least 0 quanta, got {added!r}")
    return 1 / (1 + 2 * added)


def _gain(stage: Attenuator | Amplifier) -> float:
    if isinstance(stage, Amplifier):
        return float(10 ** (stage.gain / 10))
    return 1 / stage.power_ratio


def _volts_per_field(frequency: float, impedance: float) -> float:
    if not (math.isfinite(frequency) and frequency > 0):
        raise InputError(f"carrier frequency: wanted a positive number of Hz, got {frequency!r}")
    _check_impedance(impedance)
    return math.sqrt(2 * impedance * hbar * 2 * math.pi * frequency)


def _check_impedance(impedance: float) -> None:
    if not (math.isfinite(impedance) and impedance > 0):
        raise InputError(f"line impedance: wanted a positive number of ohm, got {impedance!r}")
