"""Small-signal analyses by `ngspice -b`, without the package: an oracle of the circuits' tests."""

from pathlib import Path

import numpy as np

from cosim.circuit.deck import Deck
from cosim.waveform import ComplexArray, FloatArray
from tests.circuit.batch import run_batch


def ac_analysis(
    deck: Deck,
    folder: Path,
    band: tuple[float, float, int],
    nodes: tuple[str, ...],
    *,
    extra: tuple[str, ...] = (),
    quiet: bool = False,
) -> tuple[FloatArray, dict[str, ComplexArray]]:
    """Frequencies in Hz on a linear grid, and voltages of nodes, for an EMF of 1 V of `vin`.

    `extra` are further lines of the deck; with `quiet` the source `vin` is at rest.
    """
    lines = [line.text for line in deck.lines]
    if quiet:
        lines = [text.replace(" ac 1", " ac 0") if text[:4] == "vin " else text for text in lines]
    kept = [text for text in lines if not text.lower().startswith((".tran", ".save"))]
    start, stop, points = band
    control = (
        ".control",
        "set wr_singlescale",
        "set numdgt=15",
        f"ac lin {points} {start!r} {stop!r}",
        "wrdata ac.txt " + " ".join(f"v({node})" for node in nodes),
        ".endc",
    )
    text = "\n".join(["* small signals", *kept, *extra, *control, ".end", ""])
    (folder / "ac.cir").write_text(text, encoding="utf-8")
    (folder / "ac.txt").unlink(missing_ok=True)
    log = run_batch("ac.cir", folder)
    assert (folder / "ac.txt").exists(), log
    table = np.loadtxt(folder / "ac.txt")
    columns = table[:, 1::2] + 1j * table[:, 2::2]
    return table[:, 0], dict(zip(nodes, columns.T, strict=True))


def scattering_matrix(
    deck: Deck,
    folder: Path,
    band: tuple[float, float, int],
    ports: tuple[str, str],
    impedance: float,
) -> tuple[FloatArray, ComplexArray]:
    """Frequencies in Hz, and S of shape (2, 2, n) of a deck with both ports loaded in the deck.

    The first port is driven by `vin` behind the impedance; the second by a current source beside
    the load of this impedance, which makes an EMF of 1 V.
    """
    first, second = ports
    f, ahead = ac_analysis(deck, folder, band, ports)
    source = (f"isecondport 0 {second} dc 0 ac {1 / impedance!r}",)
    _, back = ac_analysis(deck, folder, band, ports, extra=source, quiet=True)
    rows = [[2 * ahead[first] - 1, 2 * back[first]], [2 * ahead[second], 2 * back[second] - 1]]
    return f, np.array(rows)
