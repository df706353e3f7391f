"""Oracle: closed forms of linear circuits (kT/C, 4kTR, 2qI, 4kT(2/3)gm) and scipy's filters."""

import math

import numpy as np
import pytest
from scipy import constants, signal

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.flicker import Flicker
from cosim.circuit.generators import noise_currents, noise_grid, noise_samples
from cosim.circuit.injection import device_noise, with_currents
from cosim.circuit.netlist import deck_from_text
from cosim.circuit.noise import NoiseRequest, simulate_noise
from cosim.circuit.noise_parts import NoiseTemperatures
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.simulator import simulate
from cosim.errors import InputError, UnknownNameError
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"

STEP = 1e-10
COUNT = 100_000
NYQUIST = 1 / (2 * STEP)
# Of four standard deviations: a right circuit fails at one seed of 16000, and the seeds are fixed.
SIGMAS = 4.0


def clean(body: str, probes: list[str], count: int = COUNT, kelvin: float = 300.0) -> CleanRun:
    """Run the elements of a deck without noise over `count` steps."""
    request = TransientRequest(stop=count * STEP, step=STEP, temperature=kelvin)
    return clean_run(deck_from_text(f"deck\n{body}\n.end\n"), request, probes)


def settled(run: CleanRun, values: np.ndarray, count: int = 10) -> np.ndarray:
    """Values behind the first steps, which ngspice makes smaller: the step is even from there."""
    assert np.ptp(np.diff(run.result.time[count:-1])) < 1e-6 * STEP  # rounding of times
    return values[count:-1]


RESISTOR = "v1 in 0 dc 0 ac 1\nr1 in out 1k\nrbig out 0 1e12 noisy=0"
LOW_PASS = "v1 in 0 dc 1\nr1 in out 1k\nc1 out 0 {c}"


class TestResistor:
    @pytest.mark.parametrize("kelvin", [300.0, pytest.param(4.2, marks=pytest.mark.full)])
    def test_johnson_noise(self, validate: Validate, kelvin: float) -> None:
        run = clean(RESISTOR, ["v(out)"])
        settings = NoiseSettings(NoiseTemperatures(resistor=kelvin))
        noise = settled(run, device_noise(run, 1, settings).samples["v(out)"])
        quantity = f"injected noise of 1 kohm at {kelvin:g} K, mean density over 5 GHz"
        source = sources.JOHNSON_NYQUIST + ", 4 k T R"
        # The mean of n squares of independent numbers scatters by sqrt(2/n) of itself, 0.45 %.
        rel = SIGMAS * math.sqrt(2 / noise.size)
        got = np.mean(noise**2) / NYQUIST
        validate(quantity, source, 4 * constants.k * kelvin * 1e3, got, "V^2/Hz", rel=rel)

    @pytest.mark.full
    @pytest.mark.parametrize("kelvin", [300.0, 4.2])
    def test_capacitor(self, validate: Validate, kelvin: float) -> None:
        run = clean(LOW_PASS.format(c="0.4p"), ["v(out)"])
        settings = NoiseSettings(NoiseTemperatures(resistor=kelvin))
        noise = settled(run, device_noise(run, 2, settings).samples["v(out)"])
        tau = 4e-10
        quantity = f"injected noise on 0.4 pF at {kelvin:g} K, variance"
        source = sources.EQUIPARTITION + ", k T/C less the part above the grid's band"
        # The trapezoidal rule makes of the pole and of white numbers of the variance S/(2 h) the
        # variance S/(4 tau)/(1 + h/(2 tau)): what is missing lies above the band of the grid.
        wanted = constants.k * kelvin / 0.4e-12 / (1 + STEP / (2 * tau))
        # Numbers whose correlation falls as exp(-t/tau): the variance scatters by sqrt(2 tau/T).
        rel = SIGMAS * math.sqrt(2 * tau / (COUNT * STEP))
        validate(quantity, source, wanted, float(np.mean(noise[50:] ** 2)), "V^2", rel=rel)

    def test_is_the_filtered_current(self) -> None:
        run = clean(LOW_PASS.format(c="1p"), ["v(out)"], count=2000)
        currents = noise_currents(run, NoiseSettings())
        drawn = noise_samples(run, NoiseSettings(), currents, 3)[0]
        grid = noise_grid(run)
        noise = device_noise(run, 3).samples["v(out)"][run.result.time.searchsorted(grid)]
        # The current leaves "in" and enters "out", into R beside C, by the trapezoidal rule.
        edge = STEP / (2 * 1e-9)
        wanted = signal.lfilter([edge * 1e3] * 2, [1 + edge, edge - 1], drawn)
        # Of the first step ngspice makes smaller ones, and the last one is short; the circuit
        # forgets 1e-13 in 300 steps. The rest is the quantisation of the currents.
        bound = 1e-6 * np.abs(wanted).max()
        assert noise[300:-1] == pytest.approx(wanted[300:-1], abs=bound)


