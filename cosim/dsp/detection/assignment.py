"""The assignment error of a readout, split over what makes it, and the best integration time.

The effects are switched on one after the other, in this order, and each item is by how much the
assignment error grows with it, so that the items sum to the whole exactly:

1. separation: the linear chain with its noise, nothing else. Erfc of its signal over noise.
2. saturation: the chain as it is, in place of the linear one. Negative where what the chain bends
   tells the states further apart; zero where no linear records are given.
3. quantisation: rounding and clipping of the converter. The filter in front and the sampling
   belong to the chain and are there from the first.
4. excitation: state 0 that becomes 1 between the start of the records and the end of the window.
5. decay: the same for state 1 that becomes 0, or that is seen late or never where it is seen by a
   conversion.
6. preparation: the other state at the start of the records.

Weights and axis are found anew from the records of each step, and so is the threshold, by the same
rule. Quantisation without clipping, excitation, decay and preparation are never negative: each
makes both kinds of wrong decisions more frequent at any threshold between the two means (as long
as a state that changes gives a value between those of the two that do not).
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from cosim.dsp.detection.outcomes import best_threshold, check_transitions, wrong_shares
from cosim.dsp.detection.projection import Projection, project, snr_over_time
from cosim.dsp.detection.reception import ChainOutput, Detector, Received, receive
from cosim.dsp.detection.records import Preparation, Transitions
from cosim.waveform import FloatArray

# Lengths of the integration that are tried at a time, first over all and then around the best.
_TRIED = 64


@dataclass(frozen=True, slots=True)
class ErrorItems:
    """What the assignment error is made of; the sum is the whole.

    Parameters
    ----------
    separation, decay, preparation, excitation, saturation, quantisation : float
        As the head of the module `cosim.dsp.detection.assignment` defines them.
    """

    separation: float = field(metadata={"unit": "1"})
    decay: float = field(metadata={"unit": "1"})
    preparation: float = field(metadata={"unit": "1"})
    excitation: float = field(metadata={"unit": "1"})
    saturation: float = field(metadata={"unit": "1"})
    quantisation: float = field(metadata={"unit": "1"})

    @property
    def total(self) -> float:
        """Sum of the items."""
        return math.fsum(
            (
                self.separation,
                self.decay,
                self.preparation,
                self.excitation,
                self.saturation,
                self.quantisation,
            )
        )


@dataclass(frozen=True, slots=True)
class AssignmentSplit:
    """The decisions of a readout in closed form.

    Parameters
    ----------
    assignment_error : float
        (P(1|0) + P(0|1))/2.
    assignment_matrix : ndarray, shape (2, 2)
        P(i|j): decision i, state j prepared; columns sum to 1.
    errors : ErrorItems
        What the error is made of.
    snr : float
        Distance of the means over the mean of the two standard deviations, all effects on the
        chain included.
    threshold : float
        In V along the axis.
    projection : Projection
        Points, axis, weights, all effects on the chain included.
    clipped : float
        Expected share of samples outside the converter's range, the larger of the two states.
    lsb_over_sigma : float
        Step of the converter over the standard deviation of a sample, the larger of the two
        states; 0 without a converter. Above about 2 rounding is no longer like noise, and the
        closed form does not hold.
    gains : ndarray, shape (2,)
        Size of the record of each state over that of the linear chain, from their correlation; 1
        without linear records. Where only one is below 1 the chain saturates on one state.
    interpolation_error : float
        Change of the assignment error when every other simulated time of a transition is left
        out: bounds the error of the interpolation.
    neglected : float
        Bound on the probability of a further transition within one readout, which is left out.
    """

    assignment_error: float = field(metadata={"unit": "1"})
    assignment_matrix: FloatArray = field(
        metadata={
            "unit": "1",
            "axes": ("decided", "prepared"),
            "labels": {"decided": ("0", "1"), "prepared": ("0", "1")},
        }
    )
    errors: ErrorItems
    snr: float = field(metadata={"unit": "1"})
    threshold: float = field(metadata={"unit": "V"})
    projection: Projection = field(metadata={"table": False})
    clipped: float = field(metadata={"unit": "1"})
    lsb_over_sigma: float = field(metadata={"unit": "1"})
    gains: FloatArray = field(metadata={"unit": "1", "axes": ("prepared",)})
    interpolation_error: float = field(metadata={"unit": "1"})
    neglected: float = field(metadata={"unit": "1"})


@dataclass(frozen=True, slots=True)
class IntegrationScan:
    """Signal over noise and error against the length of the integration.

    Parameters
    ----------
    snr_times : ndarray, shape (n,)
        Every length in s that the window allows, from its start.
    snr : ndarray, shape (n,)
        Signal over noise.
    times : ndarray, shape (m,)
        Lengths in s at which the error was worked out, rising.
    assignment_error : ndarray, shape (m,)
        All effects included.
    best_time : float
        Length in s with the least error.
    best_error : float
        The least error.
    """

    snr_times: FloatArray = field(metadata={"unit": "s", "axes": ("snr_times",)})
    snr: FloatArray = field(metadata={"unit": "1", "axes": ("snr_times",)})
    times: FloatArray = field(metadata={"unit": "s", "axes": ("times",)})
    assignment_error: FloatArray = field(metadata={"unit": "1", "axes": ("times",)})
    best_time: float = field(metadata={"unit": "s"})
    best_error: float = field(metadata={"unit": "1"})


def split_assignment(
    output: ChainOutput,
    detector: Detector,
    transitions: Transitions,
    preparation: Preparation,
) -> AssignmentSplit:
    """Work out the decisions of a readout, and what makes the wrong ones.

    Parameters
    ----------
    output : ChainOutput
    detector : Detector
    transitions : Transitions
        During the readout; at most one is counted in each, and a reversion.
    preparation : Preparation
        Before it.

    Returns
    -------
    AssignmentSplit

    Raises
    ------
    InputError
        If the window does not fit the records, there is no noise, the states give equal signals,
        or there is a rate of transitions without simulated records.

    Notes
    -----
    The average over the time of a decay: J. Gambetta et al., "Protocols for optimal readout of
    qubits using a continuous quantum nondemolition measurement", Phys. Rev. A 76, 012325 (2007).
    """
    sampled = receive(output, detector, rounding=False)
    chain = rounded = linear = project(sampled, detector.weights)
    check_transitions(chain, transitions)
    received = sampled
    if detector.adc is not None:
        received = receive(output, detector, lags=sampled.lags)
        rounded = project(received, detector.weights)
    if output.linear is not None:
        known = sampled.lags if output.linear_noise is None else None
        straight = receive(output.linearised(), detector, rounding=False, lags=known)
        linear = project(straight, detector.weights)
    nothing, sure = Transitions(), Preparation()
    upwards = replace(transitions, down=0.0, conversion=math.inf)
    steps = (
        (linear, nothing, sure),
        (chain, nothing, sure),
        (rounded, nothing, sure),
        (rounded, upwards, sure),
        (rounded, transitions, sure),
        (rounded, transitions, preparation),
    )
    # Steps that change nothing are not worked out again, which also keeps their items at zero.
    found: list[tuple[float, tuple[float, float]]] = []
    for number, step in enumerate(steps):
        same = number > 0 and step[0] is steps[number - 1][0] and step[1:] == steps[number - 1][1:]
        found.append(found[-1] if same else _decide(detector, *step))
    totals = [sum(wrong) / 2 for _, wrong in found]
    threshold, wrong = found[-1]
    coarse = wrong_shares(rounded, transitions, preparation, threshold, coarse=True)
    return AssignmentSplit(
        totals[-1],
        np.array([[1 - wrong[0], wrong[1]], [wrong[0], 1 - wrong[1]]]),
        _items(totals),
        rounded.snr,
        threshold,
        rounded,
        received.clipped,
        received.lsb / float(received.sample_sigmas.min()),
        _gains(output),
        abs(sum(coarse) / 2 - totals[-1]),
        transitions.neglected(rounded.stop),
    )


def scan_integration(
    output: ChainOutput,
    detector: Detector,
    transitions: Transitions,
    preparation: Preparation,
) -> IntegrationScan:
    """Find the length of the integration with the least assignment error.

    Parameters
    ----------
    output : ChainOutput
    detector : Detector
        Its window bounds the lengths, which all begin at its start.
    transitions : Transitions
    preparation : Preparation

    Returns
    -------
    IntegrationScan

    Raises
    ------
    InputError
        As `split_assignment`.

    Notes
    -----
    The error is worked out at 64 lengths, then at those around the best, down to single samples.
    Weights, axis and threshold are found anew for each.
    """
    received = receive(output, detector)
    check_transitions(project(received, detector.weights), transitions)
    first = _first_apart(received)
    low, high = first, received.means.shape[1]
    errors: dict[int, float] = {}
    while True:
        tried = np.unique(np.linspace(low, high, _TRIED).round().astype(int))
        for count in tried:
            if int(count) not in errors:
                projection = project(received, detector.weights, int(count))
                wrong = _decide(detector, projection, transitions, preparation)[1]
                errors[int(count)] = sum(wrong) / 2
        best = min(errors, key=lambda count: (errors[count], count))
        if tried.size == high - low + 1:
            break
        place = int(np.searchsorted(tried, best))
        low, high = int(tried[max(place - 1, 0)]), int(tried[min(place + 1, tried.size - 1)])
    counts = sorted(errors)
    snr = snr_over_time(received, detector.weights)
    return IntegrationScan(
        received.step * np.arange(1.0, snr.size + 1),
        snr,
        received.step * np.array(counts, dtype=np.float64),
        np.array([errors[count] for count in counts]),
        best * received.step,
        errors[best],
    )


def _gains(output: ChainOutput) -> FloatArray:
    """Magnitude of the records' correlation with the linear ones over the power of these."""
    if output.linear is None:
        return np.ones(2)
    pairs = (
        (output.records.ground, output.linear.ground),
        (output.records.excited, output.linear.excited),
    )
    powers = [float(np.vdot(linear, linear).real) for _, linear in pairs]
    return np.array(
        [
            abs(np.vdot(linear, actual)) / power if power > 0 else math.nan
            for (actual, linear), power in zip(pairs, powers, strict=True)
        ]
    )


def _first_apart(received: Received) -> int:
    """Number of samples from which on the states differ: before, no axis tells them apart."""
    difference = np.abs(np.cumsum(received.means[1] - received.means[0]))
    return int(np.argmax(difference > 0)) + 1


def _decide(
    detector: Detector,
    projection: Projection,
    transitions: Transitions,
    preparation: Preparation,
) -> tuple[float, tuple[float, float]]:
    """Threshold by the detector's rule in V, and the shares of wrong decisions."""
    threshold = projection.mid_threshold
    if detector.threshold == "optimal":
        threshold = best_threshold(projection, transitions, preparation, detector.prior_excited)
    return threshold, wrong_shares(projection, transitions, preparation, threshold)


def _items(totals: Sequence[float]) -> ErrorItems:
    steps = np.diff(totals)
    return ErrorItems(
        separation=totals[0],
        saturation=float(steps[0]),
        quantisation=float(steps[1]),
        excitation=float(steps[2]),
        decay=float(steps[3]),
        preparation=float(steps[4]),
    )
