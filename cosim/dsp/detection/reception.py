"""From the output of a chain to the samples that are integrated."""

import math
from dataclasses import dataclass, field
from typing import Literal

import numpy as np

from cosim.dsp.detection.converter import (
    Adc,
    clip,
    clipped_share,
    decimation,
    filter_records,
    quantisation_variance,
    sampled_lags,
)
from cosim.dsp.detection.output_noise import OutputNoise, noise_lags
from cosim.dsp.detection.records import Records
from cosim.dsp.detection.weights import Rule
from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray

# A window may begin and end this part of a sampling interval beside a sample: rounding.
_EDGE = 1e-6


@dataclass(frozen=True, slots=True)
class ChainOutput:
    """What a readout chain gives: records for each state, and noise.

    Parameters
    ----------
    records : Records
        As the chain gives them.
    noise : OutputNoise
        For state 0, and for state 1 unless `excited_noise` is given.
    excited_noise : OutputNoise or None
        For state 1, where the chain makes another noise there.
    linear : Records or None
        What a linear chain of the same small-signal response would give, on the same grid with
        the same transition times; None where the chain is linear.
    linear_noise : OutputNoise or None
        Its noise, for both states; None stands for the noise of the chain as it is.

    Raises
    ------
    InputError
        If the linear records have another grid, or noises another number of quadratures.
    """

    records: Records
    noise: OutputNoise
    excited_noise: OutputNoise | None = None
    linear: Records | None = None
    linear_noise: OutputNoise | None = None

    def __post_init__(self) -> None:
        for other in (self.excited_noise, self.linear_noise):
            if other is not None and other.quadratures != self.noise.quadratures:
                raise InputError(
                    f"chain output: wanted noises of the same number of quadratures, got "
                    f"{self.noise.quadratures} and {other.quadratures}"
                )
        if self.linear is not None and (
            self.linear.ground.size != self.records.ground.size
            or not math.isclose(self.linear.step, self.records.step, rel_tol=_EDGE)
        ):
            raise InputError(
                f"chain output: wanted linear records on the grid of the records, "
                f"{self.records.ground.size} x {self.records.step:.6g} s, got "
                f"{self.linear.ground.size} x {self.linear.step:.6g} s"
            )

    @property
    def noises(self) -> tuple[OutputNoise, OutputNoise]:
        """Noise for state 0 and for state 1."""
        return self.noise, self.noise if self.excited_noise is None else self.excited_noise

    def linearised(self) -> "ChainOutput":
        """Give the output of the linear chain.

        Returns
        -------
        ChainOutput
            The output itself where no linear records are given.
        """
        if self.linear is None:
            return self
        if self.linear_noise is None:
            return ChainOutput(self.linear, self.noise, self.excited_noise)
        return ChainOutput(self.linear, self.linear_noise)


@dataclass(frozen=True, slots=True)
class Detector:
    """How records become decisions.

    Parameters
    ----------
    weights : {"matched", "boxcar", "whitened"}
        Learned on the records without transitions: their difference, equal weights, or the
        difference with the colour of the noise taken into account.
    threshold : {"mid", "optimal"}
        Half-way between the mean values of the two states, or where fewest decisions are wrong.
    start : float
        Start of the integration in s of the records' time.
    stop : float
        Its end in s; infinite for the end of the records.
    adc : Adc or None
        None integrates the records as they are.
    prior_excited : float
        How often state 1 is prepared, for the optimal threshold; the assignment error counts
        both alike whatever it is.

    Raises
    ------
    InputError
        If a name is not known, the window is empty or the prior is not between 0 and 1.
    """

    weights: Rule = "matched"
    threshold: Literal["mid", "optimal"] = "mid"
    start: float = field(default=0.0, metadata={"unit": "s"})
    stop: float = field(default=math.inf, metadata={"unit": "s"})
    adc: Adc | None = None
    prior_excited: float = field(default=0.5, metadata={"unit": "1"})

    def __post_init__(self) -> None:
        if self.weights not in ("matched", "boxcar", "whitened"):
            raise InputError(
                f"detector: wanted 'weights' matched, boxcar or whitened, got {self.weights!r}"
            )
        if self.threshold not in ("mid", "optimal"):
            raise InputError(f"detector: wanted 'threshold' mid or optimal, got {self.threshold!r}")
        if not 0 <= self.start < self.stop:
            raise InputError(
                f"detector: wanted a window from 'start' of at least 0 s to a later 'stop', got "
                f"{self.start!r} s to {self.stop!r} s"
            )
        if not 0 < self.prior_excited < 1:
            raise InputError(
                f"detector: wanted 'prior_excited' between 0 and 1, got {self.prior_excited!r}"
            )


