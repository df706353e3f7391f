"""Oracle: the noise of resistors in closed form, against decks analysed by ngspice's `.noise`."""

import math

import numpy as np
import pytest
from scipy import constants

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.client import Answer
from cosim.circuit.netlist import deck_from_text
from cosim.circuit.noise import (
    NoiseRequest,
    NoiseResult,
    judge_noise,
    prepare_noise,
    simulate_noise,
)
from cosim.circuit.simulator import simulate
from cosim.errors import (
    ConvergenceError,
    DeckError,
    ForbiddenDeckError,
    InputError,
    ProbeError,
    SimulatorCrashError,
    SimulatorTimeoutError,
    UnknownNameError,
)
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"
# ngspice's Boltzmann constant is the CODATA value of 2014, 1.38064852e-23 J/K, which is 3.5e-7
# below the SI value. Nothing else is between a resistor's density and 4 k T R.
BOLTZMANN = 5e-7


def analyse(
    body: str,
    output: str = "v(out)",
    source: str = "v1",
    start: float = 1.0,
    stop: float = 1e3,
    points: int = 10,
    temperature: float | None = None,
) -> NoiseResult:
    """Analyse the noise of the elements of a deck."""
    request = NoiseRequest(output, source, start, stop, points, temperature=temperature)
    return simulate_noise(deck_from_text(f"deck\n{body}\n.end\n"), request)


RESISTOR = "v1 in 0 dc 0 ac 1\nr1 in out {r}"


class TestJohnson:
    """C11: one-sided voltage density 4 k T R."""

    # sqrt(4 k T R) with k = 1.380649e-23 J/K, seven digits.
    @pytest.mark.parametrize(
        ("ohm", "kelvin", "root"),
        [
            (50, 300.0, 9.10159e-10),
            (50, 4.2, 1.076915e-10),
            (1000, 300.15, 4.071372e-9),
            (1000, 4.2, 4.816109e-10),
        ],
    )
    def test_density(self, validate: Validate, ohm: int, kelvin: float, root: float) -> None:
        result = analyse(RESISTOR.format(r=ohm), temperature=kelvin)
        assert np.ptp(result.output_density) <= 1e-12 * result.output_density[0]  # It is white.
        got = math.sqrt(result.output_density[0])
        quantity = f"noise of {ohm} ohm at {kelvin:g} K"
        source = sources.JOHNSON_NYQUIST + ", sqrt(4 k T R)"
        # Half of the 3.5e-7 of ngspice's constant, and 5e-7 of the seven digits above.
        validate(quantity, source, root, got, "V/sqrt(Hz)", rel=7e-7, card="C11")

    def test_the_deck_and_the_default_say_the_temperature(self) -> None:
        for card, kelvin in (("", 300.15), (".temp 126.85", 400.0)):
            result = analyse(RESISTOR.format(r="1k") + f"\n{card}")
            wanted = 4 * constants.k * kelvin * 1e3
            assert result.output_density == pytest.approx(wanted, rel=BOLTZMANN, abs=0.0)

    def test_total_is_the_integral_over_the_grid(self) -> None:
        result = analyse(RESISTOR.format(r="1k"), start=10.0, stop=2e3, points=1)
        # One point per decade: the grid ends at 1 kHz.
        assert result.frequency == pytest.approx(
            [10.0, 100.0, 1000.0], rel=1e-9, abs=0.0
        )  # rounding
        wanted = math.sqrt(4 * constants.k * 300.15 * 1e3 * 990.0)
        assert result.total_output == pytest.approx(wanted, rel=BOLTZMANN, abs=0.0)


