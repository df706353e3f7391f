"""The search for the limits of a readout's blocks, one on top of the other."""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from types import MappingProxyType

import numpy as np
from scipy.optimize import brentq

from cosim.dsp.detection.converter import Adc
from cosim.dsp.detection.reception import receive
from cosim.errors import TestbenchError
from cosim.specification.readout_formulas import noise_temperature_of
from cosim.specification.readout_model import (
    FASTEST_POLE,
    ChainLimits,
    ReadoutTask,
    best_stop,
    chain_output,
    detector_of,
    error_of,
    judge,
    sample_interval,
)
from cosim.specification.readout_request import ReadoutRequest

# Relative accuracy of a limit.
LIMIT_ACCURACY = 1e-4
# Noise temperature in K above which none is looked for.
WARMEST = 1e5
# Most bits that are tried.
MOST_BITS = 20
# Standard deviations of the noise that the range of the converters holds beside the signal.
REACH = 4.0
# Step of the converters over the noise of a sample up to which rounding is like noise.
COARSEST = 2.0
# How often the best length is looked for again, and for what part of the error it is not.
MOST_ROUNDS = 5
FLAT = 2e-4
LABELS = {
    "noise": ("noise temperature", "K"),
    "integration": ("shortest integration", "s"),
    "bandwidth": ("bandwidth, one pole", "Hz"),
    "adc": ("bits of the converters", "1"),
}


@dataclass(frozen=True, slots=True)
class Found:
    """A chain with the limits found so far, and what it costs.

    Parameters
    ----------
    chain : ChainLimits
    error : float
        Assignment error.
    """

    chain: ChainLimits
    error: float = field(metadata={"unit": "1"})


def integration_stop(task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits) -> float:
    """Give the end of the integration: given, or that of least error, or that of the window.

    Parameters
    ----------
    task : ReadoutTask
    request : ReadoutRequest
    chain : ChainLimits
        What it is taken to be otherwise.

    Returns
    -------
    float
        In s from the start of the pulse.

    Raises
    ------
    TestbenchError
        If a given length is longer than the window.
    """
    if request.integration is None:
        return task.latest
    if request.integration.value is not None:
        stop = task.start + request.integration.value
        if stop > task.latest * (1.0 + 1e-9):
            raise TestbenchError(
                f"table [specify.integration], key 'value': the window of [readout] is only "
                f"{task.latest - task.start:g} s long"
            )
        return stop
    return best_stop(task, chain)


def with_given(task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits) -> ChainLimits:
    """Take what the testbench gives; the rest stays as it is.

    Parameters
    ----------
    task : ReadoutTask
    request : ReadoutRequest
    chain : ChainLimits

    Returns
    -------
    ChainLimits
    """
    ideal = chain
    if request.noise is not None and request.noise.value is not None:
        chain = replace(chain, noise_temperature=request.noise.value)
    if request.bandwidth is not None and request.bandwidth.value is not None:
        _check_pole(task, request.bandwidth.value)
        chain = replace(chain, bandwidth=request.bandwidth.value)
    adc = request.adc
    if adc is not None and adc.value is not None:
        chain = _with_bits(task, request, chain, adc.value)
    if chain != ideal and request.integration is not None and request.integration.value is None:
        chain = replace(chain, stop=integration_stop(task, request, chain))
    return chain


def _search_noise(
    task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits, allowed: float
) -> Found:
    free = request.integration is not None and request.integration.value is None
    if free:
        # The best length grows with the noise, so that the whole window is nearer to it than that
        # of a chain without noise; about the best the error is flat.
        chain = replace(chain, stop=task.latest)
    found = _noise_at_length(task, request, chain, allowed)
    for _ in range(MOST_ROUNDS if free else 0):
        stop = best_stop(task, found.chain)
        if error_of(task, replace(found.chain, stop=stop)) > found.error * (1.0 - FLAT):
            break
        found = _noise_at_length(task, request, replace(chain, stop=stop), allowed)
    return found


def _noise_at_length(
    task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits, allowed: float
) -> Found:
    def at(temperature: float) -> Found:
        one = _ranged(task, request, replace(chain, noise_temperature=temperature))
        return Found(one, error_of(task, one))

    high = 2.0 * noise_temperature_of(1.0, task.frequency)
    while at(high).error < allowed:
        high *= 2.0
        if high > WARMEST:
            raise _no_limit("noise", allowed)
    found = brentq(lambda t: at(t).error - allowed, 0.0, high, rtol=LIMIT_ACCURACY, xtol=1e-9)
    return _just_within(at, float(found), allowed, -1.0)


def _search_integration(
    task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits, allowed: float
) -> Found:
    del request
    every = sample_interval(task, chain)
    first = math.ceil(task.start / every - 1e-6)
    last = math.floor(chain.stop / every + 1e-6)

    def at(count: float) -> Found:
        one = replace(chain, stop=every * (first + round(count)))
        return Found(one, error_of(task, one))

    # The error falls with the length up to the best, so that halving finds where it is allowed.
    low, high = 2, last - first
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if at(middle).error <= allowed else (middle, high)
    return at(high)


