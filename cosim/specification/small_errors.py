"""The textbook formulas for small errors of a rectangular pulse on two levels.

They stand beside the exact limits. Each gives k of 1 - F_avg = k x^2 for the error x of a block;
where a pulse is shaped, has further levels or the error is not small, they fail, and by how much is
what the comparison shows.
"""

import math
from collections.abc import Callable, Mapping

from cosim.specification.blocks import (
    DacBitsTable,
    FlickerNoiseTable,
    ImageTable,
    LeakageTable,
    PhaseNoiseTable,
)
from cosim.specification.pulse import IdealPulse
from cosim.specification.request import Request
from cosim.specification.spectra import phase_shape


def rotation_cost(angle: float) -> float:
    """Give the infidelity of a small rotation too much.

    Parameters
    ----------
    angle : float
        In rad.

    Returns
    -------
    float
        angle^2/6 to leading order, 1 - F_avg.
    """
    return angle**2 / 6.0


def axis_error(angle: float, phase: float) -> float:
    """Give the error rotation of a pulse about a wrong axis of the plane.

    Parameters
    ----------
    angle : float
        Of the pulse in rad.
    phase : float
        By which the axis is turned, in rad.

    Returns
    -------
    float
        2 phase sin(angle/2) in rad, to leading order.
    """
    return 2.0 * phase * math.sin(0.5 * angle)


def detuning_error(angle: float, duration: float, detuning: float, frame: str) -> float:
    """Give the error rotation of a rectangular pulse whose carrier is off.

    Parameters
    ----------
    angle : float
        Of the pulse in rad.
    duration : float
        In s.
    detuning : float
        In Hz.
    frame : "qubit" or "oscillator"
        Where the carrier runs on as the reference, its frame does not count.

    Returns
    -------
    float
        In rad, to leading order.

    Notes
    -----
    In the oscillator's frame 2 (Delta/Omega) sin(angle/2). In the qubit's the carrier has slipped
    by Delta T against it at the end, which turns with the gate and adds as a vector.
    """
    delta, rabi = 2.0 * math.pi * detuning, angle / duration
    z = math.sin(angle) / rabi
    y = (1.0 - math.cos(angle)) / rabi
    if frame == "qubit":
        z -= duration * math.cos(angle)
        y -= duration * math.sin(angle)
    return abs(delta) * math.hypot(z, y)


def imbalance(image: float) -> tuple[float, float]:
    """Give the imbalance that alone makes an image.

    Parameters
    ----------
    image : float
        Amplitude of the image over that of the signal, below 1.

    Returns
    -------
    gain : float
        Ratio of the amplitudes of I and Q, with a phase that is right.
    phase : float
        Deviation from quadrature in rad, with a gain that is right.

    Notes
    -----
    The power of the image over that of the signal is (1 + g^2 - 2 g cos p)/(1 + g^2 + 2 g cos p):
    B. Razavi, RF Microelectronics, section on image-reject receivers.
    """
    return (1.0 + image) / (1.0 - image), 2.0 * math.atan(image)


def quantisation_snr(bits: float) -> float:
    """Give the signal-to-noise ratio of a full-scale sine that is rounded.

    Parameters
    ----------
    bits : float

    Returns
    -------
    float
        20 log10(2^bits sqrt(3/2)) in dB up to half the sampling rate: 6.02 bits + 1.76.

    Notes
    -----
    W. R. Bennett, "Spectra of quantized signals", Bell Syst. Tech. J. 27, 446 (1948).
    """
    return 20.0 * math.log10(2.0**bits * math.sqrt(1.5))


def jitter_snr(frequency: float, jitter: float) -> float:
    """Give the signal-to-noise ratio of a sine that is clocked with jitter.

    Parameters
    ----------
    frequency : float
        Of the sine in Hz.
    jitter : float
        Standard deviation of the clock's edges in s.

    Returns
    -------
    float
        -20 log10(2 pi f s) in dB.

    Notes
    -----
    IEEE Std 1241.
    """
    return -20.0 * math.log10(2.0 * math.pi * frequency * jitter)


