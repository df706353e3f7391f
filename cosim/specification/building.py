"""From the tables of the blocks to their curves."""

import math
from collections.abc import Mapping

import numpy as np
from scipy.special import ndtri

from cosim.dsp.noise.paths import generator
from cosim.specification.blocks import (
    DacBitsTable,
    FlickerNoiseTable,
    ImageTable,
    LeakageTable,
    PhaseNoiseTable,
    SpursTable,
)
from cosim.specification.converters import RateCurve, rate_curve, rounding_errors
from cosim.specification.curves import (
    Curve,
    noise_curve,
    sampled_curve,
    worst_curve,
)
from cosim.specification.distortion import Distortion, longest_stretch
from cosim.specification.pulse import IdealPulse, base_infidelity
from cosim.specification.request import BLOCKS, Request
from cosim.specification.spectra import (
    check_band,
    coloured_noise,
    flicker_density,
    paired,
    phase_shape,
    white_noise,
)
from cosim.specification.spurs import spur_offsets, tones, worst_offset
from cosim.waveform import ComplexArray, FloatArray

# Samples that a curve uses: they tell only what lies beyond the first order.
CURVE_ROWS = 32
# Phases of what may have any: the worst of eight is within 8 % of the worst of all, in amplitude,
# where the two quadratures differ at all.
PHASES = 8

AnyCurve = Curve | RateCurve


def make_curves(
    request: Request, pulse: IdealPulse, rabi_per_volt: float, rows: int
) -> dict[str, AnyCurve]:
    """Make the curve of each block.

    Parameters
    ----------
    request : Request
        Which blocks there are.
    pulse : IdealPulse
        The pulse.
    rabi_per_volt : float
        In Hz/V, of the qubit.
    rows : int
        Samples of each noise that the verification will ask for, even.

    Returns
    -------
    dict of str to Curve or RateCurve
        By name, in the order of `BLOCKS`.

    Raises
    ------
    TestbenchError
        If phase noise has no end where the oscillator is the reference.
    """
    base = base_infidelity(pulse)
    return {
        name: _worst(name, request, pulse, base)
        or _noise(name, request, pulse, base, rabi_per_volt, rows)
        or _other(name, request, pulse, base)
        for name in request.blocks
    }


def fastest_offset(request: Request) -> float:
    """Give the greatest offset in Hz that any block has.

    Parameters
    ----------
    request : Request
        Which blocks there are.

    Returns
    -------
    float
    """
    fastest = 0.0
    for block in request.blocks.values():
        if isinstance(block, ImageTable):
            fastest = max(fastest, 2.0 * abs(block.intermediate_frequency))
        if isinstance(block, SpursTable) and block.offsets:
            fastest = max(fastest, *(abs(offset) for offset in block.offsets))
    return fastest


def _turned(x: float) -> ComplexArray:
    """An amplitude at `PHASES` phases, shape (PHASES, 1)."""
    return np.asarray(x * np.exp(2j * math.pi * np.arange(PHASES) / PHASES)[:, None])


def _worst(name: str, request: Request, pulse: IdealPulse, base: float) -> Curve | None:
    """The curve of an error that stays the same; None for other blocks."""
    frame = request.table.frame
    signs = np.array([[1.0], [-1.0]])
    block = request.blocks[name]
    if isinstance(block, ImageTable):
        offset = 2.0 * block.intermediate_frequency
        return worst_curve(
            name,
            pulse,
            frame,
            base,
            lambda x: Distortion(image=_turned(x), image_offset=offset),
            1e-3,
            1.0,
        )
    if isinstance(block, LeakageTable):
        before, after = block.before, block.after
        return worst_curve(
            name,
            pulse,
            frame,
            base,
            lambda x: Distortion(leakage=_turned(x), leakage_before=before, leakage_after=after),
            1e-4,
            1.0,
        )
    if name == "amplitude":
        return worst_curve(
            name, pulse, frame, base, lambda x: Distortion(gain=x * signs), 1e-3, 1.0
        )
    if name == "phase":
        return worst_curve(
            name, pulse, frame, base, lambda x: Distortion(turn=x * signs), 1e-3, math.pi
        )
    if name == "carrier":
        first = 1e-3 / pulse.duration
        return worst_curve(
            name, pulse, frame, base, lambda x: Distortion(frequency=x * signs), first, 1e3 * first
        )
    if name == "timing":
        first, most = 1e-3 * pulse.duration, longest_stretch(pulse)
        return worst_curve(
            name, pulse, frame, base, lambda x: Distortion(stretch=x * signs), first, most
        )
    return None


