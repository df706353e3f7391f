"""Drives for the tests: bursts of a carrier as splines, on even and uneven grids."""

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.quantum.evolution import DriveSpline
from cosim.waveform import FloatArray

CARRIER = 6.2e9


def spline(t: FloatArray, rate: FloatArray) -> DriveSpline:
    """Interpolate a rate in rad/s by a cubic spline."""
    curve = CubicSpline(t, rate)
    return DriveSpline(curve.x, curve.c)


def smooth_burst(
    rabi: float,
    duration: float,
    *,
    carrier: float = CARRIER,
    phase: float = 0.3,
    per_period: int = 80,
    start: float = 0.0,
) -> DriveSpline:
    """A raised-cosine burst; `rabi` is its peak Rabi frequency in Hz."""
    count = round(duration * carrier * per_period)
    t = start + np.arange(count + 1) / (carrier * per_period)
    envelope = np.sin(np.pi * (t - start) / duration) ** 2
    return spline(t, 2 * np.pi * rabi * envelope * np.cos(2 * np.pi * carrier * t + phase))


def square_burst(rabi: float, duration: float, step: float, *, phase: float = 0.3) -> DriveSpline:
    """A burst with square edges and the tiny, doubling steps that SPICE puts after breakpoints."""
    grid = np.arange(int(duration / step) + 1) * step
    edges = (0.13 * duration + 0.3e-12, 0.87 * duration + 0.7e-12)
    after = [edge + 1e-15 * (2.0 ** np.arange(11) - 1) for edge in edges]
    t = np.unique(np.concatenate([grid, *after]))
    inside = (t >= edges[0]) & (t < edges[1])
    carrier = np.cos(2 * np.pi * CARRIER * t + phase)
    return spline(t, np.where(inside, 2 * np.pi * rabi * carrier, 0.0))


def constant(value: float, start: float, stop: float) -> DriveSpline:
    """One piece with a constant rate."""
    return DriveSpline(np.array([start, stop]), np.array([[0.0], [0.0], [0.0], [value]]))
