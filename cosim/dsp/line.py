"""A waveform at the far end of a line whose transmission is known as a table over frequency."""

from dataclasses import dataclass, field
from typing import TypeVar

import numpy as np
import numpy.typing as npt
from scipy.fft import fft, fftfreq, ifft, irfft, next_fast_len, rfft, rfftfreq
from scipy.interpolate import CubicSpline

from cosim.dsp.resampling import resample
from cosim.errors import WaveformError
from cosim.waveform import ComplexArray, FloatArray, Waveform

Samples = TypeVar("Samples", ComplexArray, FloatArray)

# Energy that arrives before it was sent, over all, beyond which the table cannot be a line's.
CAUSAL_LIMIT = 1e-2
# Length of the ring on which spectra are multiplied, in records. The answer of a skin effect dies
# away with the square root of time only, and what is left when the ring closes is an error. A step
# into exp(-1.2e-5 sqrt(s)) over 22 ns: 1.6 % with 2 records, 0.4 % with 8, 0.1 % with 16; a
# pulse a hundred times less, a burst of a carrier nothing.
_RING = 8
# A phase that turns by more than this from point to point may hide a full turn.
_CLEAR_PHASE_STEP = 0.5 * np.pi


@dataclass(frozen=True, slots=True)
class FarEnd:
    """The wave at the far end, with what the computation may have cost.

    Parameters
    ----------
    waveform : Waveform
        On a uniform grid from the start of the record, in its unit; the delay is in it.
    delay : float
        Delay of the line in s: mean slope of the phase over the table.
    precursor : float
        Energy that arrives before the start of the record, over all; 0 for a causal line.
    energy_below, energy_above : float
        Share of the energy at the far end that lies below the first and above the last frequency
        of the table, where the transmission is extrapolated.
    interpolation_error : float
        Of the incident waveform on the new grid, in its unit; see `resample`.
    alias_bound : float
        Part of the incident waveform that the new grid cannot hold, in its unit.
    warnings : tuple of str
        What to know before using the waveform.
    """

    waveform: Waveform
    delay: float = field(metadata={"unit": "s"})
    precursor: float
    energy_below: float
    energy_above: float
    interpolation_error: float = field(metadata={"unit": "V"})
    alias_bound: float = field(metadata={"unit": "V"})
    warnings: tuple[str, ...]


def line_delay(frequency: FloatArray, transmission: ComplexArray) -> float:
    """Give the delay of a line: the mean slope of its unwrapped phase, weighted by its power.

    Parameters
    ----------
    frequency : ndarray, shape (n,)
        In Hz, rising, at least two points.
    transmission : ndarray of complex, shape (n,)
        For exp(+j omega t).

    Returns
    -------
    float
        In s; positive when the phase falls.
    """
    phase = np.unwrap(np.angle(transmission))
    power = np.abs(transmission) ** 2
    # Where next to nothing passes, the phase is noise.
    weight = np.minimum(power[:-1], power[1:]) * np.diff(frequency)
    if weight.sum() <= 0.0:
        return 0.0
    slope = np.diff(phase) / np.diff(frequency)
    return float(-(weight @ slope) / weight.sum() / (2.0 * np.pi))


def transmission_at(
    frequency: FloatArray, transmission: ComplexArray, wanted: FloatArray
) -> ComplexArray:
    """Interpolate the transmission of a line, and extrapolate it to 0 Hz and beyond the table.

    The line's delay is taken out first, so that what is interpolated turns slowly, and put back
    afterwards. The rest is interpolated by a cubic spline. At 0 Hz, where the response
    of a real signal is real, the magnitude of the first point is held with the sign that its
    extrapolated phase is nearest to. Beyond the last point magnitude and remaining phase are held.

    Parameters
    ----------
    frequency : ndarray, shape (n,)
        In Hz, rising from 0 or above, at least two points.
    transmission : ndarray of complex, shape (n,)
        For exp(+j omega t).
    wanted : ndarray, shape (m,)
        Frequencies in Hz, not negative.

    Returns
    -------
    ndarray of complex, shape (m,)
        The transmission there.
    """
    delay = line_delay(frequency, transmission)
    rest = transmission * np.exp(2j * np.pi * frequency * delay)
    f = frequency
    if f[0] > 0.0:
        phase = np.unwrap(np.angle(rest[:2]))
        at_zero = phase[0] - (phase[1] - phase[0]) * f[0] / (f[1] - f[0])
        sign = 1.0 if np.cos(at_zero) >= 0.0 else -1.0
        f, rest = np.append(0.0, f), np.append(sign * abs(rest[0]), rest)
    else:
        rest = np.append(rest[0].real, rest[1:])
    # The response of a real signal is even in its real part and odd in its imaginary part.
    mirror = slice(min(4, f.size - 1), 0, -1)
    knots = np.concatenate((-f[mirror], f))
    curve = CubicSpline(knots, np.concatenate((rest[mirror].conj(), rest)))
    found = curve(np.minimum(wanted, f[-1]))
    return np.asarray(found * np.exp(-2j * np.pi * wanted * delay), dtype=np.complex128)