class TestActive:
    def test_shot_noise(self, validate: Validate) -> None:
        body = "v1 a 0 0.7\nd1 a 0 dm\n.model dm d is=1e-14 tt=1n cjo=1p tnom=26.85"
        run = clean(body, ["i(v1)"])
        current = 1e-14 * math.exp(0.7 * constants.e / (constants.k * 300.0))
        # Into a held voltage flows the current itself, whatever the junction's capacitance.
        noise = settled(run, device_noise(run, 4).samples["i(v1)"])
        rel = SIGMAS * math.sqrt(2 / noise.size)
        quantity = "injected shot noise of a diode at 0.7 V, mean density over 5 GHz"
        wanted = 2 * constants.e * current
        validate(quantity, sources.SCHOTTKY, wanted, np.mean(noise**2) / NYQUIST, "A^2/Hz", rel=rel)

    @pytest.mark.parametrize(
        "channel", ["conductance", pytest.param("transconductance", marks=pytest.mark.full)]
    )
    def test_channel_noise(self, validate: Validate, channel: str) -> None:
        body = (
            "v1 in 0 dc 0.7 ac 1\nvd vdd 0 1.5\nrd vdd out 500 noisy=0\n"
            "m1 out in 0 0 n w=10u l=1u\n.model n nmos level=1 vto=0.4 kp=600u tnom=26.85"
        )
        run = clean(body, ["v(out)"])
        noise = settled(run, device_noise(run, 5, NoiseSettings(channel=channel)).samples["v(out)"])
        request = NoiseRequest("v(out)", "v1", 1e3, 1e9, 5, temperature=300.0, by_device=True)
        small = simulate_noise(run.deck, request).by_device["m1"]["channel"][0]
        rel = SIGMAS * math.sqrt(2 / noise.size)
        quantity = f"injected noise of a channel in saturation, by its {channel}, over 5 GHz"
        wanted = 4 * constants.k * 300.0 * (2 / 3) * 600e-6 * 10 * 0.3 * 500.0**2
        got = np.mean(noise**2) / NYQUIST
        validate(quantity, sources.VAN_DER_ZIEL, wanted, got, "V^2/Hz", rel=rel)
        # The densities of the two methods, without the draw: ngspice's constant is 3.5e-7 off,
        # and a transient's operating point within reltol of 1e-4 of that of `.noise`.
        white = noise_currents(run, NoiseSettings(channel=channel))[0].white[-1]
        assert white * 500.0**2 == pytest.approx(small, rel=1e-4, abs=0.0)

    @pytest.mark.parametrize("level", [1, 2, 3])
    @pytest.mark.parametrize("size", ["w=10u l=1u", "w=20u l=0.5u m=3"])
    def test_flicker_of_the_card_is_that_of_small_signals(self, level: int, size: str) -> None:
        body = (
            f"v1 in 0 dc 0.7 ac 1\nvd vdd 0 1.5\nrd vdd out 100\nm1 out in 0 0 n {size}\n"
            f".model n nmos level={level} vto=0.4 kp=100u tox=5n ld=0.05u kf=1e-25 af=1.2"
        )
        run = clean(body, ["v(out)"], count=100)
        request = NoiseRequest("v(out)", "v1", 1.0, 1e3, 5, temperature=300.0, by_device=True)
        parts = simulate_noise(run.deck, request).by_device["m1"]
        current = next(item for item in noise_currents(run, MODEL) if item.device == "m1")
        # Both parts flow between drain and source, so that the circuit's gain cancels.
        got = current.slow[-1] / current.white[-1]
        # Two operating points within reltol, in a power of the current.
        assert got == pytest.approx(parts["flicker"][0] / parts["channel"][0], rel=1e-4, abs=0.0)

    @pytest.mark.parametrize(
        ("device", "part"),
        [
            ("d1 out 0 n\n.model n d is=1e-12 cjo=1p tt=1n", "shot"),
            ("q1 out in 0 n m=2\n.model n npn is=1e-15 bf=100 cje=1p cjc=1p tf=1n", "shot"),
            ("q1 out inp vdd n\n.model n pnp is=1e-15 bf=100", "shot"),
            ("j1 out 0 0 n\n.model n njf vto=-1 beta=1m", "channel"),
            ("m1 out in 0 0 n w=2u l=1u m=2\n.model n nmos level=3 vto=0.4 kp=100u", "channel"),
            ("m1 out in vdd vdd n w=2u l=1u\n.model n pmos level=1 vto=-0.4 kp=100u", "channel"),
        ],
    )
    def test_densities_are_those_of_small_signals(self, device: str, part: str) -> None:
        body = f"v1 in 0 dc 0.7 ac 1\nvp inp 0 0.8\nvd vdd 0 1.5\nrd vdd out 100\n{device}"
        run = clean(body, ["v(out)"], count=100)
        request = NoiseRequest("v(out)", "v1", 1.0, 1e3, 1, temperature=300.0, by_device=True)
        parts = simulate_noise(run.deck, request).by_device
        white: dict[str, float] = {}
        for item in noise_currents(run, MODEL):
            if "out" in item.nodes:  # The base's current of a held base does not reach the output.
                white[item.device] = float(item.white[-1])
        small = parts[device.split()[0]][part][0] / parts["rd"]["thermal"][0]
        # Both stand between the output and a held node, so that the circuit's gain cancels. The
        # operating points agree within reltol; a diode's current within that of its exponent.
        assert white[device.split()[0]] / white["rd"] == pytest.approx(small, rel=2e-4, abs=0.0)

    def test_an_excess_factor_goes_by_device_then_by_model(self) -> None:
        body = "vd d 0 1\nm1 d d 0 0 n w=2u l=1u\nm2 d d 0 0 n w=2u l=1u\n.model n nmos level=1"
        run = clean(body, ["i(vd)"], count=10)
        settings = NoiseSettings(gamma=1.0, gammas={"N": 2.0, "M2": 3.0})
        plain = noise_currents(run, NoiseSettings(gamma=1.0))
        given = noise_currents(run, settings)
        ratios = [b.white[-1] / a.white[-1] for a, b in zip(plain, given, strict=True)]
        assert ratios == pytest.approx([2.0, 3.0], rel=1e-12)
        with pytest.raises(UnknownNameError, match="'m3'"):
            noise_currents(run, NoiseSettings(gammas={"m3": 1.0}))

    def test_a_bsim4_channel_is_near_to_its_own_noise(self) -> None:
        # A long channel: the model of the charge, which the conductance stands for, is BSIM4's.
        # Measured: 3 % in the triode region and 1 % in saturation; the transconductance alone
        # gives a fortieth of the noise in the triode region.
        for gate, drain in ((0.7, 1.5), (1.2, 0.05)):
            body = (
                f"v1 in 0 dc {gate} ac 1\nvd vdd 0 {drain}\nrd vdd out 100\n"
                "m1 out in 0 0 n w=10u l=1u\n.model n nmos level=14 vth0=0.4 toxe=2n"
            )
            run = clean(body, ["v(out)"], count=100)
            request = NoiseRequest("v(out)", "v1", 1e8, 1e9, 5, temperature=300.0, by_device=True)
            result = simulate_noise(run.deck, request).by_device
            white = {item.device: item.white[-1] for item in noise_currents(run, NoiseSettings())}
            small = result["m1"]["channel"][-1] / result["rd"]["thermal"][-1]
            assert white["m1"] / white["rd"] == pytest.approx(small, rel=0.05, abs=0.0)


