"""How close eight qubits may lie on one line: what a pulse on one of them does to the others.

One run of the transistor-level modulator, with the spurs that it has; the seven others see the
same waveform at every spacing that is tried. Their phases are left to virtual Z. Multiples of
10 MHz, one over the pulse's 100 ns, lie in the gaps of its spectrum and hold for this length of
pulse only; the spacings between them tell what its edges cost.
"""

import tomllib
from dataclasses import replace
from pathlib import Path

import cosim
from cosim.schema import SpectatorTable

HERE = Path(__file__).parent
QUBITS = 8
SPACINGS = (5e6, 10e6, 15e6, 20e6, 25e6, 50e6, 55e6, 75e6, 95e6, 100e6, 105e6)  # Hz
TARGET = 3  # of 0 to 7: the one that is driven, in the middle of the band
TIGHT = 1e-3  # infidelity that the register's neighbours may cost together


def main() -> None:
    """Run the modulator once and print a line per spacing."""
    tables = tomllib.loads((HERE / "x90_spin.toml").read_text(encoding="utf-8"))
    bench = cosim.make_testbench(tables, folder=HERE)
    neighbours = tuple(
        SpectatorTable(
            "spin",
            bench.qubit.rabi_per_volt,
            offset=(place - TARGET) * spacing,
            name=f"q{place} at {spacing:.9g}",
        )
        for spacing in SPACINGS
        for place in range(QUBITS)
        if place != TARGET
    )
    accuracy = replace(bench.accuracy, floor=False)
    result = cosim.run(replace(bench, spectator=neighbours, accuracy=accuracy))
    print(f"target alone: 1 - F_avg {result.free_frame.infidelity:.3e}, free frame")
    print("spacing (MHz)  all neighbours  worst one  its phase (rad)")
    least: float | None = None
    for number, spacing in enumerate(SPACINGS):
        group = result.spectators[number * (QUBITS - 1) : (number + 1) * (QUBITS - 1)]
        total = sum(item.free_frame_infidelity for item in group)
        worst = max(group, key=lambda item: item.free_frame_infidelity)
        verdict = "too tight" if total > TIGHT else "wide enough"
        least = None if total > TIGHT else least or spacing
        print(
            f"{spacing / 1e6:13.0f}  {total:14.3e}  {worst.free_frame_infidelity:9.3e}"
            f"  {worst.phase:15.4f}  {verdict}"
        )
    if least is not None:
        print(f"all that were tried are wide enough from {least / 1e6:.0f} MHz on")


if __name__ == "__main__":
    main()
