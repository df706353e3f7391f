"""What is known around a point: the error vector is linear in the knobs, and squares to the cost.

Places are in parts of the distance of each knob's bounds.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from scipy.optimize import lsq_linear

from cosim.calibration.points import Point
from cosim.calibration.table import Knob
from cosim.waveform import FloatArray

# Part of the largest stiffness that is added to all: where knobs do the same, both move.
RIDGE = 1e-9
# Knobs whose columns, each brought to length 1, have a smaller singular value than this do the
# same to one part in 30, so that a trim cannot tell them apart.
DEGENERATE = 0.03


@dataclass(frozen=True, slots=True)
class Model:
    """The cost around a point: |vector + jacobian d|^2 + rest + slope d.

    Parameters
    ----------
    centre : Point
        Where it holds exactly.
    jacobian : ndarray, shape (m, n)
        Change of the vector with each of n knobs.
    slope : ndarray, shape (n,)
        Change of what is not in the vector: decoherence, noise.
    """

    centre: Point
    jacobian: FloatArray
    slope: FloatArray

    @property
    def place(self) -> FloatArray:
        """Place of the centre, shape (n,)."""
        return np.array(self.centre.place)

    def predict(self, place: Sequence[float] | FloatArray) -> float:
        """Give the cost at a place."""
        move = np.asarray(place) - self.place
        vector = self.centre.vector + self.jacobian @ move
        return float(vector @ vector + self.centre.rest + self.slope @ move)

    def gradient(self) -> FloatArray:
        """Give the slope of the cost at the centre, shape (n,)."""
        return np.asarray(2.0 * self.jacobian.T @ self.centre.vector + self.slope)

    def stiffness(self) -> FloatArray:
        """Give what one knob off by d alone costs over d^2, shape (n,)."""
        return np.asarray((self.jacobian**2).sum(axis=0))

    def learnt(self, point: Point) -> "Model":
        """Take in a further run by Broyden's rule; the centre stays.

        Parameters
        ----------
        point : Point
            The run.

        Returns
        -------
        Model

        Notes
        -----
        C. G. Broyden, "A class of methods for solving nonlinear simultaneous equations", Math.
        Comp. 19, 577 (1965): the least change that tells what has been seen.
        """
        move = np.array(point.place) - self.place
        length = float(move @ move)
        if length == 0.0 or point.vector.shape != self.centre.vector.shape:
            return self
        missed = point.vector - self.centre.vector - self.jacobian @ move
        rest = point.rest - self.centre.rest - float(self.slope @ move)
        return replace(
            self,
            jacobian=self.jacobian + np.outer(missed, move) / length,
            slope=self.slope + rest / length * move,
        )

    def lowest(self, low: FloatArray, high: FloatArray, held: FloatArray) -> FloatArray:
        """Give the place of least cost.

        Parameters
        ----------
        low, high : ndarray, shape (n,)
            Bounds; they may be infinite.
        held : ndarray, shape (n,)
            Places of the knobs that stay there; NaN for those that are free.

        Returns
        -------
        ndarray, shape (n,)
        """
        place = np.where(np.isnan(held), self.place, held)
        free = np.flatnonzero(np.isnan(held) & (high > low))
        if free.size == 0:
            return place
        columns = self.jacobian[:, free]
        vector = self.centre.vector + self.jacobian @ (place - self.place)
        ridge = RIDGE * max(float(self.stiffness().max()), 1e-30)
        rows = np.vstack([columns, np.sqrt(ridge) * np.eye(free.size)])
        # |A d + b|^2 with the gradient of vector and slope together at d = 0.
        gradient = columns.T @ vector + 0.5 * self.slope[free]
        aim = -np.linalg.solve(rows.T @ rows, gradient)
        limits = (low[free] - place[free], high[free] - place[free])
        inside = np.clip(0.0, *limits)
        if np.all((aim >= limits[0]) & (aim <= limits[1])):
            move = aim
        else:
            move = lsq_linear(rows, rows @ aim, bounds=limits, method="bvls").x
            move = np.clip(move, *limits)
        place = place.copy()
        place[free] += np.where(np.isfinite(move), move, inside)
        return place

    def settable(
        self,
        knobs: Sequence[Knob],
        low: FloatArray,
        high: FloatArray,
        held: FloatArray | None = None,
    ) -> FloatArray:
        """Give the place of least cost among those that the knobs can be set to.

        Parameters
        ----------
        knobs : sequence of Knob
            The n knobs; those with steps are tried on both sides of the free optimum.
        low, high : ndarray, shape (n,)
            Bounds.
        held : ndarray, shape (n,), or None
            Places of the knobs that stay there, NaN for the others.

        Returns
        -------
        ndarray, shape (n,)
        """
        held = np.full(len(knobs), np.nan) if held is None else held
        relaxed = self.lowest(low, high, held)
        sides = [
            (float(part),) if not np.isnan(fixed) else knob.neighbours(float(part))
            for knob, part, fixed in zip(knobs, relaxed, held, strict=True)
        ]
        best, least = relaxed, np.inf
        for choice in product(*sides):
            fixed = np.array(
                [part if knob.step else np.nan for knob, part in zip(knobs, choice, strict=True)]
            )
            fixed = np.where(np.isnan(held), fixed, held)
            place = self.lowest(low, high, fixed)
            if (cost := self.predict(place)) < least:
                best, least = place, cost
        return best

    def alike(self) -> tuple[int, ...]:
        """Give the knobs that do the same as one another; none if each does something else."""
        lengths = np.linalg.norm(self.jacobian, axis=0)
        acting = np.flatnonzero(lengths > 0.0)
        if acting.size < 2:
            return ()
        columns = self.jacobian[:, acting] / lengths[acting]
        _, values, rows = np.linalg.svd(columns, full_matrices=True)
        least = values[-1] if values.size == acting.size else 0.0
        if least >= DEGENERATE:
            return ()
        # Those that take part in the combination that does nothing.
        return tuple(int(k) for k in acting[np.abs(rows[-1]) > 0.3])
