"""The tables of the studies, read for their errors before any of them runs."""

from cosim.budget.table import budget_table
from cosim.calibration.table import read_calibrate
from cosim.circuit.deck import Deck
from cosim.drift.table import read_drift
from cosim.sensitivity.table import read_sensitivity
from cosim.specification.gate_specification import gate_tables
from cosim.specification.readout_request import read_readout_request
from cosim.specification.readout_specification import readout_tables
from cosim.specification.request import read_request
from cosim.testbench import Bench, ReadoutBench, gate_bench
from cosim.train.table import read_train


def check_studies(bench: Bench, deck: Deck | None) -> tuple[str, ...]:
    """Read the tables of a testbench's studies, but for [sweep], whose plan tells more.

    Parameters
    ----------
    bench : Testbench or ReadoutBench
        The testbench.
    deck : Deck or None
        Its deck as read; None when it imports a waveform.

    Returns
    -------
    tuple of str
        The studies that it has a table of; each can be read.

    Raises
    ------
    TestbenchError
        If a key or value of one is wrong, or the study takes no testbench of that kind.
    """
    names = tuple(name for name in bench.studies if name != "sweep")
    for name in names:
        if name == "calibrate":
            read_calibrate(bench, deck)
        elif name == "sensitivity":
            read_sensitivity(bench, deck)
        elif name == "budget":
            budget_table(gate_bench(bench))
        elif name == "train":
            read_train(gate_bench(bench))
        elif name == "drift":
            gate = gate_bench(bench)
            # A carrier that is estimated is known after the run, and no error depends on it.
            carrier = gate.drive.carrier if isinstance(gate.drive.carrier, float) else 1e9
            read_drift(gate, deck, carrier)
        else:
            _check_specify(bench)
    return names


def _check_specify(bench: Bench) -> None:
    file = bench.source or "the testbench"
    if isinstance(bench, ReadoutBench):
        readout_tables(bench)
        read_readout_request(bench.studies["specify"], file)
    else:
        gate_tables(bench)
        read_request(bench.studies["specify"], file)
