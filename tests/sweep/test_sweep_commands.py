"""Oracle: the exit codes and streams that the README promises, JSON's own parser, and the API."""

import csv
import json
import os
import pty
import re
import select
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from cosim import archive, cli
from cosim.sweep import local
from cosim.sweep.run import SweepState
from cosim.sweep_progress import progress_line
from tests.sweep.benches import FAILING, GRID, HERE, LEVELS, rows, write_bench

pytestmark = pytest.mark.ngspice

ROOT = Path(__file__).parents[2]
Cli = Callable[..., tuple[int, str, str]]


@pytest.fixture
def qcosim(monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]) -> Cli:
    """Run the command in this process, its workers too; gives exit code and both outputs."""
    monkeypatch.setattr(local, "local_engine", lambda workers=None: HERE)

    def call(*words: object) -> tuple[int, str, str]:
        monkeypatch.setattr(sys, "argv", ["qcosim", *map(str, words)])
        with pytest.raises(SystemExit) as end:
            cli.main()
        out, err = capfd.readouterr()
        return int(end.value.code or 0), out, err

    return call


def parsed(text: str) -> dict[str, Any]:
    """Read strict JSON, which has no NaN."""

    def refuse(word: str) -> None:
        raise AssertionError(word)

    found: dict[str, Any] = json.loads(text, parse_constant=refuse)
    return found


@pytest.fixture
def failing(tmp_path: Path, qcosim: Cli) -> Path:
    """An archive of four runs, of which the third has failed and one of the others is whole."""
    toml = write_bench(tmp_path, FAILING)
    assert qcosim("sweep", toml, "--archive", tmp_path / "a.h5")[0] == 0
    return tmp_path / "a.h5"


def test_a_sweep_tells_what_became_of_its_runs(tmp_path: Path, qcosim: Cli) -> None:
    toml, path = write_bench(tmp_path, FAILING), tmp_path / "a.h5"
    code, out, err = qcosim("sweep", toml, "--archive", path, "--json")
    assert code == 0
    numbers = parsed(out)
    assert (numbers["planned"], numbers["finished"], numbers["missing"]) == (4, 3, 0)
    assert numbers["failed"] == 1
    assert numbers["statuses"] == {"done": 3, "no convergence": 1}
    assert "table" not in numbers
    assert err.splitlines()[-1].startswith("4 of 4 runs, 1 failed, ")
    code, out, _ = qcosim("show", path, "--json")
    numbers = parsed(out)
    assert (code, numbers["failed"]) == (0, 1)
    table = numbers["table"]
    assert table["status"] == ["done", "done", "no convergence", "done"]
    assert table["free_frame.average_gate_fidelity"][2] is None
    assert table["id"] == [1, 2, 3, 4]
    code, out, _ = qcosim("show", path)
    assert (code, "no convergence" in out) == (0, True)
    code, _, err = qcosim("sweep", toml, "--archive", path)
    assert (code, "--resume" in err) == (2, True)


def test_a_sweep_without_any_result_has_failed(tmp_path: Path, qcosim: Cli) -> None:
    toml = write_bench(tmp_path, FAILING.replace("[1000, 999, 9, 998]", "[8, 9]"))
    code, out, _ = qcosim("sweep", toml, "--archive", tmp_path / "a.h5", "--json")
    assert code == 3
    assert parsed(out)["failed"] == 2
    code, out, _ = qcosim("show", tmp_path / "a.h5", "--json")
    assert (code, parsed(out)["finished"]) == (0, 0)
    assert qcosim("show", tmp_path / "a.h5")[0] == 0
    assert qcosim("verify", tmp_path / "a.h5", "--repeat", 2)[0] == 0
    assert qcosim("export", tmp_path / "a.h5", "--csv", tmp_path / "a.csv")[0] == 0


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["--archive", "a.txt"], ".h5"),
        (["--archive", "no/a.h5"], "does not exist"),
        (["--archive", "/proc/a.h5"], "no sweep can be written in /proc"),
        (["--archive", "a.h5", "--retry-failed"], "--resume"),
        (["--archive", "a.h5", "--slice", "3/2"], "slice 3/2"),
        (["--archive", "a.h5", "--slice", "two"], "wanted two whole numbers"),
        (["--archive", "a.h5", "--workers", "2", "--scheduler", "tcp://x:1"], "not both"),
    ],
)
def test_what_cannot_be_is_refused(
    tmp_path: Path, qcosim: Cli, monkeypatch: pytest.MonkeyPatch, words: list[str], told: str
) -> None:
    monkeypatch.chdir(tmp_path)
    code, out, err = qcosim("sweep", write_bench(tmp_path, LEVELS), *words)
    assert (code, out) == (2, "")
    assert told in err
    assert not list(tmp_path.glob("*.h5*"))


