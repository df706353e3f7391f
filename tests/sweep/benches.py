"""Testbenches of sweeps that take ngspice some 50 ms a run, and what their archives hold."""

from collections.abc import Iterator
from concurrent.futures import Executor, ThreadPoolExecutor
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np

from cosim import archive
from cosim.sweep.engine import Engine

# A burst of 20 ns at 5 GHz through an RC filter. A run fails where `fail`, in ns, lies within the
# run: the logarithm then loses its argument, after a waveform up to that time.
DECK = """a burst of a carrier through a filter
.include filter.inc
.param level=0.12 fail=1000
.tran 5p 24n
b1 in 0 v={level}*sin(6.283185307179586*5g*time)*(time>2n && time<22n ? 1 : 0)
x1 in out filter
b2 mark 0 v=ln({fail}-time*1g)
r2 mark 0 1k
.end
"""
FILTER = """* a filter
.param r=50
.subckt filter a b
r1 a b {r}
c1 b 0 0.1p
.ends
"""
BENCH = """title = "a burst"
[netlist]
file = "deck.cir"
steps_per_period = 20
[drive]
probe = "v(out)"
termination = "in deck"
carrier = "5 GHz"
[qubit]
kind = "spin"
frequency = "5 GHz"
rabi_per_volt = "100 MHz/V"
[gate]
target = "x90"
[accuracy]
floor = false
"""
# Two waveforms, each for three qubits.
GRID = """[sweep]
limit = 1e-3
keep = 2
[[sweep.grid]]
key = "netlist.parameters.level"
values = [0.12, 0.13]
[[sweep.grid]]
key = "qubit.detuning"
values = ["0 Hz", "300 kHz", "1 MHz"]
"""
# The third of four waveforms does not converge.
FAILING = """[sweep]
keep = 1
[[sweep.grid]]
key = "netlist.parameters.fail"
values = [1000, 999, 9, 998]
"""
# Each of six runs has a waveform of its own.
LEVELS = """[sweep]
keep = 2
[[sweep.grid]]
key = "netlist.parameters.level"
start = 0.10
stop = 0.15
count = 6
"""
# Transistors in place of the filter.
MOS_DECK = """a burst through a transistor
.param level=0.12 vdd=1.1
.tran 5p 24n
b1 in 0 v=0.8+{level}*sin(6.283185307179586*5g*time)*(time>2n && time<22n ? 1 : 0)
vdd dd 0 {vdd}
r1 dd out 200
m1 out in 0 0 nch w=4u l=0.1u
m2 out in 0 0 nch w=2u l=0.1u
c1 out 0 20f
.model nch nmos level=1 vto=0.4 kp=200u
.end
"""
MISMATCH = """[sweep]
keep = 1
[sweep.corners.low]
parameters = { vdd = 1.0 }
[sweep.corners.high]
parameters = { vdd = 1.2 }
[sweep.monte_carlo]
runs = 3
seed = 5
[sweep.mismatch]
threshold = "3.5 mV um"
current_factor = "1 % um"
"""
# Columns that differ between two runs of the same.
OF_TIME = frozenset({"start_time", "wall_time", "checksum"})


@contextmanager
def open_thread() -> Iterator[Executor]:
    with ThreadPoolExecutor(1) as pool:
        yield pool


# In this process, so that calls can be counted, and no process has to start.
HERE = Engine(open=open_thread, slots=lambda: 1)


def write_bench(
    folder: Path, sweep: str, *changes: tuple[str, str], deck: str = DECK, name: str = "bench.toml"
) -> Path:
    """Write the deck and the testbench, with some of its text changed; gives the testbench."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "deck.cir").write_text(deck, encoding="utf-8")
    (folder / "filter.inc").write_text(FILTER, encoding="utf-8")
    text = BENCH + sweep
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    (folder / name).write_text(text, encoding="utf-8")
    return folder / name


def rows(path: Path) -> list[dict[str, Any]]:
    """Give the runs of an archive in the order of their numbers, without times and checksums."""
    table = archive.read_table(path)
    names = [name for name in table if name not in OF_TIME]
    found = [
        {
            name: table[name][at].item() if table[name].dtype != object else table[name][at]
            for name in names
        }
        for at in range(len(table.get("id", ())))
    ]
    return sorted(found, key=lambda row: row["id"])


def differing(
    first: list[dict[str, Any]], second: list[dict[str, Any]]
) -> list[tuple[int, str, object, object]]:
    """Give what two tables do not hold alike, bit by bit: run, column, and both values."""
    found: list[tuple[int, str, object, object]] = []
    numbers = [[row["id"] for row in table] for table in (first, second)]
    if numbers[0] != numbers[1]:
        return [(0, "id", *numbers)]
    for one, two in zip(first, second, strict=True):
        for name in sorted(one.keys() | two.keys()):
            mine, theirs = one.get(name), two.get(name)
            if mine != theirs and not (mine != mine and theirs != theirs):  # Both may be NaN.
                found.append((one["id"], name, mine, theirs))
    return found


def envelopes(path: Path) -> dict[int, np.ndarray]:
    """Give the envelope of each run that has one."""
    found = {}
    for row in rows(path):
        series = archive.read_series(path, row["id"])
        if series:
            found[row["id"]] = series["envelope"].values
    return found
