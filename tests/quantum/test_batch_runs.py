"""Oracle: the panels on the same slices, single rows to the last bit, closed forms of idle time."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cosim.quantum import batch_runs
from cosim.quantum.batch import (
    BatchControls,
    BatchDrive,
    BatchSystem,
    evolve_batch,
    propagate_batch,
)
from cosim.quantum.batch_runs import LEAST_RUN, cuts_of, group_rows
from cosim.quantum.channel import check_channel, pauli_transfer_matrix
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray

# The same examples in every run, so that a failure can be repeated; no limit on time.
PROPERTY = settings(derandomize=True, deadline=None, max_examples=50)
LOSSY = Qubit(5e9, 3, -0.3e9, 3e-6, 2e-6, 0.05)
STEP = 50e-12


def held_rate(count: int, *, pause: int = 100) -> ComplexArray:
    """A noisy rise, a constant top, no drive, a noisy end; each row of its own size, in rad/s."""
    rng = np.random.default_rng(9)
    size = 2 * np.pi * 20e6 * np.exp(0.4j) * np.linspace(0.8, 1.2, count)[:, None]
    noise = 1 + 0.1 * rng.normal(size=(count, 30))
    return np.concatenate(
        [
            size * noise[:, :20],
            np.repeat(size, 90, axis=1),
            np.zeros((count, pause)),
            size * noise[:, 20:],
        ],
        axis=1,
    )


@PROPERTY
@given(lengths=st.lists(st.integers(1, 3 * LEAST_RUN), min_size=1, max_size=8))
def test_cuts_cover_all_slices_and_keep_the_runs(lengths: list[int]) -> None:
    labels = np.repeat(np.arange(len(lengths)), lengths)
    equal = labels[1:] == labels[:-1]
    ((rows, cuts),) = group_rows(equal[None], 3)
    assert cuts == cuts_of(equal)
    assert list(rows) == [0, 1, 2]
    assert [cut[0] for cut in cuts] == [0, *(cut[1] for cut in cuts[:-1])]
    assert cuts[-1][1] == labels.size
    runs = [(begin, end) for begin, end, run in cuts if run]
    edges = np.concatenate([[0], np.cumsum(lengths)])
    wanted = [pair for pair in pairwise(edges) if np.ptp(pair) >= LEAST_RUN]
    assert runs == [(int(a), int(b)) for a, b in wanted]
    # No two neighbours that could be one.
    between = [run for _, _, run in cuts]
    assert all(a or b for a, b in pairwise(between))


class TestAgainstPanels:
    @pytest.mark.parametrize("levels", [2, 3, 6])
    @pytest.mark.parametrize("detuned", ["not", "by row", "in time"])
    def test_a_qubit(self, monkeypatch: pytest.MonkeyPatch, levels: int, detuned: str) -> None:
        qubit, rate = LOSSY.with_levels(levels), held_rate(3)
        offsets = 2e7 * np.array([-1.0, 0.3, 1.0])[:, None]
        if detuned == "in time":
            offsets = offsets * np.sin(np.arange(rate.shape[1]) / 7)
        drive = BatchDrive(STEP, rate, 0.0 if detuned == "not" else offsets)
        found = evolve_batch(qubit, drive, tolerance=1e-8)
        for channel in found.channels:
            check_channel(channel, tolerance=1e-12)  # Rounding of some products.
        monkeypatch.setattr(batch_runs, "LEAST_RUN", rate.size)
        panels = evolve_batch(qubit, drive, tolerance=1e-8).channels
        # Each within its tolerance; the loss in the runs is a thousand times that.
        assert np.abs(found.channels - panels).max() < 2e-8

    @pytest.mark.parametrize("constant", [False, True])
    def test_a_pair(self, monkeypatch: pytest.MonkeyPatch, constant: bool) -> None:
        lower = np.array([[0, 1], [0, 0]])
        first, second = np.kron(lower, np.eye(2)), np.kron(np.eye(2), lower)
        system = BatchSystem(
            2 * np.pi * 30e6 * first.T @ first,
            (first, first.T @ second + first @ second.T),
            (first * 500.0, second * 700.0, first.T @ first * 400.0),
        )
        coupling = 2 * np.pi * 3e6 * np.ones((3, 1))
        rate = held_rate(3)
        if not constant:
            coupling = coupling * (1 + 0.1 * np.sin(np.arange(rate.shape[1]) / 9))
        drive = BatchControls(STEP, (rate, coupling))
        found = evolve_batch(system, drive, tolerance=1e-9)
        single = evolve_batch(system, drive.take(2, 3), tolerance=1e-9)
        assert np.array_equal(single.channels[0], found.channels[2])
        monkeypatch.setattr(batch_runs, "LEAST_RUN", rate.size)
        panels = evolve_batch(system, drive, tolerance=1e-9).channels
        assert np.abs(found.channels - panels).max() < 2e-9  # Each within its tolerance.
        assert np.array_equal(found.channels, panels) != constant


class TestRows:
    def test_rows_cut_in_unlike_ways_keep_their_numbers(self) -> None:
        rate = held_rate(5)
        rate[1, 40] *= 1.01  # Cuts its top in two, of which one is too short.
        rate[2] = np.roll(rate[2], 13)
        rate[3] = held_rate(1, pause=100)[0] * (1 + 1e-3 * np.sin(np.arange(rate.shape[1])))
        rate[4] *= 50  # Shorter panels.
        whole = evolve_batch(LOSSY, BatchDrive(STEP, rate), workers=2).channels
        for row in range(5):
            single = evolve_batch(LOSSY, BatchDrive(STEP, rate[row])).channels[0]
            assert np.array_equal(single, whole[row])

    def test_one_rate_for_all_rows(self) -> None:
        rate, detuning = held_rate(1)[0], np.array([[-1e7], [2e7]])
        slim = evolve_batch(LOSSY, BatchDrive(STEP, rate, detuning)).channels
        full = evolve_batch(LOSSY, BatchDrive(STEP, np.array([rate, rate]), detuning)).channels
        assert np.array_equal(slim, full)

    def test_without_loss_nothing_is_joined(self) -> None:
        drive = BatchDrive(STEP, held_rate(2))
        nearly = Qubit(5e9, 3, -0.3e9, 1e4, 2e4)
        u = propagate_batch(nearly, drive).unitaries
        joined = evolve_batch(nearly, drive).channels
        product = u.conj()[:, :, None, :, None] * u[:, None, :, None, :]
        # A loss of 11 ns/10,000 s, times at most 8 for the highest level, and rounding.
        assert np.abs(joined - product.reshape(2, 9, 9)).max() < 2e-11


class TestIdle:
    def test_a_long_idle_with_a_wandering_detuning(self) -> None:
        # 20 us in slices of 50 ps: the phase is the integral of the detuning, the rest is the loss.
        samples = 400_000
        qubit = Qubit(5e9, 2, t1=30e-6, t2=20e-6)
        wander = 2 * np.pi * 50e3 * np.cumsum(np.random.default_rng(1).normal(size=samples)) / 300
        found = evolve_batch(qubit, BatchDrive(STEP, np.zeros(samples), wander))
        ptm = pauli_transfer_matrix(found.channels[0])
        time, phase = samples * STEP, float(wander.sum()) * STEP
        assert found.step_error == 0.0
        kept = np.exp(-time / 20e-6)
        # Rounding of a sum of 400,000 angles.
        assert ptm[1, 1] == pytest.approx(kept * np.cos(phase), abs=1e-11)
        assert abs(ptm[2, 1]) == pytest.approx(kept * abs(np.sin(phase)), abs=1e-11)
        assert ptm[3, 3] == pytest.approx(np.exp(-time / 30e-6), abs=1e-12)
        assert abs(phase) > 1.0

    def test_the_order_of_idle_and_pulse_counts(self) -> None:
        # T1 during a pause after a pi pulse is seen, before it is not.
        qubit = Qubit(5e9, 2, t1=2e-6, t2=4e-6)
        pulse, pause = np.full(10, np.pi / (10 * STEP)), np.zeros(2000)
        excited = []
        for parts in ((pulse, pause), (pause, pulse)):
            channel = evolve_batch(qubit, BatchDrive(STEP, np.concatenate(parts))).channels[0]
            excited.append(float(channel[3, 0].real))
        # The pulse of 0.5 ns loses 1.25e-4 at the most itself.
        assert excited[0] == pytest.approx(np.exp(-2000 * STEP / 2e-6), abs=1.3e-4)
        assert excited[1] == pytest.approx(1.0, abs=1.3e-4)
