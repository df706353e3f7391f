"""From a carrier waveform to its complex envelope, without delay and without bent edges.

The envelope is a weighted integral of the waveform around each output time. The weights are a
band-pass filter: a low-pass with linear phase, moved up to the carrier. Because it is symmetric
about the output time the envelope is neither late nor early, and because only the output samples
are computed (a polyphase filter) the cost is small.

scipy.signal is not used here because its import alone takes longer than a whole run of this
module; the tests compare the filter with it.
"""

import numpy as np
from scipy.interpolate import PPoly

from cosim.dsp.resampling import coarsest_step, interpolant
from cosim.errors import WaveformError
from cosim.waveform import ComplexArray, Envelope, FloatArray, Waveform

# Fewer samples per carrier period than this are refused.
MIN_SAMPLES_PER_PERIOD = 20
# Ripple in the pass band and rejection in the stop band, as a ratio of amplitudes, are
# 10**(-_ATTENUATION/20) = 3e-7.
_ATTENUATION = 130.0
# The waveform is averaged over cells of at most this part of a carrier period.
_CELLS = 80
# Output samples per second, in units of the bandwidth.
_RATE = 8
# Cell averages back to values at the centres, to sixth order: 1 - d2/24 + 3 d4/640 with the
# central differences d2 and d4. Follows from 1/sinc(u/pi) = 1 + u^2/6 + 7 u^4/360 + ...
_SHARPEN = np.array([9.0, -116.0, 2134.0, -116.0, 9.0]) / 1920.0


def demodulate(
    waveform: Waveform,
    carrier_frequency: float,
    *,
    bandwidth: float | None = None,
    start: float | None = None,
    stop: float | None = None,
) -> Envelope:
    """Mix a waveform down to its complex envelope I + jQ.

    v(t) = Re[(I + jQ) exp(+j 2 pi f_c t)], with t the time of the waveform, so that A cos(2 pi
    f_c t + phi) gives I = A cos(phi), Q = +A sin(phi). Inside f_c +- bandwidth the amplitude is
    flat and the phase exact to 1e-6; from f_c - stop edge downwards and from f_c + stop edge
    upwards everything is rejected by 1e-6 or better, with a stop edge of 3 bandwidth or, if
    less, f_c - bandwidth: a constant, the harmonics and the image at -f_c are gone.

    Parameters
    ----------
    waveform : Waveform
        Samples on any rising grid, shape (n,).
    carrier_frequency : float
        f_c in Hz.
    bandwidth : float or None
        One-sided width of the pass band in Hz, at most 0.45 f_c; None stands for f_c / 4.
    start, stop : float or None
        Window of the envelope in s, inside the record; None stands for the ends of the record.
        The waveform outside the window is used.

    Returns
    -------
    Envelope
        Samples at `start + k / (8 bandwidth)`, the last one at or up to one interval behind
        `stop`; in the waveform's unit, carrier peak amplitude.

    Raises
    ------
    WaveformError
        If there are fewer than 20 samples in a carrier period, the record is shorter than half
        the filter, the bandwidth is not possible, or the window leaves the record.

    Notes
    -----
    Ends of the record: the waveform is continued with the value that it has there. A waveform
    that is zero or constant over the last half of the filter (`half_length`, 8.6 carrier periods
    by default) has no error at its ends; a carrier that still runs at an end comes out as one
    that is switched there, over half the filter's length to either side.

    Low-pass: windowed sinc with a Kaiser window, J. F. Kaiser, "Nonrecursive digital filter
    design using the I0-sinh window function", IEEE Int. Symp. Circuits and Systems (1974);
    beta and length as in A. V. Oppenheim and R. W. Schafer, "Discrete-Time Signal Processing",
    section on Kaiser windows.
    """
    width = _checked_bandwidth(carrier_frequency, bandwidth)
    _check_sampling(waveform, carrier_frequency)
    first, last = float(waveform.t[0]), float(waveform.t[-1])
    if last - first < half_length(carrier_frequency, width):
        raise WaveformError(
            f"the waveform is too short: {last - first:.4g} s, but half the demodulator's filter "
            f"takes {half_length(carrier_frequency, width):.4g} s at a carrier of "
            f"{carrier_frequency:.6g} Hz and a bandwidth of {width:.4g} Hz",
            hint="simulate longer, or ask for a larger bandwidth",
        )
    dt = 1 / (_RATE * width)
    start = first if start is None else start
    stop = last if stop is None else stop
    if not (first - 1e-6 * dt <= start < stop <= last + 1e-6 * dt):
        raise WaveformError(
            f"the window {start:.6g} s to {stop:.6g} s is not inside the record, which goes from "
            f"{first:.6g} s to {last:.6g} s",
            hint="simulate longer or choose a window inside the record",
        )
    count = int(np.ceil((stop - start) / dt - 1e-6)) + 1
    iq = _filtered(waveform, carrier_frequency, width, start, dt, count)
    return Envelope(start, dt, iq, carrier_frequency, waveform.unit)


def half_length(carrier_frequency: float, bandwidth: float | None = None) -> float:
    """Give half the length in time of the demodulator's filter.

    Parameters
    ----------
    carrier_frequency : float
        In Hz.
    bandwidth : float or None
        As in `demodulate`, in Hz.

    Returns
    -------
    float
        In s. The envelope at t depends on the waveform within t +- this.

    Raises
    ------
    WaveformError
        If the bandwidth is not possible.
    """
    width = _checked_bandwidth(carrier_frequency, bandwidth)
    transition = _stop_edge(carrier_frequency, width) - width
    # Kaiser's formula for the number of samples, times the sample interval, halved.
    return (_ATTENUATION - 7.95) / (2.285 * 2 * np.pi * transition) / 2


