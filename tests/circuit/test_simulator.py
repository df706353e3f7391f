"""Oracle: closed forms of the RC step and of the trapezoidal rule; runs against one another."""

import math
import pickle
import threading

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from cosim.circuit.analysis import Tolerances, TransientRequest
from cosim.circuit.simulator import find_simulator, simulator_version
from cosim.errors import InputError
from tests import sources
from tests.circuit.conftest import OPTIONS, Runner
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"

RC = ["v1 in 0 pulse(0 1 0 1f 1f 1 2)", "r1 in out 50", "c1 out 0 1p"]


def test_rc_step_follows_the_closed_form(run_lines: Runner, validate: Validate) -> None:
    # v(t) = 1 - exp(-t/RC): a standard result of circuit texts (common practice).
    tau, step = 50e-12, 0.5e-12
    result = run_lines(RC, {"v(out)": "out"}, 10 * tau, step)
    exact = 1.0 - np.exp(-result.time / tau)
    # The trapezoidal rule errs by at most (h/tau)^2/12 * max(x exp(-x)) = 3.1e-6 here; the source's
    # edge of 1 fs adds 1e-5 in its first half, so 2e-5 covers both.
    assert np.abs(result.vectors["v(out)"] - exact).max() < 2e-5
    # 10-90 % rise time tau ln 9.
    spline = CubicSpline(result.time, result.vectors["v(out)"])
    low, high = (float(spline.solve(level, extrapolate=False)[0]) for level in (0.1, 0.9))
    # A shift of 2e-5 in voltage moves a crossing by 2e-5 * tau/0.1 at the flat end.
    quantity = "10 to 90 % rise time of 50 ohm and 1 pF, lines sent as they stand"
    wanted = tau * math.log(9)
    validate(quantity, sources.CIRCUITS, wanted, high - low, "s", abs=4e-4 * tau, card="F01")


@pytest.mark.parametrize("step", [2e-12, 4e-12, 8e-12])
def test_lc_frequency_follows_the_trapezoidal_rule(
    run_lines: Runner, validate: Validate, step: float
) -> None:
    # tan(w_num h/2) = w h/2 and no damping: L. W. Nagel, SPICE2, UCB/ERL M520 (1975), and the
    # bilinear transform of signal-processing texts (recalled from memory).
    inductance, f0 = 1e-9, 5e9
    capacitance = 1.0 / ((2 * math.pi * f0) ** 2 * inductance)
    body = [f"l1 out 0 {inductance!r}", f"c1 out 0 {capacitance!r} ic=1"]
    tran = f".tran {step!r} 40n 0 {step!r} uic"
    saves = {"v(out)": "out", "i(l1)": "l1#branch"}
    result = run_lines(body, saves, 40e-9, step, tran=tran)
    # The first steps after t = 0 and the last one are shorter; between them the grid is fixed.
    inside = (result.time > 1e-9) & (result.time < 39.9e-9)
    time, voltage = result.time[inside], result.vectors["v(out)"][inside]
    # Times of 40 ns are rounded to 7e-24 s, which is 3e-12 of a step.
    assert np.diff(time) == pytest.approx(step, rel=1e-10, abs=0)
    # On a uniform grid a pure oscillation obeys v[n+1] + v[n-1] = 2 cos(w h) v[n] exactly.
    middle = voltage[1:-1]
    cosine = (voltage[2:] + voltage[:-2]) @ middle / (2 * middle @ middle)
    measured = math.acos(cosine) / step
    expected = 2 / step * math.atan(2 * math.pi * f0 * step / 2)
    # Newton's reltol of 1e-4 is the only other error; a linear circuit needs no second try.
    quantity = f"angular frequency of a free LC of 5 GHz at steps of {step * 1e12:.0f} ps"
    validate(quantity, sources.NAGEL, expected, measured, "rad/s", rel=1e-6, card="F02")
    # The rule conserves C v^2 + L i^2; what is left is the error of abstol and reltol per step.
    energy = capacitance * voltage**2 + inductance * result.vectors["i(l1)"][inside] ** 2
    assert energy == pytest.approx(energy[0], rel=1e-6, abs=0)


def test_the_result_carries_what_was_sent_and_measured(run_lines: Runner) -> None:
    result = run_lines(RC, {"V(out)": "out", "i(v1)": "v1#branch"}, 1e-9, 1e-12)
    assert set(result.vectors) == {"v(out)", "i(v1)"}
    assert result.deck[0] == "* title"
    assert result.deck[2:5] == tuple(RC)
    assert result.simulator_version == simulator_version()
    assert result.simulator_version.startswith("ngspice-")
    assert result.wall_time > 0
    assert result.overhead_time > 0
    assert any("Doing analysis at TEMP" in line for line in result.log)
    # The current through the source is that through the resistor, by Kirchhoff's law; 1e-12 A is
    # ngspice's own abstol.
    current = (result.vectors["v(out)"] - (result.time > 0)) / 50
    late = result.time > 2e-15
    assert result.vectors["i(v1)"][late] == pytest.approx(current[late], abs=1e-7)


