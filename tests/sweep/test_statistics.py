"""Oracle: closed forms and published values of the intervals, SciPy's own, and counts by hand."""

import csv
import io
import json
import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from rich.console import Console
from scipy import stats

from cosim.errors import InputError
from cosim.result import as_plain
from cosim.sweep.csv_export import write_csv
from cosim.sweep.goal import Goal, make_goal
from cosim.sweep.intervals import clopper_pearson, make_yield, wilson
from cosim.sweep.statistics import SweepSummary, summarise
from cosim.sweep_terminal import format_input, summary_table
from cosim.terminal import CAUTION
from tests import sources
from tests.validation import Validate

TOPIC = "metrics"
F_AVG = "free_frame.average_gate_fidelity"
BAR = "free_frame.error_bar"
# What closed forms and SciPy's root finder leave to rounding.
ROUNDING = 1e-12
# Half of the last digit that the published table prints.
PRINTED = 5e-5

Table = dict[str, np.ndarray[Any, Any]]


def texts(*values: str) -> np.ndarray[Any, Any]:
    """Make a column of texts as the archive gives it."""
    return np.array(values, dtype=object)


def runs(infidelities: list[float], **more: np.ndarray[Any, Any]) -> Table:
    """Make the table of some runs; NaN stands for one that did not converge."""
    metric = np.array(infidelities)
    status = np.where(np.isnan(metric), "no convergence", "done").astype(object)
    numbers = np.arange(1, metric.size + 1)
    named = {name.replace("__", "."): values for name, values in more.items()}
    return {"id": numbers, "status": status, **named, F_AVG: 1.0 - metric, BAR: 0.0 * metric + 1e-4}


def shown(summary: SweepSummary, width: int = 120) -> str:
    """Print a summary as the terminal shows it."""
    file = io.StringIO()
    Console(width=width, file=file).print(summary_table(summary))
    return file.getvalue()


class TestIntervals:
    def test_closed_forms_at_the_ends(self, validate: Validate) -> None:
        z = float(stats.norm.ppf(0.975))
        for total in (1, 10, 1000):
            tail = 0.025 ** (1.0 / total)
            low, high = clopper_pearson(0, total)
            assert low == 0.0
            name = f"Clopper-Pearson, upper limit of 0 of {total}"
            validate(name, sources.CLOPPER_PEARSON, 1.0 - tail, high, rel=ROUNDING)
            low, high = clopper_pearson(total, total)
            assert high == 1.0
            name = f"Clopper-Pearson, lower limit of {total} of {total}"
            validate(name, sources.CLOPPER_PEARSON, tail, low, rel=ROUNDING)
            low, high = wilson(0, total)
            assert low == 0.0
            name = f"Wilson score, upper limit of 0 of {total}"
            validate(name, sources.WILSON, z * z / (total + z * z), high, rel=ROUNDING)
            assert wilson(total, total)[1] == 1.0

    def test_published_table(self, validate: Validate) -> None:
        published = {
            (81, 263): ((0.2527, 0.3676), (0.2553, 0.3662)),
            (15, 148): ((0.0578, 0.1617), (0.0624, 0.1605)),
            (0, 20): ((0.0, 0.1684), (0.0, 0.1611)),
            (1, 29): ((0.0009, 0.1776), (0.0061, 0.1718)),
        }
        for (passed, total), (exact, score) in published.items():
            for name, wanted, got in (
                ("Clopper-Pearson", exact, clopper_pearson(passed, total)),
                ("Wilson score", score, wilson(passed, total)),
            ):
                for end, expected, found in zip(("lower", "upper"), wanted, got, strict=True):
                    quantity = f"{name}, {end} limit of {passed} of {total}"
                    validate(quantity, sources.NEWCOMBE, expected, found, abs=PRINTED)

    @pytest.mark.parametrize("level", [0.5, 0.95, 0.999])
    @pytest.mark.parametrize(("passed", "total"), [(0, 7), (1, 7), (13, 24), (24, 24), (970, 1000)])
    def test_against_scipy(self, passed: int, total: int, level: float) -> None:
        trial = stats.binomtest(passed, total)
        for method, got in (
            ("exact", clopper_pearson(passed, total, level)),
            ("wilson", wilson(passed, total, level)),
        ):
            wanted = trial.proportion_ci(level, method=method)
            # SciPy finds the exact limits with a root finder that stops at 2e-12.
            assert got == pytest.approx((wanted.low, wanted.high), abs=1e-11)

    def test_coverage(self) -> None:
        """The intervals hold the true probability as often as they say."""
        total, drawn = 60, 20000
        rng = np.random.default_rng(20240)
        exact = np.array([clopper_pearson(k, total) for k in range(total + 1)])
        score = np.array([wilson(k, total) for k in range(total + 1)])
        found = []
        for truth in np.linspace(0.05, 0.95, 19):
            passed = rng.binomial(total, truth, drawn)
            covered = [
                float(np.mean((ends[passed, 0] <= truth) & (truth <= ends[passed, 1])))
                for ends in (exact, score)
            ]
            # Four standard deviations of a fraction of that many draws: 19 probabilities exceed
            # them once in a thousand seeds.
            assert covered[0] >= 0.95 - 4.0 * math.sqrt(0.95 * 0.05 / drawn)
            found.append(covered[1])
        # The score interval keeps the level on average over the probabilities, and dips below it
        # at single ones (Agresti and Coull); a point is left for these 19.
        assert np.mean(found) == pytest.approx(0.95, abs=0.01)
        assert min(found) > 0.92

    @pytest.mark.parametrize(
        ("passed", "total", "level"), [(-1, 5, 0.9), (6, 5, 0.9), (0, 0, 0.9), (1, 5, 1.0)]
    )
    def test_bad_counts(self, passed: int, total: int, level: float) -> None:
        for interval in (clopper_pearson, wilson):
            with pytest.raises(InputError, match="confidence"):
                interval(passed, total, level)

    def test_points_that_are_no_samples_have_no_interval(self) -> None:
        found = make_yield(3, 4, random=False)
        assert found is not None
        assert found.fraction == 0.75
        assert all(math.isnan(end) for end in (*found.clopper_pearson, *found.wilson))
        assert make_yield(0, 0, random=True) is None


