"""Oracle: closed forms of a circuit's noise (4kTR behind a pole, an ideal switch) at the qubit."""

import json
import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from scipy import constants

from cosim.checks import check_testbench
from cosim.circuit import standstill
from cosim.circuit.deck import Deck
from cosim.circuit.noise import NoiseRequest, NoiseResult
from cosim.dispatch import load, save
from cosim.errors import ConvergenceError, TestbenchError, UnknownNameError
from cosim.gate import run_gate
from cosim.result import GateResult, as_numbers
from cosim.testbench import make_testbench
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "end to end through ngspice"

CARRIER = 1e9
START, STOP = 2e-9, 22e-9
TIME = STOP - START
RABI = 20e9  # Hz/V
LOW_PASS = "v1 in 0 sin(0 1m 1g)\nr1 in out 1k\nc1 out 0 0.2p"
OHM, FARAD = 1e3, 0.2e-12
Run = Callable[..., GateResult]


@pytest.fixture
def run(tmp_path: Path) -> Run:
    """Run a deck with its own noise as the only table [[noise]]."""

    def run(
        body: str,
        *,
        probe: str = "v(out)",
        rabi: float = RABI,
        samples: int = 400,
        gate: dict[str, Any] | None = None,
        termination: str = "in deck",
        other: tuple[dict[str, Any], ...] = (),
        **noise: Any,
    ) -> GateResult:
        (tmp_path / "deck.cir").write_text(f"deck\n{body}\n.end\n")
        tables = {
            "netlist": {
                "file": "deck.cir",
                "stop": f"{STOP + 1e-9!r} s",
                "steps_per_period": 200,
                "temperature": "300 K",
            },
            "drive": {"probe": probe, "carrier": f"{CARRIER!r} Hz", "termination": termination},
            "qubit": {"kind": "spin", "frequency": "carrier", "rabi_per_volt": f"{rabi!r} Hz/V"},
            "gate": {"target": "x", "window": [f"{START!r} s", f"{STOP!r} s"], "calibrate": []},
            "accuracy": {"floor": False, "noise_samples": samples},
            "noise": [*other, {"acts_on": "probe", "from": "netlist"} | noise],
        }
        tables["gate"].update(gate or {})
        return run_gate(make_testbench(tables, folder=tmp_path))

    return run


def johnson(kelvin: float) -> float:
    """Loss of a gate by 4kTR behind the pole, by the golden rule up and down, T/3 of the rates."""
    density = 4 * constants.k * kelvin * OHM / (1 + (2 * math.pi * CARRIER * OHM * FARAD) ** 2)
    return (2 * math.pi * RABI) ** 2 * density * TIME / 3


