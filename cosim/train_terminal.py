"""A train as tables for a terminal, and the taps of its filter as a file."""

import math
import os
from pathlib import Path

import numpy as np
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from cosim.dsp.settling import Settling
from cosim.errors import InputError
from cosim.terminal import framed, plain_table
from cosim.train.result import Predistortion, StepSettling, TrainResponse, TrainResult
from cosim.units import format_quantity

# Lags and histories that a terminal shows.
_MOST_ROWS = 16
# A time constant beyond this part of the longest that was tried is not resolved.
_AT_END = 0.99


def train_table(result: TrainResult) -> Group:
    """Lay out a train.

    Parameters
    ----------
    result : TrainResult
        What came out.

    Returns
    -------
    rich.console.Group
        The slots, what earlier ones do to later ones, the filter, warnings and the caution.
    """
    responses = _responses(result)
    parts: list[RenderableType] = [
        Text(_heading(result)),
        _number_table(result, responses),
        Text(""),
        Text("what the slots before do to a pulse, and how far back"),
        _lag_table(responses),
        Text(""),
        Text("pulses by the slots before, the latest last: infidelity, and turn against the first"),
        _history_table(responses),
    ]
    if result.predistortion is not None:
        parts += [Text(""), Text("filter"), _filter_table(result.predistortion)]
    return framed(result.title or "train", parts, result.warnings)


def write_taps(result: TrainResult, path: str | os.PathLike[str]) -> int:
    """Write the taps of a filter as columns.

    Parameters
    ----------
    result : TrainResult
        With a pre-distortion.
    path : path
        File to write.

    Returns
    -------
    int
        Number of taps.

    Raises
    ------
    InputError
        If there is no filter, or the file cannot be written.
    """
    found = result.predistortion
    if found is None:
        raise InputError(
            "--taps writes the filter of [train.predistortion], and the testbench has none"
        )
    lines = [
        f"# rate: {found.rate:.12g} Hz",
        f"# samples out = rest + sum over taps of weight (samples in - rest); "
        f"the ideal response is {found.delay:.12g} s late",
        "tap,delay (s),weight (1)",
        *(
            f"{at},{at / found.rate:.12g},{weight:.17g}"
            for at, weight in enumerate(found.taps.tolist())
        ),
    ]
    try:
        Path(path).write_text("\n".join(lines) + "\n", encoding="utf-8")
    except OSError as error:
        raise InputError(f"the taps cannot be written to {os.fspath(path)}: {error}") from None
    return int(found.taps.size)


def _responses(result: TrainResult) -> dict[str, TrainResponse]:
    if result.predistortion is None:
        return {"as played": result.before}
    return {"as played": result.before, "pre-distorted": result.predistortion.after}


def _heading(result: TrainResult) -> str:
    pulses = int(np.count_nonzero(result.factors))
    what = "shifts the qubit" if result.kind == "shift" else "drives the qubit"
    return (
        f"target {result.target}, {result.factors.size} slots of "
        f"{format_quantity(result.spacing, 's', 6)} with {pulses} pulses, a line that {what}, "
        f"step {format_quantity(result.step, 's', 5)}, {result.netlist_runs} runs of the netlist"
    )


def _number_table(result: TrainResult, responses: dict[str, TrainResponse]) -> Table:
    table = _headed(("", *responses))
    found = list(responses.values())
    own = np.flatnonzero(result.factors)
    idle = np.flatnonzero(result.factors == 0.0)

    def row(label: str, texts: list[str]) -> None:
        table.add_row(label, *texts)

    row("envelope off its ideal, rms", [_percent(item.residual) for item in found])
    if result.predistortion is not None:
        bent = (result.predistortion.nonlinear_before, result.predistortion.nonlinear_after)
        row("of it nonlinear", [_percent(value) for value in bent])
    row("infidelity of the first pulse", [f"{item.infidelity[own[0]]:.3e}" for item in found])
    row("of all pulses, mean", [f"{item.infidelity[own].mean():.3e}" for item in found])
    row("largest less smallest", [f"{item.spread:.3e}" for item in found])
    row("worst slot", [f"{item.worst_slot}, after {item.worst_history}" for item in found])
    row("its infidelity", [f"{item.infidelity[item.worst_slot - 1]:.3e}" for item in found])
    if idle.size:
        row("turn of a slot at rest, at most", [_turn(item.turn[idle]) for item in found])
    row("memory", [_depth(item) for item in found])
    row("time constants over slots", [_constants(item.settling) for item in found])
    row("whole train", [f"{item.sequence:.3e}" for item in found])
    row("product of its slots", [f"{item.product:.3e}" for item in found])
    row("if each were like the first", [f"{item.memoryless:.3e}" for item in found])
    row("amplitude scale", [f"{item.amplitude_scale:.5f}" for item in found])
    if not math.isnan(result.before.numerical_floor):
        row("numerical floor", [f"{item.numerical_floor:.1e}" for item in found])
    if any(item.tail is not None for item in found):
        row("left behind a pulse", [_tail(item) for item in found])
        row(
            "its time constants",
            [_constants(item.tail.settling if item.tail else None) for item in found],
        )
    steps = [item for item in (result.step_before, result.step_after) if item is not None]
    if steps:
        row("step within 1 % after", [_settled(item) for item in steps])
        row("its time constants", [_constants(item.settling) for item in steps])
    return table


