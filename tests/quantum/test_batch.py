"""Oracle: single rows against batches, to the last bit; parts against wholes; error texts."""

import numpy as np
import pytest

from cosim.errors import InputError
from cosim.quantum import batch
from cosim.quantum.batch import BatchDrive, evolve_batch, mean_channel, propagate_batch
from cosim.quantum.batch_plan import (
    Grid,
    lay_panels,
    panel_exponents,
    qubit_sizes,
    qubit_tables,
    simpson_weights,
)
from cosim.quantum.channel import check_channel, unitary_superoperator
from cosim.quantum.kernel import IndexArray
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray, FloatArray

LOSSY = Qubit(5e9, 3, -0.3e9, 3e-6, 2e-6, 0.05)
STEP = 50e-12


def noisy_rate(count: int, samples: int, *, spread: float = 0.1) -> ComplexArray:
    """Rates of 20 MHz at slowly turning phase, with white noise, in rad/s."""
    rng = np.random.default_rng(3)
    noise = rng.normal(size=(2, count, samples)) * spread
    turn = np.exp(1j * np.linspace(0.3, 2.0, samples))
    return np.asarray(2 * np.pi * 20e6 * turn * (1 + noise[0] + 1j * noise[1]))


def smooth_rate(samples: int, *, rabi: float = 20e6) -> ComplexArray:
    """A raised cosine with a quadrature, in rad/s."""
    x = np.linspace(0, 2 * np.pi, samples)
    return np.asarray(2 * np.pi * rabi * ((1 - np.cos(x)) / 2 + 0.2j * np.sin(x)))


def lossless(levels: int) -> Qubit:
    return Qubit(5e9, levels, -0.3e9)


class TestRows:
    """Each row's numbers are its own."""

    @pytest.mark.parametrize("levels", [2, 3, 5])
    @pytest.mark.parametrize("order", [1, 4])
    def test_batch_equals_single_runs_to_the_last_bit(self, levels: int, order: int) -> None:
        rate = noisy_rate(37, 41)
        # One row far above the others, so that their steps and panels differ.
        rate[5] *= 40
        detuning = np.linspace(-3e7, 3e7, 37)[:, None]
        qubit = LOSSY.with_levels(levels)
        whole = evolve_batch(qubit, BatchDrive(STEP, rate, detuning, order)).channels
        plain = propagate_batch(qubit, BatchDrive(STEP, rate, detuning, order)).unitaries
        for row in (0, 5, 36):
            drive = BatchDrive(STEP, rate[row], float(detuning[row, 0]), order)
            assert np.array_equal(evolve_batch(qubit, drive).channels[0], whole[row])
            assert np.array_equal(propagate_batch(qubit, drive).unitaries[0], plain[row])

    def test_so_it_is_with_a_tolerance(self) -> None:
        rate = noisy_rate(5, 41) * np.array([[0.1], [1.0], [3.0], [9.0], [0.5]])
        drive = BatchDrive(20 * STEP, rate, order=4)
        whole = evolve_batch(LOSSY, drive, tolerance=1e-8).channels
        for row in range(5):
            single = evolve_batch(LOSSY, BatchDrive(20 * STEP, rate[row], order=4), tolerance=1e-8)
            assert np.array_equal(single.channels[0], whole[row])

    @pytest.mark.parametrize("workers", [2, 3])
    @pytest.mark.parametrize("order", [1, 4])
    def test_workers_and_chunks_change_no_bit(
        self, monkeypatch: pytest.MonkeyPatch, workers: int, order: int
    ) -> None:
        drive = BatchDrive(STEP, noisy_rate(50, 21), np.linspace(-1e7, 1e7, 50)[:, None], order)
        whole, mean = evolve_batch(LOSSY, drive), mean_channel(LOSSY, drive)
        monkeypatch.setattr(batch, "CHUNK_BYTES", 7 * (200 * 21 + 64 * 81))
        shared = evolve_batch(LOSSY, drive, workers=workers)
        chunked = mean_channel(LOSSY, drive, workers=workers)
        assert np.array_equal(shared.channels, whole.channels)
        assert shared.step_error == whole.step_error
        assert np.array_equal(chunked.channel, mean.channel)
        assert np.array_equal(chunked.standard_error, mean.standard_error)

    def test_detunings_broadcast(self) -> None:
        rate = noisy_rate(1, 30)[0]
        column = np.array([[1e7], [-2e7]])
        filled = np.repeat(column, 30, axis=1)
        for qubit in (LOSSY, LOSSY.with_levels(2), lossless(4)):
            slim = evolve_batch(qubit, BatchDrive(STEP, rate, column)).channels
            full = evolve_batch(qubit, BatchDrive(STEP, np.array([rate, rate]), filled)).channels
            assert np.array_equal(slim, full)
            along = evolve_batch(qubit, BatchDrive(STEP, rate, filled[0])).channels
            assert np.array_equal(along[0], full[0])

    @pytest.mark.parametrize("levels", [2, 3, 4])
    def test_a_detuning_is_a_turning_rate_in_another_frame(self, levels: int) -> None:
        # exp(-i delta t n) takes H with delta a^dag a to rate exp(-i delta t) without it.
        n, delta, fine = 4001, 2 * np.pi * 7e6, 5e-12
        t = fine * np.arange(n)
        rate = smooth_rate(n)
        detuned = propagate_batch(lossless(levels), BatchDrive(fine, rate, delta, 4)).unitaries[0]
        turned = BatchDrive(fine, rate * np.exp(-1j * delta * t), order=4)
        frame = np.exp(-1j * delta * t[-1] * np.arange(levels))
        back = frame[:, None] * propagate_batch(lossless(levels), turned).unitaries[0]
        # Both are of fourth order; 4000 steps leave rounding.
        assert np.abs(back - detuned).max() < 1e-11


