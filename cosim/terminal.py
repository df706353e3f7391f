"""Results as tables for a terminal."""

import math
from collections.abc import Mapping, Sequence

import numpy as np
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from cosim.checks import Finding
from cosim.comparison import Comparison
from cosim.decision_result import DecisionResult
from cosim.quantum.fidelity import incoherent_infidelity
from cosim.readout_result import ReadoutResult
from cosim.result import GateResult
from cosim.side_terminal import idle_parts, noise_parts, spectator_parts
from cosim.sweep.record import FailedRun
from cosim.units import format_quantity

CAUTION = (
    "Design estimate from simulation: measured data, the laboratory's cryogenic and electrical "
    "safety rules and local codes decide."
)


# Lines of differing inputs that a terminal shows.
MOST_LINES = 40


def check_table(findings: Sequence[Finding]) -> Table:
    """Lay out what `check` found.

    Parameters
    ----------
    findings : sequence of Finding
        Name and text of each.

    Returns
    -------
    rich.table.Table
        One row each.
    """
    table = plain_table()
    for item in findings:
        table.add_row(item.label, item.text)
    return table


def result_table(result: GateResult) -> Group:
    """Lay out a gate result.

    Parameters
    ----------
    result : GateResult
        The result of a run.

    Returns
    -------
    rich.console.Group
        Heading, fidelities, further numbers, the pulse, warnings and the caution.
    """
    parts: list[RenderableType] = [
        Text(_heading(result)),
        _fidelity_table(result),
        _number_table(result),
        *noise_parts(result.noise),
        *spectator_parts(result.spectators, result.register_infidelity),
        *idle_parts(result.idle, result.waveform.unit),
    ]
    return framed(result.title or "gate", parts, result.warnings)


def framed(title: str, parts: Sequence[RenderableType], warnings: Sequence[str]) -> Group:
    """Put what a result shows between its title and its warnings.

    Parameters
    ----------
    title : str
        Above all.
    parts : sequence of renderables
        Tables and lines.
    warnings : sequence of str
        Of the result.

    Returns
    -------
    rich.console.Group
        With the caution as the last line.
    """
    told = [Text(f"warning: {line}", style="yellow") for line in warnings]
    return Group(Text(title, style="bold"), *parts, *told, Text(CAUTION, style="dim"))


def plain_table() -> Table:
    """Give an empty table of names and values, without a frame.

    Returns
    -------
    rich.table.Table
        Of two columns.
    """
    table = Table(box=None, pad_edge=False, show_header=False)
    table.add_column(style="bold", no_wrap=True)
    table.add_column(overflow="fold")
    return table


def _heading(result: GateResult) -> str:
    start, stop = (format_quantity(edge, "s") for edge in result.window)
    carrier = format_quantity(result.carrier_frequency, "Hz", 7)
    return (
        f"target {result.target}, window {start} to {stop}, carrier {carrier}, "
        f"step {format_quantity(result.run.step, 's', 5)} "
        f"({result.run.steps_per_period:.4g} per period), {result.run.points} points"
    )


def _fidelity_table(result: GateResult) -> Table:
    views = (result.as_simulated, result.free_frame, result.calibrated)
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("", no_wrap=True, style="bold")
    for name in ("as simulated", "free frame", "calibrated"):
        table.add_column(name, justify="right", no_wrap=True)

    def row(label: str, texts: Sequence[str]) -> None:
        table.add_row(label, *texts)

    row("process fidelity", [f"{view.process_fidelity:.7f}" for view in views])
    row("average gate fidelity", [f"{view.average_gate_fidelity:.7f}" for view in views])
    row("infidelity, 1 - F_avg", [f"{view.infidelity:.3e}" for view in views])
    if not math.isnan(result.numerical_floor):
        row("its error bar", [f"± {view.error_bar:.1e}" for view in views])
    row("virtual Z before, after", [_degrees(view.z_before, view.z_after) for view in views])
    row("amplitude scale", [f"{view.amplitude_scale:.5f}" for view in views])
    if result.calibrated.detuning != 0.0:
        row("carrier offset", [format_quantity(view.detuning, "Hz") for view in views])
    return table


def _degrees(before: float, after: float) -> str:
    if before == after == 0.0:
        return "-"
    return f"{math.degrees(before):+.3f}°, {math.degrees(after):+.3f}°"


def _number_table(result: GateResult) -> Table:
    table = plain_table()
    axis = ", ".join(f"{part:+.5f}" for part in result.rotation.axis)
    pulse = result.pulse
    unit = result.waveform.unit
    table.add_row("rotation", f"{math.degrees(result.rotation.angle):.4f}° about ({axis})")
    table.add_row("phase slip per gate", f"{math.degrees(result.phase_slip):+.4f}°")
    table.add_row("leakage, seepage", f"{result.leakage:.2e}, {result.seepage:.2e}")
    incoherent = incoherent_infidelity(result.channel.superoperator)
    table.add_row("unitarity", f"{result.unitarity:.7f}, decoherence alone {incoherent:.3e}")
    table.add_row(
        "numerical floor", _or_dash(result.numerical_floor, "not asked for, or too few samples")
    )
    table.add_row("rotating-wave error", _or_dash(result.rotating_wave_error, "none here"))
    if not math.isnan(result.reference_error):
        table.add_row("QuTiP, full waveform", f"{result.reference_error:.2e}")
    table.add_row(
        "pulse at the probe",
        f"{format_quantity(pulse.amplitude, unit)} peak, "
        f"{format_quantity(pulse.duration, 's')} at half height, rise "
        f"{format_quantity(pulse.rise_time, 's')}, fall {format_quantity(pulse.fall_time, 's')}",
    )
    table.add_row(
        "carrier at the probe",
        f"phase {math.degrees(pulse.phase_error):+.3f}°, "
        f"slope {_frequency(pulse.frequency_error)}, "
        f"extinction {'-' if math.isnan(pulse.extinction) else f'{pulse.extinction:.1f} dB'}",
    )
    return table


