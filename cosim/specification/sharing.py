"""From shares of the target to errors, with bits and samples that are whole."""

import math
from collections.abc import Mapping

from cosim.specification.allocation import (
    Shares,
    combined,
    power_laws,
    share_by_weights,
    share_for_power,
)
from cosim.specification.building import AnyCurve
from cosim.specification.curves import no_limit
from cosim.specification.request import BLOCKS, Request
from cosim.waveform import FloatArray

# Blocks whose limits are whole numbers, of bits and of samples.
WHOLE = ("dac_bits", "dac_rate")


def shared_errors(
    request: Request,
    curves: Mapping[str, AnyCurve],
    given: Mapping[str, float],
    cosines: FloatArray,
    budget: float,
) -> tuple[dict[str, float], float]:
    """Share the budget among the blocks that are open.

    Parameters
    ----------
    request : Request
        Which blocks there are, with weights or powers.
    curves : mapping of str to Curve or RateCurve
        Of all blocks.
    given : mapping of str to float
        Errors that are kept.
    cosines : ndarray, shape (n, n)
        From `all_cosines`.
    budget : float
        Infidelity that all blocks together may cost; more than those that are given do.

    Returns
    -------
    errors : dict of str to float
        Of all blocks, the given ones included.
    multiplier : float
        Power in W that a unit of the infidelity saves; NaN where weights decide.

    Raises
    ------
    TestbenchError
        If a block cannot cost what it was given, or no optimum is found.

    Notes
    -----
    Bits and samples are whole: they are rounded first, bits both ways where the power is to be
    least, and what that leaves is shared once more.
    """
    names = list(curves)
    by_power = request.table.allocate == "power"
    open_names = [name for name in names if name not in given]
    laws = power_laws(open_names, curves, request.powers, budget) if by_power else {}

    def costs_of(kept: Mapping[str, float]) -> dict[str, float]:
        return {name: curves[name].cost(error) for name, error in kept.items()}

    def shared(kept: Mapping[str, float]) -> tuple[dict[str, float], float]:
        costs = costs_of(kept)
        if by_power and len(kept) < len(names):
            shares = share_for_power(names, laws, costs, cosines, budget)
        else:
            weights = {name: request.blocks[name].weight for name in names if name not in kept}
            shares = share_by_weights(names, weights, costs, cosines, budget)
        return _errors(request, curves, kept, shares), shares.multiplier

    errors, multiplier = shared(given)
    whole = {name: errors[name] for name in WHOLE if name in errors and name not in given}
    if not whole:
        return errors, multiplier
    found = [shared({**given, **rounded(whole)})]
    if by_power and "dac_bits" in whole:
        fewer = {**given, **rounded(whole, up=False)}
        costs = costs_of(fewer)
        if combined([costs.get(name, 0.0) for name in names], cosines) < budget:
            found.append(shared(fewer))
    return min(found, key=lambda one: sum(powers_at(request, one[0]).values()))


def _errors(
    request: Request, curves: Mapping[str, AnyCurve], given: Mapping[str, float], shares: Shares
) -> dict[str, float]:
    """Turn shares into errors."""
    found = {}
    for name, share in zip(shares.names, shares.costs, strict=True):
        found[name] = given[name] if name in given else curves[name].limit(float(share))
        if math.isinf(found[name]) and name == "dac_rate":
            # A single sample does.
            found[name] = request.pulse.duration
        if math.isinf(found[name]):
            raise no_limit(BLOCKS[name].label, float(share))
    return found


def rounded(errors: Mapping[str, float], up: bool = True) -> dict[str, float]:
    """Round the bits, of which there are no parts; samples are whole as they come.

    Parameters
    ----------
    errors : mapping of str to float
        Of any blocks.
    up : bool
        To more bits, or to fewer.

    Returns
    -------
    dict of str to float
    """
    found = dict(errors)
    if "dac_bits" in found:
        bits = -math.log2(found["dac_bits"])
        found["dac_bits"] = 2.0 ** -(math.ceil(bits - 1e-9) if up else max(1, math.floor(bits)))
    return found


def powers_at(request: Request, errors: Mapping[str, float]) -> dict[str, float]:
    """Give the power of each block with a power law.

    Parameters
    ----------
    request : Request
        With the laws.
    errors : mapping of str to float
        Of these blocks at least.

    Returns
    -------
    dict of str to float
        In W.
    """
    return {name: a * (errors[name] / at) ** -n for name, (a, n, at) in request.powers.items()}
