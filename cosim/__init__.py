"""From circuit netlists to qubit dynamics.

    bench = cosim.load_testbench("x90.toml")     a testbench: netlist, drive, qubit, gate
    result = cosim.run(bench)                    a GateResult, from ngspice to the fidelity, or
                                                 a ReadoutResult, to the assignment error,
                                                 or a DecisionResult, of a comparator's decisions
    cosim.save(result, "x90.h5")                 an archive in HDF5
    again = cosim.load("x90.h5")

Rooms, from the ground up: errors, units, config and waveform; the wings circuit (decks and
ngspice), dsp (resampling and demodulation) and quantum (evolution and fidelity), which never
import one another; coupling, where volts become rates; testbench; gate, the drive path; cli.
Quantities are SI floats inside; texts with units at the door.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from cosim.decision_result import DecisionResult
    from cosim.dispatch import load, run, save
    from cosim.errors import (
        ArchiveError,
        CosimError,
        DeckError,
        InputError,
        SimulationError,
        TestbenchError,
        WaveformError,
    )
    from cosim.quantum.operators import OperatorSystem, operator_system
    from cosim.readout_result import ReadoutResult
    from cosim.result import Fidelity, GateResult
    from cosim.testbench import ReadoutBench, Testbench, load_testbench, make_testbench
    from cosim.waveform import Envelope, Waveform

__all__ = [
    "ArchiveError",
    "CosimError",
    "DecisionResult",
    "DeckError",
    "Envelope",
    "Fidelity",
    "GateResult",
    "InputError",
    "OperatorSystem",
    "ReadoutBench",
    "ReadoutResult",
    "SimulationError",
    "Testbench",
    "TestbenchError",
    "Waveform",
    "WaveformError",
    "load",
    "load_testbench",
    "make_testbench",
    "operator_system",
    "run",
    "save",
]

_HOMES = {
    "cosim.decision_result": ("DecisionResult",),
    "cosim.dispatch": ("load", "run", "save"),
    "cosim.errors": (
        "ArchiveError",
        "CosimError",
        "DeckError",
        "InputError",
        "SimulationError",
        "TestbenchError",
        "WaveformError",
    ),
    "cosim.quantum.operators": ("OperatorSystem", "operator_system"),
    "cosim.readout_result": ("ReadoutResult",),
    "cosim.result": ("Fidelity", "GateResult"),
    "cosim.testbench": ("ReadoutBench", "Testbench", "load_testbench", "make_testbench"),
    "cosim.waveform": ("Envelope", "Waveform"),
}


def __getattr__(name: str) -> Any:
    # Names load their module when used, so that `import cosim` stays light.
    for home, names in _HOMES.items():
        if name in names:
            return getattr(import_module(home), name)
    raise AttributeError(f"module 'cosim' has no attribute '{name}'")


def __dir__() -> list[str]:
    return sorted(__all__)
