"""What each block costs as a function of the error that it leaves: the exact curves.

A curve is worked out by evolving the ideal pulse with that error alone. Errors that stay the same
cost what the worst sign or phase of them costs; what fluctuates costs its average. The average over
seeded samples is x^2 q + mean(loss(x) - (x/h)^2 loss(h)): q, the first order, is known without
sampling from the covariance of the noise, so that samples tell only what lies beyond it.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.optimize import brentq

from cosim.errors import TestbenchError
from cosim.specification.distortion import (
    Distortion,
    distorted_losses,
    kicked_unitaries,
    only,
)
from cosim.specification.pulse import IdealPulse
from cosim.waveform import ComplexArray, FloatArray

# Loss at which the first order of a curve is taken: rounding of 1e-15 is 1e-7 of it.
SMALL_LOSS = 1e-8
# Relative accuracy of a limit; no limit is built to four digits.
LIMIT_ACCURACY = 1e-4
# A curve is followed up to this many times the error that the first order asks for.
FARTHEST = 8.0
# A loss below this at any small error is rounding: the block does nothing to the gate.
NOTHING = 1e-13

Kind = Literal["worst", "sampled", "stepped"]


@dataclass(frozen=True, slots=True)
class Curve:
    """The cost of one block.

    Parameters
    ----------
    name : str
        Of the block.
    pulse : IdealPulse
        The pulse.
    frame : str
        As in `distorted_unitaries`.
    base : float
        What the pulse loses without it.
    kind : "worst" or "sampled"
        The worst of its variants counts, or their average.
    variants : callable
        Error x and how many rows -> `Distortion` of every sign and phase, or of that many samples,
        in pairs of opposite sign, the same ones for every x.
    order : float
        First order q: the cost is q x^2 for small x.
    scale : float
        An x that costs about `SMALL_LOSS`.
    small : ndarray, shape (rows,)
        What each variant costs at `scale`, less the base.
    most : float
        Largest x that makes sense.
    homogeneous : bool
        Whether a sample's distortion is proportional to x.
    """

    name: str
    pulse: IdealPulse
    frame: str
    base: float
    kind: Kind
    variants: Callable[[float, int], Distortion]
    order: float
    scale: float
    small: FloatArray
    most: float = math.inf
    homogeneous: bool = True

    @property
    def rows(self) -> int:
        """Number of variants that the curve itself uses."""
        return self.small.size

    def losses(self, x: float) -> FloatArray:
        """Give what each variant costs, shape (rows,), less what the pulse itself loses."""
        what = self.variants(x, self.small.size)
        return distorted_losses(self.pulse, what, self.frame) - self.base

    def cost(self, x: float) -> float:
        """Give the infidelity that an error x adds to that of the ideal pulse."""
        if x == 0.0:
            return 0.0
        losses = self.losses(x)
        if self.kind == "worst":
            return max(0.0, float(losses.max()))
        if not self.homogeneous:
            return max(0.0, float(losses.mean()))
        beyond = losses - (x / self.scale) ** 2 * self.small
        return max(0.0, self.order * x**2 + float(beyond.mean()))

    def limit(self, share: float) -> float:
        """Give the largest error that costs no more than a share.

        Parameters
        ----------
        share : float
            Infidelity, positive.

        Returns
        -------
        float
            x; infinite where no error that makes sense costs so much.
        """
        if self.order == 0.0:
            return math.inf
        guess = math.sqrt(share / self.order)
        high = min(guess, self.most)
        low = 0.0
        while self.cost(high) < share:
            if high >= self.most or high > FARTHEST * guess:
                return math.inf
            low, high = high, min(1.5 * high, self.most)
        low = max(low, 0.2 * high)
        while self.cost(low) > share:
            low *= 0.3
        found = brentq(lambda x: self.cost(x) - share, low, high, rtol=LIMIT_ACCURACY, xtol=1e-300)
        return float(found)


@dataclass(frozen=True, slots=True)
class SampledNoise:
    """Noise that is constant over a cell, as samples and as what it costs to first order.

    Parameters
    ----------
    where : "gain", "phase", "rounding" or "added"
        What it acts on.
    samples : ndarray, shape (rows, cells), real or complex
        For x = 1, in pairs of opposite sign.
    covariance : ndarray, shape (cells,)
        <n(0) n(k)> of one quadrature for x = 1.
    """

    where: Literal["gain", "phase", "rounding", "added"]
    samples: FloatArray | ComplexArray
    covariance: FloatArray


def worst_curve(
    name: str,
    pulse: IdealPulse,
    frame: str,
    base: float,
    variants: Callable[[float], Distortion],
    first: float,
    most: float = math.inf,
) -> Curve:
    """Make the curve of an error that stays the same, of the worst sign or phase.

    Parameters
    ----------
    name, pulse, frame, base
        As in `Curve`.
    variants : callable
        Error -> every sign and phase of it.
    first : float
        A guess of an error that costs something.
    most : float
        Largest error that makes sense.

    Returns
    -------
    Curve
    """

    def rows(x: float, count: int) -> Distortion:
        del count
        return variants(x)

    scale = min(first, most)
    for _ in range(3):  # The cost goes with the square, so that this ends at once.
        small = distorted_losses(pulse, rows(scale, 0), frame) - base
        lost = float(small.max())
        if lost < NOTHING:
            break
        scale = min(scale * math.sqrt(SMALL_LOSS / lost), most)
    small = distorted_losses(pulse, rows(scale, 0), frame) - base
    order = max(0.0, float(small.max())) / scale**2
    order = order if order * scale**2 > NOTHING else 0.0
    return Curve(name, pulse, frame, base, "worst", rows, order, scale, small, most)


def noise_curve(
    name: str, pulse: IdealPulse, frame: str, base: float, noise: SampledNoise, rows: int
) -> Curve:
    """Make the curve of noise.

    Parameters
    ----------
    name, pulse, frame, base
        As in `Curve`.
    noise : SampledNoise
        With at least so many rows as the verification wants.
    rows : int
        Samples that the curve itself uses, even.

    Returns
    -------
    Curve
    """

    def variants(x: float, count: int) -> Distortion:
        return only(noise.where, x * noise.samples[:count])

    order = first_order(pulse, frame, noise)
    scale = math.sqrt(SMALL_LOSS / order) if order > 0.0 else 1.0
    small = distorted_losses(pulse, variants(scale, rows), frame) - base
    return Curve(name, pulse, frame, base, "sampled", variants, order, scale, small)


def sampled_curve(
    name: str,
    pulse: IdealPulse,
    frame: str,
    base: float,
    variants: Callable[[float, int], Distortion],
    rows: int,
    *,
    first: float,
    most: float,
    homogeneous: bool,
) -> Curve:
    """Make the curve of something random whose samples are spread evenly, no noise in time.

    Parameters
    ----------
    name, pulse, frame, base, variants, most, homogeneous
        As in `Curve`.
    rows : int
        Samples that the curve uses, even.
    first : float
        A guess of an error that costs something.

    Returns
    -------
    Curve
        Its first order is that of the samples.
    """
    scale = min(first, most)
    for _ in range(3):
        lost = float((distorted_losses(pulse, variants(scale, rows), frame) - base).mean())
        if lost < NOTHING:
            break
        scale = min(scale * math.sqrt(SMALL_LOSS / lost), most)
    small = distorted_losses(pulse, variants(scale, rows), frame) - base
    order = max(0.0, float(small.mean())) / scale**2
    order = order if order * scale**2 > NOTHING else 0.0
    return Curve(
        name, pulse, frame, base, "sampled", variants, order, scale, small, most, homogeneous
    )


def first_order(pulse: IdealPulse, frame: str, noise: SampledNoise) -> float:
    """Give what noise costs to first order in its power, for x = 1.

    Parameters
    ----------
    pulse, frame
        As in `Curve`.
    noise : SampledNoise

    Returns
    -------
    float
        sum_jk R(j - k) c_j . c_k: c_j is the error rotation, leakage included, by a unit in cell
        j, and R the covariance.
    """
    kinds: Sequence[complex] = (1.0, 1j) if noise.where in ("added", "rounding") else (1.0,)
    cells = pulse.middles.size
    lag = np.abs(np.arange(cells)[:, None] - np.arange(cells))
    covariance = noise.covariance[np.minimum(lag, noise.covariance.size - 1)]
    total = 0.0
    for unit in kinds:
        c = cell_responses(pulse, frame, noise.where, unit)
        total += float(np.einsum("ja,jk,ka->", c, covariance, c))
    return total


def cell_responses(pulse: IdealPulse, frame: str, where: str, unit: complex = 1.0) -> FloatArray:
    """Give the error rotation by a small kick in each cell, per unit of the kick.

    Parameters
    ----------
    pulse, frame
        As in `Curve`.
    where : str
        What is kicked, as in `SampledNoise`.
    unit : complex
        1, or 1j for the other quadrature.

    Returns
    -------
    ndarray, shape (cells, coordinates)
        The sum of squares of a rotation's coordinates is its infidelity to leading order.
    """
    # A kick of this turns the qubit by some 1e-5 at most, whose square is rounding.
    kick = (1e-4 if where in ("gain", "added", "rounding") else 1e-5) * unit
    both = [
        error_coordinates(pulse, kicked_unitaries(pulse, where, sign * kick, frame))
        for sign in (1.0, -1.0)
    ]
    return np.asarray((both[0] - both[1]) / (2.0 * abs(kick)))


def error_coordinates(pulse: IdealPulse, unitaries: ComplexArray) -> FloatArray:
    """Give the error rotations of evolutions against the ideal pulse.

    Parameters
    ----------
    pulse : IdealPulse
    unitaries : ndarray, shape (batch, d, d)
        From `distorted_unitaries`.

    Returns
    -------
    ndarray, shape (batch, 3 + 4 (d - 2))
        The sum of squares of a row is 1 - F_avg against the target to leading order: three
        coordinates of the rotation, then real and imaginary parts of what leaks.
    """
    v = pulse.against_target(unitaries)
    trace = v[:, 0, 0] + v[:, 1, 1]
    v = v * np.exp(-1j * np.angle(trace))[:, None, None]
    # V = 1 - i A with A Hermitian to leading order.
    a = 1j * v
    cross = 0.5 * (a[:, 0, 1] + np.conj(a[:, 1, 0]))
    difference = 0.5 * (a[:, 0, 0] - a[:, 1, 1]).real
    inside = math.sqrt(2.0 / 3.0) * np.stack([cross.real, cross.imag, difference], axis=1)
    lost = a[:, 2:, :2].reshape(a.shape[0], -1) / math.sqrt(2.0)
    return np.concatenate([inside, lost.real, lost.imag], axis=1)


def no_limit(label: str, share: float) -> TestbenchError:
    """Give the error for a block that cannot cost what it was given.

    Parameters
    ----------
    label : str
        The block.
    share : float
        Infidelity that it was given.

    Returns
    -------
    TestbenchError
    """
    return TestbenchError(
        f"[specify]: no error of '{label}' that can be followed costs {share:.3g}",
        hint="leave its table out: it does not limit this gate",
    )
