"""Oracles: closed forms of detuned pulses, seeded paths, and scipy's root of the closed form."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import brentq

import cosim
from cosim import archive
from cosim.drift.result import DRIFT_KINDS, DriftResult
from cosim.drift.study import run_drift
from cosim.errors import InputError
from cosim.noises import DetuningNoise
from cosim.quantum.quasistatic import gaussian_average
from tests.drift.pulses import THETA, detuned, drifting
from tests.sources import ALGEBRA
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "end to end through ngspice"
# The part of the drive that turns the other way shifts the qubit by (k A)^2/(4 f) = 7.8 kHz, which
# costs 1.3e-7 by itself and is taken off; it is worth nothing in the mean of both signs of a
# detuning. What the edges of 5 ps leave is some 1e-8.
LEFT = 3e-8


def test_a_linear_drift_of_the_detuning(tmp_path: Path, validate: Validate) -> None:
    results = [
        run_drift(drifting(tmp_path, {"key": "detuning", "rate": f"{sign}20 kHz/s"}))
        for sign in ("", "-")
    ]
    both = np.mean([result.mean - result.trimmed for result in results], axis=0)
    time = results[0].time
    np.testing.assert_allclose(both, detuned(20e3 * time), rtol=2e-3, atol=LEFT)
    at = int(np.argmin(abs(20e3 * time - 0.625e6)))
    validate(
        "1 - F_avg of a pi/2 pulse some 30 s after its detuning began to drift by 20 kHz/s",
        ALGEBRA,
        float(detuned(20e3 * time[at])),
        float(both[at]),
        rel=2e-3,
        card="A04",
    )
    assert results[0].netlist_runs == 1
    assert results[0].model_error < 1e-3
    # Without chance, all quantiles are the mean.
    np.testing.assert_allclose(results[0].high, results[0].mean, rtol=1e-9)


def test_the_carrier_drifts_the_other_way(tmp_path: Path) -> None:
    here = run_drift(drifting(tmp_path, {"key": "detuning", "rate": "20 kHz/s"}))
    # 4e-6 per s of 5 GHz.
    there = run_drift(drifting(tmp_path, {"key": "carrier", "rate": "-4e-6 /s"}))
    np.testing.assert_allclose(there.mean, here.mean, rtol=1e-9)


@pytest.fixture(scope="module")
def walk(tmp_path_factory: pytest.TempPathFactory) -> DriftResult:
    source = {"key": "detuning", "random_walk": "50 kHz/sqrt(s)"}
    folder = tmp_path_factory.mktemp("walk")
    made = drifting(folder, source, limit=2e-4, trim_duration="2 s", accuracy={"floor": True})
    return run_drift(made)


def mean_of_walk(t: float, level: float = 50e3) -> float:
    average = gaussian_average(
        lambda points: detuned(points[:, 0]), [level * math.sqrt(t)], tolerance=1e-12
    )
    return float(average.value)


def test_a_random_walk_has_the_gaussian_mean(walk: DriftResult) -> None:
    wanted = [mean_of_walk(t) for t in walk.time]
    np.testing.assert_allclose(walk.mean - walk.trimmed, wanted, rtol=3e-3, atol=LEFT)


def test_a_random_walk_has_the_mean_and_quantiles_of_seeded_paths(walk: DriftResult) -> None:
    rng = np.random.default_rng(5)
    steps = 50e3 * rng.normal(size=(40_000, 100))
    paths = np.cumsum(steps, axis=1)
    for t in (10, 100):
        at = int(np.argmin(abs(walk.time - t)))
        # The curve's own time is no whole second; a walk scales with the root of the time.
        costs = detuned(paths[:, t - 1] * math.sqrt(walk.time[at] / t))
        # Four standard errors.
        assert abs(walk.mean[at] - walk.trimmed - costs.mean()) < 4 * costs.std() / 200 + LEFT
        low, median, high = np.quantile(costs, (0.05, 0.5, 0.95))
        # The 5 % quantile is as small as what the pulse itself leaves.
        assert walk.low[at] == pytest.approx(low, abs=0.1 * low + 3e-7)
        assert walk.median[at] == pytest.approx(median, rel=0.04)
        assert walk.high[at] == pytest.approx(high, rel=0.03)


def test_the_interval_is_the_root_of_the_closed_form(walk: DriftResult) -> None:
    end = brentq(lambda t: walk.trimmed + mean_of_walk(t) - 2e-4, 0.1, 100.0)
    assert walk.interval_end == pytest.approx(end, rel=2e-3)
    # x^2/3 grows with t, so that its average reaches the limit after twice the time, but for x^4.
    assert walk.interval_average == pytest.approx(2 * end, rel=0.01)
    assert walk.duty_lost_end == pytest.approx(2.0 / (2.0 + walk.interval_end), rel=1e-12)
    assert (walk.told_at, walk.dominant) == (walk.interval_end, "detuning")
    assert 0.0 < walk.numerical_floor < 1e-6
    # The window is the pulse, which is warned of; nothing else is.
    assert not [text for text in walk.warnings if "limit" in text or "sources" in text]


def test_a_drift_is_archived_and_read_back(walk: DriftResult, tmp_path: Path) -> None:
    info = archive.RunInfo("done", walk.started, walk.wall_time)
    archive.append(tmp_path / "a.h5", walk, info=info)
    again = archive.read(tmp_path / "a.h5", DRIFT_KINDS)
    assert isinstance(again, DriftResult)
    assert np.array_equal(again.mean, walk.mean)
    assert np.array_equal(again.sources[0].alone, walk.sources[0].alone)
    assert archive.read_table(tmp_path / "a.h5")["interval_end"] == [walk.interval_end]


def test_what_follows_the_temperature_moves_together(tmp_path: Path) -> None:
    result = run_drift(
        drifting(
            tmp_path,
            {"key": "temperature", "random_walk": "0.1 K/sqrt(s)", "trim_error": "0.2 K"},
            {"key": "netlist.parameters.level", "per_kelvin": "0.4 mV"},
            {"key": "detuning", "per_kelvin": "50 kHz"},
        )
    )
    (source,) = result.sources
    assert source.keys == ("netlist.parameters.level", "qubit.detuning")
    assert source.deviation == pytest.approx(math.sqrt(0.04 + 1.0), rel=1e-12)
    # Over-rotations turn about x, offsets about y and z: they add in infidelity. Of a relative
    # amplitude e it is theta^2 e^2/6; the next order is 1 % of it.
    wanted = 1.04 * (THETA * 0.004) ** 2 / 6 + float(detuned(50e3 * math.sqrt(1.04)))
    assert source.cost == pytest.approx(wanted, rel=0.02)
    assert result.right_after - result.trimmed == pytest.approx(wanted * 0.04 / 1.04, rel=0.02)
    # The level runs the circuit: the testbench, four moves, and the check.
    assert result.netlist_runs == 1 + 4 + 4
    assert result.model_error < 0.01


def test_frame_and_scale_stay_those_of_the_trim(tmp_path: Path) -> None:
    """A phase that has drifted costs, although the free frame of each gate would absorb it."""
    source = {"key": "netlist.parameters.phase", "rate": "0.02 /s"}
    for metric in ("free_frame", "calibrated"):
        result = run_drift(drifting(tmp_path, source, metric=metric))
        # phi^2/3 of a pi/2 pulse, phi = 2 degrees at the horizon.
        assert result.mean[-1] == pytest.approx(math.radians(2.0) ** 2 / 3, rel=0.01)
    level = {"key": "netlist.parameters.level", "rate": "1e-5 /s"}
    result = run_drift(drifting(tmp_path, level, metric="calibrated"))
    assert result.mean[-1] == pytest.approx((THETA * 0.01) ** 2 / 6, rel=0.01)


def test_noise_stays_what_it_is_after_the_trim(tmp_path: Path) -> None:
    """Slow noise of the same kind as the drift: variances of independent Gaussian offsets add."""
    source = {"key": "detuning", "random_walk": "30 kHz/sqrt(s)"}
    made = drifting(tmp_path, source)
    noise = DetuningNoise(acts_on="detuning", deviation=0.4e6)
    result = run_drift(replace(made, noise=(noise,)))
    alone = cosim.run(replace(made, noise=(noise,)))
    assert result.trimmed == pytest.approx(alone.as_simulated.infidelity, abs=1e-12)
    still = run_drift(made).trimmed
    spread = math.hypot(0.4e6, 30e3 * math.sqrt(100.0))
    average = gaussian_average(lambda points: detuned(points[:, 0]), [spread], tolerance=1e-12)
    # The noise is a channel before the gate as it stands: next to it the drift counts for 1 % less.
    assert result.mean[-1] - still == pytest.approx(float(average.value), rel=0.02)


def test_an_idle_qubit_loses_its_phase(tmp_path: Path, validate: Validate) -> None:
    made = drifting(
        tmp_path,
        {"key": "detuning", "rate": "10 kHz/s"},
        gate={"target": "identity"},
        # So little that it turns by 1e-6: without a carrier there would be nothing to read.
        qubit={"rabi_per_volt": "100 Hz/V"},
    )
    result = run_drift(made)
    turn = 2 * math.pi * 10e3 * result.time[-1] * 20e-9
    validate(
        "1 - F_avg of 20 ns at rest with 1 MHz of detuning",
        ALGEBRA,
        2 / 3 * math.sin(turn / 2) ** 2,
        float(result.mean[-1]),
        rel=1e-4,
        card="A16",
    )


def test_a_limit_that_the_gate_does_not_keep_is_refused_with_the_numbers(tmp_path: Path) -> None:
    source = {"key": "detuning", "rate": "1 kHz/s", "trim_error": "0.5 MHz"}
    made = drifting(tmp_path, source, limit=1e-6)
    # (0.5/12.5)^2/3 = 5.3e-4.
    with pytest.raises(InputError, match=r"below the infidelity right after a trim, 5\.3.*e-04"):
        run_drift(made)


def test_a_limit_that_is_kept_to_the_horizon_is_said(tmp_path: Path) -> None:
    source = {"key": "detuning", "rate": "1 Hz/s"}
    result = run_drift(drifting(tmp_path, source, limit=1e-3, trim_duration="1 s"))
    assert math.isinf(result.interval_end)
    assert result.duty_lost_end == 0.0
    assert any("keeps the limit 0.001 to the horizon" in text for text in result.warnings)


def test_a_drift_into_the_impossible_is_said(tmp_path: Path) -> None:
    source = {"key": "qubit.t1", "rate": "-1 us/s"}
    made = drifting(tmp_path, source, qubit={"t1": "50 us"})
    with pytest.raises(InputError, match=r"the drift of 'qubit\.t1' by -0\.0001 is impossible"):
        run_drift(made)


OFFSET = {"key": "detuning", "rate": "1 kHz/s"}


@pytest.mark.parametrize(
    ("source", "study", "message"),
    [
        ({"key": "detunning", "rate": "1 Hz/s"}, {}, "no number 'detunning'.*detuning"),
        ({"key": "qubit.t3", "rate": "1 s/s"}, {}, "no number 'qubit.t3'.*qubit.t1"),
        ({"key": "detuning"}, {}, "how does 'detuning' move"),
        ({"key": "detuning", "rate": 3.0}, {}, "'rate'.*got 3.0"),
        ({"key": "detuning", "rate": "3 Hz"}, {}, "wanted a drift per time, got '3 Hz'"),
        ({"key": "detuning", "rate": "3 /s"}, {}, "'rate'.*wanted a frequency"),
        ({"key": "detuning", "rate": "3 mV/s"}, {}, "'rate'.*wanted a frequency"),
        ({"key": "detuning", "random_walk": "3 Hz"}, {}, "per root of time"),
        ({"key": "detuning", "random_walk": "-3 Hz/sqrt(s)"}, {}, "at least zero"),
        ({"key": "detuning", "flicker": "-3 Hz^2/Hz"}, {}, "'flicker'.*at least zero"),
        ({"key": "detuning", "flicker": "3 Hz"}, {}, "a spectral density at 1 Hz"),
        ({"key": "detuning", "trim_error": "-1 Hz"}, {}, "at least zero"),
        ({"key": "detuning", "rates": "1 Hz/s"}, {}, "unknown key 'rates'.*rate"),
        ({"key": "detuning", "allan": [["pink", "1 s", 1e-9]]}, {}, "allan.*'white', 'flicker'"),
        ({"key": "detuning", "sidebands": [["1 Hz", "-60 dBc/Hz"]]}, {}, "those of the 'carrier'"),
        ({"key": "qubit.levels", "rate": "1 /s"}, {}, "'qubit.levels' has no value|integer"),
        ({"key": "detuning", "per_kelvin": "1 kHz"}, {}, "go together, and one of the two"),
        ({"key": "temperature", "rate": "1 K/s"}, {}, "go together, and one of the two"),
        ({"key": "temperature", "rate": "1 degC/s"}, {}, "difference of temperatures"),
        ({"key": "detuning", "flicker": "1 Hz^2/Hz", "low": "2 Hz"}, {}, "'high' must be above"),
        (OFFSET, {"horizon": "-1 s"}, "'horizon'.*above zero"),
        (OFFSET, {"horizon": 5}, "'horizon'"),
        (OFFSET, {"limit": -1e-3}, "'limit'.*more than 0"),
        (OFFSET, {"first": "200 s"}, "'first': must lie before the horizon"),
        (OFFSET, {"metric": "calibrate"}, "'metric'.*'calibrated'"),
    ],
)
def test_a_wrong_table_is_refused(
    source: dict[str, object], study: dict[str, object], message: str, tmp_path: Path
) -> None:
    with pytest.raises(InputError, match=f"(?s){message}"):
        run_drift(drifting(tmp_path, source, **study))


def test_sources_are_told_apart_and_needed(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="there are two sources 'detuning'"):
        run_drift(drifting(tmp_path, OFFSET, OFFSET))
    with pytest.raises(InputError, match=r"wanted tables \[\[drift\.source\]\]"):
        run_drift(drifting(tmp_path))
