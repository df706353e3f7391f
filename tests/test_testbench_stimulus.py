"""Oracle: scipy.signal.lsim, the deck's own PULSE sources, the numbers that stand in the tables."""

import copy
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from scipy.signal import lsim

from cosim.capture import capture_probe, make_plan
from cosim.config import Level
from cosim.errors import DeckError, InputError, TestbenchError, UnknownNameError
from cosim.stimuli import FileStimulus, PatternStimulus, PointsStimulus, WordsStimulus
from cosim.testbench import Testbench, load_testbench, make_testbench
from cosim.waveform import FloatArray

FOLDER = Path(__file__).parents[1] / "netlists" / "pulse_modulator"

RC = """An RC with a source, and one that takes a current
vin in 0 dc 9
r1 in out 50
c1 out 0 1p
iin x 0 dc 9
rx x 0 1k
.end
"""

TABLES: dict[str, Any] = {
    "netlist": {"file": "rc.cir", "stop": "4 ns", "max_step": "1 ps"},
    "drive": {"probe": "v(out)", "termination": "in deck", "carrier": "5 GHz"},
    "qubit": {"kind": "spin", "frequency": "carrier", "rabi_per_volt": "1 MHz/V"},
    "gate": {"target": "x90"},
}
POINTS = {"source": "vin", "points": [["0 ns", "0 V"], ["1 ns", "1 V"]]}
CURRENT = {"source": "iin", "points": [["0 ns", "0 mA"], ["1 ns", "1 mA"]]}
PATTERN = {
    "source": "x1.vin",
    "pattern": "0110",
    "period": "1 ns",
    "low": "0 V",
    "high": "1.1 V",
    "edge": "50 ps",
    "start": "5 ns",
    "repeat": True,
}
WORDS = {
    "sources": ["vb0", "vb1", "vb2"],
    "words": [5, 0, 7],
    "clock": "1 GHz",
    "low": "-1 V",
    "high": "1 V",
    "edge": "50 ps",
    "shape": "smooth",
}
FILE = {"source": "vq", "file": "wave.csv", "value": "ch1", "time_unit": "ns", "unit": "mV"}
ALL = (POINTS, CURRENT, PATTERN, WORDS, FILE)


def bench(*stimuli: object, folder: Path = Path(), **netlist: object) -> Testbench:
    tables = copy.deepcopy(TABLES)
    tables["netlist"] |= netlist
    return make_testbench({**tables, "stimulus": list(stimuli)}, folder=folder)


def without(table: dict[str, Any], key: str) -> dict[str, Any]:
    return {name: value for name, value in table.items() if name != key}


@pytest.fixture
def rc(tmp_path: Path) -> Path:
    (tmp_path / "rc.cir").write_text(RC)
    return tmp_path


def test_quantities_are_si_inside() -> None:
    points, current, pattern, words, file = bench(*ALL).stimulus
    assert points == PointsStimulus("vin", ((0.0, Level(0.0, "V")), (1e-9, Level(1.0, "V"))))
    assert isinstance(current, PointsStimulus)
    assert current.points[1] == (1e-9, Level(1e-3, "A"))
    assert pattern == PatternStimulus(
        "x1.vin", "0110", 1e-9, Level(0.0, "V"), Level(1.1, "V"), 50e-12, 5e-9, True, "linear"
    )
    assert isinstance(words, WordsStimulus)
    assert (words.words, words.clock, words.repeat) == ((5, 0, 7), 1e9, False)
    assert file == FileStimulus("vq", "wave.csv", None, "ch1", "ns", "mV")


def test_the_tables_written_read_back_as_the_same(tmp_path: Path) -> None:
    given = bench(*ALL)
    (tmp_path / "again.toml").write_text(given.to_toml(), encoding="utf-8")
    again = load_testbench(tmp_path / "again.toml")
    assert replace(again, folder=".", source="") == given
    assert "stimulus" not in bench().to_toml()


def test_an_array_of_tables_in_a_file(tmp_path: Path) -> None:
    text = bench().to_toml() + (
        '\n[[stimulus]]\nsource = "vin"\npoints = [["0 ns", "0 V"], ["1 ns", "1 V"]]\n'
        '\n[[stimulus]]\nsource = "vq"\npattern = "01"\nperiod = "1 ns"\nlow = "0 V"\n'
    )
    (tmp_path / "a.toml").write_text(text)
    with pytest.raises(TestbenchError, match=r"a\.toml, table \[\[stimulus\]\] number 2: .*'high'"):
        load_testbench(tmp_path / "a.toml")


