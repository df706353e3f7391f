"""Oracles: area theorem, decay and small-error formulas, through ngspice."""

import math
from pathlib import Path

import pytest

from cosim import archive
from cosim.errors import InputError
from cosim.sensitivity.result import SENSITIVITY_KINDS, SensitivityItem, SensitivityResult
from cosim.sensitivity.study import run_sensitivity
from cosim.testbench import Testbench, make_testbench
from tests.calibration.pulses import bench
from tests.sources import ABAD, ALGEBRA, FILTER_AREA
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "end to end through ngspice"
# A step of `a` through a resistance and a capacitance, cut off by the window's end.
FILTERED = """a filtered step
.param r=50 c=40p a=0.11
v1 in 0 pulse(0 {a} 1n 1p 1p 1u 2u)
r1 in out {r}
c1 out 0 {c}
.tran 10p 21n
.end
"""
AT_BEST = {"netlist": {"parameters": {"level": 0.1, "phase": 0}}}


def by_key(result: SensitivityResult) -> dict[str, SensitivityItem]:
    return {item.key.rpartition(".")[2]: item for item in result.items}


@pytest.fixture(scope="module")
def square_pulse(tmp_path_factory: pytest.TempPathFactory) -> SensitivityResult:
    folder = tmp_path_factory.mktemp("square")
    made = bench(folder, qubit={"t1": "100 us"}, **AT_BEST)
    return run_sensitivity(made)


def test_amplitude_and_coupling_have_the_closed_form(
    square_pulse: SensitivityResult, validate: Validate
) -> None:
    items = by_key(square_pulse)
    # Pi/2 pulse: 1 - F = theta^2 x^2/6 of a relative error x. The part of the drive that turns the
    # other way changes the angle by 1e-3 of itself, and the edges of 5 ps the area by 2.5e-4.
    for name in ("rabi_per_volt", "level"):
        item = items[name]
        quantity = f"cost of 1 % of the {name} of a pi/2 pulse"
        wanted = (math.pi / 2 * 0.01) ** 2 / 6
        found = 0.5 * item.second * (0.01 * item.value) ** 2
        validate(quantity, ALGEBRA, wanted, found, rel=2e-3, card="A03")
        assert 0.5 * (item.cost_low + item.cost_high) == pytest.approx(wanted, rel=2e-3)
        assert item.turn[0] == pytest.approx(math.pi / 2 * 0.01, rel=1e-3)
    assert items["rabi_per_volt"].simulated is False
    assert items["level"].simulated is True


def test_decay_has_the_closed_form(square_pulse: SensitivityResult, validate: Validate) -> None:
    item = by_key(square_pulse)["t1"]
    # 1 - F = T/(6 T1) + T/(3 T2) with T2 = 2 T1: T/(3 T1), of T = 24 ns; the next order is T/T1.
    wanted = -24e-9 / (3 * 100e-6**2)
    validate("derivative of 1 - F by T1", ABAD, wanted, item.first, "1/s", rel=1e-3, card="A09")
    assert item.status == "resolved"


def test_what_does_nothing_is_said_to(square_pulse: SensitivityResult) -> None:
    items = by_key(square_pulse)
    assert {name for name, item in items.items() if item.status == "no effect"} == {
        "idle",
        "fail",
        "temperature",
    }
    assert square_pulse.items[-1].largest == 0.0
    sizes = [item.largest for item in square_pulse.items]
    assert sizes == sorted(sizes, reverse=True)
    # What follows from others, sets the run, or is zero, is not moved.
    assert not items.keys() & {"phi", "stop", "phase", "detuning", "seed", "carrier"}
    assert 0.0 < square_pulse.numerical_floor < 1e-6


def test_a_study_is_archived_and_read_back(square_pulse: SensitivityResult, tmp_path: Path) -> None:
    info = archive.RunInfo("done", square_pulse.started, square_pulse.wall_time)
    archive.append(tmp_path / "a.h5", square_pulse, info=info)
    again = archive.read(tmp_path / "a.h5", SENSITIVITY_KINDS)
    assert isinstance(again, SensitivityResult)
    assert [i.key for i in again.items] == [i.key for i in square_pulse.items]
    assert [i.second for i in again.items] == [i.second for i in square_pulse.items]


def filtered(folder: Path, **study: object) -> Testbench:
    (folder / "deck.cir").write_text(FILTERED, encoding="utf-8")
    tables = {
        "netlist": {"file": "deck.cir", "max_step": "10 ps"},
        "drive": {"i": "v(out)", "termination": "in deck", "carrier": "5 GHz"},
        "qubit": {"kind": "spin", "frequency": "5 GHz", "rabi_per_volt": "125 MHz/V"},
        "gate": {"target": "x90"},
        "accuracy": {"floor": False},
        "sensitivity": study,
    }
    made = make_testbench(tables, folder=folder)
    assert isinstance(made, Testbench)
    return made


