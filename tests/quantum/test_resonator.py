"""Oracles: closed forms of input-output theory, power that is conserved, a lumped LCR circuit."""

import math

import numpy as np
import pytest

from cosim.errors import InputError
from cosim.quantum.incident import incident_amplitude
from cosim.quantum.resonator import (
    Resonator,
    amplitude_for_photons,
    scattering,
    steady_field,
    wait_for_photons,
)
from tests import sources
from tests.quantum.readouts import (
    CHI,
    FREQUENCY,
    KAPPA,
    TURN,
    hanging,
    reflecting,
    resonance,
    transmitting,
)
from tests.validation import Validate

TOPIC = "readout"
# Seven digits in the expected value. A frequency in Hz keeps a detuning of MHz to some 1e-13.
DIGITS = 1e-6


def test_reflection(validate: Validate) -> None:
    """Card D01: kc/2 pi = 5 MHz, ki/2 pi = 0.5 MHz."""
    resonator = reflecting(TURN * 5e6, TURN * 0.5e6)
    top = resonance(resonator, 0)
    # Delta = omega_r - omega is half of kappa for a drive below the resonance.
    for name, drive, size, angle in (
        ("on resonance", top, 0.8181818, 180.0),
        ("half a linewidth below", top - 2.75e6, 0.9136251, 84.28941),
    ):
        r = complex(scattering(resonator, 0, drive))
        source = sources.GARDINER_COLLETT
        validate(f"|r| {name}", source, size, abs(r), rel=DIGITS, card="D01")
        phase = math.degrees(np.angle(r)) % 360
        validate(f"arg r {name}", source, angle, phase, "deg", rel=DIGITS, card="D01")


def test_transmission(validate: Validate) -> None:
    """Card D02: k1, k2, ki over 2 pi = 1, 4, 1 MHz."""
    resonator = transmitting(TURN * 1e6, TURN * 4e6, TURN * 1e6)
    top = resonance(resonator, 1)
    peak = abs(complex(scattering(resonator, 1, top)))
    side = abs(complex(scattering(resonator, 1, top + 3e6)))
    reflected = 1 - math.sqrt(resonator.kappa_in) * abs(complex(steady_field(resonator, 1, 1, top)))
    checks = (
        ("power transmission on resonance", 0.4444444, peak**2, ""),
        ("insertion loss on resonance", 3.521825, -20 * math.log10(peak), "dB"),
        ("|t| half a linewidth off", 0.4714045, side, ""),
        ("reflection at the input on resonance", 0.6666667, reflected, ""),
    )
    for name, wanted, got, unit in checks:
        validate(name, sources.WALLS_MILBURN, wanted, got, unit, rel=DIGITS, card="D02")


def test_hanger(validate: Validate) -> None:
    """Card D03: fr = 6 GHz, Qi = 1e5, Qc = 2e4."""
    resonator = Resonator("hanger", 6e9, 0, TURN * 6e9 / 2e4, TURN * 6e9 / 1e5, CHI)
    top = resonance(resonator, 0)
    least = complex(scattering(resonator, 0, top)).real
    side = abs(complex(scattering(resonator, 0, top + resonator.kappa / TURN / 2)))
    absorbed = resonator.kappa_internal * abs(complex(steady_field(resonator, 0, 1, top))) ** 2
    checks = (
        ("quality of the loaded hanger", 16666.67, TURN * 6e9 / resonator.kappa, ""),
        ("least |S21|", 0.1666667, least, ""),
        ("|S21| half a linewidth off", 0.7168604, side, ""),
        ("kappa/2 pi", 360000.0, resonator.kappa / TURN, "Hz"),
        ("absorbed fraction on resonance", 0.2777778, absorbed, ""),
    )
    for name, wanted, got, unit in checks:
        validate(name, sources.PROBST, wanted, got, unit, rel=DIGITS, card="D03")


