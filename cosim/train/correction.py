"""The filter before the converter: measured on one pulse, designed, held to the full scale."""

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from cosim.dsp.predistortion import (
    WORST_CONDITION,
    Design,
    band_limited,
    factorise,
    filter_samples,
    superpose,
    unit_tap,
)
from cosim.errors import TestbenchError, WaveformError
from cosim.train.playing import Train, sampled
from cosim.train.table import NAME, PREDISTORTION
from cosim.waveform import ComplexArray, Envelope, FloatArray, Waveform

# Grid points per sample on which response and ideal are compared.
STRIDE = 8
# Regularisation beyond which nothing is left but plain delay.
_MOST_REGULARISATION = 1e3
_LEAST_REGULARISATION = 1e-12
_BISECTIONS = 40
# Delay is dear, and more of it is not worth a residual smaller by less than this.
_NEAR_LEAST = 1.1


@dataclass(frozen=True, slots=True)
class Response:
    """The baseband response of a netlist to one pulse, and the ideal that it is held against.

    Parameters
    ----------
    times : ndarray, shape (n,)
        In s, `STRIDE` of them in a sample.
    unit : ndarray of complex, shape (n,)
        Departure of the envelope from rest, for a pulse of factor 1 in the first slot with one.
    shapes : ndarray, shape (n, sources)
        The pulse of each source through the ideal's filter, without delay.
    gains : ndarray of complex, shape (sources,)
        Envelope per unit of each shape.
    late : int
        Delay, in grid points, at which the response is closest to the shapes.
    """

    times: FloatArray
    unit: ComplexArray
    shapes: FloatArray
    gains: ComplexArray
    late: int

    def ideal(self, late: int) -> ComplexArray:
        """The ideal response, so many grid points late."""
        return np.asarray(_delayed(self.shapes, late) @ self.gains)


@dataclass(frozen=True, slots=True)
class Filter:
    """A design, with what was done for it.

    Parameters
    ----------
    design : Design
        Taps, residual, condition.
    late : int
        Delay of the ideal response in grid points.
    regularisation : float
        That was used.
    """

    design: Design
    late: int
    regularisation: float