class TestWholes:
    @pytest.mark.parametrize("levels", [2, 3, 6])
    def test_slices_compose(self, levels: int) -> None:
        rate = noisy_rate(2, 60)
        qubit = lossless(levels)

        def unitaries(part: ComplexArray) -> ComplexArray:
            return propagate_batch(qubit, BatchDrive(STEP, part)).unitaries

        joined = unitaries(rate[:, 23:]) @ unitaries(rate[:, :23])
        assert np.abs(joined - unitaries(rate)).max() < 1e-13  # Rounding of 60 products.

    @pytest.mark.parametrize("levels", [2, 3, 4, 6])
    def test_long_slices_equal_many_short_ones(self, levels: int) -> None:
        # A turn of 60 rad in one slice takes the other branches of the exponential.
        rate = np.array([2 * np.pi * 60e6 * np.exp(0.7j)])
        one = propagate_batch(lossless(levels), BatchDrive(160e-9, rate, 1e8)).unitaries
        many = BatchDrive(160e-9 / 4096, np.repeat(rate, 4096), 1e8)
        # Rounding of 4096 products.
        assert np.abs(one - propagate_batch(lossless(levels), many).unitaries).max() < 1e-11

    @pytest.mark.parametrize("levels", [2, 3, 5])
    def test_is_unitary_and_joins_the_lossy_path(self, levels: int) -> None:
        drive = BatchDrive(STEP, noisy_rate(2, 200))
        u = propagate_batch(LOSSY.with_levels(levels), drive).unitaries[1]
        assert np.abs(u.conj().T @ u - np.eye(levels)).max() < 1e-13  # Rounding of 200 products.
        closed = evolve_batch(lossless(levels), drive)
        assert np.abs(closed.channels[1] - unitary_superoperator(u)).max() < 1e-14
        assert closed.step_error == 0.0
        nearly = evolve_batch(Qubit(5e9, levels, -0.3e9, 1e4, 2e4), drive).channels
        # A loss of 10 ns/10,000 s, times at most 8 for the highest level, and rounding.
        assert np.abs(nearly - closed.channels).max() < 2e-11

    def test_the_mean_and_its_error_are_those_of_the_samples(self) -> None:
        drive = BatchDrive(STEP, noisy_rate(300, 20, spread=0.5))
        samples = evolve_batch(LOSSY, drive).channels
        found = mean_channel(LOSSY, drive)
        # numpy sums in another order: rounding.
        assert np.abs(found.channel - samples.mean(axis=0)).max() < 1e-14
        error = samples.std(axis=0, ddof=1) / np.sqrt(300)
        assert np.abs(found.standard_error - error).max() < 1e-15
        assert found.count == 300
        assert error.max() > 5e-4

    def test_portions_of_samples_change_no_bit(self) -> None:
        rate = noisy_rate(70, 20)
        whole = mean_channel(LOSSY, BatchDrive(STEP, rate))
        cuts = np.split(rate, [1, 18, 40])
        found = mean_channel(LOSSY, (BatchDrive(STEP, part) for part in cuts))
        assert np.array_equal(found.channel, whole.channel)
        assert np.array_equal(found.standard_error, whole.standard_error)
        assert (found.count, found.step_error) == (whole.count, whole.step_error)

    def test_equal_samples_have_an_error_of_rounding(self) -> None:
        rate = np.repeat(noisy_rate(1, 30), 50, axis=0)
        assert mean_channel(LOSSY, BatchDrive(STEP, rate)).standard_error.max() < 1e-15

    def test_one_sample_has_no_error(self) -> None:
        assert np.isnan(
            mean_channel(LOSSY, BatchDrive(STEP, noisy_rate(1, 9))).standard_error
        ).all()