def _frequency(value: float) -> str:
    return "less than 1 Hz" if abs(value) < 1.0 else format_quantity(value, "Hz")


def _or_dash(value: float, otherwise: str) -> str:
    return f"- ({otherwise})" if math.isnan(value) else f"{value:.2e}"


def record_table(result: GateResult | ReadoutResult | DecisionResult) -> Table:
    """Lay out where a result comes from.

    Parameters
    ----------
    result : GateResult, ReadoutResult or DecisionResult
        The result of a run.

    Returns
    -------
    rich.table.Table
        Start, host, versions, times and files.
    """
    table = plain_table()
    record = result.run
    table.add_row("started", record.started)
    table.add_row("host", record.host)
    table.add_row("versions", ", ".join(f"{k} {v}" for k, v in record.versions.items()))
    table.add_row(
        "wall time", ", ".join(f"{name} {1e3 * t:.0f} ms" for name, t in record.wall_times.items())
    )
    table.add_row("deck files", "\n".join(file.path for file in record.deck_files))
    return table


def runs_table(columns: Mapping[str, np.ndarray]) -> Table:
    """Lay out the runs of an archive.

    Parameters
    ----------
    columns : mapping of ndarray, each of shape (runs,)
        From `cosim.archive.read_table`.

    Returns
    -------
    rich.table.Table
        One row per run.
    """
    table = Table(box=None, pad_edge=False, header_style="bold")
    shown = {
        "run": "id",
        "status": "status",
        "started": "start_time",
        "target": "target",
        "title": "title",
        "F_pro, free": "free_frame.process_fidelity",
        "1 - F_avg": "free_frame.average_gate_fidelity",
        "readout error": "assignment_error",
    }
    present = {label: name for label, name in shown.items() if name in columns}
    for label in present:
        table.add_column(label, no_wrap=label != "title")
    count = len(next(iter(columns.values()))) if columns else 0
    for index in range(count):
        table.add_row(*(_cell(label, columns[name][index]) for label, name in present.items()))
    return table


def row_table(row: Mapping[str, object], units: Mapping[str, str]) -> Table:
    """Lay out the row of one run of a sweep.

    Parameters
    ----------
    row : mapping
        Column to value.
    units : mapping of str
        Unit by column.

    Returns
    -------
    rich.table.Table
        One line per column that has a value.
    """
    table = plain_table()
    for name, value in row.items():
        if value not in (None, ""):
            unit = units.get(name, "")
            text = f"{value:.8g}" if isinstance(value, float) else str(value)
            table.add_row(name, text if unit in ("", "1") else f"{text} {unit}")
    return table


def failure_table(row: Mapping[str, object], units: Mapping[str, str], record: FailedRun) -> Group:
    """Lay out a run of a sweep that has no result.

    Parameters
    ----------
    row : mapping
        Its row in the table.
    units : mapping of str
        Unit by column.
    record : FailedRun
        What is kept of it.

    Returns
    -------
    rich.console.Group
        Status, message, inputs, and the end of the simulator's log.
    """
    told = ("error", "identity", "kind")
    table = row_table({name: value for name, value in row.items() if name not in told}, units)
    for name, wave in record.waveforms.items():
        table.add_row(
            f"kept of {name}", f"{wave.t.size} points to {format_quantity(wave.t[-1], 's')}"
        )
    parts: list[RenderableType] = [
        Text(f"run {row['id']}: {record.status}", style="bold"),
        Text(record.error, style="red"),
        table,
    ]
    return Group(*parts, *(Text(f"  | {line}", style="dim") for line in record.log))


def comparison_table(comparison: Comparison) -> Group:
    """Lay out two runs side by side.

    Parameters
    ----------
    comparison : Comparison
        From `cosim.comparison.compare_runs`.

    Returns
    -------
    rich.console.Group
        Numbers, largest difference of the waveforms, and the inputs that differ.
    """
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("", style="bold", no_wrap=True)
    for name in ("first", "second", "change", "error bars"):
        table.add_column(name, justify="right", no_wrap=True)
    for item in comparison.numbers:
        words = {None: "", True: "beyond", False: "within"}
        verdict = words[item.resolved] if item.change != 0.0 else "equal"
        row = (f"{item.first:.8g}", f"{item.second:.8g}", f"{item.change:+.2e}", verdict)
        table.add_row(item.name.replace("average_gate", "avg"), *row)
    parts: list[RenderableType] = [
        table,
        Text(f"waveforms differ by {comparison.waveform_difference:.2e} of the largest value"),
    ]
    if not comparison.inputs:
        parts.append(Text("testbench, deck and versions are equal"))
    shown = comparison.inputs[:MOST_LINES]
    parts += [Text(line, style="red" if line[0] == "-" else "green") for line in shown]
    if len(comparison.inputs) > MOST_LINES:
        parts.append(Text(f"... and {len(comparison.inputs) - MOST_LINES} more lines differ"))
    return Group(*parts)


def _cell(label: str, value: object) -> str:
    if isinstance(value, (float, np.floating)):
        if math.isnan(value):
            # Gates and readouts may stand in one archive.
            return "-"
        if label == "readout error":
            return f"{value:.3e}"
        return f"{1.0 - value:.3e}" if label.startswith("1 -") else f"{value:.7f}"
    text = value.decode() if isinstance(value, bytes) else str(value)
    # A date without its zone is enough in a list; the detailed view has all of it.
    return text[:19].replace("T", " ") if label == "started" else text
