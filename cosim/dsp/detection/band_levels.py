"""The density of noise from few records of it, averaged over bands of the offset from the carrier.

A record's taper keeps what is far off a band from leaking into it. Where the noise is made by some
that is known, sample by sample, the power that follows from it by a gain is known without chance.
"""

import itertools
import math
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from cosim.dsp.detection.output_noise import OutputNoise
from cosim.waveform import ComplexArray, FloatArray

# Bands, in lines of a record's spectrum: 0 to 2, then wider ones.
_FIRST_BAND = 3
_GROWTH = 1.6
_PARABOLA = 3  # numbers of a gain
_EDGES = 0.25  # of a record, half of it at either end, where its taper rises and falls
# Part of the rate of the records up to which the mean over their cells takes no more than 1 % of
# known noise, the most that what folds down there can give back: (pi x)^2/3.
_FLAT = 0.05
_STEEPEST = (
    2.0  # of the density at the carrier over the first band's: beyond, a record is too short
)


@dataclass(frozen=True, slots=True)
class BandLevels:
    """Densities of noise in bands of |offset|.

    Parameters
    ----------
    frequencies : ndarray, shape (n,)
        Middles of the bands in Hz, from 0 on.
    values : ndarray, shape (n,)
        Two-sided density in V^2/Hz, the mean of both sides.
    errors : ndarray, shape (n,)
        Standard errors of these.
    squares : ndarray, shape (n,)
        Mean of the squared offsets of each band in Hz^2.
    """

    frequencies: FloatArray = field(metadata={"unit": "Hz", "axes": ("band",)})
    values: FloatArray = field(metadata={"unit": "V^2/Hz", "axes": ("band",)})
    errors: FloatArray = field(metadata={"unit": "V^2/Hz", "axes": ("band",)})
    squares: FloatArray = field(metadata={"unit": "Hz^2", "axes": ("band",)})


def averaged_levels(records: ComplexArray, step: float, quadratures: int) -> BandLevels:
    """Average the spectra of noise records.

    Parameters
    ----------
    records : ndarray of complex, shape (k, n)
        In V.
    step : float
        Of a record in s.
    quadratures : int
        2 for I + jQ, 1 for a single real output.

    Returns
    -------
    BandLevels

    Notes
    -----
    Averaged tapered periodograms: P. D. Welch, IEEE Trans. Audio Electroacoust. 15, 70 (1967).
    """
    lines, alone = _lines(records, step)
    number = _number(records.shape[1])
    middles, values, errors, squares = [], [], [], []
    for middle, inside in _bands(records.shape[1]):
        powers = np.abs(lines[:, inside]) ** 2
        level = float(powers.mean())
        middles.append(middle)
        squares.append(float(np.mean(number[inside] ** 2)))
        values.append(level)
        errors.append(level / math.sqrt(_free(powers, middle, quadratures, alone)))
    unit = 1.0 / (records.shape[1] * step)
    return BandLevels(
        unit * np.array(middles), np.array(values), np.array(errors), unit**2 * np.array(squares)
    )


def explained_levels(
    records: ComplexArray, known: ComplexArray, step: float, quadratures: int, passed: float
) -> BandLevels:
    """Find the density of noise that is made by known samples, or for the most part.

    In each band the records are fitted by the known samples times a gain that is a parabola in the
    offset, and by their mirror image. What the fit explains has the power of white noise behind
    these gains; only what is left is averaged. Without bias, whatever part they explain.

    Parameters
    ----------
    records : ndarray of complex, shape (k, n)
        In V.
    known : ndarray of complex, shape (k, n)
        What made them, of the density 1/Hz, two-sided.
    step : float
        Of a record in s.
    quadratures : int
        2 for I + jQ, 1 for a single real output.
    passed : float
        Offset in Hz up to which `known` has that density.

    Returns
    -------
    BandLevels
        As by `averaged_levels` beyond `passed`.
    """
    plain = averaged_levels(records, step, quadratures)
    lines, alone = _lines(records, step)
    entering, _ = _lines(known, step)
    mirrored = np.conj(np.roll(entering[:, ::-1], 1, axis=1))
    count = records.shape[1]
    values, errors = plain.values.copy(), plain.errors.copy()
    offset = np.fft.fftfreq(count)
    limit = min(passed * step, _FLAT)
    for place, (middle, inside) in enumerate(_bands(count)):
        bent = [*offset[inside] ** np.arange(_PARABOLA)[:, None], np.ones(inside.sum())]
        free = _free(lines[:, inside], middle, quadratures, alone) - len(bent)
        if np.abs(offset[inside]).max() > limit or free < 1.0:
            continue
        rows = [*([entering] * _PARABOLA), mirrored]
        design = np.stack(
            [(row[:, inside] * shape).ravel() for row, shape in zip(rows, bent, strict=True)],
            axis=1,
        )
        wanted = lines[:, inside].ravel()
        inverse = np.linalg.pinv(design.conj().T @ design)
        gains = inverse @ (design.conj().T @ wanted)
        left = wanted - design @ gains
        # Lines of one taper are not quite independent, and the fit took some of their freedom.
        lost = wanted.size / (free + len(bent))
        rest = float(np.vdot(left, left).real) / wanted.size * (1.0 + len(bent) / free)
        # Power in the band of white noise behind the gains; the mirror image is another noise.
        power = np.array(bent) @ np.array(bent).T / inside.sum()
        power[-1, :-1] = power[:-1, -1] = 0.0
        explained = float((gains.conj() @ power @ gains).real)
        # By chance a fit explains some of what does not belong to it.
        lucky = rest * lost * float(np.trace(inverse @ power).real)
        spread = float((gains.conj() @ power @ inverse @ power @ gains).real)
        values[place] = max(0.0, explained - lucky) + rest
        errors[place] = math.sqrt(2.0 * rest * lost * spread + rest**2 / free)
    return BandLevels(plain.frequencies, values, errors, plain.squares)


