"""Oracle: closed forms of the sampled signals, scipy's own cubic spline, and the theory of
spline interpolation (C. de Boor, "A Practical Guide to Splines", 1978)."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import CubicSpline

from cosim.dsp.resampling import coarsest_step, interpolant, resample
from cosim.errors import WaveformError
from cosim.waveform import FloatArray, Waveform
from tests.dsp.signals import CARRIER, STEP, simulator_grid, trapezoid, trapezoid_corners


class TestInterpolant:
    def test_smooth_grid_equals_library_spline(self) -> None:
        rng = np.random.default_rng(5)
        t = np.cumsum(rng.uniform(0.8, 1.2, 300)) * STEP
        v = rng.standard_normal(300)
        ours, library = interpolant(Waveform(t, v)), CubicSpline(t, v)
        x = np.linspace(t[0], t[-1], 5000)
        # The same equations, solved in another order: rounding only.
        assert np.abs(ours(x) - library(x)).max() < 1e-12

    @pytest.mark.parametrize("count", [2, 3, 4, 5])
    def test_few_samples_reproduce_polynomial(self, count: int) -> None:
        t = np.array([0.0, 1.0, 2.5, 3.0, 4.2])[:count] * 1e-12
        x = np.linspace(0, t[-1], 50)
        degree = min(count - 1, 3)
        exact = (x / 1e-12) ** degree
        # A polynomial of that degree lies in the space of the spline: rounding only.
        assert interpolant(Waveform(t, (t / 1e-12) ** degree))(x) == pytest.approx(exact, abs=1e-11)

    # The step in front of the first corner, as a part of the fixed step.
    @pytest.mark.parametrize("part", [0.0063, 0.03, 0.0659, 0.09, 0.4, 0.999])
    def test_corner_does_not_ring(self, part: float) -> None:
        stop = 4.3e-9
        start = float(simulator_grid(np.empty(0), 1.03e-9)[-2]) + part * STEP
        t = simulator_grid(trapezoid_corners(start, stop), stop)
        curve = interpolant(Waveform(t, trapezoid(t, start)))
        x = np.linspace(0, 4e-9, 200_001)
        error = np.abs(curve(x) - trapezoid(x, start))
        plain = np.abs(CubicSpline(t, trapezoid(t, start))(x) - trapezoid(x, start))
        # Pieces of straight lines between corners on the grid, which a cut spline reproduces;
        # 1e-25 s of rounding in the times are 1e-14 of a rise.  One spline is off by 2e-2.
        assert error.max() < 1e-11
        assert plain.max() > 1e-2

    def test_cut_costs_little_on_smooth_signal(self) -> None:
        t = simulator_grid(np.arange(0.1e-9, 3.9e-9, 0.0401e-9), 4e-9)
        curve = interpolant(Waveform(t, np.sin(2 * np.pi * CARRIER * t)))
        x = np.linspace(0, 4e-9, 100_001)
        # (omega h)^4/384 = 1e-7 for one spline; the free ends of the pieces cost some times more.
        assert np.abs(curve(x) - np.sin(2 * np.pi * CARRIER * x)).max() < 1.5e-6

    @pytest.mark.parametrize("jump", [0.0, 0.5])
    def test_nearly_equal_times(self, jump: float) -> None:
        t = np.arange(400) * STEP
        late = np.sort(np.concatenate((t, t[100:110] + 1e-18)))
        v = np.sin(2 * np.pi * CARRIER * late) + jump * (late > t[104])
        curve = interpolant(Waveform(late, v))
        x = np.linspace(0, t[-1], 20_001)
        # A spline beside a jump overshoots by 13 % of it; without one nothing may be seen.
        assert np.abs(curve(x)).max() < 1.000001 + 1.15 * jump
        assert np.isfinite(curve.c).all()

    def test_record_keeps_its_end(self) -> None:
        t = np.append(np.arange(100) * STEP, 99 * STEP + 1e-18)
        curve = interpolant(Waveform(t, np.ones(101)))
        assert curve.x[-1] == t[-1]


class TestResample:
    @pytest.mark.parametrize("samples", [20, 40, 80])
    @pytest.mark.parametrize("kind", ["sine", "gaussian", "square", "corner", "ramp", "switched"])
    def test_stated_error_covers_true_error(self, kind: str, samples: int) -> None:
        def signal(t: FloatArray, switch: float) -> FloatArray:
            wave = np.sin(2 * np.pi * CARRIER * t)
            return {
                "sine": wave,
                "gaussian": wave * np.exp(-(((t - 5e-9) / 1e-9) ** 2)),
                "square": np.tanh(5 * wave),
                "corner": np.abs(wave),
                "ramp": np.clip((t - switch) / 30e-12, 0, 1),
                "switched": np.where(t < switch, 0.0, np.sin(2 * np.pi * CARRIER * (t - switch))),
            }[kind]

        h = 1 / CARRIER / samples
        t = np.arange(0, 10e-9, h * 1.0007)
        # The place of a switch between two samples decides how large the error is.
        for switch in 4.9e-9 + h * np.linspace(0.05, 0.95, 7):
            result = resample(Waveform(t, signal(t, switch)), h / 7.3)
            error = np.abs(result.waveform.v - signal(result.waveform.t, switch)).max()
            # Both ways: a bound that is a hundred times too large says nothing.
            assert error <= result.interpolation_error <= 100 * error

    def test_stated_error_on_restarting_grid(self) -> None:
        t = simulator_grid(np.arange(0.1e-9, 3.9e-9, 0.0401e-9), 4e-9)
        result = resample(Waveform(t, np.sin(2 * np.pi * CARRIER * t)), STEP / 7.3)
        error = np.abs(result.waveform.v - np.sin(2 * np.pi * CARRIER * result.waveform.t)).max()
        # As above; the signal is smooth, so the bound may be tight.
        assert error <= result.interpolation_error <= 10 * error

    def test_stated_error_falls_with_fourth_power(self) -> None:
        def stated(samples: int) -> float:
            t = np.arange(0, 10e-9, 1 / CARRIER / samples)
            v = np.sin(2 * np.pi * CARRIER * t)
            return resample(Waveform(t, v), 1e-12, start=4e-9, stop=6e-9).interpolation_error

        # Order four of the cubic spline: 16 times less for half the step. Away from the ends
        # and at 80 samples the next order is (omega h)^2 = 0.6 % times the weight 20.
        assert stated(80) / stated(160) == pytest.approx(16, rel=0.12)

    def test_alias_bound(self) -> None:
        t = np.arange(0, 40e-9, 2e-12)
        low, high = 3e9, 26e9
        v = np.sin(2 * np.pi * low * t) + 0.01 * np.sin(2 * np.pi * high * t)
        # 20 ps: half the new rate is 25 GHz, so only the small tone is lost.  The faded ends
        # leave a little of the large one.
        lost = resample(Waveform(t, v), 20e-12).alias_bound
        assert lost == pytest.approx(0.01, rel=0.05)
        kept = resample(Waveform(t, v), 10e-12).alias_bound
        assert kept < 1e-4

    def test_window(self) -> None:
        t = np.arange(0, 10e-9, 2e-12)
        result = resample(Waveform(t, t / 1e-9), 0.3e-9, start=1e-9, stop=2.2e-9)
        assert result.waveform.t == pytest.approx([1e-9, 1.3e-9, 1.6e-9, 1.9e-9, 2.2e-9])
        assert result.waveform.v == pytest.approx([1.0, 1.3, 1.6, 1.9, 2.2])

    @pytest.mark.parametrize(
        ("step", "start", "stop", "words"),
        [
            (0.0, None, None, "positive"),
            (1e-12, -1e-9, None, "leaves the record"),
            (1e-12, None, 2e-8, "leaves the record"),
            (2e-9, 1e-9, 2e-9, "fewer than two"),
        ],
    )
    def test_errors(self, step: float, start: float | None, stop: float | None, words: str) -> None:
        t = np.arange(0, 10e-9, 2e-12)
        with pytest.raises(WaveformError, match=words):
            resample(Waveform(t, np.sin(t / 1e-10)), step, start=start, stop=stop)

    @settings(derandomize=True, deadline=None, max_examples=30)
    @given(
        a=st.floats(-10, 10),
        b=st.floats(-10, 10),
        seed=st.integers(0, 1000),
        shift=st.floats(-1e-6, 1e-6),
    )
    def test_linear_and_shift_invariant(self, a: float, b: float, seed: int, shift: float) -> None:
        rng = np.random.default_rng(seed)
        t = simulator_grid(np.sort(rng.uniform(0.1e-9, 0.9e-9, 3)), 1e-9)
        one, two = rng.standard_normal((2, t.size))
        x = np.linspace(1e-12, 0.999e-9, 300)
        mixed = interpolant(Waveform(t, a * one + b * two))(x)
        parts = a * interpolant(Waveform(t, one))(x) + b * interpolant(Waveform(t, two))(x)
        scale = 1e3 * (abs(a) + abs(b)) + 1e-300
        # White noise on steps that differ a hundredfold makes coefficients of up to 1e3 of it.
        assert np.abs(mixed - parts).max() <= 1e-11 * scale
        smooth = np.sin(2 * np.pi * CARRIER * t)
        moved = interpolant(Waveform(t + shift, smooth))(x + shift)
        # Times near 1 us are rounded to 2e-22 s, which is 1e-8 of the smallest step.
        assert np.abs(moved - interpolant(Waveform(t, smooth))(x)).max() < 1e-7


def test_coarsest_step_ignores_quiet_part() -> None:
    t = np.concatenate((np.arange(0, 1e-9, 1e-10), np.arange(1e-9, 2e-9, 2e-12)))
    v = np.where(t < 1e-9, 0.0, np.sin(2 * np.pi * CARRIER * (t - 1e-9)))
    assert coarsest_step(Waveform(t, v)) == pytest.approx(2e-12)
