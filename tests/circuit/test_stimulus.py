"""Oracle: numpy.interp, SPICE's own sources, Ohm's law and scipy.signal.lsim."""

from pathlib import Path

import numpy as np
import pytest
from scipy.signal import lsim

from cosim.circuit.analysis import Tolerances, TransientRequest, TransientResult
from cosim.circuit.deck import Deck, DeckFile
from cosim.circuit.netlist import deck_from_text, node_names, with_instances
from cosim.circuit.simulator import simulate
from cosim.circuit.stimulus import sampling_error, with_stimuli, with_stimulus
from cosim.errors import DeckError, InputError, UnknownNameError
from cosim.waveform import FloatArray, Waveform
from tests.circuit.conftest import Runner

pytestmark = pytest.mark.ngspice

ROUNDING = 1e-12  # of values near 1: a few roundings of the interpolation and of Newton's solution


def deck(*lines: str) -> Deck:
    return deck_from_text("\n".join(["title", *lines, ".end"]))


def wave(*points: tuple[float, float], unit: str = "V") -> Waveform:
    t, v = np.array(points).T
    return Waveform(t, v, unit)


def run(deck: Deck, *saves: str, stop: float = 4e-9, step: float = 1e-11) -> TransientResult:
    return simulate(deck, TransientRequest(stop=stop, step=step, saves=saves))


def held(result: TransientResult, waveform: Waveform) -> FloatArray:
    """The waveform at the time points of a run; numpy.interp holds outside of the samples."""
    return np.asarray(np.interp(result.time, waveform.t, waveform.v))


DIVIDER = deck(
    ".param top=2", "vin in 0 dc {top} ac 1 90 sin(0 1 1g)", "r1 in out 1k", "r2 out 0 1k"
)


@pytest.mark.parametrize(
    "waveform",
    [
        wave((0.0, 0.5), (1e-9, 1.0), (2e-9, -0.2)),
        wave((1e-9, 0.7), (2e-9, 0.2)),  # starts late
        wave((-1e-9, 0.0), (1e-9, 1.0), (9e-9, -7.0)),  # starts before the run and ends after it
        wave((-3e-9, 0.4), (-1e-9, 0.6)),  # over before the run
        wave((5e-9, 0.25), (6e-9, 0.6)),  # begins after the run
        wave((0.0, 0.0), (1.1e-9, 0.0), (1.1e-9 + 1e-15, 1.0), (2.2e-9, 1.0)),  # a step
    ],
)
def test_a_source_follows_the_samples(waveform: Waveform) -> None:
    result = run(with_stimulus(DIVIDER, "VIN", waveform), "v(in)", "v(out)", "i(vin)")
    wanted = held(result, waveform)
    # The first point is the operating point: the value at t = 0, not the deck's DC value.
    assert result.vectors["v(in)"] == pytest.approx(wanted, abs=ROUNDING)
    assert result.vectors["v(out)"] == pytest.approx(wanted / 2.0, abs=ROUNDING)
    # The current of a source flows into its first node (ngspice manual), so out of the resistors.
    assert result.vectors["i(vin)"] == pytest.approx(-wanted / 2e3, abs=ROUNDING / 1e3)
    assert result.warnings == ()


def test_initial_conditions_start_at_the_first_value() -> None:
    loaded = with_stimulus(DIVIDER, "vin", wave((0.0, 0.5), (1e-9, 1.0)))
    request = TransientRequest(stop=1e-9, step=1e-11, initial="uic", saves=("v(in)",))
    result = simulate(loaded, request)
    assert result.vectors["v(in)"] == pytest.approx(0.5 + result.time / 2e-9, abs=ROUNDING)


def test_a_current_source_keeps_its_direction_and_its_probe() -> None:
    lines = ("i1 a b {}", "r1 a 0 1k", "r2 b 0 2k")
    as_written = run(deck(*(line.format("dc 2m") for line in lines)), "v(a)", "v(b)", "i(i1)")
    ramp = wave((0.0, 2e-3), (4e-9, 4e-3), unit="A")
    result = run(
        with_stimulus(deck(*(line.format("dc 7") for line in lines)), "i1", ramp),
        "v(a)",
        "v(b)",
        "i(i1)",
    )
    for name, values in as_written.vectors.items():
        # The same at the start, twice as much at the end, as the ramp.
        assert result.vectors[name][[0, -1]] == pytest.approx(
            values[[0, -1]] * [1.0, 2.0], rel=1e-9
        )


