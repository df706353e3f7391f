"""Oracle: the analytic derivative of an RC low-pass, a linear model, SciPy's rank correlation."""

import math
from typing import Any

import numpy as np
import pytest
from scipy import stats

from cosim.sweep.correlation import Correlation
from cosim.sweep.goal import Goal, make_goal
from cosim.sweep.statistics import SweepSummary, summarise
from tests import sources
from tests.validation import Validate

TOPIC = "signal"
SETTLING = "settling_error"
R, C = "netlist.parameters.r", "netlist.parameters.c"
NOMINAL = {R: 50.0, C: 2e-12}
T = 0.6e-9
BAR = 1e-6

Table = dict[str, np.ndarray[Any, Any]]


def settling(values: dict[str, float]) -> float:
    """Give what a step through a low-pass is short of its end after a time T: exp(-T/RC)."""
    return math.exp(-T / (values[R] * values[C]))


def third_derivative(values: dict[str, float], key: str) -> float:
    """Give f''' of exp(-a/x) by the number x, a = T x/(R C).

    f''' = (a^3/x^6 - 6 a^2/x^5 + 6 a/x^4) f, by differentiating three times.
    """
    x = values[key]
    a = T * x / (values[R] * values[C])
    return (a**3 / x**6 - 6.0 * a**2 / x**5 + 6.0 * a / x**4) * settling(values)


def moved_one_at_a_time(
    relative: float, corners: dict[str, float], metric: Any = settling
) -> Table:
    """Make the table of a sweep that moves R and C at corners that scale R."""
    rows = []
    for corner, factor in corners.items():
        center = {**NOMINAL, R: NOMINAL[R] * factor}
        rows.append((corner, "", center))
        for key in center:
            for sign in (-1, 1):
                rows.append((corner, key, {**center, key: center[key] * (1.0 + sign * relative)}))
    return {
        "id": np.arange(1, len(rows) + 1),
        "status": np.array(["done"] * len(rows), dtype=object),
        "corner": np.array([row[0] for row in rows], dtype=object),
        "perturbed": np.array([row[1] for row in rows], dtype=object),
        R: np.array([row[2][R] for row in rows]),
        C: np.array([row[2][C] for row in rows]),
        SETTLING: np.array([metric(row[2]) for row in rows]),
        "bar": np.full(len(rows), BAR),
    }


def summary_of(
    table: Table, inputs: tuple[str, ...] = ("corner", R, C, "perturbed")
) -> SweepSummary:
    return summarise(table, inputs, Goal(SETTLING, False, math.nan, ("bar",)))


