"""Oracles: power of a wave, handbook values of noise figures, and limits of quantum optics."""

import math

import numpy as np
import pytest
from scipy.constants import Boltzmann, Planck, hbar

from cosim.dsp.noise.thermal import Attenuator, johnson_density
from cosim.errors import InputError
from cosim.outgoing import (
    Amplifier,
    OutputLine,
    added_quanta,
    arriving_noise,
    efficiency,
    emf_envelope,
    incident_samples,
    least_added_quanta,
    power_gain,
)
from cosim.quantum.incident import incident_amplitude, sample_drive, two_step_drive
from cosim.quantum.resonator import amplitude_for_photons
from cosim.quantum.resonator_field import evolve_field
from tests import sources
from tests.quantum.readouts import FREQUENCY, KAPPA, reflecting
from tests.validation import Validate

TOPIC = "coupling"
DIGITS = 1e-6  # Seven digits in the expected value.
F = 6e9


def quanta_of(temperature: float) -> float:
    """Give k T/(h f) at the frequency of these tests."""
    return Boltzmann * temperature / (Planck * F)


class TestVolts:
    def test_the_power_into_a_matched_load_is_that_of_the_field(self, validate: Validate) -> None:
        """-120 dBm into 50 ohm is 0.3162278 uV peak; the EMF is twice that."""
        field = incident_amplitude(1e-15, F)
        emf = abs(complex(emf_envelope(field, F, OutputLine())))
        quantity = "EMF behind 50 ohm of a field of -120 dBm"
        validate(quantity, sources.CIRCUITS, 2 * 3.162278e-7, emf, "V", rel=DIGITS)

    def test_spice_turns_the_other_way(self) -> None:
        """A field above the carrier, exp(-i delta t), has a phase that rises in the circuit."""
        t = np.linspace(0.0, 1e-7, 11)
        delta = 2 * math.pi * 3e6
        emf = emf_envelope(np.exp(-1j * delta * t), F, OutputLine(impedance=75.0))
        peak = math.sqrt(2 * 75.0 * hbar * 2 * math.pi * F)
        assert emf == pytest.approx(2 * peak * np.exp(1j * delta * t), rel=1e-12, abs=0.0)

    def test_stages_act_on_the_power(self) -> None:
        line = OutputLine((Attenuator(2.0, 0.1), Amplifier(23.0, 4.0), Attenuator(10.0, 4.0)))
        assert power_gain(line.stages) == pytest.approx(10**2.3 / 20)
        ratio = abs(complex(emf_envelope(1.0, F, line) / emf_envelope(1.0, F, OutputLine())))
        assert ratio**2 == pytest.approx(10**2.3 / 20)

    def test_a_drive_of_known_power(self) -> None:
        """0 dBm is 0.3162278 V peak at 50 ohm; behind 60 dB it is -60 dBm."""
        iq = 0.3162278 * np.exp(0.4j)
        found = complex(incident_samples(iq, F, attenuation=60.0))
        # Seven digits of the voltage.
        assert found == pytest.approx(incident_amplitude(1e-9, F) * np.exp(-0.4j), rel=DIGITS)


