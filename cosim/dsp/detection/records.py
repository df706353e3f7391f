"""What a readout chain gives for each state, and what may happen to the state meanwhile.

States are numbers here, 0 and 1, and records are what the chain gives without noise. A record with
a transition starts in one state and goes over to the other at a known time; the chain was run with
it, so that whatever the chain bends is in the record.
"""

import math
from dataclasses import dataclass, field

import numpy as np

from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray


def _no_times() -> FloatArray:
    return np.zeros(0)


def _no_records() -> ComplexArray:
    return np.zeros((0, 0), dtype=np.complex128)


@dataclass(frozen=True, slots=True)
class Records:
    """Complex records I + jQ of a chain without noise, on a uniform grid from the time 0.

    Of a chain with one output the imaginary part is zero. Before the time 0 the records are
    taken to rest at their first sample.

    Parameters
    ----------
    step : float
        Sample interval in s.
    ground, excited : ndarray of complex, shape (n,)
        For state 0 and state 1, in V.
    decay_times : ndarray, shape (k,)
        Times in s, rising and not negative, at which state 1 becomes 0.
    decays : ndarray of complex, shape (k, n)
        The records with these, in V.
    excitation_times : ndarray, shape (m,)
        The same for state 0 that becomes 1.
    excitations : ndarray of complex, shape (m, n)
        In V.

    Raises
    ------
    InputError
        If shapes do not agree, a number is not finite, the step is not positive or the times do
        not rise.
    """

    step: float = field(metadata={"unit": "s"})
    ground: ComplexArray = field(metadata={"unit": "V", "axes": ("time",)})
    excited: ComplexArray = field(metadata={"unit": "V", "axes": ("time",)})
    decay_times: FloatArray = field(
        default_factory=_no_times, metadata={"unit": "s", "axes": ("decay_times",)}
    )
    decays: ComplexArray = field(
        default_factory=_no_records, metadata={"unit": "V", "axes": ("decay_times", "time")}
    )
    excitation_times: FloatArray = field(
        default_factory=_no_times, metadata={"unit": "s", "axes": ("excitation_times",)}
    )
    excitations: ComplexArray = field(
        default_factory=_no_records, metadata={"unit": "V", "axes": ("excitation_times", "time")}
    )

    def __post_init__(self) -> None:
        if not (math.isfinite(self.step) and self.step > 0):
            raise InputError(f"records: wanted a positive step in s, got {self.step!r}")
        for name in ("ground", "excited", "decays", "excitations"):
            array = np.ascontiguousarray(getattr(self, name), dtype=np.complex128)
            object.__setattr__(self, name, array)
            if not np.isfinite(array).all():
                raise InputError(f"records: '{name}' is not finite")
        if self.ground.ndim != 1 or self.ground.size < 2 or self.excited.shape != self.ground.shape:
            raise InputError(
                f"records: wanted 'ground' and 'excited' of one length and at least two samples, "
                f"got shapes {self.ground.shape} and {self.excited.shape}"
            )
        _check_transitions(self, "decay_times", "decays")
        _check_transitions(self, "excitation_times", "excitations")

    @property
    def time(self) -> FloatArray:
        """Times of the samples in s, shape (n,)."""
        return np.asarray(self.step * np.arange(self.ground.size), dtype=np.float64)

    @property
    def duration(self) -> float:
        """End of the records in s: one step after the last sample."""
        return self.step * self.ground.size


def _check_transitions(records: Records, times_name: str, name: str) -> None:
    times = np.ascontiguousarray(getattr(records, times_name), dtype=np.float64)
    object.__setattr__(records, times_name, times)
    array = getattr(records, name)
    if times.size == 0 and array.size == 0:
        object.__setattr__(records, name, np.zeros((0, records.ground.size), dtype=np.complex128))
        return
    if times.ndim != 1 or array.shape != (times.size, records.ground.size):
        raise InputError(
            f"records: wanted '{name}' of shape ({times.size}, {records.ground.size}), one row for "
            f"each of '{times_name}', got {array.shape}"
        )
    if not (np.isfinite(times).all() and times[0] >= 0 and (np.diff(times) > 0).all()):
        raise InputError(f"records: '{times_name}' must rise from zero or above, got {times}")