def test_a_hanger_is_a_series_circuit_across_a_line() -> None:
    """Oracle: series L, C, R to ground on a line of 50 ohm; SPICE's exp(+j omega t) conjugates."""
    quality, coupling, z0 = 1e5, 2e4, 50.0
    resonator = Resonator("hanger", 6e9, 0, TURN * 6e9 / coupling, TURN * 6e9 / quality, CHI)
    top = resonance(resonator, 0)
    inductance = coupling * z0 / 2 / (TURN * top)
    capacitance = 1 / ((TURN * top) ** 2 * inductance)
    resistance = TURN * top * inductance / quality
    f = top + np.linspace(-2e6, 2e6, 41)
    shunt = resistance + 2j * np.pi * f * inductance + 1 / (2j * np.pi * f * capacitance)
    wanted = np.conj(2 / (2 + z0 / shunt))
    # The circuit's detuning is that of the resonator up to a part (f - fr)/fr of itself, 3e-4.
    assert scattering(resonator, 0, f) == pytest.approx(wanted, abs=4e-4)


@pytest.mark.parametrize("internal", [0.0, TURN * 1e6])
@pytest.mark.parametrize("geometry", ["reflection", "transmission", "hanger"])
def test_power_is_conserved(geometry: str, internal: float) -> None:
    """What comes in goes out by a port, back by the input, or is lost."""
    resonator = {
        "reflection": reflecting(KAPPA, internal),
        "transmission": transmitting(0.3 * KAPPA, 0.7 * KAPPA, internal),
        "hanger": hanging(KAPPA, internal),
    }[geometry]
    f = FREQUENCY + np.linspace(-10e6, 10e6, 21)
    inside = steady_field(resonator, 1, 1.0, f)
    forward = np.abs(scattering(resonator, 1, f)) ** 2
    lost = internal * np.abs(inside) ** 2
    k = resonator.driven_rate
    back = {
        "reflection": np.zeros(f.size),
        "transmission": np.abs(1 - math.sqrt(k) * inside) ** 2,
        "hanger": k * np.abs(inside) ** 2,
    }[geometry]
    # Sums of a few numbers of order one, with a detuning good to 1e-13.
    assert forward + back + lost == pytest.approx(np.ones(f.size), abs=1e-11)


def test_photons_from_power(validate: Validate) -> None:
    """Card D07: -120 dBm at 6 GHz into kappa/2 pi = 5 MHz."""
    flux = incident_amplitude(1e-15, 6e9) ** 2
    source = sources.INPUT_OUTPUT
    validate("photons per second", source, 2.515317e8, flux, "1/s", rel=DIGITS, card="D07")
    cases = (
        ("reflection, no loss", reflecting(), 0.0, 32.02601),
        ("two equal ports", transmitting(KAPPA / 2, KAPPA / 2), 0.0, 16.01301),
        ("hanger, no loss", hanging(KAPPA), 0.0, 16.01301),
        ("reflection, critically coupled", reflecting(KAPPA / 2, KAPPA / 2), 0.0, 16.01301),
        ("reflection, half a linewidth off", reflecting(), 2.5e6, 16.01301),
    )
    for name, resonator, offset, wanted in cases:
        drive = resonance(resonator, 1) + offset
        # The card's flux is that of a drive at 6 GHz, wherever the resonance is.
        inside = complex(steady_field(resonator, 1, math.sqrt(flux), drive))
        quantity = f"photons in the resonator: {name}"
        validate(quantity, source, wanted, abs(inside) ** 2, rel=DIGITS, card="D07")


def test_phase_between_the_pointers(validate: Validate) -> None:
    """Card D08: chi/2 pi = 1 MHz, kappa/2 pi = 5 MHz, probed midway."""
    cases = (
        ("reflection", reflecting(), 87.20564),
        ("reflection, 2 chi = kappa", reflecting(chi=KAPPA / 2), 180.0),
        ("transmission", transmitting(KAPPA / 2, KAPPA / 2), 43.60282),
    )
    for name, resonator, wanted in cases:
        low, high = (complex(scattering(resonator, level, FREQUENCY)) for level in (0, 1))
        angle = abs(math.degrees(np.angle(high / low)))
        quantity = f"angle between the pointers in {name}"
        validate(quantity, sources.INPUT_OUTPUT, wanted, angle, "deg", rel=DIGITS, card="D08")


