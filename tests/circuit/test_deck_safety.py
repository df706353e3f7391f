"""Oracle: a canary file, which `ngspice -b` writes from most of these decks and a run must not;
and a secret file, whose content must come out nowhere.
"""

import os
from pathlib import Path

import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.deck import SourceLine
from cosim.circuit.netlist import deck_from_text, load_deck, prepare, resolve_saves
from cosim.circuit.safety import check_line
from cosim.errors import (
    CosimError,
    DeckError,
    ForbiddenDeckError,
    InputError,
    MissingFileError,
    ProbeError,
    UnknownNameError,
    UnsupportedDeckError,
)
from tests.circuit.batch import OPTIONS, run, run_batch

GOOD = "v1 in 0 sin(0 1 1g)\nr1 in out 1k\nr2 out 0 1k\n"
TRAN = ".tran 2p 2n 0 2p\n.end\n"
SHELL = "shell touch CANARY"
BLOCK = f".control\n{SHELL}\n.endc\n"

# Decks that make plain ngspice write the canary, and what the bridge's notice must speak of.
RUNNING = {
    "block": GOOD + BLOCK,
    "upper case": GOOD + BLOCK.replace(".control", ".CONTROL"),
    "indented": GOOD + BLOCK.replace(".", "   \t."),
    "longer word": GOOD + BLOCK.replace(".control", ".controlfoo"),
    "without end": GOOD + f".control\n{SHELL}\n",
    "carriage returns": (GOOD + BLOCK).replace("\n", "\r\n"),
    "not taken": GOOD + f".if (0)\n{BLOCK}.endif\n",
    "in a subcircuit": GOOD + f"x1 out s\n.subckt s a\nr1 a 0 1k\n{BLOCK}.ends\n",
    "in an include": GOOD + ".include block.inc\n",
    "in a library": GOOD + ".lib block.lib tt\n",
    "command comment": GOOD + f"*#{SHELL}\n",
    "indented command comment": GOOD + f"   *#{SHELL}\n",
    "command comment in an include": GOOD + ".include hash.inc\n",
    "command comment, unused": GOOD + f".subckt s a\n*#{SHELL}\nr1 a 0 1\n.ends\n",
    "after the end": GOOD + ".end\n" + BLOCK,
    "writing": GOOD + ".control\nrun\nwrdata CANARY v(out)\n.endc\n",
    "redirection": GOOD + ".control\necho x > CANARY\n.endc\n",
}


def write_helpers(folder: Path) -> None:
    (folder / "block.inc").write_text(BLOCK, encoding="utf-8")
    (folder / "block.lib").write_text(f".lib tt\n{BLOCK}.endl\n", encoding="utf-8")
    (folder / "hash.inc").write_text(f"*#{SHELL}\n", encoding="utf-8")


@pytest.mark.ngspice
@pytest.mark.parametrize("name", RUNNING)
def test_no_command_of_a_deck_is_run(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str
) -> None:
    write_helpers(tmp_path)
    deck, canary = tmp_path / "deck.cir", tmp_path / "canary"
    text = f"title\n{OPTIONS}\n{RUNNING[name]}{TRAN}".replace("CANARY", str(canary).lower())
    assert str(tmp_path).lower() == str(tmp_path)
    deck.write_text(text, encoding="utf-8", newline="")
    for helper in tmp_path.iterdir():
        helper.write_bytes(helper.read_bytes().replace(b"CANARY", str(canary).encode()))
    run_batch("deck.cir", tmp_path)
    assert canary.exists(), "the attack does not work on plain ngspice"
    # Clear away what ngspice wrote, then let the bridge run the same deck in the same folder.
    canary.unlink()
    monkeypatch.chdir(tmp_path)
    loaded = load_deck(deck)
    assert any("left out, it is never run" in notice for notice in loaded.notices)
    result = run(loaded) if name != "without end" else run(loaded, "v(out)")
    assert not canary.exists()
    # A divider by two: the deck's circuit itself is simulated.
    assert max(result.vectors["v(out)"]) == pytest.approx(0.5, rel=0.5)


