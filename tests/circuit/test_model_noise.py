"""Oracle: the models' own parameters (AF, EF), and ngspice's `.noise` of a device by itself."""

import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.flicker import Flicker
from cosim.circuit.generators import left_out, noise_currents
from cosim.circuit.model_noise import with_models
from cosim.circuit.netlist import deck_from_text
from cosim.circuit.noise import NoiseRequest, simulate_noise
from cosim.circuit.noise_settings import NoiseSettings

pytestmark = pytest.mark.ngspice

# Two transistors, one upon the other in a subcircuit, under a swing that takes them from near the
# threshold to strong inversion.
STACK = """v1 in 0 sin(0.8 0.2 1g)
vd vdd 0 1.5
rd vdd o 100
x1 o in s
.subckt s out in
m1 out in t 0 n w=10u l=0.2u m=2
m2 t in 0 0 n w=10u l=0.04u
.ends
.model n nmos {}"""
SWING = [1e-9 + k * 0.125e-9 for k in range(8)]
BSIM4 = "level=14 vth0=0.4 toxe=2n"


def run_of(body: str, stop: float = 2e-9) -> CleanRun:
    request = TransientRequest(stop=stop, step=5e-12, temperature=300.0)
    return clean_run(deck_from_text(f"deck\n{body}\n.end\n"), request, ["v(o)"])


@pytest.mark.parametrize(
    ("model", "power", "exponent"),
    [
        (f"{BSIM4} fnoimod=0 kf=1e-25 af=1.3 ef=0.9", 1.3, 0.9),
        ("level=8 vth0=0.4 tox=2n noimod=1 kf=1e-25 af=1.2 ef=1.1", 1.2, 1.1),
    ],
)
def test_the_exponents_of_a_card_come_back(model: str, power: float, exponent: float) -> None:
    run = run_of(STACK.format(model))
    found = with_models(run, NoiseSettings(), SWING, gammas=True)
    for name in ("m.x1.m1", "m.x1.m2"):
        law = found.flicker[name]
        # Measured through a circuit that is solved to 1e-6 and better.
        assert law.current_exponent == pytest.approx(power, abs=1e-4)
        assert law.frequency_exponent == pytest.approx(exponent, abs=1e-6)
    assert left_out(run, found) == ()
    assert len(left_out(run, NoiseSettings())) == 2


@pytest.mark.parametrize("drain", [0.05, 1.5])
@pytest.mark.parametrize("length", ["0.04u", "0.2u", "1u"])
def test_currents_are_those_of_small_signals(length: str, drain: float) -> None:
    """White and 1/f parts of a device at rest, of which BSIM4's white one is 0.6 to 2 times 2/3."""
    body = f"v1 in 0 dc 0.8 ac 1\nvd vdd 0 {drain}\nrd vdd o 100\n"
    body += f"m1 o in 0 0 n w=10u l={length}\n.model n nmos {BSIM4} fnoimod=1"
    run = run_of(body, stop=1e-10)
    settings = with_models(run, NoiseSettings(), [5e-11], gammas=True)
    request = NoiseRequest("v(o)", "v1", 1.0, 10.0, 1, temperature=300.0, by_device=True)
    parts = simulate_noise(run.deck, request).by_device
    own, resistor = noise_currents(run, settings)[::-1]
    assert (own.device, resistor.device) == ("m1", "rd")
    thermal = parts["rd"]["thermal"][0]
    # Both stand between the output and a held node, so that the circuit's gain cancels; the
    # operating points agree within the transient's reltol of 1e-4.
    white = float(own.white[-1] / resistor.white[-1])
    assert white == pytest.approx(parts["m1"]["channel"][0] / thermal, rel=1e-3, abs=0.0)
    slow = float(own.slow[-1] / resistor.white[-1])
    assert slow == pytest.approx(parts["m1"]["flicker"][0] / thermal, rel=1e-3, abs=0.0)


