"""The declared results of what stands beside a gate: noise, other qubits of the line, rest."""

import math
from dataclasses import dataclass, field
from typing import Any

from cosim.quantum.fidelity import Rotation
from cosim.waveform import FloatArray


def _unit(unit: str) -> dict[str, Any]:
    return {"unit": unit}


@dataclass(frozen=True, slots=True)
class NoiseSpectrum:
    """What a source costs at each frequency: density * filter * width, summed, is its infidelity.

    Parameters
    ----------
    frequencies, widths : ndarray, shape (n,)
        Centres and widths of bins in Hz, rising; of an added voltage offsets from the carrier.
    density : ndarray, shape (n,)
        One-sided, in `unit` squared per Hz; of an added voltage that of each quadrature, which is
        twice its own.
    filter : ndarray, shape (n,)
        Filter function of the gate, averaged over the bin, in 1/`unit` squared.
    unit : str
        Of what fluctuates: "rad/s", "1", "rad" or "V".
    low, high : float
        Band in Hz in which the density is known.
    """

    frequencies: FloatArray = field(metadata=_unit("Hz"))
    widths: FloatArray = field(metadata=_unit("Hz"))
    density: FloatArray
    filter: FloatArray
    unit: str
    low: float = field(metadata=_unit("Hz"))
    high: float = field(metadata=_unit("Hz"))


@dataclass(frozen=True, slots=True)
class NoiseSource:
    """What one source of noise does to the gate by itself.

    Parameters
    ----------
    name : str
        Its name in the testbench.
    acts_on : str
        "detuning", "amplitude", "phase" or "probe".
    method : str
        "filter function", "quadrature" for what is constant during a gate; of the circuit's own
        noise "injection", "stationary" or "frozen".
    infidelity : float
        1 - F_avg against the clean gate, leakage included; of a phase in the qubit's frame.
    leakage : float
        Average population that it takes out of the computational subspace.
    oscillator_frame : float
        The infidelity of a phase noise where later pulses and the readout refer to the same
        oscillator; NaN for others.
    unreached : float
        Bound on what it costs above `highest_frequency`, which no sample on this grid carries.
    highest_frequency : float
        In Hz; NaN for quadrature.
    standard_error : float
        Of the infidelity, from the seeds of an injection; 0 for others.
    flips : float
        Probability of a flip by an injection, the mean of up and down; NaN for others.
    devices : dict of float
        Device in ngspice's name -> its part of the infidelity, by its part of the noise's power
        around the carrier, the greatest first; of an injection those that are told from none.
    devices_error : float
        Greatest standard deviation of such a part, from the seeds of an injection; infinite where
        the gate is too short, or the seeds too few, to tell devices apart.
    devices_explain : float
        What all devices explain of the noise's power; 1 within the errors, where their parts hold.
    left_out : tuple of str
        What makes noise in the circuit and is not counted, with the reason.
    reason : str
        Why the circuit's own noise was worked out so, where the testbench left it open.
    spectrum : NoiseSpectrum or None
        Density and filter function, where the noise has a density.
    """

    name: str
    acts_on: str
    method: str
    infidelity: float = field(metadata=_unit("1"))
    leakage: float = field(metadata=_unit("1"))
    oscillator_frame: float = field(default=math.nan, metadata=_unit("1"))
    unreached: float = field(default=0.0, metadata=_unit("1"))
    highest_frequency: float = field(default=math.nan, metadata=_unit("Hz"))
    standard_error: float = field(default=0.0, metadata=_unit("1"))
    flips: float = field(default=math.nan, metadata=_unit("1"))
    devices: dict[str, float] = field(default_factory=dict, metadata=_unit("1"))
    devices_error: float = field(default=0.0, metadata=_unit("1"))
    devices_explain: float = field(default=1.0, metadata=_unit("1"))
    left_out: tuple[str, ...] = ()
    reason: str = ""
    spectrum: NoiseSpectrum | None = field(default=None, metadata={"table": False}, compare=False)