def test_elements_that_sense_the_current_follow() -> None:
    loaded = deck(
        "vin in 0 1",
        "rin in 0 1k",
        "f1 0 f vin 2",
        "rf f 0 1k",
        "h1 h 0 vin 1k",
        "b1 b 0 v=i(vin)*1k",
    )
    loaded = with_stimulus(loaded, "vin", wave((0.0, 1.0), (4e-9, 3.0)))
    result = run(loaded, "i(vin)", "v(f)", "v(h)", "v(b)")
    current = result.vectors["i(vin)"]
    assert current[[0, -1]] == pytest.approx([-1e-3, -3e-3], rel=1e-9)  # Ohm's law
    assert result.vectors["v(f)"] == pytest.approx(2e3 * current, rel=1e-9)
    assert result.vectors["v(h)"] == pytest.approx(1e3 * current, rel=1e-9)
    assert result.vectors["v(b)"] == pytest.approx(1e3 * current, rel=1e-9)


NESTED = deck(
    ".subckt inner a b",
    "vs a m dc 1",
    "is b 0 dc 1m",
    "rs m b 1k",
    ".ends",
    ".subckt outer a",
    "x1 a n inner",
    "x2 a n2 inner",
    "rn n 0 1k",
    "rn2 n2 0 1k",
    ".ends",
    "x1 p outer",
    "x2 q outer",
    "rp p 0 1k",
    "rq q 0 1k",
)


def test_only_the_one_instance_changes() -> None:
    saves = [f"v(x{i}.{node})" for i in (1, 2) for node in ("n", "n2")]
    saves += [f"i(x{i}.x{j}.{source})" for i in (1, 2) for j in (1, 2) for source in ("vs", "is")]
    loaded = with_stimuli(
        NESTED,
        {
            "X2.X1.VS": wave((0.0, 3.0), (1e-9, 3.0)),
            "i.x2.x1.is": wave((0.0, 5e-3), (1e-9, 5e-3), unit="A"),
        },
    )
    by_hand = with_instances(NESTED, {"x2.x1.vs": {"dc": 3.0}, "x2.x1.is": {"dc": 5e-3}})
    result, wanted = run(loaded, *saves), run(by_hand, *saves)
    for name in saves:
        # Both are the same constant sources; the tolerances of Newton.
        assert result.vectors[name] == pytest.approx(wanted.vectors[name][-1], rel=1e-6)
    assert result.vectors["i(x2.x1.is)"][-1] == pytest.approx(5e-3, rel=1e-9)
    assert result.vectors["i(x1.x1.is)"][-1] == pytest.approx(1e-3, rel=1e-9)


def test_unusual_node_names() -> None:
    loaded = deck(
        "vin bus[2] net<3> 1",
        "i1 vdd! out+ 1m",
        *(f"r{k} {node} 0 1k" for k, node in enumerate(("bus[2]", "net<3>", "vdd!", "out+"))),
    )
    loaded = with_stimuli(
        loaded,
        {"vin": wave((0.0, 0.5), (1e-9, 1.0)), "i1": wave((0.0, 1e-3), (1e-9, 2e-3), unit="A")},
    )
    result = run(loaded, "v(bus[2])", "v(net<3>)", "v(vdd!)", "v(out+)")
    assert [values[-1] for values in result.vectors.values()] == pytest.approx(
        [0.5, -0.5, -2.0, 2.0], rel=1e-9
    )


def test_both_branches_of_a_condition_are_replaced() -> None:
    for choice in (0, 1):
        loaded = deck(
            f".param choice={choice}",
            ".if (choice==1)", "vin in 0 1", ".else", "vin 0 in 1", ".endif", "r1 in 0 1k",
        )  # fmt: skip
        result = run(with_stimulus(loaded, "vin", wave((0.0, 0.5), (1e-9, 0.5))), "v(in)")
        assert result.vectors["v(in)"] == pytest.approx(0.5 if choice else -0.5, abs=ROUNDING)