def test_a_factor_is_the_mean_by_power() -> None:
    run = run_of(STACK.format(BSIM4))
    each = [with_models(run, NoiseSettings(), [at], gammas=True).gammas for at in SWING]
    whole = with_models(run, NoiseSettings(), SWING, gammas=True).gammas
    for name, factor in whole.items():
        values = [gammas[name] for gammas in each]
        assert min(values) < factor < max(values)
        assert max(values) > 1.2 * min(values)  # the swing is wide enough for the mean to matter


def test_a_device_that_is_off_at_the_instants_is_asked_where_it_conducts() -> None:
    """Off, the model's noise over its conductance is hundreds; on, it is that of the channel."""
    body = "v1 in 0 pulse(0 0.8 1n 10p 10p 0.3n)\nvd vdd 0 1.5\nrd vdd o 100\n"
    body += f"m1 o in 0 0 n w=10u l=0.2u\n.model n nmos {BSIM4}"
    run = run_of(body)
    on, off, both = (
        with_models(run, NoiseSettings(), instants, gammas=True)
        for instants in ([1.2e-9], [0.5e-9], [0.5e-9, 1.2e-9])
    )
    assert 0.6 < on.gammas["m1"] < 1.0
    # What it makes while it is off is nothing beside that, to 1e-6 and less.
    assert both.gammas["m1"] == pytest.approx(on.gammas["m1"], rel=1e-6)
    # The greatest conductance lies on the edge, where the overshoot through the gate differs.
    assert off.gammas["m1"] == pytest.approx(on.gammas["m1"], rel=0.05)
    assert off.flicker["m1"].coefficient == pytest.approx(on.flicker["m1"].coefficient, rel=0.05)


def test_what_is_given_goes_first() -> None:
    run = run_of(STACK.format(BSIM4))
    law = Flicker(1e-12)
    given = NoiseSettings(gammas={"M.X1.M1": 3.0}, flicker={"m.x1.m2": law})
    found = with_models(run, given, SWING[:1], gammas=True)
    assert found.gammas["m.x1.m1"] == 3.0
    assert found.gammas["m.x1.m2"] != 2 / 3
    assert found.flicker["m.x1.m2"] == law
    by_model = with_models(run, NoiseSettings(gammas={"N": 3.0}), SWING[:1], gammas=True)
    assert dict(by_model.gammas) == {"n": 3.0}
    without = with_models(run, NoiseSettings(gamma=3.0), SWING[:1], gammas=False)
    assert dict(without.gammas) == {}
    assert set(without.flicker) == {"m.x1.m1", "m.x1.m2"}


def test_level_1_is_left_to_its_formula() -> None:
    run = run_of(STACK.format("level=1 vto=0.4 kp=100u"))
    settings = NoiseSettings()
    assert with_models(run, settings, SWING, gammas=True) is settings


def test_a_device_between_held_nets_is_left_out() -> None:
    body = f"v1 in 0 0.8\nvd d 0 1\nro o 0 1k\nm1 d in 0 0 n w=1u l=1u\n.model n nmos {BSIM4}"
    run = run_of(body, stop=1e-10)
    found = with_models(run, NoiseSettings(), [5e-11], gammas=True)
    assert dict(found.gammas) == {}
    assert left_out(run, found) == ("m1: the 1/f noise of its model 'n'",)


def test_noise_without_a_law_of_the_current_is_left_out() -> None:
    """The same current twice, in saturation and without voltage: a trap term that tells them."""
    body = "v1 in 0 pwl(0 0.6 1n 2)\nvd d 0 pwl(0 2 1n 0)\nrd d o 1\nm1 o in 0 0 n w=1u l=1u\n"
    body += f".model n nmos {BSIM4} noia=1e41 noib=0 noic=0"
    run = run_of(body, stop=1e-9)
    instants = [k * 1e-10 for k in range(11)]
    found = with_models(run, NoiseSettings(), instants, gammas=True)
    assert dict(found.flicker) == {}
    # A long channel, from saturation to none: 2/3 to 1 of the conductance that stands for both.
    assert 0.6 < found.gammas["m1"] < 1.1
    assert left_out(run, found) == ("m1: the 1/f noise of its model 'n'",)