def low_pass(carrier_frequency: float, step: float, bandwidth: float | None = None) -> FloatArray:
    """Give what the demodulator does to an envelope: the weights of its low-pass.

    Parameters
    ----------
    carrier_frequency : float
        In Hz.
    step : float
        Time between samples in s.
    bandwidth : float or None
        As in `demodulate`, in Hz.

    Returns
    -------
    ndarray, shape (2 m + 1,)
        Symmetric, with the sum 1; m steps reach `half_length` or just beyond.

    Raises
    ------
    WaveformError
        If the bandwidth is not possible.
    """
    width = _checked_bandwidth(carrier_frequency, bandwidth)
    reach = int(np.ceil(half_length(carrier_frequency, width) / step))
    tau = step * np.arange(-reach, reach + 1)
    cutoff = (width + _stop_edge(carrier_frequency, width)) / 2
    beta = 0.1102 * (_ATTENUATION - 8.7)
    low = np.sinc(2 * cutoff * tau) * np.kaiser(tau.size, beta)
    return np.asarray(low / low.sum(), dtype=np.float64)


def _stop_edge(carrier_frequency: float, width: float) -> float:
    return min(3 * width, carrier_frequency - width)


def _checked_bandwidth(carrier_frequency: float, bandwidth: float | None) -> float:
    if not (np.isfinite(carrier_frequency) and carrier_frequency > 0):
        raise WaveformError(f"the carrier must be a positive frequency, got {carrier_frequency} Hz")
    width = carrier_frequency / 4 if bandwidth is None else bandwidth
    if not 0 < width <= 0.45 * carrier_frequency:
        raise WaveformError(
            f"the bandwidth must lie between 0 and 0.45 of the carrier, "
            f"{0.45 * carrier_frequency:.6g} Hz, got {width:.6g} Hz"
        )
    return width


def _check_sampling(waveform: Waveform, carrier_frequency: float) -> None:
    step = coarsest_step(waveform)
    samples = 1 / (carrier_frequency * step)
    if samples < MIN_SAMPLES_PER_PERIOD * (1 - 1e-6):
        raise WaveformError(
            f"the waveform is too coarse: steps of {step:.4g} s are {samples:.3g} samples per "
            f"period of a carrier at {carrier_frequency:.6g} Hz; at least "
            f"{MIN_SAMPLES_PER_PERIOD} are needed and 64 or more are advised",
            hint=f"simulate with a step of {1 / (64 * carrier_frequency):.3g} s or less",
        )


def _filtered(
    waveform: Waveform, carrier: float, width: float, start: float, dt: float, count: int
) -> ComplexArray:
    """Envelope at the times start + dt * arange(count)."""
    cells = int(np.ceil(dt * carrier * _CELLS - 1e-6))  # per output interval
    cell = dt / cells
    taps, reach = _taps(carrier, width, cell)
    # `blocks` rows of one output interval each are needed on top of the output's own, so that
    # the filter, padded with zeros at its far end, covers whole rows.
    blocks = -(-taps.size // cells)
    padded = np.zeros(blocks * cells, dtype=np.complex128)
    padded[: taps.size] = taps
    rows = count - 1 + blocks
    edges: FloatArray = np.asarray(
        start + cell * (np.arange(rows * cells + 1) - reach - 0.5), dtype=np.float64
    )
    average = _cell_averages(waveform, edges).reshape(rows, cells)
    # Every row meets every block of the filter in one matrix product; output m is then the sum
    # of (row m + k, block k) over k.
    weights = padded.reshape(blocks, cells).T
    products = average @ np.concatenate((weights.real, weights.imag), axis=1)
    real, imag = products[:, :blocks], products[:, blocks:]
    total = np.zeros(count, dtype=np.complex128)
    for k in range(blocks):
        total.real += real[k : k + count, k]
        total.imag += imag[k : k + count, k]
    t = start + dt * np.arange(count)
    return np.asarray(total * np.exp(-2j * np.pi * np.mod(carrier * t, 1.0)), dtype=np.complex128)


def _taps(carrier: float, width: float, cell: float) -> tuple[ComplexArray, int]:
    """Band-pass weights for cell averages, and the number of cells from the centre to the end."""
    low = 2 * low_pass(carrier, cell, width)  # The real carrier holds half its amplitude at +f_c.
    reach = low.size // 2
    tau = cell * np.arange(-reach, reach + 1)
    sharp = np.convolve(low * np.exp(2j * np.pi * carrier * tau), _SHARPEN)
    # Weight number i meets the sample at t + (i - reach) cell, so the filter is turned round:
    # h(t - t_n) with t_n - t = tau is h(-tau), the conjugate.
    return np.conj(sharp), reach + _SHARPEN.size // 2


def _cell_averages(waveform: Waveform, edges: FloatArray) -> FloatArray:
    """Exact mean values of the interpolant between uniform `edges`, shape (n - 1,).

    Averages instead of values: corners between the samples of the grid then do not fold back
    into the pass band, since harmonic N +- 1 for N cells per period is suppressed N-fold.
    """
    curve = interpolant(waveform)
    integral: PPoly = curve.antiderivative()
    first, last = curve.x[0], curve.x[-1]
    inside = np.clip(edges, first, last)
    total = integral(inside)
    outside = edges - inside
    total += np.where(outside < 0, waveform.v[0], waveform.v[-1]) * outside
    return np.asarray(np.diff(total) / (edges[1] - edges[0]), dtype=np.float64)
