"""Noise, other qubits of the line and rest, as tables for a terminal."""

import math
from collections.abc import Sequence

from rich.console import RenderableType
from rich.table import Table
from rich.text import Text

from cosim.side_results import IdleEffect, NoiseEffect, SpectatorEffect
from cosim.units import format_quantity

MOST_DEVICES = 5  # named in the table


def noise_parts(effect: NoiseEffect | None) -> list[RenderableType]:
    """Lay out what noise does.

    Parameters
    ----------
    effect : NoiseEffect or None
        Of a gate result.

    Returns
    -------
    list
        A heading and a table; empty without noise.
    """
    if effect is None:
        return []
    if effect.method == "samples":
        how = (
            f"{effect.infidelity:.3e} ± {effect.standard_error:.1e} from {effect.samples} samples "
            f"(seed {effect.seed}), {effect.first_order:.3e} to first order"
        )
    else:
        error = f" ± {effect.standard_error:.1e}" * (effect.standard_error > 0.0)
        how = f"{effect.infidelity:.3e}{error} by {effect.method}"
    table = _headed("source", "acts on", "1 - F_avg", "leakage", "by")
    for item in effect.sources:
        by = item.method
        if not math.isnan(item.oscillator_frame):
            by += f"; in the oscillator's frame {item.oscillator_frame:.3e}"
        if item.standard_error:
            by += f", ± {item.standard_error:.1e}"
        if item.devices:
            most = list(item.devices.items())[:MOST_DEVICES]
            by += "; most: " + ", ".join(f"{name} {value:.1e}" for name, value in most)
        cells = (f"{item.infidelity:.3e}", f"{item.leakage:.1e}", by)
        table.add_row(item.name, item.acts_on, *cells)
    return [Text(""), Text(f"noise costs {how}; it is part of the numbers above"), table]


def spectator_parts(
    effects: Sequence[SpectatorEffect], register_infidelity: float
) -> list[RenderableType]:
    """Lay out what the waveform does to other qubits of the line.

    Parameters
    ----------
    effects : sequence of SpectatorEffect
        Of a gate result.
    register_infidelity : float
        Of the same.

    Returns
    -------
    list
        A heading and a table; empty without others.
    """
    if not effects:
        return []
    # The terminal is 80 columns wide: what says nothing of these qubits has none of them.
    gates = any(item.target != "identity" for item in effects)
    noisy = any(item.noise is not None for item in effects)
    names = ("spectator", "frequency", *["target"] * gates, "1 - F_avg", "free frame", "angle")
    table = _headed(*names, "phase", "leakage", *["noise"] * noisy)
    for item in effects:
        by_noise = "-" if item.noise is None else f"{item.noise.infidelity:.1e}"
        table.add_row(
            item.name,
            format_quantity(item.frequency, "Hz", 5),
            *[item.target] * gates,
            f"{item.infidelity:.2e}",
            f"{item.free_frame_infidelity:.2e}",
            f"{math.degrees(item.rotation.angle):.2f}°",
            f"{math.degrees(item.phase):+.2f}°",
            f"{item.leakage:.1e}",
            *[by_noise] * noisy,
        )
    heading = f"the register, free frame: 1 - F_avg sums up to {register_infidelity:.3e}"
    return [Text(""), Text(heading), table]


def idle_parts(effect: IdleEffect | None, unit: str) -> list[RenderableType]:
    """Lay out what happens at rest.

    Parameters
    ----------
    effect : IdleEffect or None
        Of a gate result.
    unit : str
        Unit of the probe.

    Returns
    -------
    list
        A heading and a table; empty without.
    """
    if effect is None:
        return []
    micro = 1e-6
    start, stop = format_quantity(effect.start, "s"), format_quantity(effect.stop, "s")
    lost = f"1 - F_avg {effect.infidelity:.3e}, free frame {effect.free_frame_infidelity:.3e}"
    if effect.noise is not None:
        lost += f", noise {effect.noise.infidelity:.1e}"
    left, shift = format_quantity(effect.residual, unit), format_quantity(effect.stark_shift, "Hz")
    turn = 360.0 * micro * effect.stark_shift
    table = Table(box=None, pad_edge=False, show_header=False)
    table.add_column(no_wrap=True, style="bold")
    table.add_column()
    rows = {
        "over the stretch": lost,
        "carrier left": f"extinction {effect.extinction:.1f} dB, {left}",
        **_turned(effect),
        "Stark shift": f"{shift}: {turn:+.4f}° per microsecond",
        "flips by noise": f"{micro * effect.flip_rate:.2e} per microsecond, up and down each",
        "dephasing by noise": f"{micro * effect.dephasing_rate:.2e} per microsecond",
    }
    for name, text in rows.items():
        table.add_row(name, text)
    return [Text(""), Text(f"at rest, {start} to {stop}"), table]


def _turned(effect: IdleEffect) -> dict[str, str]:
    if effect.rotation is None:
        return {}
    pace = math.degrees(effect.rotation.angle) * 1e-6 / (effect.stop - effect.start)
    x, y, z = effect.rotation.axis
    about = f" about ({x:+.3f}, {y:+.3f}, {z:+.3f})" if pace > 0.0 else ""
    return {"turn by it": f"{pace:.4f}° per microsecond{about}"}


def _headed(*names: str) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    for at, name in enumerate(names):
        table.add_column(name, justify="left" if at < 2 else "right", no_wrap=at < 2)
    return table
