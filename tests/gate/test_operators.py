"""Oracles: the compiled kernel on the same physics, and QuTiP's own operators."""

import math
from dataclasses import replace

import numpy as np
import pytest
import qutip

import cosim
from cosim.errors import InputError
from cosim.quantum.operators import operator_system
from cosim.schema import QubitTable
from tests.conftest import BenchMaker, Tables

DECK = """a gated carrier
.func window(t) {min(max((t-2n)/3n,0),1)*min(max((22n-t)/3n,0),1)}
b1 out 0 v={0.1*cos(2*pi*1g*time)*window(time)}
.tran 1n 24n
.end
"""
TRANSMON = {
    "kind": "transmon",
    "levels": 3,
    "frequency": "1 GHz",
    "anharmonicity": "-150 MHz",
    "rabi_per_volt": "294 MHz/V",
    "t1": "5 us",
    "t2": "4 us",
}
TABLES: Tables = {
    "drive": {"carrier": "1 GHz"},
    "qubit": TRANSMON,
    "gate": {"target": "x"},
}


def transmon() -> tuple[qutip.Qobj, qutip.Qobj, list[qutip.Qobj]]:
    a, n = qutip.destroy(3), qutip.num(3)
    h = 2 * math.pi * (1e9 * n - 150e6 * n * (n - 1) / 2)
    pure = 1 / 4e-6 - 1 / 10e-6
    return h, a + a.dag(), [math.sqrt(1 / 5e-6) * a, math.sqrt(2 * pure) * n]


@pytest.mark.full
@pytest.mark.ngspice
def test_a_transmon_given_by_operators_is_the_transmon(make_bench: BenchMaker) -> None:
    known = cosim.run(make_bench(DECK, TABLES))
    bench = make_bench(DECK, TABLES)
    bench = replace(bench, qubit=QubitTable(kind="operators", rabi_per_volt=294e6))
    result = cosim.run(bench, system=cosim.operator_system(*transmon()))
    # Two solvers with tolerances of 1e-10 over 24 carrier periods.
    for name in ("as_simulated", "free_frame", "calibrated"):
        one, two = getattr(known, name), getattr(result, name)
        assert two.average_gate_fidelity == pytest.approx(one.average_gate_fidelity, abs=1e-8)
    assert result.leakage == pytest.approx(known.leakage, abs=1e-8)
    assert result.seepage == pytest.approx(known.seepage, abs=1e-8)
    assert result.rotation.axis == pytest.approx(known.rotation.axis, abs=1e-7)
    assert result.qubit_frequency == pytest.approx(1e9)
    assert math.isnan(result.rotating_wave_error)
    assert cosim.run(bench, system=operator_system(*transmon())).leakage == result.leakage


@pytest.mark.ngspice
def test_the_reference_solver_agrees(make_bench: BenchMaker) -> None:
    tables = {**TABLES, "accuracy": {"floor": False, "reference": True}}
    result = cosim.run(make_bench(DECK, tables))
    # Both solvers' errors in the channel are below 1e-9; the distance is their square.
    assert 0 <= result.reference_error < 1e-15


@pytest.mark.ngspice
def test_operators_and_tables_must_fit(make_bench: BenchMaker) -> None:
    bench = make_bench(DECK, TABLES)
    with pytest.raises(InputError, match="operators"):
        cosim.run(bench, system=operator_system(*transmon()))
    with pytest.raises(InputError, match="operators"):
        cosim.run(replace(bench, qubit=QubitTable(kind="operators", rabi_per_volt=294e6)))


def test_the_basis_is_that_of_the_two_lowest_states() -> None:
    """A singlet-triplet-like system, given in a basis in which the drive is not along x."""
    theta = 0.7
    sx, sy, sz = qutip.sigmax(), qutip.sigmay(), qutip.sigmaz()
    h = 2 * math.pi * 0.5e9 * (math.cos(theta) * sz + math.sin(theta) * sy)
    system = operator_system(h, sx)
    assert system.frequency == pytest.approx(1e9)
    assert system.energies[0] == 0
    assert system.drive[0, 1].real == pytest.approx(1)
    assert system.drive[0, 1].imag == pytest.approx(0, abs=1e-15)
    assert np.abs(np.linalg.eigvalsh(system.drive)) == pytest.approx([1, 1])


@pytest.mark.parametrize(
    ("hamiltonian", "drive", "collapse", "words"),
    [
        (np.diag([0, 1, 2]), np.eye(2), [], r"drive: wanted .*\(3, 3\), got \(2, 2\)"),
        (np.diag([0, 1]), np.array([[0, 1], [0, 0]]), [], "drive: .* not Hermitian"),
        (np.array([[0, 1], [2, 0]]), np.eye(2), [], "hamiltonian: .* not Hermitian"),
        (np.diag([1.0, 1.0]), qutip.sigmax(), [], "degenerate"),
        (np.diag([0.0, 1.0]), qutip.sigmaz(), [], "does not connect"),
        (np.diag([0.0, np.nan]), qutip.sigmax(), [], "not finite"),
        (np.zeros(3), qutip.sigmax(), [], "square matrix"),
        (np.diag([0.0, 1.0]), qutip.sigmax(), [np.eye(3)], r"collapse\[0\]"),
    ],
)
def test_operators_that_make_no_system(
    hamiltonian: object, drive: object, collapse: list[object], words: str
) -> None:
    with pytest.raises(InputError, match=words):
        operator_system(hamiltonian, drive, collapse)
