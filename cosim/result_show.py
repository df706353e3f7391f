"""Results of every kind as what is printed, for people and for machines."""

from typing import Any

from rich.console import RenderableType

from cosim.decision_result import DecisionResult, decision_numbers
from cosim.decision_terminal import decision_table
from cosim.readout_result import ReadoutResult, readout_numbers
from cosim.readout_terminal import readout_table
from cosim.result import GateResult, as_numbers
from cosim.terminal import result_table

AnyResult = GateResult | ReadoutResult | DecisionResult


def numbers_of(result: AnyResult) -> dict[str, Any]:
    """Turn a result into plain numbers for machines.

    Parameters
    ----------
    result : GateResult, ReadoutResult or DecisionResult
        The result of a run.

    Returns
    -------
    dict
        A number that does not exist is None.
    """
    if isinstance(result, DecisionResult):
        return decision_numbers(result)
    if isinstance(result, ReadoutResult):
        return readout_numbers(result)
    return as_numbers(result)


def table_of(result: AnyResult) -> RenderableType:
    """Lay out a result for a terminal.

    Parameters
    ----------
    result : GateResult, ReadoutResult or DecisionResult
        The result of a run.

    Returns
    -------
    rich.console.RenderableType
    """
    if isinstance(result, DecisionResult):
        return decision_table(result)
    if isinstance(result, ReadoutResult):
        return readout_table(result)
    return result_table(result)