def integrated_phase(table: PhaseNoiseTable, low: float, high: float) -> float:
    """Integrate phase noise whose L is 1 (0 dBc/Hz) at the offset that is told.

    Parameters
    ----------
    table : PhaseNoiseTable
        Its shape.
    low, high : float
        Band in Hz.

    Returns
    -------
    float
        Standard deviation sqrt(2 integral of L df) in rad; over 2 pi f0 it is the jitter in s.

    Notes
    -----
    IEEE Std 1139.
    """
    return math.sqrt(phase_shape(table).variance(low, high))


def formula_coefficients(
    request: Request, pulse: IdealPulse, rabi_per_volt: float
) -> dict[str, float]:
    """Give k of 1 - F_avg = k x^2 for each block, by the formulas for small errors.

    Parameters
    ----------
    request : Request
        Which blocks there are.
    pulse : IdealPulse
    rabi_per_volt : float
        In Hz/V.

    Returns
    -------
    dict of str to float
        NaN where no formula is in use.
    """
    angle, duration, peak = pulse.angle, pulse.duration, pulse.peak
    frame = request.table.frame
    simple: Mapping[str, Callable[[], float]] = {
        "amplitude": lambda: rotation_cost(angle),
        "phase": lambda: rotation_cost(axis_error(angle, 1.0)),
        "carrier": lambda: rotation_cost(detuning_error(angle, duration, 1.0, frame)),
        "timing": lambda: rotation_cost(peak),
        "jitter": lambda: 2.0 * rotation_cost(peak),
        # Density S: a variance of the angle of Omega^2 S T/2.
        "amplitude_noise": lambda: rotation_cost(angle) / (2.0 * duration),
        "spurs": lambda: rotation_cost(peak * duration),
        # Two quadratures, each with twice the density of the voltage.
        "wideband": lambda: 2.0 * (2.0 * math.pi * rabi_per_volt) ** 2 * duration / 6.0,
    }
    found: dict[str, float] = {}
    for name, block in request.blocks.items():
        if name in simple:
            found[name] = simple[name]()
        elif isinstance(block, ImageTable):
            # A tone so many turns away turns the qubit by no more than this part of its angle.
            turns = 2.0 * abs(block.intermediate_frequency) * duration
            found[name] = rotation_cost(angle / max(1.0, math.pi * turns))
        elif isinstance(block, LeakageTable):
            found[name] = rotation_cost(peak * (duration + block.before + block.after))
        elif isinstance(block, FlickerNoiseTable):
            span = max(math.log(1.0 / (duration * block.low)), 0.0)
            found[name] = rotation_cost(angle) * span
        elif isinstance(block, PhaseNoiseTable):
            found[name] = _phase_noise(block, pulse, frame)
        elif isinstance(block, DacBitsTable):
            # Rounding is white with lsb^2/12 in each sample of I and of Q.
            step = 2.0 * block.headroom * peak
            quadratures = 1 + bool(pulse.envelope.area.imag.any())
            found[name] = quadratures * rotation_cost(step) / 12.0 * duration / block.rate
        else:
            found[name] = math.nan
    return found


def _phase_noise(block: PhaseNoiseTable, pulse: IdealPulse, frame: str) -> float:
    """What is slower than half a turn per pulse, as a phase or a frequency that stands still."""
    high = min(0.5 / pulse.duration, block.high)
    if block.low >= high:
        return 0.0
    if frame == "qubit":
        phase = integrated_phase(block, block.low, high)
        return rotation_cost(axis_error(pulse.angle, phase))
    # The frequency noise is f^2 times the phase noise.
    shape = phase_shape(block)
    steps = 2000
    ratio = (high / block.low) ** (1.0 / steps)
    middles = [block.low * ratio ** (k + 0.5) for k in range(steps)]
    levels = shape.at(middles)
    variance = sum(
        f**3 * float(level) * (ratio - 1.0) / math.sqrt(ratio)
        for f, level in zip(middles, levels, strict=True)
    )
    return rotation_cost(
        detuning_error(pulse.angle, pulse.duration, math.sqrt(variance), "oscillator")
    )