@pytest.mark.parametrize(
    ("stimuli", "words"),
    [
        ([POINTS, {**POINTS, "source": "VIN"}], ["number 2", "'VIN'", "already", "number 1"]),
        ([{**WORDS, "sources": ["vb0", "vb0", "vb1"]}], ["'vb0'", "already, in number 1"]),
        ([without(POINTS, "source")], ["number 1", "'source' is missing"]),
        ([{"source": "vin"}], ["number 1", "'file', 'points', 'pattern' and 'words'", "got none"]),
        ([{**POINTS, "pattern": "01"}], ["got 'points' and 'pattern'"]),
        ([{**PATTERN, "perod": "1 ns"}], ["unknown key 'perod'", "'period'"]),
        ([{**POINTS, "points": [["0 ns", "0 V"]]}], ["at least two samples"]),
        ([{**POINTS, "points": [["1 ns", "0 V"], ["1 ns", "1 V"]]}], ["must rise, but sample 1"]),
        ([{**POINTS, "points": [["0 ns", 0], ["1 ns", "1 V"]]}], ["'points.0.1'", '"1.1 V"', "0"]),
        ([{**POINTS, "points": [["0", "0 V"], ["1 ns", "1 V"]]}], ["'points.0.0'", '"10 ns"']),
        ([{**POINTS, "points": [["0 ns", "0 A"], ["1 ns", "1 A"]]}], ["'vin' takes values in V"]),
        ([{**POINTS, "points": [["0 ns", "0 V"], ["1 ns", "1 mA"]]}], ["takes values in V, got"]),
        ([{**POINTS, "source": "iin"}], ["'iin' takes values in A, got 0 V"]),
        ([{**POINTS, "source": "x1.rin"}], ["voltage or current source", "'x1.rin'"]),
        ([{**PATTERN, "pattern": "0120"}], ["bit 3 must be 0 or 1"]),
        ([{**PATTERN, "edge": "1.5 ns"}], ["at most the 1e-09 s of one bit"]),
        ([{**PATTERN, "edge": "0 s"}], ["'edge'", "more than 0 s"]),
        ([{**PATTERN, "high": "1 Hz"}], ["'high'", "'1 Hz'"]),
        ([{**PATTERN, "shape": "round"}], ["'shape'", "'linear'", "'smooth'"]),
        ([{**WORDS, "words": [5, 8]}], ["word 2 is 8", "3 lines", "0 to 7"]),
        ([{**WORDS, "words": [5.0]}], ["'words.0'", "5.0"]),
        ([{**WORDS, "sources": []}], ["at least one source"]),
        ([{**WORDS, "sources": ["vb0", "ib1"]}], ["'ib1' takes A and 'vb0' takes V"]),
        ([3], ["number 1", "wanted a table, got 3"]),
    ],
)
def test_faults_name_table_number_and_key(stimuli: list[Any], words: list[str]) -> None:
    with pytest.raises(TestbenchError) as caught:
        bench(*stimuli)
    for word in ["table [[stimulus]] number", *words]:
        assert word in str(caught.value)


def test_a_single_table_is_told_apart_from_an_array() -> None:
    with pytest.raises(TestbenchError, match=r"wanted tables \[\[stimulus\]\], with two brackets"):
        make_testbench({**TABLES, "stimulus": POINTS})


def test_an_imported_waveform_takes_no_stimulus() -> None:
    tables = {**without(TABLES, "netlist"), "waveform": {"file": "a.csv"}, "stimulus": [POINTS]}
    with pytest.raises(TestbenchError, match=r"there is no \[netlist\]"):
        make_testbench(tables)


def test_names_and_files_that_are_not_there(rc: Path) -> None:
    with pytest.raises(UnknownNameError, match="source 'vim' does not exist") as caught:
        make_plan(bench({**POINTS, "source": "vim"}, folder=rc))
    assert "did you mean 'vin'" in str(caught.value)
    with pytest.raises(DeckError, match=r"nothing\.csv"):
        make_plan(bench({"source": "vin", "file": "nothing.csv"}, folder=rc))
    (rc / "two.csv").write_text("time (ns),a (V),b (V)\n0,0,0\n1,1,1\n")
    with pytest.raises(InputError, match="'c'"):
        make_plan(bench({"source": "vin", "file": "two.csv", "value": "c"}, folder=rc))
    with pytest.raises(InputError, match="several columns: 'a', 'b'"):
        make_plan(bench({"source": "vin", "file": "two.csv"}, folder=rc))
    with pytest.raises(InputError, match="'iin' must be in A, got V"):
        make_plan(bench({"source": "iin", "file": "two.csv", "value": "a"}, folder=rc))


def test_short_edges_leave_a_notice(rc: Path) -> None:
    def notices(edge: str) -> tuple[str, ...]:
        pattern = {**PATTERN, "source": "vin", "edge": edge}
        return make_plan(bench(pattern, folder=rc, stop="20 ns")).notices

    # Edges of one and of ten steps: the corner misses by 25 % and 2.5 % of the step.
    (notice,) = notices("1 ps")
    assert "'vin'" in notice
    assert "25 %" in notice
    assert notices("10 ps") == ()


