"""What the imperfections of a pulse cost: alone, removed, and two at a time."""

import math
from collections.abc import Mapping
from itertools import combinations

import numpy as np

from cosim.budget.case import Case
from cosim.budget.costs import Costs, cost_envelopes, error_vectors
from cosim.budget.naming import Measure
from cosim.budget.result import BudgetItem, PairInteraction, SpurLine

# The calibration absorbs what costs less than this part there of what it costs as simulated.
ABSORBED = 0.1
# Below this an item costs nothing that could be absorbed.
LEAST_COST = 1e-10
# Items of which pairs are looked at, and pairs that are told.
_PAIRED = 6
_TOLD = 5
# Interactions below this are rounding.
_NOTHING = 1e-11
# Cosine of the angle between two error vectors from which on they add in amplitude, or cancel.
_PARALLEL = 0.5


def coherent_items(
    names: list[str], found: Mapping[str, Measure], costs: Costs, view: str
) -> list[BudgetItem]:
    """Give the imperfections of the pulse with their costs.

    Parameters
    ----------
    names : list of str
    found : mapping of Measure
        By name.
    costs : Costs
        Of the ideal pulse, the real one, the ideal one with each, the real one without each.
    view : str
        Which fidelity.

    Returns
    -------
    list of BudgetItem
    """
    count = len(names)
    vectors = error_vectors(costs.framed[view][2 : 2 + count], costs.framed[view][0])
    items = []
    for place, name in enumerate(names):
        alone = {
            key: float(values[2 + place] - values[0]) for key, values in costs.infidelity.items()
        }
        values = costs.infidelity[view]
        absorbed_by = _absorber(alone)
        x, y, z = vectors[place].tolist()
        measure = found[name]
        items.append(
            BudgetItem(
                name=name,
                value=measure.value,
                unit=measure.unit,
                alone=alone[view],
                removed=float(values[1] - values[2 + count + place]),
                absorbed=bool(absorbed_by),
                absorbed_by=absorbed_by,
                as_simulated=alone["as_simulated"],
                free_frame=alone["free_frame"],
                calibrated=alone["calibrated"],
                error_vector=(x, y, z),
                note=measure.note,
            )
        )
    return items


def _absorber(alone: dict[str, float]) -> str:
    worst = abs(alone["as_simulated"])
    if worst < LEAST_COST:
        return ""
    if abs(alone["free_frame"]) < ABSORBED * worst:
        return "virtual Z"
    return "calibration" if abs(alone["calibrated"]) < ABSORBED * worst else ""


def shape_item(costs: Costs, view: str) -> BudgetItem:
    """Give what the ideal pulse itself costs.

    Parameters
    ----------
    costs : Costs
        Its first row is that of the ideal pulse.
    view : str
        Which fidelity.

    Returns
    -------
    BudgetItem
    """
    own = {name: float(values[0]) for name, values in costs.infidelity.items()}
    absorbed_by = _absorber(own)
    return BudgetItem(
        name="ideal pulse",
        value=math.nan,
        unit="1",
        alone=own[view],
        removed=math.nan,
        absorbed=bool(absorbed_by),
        absorbed_by=absorbed_by,
        as_simulated=own["as_simulated"],
        free_frame=own["free_frame"],
        calibrated=own["calibrated"],
        note="what its shape costs on this qubit",
    )


def strongest_pairs(case: Case, items: list[BudgetItem], view: str) -> tuple[PairInteraction, ...]:
    """Cost the costliest items two at a time.

    Parameters
    ----------
    case : Case
    items : list of BudgetItem
        Imperfections of the pulse.
    view : str
        Which fidelity.

    Returns
    -------
    tuple of PairInteraction
        The strongest first.
    """
    able = sorted((item for item in items if abs(item.alone) > 1e-12), key=lambda i: -abs(i.alone))
    chosen = list(combinations(able[:_PAIRED], 2))
    if not chosen:
        return ()
    rows = [case.envelope(), *(case.envelope(one.name, two.name) for one, two in chosen)]
    values = cost_envelopes(case.costing, np.array(rows)).infidelity[view]
    found = []
    for (one, two), value in zip(chosen, values[1:], strict=True):
        together = float(value - values[0])
        first, second = np.array(one.error_vector), np.array(two.error_vector)
        length = float(np.linalg.norm(first) * np.linalg.norm(second))
        cosine = float(first @ second) / length if length > 0.0 else 0.0
        relation = "add in infidelity"
        if abs(cosine) > _PARALLEL:
            relation = "add in amplitude" if cosine > 0.0 else "cancel"
        found.append(
            PairInteraction(
                one.name, two.name, together - one.alone - two.alone, together, relation
            )
        )
    found = [pair for pair in found if abs(pair.interaction) > _NOTHING]
    found.sort(key=lambda pair: -abs(pair.interaction))
    return tuple(found[:_TOLD])


def spur_lines(case: Case, items: list[BudgetItem]) -> tuple[SpurLine, ...]:
    """Give the lines beside the carrier as a table.

    Parameters
    ----------
    case : Case
    items : list of BudgetItem
        Each line is one.

    Returns
    -------
    tuple of SpurLine
        The most costly first.
    """
    known = {item.name: item for item in items}
    numbers = case.anatomy.numbers
    lines = [
        SpurLine(
            offset=numbers[f"{spur.name}_frequency"],
            level=known[spur.name].value,
            modulated=spur.modulated,
            alone=known[spur.name].alone,
            removed=known[spur.name].removed,
        )
        for spur in case.anatomy.spurs
        if not spur.clock
    ]
    return tuple(sorted(lines, key=lambda line: -line.removed))
