"""Oracle: what the decks' authors wrote, line by line; facts on ngspice as measured in
test_deck_equivalence.py.
"""

import hashlib
import os
import pickle
from pathlib import Path

import pytest

from cosim.circuit import source
from cosim.circuit.analysis import Tolerances, TransientRequest
from cosim.circuit.netlist import Deck, deck_from_text, load_deck, prepare
from cosim.errors import (
    CosimError,
    DeckError,
    ForbiddenDeckError,
    MissingFileError,
    UnknownNameError,
    UnsupportedDeckError,
)
from tests.circuit.batch import DECKS

CIRCUIT = "v1 in 0 1\nr1 in out 1k\nr2 out 0 1k\n"


def texts(deck: Deck) -> list[str]:
    return [line.text for line in deck.lines]


def read(body: str) -> Deck:
    return deck_from_text("title\n" + body)


def request(**changes: object) -> TransientRequest:
    fields = {"stop": 1e-9, "step": 1e-12, "saves": ("v(out)",), **changes}
    return TransientRequest(**fields)  # type: ignore[arg-type]


def test_lines_keep_their_place() -> None:
    deck = load_deck(DECKS / "includes.cir")
    places = {line.text: (os.path.basename(line.file), line.line) for line in deck.lines}
    assert places["l1 a mid 1n"] == ("second.inc", 3)
    assert places["c9 out 0 {cload}"] == ("shared.inc", 2)
    assert places["x1 out 0 tank"] == ("includes.cir", 9)
    assert places[".param rcorner={rbase}"] == ("corners.lib", 5)
    assert "r99 out 0 1" not in places
    continued = {line.text: line.line for line in load_deck(DECKS / "lines.cir").lines}
    assert continued["V1 in 0 sin(0 1 1g)"] == 8
    assert continued["r3 out 0 3k"] == 18


def test_files_are_kept_as_written() -> None:
    deck = load_deck(DECKS / "includes.cir")
    names = [os.path.basename(file.path) for file in deck.files]
    assert names == [
        "includes.cir", "two words.inc", "first.inc", "second.inc", "shared.inc", "corners.lib",
    ]  # fmt: skip
    for file in deck.files:
        content = Path(file.path).read_bytes()
        assert file.sha256 == hashlib.sha256(content).hexdigest()
        assert file.text == content.decode("utf-8")


def test_the_prepared_list_is_the_bridges_own_around_the_circuit() -> None:
    deck = load_deck(DECKS / "start.cir")
    prepared = prepare(
        deck,
        request(
            start=0.5e-9,
            initial="uic",
            seed=11,
            temperature=77.0,
            tolerances=Tolerances(reltol=1e-5, vntol=1e-9, abstol=1e-13),
        ),
    )
    assert prepared.lines[0] == "transient run"
    assert prepared.lines[1] == (
        ".options reltol=1e-05 vntol=1e-09 abstol=1e-13 method=trap trtol=1000000.0 "
        "xtrtol=1000000.0"
    )
    assert prepared.lines[2] == ".temp -196.15"
    assert prepared.lines[3:5] == (".options tnom=20", ".options scale=1e-6 gmin=1e-13")
    assert prepared.lines[-3:] == (".save v(out)", ".tran 2e-12 1e-09 5e-10 1e-12 uic", ".end")
    assert prepared.commands == ("setseed 11",)
    assert prepared.keys == {"v(out)": "out"}
    assert len(prepared.origins) == len(prepared.lines)
    assert prepared.origins[5] == (str(DECKS / "start.cir"), 7)
    assert prepared.origins[0] == prepared.origins[-1] == ("", 0)
    notices = "\n".join(prepared.notices)
    assert "77 K replaces the deck's 350 K" in notices
    assert "reltol=1e-4 left out: the run sets reltol=1e-05" in notices
    assert "trtol" not in notices  # The deck has the same value.
    assert "acct" not in notices  # It only prints.
    assert pickle.loads(pickle.dumps(prepared)) == prepared