class TestOneAtATime:
    def test_derivative_of_an_rc_filter(self, validate: Validate) -> None:
        relative = 0.02
        found = summary_of(moved_one_at_a_time(relative, {"slow": 1.2, "fast": 0.8}))
        assert len(found.swings) == 4
        for swing in found.swings:
            factor = {"slow": 1.2, "fast": 0.8}[str(swing.point["corner"])]
            center = {**NOMINAL, R: NOMINAL[R] * factor}
            x = center[swing.key]
            expected = settling(center) * T / (center[R] * center[C] * x)
            # A central difference of step h is off by h^2 f'''/6 somewhere within the step.
            h = relative * x
            bound = max(
                abs(third_derivative({**center, swing.key: at}, swing.key))
                for at in np.linspace(x - h, x + h, 101)
            )
            bound *= h**2 / 6.0
            # That bound is a small part of the derivative, and rounding far below it.
            assert bound < 0.01 * abs(expected)
            name = swing.key[-1].upper()
            quantity = (
                f"d exp(-T/RC)/d{name} by a central difference of 2 %, {swing.point['corner']}"
            )
            unit = {"R": "1/ohm", "C": "1/F"}[name]
            validate(quantity, sources.CIRCUITS, expected, swing.derivative, unit, abs=bound)

    def test_error_falls_with_the_square_of_the_step(self) -> None:
        errors = []
        for relative in (0.02, 0.01):
            swings = summary_of(moved_one_at_a_time(relative, {"": 1.0})).swings
            (swing,) = (item for item in swings if item.key == R)
            exact = settling(NOMINAL) * T / (NOMINAL[R] * NOMINAL[C] * NOMINAL[R])
            errors.append(swing.derivative - exact)
        # The next term, with the fifth derivative, is -0.2 (h/R)^2 of this one at T = 6 RC, so that
        # the ratio falls short of 4 by a part of 0.2 (4 - 1) 1e-4.
        assert errors[0] / errors[1] == pytest.approx(4.0, rel=1e-4)

    def test_ranked_over_corners(self) -> None:
        found = summary_of(moved_one_at_a_time(0.05, {"slow": 1.2, "fast": 0.8}))
        # R and C act alike; the derivative by ln R is (T/RC) exp(-T/RC), larger in the slow corner.
        assert {item.key for item in found.sensitivities} == {R, C}
        for item in found.sensitivities:
            assert item.points == 2
            assert item.largest.point == {"corner": "slow"}
            own = [swing for swing in found.swings if swing.key == item.key]
            assert item.swing == max(swing.swing for swing in own)
            assert item.derivative == pytest.approx(np.mean([swing.derivative for swing in own]))
            assert item.resolved
        sizes = [swing.swing for swing in found.swings]
        assert sizes == sorted(sizes, reverse=True)

    def test_grid_points_and_a_single_point(self) -> None:
        table = moved_one_at_a_time(0.05, {"": 1.0})
        alone = summary_of(table)
        assert alone.swings[0].point == {}
        twice = {name: np.concatenate((column, column)) for name, column in table.items()}
        twice["netlist.temperature"] = np.repeat([4.0, 300.0], len(table["id"]))
        inputs = (R, C, "perturbed", "netlist.temperature")
        points = [swing.point for swing in summary_of(twice, inputs).swings]
        assert sorted(point["netlist.temperature"] for point in points) == [4.0, 4.0, 300.0, 300.0]

    def test_corners_and_grid_points_are_told_apart(self) -> None:
        table = moved_one_at_a_time(0.05, {"slow": 1.2, "fast": 0.8})
        twice = {name: np.concatenate((column, column)) for name, column in table.items()}
        twice["netlist.temperature"] = np.repeat([4.0, 300.0], len(table["id"]))
        found = summary_of(twice, ("corner", R, C, "perturbed", "netlist.temperature"))
        assert [item.points for item in found.sensitivities] == [4, 4]
        assert len({tuple(swing.point.items()) for swing in found.swings}) == 4
        assert all(
            swing.nominal_input
            == NOMINAL[R] * {"slow": 1.2, "fast": 0.8}[str(swing.point["corner"])]
            for swing in found.swings
            if swing.key == R
        )

    def test_without_the_nominal_run(self) -> None:
        """The runs that move another number tell which side a run lies on."""
        table = moved_one_at_a_time(0.05, {"": 1.0})
        kept = np.isin(np.arange(5), (1, 3, 4))  # R at its lower value, C at both.
        found = summary_of({name: column[kept] for name, column in table.items()})
        places = {item.key: item.largest for item in found.sensitivities}
        assert places[R].low_input == pytest.approx(0.95 * NOMINAL[R])
        assert math.isnan(places[R].high_input)
        assert places[C].derivative == pytest.approx(
            (places[C].high - places[C].low) / (0.1 * NOMINAL[C])
        )

    def test_unresolved(self) -> None:
        def flat(values: dict[str, float]) -> float:
            # R moves the metric by less than the two error bars together, C by more.
            return 1e-3 + BAR * (values[R] / NOMINAL[R] - 1.0) / 0.06 + values[C] / NOMINAL[C]

        found = summary_of(moved_one_at_a_time(0.05, {"": 1.0}, flat))
        assert {item.key: item.resolved for item in found.sensitivities} == {C: True, R: False}
        assert any("not resolved" in note and note.endswith(R) for note in found.notes)

    def test_optimum(self) -> None:
        def bowl(values: dict[str, float]) -> float:
            return 1e-3 + (values[R] / NOMINAL[R] - 1.0) ** 2

        item = summary_of(moved_one_at_a_time(0.05, {"": 1.0}, bowl)).sensitivities[0]
        assert item.key == R
        # Both ends are equal, so the difference of the ends would see nothing.
        assert item.swing == pytest.approx(0.05**2, rel=1e-9)
        assert abs(item.derivative) < 1e-9
        notes = summary_of(moved_one_at_a_time(0.05, {"": 1.0}, bowl)).notes
        assert any("least value between" in note for note in notes)

    def test_failed_and_missing_runs(self) -> None:
        table = moved_one_at_a_time(0.05, {"": 1.0})
        table["status"][1] = "timeout"  # R at its lower value
        kept = np.arange(5) != 4  # C at its higher value was never made
        found = summary_of({name: column[kept] for name, column in table.items()})
        by_key = {item.key: item.largest for item in found.sensitivities}
        assert math.isnan(by_key[R].low)
        assert by_key[R].low_input == pytest.approx(0.95 * NOMINAL[R])
        assert math.isnan(by_key[R].derivative)
        assert by_key[R].swing == pytest.approx(by_key[R].high - by_key[R].nominal)
        assert math.isnan(by_key[C].high_input)
        assert by_key[C].swing == pytest.approx(by_key[C].nominal - by_key[C].low)

    def test_a_lone_run_has_no_swing(self) -> None:
        table = moved_one_at_a_time(0.05, {"": 1.0})
        found = summary_of({name: column[1:2] for name, column in table.items()})
        assert math.isnan(found.sensitivities[0].swing)
        assert found.swings == ()
        assert any("too few runs" in note for note in found.notes)


