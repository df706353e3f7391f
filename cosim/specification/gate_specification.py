"""From a target infidelity, the ideal pulse and the qubit to what each block must meet."""

import math
import time
from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import datetime
from functools import cache

from scipy.optimize import brentq

from cosim.errors import TestbenchError
from cosim.noise_frame import unitary_losses
from cosim.quantum.batch import propagate_batch
from cosim.quantum.batch_drive import BatchDrive
from cosim.quantum.fidelity import Rotation
from cosim.quantum.targets import target_rotation
from cosim.qubit_drive import make_qubit
from cosim.record import package_versions
from cosim.schema import GateTable, QubitTable
from cosim.specification.addition import alignment
from cosim.specification.allocation import all_cosines, combined
from cosim.specification.building import AnyCurve, curve_names, fastest_offset, make_curves
from cosim.specification.curves import Curve
from cosim.specification.masks import make_masks
from cosim.specification.notes import describe
from cosim.specification.pulse import (
    IdealPulse,
    channel_infidelity,
    clean_channels,
    clean_rate,
    make_pulse,
)
from cosim.specification.request import BLOCKS, Request, read_request
from cosim.specification.result import BlockLimit, GateSpecification, Verification
from cosim.specification.sharing import powers_at, rounded, shared_errors
from cosim.specification.small_errors import formula_coefficients
from cosim.specification.verification import Together, simulate_together
from cosim.testbench import Bench, DesignBench, Testbench
from cosim.waveform import FloatArray

RULE = (
    "Errors that stay the same add in amplitude where they turn the qubit about the same axis, at "
    "the worst of their signs and phases, and in power where they do not; what fluctuates adds in "
    "power."
)
# The limits are shrunk at most to this part; further apart the rule of addition does not hold.
MOST_SHRINKING = 0.2
# Relative accuracy of the common factor.
SHRINKING_ACCURACY = 1e-3


@dataclass(frozen=True, slots=True)
class _Task:
    """What is to be specified."""

    request: Request
    pulse: IdealPulse
    rabi_per_volt: float
    target: str
    decoherence: float
    left: float
    floor: float


def specify_gate(bench: Bench) -> GateSpecification:
    """Work out what each block of a gate's electronics must meet.

    Parameters
    ----------
    bench : DesignBench or Testbench
        With [qubit], [gate] and [specify]; a circuit, if there is one, is not looked at.

    Returns
    -------
    GateSpecification
        A design estimate.

    Raises
    ------
    TestbenchError
        If there is no [specify], a key is wrong, or the target cannot be met: the message names
        what forbids it.
    """
    clock = time.perf_counter()
    started = datetime.now().astimezone().isoformat(timespec="seconds")
    task = _task_of(bench)
    request, pulse = task.request, task.pulse
    samples = request.table.samples
    curves = make_curves(request, pulse, task.rabi_per_volt, samples)
    budget = request.table.target - task.decoherence - task.left - task.floor
    given = _given(request)
    _check_given(curves, given)
    costs = {name: curves[name].cost(error) for name, error in given.items()}
    cosines = _cosines(curves)
    _check_feasible(task, budget, costs, cosines, list(curves))
    errors, multiplier = shared_errors(request, curves, given, cosines, budget)
    errors, verified = _verified(task, curves, given, errors)
    final = {name: curves[name].cost(errors[name]) for name in curves}
    formulas = formula_coefficients(request, pulse, task.rabi_per_volt)
    powers = powers_at(request, errors)
    blocks = tuple(
        _block(
            task,
            name,
            curves[name],
            errors[name],
            final[name],
            formulas[name],
            powers.get(name, math.nan),
            name in given,
        )
        for name in curves
    )
    return GateSpecification(
        title=bench.title,
        target=task.target,
        target_infidelity=request.table.target,
        allocation=request.table.allocate,
        frame=request.table.frame,
        decoherence=task.decoherence,
        pulse_infidelity=task.left,
        numerical_floor=task.floor,
        budget=budget,
        combined=combined([final[name] for name in curves], cosines),
        blocks=blocks,
        masks=make_masks(request, pulse, task.rabi_per_volt, errors, final),
        verification=verified,
        total_power=sum(powers.values()) if powers else math.nan,
        power_per_infidelity=multiplier,
        peak_rabi=pulse.peak / (2.0 * math.pi),
        peak_voltage=pulse.peak / (2.0 * math.pi * task.rabi_per_volt),
        rule=RULE,
        warnings=_warnings(task, blocks, verified),
        started=started,
        wall_time=time.perf_counter() - clock,
        versions=package_versions(),
        testbench=bench.to_toml(),
    )


