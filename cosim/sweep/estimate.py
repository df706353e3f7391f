"""What a sweep will take, from the first points of its first run."""

from dataclasses import dataclass

from cosim.capture import make_plan
from cosim.circuit.deck import Deck
from cosim.probe_run import Estimate, estimate_run
from cosim.readout import readout_frequency
from cosim.readout_chain import make_inquiry
from cosim.readout_output import make_readout_plan
from cosim.readout_probe import estimate_readout
from cosim.readout_pulse import silent_pulse
from cosim.sweep.plan import SweepPlan
from cosim.testbench import Bench, ReadoutBench, gate_bench

# Bytes of a run's row in an archive: some sixty columns, and the texts (measured, 20,000 runs).
_ROW = 1000.0
# Bytes of a sample of the envelope, and samples per carrier period, as `demodulate` gives it.
_SAMPLE, _PER_PERIOD = 8.0, 2.0


@dataclass(frozen=True, slots=True)
class SweepEstimate:
    """What a sweep will take.

    Parameters
    ----------
    runs : int
        How many runs.
    waveforms : int
        How many simulations of the circuit: runs that differ in the qubit or the gate share one,
        readouts that differ in what is done with the records all that they simulate.
    trims : int
        How many calibrations: one for each die, and one if there is a frozen one.
    time : float
        Time of ngspice in s on one worker, both runs of each where there are two, of a readout
        all of its runs, and the most runs that the calibrations may take; NaN for imported
        waveforms.
    memory : float
        Memory for the vectors of one worker in byte, on top of the program's own.
    disk : float
        Size of the archive in byte at most.
    """

    runs: int
    waveforms: int
    trims: int
    time: float
    memory: float
    disk: float


def estimate_sweep(plan: SweepPlan) -> SweepEstimate:
    """Run the first 200 points of the first run of a sweep, and scale up.

    Parameters
    ----------
    plan : SweepPlan
        The plan.

    Returns
    -------
    SweepEstimate
        Corners and samples may take longer or shorter than the first run.

    Raises
    ------
    SimulationError, DeckError
        If the simulator fails.
    """
    runs = len(plan)
    waveforms = len({run.waveform_key for run in plan})
    trims = len({run.trim_key for run in plan if run.trim})
    bench = plan.testbench(plan.run(0))
    rows = _ROW * runs
    if bench.netlist is None:
        return SweepEstimate(runs, waveforms, trims, float("nan"), 0.0, rows)
    single, envelope = _of_run(bench, plan.corners[0].deck)
    time = single.time * waveforms
    if plan.trimming is not None:
        ready = plan.trim_bench(plan.run(0))
        trial, _ = _of_run(ready, plan.trim_corner(plan.run(0)).deck)
        time += trial.time * trims * plan.trimming.most_runs
    keep = plan.table.report.keep
    whole = runs if keep == "all" else min(runs, keep)
    return SweepEstimate(
        runs,
        waveforms,
        trims,
        time,
        single.memory,
        rows + envelope * runs + single.disk * whole,
    )


def _of_run(bench: Bench, deck: Deck | None) -> tuple[Estimate, float]:
    """Give what one run takes, and the size of its envelope in byte."""
    if isinstance(bench, ReadoutBench):
        asked = make_readout_plan(bench, readout_frequency(bench), deck)
        played = None
        if bench.resonator is not None and bench.resonator.pulse is not None:
            # The pulse's own netlist is not simulated for an estimate, nor counted in it.
            played = silent_pulse(bench.resonator, asked.request.stop)
        return estimate_readout(bench, asked, make_inquiry(bench, asked, played)), 0.0
    bench = gate_bench(bench)
    made = make_plan(bench, deck)
    carrier = bench.drive.carrier if isinstance(bench.drive.carrier, float) else 0.0
    envelope = _SAMPLE * _PER_PERIOD * carrier * made.request.stop
    return estimate_run(made, floor=bench.accuracy.floor), envelope
