"""Oracle: the answers through a one-pole filter worked out apart from the simulator, the noise of
its resistor (kT/C), erfc, and offset and noise of the comparator that NOTES.md gives."""

import json
import math
import shutil
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from matplotlib.image import imread
from scipy.constants import Boltzmann
from scipy.integrate import quad
from scipy.special import erfc, ndtr

import cosim
from cosim import cli
from cosim.decision_result import DECISION_FIELDS, DecisionResult, decision_numbers
from cosim.errors import CosimError
from cosim.exporting import export_csv
from cosim.outgoing import Amplifier, OutputLine, arriving_noise
from cosim.readout import run_readout
from cosim.readout_decisions import run_decisions
from cosim.readout_input import make_answers
from cosim.testbench import ReadoutBench
from cosim.waveform import ComplexArray
from tests.readout.benches import FREQUENCY, bench

pytestmark = pytest.mark.ngspice

FOLDER = Path(__file__).parents[2] / "netlists" / "comparator"
R_FILTER, CAPACITANCE, KELVIN = 2000.0, 10e-12, 300.0
TAU = (R_FILTER + 25.0) * CAPACITANCE
THRESHOLD = -5e-6  # V at the filter's output
BEGIN, INSTANT, END = 20e-9, 110e-9, 130e-9
# Q alone tells the states apart where the drive is midway between the resonances.
IDEAL = f"""ideal comparator behind a one-pole filter
vi emf_i 0 dc 0
ri emf_i i_in 50
rli i_in 0 50 noisy=0
vq emf_q 0 dc 0
rq emf_q q_in 50
rlq q_in 0 50 noisy=0
rf q_in f {R_FILTER}
cf f 0 {CAPACITANCE}
.param vth={THRESHOLD} sign=-1
bcomp q 0 v={{0.5+0.5*sign*tanh((v(f)-vth)/1n)}}
.end
"""
WHOLE = [{"acts_on": "probe", "from": "netlist", "resistor_temperature": f"{KELVIN} K"}]


def ideal(folder: Path, deck: str = IDEAL, seeds: int = 2, **more: Any) -> ReadoutBench:
    """The testbench of the ideal comparator, with few noisy runs."""
    given: dict[str, Any] = {
        "netlist": {"steps_per_period": None, "max_step": "0.5 ns", "stop": f"{END} s"},
        "resonator": {"length": "100 ns", "photons": 500.0},
        "noise": [{**WHOLE[0], "seeds": seeds}],
    }
    readout = {
        "signal": "baseband",
        "source": "vi",
        "source_q": "vq",
        "intermediate_frequency": None,
        "output_frequency": None,
        "probe": None,
        "decision": "v(q)",
        "threshold": "0.5 V",
        "window": [f"{BEGIN} s", f"{INSTANT} s"],
        **more.pop("readout", {}),
    }
    return bench(folder, deck, **{**given, **more, "readout": readout})


def filtered(emf: ComplexArray, t: np.ndarray) -> float:
    """Output of the one-pole filter at the instant for straight lines between the samples."""
    kernel = np.where(t <= INSTANT, np.exp(-np.maximum(INSTANT - t, 0.0) / TAU) / TAU, 0.0)
    part = t <= INSTANT
    return float(np.trapezoid(kernel[part] * emf.imag[part] / 2.0, t[part]))


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> tuple[ReadoutBench, DecisionResult]:
    made = ideal(tmp_path_factory.mktemp("ideal"), seeds=24, readout={"t1": "2 us"})
    return made, run_decisions(made)


@pytest.fixture(scope="module")
def expected(made: tuple[ReadoutBench, DecisionResult]) -> dict[str, Any]:
    """Offset, noise and what the decays are worth, without the simulator."""
    table, pulse = made[0].readout, made[0].resonator
    assert pulse is not None
    answers = make_answers(pulse, table, END)
    at = {name: filtered(emf, answers.drive.t) for name, emf in answers.emf.items()}
    step = at["1"] - at["0"]
    density = arriving_noise(answers.line, [FREQUENCY]).emf_density[0] / 4.0
    density += 4.0 * Boltzmann * KELVIN * R_FILTER
    decays = [at[f"decay {n}"] for n in range(1, 1 + table.decay_times)]
    return {
        "offset": (THRESHOLD - at["0"]) / step,
        "noise": math.sqrt(density / (4.0 * TAU)) / abs(step),
        "decays": (np.array(decays) - at["0"]) / step,
    }


