"""The burst in an envelope, and the carrier under a waveform."""

from dataclasses import dataclass, field

import numpy as np
from scipy.fft import next_fast_len, rfft

from cosim.dsp.demodulation import demodulate
from cosim.dsp.resampling import coarsest_step, interpolant
from cosim.errors import WaveformError
from cosim.waveform import ComplexArray, Envelope, FloatArray, Waveform

# A record or a burst with fewer carrier periods than this has no carrier that could be measured.
_MIN_PERIODS = 16
_MIN_BURST_PERIODS = 8
# At least this part of the power that is not constant must lie within 10 % of the strongest line.
_MIN_POWER = 0.1
# Residual phase in rad that the demodulator and the interpolant may leave on a clean tone.
_PHASE_FLOOR = 1e-6
# The residual phase is taken as independent from one of these blocks to the next.
_BLOCKS = 8


@dataclass(frozen=True, slots=True)
class CarrierEstimate:
    """The carrier of a burst.

    Parameters
    ----------
    frequency : float
        In Hz; the mean over the burst, weighted by its power and towards its middle.
    uncertainty : float
        In Hz; twice the standard error from the residual phase, and not less than what a
        residual phase of 1e-6 rad can do. A steady drift widens it.
    amplitude : float
        Carrier peak amplitude of the plateau in the waveform's unit, see `plateau_amplitude`.
    """

    frequency: float = field(metadata={"unit": "Hz"})
    uncertainty: float = field(metadata={"unit": "Hz"})
    amplitude: float = field(metadata={"unit": "V"})


@dataclass(frozen=True, slots=True)
class Burst:
    """The samples of an envelope that form its main pulse.

    Parameters
    ----------
    first, last : int
        First and last sample, inclusive, above half the plateau's level.
    plateau_first, plateau_last : int
        First and last sample, inclusive, above 95 % of the plateau's level.
    """

    first: int
    last: int
    plateau_first: int
    plateau_last: int


def estimate_carrier(waveform: Waveform) -> CarrierEstimate:
    """Find the frequency of the carrier of a burst.

    The strongest line of the spectrum is found first; the waveform is demodulated there and the
    slope of the phase over the burst gives the rest.

    Parameters
    ----------
    waveform : Waveform
        Samples on any rising grid, shape (n,); one burst, or a carrier that runs throughout.

    Returns
    -------
    CarrierEstimate
        Frequency, its uncertainty and the amplitude.

    Raises
    ------
    WaveformError
        If nothing moves, no line stands out, the record holds fewer than 16 periods or the burst
        fewer than 8, or there are fewer than 20 samples in a period.

    Notes
    -----
    Weighted least squares for the slope; its standard error from sums of the residual over
    blocks, so that a residual with memory is not mistaken for many independent ones (a
    cluster-robust variance: K.-Y. Liang and S. L. Zeger, Biometrika 73, 13 (1986)).
    """
    coarse = _strongest_line(waveform)
    for _ in range(2):
        envelope = demodulate(waveform, coarse)
        burst = find_burst(envelope)
        periods = (burst.last - burst.first) * envelope.dt * coarse
        if periods < _MIN_BURST_PERIODS:
            raise WaveformError(
                f"the burst is too short for a carrier estimate: {periods:.3g} periods at "
                f"{coarse:.6g} Hz, at least {_MIN_BURST_PERIODS} are needed",
                hint="give the carrier's frequency instead of having it estimated",
            )
        offset, uncertainty = phase_slope(envelope, burst)
        if abs(offset) < coarse / 32:
            break
        coarse += offset  # Well off: once more, with the line in the middle of the pass band.
    return CarrierEstimate(coarse + offset, uncertainty, plateau_amplitude(envelope, burst))


def find_burst(envelope: Envelope) -> Burst:
    """Find the main pulse of an envelope.

    Parameters
    ----------
    envelope : Envelope
        Samples, shape (n,).

    Returns
    -------
    Burst
        The run of samples above half the level that holds the most energy. The level is the
        median of |I + jQ| over the samples above half its largest value: on a flat pulse the
        plateau, on a Gaussian 84 % of the peak.

    Raises
    ------
    WaveformError
        If the envelope is zero.
    """
    size = np.abs(envelope.iq)
    if not size.max() > 0:
        raise WaveformError(
            f"there is no pulse at a carrier of {envelope.carrier_frequency:.6g} Hz: "
            f"all {size.size} samples of the envelope are zero"
        )
    level = float(np.median(size[size > 0.5 * size.max()]))
    above = np.concatenate(([False], size > 0.5 * level, [False]))
    starts = np.flatnonzero(above[1:] & ~above[:-1])
    ends = np.flatnonzero(above[:-1] & ~above[1:])
    energy = np.concatenate(([0.0], np.cumsum(size**2)))
    main = int(np.argmax(energy[ends] - energy[starts]))
    first, last = int(starts[main]), int(ends[main]) - 1
    top = first + np.flatnonzero(size[first : last + 1] >= 0.95 * level)
    if top.size == 0:  # The level came from other pulses of the record.
        top = np.array([first + int(np.argmax(size[first : last + 1]))])
    return Burst(first, last, int(top[0]), int(top[-1]))