def _percent(value: float) -> str:
    return "-" if math.isnan(value) else f"{100.0 * value:.3g} %"


def _turn(turns: np.ndarray) -> str:
    return f"{math.degrees(float(np.linalg.norm(turns, axis=1).max())):.4g}°"


def _depth(response: TrainResponse) -> str:
    if response.memory_depth == 0:
        return "none"
    more = " or more" * response.memory_deeper
    return f"{response.memory_depth}{more} slot{'s' * (response.memory_depth > 1)}"


def _constants(settling: Settling | None) -> str:
    if settling is None or settling.time_constants.size == 0:
        return "-"
    return ", ".join(
        "> " * (tau > _AT_END * settling.longest) + format_quantity(tau, "s", 3)
        for tau in settling.time_constants.tolist()
    )


def _tail(response: TrainResponse) -> str:
    tail = response.tail
    if tail is None:
        return "-"
    if math.isnan(tail.shift_end):
        return f"{_percent(tail.end)} at {format_quantity(tail.length, 's')}"
    return f"{format_quantity(tail.shift_end, 'Hz')} at {format_quantity(tail.length, 's')}"


def _settled(step: StepSettling) -> str:
    if math.isnan(step.settled):
        return f"not in {format_quantity(float(step.t[-1]), 's')}"
    return format_quantity(step.settled, "s") if step.settled else "at once"


def _lag_table(responses: dict[str, TrainResponse]) -> Table:
    table = _headed(("slots back", *(f"cost, {name}" for name in responses)))
    count = min(_MOST_ROWS, max(item.lag_costs.size for item in responses.values()))
    for lag in range(count):
        costs = [
            f"{item.lag_costs[lag]:.2e}"
            if lag < item.lag_costs.size and not math.isnan(item.lag_costs[lag])
            else "-"
            for item in responses.values()
        ]
        table.add_row(f"{lag + 1} or more", *costs)
    floors = [f"{item.memory_floor:.1e}" for item in responses.values()]
    table.add_row("simulator's own", *floors)
    return table


def _history_table(responses: dict[str, TrainResponse]) -> Table:
    # One column of histories serves both, though the shorter memory has shorter ones.
    table = _headed(("after", *(f"{name}" for name in responses)))
    longest = max(responses.values(), key=lambda item: len(item.histories))
    for history in longest.histories[:_MOST_ROWS]:
        cells = []
        for item in responses.values():
            named = [own for own in item.histories if history.slots.endswith(own.slots)]
            turn = [math.degrees(own.turn[_axis(item)]) for own in named]
            cells.append(f"{named[0].infidelity:.3e}, {turn[0]:+.3f}°" if named else "-")
        table.add_row(history.slots, *cells)
    left = len(longest.histories) - _MOST_ROWS
    if left > 0:
        table.add_row(f"and {left} more", *("" for _ in responses))
    return table


def _axis(response: TrainResponse) -> int:
    """The axis about which histories differ most."""
    return int(np.argmax(np.ptp([own.turn for own in response.histories], axis=0)))


def _filter_table(found: Predistortion) -> Table:
    table = plain_table()
    table.add_row(
        "taps",
        f"{found.taps.size} at {format_quantity(found.rate, 'Hz')}, the largest "
        f"{np.abs(found.taps).max():.4g}, of sum {found.taps.sum():.4g}",
    )
    table.add_row(
        "delay of the ideal",
        f"{format_quantity(found.delay, 's')}, without the filter "
        f"{format_quantity(found.line_delay, 's')}",
    )
    table.add_row(
        "fit",
        f"residual of one pulse {_percent(found.predicted)}, singular values over "
        f"{found.condition:.1e}, regularisation {found.regularisation:.1e}, {found.rank} of "
        f"{found.taps.size} directions free",
    )
    table.add_row("measured at", f"{_percent(found.level)} of the pulse")
    table.add_row(
        "headroom",
        f"{found.headroom:.2f} dB lost: peak {found.peak_before:.4g} to {found.peak_after:.4g} of "
        f"the pulse, {_percent(found.full_scale_used)} of full scale; any train "
        f"{found.worst_peak:.4g} at most",
    )
    return table


def _headed(names: tuple[str, ...]) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column(names[0], style="bold", no_wrap=True)
    for name in names[1:]:
        table.add_column(name, justify="right", no_wrap=True)
    return table
