"""What a sweep will take, from the first points of its first run."""

from dataclasses import dataclass

from cosim.capture import make_plan
from cosim.probe_run import estimate_run
from cosim.sweep.plan import SweepPlan

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
        How many simulations of the circuit: runs that differ in the qubit or the gate share one.
    time : float
        Time of ngspice in s on one worker, both runs of each where there are two; NaN for
        imported waveforms.
    memory : float
        Memory for the vectors of one worker in byte, on top of the program's own.
    disk : float
        Size of the archive in byte at most.
    """

    runs: int
    waveforms: int
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
    bench = plan.testbench(plan.run(0))
    rows = _ROW * runs
    if bench.netlist is None:
        return SweepEstimate(runs, waveforms, float("nan"), 0.0, rows)
    made = make_plan(bench, plan.corners[0].deck)
    single = estimate_run(made, floor=bench.accuracy.floor)
    carrier = bench.drive.carrier if isinstance(bench.drive.carrier, float) else 0.0
    envelope = _SAMPLE * _PER_PERIOD * carrier * made.request.stop
    keep = plan.table.report.keep
    whole = runs if keep == "all" else min(runs, keep)
    return SweepEstimate(
        runs,
        waveforms,
        single.time * waveforms,
        single.memory,
        rows + envelope * runs + single.disk * whole,
    )
