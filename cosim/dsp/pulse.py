"""Measures of a carrier pulse: level, edges, extinction, image, leakage, frequency and phase."""

from dataclasses import dataclass, field

import numpy as np
from scipy.integrate import trapezoid
from scipy.interpolate import CubicSpline

from cosim.dsp.carrier import Burst, burst_weights, find_burst, phase_slope, plateau_amplitude
from cosim.dsp.demodulation import demodulate, half_length
from cosim.errors import WaveformError
from cosim.waveform import ComplexArray, Envelope, FloatArray, Waveform

# The envelope is interpolated to this many points per sample to find the edges.
_OVERSAMPLING = 8
# At least this part of the power during the pulse must lie in the demodulator's pass band.
_MIN_POWER = 0.05
# The plateau must hold this many periods of the baseband tone to tell image and leakage apart.
_MIN_TONE_PERIODS = 3
# Degree of the polynomial that stands for the shape of the wanted tone on the plateau.
_SHAPE_DEGREE = 4


@dataclass(frozen=True, slots=True)
class PulseMeasures:
    """What a carrier pulse measures, all levels as carrier peak amplitude.

    Times come from |I + jQ|, so no edge is faster than the demodulator's filter lets it be:
    10 to 90 % in 0.93 carrier periods.

    Parameters
    ----------
    amplitude : float
        Level of the plateau in V (A for a current): the mean level of a flat pulse without the
        overshoot of its edges, the peak of a shaped one. See `plateau_amplitude`. With a
        baseband frequency that of the wanted tone alone.
    start, stop : float
        Times in s of the outermost crossings of 50 % of `amplitude` around the plateau; the end
        of the record where the pulse does not cross.
    duration : float
        stop - start in s.
    rise_time, fall_time : float
        In s, from 10 % to 90 % of `amplitude`; NaN where the record does not hold both.
    extinction : float
        `amplitude` over the residual carrier outside the pulse, in dB, positive. The residual is
        the median of |I + jQ| over all times farther from the pulse than half the filter's
        length and two rise (fall) times; NaN when there are none, infinite when it is zero.
    image : float
        Tone at f_c - f_b over the wanted tone at f_c + f_b, in dBc, negative; NaN without a
        baseband frequency f_b or when the plateau holds fewer than 3 of its periods.
    carrier_leakage : float
        Tone at f_c over the wanted tone, in dBc, negative; NaN as for `image`.
    frequency_error : float
        Frequency of the burst minus f_c + f_b, in Hz.
    phase_error : float
        Mean phase of the burst against cos(2 pi (f_c + f_b) t), t = 0 being that of the
        waveform, in rad, in (-pi, pi].
    """

    amplitude: float = field(metadata={"unit": "V"})
    start: float = field(metadata={"unit": "s"})
    stop: float = field(metadata={"unit": "s"})
    duration: float = field(metadata={"unit": "s"})
    rise_time: float = field(metadata={"unit": "s"})
    fall_time: float = field(metadata={"unit": "s"})
    extinction: float = field(metadata={"unit": "dB"})
    image: float = field(metadata={"unit": "dBc"})
    carrier_leakage: float = field(metadata={"unit": "dBc"})
    frequency_error: float = field(metadata={"unit": "Hz"})
    phase_error: float = field(metadata={"unit": "rad"})


