"""What earlier slots of a train do to later ones: how far back it reaches, and how it decays."""

from dataclasses import dataclass

import numpy as np

from cosim.dsp.settling import Settling, fit_memory
from cosim.waveform import FloatArray

# How a whole number of slots is told apart from more: lags beyond this are one.
MOST_LAGS = 24
# Errors of the longer step are at most so many times what halving it changes; see the error bars of
# single gates.
_FIRST_ORDER = 2.0
# What the evolution's own error can cost where there is no second run.
LEAST_FLOOR = 1e-14


@dataclass(frozen=True, slots=True)
class Memory:
    """How far back the history of a slot matters.

    Parameters
    ----------
    lag_costs : ndarray, shape (lags,)
        For lag 1, 2, ...: the largest infidelity by which two slots with one factor differ that
        have the same history up to the slot before that lag; what lies that far back or farther
        does it. NaN where the train has no such pair.
    depth : int
        The largest lag whose cost is above the floor; 0 for no memory.
    deeper : bool
        Whether the farthest lag that the train resolves is still above the floor.
    floor : float
        Infidelity below which the simulator itself makes slots differ.
    """

    lag_costs: FloatArray
    depth: int
    deeper: bool
    floor: float


def find_memory(vectors: FloatArray, factors: tuple[float, ...], floor: float) -> Memory:
    """Compare the slots of a train in pairs.

    Parameters
    ----------
    vectors : ndarray, shape (slots, m)
        Error vector of each slot; its square is an infidelity.
    factors : tuple of float
        Of the pulse in each slot; before the first one there was rest.
    floor : float
        Infidelity that does not count.

    Returns
    -------
    Memory
        It needs no model of what the circuit remembers.
    """
    played = np.array(factors)
    slots = played.size
    # What differs first, going back from the slot before: its lag, by the pair of slots.
    costs = np.full(slots, -1.0)
    for later in range(1, slots):
        for earlier in range(later):
            if played[earlier] != played[later]:
                continue
            lag = _first_difference(played, earlier, later)
            if lag:
                cost = float(np.sum((vectors[later] - vectors[earlier]) ** 2))
                costs[lag - 1] = max(costs[lag - 1], cost)
    # Pairs that agree up to a lag are those that differ first there or farther back.
    farther = np.maximum.accumulate(costs[::-1])[::-1][:MOST_LAGS]
    known = farther >= 0.0
    above = np.flatnonzero(known & (farther > floor))
    depth = int(above[-1]) + 1 if above.size else 0
    deepest = int(np.flatnonzero(known)[-1]) + 1 if known.any() else 0
    return Memory(
        np.where(known, farther, np.nan)[:deepest], depth, bool(depth) and depth == deepest, floor
    )


def _first_difference(played: FloatArray, earlier: int, later: int) -> int:
    """Lag at which the histories of two slots first differ; 0 where they never do."""
    differing = np.flatnonzero(played[:earlier][::-1] != played[later - earlier : later][::-1])
    if differing.size:
        return int(differing[0]) + 1
    # Before the train there was rest.
    older = np.flatnonzero(played[: later - earlier][::-1])
    return earlier + int(older[0]) + 1 if older.size else 0


def memory_floor(first: FloatArray, second: FloatArray | None, factors: tuple[float, ...]) -> float:
    """Tell by how much the simulator's own errors make slots of one factor differ.

    Parameters
    ----------
    first, second : ndarray, shape (slots, m)
        Error vectors of the run at the full step, and of that at half of it, in one frame.
    factors : tuple of float
        Of the pulse in each slot.

    Returns
    -------
    float
        Infidelity. What halving the step changes alike in all slots does not count.
    """
    if second is None:
        return LEAST_FLOOR
    change = second - first
    played = np.array(factors)
    widest = 0.0
    for factor in np.unique(played):
        own = change[played == factor]
        widest = max(widest, float(np.linalg.norm(own - own.mean(axis=0), axis=1).max()))
    return max(LEAST_FLOOR, (2.0 * _FIRST_ORDER * widest) ** 2)


def find_settling(
    turns: FloatArray, factors: tuple[float, ...], spacing: float, first: int, floor: float
) -> Settling | None:
    """Fit what pulses leave to those behind them, by exponentials in time.

    Parameters
    ----------
    turns : ndarray, shape (slots, 3)
        Coherent error of each slot in rad.
    factors : tuple of float
        Of the pulse in each slot.
    spacing : float
        Length of a slot in s.
    first : int
        Number of the first slot with a pulse.
    floor : float
        Root mean square in rad below which nothing is fitted.

    Returns
    -------
    Settling or None
        Of the slots with the factor of the first; None where there are fewer than four.
    """
    played = np.array(factors)
    chosen = np.flatnonzero(played == played[first])
    if chosen.size < 4:
        return None
    return fit_memory(played, spacing, chosen, turns[chosen], floor=floor)


def history_of(factors: tuple[float, ...], slot: int, length: int) -> str:
    """Write what the slots before a slot played, the latest one last.

    Parameters
    ----------
    factors : tuple of float
        Of the pulse in each slot.
    slot : int
        Which one.
    length : int
        How far back.

    Returns
    -------
    str
        "0110", or "0.5, 1" where there are other factors; "-" for no slots.
    """
    padded = (0.0,) * length + factors
    past = padded[slot : slot + length]
    if not past:
        return "-"
    if all(factor in (0.0, 1.0) for factor in factors):
        return "".join(f"{factor:.0f}" for factor in past)
    return ", ".join(f"{factor:g}" for factor in past)