class TestSummarise:
    def test_counts(self) -> None:
        nan = math.nan
        table = runs([1e-3, 2.85e-3, nan, 4e-3, 2.95e-3], sample=np.arange(5))
        table["status"][2] = "timeout"
        found = summarise(table, ("sample",), Goal(limit=3e-3), worst=2, planned=7)
        assert (found.planned, found.reported, found.missing) == (7, 5, 2)
        assert (found.finished, found.failed) == (4, 1)
        assert found.statuses == {"done": 4, "timeout": 1}
        assert found.limit_yield is not None
        assert found.pessimistic_yield is not None
        assert (found.limit_yield.passed, found.limit_yield.total) == (3, 4)
        assert (found.pessimistic_yield.passed, found.pessimistic_yield.total) == (3, 5)
        assert found.limit_yield.clopper_pearson == clopper_pearson(3, 4)
        assert found.pessimistic_yield.wilson == wilson(3, 5)
        # Of the error bars of 1e-4 one holds the limit, on the good side.
        assert (found.undecided, found.undecided_passed) == (1, 1)
        assert [run.id for run in found.worst] == [4, 5]
        assert found.worst[0].inputs == {"sample": 3}
        assert found.quantiles["0"] == pytest.approx(1e-3, rel=1e-9)  # 1 - F loses digits.
        assert found.quantiles["50"] == pytest.approx(2.9e-3, rel=1e-9)
        assert found.quantiles["100"] == pytest.approx(4e-3, rel=1e-9)
        values = [1e-3, 2.85e-3, 4e-3, 2.95e-3]
        assert found.mean == pytest.approx(np.mean(values), rel=1e-9)
        assert found.standard_deviation == pytest.approx(np.std(values, ddof=1), rel=1e-9)
        assert any("2 of 7 runs are still to be made" in note for note in found.notes)
        json.dumps(as_plain(found), allow_nan=False)

    def test_limit_itself_is_kept(self) -> None:
        table = {**runs([0.0, 0.0]), "leakage": np.array([2e-5, 3e-5])}
        found = summarise(table, (), make_goal("leakage", 2e-5))
        assert found.limit_yield is not None
        assert found.limit_yield.passed == 1

    def test_samples_that_recur(self) -> None:
        """Two corners share three samples, so only corners and whole samples have intervals."""
        corner = texts("slow", "slow", "slow", "fast", "fast", "fast")
        table = runs(
            [5e-3, 1e-3, 1e-3, 1e-3, 1e-3, math.nan],
            corner=corner,
            sample=np.array([0, 1, 2, 0, 1, 2]),
        )
        found = summarise(table, ("corner", "sample"), Goal(limit=3e-3))
        assert found.limit_yield is not None
        assert not found.limit_yield.random
        everywhere = found.everywhere_yield
        assert everywhere is not None
        # Sample 0 misses the limit in one corner, sample 2 has failed in the other.
        assert (everywhere.passed, everywhere.total) == (1, 3)
        assert everywhere.clopper_pearson == clopper_pearson(1, 3)
        slow, fast = found.corners
        assert (slow.name, slow.runs, slow.failed) == ("slow", 3, 0)
        assert (fast.name, fast.runs, fast.failed) == ("fast", 3, 1)
        assert slow.median == pytest.approx(1e-3, rel=1e-9)
        assert slow.worst == pytest.approx(5e-3, rel=1e-9)
        assert slow.limit_yield is not None
        assert slow.limit_yield.clopper_pearson == clopper_pearson(2, 3)
        assert any("no probability" in note for note in found.notes)

    def test_a_sample_still_to_be_run_somewhere_is_left_out(self) -> None:
        table = runs([1e-3, 1e-3, 5e-3], corner=texts("a", "a", "b"), sample=np.array([0, 1, 0]))
        found = summarise(table, ("corner", "sample"), Goal(limit=3e-3)).everywhere_yield
        assert found is not None
        assert (found.passed, found.total) == (0, 1)

    def test_a_grid_is_no_sample(self) -> None:
        table = runs([1e-3, 5e-3], netlist__temperature=np.array([4.0, 300.0]))
        found = summarise(table, ("netlist.temperature",), Goal(limit=3e-3))
        assert found.limit_yield is not None
        assert found.limit_yield.fraction == 0.5
        assert math.isnan(found.limit_yield.wilson[0])
        assert any("fraction of these points, not a probability" in note for note in found.notes)

    def test_without_limit(self) -> None:
        found = summarise(runs([1e-3, 2e-3]), (), Goal())
        assert found.limit_yield is None
        assert found.pessimistic_yield is None
        assert found.undecided == 0

    def test_one_run(self) -> None:
        table = runs([1e-3], sample=np.array([0]), qubit__detuning=np.array([5.0]))
        found = summarise(table, ("sample", "qubit.detuning"), Goal(limit=3e-3))
        assert set(found.quantiles.values()) == {found.mean}
        assert math.isnan(found.standard_deviation)
        assert found.correlations == ()
        assert "too few runs" in shown(found)

    @pytest.mark.parametrize("table", [{}, runs([]), runs([math.nan, math.nan])])
    def test_no_finished_run(self, table: Table) -> None:
        found = summarise(table, (), Goal(limit=1e-3), planned=2)
        assert found.finished == 0
        assert found.limit_yield is None
        assert found.worst == ()
        assert found.quantiles == {}
        json.dumps(as_plain(found), allow_nan=False)
        assert "no run has finished: there is nothing to summarise" in shown(found)

    def test_an_archive_without_columns_yet(self) -> None:
        found = summarise({}, ("corner", "sample"), Goal(limit=1e-3), planned=2)
        assert found.corners == ()
        assert found.missing == 2

    def test_done_without_the_number(self) -> None:
        table = {**runs([1e-3, 1e-3]), "leakage": np.array([math.nan, 1e-6])}
        found = summarise(table, (), make_goal("leakage", 1e-5))
        assert (found.finished, found.failed) == (1, 1)
        assert any("1 runs are done but have no 'leakage'" in note for note in found.notes)

    def test_without_error_bars(self) -> None:
        table = runs([1e-3, 1e-3])
        table[BAR][:] = math.nan
        found = summarise(table, (), Goal(limit=1e-3))
        assert found.undecided == 0
        assert any("have no error bars" in note for note in found.notes)

    def test_all_equal(self) -> None:
        table = runs([1e-3] * 5, sample=np.arange(5), qubit__detuning=np.arange(5.0))
        found = summarise(table, ("sample", "qubit.detuning"), Goal(limit=1e-2))
        assert found.correlations == ()
        assert any("the same in all runs" in note for note in found.notes)

    def test_a_fidelity_given_as_the_limit_is_noticed(self) -> None:
        found = summarise(runs([1e-3]), (), Goal(limit=0.999))
        assert any("is a limit of 0.001" in note for note in found.notes)