MODEL = NoiseSettings(channel="transconductance")
NETWORK = """v1 in 0 dc 1
r1 in x1.a 1k
x1 out s
.subckt s out
rinner a out 3k
cinner a 0 0.1p
.ends
r2 out 0 2k
c2 out 0 0.2p"""


@pytest.fixture(scope="module")
def network() -> CleanRun:
    """Give the clean run of three resistors, one of them in a subcircuit."""
    return clean(NETWORK, ["v(out)", "v(x1.a) - v(out)"], count=5000)


class TestSeeds:
    def test_same_seed_same_numbers(self, network: CleanRun) -> None:
        first, again = device_noise(network, 7), device_noise(network, 7)
        for probe, samples in first.samples.items():
            assert np.array_equal(samples, again.samples[probe])
        assert first.devices == ("r1", "r2", "r.x1.rinner")

    def test_other_seeds_and_other_devices_are_not_correlated(self, network: CleanRun) -> None:
        currents = noise_currents(network, NoiseSettings())
        drawn = [noise_samples(network, NoiseSettings(), currents, seed) for seed in (0, 1)]
        table = np.corrcoef(np.vstack(drawn))
        apart = table[~np.eye(6, dtype=bool)]
        assert np.abs(apart).max() < SIGMAS / math.sqrt(5000)

    def test_devices_add_up(self, network: CleanRun) -> None:
        whole = device_noise(network, 8)
        alone = [device_noise(network, 8, devices=[name]) for name in whole.devices]
        assert [item.devices for item in alone] == [(name,) for name in whole.devices]
        for probe, samples in whole.samples.items():
            total = sum(item.samples[probe] for item in alone)
            # Linear; the currents are written to 5e-8 of their peak, and the runs of a linear
            # circuit differ by rounding.
            assert total == pytest.approx(samples, abs=1e-6 * np.abs(samples).max())

    def test_scale_is_divided_out(self, network: CleanRun) -> None:
        samples = device_noise(network, 9).samples["v(out)"]
        scaled = device_noise(network, 9, NoiseSettings(scale=50.0)).samples["v(out)"]
        assert scaled == pytest.approx(samples, abs=1e-6 * np.abs(samples).max())

    def test_an_unknown_device_is_named(self, network: CleanRun) -> None:
        with pytest.raises(UnknownNameError, match=r"r\.x1\.rinnr") as caught:
            device_noise(network, 1, devices=["R.x1.rinnr"])
        assert "r.x1.rinner" in str(caught.value)


