"""The field that asks the resonator: the testbench's own pulse, or one that a netlist makes."""

import hashlib
import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.integrate import cumulative_trapezoid

from cosim.capture import Capture, Plan, capture_probe, make_plan
from cosim.circuit.netlist import DeckFile
from cosim.dsp.demodulation import demodulate
from cosim.errors import TestbenchError
from cosim.imported import import_waveform
from cosim.line import through_line
from cosim.outgoing import incident_samples
from cosim.quantum.incident import (
    IncidentField,
    incident_amplitude,
    sample_drive,
    two_step_drive,
)
from cosim.quantum.resonator import Resonator, amplitude_for_photons, field_rate
from cosim.readout_schema import ResonatorTable
from cosim.testbench import ReadoutBench, Testbench, load_drive
from cosim.waveform import ComplexArray, FloatArray

# Samples of the field in the time 1/kappa and in one turn against the drive.
FINE = 50
UNRESOLVED = 1e-3  # of the pulse, that may change at half the step before it is said


@dataclass(frozen=True, slots=True)
class PlayedPulse:
    """A pulse that another netlist, or a file, plays to the resonator.

    Parameters
    ----------
    drive : IncidentField
        What arrives there, from the deck's t = 0 on.
    files : tuple of DeckFile
        That were read for it.
    notices : tuple of str
        What the reader must know.
    """

    drive: IncidentField
    files: tuple[DeckFile, ...] = ()
    notices: tuple[str, ...] = ()


def pulse_source(bench: ReadoutBench) -> Testbench | None:
    """Read the testbench that makes the pulse.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench of the readout.

    Returns
    -------
    Testbench or None
        None where the pulse is that of [resonator].

    Raises
    ------
    TestbenchError
        If the file is wrong, or has another carrier than the resonator's drive.
    """
    pulse = bench.resonator
    if pulse is None or pulse.pulse is None:
        return None
    source = load_drive(Path(bench.folder) / Path(pulse.pulse).expanduser())
    carrier = source.drive.carrier
    if isinstance(carrier, float) and not math.isclose(carrier, pulse.drive, rel_tol=1e-9):
        raise TestbenchError(
            f"{source.source}, table [drive], key 'carrier': the pulse is at {carrier:.9g} Hz, and "
            f"the resonator is driven at {pulse.drive:.9g} Hz",
            hint="say the same as 'drive_frequency' in [resonator]",
        )
    return source


def play_pulse(bench: ReadoutBench, source: Testbench, stop: float) -> PlayedPulse:
    """Let a netlist or a file make the pulse.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench of the readout.
    source : Testbench
        That of the pulse, from `pulse_source`.
    stop : float
        End of the readout's run in s.

    Returns
    -------
    PlayedPulse
        With error bars, the pulse is made once more at half the step, and a change is told.

    Raises
    ------
    TestbenchError
        If the pulse ends before the run of the readout.
    InputError, SimulationError
        If the pulse cannot be made.
    """
    pulse = bench.resonator
    assert pulse is not None  # The source is that of a resonator's pulse.
    plan = None if source.netlist is None else make_plan(source)
    shot = _shot(source, plan)
    drive = _arriving(shot, source, pulse, stop)
    notices = shot.notices
    if plan is not None and bench.accuracy.floor:
        finer = _arriving(_shot(source, plan.half_step()), source, pulse, stop)
        off = float(np.linalg.norm(finer.samples - drive.samples) / np.linalg.norm(finer.samples))
        if off > UNRESOLVED:
            notices += (
                f"{source.source}: the pulse changes by {off:.2g} of itself at half the time step",
            )
    return PlayedPulse(drive, (_own_file(source), *shot.files), notices)


def silent_pulse(pulse: ResonatorTable, stop: float) -> PlayedPulse:
    """Give a pulse without a field, in place of one that would have to be simulated.

    Parameters
    ----------
    pulse : ResonatorTable
        The table [resonator].
    stop : float
        End of the run in s.

    Returns
    -------
    PlayedPulse
    """
    step, count = field_grid(pulse, stop)
    return PlayedPulse(IncidentField(step, np.zeros(count, dtype=np.complex128), pulse.drive))


