"""The small-signal noise of a netlist whose outputs are in baseband, around one operating point."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from cosim.added_noise import noise_at_rest
from cosim.circuit.bias import CleanRun
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.readout_output import Grid
from cosim.voltage_noises import NetlistNoise
from cosim.waveform import FloatArray

_POINTS = 120  # of the density over the band of the records, evenly on a logarithmic scale
_SLOWEST = 0.1  # over the time of a record: what is slower is a constant of it


@dataclass(frozen=True, slots=True)
class BasebandNoise:
    """The noise of outputs in baseband around one operating point.

    Parameters
    ----------
    output : OutputNoise
        Of the records.
    parts : dict of str to float
        Device in ngspice's name -> its part of the density at the lowest frequency; a resistor
        behind a source counts with what arrives.
    """

    output: OutputNoise
    parts: dict[str, float] = field(metadata={"unit": "1"})


def baseband_noise(
    cleans: Sequence[CleanRun],
    noise: NetlistNoise,
    grid: Grid,
    span: tuple[float, float],
    instead: Mapping[str, float],
) -> tuple[str, BasebandNoise | None]:
    """Analyse the noise of one output in baseband, or of I and Q, if the circuit is at rest.

    Parameters
    ----------
    cleans : sequence of CleanRun
        Of the states: the noise is the mean of theirs.
    noise : NetlistNoise
        The table [[noise]].
    grid : Grid
        Of the records.
    span : tuple of two floats
        The window in s.
    instead : mapping of str to float
        Resistor behind a source -> what arrives there over its own noise.

    Returns
    -------
    str
        What was found of the bias, or what speaks against this method.
    BasebandNoise or None
        Of I and Q the sum of both; a device that makes noise in both of them correlates them, of
        which the density of I + jQ near zero does not know.

    Raises
    ------
    TestbenchError
        If the testbench says "stationary" and the circuit is not.
    SimulationError, DeckError
        If the small-signal noise that the testbench asks for cannot be simulated.
    """
    reach = 0.5 / grid.step
    lowest = _SLOWEST / (grid.count * grid.step)
    f = np.geomspace(lowest, reach, _POINTS)
    density, lowest_parts, reason = np.zeros(_POINTS), dict[str, float](), ""
    for clean in cleans:
        for probe in clean.probes:
            # The simulator's own grid need not end at the end asked for.
            band = (0.99 * lowest, 1.02 * reach)
            reason, resting = noise_at_rest(clean, probe, noise, lowest, span, band)
            if resting is None:
                return reason, None
            for device, parts in resting.noise.by_device.items():
                own: FloatArray = sum(parts.values(), np.zeros_like(resting.noise.frequency))
                # Half of a one-sided density lies to either side of zero.
                level = 0.5 / len(cleans) * np.interp(f, resting.noise.frequency, own)
                level = instead.get(device, 1.0) * level
                density = density + level
                lowest_parts[device] = lowest_parts.get(device, 0.0) + float(level[0])
    both = np.concatenate([density[::-1], density[:1], density])
    quadratures = len(cleans[0].probes)
    output = OutputNoise(0.0, np.concatenate([-f[::-1], [0.0], f]), both, quadratures)
    whole = sum(lowest_parts.values())
    order = sorted(lowest_parts, key=lambda name: -lowest_parts[name])
    return reason, BasebandNoise(
        output, {name: lowest_parts[name] / whole for name in order if lowest_parts[name] > 0.0}
    )