class TestJohnson:
    @pytest.mark.parametrize("kelvin", [300.0, 4.2])
    @pytest.mark.parametrize("method", ["auto", "stationary"])
    def test_small_signals(self, validate: Validate, run: Run, kelvin: float, method: str) -> None:
        found = run(LOW_PASS, method=method, resistor_temperature=f"{kelvin} K").noise
        assert found is not None
        (source,) = found.sources
        assert found.noise_method == source.method == "stationary"
        validate(
            f"1 kohm at {kelvin:g} K behind a pole of 0.8 GHz, small-signal noise ({method})",
            f"{sources.JOHNSON_NYQUIST}; {sources.GOLDEN_RULE}",
            johnson(kelvin),
            source.infidelity + source.unreached,
            # Half the carrier away from it the mean density of both sides is 1.2 times that at the
            # carrier; 2 % of what the gate sees lies beyond a quarter of it.
            rel=1e-2,
        )
        assert found.agree
        assert abs(found.infidelity - source.infidelity) < 4 * found.standard_error
        assert source.devices == {"r1": source.infidelity}
        assert source.left_out == ()

    @pytest.mark.parametrize(
        "method", ["stationary", pytest.param("injection", marks=pytest.mark.full)]
    )
    def test_a_matched_source_sends_kt_into_the_line(
        self, validate: Validate, run: Run, method: str
    ) -> None:
        # 4 k T R halved by the matched load, whose own noise goes the other way.
        runs = {"seeds": 64} if method == "injection" else {}
        found = run(
            "v1 in 0 sin(0 2m 1g)\nr1 in out 50",
            method=method,
            rabi=80e9,
            termination="50 ohm",
            resistor_temperature="4 K",
            **runs,
        ).noise
        assert found is not None
        (source,) = found.sources
        assert set(source.devices) == {"r1"}
        validate(
            f"50 ohm at 4 K into a matched line ({method})",
            f"{sources.JOHNSON_NYQUIST}; {sources.GOLDEN_RULE}",
            (2 * math.pi * 80e9) ** 2 * constants.k * 4.0 * 50.0 * TIME / 3,
            source.infidelity + source.unreached,
            # White: nothing but the band and rounding; or four standard deviations of 64 runs.
            rel=1e-2 if method == "stationary" else 4 * math.sqrt(1 / 64),
        )

    @pytest.mark.full
    @pytest.mark.parametrize("kelvin", [300.0, 4.2])
    def test_injection(self, validate: Validate, run: Run, kelvin: float) -> None:
        found = run(
            LOW_PASS, method="injection", seeds=64, resistor_temperature=f"{kelvin} K"
        ).noise
        assert found is not None
        (source,) = found.sources
        assert found.noise_method == source.method == "injection"
        validate(
            f"1 kohm at {kelvin:g} K behind a pole of 0.8 GHz, by 64 noisy runs",
            f"{sources.JOHNSON_NYQUIST}; {sources.GOLDEN_RULE}",
            johnson(kelvin),
            source.infidelity,
            # Two independent squares of normal numbers per seed; four standard deviations.
            rel=4 * math.sqrt(1 / 64),
        )
        # The error that is stated is that of two squares, itself known to 1/sqrt(2*64) and more.
        assert source.standard_error == pytest.approx(source.infidelity / 8, rel=0.5)
        # One device makes all of it; the circuit's memory of 0.2 ns beside windows of 8 ns.
        assert source.devices_explain == pytest.approx(1.0, abs=0.02)
        assert list(source.devices) == ["r1"]

    @pytest.mark.full
    def test_both_agree_within_the_stated_error(self, run: Run) -> None:
        injected = run(LOW_PASS, method="injection", seeds=64).noise
        around = run(LOW_PASS, method="stationary", samples=4000).noise
        assert injected is not None
        assert around is not None
        error = math.hypot(injected.standard_error, around.standard_error)
        assert abs(injected.infidelity - around.infidelity) < 4 * error
        assert error < 0.2 * around.infidelity

    def test_the_same_seed_gives_the_same_numbers(self, run: Run) -> None:
        first, second = (run(LOW_PASS, method="injection", seeds=2).noise for _ in range(2))
        assert first == second
        assert first is not None
        assert first.infidelity > 0.0

    def test_the_result_survives_a_file_and_says_all_to_machines(
        self, run: Run, tmp_path: Path
    ) -> None:
        found = run(LOW_PASS, method="injection", seeds=2, name="devices")
        save(found, tmp_path / "result.h5")
        again = load(tmp_path / "result.h5")
        assert isinstance(again, GateResult)
        assert repr(again.noise) == repr(
            found.noise
        )  # a number that is none is not equal to itself
        told = json.loads(json.dumps(as_numbers(found), allow_nan=False))["noise"]
        assert told["noise_method"] == "injection"
        assert told["sources"][0]["devices"] == {}
        assert told["sources"][0]["devices_error"] is None  # so few runs do not tell

    def test_a_circuit_without_noise_costs_nothing(self, run: Run) -> None:
        found = run(LOW_PASS.replace("1k", "1k noisy=0"), method="stationary", samples=16).noise
        assert found is not None
        assert found.infidelity == pytest.approx(0.0, abs=1e-14)  # rounding of unitaries
        assert found.sources[0].devices == {}


# A pair that is switched by 10 V; its tail has the noise of 4 Mohm behind a pole of 0.1 GHz at its
# gate, which is far below the carrier's second harmonic.
MIXER = """vdd vdd 0 3
vb b0 0 1
rbias b0 bias 4meg noisy={noisy}
cb bias 0 {farad}
vlop lop 0 sin(2 10 1g)
vlon lon 0 sin(2 -10 1g)
rp vdd op 500 noisy={loads}
rn vdd on 500 noisy={loads}
x1 op on lop lon bias mix
.subckt mix op on lop lon bias
m1 op lop tail 0 sw w=100u l=0.1u
m2 on lon tail 0 sw w=100u l=0.1u
mt tail bias 0 0 cs w=20u l=1u
ct tail 0 10f
.ends
.model sw nmos level=1 vto=0.4 kp=500u tnom=26.85
.model cs nmos level=1 vto=0.4 kp=200u tnom=26.85"""
CORNER = 0.1e9
TAIL_GM = 200e-6 * 20 * 0.6
LOAD = 500.0
MIXED = MIXER.format(noisy=1, loads=0, farad=1 / (2 * math.pi * CORNER * 4e6))
OWN = MIXER.format(noisy=0, loads=1, farad="1f")  # the tail's own noise and the loads'
# V^2/Hz of the white noise between the loads, of all that is in OWN.
WHITE = {
    "m.x1.mt": 4 * constants.k * 300.0 * (2 / 3) * TAIL_GM * LOAD**2,
    "rp": 4 * constants.k * 300.0 * LOAD,
    "rn": 4 * constants.k * 300.0 * LOAD,
}
PAIR = "v(op) - v(on)"
COLD = "1e-6 K"


