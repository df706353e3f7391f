"""Oracle: symmetry, a noise at the input that is known, and the square root of the temperature."""

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.deck import Deck
from cosim.circuit.netlist import deck_from_text, load_deck, with_parameters
from cosim.circuit.noise_parts import NoiseTemperatures
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.noisy_run import run_with_noise
from cosim.circuit.simulator import simulate
from cosim.dsp.decisions import fit_probit
from cosim.errors import InputError
from cosim.waveform import FloatArray

pytestmark = pytest.mark.ngspice

NETLISTS = Path(__file__).parents[2] / "netlists"
FOLDER = NETLISTS / "comparator"
DECK = FOLDER / "comparator.cir"
STEP = 5e-12
PERIOD = 1e-9
# The clock rises at 0.2 ns of each period; q is read shortly before it rises again.
EDGE, READ = 0.225e-9, 1.1e-9
OFFSET = -1.622e-3  # V, of the default skew; a design number of NOTES.md, as is the next.
NOISE = 38e-6  # V at 4 K


def request(cycles: int) -> TransientRequest:
    """A run of so many clock cycles."""
    saves = ("v(q)", "v(qb)", "i(vsup)")
    return TransientRequest(stop=(cycles + 0.5) * PERIOD, step=STEP, saves=saves)


def ramp(start: float, stop: float, cycles: int, **parameters: float) -> tuple[Deck, FloatArray]:
    """The deck with an input that rises evenly, and its level at each decision."""
    time = cycles * PERIOD
    values = {"v_start": start, "v_stop": stop, "t_ramp": time, **parameters}
    levels = start + (stop - start) * (EDGE + PERIOD * np.arange(cycles - 1)) / time
    return with_parameters(load_deck(DECK), values), levels


def decided(time: FloatArray, q: FloatArray, cycles: int) -> FloatArray:
    """Decisions of all but the last cycle."""
    return np.interp(READ + PERIOD * np.arange(cycles - 1), time, q) > 0.55


def crossing(start: float, stop: float, cycles: int = 40, **parameters: float) -> float:
    """The level at which the decision changes, half-way between two decisions."""
    deck, levels = ramp(start, stop, cycles, **parameters)
    result = simulate(deck, request(cycles))
    assert result.warnings == ()
    found = decided(result.time, result.vectors["v(q)"], cycles)
    both = decided(result.time, result.vectors["v(qb)"], cycles)
    assert (found != both).all()
    changes = np.flatnonzero(np.diff(found.astype(int)))
    assert changes.size == 1
    return float(np.mean(levels[changes[0] : changes[0] + 2]))


def test_a_symmetric_latch_has_no_offset_and_no_memory() -> None:
    # Half the distance of two decisions, 5 uV.
    assert abs(crossing(-0.2e-3, 0.2e-3, skew=0.0)) <= 5e-6
    assert abs(crossing(0.2e-3, -0.2e-3, skew=0.0)) <= 5e-6


@pytest.mark.full
def test_offset_follows_the_mismatch_of_the_input_pair() -> None:
    narrow = 2 * abs(OFFSET) / 40  # Distance of two decisions of the first two.
    found = crossing(2 * OFFSET, 0.0)
    assert found == pytest.approx(OFFSET, abs=narrow)
    assert crossing(-2 * OFFSET, 0.0, skew=-0.02) == pytest.approx(-found, abs=narrow)
    # In proportion to a small mismatch; the next order is 1 %.
    assert crossing(4 * OFFSET, 0.0, skew=0.04) == pytest.approx(2 * found, abs=3 * narrow)
    # The threshold moves with the reference.
    moved = crossing(2 * OFFSET + 5e-3, 5e-3, v_threshold=5e-3)
    assert moved == pytest.approx(found + 5e-3, abs=narrow)


def test_power() -> None:
    deck, _ = ramp(-10e-3, 10e-3, 20)
    result = simulate(deck, request(20))
    supply = -np.trapezoid(result.vectors["i(vsup)"], result.time) / result.time[-1]
    assert 1.1 * supply == pytest.approx(118e-6, rel=0.05)


