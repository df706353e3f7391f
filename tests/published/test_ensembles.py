"""Oracle: closed forms of Gaussian averages; the averages are sums over runs of the solvers.

Gauss-Hermite sums of 20 nodes are exact for polynomials of degree 39, so that what is left is the
difference of each run from the closed form.
"""

import math

import numpy as np

from cosim.quantum.channel import apply_channel, unitary_superoperator
from cosim.quantum.evolution import evolve, propagate_unitary
from cosim.quantum.fidelity import average_gate_fidelity, target_unitary
from cosim.quantum.frame import phase_frame
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_rotating_wave
from tests import sources
from tests.published.test_composite_pulses import CARRIER, train
from tests.quantum.drives import constant
from tests.validation import Validate

X = target_unitary((1, 0, 0), math.pi)
NODES, WEIGHTS = np.polynomial.hermite_e.hermegauss(20)
WEIGHTS = WEIGHTS / WEIGHTS.sum()
DIGITS = 1e-6  # Seven digits in the card.


class TestPulses:
    TOPIC = "dynamics without rotating wave"

    def test_quasi_static_amplitude_error(self, validate: Validate) -> None:
        # A07: amplitude off by a Gaussian 1 % rms, through the batch of the kernel.
        drive = train([(math.pi, 0.0)], CARRIER / 2000, per_period=80)
        gates = propagate_unitary(Qubit(CARRIER), drive, 0.0, drive.t[-1], scale=1 + 0.01 * NODES)
        errors = [1 - average_gate_fidelity(unitary_superoperator(u), X) for u in gates]
        quantity = "mean 1 - F_avg of X180 with a random amplitude error of 1 % rms"
        source = sources.ALGEBRA + ", (1/3)(1 - exp(-(theta sigma)^2/2))"
        # The Bloch-Siegert shift turns the axis by 3e-4 rad: (3e-4)^2/6 = 1.4e-8 at the most.
        got = float(WEIGHTS @ errors)
        validate(quantity, source, 0.0001644528, got, abs=1.5e-8, card="A07")


class TestRotatingWave:
    TOPIC = "dynamics in the rotating-wave approximation"

    def test_jitter_of_both_edges(self, validate: Validate) -> None:
        # A06: 5 ps rms on each edge of a half turn of 20 ns change its length by sqrt(2) x 5 ps.
        errors = []
        for length in 20e-9 + math.sqrt(2) * 5e-12 * NODES:
            t = np.linspace(0.0, length, 5)
            rate = np.full(5, 2 * np.pi * 25e6, dtype=complex)
            channel = evolve_rotating_wave(Qubit(CARRIER), rate, t, rtol=1e-13)
            errors.append(1 - average_gate_fidelity(channel, X))
        quantity = "mean 1 - F_avg of X180 of 20 ns with 5 ps rms of jitter on each edge"
        source = sources.ALGEBRA + ", (1/3)(1 - exp(-(Omega s)^2))"
        # Errors of 1e-12 of the solver in fidelities near 1.
        got = float(WEIGHTS @ errors)
        validate(quantity, source, 2.056167e-07, got, abs=1e-12, card="A06")


class TestFree:
    TOPIC = "dynamics without rotating wave"

    def test_quasi_static_detuning(self, validate: Validate) -> None:
        # B05: a detuning off by a Gaussian 20 kHz rms for 5 us. Ten nodes more would change the
        # sum by less than 1e-12.
        plus = np.full((2, 2), 0.5, dtype=complex)
        coherence = 0.0
        for offset, weight in zip(20e3 * NODES, WEIGHTS, strict=True):
            free = evolve(Qubit(20e6 + offset), constant(0.0, 0.0, 5e-6), 0.0, 5e-6)
            common = phase_frame(free, 0.0, 2 * math.pi * offset * 5e-6)
            coherence += weight * 2 * apply_channel(common, plus)[0, 1].real
        quantity = "coherence after 5 us with a random detuning of 20 kHz rms"
        source = sources.HANSON + ", exp(-(t/T2*)^2), T2* = sqrt(2)/sigma"
        validate(quantity, source, 0.8208687, float(coherence), rel=DIGITS, card="B05")
        t2_star = 5e-6 / math.sqrt(-math.log(coherence))
        validate(
            "T2* with a random detuning of 20 kHz rms",
            source,
            1.125395e-05,
            t2_star,
            "s",
            rel=DIGITS,
            card="B05",
        )
