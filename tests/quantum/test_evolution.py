"""Oracle: composition of windows, batches against single runs, the step estimate, error texts."""

import numpy as np
import pytest

from cosim.errors import InputError, WaveformError
from cosim.quantum.channel import check_channel, unitary_superoperator
from cosim.quantum.evolution import (
    DriveSpline,
    evolve,
    propagate_unitary,
    run_plan,
    step_error,
)
from cosim.quantum.qubit import Qubit
from cosim.quantum.steps import plan_steps
from tests.quantum.drives import CARRIER, constant, smooth_burst, square_burst

LOSSY = Qubit(CARRIER, 3, -0.3e9, 10e-6, 10e-6, 0.05)
DRIVE = smooth_burst(100e6, 10e-9)


class TestEvolve:
    def test_windows_compose_also_within_a_knot_interval(self) -> None:
        cut = 0.5 * (DRIVE.t[2000] + DRIVE.t[2001]) + 0.13e-12
        whole = evolve(LOSSY, DRIVE, 0.0, 10e-9)
        parts = evolve(LOSSY, DRIVE, cut, 10e-9) @ evolve(LOSSY, DRIVE, 0.0, cut)
        # Two evolutions of the kernel, each with an error below 1e-10.
        assert np.abs(parts - whole).max() < 1e-9

    def test_a_window_within_one_knot_interval(self) -> None:
        first, middle = DRIVE.t[2000] + 0.2e-12, DRIVE.t[2000] + 0.9e-12
        last = DRIVE.t[2001] - 0.1e-12
        parts = evolve(LOSSY, DRIVE, middle, last) @ evolve(LOSSY, DRIVE, first, middle)
        # Rounding: the steps are so short that their errors vanish.
        assert np.abs(parts - evolve(LOSSY, DRIVE, first, last)).max() < 1e-13

    @pytest.mark.parametrize("levels", [2, 3])
    def test_batch_equals_single_runs(self, levels: int) -> None:
        qubit = LOSSY.with_levels(levels)
        scales = np.array([0.8, 1.0, 1.25])
        batch = evolve(qubit, DRIVE, 0.0, 10e-9, scale=scales)
        single = [evolve(qubit, DRIVE, 0.0, 10e-9, scale=float(value)) for value in scales]
        assert batch.shape == (3, levels**2, levels**2)
        # The batch takes the steps of its largest scale, so up to the kernel's own error.
        assert np.abs(batch - np.array(single)).max() < 1e-10

    @pytest.mark.parametrize("levels", [2, 3])
    @pytest.mark.parametrize("lossless", [False, True])
    def test_scale_multiplies_the_drive(self, levels: int, lossless: bool) -> None:
        qubit = Qubit(CARRIER, levels, -0.3e9) if lossless else LOSSY.with_levels(levels)
        half = DriveSpline(DRIVE.t, DRIVE.c / 2)
        scaled = evolve(qubit, DRIVE, 0.0, 10e-9, scale=0.5)
        # Equal but for rounding; the unscaled drive gives another channel.
        assert np.abs(scaled - evolve(qubit, half, 0.0, 10e-9)).max() < 1e-12
        assert np.abs(scaled - evolve(qubit, DRIVE, 0.0, 10e-9)).max() > 0.1

    def test_lossless_path_joins_the_lossy_one(self) -> None:
        nearly = Qubit(CARRIER, 3, -0.3e9, 1e3, 2e3)
        lossless = Qubit(CARRIER, 3, -0.3e9)
        difference = evolve(nearly, DRIVE, 0.0, 10e-9) - evolve(lossless, DRIVE, 0.0, 10e-9)
        # A loss of 10 ns/1000 s is 1e-11; the rest is rounding.
        assert np.abs(difference).max() < 1e-10

    @pytest.mark.parametrize("levels", [2, 3, 6])
    def test_is_a_physical_channel(self, levels: int) -> None:
        qubit = LOSSY.with_levels(levels)
        check = check_channel(evolve(qubit, DRIVE, 0.0, 10e-9), tolerance=1e-11)
        assert check.trace_error < 1e-11  # Rounding of some thousand products.

    def test_a_long_piece_is_cut(self) -> None:
        drive = constant(2 * np.pi * 50e6, 0.0, 3e-9)
        coarse = evolve(LOSSY, drive, 0.0, 3e-9)
        t = np.linspace(0.0, 3e-9, 3001)
        c = np.vstack([np.zeros((3, 3000)), np.full(3000, 2 * np.pi * 50e6)])
        # The same function on 1 ps pieces; both within the kernel's error.
        assert np.abs(coarse - evolve(LOSSY, DriveSpline(t, c), 0.0, 3e-9)).max() < 1e-9