@dataclass(frozen=True, slots=True)
class Received:
    """Samples of a window, for each state.

    Parameters
    ----------
    start : float
        Time of the first sample in s of the records' time.
    step : float
        Sampling interval in s.
    means : ndarray of complex, shape (2, n)
        For state 0 and state 1, in V.
    transition_times : tuple of 2 ndarrays
        Times in s at which state 0 (the first) or state 1 (the second) becomes the other.
    transition_means : tuple of 2 ndarrays of complex, shape (k, n)
        The records with these, in V.
    lags : ndarray of complex, shape (2, n)
        Covariance of the noise for each state in V**2, that of the rounding included.
    quadratures : int
        1 for a single real output.
    sample_sigmas : ndarray, shape (2,)
        Standard deviation of one sample of one quadrature for each state in V, without rounding.
    lsb : float
        Step of the converter in V; 0 where nothing is rounded.
    clipped : float
        Expected share of samples outside the converter's range, the larger of the two states.
    """

    start: float = field(metadata={"unit": "s"})
    step: float = field(metadata={"unit": "s"})
    means: ComplexArray = field(metadata={"unit": "V"})
    transition_times: tuple[FloatArray, FloatArray] = field(metadata={"unit": "s"})
    transition_means: tuple[ComplexArray, ComplexArray] = field(metadata={"unit": "V"})
    lags: ComplexArray = field(metadata={"unit": "V**2"})
    quadratures: int = field(metadata={"unit": "1"})
    sample_sigmas: FloatArray = field(metadata={"unit": "V"})
    lsb: float = field(metadata={"unit": "V"})
    clipped: float = field(metadata={"unit": "1"})


def sampling_window(records: Records, detector: Detector) -> tuple[int, int, int]:
    """Give the samples of the window of a detector.

    Parameters
    ----------
    records : Records
    detector : Detector

    Returns
    -------
    every, first, count : int
        Steps of the records in a sampling interval, number of the first sample and of samples.

    Raises
    ------
    InputError
        If the window is longer than the records or holds under two samples, or the converter
        does not fit the grid.
    """
    every = 1 if detector.adc is None else decimation(detector.adc, records.step)
    step = every * records.step
    stop = records.duration if math.isinf(detector.stop) else detector.stop
    if stop > records.duration + _EDGE * step:
        raise InputError(
            f"detector: the window goes from {detector.start:.6g} s to {stop:.6g} s, but the "
            f"records end at {records.duration:.6g} s",
            hint="simulate longer or integrate for a shorter time",
        )
    first = math.ceil(detector.start / step - _EDGE)
    count = math.floor(stop / step + _EDGE) - first
    if count < 2:
        raise InputError(
            f"detector: the window from {detector.start:.6g} s to {stop:.6g} s holds {count} "
            f"samples at an interval of {step:.6g} s; at least 2 are wanted"
        )
    return every, first, count


def receive(
    output: ChainOutput,
    detector: Detector,
    *,
    rounding: bool = True,
    lags: ComplexArray | None = None,
) -> Received:
    """Filter, sample and cut out the window.

    Parameters
    ----------
    output : ChainOutput
    detector : Detector
    rounding : bool
        Whether the converter rounds and clips; the filter and the sampling stay without.
    lags : ndarray of complex, shape (2, n), or None
        The covariance without rounding, where it is known from the same noise.

    Returns
    -------
    Received

    Raises
    ------
    InputError
        As `sampling_window`, or if there is no noise.

    Notes
    -----
    Rounding is counted as white noise of lsb^2/12 in each quadrature, and clipping as what it
    does to the means (see `cosim.dsp.detection.converter`).
    """
    records, adc = output.records, detector.adc
    every, first, count = sampling_window(records, detector)
    rows = np.concatenate(
        [records.ground[None], records.excited[None], records.excitations, records.decays]
    )
    if adc is not None:
        rows = filter_records(adc, records.step, rows)
    rows = rows[:, every * first :: every][:, :count]
    if output.noise.quadratures == 1:
        rows = rows.real + 0j
    both = _covariances(output, adc, count) if lags is None else lags.copy()
    sigmas = np.sqrt(both[:, 0].real / output.noise.quadratures)
    if not sigmas.min() > 0:
        raise InputError(
            "detector: wanted noise at the chain's output, got none",
            hint="the noise of a chain is never zero: that of the vacuum arrives with the signal",
        )
    lsb, clipped = 0.0, 0.0
    if adc is not None and rounding:
        lsb = adc.lsb
        clipped = max(
            clipped_share(adc, rows[s], float(sigmas[s]), output.noise.quadratures) for s in (0, 1)
        )
        rows = clip(adc, rows)
        both[:, 0] += output.noise.quadratures * quantisation_variance(lsb)
    split = 2 + records.excitation_times.size
    return Received(
        first * every * records.step,
        every * records.step,
        rows[:2],
        (records.excitation_times, records.decay_times),
        (rows[2:split], rows[split:]),
        both,
        output.noise.quadratures,
        sigmas,
        lsb,
        clipped,
    )


def _covariances(output: ChainOutput, adc: Adc | None, count: int) -> ComplexArray:
    """Covariance of the samples for each state in V**2 without rounding, shape (2, count)."""
    step = output.records.step
    distinct = output.noises if output.excited_noise is not None else output.noises[:1]
    found = [
        noise_lags(noise, step, count) if adc is None else sampled_lags(adc, noise, step, count)
        for noise in distinct
    ]
    return np.array([found[0], found[-1]])
