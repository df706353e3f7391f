"""Oracle: the exit codes and streams that the README promises, and JSON's own parser."""

import json
import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from cosim import cli
from cosim.errors import ArchiveError, InputError, SimulationError
from cosim.result import GATE_FIELDS

DECK = """a steady carrier
.param level=0.1
v1 out 0 sin(0 {level} 1g 0 0 90)
.tran 1n 30n
.end
"""
BENCH = """title = "a small gate"
[netlist]
file = "deck.cir"
[drive]
probe = "v(out)"
termination = "in deck"
carrier = "1 GHz"
[qubit]
kind = "spin"
frequency = "1 GHz"
rabi_per_volt = "100 MHz/V"
[gate]
target = "x90"
window = ["2 ns", "27 ns"]
[accuracy]
floor = false
"""

Cli = Callable[..., tuple[int, str, str]]


@pytest.fixture
def bench(tmp_path: Path) -> Path:
    (tmp_path / "deck.cir").write_text(DECK, encoding="utf-8")
    (tmp_path / "bench.toml").write_text(BENCH, encoding="utf-8")
    return tmp_path / "bench.toml"


@pytest.fixture
def qcosim(monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]) -> Cli:
    """Run the command in this process; gives exit code, standard output, standard error."""

    def call(*words: object) -> tuple[int, str, str]:
        monkeypatch.setattr(sys, "argv", ["qcosim", *map(str, words)])
        with pytest.raises(SystemExit) as end:
            cli.main()
        out, err = capfd.readouterr()
        return int(end.value.code or 0), out, err

    return call


@pytest.mark.parametrize("command", [[], ["check"], ["run"], ["show"]])
def test_help_has_an_example(qcosim: Cli, command: list[str]) -> None:
    code, out, err = qcosim(*command, "--help")
    assert code == 0
    assert err == ""
    assert not command or f"qcosim {command[0]}" in out


@pytest.mark.ngspice
def test_run_prints_archives_and_draws(qcosim: Cli, bench: Path, tmp_path: Path) -> None:
    archive, figure = tmp_path / "a.h5", tmp_path / "a.png"
    code, out, err = qcosim("run", bench, "--archive", archive, "--plot", figure)
    assert code == 0
    assert "process fidelity" in out
    assert "Design estimate" in out
    assert str(archive) in err
    assert figure.read_bytes().startswith(b"\x89PNG")

    code, out, _ = qcosim("show", archive)
    assert code == 0
    assert "a small gate" in out
    code, out, _ = qcosim("show", archive, "--run", 1)
    assert "deck.cir" in "".join(out.split())
    code, out, _ = qcosim("show", archive, "--log")
    assert "Doing analysis at TEMP" in out
    code, out, _ = qcosim("show", archive, "--json")
    assert json.loads(out, parse_constant=pytest.fail)["target"] == ["x90"]
    code, out, _ = qcosim("show", archive, "--run", 1, "--json")
    assert list(json.loads(out)) == list(GATE_FIELDS)
    again = tmp_path / "again.png"
    assert qcosim("show", archive, "--run", 1, "--plot", again)[0] == 0
    assert again.read_bytes() == figure.read_bytes()
    code, _, err = qcosim("show", archive, "--plot", again)
    assert (code, "--run N" in err) == (2, True)
    code, _, err = qcosim("show", archive, "--run", 7)
    assert code == 2
    assert "7" in err


@pytest.mark.ngspice
def test_json_is_alone_on_standard_output(qcosim: Cli, bench: Path) -> None:
    code, out, _ = qcosim("run", bench, "--json")
    assert code == 0
    numbers = json.loads(out, parse_constant=pytest.fail)
    assert list(numbers) == list(GATE_FIELDS)
    assert numbers["numerical_floor"] is None
    assert set(numbers["rotation"]) == {"axis", "angle"}
    for name in ("as_simulated", "free_frame", "calibrated"):
        assert 0.99 < numbers[name]["process_fidelity"] <= 1
        assert numbers[name]["error_bar"] is None


@pytest.mark.ngspice
def test_the_floor_can_be_asked_for(qcosim: Cli, bench: Path) -> None:
    code, out, _ = qcosim("run", bench, "--json", "--floor")
    numbers = json.loads(out)
    assert code == 0
    # The source is exact at every step, so the two runs differ by the interpolation only.
    assert 0 <= numbers["numerical_floor"] < 1e-9
    assert numbers["free_frame"]["error_bar"] >= 0


