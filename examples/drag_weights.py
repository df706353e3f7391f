"""What DRAG cures: a fast pi pulse on a transmon with and without the second DAC channel's part.

The two channels of the upconverter play an envelope and its derivative; the weight of the second
is a parameter of the deck. Every row is a design estimate from a run of its own.
"""

from dataclasses import replace
from math import asin, degrees
from pathlib import Path

import cosim

HERE = Path(__file__).parent
WEIGHTS = (0.0, 0.5, 1.0)


def main() -> None:
    """Run each weight and print its row."""
    bench = cosim.load_testbench(HERE / "x180_transmon.toml")
    bench = replace(bench, accuracy=replace(bench.accuracy, floor=False))
    # Without relaxation and thermal population, which hide what the pulse does by itself.
    clean = replace(bench.qubit, t1=float("inf"), t2=float("inf"), thermal_population=0.0)
    print("weight  1 - F_avg  in the free frame  leakage  tilt of the axis (deg)")
    for weight in WEIGHTS:
        netlist = replace(
            bench.netlist, parameters={**bench.netlist.parameters, "drag": weight, "bits": 16}
        )
        result = cosim.run(replace(bench, netlist=netlist, qubit=clean))
        axis = result.rotation.axis
        print(
            f"{weight:6.2f}  {result.as_simulated.infidelity:9.3e}"
            f"  {result.free_frame.infidelity:17.3e}  {result.leakage:9.3e}"
            f"  {degrees(asin(axis[2])):22.2e}"
        )


if __name__ == "__main__":
    main()