@pytest.mark.ngspice
def test_a_column_of_a_file_drives_an_rc(rc: Path) -> None:
    rng = np.random.default_rng(11)
    t_ns: FloatArray = np.cumsum(rng.uniform(0.02, 0.06, 120))
    mv: FloatArray = 300.0 * np.cumsum(rng.standard_normal(120))
    rows = "".join(f"{a!r};{b!r};7\n" for a, b in zip(t_ns.tolist(), mv.tolist(), strict=True))
    (rc / "wave.csv").write_text("time (ns);ch1 (mV);ch2 (mV)\n" + rows)
    file = {"source": "vin", "file": "wave.csv", "value": "ch1"}
    plan = make_plan(bench(file, CURRENT, folder=rc, save=["v(x)", "i(iin)"]))
    shot = capture_probe(plan)
    assert [Path(item.path).name for item in shot.files] == ["rc.cir", "wave.csv"]
    # lsim takes straight lines between its samples: the fine grid holds all corners to 1 fs.
    fine: FloatArray = np.arange(0.0, 4000.5, 0.5) * 1e-12
    drive = np.interp(fine, t_ns * 1e-9, mv * 1e-3)
    _, answer, _ = lsim(([1.0], [50e-12, 1.0]), drive - drive[0], fine)
    wanted = drive[0] + answer
    seen = np.interp(fine, shot.waveform.t, shot.waveform.v)
    # A corner between two points changes the area by up to (change of slope) h^2/8 in either of
    # the two; slopes change by up to 1 V/20 ps here: 6e-15 Vs, 1.3e-4 V behind an RC of 50 ps.
    assert np.abs(seen - wanted).max() < 4e-4
    assert np.ptp(wanted) > 1.0
    # The current ramps to 1 mA in 1 ns and holds; it flows out of node x into ground.
    current = np.interp(shot.extra["v(x)"].t, [0.0, 1e-9], [0.0, 1e-3])
    assert shot.extra["i(iin)"].v == pytest.approx(current, abs=1e-12)  # rounding
    assert shot.extra["v(x)"].v == pytest.approx(-1e3 * current, abs=1e-9)


@pytest.mark.ngspice
def test_a_confidential_file_leaves_no_samples_in_the_record(rc: Path) -> None:
    (rc / "kit").mkdir()
    (rc / "kit" / "wave.csv").write_text("time (ns),a (V)\n0,0.12345\n1,0.54321\n")
    file = {"source": "vin", "file": "kit/wave.csv"}
    plan = make_plan(bench(file, folder=rc, confidential=["kit"]))
    assert plan.notices == ()  # The file is found to be one of the confidential ones.
    shot = capture_probe(plan)
    assert shot.waveform.v[-1] == pytest.approx(0.54321, rel=1e-9)
    assert shot.result is not None
    (kept,) = shot.result.data.values()
    assert b"wave.csv" in kept
    assert b"54321" not in kept


def modulator(*stimuli: object) -> Testbench:
    tables = {
        **TABLES,
        "netlist": {
            "file": "pulse_modulator.cir",
            "stop": "8 ns",
            "steps_per_period": 160,
            "parameters": {"t_start": "2 ns", "t_stop": "4.5 ns", "c_edge": "80 fF"},
            "save": ["v(d6)", "v(d5)", "i(vd6)"],
        },
        "drive": {"probe": "v(rf_p) - v(rf_n)", "termination": "50 ohm", "carrier": "6.2 GHz"},
        "stimulus": list(stimuli),
    }
    return make_testbench(tables, folder=FOLDER)


@pytest.mark.ngspice
def test_words_play_the_modulators_own_pulse() -> None:
    words = {
        "sources": [f"vd{bit}" for bit in range(7)],
        "words": [0] * 4 + [93] * 5 + [0],
        "clock": "2 GHz",
        "low": "0 V",
        "high": "1.1 V",
        "edge": "100 ps",
    }
    own = capture_probe(make_plan(modulator()))
    plan = make_plan(modulator(words))
    assert plan.notices == ()
    played = capture_probe(plan)
    grid = np.linspace(0.0, 8e-9, 4001)
    waves = [CubicSpline(shot.waveform.t, shot.waveform.v)(grid) for shot in (own, played)]
    peak = np.abs(waves[0]).max()
    assert peak > 0.1
    # PULSE has breakpoints, behind which the grid stands otherwise against the carrier. So the two
    # differ by the error of the time step: 2.7e-3, 1.1e-3, 2.4e-4 and 5.5e-5 of the peak were
    # measured at 80, 160, 320 and 640 steps per period. This is 160.
    assert np.abs(waves[1] - waves[0]).max() < 2e-3 * peak
    turns = np.exp(-2j * np.pi * 6.2e9 * grid)
    areas = [np.trapezoid(wave * turns, grid) for wave in waves]
    # The area under the pulse turns the qubit: 2.3e-4 at this step, 3.8e-5 at half of it.
    assert abs(areas[1] - areas[0]) < 5e-4 * abs(areas[0])
    # Bit 6 of 93 is set and bit 5 is not.
    assert played.extra["v(d6)"].v.max() == pytest.approx(1.1, rel=1e-9)
    assert np.abs(played.extra["v(d5)"].v).max() < 1e-9
    assert np.abs(played.extra["i(vd6)"].v).max() > 1e-6
