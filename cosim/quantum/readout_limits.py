"""What a readout does to the qubit, and where the dispersive picture ends.

g, Delta and alpha are in rad/s: g the coupling of |0>-|1>, Delta = omega_q - omega_r, alpha the
anharmonicity omega_12 - omega_01, negative for a transmon.
"""

import math
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from cosim.errors import InputError
from cosim.quantum.qubit import Qubit
from cosim.quantum.resonator import Resonator
from cosim.waveform import ComplexArray, FloatArray


@dataclass(frozen=True, slots=True)
class DispersiveGuards:
    """Numbers that say how far the dispersive picture holds.

    Parameters
    ----------
    photons : float
        Largest mean photon number of the readout.
    critical_photons : float
        Photon number at which the picture ends; a scale, not a sharp limit.
    coupling_ratio : float
        |g/Delta|, small in the picture.
    expected_chi : float
        Shift in rad/s that g, Delta and alpha make.
    purcell_rate : float
        Decay of the qubit through the resonator in 1/s, behind the filter where there is one.
    """

    photons: float = field(metadata={"unit": "1"})
    critical_photons: float = field(metadata={"unit": "1"})
    coupling_ratio: float = field(metadata={"unit": "1"})
    expected_chi: float = field(metadata={"unit": "rad/s"})
    purcell_rate: float = field(metadata={"unit": "1/s"})


def transmon_chi(coupling: float, delta: float, alpha: float) -> float:
    """Give the dispersive shift of a transmon.

    Parameters
    ----------
    coupling, delta, alpha : float
        g, Delta and alpha in rad/s.

    Returns
    -------
    float
        chi = (g**2/Delta) alpha/(Delta + alpha) in rad/s, half the distance of the resonances of
        |0> and |1>; counter-rotating terms are left out.

    Raises
    ------
    InputError
        If the resonator is at a transition of the qubit, where no dispersive shift exists.

    Notes
    -----
    J. Koch et al., "Charge-insensitive qubit design derived from the Cooper pair box", Phys. Rev. A
    76, 042319 (2007).
    """
    _check_detuning("|0>-|1>", delta)
    _check_detuning("|1>-|2>", delta + alpha)
    return coupling**2 / delta * alpha / (delta + alpha)


def transmon_pulls(coupling: float, delta: float, alpha: float) -> tuple[float, float, float]:
    """Give the shifts of the resonance by the three lowest levels of a transmon.

    Parameters
    ----------
    coupling, delta, alpha : float
        g, Delta and alpha in rad/s.

    Returns
    -------
    tuple of float
        Of |0>, |1> and |2> in rad/s, from the resonance without a qubit. `Resonator.chi_2` is the
        third less the mean of the first two.

    Raises
    ------
    InputError
        As in `transmon_chi`.

    Notes
    -----
    Second order in g, with g sqrt(n + 1) between |n> and |n + 1>: chi_n = g**2 (n + 1)/(Delta +
    n alpha), and |n> shifts by chi_(n-1) - chi_n. Source as in `transmon_chi`.
    """
    for n, name in enumerate(("|0>-|1>", "|1>-|2>", "|2>-|3>")):
        _check_detuning(name, delta + n * alpha)
    chis = [coupling**2 * (n + 1) / (delta + n * alpha) for n in range(3)]
    return -chis[0], chis[0] - chis[1], chis[1] - chis[2]


def two_level_chi(coupling: float, delta: float) -> float:
    """Give the dispersive shift of a true two-level system, such as a spin.

    Parameters
    ----------
    coupling, delta : float
        g and Delta in rad/s.

    Returns
    -------
    float
        g**2/Delta in rad/s.

    Raises
    ------
    InputError
        If the detuning is zero.

    Notes
    -----
    A. Blais et al., "Cavity quantum electrodynamics for superconducting electrical circuits",
    Phys. Rev. A 69, 062320 (2004).
    """
    _check_detuning("|0>-|1>", delta)
    return coupling**2 / delta


