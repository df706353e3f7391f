"""What stands behind `cosim.run`, `cosim.save` and `cosim.load`.

A chain is loaded when it is run: each has libraries that the other never needs.
"""

import os
from collections.abc import Callable
from importlib import import_module

from cosim import archive
from cosim.decision_result import DECISION_KINDS, DecisionResult
from cosim.errors import ArchiveError, InputError
from cosim.quantum.operators import OperatorSystem
from cosim.readout_result import READOUT_KINDS, ReadoutResult
from cosim.result import KINDS, GateResult
from cosim.testbench import Bench, ReadoutBench, gate_bench, load_testbench


def run(
    bench: Bench | str | os.PathLike[str],
    *,
    system: OperatorSystem | None = None,
    progress: Callable[[float], None] | None = None,
) -> GateResult | ReadoutResult | DecisionResult:
    """Run a testbench: of a gate up to the fidelity, of a readout up to the assignment error.

    Parameters
    ----------
    bench : Testbench, ReadoutBench or path
        A testbench, or the TOML file of one.
    system : OperatorSystem or None
        A user's own system from `cosim.operator_system`, for kind = "operators" in [qubit].
    progress : callable or None
        Called with the simulated time in s now and then; of the runs of a readout with their sum.

    Returns
    -------
    GateResult, ReadoutResult or DecisionResult
        A design estimate, with error bars for the numerical errors.

    Raises
    ------
    InputError
        If the testbench, the deck or the waveform cannot be used, or a readout is given a system.
    SimulationError
        If ngspice or the evolution fails.
    """
    bench = bench if isinstance(bench, Bench) else load_testbench(bench)
    result: GateResult | ReadoutResult | DecisionResult
    if not isinstance(bench, ReadoutBench):
        gate = import_module("cosim.gate")
        result = gate.run_gate(gate_bench(bench), system=system, progress=progress)
        return result
    if system is not None:
        raise InputError(
            f"{bench.source or 'the testbench'} has [readout], which takes no system of operators",
            hint="what answers is said in [resonator] or [sensor]",
        )
    if bench.readout.decision is not None:
        result = import_module("cosim.readout_decisions").run_decisions(bench, progress=progress)
    else:
        result = import_module("cosim.readout").run_readout(bench, progress=progress)
    return result


def save(result: GateResult | ReadoutResult | DecisionResult, path: str | os.PathLike[str]) -> int:
    """Add a result to an archive, which is made if it does not exist.

    Parameters
    ----------
    result : GateResult, ReadoutResult or DecisionResult
        The result of a run.
    path : path
        The HDF5 file.

    Returns
    -------
    int
        Number of the run in the archive, from 1.

    Raises
    ------
    ArchiveError
        If the file is something else, holds a sweep, or cannot be written; what was there is
        untouched.
    """
    if os.path.exists(path) and archive.read_plan(path, {}) is not None:
        raise ArchiveError(
            f"{os.fspath(path)} holds a sweep, whose runs are those of its plan",
            hint="save the result in another archive",
        )
    record = result.run
    info = archive.RunInfo(
        status="done", start_time=record.started, wall_time=sum(record.wall_times.values())
    )
    return archive.append(path, result, info=info)


def load(
    path: str | os.PathLike[str], *, run: int | None = None
) -> GateResult | ReadoutResult | DecisionResult:
    """Read a result from an archive.

    Parameters
    ----------
    path : path
        The HDF5 file.
    run : int or None
        Number of the run; default: the last.

    Returns
    -------
    GateResult, ReadoutResult or DecisionResult
        Equal to the one that was saved.

    Raises
    ------
    ArchiveError
        If the file or the run cannot be read.
    """
    result = archive.read(path, KINDS | READOUT_KINDS | DECISION_KINDS, run=run)
    if not isinstance(result, (GateResult, ReadoutResult, DecisionResult)):
        raise ArchiveError(f"{os.fspath(path)}: the run is not one that this version knows")
    return result