@pytest.mark.full
def test_offset_and_noise(
    made: tuple[ReadoutBench, DecisionResult], expected: dict[str, Any]
) -> None:
    result = made[1]
    # The simulator's steps of 0.5 ns in a filter of 20 ns, and the search's own resolution.
    assert result.clean_offset == pytest.approx(expected["offset"], abs=2e-3)
    # Four standard errors of some 400 decisions, 25 % of the noise.
    assert result.offset == pytest.approx(expected["offset"], abs=4 * result.offset_error)
    assert result.noise == pytest.approx(expected["noise"], abs=4 * result.noise_error)
    assert result.noise_error < 0.1 * result.noise


@pytest.mark.full
def test_separation_error(
    made: tuple[ReadoutBench, DecisionResult], expected: dict[str, Any]
) -> None:
    result = made[1]
    x, sigma = expected["offset"], expected["noise"]
    separation = 0.25 * (
        erfc(x / sigma / math.sqrt(2.0)) + erfc((1.0 - x) / sigma / math.sqrt(2.0))
    )
    # The error that is due must not be nothing beside its bar.
    assert result.standard_error < 0.4 * separation
    assert result.errors.separation == pytest.approx(separation, abs=4 * result.standard_error)
    assert result.errors.saturation == result.errors.quantisation == 0.0
    assert result.errors.total == pytest.approx(result.assignment_error, rel=1e-12)
    np.testing.assert_allclose(result.assignment_matrix.sum(axis=0), 1.0, rtol=1e-12)


@pytest.mark.full
def test_what_decays_are_worth(
    made: tuple[ReadoutBench, DecisionResult], expected: dict[str, Any]
) -> None:
    result = made[1]
    # Half the width of a quarter of the noise to which they are looked for, and the steps.
    bar = 0.125 * result.noise + 2e-3
    np.testing.assert_allclose(result.paths.decays, expected["decays"], atol=bar)
    # The mean over the time of a decay, for straight lines between the times.
    stop, t1 = INSTANT - BEGIN, 2e-6
    times = np.concatenate([[0.0], result.paths.decay_times - BEGIN, [stop]])
    worth = np.concatenate([[0.0], result.paths.decays, [1.0]])

    def density(t: float) -> float:
        wrong = ndtr((result.offset - np.interp(t, times, worth)) / result.noise)
        return float(wrong) * math.exp(-t / t1) / t1

    wrong = quad(density, 0.0, stop, limit=200, points=times[1:-1].tolist())[0]
    alone = float(ndtr((result.offset - 1.0) / result.noise))
    due = 0.5 * (wrong - alone * -math.expm1(-stop / t1))
    # The interpolation between six times is another one.
    assert result.errors.decay == pytest.approx(due, rel=0.05)


@pytest.mark.full
def test_decisions_counted_at_the_states_follow_the_fit(
    made: tuple[ReadoutBench, DecisionResult], expected: dict[str, Any]
) -> None:
    result = made[1]
    ones, trials = result.counted.ones, result.counted.trials
    assert trials.tolist() == [96.0, 96.0]
    for share, x in zip(ones / trials, (0.0, 1.0), strict=True):
        p = float(ndtr((x - expected["offset"]) / expected["noise"]))
        # Four standard errors of a count.
        assert abs(share - p) < 4 * math.sqrt(p * (1.0 - p) / 96)
    assert not [text for text in result.warnings if "bends" in text]


@pytest.mark.full
def test_what_arrives_alone(tmp_path: Path) -> None:
    # A noise of 30000 K in front, beside which the filter's resistor is left out.
    made = ideal(tmp_path, readout={"noise_temperature": "3 K"}, noise=[])
    result = run_decisions(made)
    table, pulse = made.readout, made.resonator
    assert pulse is not None
    answers = make_answers(pulse, table, END)
    step = filtered(answers.emf["1"], answers.drive.t) - filtered(answers.emf["0"], answers.drive.t)
    density = arriving_noise(answers.line, [FREQUENCY]).emf_density[0] / 4.0
    assert result.noise_method == "arriving only"
    # Four standard errors.
    due = math.sqrt(density / (4.0 * TAU)) / abs(step)
    assert result.noise == pytest.approx(due, abs=4 * result.noise_error)


@pytest.mark.parametrize(
    ("deck", "tables", "words"),
    [
        (
            IDEAL.replace("sign=-1", "sign=0"),
            {},
            "'v(q)' never switches: at 110 ns it is between 0.5 V and 0.5 V",
        ),
        (IDEAL, {"readout": {"threshold": "1.5 V"}}, "the threshold is 1.5 V"),
        (IDEAL, {"readout": {"decide_at": "200 ns"}}, "does not lie within the run"),
        (
            IDEAL,
            {"readout": {"adc_bits": 8, "adc_full_scale": "1 V", "adc_rate": "1 GHz"}},
            "a converter do not go together",
        ),
        (IDEAL, {"noise": [{**WHOLE[0], "method": "stationary"}]}, "does not go with a 'decision'"),
    ],
)
def test_what_is_refused(tmp_path: Path, deck: str, tables: dict[str, Any], words: str) -> None:
    with pytest.raises(CosimError) as caught:
        run_decisions(ideal(tmp_path, deck, **tables))
    assert words in str(caught.value)


