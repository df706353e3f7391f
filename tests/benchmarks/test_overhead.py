"""What a run costs besides ngspice: the breakdown, and its ratio to ngspice in the same run."""

from dataclasses import replace
from pathlib import Path

import pytest
from pytest_benchmark.fixture import BenchmarkFixture

import cosim
from cosim.result import GateResult

EXAMPLES = Path(__file__).parents[2] / "examples"


@pytest.mark.ngspice
@pytest.mark.parametrize("name", ["x90_spin", "x180_transmon"])
def test_everything_but_ngspice(benchmark: BenchmarkFixture, tmp_path: Path, name: str) -> None:
    bench = cosim.load_testbench(EXAMPLES / f"{name}.toml")
    bench = replace(bench, accuracy=replace(bench.accuracy, floor=False))
    results: list[GateResult] = []

    def run_and_save() -> None:
        results.append(cosim.run(bench))
        cosim.save(results[-1], tmp_path / f"{len(results)}.h5")

    # The first run pays for imports and for compiling or loading the kernel, once per process.
    benchmark.pedantic(run_and_save, rounds=5, warmup_rounds=1)
    totals = sorted(benchmark.stats.stats.data)
    times = [result.run.wall_times for result in results[1:]]
    middle = {key: sorted(time[key] for time in times)[2] for key in times[0]}
    ngspice = middle.pop("ngspice")
    # Medians of each part; archiving is what the parts leave of the whole.
    whole = totals[2] - ngspice
    middle["archive"] = max(0.0, whole - sum(middle.values()))
    print(f"\n{name}: ngspice {ngspice:.3f} s, everything else {1e3 * whole:.0f} ms")
    for key, value in sorted(middle.items(), key=lambda item: -item[1]):
        print(f"  {key:22s} {1e3 * value:7.1f} ms  {100 * value / ngspice:5.2f} %")
    print(f"  {'all of it':22s} {1e3 * whole:7.1f} ms  {100 * whole / ngspice:5.2f} %")
    benchmark.extra_info["overhead_over_ngspice"] = whole / ngspice
