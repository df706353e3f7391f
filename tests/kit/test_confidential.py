"""Oracle: marks in invented files, looked for in every byte of the archive that is written."""

import hashlib
from pathlib import Path

import h5py
import pytest

import cosim
from cosim.circuit.analysis import TransientRequest
from cosim.circuit.confidential import confidential_roots, withhold
from cosim.circuit.netlist import load_deck
from cosim.circuit.simulator import simulate
from cosim.errors import DeckError, InputError, TestbenchError
from cosim.exporting import export_deck
from cosim.result import GateResult
from cosim.testbench import Testbench, make_testbench

pytestmark = pytest.mark.ngspice

# Every number of the kit is one of these, and so is every name that is not used outside of it.
MARKS = ("0.4321", "1.2345", "43.21", "hidden", "0.9876", "6.54")
CARD = "nmos level=54 version=4.5 vth0=0.4321 eta0=-0.9876 foo=1.2345"
KIT = f""".lib tt
.param hidden=43.21
.options parser scale=1
.subckt amp in out
m1 out in 0 0 card w=10u l=1u
.model card {CARD}
r1 out 0 {{hidden*6.54}}
rshort hidden2 0 0
.ends
.include more.inc
.endl
"""
MORE = ".model plain nmos level=54 vth0=0.4321 eta0=-0.9876\n.func hidden3(x) {1.2345*x}\n"
DECK = """own deck
.lib kit.lib tt
v1 src 0 sin(0 0.5 1g 0 0 90)
r1 src mid 50
x1 mid out amp
m2 out mid 0 0 plain w=2u l=1u
r2 out 0 {hidden}
.tran 1n 20n 0 10p
.end
"""


@pytest.fixture
def kit(tmp_path: Path) -> Path:
    (tmp_path / "kits" / "a").mkdir(parents=True)
    (tmp_path / "work").mkdir()
    (tmp_path / "kits" / "a" / "kit.lib").write_text(KIT, encoding="utf-8")
    (tmp_path / "kits" / "a" / "more.inc").write_text(MORE, encoding="utf-8")
    (tmp_path / "work" / "deck.cir").write_text(DECK, encoding="utf-8")
    return tmp_path / "kits"


def bench(kit: Path, *confidential: str) -> Testbench:
    tables = {
        "netlist": {
            "file": "deck.cir",
            "include_paths": ["../kits/a"],
            "confidential": list(confidential),
            "instances": {"x1.r1": {"value": 40.0}},
        },
        "drive": {"probe": "v(mid)", "termination": "in deck", "carrier": "1 GHz"},
        "qubit": {"kind": "spin", "frequency": "1 GHz", "rabi_per_volt": "200 MHz/V"},
        "gate": {"target": "x"},
        "accuracy": {"floor": False},
    }
    return make_testbench(tables, folder=kit.parent / "work")


def archived(result: GateResult, path: Path) -> str:
    """All texts of an archive: datasets and attributes, and its bytes as they are on disk."""
    cosim.save(result, path)
    found = [path.read_bytes().decode("latin-1")]

    def visit(_: str, item: h5py.Group | h5py.Dataset) -> None:
        found.extend(str(value) for value in item.attrs.values())
        if isinstance(item, h5py.Dataset) and h5py.check_string_dtype(item.dtype):
            found.append(str(item.asstr()[()]))

    with h5py.File(path) as file:
        file.visititems(visit)
    return "\n".join(found)


@pytest.mark.full
def test_nothing_of_a_confidential_kit_is_archived(kit: Path, tmp_path: Path) -> None:
    open_text = archived(cosim.run(bench(kit)), tmp_path / "open.h5")
    assert all(mark in open_text for mark in MARKS)  # The marks would be found.
    result = cosim.run(bench(kit, "../kits"))
    text = archived(result, tmp_path / "closed.h5")
    # The user's own deck names the parameter `hidden`; nothing else may tell of it.
    assert [mark for mark in MARKS if mark in text.replace("{hidden}", "")] == []
    again = cosim.load(tmp_path / "closed.h5")
    assert again.run.testbench == result.run.testbench
    assert 'confidential = [\n    "../kits",\n]' in result.run.testbench


def test_path_and_sum_stand_in_place_of_the_text(kit: Path) -> None:
    result = cosim.run(bench(kit, "../kits"))
    files = {Path(file.path).name: file for file in result.run.deck_files}
    assert files["deck.cir"].text == DECK
    assert [Path(path).name for path in result.run.withheld] == ["kit.lib", "more.inc"]
    assert cosim.run(bench(kit)).run.withheld == ()
    for name, written in (("kit.lib", KIT), ("more.inc", MORE)):
        assert files[name].text == ""
        assert files[name].sha256 == hashlib.sha256(written.encode()).hexdigest()
    sums = {name: f"{file.path} (SHA-256 {file.sha256})" for name, file in files.items()}
    sent = result.run.deck_sent.splitlines()
    # The definition that the change of x1.r1 copies stands in front of the kit's own.
    comments = [line for line in sent if line.startswith("*")]
    assert comments == [
        f"* {count} lines of {sums[name]} are left out here"
        for count, name in ((14, "kit.lib"), (2, "more.inc"))
    ]
    own = [line.replace("amp", "amp_copy1") for line in DECK.splitlines()[2:7]]
    assert [line for line in sent if line in own] == own
    complete = cosim.run(bench(kit)).run.deck_sent.splitlines()
    assert len(complete) == len(sent) - 2 + 14 + 2
    assert [line for line in complete if line in sent] == [
        line for line in sent if line not in comments
    ]


