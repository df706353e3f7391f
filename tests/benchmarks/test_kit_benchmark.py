"""What reading an open process kit takes: the first time, from the cache, and of a whole run."""

import time
from collections.abc import Callable
from pathlib import Path

import pytest

from cosim.circuit import source
from cosim.circuit.analysis import TransientRequest
from cosim.circuit.netlist import Deck, load_deck, prepare
from tests.kit.install import LIBRARY, MODELS, install_kit

DECK = """two transistors of a kit
.param mc_mm_switch=0
{library}
vdd vdd 0 1.8
vin in 0 0.9
xn out in 0 0 sky130_fd_pr__nfet_01v8 l=0.15 w=1
xp out in vdd vdd sky130_fd_pr__pfet_01v8 l=0.15 w=2
.tran 1p 1n
.end
"""
LIBRARIES = {
    "continuous models": f'.lib "{MODELS}/{LIBRARY}" ff',
    "all models": f'.lib "combined_models/{LIBRARY}" ff',
    "binned models": ".include models/corners/ff.spice",
}


@pytest.fixture(scope="module")
def kit(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return install_kit(tmp_path_factory.mktemp("kit"))


# Of the processor, since a busy machine would count its other work as ours.
def timed(work: Callable[[], object]) -> float:
    start = time.process_time()
    work()
    return time.process_time() - start


@pytest.mark.parametrize("name", list(LIBRARIES))
def test_reading_a_kit(kit: Path, tmp_path: Path, name: str) -> None:
    path = tmp_path / "deck.cir"
    path.write_text(DECK.format(library=LIBRARIES[name]), encoding="utf-8")
    decks: list[Deck] = []

    def load() -> None:
        decks.append(load_deck(path, include_paths=[kit], compatibility="hs"))

    firsts = []
    for _ in range(3):
        source._cache.clear()
        firsts.append(timed(load))
    again = min(timed(load) for _ in range(5))
    deck = decks[-1]
    request = TransientRequest(stop=1e-9, step=1e-12, saves=("v(out)",))
    size = sum(len(file.text) for file in deck.files) / 2**20
    print(
        f"\n{name}: {len(deck.files)} files, {size:.1f} MiB, {len(deck.lines)} logical lines\n"
        f"  first {1e3 * min(firsts):6.0f} ms   (at most 1000 ms is meant)\n"
        f"  again {1e3 * again:6.0f} ms   (at most 100 ms is meant)\n"
        f"  to the lines sent {1e3 * timed(lambda: prepare(deck, request)):6.0f} ms"
    )
