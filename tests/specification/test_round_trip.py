"""Oracle: the limits simulated once more by other means, matrix exponentials and fresh noise.

Nothing of the specification's own evolution is used: the Hamiltonians are written out here, and
noise is drawn anew.
"""

import math
from typing import Any

import numpy as np
import pytest
from scipy.linalg import expm

from cosim.errors import TestbenchError
from cosim.quantum.batch import BatchDrive, propagate_batch
from cosim.quantum.qubit import Qubit
from cosim.specification.building import curve_names, make_curves
from cosim.specification.distortion import distorted_losses
from cosim.specification.gate_specification import specify_gate
from cosim.specification.masks import noise_filter
from cosim.specification.pulse import make_pulse
from cosim.specification.request import BLOCKS, PulseTable
from cosim.specification.result import GateSpecification
from cosim.specification.verification import simulate_together
from tests.specification.benches import (
    DURATION,
    RABI_PER_VOLT,
    TRANSMON,
    design,
    request_of,
    square_pulse,
)

X = np.array([[0, 1], [1, 0]], dtype=complex)
Y = np.array([[0, -1j], [1j, 0]])
OMEGA = math.pi / DURATION
TRANSMON_LEVELS = Qubit(5e9, levels=3, anharmonicity=-300e6)
BLOCK_TABLES: dict[str, dict[str, Any]] = {
    "amplitude": {},
    "phase": {},
    "carrier": {},
    "timing": {},
    "jitter": {},
    "image": {"intermediate_frequency": "20 MHz"},
    "leakage": {"before": "80 ns"},
    "amplitude_noise": {},
    "flicker_noise": {"low": "10 mHz"},
    "phase_noise": {"low": "10 kHz", "corner": "1 MHz"},
    "spurs": {"offsets": ["-7 MHz", "3 MHz", "12 MHz"]},
    "wideband": {},
    "dac_bits": {"rate": "1 GHz"},
}


def infidelity(u: np.ndarray) -> float:
    """1 - F_avg against a half turn about x."""
    overlap = abs(np.trace(expm(0.5j * math.pi * X) @ u)) ** 2
    return float(1 - (overlap + 2) / 6)


def evolved(drive, start: float, stop: float, steps: int = 4000) -> np.ndarray:  # type: ignore[no-untyped-def]
    """Evolve two levels under a complex drive rate: H = (re X - im Y)/2, |0> the ground state."""
    dt = (stop - start) / steps
    u = np.eye(2, dtype=complex)
    for k in range(steps):
        rate = drive(start + (k + 0.5) * dt)
        u = expm(-0.5j * dt * (rate.real * X - rate.imag * Y)) @ u
    return u


@pytest.fixture(scope="module")
def spin() -> GateSpecification:
    """A square pulse on a spin with everything that there is."""
    return specify_gate(design(BLOCK_TABLES, target=2e-3))


