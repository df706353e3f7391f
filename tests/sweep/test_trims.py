"""Oracle: a gain that varies from die to die, whose best level is known; runs made alone."""

import json
import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import cosim
from cosim import archive
from cosim.calibration.trim import calibrate, trimmed
from cosim.errors import CosimError, TestbenchError
from cosim.probe_run import Estimate
from cosim.sweep import estimate, work
from cosim.sweep.goal import make_goal
from cosim.sweep.local import local_engine
from cosim.sweep.plan import SweepPlan
from cosim.sweep.planned_run import SweepRun
from cosim.sweep.planning import make_sweep
from cosim.sweep.record import SWEEP_KINDS, FailedRun
from cosim.sweep.repetition import repeat_sample, rerun
from cosim.sweep.run import run_sweep
from cosim.sweep.trim_comparison import compare_trims, runs_of_trim
from cosim.sweep.trims import Trim
from cosim.sweep_show import show_sweep
from cosim.testbench import Testbench, load_testbench
from cosim.trim_terminal import trim_parts
from tests.sweep.benches import HERE, differing, rows, write_bench
from tests.sweep.readout_benches import ADC, swept_bench

# A burst of 20 ns at 5 GHz along x, of an amplitude of level gain vdd in volts.
DECK = """a burst of a carrier
.param level=0.12 gain=1 vdd=1 fail=1000
.tran 5p 24n
b1 out 0 v={level*gain*vdd}*cos(6.283185307179586*5g*time)*(time>2n && time<22n ? 1 : 0)
r1 out 0 50
b2 mark 0 v=ln({fail}-time*1g)
r2 mark 0 1k
.end
"""
# k A T = 1/4 at 100 MHz/V, 0.125 V and 20 ns.
BEST = 0.125
# An edge lies anywhere within a time step of 10 ps, which is 5e-4 of the pulse.
COARSE = 5e-4
KNOB = """[calibrate]
metric = "as_simulated"
[[calibrate.knob]]
key = "netlist.parameters.level"
low = 0.09
high = 0.16
"""
SWEEP = """[sweep]
fidelity = "as_simulated"
limit = 1e-4
keep = 1
"""
AT = "trim_at = { netlist.parameters.vdd = 0.95 }\n"
GRID = """[[sweep.grid]]
key = "netlist.parameters.vdd"
values = [0.95, 1.0]
"""
DIES = """[sweep.monte_carlo]
runs = 2
seed = 4
[[sweep.monte_carlo.vary]]
key = "netlist.parameters.gain"
distribution = "normal"
sigma = 0.05
"""
LEVEL, GAIN, VDD = (f"netlist.parameters.{name}" for name in ("level", "gain", "vdd"))
FIDELITY = "as_simulated.average_gate_fidelity"


def bench_of(folder: Path, mode: str = "both", at: str = AT, more: str = GRID + DIES) -> Path:
    """Write the testbench, of two dies at two supplies unless told otherwise."""
    text = f'{KNOB}{SWEEP}trim = "{mode}"\n{at}{more}'
    return write_bench(folder, text, deck=DECK)


def plan_of(folder: Path, *words: str) -> SweepPlan:
    return make_sweep(load_testbench(bench_of(folder, *words)))


def with_tables(folder: Path, change: dict[str, dict[str, Any]]) -> Testbench:
    """The same testbench with keys of its tables replaced, or removed where they are None."""
    bench = load_testbench(bench_of(folder))
    tables = dict(bench.studies)
    for name, keys in change.items():
        merged = {**tables.get(name, {}), **keys}
        tables[name] = {key: value for key, value in merged.items() if value is not None}
    assert isinstance(bench, Testbench)
    return replace(bench, studies={name: table for name, table in tables.items() if table})


