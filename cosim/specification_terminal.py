"""What each block must meet, as tables for a terminal and as columns for other programs."""

import csv
import math
import os

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from cosim.errors import InputError
from cosim.specification.readout_result import ReadoutSpecification
from cosim.specification.result import BlockLimit, GateSpecification, LimitMask
from cosim.terminal import CAUTION
from cosim.units import format_quantity

# Units in decibels, of which a tenth is enough.
_PLAIN = ("dBc", "dBc/Hz")
GIVEN = "*: given; what a block costs, and its part of the target, is alone at its limit"
FORMULA = "formula: the same cost for small errors of a rectangular pulse on two levels"
STEADY_GIVEN = "*: given; what a block costs is on top of those before it"
STEADY = "formula: the same error where the resonator rings up at once"


def specification_table(result: GateSpecification) -> Group:
    """Lay out what each block of a gate's electronics must meet.

    Parameters
    ----------
    result : GateSpecification
        The specification.

    Returns
    -------
    rich.console.Group
        Heading, what is fixed, the blocks, the masks, the verification, warnings and the caution.
    """
    parts: list[RenderableType] = [
        Text(result.title or "specification", style="bold"),
        Text(_heading(result)),
        _fixed_table(result),
        Text(""),
        _block_table(result),
        Text(GIVEN, style="dim"),
        Text(FORMULA, style="dim"),
        Text(""),
        _note_table(result),
    ]
    for mask in result.masks:
        parts += [Text(""), Text(f"{_label(result, mask.name)}: {mask.label}"), _mask_table(mask)]
    parts += [Text(""), Text(result.rule), _verification_table(result)]
    parts += [Text(f"warning: {line}", style="yellow") for line in result.warnings]
    parts.append(Text(CAUTION, style="dim"))
    return Group(*parts)


def readout_specification_table(result: ReadoutSpecification) -> Group:
    """Lay out what the blocks of a readout must meet.

    Parameters
    ----------
    result : ReadoutSpecification
        The specification.

    Returns
    -------
    rich.console.Group
        Heading, what is fixed, the blocks, the verification, warnings and the caution.
    """
    fixed = _plain()
    fixed.add_row("fixed", f"{result.base_error:.2e}")
    for name in ("separation", "decay", "preparation", "excitation"):
        fixed.add_row(f"  {name}", f"{getattr(result.base, name):.2e}")
    blocks = _head("block", "limit", "costs", "part", "formula")
    for block in result.blocks:
        blocks.add_row(
            block.label,
            _limit(block),
            f"{block.share:.2e}",
            f"{block.share / result.target_error:.1%}",
            _formula_text(block),
        )
    notes = _plain()
    for block in result.blocks:
        notes.add_row(block.label, block.note)
    parts: list[RenderableType] = [
        Text(result.title or "specification", style="bold"),
        Text(f"target: an assignment error of {result.target_error:g}"),
        fixed,
        Text(""),
        blocks,
        Text(STEADY_GIVEN, style="dim"),
        Text(STEADY, style="dim"),
        Text(""),
        notes,
        Text(""),
        _readout_verification(result),
    ]
    parts += [Text(f"warning: {line}", style="yellow") for line in result.warnings]
    parts.append(Text(CAUTION, style="dim"))
    return Group(*parts)


def format_limit(value: float, unit: str) -> str:
    """Write a limit for people.

    Parameters
    ----------
    value : float
        In `unit`.
    unit : str
        Of a block.

    Returns
    -------
    str
        "-" for a value that is not a number.
    """
    if math.isnan(value):
        return "-"
    if unit == "1":
        return f"{value:.3g}"
    if unit in ("1/Hz", "V^2/Hz"):
        return f"{value:.2e} {unit}"
    if unit == "K":
        return f"{value:.3g} K"
    if unit in _PLAIN:
        return f"{value:.1f} {unit}"
    if unit == "rad":
        return f"{1e3 * value:.3g} mrad" if abs(value) < 1.0 else f"{value:.3g} rad"
    return format_quantity(value, unit, 3)


def mask_rows(result: GateSpecification) -> list[tuple[str, str, str, str, str]]:
    """Give all masks as columns.

    Parameters
    ----------
    result : GateSpecification
        The specification.

    Returns
    -------
    list of tuple of five str
        A heading, then block, both ends of the offsets in Hz, level and its unit.
    """
    rows = [("block", "low_Hz", "high_Hz", "level", "unit")]
    for mask in result.masks:
        for low, high, level in zip(mask.low, mask.high, mask.levels, strict=True):
            rows.append((mask.name, f"{low:.9g}", f"{high:.9g}", f"{level:.9g}", mask.unit))
    return rows


