"""The qubit: levels, anharmonicity, relaxation and dephasing, and the operators made of them."""

import math
from dataclasses import dataclass, replace

import numpy as np

from cosim.errors import InputError
from cosim.waveform import ComplexArray

# Above this number the dense kernels and superoperators (levels**2 squared) stop being sensible.
MAX_LEVELS = 12


@dataclass(frozen=True, slots=True)
class Qubit:
    """A weakly anharmonic oscillator with Markovian relaxation and dephasing.

    The undriven Hamiltonian is sum_n (n omega_q + alpha n (n - 1)/2) |n><n|, and
    1/t2 = 1/(2 t1) + 1/t_phi.

    Parameters
    ----------
    frequency : float
        Transition frequency |0>-|1> in Hz, positive.
    levels : int
        Number of levels kept, 2 to 12. Scalar.
    anharmonicity : float
        f_12 - f_01 in Hz, negative for a transmon; without effect for two levels.
    t1 : float
        Total relaxation time in s, up plus down; infinite for none.
    t2 : float
        Markovian coherence time in s, at most 2 t1. Infinite: no pure dephasing, which is
        2 t1 when t1 is finite.
    thermal_population : float
        Population of |1> in the thermal state of the two lowest levels, 0 to 0.5.

    Raises
    ------
    InputError
        If a value is out of range.

    Notes
    -----
    Composition of T2: F. Bloch, "Nuclear induction", Phys. Rev. 70, 460 (1946), and common
    practice since.
    """

    frequency: float
    levels: int = 2
    anharmonicity: float = 0.0
    t1: float = math.inf
    t2: float = math.inf
    thermal_population: float = 0.0

    def __post_init__(self) -> None:
        if not (math.isfinite(self.frequency) and self.frequency > 0):
            raise InputError(
                f"qubit frequency: wanted a positive number of Hz, got {self.frequency!r}"
            )
        if self.levels != int(self.levels) or not 2 <= self.levels <= MAX_LEVELS:
            raise InputError(f"qubit levels: wanted 2 to {MAX_LEVELS}, got {self.levels!r}")
        if not math.isfinite(self.anharmonicity):
            raise InputError(
                f"qubit anharmonicity: wanted a finite number of Hz, got {self.anharmonicity!r}"
            )
        for name in ("t1", "t2"):
            value = getattr(self, name)
            if not value > 0:
                raise InputError(f"qubit {name}: wanted a positive time in s, got {value!r}")
        # The slack of 1e-9 lets t2 = 2 * t1 pass when both went through a text with a unit.
        if math.isfinite(self.t2) and self.t2 > 2 * self.t1 * (1 + 1e-9):
            raise InputError(
                f"qubit t2 = {self.t2:.6g} s is more than 2 t1 = {2 * self.t1:.6g} s",
                hint="relaxation alone limits t2 to 2 t1; give a t2 of at most that",
            )
        if not 0 <= self.thermal_population <= 0.5:
            raise InputError(
                f"qubit thermal_population: wanted 0 to 0.5, got {self.thermal_population!r}"
            )

    def with_levels(self, levels: int) -> "Qubit":
        """Give the same qubit with another number of levels.

        Parameters
        ----------
        levels : int
            Number of levels, 2 to 12.

        Returns
        -------
        Qubit

        Raises
        ------
        InputError
            If `levels` is out of range.
        """
        return replace(self, levels=levels)

    @property
    def omega(self) -> float:
        """Angular transition frequency in rad/s."""
        return 2 * math.pi * self.frequency

    @property
    def gamma_1(self) -> float:
        """Total relaxation rate 1/t1 in 1/s."""
        return 1 / self.t1

    @property
    def gamma_phi(self) -> float:
        """Pure dephasing rate 1/t2 - 1/(2 t1) in 1/s, never negative."""
        return max(0.0, 1 / self.t2 - 0.5 / self.t1)

    @property
    def lossless(self) -> bool:
        """Whether neither relaxation nor dephasing acts."""
        return self.gamma_1 == 0 and self.gamma_phi == 0

    def annihilation(self) -> ComplexArray:
        """Give the annihilation operator a, shape (levels, levels), dimensionless."""
        return np.diag(np.sqrt(np.arange(1.0, self.levels)), k=1).astype(np.complex128)

    def number(self) -> ComplexArray:
        """Give the number operator, shape (levels, levels), dimensionless."""
        return np.diag(np.arange(float(self.levels))).astype(np.complex128)

    def collapse_operators(self) -> list[ComplexArray]:
        """Give the collapse operators of the master equation in Lindblad form.

        Returns
        -------
        list of ndarray, each of shape (levels, levels)
            sqrt((1 - p)/t1) a, sqrt(p/t1) a^dag and sqrt(2/t_phi) a^dag a, in s**-0.5; those
            with a rate of zero are left out.

        Notes
        -----
        P. Krantz et al., "A quantum engineer's guide to superconducting qubits", Appl. Phys.
        Rev. 6, 021318 (2019), section III.
        """
        a = self.annihilation()
        p = self.thermal_population
        terms = (
            ((1 - p) * self.gamma_1, a),
            (p * self.gamma_1, a.conj().T),
            (2 * self.gamma_phi, self.number()),
        )
        return [np.asarray(math.sqrt(rate) * operator) for rate, operator in terms if rate > 0]