def critical_photon_number(coupling: float, delta: float) -> float:
    """Give the photon number at which the dispersive picture ends.

    Parameters
    ----------
    coupling, delta : float
        g and Delta in rad/s, g not zero.

    Returns
    -------
    float
        Delta**2/(4 g**2); a transmon's further levels end the picture earlier.

    Raises
    ------
    InputError
        If g is zero.

    Notes
    -----
    Source as in `two_level_chi`.
    """
    _check_coupling(coupling)
    return delta**2 / (4 * coupling**2)


def purcell_rate(kappa: float, coupling: float, delta: float) -> float:
    """Give the decay of the qubit through the resonator's ports.

    Parameters
    ----------
    kappa : float
        Of the resonator in rad/s.
    coupling, delta : float
        g and Delta in rad/s.

    Returns
    -------
    float
        kappa (g/Delta)**2 in 1/s.

    Raises
    ------
    InputError
        If the detuning is zero.

    Notes
    -----
    A. A. Houck et al., "Controlling the spontaneous emission of a superconducting transmon qubit",
    Phys. Rev. Lett. 101, 080502 (2008).
    """
    _check_detuning("|0>-|1>", delta)
    return kappa * (coupling / delta) ** 2


def filtered_purcell_rate(
    kappa: float, coupling: float, omega_qubit: float, omega_resonator: float, quality: float
) -> float:
    """Give the decay of the qubit through a resonator behind a bandpass filter.

    Parameters
    ----------
    kappa, coupling : float
        Of the resonator, and g, in rad/s.
    omega_qubit, omega_resonator : float
        In rad/s.
    quality : float
        Quality of the filter, which is centred at the resonator.

    Returns
    -------
    float
        kappa (g/Delta)**2 (omega_q/omega_r) omega_r/(2 Q |Delta|) in 1/s, for |Delta| well above
        half the filter's bandwidth.

    Raises
    ------
    InputError
        If the detuning is zero or the quality not positive.

    Notes
    -----
    E. A. Sete, J. M. Martinis, A. N. Korotkov, "Quantum theory of a bandpass Purcell filter for
    qubit readout", Phys. Rev. A 92, 012325 (2015).
    """
    if not (math.isfinite(quality) and quality > 0):
        raise InputError(f"Purcell filter quality: wanted a positive number, got {quality!r}")
    delta = omega_qubit - omega_resonator
    return purcell_rate(kappa, coupling, delta) * omega_qubit / (2 * quality * abs(delta))


def dephasing_rate(
    resonator: Resonator,
    first: npt.ArrayLike,
    second: npt.ArrayLike,
    levels: tuple[int, int] = (0, 1),
) -> FloatArray:
    """Give the rate at which the field in the resonator dephases the qubit.

    Parameters
    ----------
    resonator : Resonator
        The resonator.
    first, second : array_like of complex
        Field inside in sqrt(photon) for the lower and the upper of the levels, steady or in time,
        all under the same drive; any one shape.
    levels : tuple of int
        The two levels.

    Returns
    -------
    ndarray, shape as `first`
        In 1/s, for the coherence of the two levels averaged over the field; negative for a while
        where a field that leaves carries less than it told.

    Raises
    ------
    InputError
        As in `Resonator.pull`.

    Notes
    -----
    (pull(upper) - pull(lower)) Im(a_lower conj(a_upper)): J. Gambetta et al., "Qubit-photon
    interactions in a cavity", Phys. Rev. A 74, 042318 (2006).
    """
    return _rotation(resonator, first, second, levels).imag