class TestStepError:
    @pytest.mark.parametrize("levels", [2, 3, 4])
    @pytest.mark.parametrize("order", [1, 4])
    def test_estimates_the_true_error(self, levels: int, order: int) -> None:
        samples = 61
        qubit = LOSSY.with_levels(levels)
        rate = smooth_rate(samples)
        drive = BatchDrive(0.6e-9 if order == 1 else 0.2e-9, rate, order=order)
        found = evolve_batch(qubit, drive)
        exact = evolve_batch(qubit, drive, tolerance=1e-11).channels
        true = float(np.abs(found.channels - exact).max())
        # Fourth order: halving takes all but a sixteenth, with next orders beside it.
        assert found.step_error == pytest.approx(true, rel=0.3)
        assert true > 1e-11  # Above rounding, else nothing was compared.

    @pytest.mark.parametrize("t1", [30e-6, 3e-6, 0.3e-6])
    def test_sees_what_happens_within_slices(self, t1: float) -> None:
        # Panels over several slices agree with one another, and are all wrong by as much.
        qubit = Qubit(5e9, 2, t1=t1, t2=0.7 * t1)
        drive = BatchDrive(1e-10, smooth_rate(1000, rabi=10e6))
        found = evolve_batch(qubit, drive)
        exact = evolve_batch(qubit, drive, tolerance=3e-11).channels
        true = float(np.abs(found.channels - exact).max())
        # Where the second order in the dissipator leads, halving takes three quarters only.
        assert 0.7 * true < found.step_error < 1.3 * true
        assert found.step_error < 1e-7

    @pytest.mark.parametrize("order", [1, 4])
    def test_a_tolerance_is_met(self, order: int) -> None:
        drive = BatchDrive(1e-9, smooth_rate(31) * np.array([[1.0], [3.0]]), order=order)
        exact = evolve_batch(LOSSY, drive, tolerance=1e-10).channels
        for tolerance in (1e-5, 1e-8):
            found = evolve_batch(LOSSY, drive, tolerance=tolerance)
            assert 0 < found.step_error <= tolerance
            assert np.abs(found.channels - exact).max() < tolerance

    def test_without_one_the_samples_set_the_steps(self) -> None:
        drive = BatchDrive(1e-9, smooth_rate(31) * 3, order=4)
        assert propagate_batch(lossless(3), drive).step_error > 1e-5

    @pytest.mark.parametrize("levels", [2, 3, 4])
    @pytest.mark.parametrize("spread", [0.0, 0.02, 0.3])
    def test_panels_keep_the_promise(self, levels: int, spread: float) -> None:
        # 100 ns with rather short lifetimes, and noise on each slice.
        qubit = Qubit(5e9, levels, -0.3e9, 20e-6, 15e-6, 0.02)
        found = evolve_batch(qubit, BatchDrive(100e-12, noisy_rate(1, 1000, spread=spread)))
        assert 0 < found.step_error < 1e-7


class TestPanels:
    @pytest.mark.parametrize("half", [1, 2, 4, 16])
    def test_weights_integrate_cubics(self, half: int) -> None:
        for count in range(2, 40):
            weights = simpson_weights(count, half)
            x = np.arange(count + 1.0)
            # Rounding; Simpson's rules are exact for cubics.
            assert weights @ x**3 == pytest.approx(count**4 / 4, rel=1e-13)
            assert weights.sum() == pytest.approx(count, rel=1e-14)
            assert (weights >= 0).all()

    def test_panels_shrink_with_the_drive_and_with_noise(self) -> None:
        two = Qubit(5e9, t1=30e-6, t2=20e-6)
        calm = noisy_rate(1, 200, spread=0.0)
        rates = np.concatenate([calm, 10 * calm, noisy_rate(1, 200, spread=1.0)])

        def chosen(rates: ComplexArray, grid: Grid) -> IndexArray:
            return panel_exponents(qubit_sizes(two, rates, np.zeros((1, 1))), grid)

        exponents = chosen(rates, Grid(STEP, 200, 1))
        assert exponents[0] > exponents[1]
        assert exponents[0] > exponents[2]
        # Within a step of order 4 no panel begins.
        assert chosen(10 * calm[:, :199], Grid(20 * STEP, 199, 4))[0] == 0

    def test_dissipation_adds_up_to_the_evolution(self) -> None:
        qubit = LOSSY.with_levels(2)
        for order, exponent in ((1, -2), (1, 0), (1, 3), (4, 0), (4, 2)):
            grid = Grid(STEP, 101, order)
            panels = lay_panels(grid, exponent, 0, qubit.gamma_1)
            # A coherence decays exponentially, so that the tables' logarithms give their times.
            times = -np.log1p(qubit_tables(qubit, panels.times)[:, 0, 1, 0]) * qubit.t2
            total = times[panels.kick[panels.kick >= 0]].sum()
            assert total == pytest.approx(grid.duration, rel=1e-11)  # Rounding of small logs.


