"""The readout resonator: its response to a steady field for each state of the qubit.

Fields go as exp(-i omega t): circuit simulators and Touchstone files use the conjugate.
"""

import math
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from cosim.errors import InputError, near_names
from cosim.waveform import ComplexArray

GEOMETRIES = ("reflection", "transmission", "hanger")


@dataclass(frozen=True, slots=True)
class Resonator:
    """A resonator that a qubit pulls by a shift which depends on the qubit's state alone.

    Parameters
    ----------
    geometry : str
        "reflection": one port, `kappa_in`, which is also the output. "transmission": in by
        `kappa_in`, out by `kappa_out`. "hanger": beside a feedline that it is coupled to by
        `kappa_out`, both directions counted; half of that reaches the output.
    frequency : float
        Midway between the resonances of |0> and |1>, in Hz.
    kappa_in : float
        Energy decay rate through the input port in rad/s; 0 for a hanger.
    kappa_out : float
        Energy decay rate through the output port in rad/s; 0 in reflection, where the port of
        `kappa_in` is the only one (loss through any other port belongs in `kappa_internal`).
    kappa_internal : float
        Energy decay rate by loss in rad/s.
    chi : float
        Half the distance of the resonances, (omega_r(1) - omega_r(0))/2, in rad/s.
    chi_2 : float or None
        Resonance of |2> less the midway frequency, in rad/s; None where |2> is not used.

    Raises
    ------
    InputError
        If a value is out of range, `chi` is zero, or a port does not belong to the geometry.

    Notes
    -----
    C. W. Gardiner, M. J. Collett, "Input and output in damped quantum systems", Phys. Rev. A 31,
    3761 (1985); dispersive shift: A. Blais et al., Phys. Rev. A 69, 062320 (2004).
    """

    geometry: str
    frequency: float = field(metadata={"unit": "Hz"})
    kappa_in: float = field(metadata={"unit": "rad/s"})
    kappa_out: float = field(metadata={"unit": "rad/s"})
    kappa_internal: float = field(metadata={"unit": "rad/s"})
    chi: float = field(metadata={"unit": "rad/s"})
    chi_2: float | None = field(default=None, metadata={"unit": "rad/s"})

    def __post_init__(self) -> None:
        if self.geometry not in GEOMETRIES:
            raise InputError(
                f"resonator geometry: wanted one of {', '.join(GEOMETRIES)}, got "
                f"'{self.geometry}': {near_names(self.geometry, GEOMETRIES)}"
            )
        if not (math.isfinite(self.frequency) and self.frequency > 0):
            raise InputError(
                f"resonator frequency: wanted a positive number of Hz, got {self.frequency!r}"
            )
        for name in ("kappa_in", "kappa_out", "kappa_internal"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value >= 0):
                raise InputError(f"resonator {name}: wanted at least 0 rad/s, got {value!r}")
        wanted = {
            "reflection": ("kappa_in",),
            "transmission": ("kappa_in", "kappa_out"),
            "hanger": ("kappa_out",),
        }[self.geometry]
        for name in ("kappa_in", "kappa_out"):
            if (getattr(self, name) > 0) != (name in wanted):
                rate = getattr(self, name) / (2.0 * math.pi)
                raise InputError(
                    f"resonator {name}: wanted {'more than 0' if name in wanted else '0'} for the "
                    f"geometry '{self.geometry}', got {rate:.6g} Hz over 2 pi",
                    hint=f"the ports of '{self.geometry}': {', '.join(wanted)}; loss elsewhere "
                    "belongs in kappa_internal",
                )
        if not (math.isfinite(self.chi) and self.chi != 0):
            raise InputError(
                f"resonator chi: wanted a finite shift in rad/s other than 0, got {self.chi!r}",
                hint="without a shift the field is the same for both states",
            )
        if self.chi_2 is not None and not math.isfinite(self.chi_2):
            raise InputError(f"resonator chi_2: wanted a finite shift, got {self.chi_2!r}")

    @property
    def kappa(self) -> float:
        """Total energy decay rate in rad/s."""
        return self.kappa_in + self.kappa_out + self.kappa_internal

    @property
    def driven_rate(self) -> float:
        """Energy decay rate into the mode that the drive comes in by, in rad/s."""
        return self.kappa_out / 2 if self.geometry == "hanger" else self.kappa_in

    @property
    def output_rate(self) -> float:
        """Energy decay rate into the mode that goes to the output, in rad/s."""
        if self.geometry == "hanger":
            return self.kappa_out / 2
        return self.kappa_out if self.geometry == "transmission" else self.kappa_in

    def pull(self, level: int) -> float:
        """Give the shift of the resonance by the qubit's state.

        Parameters
        ----------
        level : int
            0, 1 or 2.

        Returns
        -------
        float
            omega_r(level) less the midway frequency, in rad/s: -chi, chi or chi_2.

        Raises
        ------
        InputError
            If the level is another one, or it is 2 and `chi_2` is not given.
        """
        if level not in (0, 1, 2):
            raise InputError(f"resonator: wanted the level 0, 1 or 2, got {level!r}")
        if level < 2:
            return self.chi if level else -self.chi
        if self.chi_2 is None:
            raise InputError(
                "resonator chi_2: the shift of |2> is asked for and not given",
                hint="give chi_2, the resonance of |2> less the midway frequency",
            )
        return self.chi_2


