"""How much power the readout needs: the assignment error against the bias of the amplifier.

The collector currents of both stages go down together. Gain and noise of the transistors follow
from their cards, so does what the converter behind them still resolves: its range stays as it is.
To save time, fewer time points and times of decay are simulated than in the example itself.

    python examples/amplifier_bias.py bias.png 0.7 1.4   # in mA; without any, those below
"""

import sys
from dataclasses import astuple, fields, replace
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

import cosim
from cosim.circuit.analysis import TransientRequest
from cosim.circuit.netlist import load_deck, with_parameters
from cosim.circuit.simulator import simulate

HERE = Path(__file__).parent
CURRENTS = (0.5e-3, 1e-3, 2e-3)  # A, of the first stage; the second has twice that


def supply_power(path: Path, parameters: dict[str, float | str]) -> float:
    """Give the mean power in W that the deck takes from its supply, over one period at rest."""
    deck = with_parameters(load_deck(path), {**parameters, "amp_in": 0.0})
    request = TransientRequest(stop=1e-9, step=2e-12, saves=("v(vdd)", "i(vsup)"))
    found = simulate(deck, request)
    return float(np.mean(-found.vectors["v(vdd)"] * found.vectors["i(vsup)"]))


def draw(powers: list[float], results: list[cosim.ReadoutResult], path: Path) -> None:
    """Draw the error and its items over the power."""
    figure = Figure(figsize=(6.4, 4.4), layout="constrained")
    axes = figure.subplots()
    scale = 1e3 * np.array(powers)
    items = np.array([astuple(result.errors) for result in results])
    errors = [result.assignment_error for result in results]
    axes.loglog(scale, errors, "ko-", linewidth=2, label="assignment error")
    for item, row in zip(fields(results[0].errors), items.T, strict=True):
        if row.max() > 1e-2 * max(errors):
            axes.loglog(scale, np.where(row > 0.0, row, np.nan), ".--", label=item.name)
    axes.set_xticks(scale, [f"{value:.2g}" for value in scale])
    axes.minorticks_off()
    axes.set(xlabel="power of the amplifier (mW)", ylabel="probability", ylim=(1e-3, 1e-1))
    axes.grid(alpha=0.3)
    axes.legend(fontsize="small", loc="lower right")
    axes.set_title("Design estimate from simulation", fontsize="medium")
    figure.savefig(path, dpi=150)


def main(picture: Path | None, currents: tuple[float, ...]) -> None:
    """Run the readout once per bias and print its row."""
    bench = cosim.load_testbench(HERE / "readout_dispersive.toml")
    assert isinstance(bench, cosim.ReadoutBench)
    readout = replace(bench.readout, decay_times=2, shots=1000, records=100)
    bench = replace(bench, readout=readout, accuracy=replace(bench.accuracy, floor=False))
    print("ic1 (mA)  power (mW)  noise (K)  added quanta      error  separation  quantisation")
    powers, results = [], []
    for current in currents:
        bias: dict[str, float | str] = {"ic1": current, "ic2": 2.0 * current}
        parameters = {**bench.netlist.parameters, **bias}
        netlist = replace(bench.netlist, parameters=parameters, steps_per_period=40)
        result = cosim.run(replace(bench, netlist=netlist))
        powers.append(supply_power(HERE / netlist.file, bias))
        results.append(result)
        print(
            f"{1e3 * current:8.2f}  {1e3 * powers[-1]:10.2f}  {result.noise_temperature:9.2f}"
            f"  {result.added_noise_quanta:12.2f}  {result.assignment_error:9.3e}"
            f"  {result.errors.separation:10.3e}  {result.errors.quantisation:12.3e}"
        )
    if picture is not None:
        draw(powers, results, picture)


if __name__ == "__main__":
    chosen = tuple(1e-3 * float(word) for word in sys.argv[2:])
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else None, chosen or CURRENTS)