class TestDivider:
    """R1 = 1 kohm above R2 = 3 kohm: 750 ohm in parallel, gain 3/4."""

    body = "v1 in 0 sin(0 1 1k) ac 7\nr1 in out 1k\nr2 out 0 3k"

    def test_parallel_resistance(self, validate: Validate) -> None:
        result = analyse(self.body)
        quantity = "noise of a divider of 1 kohm and 3 kohm at 300.15 K"
        source = sources.JOHNSON_NYQUIST + ", 4 k T R1 R2/(R1 + R2)"
        wanted = 4 * constants.k * 300.15 * 750.0
        validate(quantity, source, wanted, result.output_density[0], "V^2/Hz", rel=BOLTZMANN)
        quantity = "input noise of a divider of 1 kohm and 3 kohm at 300.15 K"
        wanted /= 0.75**2
        source = sources.JOHNSON_NYQUIST + ", 4 k T R1 (R1 + R2)/R2"
        validate(quantity, source, wanted, result.input_density[0], "V^2/Hz", rel=BOLTZMANN)

    def test_input_of_a_current_source(self) -> None:
        result = analyse("i1 0 3 dc 1u ac 1\nr1 3 0 1k", output="v(3)", source="I1")
        wanted = 4 * constants.k * 300.15 / 1e3  # A^2/Hz
        assert result.input_density == pytest.approx(wanted, rel=BOLTZMANN, abs=0.0)

    def test_a_difference_inside_of_a_subcircuit(self) -> None:
        body = (
            "x1 out s\nrl out 0 1k\n.subckt s b\nv1 q 0 dc 0 ac 1\nr1 q m 1k\nr2 m 0 1k\n"
            "r3 m b 1k\n.ends"
        )
        # 500 ohm of the divider and 1 kohm of load, in series, beside the 1 kohm between.
        wanted = 4 * constants.k * 300.15 * 600.0
        for output in ("v(x1.m,out)", "V(out) - V(X1.M)", "v(x1.m) - v(x1.b)"):
            result = analyse(body, output=output, source="x1.v1")
            assert result.output_density == pytest.approx(wanted, rel=BOLTZMANN, abs=0.0)

    def test_no_gain_is_an_infinite_input_density(self) -> None:
        result = analyse("v1 in 0 dc 0 ac 1\nr1 in 0 1k\nr2 out 0 1k")
        assert np.isinf(result.input_density).all()
        wanted = 4 * constants.k * 300.15 * 1e3
        assert result.output_density == pytest.approx(wanted, rel=BOLTZMANN, abs=0.0)


class TestCapacitor:
    """F13: 1 pF on a resistor, whatever its value, from 1e-7 to 1e7 times the corner."""

    @pytest.mark.parametrize(
        ("ohm", "kelvin", "rms"), [(1e3, 300.0, 6.435796e-5), (50.0, 4.2, 7.614937e-6)]
    )
    def test_total(self, validate: Validate, ohm: float, kelvin: float, rms: float) -> None:
        corner = 1 / (2 * math.pi * ohm * 1e-12)
        body = RESISTOR.format(r=ohm) + "\nc1 out 0 1p"
        result = analyse(
            body, start=1e-7 * corner, stop=1e7 * corner, points=1000, temperature=kelvin
        )
        # Of the power 2/pi (1e-7 + 1e-7) lie outside of the band, and straight lines between points
        # of the curve ln S(ln f), h = ln(10)/1000 apart, lose h^2/24: 3.5e-7 together. Half of that
        # is in the voltage, beside half of the constant's 3.5e-7 and the seven digits.
        quantity = f"total noise of 1 pF at {kelvin:g} K, through {ohm:g} ohm"
        source = sources.EQUIPARTITION + ", sqrt(k T/C)"
        validate(quantity, source, rms, result.total_output, "V", rel=5e-7, card="F13")
        quantity = f"noise bandwidth of {ohm:g} ohm and 1 pF over its corner"
        bandwidth = result.total_output**2 / result.output_density[0]
        validate(quantity, sources.CIRCUITS, math.pi / 2, bandwidth / corner, rel=5e-7, digits=12)
        half = np.interp(
            0.5, result.output_density[::-1] / result.output_density[0], result.frequency[::-1]
        )
        # Linear interpolation between points 0.23 % apart, h^2/8.
        assert half == pytest.approx(corner, rel=1e-6, abs=0.0)


