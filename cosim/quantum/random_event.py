"""Events at random times during a readout: decay, excitation, tunnelling of an electron."""

import math
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from cosim.errors import InputError
from cosim.waveform import FloatArray


@dataclass(frozen=True, slots=True)
class ExponentialEvent:
    """An event that happens once, at a constant rate from a start on.

    Parameters
    ----------
    mean_time : float
        Mean wait from the start in s, more than 0: T1 of a decay, a tunnelling time; infinite for
        an event that never happens.
    start : float
        In s, at least 0.

    Raises
    ------
    InputError
        If a time is out of range.
    """

    mean_time: float = field(metadata={"unit": "s"})
    start: float = field(default=0.0, metadata={"unit": "s"})

    def __post_init__(self) -> None:
        _check_time("mean_time", self.mean_time)
        _check_start(self.start)


@dataclass(frozen=True, slots=True)
class SpinTunnelling:
    """Spin-to-charge conversion by the energy of a level: the electron of one spin leaves its dot.

    The electron of |1> leaves after a mean time of `out_excited`, if it does not relax before; that
    of |0> should stay and leaves after `out_ground`. Another one refills the dot.

    Parameters
    ----------
    out_excited, out_ground : float
        Mean tunnelling times in s; infinite for never.
    refill : float
        Mean time in s from the electron's leaving until another one has come.
    relaxation : float
        T1 of the spin in s.
    start : float
        Time at which the levels come to where tunnelling is possible, in s.

    Raises
    ------
    InputError
        If a time is out of range.

    Notes
    -----
    J. M. Elzerman et al., "Single-shot read-out of an individual electron spin in a quantum dot",
    Nature 430, 431 (2004).
    """

    out_excited: float = field(metadata={"unit": "s"})
    out_ground: float = field(default=math.inf, metadata={"unit": "s"})
    refill: float = field(default=math.inf, metadata={"unit": "s"})
    relaxation: float = field(default=math.inf, metadata={"unit": "s"})
    start: float = field(default=0.0, metadata={"unit": "s"})

    def __post_init__(self) -> None:
        for name in ("out_excited", "out_ground", "refill", "relaxation"):
            _check_time(name, getattr(self, name))
        _check_start(self.start)


def event_probability(event: ExponentialEvent, times: npt.ArrayLike) -> FloatArray:
    """Give the probability that an event happens before a time.

    Parameters
    ----------
    event : ExponentialEvent
        The event.
    times : array_like
        In s.

    Returns
    -------
    ndarray, shape as `times`
        1 - exp(-(t - start)/mean_time), and 0 before the start.
    """
    wait = np.maximum(np.asarray(times, dtype=np.float64) - event.start, 0.0)
    return np.asarray(-np.expm1(-wait / event.mean_time))


def event_times(event: ExponentialEvent, count: int, seed: int) -> FloatArray:
    """Draw the times of an event in many shots.

    Parameters
    ----------
    event : ExponentialEvent
        The event.
    count : int
        Number of shots.
    seed : int
        At least 0. The first shots are the same for any count.

    Returns
    -------
    ndarray, shape (count,)
        In s; infinite where it never happens.

    Raises
    ------
    InputError
        If the count or the seed is negative.
    """
    return event.start + _waits(_generator(count, seed), event.mean_time, count)


def out_probability(tunnelling: SpinTunnelling, level: int, times: npt.ArrayLike) -> FloatArray:
    """Give the probability that the electron has left before a time.

    Parameters
    ----------
    tunnelling : SpinTunnelling
        The conversion.
    level : int
        State of the spin at the start, 0 or 1.
    times : array_like
        In s.

    Returns
    -------
    ndarray, shape as `times`
        Whether or not another electron has come by then. Of |1> the rates of leaving and of
        relaxation compete; a spin that has relaxed leaves as |0> does.

    Raises
    ------
    InputError
        If the level is another one.
    """
    wait = np.maximum(np.asarray(times, dtype=np.float64) - tunnelling.start, 0.0)
    slow = 1 / tunnelling.out_ground
    if _checked_level(level) == 0:
        return np.asarray(-np.expm1(-slow * wait))
    relaxing = 1 / tunnelling.relaxation
    excited = 1 / tunnelling.out_excited + relaxing
    # (exp(-slow t) - exp(-excited t))/(excited - slow), which exists for equal rates too.
    relaxed = relaxing * np.exp(-slow * wait) * wait * _mean_decay((excited - slow) * wait)
    return np.asarray(1 - np.exp(-excited * wait) - relaxed)


def tunnelling_times(
    tunnelling: SpinTunnelling, level: int, count: int, seed: int
) -> tuple[FloatArray, FloatArray]:
    """Draw the times at which the electron leaves and another one comes, in many shots.

    Parameters
    ----------
    tunnelling : SpinTunnelling
        The conversion.
    level : int
        State of the spin at the start, 0 or 1.
    count, seed : int
        As in `event_times`.

    Returns
    -------
    tuple of ndarray, each of shape (count,)
        Times of leaving and of refilling in s; infinite where that never happens.

    Raises
    ------
    InputError
        If the level is another one, or the count or the seed is negative.
    """
    _checked_level(level)
    # Each time has a stream of its own, so that it does not depend on the count of the others.
    first, second, third, fourth = np.random.SeedSequence(_checked_seed(seed)).spawn(4)
    waits = {
        name: _waits(np.random.default_rng(stream), mean, _checked_count(count))
        for name, stream, mean in (
            ("excited", first, tunnelling.out_excited),
            ("relaxation", second, tunnelling.relaxation),
            ("ground", third, tunnelling.out_ground),
            ("refill", fourth, tunnelling.refill),
        )
    }
    leaving = waits["ground"]
    if level == 1:
        relaxed = waits["relaxation"] < waits["excited"]
        leaving = np.where(relaxed, waits["relaxation"] + leaving, waits["excited"])
    out = tunnelling.start + leaving
    return out, out + waits["refill"]


def _mean_decay(x: FloatArray) -> FloatArray:
    """Give (1 - exp(-x))/x, and 1 at zero."""
    safe = np.where(x == 0, 1.0, x)
    return np.where(x == 0, 1.0, -np.expm1(-safe) / safe)


def _waits(generator: np.random.Generator, mean: float, count: int) -> FloatArray:
    if math.isinf(mean):
        return np.full(count, math.inf)
    # By the inverse of the distribution: one number a shot, whatever the mean.
    return np.asarray(-mean * np.log1p(-generator.random(count)))


def _generator(count: int, seed: int) -> np.random.Generator:
    _checked_count(count)
    return np.random.default_rng(_checked_seed(seed))


def _checked_count(count: int) -> int:
    if count < 0:
        raise InputError(f"shots: wanted a count of at least 0, got {count!r}")
    return count


def _checked_seed(seed: int) -> int:
    if seed < 0:
        raise InputError(f"shots: wanted a seed of at least 0, got {seed!r}")
    return seed


def _checked_level(level: int) -> int:
    if level not in (0, 1):
        raise InputError(f"spin: wanted the level 0 or 1, got {level!r}")
    return level


def _check_time(name: str, value: float) -> None:
    if not value > 0:
        raise InputError(f"{name}: wanted a time above 0 s, got {value!r}")


def _check_start(value: float) -> None:
    if not (math.isfinite(value) and value >= 0):
        raise InputError(f"start: wanted a time of at least 0 s, got {value!r}")