# Decks that must be refused, each with the error that says why.
REFUSED: dict[str, tuple[str, type[CosimError]]] = {
    "measure into a file": (".options measoutfile=CANARY\n.meas tran m max v(out)\n", DeckError),
    "numerical device": (
        'm1 out in 0 0 n\n.model n numos level=1\n+ output save=1 rootfile="CANARY"\n',
        ForbiddenDeckError,
    ),
    "numerical diode": (
        'd1 out 0 n\n.model n numd level=1\n+ output rootfile="CANARY"\n',
        ForbiddenDeckError,
    ),
    "vertical tab": ("\x0b.control\nshell touch CANARY\n.endc\n", DeckError),
    "line separator": ("r9 out 0 1k \u2028.control\nr8 out 0 1\n", ForbiddenDeckError),
    "next line": ("r9 out 0 1k \x85.control\nr8 out 0 1\n", ForbiddenDeckError),
    "file separator": ("r9 out 0 1k \x1c.control\nr8 out 0 1\n", ForbiddenDeckError),
    "carriage return": ("r9 out 0 1k \r.control\r shell touch CANARY\n", ForbiddenDeckError),
    "nul": ("r9 out 0\x00 1k\n", UnsupportedDeckError),
    "escape": ("r9 out 0 \x1b[2J 1k\n", ForbiddenDeckError),
    "backquote": (".param a=`touch CANARY`\n", ForbiddenDeckError),
    "external": ("v9 x 0 dc 0 external\nr9 x 0 1\n", ForbiddenDeckError),
    "external current": ("i9 x 0 EXTERNAL\nr9 x 0 1\n", ForbiddenDeckError),
    "verilog": (".hdl model.va\n", UnsupportedDeckError),
    "compiled model": ("n1 out 0 foo\n.model foo osdimodel\n", DeckError),
    "unknown model type": ("m1 out in 0 0 n\n.model n nmoss level=1\n", UnsupportedDeckError),
    "model type by a parameter": ('.param s="filesource"\n.model n {s}\n', UnsupportedDeckError),
    "unknown card": (".codemodel evil.cm\n", UnsupportedDeckError),
    "points from a file": ("v9 x 0 pwl file=CANARY\nr9 x 0 1\n", UnsupportedDeckError),
    "word with a space": (". control\nshell touch CANARY\n.endc\n", UnsupportedDeckError),
    "split over a continuation": (".con\n+trol\nshell touch CANARY\n.endc\n", UnsupportedDeckError),
    "shell line": ("#!/bin/sh\n", DeckError),
}  # fmt: skip


@pytest.mark.ngspice
@pytest.mark.parametrize("name", REFUSED)
def test_a_deck_that_would_do_more_than_simulate_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str
) -> None:
    body, kind = REFUSED[name]
    canary = tmp_path / "canary"
    text = f"title\n{GOOD}{body}{TRAN}".replace("CANARY", str(canary))
    (tmp_path / "deck.cir").write_bytes(text.encode("utf-8"))
    monkeypatch.chdir(tmp_path)
    if name == "measure into a file":
        # The option is dropped with a notice, so that the deck itself runs.
        result = run(load_deck(tmp_path / "deck.cir"))
        assert any("measoutfile" in note for note in result.warnings)
    elif name == "vertical tab":
        # A vertical tab is white space for ngspice; the block behind it is left out.
        assert run(load_deck(tmp_path / "deck.cir")).time.size
    else:
        with pytest.raises(kind) as caught:
            run(load_deck(tmp_path / "deck.cir"))
        assert isinstance(caught.value, InputError)
        assert "deck.cir" in str(caught.value)
    assert [entry.name for entry in tmp_path.iterdir()] == ["deck.cir"]


