"""Oracle: sums of exponentials with known constants, and seeded noise of known size."""

import numpy as np
import pytest

from cosim.dsp.settling import fit_memory, fit_tail
from cosim.errors import WaveformError

T = np.linspace(0.0, 300e-9, 240)


def test_two_time_constants_are_found() -> None:
    values = np.column_stack(
        (
            0.2 + 0.5 * np.exp(-T / 8e-9) - 0.1 * np.exp(-T / 90e-9),
            -0.3 * np.exp(-T / 8e-9) + 0.02 * np.exp(-T / 90e-9),
        )
    )
    found = fit_tail(T, values)
    # The search of the logarithms ends within 1e-6.
    assert found.time_constants == pytest.approx([8e-9, 90e-9], rel=1e-4, abs=0.0)
    assert found.amplitudes == pytest.approx(np.array([[0.5, -0.3], [-0.1, 0.02]]), abs=1e-4)
    assert found.offset == pytest.approx([0.2, 0.0], abs=1e-4)
    assert found.residual < 1e-5 * found.spread


def test_one_time_constant_is_not_taken_for_two() -> None:
    noise = np.random.default_rng(2).normal(scale=1e-4, size=T.size)
    found = fit_tail(T, (1.0 - 0.04 * np.exp(-T / 41.6e-9) + noise)[:, None])
    assert found.time_constants.size == 1
    # The noise of 1e-4 on 240 samples of an amplitude of 0.04 leaves about 1 %.
    assert found.time_constants[0] == pytest.approx(41.6e-9, rel=0.03, abs=0.0)
    assert found.residual == pytest.approx(1e-4, rel=0.2)


def test_nothing_is_fitted_to_noise() -> None:
    noise = np.random.default_rng(4).normal(size=(T.size, 1))
    assert fit_tail(T, noise).time_constants.size == 0
    assert fit_tail(T, 1e-9 * noise, floor=1e-7).time_constants.size == 0
    with pytest.raises(WaveformError, match="at least six samples, got 4"):
        fit_tail(T[:4], noise[:4])


def test_a_constant_longer_than_the_record_stands_at_the_end_of_the_search() -> None:
    found = fit_tail(T, (T / T[-1])[:, None])
    assert found.time_constants[-1] == pytest.approx(found.longest)
    assert found.longest == pytest.approx(5.0 * 300e-9)


def test_what_pulses_leave_is_found_from_any_pattern() -> None:
    factors = np.random.default_rng(7).integers(0, 2, size=60).astype(float)
    spacing, tau = 50e-9, 170e-9
    chosen = np.flatnonzero(factors)
    left = [
        sum(f * np.exp(-(n - m) * spacing / tau) for m, f in enumerate(factors[:n])) for n in chosen
    ]
    found = fit_memory(factors, spacing, chosen, 0.3 - 0.02 * np.array(left)[:, None], floor=0.0)
    assert found.time_constants == pytest.approx([tau], rel=1e-4, abs=0.0)
    assert found.amplitudes == pytest.approx(np.array([[-0.02]]), rel=1e-4)
    assert found.offset == pytest.approx([0.3], abs=1e-6)
