"""Oracle: published relations between average fidelity, benchmarking and worst-case error."""

import math
from itertools import product

import numpy as np

from cosim.quantum.channel import apply_channel, choi, unitary_superoperator
from cosim.quantum.evolution import evolve
from cosim.quantum.fidelity import average_gate_fidelity, target_unitary
from cosim.quantum.qubit import Qubit
from cosim.quantum.targets import TARGETS
from cosim.waveform import ComplexArray
from tests import sources
from tests.quantum.drives import CARRIER, constant
from tests.validation import Validate

TOPIC = "metrics"
DIGITS = 1e-6  # Seven digits in the card.
PULSES = ("identity", "x", "x90", "-x90", "y", "y90", "-y90")


def infidelity(channel: ComplexArray, levels: int = 2) -> float:
    return 1 - average_gate_fidelity(channel, np.eye(levels, dtype=complex))


def idle(duration: float, qubit: Qubit) -> ComplexArray:
    return evolve(qubit, constant(0.0, 0.0, duration), 0.0, duration)


def without_phase(u: ComplexArray) -> tuple[complex, ...]:
    """A unitary as a key: its first entry that is not zero is made positive."""
    flat = u.reshape(-1)
    first = flat[np.flatnonzero(np.abs(flat) > 1e-6)[0]]
    turned = np.round(flat * abs(first) / first, 6) + 0.0
    return tuple(complex(value) for value in turned)


def cliffords() -> dict[tuple[complex, ...], tuple[ComplexArray, int]]:
    """The 24 one-qubit Cliffords with the least number of pulses for each, by breadth first."""
    pulses = [target_unitary(TARGETS[name].axis, TARGETS[name].angle) for name in PULSES]
    found: dict[tuple[complex, ...], tuple[ComplexArray, int]] = {}
    layer: list[ComplexArray] = [np.eye(2, dtype=complex)]
    for count in (1, 2, 3):
        layer = [pulse @ u for pulse, u in product(pulses, layer)]
        for u in layer:
            found.setdefault(without_phase(u), (u, count))
    return found


def test_decay_of_randomised_benchmarking(validate: Validate) -> None:
    # A13. Relaxation and dephasing from the kernel, and the decay of |0> under random Cliffords,
    # here averaged over all 24 of them instead of drawn.
    group = [u for u, _ in cliffords().values()]
    assert len(group) == 24
    decay = -100e-9 / math.log(0.998)
    error = idle(100e-9, Qubit(CARRIER, t1=2 * decay, t2=decay))
    twirl = np.mean(
        [unitary_superoperator(u).conj().T @ error @ unitary_superoperator(u) for u in group],
        axis=0,
    )
    ground = np.diag([1, 0]).astype(complex)
    survival = []
    for count in (10, 20, 30):
        channel = np.linalg.matrix_power(twirl, count)
        survival.append(apply_channel(channel, ground)[0, 0].real)
    p = ((survival[2] - survival[1]) / (survival[1] - survival[0])) ** (1 / 10)
    # The differences of nearby survivals lose three digits of sixteen.
    validate(
        "1 - F_avg of a channel against (1 - p)/2 of its decay under random Cliffords",
        sources.MAGESAN,
        (1 - p) / 2,
        infidelity(error),
        rel=1e-9,
        card="A13",
        digits=9,
    )
    depolarised = idle(100e-9, Qubit(CARRIER, t1=decay, t2=decay))
    quantity = "error per Clifford of one qubit, p = 0.998"
    validate(quantity, sources.MAGESAN, 0.001, infidelity(depolarised), rel=DIGITS, card="A13")
    mix = np.outer(np.eye(4).reshape(-1), np.eye(4).reshape(-1)) / 4
    pair = (0.98 * np.eye(16) + 0.02 * mix).astype(complex)
    quantity = "error per Clifford of two qubits, p = 0.98"
    validate(quantity, sources.MAGESAN, 0.015, infidelity(pair, 4), rel=DIGITS, card="A13")


def test_pulses_per_clifford(validate: Validate) -> None:
    # A13: half and quarter turns about +-x and +-y, the identity counted as one pulse.
    counts = [count for _, count in cliffords().values()]
    quantity = "pulses for each Clifford, on the mean, from the gates' names"
    mean = float(np.mean(counts))
    # A mean of integers: rounding only.
    validate(quantity, sources.MAGESAN, 1.875, mean, rel=1e-12, card="A13")


def half_trace_distance(channel: ComplexArray) -> float:
    """Half the trace distance from the identity on one half of a maximally entangled pair.

    This is half the diamond distance where that input is the worst one: rotations and Pauli
    channels of one qubit.
    """
    difference = choi(channel) - choi(np.eye(4, dtype=complex))
    return float(np.abs(np.linalg.eigvalsh(difference)).sum()) / 2 / 2


def test_worst_case_error(validate: Validate) -> None:
    # A14. Over-rotation: sin(delta/2), and r = (2/3) sin^2(delta/2) below it by a square; a Pauli
    # channel, dephasing from the kernel: 3 r/2 exactly.
    source = sources.WALLMAN_FLAMMIA
    rotated = unitary_superoperator(target_unitary((1, 0, 0), 0.01))
    decay = -100e-9 / math.log(1 - 3e-4)
    dephased = idle(100e-9, Qubit(CARRIER, t2=decay))
    bound = math.sqrt(6 * infidelity(rotated))
    for quantity, wanted, got in (
        ("1 - F_avg of a rotation by 0.01 rad", 1.666653e-05, infidelity(rotated)),
        ("1 - F_avg of dephasing by 3e-4", 1e-4, infidelity(dephased)),
        (
            "half diamond distance of a rotation by 0.01 rad",
            0.004999979,
            half_trace_distance(rotated),
        ),
        ("upper bound sqrt(6 r) of the same", 0.009999958, bound),
        ("half diamond distance of dephasing, r = 1e-4", 0.00015, half_trace_distance(dephased)),
    ):
        validate(quantity, source, wanted, got, rel=DIGITS, card="A14")
