"""A comparator's decisions as tables for a terminal."""

import math

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from cosim.decision_result import DecisionResult
from cosim.readout_terminal import add_matrix, ranked_errors
from cosim.terminal import framed, plain_table
from cosim.units import format_quantity


def decision_table(result: DecisionResult) -> Group:
    """Lay out a readout that the netlist's own comparator decides.

    Parameters
    ----------
    result : DecisionResult
        The result of a run.

    Returns
    -------
    rich.console.Group
        Heading, assignment error and matrix, what the error is made of, the comparator, counted
        decisions, warnings and the caution.
    """
    where = format_quantity(result.decide_at, "s")
    parts: list[RenderableType] = [
        Text(f"decided by the circuit at {where}, step {format_quantity(result.run.step, 's', 5)}"),
        _headline(result),
        Text(""),
        Text("what makes the wrong decisions"),
        _split_table(result),
        Text(""),
        Text("the comparator, on a scale of 0 for |0> and 1 for |1>"),
        _comparator_table(result),
        Text(""),
        Text("decisions that were counted, without changes of state"),
        _counts_table(result),
    ]
    return framed(result.title or "readout", parts, result.warnings)


def _headline(result: DecisionResult) -> Table:
    table = plain_table()
    floor = result.numerical_floor
    bar = "no numerical floor" if math.isnan(floor) else f"numerical floor {floor:.1e}"
    table.add_row(
        "assignment error",
        f"{result.assignment_error:.4e} ± {result.standard_error:.1e} (noisy runs; {bar})",
    )
    add_matrix(table, result.assignment_matrix)
    table.add_row("signal over noise", f"{result.snr:.4g}")
    return table


def _split_table(result: DecisionResult) -> Table:
    table = plain_table()
    for name, value in ranked_errors(result.errors):
        table.add_row(name, f"{value:.3e}")
    return table


def _comparator_table(result: DecisionResult) -> Table:
    table = plain_table()
    clean = f"{result.clean_offset:.4f} without noise"
    table.add_row("offset", f"{result.offset:.4f} ± {result.offset_error:.4f}, {clean}")
    table.add_row("noise", f"{result.noise:.4g} ± {result.noise_error:.2g}, {result.noise_method}")
    table.add_row("1 is worth", f"{format_quantity(result.signal, 'V')} at the source, at most")
    table.add_row("latency", f"{format_quantity(result.latency, 's')} after the window")
    if result.left_out:
        table.add_row("left out", ", ".join(result.left_out))
    return table


def _counts_table(result: DecisionResult) -> Table:
    table = plain_table()
    trials = result.counted.trials
    wrong = (result.counted.ones[0], trials[1] - result.counted.ones[1])
    for state in (0, 1):
        table.add_row(f"prepared {state}", f"{wrong[state]:.0f} of {trials[state]:.0f} wrong")
    table.add_row("for the fit", f"{result.fitted.trials.sum():.0f} around the threshold")
    return table