@pytest.fixture(scope="module")
def swept(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("trimmed")
    state = run_sweep(bench_of(folder), folder / "a.h5", engine=HERE)
    assert (state.planned, state.finished, state.failed) == (8, 8, {})
    return folder


class TestPlan:
    def test_trims_are_the_slowest_axis_and_a_column(self, tmp_path: Path) -> None:
        plan = plan_of(tmp_path)
        assert plan.columns == ("trim", VDD, GAIN, "sample")
        assert [run.trim for run in plan] == ["frozen"] * 4 + ["each"] * 4
        runs = list(plan)
        for one, other in zip(runs[:4], runs[4:], strict=True):
            assert {**one.values, "trim": ""} == {**other.values, "trim": ""}
        assert len({run.identity for run in runs}) == 8
        # One frozen trim for all; of the dies each has one for its two supplies.
        assert len({run.trim_key for run in runs[:4]}) == 1
        assert [run.trim_key for run in runs[4:6]] == [run.trim_key for run in runs[6:]]
        assert len({run.trim_key for run in runs}) == 3

    def test_a_die_is_one_task(self, tmp_path: Path) -> None:
        assert sorted(plan_of(tmp_path).groups(2)) == [(0, 1), (2, 3), (4, 6), (5, 7)]

    def test_one_kind_alone_is_the_same_as_its_half(self, tmp_path: Path) -> None:
        both = list(plan_of(tmp_path))
        for at, mode in enumerate(("frozen", "each")):
            alone = [run.identity for run in plan_of(tmp_path, mode)]
            assert alone == [run.identity for run in both[4 * at : 4 * at + 4]]

    def test_a_sweep_without_trims_does_not_look_at_the_calibration(self, tmp_path: Path) -> None:
        plan = plan_of(tmp_path, "none", "")
        assert plan.trimming is None
        bare = make_sweep(load_testbench(write_bench(tmp_path, SWEEP + GRID + DIES, deck=DECK)))
        assert [run.identity for run in plan] == [run.identity for run in bare]

    @pytest.mark.parametrize(
        "change",
        [
            {"calibrate": {"max_runs": 11}},
            {"calibrate": {"metric": "free_frame"}},
            {"sweep": {"trim_at": None}},
            {"sweep": {"trim_at": {VDD: 0.96}}},
        ],
    )
    def test_what_determines_a_trim_is_part_of_the_identity(
        self, tmp_path: Path, change: dict[str, dict[str, Any]]
    ) -> None:
        before = {run.identity for run in plan_of(tmp_path)}
        assert not before & {run.identity for run in make_sweep(with_tables(tmp_path, change))}

    def test_the_trim_has_its_own_conditions(self, tmp_path: Path) -> None:
        plan = plan_of(tmp_path)
        for number, gain in ((1, None), (5, plan.run(5).values[GAIN])):
            bench = plan.trim_bench(plan.run(number))
            assert bench.netlist is not None
            assert bench.netlist.parameters.get("vdd") == 0.95
            assert bench.netlist.parameters.get("gain") == gain
            assert not bench.accuracy.floor

    @pytest.mark.parametrize(("mode", "trims"), [("none", 0), ("frozen", 1), ("each", 2)])
    def test_an_estimate_counts_their_runs(
        self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, mode: str, trims: int
    ) -> None:
        plan = plan_of(tmp_path, mode, AT if trims else "")
        monkeypatch.setattr(estimate, "_of_run", lambda bench, deck: (Estimate(1.0, 1, 1), 0.0))
        found = estimate.estimate_sweep(plan)
        # Of 1 s each: four runs, and at most the twelve of `max_runs` for each calibration.
        assert (found.trims, found.time) == (trims, 4.0 + 12.0 * trims)

    @pytest.mark.parametrize(
        ("change", "words"),
        [
            ({"calibrate": {"metric": None, "knob": None}}, r"needs a table \[calibrate\]"),
            ({"calibrate": {"metrik": "free_frame"}}, "metrik"),
            ({"sweep": {"trim": "all"}}, "key 'trim': wanted 'none', 'frozen', 'each', 'both'"),
            ({"sweep": {"trim": "none"}}, "'trim_at' says where the trim is made"),
            ({"sweep": {"trim_at": {"netlist.parameters.vddd": 1}}}, "vdd"),
            ({"sweep": {"trim_at": {LEVEL: 0.1}}}, r"\[sweep.trim_at\]: '.*level' is a knob"),
            (
                {"sweep": {"grid": [{"key": LEVEL, "values": [0.1, 0.11]}]}},
                r"\[\[sweep.grid\]\]: '.*level' is a knob",
            ),
            (
                {"sweep": {"corners": {"low": {"parameters": {"level": 0.1}}}}},
                r"\[sweep.corners.low\]: '.*level' is a knob",
            ),
            (
                {
                    "sweep": {
                        "monte_carlo": {
                            "runs": 2,
                            "vary": [{"key": LEVEL, "distribution": "normal", "sigma": 0.01}],
                        }
                    }
                },
                r"vary\]\]: '.*level' is a knob",
            ),
            (
                {
                    "sweep": {
                        "grid": None,
                        "monte_carlo": {
                            "runs": 2,
                            "vary": [
                                {"key": VDD, "distribution": "uniform", "low": 0.9, "high": 1.0}
                            ],
                        },
                    }
                },
                "is drawn for each sample, which would undo it",
            ),
            (
                {
                    "sweep": {
                        "monte_carlo": None,
                        "one_at_a_time": [{"key": GAIN, "relative": 0.1}],
                    }
                },
                "one_at_a_time",
            ),
        ],
    )
    def test_bad_input(self, tmp_path: Path, change: dict[str, dict[str, Any]], words: str) -> None:
        with pytest.raises(CosimError, match=words):
            make_sweep(with_tables(tmp_path, change))


@pytest.mark.ngspice
class TestRuns:
    def test_dies_are_trimmed_to_the_same_amplitude(self, swept: Path) -> None:
        found = rows(swept / "a.h5")
        assert {row["trim.netlist_runs"] > 2 for row in found} == {True}
        for row in found:
            gain = row[GAIN] if row["trim"] == "each" else 1.0
            # The supply is that of the trim, wherever the run has it.
            product = row[LEVEL] * gain * 0.95
            assert product == pytest.approx(BEST, rel=COARSE, abs=0.0)
            # Of each other they differ by what a search leaves: a gain of 1e-9 is worth no run.
            first = found[0][LEVEL] * 0.95
            assert product == pytest.approx(first, rel=math.sqrt(6e-9) * 2 / math.pi, abs=0.0)

    def test_the_frozen_trim_is_the_calibration_of_the_testbench(self, swept: Path) -> None:
        bench = load_testbench(swept / "bench.toml")
        assert isinstance(bench, Testbench)
        assert bench.netlist is not None
        at = replace(bench, netlist=replace(bench.netlist, parameters={"vdd": 0.95}))
        result = calibrate(at)
        for row in rows(swept / "a.h5")[:4]:
            assert row[LEVEL] == result.knobs[0].found
            assert row["trim.after"] == result.after
            assert row["trim.netlist_runs"] == result.netlist_runs

    def test_what_drifts_and_what_a_frozen_trim_misses_is_an_angle(self, swept: Path) -> None:
        for row in rows(swept / "a.h5"):
            missed = row[VDD] / 0.95 * (row[GAIN] if row["trim"] == "frozen" else 1.0) - 1.0
            # Two turns about one axis, (2/3) sin^2 of half the angle between them.
            wanted = 2.0 / 3.0 * math.sin(0.25 * math.pi * missed) ** 2
            # What all of them have besides, and its cross term with an angle of up to 0.2.
            rest = row["trim.after"]
            bound = rest + 2.0 * math.sqrt(rest * wanted) + 1e-9
            assert abs(1.0 - row[FIDELITY] - wanted) <= bound
        assert max(1.0 - row[FIDELITY] for row in rows(swept / "a.h5")) > 1e-3

    def test_a_row_is_the_run_of_the_trimmed_testbench(self, swept: Path) -> None:
        plan = make_sweep(load_testbench(swept / "bench.toml"))
        # The second die at the other supply.
        run, row = plan.run(7), rows(swept / "a.h5")[7]
        bench = trimmed(plan.testbench(run), calibrate(plan.trim_bench(run)))
        cells, _ = archive.cells_of(cosim.run(bench))
        again, _ = archive.cells_of(rerun(swept / "a.h5", 8))
        for name, value in cells.items():
            for other in (row[name], again[name]):
                assert other == value or (other != other and value != value), name
        assert row["identity"] == run.identity

    def test_every_die_is_trimmed_once(
        self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        asked = []

        def note(plan: SweepPlan, run: SweepRun) -> Trim:
            asked.append(run.number)
            return Trim(None, TestbenchError("enough"), 0.0)

        monkeypatch.setattr(work, "find_trim", note)
        state = run_sweep(bench_of(tmp_path, "each"), tmp_path / "a.h5", engine=HERE)
        assert state.failed == {"input error": 4}
        assert asked == [0, 1]  # The runs 2 and 3 are of the same dies.

    def test_a_trim_that_fails_is_a_row(self, tmp_path: Path) -> None:
        corners = "[sweep.corners.good]\nparameters = { fail = 999 }\n"
        corners += "[sweep.corners.bad]\nparameters = { fail = 9 }\n"
        path = tmp_path / "a.h5"
        state = run_sweep(bench_of(tmp_path, "each", "", corners), path, engine=HERE)
        assert (state.finished, state.failed) == (1, {"no convergence": 1})
        good, bad = rows(path)
        assert good[LEVEL] == pytest.approx(BEST, rel=COARSE, abs=0.0)
        assert (bad["corner"], bad["trim"], math.isnan(bad[LEVEL])) == ("bad", "each", True)
        assert "ngspice found no solution at t = 9e-09 s" in bad["error"]
        record = archive.read(path, SWEEP_KINDS, 2)
        assert isinstance(record, FailedRun)
        assert record.log
        assert "calibrate" in record.testbench
        assert "fail=9" in record.deck_sent.replace(" ", "")

    def test_the_sides_are_told_apart(
        self, swept: Path, capsys: pytest.CaptureFixture[str]
    ) -> None:
        path = swept / "a.h5"
        table = archive.read_table(path)
        goal = make_goal(FIDELITY, 1e-4)
        inputs = ("trim", VDD, GAIN, "sample")
        frozen, each = compare_trims(table, inputs, goal, (LEVEL,), {"frozen": 4, "each": 4})
        assert (frozen.trim, frozen.trims, each.trim, each.trims) == ("frozen", 1, "each", 2)
        found = rows(path)
        assert frozen.netlist_runs == found[0]["trim.netlist_runs"]
        assert each.netlist_runs == sum(row["trim.netlist_runs"] for row in found[4:6])
        for part, own in ((frozen, found[:4]), (each, found[4:])):
            passed = sum(1.0 - row[FIDELITY] <= 1e-4 for row in own)
            assert part.summary.limit_yield is not None
            assert (part.summary.limit_yield.passed, part.summary.limit_yield.total) == (passed, 4)
            assert [point.point for point in part.points] == [{VDD: 0.95}, {VDD: 1.0}]
            # At one point the samples do not recur, so that there is an interval.
            for point in part.points:
                assert point.limit_yield is not None
                assert point.limit_yield.random
            levels = [row[LEVEL] for row in own]
            assert (part.knobs[0].low, part.knobs[0].high) == (min(levels), max(levels))
        # The dies' own trims keep the limit where they were made and lose it with the supply.
        assert [point.limit_yield.fraction for point in each.points if point.limit_yield] == [1, 0]
        show_sweep(path, json_output=True, plot=None, table=False)
        told = json.loads(capsys.readouterr().out)
        assert [part["trim"] for part in told["trims"]] == ["frozen", "each"]
        assert told["finished"] == 4
        show_sweep(path, json_output=False, plot=swept / "a.png", table=False)
        out = capsys.readouterr().out
        assert "one trim for all" in out
        assert "a trim for each die" in out
        assert "of the runs with a trim for each die" in out

    def test_what_trims_warn_of_is_told_once(self, tmp_path: Path) -> None:
        bounds = ("high = 0.16", "high = 0.125")
        text = f'{KNOB}{SWEEP}trim = "each"\n{AT}{GRID}{DIES}'.replace(*bounds)
        toml = write_bench(tmp_path, text, deck=DECK)
        run_sweep(toml, tmp_path / "a.h5", engine=HERE)
        table = archive.read_table(tmp_path / "a.h5")
        goal, inputs = make_goal(FIDELITY), ("trim", VDD, GAIN, "sample")
        (part,) = compare_trims(table, inputs, goal, (LEVEL,), {"each": 4})
        # Of gains of 1.08 and 0.92 the second asks for 0.143.
        assert part.warnings == {"the bounds exclude the optimum": 1}
        assert part.knobs[0].high == 0.125
        assert "note: 1 of 2 calibrations (each) warn: the bounds exclude the optimum" in [
            str(item) for item in trim_parts((part,), {})
        ]

    def test_no_runs_yet(self) -> None:
        goal = make_goal(FIDELITY, 1e-4)
        (part,) = compare_trims({}, ("trim", "sample"), goal, (LEVEL,), {"each": 4})
        assert (part.trims, part.netlist_runs, part.points, part.summary.missing) == (0, 0, (), 4)
        assert math.isnan(part.after)
        assert runs_of_trim({"trim": np.array(["each"])}, "frozen") == {}

    @pytest.mark.full
    def test_slices_other_engines_and_resumed_sweeps_give_the_same(self, swept: Path) -> None:
        toml, path = swept / "bench.toml", swept / "b.h5"
        state = run_sweep(toml, path, engine=HERE, part=(2, 3))
        assert 0 < state.finished < 8
        state = run_sweep(toml, path, engine=local_engine(1), resume=True)
        assert state.finished == 8
        assert differing(rows(path), rows(swept / "a.h5")) == []
        assert all(item.same for item in repeat_sample(path, 1))

    @pytest.mark.full
    def test_a_readout_is_trimmed(self, tmp_path: Path) -> None:
        knob = {"key": "readout.adc_full_scale", "low": "0.3 mV", "high": "12 mV"}
        times = {"key": "readout.t1", "distribution": "normal", "sigma": "5 us"}
        sweep = {"trim": "each", "monte_carlo": {"runs": 2, "vary": [times]}}
        study = {"metric": "assignment_error", "max_runs": 8, "knob": [knob]}
        bench = swept_bench(tmp_path, sweep, readout={**ADC, "adc_bits": 3})
        made = replace(bench, studies={**bench.studies, "calibrate": study})
        run_sweep(made, tmp_path / "a.h5", engine=HERE)
        plan = make_sweep(made)
        for run, row in zip(plan, rows(tmp_path / "a.h5"), strict=True):
            result = calibrate(plan.trim_bench(run))
            assert row["readout.adc_full_scale"] == result.knobs[0].found
            alone = cosim.run(trimmed(plan.testbench(run), result))
            assert row["assignment_error"] == alone.assignment_error
            assert row["assignment_error"] < row["trim.before"]
