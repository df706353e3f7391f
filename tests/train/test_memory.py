"""Oracle: error vectors made from histories by hand, with a memory of known length."""

import numpy as np
import pytest

from cosim.dsp.trains import random_bits
from cosim.train.memory import find_memory, history_of, memory_floor

BITS = tuple(map(float, random_bits(60, 11)))


def remembering(weights: tuple[float, ...]) -> np.ndarray:
    """Vectors to which the slot before adds weights[0], and so on; pulses differ from rest."""
    padded = np.concatenate((np.zeros(len(weights)), BITS))
    rows = []
    for slot in range(len(BITS)):
        past = padded[slot : slot + len(weights)][::-1]
        rows.append([BITS[slot], float(past @ np.array(weights)), 0.0])
    return np.array(rows)


@pytest.mark.parametrize("depth", [0, 1, 2, 3])
def test_depth_is_that_of_what_was_put_in(depth: int) -> None:
    weights = tuple(0.1 / 2**lag for lag in range(depth))
    found = find_memory(remembering(weights), BITS, 1e-12)
    assert found.depth == depth
    assert not found.deeper
    # The largest difference of two sums from one lag on: all of these weights.
    for lag in range(depth):
        assert found.lag_costs[lag] == pytest.approx(sum(weights[lag:]) ** 2, rel=1e-9, abs=0.0)


def test_the_floor_decides() -> None:
    found = find_memory(remembering((0.1, 0.001)), BITS, 1e-5)
    assert found.depth == 1
    assert found.lag_costs[1] == pytest.approx(1e-6)


def test_a_memory_longer_than_the_train_resolves_is_told() -> None:
    factors = (1.0, 1.0, 1.0)
    vectors = np.array([[0.0], [0.1], [0.11]])
    found = find_memory(vectors, factors, 1e-9)
    assert found.depth == 2
    assert found.deeper
    assert found.lag_costs == pytest.approx([0.11**2, 0.01**2])


def test_what_a_shorter_step_changes_alike_is_no_memory() -> None:
    first = remembering((0.1,))
    assert memory_floor(first, first + 0.3, BITS) == pytest.approx(1e-14)
    moved = first.copy()
    moved[7, 2] += 1e-4
    # One of some 30 slots of its kind: twice the distance from their mean, and twice that again.
    assert memory_floor(first, moved, BITS) == pytest.approx((4e-4) ** 2, rel=0.1)
    assert memory_floor(first, None, BITS) == pytest.approx(1e-14)


def test_histories_are_written_with_the_latest_last() -> None:
    assert history_of((1.0, 0.0, 1.0, 1.0), 3, 2) == "01"
    assert history_of((1.0, 0.0, 1.0, 1.0), 1, 3) == "001"
    assert history_of((1.0, -0.5, 1.0), 2, 2) == "1, -0.5"
    assert history_of((1.0, 1.0), 0, 0) == "-"
