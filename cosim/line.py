"""The line between the probe and the qubit, as a Touchstone file describes it."""

import hashlib
from dataclasses import replace
from pathlib import Path

import numpy as np

from cosim.capture import Capture
from cosim.circuit.netlist import DeckFile
from cosim.dsp.line import apply_line
from cosim.formats.touchstone import read_line
from cosim.testbench import Testbench
from cosim.units import format_quantity


def through_line(bench: Testbench, shot: Capture) -> Capture:
    """Send the waveform at the probe down the line of a testbench.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    shot : Capture
        The waveform at the probe.

    Returns
    -------
    Capture
        With the waveform at the far end, on a uniform grid of the same step, and that at the
        probe among the further vectors; unchanged where there is no line.

    Raises
    ------
    WaveformError, InputError
        If the file cannot be used or does not cover the carrier, or the line is not causal.
    MissingDependencyError
        If the extra `rf` is not installed.
    """
    drive = bench.drive
    if drive.line is None:
        return shot
    path = Path(bench.folder) / Path(drive.line).expanduser()
    response = read_line(
        path,
        ports=drive.line_ports,
        impedance=drive.reference_impedance,
        carrier_frequency=drive.carrier if isinstance(drive.carrier, float) else None,
    )
    step = float(np.median(np.diff(shot.waveform.t)))
    far = apply_line(shot.waveform, response.frequency, response.transmission, step=step)
    delay = format_quantity(far.delay, "s")
    notices = (
        *shot.notices,
        f"the line delays by {delay}; waveform, pulse and window are those at its far end",
        f"below its first frequency the line is {response.below}",
        f"above its last frequency the line is {response.above}",
        *response.warnings,
        *far.warnings,
    )
    extra = {**shot.extra, "probe": shot.waveform}
    file = DeckFile(str(path), "", hashlib.sha256(path.read_bytes()).hexdigest())
    files = (*shot.files, file)
    return replace(shot, waveform=far.waveform, extra=extra, files=files, notices=notices)