@pytest.mark.full
def test_many_samples_at_any_step(run_lines: Runner) -> None:
    rng = np.random.default_rng(7)
    t: FloatArray = np.cumsum(rng.uniform(0.1, 1.9, 200_000)) * 1e-13
    waveform = Waveform(t, rng.standard_normal(t.size))
    loaded = with_stimulus(DIVIDER, "vin", waveform)
    result = run(loaded, "v(in)", stop=20e-9, step=1e-12)
    assert result.time.size < 20_100  # The samples are no breakpoints: the grid stays as it was.
    assert result.vectors["v(in)"] == pytest.approx(held(result, waveform), abs=ROUNDING)
    # With error control on, steps are rejected and the file is read back and forth.
    (data,) = loaded.data_files
    result = run_lines(
        [*(line.text for line in loaded.lines if line.text[0] != "r"), "r1 in out 50",
         "d1 out x dd", ".model dd d(is=1e-14 cjo=0.1p)", "r2 x 0 100", "c2 x 0 0.1p"],
        {"v(in)": "in"}, 2e-9, 1e-12, options=".options reltol=1e-4 trtol=1 xtrtol=1",
        data={data.name: data.content},
    )  # fmt: skip
    assert result.time.size > 4000
    assert result.vectors["v(in)"] == pytest.approx(held(result, waveform), abs=ROUNDING)


def test_the_same_as_a_sine_source() -> None:
    lines = ("r1 in out 50", "c1 out 0 1p")
    t: FloatArray = np.linspace(0.0, 4e-9, 4001)
    sine = Waveform(t, np.sin(2 * np.pi * 5e9 * t))
    result = run(with_stimulus(deck("vin in 0 1", *lines), "vin", sine), "v(out)", step=1e-12)
    own = run(deck("vin in 0 sin(0 1 5g)", *lines), "v(out)", step=1e-12)
    assert np.array_equal(result.time, own.time)
    # Linear interpolation errs by (omega h)^2/8 = 1.2e-4 at most with samples 1 ps apart, and an
    # RC does not amplify.
    assert np.abs(result.vectors["v(out)"] - own.vectors["v(out)"]).max() < 1.24e-4


def test_an_edge_of_a_few_steps_gives_the_area_of_a_pulse_source() -> None:
    lines = ("r1 in out 50", "c1 out 0 1p")
    edge, step, delay, width = 10e-12, 2e-12, 0.3013e-9, 1e-9
    corners = delay + np.cumsum([0.0, edge, width, edge])
    pulse = Waveform(corners, np.array([0.0, 1.0, 1.0, 0.0]))
    loaded = with_stimulus(deck("vin in 0 1", *lines), "vin", pulse)
    result = run(loaded, "v(out)", stop=3e-9, step=step)
    own = run(
        deck(f"vin in 0 pulse(0 1 {delay!r} {edge!r} {edge!r} {width!r} 1)", *lines),
        "v(out)",
        stop=3e-9,
        step=step,
    )
    areas = [np.trapezoid(r.vectors["v(out)"], r.time) for r in (result, own)]
    # A linear filter keeps the area of the pulse, (width + edge) * 1 V, up to what is left after
    # 34 time constants. The trapezoidal rule keeps it too where all corners fall alike between
    # two time points; here they are 1 ns and 10 ps apart, multiples of the step.
    assert areas == pytest.approx([width + edge] * 2, rel=1e-9)


def test_an_rc_answers_as_scipy_says() -> None:
    rng = np.random.default_rng(3)
    t: FloatArray = 10e-12 * np.arange(401.0)
    waveform = Waveform(t, np.cumsum(rng.standard_normal(401)) / 10)
    tau = 50e-12
    loaded = with_stimulus(deck("vin in 0 9", "r1 in out 50", "c1 out 0 1p"), "vin", waveform)
    result = simulate(
        loaded,
        TransientRequest(stop=4e-9, step=0.5e-12, saves=("v(out)",), tolerances=Tolerances(1e-6)),
    )
    # lsim takes straight lines between samples, as the stimulus; it starts in the steady state.
    first = waveform.v[0]
    _, wanted, _ = lsim(([1.0], [tau, 1.0]), waveform.v - first, t)
    answer = np.interp(t, result.time, result.vectors["v(out)"]) - first
    # A corner between two time points changes the area by at most (change of slope) h^2/8, here
    # 0.42 V/10 ps: 2.6e-5 V behind the RC, and a few of them add up.
    assert np.abs(answer - wanted).max() < 1e-4
    assert np.ptp(wanted) > 0.5