def test_a_node_named_by_a_number_is_found(run_lines: Runner) -> None:
    result = run_lines(["v1 1 0 2", "r1 1 3 1k", "r2 3 0 1k"], {"v(3)": "3"}, 1e-9, 1e-11)
    assert result.vectors["v(3)"] == pytest.approx(1.0, abs=1e-9)  # a divider, to reltol of 1 V


def test_progress_rises_to_near_the_stop_time(run_lines: Runner) -> None:
    seen: list[float] = []
    run_lines(RC, {"v(out)": "out"}, 300e-9, 1e-12, progress=seen.append)
    assert seen
    assert seen == sorted(seen)
    assert 0 < seen[0] <= seen[-1] <= 300e-9


def test_data_files_reach_the_run(run_lines: Runner) -> None:
    body = [
        "a1 %vd([out 0]) fs",
        '.model fs filesource(file="{scratch}/ramp.txt" amploffset=[0] amplscale=[1] timeoffset=0 '
        "timescale=1 timerelative=false amplstep=false)",
        "r1 out 0 50",
    ]
    data = {"ramp.txt": b"0 0\n1e-9 1\n"}
    options = OPTIONS + " xtrtol=1e6"
    result = run_lines(body, {"v(out)": "out"}, 1e-9, 1e-11, data=data, options=options)
    # filesource interpolates linearly, so v = t/1 ns to rounding.
    assert result.vectors["v(out)"] == pytest.approx(result.time / 1e-9, abs=1e-9)


def test_seeds_repeat_and_differ(run_lines: Runner) -> None:
    body = [".param r=agauss(1k,100,1)", "v1 in 0 1", "r1 in out {r}", "r2 out 0 1k"]

    def value(seed: int) -> float:
        commands = [f"setseed {seed}"]
        result = run_lines(body, {"v(out)": "out"}, 1e-9, 1e-11, commands=commands)
        return float(result.vectors["v(out)"][-1])

    assert value(7) == value(7)
    assert value(7) != value(8)


def test_options_do_not_leak_into_the_next_run(run_lines: Runner) -> None:
    clean = run_lines(RC, {"v(out)": "out"}, 1e-9, 1e-11)
    leaky = OPTIONS + " interp cshunt=1p"
    other = run_lines(RC, {"v(out)": "out"}, 1e-9, 1e-11, options=leaky)
    again = run_lines(RC, {"v(out)": "out"}, 1e-9, 1e-11)
    assert not np.array_equal(other.vectors["v(out)"], clean.vectors["v(out)"])
    assert np.array_equal(again.time, clean.time)
    assert np.array_equal(again.vectors["v(out)"], clean.vectors["v(out)"])


def test_threads_share_the_host_in_turn(run_lines: Runner) -> None:
    values: dict[int, float] = {}

    def divide(number: int) -> None:
        body = [f"v1 in 0 {number}", "r1 in out 1k", "r2 out 0 1k"]
        result = run_lines(body, {"v(out)": "out"}, 1e-9, 1e-11)
        values[number] = float(result.vectors["v(out)"][-1])

    threads = [threading.Thread(target=divide, args=(number,)) for number in range(1, 9)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    # A divider by two, to the relative tolerance of Newton.
    assert values == pytest.approx({number: number / 2 for number in range(1, 9)}, rel=1e-6)


def test_a_result_travels_through_pickle(run_lines: Runner) -> None:
    result = run_lines(RC, {"v(out)": "out"}, 1e-9, 1e-11)
    copy = pickle.loads(pickle.dumps(result))
    assert np.array_equal(copy.vectors["v(out)"], result.vectors["v(out)"])


def test_the_simulator_is_found() -> None:
    assert "ngspice" in find_simulator()


def test_tighter_tolerances_are_tighter() -> None:
    default = Tolerances()
    tighter = default.tighter()
    assert tighter.reltol == pytest.approx(default.reltol / 10, rel=1e-12)  # one rounding
    assert tighter.vntol < default.vntol
    assert tighter.abstol <= default.abstol


@pytest.mark.parametrize(
    ("stop", "step", "start", "initial", "temperature", "seed"),
    [
        (0.0, 1e-12, 0.0, "op", None, 1),
        (1e-9, -1e-12, 0.0, "op", None, 1),
        (1e-9, 2e-9, 0.0, "op", None, 1),
        (1e-9, 1e-12, 1e-9, "op", None, 1),
        (1e-9, 1e-12, -1e-10, "op", None, 1),
        (1e-9, 1e-12, 0.0, "ramp", None, 1),
        (1e-9, 1e-12, 0.0, "op", -4.0, 1),
        (1e-9, 1e-12, 0.0, "op", None, 0),
        (math.inf, 1e-12, 0.0, "op", None, 1),
    ],
)
def test_impossible_requests_are_refused(
    stop: float, step: float, start: float, initial: str, temperature: float | None, seed: int
) -> None:
    with pytest.raises(InputError, match="must"):
        TransientRequest(
            stop=stop, step=step, start=start, initial=initial, temperature=temperature, seed=seed
        )


def test_impossible_tolerances_are_refused() -> None:
    with pytest.raises(InputError, match="reltol must be below 1"):
        Tolerances(reltol=1.0)
    with pytest.raises(InputError, match="vntol"):
        Tolerances(vntol=math.nan)
