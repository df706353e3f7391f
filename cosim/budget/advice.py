"""What to change first, in a sentence or two."""

import math
from collections.abc import Sequence

from cosim.budget.result import BudgetItem

# An item that gains less than this part of the total is none to begin with.
_WORTH = 0.05

_REMEDIES = {
    "mean amplitude": "the amplitude: code, bias or gain",
    "duration": "the length of the pulse",
    "rise": "the rising edge",
    "fall": "the falling edge",
    "quadrature": "the weight of the DRAG quadrature",
    "droop": "the droop of the amplitude: supply, bias or coupling capacitors",
    "settling": "the settling after the edge",
    "ringing": "the ringing: damping of the output",
    "carrier frequency": "the frequency of the carrier against the qubit",
    "phase": "the phase of the carrier",
    "phase drift": "the drift of the carrier's phase during the pulse",
    "image": "gain and phase balance of I and Q",
    "carrier leakage": "the carrier that leaks: offsets, or balance of the mixer",
    "leakage change": "the carrier that leaks after the pulse",
    "clock feed-through": "the clock's feed-through",
    "DAC steps": "the converter's steps: clock or reconstruction filter",
    "harmonics": "the harmonics at the output",
    "counter-rotating wave": "the amplitude, by the shift of a strong drive",
    "decoherence": "T1 and T2 of the qubit, or a shorter pulse",
    "ideal pulse": "the shape of the pulse, which this qubit does not take without loss",
    "residual": "the shape of the pulse: no named imperfection explains it",
}


def advise(items: Sequence[BudgetItem], total: float, error_bar: float) -> str:
    """Say what to change first.

    Parameters
    ----------
    items : sequence of BudgetItem
        The most costly first.
    total : float
        Infidelity.
    error_bar : float
        Of it; NaN where it is not known.

    Returns
    -------
    str
    """
    if not math.isnan(error_bar) and total <= error_bar:
        return (
            f"Nothing is to be learnt from a total of {total:.2e} within its error bar of "
            f"{error_bar:.1e}: take smaller steps first."
        )
    others = [item for item in items if item.kind == "neighbour" and item.removed > total]
    if others:
        worst = max(others, key=lambda item: item.removed)
        beside = (
            f" Beside it {worst.name.replace(': ', ' ')} loses more than the gate itself, "
            f"{worst.removed:.2e}: frequencies, or the pulse's spectrum there."
        )
    else:
        beside = ""
    able = [item for item in items if item.counted and item.removed > _WORTH * total]
    if not able:
        return "No single item is worth a change: none gains a twentieth of the total." + beside
    first = able[0]
    left = max(0.0, total - first.removed)
    text = (
        f"Change first {_remedy(first.name)}: without it the infidelity falls from "
        f"{total:.2e} to {left:.2e}."
    )
    if first.absorbed:
        text += f" A {first.absorbed_by} absorbs it."
        staying = [item for item in able[1:] if not item.absorbed]
        if staying:
            text += f" What stays then is led by {_remedy(staying[0].name)}."
    if first.name == "decoherence":
        own = [item for item in items if item.counted and item is not first and item.removed > 0.0]
        if own:
            text += (
                f" Of what the circuit does, {_remedy(own[0].name)} costs most, "
                f"{own[0].removed:.2e}."
            )
    return text + beside


def _remedy(name: str) -> str:
    """Say what to change, and with the item's name where these words do not hold it."""
    if name.startswith("noise: "):
        return f"the noise of '{name.removeprefix('noise: ')}'"
    if name.startswith("spur"):
        return f"the line beside the carrier ({name})"
    words = _REMEDIES.get(name, name)
    return words if name in words else f"{words} ({name})"