@pytest.mark.parametrize(
    ("body", "kelvin", "notice"),
    [
        (".temp 27\n", 300.15, ""),
        (".temp -268.95\n", 4.2, ""),
        (".options temp=50\n", 323.15, ""),
        (".option temp = 50 gmin=1e-12\n.temp 60\n", 333.15, ""),
        (".param t=50\n.temp {t}\n", 323.15, ""),
        (".temp 4.2\n", 277.35, "for 4.2 K write -268.95"),
        (".temp 20\n", 293.15, "for 20 K write"),
        (".temp 25 100\n", 298.15, "2 temperatures"),
        (".temp {agauss(1,2,3)}\n", None, "cannot be told"),
        (".temp 25.5C\n", 298.65, ""),
        (".temp 26\u00b0C\n", 299.15, ""),
        ("", None, ""),
    ],
)
def test_temperatures(body: str, kelvin: float | None, notice: str) -> None:
    deck = read(CIRCUIT + body)
    assert deck.temperature == (pytest.approx(kelvin, abs=1e-9) if kelvin else None)
    assert notice in "\n".join(deck.notices)
    assert bool(notice) == bool(deck.notices)


def test_a_temperature_below_absolute_zero_is_refused() -> None:
    with pytest.raises(DeckError, match="absolute zero"):
        read(CIRCUIT + ".temp -300\n")


@pytest.mark.parametrize(
    ("element", "error", "notice"),
    [
        ("d1 out 0 m\n.model m d\n", "diode", ""),
        ("x1 out s\n.subckt s a\nq1 a a 0 m\n.model m npn\n.ends\n", "bipolar", ""),
        ("m1 out out 0 0 m\n.model m nmos level=1\n", "", "uncalibrated"),
        (".subckt unused a\nd1 a 0 m\n.model m d\n.ends\n", "", ""),
    ],
)
def test_models_that_do_not_reach_down_to_the_temperature(
    element: str, error: str, notice: str
) -> None:
    deck = read(CIRCUIT + element)
    prepare(deck, request(temperature=20.0))
    if error:
        with pytest.raises(DeckError, match=error) as caught:
            prepare(deck, request(temperature=4.2))
        assert caught.value.line > 0
    else:
        assert notice in "\n".join(prepare(deck, request(temperature=4.2)).notices)


@pytest.mark.parametrize(
    ("card", "wanted"),
    [
        (".tran 1n 10n\n", (1e-9, 1e-8, 0.0, None, False)),
        (".TRAN 1ns 10ns 2ns 0.5ns UIC\n", (1e-9, 1e-8, 2e-9, 5e-10, True)),
        (".tran 1n,10n uic\n", (1e-9, 1e-8, 0.0, None, True)),
        (".param s=1n\n.tran {s} '10*s' 0 {s / 2}\n", (1e-9, 1e-8, 0.0, 5e-10, False)),
        (".tran 1n 10n\n.tran 2n 20n\n", (1e-9, 1e-8, 0.0, None, False)),
        (".if (0)\n.tran 5n 50n\n.else\n.tran 1n 10n\n.endif\n", (1e-9, 1e-8, 0.0, None, False)),
    ],
)
def test_the_decks_own_analysis_gives_defaults(
    card: str, wanted: tuple[float, float, float, float | None, bool]
) -> None:
    tran = read(CIRCUIT + card).tran
    assert tran is not None
    assert (tran.step, tran.stop, tran.start) == pytest.approx(wanted[:3], rel=1e-12)
    assert tran.max_step == (pytest.approx(wanted[3], rel=1e-12) if wanted[3] else None)
    assert tran.uic == wanted[4]


def test_an_analysis_whose_times_cannot_be_told_gives_none() -> None:
    deck = read(CIRCUIT + ".tran {agauss(1n,0,1)} 1n\n")
    assert deck.tran is None
    assert "cannot be told" in deck.notices[0]
    with pytest.raises(DeckError, match="step and a stop"):
        read(CIRCUIT + ".tran 1n\n")


@pytest.mark.parametrize(
    ("line", "sent", "notice"),
    [
        (".options gmin=1e-15 post probe nomod", ".options gmin=1e-15", ""),
        (".options interp", "", "interp left out"),
        (".OPTIONS CSHUNT=1f KLU", ".options klu", "capacitors"),
        (".option method=gear maxord=3", "", "the run sets method=trap"),
        (".options seed=random", "", "a seed of"),
        (".options scale=1u, tnom={20+5} noopiter", ".options scale=1u tnom={20+5} noopiter", ""),
        (".options gmin", "", "gmin left out"),
        (".options ngbehavior=ps", "", "ngbehavior=ps left out"),
    ],
)
def test_options(line: str, sent: str, notice: str) -> None:
    prepared = prepare(read(CIRCUIT + line + "\n"), request())
    found = [text for text in prepared.lines if text.startswith(".options")][1:]
    assert found == ([sent] if sent else [])
    assert notice in "\n".join(prepared.notices)
    assert bool(notice) == bool(prepared.notices)


