"""Readouts of linear and bent chains, with a resonator of the published examples."""

from pathlib import Path
from typing import Any

from scipy.constants import Boltzmann, Planck

from cosim.testbench import ReadoutBench, make_testbench

FREQUENCY = 6e9
# The source's impedance is matched; the output stands behind 50 ohm, so that a gain of 20 is 10.
LINEAR = """linear amplifier of gain 10
vin emf 0 dc 0
r0 emf in 50
rin in 0 50
e1 amp 0 in 0 20
r1 amp out 50 noisy=0
rl out 0 50 noisy=0
.end
"""
PAIR = """linear amplifiers of a pair, of gain 10
vi emf_i 0 dc 0
ri emf_i i_in 50
rli i_in 0 50
ei i_out 0 i_in 0 10
vq emf_q 0 dc 0
rq emf_q q_in 50
rlq q_in 0 50
eq q_out 0 q_in 0 10
.end
"""
Tables = dict[str, dict[str, Any]]


def kelvin(quanta: float) -> float:
    """Noise temperature in K of so many quanta at the resonator's frequency."""
    return quanta * Planck * FREQUENCY / Boltzmann


def tables(quanta: float = 0.75) -> Tables:
    """kappa/2pi = 5 MHz, chi/2pi = 1 MHz, 5 photons, 400 ns from the start of the pulse.

    An intermediate frequency instead of 6 GHz saves time points; the field does not depend on it.
    """
    return {
        "netlist": {"file": "deck.cir", "stop": "470 ns", "steps_per_period": 80},
        "resonator": {
            "geometry": "reflection",
            "frequency": f"{FREQUENCY} Hz",
            "kappa_in": "5 MHz",
            "chi": "1 MHz",
            "photons": 5.0,
            "start": "20 ns",
            "length": "400 ns",
        },
        "readout": {
            "source": "vin",
            "signal": "if",
            "intermediate_frequency": "200 MHz",
            "probe": "v(out)",
            "output_frequency": "200 MHz",
            # So much that what the netlist is without does not matter.
            "gain": "40 dB",
            "noise_temperature": f"{kelvin(quanta)} K",
            "window": ["20 ns", "420 ns"],
            "weights": "boxcar",
            "shots": 1_000_000,
            "records": 20_000,
        },
        "accuracy": {"floor": False},
    }


def bench(folder: Path, deck: str = LINEAR, quanta: float = 0.75, **more: Any) -> ReadoutBench:
    """The testbench; keys in the tables of `more` are added or replaced, None removes them."""
    (folder / "deck.cir").write_text(deck, encoding="utf-8")
    base = tables(quanta)
    noise = more.pop("noise", [])
    for name, table in more.items():
        merged = {**base.get(name, {}), **table}
        base[name] = {key: value for key, value in merged.items() if value is not None}
    made = make_testbench({**base, "noise": noise}, folder=folder)
    assert isinstance(made, ReadoutBench)
    return made
