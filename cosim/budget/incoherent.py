"""What is no imperfection of the pulse: decoherence, noise, other qubits, the numerical floor."""

import math
from dataclasses import replace

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.budget.case import Case
from cosim.budget.costs import Costing, Costs, adjusted_envelopes, block_infidelity, free_blocks
from cosim.budget.result import BudgetItem
from cosim.quantum.batch import evolve_batch
from cosim.quantum.batch_drive import BatchDrive
from cosim.quantum.fidelity import average_gate_fidelity
from cosim.quantum.frame import free_frame
from cosim.quantum.qubit import Qubit
from cosim.qubit_drive import make_qubit
from cosim.result import GateResult
from cosim.schema import SpectatorTable
from cosim.units import format_quantity
from cosim.waveform import ComplexArray, FloatArray


def decoherence_item(
    qubit: Qubit, costing: Costing, iq: ComplexArray, costs: Costs, view: str
) -> BudgetItem | None:
    """Cost relaxation and dephasing.

    Parameters
    ----------
    qubit : Qubit
        With its loss.
    costing : Costing
    iq : ndarray of complex, shape (2, n)
        The ideal and the real pulse.
    costs : Costs
        Of these two, without loss.
    view : str
        Which fidelity.

    Returns
    -------
    BudgetItem or None
        None for a qubit without loss.
    """
    if qubit.lossless:
        return None
    rows, free = iq, view != "as_simulated"
    if view == "calibrated":
        rows = adjusted_envelopes(costing.t, iq, costs.scale, costs.detuning)
    step = float(costing.t[1] - costing.t[0])
    channels = evolve_batch(qubit, BatchDrive(step, costing.volts * rows, order=4)).channels
    lossy: FloatArray = np.array(
        [
            1.0
            - (
                free_frame(channel, costing.target).average_gate_fidelity
                if free
                else average_gate_fidelity(channel, costing.target)
            )
            for channel in channels
        ],
        dtype=np.float64,
    )
    alone, removed = (lossy - costs.infidelity[view]).tolist()
    times = [
        f"{name} {format_quantity(value, 's')}"
        for name, value in (("T1", qubit.t1), ("T2", qubit.t2))
        if math.isfinite(value)
    ]
    return BudgetItem(
        name="decoherence",
        value=math.nan,
        unit="1",
        alone=alone,
        removed=removed,
        absorbed=False,
        kind="incoherent",
        note=", ".join(times),
    )


def noise_items(result: GateResult) -> list[BudgetItem]:
    """Give the sources of noise as the run found them.

    Parameters
    ----------
    result : GateResult

    Returns
    -------
    list of BudgetItem
        What each costs on the real pulse, which noise that is small does on the ideal one, too.
    """
    sources = () if result.noise is None else result.noise.sources
    items = []
    for source in sources:
        leader = next(iter(source.devices), "")
        note = f"on the {source.acts_on}, by {source.method}"
        if leader:
            note += f"; {leader} leads with {source.devices[leader]:.2e}"
        items.append(
            BudgetItem(
                name=f"noise: {source.name}",
                value=source.infidelity,
                unit="1",
                alone=source.infidelity,
                removed=source.infidelity,
                absorbed=False,
                kind="incoherent",
                note=note,
            )
        )
    return items


def neighbour_items(case: Case, view: str) -> list[BudgetItem]:
    """Give what the other qubits of the line lose, which is no part of the gate's own total.

    Parameters
    ----------
    case : Case
    view : str
        Which fidelity; a neighbour has no calibration of its own.

    Returns
    -------
    list of BudgetItem
        Alone is what the ideal pulse does to a bystander without loss and noise.
    """
    items = []
    free = view != "as_simulated"
    for table, effect in zip(case.spectators, case.result.spectators, strict=True):
        alone = math.nan
        if effect.target == "identity":
            alone = _on_bystander(
                case, make_qubit(table.qubit(case.qubit.frequency), 0.0), table, free
            )
        cost = effect.free_frame_infidelity if free else effect.infidelity
        items.append(
            BudgetItem(
                name=f"neighbour: {effect.name}",
                value=effect.frequency - case.qubit.frequency,
                unit="Hz",
                alone=alone,
                removed=cost,
                absorbed=False,
                kind="neighbour",
                counted=False,
                note=f"its own loss, of which leakage {effect.leakage:.2e}",
            )
        )
    return items


def _on_bystander(case: Case, other: Qubit, table: SpectatorTable, free: bool) -> float:
    share = table.rabi_per_volt / case.drive.line.rabi_per_volt
    costing = replace(
        case.costing,
        qubit=replace(other, t1=math.inf, t2=math.inf),
        target=np.eye(2, dtype=np.complex128),
        volts=case.costing.volts * share,
    )
    offset = case.qubit.frequency - other.frequency
    # Twenty samples in a turn, between those of the envelope.
    t = costing.t
    parts = 2 * math.ceil(10.0 * abs(offset) * float(t[1] - t[0])) or 1
    fine = np.linspace(t[0], t[-1], (t.size - 1) * parts + 1)
    iq = CubicSpline(t, case.envelope())(fine) * np.exp(2j * math.pi * offset * fine)
    blocks = replace(costing, t=fine).unitaries(iq[None])[:, :2, :2]
    if free:
        blocks = free_blocks(blocks, costing.target)
    return float(block_infidelity(blocks, costing.target)[0])


def floor_item(result: GateResult, view: str) -> BudgetItem:
    """Give the numerical floor, which is a doubt and no loss.

    Parameters
    ----------
    result : GateResult
    view : str
        Which fidelity.

    Returns
    -------
    BudgetItem
    """
    bar = getattr(result, view).error_bar
    missing = math.isnan(result.numerical_floor)
    return BudgetItem(
        name="numerical floor",
        value=result.numerical_floor,
        unit="1",
        alone=result.numerical_floor,
        removed=math.nan,
        absorbed=False,
        kind="numerical",
        counted=False,
        note="no second run" if missing else f"the total is known within ± {bar:.1e}",
    )
