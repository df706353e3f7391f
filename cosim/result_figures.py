"""The figure of a result of any kind."""

import os

from cosim.decision_figures import plot_decisions
from cosim.decision_result import DecisionResult
from cosim.figures import plot_gate
from cosim.readout_figures import plot_readout
from cosim.readout_result import ReadoutResult
from cosim.result import GateResult


def plot_result(
    result: GateResult | ReadoutResult | DecisionResult, path: str | os.PathLike[str]
) -> None:
    """Draw a result.

    Parameters
    ----------
    result : GateResult, ReadoutResult or DecisionResult
        The result of a run.
    path : path
        File to write; its ending says the format: png, pdf, svg.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    if isinstance(result, DecisionResult):
        plot_decisions(result, path)
    elif isinstance(result, ReadoutResult):
        plot_readout(result, path)
    else:
        plot_gate(result, path)