@dataclass(frozen=True, slots=True)
class Transitions:
    """Rates at which the state changes during the readout.

    Parameters
    ----------
    down, up : float
        From 1 to 0 and from 0 to 1, in 1/s.
    conversion : float
        Rate in 1/s at which state 1 comes to look like itself, as a spin does when its electron
        tunnels: before, the chain sees state 0, and a state that has gone down by then is never
        seen. Infinite where it is seen at once.
    reversion : float
        Rate in 1/s at which the chain sees state 0 again after it came to see state 1 by a
        conversion or by `up`, as when another electron fills the place; 0 where it stays.

    Raises
    ------
    InputError
        If a rate is negative or not finite, or the conversion is not positive.
    """

    down: float = field(default=0.0, metadata={"unit": "1/s"})
    up: float = field(default=0.0, metadata={"unit": "1/s"})
    conversion: float = field(default=math.inf, metadata={"unit": "1/s"})
    reversion: float = field(default=0.0, metadata={"unit": "1/s"})

    def __post_init__(self) -> None:
        for name in ("down", "up", "reversion"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value >= 0):
                raise InputError(f"transitions: wanted '{name}' at least zero in 1/s, got {value}")
        if not self.conversion > 0:
            raise InputError(
                f"transitions: wanted a positive 'conversion' in 1/s, got {self.conversion!r}"
            )

    @property
    def converts(self) -> bool:
        """Whether state 1 is seen with a delay."""
        return math.isfinite(self.conversion)

    def course(self, state: int) -> "Course":
        """Give what a state looks like, and how that changes.

        Parameters
        ----------
        state : int
            0 or 1, at the start of the records.

        Returns
        -------
        Course
        """
        if state == 0:
            return Course(0, self.up, 1.0, self.reversion)
        if not self.converts:
            return Course(1, self.down, 1.0, 0.0)
        rate = self.conversion + self.down
        return Course(0, rate, self.conversion / rate, self.reversion)

    def neglected(self, duration: float) -> float:
        """Bound the probability of a further transition in one readout, which is left out.

        Parameters
        ----------
        duration : float
            In s.

        Returns
        -------
        float
            up max(down, reversion) duration^2 / 2.
        """
        return self.up * max(self.down, self.reversion) * duration**2 / 2


@dataclass(frozen=True, slots=True)
class Course:
    """What the chain sees of a state.

    Parameters
    ----------
    seen : int
        Whose record it starts with, 0 or 1.
    rate : float
        At which something happens, in 1/s; the first time counts.
    share : float
        Probability that the record then goes over to the other state; else it stays for good.
    back : float
        Rate at which it goes back after that, in 1/s.
    """

    seen: int = field(metadata={"unit": "1"})
    rate: float = field(metadata={"unit": "1/s"})
    share: float = field(metadata={"unit": "1"})
    back: float = field(metadata={"unit": "1/s"})


def relaxation(t1: float, thermal_population: float = 0.0) -> Transitions:
    """Give the rates of a state that relaxes to a thermal mixture.

    Parameters
    ----------
    t1 : float
        Total relaxation time in s; infinite for none.
    thermal_population : float
        p of state 1 at rest, from 0 to 1.

    Returns
    -------
    Transitions
        (1 - p)/T1 down and p/T1 up.

    Raises
    ------
    InputError
        If a number is out of range.

    Notes
    -----
    Detailed balance of a two-level system.
    """
    if not t1 > 0:
        raise InputError(f"relaxation: wanted a positive t1 in s, got {t1!r}")
    _check_probability("relaxation", "thermal_population", thermal_population)
    return Transitions((1 - thermal_population) / t1, thermal_population / t1)


@dataclass(frozen=True, slots=True)
class Preparation:
    """How often the state at the start of the records is not the one that was wanted.

    Parameters
    ----------
    thermal_population : float
        Probability of state 1 where 0 is wanted: nothing is done to prepare it.
    error : float
        Probability that the pulse which exchanges 0 and 1 does not.

    Raises
    ------
    InputError
        If a number is not between 0 and 1.
    """

    thermal_population: float = field(default=0.0, metadata={"unit": "1"})
    error: float = field(default=0.0, metadata={"unit": "1"})

    def __post_init__(self) -> None:
        _check_probability("preparation", "thermal_population", self.thermal_population)
        _check_probability("preparation", "error", self.error)

    @property
    def wrong(self) -> tuple[float, float]:
        """Probability of the other state at the start: where 0 is wanted, and where 1 is.

        p, and p (1 - e) + (1 - p) e with the pulse's error e.
        """
        p, e = self.thermal_population, self.error
        return p, p + e - 2 * p * e


def _check_probability(where: str, name: str, value: float) -> None:
    if not 0 <= value <= 1:
        raise InputError(f"{where}: wanted '{name}' between 0 and 1, got {value!r}")
