"""Runs per second of decks that share a load against fresh loads, in turns within one run.

Of the process kit a short run shows the load and what takes its place, the run of the kit's own
test what is gained where the simulation itself takes longer than its load.
"""

import os
import time
from collections.abc import Callable, Sequence
from functools import partial
from pathlib import Path

import numpy as np
import pytest

from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.client import client_of_this_process
from cosim.circuit.deck import Deck, PreparedDeck
from cosim.circuit.family import simulate_family
from cosim.circuit.netlist import deck_from_text, load_deck, prepare, with_parameters
from cosim.circuit.simulator import simulate_prepared
from tests.circuit.batch import run_batch
from tests.kit.install import LIBRARY, MODELS, install_kit
from tests.kit.test_open_kit import DECK, STEP, STOP

pytestmark = pytest.mark.ngspice

MODULATOR = Path(__file__).parents[2] / "netlists" / "pulse_modulator" / "pulse_modulator.cir"
ROUNDS = 3
RUNS = 100

_ONE = TransientRequest(stop=1e-9, step=1e-10, saves=("v(a)",))
TINY = (prepare(deck_from_text("t\nv1 a 0 1\nr1 a 0 1\n.end\n", name="tiny.cir"), _ONE), _ONE)

Sets = Sequence[dict[str, float]]


@pytest.fixture(scope="module")
def kit(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return install_kit(tmp_path_factory.mktemp("kit"))


def spent() -> float:
    """Processor time in s of this process, of the host, and of its children that have ended."""
    process = client_of_this_process()._process
    assert process is not None
    words = Path(f"/proc/{process.pid}/stat").read_text().rpartition(")")[2].split()
    return time.process_time() + sum(map(int, words[11:15])) / os.sysconf("SC_CLK_TCK")


def seconds(work: Callable[[], object]) -> float:
    """Wall-clock time of some work in s."""
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def compare(name: str, deck: Deck, sets: Sets, asked: Sequence[TransientRequest]) -> None:
    ready: list[PreparedDeck] = [
        prepare(with_parameters(deck, values), one) for values, one in zip(sets, asked, strict=True)
    ]
    few = list(zip(ready, asked, strict=True))[:8]
    simulate_prepared(*few[0])  # The host runs, and files are in memory.
    results: list[object] = []

    def alone() -> None:
        results.extend(simulate_prepared(*item) for item in few)

    def shared() -> None:
        results.extend(simulate_family(ready, asked))
        simulate_prepared(*TINY)  # The loaded deck has ended, and its time is counted.

    walls: dict[Callable[[], None], list[float]] = {alone: [], shared: []}
    costs = dict.fromkeys(walls, 0.0)
    for _ in range(ROUNDS):  # In turns, since the machine is not equally busy all the time.
        for work, times in walls.items():
            before, start = spent(), time.perf_counter()
            work()
            times.append(time.perf_counter() - start)
            costs[work] += (spent() - before) / ROUNDS
    assert all(isinstance(result, TransientResult) for result in results)
    cold, warm = 1e3 * min(walls[alone]) / len(few), 1e3 * min(walls[shared]) / len(sets)
    busy, own = 1e3 * costs[alone] / len(few), 1e3 * costs[shared] / len(sets)
    print(
        f"\n{name}, {len(sets)} runs: fresh {cold:.1f} ms a run, with a shared load {warm:.1f} ms: "
        f"{cold / warm:.1f} times the runs per second; processor time {busy:.1f} and {own:.1f} ms: "
        f"{busy / own:.1f} times"
    )


def request(stop: float, step: float, saves: tuple[str, ...], seed: int = 1) -> TransientRequest:
    return TransientRequest(stop=stop, step=step, saves=saves, seed=seed)


@pytest.mark.parametrize("stop", [0.2e-9, 1e-9, STOP])
def test_a_process_kit(kit: Path, stop: float) -> None:
    deck = deck_from_text(
        DECK, name="deck.cir", include_paths=(str(kit / MODELS),), compatibility="hs"
    )
    one = request(stop, STEP, ("v(out)",))
    runs = RUNS if stop < STOP else 8
    supplies = [{"vdd": float(volts)} for volts in np.linspace(1.6, 2.0, runs)]
    compare(f"kit, {1e9 * stop:g} ns, supplies", deck, supplies, [one] * runs)
    seeds = [request(stop, STEP, ("v(out)",), seed=number + 1) for number in range(runs)]
    compare(f"kit, {1e9 * stop:g} ns, supplies and seeds (reset)", deck, supplies, seeds)


def test_fresh_loads_by_ngspice_itself(kit: Path, tmp_path: Path) -> None:
    """The kit's own test, 25 ns: ngspice with the kit's files for each run, and one shared load.

    Wanted is 8 times the runs per second.
    """
    text = DECK.replace(f'"{LIBRARY}"', f"{kit / MODELS / LIBRARY}")
    (tmp_path / "kit.cir").write_text(text, encoding="utf-8")
    deck = deck_from_text(
        DECK, name="deck.cir", include_paths=(str(kit / MODELS),), compatibility="hs"
    )
    one = request(STOP, STEP, ("v(out)",))
    supplies = [{"vdd": float(volts)} for volts in np.linspace(1.6, 2.0, 16)]
    ready = [prepare(with_parameters(deck, values), one) for values in supplies]
    simulate_prepared(ready[0], one)
    fresh, warm = [], []
    for _ in range(ROUNDS):  # In turns, since the machine is not equally busy all the time.
        fresh.append(seconds(partial(run_batch, "kit.cir", tmp_path, "hsa")))
        warm.append(seconds(lambda: list(simulate_family(ready, [one] * len(ready)))) / len(ready))
    ratio = np.median([cold / shared for cold, shared in zip(fresh, warm, strict=True)])
    print(
        f"\nkit, {1e9 * STOP:g} ns: ngspice by itself {1e3 * min(fresh):.0f} ms a run, with a "
        f"shared load {1e3 * min(warm):.0f} ms: {ratio:.1f} times the runs per second"
    )


@pytest.mark.parametrize("stop", [1e-9, 12e-9])
def test_the_pulse_modulator(stop: float) -> None:
    deck = load_deck(MODULATOR)
    one = request(stop, 1 / 80 / 6.2e9, ("v(rf_p)",))
    codes = [{"amp": float(code)} for code in range(0, 128, 16)]
    both = [
        {"amp": float(code), "vdd": volts} for code in (0, 40, 80, 120) for volts in (1.05, 1.1)
    ]
    edges = [{"c_edge": 1e-13 + 1e-14 * number} for number in range(8)]
    for name, sets in (("codes", codes), ("codes and supplies", both), ("capacitances", edges)):
        compare(f"pulse modulator, {1e9 * stop:g} ns, {name}", deck, sets, [one] * len(sets))
