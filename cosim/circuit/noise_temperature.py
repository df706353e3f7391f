"""The noise of a deck at temperatures other than that of its devices."""

import math
from dataclasses import replace

import numpy as np

from cosim.circuit.noise import NoiseResult
from cosim.circuit.noise_parts import NoiseTemperatures, band_power, factors
from cosim.errors import InputError
from cosim.waveform import FloatArray


def at_noise_temperatures(result: NoiseResult, temperatures: NoiseTemperatures) -> NoiseResult:
    """Rescale the thermal parts of a noise analysis to temperatures of their own.

    Decks whose cards were fitted in the deep cold are run at a device temperature where ngspice's
    models work; the densities of resistors, channels and series resistances are proportional to
    the temperature and follow another one by a factor. Shot and 1/f noise stay.

    Parameters
    ----------
    result : NoiseResult
        With its parts by device.
    temperatures : NoiseTemperatures
        Noise temperatures in K. A `dtemp` of a resistor scales along.

    Returns
    -------
    NoiseResult
        With all densities rescaled; the total integrates the density as a power law from point to
        point, as ngspice does.

    Raises
    ------
    InputError
        If the result has no parts by device.
    """
    if result.device_temperature is None:
        raise InputError(
            "the noise analysis has no parts by device to rescale",
            hint="Ask for NoiseRequest(..., by_device=True).",
        )
    parts: dict[str, dict[str, FloatArray]] = {}
    output = np.zeros_like(result.output_density)
    for device, own in result.by_device.items():
        scale = factors(temperatures, result.device_temperature, own)
        parts[device] = {part: scale[part] * density for part, density in own.items()}
        for density in parts[device].values():
            output += density
    before = result.output_density
    ratio = np.divide(output, before, out=np.ones_like(output), where=before > 0)
    return replace(
        result,
        output_density=output,
        input_density=result.input_density * ratio,
        total_output=math.sqrt(band_power(result.frequency, output)),
        by_device=parts,
    )