class TestBand:
    def test_nothing_is_above_it(self) -> None:
        run = clean(RESISTOR, ["v(out)"], count=20_000)
        settings = NoiseSettings(bandwidth=1e9)
        noise = device_noise(run, 1, settings)
        assert noise.highest_frequency == 1e9
        assert noise.lowest_frequency == pytest.approx(1 / (20_000 * STEP))
        currents = noise_currents(run, settings)
        drawn = noise_samples(run, settings, currents, 1)[0]
        density = np.abs(np.fft.rfft(drawn * signal.windows.hann(drawn.size))) ** 2
        f = np.fft.rfftfreq(drawn.size, STEP)
        inside, outside = density[f < 0.99e9].mean(), density[f > 1.05e9].mean()
        assert outside < 1e-6 * inside
        # White: 4 k T/R over the band alone.
        wanted = 4 * constants.k * 300.0 / 1e3 * 1e9
        rel = SIGMAS * math.sqrt(2 / (2 * 1e9 * 20_000 * STEP))
        assert np.mean(drawn**2) == pytest.approx(wanted, rel=rel, abs=0.0)

    def test_wider_than_the_grid_is_refused(self) -> None:
        run = clean(RESISTOR, ["v(out)"], count=100)
        with pytest.raises(InputError, match="must not exceed half over the step, 5e"):
            device_noise(run, 1, NoiseSettings(bandwidth=6e9))


class TestFlicker:
    body = (
        "v1 in 0 dc 0.7\nvd vdd 0 1.5\nrd vdd out 500 noisy=0\nm1 out in 0 0 n w=10u l=1u\n"
        ".model n nmos level=1 vto=0.4 kp=600u tnom=26.85"
    )

    @pytest.mark.parametrize(
        "exponent",
        [pytest.param(0.8, marks=pytest.mark.full), 1.0, pytest.param(1.2, marks=pytest.mark.full)],
    )
    def test_spectrum(self, exponent: float) -> None:
        run = clean(self.body, ["v(out)"], count=4096)
        given = Flicker(1e-9, 1.0, exponent)
        # With a channel of almost no noise of its own the drawn numbers are 1/f alone.
        settings = NoiseSettings(NoiseTemperatures(channel=1e-6), flicker={"N": given}, slowest=1.0)
        currents = noise_currents(run, settings)
        drawn = [noise_samples(run, settings, currents, seed)[0] for seed in range(200)]
        spectra = np.abs(np.fft.rfft(np.array(drawn)[:, :4096], axis=1)) ** 2
        density = 2 * STEP * spectra.mean(axis=0) / 4096
        f = np.fft.rfftfreq(4096, STEP)
        current = 0.5 * 600e-6 * 10 * 0.3**2
        wanted = 1e-9 * current / f[20:1500] ** exponent
        # Mean of 1480 ratios of 200 spectra: 0.2 % by the draw; the record's period is one or two
        # samples longer than the window, which leaks 1 % of the steep end upwards.
        assert np.mean(density[20:1500] / wanted) == pytest.approx(1.0, abs=0.02)
        # The constant: the band from 1 Hz to half of the first bin, and what is above it averages
        # to less than 1 % of that.
        means = np.mean(drawn, axis=1)
        edge = f[1] / 2
        rise = 1 - exponent
        band = math.log(edge) if rise == 0 else (edge**rise - 1) / rise
        rel = SIGMAS * math.sqrt(2 / 200) + 0.02
        assert np.mean(means**2) == pytest.approx(1e-9 * current * band, rel=rel, abs=0.0)

    def test_a_name_that_does_not_exist_is_refused(self) -> None:
        run = clean(self.body, ["v(out)"], count=10)
        with pytest.raises(UnknownNameError, match="'m2'"):
            device_noise(run, 1, NoiseSettings(flicker={"m2": Flicker(1e-20)}))

    def test_what_is_not_read_from_the_card_is_named(self) -> None:
        body = self.body.replace("level=1 vto=0.4 kp=600u", "level=14 vth0=0.4 toxe=2n")
        run = clean(body, ["v(out)"], count=10)
        assert device_noise(run, 1).left_out == ("m1: the 1/f noise of its model 'n'",)
        given = NoiseSettings(flicker={"m1": Flicker(1e-20)})
        assert device_noise(run, 1, given).left_out == ()


