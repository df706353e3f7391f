"""All specifications at their limits together, by simulation."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.linalg import hadamard

from cosim.noise_frame import superoperators
from cosim.specification.building import AnyCurve, curve_names
from cosim.specification.curves import Curve
from cosim.specification.distortion import Distortion, distorted_losses, distorted_unitaries
from cosim.specification.pulse import IdealPulse, channel_infidelity, clean_channels
from cosim.waveform import ComplexArray


@dataclass(frozen=True, slots=True)
class Together:
    """What all blocks at some errors cost together.

    Parameters
    ----------
    infidelity : float
        1 - F_avg, decoherence and the pulse itself included.
    standard_error : float
        Of its sampled part.
    worst : Distortion
        The signs and phases of the errors that stay the same, one row.
    combinations : int
        Of signs and phases that were tried.
    """

    infidelity: float
    standard_error: float
    worst: Distortion
    combinations: int


def simulate_together(
    pulse: IdealPulse,
    frame: str,
    curves: Mapping[str, AnyCurve],
    errors: Mapping[str, float],
    samples: int,
) -> Together:
    """Evolve the qubit with every block at its limit.

    Parameters
    ----------
    pulse : IdealPulse
    frame : str
        As in `distorted_unitaries`.
    curves : mapping
        Of the blocks.
    errors : mapping of str to float
        The error x of each.
    samples : int
        Of all noise together.

    Returns
    -------
    Together
        For the worst signs and phases.

    Notes
    -----
    The sources of noise take their signs from the columns of a Hadamard matrix, so that they are
    uncorrelated exactly, not only on average; what each costs to first order is known without
    samples (`Curve`), so that the samples tell only what lies beyond it.
    """
    constant, random = curve_names(curves)
    worst, tried = _worst_combination(pulse, frame, [curves[n] for n in constant], errors)
    lossy, _ = clean_channels(pulse)
    unitaries, known, error = _with_noise(
        pulse, frame, worst, [curves[name] for name in random], errors, samples
    )
    ideal = pulse.against_target(distorted_unitaries(pulse, Distortion(), "qubit"))
    turned = pulse.against_target(unitaries)
    # What the distortions do stands before the ideal pulse with its decoherence.
    correction = superoperators(ideal.conj().transpose(0, 2, 1) @ turned).mean(axis=0)
    total = channel_infidelity(pulse, lossy @ correction) + known
    return Together(total, error, worst, tried)


def _worst_combination(
    pulse: IdealPulse, frame: str, curves: Sequence[AnyCurve], errors: Mapping[str, float]
) -> tuple[Distortion, int]:
    """Try all signs and phases of the errors that stay the same."""
    together = Distortion()
    rows = 1
    for curve in curves:
        count = curve.rows
        more = curve.variants(errors[curve.name], count)
        together = together.repeated(count) if rows > 1 else together
        together = together + (more.tiled(rows) if rows > 1 else more)
        rows *= count
    losses = distorted_losses(pulse, together, frame)
    return together.picked(np.array([int(np.argmax(losses))])), rows


def _with_noise(
    pulse: IdealPulse,
    frame: str,
    worst: Distortion,
    curves: Sequence[AnyCurve],
    errors: Mapping[str, float],
    samples: int,
) -> tuple[ComplexArray, float, float]:
    """Evolve all samples of all noise; what the first order knows beyond them, and its error."""
    if not curves:
        return distorted_unitaries(pulse, worst, frame), 0.0, 0.0
    signs = 1 << max(1, math.ceil(math.log2(len(curves) + 1)))
    draws = max(8, samples // signs)
    pattern = hadamard(signs)
    together = worst
    known = np.zeros(draws)
    for column, curve in enumerate(curves, start=1):
        assert isinstance(curve, Curve)
        x = errors[curve.name]
        what = curve.variants(x, 2 * draws)
        # Rows 2 k and 2 k + 1 are a sample and its negative.
        places = 2 * np.arange(draws)[:, None] + (pattern[None, :, column] < 0)
        together = together + what.picked(places.reshape(-1))
        if curve.homogeneous:
            part = curve.variants(curve.scale, 2 * draws)
            small = distorted_losses(pulse, part, curve.frame) - curve.base
            pairs = small.reshape(draws, 2).mean(axis=1)
            known += x**2 * (curve.order - pairs / curve.scale**2)
    unitaries = distorted_unitaries(pulse, together, frame)
    each = pulse.losses(unitaries).reshape(draws, signs).mean(axis=1) + known
    error = float(each.std(ddof=1) / math.sqrt(draws))
    return unitaries, float(known.mean()), error