def apply_line(
    waveform: Waveform,
    frequency: FloatArray,
    transmission: ComplexArray,
    *,
    step: float,
    stop: float | None = None,
) -> FarEnd:
    """Send a waveform down a line.

    Before its record the waveform is taken to have stood at its first value for ever, and after
    it to stay at its last one.

    Parameters
    ----------
    waveform : Waveform
        The incident wave at the near end, shape (n,), time in s.
    frequency : ndarray, shape (m,)
        In Hz, rising from 0 or above, at least two points.
    transmission : ndarray of complex, shape (m,)
        Outgoing over incident wave for exp(+j omega t).
    step : float
        Step of the grid in s; it should resolve the waveform.
    stop : float or None
        End of the wave at the far end in s; default: the end of the record plus the line's delay.

    Returns
    -------
    FarEnd
        The wave at the far end, in the waveform's unit and on its time axis.

    Raises
    ------
    WaveformError
        If the table is not one of a causal line, or a time is impossible.

    Notes
    -----
    Product of the spectra over a record that is padded to eight times its length plus the delay,
    so that the end does not wrap around to the start.
    """
    frequency, transmission = _checked(frequency, transmission)
    delay = line_delay(frequency, transmission)
    if -delay * (frequency[-1] - frequency[0]) > 1.0:
        raise WaveformError(
            f"the line's delay is negative, {delay * 1e9:.4g} ns: its phase rises with frequency",
            hint="wanted a table for exp(+j omega t), with points close enough to follow the phase",
        )
    near = resample(waveform, step)
    v = near.waveform.v
    start = float(waveform.t[0])
    end = float(waveform.t[-1]) + max(delay, 0.0) if stop is None else stop
    if not (np.isfinite(end) and end >= start + step):
        raise WaveformError(f"the wave at the far end must end after {start:.6g} s, got {end:.6g}")
    count = int(np.floor((end - start) / step * (1.0 + 1e-12) + 1e-6)) + 1
    record, quiet = _padded(v - v[0], count, int(np.ceil(abs(delay) / step)))
    f = rfftfreq(record.size, step)
    response = transmission_at(frequency, transmission, f)
    spectrum = rfft(record) * response
    far: FloatArray = np.asarray(irfft(spectrum, record.size), dtype=np.float64)
    total = float(np.sum(far[:count] ** 2))
    precursor = float(np.sum(far[record.size - quiet // 2 :] ** 2)) / total if total > 0.0 else 0.0
    if precursor > CAUSAL_LIMIT:
        raise _not_causal(precursor)
    energy = np.abs(spectrum) ** 2
    whole = float(energy.sum()) or 1.0
    t: FloatArray = np.asarray(start + step * np.arange(count), dtype=np.float64)
    return FarEnd(
        waveform=Waveform(t, far[:count] + v[0] * response[0].real, waveform.unit),
        delay=delay,
        precursor=precursor,
        energy_below=float(energy[f < frequency[0]].sum()) / whole,
        energy_above=float(energy[f > frequency[-1]].sum()) / whole,
        interpolation_error=near.interpolation_error,
        alias_bound=near.alias_bound,
        warnings=_warnings(frequency, transmission, delay),
    )


def envelope_at_far_end(
    iq: npt.ArrayLike,
    step: float,
    carrier_frequency: float,
    frequency: npt.ArrayLike,
    transmission: npt.ArrayLike,
) -> ComplexArray:
    """Send the envelope of a wave down a line.

    Beyond either end of the table magnitude and remaining phase are held, since a band that was
    measured around the carrier tells nothing of what lies far below.

    Parameters
    ----------
    iq : array_like of complex, shape (n,)
        I + jQ of the incident wave, of exp(+j omega t), which has stood at its first value before.
    step : float
        Sample interval in s.
    carrier_frequency : float
        In Hz.
    frequency : array_like, shape (m,)
        In Hz, rising from 0 or above, at least two points.
    transmission : array_like of complex, shape (m,)
        Outgoing over incident wave for exp(+j omega t).

    Returns
    -------
    ndarray of complex, shape (n,)
        I + jQ at the far end at the same times; the delay is in it.

    Raises
    ------
    WaveformError
        If the table is not one of a causal line.
    """
    table, response = _checked(frequency, transmission)
    near = np.asarray(iq, dtype=np.complex128)
    delay = line_delay(table, response)
    record, quiet = _padded(near - near[0], near.size, int(np.ceil(max(delay, 0.0) / step)))
    f = carrier_frequency + np.append(0.0, fftfreq(record.size, step))
    known = np.clip(np.abs(f), table[0], table[-1])
    beyond = np.exp(-2j * np.pi * (np.abs(f) - known) * delay)
    passed = transmission_at(table, response, known) * beyond
    # The response of a real signal at a negative frequency.
    passed = np.where(f < 0.0, passed.conj(), passed)
    far = ifft(fft(record) * passed[1:])
    total = float(np.sum(np.abs(far[: near.size]) ** 2))
    precursor = float(np.sum(np.abs(far[record.size - quiet // 2 :]) ** 2))
    if precursor > CAUSAL_LIMIT * total:
        raise _not_causal(precursor / total)
    return np.asarray(far[: near.size] + near[0] * passed[0], dtype=np.complex128)


def _not_causal(precursor: float) -> WaveformError:
    return WaveformError(
        f"the line answers before it is asked: {precursor:.1e} of the energy arrives before "
        f"the record starts",
        hint="its phase must fall with frequency, and its points lie close enough to follow it",
    )


def _checked(
    frequency: npt.ArrayLike, transmission: npt.ArrayLike
) -> tuple[FloatArray, ComplexArray]:
    f = np.asarray(frequency, dtype=np.float64)
    h = np.asarray(transmission, dtype=np.complex128)
    if f.ndim != 1 or f.shape != h.shape or f.size < 2:
        raise WaveformError(
            f"wanted a table of at least two frequencies and as many values, got shapes {f.shape} "
            f"and {h.shape}"
        )
    if not (np.isfinite(f).all() and np.isfinite(h).all()):
        raise WaveformError("a value of the line's table is not finite")
    if f[0] < 0.0 or (np.diff(f) <= 0.0).any():
        raise WaveformError("the frequencies of the line's table must rise from 0 Hz or above")
    return f, h


def _padded(v: Samples, count: int, delay: int) -> tuple[Samples, int]:
    """The record up to `count` samples, led back to zero, and then zeros for delay and rest.

    Also given is the number of samples at the end in which a causal line is quiet.

    What follows the wanted samples does not reach them, unless the line is not causal. It only
    has to be smooth, and to be over and settled before the ring closes.
    """
    held = np.append(v, np.full(max(count - v.size, 0), v[-1]))
    ramp = held.size
    fade = 0.5 + 0.5 * np.cos(np.pi * (np.arange(ramp) + 1) / (ramp + 1))
    size = next_fast_len(_RING * held.size + delay, real=True)
    quiet = size - held.size - ramp - delay
    return np.concatenate((held, held[-1] * fade, np.zeros(delay + quiet))), quiet


def _warnings(frequency: FloatArray, transmission: ComplexArray, delay: float) -> tuple[str, ...]:
    steps = np.abs(np.diff(np.unwrap(np.angle(transmission))))
    power = np.abs(transmission) ** 2
    passing = np.minimum(power[1:], power[:-1]) > 1e-6 * power.max()
    largest = float(steps[passing].max()) if passing.any() else 0.0
    if largest <= _CLEAR_PHASE_STEP:
        return ()
    spacing = float(np.diff(frequency).max())
    return (
        f"the line's phase turns by up to {np.degrees(largest):.0f} degrees from point to point, "
        f"so its delay of {delay * 1e9:.4g} ns may be wrong by {1e9 / spacing:.4g} ns: more "
        f"points are needed",
    )
