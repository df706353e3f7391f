"""What a readout leaves behind: the state, and how long the decision takes."""

import math
from dataclasses import dataclass, field

from cosim.dsp.detection.assignment import AssignmentSplit
from cosim.dsp.detection.converter import Adc
from cosim.dsp.detection.outcomes import state_odds
from cosim.dsp.detection.records import Preparation, Transitions
from cosim.errors import InputError


@dataclass(frozen=True, slots=True)
class RepeatAgreement:
    """How far a second readout decides as the first did.

    Parameters
    ----------
    ground, excited : float
        Probability of two equal decisions where state 0 (state 1) was prepared.
    mean : float
        Mean of the two.
    ground_kept, excited_kept : float
        Probability that state 0 (state 1) at the start of the records is still there at the end
        of the window.
    """

    ground: float = field(metadata={"unit": "1"})
    excited: float = field(metadata={"unit": "1"})
    mean: float = field(metadata={"unit": "1"})
    ground_kept: float = field(metadata={"unit": "1"})
    excited_kept: float = field(metadata={"unit": "1"})


def repeat_agreement(
    split: AssignmentSplit,
    transitions: Transitions,
    preparation: Preparation,
    wait: float = 0.0,
) -> RepeatAgreement:
    """Give the probability that two readouts, one after the other, decide alike.

    Parameters
    ----------
    split : AssignmentSplit
        Of both readouts.
    transitions : Transitions
        During both, and between them.
    preparation : Preparation
        Before the first.
    wait : float
        From the end of the first window to the start of the second's records in s.

    Returns
    -------
    RepeatAgreement

    Raises
    ------
    InputError
        If the wait is negative or not finite, or there is a conversion or reversion, after
        which the state is another.

    Notes
    -----
    The state is a Markov chain, with one transition at most within a readout; the noise of the
    two readouts is independent, and the chain has settled between them.
    """
    if not (math.isfinite(wait) and wait >= 0):
        raise InputError(f"repeat agreement: wanted a wait of at least zero in s, got {wait!r}")
    if transitions.converts or transitions.reversion > 0:
        raise InputError(
            "repeat agreement: wanted a readout that leaves the state, got one that converts it"
        )
    odds = {
        (state, decision): state_odds(
            split.projection, transitions, split.threshold, state, decision
        )
        for state in (0, 1)
        for decision in (0, 1)
    }

    def again(state: int, decision: int) -> float:
        """Probability of a decision for a state at the end of the first window."""
        changed = _changed(transitions, wait, state)
        return (1 - changed) * odds[state, decision].decided + changed * odds[
            1 - state, decision
        ].decided

    alike = [
        math.fsum(
            odds[state, decision].decided_and_kept * again(state, decision)
            + odds[state, decision].decided_and_changed * again(1 - state, decision)
            for decision in (0, 1)
        )
        for state in (0, 1)
    ]
    first, second = preparation.wrong
    ground = (1 - first) * alike[0] + first * alike[1]
    excited = (1 - second) * alike[1] + second * alike[0]
    return RepeatAgreement(
        ground, excited, (ground + excited) / 2, odds[0, 0].kept, odds[1, 0].kept
    )


def decision_latency(adc: Adc, cycles: int) -> float:
    """Give the time from the end of the integration to the decision.

    Parameters
    ----------
    adc : Adc
        Its clock is that of the arithmetic behind it.
    cycles : int
        Of that clock, after the conversion of the last sample, until the decision stands.

    Returns
    -------
    float
        (1 + cycles)/rate in s: one cycle converts the last sample. The filter's delay lies before
        it, since the window counts the samples; `Adc.group_delay` gives it.

    Raises
    ------
    InputError
        If the number of cycles is negative.
    """
    if cycles < 0:
        raise InputError(f"decision latency: wanted at least zero cycles, got {cycles!r}")
    return (1 + cycles) / adc.rate


def _changed(transitions: Transitions, duration: float, state: int) -> float:
    """Probability that a state is the other one after a time, any number of transitions allowed."""
    total = transitions.down + transitions.up
    if total == 0:
        return 0.0
    towards = transitions.down if state else transitions.up
    return -towards / total * math.expm1(-total * duration)
