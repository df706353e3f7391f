"""What the first run of a gate fixes for all that follows: carrier, qubit, line, window."""

from dataclasses import dataclass, replace

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.adjust import Pulse
from cosim.capture import Capture, check_steps
from cosim.coupling import DriveLine, drive_rate, rotating_rate
from cosim.dsp.carrier import estimate_carrier
from cosim.dsp.pulse import measure_pulse
from cosim.dsp.resampling import interpolant
from cosim.errors import InputError, TestbenchError
from cosim.quantum.evolution import DriveSpline
from cosim.quantum.operators import OperatorSystem
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_rotating_wave
from cosim.schema import QubitTable
from cosim.testbench import Testbench
from cosim.waveform import ComplexArray, Envelope, Waveform

# Samples of the envelope up to which the rotating-wave twin is run; a second or so.
MOST_SAMPLES = 50_000

DEFAULT_LEVELS = {"spin": 2, "transmon": 4}


@dataclass(frozen=True, slots=True)
class QubitDrive:
    """The qubit at the end of the line, and the carrier that drives it.

    Parameters
    ----------
    carrier_frequency : float
        In Hz, given or estimated.
    estimated : bool
        Whether the carrier was estimated from the waveform.
    follows : bool
        Whether the qubit's frequency is defined as the carrier's.
    qubit : Qubit or OperatorSystem
        The qubit, or a system given by a user's own operators.
    line : DriveLine
        The way from the probe to the qubit.
    window : tuple of two floats
        Start and end of the gate in s.
    """

    carrier_frequency: float
    estimated: bool
    follows: bool
    qubit: Qubit | OperatorSystem
    line: DriveLine
    window: tuple[float, float]

    def pulse(self, waveform: Waveform) -> Pulse:
        """Couple a waveform at the probe to the qubit.

        Parameters
        ----------
        waveform : Waveform
            In V or A, shape (n,).

        Returns
        -------
        Pulse
            Drive rate in rad/s as a piecewise cubic, with the qubit and the window.
        """
        spline = interpolant(drive_rate(waveform, self.line))
        return Pulse(self.qubit, DriveSpline(spline.x, spline.c), *self.window)

    def second_pulse(self, first: Waveform, second: Waveform) -> tuple[Pulse, float]:
        """Couple the waveform of a run at half the step, in the frame that the first one fixed.

        A free oscillator has another frequency in each run. Where the qubit follows the carrier,
        it follows in each, and the difference of the two carriers' phases is taken out.

        Parameters
        ----------
        first, second : Waveform
            At the probe, from the run at the full step and from that at half of it.

        Returns
        -------
        pulse : Pulse
            Of the second run.
        carrier_frequency : float
            In Hz; an estimated one is extrapolated from the two runs, f2 + (f2 - f1)/3, since the
            trapezoidal rule shifts it by a relative -(omega h)^2/12.
        """
        if not self.estimated:
            return self.pulse(second), self.carrier_frequency
        found = estimate_carrier(second).frequency
        extrapolated = found + (found - self.carrier_frequency) / 3.0
        if not self.follows or isinstance(self.qubit, OperatorSystem):
            return self.pulse(second), extrapolated
        offset = found - self.carrier_frequency
        qubit = replace(self.qubit, frequency=self.qubit.frequency + offset)
        phase = measure_pulse(second, found).phase_error
        phase -= measure_pulse(first, self.carrier_frequency).phase_error
        return replace(self.pulse(second), qubit=qubit, phase=phase), extrapolated

    def rotating_wave_twin(self, envelope: Envelope) -> ComplexArray | None:
        """Evolve the demodulated envelope with the independent solver.

        Parameters
        ----------
        envelope : Envelope
            At the probe.

        Returns
        -------
        ndarray of complex, shape (levels^2, levels^2), or None
            Superoperator; None for a system of operators, which has no rotating-wave form, and
            for a qubit so far from the carrier that its frame turns more than the solver can
            follow.
        """
        if isinstance(self.qubit, OperatorSystem):
            return None
        start, stop = self.window
        offset = self.carrier_frequency - self.qubit.frequency
        # The envelope turns by the offset in the qubit's frame: 20 samples per turn at least.
        step = min(envelope.dt, 1.0 / (20.0 * abs(offset))) if offset else envelope.dt
        count = max(4, round((stop - start) / step) + 1)
        if count > MOST_SAMPLES:
            return None
        times = np.linspace(start, stop, count)
        iq = CubicSpline(envelope.t, envelope.iq)(times)
        rate = rotating_rate(iq, times, self.line, envelope.unit, offset)
        return evolve_rotating_wave(self.qubit, rate, times)


def couple(bench: Testbench, shot: Capture, system: OperatorSystem | None = None) -> QubitDrive:
    """Work out carrier, qubit, line and window from a testbench and its waveform.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    shot : Capture
        The waveform at the probe.
    system : OperatorSystem or None
        A user's own system, for a testbench with kind = "operators".

    Returns
    -------
    QubitDrive
        Fixed for all that follows.

    Raises
    ------
    InputError
        If a system of operators is missing, or is there without being asked for.
    WaveformError
        If the carrier is to be estimated and there is none.
    TestbenchError
        If the time step is too large for the carrier found.
    """
    table = bench.qubit
    if (table.kind == "operators") != (system is not None):
        raise InputError(
            'a system of operators goes with kind = "operators" in [qubit], and with no other',
            hint="give it in Python: cosim.run(bench, system=cosim.operator_system(...))",
        )
    carrier = bench.drive.carrier
    estimated = isinstance(carrier, str)
    frequency = estimate_carrier(shot.waveform).frequency if isinstance(carrier, str) else carrier
    if estimated:
        check_steps(1.0 / (frequency * shot.step), 1.0 / frequency)
    line = DriveLine(
        rabi_per_volt=table.rabi_per_volt,
        attenuation=bench.drive.attenuation,
        impedance=bench.drive.reference_impedance,
    )
    first, last = float(shot.waveform.t[0]), float(shot.waveform.t[-1])
    start, stop = bench.gate.window or (first, last)
    if (stop - start) * frequency < 1.0:
        raise TestbenchError(
            f"table [gate], key 'window': {stop - start:.3g} s is less than one period of the "
            f"carrier of {frequency:.6g} Hz"
        )
    return QubitDrive(
        carrier_frequency=frequency,
        estimated=estimated,
        follows=table.frequency == "carrier",
        qubit=system or make_qubit(table, frequency),
        line=line,
        window=(max(start, first), min(stop, last)),
    )


def make_qubit(table: QubitTable, carrier_frequency: float) -> Qubit:
    """Make the qubit that a table describes.

    Parameters
    ----------
    table : QubitTable
        Of a spin or a transmon.
    carrier_frequency : float
        In Hz, for a qubit that follows the carrier.

    Returns
    -------
    Qubit
    """
    nominal = table.frequency if isinstance(table.frequency, float) else carrier_frequency
    return Qubit(
        frequency=nominal + table.detuning,
        levels=table.levels or DEFAULT_LEVELS[table.kind],
        anharmonicity=table.anharmonicity or 0.0,
        t1=table.t1,
        t2=table.t2,
        thermal_population=table.thermal_population,
    )
