"""Oracle: Lagrange's closed form for two blocks, and the conditions of Karush, Kuhn and Tucker."""

import contextlib
import math
from dataclasses import dataclass

import numpy as np
import pytest

from cosim.errors import TestbenchError
from cosim.specification.allocation import (
    combined,
    power_laws,
    share_by_weights,
    share_for_power,
)
from cosim.specification.gate_specification import specify_gate
from tests.specification.benches import design


@dataclass(frozen=True)
class Parabola:
    """A curve of which all is known: cost = k x^2."""

    name: str
    k: float

    def cost(self, x: float) -> float:
        return self.k * x**2

    def limit(self, share: float) -> float:
        return math.sqrt(share / self.k)


NAMES = ("a", "b", "c", "d")
CURVES = {name: Parabola(name, k) for name, k in zip(NAMES, (1.0, 3.0, 0.2, 50.0), strict=True)}
POWERS = {
    "a": (1e-3, 2.0, 0.1),
    "b": (2e-3, 1.0, 0.01),
    "c": (5e-3, 3.0, 0.2),
    "d": (1e-2, 2.0, 0.003),
}
# a and b act about one axis, c at an angle to them; d fluctuates.
COSINES = np.array(
    [[1.0, 1.0, 0.3, 0.0], [1.0, 1.0, 0.3, 0.0], [0.3, 0.3, 1.0, 0.0], [0.0, 0.0, 0.0, 1.0]]
)


def power(shares: np.ndarray) -> np.ndarray:
    found = []
    for name, share in zip(NAMES, shares, strict=True):
        a, n, at = POWERS[name]
        found.append(a * (CURVES[name].limit(share) / at) ** -n)
    return np.array(found)


def test_two_blocks_as_lagrange_has_them() -> None:
    # P = sum of a_i k_i at_i^2/e_i under e_1 + e_2 = B: e_i goes with sqrt(a_i k_i at_i^2).
    names, budget = ("a", "d"), 1e-4
    found = share_for_power(names, power_laws(names, CURVES, POWERS, budget), {}, np.eye(2), budget)
    parts = np.array([math.sqrt(POWERS[n][0] * CURVES[n].k) * POWERS[n][2] for n in names])
    wanted = budget * parts / parts.sum()
    # The optimiser ends where the power no longer changes by 1e-13, about its flat minimum.
    assert found.costs == pytest.approx(wanted, rel=1e-4, abs=0.0)
    # dP/dB = -(sum of parts)^2/B^2.
    assert found.multiplier == pytest.approx(parts.sum() ** 2 / budget**2, rel=1e-3, abs=0.0)


def test_the_optimum_meets_the_conditions() -> None:
    budget = 3e-4
    laws = power_laws(NAMES, CURVES, POWERS, budget)
    found = share_for_power(NAMES, laws, {}, COSINES, budget)
    costs = found.costs
    assert combined(costs, COSINES) == pytest.approx(budget, rel=1e-9, abs=0.0)
    exponents = np.array([POWERS[name][1] for name in NAMES])
    falling = -exponents / 2 * power(costs) / costs
    roots = np.sqrt(costs)
    rising = (COSINES @ roots) / roots
    # One multiplier for all blocks; the powers are known between the points of a table.
    assert falling / rising == pytest.approx(-found.multiplier, rel=2e-3, abs=0.0)
    # And no share for another makes it less.
    least = power(costs).sum()
    random = np.random.default_rng(1)
    for _ in range(50):
        moved = costs * np.exp(0.2 * random.standard_normal(4))
        moved *= budget / combined(moved, COSINES)
        assert power(moved).sum() > least


def test_given_blocks_keep_theirs_and_the_rest_is_shared_by_weight() -> None:
    given = {"a": 1e-5}
    found = share_by_weights(NAMES, {"b": 1.0, "c": 2.0, "d": 1.0}, given, COSINES, 1e-4)
    assert found.costs[0] == 1e-5
    assert found.costs[2] == pytest.approx(2 * found.costs[1], rel=1e-12)
    assert found.costs[3] == pytest.approx(found.costs[1], rel=1e-12)
    assert combined(found.costs, COSINES) == pytest.approx(1e-4, rel=1e-9, abs=0.0)


