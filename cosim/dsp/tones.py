"""One tone of a waveform of several."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.errors import InputError
from cosim.waveform import Envelope

# A tone of which the averages before leave no more than this is gone.
_GONE = 1e-2


def own_tone(envelope: Envelope, offsets: Sequence[float]) -> Envelope:
    """Take tones at given offsets out of an envelope, to measure the one at its carrier.

    Parameters
    ----------
    envelope : Envelope
        I + jQ around the carrier that counts.
    offsets : sequence of float
        Frequency of each other tone minus that carrier, in Hz; not zero.

    Returns
    -------
    Envelope
        On the same grid, averaged over one period of an offset for each that an average before
        does not take out, from the smallest on. Its plateau is that of the tone at the carrier;
        edges last as long as the averages at least, and what is added to an edge lies half
        outside of the pulse.

    Raises
    ------
    InputError
        If an offset is zero or not finite.
    """
    for offset in offsets:
        if not (np.isfinite(offset) and offset != 0.0):
            raise InputError(f"the offset of a tone must be finite and not zero, got {offset!r} Hz")
    periods: list[float] = []
    t, iq = envelope.t, envelope.iq
    for offset in sorted(abs(offset) for offset in offsets):
        left = np.prod([np.sinc(offset * period) for period in periods])
        if abs(left) <= _GONE:
            continue
        half = 0.5 / offset
        area = CubicSpline(t, iq).antiderivative()
        # Nothing comes before the record, and nothing after it.
        ends = (np.clip(t + sign * half, t[0], t[-1]) for sign in (1.0, -1.0))
        last, first = (area(end) for end in ends)
        iq = (last - first) * offset
        periods.append(1.0 / offset)
    return replace(envelope, iq=np.asarray(iq, dtype=np.complex128))