def reading_decks(outside: Path) -> dict[str, str]:
    """Decks that name a file outside of their folder."""
    up = f"../{outside.name}"
    table = f"{outside}/secret.txt"
    return {
        "absolute": f".include {outside}/secret.inc\n",
        "up": f".include {up}/secret.inc\n",
        "quoted": f'.INCLUDE "{outside}/secret.inc"\n',
        "longer word": f".incfoo {outside}/secret.inc\n",
        "library": f".lib {outside}/secret.lib tt\n",
        "link": ".include link.inc\n",
        "through a linked folder": ".include linked/secret.inc\n",
        "variable": ".include $SECRET_FOLDER/secret.inc\n",
        "home": ".include ~/secret.inc\n",
        "passwd": ".include /etc/passwd\n",
        "data file": f'a1 %vd([x 0]) fs\n.model fs filesource(file="{table}")\n',
        "data file without =": f'a1 %vd([x 0]) fs\n.model fs filesource(file "{table}")\n',
        "data file unquoted": f"a1 %vd([x 0]) fs\n.model fs filesource(file={table})\n",
        "digital source": f'a1 [x] ds\n.model ds d_source(input_file="{table}")\n',
        "state machine": f'a1 [x] y z [w] st\n.model st d_state(state_file = "{up}/secret.txt")\n',
        "table": f'a1 x y %i(z) tb\n.model tb table2d(file="{table}")\n',
        "upper case table": f'A1 x y %i(z) tb\n.MODEL tb TABLE3D(FILE="{table}")\n',
    }  # fmt: skip


@pytest.mark.parametrize("name", reading_decks(Path("outside")))
def test_nothing_outside_of_the_named_folders_is_read(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str
) -> None:
    outside, inside = tmp_path / "outside", tmp_path / "inside"
    outside.mkdir()
    inside.mkdir()
    for ending in ("inc", "lib", "txt"):
        (outside / f"secret.{ending}").write_text("pa55word 0 1\n", encoding="utf-8")
    (inside / "link.inc").symlink_to(outside / "secret.inc")
    (inside / "linked").symlink_to(outside)
    monkeypatch.setenv("SECRET_FOLDER", str(outside))
    monkeypatch.setenv("HOME", str(outside))
    deck = inside / "deck.cir"
    deck.write_text(f"title\n{GOOD}{reading_decks(outside)[name]}{TRAN}", encoding="utf-8")
    with pytest.raises(ForbiddenDeckError) as caught:
        load_deck(deck)
    assert "include_paths" in str(caught.value)
    assert "pa55word" not in str(caught.value)
    assert "deck.cir:5" in str(caught.value) or "deck.cir:6" in str(caught.value)


@pytest.mark.parametrize("name", ["/dev/zero", "pipe", "sub", "big.inc", "."])
def test_only_regular_files_of_bounded_size_are_read(tmp_path: Path, name: str) -> None:
    os.mkfifo(tmp_path / "pipe")
    (tmp_path / "sub").mkdir()
    with (tmp_path / "big.inc").open("wb") as stream:
        stream.truncate(65 * 2**20)
    deck = tmp_path / "deck.cir"
    deck.write_text(f"title\n.include {name}\n{TRAN}", encoding="utf-8")
    with pytest.raises(ForbiddenDeckError):
        load_deck(deck, include_paths=["/dev"])


@pytest.mark.parametrize("path", ["/dev/zero", "/dev/null", "/tmp", "pipe"])
def test_a_deck_is_a_regular_file(tmp_path: Path, path: str) -> None:
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(ForbiddenDeckError):
        load_deck(tmp_path / path)


def test_files_that_include_themselves_are_refused_with_the_chain(tmp_path: Path) -> None:
    (tmp_path / "deck.cir").write_text("t\n.include a.inc\n", encoding="utf-8")
    (tmp_path / "a.inc").write_text("* one\n.include b.inc\n", encoding="utf-8")
    (tmp_path / "b.inc").write_text("* two\n\n.include ./a.inc\n", encoding="utf-8")
    with pytest.raises(ForbiddenDeckError, match=r"b\.inc:3.*a\.inc.*a\.inc:2.*deck\.cir:2"):
        load_deck(tmp_path / "deck.cir")
    (tmp_path / "self.cir").write_text("t\n.include self.cir\n", encoding="utf-8")
    with pytest.raises(ForbiddenDeckError, match="includes itself"):
        load_deck(tmp_path / "self.cir")
    (tmp_path / "lib.cir").write_text("t\n.lib l.lib tt\n", encoding="utf-8")
    (tmp_path / "l.lib").write_text(
        ".lib tt\n.lib l.lib mos\n.endl\n.lib mos\n.lib l.lib tt\n.endl\n", encoding="utf-8"
    )
    with pytest.raises(ForbiddenDeckError, match="includes itself"):
        load_deck(tmp_path / "lib.cir")