def measure_pulse(
    waveform: Waveform,
    carrier_frequency: float,
    *,
    baseband_frequency: float = 0.0,
    envelope: Envelope | None = None,
) -> PulseMeasures:
    """Measure the main pulse of a waveform.

    Parameters
    ----------
    waveform : Waveform
        Samples on any rising grid, shape (n,).
    carrier_frequency : float
        f_c in Hz; for a single-sideband signal the local oscillator.
    baseband_frequency : float
        f_b in Hz, negative for the lower sideband: the wanted tone lies at f_c + f_b. Zero when
        the carrier itself is wanted.
    envelope : Envelope or None
        `demodulate(waveform, carrier_frequency)` when the caller has it already; saves its time.

    Returns
    -------
    PulseMeasures
        All measures; those that have no meaning for the waveform are NaN.

    Raises
    ------
    WaveformError
        If there is no pulse at this carrier, f_b lies outside the demodulator's pass band f_c/4,
        the envelope belongs to another carrier, or `demodulate` refuses the waveform.

    Notes
    -----
    Levels and transitions as in IEEE Std 181, "Transitions, Pulses, and Related Waveforms", the
    low level being zero carrier.
    """
    if not abs(baseband_frequency) <= carrier_frequency / 4:
        raise WaveformError(
            f"the baseband frequency {baseband_frequency:.6g} Hz lies outside the pass band of "
            f"+-{carrier_frequency / 4:.6g} Hz around {carrier_frequency:.6g} Hz"
        )
    if envelope is None:
        envelope = demodulate(waveform, carrier_frequency)
    elif envelope.carrier_frequency != carrier_frequency:
        raise WaveformError(
            f"the envelope belongs to a carrier of {envelope.carrier_frequency:.9g} Hz, wanted "
            f"{carrier_frequency:.9g} Hz"
        )
    burst = find_burst(envelope)
    _check_power(waveform, envelope, burst)
    frequency_error, _ = phase_slope(envelope, burst, baseband_frequency)
    _check_frequency(envelope, burst, baseband_frequency, frequency_error)
    tone = baseband_frequency + frequency_error
    amplitude, image, leakage = _tones(envelope, burst, tone if baseband_frequency else 0.0)
    start, stop, rise_time, fall_time = _edges(envelope, burst, amplitude)
    first, last = float(waveform.t[0]), float(waveform.t[-1])
    start, stop = max(start, first), min(stop, last)
    return PulseMeasures(
        amplitude=amplitude,
        start=start,
        stop=stop,
        duration=stop - start,
        rise_time=rise_time,
        fall_time=fall_time,
        extinction=_extinction(envelope, amplitude, (start, stop), (rise_time, fall_time)),
        image=image,
        carrier_leakage=leakage,
        frequency_error=frequency_error,
        phase_error=_mean_phase(envelope, burst, baseband_frequency),
    )


def _check_power(waveform: Waveform, envelope: Envelope, burst: Burst) -> None:
    first, last = (envelope.t0 + envelope.dt * i for i in (burst.first, burst.last))
    shortest = half_length(envelope.carrier_frequency)
    inside = (waveform.t >= first) & (waveform.t <= last)
    if last - first < shortest or inside.sum() < 2:
        raise WaveformError(
            f"there is no pulse at {envelope.carrier_frequency:.6g} Hz that could be measured: "
            f"the envelope is above half its level only from {first:.6g} s to {last:.6g} s, and "
            f"{shortest:.3g} s, half the demodulator's filter, are needed",
            hint="where the waveform holds tones of other qubits, give these as [[spectator]] "
            "with their 'target'",
        )
    t, v = waveform.t[inside], waveform.v[inside]
    mean = float(trapezoid(v, t)) / float(t[-1] - t[0])
    power = float(trapezoid((v - mean) ** 2, t)) / float(t[-1] - t[0])
    in_band = float((np.abs(envelope.iq[burst.first : burst.last + 1]) ** 2).mean()) / 2
    if in_band < _MIN_POWER * power or in_band < 1e-12 * mean**2:
        share = in_band / power if power > 0 else 0.0
        raise WaveformError(
            f"there is no pulse at {envelope.carrier_frequency:.6g} Hz: "
            f"{100 * min(share, 1.0):.2g} % of the power between {first:.6g} s and {last:.6g} s "
            f"lies near this carrier, {np.sqrt(2 * in_band):.3g} {waveform.unit} peak",
            hint="check the carrier frequency and the probe",
        )


def _check_frequency(
    envelope: Envelope, burst: Burst, baseband_frequency: float, frequency_error: float
) -> None:
    carrier = envelope.carrier_frequency
    found = baseband_frequency + frequency_error
    # Nearer to the carrier or the image than to the wanted tone is the wrong tone.
    limit = abs(baseband_frequency) / 2 if baseband_frequency else carrier / 4
    if abs(frequency_error) > limit or abs(found) > carrier / 4:
        raise WaveformError(
            f"the pulse from {envelope.t0 + envelope.dt * burst.first:.6g} s on is not at the "
            f"frequency wanted: wanted {carrier + baseband_frequency:.9g} Hz within "
            f"{limit:.4g} Hz, got {carrier + found:.9g} Hz",
            hint="check the carrier frequency, and the sign of the baseband frequency",
        )