def measure_response(train: Train, envelope: Envelope) -> Response:
    """Read the response to one pulse at the level of the table.

    Parameters
    ----------
    train : Train
        With a pre-distortion.
    envelope : Envelope
        What its first pulse, alone and at that level, gave.

    Returns
    -------
    Response
        With the gain and delay at which it is closest to the pulse itself.

    Raises
    ------
    TestbenchError
        If the netlist does not respond.
    """
    filtering = train.filtering
    assert filtering is not None
    rate = filtering.rate * STRIDE
    times = np.arange(math.floor(train.stop * rate)) / rate
    played = filtering.level * train.factors[train.first]
    unit: ComplexArray = np.asarray(sampled(envelope, times) / played, dtype=np.complex128)
    if not np.any(np.abs(unit) > 0.0):
        raise TestbenchError(
            f"{train.bench.source or 'the testbench'}: the probe does not respond to the sources "
            f"{', '.join(train.shapes)}"
        )
    moved = train.first * train.table.spacing
    columns = [
        band_limited(shape, times - moved, filtering.band) - shape.v[0]
        for shape in train.shapes.values()
    ]
    shapes = np.column_stack(columns)
    coarse = range(0, times.size // 2, STRIDE)
    late = min(coarse, key=lambda shift: _matched(shapes, unit, shift)[1])
    near = range(max(0, late - STRIDE), late + STRIDE + 1)
    late = min(near, key=lambda shift: _matched(shapes, unit, shift)[1])
    return Response(times, unit, shapes, _matched(shapes, unit, late)[0], late)


def _matched(shapes: FloatArray, unit: ComplexArray, late: int) -> tuple[ComplexArray, float]:
    columns = _delayed(shapes, late)
    gains, *_ = np.linalg.lstsq(columns.astype(np.complex128), unit, rcond=1e-9)
    return np.asarray(gains), float(np.linalg.norm(unit - columns @ gains))


def _delayed(shapes: FloatArray, late: int) -> FloatArray:
    moved = np.zeros_like(shapes)
    moved[late:] = shapes[: shapes.shape[0] - late]
    return moved


def design_filter(train: Train, response: Response) -> tuple[Filter, tuple[str, ...]]:
    """Design the taps, and hold what they make of the train to the converter's full scale.

    Parameters
    ----------
    train : Train
        With a pre-distortion.
    response : Response
        From `measure_response`.

    Returns
    -------
    Filter
        The taps.
    tuple of str
        What the reader must know.

    Raises
    ------
    TestbenchError
        If the fit is ill-conditioned and not regularised.
    """
    filtering = train.filtering
    assert filtering is not None
    fit = factorise(response.unit, filtering.taps, STRIDE)
    asked, limit = filtering.regularisation, filtering.full_scale.value
    samples = tuple(train.samples(train.pulses()).values())

    def designed(late: int, regularisation: float) -> Design:
        prior = unit_tap(filtering.taps, (late - response.late) / STRIDE)
        return fit.solve(response.ideal(late), prior, regularisation)

    def held(late: int) -> tuple[Design, float]:
        """The least regularisation, from what is asked for, at which the peak fits."""
        design = designed(late, asked)
        if _largest(samples, design.taps) <= limit:
            return design, asked
        low, high = math.log(max(asked, _LEAST_REGULARISATION)), math.log(_MOST_REGULARISATION)
        for _ in range(_BISECTIONS):
            middle = 0.5 * (low + high)
            fits = _largest(samples, designed(late, math.exp(middle)).taps) <= limit
            low, high = (low, middle) if fits else (middle, high)
        return designed(late, math.exp(high)), math.exp(high)

    try:
        late = _best_delay(train, response, lambda late: designed(late, asked).residual)
        design, regularisation = held(late)
        if regularisation > asked:
            # With the peak held, another delay may be the better one.
            late = _best_delay(train, response, lambda late: held(late)[0].residual, STRIDE)
            design, regularisation = held(late)
    except WaveformError as error:
        where = f"{train.bench.source or 'the testbench'}, table [{NAME}.{PREDISTORTION}]"
        raise TestbenchError(f"{where}: {error.message}", hint=error.hint) from None
    notices: list[str] = []
    if fit.condition > WORST_CONDITION:
        notices.append(
            f"the fit of {filtering.taps} taps is ill-conditioned, with singular values over "
            f"{fit.condition:.1e}: the pulse does not excite {filtering.taps - design.rank} of "
            "their combinations, which the regularisation holds to plain delay"
        )
    if regularisation > asked:
        notices.append(
            f"the filter asked for would exceed the full scale of {limit:.4g} "
            f"{filtering.full_scale.unit}: its regularisation went from {asked:.1e} to "
            f"{regularisation:.1e}"
        )
    return Filter(design, late, regularisation), tuple(notices)


def _best_delay(
    train: Train, response: Response, residual: Callable[[int], float], step: int = STRIDE // 4
) -> int:
    """Give the shortest delay, in grid points, of nearly the least residual."""
    filtering = train.filtering
    assert filtering is not None
    last = min(response.late + filtering.taps * STRIDE, response.times.size // 2)
    if filtering.delay is not None:
        late = round(filtering.delay * filtering.rate * STRIDE)
        if not 0 <= late <= last:
            raise WaveformError(
                f"key 'delay': wanted 0 to {last / STRIDE / filtering.rate * 1e9:.4g} ns, what the "
                f"line and the taps delay by, got {filtering.delay * 1e9:.4g} ns"
            )
        return late
    tried = {late: residual(late) for late in range(0, last + 1, step)}
    enough = _NEAR_LEAST * min(tried.values())
    return next(late for late, value in tried.items() if value <= enough)


def _largest(samples: tuple[FloatArray, ...], taps: FloatArray) -> float:
    return max(float(np.abs(filter_samples(item, taps)).max()) for item in samples)


def largest_value(train: Train, taps: FloatArray) -> float:
    """Give the largest value that the converters are asked for in a train.

    Parameters
    ----------
    train : Train
        With a converter.
    taps : ndarray, shape (k,)
        Of the filter before it.

    Returns
    -------
    float
        Of either sign, in the unit of the full scale.
    """
    return _largest(tuple(train.samples(train.pulses()).values()), taps)


def largest_departure(train: Train, taps: FloatArray) -> float:
    """Give the largest departure from rest in a train, over that of one pulse.

    Parameters
    ----------
    train : Train
        With a converter.
    taps : ndarray, shape (k,)
        Of the filter before it.

    Returns
    -------
    float
        Of the source in which it is largest.
    """
    found = []
    for name, samples in train.samples(train.pulses()).items():
        shape = train.shapes[name]
        peak = float(np.abs(shape.v - shape.v[0]).max())
        found.append(float(np.abs(filter_samples(samples, taps) - samples[0]).max()) / peak)
    return max(found)


def train_weights(train: Train, taps: FloatArray) -> FloatArray:
    """Give the weights, sample by sample, by which one pulse's response makes a whole train.

    Parameters
    ----------
    train : Train
        With a converter.
    taps : ndarray, shape (k,)
        Of the filter before it.

    Returns
    -------
    ndarray, shape (samples,)
        From the first pulse on.
    """
    assert train.filtering is not None
    slot = round(train.table.spacing * train.filtering.rate)
    played = train.factors[train.first :]
    weights = np.zeros(slot * len(played))
    weights[::slot] = played
    return np.convolve(weights, taps)


def ideal_train(train: Train, response: Response, late: int, times: FloatArray) -> ComplexArray:
    """Give the ideal envelope of the whole train, from its rest on.

    Parameters
    ----------
    train : Train
        With a pre-distortion.
    response : Response
        From `measure_response`.
    late : int
        Delay in grid points.
    times : ndarray, shape (n,)
        In s.

    Returns
    -------
    ndarray of complex, shape (n,)
        In the envelope's unit.
    """
    whole = superpose(response.ideal(late), train_weights(train, unit_tap(1, 0.0)).tolist(), STRIDE)
    real = np.interp(times, response.times, whole.real)
    return np.asarray(real + 1j * np.interp(times, response.times, whole.imag))


def unexplained(
    train: Train, response: Response, envelope: Envelope, taps: FloatArray, ideal: ComplexArray
) -> float:
    """Tell what superposition of one pulse's response does not explain of a train.

    Parameters
    ----------
    train : Train
        With a pre-distortion.
    response : Response
        Measured at the level of the table.
    envelope : Envelope
        Of the whole train.
    taps : ndarray, shape (k,)
        With which it was played.
    ideal : ndarray of complex
        The ideal train; its root mean square is the unit.

    Returns
    -------
    float
        Root mean square over that of the ideal train.
    """
    wanted = superpose(response.unit, train_weights(train, taps).tolist(), STRIDE)
    missed = sampled(envelope, response.times) - wanted
    size = float(np.sqrt(np.mean(np.abs(ideal) ** 2)))
    return float(np.sqrt(np.mean(np.abs(missed) ** 2))) / size


def ideal_step(
    train: Train, response: Response, envelope: Envelope, delay: float, steps: dict[str, Waveform]
) -> tuple[FloatArray, complex]:
    """Give the ideal of a step at the sources.

    Parameters
    ----------
    train : Train
        With a pre-distortion.
    response : Response
        From `measure_response`.
    envelope : Envelope
        On whose grid.
    delay : float
        In s.
    steps : dict of Waveform
        What is played, by source.

    Returns
    -------
    ndarray, shape (n,)
        From 0 to 1.
    complex
        Its height, in the envelope's unit.
    """
    assert train.filtering is not None
    total = np.zeros(envelope.iq.size, dtype=np.complex128)
    height = 0j
    for wave, gain in zip(steps.values(), response.gains, strict=True):
        away = band_limited(wave, envelope.t - delay, train.filtering.band) - wave.v[0]
        total += gain * away
        height += complex(gain) * float(wave.v[-1] - wave.v[0])
    return np.asarray((total / height).real), height