def test_the_loss_between_time_points_is_told() -> None:
    # An edge of four steps: at its corner the line through both half steps misses by step/(4 e).
    edge = wave((0.0, 0.0), (1e-9, 0.0), (1.008e-9, 2.0), (5e-9, 2.0))
    assert sampling_error(edge, 2e-12) == pytest.approx(2.0 / 16.0, rel=1e-9)
    assert sampling_error(wave((0.0, 0.0), (1e-9, 0.0), (1.0001e-9, 2.0), (5e-9, 2.0)), 2e-12) == (
        pytest.approx(1.0, rel=1e-9)
    )
    t: FloatArray = np.linspace(0.0, 1e-9, 100_001)
    sine = Waveform(t, 3.0 * np.cos(2 * np.pi * 5e9 * t))
    wanted = 3.0 * (1.0 - np.cos(np.pi * 5e9 * 2e-12))
    assert sampling_error(sine, 2e-12) == pytest.approx(wanted, rel=1e-4)  # of a finite table
    assert sampling_error(wave((0.0, 0.0), (1.0, 9.0)), 1e-12) == 0.0


def test_names_that_do_not_fit() -> None:
    line = wave((0.0, 0.0), (1.0, 1.0))
    with pytest.raises(UnknownNameError, match="source 'vim' does not exist") as caught:
        with_stimulus(DIVIDER, "vim", line)
    assert "did you mean 'vin'?" in str(caught.value)
    with pytest.raises(UnknownNameError, match=r"'x1\.x3\.vs' does not exist") as caught:
        with_stimulus(NESTED, "x1.x3.vs", line)
    assert "'x1.x1.vs'" in str(caught.value)
    with pytest.raises(InputError, match="'r1' is no independent source"):
        with_stimulus(DIVIDER, "r1", line)
    with pytest.raises(InputError, match="'vin' must be in V, got A"):
        with_stimulus(DIVIDER, "vin", wave((0.0, 0.0), (1.0, 1.0), unit="A"))
    with pytest.raises(InputError, match=r"'x1\.x1\.is' must be in A, got V"):
        with_stimulus(NESTED, "x1.x1.is", line)
    with pytest.raises(InputError, match=r"'x1\.x1\.vs' is given two stimuli"):
        with_stimuli(NESTED, {"x1.x1.vs": line, "V.X1.X1.VS": line})
    with pytest.raises(DeckError, match="circuit:3: 'vin' cannot get a stimulus"):
        with_stimulus(with_stimulus(DIVIDER, "vin", line), "vin", line)
    with pytest.raises(DeckError, match="there is a 'stimulus_vin' already"):
        with_stimulus(
            deck("vin in 0 1", "r1 in stimulus_vin 1", "r2 stimulus_vin 0 1"), "vin", line
        )


def test_files_get_names_of_their_own(tmp_path: Path) -> None:
    (tmp_path / "own.txt").write_text("0 2\n1 2\n")
    model = (
        '.model stimulus1 filesource(file="own.txt" timeoffset=0 timescale=1 timerelative=false '
        "amploffset=[0] amplscale=[1] amplstep=false)"
    )
    text = f"title\nvin in 0 1\nr1 in 0 1k\na1 %v([out]) stimulus1\nr2 out 0 1k\n{model}\n.end\n"
    loaded = deck_from_text(text, folder=tmp_path)
    loaded = with_stimulus(loaded, "vin", wave((0.0, 0.5), (1e-9, 0.5)))
    result = run(loaded, "v(in)", "v(out)")
    assert (result.vectors["v(in)"][-1], result.vectors["v(out)"][-1]) == (0.5, 2.0)
    assert len({file.name for file in loaded.data_files}) == 2
    assert {"in", "out", "stimulus_vin", "stimulus_vin_value"} == node_names(loaded)


def test_the_file_of_a_waveform_joins_the_decks_files() -> None:
    origin = DeckFile("wave.csv", "", "5e" * 32)
    flat = wave((0.0, 0.5), (1e-9, 0.5))
    loaded = with_stimuli(
        deck("vin in 0 1", "r1 in 0 1k", "vy y 0 1", "r2 y 0 1k"),
        {"VIN": flat, "vy": flat},
        files={"VIN": origin},
    )
    assert loaded.files[1:] == (origin,)
    assert [(file.path, file.sha256 == origin.sha256) for file in loaded.data_files] == [
        ("wave.csv", True),
        ("", False),
    ]


def test_no_stimulus_changes_nothing() -> None:
    assert with_stimuli(DIVIDER, {}) is DIVIDER
