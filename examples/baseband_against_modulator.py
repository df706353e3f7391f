"""The same pulse through the baseband pair and through the whole modulator.

What the modulator does beyond its envelope (LO buffers, switching quad, output network) is the
difference between the two; so is its run time, for the pair needs no carrier-rate time steps.
Both runs are design estimates without a floor run, and without decoherence.
"""

from dataclasses import replace
from math import degrees, inf
from pathlib import Path

import cosim
from cosim.comparison import compare_runs

HERE = Path(__file__).parent


def run(name: str) -> cosim.GateResult:
    """Run one of the two testbenches on a qubit that does not decay."""
    bench = cosim.load_testbench(HERE / f"{name}.toml")
    qubit = replace(bench.qubit, t1=inf, t2=inf)
    accuracy = replace(bench.accuracy, floor=False)
    return cosim.run(replace(bench, qubit=qubit, accuracy=accuracy))


def main() -> None:
    """Run both and print them side by side."""
    pair, modulator = run("x90_baseband"), run("x90_spin")
    print("                       baseband pair   modulator")
    rows = {
        "time step (ps)": (1e12 * pair.run.step, 1e12 * modulator.run.step),
        "ngspice (s)": (pair.run.wall_times["ngspice"], modulator.run.wall_times["ngspice"]),
        "amplitude (mV)": (1e3 * pair.pulse.amplitude, 1e3 * modulator.pulse.amplitude),
        "duration (ns)": (1e9 * pair.pulse.duration, 1e9 * modulator.pulse.duration),
        "rise time (ns)": (1e9 * pair.pulse.rise_time, 1e9 * modulator.pulse.rise_time),
        "angle (deg)": (degrees(pair.rotation.angle), degrees(modulator.rotation.angle)),
        "1 - F_avg": (pair.as_simulated.infidelity, modulator.as_simulated.infidelity),
        "calibrated": (pair.calibrated.infidelity, modulator.calibrated.infidelity),
    }
    for label, (first, second) in rows.items():
        print(f"{label:22s} {first:13.6g} {second:11.6g}")
    found = compare_runs(pair, modulator)
    print(f"largest difference of the waveforms: {found.waveform_difference:.3f} of the peak,")
    print("harmonics of the switching quad above all, which the qubit does not see.")


if __name__ == "__main__":
    main()
