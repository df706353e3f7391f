"""Oracle: published closed forms of dispersive readout, and shots drawn sample by sample."""

import itertools
import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from scipy.constants import Boltzmann, Planck
from scipy.special import erfc

import cosim
from cosim.dsp.detection.shots import record_shots
from cosim.errors import TestbenchError
from cosim.specification.readout_formulas import (
    bits_for_noise,
    snr_for_error,
    steady_added_quanta,
)
from cosim.specification.readout_model import (
    ChainLimits,
    ReadoutTask,
    chain_output,
    detector_of,
    error_of,
    judge,
    make_task,
    steady_rate,
)
from cosim.specification.readout_result import ReadoutSpecification
from cosim.specification.readout_specification import readout_tables, specify_readout
from cosim.testbench import DesignBench
from tests import sources
from tests.validation import Validate

TOPIC = "readout"
FREQUENCY = 6e9
RESONATOR: dict[str, Any] = {
    "geometry": "reflection",
    "frequency": "6 GHz",
    "kappa_in": "5 MHz",
    "chi": "-1 MHz",
    "photons": 5.0,
    "start": "0 ns",
    "length": "400 ns",
}
READOUT: dict[str, Any] = {
    "window": ["0 ns", "400 ns"],
    "weights": "boxcar",
    "gain": "80 dB",
    "shots": 200_000,
    "records": 4000,
}


def bench(
    blocks: dict[str, Any],
    target: float = 0.03,
    readout: dict[str, Any] | None = None,
    resonator: dict[str, Any] | None = None,
) -> DesignBench:
    """Make a testbench of a readout without a circuit."""
    made = cosim.make_testbench(
        {
            "resonator": {**RESONATOR, **(resonator or {})},
            "readout": {**READOUT, **(readout or {})},
            "specify": {"target": target, **blocks},
        }
    )
    assert isinstance(made, DesignBench)
    return made


def task_of(made: DesignBench, rate: float | None = None) -> ReadoutTask:
    """The records of a testbench."""
    return make_task(*readout_tables(made), rate)


def quanta(n: float) -> float:
    """Noise temperature that adds so many quanta."""
    return n * Planck * FREQUENCY / Boltzmann


class TestModel:
    def test_dispersive_readout(self, validate: Validate) -> None:
        made = bench({"noise": {}})
        task = task_of(made)
        # An efficiency of 0.4 is 0.75 added quanta.
        split = judge(task, ChainLimits(quanta(0.75), task.latest))
        quantity = "specified readout: SNR of a boxcar over the ring-up, efficiency 0.4"
        # Records of samples of 1/(40 kappa/2): the mean of two ends of a sample.
        validate(quantity, sources.CLERK, 5.403141, split.snr, rel=1e-3, card="D09")
        error = split.assignment_error
        quantity = "specified readout: error of a boxcar over the ring-up"
        validate(quantity, sources.CLERK, 0.003450642, error, rel=4e-3, card="D09")
        rate = steady_rate(task, readout_tables(made)[0])
        steady = math.sqrt(0.4 * rate * 400e-9)
        quantity = "specified readout: SNR in steady state, by its formula"
        validate(quantity, sources.CLERK, 7.447507, steady, rel=1e-6, card="D09")
        assert steady_added_quanta(9.81413e-05, rate, 400e-9) == pytest.approx(0.75, rel=1e-4)

    def test_signal_over_noise_to_error(self, validate: Validate) -> None:
        for snr, error in ((4.0, 0.02275013), (6.0, 0.001349898), (8.0, 3.167124e-05)):
            found = snr_for_error(error)
            quantity = f"specified readout: SNR for an error of {error:g}"
            validate(quantity, sources.KRANTZ, snr, found, rel=1e-6, card="D11")

    def test_bits_by_the_noise_of_rounding(self) -> None:
        # A step of sqrt(12) standard deviations doubles the noise.
        assert 2 * 10 / 2 ** bits_for_noise(6.0, 1.0, 4.0) == pytest.approx(math.sqrt(12))

    def test_a_pole_passes_what_its_formula_says(self) -> None:
        made = bench({"noise": {}})
        task = task_of(made)
        slow = ChainLimits(quanta(1.0), task.latest, bandwidth=2e6)
        free = replace(slow, bandwidth=math.inf)
        # The density at the carrier stays, and at the pole it is half.
        density = chain_output(task, slow).noise.at(np.array([0.0, 2e6]))
        whole = chain_output(task, free).noise.white
        assert density[0] == pytest.approx(whole, rel=1e-9)
        # Of a filter on samples 1/(80 pi) of a turn apart, bent lines between points: 0.2 %.
        assert density[1] == pytest.approx(whole / 2, rel=1e-2)
        # The record behind the pole, in steps a hundredth as long.
        record, step = task.records.excited, task.step
        times = step * np.arange(record.size)
        fine = np.linspace(0.0, times[-1], 100 * (record.size - 1) + 1)
        held = np.interp(fine, times, record.real)
        value, decay = record[0].real, math.exp(-2 * math.pi * 2e6 * step / 100)
        for before, after in itertools.pairwise(held.tolist()):
            value = decay * value + (1 - decay) * 0.5 * (before + after)
        late = chain_output(task, slow).records.excited[-1].real
        assert late == pytest.approx(value, rel=1e-6)

    @pytest.mark.parametrize("bandwidth", [math.inf, 3e6])
    def test_the_quick_error_is_that_of_the_whole_split(self, bandwidth: float) -> None:
        made = bench({"noise": {}}, readout={"t1": "20 us", "thermal_population": 0.01})
        task = task_of(made)
        chain = ChainLimits(quanta(1.0), task.latest, bandwidth)
        assert error_of(task, chain) == pytest.approx(judge(task, chain).assignment_error, rel=1e-9)


