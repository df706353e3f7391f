"""Resonators and drives that several tests of the readout share."""

import math

from cosim.quantum.resonator import Resonator

TURN = 2 * math.pi
FREQUENCY = 6e9
KAPPA = TURN * 5e6
CHI = TURN * 1e6


def reflecting(kappa: float = KAPPA, internal: float = 0.0, chi: float = CHI) -> Resonator:
    """Give a resonator with one port, all rates in rad/s."""
    return Resonator("reflection", FREQUENCY, kappa, 0.0, internal, chi)


def transmitting(kappa_in: float, kappa_out: float, internal: float = 0.0) -> Resonator:
    """Give a resonator with two ports."""
    return Resonator("transmission", FREQUENCY, kappa_in, kappa_out, internal, CHI)


def hanging(coupling: float, internal: float = 0.0) -> Resonator:
    """Give a resonator beside a feedline, both directions counted."""
    return Resonator("hanger", FREQUENCY, 0.0, coupling, internal, CHI)


def resonance(resonator: Resonator, level: int) -> float:
    """Give the resonance for a state of the qubit in Hz."""
    return resonator.frequency + resonator.pull(level) / TURN
