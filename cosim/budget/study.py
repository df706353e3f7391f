"""The error budget of a gate: the pulse taken apart, each part costed alone and removed."""

import math
import time
import tomllib
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from cosim.budget.advice import advise
from cosim.budget.case import Case, check_gate, prepare
from cosim.budget.coherent import coherent_items, shape_item, spur_lines, strongest_pairs
from cosim.budget.costs import VIEWS, Costs, cost_envelopes
from cosim.budget.full_wave import full_wave_items
from cosim.budget.incoherent import decoherence_item, floor_item, neighbour_items, noise_items
from cosim.budget.naming import measures
from cosim.budget.result import BudgetItem, BudgetResult, IdealPulse
from cosim.budget.table import BudgetTable, budget_table
from cosim.dsp.anatomy.shapes import TEN_TO_NINETY
from cosim.errors import InputError
from cosim.gate import run_gate
from cosim.result import GateResult
from cosim.testbench import Testbench, gate_bench, make_testbench
from cosim.waveform import ComplexArray, Envelope


def run_budget(
    bench: Testbench,
    *,
    fidelity: str | None = None,
    progress: Callable[[float], None] | None = None,
) -> BudgetResult:
    """Run a gate and make its error budget.

    Parameters
    ----------
    bench : Testbench
        With or without the table [budget].
    fidelity : str or None
        Which fidelity is costed, in place of what [budget] says.
    progress : callable or None
        Called with the simulated time in s now and then.

    Returns
    -------
    BudgetResult
        A design estimate.

    Raises
    ------
    InputError
        If the testbench, the deck or the waveform cannot be used, or the gate has no pulse that
        could be ideal.
    SimulationError
        If ngspice or the evolution fails.
    """
    check_gate(bench)
    _table(bench, fidelity)
    return budget_of(run_gate(bench, progress=progress), bench, fidelity=fidelity)


def budget_of(
    result: GateResult, bench: Testbench | None = None, *, fidelity: str | None = None
) -> BudgetResult:
    """Make the error budget of a gate that has been run; the circuit is not simulated again.

    Parameters
    ----------
    result : GateResult
        From `cosim.run`, or from an archive.
    bench : Testbench or None
        Its testbench, perhaps with another table [budget]; None takes the one that the result
        keeps.
    fidelity : str or None
        Which fidelity is costed, in place of what [budget] says.

    Returns
    -------
    BudgetResult
        A design estimate.

    Raises
    ------
    InputError
        If the gate has no pulse that could be ideal, or the fidelity is none.
    WaveformError
        If there is no pulse.
    """
    begun = time.perf_counter()
    if bench is None:
        bench = gate_bench(make_testbench(tomllib.loads(result.run.testbench)))
    target = check_gate(bench)
    case = prepare(result, bench, _table(bench, fidelity), target)
    return _budget(case, begun)


def _table(bench: Testbench, fidelity: str | None) -> BudgetTable:
    table = budget_table(bench)
    if fidelity is None:
        return table
    if fidelity not in VIEWS:
        raise InputError(f"fidelity: wanted one of {', '.join(VIEWS)}, got {fidelity!r}")
    return replace(table, fidelity=fidelity)  # type: ignore[arg-type]


def _budget(case: Case, begun: float) -> BudgetResult:
    result, view = case.result, case.table.fidelity
    found = measures(case.anatomy, case.level, case.phase)
    names = [name for name in case.anatomy.parts if name in found]
    ideal, real = case.envelope(), case.iq
    rows = [ideal, real, *(case.envelope(name) for name in names)]
    rows += [case.without(name) for name in names]
    costs = cost_envelopes(case.costing, np.array(rows))
    items = coherent_items(names, found, costs, view)
    pairs = strongest_pairs(case, items, view)
    floor = float(costs.infidelity[view][0])
    items.append(shape_item(costs, view))
    more, difference = full_wave_items(case, costs, view)
    items += more
    two = Costs(
        {name: values[:2] for name, values in costs.infidelity.items()},
        {},
        costs.scale[:2],
        costs.detuning[:2],
    )
    decoherence = decoherence_item(case.qubit, case.costing, np.array(rows[:2]), two, view)
    items += [] if decoherence is None else [decoherence]
    items += noise_items(result)
    judged = getattr(result, view)
    total = judged.infidelity
    interaction = total - sum(item.alone for item in items if item.counted)
    items += [*neighbour_items(case, view), floor_item(result, view)]
    items.sort(key=lambda item: (not item.counted, -_rank(item)))
    left = case.anatomy.rest + case.anatomy.steps
    share = float(np.linalg.norm(left) / np.linalg.norm(real))
    return BudgetResult(
        title=result.title,
        target=result.target,
        fidelity=view,
        total_infidelity=total,
        error_bar=judged.error_bar,
        items=tuple(items),
        interaction=interaction,
        pairs=pairs,
        spurs=spur_lines(case, items),
        ideal=_ideal_pulse(case, floor),
        residual_share=share,
        rotating_wave_difference=difference,
        wall_time=time.perf_counter() - begun,
        advice=advise(items, total, judged.error_bar),
        warnings=(*_warnings(case, share), *result.warnings),
        real=_envelope(case, real),
        fitted=_envelope(case, real - case.anatomy.rest),
        wanted=_envelope(case, ideal),
        run=result.run,
    )


def _rank(item: BudgetItem) -> float:
    if item.kind == "numerical":
        return -1.0
    costs = [abs(cost) for cost in (item.removed, item.alone) if not math.isnan(cost)]
    return costs[0] if costs else 0.0


def _ideal_pulse(case: Case, infidelity: float) -> IdealPulse:
    shape, table = case.anatomy.ideal, case.table
    edges = shape.family in ("square", "raised cosine") or table.edge is not None
    unknown = {
        "family": table.pulse in ("auto", "drag"),
        "duration": table.duration is None,
        "edges": not edges and shape.family != "gaussian",
        "quadrature": table.drag is None and shape.weight != 0.0,
    }
    gaussian = shape.family == "gaussian"
    return IdealPulse(
        family=shape.family,
        amplitude=case.level,
        phase=math.remainder(case.phase, 2.0 * math.pi),
        duration=shape.duration,
        rise=math.nan if gaussian else TEN_TO_NINETY * shape.rise,
        fall=math.nan if gaussian else TEN_TO_NINETY * shape.fall,
        quadrature=shape.weight,
        from_fit=tuple(name for name, missing in unknown.items() if missing),
        infidelity=infidelity,
    )


def _warnings(case: Case, share: float) -> tuple[str, ...]:
    found = []
    family = case.anatomy.ideal.family
    if share > case.table.misfit:
        found.append(
            f"a {family} pulse does not fit: {share:.1%} of the real one (root mean square) is "
            f"left over, more than {case.table.misfit:.1%}; the items are doubtful"
        )
    return tuple(found)


def _envelope(case: Case, iq: ComplexArray) -> Envelope:
    t = case.costing.t
    unit = case.result.envelope.unit
    return Envelope(float(t[0]), float(t[1] - t[0]), iq, case.qubit.frequency, unit)