def sampled(metric: np.ndarray[Any, Any], **inputs: np.ndarray[Any, Any]) -> SweepSummary:
    """Summarise samples; a corner is a text."""
    count = metric.size
    table = {
        "id": np.arange(count),
        "status": np.array(["done"] * count, dtype=object),
        "leakage": metric,
        **inputs,
    }
    table.setdefault("sample", np.arange(count))
    return summarise(table, tuple(dict.fromkeys((*inputs, "sample"))), make_goal("leakage"))


def by_key(found: SweepSummary) -> dict[str, Correlation]:
    return {item.key: item for item in found.correlations}


class TestCorrelations:
    TOPIC = "metrics"

    def test_linear_model(self, validate: Validate) -> None:
        rng = np.random.default_rng(7)
        count = 40000
        x, y, z, noise = rng.standard_normal((4, count))
        found = sampled(3.0 * x - 2.0 * (5.0 * y) / 5.0 + 0.0 * z + noise, x=x, y=5.0 * y, z=z)
        # Var = 9 + 4 + 1: coefficients 3/sqrt(14), -2/sqrt(14), 0, and R^2 = 13/14.
        # Estimates from n samples scatter by about 1/sqrt(n); five of these.
        scatter = 5.0 / math.sqrt(count)
        items = by_key(found)
        for key, slope in {"x": 3.0, "y": -2.0, "z": 0.0}.items():
            name = f"standardised coefficient {slope:g} of a linear model"
            expected = slope / math.sqrt(14.0)
            source = sources.LINEAR_MODEL
            validate(name, source, expected, items[key].standardised, abs=scatter)
            name = f"share of the variance, coefficient {slope:g} of a linear model"
            validate(name, source, slope**2 / 14.0, items[key].share, abs=scatter)
        name = "R^2 of the fit of a linear model with noise"
        validate(name, sources.LINEAR_MODEL, 13.0 / 14.0, found.r_squared, abs=scatter)
        assert [item.key for item in found.correlations] == ["x", "y", "z"]
        assert items["x"].significant
        assert items["x"].effect == pytest.approx(3.0, rel=2.0 * scatter)

    def test_exact_linear_model(self) -> None:
        rng = np.random.default_rng(3)
        x, y = rng.standard_normal((2, 12))
        found = sampled(2.0 * x + y + 7.0, x=x, y=y)
        assert found.r_squared == pytest.approx(1.0, abs=1e-12)  # Rounding.
        total = np.std(2.0 * x + y)
        assert by_key(found)["x"].standardised == pytest.approx(2.0 * np.std(x) / total, rel=1e-12)

    def test_rank_correlation(self, validate: Validate) -> None:
        rng = np.random.default_rng(11)
        x = np.round(rng.standard_normal(300), 1)  # With ties.
        metric = np.exp(x) + 0.5 * rng.random(300)
        got = by_key(sampled(metric, x=x))["x"].spearman
        assert got == pytest.approx(stats.spearmanr(x, metric).statistic, abs=1e-12)  # Rounding.
        # Without ties rho = 1 - 6 sum d^2/(n (n^2 - 1)): places 1 2 3 4 5 against 2 1 4 3 5.
        five = by_key(sampled(np.array([2.0, 1.0, 4.0, 3.0, 5.0]), x=np.arange(5.0)))["x"].spearman
        expected = 1.0 - 6.0 * 4.0 / (5.0 * 24.0)
        name = "rank correlation of (1 2 3 4 5) and (2 1 4 3 5)"
        validate(name, sources.SPEARMAN, expected, five, rel=1e-12)

    def test_corners_are_taken_out(self) -> None:
        """A corner that shifts everything must hide nothing, and correlate with nothing."""
        rng = np.random.default_rng(5)
        x = rng.standard_normal(200)
        corner = np.repeat(np.array(["slow", "fast"], dtype=object), 200)
        metric = np.concatenate((x + 1000.0, x))
        found = sampled(metric, corner=corner, x=np.tile(x, 2), sample=np.tile(np.arange(200), 2))
        item = by_key(found)["x"]
        assert item.spearman == pytest.approx(1.0, abs=1e-12)  # Rounding.
        assert item.standardised == pytest.approx(1.0, abs=1e-9)  # 1000 costs three digits.

    def test_ranks_of_corners_of_unequal_size(self) -> None:
        """Ranks as parts of the size: two runs against each other, four along with each other."""
        corner = np.array(["a"] * 2 + ["b"] * 4, dtype=object)
        metric = np.array([1.0, 0.0, 10.0, 11.0, 12.0, 13.0])
        x = np.array([0.0, 1.0, 0.0, 1.0, 2.0, 3.0])
        # Squares of the centered ranks: 2 (1/2)^2/2^2 = 1/8 and 5/4^2 = 5/16.
        expected = (5 / 16 - 1 / 8) / (5 / 16 + 1 / 8)
        got = by_key(sampled(metric, corner=corner, x=x))["x"].spearman
        assert got == pytest.approx(expected, abs=1e-12)  # Rounding.

    def test_corners_do_not_multiply_the_samples(self) -> None:
        """What thirty samples cannot tell from chance stays so at twenty corners."""
        rng = np.random.default_rng(17)
        x, metric = rng.standard_normal((2, 30))
        alone = by_key(sampled(metric, x=x))["x"]
        corner = np.repeat([f"corner {at}" for at in range(20)], 30).astype(object)
        samples = np.tile(np.arange(30), 20)
        found = sampled(np.tile(metric, 20), corner=corner, x=np.tile(x, 20), sample=samples)
        item = by_key(found)["x"]
        assert item.spearman == pytest.approx(alone.spearman, abs=1e-12)  # Rounding.
        # 600 independent samples would tell this from chance: 2.24/sqrt(599) = 0.09.
        assert abs(item.spearman) > 0.1
        assert alone.significant is False
        assert item.significant is False

    def test_an_optimum_is_seen_by_the_share_alone(self) -> None:
        rng = np.random.default_rng(9)
        x, y = rng.standard_normal((2, 4000))
        found = sampled(x**2 + 0.1 * y, x=x, y=y)
        items = by_key(found)
        assert found.correlations[0].key == "x"
        # Var x^2 = 2, Var 0.1 y = 0.01.
        assert items["x"].share == pytest.approx(2.0 / 2.01, abs=0.01)
        assert abs(items["x"].spearman) < 0.1
        assert items["x"].significant
        assert found.r_squared < 0.1
        assert any("a linear fit explains only" in note for note in found.notes)

    def test_chance(self) -> None:
        """Of inputs that mean nothing, one in twenty seems to mean something."""
        rng = np.random.default_rng(13)
        numbers = rng.standard_normal((401, 50))
        inputs = {f"x{at}": row for at, row in enumerate(numbers[1:])}
        found = sampled(numbers[0], **inputs)
        seeming = sum(item.significant is True for item in found.correlations)
        # Each of the two tests is passed by one in forty, so that either is by 10 to 20 of 400,
        # depending on how far they agree; four standard deviations of a count are added.
        assert 10 - 4 * math.sqrt(10) < seeming < 20 + 4 * math.sqrt(20)
        assert seeming > 0
        assert found.correlations[0].significant
        assert any("too few for a linear fit" in note for note in found.notes)

    def test_a_grid_leaves_nothing_to_chance(self) -> None:
        table = {
            "id": np.arange(5),
            "status": np.array(["done"] * 5, dtype=object),
            "leakage": np.arange(5.0),
            "netlist.temperature": np.arange(5.0),
        }
        found = summarise(table, ("netlist.temperature",), make_goal("leakage"))
        assert found.correlations[0].significant is None
        assert found.correlations[0].share == pytest.approx(1.0, abs=1e-12)  # Rounding.

    def test_constant_and_twin_columns(self) -> None:
        rng = np.random.default_rng(1)
        x = rng.standard_normal(30)
        found = sampled(x, x=x, same=2.0 * x, constant=np.full(30, 1.1))
        assert {item.key for item in found.correlations} == {"x", "same"}
        assert all(math.isnan(item.standardised) for item in found.correlations)
        assert all(item.share == pytest.approx(1.0, abs=1e-12) for item in found.correlations)
        assert any("constant does not vary" in note for note in found.notes)
        assert any("vary together" in note for note in found.notes)

    def test_below_the_error_bars(self) -> None:
        rng = np.random.default_rng(2)
        x = rng.standard_normal(50)
        table = {
            "id": np.arange(50),
            "status": np.array(["done"] * 50, dtype=object),
            "leakage": 1e-3 + 1e-6 * x,
            "bar": np.full(50, 1e-4),
            "x": x,
            "sample": np.arange(50),
        }
        goal = Goal("leakage", False, math.nan, ("bar",))
        found = summarise(table, ("x", "sample"), goal)
        assert found.correlations[0].resolved is False
        assert any("not resolved" in note for note in found.notes)