def test_the_other_path_does_not_take_it(tmp_path: Path) -> None:
    with pytest.raises(CosimError, match="got 'decision'"):
        run_readout(ideal(tmp_path))


@pytest.mark.full
def test_it_is_run_shown_drawn_and_kept(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]
) -> None:
    def command(*words: object) -> str:
        monkeypatch.setattr(sys, "argv", ["qcosim", *map(str, words)])
        with pytest.raises(SystemExit) as end:
            cli.main()
        out, err = capfd.readouterr()
        assert not end.value.code, err
        return out

    made = ideal(tmp_path, IDEAL.replace("sign=-1", "sign=1"), accuracy={"floor": True})
    (tmp_path / "ro.toml").write_text(made.to_toml(), encoding="utf-8")
    archive, figure = tmp_path / "decisions.h5", tmp_path / "decisions.png"
    words = ("run", tmp_path / "ro.toml", "--archive", archive, "--plot", figure, "--json")
    numbers = json.loads(command(*words))
    assert tuple(numbers) == DECISION_FIELDS
    (found,) = [text for text in numbers["warnings"] if "is taken for |1>" in text]
    assert found.startswith("'v(q)' is low for the greater signal")
    # Half the step moves the threshold by less than a part in a thousand.
    assert 0.0 < numbers["numerical_floor"] < 1e-3
    result = cosim.load(archive)
    assert isinstance(result, DecisionResult)
    assert decision_numbers(result) == numbers
    assert f"{result.assignment_error:.4e}" in command("show", archive, "--run", 1)
    assert imread(figure).std() > 0.01
    with pytest.raises(CosimError, match="result of a gate, got a DecisionResult"):
        export_csv(result, tmp_path / "none.csv")


@pytest.mark.full
def test_transistor_comparator(tmp_path: Path) -> None:
    # The Q of the answers drives the comparator's EMF; the I, alike for both states, ends idle.
    shutil.copy(FOLDER / "models.lib", tmp_path)
    text = (FOLDER / "comparator.cir").read_text()
    deck = text.replace("\n.end\n", "\nvi emf_i 0 dc 0\nri emf_i i_in 50\nrli i_in 0 50\n.end\n")
    edge, offset, noise = 6.225e-9, -1.622e-3, 38e-6  # The two of NOTES.md are at 4 K.
    # So much noise in front that what arrives is that of the 50 ohm at 4 K, as there.
    gain = 10.0

    def arriving(kelvin: float) -> float:
        line = OutputLine((Amplifier(gain, kelvin),), impedance=50.0)
        return float(arriving_noise(line, [FREQUENCY]).emf_density[0])

    due, none, one = 4.0 * Boltzmann * 4.0 * 50.0, arriving(0.0), arriving(1.0)
    kelvin = (due - none) / (one - none)
    assert kelvin > 0.0
    four = dict.fromkeys(("resistor_temperature", "channel_temperature"), "4 K")
    made = ideal(
        tmp_path,
        deck,
        netlist={"steps_per_period": None, "max_step": "5 ps", "stop": "7.1 ns"},
        resonator={
            "kappa_in": "800 MHz",
            "chi": "160 MHz",
            "photons": 1e6,
            "start": "0.2 ns",
            "length": "6.8 ns",
        },
        readout={
            "source_q": "vin",
            "threshold": "0.55 V",
            "window": ["0.2 ns", "6.2 ns"],
            "decide_at": "7.0 ns",
            "gain": f"{gain} dB",
            "noise_temperature": f"{kelvin} K",
        },
        noise=[{"acts_on": "probe", "from": "netlist", "seeds": 6, **four}],
    )
    result = run_decisions(made)
    assert made.resonator is not None
    answers = make_answers(made.resonator, made.readout, 7.1e-9)
    low, high = (
        float(np.interp(edge, answers.drive.t, answers.emf[name].imag)) for name in ("0", "1")
    )
    # Two of the steps of 6 uV in which NOTES.md found it, and what the answer moves in an edge.
    assert low + result.clean_offset * (high - low) == pytest.approx(offset, abs=12e-6)
    # Four standard errors, those of NOTES.md's own 10 % included.
    bar = 4.0 * math.hypot(result.noise_error * abs(high - low), 4e-6)
    assert result.noise * abs(high - low) == pytest.approx(noise, abs=bar)
    # The threshold lies between the states, so that the comparator tells them apart.
    assert 0.0 < result.offset < 1.0
    assert result.latency == pytest.approx(0.8e-9, rel=1e-9)
