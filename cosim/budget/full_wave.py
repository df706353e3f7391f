"""What the rotating wave leaves out: harmonics, and the counter-rotating part of the carrier."""

import math
from dataclasses import dataclass, replace

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.budget.case import Case
from cosim.budget.costs import Costing, Costs, block_infidelity, free_blocks
from cosim.budget.naming import decibels
from cosim.budget.result import BudgetItem
from cosim.coupling import drive_rate
from cosim.dsp.resampling import interpolant
from cosim.quantum.evolution import DriveSpline, propagate_unitary
from cosim.qubit_drive import QubitDrive
from cosim.waveform import ComplexArray, FloatArray, Waveform

# Harmonics that are looked at.
_HARMONICS = (2, 3, 4, 5)
# Periods of the carrier that tell its harmonics apart.
_LEAST_PERIODS = 8


@dataclass(frozen=True, slots=True)
class FullWave:
    """The real waveform within the gate's window, and how it is judged.

    Parameters
    ----------
    drive : QubitDrive
    waveform : Waveform
        At the probe, over the window and one sample beyond.
    costing : Costing
        Of the envelopes.
    """

    drive: QubitDrive
    waveform: Waveform
    costing: Costing

    def carrier(self, iq: ComplexArray) -> FloatArray:
        """Put an envelope on its carrier.

        Parameters
        ----------
        iq : ndarray of complex, shape (n,)
            In the qubit's frame, on the grid of the costing.

        Returns
        -------
        ndarray, shape (m,)
            On the grid of the waveform.
        """
        t = self.waveform.t
        turn = np.exp(2j * math.pi * np.mod(self.costing.qubit.frequency * t, 1.0))
        return np.asarray((CubicSpline(self.costing.t, iq)(t) * turn).real)

    def infidelity(self, v: FloatArray, view: str, scale: float, detuning: float) -> float:
        """Cost a waveform without the rotating-wave approximation and without loss.

        Parameters
        ----------
        v : ndarray, shape (m,)
            On the grid of the waveform.
        view : str
            Which fidelity.
        scale, detuning : float
            What the calibrated one adjusts: factor, and offset of the carrier in Hz.

        Returns
        -------
        float
        """
        if view != "calibrated":
            scale, detuning = 1.0, 0.0
        spline = interpolant(drive_rate(replace(self.waveform, v=v), self.drive.line))
        qubit = replace(self.costing.qubit, frequency=self.costing.qubit.frequency - detuning)
        start, stop = float(self.costing.t[0]), float(self.costing.t[-1])
        drive = DriveSpline(spline.x, spline.c)
        block = propagate_unitary(qubit, drive, start, stop, scale=scale)[None, :2, :2]
        if view != "as_simulated":
            block = free_blocks(block, self.costing.target)
        return float(block_infidelity(block, self.costing.target)[0])


def cut_wave(drive: QubitDrive, waveform: Waveform, costing: Costing) -> FullWave:
    """Cut a waveform to the gate's window.

    Parameters
    ----------
    drive : QubitDrive
    waveform : Waveform
        At the probe.
    costing : Costing

    Returns
    -------
    FullWave
    """
    start, stop = float(costing.t[0]), float(costing.t[-1])
    first = max(0, int(np.searchsorted(waveform.t, start, "right")) - 2)
    last = min(waveform.t.size, int(np.searchsorted(waveform.t, stop, "left")) + 2)
    part = replace(waveform, t=waveform.t[first:last], v=waveform.v[first:last])
    return FullWave(drive, part, costing)


def strongest_harmonic(
    wave: FullWave, span: tuple[float, float], carrier_frequency: float, level: float
) -> tuple[int, float]:
    """Find the strongest harmonic on the plateau.

    Parameters
    ----------
    wave : FullWave
    span : tuple of two floats
        The pulse between its half heights in s.
    carrier_frequency : float
        In Hz.
    level : float
        Amplitude of the pulse.

    Returns
    -------
    order, ratio : int and float
        2 for twice the carrier; amplitude over that of the pulse, NaN where the pulse is too short.
    """
    t, v = wave.waveform.t, wave.waveform.v
    quarter = 0.25 * (span[1] - span[0])
    inside = (t > span[0] + quarter) & (t < span[1] - quarter)
    t, v = t[inside], v[inside]
    if t.size < 16 or (t[-1] - t[0]) * carrier_frequency < _LEAST_PERIODS:
        return 0, math.nan
    x = (t - t[0]) / (t[-1] - t[0])
    weights = np.gradient(t) * np.sin(math.pi * x) ** 2
    weights /= weights.sum()
    found = [
        (
            2.0
            * abs(
                weights @ (v * np.exp(-2j * math.pi * np.mod(order * carrier_frequency * t, 1.0)))
            )
            / level,
            order,
        )
        for order in _HARMONICS
    ]
    ratio, order = max(found)
    return order, float(ratio)


def full_wave_items(case: Case, costs: Costs, view: str) -> tuple[list[BudgetItem], float]:
    """Cost what the envelope does not show, by evolving full waveforms.

    Parameters
    ----------
    case : Case
    costs : Costs
        Its first rows are those of the ideal and of the real pulse.
    view : str
        Which fidelity.

    Returns
    -------
    items : list of BudgetItem
    difference : float
        Infidelity of the full waveform less that of its envelope.
    """
    wave = cut_wave(case.drive, case.result.waveform, case.costing)
    ideal, band = wave.carrier(case.envelope()), wave.carrier(case.iq)
    beyond = wave.waveform.v - band
    settings = [(float(costs.scale[row]), float(costs.detuning[row])) for row in (0, 1)]
    clean = [float(costs.infidelity[view][row]) for row in (0, 1)]
    of_ideal = wave.infidelity(ideal, view, *settings[0])
    with_harmonics = wave.infidelity(ideal + beyond, view, *settings[0])
    of_band = wave.infidelity(band, view, *settings[1])
    of_real = wave.infidelity(wave.waveform.v, view, *settings[1])
    shape, level = case.anatomy.ideal, case.anatomy.numbers["level"]
    order, ratio = strongest_harmonic(
        wave, (shape.start, shape.stop), case.drive.carrier_frequency, level
    )
    rabi = case.costing.volts * level / (2.0 * math.pi)
    items = [
        BudgetItem(
            name="harmonics",
            value=math.nan if math.isnan(ratio) else decibels(ratio),
            unit="dBc",
            alone=with_harmonics - of_ideal,
            removed=of_real - of_band,
            absorbed=False,
            note=f"at {order} times the carrier; all that lies beyond the envelope" * (order > 0),
        ),
        BudgetItem(
            name="counter-rotating wave",
            value=rabi / case.drive.carrier_frequency,
            unit="1",
            alone=of_ideal - clean[0],
            removed=of_band - clean[1],
            absorbed=False,
            note="Rabi frequency over carrier",
        ),
    ]
    return items, of_real - clean[1]