def plateau_amplitude(envelope: Envelope, burst: Burst) -> float:
    """Give the amplitude of a pulse's plateau.

    Parameters
    ----------
    envelope : Envelope
        Samples, shape (n,).
    burst : Burst
        Its main pulse.

    Returns
    -------
    float
        Carrier peak amplitude in the envelope's unit: the largest value of a least-squares
        parabola through ln |I + jQ| over the middle third of the plateau. On a flat pulse that is
        its mean level without the edges' overshoot, on a Gaussian exactly its peak.
    """
    third = (burst.plateau_last - burst.plateau_first) // 3
    part = slice(burst.plateau_first + third, burst.plateau_last - third + 1)
    size = np.abs(envelope.iq[part])
    if size.size < 4:
        return float(np.abs(envelope.iq[burst.first : burst.last + 1]).max())
    x = np.linspace(-1.0, 1.0, size.size)
    return float(np.exp(np.polyval(np.polyfit(x, np.log(size), 2), x).max()))


def burst_weights(envelope: Envelope, burst: Burst) -> FloatArray:
    """Give weights for means over a burst, small at its edges.

    Parameters
    ----------
    envelope : Envelope
        Samples, shape (n,).
    burst : Burst
        Its main pulse, m samples.

    Returns
    -------
    ndarray, shape (m,)
        |I + jQ|^2 times a squared Hann window, without unit, with the sum 1. The window keeps
        out the disturbance of the phase that a sharp edge makes.
    """
    part = envelope.iq[burst.first : burst.last + 1]
    x = (np.arange(part.size) + 0.5) / part.size
    weights = np.abs(part) ** 2 * np.sin(np.pi * x) ** 4
    return np.asarray(weights / weights.sum(), dtype=np.float64)


def phase_slope(envelope: Envelope, burst: Burst, expected: float = 0.0) -> tuple[float, float]:
    """Give the frequency of a burst against its envelope's carrier.

    Parameters
    ----------
    envelope : Envelope
        Samples, shape (n,).
    burst : Burst
        Its main pulse.
    expected : float
        Offset in Hz that is taken out first.

    Returns
    -------
    offset, uncertainty : float
        In Hz; the offset on top of `expected`. See `estimate_carrier`.
    """
    weights = burst_weights(envelope, burst)
    t = envelope.t[burst.first : burst.last + 1]
    part: ComplexArray = envelope.iq[burst.first : burst.last + 1]
    phase = np.unwrap(np.angle(part * np.exp(-2j * np.pi * np.mod(expected * t, 1.0))))
    x = t - weights @ t
    y = phase - weights @ phase
    spread = float(weights @ x**2)
    if spread == 0:
        return 0.0, float("inf")
    slope = float(weights @ (x * y)) / spread
    edges = np.unique(np.linspace(0, t.size, _BLOCKS + 1).astype(int)[:-1])
    pull = np.add.reduceat(weights * x * (y - slope * x), edges)
    error = float(np.sqrt((pull**2).sum() * edges.size / (edges.size - 1))) / spread
    floor = _PHASE_FLOOR / np.sqrt(spread)
    return slope / (2 * np.pi), float(np.hypot(2 * error, floor)) / (2 * np.pi)


def _strongest_line(waveform: Waveform) -> float:
    """Frequency in Hz of the strongest line of the spectrum, to about half a bin."""
    step = coarsest_step(waveform)
    first, last = float(waveform.t[0]), float(waveform.t[-1])
    count = max(int((last - first) / step), 2)
    v = interpolant(waveform)(np.linspace(first, last, count, endpoint=False))
    v -= v.mean()
    swing = float(np.abs(v).max())
    # Rounding of the subtraction, not a signal, remains of a constant waveform.
    if swing <= 1e-12 * float(np.abs(waveform.v).max()):
        raise WaveformError(
            f"there is no carrier: the waveform is constant at {waveform.v[0]:.6g} "
            f"{waveform.unit} over {last - first:.4g} s",
            hint="check the probe and that the source is switched on inside the record",
        )
    size = next_fast_len(count, real=True)
    power = np.abs(rfft(v, size)) ** 2
    peak = int(np.argmax(power))
    frequency = peak / (size * (last - first) / count)
    periods = frequency * (last - first)
    share = float(power[int(0.9 * peak) : int(1.1 * peak) + 2].sum() / power.sum())
    if periods < _MIN_PERIODS or share < _MIN_POWER:
        raise WaveformError(
            f"there is no carrier: the strongest line, at {frequency:.4g} Hz, makes "
            f"{periods:.3g} periods in a record of {last - first:.4g} s and holds "
            f"{100 * share:.2g} % of the power; {_MIN_PERIODS} periods and "
            f"{100 * _MIN_POWER:.0f} % are needed",
            hint="simulate longer, or give the carrier's frequency",
        )
    return frequency
