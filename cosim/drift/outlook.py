"""Mean and spread of the infidelity at times since a trim, from the responses to each process.

The error vectors of the processes add to that of the trimmed gate, and the infidelity is the square
of the sum and a rest. Its mean follows from the means and mean squares of each process alone,
by Gauss-Hermite quadrature of its curved response. Quantiles, and what a large vector costs less
than its square, come from Sobol points.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import roots_hermitenorm
from scipy.stats import norm, qmc

from cosim.drift.response import Response, cost_of
from cosim.drift.table import Process
from cosim.quantum.coherent_error import EXACT, ROOT
from cosim.sensitivity.response import Outcome
from cosim.waveform import FloatArray

LEVELS = (0.05, 0.5, 0.95)
# Exact for products of two responses of up to this order.
_ORDER = 32
_LOG2_POINTS = 12
_SEED = 1
# Nodes of the average over an interval; over the root of the time, in which the logarithms of
# flicker noise are smooth.
_INTERVAL_NODES = 16


@dataclass(frozen=True, slots=True)
class Moments:
    """What a process does on average at some time.

    Parameters
    ----------
    vector : ndarray, shape (m,)
        Mean change of the error vector.
    square : float
        Mean square of that change.
    rest : float
        Mean change of the rest.
    largest : float
        Length of the largest change that counts.
    """

    vector: FloatArray
    square: float
    rest: float
    largest: float


class Outlook:
    """Mean and spread of the infidelity since a trim.

    Parameters
    ----------
    centre : Outcome
        The trimmed gate, without any error of the trim.
    processes : sequence of Process
        What moves.
    responses : sequence of Response
        What each of them does.
    """

    def __init__(
        self, centre: Outcome, processes: Sequence[Process], responses: Sequence[Response]
    ) -> None:
        self.centre, self.processes, self.responses = centre, processes, responses
        nodes, weights = roots_hermitenorm(_ORDER)
        self._nodes = np.asarray(nodes, dtype=np.float64)
        self._weights = np.asarray(weights / weights.sum(), dtype=np.float64)
        sobol = qmc.Sobol(len(processes), rng=np.random.default_rng(_SEED))
        self._points = np.asarray(norm.ppf(sobol.random_base2(_LOG2_POINTS)), dtype=np.float64)

    def mean(self, t: float) -> float:
        """Give the mean infidelity.

        Parameters
        ----------
        t : float
            Since the trim, in s.

        Returns
        -------
        float
        """
        moments = self._moments(t)
        found = self._mean_square(moments)
        farthest = np.linalg.norm(self.centre.vector) + sum(item.largest for item in moments)
        if farthest > ROOT * math.sin(EXACT):
            vectors, _ = self._samples(t)
            squares = np.sum(vectors**2, axis=1)
            found += float(np.mean(cost_of(vectors) - squares))
        return found

    def alone(self, t: float) -> FloatArray:
        """Give what each process adds to the infidelity of the trimmed gate by itself, on average.

        Parameters
        ----------
        t : float
            Since the trim, in s.

        Returns
        -------
        ndarray, shape (processes,)
        """
        base = self.centre.value
        return np.array([self._mean_square([item]) - base for item in self._moments(t)])

    def quantiles(self, t: float) -> FloatArray:
        """Give the quantiles `LEVELS` of the infidelity, over trims.

        Parameters
        ----------
        t : float
            Since the trim, in s.

        Returns
        -------
        ndarray, shape (3,)
        """
        vectors, rests = self._samples(t)
        return np.quantile(cost_of(vectors) + rests, LEVELS)

    def average(self, t: float) -> float:
        """Give the mean infidelity, averaged over the time from the trim until t.

        Parameters
        ----------
        t : float
            In s.

        Returns
        -------
        float
        """
        nodes, weights = np.polynomial.legendre.leggauss(_INTERVAL_NODES)
        roots = 0.5 * (nodes + 1.0)
        means = [self.mean(t * root**2) for root in roots.tolist()]
        return float(np.sum(weights * roots * means))

    def at(self, moves: FloatArray) -> FloatArray:
        """Give the infidelity at given moves.

        Parameters
        ----------
        moves : ndarray, shape (k, processes)
            In the units of the processes.

        Returns
        -------
        ndarray, shape (k,)
        """
        vectors, rests = self._sum(moves)
        found: FloatArray = cost_of(vectors) + rests
        return found

    def _moments(self, t: float) -> list[Moments]:
        found = []
        for process, response in zip(self.processes, self.responses, strict=True):
            mean, deviation = process.motion.mean(t), process.motion.deviation(t)
            vectors, rests = response.at(mean + deviation * self._nodes)
            squares = np.sum(vectors**2, axis=1)
            found.append(
                Moments(
                    self._weights @ vectors,
                    float(self._weights @ squares),
                    float(self._weights @ rests),
                    math.sqrt(float(squares.max())),
                )
            )
        return found

    def _mean_square(self, moments: Sequence[Moments]) -> float:
        shift = np.sum([item.vector for item in moments], axis=0)
        spread = math.fsum(item.square - float(item.vector @ item.vector) for item in moments)
        rest = math.fsum(item.rest for item in moments)
        middle = self.centre.vector + shift
        return float(middle @ middle) + spread + self.centre.rest + rest

    def _samples(self, t: float) -> tuple[FloatArray, FloatArray]:
        means = np.array([process.motion.mean(t) for process in self.processes])
        deviations = np.array([process.motion.deviation(t) for process in self.processes])
        return self._sum(means + deviations * self._points)

    def _sum(self, moves: FloatArray) -> tuple[FloatArray, FloatArray]:
        vectors = np.tile(self.centre.vector, (len(moves), 1))
        rests = np.full(len(moves), self.centre.rest)
        for at, response in enumerate(self.responses):
            changed, rest = response.at(moves[:, at])
            vectors += changed
            rests += rest
        return vectors, rests