def _search_bandwidth(
    task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits, allowed: float
) -> Found:
    high = FASTEST_POLE / task.step

    def at(logarithm: float) -> Found:
        one = _ranged(task, request, replace(chain, bandwidth=math.exp(logarithm)))
        return Found(one, error_of(task, one))

    if at(math.log(high)).error > allowed:
        raise _no_limit("bandwidth", allowed)
    low = high
    while at(math.log(low)).error <= allowed:
        low *= 0.5
        if low * (chain.stop - task.start) < 1e-3:
            raise _no_limit("bandwidth", allowed)
    found = brentq(
        lambda z: at(z).error - allowed, math.log(low), math.log(high), xtol=LIMIT_ACCURACY
    )
    return _just_within(at, float(found), allowed, LIMIT_ACCURACY)


def _search_adc(
    task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits, allowed: float
) -> Found:
    for bits in range(1, MOST_BITS + 1):
        one = _with_bits(task, request, chain, bits)
        split = judge(task, one)
        if split.assignment_error <= allowed and split.lsb_over_sigma <= COARSEST:
            return Found(one, split.assignment_error)
    raise _no_limit("adc", allowed)


_SEARCHES: Mapping[str, Callable[[ReadoutTask, ReadoutRequest, ChainLimits, float], Found]] = (
    MappingProxyType(
        {
            "noise": _search_noise,
            "integration": _search_integration,
            "bandwidth": _search_bandwidth,
            "adc": _search_adc,
        }
    )
)


def longest_stop(task: ReadoutTask, chain: ChainLimits, target: float) -> float:
    """Find the latest end of the integration with which a target is met.

    Parameters
    ----------
    task : ReadoutTask
    chain : ChainLimits
        With which it is met.
    target : float
        Assignment error.

    Returns
    -------
    float
        In s from the start of the pulse.
    """
    every = sample_interval(task, chain)
    low, high = round(chain.stop / every), math.floor(task.latest / every + 1e-6)
    if error_of(task, replace(chain, stop=every * high)) <= target:
        return every * high
    while high - low > 1:
        middle = (low + high) // 2
        met = error_of(task, replace(chain, stop=every * middle)) <= target
        low, high = (middle, high) if met else (low, middle)
    return every * low


def search_limit(
    name: str, task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits, allowed: float
) -> Found:
    """Find the limit of one block.

    Parameters
    ----------
    name : str
        "noise", "integration", "bandwidth" or "adc".
    task : ReadoutTask
    request : ReadoutRequest
    chain : ChainLimits
        With the limits found before.
    allowed : float
        Assignment error that it may reach.

    Returns
    -------
    Found
        The chain at that limit.

    Raises
    ------
    TestbenchError
        If there is none.
    """
    return _SEARCHES[name](task, request, chain, allowed)


def _with_bits(
    task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits, bits: int
) -> ChainLimits:
    """Take converters of some bits, with the given range or one that hardly clips."""
    assert request.adc is not None  # Its bits are asked for.
    rate, given = request.adc.rate, request.adc.full_scale
    if given is not None:
        return replace(chain, adc=Adc(bits, given, rate))
    mean, sigma = at_converter(task, chain, rate)
    return replace(chain, adc=Adc(bits, 2.0 * (mean + REACH * sigma), rate))


def _ranged(task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits) -> ChainLimits:
    """Let the range of given converters follow the noise of the chain, unless it is given too."""
    if chain.adc is None:
        return chain
    return _with_bits(task, request, chain, chain.adc.bits)


def at_converter(task: ReadoutTask, chain: ChainLimits, rate: float) -> tuple[float, float]:
    """Give what comes to the converters.

    Parameters
    ----------
    task : ReadoutTask
    chain : ChainLimits
    rate : float
        Of the converters in Hz.

    Returns
    -------
    tuple of two floats
        Largest mean of a quadrature, and standard deviation of a sample of it, in V.
    """
    output = chain_output(task, chain)
    means = np.concatenate([output.records.ground, output.records.excited])
    mean = float(max(np.abs(means.real).max(), np.abs(means.imag).max()))
    # Neither bits nor range matter where nothing is rounded, but the filter of that rate does.
    detector = detector_of(task, replace(chain, adc=Adc(1, mean, rate)))
    sigmas = receive(output, detector, rounding=False).sample_sigmas
    return mean, float(sigmas.max())


def _just_within(at: Callable[[float], Found], place: float, allowed: float, step: float) -> Found:
    """Step back until the error is allowed: a root may lie a little on the wrong side."""
    found = at(place)
    for _ in range(20):
        if found.error <= allowed:
            return found
        place += step if step > 0.0 else -LIMIT_ACCURACY * place
        found = at(place)
    return found


def _no_limit(name: str, allowed: float) -> TestbenchError:
    return TestbenchError(
        f"[specify.{name}]: no {LABELS[name][0]} was found that costs no more and no less than an "
        f"error of {allowed:.3g}",
        hint="give it a 'value', or leave its table out",
    )


def _check_pole(task: ReadoutTask, bandwidth: float) -> None:
    if bandwidth > FASTEST_POLE / task.step:
        raise TestbenchError(
            f"table [specify.bandwidth], key 'value': at most {FASTEST_POLE / task.step:.4g} Hz "
            f"are followed, got {bandwidth:g} Hz",
            hint="a wider chain costs nothing here: leave the table out",
        )
