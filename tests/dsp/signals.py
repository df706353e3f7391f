"""Signals and time grids that the tests of the signal wing share."""

import numpy as np

from cosim.waveform import FloatArray

CARRIER = 6.2e9
STEP = 1 / CARRIER / 80


def simulator_grid(corners: FloatArray, stop: float) -> FloatArray:
    """The grid of a circuit simulator at a fixed step: it lands on each corner, then starts
    again with a tenth of the step (a hundredth at t = 0) and doubles (seen in ngspice 39)."""
    times = [0.0]
    ends = np.append(corners, stop)
    step = STEP / 100
    for end in ends:
        while times[-1] + step < end - 1e-3 * STEP:
            times.append(times[-1] + step)
            step = min(2 * step, STEP)
        times.append(float(end))
        step = STEP / 10
    return np.array(times)


def trapezoid_corners(start: float, stop: float) -> FloatArray:
    period = 1 / CARRIER
    rise, high = 10e-12, 63e-12
    begins = np.arange(start, stop, period)
    corners = begins[:, None] + np.array([0.0, rise, rise + high, 2 * rise + high])
    return np.asarray(corners.ravel()[corners.ravel() < stop])


def trapezoid(t: FloatArray, start: float) -> FloatArray:
    phase = np.mod(t - start, 1 / CARRIER)
    return np.where(t < start, 0.0, np.interp(phase, [0, 10e-12, 73e-12, 83e-12], [0, 1, 1, 0]))