@pytest.mark.full
def test_one_run_is_shown_as_far_as_it_was_kept(failing: Path, qcosim: Cli) -> None:
    (whole,) = set(archive.record_numbers(failing)) - {3}
    short = min({1, 2, 4} - {whole})
    code, out, _ = qcosim("show", failing, "--run", whole)
    assert (code, "process fidelity" in out) == (0, True)
    assert qcosim("show", failing, "--run", whole, "--log")[0] == 0
    numbers = parsed(qcosim("show", failing, "--run", whole, "--json")[1])
    assert (numbers["id"], numbers["status"]) == (whole, "done")
    code, out, err = qcosim("show", failing, "--run", short)
    assert code == 0
    assert "free_frame" in out
    assert f"qcosim rerun {failing} {short}" in err.replace("\n", "")
    assert parsed(qcosim("show", failing, "--run", short, "--json")[1])["id"] == short
    code, _, err = qcosim("show", failing, "--run", short, "--log")
    assert (code, "no log" in err) == (2, True)
    code, out, _ = qcosim("show", failing, "--run", 3)
    assert code == 0
    assert "run 3: no convergence" in out
    assert "ngspice found no solution" in out.replace("\n", "")  # The width breaks it.
    assert "kept of out" in out
    assert parsed(qcosim("show", failing, "--run", 3, "--json")[1])["status"] == "no convergence"
    code, out, _ = qcosim("show", failing, "--run", 3, "--log")
    assert (code, "Timestep too small" in out) == (0, True)
    code, _, err = qcosim("show", failing, "--run", 5)
    assert (code, "run 5 is not in the archive" in err) == (2, True)


@pytest.mark.full
def test_the_testbench_of_a_sweep_is_printed(failing: Path, qcosim: Cli, tmp_path: Path) -> None:
    code, out, _ = qcosim("show", failing, "--testbench")
    assert code == 0
    # What is printed resumes the sweep.
    (tmp_path / "again.toml").write_text(out)
    code, out, _ = qcosim(
        "sweep", tmp_path / "again.toml", "--archive", failing, "--resume", "--json"
    )
    assert (code, parsed(out)["finished"]) == (0, 3)


@pytest.mark.full
def test_a_sweep_is_exported(failing: Path, qcosim: Cli, tmp_path: Path) -> None:
    code, _, err = qcosim("export", failing, "--csv", tmp_path / "a.csv")
    assert (code, "4 runs in" in err) == (0, True)
    text = (tmp_path / "a.csv").read_text(encoding="utf-8-sig")
    lines = list(csv.reader(line for line in text.splitlines() if not line.startswith("#")))
    assert len(lines) >= 5
    (whole,) = set(archive.record_numbers(failing)) - {3}
    deck = tmp_path / "deck"
    assert qcosim("export", failing, "--run", whole, "--deck", deck)[0] == 0
    for number in (3, min({1, 2, 4} - {whole})):
        code, _, err = qcosim("export", failing, "--run", number, "--csv", tmp_path / "b.csv")
        assert code == 2
        words = "run 3 has no result: no convergence" if number == 3 else "only its row"
        assert words in err
    code, _, err = qcosim("compare", failing, failing, "--run", whole, "--with", 3)
    assert (code, "run 3 has no result" in err) == (2, True)
    assert qcosim("export", failing, "--deck", deck)[0] == 2


