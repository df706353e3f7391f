"""Limits that depend on the frequency: phase noise, spurs, and noise that reaches the qubit."""

import itertools
import math

import numpy as np

from cosim.specification.blocks import PhaseNoiseTable, SpursTable
from cosim.specification.curves import cell_responses
from cosim.specification.pulse import IdealPulse, base_infidelity, tone_factor
from cosim.specification.request import Request
from cosim.specification.result import LimitMask
from cosim.specification.spectra import mask_level
from cosim.specification.spurs import spur_levels, spur_offsets
from cosim.waveform import FloatArray

# The mask of phase noise is told up to this many turns in the pulse.
FARTHEST_TURNS = 100.0
# Points of the integral of a filter over each band.
FINE = 24


def make_masks(
    request: Request,
    pulse: IdealPulse,
    rabi_per_volt: float,
    errors: dict[str, float],
    shares: dict[str, float],
) -> tuple[LimitMask, ...]:
    """Make the masks of the blocks that have one.

    Parameters
    ----------
    request : Request
        Which blocks there are.
    pulse : IdealPulse
    rabi_per_volt : float
        In Hz/V.
    errors, shares : dict of str to float
        Error x of each block, and what it costs.

    Returns
    -------
    tuple of LimitMask
    """
    found = []
    for name, block in request.blocks.items():
        if isinstance(block, PhaseNoiseTable):
            found.append(phase_noise_mask(block, pulse, errors[name]))
        elif isinstance(block, SpursTable):
            offsets = spur_offsets(block, pulse)
            frame, base = request.table.frame, base_infidelity(pulse)
            levels = spur_levels(pulse, frame, base, offsets, shares[name])
            found.append(
                LimitMask(
                    name,
                    "one spur, at that offset alone",
                    "dBc",
                    offsets,
                    offsets.copy(),
                    20.0 * np.log10(levels),
                )
            )
        elif name == "wideband":
            found.append(wideband_mask(pulse, request.table.frame, rabi_per_volt, shares[name]))
    return tuple(found)


def phase_noise_mask(table: PhaseNoiseTable, pulse: IdealPulse, error: float) -> LimitMask:
    """Give the mask of phase noise at decades of the offset.

    Parameters
    ----------
    table : PhaseNoiseTable
        Its shape.
    pulse : IdealPulse
    error : float
        Its level, as a ratio of amplitudes.

    Returns
    -------
    LimitMask
        The whole of it costs the share of the block.
    """
    high = min(table.high, FARTHEST_TURNS / pulse.duration)
    decades = 10.0 ** np.arange(math.ceil(math.log10(table.low)), math.log10(high) + 1e-9)
    inside = [f for f in (*decades.tolist(), table.corner, table.offset) if table.low < f < high]
    offsets = np.array(sorted({table.low, *inside}))
    level = 20.0 * math.log10(error)
    levels = np.array([level + mask_level(table, float(f)) for f in offsets])
    return LimitMask(
        "phase_noise", "L(f), all of it together", "dBc/Hz", offsets, offsets.copy(), levels
    )


def wideband_mask(pulse: IdealPulse, frame: str, rabi_per_volt: float, share: float) -> LimitMask:
    """Give the density that noise within one band may have at the qubit.

    Parameters
    ----------
    pulse : IdealPulse
    frame : str
        As in `distorted_unitaries`.
    rabi_per_volt : float
        In Hz/V.
    share : float
        What the noise in one band alone may cost.

    Returns
    -------
    LimitMask
        Around the carrier, and in octaves to both sides of it.
    """
    top = 0.25 / pulse.step
    edges = [1.0 / pulse.duration]
    while 2.0 * edges[-1] <= top:
        edges.append(2.0 * edges[-1])
    bands = [(-edges[0], edges[0])]
    for near, far in itertools.pairwise(edges):
        bands += [(-far, -near), (near, far)]
    bands.sort()
    costs = _band_costs(pulse, frame, rabi_per_volt, bands)
    return LimitMask(
        "wideband",
        "noise in that band alone",
        "V^2/Hz",
        np.array([low for low, _ in bands]),
        np.array([high for _, high in bands]),
        share / costs,
    )


def noise_filter(pulse: IdealPulse, frame: str, offsets: FloatArray) -> FloatArray:
    """Give what noise added to the drive costs at an offset from the carrier.

    Parameters
    ----------
    pulse : IdealPulse
    frame : str
        As in `distorted_unitaries`.
    offsets : ndarray, shape (n,)
        In Hz, of both signs.

    Returns
    -------
    ndarray, shape (n,)
        In 1/Hz: 1 - F_avg = integral of it times (2 pi k/peak)^2 S_v over all offsets, with S_v
        the one-sided density of the voltage and the peak in rad/s, to first order.
    """
    # A tone Re and Im of a exp(i 2 pi f t) reaches both quadratures.
    both = [cell_responses(pulse, frame, "added", unit) for unit in (1.0, 1j)]
    responses = both[0] - 1j * both[1]
    wave = np.exp(2j * math.pi * np.outer(offsets, pulse.middles))
    wave = wave * tone_factor(pulse, offsets)[:, None]
    return np.asarray((np.abs(wave @ responses) ** 2).sum(axis=1))


def _band_costs(
    pulse: IdealPulse, frame: str, rabi_per_volt: float, bands: list[tuple[float, float]]
) -> FloatArray:
    """Cost of noise of 1 V^2/Hz in each band, to first order."""
    offsets, widths, numbers = [], [], []
    for low, high in bands:
        count = FINE * max(1, math.ceil((high - low) * pulse.duration))
        width = (high - low) / count
        offsets.append(low + width * (np.arange(count) + 0.5))
        widths.append(width)
        numbers.append(count)
    values = noise_filter(pulse, frame, np.concatenate(offsets))
    starts = np.concatenate([[0], np.cumsum(numbers)[:-1]])
    relative = (2.0 * math.pi * rabi_per_volt / pulse.peak) ** 2
    return np.asarray(np.add.reduceat(values, starts) * np.array(widths) * relative)
