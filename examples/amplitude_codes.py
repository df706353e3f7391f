"""Which amplitude code of the modulator's DAC is best, and how far the next ones are off.

Runs the transistor-level deck once per code, archives every run and prints a table. Each run is
a design estimate; without the floor run it has no error bar.

    python examples/amplitude_codes.py         # the five codes around the best
    python examples/amplitude_codes.py 88 98   # these
"""

import sys
from dataclasses import replace
from math import degrees
from pathlib import Path

import cosim

HERE = Path(__file__).parent
CODES = (91, 92, 93, 94, 95)


def main(codes: tuple[int, ...], archive: Path = Path("codes.h5")) -> None:
    """Run every code, save it and print its row."""
    bench = cosim.load_testbench(HERE / "x90_spin.toml")
    bench = replace(bench, accuracy=replace(bench.accuracy, floor=False))
    print("code  angle (deg)  1 - F_avg, free frame  calibrated  best scale")
    for code in codes:
        netlist = replace(bench.netlist, parameters={**bench.netlist.parameters, "amp": code})
        title = f"{bench.title}, code {code}"
        result = cosim.run(replace(bench, title=title, netlist=netlist))
        cosim.save(result, archive)
        print(
            f"{code:4d}  {degrees(result.rotation.angle):11.3f}"
            f"  {result.free_frame.infidelity:21.3e}"
            f"  {result.calibrated.infidelity:10.3e}"
            f"  {result.calibrated.amplitude_scale:10.5f}"
        )
    print(f"all runs in {archive}; look at them with: qcosim show {archive}")


if __name__ == "__main__":
    main(tuple(map(int, sys.argv[1:])) or CODES)