class TestCurrents:
    def test_more_than_one_file(self) -> None:
        # ngspice breaks rows off at 511 characters and says nothing: 45 columns need two files.
        body = "v1 in 0 1\n" + "\n".join(f"r{k} n{k} 0 {k + 1}" for k in range(45))
        deck = deck_from_text(f"deck\n{body}\n.end\n")
        times = np.arange(11) * 1e-9
        amplitude = np.array([(-1.0) ** k * 1e-6 * (k + 1) for k in range(45)])
        samples = amplitude[:, np.newaxis] * np.linspace(0.0, 1.0, 11)
        nodes = [("0", f"n{k}") for k in range(45)]
        altered = with_currents(deck, nodes, times, samples)
        rows = [row for file in altered.data_files for row in file.content.splitlines()]
        assert len(altered.data_files) == 2
        assert max(map(len, rows)) < 511
        saves = tuple(f"v(n{k})" for k in range(45))
        result = simulate(altered, TransientRequest(stop=20e-9, step=1e-9, saves=saves))
        for k in range(45):
            ramp = np.interp(result.time, times, samples[k]) * (k + 1)
            # The last value holds. Seven digits of the peak, and gmin.
            bound = 1e-7 * np.abs(ramp).max()
            assert result.vectors[f"v(n{k})"] == pytest.approx(ramp, abs=bound)

    @pytest.mark.parametrize(
        ("times", "samples"),
        [
            ([0.0, 1.0], [[0.0]]),
            ([0.0, 0.0], [[0.0, 1.0]]),
            ([1.0, 2.0], [[0.0, 1.0]]),
            ([0.0], [[0.0]]),
            ([0.0, 1.0], [[0.0, math.nan]]),
        ],
    )
    def test_impossible_samples_are_refused(
        self, times: list[float], samples: list[list[float]]
    ) -> None:
        deck = deck_from_text("deck\nr1 a 0 1\n.end\n")
        with pytest.raises(InputError):
            with_currents(deck, [("a", "0")], np.array(times), np.array(samples))

    def test_names_that_are_taken_are_left_alone(self) -> None:
        deck = deck_from_text("deck\nr1 a 0 1k\nv1 b 0 0\n.end\n")
        times, samples = np.array([0.0, 1e-9]), np.array([[1e-3, 1e-3]])
        twice = with_currents(
            with_currents(deck, [("0", "a")], times, samples), [("0", "a")], times, samples
        )
        result = simulate(twice, TransientRequest(stop=1e-9, step=1e-10, saves=("v(a)",)))
        assert result.vectors["v(a)"] == pytest.approx(2.0, rel=1e-6, abs=0.0)


@pytest.mark.parametrize(
    "values",
    [
        {"gamma": 0.0},
        {"scale": -1.0},
        {"bandwidth": math.inf},
        {"slowest": 0.0},
        {"channel": "gm"},
        {"gammas": {"m1": -1.0}},
    ],
)
def test_impossible_settings_are_refused(values: dict[str, float]) -> None:
    with pytest.raises(InputError, match="must be"):
        NoiseSettings(**values)
