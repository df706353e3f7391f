"""Seeded shots: of the integrated signal, and of whole records through the converter.

Both prepare each state in half of the shots and stop at one transition in each, as the closed form
does. Integrated shots draw the time of a transition, look up the mean value and add the noise.
Record shots know nothing of integrated signals: they make a record sample by sample, with noise of
the given density, filter, sample and round it, and apply the weights.
"""

import math
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.random import Generator
from scipy.interpolate import CubicSpline

from cosim.dsp.detection.assignment import AssignmentSplit
from cosim.dsp.detection.converter import (
    Adc,
    filter_noise,
    filter_records,
    quantise,
    settling_samples,
)
from cosim.dsp.detection.output_noise import draw_lines, draw_noise, plan_noise
from cosim.dsp.detection.projection import Projection, transition_nodes
from cosim.dsp.detection.reception import ChainOutput, Detector, sampling_window
from cosim.dsp.detection.records import Preparation, Transitions
from cosim.dsp.detection.shot_kernel import count_excited
from cosim.dsp.noise.paths import generator
from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray

# Streams of the random numbers of each kind of shots, out of the way of noise with the same seed;
# the number within a stream is the state that is prepared.
_INTEGRATED, _RECORDS, _POINTS = 101, 102, 103
# Samples of noise that are made at a time: their transform takes 4 MiB.
_BLOCK = 1 << 18


@dataclass(frozen=True, slots=True)
class ShotCounts:
    """What was counted over many shots.

    Parameters
    ----------
    count : int
        Number of shots, half of them for each state.
    assignment_matrix : ndarray, shape (2, 2)
        Shares of the decisions i among those with j prepared.
    assignment_error : float
        (P(1|0) + P(0|1))/2 as counted.
    standard_error : float
        Of the assignment error, from the shares that were counted.
    clipped : float
        Share of samples outside the converter's range; NaN where none was rounded.
    noise_error : float
        What the paths of the noise lack of its power, relative; NaN of integrated shots.
    """

    count: int = field(metadata={"unit": "1"})
    assignment_matrix: FloatArray = field(
        metadata={
            "unit": "1",
            "axes": ("decided", "prepared"),
            "labels": {"decided": ("0", "1"), "prepared": ("0", "1")},
        }
    )
    assignment_error: float = field(metadata={"unit": "1"})
    standard_error: float = field(metadata={"unit": "1"})
    clipped: float = field(default=math.nan, metadata={"unit": "1"})
    noise_error: float = field(default=math.nan, metadata={"unit": "1"})

    def deviation(self, expected: FloatArray) -> float:
        """Give how far the count is from expected shares.

        Parameters
        ----------
        expected : ndarray, shape (2, 2)
            P(i|j), of `AssignmentSplit.assignment_matrix`.

        Returns
        -------
        float
            Of the assignment error, in standard errors that follow from the expected shares.
        """
        error = _standard_error(expected[1, 0], expected[0, 1], self.count)
        return float((self.assignment_error - (expected[1, 0] + expected[0, 1]) / 2) / error)


def integrated_shots(
    split: AssignmentSplit,
    transitions: Transitions,
    preparation: Preparation,
    count: int,
    seed: int,
) -> ShotCounts:
    """Draw shots of the integrated signal.

    Parameters
    ----------
    split : AssignmentSplit
        Gives the projection and the threshold.
    transitions : Transitions
    preparation : Preparation
    count : int
        Number of shots, even and at least 2.
    seed : int
        Not negative.

    Returns
    -------
    ShotCounts

    Raises
    ------
    InputError
        If a number is out of range.
    """
    half = _half(count, seed)
    projection = split.projection
    paths = np.array([projection.along(points) for points in projection.path_points])
    courses = [transitions.course(state) for state in (0, 1)]
    excited = [
        count_excited(
            generator(seed, _INTEGRATED, state),
            half,
            state,
            preparation.wrong[state],
            np.array([course.seen for course in courses]),
            np.array([course.rate for course in courses]),
            np.array([course.share for course in courses]),
            np.array([course.back for course in courses]),
            projection.stop,
            projection.values,
            projection.sigmas,
            paths,
            projection.path_sigmas,
            split.threshold,
        )
        for state in (0, 1)
    ]
    return _counts(excited, half)