def test_an_option_that_a_kit_repeats_is_said_once() -> None:
    body = ".options parser scale=1.0u\n" * 3 + ".options parser interp\n.options gmin\n"
    prepared = prepare(read(CIRCUIT + body), request())
    assert prepared.notices == (
        "circuit:5: option parser left out (and in 3 further cards)",
        "circuit:8: option interp left out",
        "circuit:9: option gmin left out",
    )
    assert prepared.lines.count(".options scale=1.0u") == 3


@pytest.mark.parametrize(
    ("line", "kept", "notice"),
    [
        ("v9 x 0 dc 1 trnoise(1m 1n 0 0)", "v9 x 0 dc 1", "trnoise left out"),
        ("v9 x 0 TRRANDOM (2 1n 0 1m 0) dc 1", "v9 x 0  dc 1", "trrandom left out"),
        ("i9 x 0 trnoise 1m 1n 0 0 ac 1", "i9 x 0 ac 1", "trnoise left out"),
        ("i9 x 0 trnoise({a*(1+b)} 1n)", "i9 x 0", "trnoise left out"),
        ("v9 trnoise 0 1", "v9 trnoise 0 1", ""),
    ],
)
def test_random_waveforms_are_no_part_of_a_clean_run(line: str, kept: str, notice: str) -> None:
    deck = read(CIRCUIT + line + "\n")
    assert texts(deck)[-1] == kept
    assert notice in "\n".join(deck.notices)
    assert bool(notice) == bool(deck.notices)


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (".ac dec 10 1 1g\n", [".ac left out", "circuit:5"]),
        (".noise v(out) v1 dec 10 1 1g\n.dc v1 0 1 0.1\n", [".noise left out", ".dc left out"]),
        (
            ".control\nrun\nplot v(out)\nshell ls\nplot x\n.endc\n",
            ["run, plot, shell", "circuit:5"],
        ),
        ("*#run\n", ["command comment", "run"]),
        (".control\nrun\n", ["without .endc"]),
        ("@stop\nr3 a b\n", ["ends the file"]),
        (".end\nr3 out 0 1k\n", ["after the .end of line 5"]),
        ("% percent\n", ["passes over"]),
    ],
)
def test_what_is_left_out_is_said(body: str, words: list[str]) -> None:
    notices = "\n".join(read(CIRCUIT + body).notices)
    assert all(word in notices for word in words)


def test_output_cards_are_dropped_without_a_word() -> None:
    cards = ".print tran v(out)\n.PLOT v(out)\n.meas tran x max v(out)\n.save all\n.probe v(out)\n"
    deck = read(CIRCUIT + cards + ".four 1g v(out)\n.width out=80\n.end\n")
    assert texts(deck) == CIRCUIT.splitlines()
    assert deck.notices == ()


def test_a_circuit_in_the_title_is_noticed() -> None:
    for title in ("r1 a b 1k", "V1 in 0 dc 1.2", ".include models.lib", ".param x=1"):
        assert "is the title" in deck_from_text(f"{title}\n{CIRCUIT}").notices[0]
    for title in ("RC filter of stage two", "", "* comment", ".title x", "c"):
        assert deck_from_text(f"{title}\n{CIRCUIT}").notices == ()
    assert deck_from_text(f".TITLE my filter\n{CIRCUIT}").title == "my filter"


