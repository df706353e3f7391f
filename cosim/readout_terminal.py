"""A readout as tables for a terminal."""

import math
from dataclasses import fields

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from cosim.dsp.detection.assignment import ErrorItems
from cosim.dsp.detection.shots import ShotCounts
from cosim.readout_result import ReadoutResult
from cosim.terminal import framed, plain_table
from cosim.units import format_quantity
from cosim.waveform import FloatArray

MOST_DEVICES = 5  # named in the table
_BAR = 24  # characters of the longest bar


def readout_table(result: ReadoutResult) -> Group:
    """Lay out the result of a readout.

    Parameters
    ----------
    result : ReadoutResult
        The result of a run.

    Returns
    -------
    rich.console.Group
        Heading, assignment error and matrix, what the error is made of, noise, what the readout
        leaves behind, shots against the closed form, warnings and the caution.
    """
    parts: list[RenderableType] = [
        Text(_heading(result)),
        _headline(result),
        Text(""),
        Text("what makes the wrong decisions"),
        _split_table(result),
        Text(""),
        Text("noise at the output"),
        _noise_table(result),
        Text(""),
        Text("what the readout leaves behind"),
        _aftermath_table(result),
        Text(""),
        Text("closed form against decisions that were counted"),
        _shot_table(result),
    ]
    return framed(result.title or "readout", parts, result.warnings)


def window_of(result: ReadoutResult) -> tuple[float, float]:
    """Give the window of the integration in the deck's time.

    Parameters
    ----------
    result : ReadoutResult
        The result of a run.

    Returns
    -------
    tuple of two floats
        Start and end in s.
    """
    # The records' time begins with the first cell, and the traces stand at the middle of cells.
    time = result.traces.time
    begin = float(time[0] - 0.5 * (time[1] - time[0]))
    return begin + result.split.projection.start, begin + result.split.projection.stop


def ranked_errors(errors: ErrorItems) -> list[tuple[str, float]]:
    """Sort what makes the wrong decisions.

    Parameters
    ----------
    errors : ErrorItems
        Of a result.

    Returns
    -------
    list of (str, float)
        Name and part of the assignment error, the greatest first.
    """
    items = [(item.name, float(getattr(errors, item.name))) for item in fields(errors)]
    return sorted(items, key=lambda item: -abs(item[1]))


def add_matrix(table: Table, matrix: FloatArray) -> None:
    """Add the probabilities of the decisions to a table.

    Parameters
    ----------
    table : rich.table.Table
        Of names and values; a row for each prepared state is added.
    matrix : ndarray, shape (2, 2)
        P(i|j): decision i, state j prepared.
    """
    for state in (0, 1):
        right, wrong = matrix[state, state], matrix[1 - state, state]
        text = f"P({state}|{state}) = {right:.6f}   P({1 - state}|{state}) = {wrong:.4e}"
        table.add_row(f"prepared {state}", text)


def _heading(result: ReadoutResult) -> str:
    start, stop = (format_quantity(edge, "s") for edge in window_of(result))
    periods = result.run.steps_per_period
    grid = "" if math.isnan(periods) else f" ({periods:.4g} per period)"
    return (
        f"integrated from {start} to {stop}, step {format_quantity(result.run.step, 's', 5)}{grid}"
        f", {result.run.points} points"
    )


def _headline(result: ReadoutResult) -> Table:
    table = plain_table()
    floor = result.numerical_floor
    bar = "(no numerical floor)" if math.isnan(floor) else f"± {floor:.1e} (numerical floor)"
    best = format_quantity(result.best_integration_time, "s")
    # The lengths that were tried end with the window.
    whole = result.best_integration_time >= result.integration_time * (1.0 - 1e-9)
    if result.standard_error > 0.0:
        bar += f", ± {result.standard_error:.1e} (noisy runs)"
    table.add_row("assignment error", f"{result.assignment_error:.4e} {bar}")
    add_matrix(table, result.assignment_matrix)
    if result.leaked.size:
        text = f"P(0|2) = {result.leaked[0]:.4e}   P(1|2) = {result.leaked[1]:.4e}"
        table.add_row("leaked to 2", text)
    table.add_row("signal over noise", f"{result.snr:.4g}")
    table.add_row("integration time", format_quantity(result.integration_time, "s"))
    table.add_row(
        "best one",
        "the whole window; a longer one may be better"
        if whole
        else f"{best}, assignment error {result.best_assignment_error:.4e}",
    )
    return table


