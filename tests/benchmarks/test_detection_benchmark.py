"""Oracle: a loop in Python over the same shots, and the closed form for the counts.

Run by name with -s; the loop is short and scaled up by its length. Times are those of one
processor.
"""

import math
import os
import random
import time
from collections.abc import Callable

import numpy as np
import pytest

from cosim.dsp.detection.assignment import AssignmentSplit, scan_integration, split_assignment
from cosim.dsp.detection.converter import Adc
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.dsp.detection.reception import ChainOutput, Detector
from cosim.dsp.detection.records import Preparation, Records, Transitions, relaxation
from cosim.dsp.detection.shots import integrated_shots, record_shots
from tests.dsp.detections import snr_for_error

SHOTS, RECORDS = 1_000_000, 20_000
STEP, COUNT = 1e-9, 1000
DURATION = STEP * COUNT
F = np.linspace(-500e6, 500e6, 401)
RATES, PREPARATION = relaxation(20e-6, 0.02), Preparation(0.02, 0.003)
LOOP = 100_000


def least(work: Callable[[], object], repeats: int) -> float:
    """The least processor time of some repeats in s."""
    times = []
    for _ in range(repeats):
        start = time.process_time()
        work()
        times.append(time.process_time() - start)
    return min(times)


def chain(noise: OutputNoise, count: int = COUNT, times: int = 15) -> ChainOutput:
    """A first-order chain behind an amplifier that saturates, with transitions both ways."""
    t = STEP * np.arange(count)
    change = count * STEP * np.arange(1, times + 1) / (times + 1)
    rate = 2 * math.pi * 2.5e6
    after = np.maximum(t - np.append(change, np.inf)[:, None], 0.0)
    up = 1 - np.exp(-rate * t) - 2 * (1 - np.exp(-rate * after))
    rows, mirrored = ((0.6 + 0.8j) * np.tanh(1.5 * x + 0.2) for x in (up, -up))
    slope = 1.5 / math.cosh(0.2) ** 2
    straight = [(0.6 + 0.8j) * (slope * x + math.tanh(0.2)) for x in (up, -up)]
    records, linear = (
        Records(STEP, b[-1], a[-1], change, a[:-1], change, b[:-1])
        for a, b in ((rows, mirrored), tuple(straight))
    )
    return ChainOutput(records, noise, linear=linear)


def coloured(level: float) -> OutputNoise:
    return OutputNoise(level / 4, F, level / (1 + ((F - 4e6) / 30e6) ** 2))


def loop(split: AssignmentSplit, rates: Transitions, preparation: Preparation, count: int) -> int:
    """The integrated shots one by one, in plain Python."""
    p = split.projection
    paths = [p.along(points).tolist() for points in p.path_points]
    sigmas, path_sigmas = p.sigmas.tolist(), p.path_sigmas.tolist()
    values, last = p.values.tolist(), p.path_times.size - 1
    leaving = (rates.up, rates.down)
    found = 0
    for prepared in (0, 1):
        wrong = preparation.wrong[prepared]
        for _ in range(count // 2):
            state = 1 - prepared if random.random() < wrong else prepared
            value, sigma = values[state], sigmas[state]
            place = random.expovariate(leaving[state]) / p.stop * last
            if place < last:
                k = int(place)
                path, width = paths[state], path_sigmas[state]
                value = path[k] + (place - k) * (path[k + 1] - path[k])
                sigma = width[k] + (place - k) * (width[k + 1] - width[k])
            found += (random.gauss(value, sigma) > split.threshold) != prepared
    return found


@pytest.fixture(autouse=True)
def one_thread() -> None:
    assert os.environ.get("OPENBLAS_NUM_THREADS") == "1", "set OPENBLAS_NUM_THREADS=1"


def test_integrated_shots() -> None:
    split = split_assignment(chain(coloured(3e-8)), Detector(), RATES, PREPARATION)
    integrated_shots(split, RATES, PREPARATION, 2, 0)  # Compiles, or loads what was compiled.
    theirs, ours = [], []
    for _ in range(4):
        theirs.append(least(lambda: loop(split, RATES, PREPARATION, LOOP), 1))
        ours.append(least(lambda: integrated_shots(split, RATES, PREPARATION, SHOTS, 1), 2))
    ratio = min(theirs) * SHOTS / LOOP / min(ours)
    print(
        f"\n{SHOTS} integrated shots: {1e3 * min(ours):.0f} ms (wanted under 500), a loop in "
        f"Python {min(theirs) * SHOTS / LOOP:.2f} s: {ratio:.0f} times faster (wanted 20)"
    )


@pytest.mark.parametrize("adc", [None, Adc(8, 40.0, 250e6)], ids=["plain", "adc"])
@pytest.mark.parametrize("noise", [OutputNoise(3e-8), coloured(3e-8)], ids=["white", "coloured"])
def test_whole_records(noise: OutputNoise, adc: Adc | None) -> None:
    output, detector = chain(noise), Detector(adc=adc)
    split = split_assignment(output, detector, RATES, PREPARATION)
    taken = least(lambda: record_shots(output, detector, split, RATES, PREPARATION, RECORDS, 2), 2)
    shots = record_shots(output, detector, split, RATES, PREPARATION, RECORDS, 2)
    print(
        f"\n{RECORDS} records of {COUNT} samples: {taken:.2f} s (wanted under 5), error "
        f"{shots.assignment_error:.5f}, closed form {split.assignment_error:.5f}, "
        f"{shots.deviation(split.assignment_matrix):+.2f} standard errors"
    )


def test_the_closed_form_and_the_scan() -> None:
    output, detector = chain(coloured(3e-8)), Detector(adc=Adc(8, 40.0, 250e6))
    split = least(lambda: split_assignment(output, detector, RATES, PREPARATION), 3)
    scan = least(lambda: scan_integration(output, detector, RATES, PREPARATION), 3)
    print(f"\nsplit {1e3 * split:.0f} ms, best integration time {1e3 * scan:.0f} ms")


def test_closed_form_and_shots() -> None:
    """The table of agreement: separation alone, and with transitions and preparation."""
    print("\n    aim   effects     closed form    10^6 shots   standard error   deviation")
    for aim in (1e-1, 3e-2, 1e-2, 3e-3, 1e-3, 3e-4, 1e-4):
        for name, share in (("noise", 1.0), ("all", 0.4)):
            # Of the aim this share is left to the noise; decay, excitation and preparation make
            # the rest.
            wanted = share * aim
            rest = (1 - share) * aim
            rates = Transitions(2 * rest / DURATION, 0.2 * rest / DURATION)
            preparation = Preparation(0.3 * rest, 0.2 * rest)
            level = _level(wanted)
            split = split_assignment(chain(OutputNoise(level)), Detector(), rates, preparation)
            shots = integrated_shots(split, rates, preparation, SHOTS, 7)
            deviation = shots.deviation(split.assignment_matrix)
            print(
                f"{aim:7.0e}   {name:<8} {split.assignment_error:14.4e} "
                f"{shots.assignment_error:13.4e} {shots.standard_error:16.1e} {deviation:+11.2f}"
            )
            assert abs(deviation) < 3
            assert 0.5 * aim < split.assignment_error < 2 * aim


def _level(error: float) -> float:
    """White noise in V**2/Hz that makes a separation error with the chain that saturates."""
    sure = split_assignment(chain(OutputNoise(1e-8)), Detector(), Transitions(), Preparation())
    return 1e-8 * (sure.snr / snr_for_error(error)) ** 2