def _tones(envelope: Envelope, burst: Burst, tone: float) -> tuple[float, float, float]:
    """Amplitude in the envelope's unit, image and carrier leakage in dBc.

    The plateau is fitted by the wanted tone times a polynomial in time, which takes up its
    shape, a constant tone at the carrier, and a tone at the image. The image is that of the
    shaped tone, so the fit is repeated with the shape that the first one found.
    """
    nan = float("nan")
    span = (burst.plateau_last - burst.plateau_first) * envelope.dt
    if tone == 0 or span * abs(tone) < _MIN_TONE_PERIODS:
        return plateau_amplitude(envelope, burst), nan, nan
    part = slice(burst.plateau_first, burst.plateau_last + 1)
    t, iq = envelope.t[part], envelope.iq[part]
    x = np.linspace(-1.0, 1.0, t.size)
    wave: ComplexArray = np.exp(2j * np.pi * np.mod(tone * t, 1.0))
    powers = np.vander(x, _SHAPE_DEGREE + 1)
    weights = np.cos(0.5 * np.pi * x) ** 2  # The edges count little.
    middle = slice(t.size // 4, t.size - t.size // 4)
    wanted = np.ones(t.size, dtype=np.complex128)
    for _ in range(2):
        image = (wave * wanted / np.abs(wanted[middle]).max()).conj()
        columns = np.column_stack((wave[:, None] * powers, np.ones(t.size), image))
        solution, *_ = np.linalg.lstsq(columns * weights[:, None], iq * weights, rcond=None)
        wanted = powers @ solution[:-2]
    amplitude = float(np.abs(wanted[middle]).max())
    # An image or leakage of exactly zero is minus infinity dBc, not a warning.
    with np.errstate(divide="ignore"):
        levels = 20 * np.log10(np.abs(solution[-2:]) / amplitude)
    return amplitude, float(levels[1]), float(levels[0])


def _edges(envelope: Envelope, burst: Burst, amplitude: float) -> tuple[float, float, float, float]:
    """Start, stop, rise and fall time in s, from the interpolated |I + jQ|."""
    count = (envelope.iq.size - 1) * _OVERSAMPLING + 1
    fine = envelope.dt / _OVERSAMPLING
    t: FloatArray = np.asarray(envelope.t0 + fine * np.arange(count), dtype=np.float64)
    size = np.abs(CubicSpline(envelope.t, envelope.iq)(t)) / amplitude
    centre = (burst.plateau_first + burst.plateau_last) // 2 * _OVERSAMPLING
    start, rise = _edge(t[centre::-1], size[centre::-1])
    stop, fall = _edge(t[centre:], size[centre:])
    return start, stop, rise, fall


def _edge(t: FloatArray, size: FloatArray) -> tuple[float, float]:
    """Time of the 50 % crossing and the 10-90 % time, going outwards from the plateau."""
    half = _crossing(t, size, 0.5)
    if half is None:
        return float(t[-1]), float("nan")
    outer = _crossing(t, size, 0.1)
    if outer is None:
        return half, float("nan")
    # The first crossing of 90 % as seen from outside: a dip of the plateau is not its edge.
    end = int(np.searchsorted(np.abs(t - t[0]), abs(outer - t[0]), "right"))
    inner = _crossing(t[: end + 1][::-1], -size[: end + 1][::-1], -0.9)
    return half, abs(inner - outer) if inner is not None else float("nan")


def _crossing(t: FloatArray, size: FloatArray, level: float) -> float | None:
    """First time at which `size` falls below `level`, by linear interpolation."""
    below = np.flatnonzero(size < level)
    if below.size == 0:
        return None
    i = int(below[0])
    if i == 0:
        return float(t[0])
    part = (size[i - 1] - level) / (size[i - 1] - size[i])
    return float(t[i - 1] + part * (t[i] - t[i - 1]))


def _extinction(
    envelope: Envelope,
    amplitude: float,
    ends: tuple[float, float],
    edges: tuple[float, float],
) -> float:
    filter_half = half_length(envelope.carrier_frequency)
    margins = [filter_half + (0.0 if np.isnan(edge) else 2 * edge) for edge in edges]
    t = envelope.t
    outside = (t < ends[0] - margins[0]) | (t > ends[1] + margins[1])
    if not outside.any():
        return float("nan")
    residual = float(np.median(np.abs(envelope.iq[outside])))
    return float("inf") if residual == 0 else float(20 * np.log10(amplitude / residual))


def _mean_phase(envelope: Envelope, burst: Burst, baseband_frequency: float) -> float:
    part = slice(burst.first, burst.last + 1)
    turn = np.exp(-2j * np.pi * np.mod(baseband_frequency * envelope.t[part], 1.0))
    mean = burst_weights(envelope, burst) @ (envelope.iq[part] * turn)
    return float(np.angle(mean))
