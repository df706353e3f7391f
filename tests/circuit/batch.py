"""Runs a deck with `ngspice -b`, without the package: the oracle of the tests on decks."""

import shutil
import subprocess
from pathlib import Path

import numpy as np

from cosim.circuit.analysis import Tolerances, TransientRequest, TransientResult
from cosim.circuit.deck import Deck
from cosim.circuit.simulator import simulate
from cosim.waveform import FloatArray

DECKS = Path(__file__).parent.parent / "data" / "decks"
# The decks of tests/data/decks carry these very options and times, so that both runs take the
# same steps and the waveforms can be compared number by number.
TOLERANCES = Tolerances(reltol=1e-4, vntol=1e-8, abstol=1e-12)
STEP, STOP = 2e-12, 2e-9
OPTIONS = ".options reltol=1e-4 vntol=1e-8 abstol=1e-12 method=trap trtol=1e6 xtrtol=1e6"
WRITING = """.tran 2p 2n 0 2p
.control
run
set wr_singlescale
set numdgt=15
wrdata out.txt v(out)
.endc
.end
"""
# Volts differ by the 15 digits of wrdata's text, for values of at most a few volts.
ROUNDING = 1e-14


def copy_decks(folder: Path) -> Path:
    """Copy the decks and what they include into a folder of their own."""
    return Path(shutil.copytree(DECKS, folder / "decks"))


def run_batch(deck: str, folder: Path, behaviour: str = "") -> str:
    """Run `ngspice -b` on a deck in its folder; give the log."""
    # A .spiceinit in the working folder is what ngspice runs before it reads the deck.
    # Several threads wait for one another on a busy machine.
    init = "set num_threads=1\n" + (f"set ngbehavior={behaviour}\n" if behaviour else "")
    (folder / ".spiceinit").write_text(init, encoding="utf-8")
    done = subprocess.run(
        ["ngspice", "-b", deck],
        cwd=folder,
        stdin=subprocess.DEVNULL,
        capture_output=True,
        timeout=180,
        check=False,
    )
    return (done.stdout + done.stderr).decode("latin-1")


def original(deck: str, folder: Path, behaviour: str = "") -> FloatArray:
    """v(out) of a deck whose own .control block writes it to out.txt, shape (n,), in V."""
    log = run_batch(deck, folder, behaviour)
    path = folder / "out.txt"
    assert path.exists(), log
    table = np.loadtxt(path)
    path.unlink()
    return np.asarray(table[:, 1], dtype=np.float64)


def run(deck: Deck, *saves: str, initial: str = "op", seed: int = 7) -> TransientResult:
    """Simulate a deck at the decks' own times and tolerances."""
    request = TransientRequest(
        stop=STOP,
        step=STEP,
        initial=initial,
        saves=saves or ("v(out)",),
        tolerances=TOLERANCES,
        seed=seed,
    )
    return simulate(deck, request)


def output(deck: Deck, *, initial: str = "op", seed: int = 7) -> FloatArray:
    """v(out) of a deck at the decks' own times and tolerances, shape (n,), in V."""
    return run(deck, initial=initial, seed=seed).vectors["v(out)"]