class TestErrors:
    def test_bad_drives(self) -> None:
        good = noisy_rate(3, 7)
        for step in (0.0, -1e-9, np.nan, np.inf):
            with pytest.raises(InputError, match="step > 0"):
                BatchDrive(step, good)
        for order in (0, 2, 3):
            with pytest.raises(InputError, match="order 1 or 4"):
                BatchDrive(STEP, good, order=order)
        for shape in ((), (0,), (3, 0), (2, 3, 4)):
            with pytest.raises(InputError, match="rate of shape"):
                BatchDrive(STEP, np.ones(shape, dtype=complex))
        for wrong in ((3,), (2, 1), (3, 6), (1, 6)):
            with pytest.raises(InputError, match=r"of the rate, \(3, 7\)"):
                BatchDrive(STEP, good, np.zeros(wrong))
        with pytest.raises(InputError, match="real detuning"):
            BatchDrive(STEP, good, 1j * np.zeros(7))
        for samples in (3, 6):
            with pytest.raises(InputError, match="odd number of samples"):
                BatchDrive(STEP, good[:, :samples], order=4)

    def test_numbers_that_are_not_finite_are_named(self) -> None:
        rate: ComplexArray = noisy_rate(3, 7)
        detuning: FloatArray = np.zeros((3, 7))
        rate[2, 4] = np.nan
        with pytest.raises(InputError, match="rate is not finite in row 2, sample 4"):
            BatchDrive(STEP, rate)
        detuning[1, 6] = np.inf
        with pytest.raises(InputError, match="detuning is not finite in row 1, sample 6"):
            BatchDrive(STEP, noisy_rate(3, 7), detuning)

    def test_bad_requests(self) -> None:
        drive = BatchDrive(STEP, noisy_rate(2, 7))
        with pytest.raises(InputError, match="2 to 6 levels, got 7"):
            evolve_batch(LOSSY.with_levels(7), drive)
        for tolerance in (0.0, 1e-12, 1.0, -1e-6, np.nan):
            with pytest.raises(InputError, match="where rounding begins"):
                propagate_batch(LOSSY, drive, tolerance=tolerance)
        with pytest.raises(InputError, match="workers"):
            evolve_batch(LOSSY, drive, workers=0)
        with pytest.raises(InputError, match="at least one sample"):
            mean_channel(LOSSY, [])

    def test_steps_in_the_wrong_unit(self) -> None:
        rate = noisy_rate(2, 7)
        with pytest.raises(InputError, match=r"the rate comes up to (.|\n)* check their units"):
            BatchDrive(50.0, rate)
        with pytest.raises(InputError, match="the detuning comes up to"):
            BatchDrive(STEP, rate, -1e18)
        still = BatchDrive(1.0, np.zeros(3, dtype=complex))
        with pytest.raises(InputError, match="anharmonic levels turn by"):
            evolve_batch(lossless(3), still)
        with pytest.raises(
            InputError, match=r"would be cut into .* loss of up to 1e\+12 per second"
        ):
            evolve_batch(Qubit(5e9, t1=1e-12, t2=1e-12), BatchDrive(1e-3, rate))

    def test_a_tolerance_out_of_reach(self) -> None:
        # Steps of 4 us under 30 MHz: even their 256th part is a turn of 3 rad.
        drive = BatchDrive(2e-6, smooth_rate(5, rabi=30e6), order=4)
        with pytest.raises(InputError, match="after 8 halvings of the steps 1 of 1 rows"):
            propagate_batch(lossless(2), drive, tolerance=1e-10)


def test_channels_are_physical() -> None:
    found = evolve_batch(LOSSY.with_levels(4), BatchDrive(STEP, noisy_rate(40, 50))).channels
    for channel in found:
        check_channel(channel, tolerance=1e-12)  # Rounding of 50 products.
