"""What the archive of a sweep costs: per row, per whole record, to open, and in memory.

Times are the process's own, so that a busy machine does not count, except where a child works.
"""

import resource
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import psutil
import pytest

import cosim
from cosim.archive import (
    Row,
    RunInfo,
    Series,
    cells_of,
    consolidate,
    create,
    read_series,
    read_table,
    run_numbers,
    verify,
    write_rows,
)
from cosim.archive.files import list_parts
from cosim.result import GateResult
from tests.archive.sweep_rows import PLAN

ROWS = 100_000
BATCH = 128
SAMPLES = 1613
NUMBERS = 56
# Those of the archive; the chunks are h5py's own.
FILTERS = {"compression": "gzip", "compression_opts": 1, "shuffle": True, "fletcher32": True}
UNITS = {f"number{index}": "Hz" for index in range(NUMBERS)}


def own(work: Callable[[], object]) -> float:
    """Give the process time of some work in s."""
    start = time.process_time()
    work()
    return time.process_time() - start


def rows(first: int, count: int, samples: int = 0) -> list[Row]:
    """Make rows of 60 cells, 4 of them texts, and an envelope if it has samples."""
    rng = np.random.default_rng(first)
    values = rng.random((count, NUMBERS)).tolist()
    made = []
    for number, numbers in enumerate(values, first):
        cells: dict[str, bool | int | float | str] = dict(zip(UNITS, numbers, strict=True))
        cells |= {"corner": "ss", "target": "x90", "title": f"point {number}", "section": "mos_ss"}
        series = {}
        if samples:
            noise = rng.standard_normal((2, samples))
            series = {"envelope": Series(0.0, 1e-9, noise[0] + 1j * noise[1], "V", 6e9)}
        info = RunInfo("done", "2026-03-01T10:00:00+00:00", 0.5)
        made.append(Row(number, "GateResult", info, cells, UNITS, series))
    return made


def batches(count: int, samples: int = 0) -> Iterator[list[Row]]:
    for first in range(1, count + 1, BATCH):
        yield rows(first, min(BATCH, count + 1 - first), samples)


@pytest.mark.parametrize("samples", [0, SAMPLES], ids=["rows alone", "with an envelope"])
def test_cost_of_a_row(tmp_path: Path, samples: int) -> None:
    path = tmp_path / "a.h5"
    create(path, PLAN)
    # Beyond one hundred parts, so that the merges of small parts are in it.
    count = 250
    times = [
        own(lambda some=some: write_rows(path, some)) for some in batches(count * BATCH, samples)
    ]
    print(
        f"\n60 cells, {samples} samples: {1e3 * sum(times) / count / BATCH:.3f} ms per row of the "
        f"parent's time, median {1e3 * np.median(times) / BATCH:.3f}, slowest part "
        f"{max(times):.2f} s; {len(list_parts(path))} parts left of {count}"
    )
    start = time.perf_counter()
    parent = own(lambda: consolidate(path))
    print(
        f"consolidated {path.stat().st_size / 1e6:.0f} MB in {time.perf_counter() - start:.1f} s, "
        f"of which the parent {parent:.2f} s; {1e3 * own(lambda: read_series(path, 77)):.1f} ms "
        f"to read a series"
    )
    start = time.perf_counter()
    assert verify(path).damaged == ()
    print(f"verified in {time.perf_counter() - start:.1f} s")


def test_opening_a_large_table(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    create(path, PLAN)
    writing = sum(own(lambda some=some: write_rows(path, some)) for some in batches(ROWS))
    parts = list_parts(path)
    print(f"\n{ROWS} rows: written at {1e3 * writing / ROWS:.3f} ms each, {len(parts)} parts")

    def report(where: str) -> None:
        whole = min(own(lambda: read_table(path)) for _ in range(3))
        few = min(own(lambda: read_table(path, ("number7", "status"))) for _ in range(3))
        numbers = min(own(lambda: run_numbers(path)) for _ in range(3))
        table = read_table(path)
        assert table["id"].size == ROWS
        print(
            f"from {where}: {whole:.2f} s for {len(table)} columns, {few:.3f} s for three, "
            f"{numbers:.3f} s for the run numbers"
        )

    report("parts")
    start = time.perf_counter()
    parent = own(lambda: consolidate(path))
    print(
        f"consolidated in {time.perf_counter() - start:.1f} s, of which the parent {parent:.2f} s"
    )
    report("NAME.h5")


@pytest.fixture(scope="module")
def result() -> GateResult:
    bench = cosim.load_testbench(Path(__file__).parents[2] / "examples" / "x90_spin.toml")
    return cosim.run(replace(bench, accuracy=replace(bench.accuracy, floor=False)))


def write_plain(path: Path, runs: Sequence[GateResult]) -> None:
    """Write the arrays of results alone, with the filters of the archive, through plain h5py."""
    with h5py.File(path, "w") as file:
        for number, run in enumerate(runs):
            group = file.create_group(f"{number:06d}")
            for name, values in (
                ("t", run.waveform.t),
                ("v", run.waveform.v),
                ("iq", run.envelope.iq),
                ("superoperator", run.channel.superoperator),
                ("pauli_transfer_matrix", run.channel.pauli_transfer_matrix),
                *((f"extra {key}", vector.v) for key, vector in run.extra.items()),
            ):
                group.create_dataset(name, data=values, **(FILTERS if values.size > 1000 else {}))
        file.flush()


@pytest.mark.ngspice
def test_writing_whole_results(tmp_path: Path, result: GateResult) -> None:
    cells, units = cells_of(result)
    per_cell = min(own(lambda: [cells_of(result) for _ in range(100)]) for _ in range(5)) / 100
    print(f"\n{len(cells)} cells of a gate in {1e3 * per_cell:.3f} ms")
    path = tmp_path / "a.h5"
    create(path, PLAN)
    count = 16
    pairs = []
    for turn in range(7):
        whole = [
            Row(count * turn + k + 1, "GateResult", cells=cells, units=units, run=result)
            for k in range(count)
        ]
        plain = own(lambda turn=turn: write_plain(tmp_path / f"{turn}.h5", [result] * count))
        pairs.append((own(lambda whole=whole: write_rows(path, whole)), plain))
    ours, plain = (float(np.median(times)) / count for times in zip(*pairs, strict=True))
    print(
        f"whole results of {result.waveform.t.size} points: {1e3 * ours:.1f} ms each, plain h5py "
        f"{1e3 * plain:.1f} ms for their arrays, ratio of rates "
        f"{np.median([b / a for a, b in pairs]):.2f}"
    )


def test_memory_over_many_rows(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    create(path, PLAN)
    process = psutil.Process()
    seen = []
    # Batches of 16, so that there are over a thousand parts and several merges of them.
    for first in range(1, 21_000, 16):
        write_rows(path, rows(first, 16))
        seen.append(process.memory_info().rss)
    warm, rest = seen[1000 // 16], seen[1000 // 16 :]
    print(
        f"\nmemory over 20,000 rows: {(rest[-1] - warm) / 1e6:+.1f} MB at the end, "
        f"{(max(rest) - warm) / 1e6:+.1f} MB at most, {len(list_parts(path))} parts left, "
        f"peak of the process {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e3:.0f} MB"
    )
