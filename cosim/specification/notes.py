"""The limits of blocks in the words of data sheets."""

import math

import numpy as np
from scipy.constants import Boltzmann, Planck
from scipy.optimize import brentq

from cosim.dsp.noise.thermal import Attenuator, line_power_density, wave_voltage_density
from cosim.specification.blocks import (
    Block,
    DacBitsTable,
    DacRateTable,
    FlickerNoiseTable,
    ImageTable,
    PhaseNoiseTable,
    SpursTable,
    WidebandTable,
)
from cosim.specification.building import AnyCurve
from cosim.specification.pulse import IdealPulse, base_infidelity
from cosim.specification.small_errors import (
    imbalance,
    integrated_phase,
    jitter_snr,
    quantisation_snr,
)
from cosim.specification.spurs import spur_offsets, worst_offset
from cosim.units import format_quantity

# Attenuation in dB beyond which none is looked for.
MOST_ATTENUATION = 200.0


def describe(
    name: str, block: Block, curve: AnyCurve, pulse: IdealPulse, error: float, frequency: float
) -> str:
    """Say a limit in other words.

    Parameters
    ----------
    name : str
        Of the block.
    block : Block
        Its table.
    curve : Curve or RateCurve
        Its curve.
    pulse : IdealPulse
    error : float
        The error x at the limit.
    frequency : float
        Of the qubit in Hz.

    Returns
    -------
    str
        Empty where the limit says all.
    """
    band = 0.5 / pulse.duration
    top = format_quantity(band, "Hz")
    if isinstance(block, ImageTable):
        gain, phase = imbalance(error)
        return (
            f"I against Q: {20.0 * math.log10(gain):.3g} dB, or {math.degrees(phase):.3g}° from "
            "quadrature, one of them"
        )
    if name == "phase":
        return f"{math.degrees(error):.3g}°"
    if name == "amplitude":
        return f"{20.0 * math.log10(1.0 + error):.3g} dB"
    if name == "carrier":
        return f"{1e6 * error / frequency:.3g} ppm"
    if name == "leakage":
        return f"extinction {-20.0 * math.log10(error):.4g} dB"
    if name == "amplitude_noise":
        sideband = 10.0 * math.log10(error**2 / 2.0)
        rms = error * math.sqrt(band)
        return f"{sideband:.4g} dBc/Hz in each sideband; rms {rms:.2e} to {top}"
    if isinstance(block, FlickerNoiseTable):
        rms = error * math.sqrt(max(math.log(band / block.low), 0.0))
        return f"density at 1 Hz; rms {rms:.2e} from {format_quantity(block.low, 'Hz')} to {top}"
    if isinstance(block, PhaseNoiseTable):
        return _phase_noise(block, error, band, frequency)
    if isinstance(block, SpursTable):
        base = base_infidelity(pulse)
        worst = worst_offset(pulse, curve.frame, base, spur_offsets(block, pulse))
        return f"where it harms most, at {format_quantity(worst, 'Hz', 3)} from the carrier"
    if isinstance(block, WidebandTable):
        return _wideband(block, error, frequency)
    if isinstance(block, DacBitsTable):
        bits = -math.log2(error)
        return (
            f"full scale {block.headroom:g} times the peak to both sides; a sine of it has "
            f"{quantisation_snr(bits):.3g} dB"
        )
    if isinstance(block, DacRateTable):
        samples = pulse.duration / error
        text = f"{samples:.4g} samples in the pulse"
        if samples < 2.0:
            return text
        return f"{text}; droop at 1/T {20.0 * math.log10(float(np.sinc(1.0 / samples))):.2f} dB"
    return ""


def needed_attenuation(table: WidebandTable, density: float, frequency: float) -> float:
    """Give the least attenuation that brings a warm source's noise down to a density.

    Parameters
    ----------
    table : WidebandTable
        Temperatures of source and attenuator, impedance.
    density : float
        One-sided, of the incident wave's voltage at the qubit, in V^2/Hz.
    frequency : float
        Of the qubit in Hz.

    Returns
    -------
    float
        In dB, 0 where none is needed; infinite where the attenuator itself is too warm.
    """

    def excess(decibels: float) -> float:
        stage = Attenuator(10.0 ** (decibels / 10.0), table.temperature)
        power = line_power_density([frequency], table.source, [stage])
        return float(wave_voltage_density(power, table.impedance)[0]) / density - 1.0

    if excess(0.0) <= 0.0:
        return 0.0
    if excess(MOST_ATTENUATION) > 0.0:
        return math.inf
    return float(brentq(excess, 0.0, MOST_ATTENUATION, xtol=1e-6))


def equal_temperature(density: float, impedance: float, frequency: float) -> float:
    """Give the temperature of a matched source whose Planck noise has a density.

    Parameters
    ----------
    density : float
        One-sided, of the incident wave's voltage, in V^2/Hz, positive.
    impedance : float
        In ohm.
    frequency : float
        In Hz.

    Returns
    -------
    float
        In K: of h f n(f, T) = density/impedance.
    """
    photons = density / (impedance * Planck * frequency)
    return Planck * frequency / (Boltzmann * math.log1p(1.0 / photons))


def _phase_noise(block: PhaseNoiseTable, error: float, band: float, frequency: float) -> str:
    at = format_quantity(block.offset, "Hz")
    high = min(band, block.high)
    if block.low >= high:
        return f"at {at}"
    rms = error * integrated_phase(block, block.low, high)
    seconds = rms / (2.0 * math.pi * frequency)
    jitter, snr = format_quantity(seconds, "s", 3), jitter_snr(frequency, seconds)
    low, top = format_quantity(block.low, "Hz"), format_quantity(high, "Hz")
    return f"at {at}; {rms:.2e} rad, {jitter} or {snr:.3g} dB from {low} to {top}"


def _wideband(block: WidebandTable, error: float, frequency: float) -> str:
    density = error**2
    dbm = 10.0 * math.log10(1e3 * density / block.impedance)
    warm = equal_temperature(density, block.impedance, frequency)
    decibels = needed_attenuation(block, density, frequency)
    stage = format_quantity(block.temperature, "K", 3)
    source = format_quantity(block.source, "K", 3)
    if math.isinf(decibels):
        need = f"an attenuator at {stage} is too warm for it"
    else:
        need = f"a source at {source} needs {decibels:.3g} dB at {stage}"
    return f"{dbm:.4g} dBm/Hz, that of {warm:.3g} K; {need}"