def test_an_rc_filtered_pulse_has_the_analytic_derivative(
    tmp_path: Path, validate: Validate
) -> None:
    keys = [f"netlist.parameters.{name}" for name in ("r", "c", "a")]
    result = run_sensitivity(filtered(tmp_path, keys=keys))
    items = by_key(result)
    k, a, t, r, c = 125e6, 0.11, 20e-9, 50.0, 40e-12
    tau, decay = r * c, math.exp(-t / (r * c))
    area = a * (t - tau * (1 - decay))
    # theta = 2 pi k area and 1 - F = (2/3) sin^2((theta - pi/2)/2).
    steep = math.sin(2 * math.pi * k * area - math.pi / 2) / 3
    by_tau = -2 * math.pi * k * a * (1 - decay * (1 + t / tau))
    wanted = {"r": c * by_tau, "c": r * by_tau, "a": 2 * math.pi * k * area / a}
    for name, slope in wanted.items():
        quantity = f"derivative of 1 - F by the {name} of a filtered step"
        # The part of the drive that turns the other way turns the qubit by some 1e-3 of the angle
        # that the infidelity comes from, which here is a hundredth.
        validate(quantity, FILTER_AREA, steep * slope, items[name].first, rel=5e-3)
        assert items[name].first_error < 1e-3 * abs(items[name].first)


def test_a_far_number_is_differenced_at_a_smaller_step(tmp_path: Path) -> None:
    made = bench(
        tmp_path,
        sensitivity={
            "keys": ["qubit.detuning", "qubit.rabi_per_volt"],
            "tolerances": {"qubit.detuning": "20 MHz"},
        },
        accuracy={"floor": False},
        **AT_BEST,
    )
    item = by_key(run_sensitivity(made))["detuning"]
    assert item.tolerance == 20e6
    assert item.step < 2e6
    # At resonance in the frame of the qubit: a turn by Delta T about an axis that the frame turns.
    assert item.second > 0.0
    assert item.cost_low > 0.1


@pytest.mark.full
def test_in_the_free_frame_a_phase_has_no_cost_and_scale_none_where_calibrated(
    tmp_path: Path,
) -> None:
    more = {**AT_BEST, "accuracy": {"floor": False}}
    study = {"metric": "free_frame", "keys": ["netlist.parameters.phase"]}
    study["tolerances"] = {"netlist.parameters.phase": 1}
    (item,) = run_sensitivity(bench(tmp_path, sensitivity=study, **more)).items
    # 1 degree costs 1e-4 as simulated; the free frame takes it, but for the drive's other half.
    assert item.largest < 1e-7
    study = {"metric": "calibrated", "keys": ["netlist.parameters.level"]}
    (item,) = run_sensitivity(bench(tmp_path, sensitivity=study, **more)).items
    assert item.largest < 1e-7


def test_a_number_that_can_go_one_way_only_is_said(tmp_path: Path) -> None:
    study = {"keys": ["qubit.thermal_population"]}
    made = bench(
        tmp_path,
        sensitivity=study,
        qubit={"t1": "1 us", "thermal_population": 0.499},
        accuracy={"floor": False},
        **AT_BEST,
    )
    result = run_sensitivity(made)
    (item,) = result.items
    assert math.isnan(item.cost_high)
    assert item.cost_low < 0.0 or item.cost_low > 0.0
    assert "wanted 0 to 0.5" in item.note
    assert any("could not be moved on one side" in text for text in result.warnings)


def test_a_derivative_is_not_bent_by_a_tolerance_that_goes_one_way_only(tmp_path: Path) -> None:
    # T/(3 T1) again; T1 less 1.5 times itself is impossible, and the secant to the other side has
    # 0.4 of the slope.
    made = bench(
        tmp_path,
        sensitivity={"keys": ["qubit.t1"], "tolerances": {"qubit.t1": "150 us"}},
        qubit={"t1": "100 us"},
        accuracy={"floor": False},
        **AT_BEST,
    )
    (item,) = run_sensitivity(made).items
    assert math.isnan(item.cost_low)
    # The next order is T/T1, and that of the difference the square of its relative step of 1.5 %.
    assert item.first == pytest.approx(-24e-9 / (3 * 100e-6**2), rel=1e-3, abs=0.0)
    assert item.second == pytest.approx(2 * 24e-9 / (3 * 100e-6**3), rel=2e-3, abs=0.0)


@pytest.mark.parametrize(
    ("study", "message"),
    [
        ({"keys": ["qubit.t3"]}, "there is no number 'qubit.t3'.*qubit.t1"),
        ({"keys": ["qubit.detuning"]}, "'qubit.detuning' is zero, of which no part"),
        ({"skip": ["qubti"]}, "no number or table 'qubti'.*qubit"),
        ({"metric": "assignment_error"}, "of a gate wanted as_simulated"),
        ({"tolerances": {"qubit.t1": "1 Hz"}}, "'qubit.t1': wanted a time"),
        ({"tolerances": {"qubit.frequency": "-1 Hz"}}, "wanted more than zero"),
        ({"keys": ["qubit.t1"]}, "'qubit.t1' has no value"),
        ({"tolerance": 0.0}, "wanted more than 0, got 0.0"),
        ({"tolerance": 0.9}, "wanted at most 0.5, got 0.9"),
        ({"tolerence": 0.01}, "unknown key 'tolerence'.*tolerance"),
        ({"skip": ["netlist", "qubit", "drive"]}, "no number is left"),
        (
            {"keys": ["qubit.frequency"], "tolerances": {"qubit.t2": "1 us"}},
            "'qubit.t2' is not one of the numbers",
        ),
    ],
)
def test_a_wrong_table_is_refused(study: dict[str, object], message: str, tmp_path: Path) -> None:
    with pytest.raises(InputError, match=f"(?s){message}"):
        run_sensitivity(bench(tmp_path, sensitivity=study))