class TestBadInput:
    def test_unknown_metric(self) -> None:
        with pytest.raises(
            InputError, match=r"no column 'free_frame\.avrage_gate_fidelity'"
        ) as error:
            summarise(runs([1e-3]), (), Goal("free_frame.avrage_gate_fidelity"))
        assert f"did you mean '{F_AVG}'" in error.value.hint

    def test_metric_of_texts(self) -> None:
        with pytest.raises(InputError, match="'status' holds no numbers"):
            summarise(runs([1e-3]), (), make_goal("status"))

    def test_unknown_input(self) -> None:
        with pytest.raises(InputError, match="no column 'corner'"):
            summarise(runs([1e-3]), ("corner",), Goal())

    @pytest.mark.parametrize("limit", [math.inf, -math.inf])
    def test_limit_not_finite(self, limit: float) -> None:
        with pytest.raises(InputError, match="must be finite"):
            Goal(limit=limit)

    def test_level(self) -> None:
        with pytest.raises(InputError, match="confidence level of 95"):
            summarise(runs([1e-3], sample=np.array([0])), ("sample",), Goal(limit=1.0), level=95.0)


@pytest.mark.parametrize(
    ("column", "label", "complement", "bars"),
    [
        (F_AVG, "infidelity 1 - F_avg, free frame", True, (BAR,)),
        (
            "calibrated.process_fidelity",
            "infidelity 1 - F_pro, calibrated",
            True,
            ("calibrated.process_error_bar",),
        ),
        ("leakage", "leakage", False, ()),
        ("assignment_error", "assignment error", False, ("numerical_floor", "standard_error")),
    ],
)
def test_goals(column: str, label: str, complement: bool, bars: tuple[str, ...]) -> None:
    goal = make_goal(column, 0.5)
    assert goal == Goal(column, complement, 0.5, bars)
    assert goal.label == label