def shot_points(
    split: AssignmentSplit,
    transitions: Transitions,
    preparation: Preparation,
    count: int,
    seed: int,
) -> ComplexArray:
    """Draw points in the plane of I and Q, to be looked at.

    Parameters
    ----------
    split, transitions, preparation, seed
        As in `integrated_shots`.
    count : int
        Points for each prepared state.

    Returns
    -------
    ndarray of complex, shape (2, count)
        In V, not turned: the decision is 1 where `projection.along` gives more than the threshold.

    Raises
    ------
    InputError
        If a number is out of range.
    """
    _half(2 * count, seed)
    projection = split.projection
    found = np.empty((2, count), dtype=np.complex128)
    for prepared in (0, 1):
        random = generator(seed, _POINTS, prepared)
        states, times, backs = _courses(random, count, prepared, transitions, preparation)
        mean, sigma = projection.points[states], projection.sigmas[states]
        for state in (0, 1):
            changed = (states == state) & (times < projection.stop)
            at = times[changed]
            mean[changed] = np.interp(at, projection.path_times, projection.path_points[state])
            sigma[changed] = np.interp(at, projection.path_times, projection.path_sigmas[state])
            other = 1 - state
            changed &= backs < projection.stop
            at = backs[changed]
            after = np.interp(at, projection.path_times, projection.path_points[other])
            mean[changed] += after - projection.points[other]
            after = np.interp(at, projection.path_times, projection.path_sigmas[other])
            power = sigma[changed] ** 2 + after**2 - projection.sigmas[other] ** 2
            sigma[changed] = np.sqrt(power)
        draws = random.standard_normal((2, count))
        if projection.quadratures == 1:
            draws[1] = 0.0
        turned = (draws[0] + 1j * draws[1]) * np.exp(1j * projection.axis)
        found[prepared] = mean + sigma * turned
    return found


def record_shots(
    output: ChainOutput,
    detector: Detector,
    split: AssignmentSplit,
    transitions: Transitions,
    preparation: Preparation,
    count: int,
    seed: int,
) -> ShotCounts:
    """Draw whole time records and send them through filter, converter and weights.

    Parameters
    ----------
    output : ChainOutput
    detector : Detector
    split : AssignmentSplit
        Of these, for its weights, axis and threshold.
    transitions : Transitions
    preparation : Preparation
    count : int
        Number of shots, even and at least 2.
    seed : int
        Not negative.

    Returns
    -------
    ShotCounts

    Raises
    ------
    InputError
        If a number is out of range, or the window does not fit the records.

    Notes
    -----
    Where the two states make different noise, one path of white noise is given the colour of
    each, and the record goes over from one to the other at the transition.
    """
    half = _half(count, seed)
    every, first, samples = sampling_window(output.records, detector)
    needed = every * (first + samples)
    lead = 0 if detector.adc is None else settling_samples(detector.adc, output.records.step)
    distinct = output.noises if output.excited_noise is not None else output.noises[:1]
    plans = [plan_noise(noise, output.records.step, lead + needed) for noise in distinct]
    nodes = [_nodes(output, detector, split.projection, state) for state in (0, 1)]
    excited, clipped = [0, 0], 0
    period = plans[0].amplitudes.size
    for prepared in (0, 1):
        random = generator(seed, _RECORDS, prepared)
        for block in _blocks(half, period):
            course = _courses(random, block, prepared, transitions, preparation)
            draws = draw_lines(random, block, period)
            paths = [draw_noise(plan, draws, lead + needed) for plan in plans]
            noise = _switched(paths, course, output.records.step, lead)
            if detector.adc is not None:
                noise = filter_noise(detector.adc, output.records.step, noise)
            shots = noise[:, lead + every * first :: every][:, :samples]
            shots = _add_means(shots, nodes, course)
            if detector.adc is not None:
                clipped += _outside(detector.adc, shots, output.noise.quadratures)
                shots = quantise(detector.adc, shots)
            values = split.projection.along(shots @ np.conj(split.projection.weights))
            excited[prepared] += int(np.count_nonzero(values > split.threshold))
    measured = 2 * half * samples * output.noise.quadratures
    share = math.nan if detector.adc is None else clipped / measured
    return _counts(excited, half, share, max(plan.error for plan in plans))


@dataclass(frozen=True, slots=True)
class _Nodes:
    """Sampled mean records of one state at the start, over the time of its transition."""

    unchanged: ComplexArray
    stop: float
    records: ComplexArray
    parts: CubicSpline