class TestLimitsSimulatedAgain:
    # Cells of the specification's own evolution, (pi/128)^2/6 = 1e-4, and the search's 1e-4.
    TOLERANCE = 1e-3

    def check(self, spin: GateSpecification, name: str, lost: float) -> None:
        assert lost == pytest.approx(spin.block(name).share, rel=self.TOLERANCE, abs=0.0)

    def test_carrier(self, spin: GateSpecification) -> None:
        f = spin.block("carrier").limit
        u = evolved(lambda t: OMEGA * np.exp(2j * math.pi * f * t), 0.0, DURATION)
        self.check(spin, "carrier", infidelity(u))

    def test_image(self, spin: GateSpecification) -> None:
        x = 10 ** (spin.block("image").limit / 20)
        losses = []
        for k in range(8):
            phase = np.exp(2j * math.pi * k / 8)
            u = evolved(
                lambda t, phase=phase: OMEGA * (1 + x * phase * np.exp(-4j * math.pi * 20e6 * t)),
                0.0,
                DURATION,
                1000,
            )
            losses.append(infidelity(u))
        self.check(spin, "image", max(losses))

    def test_leakage(self, spin: GateSpecification) -> None:
        x = 10 ** (spin.block("leakage").limit / 20)
        u = expm(-0.5j * x * OMEGA * 80e-9 * X)
        u = expm(-0.5j * (1 + x) * OMEGA * DURATION * X) @ u
        self.check(spin, "leakage", infidelity(u))

    def test_spur(self, spin: GateSpecification) -> None:
        mask = spin.mask("spurs")
        for offset, level in zip(mask.low.tolist(), mask.levels.tolist(), strict=True):
            losses = []
            for psi in (0.0, 0.5 * math.pi, math.pi, 1.5 * math.pi):

                def drive(
                    t: float, f: float = offset, x: float = level, psi: float = psi
                ) -> complex:
                    return OMEGA * (1 + 10 ** (x / 20) * np.exp(1j * (2 * math.pi * f * t + psi)))

                losses.append(infidelity(evolved(drive, 0.0, DURATION, 600)))
            self.check(spin, "spurs", float(np.mean(losses)))

    def test_white_noises_drawn_anew(self, spin: GateSpecification) -> None:
        rows, cells = 20_000, 50
        dt = DURATION / cells
        random = np.random.default_rng(7)

        def mean(rate: np.ndarray) -> tuple[float, float]:
            u = propagate_batch(Qubit(6e9), BatchDrive(dt, rate)).unitaries
            target = expm(0.5j * math.pi * X)
            trace = np.abs(np.einsum("ij,bji->b", target, u)) ** 2
            lost = 1 - (trace + 2) / 6
            return float(lost.mean()), float(lost.std() / math.sqrt(rows))

        draws = random.standard_normal((rows, cells))
        density = spin.block("amplitude_noise").limit
        found, error = mean(OMEGA * (1 + draws * math.sqrt(density / (2 * dt)) + 0j))
        # Four standard errors, each 1 % here, and the cells of this check, (pi/50)^2/12 = 3e-4.
        share = spin.block("amplitude_noise").share
        assert abs(found - share) < 4 * error + 1e-3 * share
        both = draws + 1j * random.standard_normal((rows, cells))
        density = spin.block("wideband").limit
        scale = 2 * math.pi * RABI_PER_VOLT * math.sqrt(density / dt)
        found, error = mean(OMEGA + scale * both)
        share = spin.block("wideband").share
        assert abs(found - share) < 4 * error + 1e-3 * share


def test_a_tone_on_the_second_transition() -> None:
    # A spur at the anharmonicity turns the second transition, which a cell has to follow.
    table = {"shape": "raised cosine", "duration": "40 ns", "drag": 0.5}
    blocks = {"spurs": {"offsets": ["-300 MHz", "60 MHz"]}}
    qubit = {**TRANSMON, "kind": "transmon"}
    found = specify_gate(design(blocks, target=2e-4, qubit=qubit, pulse=table))
    pulse = make_pulse(PulseTable("raised cosine", 40e-9, drag=0.5), TRANSMON_LEVELS, math.pi)
    steps = 2000
    dt = 40e-9 / steps
    t = dt * (np.arange(steps) + 0.5)
    turn = 2 * math.pi * t / 40e-9
    slope = math.pi * np.sin(turn) / 40e-9
    envelope = 0.5 * (1 - np.cos(turn)) + 0.5j * slope / (2 * math.pi * -300e6)
    lower = np.diag(np.sqrt([1.0, 2.0]), 1).astype(complex)
    still = np.diag([0.0, 0.0, -2 * math.pi * 300e6]).astype(complex)
    n = np.arange(3)

    def lost(tone: np.ndarray) -> float:
        drive = pulse.peak * (envelope + tone) * np.exp(2j * math.pi * pulse.offset * t)
        u = np.eye(3, dtype=complex)
        for rate in drive.tolist():
            half = 0.5 * rate * lower
            u = expm(-1j * dt * (still + half + half.conj().T)) @ u
        u = np.exp(-1j * pulse.after * n)[:, None] * u * np.exp(-1j * pulse.before * n)
        v = u[:2, :2]
        overlap = abs(np.trace(expm(0.5j * math.pi * X) @ v)) ** 2
        return float(1 - (overlap + np.sum(np.abs(v) ** 2)) / 6)

    base = lost(np.zeros(steps))
    mask = found.mask("spurs")
    for offset, level in zip(mask.low.tolist(), mask.levels.tolist(), strict=True):
        x = 10 ** (level / 20)
        phases = 0.5 * math.pi * np.arange(4)
        costs = [lost(x * np.exp(1j * (2 * math.pi * offset * t + psi))) - base for psi in phases]
        # Cells of a tenth of a turn: 1e-3. Four phases beside the eight of the mask: 1e-3.
        assert np.mean(costs) == pytest.approx(found.block("spurs").share, rel=2e-3, abs=0.0)
        # To first order the filter says the same: the power of a tone is half its square.
        filtered = noise_filter(pulse, "qubit", np.array([offset]))[0] * x**2 / 2
        assert filtered == pytest.approx(np.mean(costs), rel=5e-3, abs=0.0)


