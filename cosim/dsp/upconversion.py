"""Ideal upconversion of a baseband pair, for circuits that have no carrier."""

import numpy as np

from cosim.dsp.resampling import interpolant
from cosim.errors import WaveformError
from cosim.waveform import FloatArray, Waveform


def upconvert(
    i: Waveform, q: Waveform | None, carrier_frequency: float, *, samples_per_period: int = 80
) -> Waveform:
    """Put a baseband pair on a carrier, v = I cos(2 pi f t) - Q sin(2 pi f t).

    Parameters
    ----------
    i, q : Waveform
        The pair on any rising grids over one span of time, shapes (n,) and (m,), in one unit;
        None stands for Q = 0.
    carrier_frequency : float
        f in Hz; its phase is zero at t = 0.
    samples_per_period : int
        Samples of the result per carrier period.

    Returns
    -------
    Waveform
        On a uniform grid from the later start to the earlier end of the two, in the unit of `i`.

    Raises
    ------
    WaveformError
        If the units differ, the two do not overlap, or they hold less than one carrier period.
    """
    pair = [i] if q is None else [i, q]
    if len({part.unit for part in pair}) > 1:
        raise WaveformError(f"I is in {i.unit} and Q in {pair[1].unit}; wanted one unit")
    start = max(float(part.t[0]) for part in pair)
    stop = min(float(part.t[-1]) for part in pair)
    count = int(np.floor((stop - start) * carrier_frequency * samples_per_period * (1 + 1e-12)))
    if count < samples_per_period:
        raise WaveformError(
            f"the baseband pair lasts from {start:.6g} s to {stop:.6g} s, wanted at least one "
            f"carrier period of {1 / carrier_frequency:.6g} s"
        )
    # The last sample is the end itself, so that a gate's window may reach up to it.
    t: FloatArray = np.append(
        start + np.arange(count) / (carrier_frequency * samples_per_period), stop
    )
    if t[-1] - t[-2] < 0.5 / (carrier_frequency * samples_per_period):
        t = np.delete(t, -2)
    phase = 2.0 * np.pi * carrier_frequency * t
    v = interpolant(i)(t) * np.cos(phase)
    if q is not None:
        v = v - interpolant(q)(t) * np.sin(phase)
    return Waveform(t, v, i.unit)