def test_the_sign_of_the_shift() -> None:
    """The resonance is a dip of the hanger: at f + chi for |1>, f - chi for |0>."""
    resonator = hanging(KAPPA, TURN * 1e5)
    f = FREQUENCY + np.linspace(-3e6, 3e6, 601)
    for level, place in ((0, -1e6), (1, 1e6)):
        dip = f[np.argmin(np.abs(scattering(resonator, level, f)))] - FREQUENCY
        assert dip == pytest.approx(place, abs=5e3)  # half a step of the scan


@pytest.mark.parametrize("level", [0, 1, 2])
def test_a_wanted_photon_number_is_held(level: int) -> None:
    resonator = Resonator("transmission", 6e9, KAPPA / 5, KAPPA, 0, CHI, 3.1 * CHI)
    amplitude = amplitude_for_photons(resonator, 3.7, 6.0013e9, level)
    inside = complex(steady_field(resonator, level, amplitude, 6.0013e9))
    assert abs(inside) ** 2 == pytest.approx(3.7)


def test_a_wanted_photon_number_is_the_mean_of_both_states() -> None:
    resonator = reflecting()
    amplitude = amplitude_for_photons(resonator, 4.0, 6.002e9)
    held = [
        abs(complex(steady_field(resonator, level, amplitude, 6.002e9))) ** 2 for level in (0, 1)
    ]
    assert sum(held) / 2 == pytest.approx(4.0)
    assert held[1] > 1.5 * held[0]  # It is driven near the resonance for |1>.


def test_photons_decay_with_kappa() -> None:
    resonator = reflecting()
    wait = wait_for_photons(resonator, 10.0, 0.01)
    assert wait == pytest.approx(math.log(1000) / KAPPA)
    assert wait_for_photons(resonator, 0.005, 0.01) == 0.0


@pytest.mark.parametrize(
    ("words", "changes"),
    [
        ("geometry: wanted one of .* did you mean 'hanger'", {"geometry": "hangar"}),
        ("frequency: wanted a positive number of Hz", {"frequency": 0.0}),
        ("kappa_internal: wanted at least 0 rad/s", {"kappa_internal": -1.0}),
        ("kappa_in: wanted more than 0 for the geometry 'reflection'", {"kappa_in": 0.0}),
        ("kappa_out: wanted 0 for the geometry 'reflection'", {"kappa_out": 1e6}),
        ("kappa_in: wanted 0 for the geometry 'hanger'", {"geometry": "hanger", "kappa_out": 1.0}),
        (
            "kappa_out: wanted more than 0 for the geometry 'transmission'",
            {"geometry": "transmission"},
        ),
        ("chi: wanted a finite shift in rad/s other than 0", {"chi": 0.0}),
        ("chi_2: wanted a finite shift", {"chi_2": math.nan}),
    ],
)
def test_what_is_no_resonator_is_refused(words: str, changes: dict[str, object]) -> None:
    values = {
        "geometry": "reflection",
        "frequency": FREQUENCY,
        "kappa_in": KAPPA,
        "kappa_out": 0.0,
        "kappa_internal": 0.0,
        "chi": CHI,
    }
    with pytest.raises(InputError, match=words):
        Resonator(**(values | changes))  # type: ignore[arg-type]


def test_what_cannot_be_asked_is_refused() -> None:
    resonator = reflecting()
    with pytest.raises(InputError, match="chi_2: the shift of"):
        resonator.pull(2)
    with pytest.raises(InputError, match="wanted the level 0, 1 or 2"):
        scattering(resonator, 3, 6e9)
    with pytest.raises(InputError, match="photons: wanted at least 0"):
        amplitude_for_photons(resonator, -1.0, 6e9)
    with pytest.raises(InputError, match="photons left"):
        wait_for_photons(resonator, 1.0, 0.0)