@pytest.fixture(scope="module")
def whole() -> ReadoutSpecification:
    """All blocks of a readout with decay."""
    blocks = {"noise": {}, "integration": {}, "bandwidth": {}, "adc": {"rate": "250 MHz"}}
    readout = {"t1": "25 us", "thermal_population": 0.003, "weights": "matched"}
    return specify_readout(bench(blocks, 0.03, readout))


class TestSpecification:
    def test_noise_alone_is_its_closed_form(self) -> None:
        # SNR^2 goes with 1/(1 + 2 n), so that the limit follows from the SNR of D09.
        found = specify_readout(bench({"noise": {}}, target=0.01))
        snr = snr_for_error(0.01)
        ideal = 5.403141**2 / 0.4
        wanted = 0.5 * (ideal / snr**2 - 1)
        # 1e-3 of the SNR, twice in its square.
        assert found.block("noise").limit == pytest.approx(quanta(wanted), rel=5e-3, abs=0.0)
        assert found.assignment_error == pytest.approx(erfc(snr / math.sqrt(8)) / 2, rel=1e-3)
        # Ring-up is what the steady state leaves out.
        assert found.block("noise").formula > 1.5 * found.block("noise").limit

    @pytest.mark.full
    def test_all_at_their_limits_meet_the_target(self, whole: ReadoutSpecification) -> None:
        assert [block.name for block in whole.blocks] == [
            "noise",
            "integration",
            "bandwidth",
            "adc",
        ]
        total = whole.base_error + sum(block.share for block in whole.blocks)
        assert whole.assignment_error == pytest.approx(total, rel=1e-3, abs=0.0)
        assert whole.assignment_error <= whole.target_error
        # Whole bits are left what they take and a tenth of their part; the others share all else.
        bits = whole.block("adc").share
        left = whole.target_error - whole.base_error
        assert 0.0 <= bits <= left / 4
        part = (left - bits) / 3
        spare = 0.1 * left / 4
        for name in ("noise", "integration", "bandwidth"):
            # A length ends on a sample of 4 ns; roots are on the side of what is allowed.
            room = spare / part + (0.05 if name == "integration" else 2e-3)
            assert part * (1 - room) < whole.block(name).share < part * (1 + 1e-3)
        assert whole.assignment_error > 0.95 * whole.target_error

    def test_the_range_of_given_bits_follows_the_noise(self) -> None:
        # It holds the signal and four sigma of the chain's own noise, behind the pole that is
        # found, not that of a chain without noise and without an end.
        value = 5
        given = {"noise": {}, "bandwidth": {}, "adc": {"rate": "250 MHz", "value": value}}
        again = specify_readout(bench(given, target=0.02))
        task = task_of(bench(given, target=0.02), 250e6)
        chain = ChainLimits(quanta(1.0), task.latest, again.block("bandwidth").limit)
        records = chain_output(task, chain).records
        means = np.concatenate([records.ground, records.excited])
        mean = max(np.abs(means.real).max(), np.abs(means.imag).max())
        sigma = again.full_scale / 2**value / again.lsb_over_sigma
        assert again.full_scale == pytest.approx(2 * (mean + 4 * sigma), rel=1e-6)

    def test_shots_say_the_same(self, whole: ReadoutSpecification) -> None:
        for counts in (whole.shots, whole.records):
            away = counts.assignment_error - whole.assignment_error
            assert abs(away) < 4 * counts.standard_error

    def test_one_bit_less_is_too_few(self, whole: ReadoutSpecification) -> None:
        assert 0.5 < whole.lsb_over_sigma <= 2.0
        assert whole.clipped < 1e-4

    def test_shots_of_a_chain_made_by_hand(self) -> None:
        # The closed form with a pole, against records drawn with its noise and filtered shots.
        made = bench({"noise": {}}, readout={"t1": "20 us"})
        task = task_of(made)
        chain = ChainLimits(quanta(1.5), task.latest, 3e6)
        split = judge(task, chain)
        counts = record_shots(
            chain_output(task, chain),
            detector_of(task, chain),
            split,
            task.transitions,
            task.preparation,
            6000,
            5,
        )
        assert abs(counts.deviation(split.assignment_matrix)) < 4

    def test_given_blocks_are_kept(self) -> None:
        blocks = {
            "noise": {"value": "0.3 K"},
            "bandwidth": {},
            "adc": {"rate": "250 MHz", "value": 8},
        }
        found = specify_readout(bench(blocks, target=0.01))
        assert found.block("noise").limit == 0.3
        assert found.block("adc").limit == 8
        assert [block.given for block in found.blocks] == [False, True, True]
        assert found.assignment_error == pytest.approx(0.01, rel=1e-3)


@pytest.mark.parametrize(
    ("blocks", "target", "readout", "message"),
    [
        ({"noise": {}}, 1e-3, {"t1": "1 us"}, "through decay"),
        ({"noise": {}}, 1e-3, {"preparation_error": 0.1}, "through preparation"),
        ({"noise": {}}, 1e-6, {}, "vacuum's noise"),
        ({"noise": {"value": "50 K"}, "bandwidth": {}}, 0.01, {}, r"\[specify.noise\] takes"),
        ({"noise": {"value": "1 K"}}, 0.01, {}, "without a 'value'"),
        ({"jitter": {}}, 0.01, {}, "unknown key 'jitter'"),
        ({"adc": {"rate": "1 GHz", "value": 7.5}}, 0.01, {}, "integer"),
        ({"noise": {}}, 0.7, {}, "target"),
    ],
)
def test_what_is_refused(
    blocks: dict[str, Any], target: float, readout: dict[str, Any], message: str
) -> None:
    with pytest.raises(TestbenchError, match=message):
        specify_readout(bench(blocks, target, readout))