@pytest.mark.full
def test_short_files_that_would_grow_without_bound_are_refused(tmp_path: Path) -> None:
    for level in range(9):
        inner = f".include level{level + 1}.inc\n" * 10
        (tmp_path / f"level{level}.inc").write_text(inner, encoding="utf-8")
    (tmp_path / "deck.cir").write_text("t\n.include level0.inc\n", encoding="utf-8")
    for innermost in ("", "r1 a 0 1\n" * 1000):
        (tmp_path / "level9.inc").write_text(innermost, encoding="utf-8")
        with pytest.raises(DeckError, match="more than"):
            load_deck(tmp_path / "deck.cir")


def test_an_include_path_opens_its_folder(tmp_path: Path) -> None:
    kit = tmp_path / "kit"
    (kit / "inner").mkdir(parents=True)
    (kit / "kit.lib").write_text(".lib tt\n.include inner/r.inc\n.endl\n", encoding="utf-8")
    (kit / "inner" / "r.inc").write_text("r9 out 0 1k\n", encoding="utf-8")
    (tmp_path / "work").mkdir()
    deck = tmp_path / "work" / "deck.cir"
    for named in (f"{kit}/kit.lib", "kit.lib", "../kit/kit.lib"):
        deck.write_text(f"t\n{GOOD}.lib {named} tt\n{TRAN}", encoding="utf-8")
        loaded = load_deck(deck, include_paths=[kit])
        assert loaded.lines[3].text == "r9 out 0 1k"
        assert loaded.lines[3].file.endswith("inner/r.inc")
        assert [os.path.basename(file.path) for file in loaded.files] == [
            "deck.cir", "kit.lib", "r.inc",
        ]  # fmt: skip
    with pytest.raises(DeckError, match="is not a folder"):
        load_deck(deck, include_paths=[tmp_path / "none"])


@pytest.mark.parametrize(
    "text",
    [
        ".control", ".control run", ".options interp", ".options measoutfile=x", ".meas tran a b",
        ".options scale=1 foo=2", ".options scale=`x`", ".options scale", ".include x", ".lib a b",
        ".model a filesource(file=\"x\")", ".model a filesource(file=\"{scratch}/../x\")",
        ".model a filesource(file=\"{scratch}/x\" file=\"/etc/passwd\")",
        ".model a filesource(file=\"{scratch}/x\"/../y)", ".model a filesource()",
        ".model a FILESOURCE file \"x\"", ".model a numd", ".model a", ".model",
        "@x", "*x", "+x", " r1 a 0 1", "!ls", "#x", "$x", "n1 a b c", "r1 a 0 1\n.control",
        "r1 a\t0 1", "", ".osdi x", ".", "1 a b", "\u00e9 a b",
    ],
)  # fmt: skip
def test_the_allow_list_refuses(text: str) -> None:
    with pytest.raises(DeckError, match=r"x\.cir:3"):
        check_line(SourceLine(text, "x.cir", 3))


@pytest.mark.parametrize("save", ["v(out) .control", "@r1[i]\n.control", "@r1[i x]", "v(in", "all"])
def test_save_expressions_are_no_way_in(save: str) -> None:
    deck = deck_from_text("t\n" + GOOD)
    with pytest.raises((ProbeError, UnknownNameError)):
        resolve_saves(deck, [save])


def test_nothing_of_the_title_or_of_comments_is_sent(tmp_path: Path) -> None:
    deck = deck_from_text(f"*#shell ls\n* .control\n{GOOD}* shell\n{TRAN}")
    request = TransientRequest(stop=1e-9, step=1e-12, saves=("v(out)",))
    sent = "\n".join(prepare(deck, request).lines)
    assert "shell" not in sent
    assert "control" not in sent
    assert sent.splitlines() == list(prepare(deck, request).lines)
    with pytest.raises(UnsupportedDeckError, match="script"):
        deck_from_text("*ng_script\nshell ls\n")
    with pytest.raises(DeckError, match="compatibility"):
        deck_from_text("t\n" + GOOD, compatibility="hs; shell ls")
    with pytest.raises(MissingFileError):
        load_deck(tmp_path / "none.cir")