@pytest.mark.parametrize(
    ("body", "kind", "words"),
    [
        ("x1 out sbu\n.subckt sub a\n.ends\n", UnknownNameError, ["circuit:5", "sbu", "'sub'"]),
        ("m1 a b c d nmoss\n.model nmos1 nmos\n", UnknownNameError, ["circuit:5", "'nmos1'"]),
        ("q1 a b c qn\n", UnknownNameError, ["circuit:5", "qn", "there are none"]),
        ("d1 a 0 dm\n", UnknownNameError, ["dm"]),
        ("j1 a b 0 jm\n", UnknownNameError, ["jm"]),
        ("a1 a b am\n", UnknownNameError, ["am"]),
        ("x1 out s\n.subckt s a\nd1 a 0 local2\n.ends\n.subckt t a\n.model local2 d\n.ends\n",
         UnknownNameError, ["circuit:7", "local2"]),
        ("x1 out 0 0 s\n.subckt s a b\nr1 a b 1\n.ends\n", DeckError, ["3 nodes", "which has 2"]),
        (".subckt s a\nr1 a 0 1\n", DeckError, ["circuit:5", "'s' has no .ends"]),
        ("r3 out 0 1\n.ends\n", DeckError, ["circuit:6", ".ends without .subckt"]),
        ("c3 out\n", DeckError, ["circuit:5", "'c3' needs 2 nodes"]),
        ("b3 out v=1\n", DeckError, ["'b3' needs 2 nodes"]),
        ("m3 out in\n", DeckError, ["'m3' needs 3 nodes"]),
        (".if (1)\nr3 out 0 1\n", DeckError, [".if without .endif"]),
        (".endif\n", DeckError, [".endif without .if"]),
        (".else\n", DeckError, [".else without .if"]),
        ("x1 out s\n.subckt s a\nx1 a s\n.ends\n", DeckError, ["holds itself", "s > s"]),
        ("#r3 out 0 1\n", DeckError, ["circuit:5", "Start a comment"]),
        ("1r out 0 1\n", DeckError, ["circuit:5"]),
        (".foo 1\n", UnsupportedDeckError, ["'.foo'"]),
        (".sbckt s a\n", UnsupportedDeckError, ["'.subckt'"]),
        (".step param x 1 2 3\n", UnsupportedDeckError, [".step", "sweep"]),
        (".hdl foo.va\n", UnsupportedDeckError, ["Verilog-A", "waveform"]),
        (".prot\n5@ #k(!9 .qW\n^7%$\n.unprot\n", UnsupportedDeckError, ["encrypted", "waveform"]),
        ("**$ENCRYPTED_LIB\n", UnsupportedDeckError, ["encrypted"]),
        (".include\n", DeckError, ["without a file name"]),
        (".lib tt\nr3 a b 1\n", DeckError, ["names no section"]),
        (".model m filesource()\n", DeckError, ["file="]),
    ],
)  # fmt: skip
def test_faults_are_told_with_their_place(
    body: str, kind: type[CosimError], words: list[str]
) -> None:
    with pytest.raises(kind) as caught:
        read(CIRCUIT + body)
    assert all(word in str(caught.value) for word in words), str(caught.value)
    assert isinstance(pickle.loads(pickle.dumps(caught.value)), kind)


def test_n_elements_and_unknown_models_are_refused_when_prepared() -> None:
    deck = read(CIRCUIT + "n1 a b mod\n")
    with pytest.raises(UnsupportedDeckError, match="circuit:5"):
        prepare(deck, request())


def test_models_of_bins_and_of_outer_scopes_are_found() -> None:
    read(
        CIRCUIT + "m1 out in 0 0 nch w=1u\n.model nch.1 nmos\n.model nch.2 nmos\n"
        "x1 out s\n.subckt s a\nx1 a t\nd1 a 0 dd\n.subckt t a\nd1 a 0 dd\nm1 a a 0 0 nch\n.ends\n"
        ".ends\n.model dd d\n"
    )


def test_a_temperature_that_only_ngspice_can_work_out_is_sent_as_written() -> None:
    deck = read(CIRCUIT + ".param t={agauss(27,5,1)}\n.options temp={t} gmin=1e-13\n")
    assert deck.temperature is None
    sent = prepare(deck, request())
    assert sent.lines[2] == ".temp {t}"
    assert sent.origins[2] == ("circuit", 6)
    assert ".temp 26.85" in prepare(deck, request(temperature=300.0)).lines


