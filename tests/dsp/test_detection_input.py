"""Oracle: the promise that wrong input gives an error that names what was wanted and got."""

import math
import pickle
from collections.abc import Callable

import numpy as np
import pytest

from cosim.dsp.detection.aftermath import decision_latency, repeat_agreement
from cosim.dsp.detection.assignment import scan_integration, split_assignment
from cosim.dsp.detection.converter import Adc
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.dsp.detection.projection import project
from cosim.dsp.detection.reception import ChainOutput, Detector, receive
from cosim.dsp.detection.records import Preparation, Records, Transitions, relaxation
from cosim.dsp.detection.shots import integrated_shots
from cosim.errors import InputError
from tests.dsp.detections import NOTHING, SURE, steady

STEADY = steady(100, 1e-9, 5.0)
ZERO = np.zeros(10, complex)
FLAT = ChainOutput(Records(1e-9, ZERO, ZERO), OutputNoise(1e-9))
BARE = ChainOutput(Records(1e-9, ZERO, ZERO + 1), OutputNoise(1e-9))
SPLIT = split_assignment(STEADY, Detector(), NOTHING, SURE)


def split(output: ChainOutput = STEADY, **detector: object) -> object:
    return split_assignment(output, Detector(**detector), NOTHING, SURE)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: Records(0.0, ZERO, ZERO), "a positive step"),
        (lambda: Records(1e-9, ZERO, ZERO[1:]), r"got shapes \(10,\) and \(9,\)"),
        (lambda: Records(1e-9, ZERO, ZERO + math.nan), "'excited' is not finite"),
        (lambda: Records(1e-9, ZERO, ZERO, np.zeros(2), np.zeros((1, 10))), r"of shape \(2, 10\)"),
        (
            lambda: Records(1e-9, ZERO, ZERO, np.array([2e-9, 1e-9]), np.zeros((2, 10))),
            "'decay_times' must rise",
        ),
        (lambda: Transitions(-1.0), "'down' at least zero"),
        (lambda: Transitions(reversion=-1.0), "'reversion' at least zero"),
        (lambda: Transitions(conversion=0.0), "a positive 'conversion'"),
        (lambda: relaxation(0.0), "a positive t1"),
        (lambda: relaxation(1.0, 1.5), "'thermal_population' between 0 and 1"),
        (lambda: Preparation(0.1, -0.1), "'error' between 0 and 1"),
        (lambda: OutputNoise(-1.0), "at least zero in V"),
        (lambda: OutputNoise(1.0, quadratures=3), "1 or 2 quadratures"),
        (lambda: OutputNoise(0.0, np.array([1.0]), np.array([1.0])), "none or at least two"),
        (lambda: OutputNoise(0.0, np.array([1.0, 1.0]), np.ones(2)), "finite and rise"),
        (lambda: OutputNoise(0.0, np.array([0.0, 1.0]), np.ones(2), 1), "must be even"),
        (lambda: Adc(0, 1.0, 1e6), "1 to 32 bits"),
        (lambda: Adc(8, -1.0, 1e6), "'full_scale'"),
        (lambda: Adc(8, 1.0, 1e6, -3.0), "'corner_frequency'"),
        (lambda: Detector(weights="best"), "'weights' matched, boxcar or whitened, got 'best'"),  # type: ignore[arg-type]
        (lambda: Detector(threshold="best"), "'threshold' mid or optimal"),  # type: ignore[arg-type]
        (lambda: Detector(start=2e-9, stop=1e-9), "a later 'stop'"),
        (lambda: Detector(prior_excited=1.0), "'prior_excited' between 0 and 1"),
        (lambda: split(stop=200e-9), "the records end at 1e-07 s"),
        (lambda: split(start=99e-9), "holds 1 samples"),
        (lambda: split(adc=Adc(8, 4.0, 300e6)), "a whole number of steps"),
        (lambda: split(adc=Adc(8, 4.0, 1e9, 6e8)), "must be below half the rate"),
        (lambda: split(FLAT), "nothing tells them apart"),
        (lambda: split(FLAT, weights="boxcar"), "integrated signals of the two states are equal"),
        (lambda: split(ChainOutput(BARE.records, OutputNoise())), "got none"),
        (lambda: ChainOutput(BARE.records, BARE.noise, OutputNoise(1.0, quadratures=1)), "2 and 1"),
        (lambda: ChainOutput(BARE.records, BARE.noise, linear=STEADY.records), "got 100 x 1e-09 s"),
        (
            lambda: split_assignment(BARE, Detector(), Transitions(1e3), SURE),
            "the records hold no 'decays' before the end of the window",
        ),
        (
            lambda: scan_integration(BARE, Detector(), Transitions(0.0, 1e3), SURE),
            "the records hold no 'excitations'",
        ),
        (lambda: project(receive(BARE, Detector()), "boxcar", 11), "wanted 1 to 10 samples"),
        (
            lambda: split_assignment(BARE, Detector(), Transitions(conversion=1e6), SURE),
            "the records hold no 'excitations'",
        ),
        (
            lambda: repeat_agreement(SPLIT, Transitions(conversion=1e6), SURE),
            "one that converts it",
        ),
        (lambda: split(steady(4097, 1e-9, 5.0), weights="whitened"), "at most 4096 samples"),
        (lambda: integrated_shots(SPLIT, NOTHING, SURE, 5, 1), "an even number"),
        (lambda: integrated_shots(SPLIT, NOTHING, SURE, 4, -1), "a seed of at least 0"),
        (lambda: repeat_agreement(SPLIT, NOTHING, SURE, -1.0), "a wait of at least zero"),
        (lambda: decision_latency(Adc(8, 1.0, 1e9), -1), "at least zero cycles"),
    ],
)
def test_wrong_input_is_named(call: Callable[[], object], words: str) -> None:
    with pytest.raises(InputError, match=words) as caught:
        call()
    assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)