def write_masks(result: GateSpecification, path: str | os.PathLike[str]) -> int:
    """Write the masks of a specification as columns.

    Parameters
    ----------
    result : GateSpecification
        The specification.
    path : path
        The file.

    Returns
    -------
    int
        Number of rows below the heading.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    rows = mask_rows(result)
    try:
        with open(path, "w", encoding="utf-8", newline="") as file:
            csv.writer(file).writerows(rows)
    except OSError as error:
        raise InputError(f"the masks cannot be written to {os.fspath(path)}: {error}") from None
    return len(rows) - 1


def _heading(result: GateSpecification) -> str:
    return (
        f"target {result.target}, infidelity {result.target_infidelity:g}; pulse of "
        f"{format_quantity(result.peak_rabi, 'Hz', 3)} at its peak, which is "
        f"{format_quantity(result.peak_voltage, 'V', 3)} at the qubit"
    )


def _fixed_table(result: GateSpecification) -> Table:
    table = _plain()
    table.add_row("decoherence", f"{result.decoherence:.2e}")
    table.add_row("ideal pulse itself", f"{result.pulse_infidelity:.2e}")
    table.add_row("numerical floor", f"{result.numerical_floor:.1e}")
    own = "the qubit's own" if result.frame == "qubit" else "that of the oscillator"
    table.add_row("frame", f"{own}, for the carrier's frequency and phase noise")
    shared = "by weights" if result.allocation == "weights" else "at the least power"
    table.add_row("left for the blocks", f"{result.budget:.2e}, shared {shared}")
    return table


def _block_table(result: GateSpecification) -> Table:
    table = _head("block", "limit", "costs", "part", "formula")
    powered = not math.isnan(result.total_power)
    if powered:
        table.add_column("power", justify="right", no_wrap=True)
    for block in result.blocks:
        cells = [
            block.label,
            _limit(block),
            f"{block.share:.1e}",
            f"{block.share / result.target_infidelity:.1%}",
            _formula_text(block),
        ]
        if powered:
            cells.append(format_quantity(block.power, "W", 3))
        table.add_row(*cells)
    if powered:
        total = format_quantity(result.total_power, "W", 3)
        table.add_row("all together", "", f"{result.combined:.1e}", "", "", total)
    else:
        table.add_row("all together", "", f"{result.combined:.1e}", "", "")
    return table


def _readout_verification(result: ReadoutSpecification) -> Table:
    table = _plain()
    verdict = "met" if result.assignment_error <= result.target_error else "missed"
    table.add_row(
        "all limits together",
        f"{result.assignment_error:.3e} in closed form, at a signal over noise of "
        f"{result.snr:.3g}: target {verdict}",
    )
    for name, counts in (("integrated shots", result.shots), ("whole records", result.records)):
        table.add_row(
            f"{counts.count} {name}",
            f"{counts.assignment_error:.3e} ± {counts.standard_error:.0e}",
        )
    shortest = format_quantity(result.integration_time, "s", 3)
    longest = format_quantity(result.longest_integration, "s", 3)
    table.add_row("integration", f"{shortest} to {longest} meet the target with these limits")
    if not math.isnan(result.full_scale):
        table.add_row(
            "converters",
            f"a step is {result.lsb_over_sigma:.2g} standard deviations of a sample, "
            f"{result.clipped:.1e} of the samples clip",
        )
    return table


def _formula_text(block: BlockLimit) -> str:
    # Parts of a bit tell how far the formula is from the next one.
    if block.label.startswith("bits") and not math.isnan(block.formula):
        return f"{block.formula:.2f}"
    return format_limit(block.formula, block.unit)


def _head(first: str, *names: str) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column(first, no_wrap=True, style="bold")
    for name in names:
        table.add_column(name, justify="right", no_wrap=True)
    return table


def _limit(block: BlockLimit) -> str:
    text = format_limit(block.limit, block.unit)
    return f"{text} *" if block.given else text


def _note_table(result: GateSpecification) -> Table:
    table = _plain()
    for block in result.blocks:
        if block.note:
            table.add_row(block.label, block.note)
    return table


def _mask_table(mask: LimitMask) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("offset", justify="right", no_wrap=True)
    table.add_column("level", justify="right", no_wrap=True)
    for low, high, level in zip(mask.low, mask.high, mask.levels, strict=True):
        ends = [format_quantity(float(end), "Hz", 3) for end in (low, high)]
        offset = ends[0] if low == high else f"{ends[0]} to {ends[1]}"
        table.add_row(offset, format_limit(float(level), mask.unit))
    return table


def _verification_table(result: GateSpecification) -> Table:
    found = result.verification
    table = _plain()
    verdict = "met" if found.infidelity <= result.target_infidelity else "missed"
    table.add_row(
        "all limits together",
        f"{found.infidelity:.3e} ± {found.standard_error:.0e} by simulation: target {verdict}",
    )
    table.add_row(
        "",
        f"{found.combinations} combinations of signs and phases, {found.samples} samples of noise",
    )
    if found.shrinking < 1.0:
        table.add_row(
            "shrunk",
            f"all errors that are not given to {found.shrinking:.3f} of what the rule allowed, "
            f"with which they came to {found.before_shrinking:.3e}",
        )
    if not math.isnan(result.power_per_infidelity):
        saved = format_quantity(
            1e-2 * result.target_infidelity * result.power_per_infidelity, "W", 3
        )
        table.add_row("one per cent more of the target", f"would save {saved}")
    return table


def _label(result: GateSpecification, name: str) -> str:
    return result.block(name).label


def _plain() -> Table:
    table = Table(box=None, pad_edge=False, show_header=False)
    table.add_column(style="bold", no_wrap=True)
    table.add_column(overflow="fold")
    return table