def slow_amplitude(rabi: float) -> float:
    """Loss by noise of the tail's gate, 4kTR of one pole, times gm, the load and 2/pi per side.

    Both sides of the carrier hold the same noise, which is one of amplitude: it turns about the
    gate's own axis. The angle is the integral of a noise of one pole, a = 2 pi f0, over T, of the
    variance S/2 (T - (1 - exp(-a T))/a), and the loss a sixth of it.
    """
    # An amplitude x cos of which both sides have x/2: 4/pi of the square wave's fundamental.
    factor = 2 * math.pi * rabi * TAIL_GM * LOAD * 4 / math.pi
    level = 4 * constants.k * 300.0 * 4e6 * factor**2
    a = 2 * math.pi * CORNER
    return level / 2 * (TIME - (1 - math.exp(-a * TIME)) / a) / 6


class TestMixer:
    RABI = 1e7

    @pytest.mark.full
    def test_the_conversion_of_a_switch(self, validate: Validate, run: Run) -> None:
        found = run(MIXED, probe=PAIR, rabi=self.RABI, seeds=128, channel_temperature=COLD)
        assert found.noise is not None
        (source,) = found.noise.sources
        assert source.method == "injection"
        assert "m.x1.m1 by 100%" in source.reason
        validate(
            "noise at the gate of a mixer's tail, through 2/pi per sideband to the qubit",
            f"{sources.JOHNSON_NYQUIST}; {sources.MIXER}",
            slow_amplitude(self.RABI),
            source.devices["rbias"],
            # The square of one normal number per seed, four standard deviations; next to it the
            # pole's 1/400 at the second harmonic and the share's own error are small.
            rel=4 * math.sqrt(2 / 128),
        )
        assert source.devices["rbias"] > 0.9 * source.infidelity

    def test_small_signals_call_the_tail_silent(self, run: Run) -> None:
        """At a crossing of the carrier the pair is balanced: nothing of the tail is left."""
        keys = {"probe": PAIR, "rabi": self.RABI, "method": "frozen", "samples": 16}
        found = run(OWN, instant="10 ns", **keys)
        assert found.noise is not None
        (source,) = found.noise.sources
        assert found.noise.noise_method == source.method == "frozen"
        assert source.devices.get("m.x1.mt", 0.0) < 1e-9 * source.infidelity
        assert source.devices["m.x1.m1"] > 0.1 * source.infidelity
        assert any(
            "an estimate from the circuit frozen at 10 ns" in text for text in found.warnings
        )
        # A quarter of a period on all of the current goes to one side, and the pair is silent.
        other = run(OWN, instant="10.25 ns", **keys).noise
        assert other is not None
        part = other.sources[0].devices["m.x1.mt"] / other.sources[0].infidelity
        # ngspice's constant cancels; the model's gm is that of its temperature.
        assert part == pytest.approx(WHITE["m.x1.mt"] / sum(WHITE.values()), rel=2e-3)

    @pytest.mark.full
    def test_parts_of_the_devices(self, run: Run) -> None:
        """A white current that is turned over stays white: each has its own 4kT gamma g R^2."""
        found = run(OWN, probe=PAIR, rabi=self.RABI, seeds=32).noise
        assert found is not None
        (source,) = found.sources
        error = source.devices_error / source.infidelity
        assert error < 0.15
        whole = sum(WHITE.values())
        for name, level in WHITE.items():
            assert abs(source.devices[name] / source.infidelity - level / whole) < 4 * error, name
        # Six devices of ten numbers each explain sqrt(10/2)/64 by chance, in halves of 64 windows,
        # and what they make scatters by sqrt(2/128): four standard deviations of both.
        assert source.devices_explain == pytest.approx(
            1.0, abs=4 * math.sqrt(6 * 5 / 64**2 + 1 / 64)
        )
        assert list(source.devices.values()) == sorted(source.devices.values(), reverse=True)

    @pytest.mark.full
    def test_each_device_alone(self, validate: Validate, run: Run) -> None:
        seeds = 24
        found = run(OWN, probe=PAIR, rabi=self.RABI, seeds=seeds, by_device=True).noise
        assert found is not None
        (source,) = found.sources
        factor = (2 * math.pi * self.RABI) ** 2 * TIME / 3
        for name, level in WHITE.items():
            validate(
                f"noise of a switched pair, {name} alone, by {seeds} noisy runs",
                f"{sources.VAN_DER_ZIEL}; {sources.JOHNSON_NYQUIST}; {sources.GOLDEN_RULE}",
                factor * level,
                source.devices[name],
                # Two independent squares of normal numbers per run; four standard deviations.
                rel=4 * math.sqrt(1 / seeds),
            )
        # The pair itself makes noise only while it is turned over, 1 % of the time.
        assert source.devices["m.x1.m1"] < 0.02 * source.infidelity
        # Alone they make what they make among all, but for their products with one another.
        assert source.devices_explain == pytest.approx(1.0, abs=4 * math.sqrt(1 / seeds))

    def test_an_operating_point_is_refused_by_name(self, run: Run) -> None:
        with pytest.raises(TestbenchError) as caught:
            run(OWN, probe=PAIR, method="stationary", name="devices")
        text = str(caught.value)
        assert "[[noise]] 'devices' with method = \"stationary\"" in text
        assert "m.x1.m1 by 100%" in text
        assert "m.x1.m2 by 100%" in text
        assert "injection" in (caught.value.hint or "")