@dataclass(frozen=True, slots=True)
class NoiseEffect:
    """What all noise of a testbench does to its gate.

    Parameters
    ----------
    first_order : float
        Sum of the sources' infidelities.
    infidelity : float
        1 - F_avg of the noisy gate against the clean one, all sources together.
    standard_error : float
        Of `infidelity`; 0 for quadrature.
    leakage : float
        Average population that noise takes out of the computational subspace.
    samples : int
        How many were drawn; 0 for quadrature.
    seed : int
        Of the samples.
    method : str
        "samples", or "quadrature" where all is constant during a gate.
    agree : bool
        Whether samples and first order differ by no more than the sampling error and the second
        order.
    sources : tuple of NoiseSource
        Each by itself.
    noise_method : str
        How the circuit's own noise was worked out: "injection", "stationary" or "frozen"; several
        tables' with commas, "" without.
    """

    first_order: float = field(metadata=_unit("1"))
    infidelity: float = field(metadata=_unit("1"))
    standard_error: float = field(metadata=_unit("1"))
    leakage: float = field(metadata=_unit("1"))
    samples: int = field(metadata=_unit("1"))
    seed: int
    method: str
    agree: bool
    sources: tuple[NoiseSource, ...]
    noise_method: str = ""


@dataclass(frozen=True, slots=True)
class SpectatorEffect:
    """What the gate's waveform does to another qubit of the line.

    Parameters
    ----------
    name : str
        Its name in the testbench.
    frequency : float
        In Hz.
    target : str
        Name of the rotation that it is meant to make, "identity" for a bystander.
    infidelity : float
        1 - F_avg against it in the qubit's own frame, the phase and the noise counted.
    free_frame_infidelity : float
        The same with the phase absorbed by virtual Z.
    rotation : Rotation
        Axis and angle of what happens to it.
    phase : float
        What a virtual Z has to absorb, in rad: the Stark shift times the time.
    leakage : float
        Population that leaves its computational subspace.
    noise : NoiseEffect or None
        What the noise of the line does to it, part of the numbers above: all of the testbench but
        that of the detuning, which is the gate's own qubit's. None without.
    """

    name: str
    frequency: float = field(metadata=_unit("Hz"))
    target: str
    infidelity: float = field(metadata=_unit("1"))
    free_frame_infidelity: float = field(metadata=_unit("1"))
    rotation: Rotation
    phase: float = field(metadata=_unit("rad"))
    leakage: float = field(metadata=_unit("1"))
    noise: NoiseEffect | None = None


@dataclass(frozen=True, slots=True)
class IdleEffect:
    """What happens to the qubit where the circuit plays no pulse.

    Parameters
    ----------
    start, stop : float
        The stretch in s.
    infidelity : float
        1 - F_avg against the identity in the qubit's own frame, relaxation and noise included.
    free_frame_infidelity : float
        The same with the phase absorbed by virtual Z.
    phase : float
        That phase in rad.
    stark_shift : float
        Shift in Hz of the qubit's frequency by what is left of the carrier: the phase over 2 pi and
        the time.
    leakage : float
        Population that leaves the computational subspace.
    residual : float
        Half of the waveform's peak-to-peak value there, in its unit.
    extinction : float
        Peak of the pulse over what is left around the carrier, in dB.
    flip_rate : float
        Rate in 1/s of flips up, and of flips down, by the golden rule: by the noise that the probe
        and the line add, and by that of amplitude and phase on what is left of the carrier; by
        noise injected into the circuit, those of its runs over the stretch.
    dephasing_rate : float
        Rate in 1/s of the detuning's noise, taken as white from one turn per stretch on.
    noise : NoiseEffect or None
        What all noise does over the stretch, that of the circuit's devices too; part of the
        infidelities above.
    rotation : Rotation or None
        By what is left of the carrier, without noise: the Stark shift about z, and on resonance a
        turn about an axis of the drive.
    """

    start: float = field(metadata=_unit("s"))
    stop: float = field(metadata=_unit("s"))
    infidelity: float = field(metadata=_unit("1"))
    free_frame_infidelity: float = field(metadata=_unit("1"))
    phase: float = field(metadata=_unit("rad"))
    stark_shift: float = field(metadata=_unit("Hz"))
    leakage: float = field(metadata=_unit("1"))
    residual: float
    extinction: float = field(metadata=_unit("dB"))
    flip_rate: float = field(metadata=_unit("1/s"))
    dephasing_rate: float = field(metadata=_unit("1/s"))
    noise: NoiseEffect | None = None
    rotation: Rotation | None = None
