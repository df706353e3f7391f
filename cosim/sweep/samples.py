"""Monte Carlo draws: points of the unit cube, distributions, and the mismatch of transistors.

Random draws come from SHA-256 of seed, sample and name, 52 bits each: they are the same in every
process and version, and another number or transistor in the sweep changes none of them.
"""

import hashlib
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtri
from scipy.stats import qmc

from cosim.circuit.mismatch import Mosfet, Shift
from cosim.errors import TestbenchError, UnitError
from cosim.keys import NumberKey
from cosim.schema import ShiftName
from cosim.sweep.table import MismatchTable, MonteCarloTable, VaryTable
from cosim.waveform import FloatArray

# The open unit interval, so that no quantile is infinite: 8.2 standard deviations of a normal one.
_LEAST, _MOST = 2.0**-53, 1.0 - 2.0**-53
# The points of a Sobol sequence are counted in as many bits.
_SOBOL_BITS = 30


def unit_samples(table: MonteCarloTable) -> FloatArray:
    """Draw the samples of all varied numbers in the unit cube.

    Parameters
    ----------
    table : MonteCarloTable
        Number of samples, seed, method and the numbers.

    Returns
    -------
    ndarray of float, shape (runs, number of varied numbers)
        Between 0 and 1, both left out. Of the random method and of the Sobol sequence, more
        samples leave the first ones as they are; a Latin hypercube is another one then.
    """
    runs, names = table.runs, [item.key for item in table.vary]
    if not names:
        return np.empty((runs, 0))
    if table.method == "sobol":
        engine = qmc.Sobol(len(names), scramble=True, bits=_SOBOL_BITS, seed=table.seed)
        # The sequence is balanced over powers of two; the rest of the last one is left out.
        points = engine.random_base2(max(0, (runs - 1).bit_length()))[:runs]
    elif table.method == "latin hypercube":
        points = qmc.LatinHypercube(len(names), seed=table.seed).random(runs)
    else:
        points = np.array(
            [[uniform(table.seed, sample, name) for name in names] for sample in range(runs)]
        )
    return np.clip(points, _LEAST, _MOST)