def carrier_ratio(levels: BandLevels) -> float:
    """Give the density at the carrier over the mean of the first band, which lies around it.

    Of a short record the first band is as wide as a filter of the chain: what tells the states
    apart passes in its middle, where the density is more than its mean.

    Parameters
    ----------
    levels : BandLevels
        Of all noise together.

    Returns
    -------
    float
        From a density whose inverse is a parabola in the offset, as behind one resonance, through
        the first two bands; at most 2. 1 where one of them is zero.
    """
    if levels.values.size < 2 or levels.values[:2].min() <= 0.0:
        return 1.0
    first, second = levels.values[0] / levels.values[:2]
    reach = levels.squares[0] / (levels.squares[1] - levels.squares[0])
    return float(1.0 / max(first - (second - first) * reach, 1.0 / _STEEPEST))


def noise_of_levels(frequencies: FloatArray, values: FloatArray, quadratures: int) -> OutputNoise:
    """Lay straight lines between levels, the same to both sides.

    Parameters
    ----------
    frequencies : ndarray, shape (n,)
        Offsets in Hz, rising from 0 on.
    values : ndarray, shape (n,)
        In V^2/Hz, two-sided; the last one holds beyond.
    quadratures : int
        2 for I + jQ, 1 for a single real output.

    Returns
    -------
    OutputNoise
    """
    f = np.concatenate([-frequencies[:0:-1], frequencies])
    return OutputNoise(0.0, f, np.concatenate([values[:0:-1], values]), quadratures)


def _lines(records: ComplexArray, step: float) -> tuple[ComplexArray, float]:
    """Give the tapered spectra of records, and how many lines one stands for by itself."""
    count = records.shape[1]
    place = (np.arange(count) + 0.5) / count
    edge = np.minimum(np.minimum(place, 1.0 - place) / (0.5 * _EDGES), 1.0)
    taper = np.sin(0.5 * math.pi * edge) ** 2
    squares = float(np.mean(taper**2))
    scale = math.sqrt(step / (count * squares))
    lines = scale * np.fft.fft(records * taper, axis=1)
    return np.asarray(lines), squares**2 / float(np.mean(taper**4))


def _number(count: int) -> npt.NDArray[np.int_]:
    return np.asarray(np.abs(np.fft.fftfreq(count) * count).round().astype(int))


def _bands(count: int) -> list[tuple[float, npt.NDArray[np.bool_]]]:
    """Give the bands of |line number|: their middles and which lines are in them."""
    number = _number(count)
    edges = [0]
    width = float(_FIRST_BAND)
    while edges[-1] <= count // 2:
        edges.append(edges[-1] + max(1, round(width)))
        width *= _GROWTH
    found = []
    for low, high in itertools.pairwise(edges):
        inside = (number >= low) & (number < high)
        if inside.any():
            found.append((0.0 if low == 0 else float(number[inside].mean()), inside))
    return found


def _free(lines: npt.NDArray[np.generic], middle: float, quadratures: int, alone: float) -> float:
    """Count the independent numbers; of a real output mirrored lines are the same one."""
    if quadratures == 2:
        return alone * lines.size
    return alone * 0.5 * (lines.size + (lines.shape[0] if middle == 0.0 else 0))