def _noise(
    name: str, request: Request, pulse: IdealPulse, base: float, rabi_per_volt: float, rows: int
) -> Curve | None:
    """The curve of noise in time; None for other blocks."""
    frame, seed = request.table.frame, request.table.seed
    stream = list(BLOCKS).index(name)
    block = request.blocks[name]
    if isinstance(block, PhaseNoiseTable):
        check_band(block, pulse, frame)
        shape = phase_shape(block)
        noise = coloured_noise(pulse, "phase", shape, seed, stream, rows, block.low)
    elif isinstance(block, FlickerNoiseTable):
        shape = flicker_density(block)
        noise = coloured_noise(pulse, "gain", shape, seed, stream, rows, block.low)
    elif name == "amplitude_noise":
        noise = white_noise(pulse, "gain", 1.0, seed, stream, rows)
    elif name == "wideband":
        # A voltage around the carrier has twice its density in each quadrature.
        relative = 2.0 * (2.0 * math.pi * rabi_per_volt / pulse.peak) ** 2
        noise = white_noise(pulse, "added", relative, seed, stream, rows)
    else:
        return None
    return noise_curve(name, pulse, frame, base, noise, min(CURVE_ROWS, rows))


def _other(name: str, request: Request, pulse: IdealPulse, base: float) -> AnyCurve:
    """The curves of jitter, spurs and converters."""
    frame, seed = request.table.frame, request.table.seed
    stream = list(BLOCKS).index(name)
    block = request.blocks[name]
    if name == "dac_rate":
        return rate_curve(pulse, frame, base)
    if isinstance(block, DacBitsTable):
        rate, headroom = block.rate, block.headroom
        return sampled_curve(
            name,
            pulse,
            frame,
            base,
            lambda x, count: rounding_errors(pulse, rate, headroom, x, count, seed, stream),
            2 * CURVE_ROWS,
            first=2.0**-10,
            most=0.5,
            homogeneous=False,
        )
    if isinstance(block, SpursTable):
        offset = worst_offset(pulse, frame, base, spur_offsets(block, pulse))
        return sampled_curve(
            name,
            pulse,
            frame,
            base,
            lambda x, count: Distortion(added=x * tones(pulse, offset, count, seed, stream)),
            CURVE_ROWS,
            first=1e-3,
            most=1.0,
            homogeneous=True,
        )
    return sampled_curve(
        name,
        pulse,
        frame,
        base,
        lambda x, count: Distortion(stretch=math.sqrt(2.0) * x * normal_draws(count, seed, stream)),
        CURVE_ROWS,
        first=1e-3 * pulse.duration,
        most=longest_stretch(pulse) / 6.0,
        homogeneous=True,
    )


def normal_draws(count: int, seed: int, stream: int) -> FloatArray:
    """Spread normal numbers evenly, in pairs of opposite sign and shuffled.

    Parameters
    ----------
    count : int
        Even.
    seed, stream : int
        Of the order.

    Returns
    -------
    ndarray, shape (count, 1)
        With a mean square of exactly 1.
    """
    half = count // 2
    places = generator(seed, stream, 0).permutation(half)
    draws = ndtri(0.5 + (places + 0.5) / count)
    return paired((draws / math.sqrt(np.mean(draws**2)))[:, None])


def curve_names(curves: Mapping[str, AnyCurve]) -> tuple[list[str], list[str]]:
    """Sort blocks into those whose errors stay the same, and those that fluctuate.

    Parameters
    ----------
    curves : mapping of str to Curve or RateCurve

    Returns
    -------
    tuple of two lists of str
    """
    constant = [
        name
        for name, curve in curves.items()
        if isinstance(curve, RateCurve) or curve.kind == "worst"
    ]
    return constant, [name for name in curves if name not in constant]