def test_least_power_through_the_exact_curves() -> None:
    blocks = {
        "jitter": {"power": {"a": "1 mW", "n": 2, "at": "10 ps"}},
        "amplitude_noise": {"power": {"a": "3 mW", "n": 2, "at": "1e-13 1/Hz"}},
    }
    found = specify_gate(design(blocks, allocate="power"))
    jitter, noise = found.block("jitter"), found.block("amplitude_noise")
    # At so small an infidelity both curves are parabolas, k x^2 with k = share/x^2.
    parts = [
        math.sqrt(1e-3 * jitter.share / jitter.limit**2) * 10e-12,
        math.sqrt(3e-3 * noise.share / noise.limit) * math.sqrt(1e-13),
    ]
    assert jitter.share / noise.share == pytest.approx(parts[0] / parts[1], rel=2e-3)
    assert found.total_power == pytest.approx(jitter.power + noise.power, rel=1e-12)
    equal = specify_gate(design(blocks))
    assert found.total_power < equal.total_power


def test_whole_bits_of_least_power_and_the_rest_shared_anew() -> None:
    # Oracle: all numbers of bits tried by hand, with a parabola for the other block.
    law = {"a": "1 mW", "n": 2, "at": "20 ps"}
    blocks = {
        "jitter": {"power": law},
        "dac_bits": {"rate": "1 GHz", "power": {"a": "2 mW", "n": 1, "at": 8}},
    }
    found = specify_gate(design(blocks, allocate="power"))
    chosen = int(found.block("dac_bits").limit)
    powers = {}
    for bits in range(4, 12):
        given = {**blocks, "dac_bits": {**blocks["dac_bits"], "value": bits}}
        with contextlib.suppress(TestbenchError):  # Of few bits, which cost more than the target.
            powers[bits] = specify_gate(design(given, allocate="power")).total_power
    assert len(powers) > 4
    assert chosen == min(powers, key=lambda bits: powers[bits])
    # The same limits; what rounding left is spent, up to 1e-4 of an error and 1e-3 of shrinking.
    assert found.total_power == pytest.approx(powers[chosen], rel=1e-6, abs=0.0)
    check = found.verification
    assert check.infidelity + check.standard_error > 0.99 * found.target_infidelity


def test_shrinking_takes_no_bit_more() -> None:
    # The rule leaves out the product of two errors about one axis, so that the limits shrink.
    blocks = {"amplitude": {}, "timing": {}, "dac_bits": {"rate": "1 GHz"}}
    found = specify_gate(design(blocks, target=0.02))
    assert 0.9 < found.verification.shrinking < 1.0
    bits = found.block("dac_bits")
    kept = specify_gate(
        design({**blocks, "dac_bits": {"rate": "1 GHz", "value": int(bits.limit)}}, target=0.02)
    )
    assert kept.verification.shrinking == pytest.approx(found.verification.shrinking, rel=2e-3)
    # A bit less would have cost more than its part of the target.
    assert 4 * bits.share > 0.02 / 9


@pytest.mark.parametrize(
    ("blocks", "own", "message"),
    [
        ({"jitter": {"power": {"a": "1 mW", "n": -2, "at": "1 ps"}}}, {}, "exponent 'n' above 0"),
        ({"jitter": {"power": {"a": "-1 mW", "n": 2, "at": "1 ps"}}}, {}, "power 'a' above 0"),
        ({"jitter": {"power": {"a": "1 mW", "n": 2, "at": "1 dB"}}}, {}, "power.at"),
        ({"jitter": {}}, {"allocate": "power"}, r"\[specify.jitter\] has none"),
        ({"jiter": {}}, {}, "jitter"),
        ({}, {}, "a table for each block"),
        ({"dac_bits": {"rate": "1 GHz", "value": 7.5}}, {}, "key 'value'.*integer.*7.5"),
        ({"amplitude": {"weight": 0}}, {}, "weight"),
        ({"amplitude": {}}, {"target": 0.5}, "target"),
    ],
)
def test_what_is_refused(blocks: dict, own: dict, message: str) -> None:
    with pytest.raises(TestbenchError, match=message):
        specify_gate(design(blocks, **own))
