"""Oracle: the definitions of L(f), Allan deviation and fractional frequency, worked out by hand."""

from pathlib import Path

import pytest

from cosim.drift.structure import Flicker, RandomWalk, White
from cosim.drift.table import Process, read_drift
from tests.drift.pulses import drifting

CARRIER = 5e9


def process(folder: Path, **study: object) -> Process:
    source = {"key": "carrier", **{k: v for k, v in study.items() if k != "trim_duration"}}
    rest = {k: v for k, v in study.items() if k == "trim_duration"}
    _, _, (found,) = read_drift(drifting(folder, source, **rest), None, CARRIER)
    return found


def test_the_carriers_sidebands_are_noise_of_its_frequency(tmp_path: Path) -> None:
    # L = 1e-6/f^2, S_phi = 2 L, and f^2 of that in Hz^2/Hz: white, up to 1 Hz by default.
    found = process(tmp_path, sidebands=[["1 Hz", "-60 dBc/Hz"], ["10 Hz", "-80 dBc/Hz"]])
    for t in (0.2, 30.0):
        wanted = White(2e-6, 1.0).structure(t)
        # Below a millionth of 1/t nothing counts of white noise.
        assert found.motion.deviation(t) ** 2 == pytest.approx(wanted, rel=1e-5, abs=0.0)
    # An oscillator that is high is a qubit that is low.
    assert [factor for _, _, factor in found.moves] == [-1.0]


def test_allan_deviations_and_aging_are_parts_of_the_carrier(tmp_path: Path) -> None:
    found = process(
        tmp_path,
        rate="1e-9 /day",
        allan=[["white", "1 s", 1e-10], ["random walk", "1000 s", 1e-10]],
        trim_duration="2 s",
    )
    assert found.motion.rate == pytest.approx(CARRIER * 1e-9 / 86400.0, rel=1e-12)
    white, walk = found.motion.fluctuations
    # sigma^2 = h0/(2 tau), with the band of what the trim averages.
    assert white == White(pytest.approx(2 * 0.5**2, rel=1e-12), 0.5)
    assert walk == RandomWalk(pytest.approx(0.5 * (3 / 1000) ** 0.5, rel=1e-12))


def test_bands_are_those_of_the_source(tmp_path: Path) -> None:
    found = process(tmp_path, flicker="2 Hz/sqrt(Hz)", low="1 mHz", high="50 Hz")
    (noise,) = found.motion.fluctuations
    assert noise == Flicker(4.0, 1e-3, 50.0)
    # 1e-10 of the carrier, per root of a hertz.
    (noise,) = process(tmp_path, flicker="1e-20 1/Hz").motion.fluctuations
    assert noise == Flicker(pytest.approx(0.25, rel=1e-12), 0.0, 1.0)