@pytest.mark.ngspice
def test_check(qcosim: Cli, bench: Path) -> None:
    code, out, err = qcosim("check", bench)
    assert code == 0
    assert err == ""
    assert "ready to run" in out
    code, out, _ = qcosim("check", bench, "--json")
    assert json.loads(out)["points"] == 2401


def test_a_wrong_testbench_exits_with_2(qcosim: Cli, bench: Path) -> None:
    bench.write_text(BENCH.replace("x90", "x91"), encoding="utf-8")
    for command in ("check", "run"):
        code, out, err = qcosim(command, bench)
        assert code == 2
        assert out == ""
        assert err.startswith("error: ")
        assert "'x91'" in err
        assert "'x90'" in err
        assert "Traceback" not in err


@pytest.mark.parametrize(
    "words",
    [
        ["run"],
        ["run", "none.toml"],
        ["runn"],
        ["show", "none.h5"],
        ["run", "BENCH", "--archive", "a.txt"],
        ["run", "BENCH", "--plot", "none/a.png"],
        ["run", "BENCH", "--plot", "a.gif"],
        ["show", "BENCH"],
    ],
)
def test_wrong_calls_exit_with_2(qcosim: Cli, bench: Path, words: list[str]) -> None:
    code, out, err = qcosim(*[bench if word == "BENCH" else word for word in words])
    assert code == 2
    assert out == ""
    assert err.strip()
    assert "Traceback" not in err


@pytest.mark.ngspice
def test_a_failed_simulation_exits_with_3_and_shows_the_log(qcosim: Cli, bench: Path) -> None:
    loop = DECK.replace(".tran", "v2 out 0 dc 1\n.tran")
    (bench.parent / "deck.cir").write_text(loop, encoding="utf-8")
    code, out, err = qcosim("run", bench)
    assert code == 3
    assert out == ""
    assert "  | " in err


@pytest.mark.ngspice
def test_an_archive_that_is_none_is_refused_before_the_run(qcosim: Cli, bench: Path) -> None:
    foreign = bench.parent / "foreign.h5"
    foreign.write_bytes(b"something else")
    (bench.parent / "deck.cir").write_text("no deck", encoding="utf-8")
    code, out, err = qcosim("run", bench, "--archive", foreign)
    assert code == 2
    assert out == ""
    assert "foreign.h5" in err  # and not the deck, which would fail later
    assert foreign.read_bytes() == b"something else"


@pytest.mark.ngspice
def test_numbers_come_before_a_file_that_fails(
    qcosim: Cli, bench: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def fail(result: object, path: object) -> int:
        raise ArchiveError("the disk is full")

    monkeypatch.setattr("cosim.dispatch.save", fail)
    code, out, err = qcosim("run", bench, "--json", "--archive", bench.parent / "a.h5")
    assert code == 2
    assert json.loads(out)["free_frame"]["process_fidelity"] > 0.99
    assert "the disk is full" in err


@pytest.mark.parametrize(
    ("error", "code", "words"),
    [
        (InputError("wrong", hint="do this"), 2, ["error: wrong", "do this"]),
        (SimulationError("failed", log=["last words"]), 3, ["error: failed", "| last words"]),
        (ZeroDivisionError("x"), 1, ["fault of the program", "ZeroDivisionError", "--debug"]),
        (KeyboardInterrupt(), 130, []),
    ],
)
def test_exit_codes(
    qcosim: Cli,
    monkeypatch: pytest.MonkeyPatch,
    bench: Path,
    error: BaseException,
    code: int,
    words: list[str],
) -> None:
    def fail(path: object) -> None:
        raise error

    monkeypatch.setattr("cosim.checks.load_testbench", fail)
    found, _, err = qcosim("check", bench)
    assert found == code
    for word in words:
        assert word in err
    assert "Traceback" not in err


@pytest.mark.full
def test_debug_shows_the_traceback(bench: Path) -> None:
    bench.write_text("nonsense", encoding="utf-8")
    done = subprocess.run(
        [sys.executable, "-m", "cosim", "check", bench, "--debug"],
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert done.returncode == 1
    assert "Traceback" in done.stderr


@pytest.mark.full
@pytest.mark.ngspice
def test_a_closed_pipe_is_silent(bench: Path) -> None:
    read, write = os.pipe()
    os.close(read)
    command = [sys.executable, "-m", "cosim", "check", bench]
    done = subprocess.run(command, stdout=write, stderr=subprocess.PIPE, timeout=60, check=False)
    os.close(write)
    assert done.stderr == b""