class TestFaults:
    body = "v1 in 0 sin(0 1 1k) ac 1\nv2 a 0 1\nr1 in out 1k\nr2 out a 1k\ni1 a 0 1"

    @pytest.mark.parametrize(
        "output", ["v(nope)", "v(out,nope)", "v(x1.out)", "out - nope", ".end"]
    )
    def test_a_node_that_does_not_exist(self, output: str) -> None:
        # ngspice itself gives a density of zero for it.
        with pytest.raises(UnknownNameError, match="does not exist"):
            analyse(self.body, output=output)

    @pytest.mark.parametrize(
        "output",
        ["i(v1)", "2*v(out)", "v(out) + v(in)", "v(in) - v(a) - v(out)", "v(0)", "v(out"],
    )
    def test_an_output_that_is_no_difference_of_voltages(self, output: str) -> None:
        with pytest.raises(ProbeError):
            analyse(self.body, output=output)

    def test_a_source_that_does_not_exist(self) -> None:
        with pytest.raises(UnknownNameError, match="device 'v9' does not exist"):
            analyse(self.body, source="v9")

    @pytest.mark.parametrize(
        ("source", "line", "why"), [("v2", 3, "no ac"), ("i1", 6, "no ac"), ("r1", 4, "no indep")]
    )
    def test_a_source_that_gives_no_gain(self, source: str, line: int, why: str) -> None:
        with pytest.raises(DeckError, match=rf"(?s)circuit:{line}: .*{why}.*ac 1"):
            analyse(self.body, source=source)

    def test_a_model_that_does_not_exist_has_its_line(self) -> None:
        with pytest.raises(DeckError, match="circuit:7"):
            analyse(self.body + "\nd1 out 0 nomodel")

    def test_junctions_in_the_cold(self) -> None:
        body = self.body + "\nd1 out 0 dm\n.model dm d(is=1e-14)"
        with pytest.raises(DeckError, match="below 20 K"):
            analyse(body, temperature=4.2)

    def test_commands_stay_out(self) -> None:
        with pytest.raises(ForbiddenDeckError):
            analyse(self.body + "\nr9 out 0 '`ls`'")

    def test_the_time_limit_holds(self) -> None:
        ladder = "\n".join(f"r{k} n{k} n{k + 1} 1k\nc{k} n{k + 1} 0 1p" for k in range(2000))
        deck = deck_from_text(f"deck\nv1 n0 0 0 ac 1\n{ladder}\n.end\n")
        # 45 000 points of 2000 resistors take far more than a second.
        request = NoiseRequest("v(n2000)", "v1", 1.0, 1e9, 5000, time_limit=1.0)
        with pytest.raises(SimulatorTimeoutError, match="narrower band"):
            simulate_noise(deck, request)

    @pytest.mark.parametrize(
        ("start", "stop", "points", "temperature", "seed"),
        [
            (0.0, 1e3, 10, None, 1),
            (1e3, 1e3, 10, None, 1),
            (1e3, 1.2e3, 10, None, 1),
            (1.0, math.inf, 10, None, 1),
            (1.0, 1e3, 0, None, 1),
            (1.0, 1e3, 6000, None, 1),
            (1.0, 1e3, 10, -1.0, 1),
            (1.0, 1e3, 10, None, 0),
        ],
    )
    def test_impossible_requests_are_refused(
        self, start: float, stop: float, points: int, temperature: float | None, seed: int
    ) -> None:
        with pytest.raises(InputError, match="must be"):
            NoiseRequest("v(out)", "v1", start, stop, points, temperature=temperature, seed=seed)


