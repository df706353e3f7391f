"""The declared results of what stands beside a gate: noise, other qubits of the line, rest."""

import math
from dataclasses import dataclass, field
from typing import Any

from cosim.quantum.fidelity import Rotation


def _unit(unit: str) -> dict[str, Any]:
    return {"unit": unit}


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
        "filter function", "quadrature" for what is constant during a gate, or "injection" for the
        circuit's own noise.
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
    devices : dict of float
        Device in ngspice's name -> its part of the infidelity, where it was asked for.
    left_out : tuple of str
        What makes noise in the circuit and was not injected, with the reason.
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
    devices: dict[str, float] = field(default_factory=dict, metadata=_unit("1"))
    left_out: tuple[str, ...] = ()


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
        1 - F_avg against it in the qubit's own frame, the phase counted.
    free_frame_infidelity : float
        The same with the phase absorbed by virtual Z.
    rotation : Rotation
        Axis and angle of what happens to it.
    phase : float
        What a virtual Z has to absorb, in rad: the Stark shift times the time.
    leakage : float
        Population that leaves its computational subspace.
    """

    name: str
    frequency: float = field(metadata=_unit("Hz"))
    target: str
    infidelity: float = field(metadata=_unit("1"))
    free_frame_infidelity: float = field(metadata=_unit("1"))
    rotation: Rotation
    phase: float = field(metadata=_unit("rad"))
    leakage: float = field(metadata=_unit("1"))


@dataclass(frozen=True, slots=True)
class IdleEffect:
    """What happens to the qubit where the circuit plays no pulse.

    Parameters
    ----------
    start, stop : float
        The stretch in s.
    infidelity : float
        1 - F_avg against the identity in the qubit's own frame, relaxation included.
    free_frame_infidelity : float
        The same with the phase absorbed by virtual Z.
    phase : float
        That phase in rad: the Stark shift by what is left of the carrier.
    leakage : float
        Population that leaves the computational subspace.
    residual : float
        Half of the waveform's peak-to-peak value there, in its unit.
    flip_rate : float
        Rate in 1/s of flips up, and of flips down, by the noise added at the probe.
    dephasing_rate : float
        Rate in 1/s of the detuning's noise, taken as white from one turn per stretch on.
    """

    start: float = field(metadata=_unit("s"))
    stop: float = field(metadata=_unit("s"))
    infidelity: float = field(metadata=_unit("1"))
    free_frame_infidelity: float = field(metadata=_unit("1"))
    phase: float = field(metadata=_unit("rad"))
    leakage: float = field(metadata=_unit("1"))
    residual: float
    flip_rate: float = field(metadata=_unit("1/s"))
    dephasing_rate: float = field(metadata=_unit("1/s"))
