"""Oracles: closed forms of a charge sensor whose event is random, through ngspice."""

from math import exp, sqrt
from pathlib import Path

import pytest
from scipy.constants import Boltzmann

from cosim.readout import run_readout
from cosim.readout_result import ReadoutResult
from cosim.testbench import ReadoutBench, make_testbench
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "readout"

# An ideal transimpedance of 1 Mohm: nothing but the sensor makes noise.
DECK = """conductance into a virtual ground
.param g=1u g_late=g t_event=1
v1 a 0 0.5m
rs a b {1/g}
blate a b i={(g_late-g)*(time > t_event ? 1 : 0)*v(a,b)}
vb b 0 0
h1 out 0 vb 1meg
rout out 0 1k noisy=0
.tran 2n 2u 0 2n
.end
"""
LENGTH, KELVIN, BIAS, OHM = 1.8e-6, 4.0, 0.5e-3, 1e6


def run(folder: Path, value: float, seeds: int = 16, **sensor: object) -> ReadoutResult:
    (folder / "deck.cir").write_text(DECK, encoding="utf-8")
    tables = {
        "netlist": {"file": "deck.cir"},
        "sensor": {
            "parameter": "g",
            "late_parameter": "g_late",
            "event_parameter": "t_event",
            "value_0": 1e-6,
            "value_1": value,
            "start": "0.2 us",
            **sensor,
        },
        "readout": {
            "probe": "v(out)",
            "window": ["0.2 us", "2 us"],
            "weights": "boxcar",
            "decay_times": 8,
        },
        "noise": [
            {
                "acts_on": "probe",
                "from": "netlist",
                "resistor_temperature": f"{KELVIN} K",
                "seeds": seeds,
            }
        ],
        "accuracy": {"floor": False},
    }
    bench = make_testbench(tables, folder=folder)
    assert isinstance(bench, ReadoutBench)
    return run_readout(bench)


def test_johnson_noise_of_the_sensor_limits_it(tmp_path: Path, validate: Validate) -> None:
    """The mean over T of a current with the density 4 k T g has the variance 2 k T g/T."""
    value = 1.05e-6
    result = run(tmp_path, value)
    signal = (value - 1e-6) * BIAS * OHM
    # The noise is the mean of that of both states, each with its own conductance.
    sigma = OHM * sqrt(2 * Boltzmann * KELVIN * 0.5 * (1e-6 + value) / LENGTH)
    # SNR goes with the root of the density, known within 1/sqrt(free) from the noisy runs.
    allowed = 4.0 * result.noise.relative_error / 2.0
    validate(
        "SNR of a conductance against its own Johnson noise, through ngspice",
        sources.JOHNSON_NYQUIST,
        signal / sigma,
        abs(result.snr),
        rel=allowed,
    )
    assert result.noise_method == "injection"
    assert result.noise.left_out == ()


@pytest.mark.parametrize("tunnel", [100e-9, 400e-9])
def test_an_event_that_comes_too_late_is_missed(
    tmp_path: Path, validate: Validate, tunnel: float
) -> None:
    """A signal far above the noise is missed when the event comes in the second half: e^(-T/2t)."""
    result = run(tmp_path, 3e-6, seeds=2, tunnel_time=f"{tunnel} s")
    missed = exp(-0.5 * LENGTH / tunnel)
    # The noise smears the threshold: 1e-3 of the signal, of the time 1e-3 x 1.8 us/0.1 us; two
    # steps of 2 ns before the element follows.
    validate(
        f"events of mean time {1e9 * tunnel:g} ns that a sensor misses, through ngspice",
        "exponential waiting time, computed from the formula",
        missed,
        float(result.assignment_matrix[0, 1]),
        rel=0.05,
    )
    assert result.errors.decay == pytest.approx(result.assignment_error, rel=1e-3)
