"""Oracle: what each faulty input lacks, and a shape that cannot fit."""

import math

import numpy as np
import pytest

from cosim.budget.study import budget_of, run_budget
from cosim.budget.table import budget_table
from cosim.errors import InputError, TestbenchError, WaveformError
from tests.budget.pulses import LEVEL, bench_of, budget, flat_top, item, played


def test_a_waveform_without_a_pulse() -> None:
    with pytest.raises(WaveformError, match="no pulse"):
        budget(lambda t: 0.0 * t)


def test_a_window_without_a_pulse() -> None:
    bench = bench_of(gate={"window": ["0 ns", "10 ns"]})
    with pytest.raises(WaveformError, match=r"no pulse at 5e\+09 Hz within the window"):
        budget(lambda t: LEVEL * flat_top(t), bench)


@pytest.mark.parametrize("table", [{"pulse": "drag"}, {"drag": 0.5}])
def test_a_spin_has_no_drag(table: dict[str, object]) -> None:
    with pytest.raises(TestbenchError, match=r"table \[budget\]: a DRAG quadrature") as error:
        run_budget(bench_of(budget=table))
    assert "transmon" in str(error.value)


def test_a_target_that_wants_no_pulse() -> None:
    bench = bench_of("identity")
    with pytest.raises(TestbenchError, match="'identity' wants none") as error:
        run_budget(bench)
    assert "idle" in str(error.value)
    with pytest.raises(TestbenchError, match="xy-plane, got 'z90'"):
        run_budget(bench_of("z90"))


def test_a_system_of_operators_is_refused_before_anything_runs() -> None:
    own = {"kind": "operators", "rabi_per_volt": "50 MHz/V"}
    bench = bench_of(further={"qubit": own})
    with pytest.raises(InputError, match="kind spin or transmon"):
        run_budget(bench)


@pytest.mark.parametrize(
    ("table", "message"),
    [
        ({"fidelity": "best"}, "key 'fidelity'"),
        ({"pulse": "triangle"}, "key 'pulse'"),
        ({"duration": "100 m"}, "key 'duration'"),
        ({"duration": "0 s"}, "key 'duration'"),
        ({"edge": "2 ns", "pulse": "square"}, "a square pulse has no edges of its own"),
        ({"edge": "20 ns", "duration": "10 ns"}, "at most the duration"),
        ({"pulse": "drag", "drag": 0.0}, "weight other than 0"),
        ({"misfit": 1.5}, "between 0 and 1"),
        ({"step_rat": "1 GHz"}, "unknown key 'step_rat'; did you mean 'step_rate'"),
    ],
)
def test_a_wrong_table(table: dict[str, object], message: str) -> None:
    bench = bench_of(budget=table)
    with pytest.raises(TestbenchError, match=r"table \[budget\]") as error:
        budget_table(bench)
    assert message in str(error.value)


def test_an_unknown_fidelity() -> None:
    bench = bench_of()
    with pytest.raises(InputError, match="wanted one of as_simulated, free_frame, calibrated"):
        run_budget(bench, fidelity="perfect")


def test_a_family_that_does_not_fit_is_told_with_the_number() -> None:
    run = played(lambda t: LEVEL * flat_top(t), bench_of())
    result = budget_of(run, bench_of(budget={"pulse": "gaussian"}))
    (told,) = (text for text in result.warnings if "does not fit" in text)
    # A Gaussian fitted to a square pulse misses some 13 % of its power (least squares).
    assert 0.2 < result.residual_share < 0.5
    assert f"{result.residual_share:.1%}" in told
    good = budget_of(run, bench_of(budget={"pulse": "flat-top"}))
    assert not any("does not fit" in text for text in good.warnings)


def test_a_window_that_takes_too_many_samples() -> None:
    run = played(lambda t: LEVEL * flat_top(t), bench_of())
    far = bench_of(budget={"baseband_frequency": "50 THz"})
    with pytest.raises(InputError, match="samples, more than"):
        budget_of(run, far)


def test_decoherence_alone() -> None:
    """Against T. Abad et al. (2022) to first order: a driven qubit loses as one at rest does."""
    qubit = {"t1": "50 us", "t2": "40 us"}
    result = budget(lambda t: LEVEL * flat_top(t), bench_of(qubit=qubit))
    found = item(result, "decoherence")
    gamma_phi = 1.0 / 40e-6 - 0.5 / 50e-6
    wanted = 140e-9 / 3.0 * (1.0 / 50e-6 + gamma_phi)
    # Second order: half of 5e-3.
    assert found.alone == pytest.approx(wanted, rel=5e-3)
    assert found.removed == pytest.approx(wanted, rel=5e-3)
    assert found.note == "T1 50 µs, T2 40 µs"
    assert result.items[0] is found
    assert "T1 and T2" in result.advice


def test_noise_and_neighbours_are_items() -> None:
    further = {
        "noise": [{"acts_on": "detuning", "name": "slow", "t2_star": "20 us"}],
        "spectator": [
            {
                "kind": "spin",
                "name": "beside",
                "offset": "20 MHz",
                "rabi_per_volt": "50 MHz/V",
            }
        ],
    }
    run = played(lambda t: LEVEL * flat_top(t), bench_of(further=further))
    result = budget_of(run, bench_of(further=further))
    slow = item(result, "noise: slow")
    assert run.noise is not None
    assert slow.alone == slow.removed == run.noise.sources[0].infidelity
    beside = item(result, "neighbour: beside")
    assert not beside.counted
    assert beside.removed == run.spectators[0].free_frame_infidelity
    # Without loss the ideal pulse does to it what the real one does, which here is the same pulse;
    # the full waveform adds what counter-rotates, a thousandth of the drive.
    assert beside.alone == pytest.approx(beside.removed, rel=0.02)
    assert result.items[-2] is beside
    counted = sum(found.alone for found in result.items if found.counted)
    assert math.isclose(counted + result.interaction, result.total_infidelity, rel_tol=1e-12)


def test_the_budget_of_a_calibrated_pulse_is_without_its_amplitude() -> None:
    def envelope(t: np.ndarray) -> np.ndarray:
        return 1.03 * LEVEL * flat_top(t) * np.exp(0.05j) + 0.002j * LEVEL

    run = played(envelope, bench_of())
    plain = budget_of(run, bench_of(), fidelity="as_simulated")
    tuned = budget_of(run, bench_of(), fidelity="calibrated")
    assert item(plain, "mean amplitude").alone > 1e-3
    assert abs(item(tuned, "mean amplitude").alone) < 1e-9
    assert tuned.total_infidelity == run.calibrated.infidelity
    # The run's own search goes over full waveforms: its best scale and this one are the same to
    # 1e-5 of a half turn.
    assert abs(tuned.interaction) < 1e-6
