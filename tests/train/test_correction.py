"""Oracles: the filter's own prediction for a linear line, and a cubic whose curve is known.

A linear line is what the design assumes: what the netlist makes of the filtered samples must then
be what the least-squares fit expects.
"""

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from cosim.dsp.predistortion import filter_samples
from cosim.errors import TestbenchError
from cosim.testbench import Testbench
from cosim.train.study import run_train
from tests.train.lines import BENT, LOW_PASS, MIXED, bench
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "end to end through ngspice"

FILTER = {"taps": 24, "rate": "1 GHz", "full_scale": "3 V", "bandwidth": "200 MHz"}


def filtered(
    folder: Path, deck: str = LOW_PASS, tau: str = "6 ns", *, gain: float = 0.7, **more: Any
) -> Testbench:
    """The gain is that of a pulse against what is played."""
    train = {
        "spacing": "20 ns",
        "pattern": "1101000101",
        "shift_per_volt": f"{-50 / gain} MHz/V",
        "predistortion": {**FILTER, **more},
    }
    netlist = {"file": "line.cir", "max_step": "50 ps", "parameters": {"tau": tau}}
    return bench(folder, deck, train, netlist=netlist, gate={"target": "z90"})


def test_a_pole_is_undone(tmp_path: Path, validate: Validate) -> None:
    result = run_train(filtered(tmp_path, rate="2 GHz", taps=48))
    found = result.predistortion
    assert found is not None
    before, after = result.before, found.after
    assert found.predicted < 2.5e-3
    assert before.residual > 0.2
    # The train is ten slots of the pulse that was fitted, with tails that overlap at times.
    assert after.residual == pytest.approx(found.predicted, rel=0.3)
    # A linear line obeys superposition; edges fall on the same time points in every sample.
    assert found.nonlinear_after < 1e-6
    assert before.memory_depth >= 3
    assert after.lag_costs[0] < 1e-4 * before.lag_costs[0]
    assert after.spread < 1e-2 * before.spread
    # Ten slots, calibrated on the first, with a residual of 0.2 % of an angle of 90 degrees.
    assert after.sequence < 1e-5
    # At rest the gain of the line is one, and that of the filter makes up for the fitted gain.
    response = float(found.taps.sum())
    top = after.ideal.iq.real.max()
    validate(
        "gain of a filter at rest against the ideal's plateau",
        "a line with unit gain at rest, elementary",
        top / 0.5,
        response,
        rel=5e-3,  # The plateau of 8 ns has the fit's residual.
    )


def test_the_rate_of_the_converter_is_the_limit(tmp_path: Path) -> None:
    """Behind a slow pole held samples make straight lines, h^2/8 of its bend off a curve."""
    residuals = []
    for rate, taps in (("1 GHz", 24), ("2 GHz", 48)):
        run = filtered(tmp_path, rate=rate, taps=taps)
        found = run_train(replace(run, accuracy=replace(run.accuracy, floor=False))).predistortion
        assert found is not None
        residuals.append(found.after.residual)
    assert 3.0 < residuals[0] / residuals[1] < 6.0  # 4, where the law holds strictly


def test_a_short_filter_is_told_what_it_does_not_reach(tmp_path: Path) -> None:
    result = run_train(filtered(tmp_path, tau="30 ns", taps=4, regularisation=0.0))
    assert any(
        "the taps last 4 ns, and a part of what pulses leave decays with 30 ns" in text
        for text in result.warnings
    )


def test_what_no_linear_filter_reaches_is_told(tmp_path: Path) -> None:
    """v - 0.3 v^3: at 0.5 V the gain is lower by 0.3 (0.25 - 0.125^2) than at a quarter of it."""
    result = run_train(filtered(tmp_path, BENT, "2 ns", gain=1.0))
    found = result.predistortion
    assert found is not None
    bend = 0.3 * (0.5**2 - (0.25 * 0.5) ** 2)
    # Edges, of a tenth of the energy, bend less.
    assert found.nonlinear_before == pytest.approx(bend, rel=0.12)
    assert found.after.residual == pytest.approx(found.nonlinear_after, rel=0.05)
    # Alike in all pulses, it is a smaller amplitude, which the calibration takes up.
    assert found.after.spread < 1e-5


def test_the_full_scale_is_honoured(tmp_path: Path) -> None:
    free = run_train(filtered(tmp_path)).predistortion
    tight = run_train(filtered(tmp_path, full_scale="0.8 V"))
    held = tight.predistortion
    assert free is not None
    assert held is not None
    assert free.peak_after * 0.5 > 0.8
    assert held.full_scale_used == pytest.approx(1.0, abs=1e-6)  # 40 bisections end there
    assert held.full_scale_used <= 1.0 + 1e-12
    assert held.regularisation > 10.0 * held.regularisation_asked
    assert any("would exceed the full scale of 0.8 V" in text for text in tight.warnings)
    assert free.after.residual < held.after.residual < tight.before.residual
    pulse = np.interp(np.arange(60) * 1e-9, [2e-9, 4e-9, 12e-9, 14e-9], [0.0, 0.5, 0.5, 0.0])
    assert np.abs(filter_samples(pulse, held.taps)).max() <= 0.8 + 1e-9


def test_a_given_delay_is_kept(tmp_path: Path) -> None:
    result = run_train(
        replace(
            filtered(tmp_path, delay="5 ns"),
            accuracy=replace(filtered(tmp_path).accuracy, floor=False),
        )
    )
    found = result.predistortion
    assert found is not None
    assert found.delay == pytest.approx(5e-9)
    assert found.after.late == pytest.approx(5e-9 - found.line_delay)
    # The ideal is so much later than what is played.
    edge = np.interp(0.5 * 0.5, np.array([0.0, 0.5]), np.array([2e-9, 4e-9]))
    ideal = found.after.ideal
    rising = ideal.t < 15e-9
    crossing = np.interp(0.5, ideal.iq.real[rising] / ideal.iq.real[rising].max(), ideal.t[rising])
    assert crossing - edge == pytest.approx(5e-9, abs=0.05e-9)  # one time step


def test_a_filter_before_a_mixer(tmp_path: Path) -> None:
    """The same pole before an ideal mixer: all that it leaves to the next slot is undone."""
    train = {
        "spacing": "20 ns",
        "pattern": "11010",
        "predistortion": {**FILTER, "bandwidth": "150 MHz"},
    }
    result = run_train(
        bench(
            tmp_path,
            MIXED,
            train,
            drive={"probe": "v(out)", "termination": "in deck", "carrier": "1 GHz"},
            netlist={"file": "line.cir", "steps_per_period": 80},
            qubit={"kind": "spin", "frequency": "1 GHz", "rabi_per_volt": "57 MHz/V"},
            gate={"target": "x90"},
        )
    )
    found = result.predistortion
    assert found is not None
    assert result.kind == "drive"
    assert result.before.residual > 0.1
    assert found.after.residual < 5e-3
    # The demodulator looks ahead by 8.6 periods, and what it would see of the first pulse before
    # t = 0 is not in the record: 1e-4 of the envelope.
    assert found.nonlinear_after < 1e-3
    assert found.after.spread < 2e-3 * result.before.spread
    assert found.after.sequence < 1e-2 * result.before.sequence
    # The ideal is earlier than what the line does by itself, and so are the slots.
    assert found.after.late < 0.0


def test_no_taps_reach_any_delay(tmp_path: Path) -> None:
    with pytest.raises(TestbenchError, match=r"key 'delay': wanted 0 to .* ns, what the line and"):
        run_train(filtered(tmp_path, delay="70 ns"))
