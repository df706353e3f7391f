"""How a third state, to which the qubit has leaked, is decided by a detector that knows two.

The state is taken to stay until the end of the window, with the mean of the noise of the two
others.
"""

from dataclasses import replace

import numpy as np
from scipy.special import ndtr

from cosim.dsp.detection.assignment import AssignmentSplit
from cosim.dsp.detection.reception import ChainOutput, Detector, receive
from cosim.dsp.detection.records import Records
from cosim.dsp.noise.paths import generator
from cosim.waveform import ComplexArray, FloatArray

_POINTS = 104  # stream of the random numbers, beside those of shots


def leaked_point(
    output: ChainOutput, detector: Detector, split: AssignmentSplit, record: ComplexArray
) -> complex:
    """Integrate the record of a third state as those of the two are.

    Parameters
    ----------
    output : ChainOutput
    detector : Detector
    split : AssignmentSplit
        Of these, for its weights.
    record : ndarray of complex, shape (n,)
        Of the third state in V, on the grid of the others.

    Returns
    -------
    complex
        Mean point in V, behind filter and converter.

    Raises
    ------
    InputError
        As `cosim.dsp.detection.reception.receive`.
    """
    pair = Records(output.records.step, output.records.ground, record)
    received = receive(replace(output, records=pair, linear=None), detector)
    return complex(received.means[1] @ np.conj(split.projection.weights))


def leaked_decisions(split: AssignmentSplit, point: complex) -> FloatArray:
    """Give the probabilities of both decisions for a third state.

    Parameters
    ----------
    split : AssignmentSplit
        With axis, noise and threshold.
    point : complex
        Its mean point in V.

    Returns
    -------
    ndarray, shape (2,)
        P(0|2) and P(1|2).
    """
    value = float(split.projection.along(np.array([point]))[0])
    level = (value - split.threshold) / float(split.projection.sigmas.mean())
    return np.array([ndtr(-level), ndtr(level)])


def leaked_points(split: AssignmentSplit, point: complex, count: int, seed: int) -> ComplexArray:
    """Draw points of a third state in the plane of I and Q, to be looked at.

    Parameters
    ----------
    split, point
        As in `leaked_decisions`.
    count : int
        How many.
    seed : int
        Not negative.

    Returns
    -------
    ndarray of complex, shape (count,)
        In V.
    """
    random = generator(seed, _POINTS, 2)
    noise = random.standard_normal((2, count))
    if split.projection.quadratures == 1:
        noise[1] = 0.0
    # As for the two states, the noise across the axis is drawn as great as that along it.
    turned = (noise[0] + 1j * noise[1]) * np.exp(1j * split.projection.axis)
    return np.asarray(point + float(split.projection.sigmas.mean()) * turned)
