"""Oracles: a run at an eighth of the step, and the trapezoidal rule's frequency law."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import cosim
from cosim.capture import capture_probe, make_plan
from cosim.dsp.carrier import estimate_carrier
from tests.conftest import BenchMaker

EXAMPLES = Path(__file__).parents[2] / "examples"


@pytest.mark.ngspice
@pytest.mark.full
def test_the_extrapolated_frequency_is_that_of_a_much_smaller_step() -> None:
    """Within 20 kHz of a run at an eighth of the step, where the law's own shift is 13 kHz."""
    bench = cosim.load_testbench(EXAMPLES / "x90_oscillator.toml")
    assert bench.netlist is not None
    # A shorter burst has the same frequency and takes a third of the time.
    short = replace(bench.netlist, stop=34e-9, parameters={"t_stop": 29e-9})
    gate = replace(bench.gate, window=(5e-9, 33e-9))
    bench = replace(bench, netlist=short, gate=gate)
    result = cosim.run(bench)
    fine = make_plan(replace(bench, netlist=replace(short, max_step=0.125e-12)))
    found = estimate_carrier(capture_probe(fine).waveform).frequency
    assert result.carrier_frequency == pytest.approx(found, abs=20e3)
    assert result.qubit_frequency == result.carrier_frequency
    # The run at the full step is off by 1.3e-4, 0.8 MHz: without extrapolation this would fail.
    alone = estimate_carrier(result.waveform).frequency
    assert abs(alone - found) > 0.5e6
    # The qubit follows the carrier in both runs, so that the shift is no numerical error.
    assert result.numerical_floor < 1e-6


@pytest.mark.ngspice
@pytest.mark.full
def test_the_carrier_of_the_modulators_own_output() -> None:
    """Oracle: the deck's LO of 6.2 GHz; the estimate is promised within 1 kHz."""
    bench = cosim.load_testbench(EXAMPLES / "x90_spin.toml")
    found = estimate_carrier(capture_probe(make_plan(bench)).waveform)
    # The circuit's own phase settles by a few millidegrees during the burst: 26 Hz of the 1 kHz.
    assert found.frequency == pytest.approx(6.2e9, abs=1e3)


LC = """an LC tank that rings down a little, driven by nothing
l1 tank 0 1n ic=0
c1 tank 0 1.0132118364233778p ic=1
r1 tank 0 20k
.tran 1p 40n 0 1p uic
.end
"""


@pytest.mark.ngspice
@pytest.mark.parametrize("step", ["4 ps", pytest.param("2 ps", marks=pytest.mark.full)])
def test_an_lc_tank_obeys_the_frequency_law(make_bench: BenchMaker, step: str) -> None:
    """tan(omega h/2) = omega_0 h/2, and Richardson's extrapolation of two steps.

    Source: bilinear transform, e.g. A. V. Oppenheim and R. W. Schafer, Discrete-Time Signal
    Processing (1989), section 7.1 (recalled from memory).
    """
    tables = {
        "netlist": {"max_step": step},
        "drive": {"probe": "v(tank)", "carrier": "estimate"},
        "qubit": {"frequency": "carrier", "rabi_per_volt": "6 MHz/V"},
        "gate": {"window": ["1 ns", "39 ns"]},
    }
    h = float(step.split()[0]) * 1e-12
    nominal = 5e9
    law = np.arctan(np.pi * nominal * h) / (np.pi * h)
    single = cosim.run(make_bench(LC, tables))
    # 1 kHz is what the estimate promises on a clean burst; here the tank decays by 37 %.
    assert single.carrier_frequency == pytest.approx(law, abs=5e3)
    both = cosim.run(make_bench(LC, {**tables, "accuracy": {"floor": True}}))
    # The next term of the law: (omega h)^4/120 of the frequency at the full step, over four.
    left = nominal * (2 * np.pi * nominal * h) ** 4 / 120 / 4
    assert both.carrier_frequency == pytest.approx(nominal, abs=left + 5e3)