def gate_tables(bench: Bench) -> tuple[QubitTable, GateTable]:
    """Give the tables [qubit] and [gate] of a testbench.

    Parameters
    ----------
    bench : Bench
        Of any kind.

    Returns
    -------
    tuple of QubitTable and GateTable

    Raises
    ------
    TestbenchError
        If it has none, or the qubit is one of operators.
    """
    label = bench.source or "the testbench"
    qubit = bench.qubit if isinstance(bench, DesignBench | Testbench) else None
    gate = bench.gate if isinstance(bench, DesignBench | Testbench) else None
    if qubit is None or gate is None:
        raise TestbenchError(f"{label}: the tables [qubit] and [gate] are missing")
    if qubit.kind == "operators":
        raise TestbenchError(
            f'{label}, table [qubit]: kind = "operators" has no pulse that could be specified'
        )
    return qubit, gate


def _task_of(bench: Bench) -> _Task:
    label = bench.source or "the testbench"
    if "specify" not in bench.studies:
        raise TestbenchError(f"{label}: the table [specify] is missing")
    table, gate = gate_tables(bench)
    request = read_request(bench.studies["specify"], label)
    carrier = request.pulse.carrier
    if table.frequency == "carrier" and isinstance(carrier, str):
        raise TestbenchError(
            f"{label}: [qubit] follows the carrier and [specify.pulse] follows the qubit",
            hint="give one of the two frequencies in Hz",
        )
    qubit = make_qubit(table, carrier if isinstance(carrier, float) else 0.0)
    name, rotation = _rotation(gate, label)
    pulse = make_pulse(request.pulse, qubit, rotation.angle, fastest_offset(request))
    lossy, clean = clean_channels(pulse)
    left = max(0.0, channel_infidelity(pulse, clean))
    decoherence = max(0.0, channel_infidelity(pulse, lossy) - left)
    return _Task(request, pulse, table.rabi_per_volt, name, decoherence, left, _floor(pulse))


def _rotation(gate: GateTable, label: str) -> tuple[str, Rotation]:
    wanted = gate.target
    if isinstance(wanted, str):
        name, rotation = wanted, target_rotation(wanted)
    else:
        axis = ", ".join(f"{part:g}" for part in wanted.axis)
        name = f"{math.degrees(wanted.angle):g}° about ({axis})"
        rotation = Rotation(wanted.axis, wanted.angle)
    x, y, z = rotation.axis
    if abs(z) > 1e-9 * math.hypot(x, y) or not 0.0 < abs(rotation.angle) <= 2.0 * math.pi:
        raise TestbenchError(
            f"{label}, table [gate], key 'target': wanted a rotation about an axis of the "
            f"xy-plane, which a pulse makes, got '{name}'"
        )
    # Turning the axis about z, or round, changes no infidelity.
    return name, Rotation((1.0, 0.0, 0.0), abs(rotation.angle))


def _floor(pulse: IdealPulse) -> float:
    """Give 1 - F_avg between the ideal pulse and the same on half as long cells."""
    ends = []
    for one in (pulse, replace(pulse, cells=2 * pulse.cells)):
        rate = clean_rate(one)[one.room : one.room + one.cells]
        ends.append(propagate_batch(one.lossless, BatchDrive(one.step, rate)).unitaries[0])
    return max(0.0, float(unitary_losses((ends[0].conj().T @ ends[1])[None])[0][0]))


def _given(request: Request) -> dict[str, float]:
    """Give the errors of the blocks whose limits the testbench gives."""
    found = {}
    for name, block in request.blocks.items():
        if block.value is not None:
            found[name] = BLOCKS[name].error(float(block.value))
    return found


def _check_given(curves: Mapping[str, AnyCurve], given: Mapping[str, float]) -> None:
    """Refuse a given limit that the curve of its block does not reach."""
    for name, error in given.items():
        curve = curves[name]
        if isinstance(curve, Curve) and error > curve.most:
            kind = BLOCKS[name]
            raise TestbenchError(
                f"table [specify.{name}], key 'value': followed up to {kind.value(curve.most):.4g} "
                f"{kind.unit}, got {kind.value(error):.4g}"
            )


def _cosines(curves: Mapping[str, AnyCurve]) -> FloatArray:
    constant, _ = curve_names(curves)
    return all_cosines(list(curves), alignment([curves[name] for name in constant]))