def _split_table(result: ReadoutResult) -> Table:
    table = Table(box=None, pad_edge=False, show_header=False)
    table.add_column(style="bold", no_wrap=True)
    for _ in range(2):
        table.add_column(justify="right", no_wrap=True)
    table.add_column(no_wrap=True)
    items = ranked_errors(result.errors)
    largest = max((abs(value) for _, value in items), default=0.0)
    for name, value in items:
        # A chain that bends may also help: such an item has no bar.
        length = round(_BAR * value / largest) if value > 0.0 else 0
        share = value / result.assignment_error if result.assignment_error > 0.0 else 0.0
        table.add_row(name, f"{value:.3e}", f"{share:.1%}", "█" * length)
    return table


def _noise_table(result: ReadoutResult) -> Table:
    table = plain_table()
    noise = result.noise
    method = result.noise_method
    if noise.relative_error > 0.0:
        method += f", density within ± {noise.relative_error:.0%}"
    if noise.reason:
        method += f": {noise.reason}"
    added = result.added_noise_quanta
    none = "- (a sensor, or one output in baseband)"
    quanta = f"{added:.4g} quanta: {result.efficiency:.3g} of the information is left"
    table.add_row("added noise", none if math.isnan(added) else quanta)
    kelvin = result.noise_temperature
    unsure = result.noise_temperature_error
    bar = f" ± {format_quantity(unsure, 'K', 2)}" if unsure > 0.0 else ""
    table.add_row(
        "noise temperature", none if math.isnan(kelvin) else format_quantity(kelvin, "K") + bar
    )
    table.add_row("method", method)
    if noise.devices:
        most = list(noise.devices.items())[:MOST_DEVICES]
        text = ", ".join(f"{name} {share:.1%}" for name, share in most)
        table.add_row("made by", text + ", ..." * (len(noise.devices) > len(most)))
    if noise.left_out:
        table.add_row("left out", ", ".join(noise.left_out))
    return table


def _aftermath_table(result: ReadoutResult) -> Table:
    table = plain_table()
    photons = result.residual_photons
    rate = result.dephasing_rate
    agreement = result.repeat_agreement
    wait = format_quantity(result.wait, "s")
    shift = format_quantity(result.residual_stark_shift, "Hz")
    left = f"{photons:.3g}, which shift the qubit by {shift}"
    table.add_row("photons at the end", "-" if math.isnan(photons) else left)
    table.add_row("wait", wait if math.isnan(result.wait) else f"{wait} until 0.01 of one is left")
    table.add_row("latency", format_quantity(result.latency, "s"))
    table.add_row("repeat agreement", "-" if math.isnan(agreement) else f"{agreement:.5f}")
    table.add_row("dephasing", "-" if math.isnan(rate) else f"{rate:.4g} /s while driven")
    if not math.isnan(result.purcell_time):
        alone = format_quantity(result.purcell_time, "s")
        table.add_row("Purcell decay", f"in {alone} through the resonator alone")
    return table


def _shot_table(result: ReadoutResult) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("", style="bold", no_wrap=True)
    table.add_column("decisions", justify="right", no_wrap=True)
    for name in ("assignment error", "off by"):
        table.add_column(name, no_wrap=True)
    table.add_row("closed form", "-", f"{result.assignment_error:.4e}", "-")
    rows: dict[str, ShotCounts] = {
        "integrated shots": result.shots,
        "whole records": result.records,
    }
    for name, counts in rows.items():
        # Where no decision is ever wrong there is no sampling error either.
        off = counts.deviation(result.assignment_matrix) if result.assignment_error else 0.0
        value = f"{counts.assignment_error:.4e} ± {counts.standard_error:.1e}"
        table.add_row(name, str(counts.count), value, f"{off:+.2f} standard errors")
    return table