class TestNoise:
    def test_a_matched_line_in_vacuum_brings_half_a_quantum(self) -> None:
        """Loss in vacuum leaves the noise as it is, and adds the least that any loss can."""
        line = OutputLine((Attenuator(4.0, 0.0), Attenuator(2.5, 0.0)))
        found = arriving_noise(line, [F])
        assert found.power_density == pytest.approx([Planck * F / 2], rel=1e-12, abs=0.0)
        assert found.quanta == pytest.approx([5.0])
        assert found.added_quanta == pytest.approx([4.5])
        assert found.least_added_quanta == pytest.approx(4.5)
        assert efficiency(4.5) == pytest.approx(0.1)  # the part of the power that arrives

    def test_hot_resistor(self, validate: Validate) -> None:
        """Of a hot source the envelope has twice the one-sided density 4 k T R."""
        found = arriving_noise(OutputLine(temperature=290.0, impedance=75.0), [1e6])
        # Planck's law lies below by (h f/k T)**2/12 = 2e-15 and less.
        validate(
            "EMF of a line at 290 K and 75 ohm, density of the envelope",
            sources.JOHNSON_NYQUIST,
            2 * johnson_density(75.0, 290.0),
            float(found.emf_density[0]),
            "V^2/Hz",
            rel=1e-12,
        )

    def test_noise_figure_of_a_matched_attenuator(self, validate: Validate) -> None:
        """The noise figure of a pad at 290 K is its loss: (L - 1) 290 K at its input."""
        line = OutputLine((Attenuator(10**0.6, 290.0),), temperature=290.0)
        added = float(arriving_noise(line, [1e9]).added_quanta[0])
        figure = 10 * math.log10(1 + added * Planck * 1e9 / (Boltzmann * 290.0))
        # (h f/k T)**2/12 = 2e-9 at 1 GHz.
        quantity = "noise figure of a pad of 6 dB at 290 K"
        validate(quantity, sources.ITT, 6.0, figure, "dB", rel=1e-7)

    def test_a_receiver_of_three_stages(self, validate: Validate) -> None:
        """Card C14: 10 dB gain and 2 dB noise figure, 1 dB of loss, mixer of -3 dB and 4 dB."""
        stages = (
            Amplifier(10.0, (10**0.2 - 1) * 290.0),
            Attenuator(10**0.1, 290.0),
            Amplifier(-3.0, (10**0.4 - 1) * 290.0),
        )
        found = arriving_noise(OutputLine(stages, temperature=150.0), [1e9])
        te = float(found.added_quanta[0]) * Planck * 1e9 / Boltzmann
        source = sources.POZAR
        # (h f/k T)**2/12 is 1e-8 at 150 K.
        validate(
            "noise temperature of three stages", source, 232.3251, te, "K", rel=1e-6, card="C14"
        )
        out = 10 * math.log10(float(found.power_density[0]) * 10e6 / 1e-3)
        quantity = "output noise of three stages in 10 MHz from 150 K"
        validate(quantity, source, -96.77484, out, "dBm", rel=DIGITS, card="C14")

    def test_quanta_of_an_amplifier(self, validate: Validate) -> None:
        """Card C17: 2 K at 6 GHz."""
        found = arriving_noise(OutputLine((Amplifier(40.0, 2.0),)), [F])
        added = float(found.added_quanta[0])
        quantity = "quanta that an amplifier of 2 K adds at 6 GHz"
        validate(quantity, sources.CLERK, 6.94554, added, rel=DIGITS, card="C17")
        quantity = "efficiency behind an amplifier of 2 K at 6 GHz"
        validate(quantity, sources.CLERK, 0.0671543, efficiency(added), rel=DIGITS, card="C17")
        limit = found.least_added_quanta
        quantity = "least quanta that an amplifier of 40 dB adds"
        validate(quantity, sources.CAVES, 0.49995, limit, rel=1e-12, card="C17")
        temperature = limit / (1 - 1e-4) * Planck * F / Boltzmann
        quantity = "noise temperature of half a quantum at 6 GHz"
        validate(quantity, sources.CAVES, 0.1439773, temperature, "K", rel=DIGITS, card="C17")

    def test_loss_in_front_counts_by_its_ratio(self) -> None:
        """Vacuum loss of A before n quanta: A (n + 1/2) - 1/2."""
        line = OutputLine((Attenuator(3.0, 0.0), Amplifier(30.0, 1.2)))
        found = arriving_noise(line, [F])
        assert found.added_quanta == pytest.approx([3 * (quanta_of(1.2) + 0.5) - 0.5])

    def test_heat_of_the_field_is_not_added_noise(self) -> None:
        cold, warm = (
            arriving_noise(OutputLine((Amplifier(20.0, 1.0),), temperature=kelvin), [F, 2 * F])
            for kelvin in (0.0, 0.3)
        )
        assert warm.added_quanta == pytest.approx(cold.added_quanta)
        occupation = 1 / np.expm1(Planck * np.array([F, 2 * F]) / (Boltzmann * 0.3))
        assert warm.quanta - cold.quanta == pytest.approx(occupation)

    def test_noise_of_the_netlist_in_the_same_quanta(self) -> None:
        """What an amplifier adds is the same number by its density at the deck's source."""
        line = OutputLine((Attenuator(2.0, 0.0), Amplifier(25.0, 3.0)), impedance=75.0)
        quiet = OutputLine((Attenuator(2.0, 0.0), Amplifier(25.0, 0.0)), impedance=75.0)
        extra = arriving_noise(line, [F]).emf_density - arriving_noise(quiet, [F]).emf_density
        assert added_quanta(extra, [F], line) == pytest.approx([2 * quanta_of(3.0)])


def test_signal_to_noise_in_volts(validate: Validate) -> None:
    """Card D09 behind 0.75 added quanta, which leave an efficiency of 0.4.

    The variance of the integral of one quadrature over tau is emf_density tau/2.
    """
    added, tau, step = 0.75, 400e-9, 0.1e-9
    resonator = reflecting()
    line = OutputLine((Amplifier(26.0, added * Planck * FREQUENCY / Boltzmann),))
    amplitude = amplitude_for_photons(resonator, 5.0, FREQUENCY)
    drive = sample_drive(two_step_drive(amplitude, tau), FREQUENCY, step, 4001)
    low, high = (
        emf_envelope(evolve_field(resonator, drive, level).outside, FREQUENCY, line)
        for level in (0, 1)
    )
    noise = arriving_noise(line, [FREQUENCY])
    area = abs(np.trapezoid(high - low, dx=step))
    snr = area / math.sqrt(float(noise.emf_density[0]) * tau / 2)
    # Straight lines between samples: (kappa h/2)**2/12 = 2e-7.
    assert KAPPA * step < 0.004
    quantity = "SNR in volts of a boxcar of 400 ns, efficiency 0.4"
    validate(quantity, sources.CLERK, 5.403141, snr, rel=2e-6, card="D09")


def test_what_is_no_line_is_refused() -> None:
    with pytest.raises(InputError, match="amplifier gain"):
        Amplifier(math.inf, 4.0)
    with pytest.raises(InputError, match="noise_temperature: wanted at least 0 K"):
        Amplifier(20.0, -1.0)
    with pytest.raises(InputError, match="output line temperature"):
        OutputLine(temperature=-1.0)
    with pytest.raises(InputError, match="line impedance"):
        OutputLine(impedance=0.0)
    with pytest.raises(InputError, match="line impedance"):
        incident_samples(1.0, F, impedance=-50.0)
    with pytest.raises(InputError, match="carrier frequency"):
        emf_envelope(1.0, 0.0, OutputLine())
    with pytest.raises(InputError, match="positive, finite frequencies"):
        arriving_noise(OutputLine(), [-1.0])
    with pytest.raises(InputError, match="positive, finite frequencies"):
        added_quanta([1e-18], [0.0], OutputLine())
    with pytest.raises(InputError, match="gain above 0"):
        least_added_quanta(0.0)
    with pytest.raises(InputError, match="at least 0 quanta"):
        efficiency(-0.1)