@pytest.mark.full
def test_decisions_tell_a_noise_that_is_known() -> None:
    cycles, noise = 200, 150e-6
    random = np.random.default_rng(5)
    levels = np.linspace(-0.4e-3, 0.4e-3, cycles - 1)
    inputs = levels + random.normal(0.0, noise, levels.size)
    # Each value stands for one period and changes while the latch is held at precharge.
    knots = [
        f"{PERIOD * n + shift:.6e} {value:.9e}"
        for n, value in enumerate(inputs)
        for shift in (-0.19e-9 * (n > 0), 0.79e-9)
    ]
    lines = DECK.read_text().splitlines()
    place = next(n for n, line in enumerate(lines) if line.startswith("vin "))
    lines[place : place + 1] = ["vin emf cm pwl("] + [f"+ {knot}" for knot in knots] + ["+ )"]
    deck = deck_from_text("\n".join(lines), name="known noise", folder=FOLDER)
    result = simulate(with_parameters(deck, {"skew": 0.0}), request(cycles))
    fit = fit_probit(levels, decided(result.time, result.vectors["v(q)"], cycles))
    # Four standard errors, some 10 % of the noise.
    assert fit.noise == pytest.approx(noise, abs=4 * fit.noise_error)
    assert abs(fit.offset) < 4 * fit.offset_error
    # And of the very numbers drawn: the decision is that of a comparator without offset.
    assert fit == fit_probit(levels, inputs > 0)


def noisy_decisions(
    run: CleanRun, temperature: float, seeds: Sequence[int], cycles: int
) -> FloatArray:
    """Decisions with the noise of all devices, seed after seed."""
    settings = NoiseSettings(NoiseTemperatures(temperature, temperature, temperature))
    runs = (run_with_noise(run, seed, settings) for seed in seeds)
    found = [decided(noisy.time, noisy.vectors["v(q)"], cycles) for noisy in runs]
    return np.concatenate(found)


def test_a_run_with_noise_is_repeated_by_its_seed_and_refuses_a_scale() -> None:
    deck, _ = ramp(OFFSET - 0.1e-3, OFFSET + 0.1e-3, 6)
    run = clean_run(deck, request(6), ["v(q)", "v(on)"])
    settings = NoiseSettings(NoiseTemperatures(4.0, 4.0, 4.0))
    one, again, other = (run_with_noise(run, seed, settings) for seed in (3, 3, 4))
    assert np.array_equal(one.vectors["v(on)"], again.vectors["v(on)"])
    assert not np.array_equal(one.vectors["v(on)"], other.vectors["v(on)"])
    silent = run_with_noise(run, 3, settings, devices=())
    assert np.array_equal(silent.vectors["v(on)"], run.result.vectors["v(on)"])
    with pytest.raises(InputError, match=r"needs NoiseSettings.scale = 1, got 0.1"):
        run_with_noise(run, 3, NoiseSettings(scale=0.1))


@pytest.mark.full
def test_noise_of_the_devices_grows_with_the_root_of_the_temperature() -> None:
    cycles, seeds = 120, (0, 1, 2)
    deck, levels = ramp(OFFSET - 0.14e-3, OFFSET + 0.14e-3, cycles)
    run = clean_run(deck, request(cycles), ["v(q)"])
    cold, warm = (
        fit_probit(np.tile(levels, len(seeds)), noisy_decisions(run, temperature, seeds, cycles))
        for temperature in (4.0, 16.0)
    )
    for fit in (cold, warm):
        # Four standard errors, and two of the levels of the clean run.
        assert fit.offset == pytest.approx(OFFSET, abs=4 * fit.offset_error + 5e-6)
    assert cold.noise == pytest.approx(NOISE, abs=4 * cold.noise_error)
    # Twice the noise at four times the temperature: the same numbers scaled. The two fits share
    # their draws, which makes the bound wider than it need be.
    bound = 4 * np.hypot(2 * cold.noise_error, warm.noise_error)
    assert warm.noise == pytest.approx(2 * cold.noise, abs=bound)
    assert warm.noise > 1.4 * cold.noise


@pytest.mark.parametrize(("section", "supply"), [("ss", 1.0), ("ff", 1.2)])
def test_corners_decide(section: str, supply: float) -> None:
    cycles = 20
    values = {"vdd": supply, "v_start": -4e-3, "v_stop": 2e-3, "t_ramp": cycles * PERIOD}
    deck = with_parameters(load_deck(DECK, sections={"models.lib": section}), values)
    result = simulate(deck, request(cycles))
    found = decided(result.time, result.vectors["v(q)"], cycles)
    levels = -4e-3 + 6e-3 * (EDGE + PERIOD * np.arange(cycles - 1)) / (cycles * PERIOD)
    # The offset of a mismatch is a part of the overdrive of the pair: within a third of tt's.
    assert not found[levels < 1.33 * OFFSET].any()
    assert found[levels > 0.67 * OFFSET].all()


def test_cards_are_those_of_the_modulator() -> None:
    ours = (FOLDER / "models.lib").read_text()
    assert ours == (NETLISTS / "pulse_modulator" / "models.lib").read_text()