def test_a_missing_include_is_told_with_its_chain(tmp_path: Path) -> None:
    (tmp_path / "deck.cir").write_text("t\n* x\n.include a.inc\n", encoding="utf-8")
    (tmp_path / "a.inc").write_text(".lib b.lib tt\n", encoding="utf-8")
    (tmp_path / "b.lib").write_text(".lib tt\n.include model.inc\n.endl\n", encoding="utf-8")
    (tmp_path / "models.inc").write_text("", encoding="utf-8")
    with pytest.raises(MissingFileError) as caught:
        load_deck(tmp_path / "deck.cir")
    message = str(caught.value)
    assert message.startswith(f"{tmp_path}/b.lib:2: file 'model.inc' not found")
    assert f"reached from {tmp_path}/a.inc:1, from {tmp_path}/deck.cir:3" in message
    assert "'models.inc'" in message
    (tmp_path / "a.inc").write_text(".lib b.lib typ\n", encoding="utf-8")
    with pytest.raises(UnknownNameError, match="no section 'typ'") as unknown:
        load_deck(tmp_path / "deck.cir")
    assert "valid names: 'tt'" in str(unknown.value)
    (tmp_path / "a.inc").write_text(".lib b.lib tt\n", encoding="utf-8")
    (tmp_path / "model.inc").write_text("", encoding="utf-8")
    with pytest.raises(UnknownNameError, match=r"no library 'c\.lib'.*\n.*'b\.lib'"):
        load_deck(tmp_path / "deck.cir", sections={"c.lib": "ff"})