def uniform(seed: int, sample: int, name: str) -> float:
    """Draw one number between 0 and 1, both left out.

    Parameters
    ----------
    seed, sample : int
        Seed of the sweep and number of the sample.
    name : str
        What is drawn.

    Returns
    -------
    float
        A multiple of 2^-52 plus half of it, so that neither end is met.
    """
    digest = hashlib.sha256(f"{seed}/{sample}/{name}".encode()).digest()
    return (int.from_bytes(digest[:8], "big") // 2**12 + 0.5) * 2.0**-52


def sample_seed(seed: int, sample: int) -> int:
    """Give the seed of a deck's own random functions for one sample.

    Parameters
    ----------
    seed, sample : int
        Seed of the sweep and number of the sample.

    Returns
    -------
    int
        From 1 to 2^31 - 1.
    """
    return 1 + int(uniform(seed, sample, "deck") * (2**31 - 1))


@dataclass(frozen=True, slots=True)
class Variation:
    """One number that is drawn, its table read.

    Parameters
    ----------
    key : NumberKey
        The number.
    distribution : str
        "normal", "uniform" or "lognormal".
    center : float or None
        Mean, or median of a lognormal one; None: the value at this point of the sweep.
    width : float
        Standard deviation, of the logarithm for a lognormal one; a uniform one's width.
    """

    key: NumberKey
    distribution: str
    center: float | None
    width: float

    def value(self, point: float, nominal: float | None) -> float:
        """Give the value for a point of the unit interval, in SI units.

        The nominal value takes the place of a center that is None.
        """
        center = self.center if self.center is not None else nominal
        assert center is not None  # The plan has seen to it.
        if self.distribution == "uniform":
            value = center + self.width * (point - 0.5)
        elif self.distribution == "normal":
            value = center + self.width * float(ndtri(point))
        else:
            value = center * math.exp(self.width * float(ndtri(point)))
        return float(round(value)) if self.key.whole else value


def read_variation(table: VaryTable, key: NumberKey, where: str) -> Variation:
    """Read the distribution of one number.

    Parameters
    ----------
    table : VaryTable
        As it stands in the file.
    key : NumberKey
        The number.
    where : str
        File and table, for messages.

    Returns
    -------
    Variation
        In SI units.

    Raises
    ------
    TestbenchError
        If a value has the wrong unit or lies outside of the limits, or the distribution has no
        width.
    """
    if table.distribution == "uniform":
        low, high = (
            key.read(getattr(table, name), f"{where}, key '{name}'") for name in ("low", "high")
        )
        if not low < high:
            raise TestbenchError(f"{where}: 'high' must lie above 'low', got {low:g} and {high:g}")
        return Variation(key, table.distribution, (low + high) / 2.0, high - low)
    plain = NumberKey("sigma", "", "")
    source = plain if table.distribution == "lognormal" else key
    sigma = read_step(source, table.sigma, f"{where}, key 'sigma'")
    name = "mean" if table.distribution == "normal" else "median"
    given = getattr(table, name)
    center = None if given is None else key.read(given, f"{where}, key '{name}'")
    if table.distribution == "lognormal" and center is not None and center <= 0.0:
        raise TestbenchError(f"{where}, key 'median': wanted more than zero, got {given!r}")
    return Variation(key, table.distribution, center, sigma)


def read_step(key: NumberKey, raw: object, where: str) -> float:
    """Read a positive difference between two values of a number.

    Parameters
    ----------
    key : NumberKey
        The number.
    raw : object
        As it stands in the file.
    where : str
        File, table and key, for messages.

    Returns
    -------
    float
        In SI units.

    Raises
    ------
    TestbenchError
        If it has the wrong unit or is not positive.
    """
    if isinstance(raw, str) and raw.strip().endswith("degC"):
        raise TestbenchError(f'{where}: a difference of temperatures is given in "K", got {raw!r}')
    try:
        width = key.parse(raw)
    except UnitError as error:
        raise TestbenchError(f"{where}: {error.message}", hint=error.hint) from None
    if not width > 0.0:
        raise TestbenchError(f"{where}: wanted more than zero, got {raw!r}")
    return width


def draw_mismatch(
    table: MismatchTable, devices: Sequence[Mosfet], seed: int, sample: int
) -> dict[str, Shift]:
    """Draw the shifts of all transistors for one sample.

    Parameters
    ----------
    table : MismatchTable
        The constants of the process.
    devices : sequence of Mosfet
        The transistors.
    seed, sample : int
        Seed of the sweep and number of the sample.

    Returns
    -------
    dict
        Path -> shift. Normal, independent of one another, with the standard deviation
        A/sqrt(W L), or A/sqrt(2 W L) where A is that of a pair's difference: M. J. M. Pelgrom et
        al., IEEE J. Solid-State Circuits 24, 1433 (1989). The current factor is lognormal, so
        that it stays positive; for the small deviations of real processes that is the same.
    """
    if not devices:
        return {}
    areas = np.array([device.area for device in devices])
    per_root_area = 1.0 / np.sqrt(areas * (2.0 if table.per == "pair" else 1.0))
    points = np.array(
        [
            [uniform(seed, sample, f"{device.path}/{what}") for what in ("threshold", "current")]
            for device in devices
        ]
    )
    deviates = ndtri(points) * per_root_area[:, np.newaxis]
    thresholds = (table.threshold * deviates[:, 0]).tolist()
    factors = np.exp(table.current_factor * deviates[:, 1]).tolist()
    return {
        device.path: Shift(threshold, factor)
        for device, threshold, factor in zip(devices, thresholds, factors, strict=True)
    }


def mismatch_entries(shifts: Mapping[str, Shift]) -> dict[str, dict[ShiftName, float]]:
    """Write shifts as the key `mismatch` of the table [netlist] has them.

    Parameters
    ----------
    shifts : mapping
        Path -> shift.

    Returns
    -------
    dict
    """
    return {
        path: {"threshold": shift.threshold, "current_factor": shift.current_factor}
        for path, shift in shifts.items()
    }