def stark_shift(
    resonator: Resonator,
    first: npt.ArrayLike,
    second: npt.ArrayLike,
    levels: tuple[int, int] = (0, 1),
) -> FloatArray:
    """Give the shift of the qubit's frequency by the field in the resonator.

    Parameters
    ----------
    resonator, first, second, levels
        As in `dephasing_rate`.

    Returns
    -------
    ndarray, shape as `first`
        In rad/s: (pull(upper) - pull(lower)) Re(a_lower conj(a_upper)).

    Raises
    ------
    InputError
        As in `Resonator.pull`.

    Notes
    -----
    Source as in `dephasing_rate`.
    """
    return _rotation(resonator, first, second, levels).real


def check_chi(resonator: Resonator, qubit: Qubit, coupling: float) -> float:
    """Compare the shift of a resonator with what a coupling makes, and refuse the wrong sign.

    Parameters
    ----------
    resonator : Resonator
        Its `chi` is checked.
    qubit : Qubit
        Its frequency and anharmonicity are used; without anharmonicity it is a true two-level
        system.
    coupling : float
        g in rad/s.

    Returns
    -------
    float
        chi that g, the detuning and the anharmonicity make, in rad/s.

    Raises
    ------
    InputError
        If the signs differ, g is zero, or the resonator is at a transition of the qubit.
    """
    _check_coupling(coupling)
    delta = 2 * math.pi * (qubit.frequency - resonator.frequency)
    alpha = 2 * math.pi * qubit.anharmonicity
    expected = transmon_chi(coupling, delta, alpha) if alpha else two_level_chi(coupling, delta)
    if expected * resonator.chi < 0:
        raise InputError(
            f"resonator chi: got {_cyclic(resonator.chi)}, but a coupling g = {_cyclic(coupling)}, "
            f"a detuning of {_cyclic(delta)} and an anharmonicity of {_cyclic(alpha)} make "
            f"{_cyclic(expected)}",
            hint="chi is half of omega_r(1) - omega_r(0): turn its sign, or correct the others",
        )
    return expected


def dispersive_guards(
    resonator: Resonator,
    qubit: Qubit,
    coupling: float,
    photons: float,
    quality: float | None = None,
) -> DispersiveGuards:
    """Say in numbers how far the dispersive picture holds for a readout.

    Parameters
    ----------
    resonator, qubit, coupling
        As in `check_chi`.
    photons : float
        Largest mean photon number of the readout.
    quality : float or None
        Of a bandpass filter at the resonator's frequency; None: there is none.

    Returns
    -------
    DispersiveGuards

    Raises
    ------
    InputError
        As in `check_chi` and `filtered_purcell_rate`.
    """
    expected = check_chi(resonator, qubit, coupling)
    ours, theirs = (2 * math.pi * one.frequency for one in (qubit, resonator))
    delta = ours - theirs
    if quality is None:
        rate = purcell_rate(resonator.kappa, coupling, delta)
    else:
        rate = filtered_purcell_rate(resonator.kappa, coupling, ours, theirs, quality)
    return DispersiveGuards(
        photons,
        critical_photon_number(coupling, delta),
        abs(coupling / delta),
        expected,
        rate,
    )


def _rotation(
    resonator: Resonator, first: npt.ArrayLike, second: npt.ArrayLike, levels: tuple[int, int]
) -> ComplexArray:
    lower, upper = levels
    shift = resonator.pull(upper) - resonator.pull(lower)
    overlap = np.asarray(first, dtype=np.complex128) * np.conj(second)
    return np.asarray(shift * overlap, dtype=np.complex128)


def _check_detuning(transition: str, detuning: float) -> None:
    if not (math.isfinite(detuning) and detuning != 0):
        raise InputError(
            f"dispersive shift: wanted a detuning of {transition} from the resonator other than 0, "
            f"got {detuning!r} rad/s",
            hint="at a transition of the qubit the dispersive picture does not hold",
        )


def _check_coupling(coupling: float) -> None:
    if not (math.isfinite(coupling) and coupling != 0):
        raise InputError(f"coupling g: wanted a number of rad/s other than 0, got {coupling!r}")


def _cyclic(rate: float) -> str:
    return f"{rate / (2 * math.pi):.6g} Hz"