def test_what_ngspice_says_is_kept_where_it_quotes_nothing(kit: Path) -> None:
    spoken, kept = cosim.run(bench(kit)), cosim.run(bench(kit, "../kits"))
    place = f"{kit}/a/kit.lib"
    for words in ("0 ohm of 'rshort", "check of the card card: Eta0", "Model issue"):
        assert any(words in text for text in spoken.warnings)
        assert not any(words in text for text in kept.warnings)
    left_out = [text for text in kept.warnings if "is left out, since it may quote" in text]
    assert any(text.startswith(f"{place}:8: ") for text in left_out)
    assert len(left_out) == len(set(left_out))
    # The bridge's own notices quote no line, and stay.
    assert f"{place}:3: option parser left out" in kept.warnings
    assert any(line.startswith("Doing analysis at TEMP") for line in kept.run.log)
    missing = len(spoken.run.log) - (len(kept.run.log) - 1)
    assert missing > 4
    assert kept.run.log[-1].startswith(f"({missing} lines that may quote")


def test_the_waveform_is_the_same(kit: Path) -> None:
    spoken, kept = cosim.run(bench(kit)), cosim.run(bench(kit, "../kits"))
    assert (spoken.waveform.v == kept.waveform.v).all()


def test_a_link_into_a_confidential_folder_is_covered(kit: Path) -> None:
    (kit.parent / "work" / "kit.lib").symlink_to(kit / "a" / "kit.lib")
    (kit.parent / "work" / "more.inc").symlink_to(kit / "a" / "more.inc")
    (kit.parent / "alias").symlink_to(kit)
    for folder in ("../kits", "../alias", "../kits/a/"):
        result = cosim.run(bench(kit, folder))
        assert [bool(file.text) for file in result.run.deck_files] == [True, False, False]
        assert "0.4321" not in result.run.deck_sent


def test_a_deck_that_is_kept_in_part_is_not_exported(kit: Path, tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"confidential files: .*kit\.lib, .*more\.inc"):
        export_deck(cosim.run(bench(kit, "../kits")), tmp_path / "export")
    assert not (tmp_path / "export").exists()
    export_deck(cosim.run(bench(kit)), tmp_path / "export")


def test_a_folder_beside_is_not_covered(kit: Path) -> None:
    (kit.parent / "kit").mkdir()
    result = cosim.run(bench(kit, "../kit"))
    assert all(file.text for file in result.run.deck_files)
    assert any("no file of the deck lies in a confidential folder" in t for t in result.warnings)


def test_a_folder_that_is_not_there_is_refused(kit: Path) -> None:
    with pytest.raises(DeckError, match=r"kitz is not a folder"):
        cosim.run(bench(kit, "../kitz"))
    with pytest.raises(TestbenchError, match="confidential"):
        make_testbench({**_tables(), "netlist": {"file": "deck.cir", "confidential": "../kits"}})


def _tables() -> dict[str, dict[str, object]]:
    return {
        "drive": {"probe": "v(out)", "termination": "in deck", "carrier": "1 GHz"},
        "qubit": {"kind": "spin", "frequency": "1 GHz", "rabi_per_volt": "200 MHz/V"},
        "gate": {"target": "x"},
    }


@pytest.mark.parametrize("confidential_first", [True, False])
def test_a_line_in_two_files_is_refused(kit: Path, confidential_first: bool) -> None:
    inside, outside = kit / "a" / "kit.lib", kit.parent / "work" / "deck.cir"
    if confidential_first:
        inside.write_text("r9 out 0\n.include rest.inc\n", encoding="utf-8")
        (kit.parent / "work" / "rest.inc").write_text("+ 1k\n", encoding="utf-8")
    else:
        inside.write_text("+ 43.21\n", encoding="utf-8")
    text = "t\nv1 mid 0 1\nr1 mid 0 1k\nr2 mid 0\n.include kit.lib\n.tran 1n 20n 0 10p\n"
    outside.write_text(text.replace("r2 mid 0\n", "") if confidential_first else text)
    with pytest.raises(DeckError, match="goes on in another file") as caught:
        cosim.run(bench(kit, "../kits"))
    assert caught.value.file == str(inside)


def test_a_data_file_of_a_kit_is_left_out(kit: Path, tmp_path: Path) -> None:
    wave = "0 0\n1e-9 0.4321\n"
    (kit / "a" / "wave.txt").write_text(wave, encoding="utf-8")
    (kit / "a" / "kit.lib").write_text(
        'a1 %vd([mid 0]) fs\n.model fs filesource(file="wave.txt" amploffset=[0] amplscale=[1])\n',
        encoding="utf-8",
    )
    deck_file = tmp_path / "work" / "deck.cir"
    deck_file.write_text("t\n.include kit.lib\nr1 mid 0 1k\n", encoding="utf-8")
    deck = load_deck(deck_file, include_paths=[kit / "a"])
    request = TransientRequest(stop=1e-9, step=1e-11, saves=("v(mid)",))
    result = simulate(deck, request)
    assert list(result.data.values()) == [wave.encode()]
    kept = withhold(result, deck, confidential_roots([str(kit)]))
    total = hashlib.sha256(wave.encode()).hexdigest()
    assert list(kept.data.values()) == [
        f"* {kit}/a/wave.txt (SHA-256 {total}) is left out here\n".encode()
    ]
    assert withhold(result, deck, confidential_roots([])) is result