class TestPropagateUnitary:
    @pytest.mark.parametrize("levels", [2, 4])
    def test_is_unitary_and_agrees_with_evolve(self, levels: int) -> None:
        qubit = Qubit(CARRIER, levels, -0.3e9)
        u = propagate_unitary(qubit, DRIVE, 0.0, 10e-9)
        # Rounding of 5000 products.
        assert np.abs(u.conj().T @ u - np.eye(levels)).max() < 1e-11
        assert np.abs(unitary_superoperator(u) - evolve(qubit, DRIVE, 0.0, 10e-9)).max() < 1e-11

    def test_ignores_loss_and_takes_batches(self) -> None:
        lossless = Qubit(CARRIER, 3, -0.3e9)
        batch = propagate_unitary(LOSSY, DRIVE, 0.0, 10e-9, scale=np.array([1.0, 0.0]))
        single = propagate_unitary(lossless, DRIVE, 0.0, 10e-9)
        assert np.abs(batch[0] - single).max() < 1e-14  # The same steps.
        phase = np.exp(2j * np.pi * 0.3e9 * 10e-9)
        # Without a drive only |2> turns; rounding.
        assert np.abs(batch[1] - np.diag([1, 1, phase])).max() < 1e-11


class TestStepError:
    @pytest.mark.parametrize("levels", [2, 3, pytest.param(6, marks=pytest.mark.full)])
    @pytest.mark.parametrize("square", [False, True])
    def test_is_below_the_promise_in_hard_cases(self, levels: int, square: bool) -> None:
        drive = square_burst(100e6, 20e-9, 2e-12) if square else smooth_burst(100e6, 20e-9)
        error = step_error(LOSSY.with_levels(levels), drive, drive.t[0], drive.t[-1])
        # The promise is 1e-9 in the channel; not zero, else the estimate would be blind.
        assert 0 < error < 1e-9

    def test_estimates_the_true_error(self) -> None:
        qubit = LOSSY.with_levels(2)
        coarse = plan_steps(qubit, DRIVE, 0.0, 10e-9)
        exact = run_plan(qubit, DRIVE, plan_steps(qubit, DRIVE, 0.0, 10e-9, refine=8))
        true = float(np.abs(run_plan(qubit, DRIVE, coarse) - exact).max())
        # The longer steps' error dominates the difference by 16 or more; rounding may add some.
        assert step_error(qubit, DRIVE, 0.0, 10e-9) == pytest.approx(true, rel=0.2, abs=1e-12)


class TestPlanSteps:
    def test_dissipation_adds_up_to_the_window_on_an_uneven_grid(self) -> None:
        rng = np.random.default_rng(5)
        t = np.concatenate([[0.0], np.cumsum(rng.uniform(0.1e-12, 6e-12, 999))])
        drive = DriveSpline(t, np.ones((4, 999)))
        plan = plan_steps(LOSSY, drive, t[3] + 0.05e-12, t[-1])
        # Rounding.
        assert plan.kick.sum() == pytest.approx(t[-1] - t[3] - 0.05e-12, rel=1e-12)
        assert plan.length.sum() == pytest.approx(t[-1] - t[3] - 0.05e-12, rel=1e-12)
        assert (plan.begin >= t[plan.piece] * (1 - 1e-12)).all()
        assert (plan.begin + plan.length <= t[plan.piece + 1] * (1 + 1e-12)).all()

    def test_a_grid_of_80_per_period_is_kept(self) -> None:
        assert plan_steps(Qubit(CARRIER), DRIVE, 0.0, 10e-9).begin.size == DRIVE.t.size - 1


class TestErrors:
    @pytest.mark.parametrize(("start", "stop"), [(-1e-9, 5e-9), (5e-9, 11e-9)])
    def test_a_window_outside_the_drive(self, start: float, stop: float) -> None:
        with pytest.raises(WaveformError, match="known only from 0 s to 1e-08 s"):
            evolve(LOSSY, DRIVE, start, stop)

    @pytest.mark.parametrize(("start", "stop"), [(5e-9, 5e-9), (6e-9, 5e-9), (np.nan, 1e-9)])
    def test_an_empty_window(self, start: float, stop: float) -> None:
        with pytest.raises(InputError, match="start < stop"):
            evolve(LOSSY, DRIVE, start, stop)

    @pytest.mark.parametrize("scale", [np.nan, np.ones((2, 2)), np.array([])])
    def test_a_bad_scale(self, scale: float) -> None:
        with pytest.raises(InputError, match="drive scale"):
            evolve(LOSSY, DRIVE, 0.0, 1e-9, scale=scale)

    def test_bad_drives(self) -> None:
        t = np.array([0.0, 1e-9, 2e-9])
        with pytest.raises(WaveformError, match=r"\(3,\) and \(3, 2\)"):
            DriveSpline(t, np.zeros((3, 2)))
        with pytest.raises(WaveformError, match="piece 1 of 2"):
            DriveSpline(t, np.array([[0, np.nan]] * 4))
        with pytest.raises(WaveformError, match="knot 2 is at 1e-09 s"):
            DriveSpline(np.array([0.0, 1e-9, 1e-9]), np.zeros((4, 2)))
        with pytest.raises(WaveformError, match="knot 1 of 2"):
            DriveSpline(np.array([0.0, np.inf]), np.zeros((4, 1)))

    def test_bad_step_settings(self) -> None:
        with pytest.raises(InputError, match="refine"):
            plan_steps(LOSSY, DRIVE, 0.0, 1e-9, refine=0)
