"""Oracle: the operating system's own account of memory, descriptors, children and folders."""

import gc
import os
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import psutil
import pytest

import cosim
from cosim.capture import capture_probe, make_plan
from cosim.circuit.client import client_of_this_process
from cosim.errors import SimulationError

EXAMPLES = Path(__file__).parents[2] / "examples"


def children() -> int:
    return len(psutil.Process().children(recursive=True))


def entries(folder: Path) -> int:
    return len(list(folder.iterdir()))


@pytest.fixture
def own_folder(monkeypatch: pytest.MonkeyPatch) -> Iterator[Path]:
    """A temporary folder that no other process writes to, for a new host."""
    folder = Path(tempfile.mkdtemp(prefix="many-", dir=tempfile.gettempdir()))
    client_of_this_process().close()
    monkeypatch.setattr(tempfile, "tempdir", str(folder))
    yield folder
    client_of_this_process().close()
    assert list(folder.iterdir()) == []
    folder.rmdir()


@pytest.mark.ngspice
@pytest.mark.full
def test_five_hundred_runs_leave_nothing_behind(own_folder: Path) -> None:
    """Transistor-level runs in a row, every tenth failing and every twentieth timing out."""
    bench = cosim.load_testbench(EXAMPLES / "x90_spin.toml")
    plan = make_plan(bench)
    # A short stretch of the same deck: what is left behind does not depend on the length.
    request = replace(plan.request, stop=0.1e-9)
    good = replace(plan, request=request)
    endless = replace(plan, request=replace(plan.request, stop=1e-3, time_limit=0.05))
    starved = replace(plan, request=replace(request, memory_limit=64 * 2**20))
    process = psutil.Process()
    counts = dict.fromkeys(("good", "failed"), 0)

    def run(number: int) -> None:
        item = endless if number % 20 == 7 else starved if number % 10 == 3 else good
        try:
            capture_probe(item)
            counts["good"] += 1
        except SimulationError:
            counts["failed"] += 1

    for number in range(20):
        run(number)
    gc.collect()
    before = (
        process.memory_info().rss,
        process.num_fds(),
        children(),
        len(list(own_folder.iterdir())),
    )
    for number in range(500):
        run(number)
    gc.collect()
    after = (
        process.memory_info().rss,
        process.num_fds(),
        children(),
        len(list(own_folder.iterdir())),
    )
    assert counts == {"good": 520 - 26 - 52, "failed": 26 + 52}
    # Less than 1 MB of growth in the caller, and nothing else more than before.
    assert after[0] - before[0] < 1e6
    assert after[1] <= before[1]
    assert after[2] <= before[2]
    assert after[3] <= before[3]


@pytest.mark.ngspice
def test_a_script_leaves_no_process_and_no_folder(tmp_path: Path) -> None:
    code = (
        "import cosim, os\n"
        "from cosim.circuit.simulator import simulator_version\n"
        "simulator_version()\n"
        "print(os.getpid())\n"
    )
    folder = tmp_path / "scratch"
    folder.mkdir()
    done = subprocess.run(
        [sys.executable, "-c", code],
        env={**os.environ, "TMPDIR": str(folder)},
        capture_output=True,
        text=True,
        timeout=60,
        check=True,
    )
    assert list(folder.iterdir()) == []
    assert not psutil.pid_exists(int(done.stdout))