def _nodes(output: ChainOutput, detector: Detector, projection: Projection, state: int) -> _Nodes:
    every, first, samples = sampling_window(output.records, detector)
    r = output.records
    own, other = (r.excited, r.ground) if state else (r.ground, r.excited)
    simulated = r.decay_times if state else r.excitation_times
    rows = r.decays if state else r.excitations
    times, used = transition_nodes(simulated, projection.stop)
    records = np.concatenate([other[None], rows[used], own[None]])
    if detector.adc is not None:
        records = filter_records(detector.adc, r.step, records)
    records = records[:, every * first :: every][:, :samples]
    if output.noise.quadratures == 1:
        records = records.real + 0j
    # The spline is linear in what it interpolates: weights of the nodes do for all samples.
    parts = CubicSpline(times, np.eye(times.size))
    return _Nodes(records[-1], projection.stop, np.ascontiguousarray(records), parts)


def _add_means(
    shots: ComplexArray, nodes: list[_Nodes], course: tuple[FloatArray, FloatArray, FloatArray]
) -> ComplexArray:
    """Add the mean record of each shot to its noise."""
    states, times, backs = course
    means = np.array([node.unchanged for node in nodes])
    found = shots + means[states]
    for state, node in enumerate(nodes):
        changed = np.flatnonzero((states == state) & (times < node.stop))
        if changed.size:
            found[changed] += node.parts(times[changed]) @ node.records - node.unchanged
        returned = changed[backs[changed] < node.stop]
        if returned.size:
            other = nodes[1 - state]
            found[returned] += other.parts(backs[returned]) @ other.records - other.unchanged
    return np.asarray(found)


def _courses(
    random: Generator,
    count: int,
    prepared: int,
    transitions: Transitions,
    preparation: Preparation,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """States that are seen at first, times of their change and of the way back, or infinity."""
    wrong = random.random(count) < preparation.wrong[prepared]
    states = np.where(wrong, 1 - prepared, prepared)
    courses = [transitions.course(state) for state in (0, 1)]
    rates = np.array([course.rate for course in courses])[states]
    shares = np.array([course.share for course in courses])[states]
    times = np.full(count, math.inf)
    draws = random.standard_exponential(count)
    np.divide(draws, rates, out=times, where=(rates > 0) & (random.random(count) < shares))
    backs = np.full(count, math.inf)
    rates = np.array([course.back for course in courses])[states]
    if rates.any():
        np.divide(random.standard_exponential(count), rates, out=backs, where=rates > 0)
    return np.array([course.seen for course in courses])[states], times, times + backs


def _switched(
    paths: list[ComplexArray],
    course: tuple[FloatArray, FloatArray, FloatArray],
    step: float,
    lead: int,
) -> ComplexArray:
    """Noise of the state that each shot is in."""
    if len(paths) == 1:
        return paths[0]
    t = step * (np.arange(paths[0].shape[1]) - lead)
    states, times, backs = course
    changed = (t[None, :] >= times[:, None]) & (t[None, :] < backs[:, None])
    return np.where((states[:, None] == 1) ^ changed, paths[1], paths[0])


def _outside(adc: Adc, shots: ComplexArray, quadratures: int) -> int:
    """Number of samples outside the converter's range."""
    low, high = -(adc.full_scale + adc.lsb) / 2, (adc.full_scale - adc.lsb) / 2
    parts = (shots.real, shots.imag)[:quadratures]
    return sum(int(np.count_nonzero((v < low) | (v > high))) for v in parts)


def _blocks(count: int, period: int) -> Iterator[int]:
    """Sizes of blocks of records that fit the memory."""
    size = max(1, _BLOCK // period)
    for begin in range(0, count, size):
        yield min(size, count - begin)


def _half(count: int, seed: int) -> int:
    if count < 2 or count % 2 or seed < 0:
        raise InputError(
            f"shots: wanted an even number of at least 2 and a seed of at least 0, got {count!r} "
            f"and {seed!r}"
        )
    return count // 2


def _standard_error(first: float, second: float, count: int) -> float:
    """Standard error of the assignment error over shots of which half prepare each state."""
    return math.sqrt((first * (1 - first) + second * (1 - second)) / (count / 2)) / 2


def _counts(
    excited: list[int], half: int, clipped: float = math.nan, noise_error: float = math.nan
) -> ShotCounts:
    first, second = excited[0] / half, 1 - excited[1] / half
    return ShotCounts(
        2 * half,
        np.array([[1 - first, second], [first, 1 - second]]),
        (first + second) / 2,
        _standard_error(first, second, 2 * half),
        clipped,
        noise_error,
    )
