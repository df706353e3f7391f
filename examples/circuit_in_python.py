"""A circuit written in Python: what a narrow band-pass filter does to a gate.

A gated carrier passes a series LC filter into a 50 ohm load. The slower the filter, the longer
its tail outside the gate's window, and the larger the angle that is lost there.
"""

from math import degrees, pi

from PySpice.Spice.Netlist import Circuit

import cosim

CARRIER = 5.0e9
PULSE = 40e-9


def filtered_drive(bandwidth: float) -> Circuit:
    """Make the circuit; `bandwidth` is that of the loaded filter in Hz."""
    resistance = 50.0
    inductance = 2 * resistance / (2 * pi * bandwidth)
    capacitance = 1 / ((2 * pi * CARRIER) ** 2 * inductance)
    circuit = Circuit("gated carrier through a band-pass filter")
    circuit.parameter("amplitude", 0.2)
    gate = f"min(max((time-5n)/1n,0),1)*min(max(({5e-9 + PULSE + 1e-9}-time)/1n,0),1)"
    circuit.BehavioralSource(
        "drive", "source", circuit.gnd, v=f"{{amplitude*cos(2*pi*{CARRIER}*time)*{gate}}}"
    )
    circuit.R("s", "source", "a", resistance)
    circuit.L("f", "a", "b", inductance)
    circuit.C("f", "b", "out", capacitance)
    return circuit


def main() -> None:
    """Run the gate for three bandwidths and print what it costs."""
    print("bandwidth (MHz)  angle (deg)  1 - F_avg, free frame  calibrated")
    for bandwidth in (1000e6, 300e6, 100e6):
        bench = cosim.make_testbench(
            {
                "title": f"x180 through a filter of {bandwidth / 1e6:g} MHz",
                "netlist": {"file": filtered_drive(bandwidth), "stop": "60 ns"},
                "drive": {"probe": "v(out)", "termination": "50 ohm", "carrier": "5 GHz"},
                "qubit": {"kind": "spin", "frequency": "5 GHz", "rabi_per_volt": "125 MHz/V"},
                "gate": {"target": "x", "window": ["4 ns", "50 ns"]},
                "accuracy": {"floor": False},
            }
        )
        result = cosim.run(bench)
        print(
            f"{bandwidth / 1e6:15g}  {degrees(result.rotation.angle):11.3f}"
            f"  {result.free_frame.infidelity:21.3e}  {result.calibrated.infidelity:10.3e}"
        )


if __name__ == "__main__":
    main()
