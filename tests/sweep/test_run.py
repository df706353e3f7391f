"""Oracle: each run of the plan made alone by `cosim.run`, and counts of what is simulated."""

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pytest

import cosim
from cosim import archive
from cosim.capture import Plan
from cosim.errors import TestbenchError
from cosim.result import GateResult
from cosim.sweep import simulated
from cosim.sweep.planning import make_sweep
from cosim.sweep.record import SWEEP_KINDS, FailedRun
from cosim.sweep.run import run_sweep
from cosim.testbench import load_testbench
from tests.sweep.benches import (
    FAILING,
    GRID,
    HERE,
    LEVELS,
    MISMATCH,
    MOS_DECK,
    OF_TIME,
    envelopes,
    rows,
    write_bench,
)

pytestmark = pytest.mark.ngspice


@pytest.fixture
def captured(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    """Count the simulations that are asked for, batch by batch."""
    counts: list[int] = []
    original = simulated._Captures.__init__

    def count(self: simulated._Captures, plans: Sequence[Plan]) -> None:
        if plans:
            counts.append(len(plans))
        original(self, plans)

    monkeypatch.setattr(simulated._Captures, "__init__", count)
    return counts


def check_against_single_runs(path: Path, toml: Path) -> None:
    plan = make_sweep(load_testbench(toml))
    found = rows(path)
    assert [row["id"] for row in found] == list(range(1, len(plan) + 1))
    kept = envelopes(path)
    for run, row in zip(plan, found, strict=True):
        alone = cosim.run(plan.testbench(run))
        cells, _ = archive.cells_of(alone)
        expected = {
            **cells,
            **run.values,
            "kind": "GateResult",
            "status": "done",
            "identity": run.identity,
            "seed": run.seed,
            "warnings": "\n".join(alone.warnings),
        }
        for name, value in expected.items():
            if name not in OF_TIME:
                assert row[name] == value or (row[name] != row[name] and value != value), name
        # The archive keeps single precision.
        np.testing.assert_array_equal(kept[run.number + 1], alone.envelope.iq.astype(np.complex64))
        record = {k: archive.read(path, SWEEP_KINDS, k) for k in archive.record_numbers(path)}
        if run.number + 1 in record:
            whole = record[run.number + 1]
            assert isinstance(whole, GateResult)
            assert whole.run.testbench == alone.run.testbench
            assert whole.run.deck_sent == alone.run.deck_sent
            np.testing.assert_array_equal(whole.waveform.v, alone.waveform.v)


@pytest.mark.parametrize(
    ("sweep", "changes", "deck"),
    [
        pytest.param(GRID, (), "", id="grid"),
        pytest.param(
            GRID, (("floor = false", "floor = true"),), "", id="floor", marks=pytest.mark.full
        ),
        pytest.param(MISMATCH, (), MOS_DECK, id="mismatch", marks=pytest.mark.full),
    ],
)
def test_a_row_is_what_the_run_gives_alone(
    tmp_path: Path, sweep: str, changes: tuple[tuple[str, str], ...], deck: str
) -> None:
    toml = write_bench(tmp_path, sweep, *changes, **({"deck": deck} if deck else {}))
    state = run_sweep(toml, tmp_path / "a.h5", engine=HERE)
    assert (state.planned, state.finished, state.failed, state.missing) == (6, 6, {}, 0)
    check_against_single_runs(tmp_path / "a.h5", toml)


def test_what_changes_no_waveform_is_not_simulated_again(
    tmp_path: Path, captured: list[int]
) -> None:
    run_sweep(write_bench(tmp_path, GRID), tmp_path / "a.h5", engine=HERE)
    assert sum(captured) == 2  # Of six runs, for two amplitudes.
    run_sweep(
        write_bench(tmp_path, GRID, ("floor = false", "floor = true")),
        tmp_path / "b.h5",
        engine=HERE,
    )
    assert sum(captured) == 2 + 4  # Each has a second run at half the step.


def test_the_row_of_a_failed_run_tells_why(tmp_path: Path) -> None:
    toml, path = write_bench(tmp_path, FAILING), tmp_path / "a.h5"
    state = run_sweep(toml, path, engine=HERE)
    assert (state.finished, state.failed, state.missing) == (3, {"no convergence": 1}, 0)
    row = rows(path)[2]
    assert row["status"] == "no convergence"
    assert row["netlist.parameters.fail"] == 9.0
    assert "ngspice found no solution at t = 9e-09 s" in row["error"]
    assert row["free_frame.average_gate_fidelity"] != row["free_frame.average_gate_fidelity"]
    record = archive.read(path, SWEEP_KINDS, 3)
    assert isinstance(record, FailedRun)
    assert (record.status, record.error) == (row["status"], row["error"])
    assert any("Timestep too small" in line for line in record.log)
    assert "fail = 9.0" in record.testbench
    assert "b2 mark 0 v=ln({fail}-time*1g)" in record.deck_sent
    wave = record.waveforms["out"]
    assert 8.9e-9 < wave.t[-1] <= 9e-9
    # The same burst as in the neighbour's run, of which one is kept whole.
    (number,) = set(archive.record_numbers(path)) - {3}
    whole = archive.read(path, SWEEP_KINDS, number)
    count = wave.t.size - 40  # Its last steps are those that were cut.
    np.testing.assert_allclose(wave.v[:count], whole.waveform.v[:count], atol=1e-9)


def test_runs_that_share_a_waveform_fail_alone_where_only_their_qubit_is_wrong(
    tmp_path: Path, captured: list[int]
) -> None:
    sweep = """[sweep]
[[sweep.grid]]
key = "qubit.t1"
values = ["1 us", "10 us"]
[[sweep.grid]]
key = "qubit.t2"
values = ["5 us", "1 us"]
"""
    path = tmp_path / "a.h5"
    state = run_sweep(write_bench(tmp_path, sweep), path, engine=HERE)
    assert state.failed == {"input error": 1}
    assert sum(captured) == 1
    assert [row["status"] for row in rows(path)] == ["input error", "done", "done", "done"]
    assert "at most twice t1" in rows(path)[0]["error"]


def test_the_record_of_a_failed_run_holds_its_own_testbench(tmp_path: Path) -> None:
    sweep = GRID + '[[sweep.grid]]\nkey = "netlist.parameters.fail"\nvalues = [9]\n'
    path = tmp_path / "a.h5"
    state = run_sweep(write_bench(tmp_path, sweep), path, engine=HERE)
    assert state.failed == {"no convergence": 6}
    plan = make_sweep(load_testbench(tmp_path / "bench.toml"))
    for run in plan:
        record = archive.read(path, SWEEP_KINDS, run.number + 1)
        assert record.testbench == plan.testbench(run).to_toml()


@pytest.mark.parametrize("keep", ["0", "4", pytest.param("99", marks=pytest.mark.full), '"all"'])
def test_the_worst_runs_are_kept_whole(tmp_path: Path, keep: str) -> None:
    path = tmp_path / "a.h5"
    run_sweep(write_bench(tmp_path, LEVELS, ("keep = 2", f"keep = {keep}")), path, engine=HERE)
    fidelities = {row["id"]: row["free_frame.average_gate_fidelity"] for row in rows(path)}
    order = sorted(fidelities, key=lambda number: fidelities[number])
    count = 6 if keep == '"all"' else int(keep)
    assert sorted(archive.record_numbers(path)) == sorted(order[:count])


def test_a_sweep_of_one_run(tmp_path: Path) -> None:
    sweep = '[[sweep.grid]]\nkey = "qubit.detuning"\nvalues = ["0 Hz"]\n'
    state = run_sweep(write_bench(tmp_path, sweep), tmp_path / "a.h5", engine=HERE)
    assert (state.planned, state.finished) == (1, 1)


def test_a_testbench_without_a_sweep_is_refused_before_anything_is_written(tmp_path: Path) -> None:
    with pytest.raises(TestbenchError, match=r"no table \[sweep\]"):
        run_sweep(write_bench(tmp_path, ""), tmp_path / "a.h5", engine=HERE)
    assert not list(tmp_path.glob("*.h5*"))


@pytest.mark.full
def test_an_imported_waveform_over_the_qubit(tmp_path: Path) -> None:
    t = np.arange(0.0, 24e-9, 10e-12)
    v = 0.12 * np.sin(2 * np.pi * 5e9 * t)
    np.savetxt(
        tmp_path / "trace.csv", np.column_stack([t, v]), delimiter=",", header="t,out", comments=""
    )
    toml = write_bench(
        tmp_path,
        GRID.replace(
            'key = "netlist.parameters.level"\nvalues = [0.12, 0.13]',
            'key = "drive.attenuation"\nvalues = ["0 dB", "1 dB"]',
        ),
        (
            '[netlist]\nfile = "deck.cir"\nsteps_per_period = 20',
            '[waveform]\nfile = "trace.csv"\ntime_unit = "s"\nunit = "V"',
        ),
        ('probe = "v(out)"\ntermination = "in deck"', 'probe = "out"'),
    )
    state = run_sweep(toml, tmp_path / "a.h5", engine=HERE)
    assert (state.finished, state.missing) == (6, 0)
    check_against_single_runs(tmp_path / "a.h5", toml)


@pytest.mark.full
def test_a_carrier_that_is_estimated(tmp_path: Path) -> None:
    toml = write_bench(
        tmp_path,
        LEVELS,
        ('carrier = "5 GHz"', 'carrier = "estimate"'),
        ("steps_per_period = 20", 'max_step = "10 ps"'),
    )
    run_sweep(toml, tmp_path / "a.h5", engine=HERE)
    check_against_single_runs(tmp_path / "a.h5", toml)