class TestVerdict:
    """Answers of the host made by hand, each healthy but for one fault."""

    request = NoiseRequest("v(out)", "v1", 1.0, 100.0, 1)
    prepared = prepare_noise(deck_from_text("t\nv1 in 0 0 ac 1\nr1 in out 1k\n"), request)

    def judged(self, vectors: dict[str, list[float]]) -> NoiseResult:
        healthy = {
            "frequency": [1.0, 10.0, 100.0],
            "onoise_spectrum": [4.0, 4.0, 1.0],
            "inoise_spectrum": [1.0, 1.0, 1e20],
            "onoise_total": [9.0],
        }
        sent = {name: np.array(values) for name, values in (healthy | vectors).items() if values}
        done = {"faults": {"load": "", "run": ""}, "wall_time": 0.1}
        end = {"timeout": False, "code": 0, "peak": 10**7, "memory_limit": 10**9}
        answer = Answer(vectors=sent, done=done, end=end)
        return judge_noise(self.prepared, self.request, answer, "ngspice-39", True)

    def test_a_healthy_answer_is_a_result(self) -> None:
        result = self.judged({})
        assert result.total_output == 3.0
        assert result.output_density.tolist() == [4.0, 4.0, 1.0]
        assert result.input_density.tolist() == [1.0, 1.0, math.inf]

    @pytest.mark.parametrize(
        ("vectors", "what"),
        [
            ({"frequency": []}, "no noise analysis among its plots"),
            ({"frequency": [1.0, 10.0]}, "gave 2 frequencies of 3"),
            ({"frequency": [1.0, 20.0, 100.0]}, "gave 3 frequencies of 3 from 1 Hz to 100 Hz"),
            ({"onoise_spectrum": [4.0]}, "gave 1 values of onoise_spectrum, not 3"),
            ({"onoise_total": []}, "gave 0 values of onoise_total, not 1"),
        ],
    )
    def test_a_part_is_no_result(self, vectors: dict[str, list[float]], what: str) -> None:
        with pytest.raises(SimulatorCrashError, match=what):
            self.judged(vectors)

    def test_a_total_that_is_not_finite_is_integrated_here(self) -> None:
        # 36 of the white part, and 4 (f/10)^-k with 10^k = 4 over the next decade.
        slope = 1 - math.log10(4.0)
        wanted = math.sqrt(36.0 + (100.0 - 40.0) / slope)
        assert self.judged({"onoise_total": [math.nan]}).total_output == pytest.approx(wanted)

    def test_a_density_that_is_not_finite(self) -> None:
        with pytest.raises(ConvergenceError, match="onoise_spectrum is not finite"):
            self.judged({"onoise_spectrum": [4.0, math.nan, 1.0]})


def test_the_grid_ends_where_the_request_says() -> None:
    for short in (1e-9, 1e-5, 1e-4, 1e-3):  # ngspice's own tolerance is 1e-4 of the stop.
        stop = 1e3 * (1 - short)
        result = analyse(RESISTOR.format(r="1k"), stop=stop, points=10)
        wanted = 1000.0 if short < 1e-7 else 10**2.9
        assert result.frequency[-1] == pytest.approx(wanted, rel=1e-9, abs=0.0)  # rounding


def test_the_analyses_of_the_deck_stay_out() -> None:
    body = (
        RESISTOR.format(r="1k")
        + "\n.options sqrnoise=0 reltol=1\n.noise v(in) v1 dec 1 1 10\n.tran 1n 1u\n.save v(in)"
    )
    deck = deck_from_text(f"deck\n{body}\n.end\n")
    request = NoiseRequest("v(out)", "v1", 1.0, 1e3)
    sent = prepare_noise(deck, request).lines
    assert [line for line in sent if line.startswith((".noise", ".tran", ".save"))] == [
        ".noise v(out) v1 dec 20 1.0 1000.0"
    ]
    result = simulate_noise(deck, request)
    assert any(".noise left out" in warning for warning in result.warnings)
    wanted = 4 * constants.k * 300.15 * 1e3
    assert result.output_density == pytest.approx(wanted, rel=BOLTZMANN, abs=0.0)


def test_a_transient_after_a_noise_run_is_the_same() -> None:
    deck = deck_from_text("deck\nv1 in 0 pulse(0 1 0 1p 1p 1 2) ac 1\nr1 in out 1k\nc1 out 0 1p\n")
    transient = TransientRequest(stop=1e-9, step=1e-12, saves=("v(out)",))
    noise = NoiseRequest("v(out)", "v1", 1.0, 1e3)
    before, quiet = simulate(deck, transient), simulate_noise(deck, noise)
    after, again = simulate(deck, transient), simulate_noise(deck, noise)
    assert np.array_equal(after.time, before.time)
    assert np.array_equal(after.vectors["v(out)"], before.vectors["v(out)"])
    assert np.array_equal(again.output_density, quiet.output_density)
    # 1 - exp(-t/tau) at t = tau, which the edge of 1 ps moves by 5e-4 tau.
    assert after.vectors["v(out)"][-1] == pytest.approx(1 - math.exp(-1), rel=1e-3, abs=0.0)