def incident_field(pulse: ResonatorTable, resonator: Resonator, stop: float) -> IncidentField:
    """Give the field that drives the resonator by the testbench's own pulse.

    Parameters
    ----------
    pulse : ResonatorTable
        The table [resonator].
    resonator : Resonator
        Its resonator.
    stop : float
        End of the run in s.

    Returns
    -------
    IncidentField
        From t = 0 of the deck to beyond its end.
    """
    steps = two_step_drive(
        _level(pulse, resonator),
        pulse.length,
        boost=pulse.boost,
        boost_length=pulse.boost_length,
        ring_down=pulse.ring_down,
        ring_down_length=pulse.ring_down_length,
    )
    step, count = field_grid(pulse, stop)
    return sample_drive(steps, pulse.drive, step, count, pulse.start)


def drive_level(pulse: ResonatorTable, resonator: Resonator, drive: IncidentField) -> float:
    """Give the incident field of the pulse's long part.

    Parameters
    ----------
    pulse : ResonatorTable
        With `photons`, the mean of those for |0> and |1> in steady state, with `power`, or with a
        `pulse` of a file.
    resonator : Resonator
        Its resonator.
    drive : IncidentField
        Of a file; of such a one it is the median size in the second half of `length`.

    Returns
    -------
    float
        In sqrt(photon/s).
    """
    if pulse.pulse is None:
        return _level(pulse, resonator)
    inside = (drive.t >= pulse.start + 0.5 * pulse.length) & (drive.t <= pulse.start + pulse.length)
    return float(np.median(np.abs(drive.samples[inside])))


def field_grid(pulse: ResonatorTable, stop: float) -> tuple[float, int]:
    """Give the grid of the fields.

    Parameters
    ----------
    pulse : ResonatorTable
        The table [resonator].
    stop : float
        End of the run in s.

    Returns
    -------
    step : float
        In s.
    count : int
        Samples, from t = 0 of the deck to beyond its end.
    """
    resonator = pulse.resonator()
    rates = [abs(complex(field_rate(resonator, state, pulse.drive))) for state in (0, 1)]
    step = min(1.0 / (FINE * max(rates)), pulse.length / 200.0)
    return step, math.ceil(stop / step) + 2


def _level(pulse: ResonatorTable, resonator: Resonator) -> float:
    if pulse.power is not None:
        return incident_amplitude(1e-3 * 10.0 ** (pulse.power / 10.0), pulse.drive)
    assert pulse.photons is not None  # The table insists on one of the three.
    return amplitude_for_photons(resonator, pulse.photons, pulse.drive)


def _shot(source: Testbench, plan: Plan | None) -> Capture:
    """The waveform at the far end of the pulse's own line."""
    return through_line(source, import_waveform(source) if plan is None else capture_probe(plan))


def _arriving(
    shot: Capture, source: Testbench, pulse: ResonatorTable, stop: float
) -> IncidentField:
    """Demodulate a waveform at the drive's frequency, and bring it to the resonator."""
    wave = shot.waveform
    first, last = float(wave.t[0]), float(wave.t[-1])
    step, count = field_grid(pulse, stop)
    if first > pulse.start or last < stop - step:
        raise TestbenchError(
            f"{source.source}: the pulse's waveform goes from {1e9 * first:.6g} ns to "
            f"{1e9 * last:.6g} ns, wanted from {1e9 * pulse.start:.6g} ns or before ('start' in "
            f"[resonator]) to {1e9 * stop:.6g} ns, the end of the readout's run",
            hint="let it run on for as long as the readout does",
        )
    envelope = demodulate(wave, pulse.drive)
    volts = envelope.iq * (source.drive.reference_impedance if wave.unit == "A" else 1.0)
    samples = incident_samples(
        volts, pulse.drive, source.drive.attenuation, source.drive.reference_impedance
    )
    return IncidentField(step, _cell_means(envelope.t, samples, step, count), pulse.drive)


def _cell_means(t: FloatArray, values: ComplexArray, step: float, count: int) -> ComplexArray:
    """Means over cells around 0, step, ...: edges keep area and time."""
    # Before and behind the envelope the field stays as it is at its ends.
    edges = step * (np.arange(count + 1) - 0.5)
    t = np.concatenate([[min(t[0], edges[0]) - step], t, [max(t[-1], edges[-1]) + step]])
    values = np.concatenate([values[:1], values, values[-1:]])
    area = cumulative_trapezoid(values, t, initial=0)
    at = np.interp(edges, t, area.real) + 1j * np.interp(edges, t, area.imag)
    return np.asarray(np.diff(at) / step)


def _own_file(source: Testbench) -> DeckFile:
    """The testbench of the pulse, with its text, since that of the readout only names it."""
    content = Path(source.source).read_bytes()
    return DeckFile(source.source, content.decode("utf-8"), hashlib.sha256(content).hexdigest())