def test_where_files_are_looked_for(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    kit, work = tmp_path / "kit", tmp_path / "work"
    for place in (kit, work, work / "sub"):
        place.mkdir()
        (place / "here.inc").write_text(f"r9 {place.name} 0 1\n", encoding="utf-8")
    (kit / "only.inc").write_text("r9 only 0 1\n", encoding="utf-8")
    (work / "sub" / "a.inc").write_text(".include here.inc\n", encoding="utf-8")
    deck = work / "deck.cir"

    def found(line: str) -> Deck:
        deck.write_text(f"t\n{line}\n", encoding="utf-8")
        return load_deck(deck, include_paths=[kit])

    beside = found(".include sub/a.inc")
    assert texts(beside) == ["r9 sub 0 1"]
    assert "not from" in beside.notices[0]
    assert texts(found(".include here.inc")) == ["r9 work 0 1"]
    assert texts(found(".include only.inc")) == ["r9 only 0 1"]
    assert texts(found(".include sub\\a.inc")) == ["r9 sub 0 1"]
    monkeypatch.setenv("KIT", str(kit))
    assert texts(found(".include $KIT/only.inc $ comment")) == ["r9 only 0 1"]
    assert texts(found(".include ${KIT}/only.inc ; comment")) == ["r9 only 0 1"]
    monkeypatch.setenv("HOME", str(kit))
    assert texts(found(".include '~/only.inc'")) == ["r9 only 0 1"]
    with pytest.raises(MissingFileError, match="not set in the environment"):
        found(".include $NO_SUCH_KIT/only.inc")
    (work / "linked.inc").symlink_to(work / "sub" / "here.inc")
    assert texts(found(".include linked.inc")) == ["r9 sub 0 1"]


def test_a_file_of_a_kit_outside_of_the_include_path_names_the_folder_above(tmp_path: Path) -> None:
    for name in ("kit/corners", "kit/cells/nch", "work", "other"):
        (tmp_path / name).mkdir(parents=True)
    (tmp_path / "kit/corners/kit.lib").write_text(".include ../cells/nch/n.inc\n")
    (tmp_path / "kit/cells/nch/n.inc").write_text("r9 out 0 1\n")
    (tmp_path / "other/o.inc").write_text("r9 out 0 1\n")
    deck = tmp_path / "work" / "deck.cir"
    for line, folder in (
        (".include kit.lib", tmp_path / "kit"),
        (".include ../other/o.inc", tmp_path / "other"),
    ):
        deck.write_text(f"t\n{line}\n", encoding="utf-8")
        with pytest.raises(ForbiddenDeckError) as caught:
            load_deck(deck, include_paths=[tmp_path / "kit/corners"])
        assert caught.value.hint.endswith(f"include_paths: {folder.resolve()}")


def test_files_of_a_line_that_goes_over_from_one_to_another(tmp_path: Path) -> None:
    (tmp_path / "rest.inc").write_text("* c\n+ 1k\nr3 out 0 1k\n", encoding="utf-8")
    (tmp_path / "plain.inc").write_text("r4 out\n+ 0 1k\n", encoding="utf-8")
    deck = tmp_path / "deck.cir"
    deck.write_text("t\nv1 in 0 1\nr1 in out\n.include rest.inc\n.include plain.inc\n")
    loaded = load_deck(deck)
    assert texts(loaded) == ["v1 in 0 1", "r1 in out 1k", "r3 out 0 1k", "r4 out 0 1k"]
    assert loaded.joined == (str(deck), str(tmp_path / "rest.inc"))
    deck.write_text("t\n.include plain.inc\n+ x\n")
    assert load_deck(deck).joined == ()


def test_data_files_are_copied_under_lower_case_names(tmp_path: Path) -> None:
    (tmp_path / "Ramp.TXT").write_bytes(b"0 0\n1 1\n")
    deck_path = tmp_path / "deck.cir"
    body = (
        'a1 %v([out]) fs\n.model fs filesource (FILE = "Ramp.TXT" amplscale=[1])\n'
        "a2 %v([out]) f2\n.model f2 filesource(file=./Ramp.TXT)\n"
    )
    deck_path.write_text(f"t\n{CIRCUIT}{body}", encoding="utf-8")
    deck = load_deck(deck_path)
    assert texts(deck)[4] == '.model fs filesource (file="{scratch}/data_1.txt" amplscale=[1])'
    assert texts(deck)[6] == '.model f2 filesource(file="{scratch}/data_1.txt")'
    assert prepare(deck, request()).data == {"data_1.txt": b"0 0\n1 1\n"}
    assert deck.data_files[0].sha256 == hashlib.sha256(b"0 0\n1 1\n").hexdigest()
    (tmp_path / "Ramp.TXT").unlink()
    with pytest.raises(MissingFileError, match=r"deck\.cir:6"):
        load_deck(deck_path)


def test_an_unchanged_file_is_read_once_and_a_changed_one_again(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "deck.cir").write_text("t\n.include a.inc\n", encoding="utf-8")
    (tmp_path / "a.inc").write_text("r1 a 0 1\n", encoding="utf-8")
    for name in ("deck.cir", "a.inc"):
        os.utime(tmp_path / name, (1e9, 1e9))
    reads: list[str] = []
    read_bytes = source.read_bytes

    def counted(path: str) -> bytes:
        reads.append(os.path.basename(path))
        return read_bytes(path)

    monkeypatch.setattr(source, "read_bytes", counted)
    for _ in range(3):
        assert texts(load_deck(tmp_path / "deck.cir")) == ["r1 a 0 1"]
    assert reads == ["deck.cir", "a.inc"]
    (tmp_path / "a.inc").write_text("r1 a 0 22\n", encoding="utf-8")
    assert texts(load_deck(tmp_path / "deck.cir")) == ["r1 a 0 22"]
    assert reads == ["deck.cir", "a.inc", "a.inc"]


def test_a_file_rewritten_at_once_and_with_the_same_length_is_read_again(tmp_path: Path) -> None:
    deck = tmp_path / "deck.cir"
    for digit in "123456789":
        deck.write_text(f"t\nr1 a 0 {digit}\n", encoding="utf-8")
        assert texts(load_deck(deck)) == [f"r1 a 0 {digit}"]


def test_the_cache_of_files_is_bounded(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(source, "_CACHED_FILES", 5)
    for number in range(9):
        (tmp_path / f"{number}.cir").write_text("t\nr1 a 0 1\n", encoding="utf-8")
        os.utime(tmp_path / f"{number}.cir", (1e9, 1e9))
        load_deck(tmp_path / f"{number}.cir")
        assert 1 <= len(source._cache) <= 5


def test_a_pspice_library_without_a_section_is_an_include(tmp_path: Path) -> None:
    (tmp_path / "deck.cir").write_text("t\n.lib m.lib\nr$1 a 0 1\n", encoding="utf-8")
    (tmp_path / "m.lib").write_text("r2 a 0 1\n", encoding="utf-8")
    deck = load_deck(tmp_path / "deck.cir", compatibility="psa")
    assert texts(deck) == ["r2 a 0 1", "r$1 a 0 1"]
    with pytest.raises(DeckError, match=r"\.lib FILE SECTION"):
        load_deck(tmp_path / "deck.cir")


@pytest.mark.parametrize(
    ("mode", "command"),
    [("hs", "hsa"), ("PSA", "psa"), ("lt", "lta"), ("all", "all"), ("spe", "spe"), ("ki", "kia")],
)
def test_a_dialect_applies_to_the_whole_list(mode: str, command: str) -> None:
    deck = deck_from_text("t\n" + CIRCUIT, compatibility=mode)
    assert prepare(deck, request()).commands[0] == f"set ngbehavior={command}"
