"""Oracle: the transients that the simulator is asked for, counted."""

from collections.abc import Callable, Iterator, Sequence
from pathlib import Path

import pytest

from cosim.checks import check_testbench
from cosim.circuit import simulator
from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.family import Outcome, Progress, simulate_family
from cosim.circuit.preparation import PreparedDeck
from cosim.circuit.simulator import simulate_prepared
from cosim.readout import run_readout
from cosim.readout_decisions import run_decisions
from cosim.testbench import ReadoutBench
from tests.readout.benches import bench
from tests.readout.test_decisions import ideal

pytestmark = pytest.mark.ngspice


@pytest.fixture
def asked(monkeypatch: pytest.MonkeyPatch) -> list[float]:
    """Ends of the transients that are run, in s."""
    found: list[float] = []

    def one(
        prepared: PreparedDeck,
        request: TransientRequest,
        *,
        progress: Callable[[float], None] | None = None,
    ) -> TransientResult:
        found.append(request.stop)
        return simulate_prepared(prepared, request, progress=progress)

    def many(
        decks: Sequence[PreparedDeck],
        requests: Sequence[TransientRequest],
        *,
        progress: Progress | None = None,
    ) -> Iterator[Outcome]:
        found.extend(request.stop for request in requests)
        return simulate_family(decks, requests, progress=progress)

    monkeypatch.setattr(simulator, "simulate_prepared", one)
    monkeypatch.setattr("cosim.readout_output.simulate_family", many)
    return found


def foretold(made: ReadoutBench, folder: Path) -> int:
    path = folder / "testbench.toml"
    path.write_text(made.to_toml(), encoding="utf-8")
    found, _ = check_testbench(path)
    (count,) = [int(item.value) for item in found if item.name == "transients"]
    return count


def test_runs_with_injected_noise(tmp_path: Path, asked: list[float]) -> None:
    noise = {"acts_on": "probe", "from": "netlist", "method": "injection", "seeds": 2}
    made = bench(
        tmp_path,
        noise=[{**noise, "by_device": True}],
        netlist={"steps_per_period": 20},
        readout={"shots": 1000, "records": 100, "t1": "20 us", "decay_times": 2},
        accuracy={"floor": True},
    )
    expected = foretold(made, tmp_path)
    asked.clear()
    run_readout(made)
    # A chain that does not bend, so that all is known beforehand.
    assert len(asked) == expected


def test_runs_of_a_comparator(tmp_path: Path, asked: list[float]) -> None:
    made = ideal(tmp_path, accuracy={"floor": True})
    expected = foretold(made, tmp_path)
    asked.clear()
    run_decisions(made)
    # Noise that is a quarter as large takes eight more until decisions err.
    assert len(asked) == pytest.approx(expected, abs=16.0)
    assert expected > 80