class TestTogether:
    def test_the_target_is_met_and_used(self, spin: GateSpecification) -> None:
        found = spin.verification
        assert found.infidelity <= spin.target_infidelity
        # Whole bits leave something, and the rule counts the worst sign of each pair of errors.
        assert found.infidelity > 0.6 * spin.target_infidelity
        assert found.combinations == 2**4 * 8 * 8
        assert spin.combined <= spin.budget

    def test_the_sum_of_all_is_that_of_plain_samples(self) -> None:
        # Signs by a Hadamard matrix and known first orders against samples drawn without either.
        blocks = ("amplitude", "jitter", "amplitude_noise", "phase_noise", "wideband")
        request = request_of({name: BLOCK_TABLES[name] for name in blocks})
        pulse = square_pulse()
        curves = make_curves(request, pulse, RABI_PER_VOLT, 4000)
        errors = {name: curves[name].limit(2e-4) for name in blocks}
        few = simulate_together(pulse, "qubit", curves, errors, 128)
        constant, random = curve_names(curves)
        assert constant == ["amplitude"]
        together = few.worst
        order = np.random.default_rng(3)
        for name in random:
            rows = curves[name].variants(errors[name], 4000)
            together = together + rows.picked(order.permutation(4000))
        from_samples = distorted_losses(pulse, together)
        bar = 4 * from_samples.std() / math.sqrt(4000)
        assert abs(from_samples.mean() - few.infidelity) < bar + 4 * few.standard_error
        assert few.standard_error < 0.01 * few.infidelity

    def test_limits_shrink_where_the_rule_allows_too_much(self) -> None:
        # A pulse that is too large by x and too long by y turns by (1 + x)(1 + y): the product of
        # both errors is what the rule, which is of leading order, leaves out.
        found = specify_gate(design({"amplitude": {}, "timing": {}}, target=0.02))
        each = 0.02 / 4
        x = 2 / math.pi * math.asin(math.sqrt(1.5 * each))
        wanted = (2 / 3) * math.sin(0.5 * math.pi * (2 * x + x**2)) ** 2
        check = found.verification
        assert check.before_shrinking == pytest.approx(wanted, rel=1e-3)
        assert check.before_shrinking > 0.02
        x *= check.shrinking
        wanted = (2 / 3) * math.sin(0.5 * math.pi * (2 * x + x**2)) ** 2
        assert check.infidelity == pytest.approx(wanted, rel=1e-3)
        # The factor is known to 1e-3, and the square of it counts.
        assert 0.02 * (1 - 4e-3) < check.infidelity <= 0.02
        assert found.block("amplitude").limit == pytest.approx(x, rel=1e-3)


class TestInfeasible:
    @pytest.mark.parametrize(
        ("blocks", "own", "message"),
        [
            ({"jitter": {}}, {"qubit": {"t1": "10 us"}, "target": 1e-4}, "decoherence.*t1, t2"),
            (
                {"jitter": {}},
                {"qubit": {**TRANSMON, "kind": "transmon"}, "target": 1e-5},
                r"the ideal pulse itself \(leakage",
            ),
            ({"jitter": {}, "image": {"value": "-20 dBc"}}, {}, r"given cost.*\[specify.image\]"),
            ({"timing": {"value": "20 ns"}}, {}, r"\[specify.timing\].*followed up to"),
            ({"jitter": {}}, {"gate": "z"}, "axis of the xy-plane"),
        ],
    )
    def test_the_message_names_what_forbids_it(
        self, blocks: dict[str, Any], own: dict[str, Any], message: str
    ) -> None:
        with pytest.raises(TestbenchError, match=message):
            specify_gate(design(blocks, **own))

    def test_given_blocks_alone_are_verified(self) -> None:
        blocks = {"amplitude": {"value": 1e-3}, "phase": {"value": "1 mrad"}}
        found = specify_gate(design(blocks))
        assert [block.given for block in found.blocks] == [True, True]
        wanted = (math.pi * 1e-3) ** 2 / 6 + (2 / 3) * 1e-6
        assert found.verification.infidelity == pytest.approx(wanted, rel=2e-3, abs=0.0)

    def test_every_block_has_been_tried(self) -> None:
        assert set(BLOCK_TABLES) | {"dac_rate"} == set(BLOCKS)