def field_rate(resonator: Resonator, level: int, frequency: npt.ArrayLike) -> ComplexArray:
    """Give the rate by which the field decays and turns against a carrier.

    Parameters
    ----------
    resonator : Resonator
        The resonator.
    level : int
        State of the qubit, 0 to 2.
    frequency : array_like
        Of the carrier in Hz.

    Returns
    -------
    ndarray of complex, shape as `frequency`
        kappa/2 + i Delta in rad/s, Delta = omega_r(level) - omega.

    Raises
    ------
    InputError
        As in `Resonator.pull`.
    """
    detuning = 2 * math.pi * (resonator.frequency - np.asarray(frequency, dtype=np.float64))
    return np.asarray(resonator.kappa / 2 + 1j * (detuning + resonator.pull(level)))


def scattering(resonator: Resonator, level: int, frequency: npt.ArrayLike) -> ComplexArray:
    """Give the steady response from the input to the output.

    Parameters
    ----------
    resonator, level, frequency
        As in `field_rate`.

    Returns
    -------
    ndarray of complex, shape as `frequency`
        Outgoing over incident field, exp(-i omega t): 1 - k/(kappa/2 + i Delta) in reflection
        (k = kappa_in) and for a hanger (k = kappa_out/2), and
        -sqrt(kappa_in kappa_out)/(kappa/2 + i Delta) in transmission.

    Raises
    ------
    InputError
        As in `Resonator.pull`.
    """
    rate = field_rate(resonator, level, frequency)
    through = math.sqrt(resonator.driven_rate * resonator.output_rate)
    direct = 0.0 if resonator.geometry == "transmission" else 1.0
    return np.asarray(direct - through / rate)


def steady_field(
    resonator: Resonator, level: int, amplitude: complex, frequency: npt.ArrayLike
) -> ComplexArray:
    """Give the field in the resonator under a constant drive.

    Parameters
    ----------
    resonator, level, frequency
        As in `field_rate`.
    amplitude : complex
        Incident field in sqrt(photon/s).

    Returns
    -------
    ndarray of complex, shape as `frequency`
        In sqrt(photon); the square of its size is the mean photon number.

    Raises
    ------
    InputError
        As in `Resonator.pull`.
    """
    rate = field_rate(resonator, level, frequency)
    return np.asarray(math.sqrt(resonator.driven_rate) * amplitude / rate)


def amplitude_for_photons(
    resonator: Resonator, photons: float, frequency: float, level: int | None = None
) -> float:
    """Give the incident field that holds a photon number in the resonator.

    Parameters
    ----------
    resonator : Resonator
        The resonator.
    photons : float
        Mean photon number in the steady state.
    frequency : float
        Of the drive in Hz.
    level : int or None
        State of the qubit for which the number holds; None for the mean of those for |0> and |1>.

    Returns
    -------
    float
        In sqrt(photon/s).

    Raises
    ------
    InputError
        If the number is negative, or as in `Resonator.pull`.
    """
    if not (math.isfinite(photons) and photons >= 0):
        raise InputError(f"photons: wanted at least 0, got {photons!r}")
    levels = (0, 1) if level is None else (level,)
    fields = [complex(steady_field(resonator, one, 1.0, frequency)) for one in levels]
    return math.sqrt(photons * len(fields) / sum(abs(one) ** 2 for one in fields))


def wait_for_photons(resonator: Resonator, photons: float, left: float) -> float:
    """Give the wait without a drive until few photons are left.

    Parameters
    ----------
    resonator : Resonator
        The resonator.
    photons : float
        Mean number now.
    left : float
        Mean number wanted, more than 0.

    Returns
    -------
    float
        ln(photons/left)/kappa in s, 0 if there are no more than that now.

    Raises
    ------
    InputError
        If `photons` is negative or `left` not positive.
    """
    if not (math.isfinite(photons) and photons >= 0 and math.isfinite(left) and left > 0):
        raise InputError(
            f"photons left: wanted a number above 0 from at least 0, got {left!r} from {photons!r}"
        )
    return math.log(photons / left) / resonator.kappa if photons > left else 0.0