@pytest.mark.full
def test_a_single_run_is_not_added_to_a_sweep(failing: Path, qcosim: Cli, tmp_path: Path) -> None:
    single = write_bench(tmp_path, "", name="single.toml")
    before = failing.read_bytes()
    for words in (
        ["run", single, "--archive", failing],
        ["rerun", failing, 1, "--archive", failing],
    ):
        code, _, err = qcosim(*words)
        assert (code, "holds a sweep" in err) == (2, True)
    assert failing.read_bytes() == before


@pytest.mark.full
def test_a_flipped_bit_is_found(failing: Path, qcosim: Cli) -> None:
    assert qcosim("verify", failing)[0] == 0
    with h5py.File(failing) as file:
        values = file["table/free_frame.average_gate_fidelity"][()]
    content = bytearray(failing.read_bytes())
    # As it lies in the file; where that is compressed, the flip goes through the library.
    place = content.find(np.float64(values[1]).tobytes())
    if place < 0:
        with h5py.File(failing, "r+") as file:
            file["table/free_frame.average_gate_fidelity"][1] = np.nextafter(values[1], 0.0)
    else:
        content[place] ^= 1
        failing.write_bytes(content)
    code, out, _ = qcosim("verify", failing)
    assert code == 1
    assert "damaged: " in out
    assert re.search("run [124]", out)  # All three have this fidelity.
    code, out, _ = qcosim("verify", failing, "--json")
    assert code == 1
    assert len(parsed(out)["damaged"]) == 1


@pytest.mark.full
def test_a_run_is_made_again_by_the_command(failing: Path, qcosim: Cli, tmp_path: Path) -> None:
    code, out, _ = qcosim("rerun", failing, 2, "--json", "--archive", tmp_path / "one.h5")
    assert code == 0
    row = rows(failing)[1]
    name = "free_frame.average_gate_fidelity"
    assert parsed(out)["free_frame"]["average_gate_fidelity"] == row[name]
    assert archive.read_table(tmp_path / "one.h5")[name] == [row[name]]
    code, _, err = qcosim("rerun", failing, 3)
    assert (code, "no solution" in err) == (3, True)
    code, _, err = qcosim("rerun", failing, 9)
    assert (code, "runs 1 to 4" in err) == (2, True)
    (tmp_path / "deck.cir").write_text("another deck\n.end\n")
    code, _, err = qcosim("rerun", failing, 2)
    assert (code, "deck" in err) == (2, True)


@pytest.mark.full
def test_a_sample_is_made_again_by_the_command(failing: Path, qcosim: Cli) -> None:
    code, out, _ = qcosim("verify", failing, "--repeat", 2)
    assert code == 0
    assert out.count("made again: the same") == 2
    with h5py.File(failing, "r+") as file:
        file["table/free_frame.average_gate_fidelity"][0] -= 1e-6
    code, out, _ = qcosim("verify", failing, "--repeat", 3)
    assert code == 1
    assert "run 1 made again: NOT THE SAME, fidelities differ by 1.0e-06" in out
    assert out.count("made again: the same") == 2
    numbers = parsed(qcosim("verify", failing, "--repeat", 3, "--json")[1])
    assert [item["same"] for item in numbers["repeated"]] == [False, True, True]
    assert qcosim("verify", failing, "--repeat", -1)[0] == 2