def _check_feasible(
    task: _Task, budget: float, given: Mapping[str, float], cosines: FloatArray, names: list[str]
) -> None:
    """Name what forbids a target that cannot be met."""
    target = task.request.table.target
    fixed = {
        "decoherence (t1, t2 of [qubit])": task.decoherence,
        "the ideal pulse itself (leakage, [specify.pulse])": task.left,
        "the numerical floor": task.floor,
    }
    if budget <= 0.0:
        name, cost = max(fixed.items(), key=lambda item: item[1])
        raise TestbenchError(
            f"[specify]: a target of {target:g} cannot be met: {name} alone "
            f"{'costs' if cost >= target else 'takes most of it,'} {cost:.3g}",
            hint="a shorter pulse loses less to decoherence, a longer or better shaped one leaks "
            "less",
        )
    taken = combined([given.get(name, 0.0) for name in names], cosines)
    every = len(given) == len(names)
    if taken > budget or (taken >= budget and not every):
        worst = max(given, key=lambda name: given[name])
        raise TestbenchError(
            f"[specify]: a target of {target:g} cannot be met: {budget:.3g} are left for the "
            f"blocks, and those that are given cost {taken:.3g}, most of it [specify.{worst}] with "
            f"{given[worst]:.3g}",
            hint="tighten that 'value', or leave it to be worked out",
        )


def _verified(
    task: _Task,
    curves: Mapping[str, AnyCurve],
    given: Mapping[str, float],
    errors: Mapping[str, float],
) -> tuple[dict[str, float], Verification]:
    """Simulate all limits together, and shrink them where they cost too much."""
    table = task.request.table
    # What the cells leave out of account belongs to the infidelity as an error bar.
    allowed = table.target - task.floor

    kept = {*given, "dac_rate"}
    if set(errors) - kept - {"dac_bits"}:
        # A bit more would halve an error for the sake of a per cent.
        kept.add("dac_bits")

    def shrunk(factor: float) -> dict[str, float]:
        return rounded({name: x if name in kept else factor * x for name, x in errors.items()})

    @cache
    def together(factor: float) -> Together:
        return simulate_together(task.pulse, table.frame, curves, shrunk(factor), table.samples)

    def excess(factor: float) -> float:
        # What the samples leave open has to fit as well.
        found = together(factor)
        return found.infidelity + found.standard_error - allowed

    first = together(1.0)
    factor, last = 1.0, first
    if excess(1.0) > 0.0:
        if excess(MOST_SHRINKING) > 0.0:
            raise TestbenchError(
                f"[specify]: all blocks at {MOST_SHRINKING:g} of their limits still cost more than "
                f"the target of {table.target:g} together",
                hint="what is given may cost too much with the rest; give it less, or more room",
            )
        factor = float(brentq(excess, MOST_SHRINKING, 1.0, xtol=SHRINKING_ACCURACY))
        while excess(factor) > 0.0:
            factor -= SHRINKING_ACCURACY
        last = together(factor)
    return shrunk(factor), Verification(
        last.infidelity,
        last.standard_error,
        first.infidelity,
        factor,
        last.combinations,
        table.samples,
    )


def _block(
    task: _Task,
    name: str,
    curve: AnyCurve,
    error: float,
    share: float,
    formula: float,
    power: float,
    given: bool,
) -> BlockLimit:
    kind = BLOCKS[name]
    beside = math.nan
    if formula > 0.0 and share > 0.0:
        beside = kind.value(math.sqrt(share / formula))
    return BlockLimit(
        name=name,
        label=kind.label,
        limit=kind.value(error),
        unit=kind.unit,
        given=given,
        share=share,
        formula=beside,
        power=power,
        note=describe(
            name, task.request.blocks[name], curve, task.pulse, error, task.pulse.qubit.frequency
        ),
    )


def _warnings(
    task: _Task, blocks: tuple[BlockLimit, ...], verified: Verification
) -> tuple[str, ...]:
    target = task.request.table.target
    found = []
    missing = [kind.label for name, kind in BLOCKS.items() if name not in task.request.blocks]
    if missing:
        found.append(f"taken as perfect, for want of a table: {', '.join(missing)}")
    if verified.standard_error > 0.02 * target:
        found.append(
            f"the samples know the infidelity to +- {verified.standard_error:.1e} only; more "
            "'samples' in [specify] know it better"
        )
    for block in blocks:
        if block.share == 0.0:
            found.append(f"{block.label}: costs this gate nothing at its limit")
    return tuple(found)