class TestTerminal:
    def test_what_it_says(self) -> None:
        table = runs(
            [1e-3, 2e-3, math.nan, 4e-3],
            corner=texts("[hot]", "[hot]", "cold", "cold"),
            sample=np.array([0, 1, 0, 1]),
            qubit__detuning=np.array([5e4, -2e5, 5e4, -2e5]),
        )
        inputs = ("corner", "sample", "qubit.detuning")
        text = shown(summarise(table, inputs, Goal(limit=3e-3), units={"qubit.detuning": "Hz"}))
        for part in (
            "infidelity 1 - F_avg, free frame",
            "4 of 4 planned runs, 3 judged, 1 failed (1 no convergence)",
            "at most 0.003",
            "2 of 3, 66.7 % of the runs, not a probability",
            "[hot]",  # Not taken for a style.
            "corner cold, sample 1, detuning -200 kHz",
            CAUTION[:40],
        ):
            assert part in text
        assert text.index("Design estimate") > text.index("note:")

    def test_an_interval(self) -> None:
        table = runs([1e-3] * 19 + [5e-3], sample=np.arange(20))
        text = shown(summarise(table, ("sample",), Goal(limit=3e-3)))
        low, high = (100 * end for end in clopper_pearson(19, 20))
        assert f"19 of 20, 95.0 %; 95 % confidence: {low:.1f} % to" in text
        assert f"to {high:.2f} % (Clopper-Pearson)" in text

    def test_a_rare_failure_is_not_rounded_away(self) -> None:
        table = runs([1e-3] * 9999 + [5e-3], sample=np.arange(10000))
        text = shown(summarise(table, ("sample",), Goal(limit=3e-3)))
        assert "9999 of 10000, 99.99" in text
        high = 100 * clopper_pearson(9999, 10000)[1]
        assert f"{high:.5f} %" in text  # 99.99975 %

    @pytest.mark.parametrize(
        ("value", "unit", "text"),
        [
            (8.4e7, "Hz/V", "84 MHz/V"),
            (2.5e5, "Hz", "250 kHz"),
            (1.1, "1", "1.1"),
            ("slow", "", "slow"),
            (math.nan, "", "-"),
            (7, "", "7"),
        ],
    )
    def test_inputs(self, value: float | str, unit: str, text: str) -> None:
        assert format_input(value, unit) == text


class TestCsv:
    def test_round_trip(self, tmp_path: Path) -> None:
        table = runs([1.0 / 3.0, math.nan], corner=texts('a "b", c', "d"))
        path = tmp_path / "table.csv"
        assert write_csv(table, {F_AVG: "1", "corner": "", "id": "1", BAR: "V"}, path) == 2
        with path.open(encoding="utf-8", newline="") as file:
            header, first, second = csv.reader(file)
        assert header == ["id", "status", "corner", F_AVG, f"{BAR} (V)"]
        assert first[2] == 'a "b", c'
        assert float(first[3]) == table[F_AVG][0]  # To the last bit.
        assert second[1:] == ["no convergence", "d", "", ""]

    def test_more_rows_than_a_block(self, tmp_path: Path) -> None:
        table = runs([1e-3] * 10000)
        assert write_csv(table, {}, tmp_path / "table.csv") == 10000
        lines = (tmp_path / "table.csv").read_text(encoding="utf-8").splitlines()
        assert [line.split(",")[0] for line in lines] == ["id", *map(str, range(1, 10001))]

    def test_empty(self, tmp_path: Path) -> None:
        assert write_csv({}, {}, tmp_path / "table.csv") == 0

    def test_no_such_folder(self, tmp_path: Path) -> None:
        with pytest.raises(InputError, match="cannot be written"):
            write_csv(runs([1e-3]), {}, tmp_path / "none" / "table.csv")


def test_the_level_is_carried() -> None:
    table = runs([1e-3, 5e-3], sample=np.arange(2))
    found = summarise(table, ("sample",), Goal(limit=3e-3), level=0.5).limit_yield
    assert found is not None
    assert found.clopper_pearson == clopper_pearson(1, 2, 0.5)
    assert replace(found, level=0.95) != found
