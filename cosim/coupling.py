"""The one place where volts at a port of the circuit become drive rates at the qubit."""

import math
from dataclasses import dataclass

import numpy as np

from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray, Waveform


@dataclass(frozen=True, slots=True)
class DriveLine:
    """What lies between the probe and the qubit.

    Parameters
    ----------
    rabi_per_volt : float
        k in Hz/V: Rabi frequency in full cycles per second per volt of carrier peak amplitude
        of the incident wave, on resonance. The doubling at an open gate belongs into k.
    attenuation : float
        Attenuation between probe and qubit in dB, matched at both ends.
    impedance : float
        Reference impedance in ohm, which turns a probe current into an incident voltage.
    """

    rabi_per_volt: float
    attenuation: float = 0.0
    impedance: float = 50.0

    def __post_init__(self) -> None:
        if self.impedance <= 0:
            raise InputError(f"the reference impedance must be positive, got {self.impedance} ohm")


def voltage_gain(attenuation: float) -> float:
    """Turn an attenuation in dB into a factor on the amplitude.

    Parameters
    ----------
    attenuation : float
        Power ratio in dB, positive when the wave becomes smaller.

    Returns
    -------
    float
        10^(-attenuation/20).
    """
    return float(10.0 ** (-attenuation / 20.0))


def rate_per_unit(line: DriveLine, unit: str) -> float:
    """Give the drive rate in rad/s that one unit at the probe makes at the qubit.

    The Hamiltonian is H_d/hbar = 2 pi k v(t) (a + a^dag), v the incident wave after attenuation.

    Parameters
    ----------
    line : DriveLine
        The way from the probe to the qubit.
    unit : str
        Unit of the probe, "V" or "A".

    Returns
    -------
    float
        In rad/s per volt, or per ampere.

    Raises
    ------
    InputError
        If the unit is another one.
    """
    if unit not in ("V", "A"):
        raise InputError(f"a probe is in V or A, got '{unit}'")
    volts = line.impedance if unit == "A" else 1.0
    return 2.0 * math.pi * line.rabi_per_volt * voltage_gain(line.attenuation) * volts


def drive_rate(waveform: Waveform, line: DriveLine) -> Waveform:
    """Turn the probe's waveform into the drive rate.

    Parameters
    ----------
    waveform : Waveform
        Probe in V or A, shape (n,).
    line : DriveLine
        The way from the probe to the qubit.

    Returns
    -------
    Waveform
        2 pi k v(t) in rad/s on the same grid, shape (n,).

    Raises
    ------
    InputError
        If the waveform is in neither V nor A.
    """
    return Waveform(waveform.t, waveform.v * rate_per_unit(line, waveform.unit), unit="rad/s")


def rotating_rate(
    iq: ComplexArray, t: FloatArray, line: DriveLine, unit: str, frequency_offset: float
) -> ComplexArray:
    """Turn an envelope into a complex drive rate in the qubit's own frame.

    Parameters
    ----------
    iq : ndarray of complex, shape (n,)
        I + jQ at the probe, carrier peak amplitude in `unit`.
    t : ndarray, shape (n,)
        Times of the samples in s.
    line : DriveLine
        The way from the probe to the qubit.
    unit : str
        Unit of the probe, "V" or "A".
    frequency_offset : float
        Carrier minus qubit frequency in Hz.

    Returns
    -------
    ndarray of complex, shape (n,)
        2 pi k (I + jQ) exp(+j 2 pi offset t) in rad/s.

    Raises
    ------
    InputError
        If the unit is neither V nor A.
    """

    turn = np.exp(2j * math.pi * frequency_offset * t)
    return np.asarray(iq * turn * rate_per_unit(line, unit), dtype=np.complex128)