AMPLIFIER = """v1 in 0 sin(0.7 {} 1g)
vd vdd 0 1.5
rd vdd out 1k
x1 out in s
.subckt s out in
m1 out in 0 0 n w=10u l=1u
.ends
.model n nmos level=1 vto=0.4 kp=600u tox=5n kf={}"""


BSIM4 = "level=14 vth0=0.4 toxe=2n"


class TestChoice:
    def test_an_amplifier_of_small_signals(self, run: Run) -> None:
        found = run(AMPLIFIER.format("1m", 0), rabi=1e9, samples=16).noise
        assert found is not None
        (source,) = found.sources
        assert source.method == "stationary"
        assert source.reason.startswith("no leading device's bias changes by more than 0.0066")
        # gm is kp W/L (Vgs - vto); the channel has 4kT(2/3)gm and the resistor 4kT/R.
        channel = (2 / 3) * 600e-6 * 10 * 0.3 * 1e3
        part = source.devices["m.x1.m1"] / source.infidelity
        assert part == pytest.approx(channel / (1 + channel), rel=2e-3)

    def test_one_of_large_signals(self, run: Run) -> None:
        found = run(AMPLIFIER.format("50m", 0), rabi=1e8, seeds=2).noise
        assert found is not None
        assert found.noise_method == "injection"
        assert "m.x1.m1 by 29%" in found.sources[0].reason
        # So few and short runs tell no devices apart, and that is said.
        assert found.sources[0].devices_error == math.inf
        with pytest.raises(TestbenchError, match=r"m\.x1\.m1 by 29%"):
            run(AMPLIFIER.format("50m", 0), method="stationary")

    def test_elements_that_may_switch(self, run: Run) -> None:
        body = LOW_PASS + "\ns1 out 0 in 0 sw\n.model sw sw vt=10"
        found = run(body, seeds=2).noise
        assert found is not None
        assert "change with time: s1" in found.sources[0].reason
        with pytest.raises(TestbenchError, match="change with time: s1"):
            run(body, method="stationary")

    def test_a_circuit_without_an_operating_point(
        self, run: Run, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        def fails(deck: Deck, request: NoiseRequest) -> NoiseResult:
            raise ConvergenceError("no solution of a line that is not to be kept")

        monkeypatch.setattr(standstill, "simulate_noise", fails)
        body = AMPLIFIER.format("1m", 0).replace("level=1 vto=0.4 kp=600u tox=5n kf=0", BSIM4)
        found = run(body, rabi=1e8, seeds=2)
        assert found.noise is not None
        assert found.noise.noise_method == "injection"
        assert "no operating point of the circuit" in found.noise.sources[0].reason
        (told,) = (text for text in found.warnings if "excess factors are taken for 2/3" in text)
        assert "not to be kept" not in told + found.noise.sources[0].reason
        assert found.noise.sources[0].left_out == ("m.x1.m1: the 1/f noise of its model 'n'",)
        with pytest.raises(ConvergenceError, match="no solution"):
            run(body, method="stationary")

    def test_models_are_asked_for_their_channels(self, run: Run) -> None:
        """1/f noise of a card at the gate counts: it moves the gain in the run of each seed."""
        body = AMPLIFIER.format("50m", 0)
        quiet, loud = (
            run(body.replace("level=1 vto=0.4 kp=600u tox=5n kf=0", model), rabi=1e8, seeds=2).noise
            for model in (f"{BSIM4} fnoimod=0", f"{BSIM4} fnoimod=0 kf=1e-18")
        )
        assert quiet is not None
        assert loud is not None
        assert quiet.noise_method == loud.noise_method == "injection"
        assert quiet.sources[0].left_out == loud.sources[0].left_out == ()
        assert loud.infidelity > 10 * quiet.infidelity

    def test_excess_factors(self, run: Run) -> None:
        body = AMPLIFIER.format("1m", 0)
        keys = {"rabi": 1e9, "seeds": 2}
        plain = run(body, method="injection", **keys).noise
        given = run(body, gammas={"m.x1.m1": 2 / 3, "N": 5.0}, **keys).noise
        assert given is not None
        assert plain is not None
        assert given.sources[0].reason.startswith("excess factors are given")
        # A device's own factor goes before its model's.
        assert given.infidelity == plain.infidelity
        more = run(body, gammas={"n": 200.0}, **keys).noise
        assert more is not None
        assert more.infidelity > 10 * plain.infidelity
        with pytest.raises(UnknownNameError, match=r"(?s)'x1\.m1'.*m\.x1\.m1"):
            run(body, gammas={"x1.m1": 1.0}, **keys)

    def test_a_frozen_circuit_tells_nothing_of_flicker(self, run: Run) -> None:
        body = AMPLIFIER.format("1m", "1e-22")
        found = run(body, rabi=1e9, method="frozen", samples=16)
        assert found.noise is not None
        (source,) = found.noise.sources
        assert source.left_out == (
            "m.x1.m1: its 1/f noise, of which a frozen circuit tells nothing",
        )
        assert any("is without m.x1.m1: its 1/f noise" in text for text in found.warnings)
        around = run(body, rabi=1e9, samples=16).noise
        without = run(AMPLIFIER.format("1m", 0), rabi=1e9, samples=16).noise
        assert around is not None
        assert without is not None
        assert around.sources[0].left_out == ()
        # Of a circuit at rest it counts, as far as it reaches the carrier.
        assert source.infidelity == pytest.approx(without.sources[0].infidelity, rel=1e-6)
        assert around.sources[0].infidelity > 1.001 * source.infidelity

    def test_an_instant_behind_the_run(self, run: Run) -> None:
        with pytest.raises(TestbenchError, match="30 ns lies behind the end of the run at 23 ns"):
            run(LOW_PASS, method="frozen", instant="30 ns")

    def test_rest_counts_too(self, run: Run) -> None:
        """What stands during the gate and moves at rest is no circuit at rest."""
        body = AMPLIFIER.format("5m", 0).replace("v1 in 0 sin(0.7", "v1 in a sin(0")
        body += "\nva a 0 pwl(0 0.6 1.9n 0.7)"
        found = run(body, rabi=1e9, samples=16).noise
        assert found is not None
        assert found.noise_method == "stationary"
        rest = {"idle": ["0 ns", "1.9 ns"]}
        both = run(body, rabi=1e9, seeds=2, gate=rest).noise
        assert both is not None
        assert both.noise_method == "injection"

    def test_a_wrong_name_is_found_before_the_run(self, tmp_path: Path) -> None:
        (tmp_path / "deck.cir").write_text(f"deck\n{AMPLIFIER.format('1m', 0)}\n.end\n")
        text = """
[netlist]
file = "deck.cir"
stop = "23 ns"
[drive]
probe = "v(out)"
carrier = "1 GHz"
termination = "in deck"
[qubit]
kind = "spin"
frequency = "carrier"
rabi_per_volt = "1 GHz/V"
[gate]
target = "x"
[[noise]]
acts_on = "probe"
from = "netlist"
gammas = { nn = 1.0 }
"""
        (tmp_path / "bench.toml").write_text(text)
        with pytest.raises(UnknownNameError, match="noise of 'nn' is given"):
            check_testbench(tmp_path / "bench.toml", probe=False)
        (tmp_path / "bench.toml").write_text(text.replace("nn =", "n ="))
        findings, _ = check_testbench(tmp_path / "bench.toml", probe=False)
        assert findings[-1].name == "ready"