@pytest.mark.full
def test_shares_are_merged_by_the_command(tmp_path: Path, qcosim: Cli) -> None:
    toml, path = write_bench(tmp_path, LEVELS), tmp_path / "a.h5"
    for part in (1, 2):
        code, _, err = qcosim("sweep", toml, "--archive", path, "--slice", f"{part}/2")
        assert code == 0
        assert f"qcosim merge {path}" in err.replace("\n", "")
    code, _, err = qcosim("merge", path)
    assert code == 0
    assert "6 new runs of 2 archives" in err
    assert len(archive.record_numbers(path)) == 2
    assert parsed(qcosim("show", path, "--json")[1])["missing"] == 0
    code, _, err = qcosim("merge", tmp_path / "none.h5")
    assert (code, "neither such an archive nor shares" in err) == (2, True)


def test_check_says_what_a_sweep_takes(tmp_path: Path, qcosim: Cli) -> None:
    toml = write_bench(tmp_path, GRID)
    code, out, _ = qcosim("check", toml, "--deck")
    assert code == 0
    assert "6 runs (2 values of netlist.parameters.level x 3 values of qubit.detuning)" in (
        re.sub(r"\s+", " ", out)
    )
    # The first deck follows as it is sent.
    assert ".param level=0.12" in out
    assert out.rstrip().endswith(".end")
    numbers = parsed(qcosim("check", toml, "--json")[1])
    assert (numbers["runs"], numbers["waveforms"]) == (6, 2)
    assert all(numbers[name] > 0 for name in ("time", "memory", "disk"))
    assert not list(tmp_path.glob("*.h5*"))


def test_check_of_a_sweep_finds_what_is_wrong(tmp_path: Path, qcosim: Cli) -> None:
    toml = write_bench(tmp_path, GRID.replace("parameters.level", "parameters.lvel"))
    code, _, err = qcosim("check", toml)
    assert (code, "lvel" in err, "level" in err) == (2, True, True)


def test_the_line_of_progress_counts_rate_failures_and_time() -> None:
    state = SweepState(600, 118, {"timeout": 2}, made=100, elapsed=20.0, rate=5.0)
    assert progress_line(state) == "120 of 600 runs, 2 failed, 5 runs/s, 1.6 min left"
    assert progress_line(SweepState(10)) == "0 of 10 runs, 0 failed"


def command(*words: str) -> list[str]:
    return [sys.executable, "-m", "cosim", "sweep", *words]


@pytest.mark.full
def test_a_reader_that_goes_does_not_end_the_sweep(tmp_path: Path) -> None:
    write_bench(tmp_path, GRID)
    read, write = os.pipe()
    os.close(read)
    done = subprocess.run(
        command("bench.toml", "--archive", "a.h5", "--workers", "1"),
        cwd=tmp_path,
        stdout=write,
        stderr=write,
        env=os.environ | {"PYTHONPATH": str(ROOT)},
        timeout=120,
        check=False,
    )
    os.close(write)
    assert done.returncode in (0, 1)  # All is written; nobody is there to read the summary.
    assert len(rows(tmp_path / "a.h5")) == 6
    assert not (tmp_path / "a.h5.parts").exists()


@pytest.mark.full
def test_a_terminal_gets_a_bar(tmp_path: Path) -> None:
    write_bench(tmp_path, LEVELS)
    master, slave = pty.openpty()
    process = subprocess.Popen(
        command("bench.toml", "--archive", "a.h5", "--workers", "1"),
        cwd=tmp_path,
        stdout=subprocess.PIPE,
        stderr=slave,
        env=os.environ | {"PYTHONPATH": str(ROOT), "TERM": "xterm", "COLUMNS": "100"},
    )
    os.close(slave)
    seen = b""
    end = time.monotonic() + 120.0
    while time.monotonic() < end:
        if not select.select([master], [], [], 1.0)[0]:
            continue
        try:
            chunk = os.read(master, 65536)
        except OSError:  # The other end is closed.
            break
        if not chunk:
            break
        seen += chunk
    os.close(master)
    out, _ = process.communicate(timeout=60)
    assert process.returncode == 0, seen
    text = seen.decode(errors="replace")
    assert "6/6" in text
    assert "0 failed" in text
    assert "━" in text
    assert b"a burst" in out
