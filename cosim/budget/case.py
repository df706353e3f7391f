"""A gate made ready for its budget: the pulse taken apart, and its ideal."""

import math
from dataclasses import dataclass, replace

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.budget.costs import Costing, cost_envelopes
from cosim.budget.table import BudgetTable, budget_table
from cosim.capture import Capture
from cosim.coupling import rate_per_unit
from cosim.dsp.anatomy.dissection import dissect
from cosim.dsp.anatomy.parts import Anatomy
from cosim.dsp.anatomy.shapes import make_grid, sample_shape
from cosim.errors import InputError, TestbenchError, WaveformError
from cosim.gate import Target, gate_target
from cosim.quantum.operators import OperatorSystem
from cosim.quantum.qubit import Qubit
from cosim.qubit_drive import QubitDrive, couple
from cosim.result import GateResult
from cosim.schema import SpectatorTable
from cosim.testbench import Testbench
from cosim.waveform import ComplexArray

# Part of the whole record's peak below which a window holds no pulse: the filter's own ripple.
_LEAST_PULSE = 1e-6
# Samples of the window at most: a minute with four levels.
_MOST_SAMPLES = 200_001


def check_gate(bench: Testbench) -> Target:
    """Refuse gates without an ideal pulse, before anything long is run.

    Parameters
    ----------
    bench : Testbench

    Returns
    -------
    Target
        Of the gate.

    Raises
    ------
    InputError
        If the qubit is given by operators, the target is no turn or one about z, or the table
        [budget] is wrong or wants DRAG of a spin.
    """
    if bench.qubit.kind == "operators":
        raise InputError(
            "a budget needs a qubit of kind spin or transmon: of a system of operators it is not "
            "known what one pulse and its imperfections would do",
            hint="describe the qubit by its frequency, levels and anharmonicity",
        )
    target = gate_target(bench)
    axis, angle = target.rotation.axis, target.rotation.angle
    where = f"{bench.source or 'the testbench'}, table [gate], key 'target'"
    if abs(angle) < 1e-9:
        raise TestbenchError(
            f"{where}: a budget holds a pulse against an ideal one, and '{target.name}' wants none",
            hint="for a stretch without a pulse see the key 'idle' in [gate]",
        )
    if abs(axis[2]) > 1e-6 * math.hypot(*axis):
        raise TestbenchError(
            f"{where}: one ideal pulse turns about an axis in the xy-plane, got '{target.name}'"
        )
    table = budget_table(bench)
    if bench.qubit.kind == "spin" and (table.pulse == "drag" or table.drag):
        raise TestbenchError(
            f"{bench.source or 'the testbench'}, table [budget]: a DRAG quadrature is "
            "(dI/dt)/alpha of a transmon's anharmonicity alpha, which a spin does not have",
            hint="leave out 'drag' and pulse = \"drag\", or describe the qubit as a transmon",
        )
    return target


@dataclass(frozen=True, slots=True)
class Case:
    """What a budget is made of.

    Parameters
    ----------
    result : GateResult
    table : BudgetTable
    drive : QubitDrive
    qubit : Qubit
        With its loss.
    costing : Costing
    anatomy : Anatomy
    level, phase : float
        Amplitude in the envelope's unit, and phase in rad, of the ideal pulse.
    iq : ndarray of complex, shape (n,)
        The real pulse, in the qubit's frame.
    spectators : tuple of SpectatorTable
        The other qubits of the line.
    """

    result: GateResult
    table: BudgetTable
    drive: QubitDrive
    qubit: Qubit
    costing: Costing
    anatomy: Anatomy
    level: float
    phase: float
    iq: ComplexArray
    spectators: tuple[SpectatorTable, ...]

    def envelope(self, *parts: str) -> ComplexArray:
        """Give the ideal pulse with some imperfections, shape (n,)."""
        return self.anatomy.envelope(self.level, self.phase, parts)

    def without(self, part: str) -> ComplexArray:
        """Give the real pulse without an imperfection, shape (n,)."""
        return self.envelope(*(name for name in self.anatomy.parts if name != part))


def prepare(result: GateResult, bench: Testbench, table: BudgetTable, target: Target) -> Case:
    """Take the pulse of a gate apart and find its ideal.

    Parameters
    ----------
    result : GateResult
    bench : Testbench
    table : BudgetTable
    target : Target

    Returns
    -------
    Case

    Raises
    ------
    InputError
        If the window is too long for the distance of carrier and qubit.
    WaveformError
        If there is no pulse.
    """
    shot = Capture(result.waveform, {}, result.run.step, (), (), None)
    drive = couple(bench, shot)
    qubit = drive.qubit
    assert not isinstance(qubit, OperatorSystem)
    envelope = result.envelope
    start, stop = drive.window
    offset = envelope.carrier_frequency - qubit.frequency
    widest = abs(offset) + 2.0 * abs(table.baseband_frequency)
    step = min(envelope.dt, 1.0 / (20.0 * widest)) if widest else envelope.dt
    count = 2 * math.ceil((stop - start) / step / 2.0) + 1
    if count > _MOST_SAMPLES:
        raise InputError(
            f"a budget of {stop - start:.3g} s at {widest:.3g} Hz from the carrier takes {count} "
            f"samples, more than {_MOST_SAMPLES}",
            hint="choose a shorter 'window' in [gate], or a carrier nearer to the qubit",
        )
    t = np.linspace(start, stop, count)
    inside = np.abs(envelope.iq[(envelope.t >= start) & (envelope.t <= stop)])
    if not inside.max(initial=0.0) > _LEAST_PULSE * float(np.abs(envelope.iq).max()):
        raise WaveformError(
            f"there is no pulse at {envelope.carrier_frequency:.6g} Hz within the window of the "
            f"gate, {start:.4g} s to {stop:.4g} s",
            hint="see the key 'window' in [gate]",
        )
    turn = np.exp(2j * math.pi * offset * t)
    iq = np.asarray(CubicSpline(envelope.t, envelope.iq)(t) * turn)
    anharmonicity = 2.0 * math.pi * qubit.anharmonicity if qubit.levels > 2 else 0.0
    grid = make_grid(t, envelope.carrier_frequency, anharmonicity)
    tone = offset + table.baseband_frequency
    near = offset if abs(offset) <= abs(tone) else tone
    anatomy = dissect(grid, iq, table.wanted(), offset=near)
    costing = Costing(
        replace(qubit, t1=math.inf, t2=math.inf),
        target.unitary,
        t,
        rate_per_unit(drive.line, envelope.unit),
        bench.gate.calibrate,
    )
    axis = target.rotation.axis
    phase = -math.atan2(axis[1], axis[0])
    level = _ideal_level(costing, anatomy, phase, target.rotation.angle)
    if level < 0.0:
        level, phase = -level, phase + math.pi
    return Case(result, table, drive, qubit, costing, anatomy, level, phase, iq, bench.spectator)


def _ideal_level(costing: Costing, anatomy: Anatomy, phase: float, angle: float) -> float:
    """Give the amplitude that makes exactly the wanted rotation: by its area, and by trial."""
    grid = anatomy.grid
    area = float(sample_shape(anatomy.ideal, grid).size.sum()) * grid.step
    level = angle / (costing.volts * area)
    if costing.qubit.levels > 2:
        # Further levels turn it a little more or less.
        row = anatomy.envelope(level, phase, ())[None]
        level *= float(cost_envelopes(replace(costing, adjusted=("amplitude",)), row).scale[0])
    return level
