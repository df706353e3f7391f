"""Oracle: the files and streams that the README promises, and JSON's and CSV's own parsers."""

import csv
import json
import tomllib
from pathlib import Path

import pytest

import cosim
from cosim import cli
from cosim.checks import check_testbench
from cosim.errors import TestbenchError
from cosim.specification.gate_specification import specify_gate
from cosim.specification.readout_specification import specify_readout
from cosim.study_archive import load_study, save_study
from tests.specification.benches import design
from tests.specification.test_readout_specification import bench as readout_bench

GATE = """title = "a spin"
[qubit]
kind = "spin"
frequency = "6 GHz"
rabi_per_volt = "85 MHz/V"
t1 = "1 ms"
[gate]
target = "y90"
[specify]
target = 1e-3
[specify.pulse]
shape = "square"
duration = "50 ns"
[specify.amplitude]
[specify.phase_noise]
low = "1 kHz"
corner = "1 MHz"
[specify.dac_bits]
rate = "1 GHz"
"""


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "spin.toml"
    path.write_text(GATE, encoding="utf-8")
    return path


def run(monkeypatch: pytest.MonkeyPatch, *words: object) -> int:
    """Call the command line as a shell would, and give its exit code."""
    monkeypatch.setattr("sys.argv", ["qcosim", *(str(word) for word in words)])
    try:
        cli.main()
    except SystemExit as end:
        return int(end.code or 0)
    return 0


@pytest.mark.full
def test_a_gates_specification_as_table_files_and_archive(
    file: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    archive, masks, figure = (tmp_path / name for name in ("a.h5", "m.csv", "f.png"))
    options = ("--archive", archive, "--csv", masks, "--plot", figure)
    assert run(monkeypatch, "specify", file, *options) == 0
    out = capsys.readouterr().out
    for words in ("amplitude", "bits of the DAC", "by simulation", "Design estimate"):
        assert words in out
    assert figure.stat().st_size > 10_000
    with masks.open(encoding="utf-8") as stream:
        rows = list(csv.DictReader(stream))
    found = load_study(archive)
    assert [float(row["level"]) for row in rows] == pytest.approx(
        found.mask("phase_noise").levels.tolist(), rel=1e-8
    )
    assert run(monkeypatch, "show", archive, "--run", 1, "--json") == 0
    shown = json.loads(capsys.readouterr().out)
    assert run(monkeypatch, "specify", file, "--json") == 0
    again = json.loads(capsys.readouterr().out)
    assert {name for name in shown if shown[name] != again[name]} <= {"started", "wall_time"}
    assert [block["name"] for block in again["blocks"]] == ["amplitude", "phase_noise", "dac_bits"]
    assert again["verification"]["infidelity"] <= again["target_infidelity"] == 1e-3


def test_what_is_archived_is_what_was_found(tmp_path: Path) -> None:
    gate = specify_gate(design({"amplitude": {}, "spurs": {}, "wideband": {}}))
    readout = specify_readout(readout_bench({"noise": {}}, 0.01))
    for number, result in enumerate((gate, readout), start=1):
        assert save_study(result, tmp_path / "a.h5") == number
        again = load_study(tmp_path / "a.h5", number)
        assert type(again) is type(result)
        # NaN stands where there is no power, and equals nothing.
        assert repr(again.blocks) == repr(result.blocks)
        assert again.testbench == result.testbench
    remade = cosim.make_testbench(tomllib.loads(gate.testbench))
    assert repr(specify_gate(remade).blocks) == repr(gate.blocks)


@pytest.mark.full
def test_a_readouts_specification_on_the_terminal(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    made = readout_bench({"noise": {}, "bandwidth": {}}, 0.01)
    path = tmp_path / "readout.toml"
    path.write_text(made.to_toml(), encoding="utf-8")
    assert run(monkeypatch, "specify", path, "--plot", tmp_path / "r.svg") == 0
    out = capsys.readouterr().out
    for words in ("noise temperature", "bandwidth, one pole", "integrated shots", "target met"):
        assert words in out
    assert (tmp_path / "r.svg").stat().st_size > 5_000
    assert run(monkeypatch, "specify", path, "--csv", tmp_path / "m.csv") == 2


def test_a_testbench_without_a_circuit_cannot_be_run(file: Path) -> None:
    for what in (cosim.run, check_testbench):
        with pytest.raises(TestbenchError, match=r"no \[netlist\] and no \[waveform\]"):
            what(file)


def test_an_infeasible_target_exits_with_2_and_says_why(
    file: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    file.write_text(GATE.replace("1 ms", "10 us").replace("1e-3", "1e-4"), encoding="utf-8")
    assert run(monkeypatch, "specify", file) == 2
    assert "decoherence" in capsys.readouterr().err


def test_a_testbench_with_a_circuit_is_specified_without_running_it() -> None:
    path = Path(__file__).parents[2] / "examples" / "x180_transmon.toml"
    with path.open("rb") as stream:
        tables = tomllib.load(stream)
    pulse = {"shape": "raised cosine", "duration": "50 ns", "drag": 0.5}
    tables["specify"] = {"target": 2e-3, "pulse": pulse, "amplitude": {}}
    tables["netlist"]["file"] = "there_is_no_such_deck.cir"
    found = specify_gate(cosim.make_testbench(tables))
    assert found.block("amplitude").share == pytest.approx(found.budget, rel=1e-3)
