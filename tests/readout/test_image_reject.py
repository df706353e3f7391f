"""Oracle: I and Q of two tones in closed form, the image ratio of gain and phase errors, and the
answers of a resonator in the outputs of a pair that are at an intermediate frequency."""

import math
from pathlib import Path

import numpy as np
import pytest

from cosim.errors import CosimError
from cosim.readout import run_readout
from cosim.readout_output import Grid, outputs_record
from cosim.readout_schema import ReadoutTable
from tests import sources
from tests.readout.benches import bench
from tests.validation import Validate

TOPIC = "readout"
FREQUENCY = 20e6
GRID = Grid(1e-6, 10e-9, 100)
# I is the input, Q lags by a quarter of the period at 200 MHz: a matched line of 1.25 ns.
QUADRATURE = """a pair at an intermediate frequency
vin emf 0 dc 0
r0 emf in 50
rin in 0 50
ei i_out 0 in 0 20
eq drive 0 in 0 20
t1 drive 0 q_out 0 z0=50 td=1.25n
rq q_out 0 50 noisy=0
.end
"""


def table(sideband: str | None) -> ReadoutTable:
    return ReadoutTable(
        window=(1e-6, 2e-6),
        i="v(i)",
        q="v(q)",
        output_frequency=FREQUENCY,
        sideband=sideband,  # type: ignore[arg-type]  # One of the two words, or None.
    )


def record(
    ahead: complex, behind: complex, sideband: str | None, gain: float = 1.0, phase: float = 0.0
) -> complex:
    """Mean of the record of two tones, one to either side; Q has another gain and phase."""
    t = np.arange(0.0, 3e-6, 1e-9)
    turn = 2.0 * math.pi * FREQUENCY * t
    i = (ahead * np.exp(1j * turn) + behind * np.exp(-1j * turn)).real
    quarter = turn + phase
    q = gain * (ahead * np.exp(1j * quarter) + behind * np.exp(-1j * quarter)).imag
    return complex(np.mean(outputs_record(t, [i, q], table(sideband), GRID)))


def test_each_sideband_is_read_without_the_other() -> None:
    ahead, behind = 0.3 - 0.4j, 0.7 + 0.2j
    # What the demodulator's filter lets through of its stop band.
    assert record(ahead, behind, None) == pytest.approx(ahead, abs=1e-6)
    assert record(ahead, behind, "upper") == pytest.approx(ahead, abs=1e-6)
    assert record(ahead, behind, "lower") == pytest.approx(behind, abs=1e-6)


@pytest.mark.parametrize(("gain", "phase"), [(1.05, 0.0), (1.0, 0.03), (0.97, -0.05)])
def test_image_rejection_of_gain_and_phase_errors(
    validate: Validate, gain: float, phase: float
) -> None:
    """Source: sources.RAZAVI; exact, not its first order in the errors."""
    cosine = 2.0 * gain * math.cos(phase)
    expected = (1.0 + cosine + gain**2) / (1.0 - cosine + gain**2)
    wanted, image = record(1.0, 0.0, "upper", gain, phase), record(0.0, 1.0, "upper", gain, phase)
    validate(
        f"image rejection of a readout's I and Q, gain {gain:g}, phase {phase:g} rad off",
        sources.RAZAVI,
        expected,
        abs(wanted / image) ** 2,
        # Twice the filter's 1e-6 over the least image, 0.015 of the wanted tone.
        rel=3e-4,
    )


@pytest.mark.parametrize(
    ("keys", "words"),
    [
        ({"q": None}, "'output_frequency' goes with 'probe', or with both 'i' and 'q'"),
        (
            {"adc_bits": 8, "adc_full_scale": "1 V", "adc_rate": "400 MHz"},
            "key 'output_frequency': wanted less than half of 'adc_rate', 2e+08 Hz",
        ),
        ({"output_frequency": None}, "'sideband' goes with 'i' and 'q' at an 'output_frequency'"),
        ({"sideband": "both"}, "sideband"),
    ],
)
def test_what_is_refused(tmp_path: Path, keys: dict[str, object], words: str) -> None:
    readout = {"probe": None, "i": "v(i_out)", "q": "v(q_out)", "sideband": "lower", **keys}
    with pytest.raises(CosimError) as caught:
        bench(tmp_path, QUADRATURE, readout=readout)
    assert words in str(caught.value)


@pytest.mark.ngspice
def test_a_receiver_and_its_image(tmp_path: Path) -> None:
    """Each output is that of an amplifier of gain 10, so that the SNR is that of one of them.

    Source: the card of tests/readout/test_published.py for this resonator.
    """
    readout = {"probe": None, "i": "v(i_out)", "q": "v(q_out)", "shots": 1000, "records": 100}
    coarse = {"steps_per_period": 40}
    result = run_readout(bench(tmp_path, QUADRATURE, readout=readout, netlist=coarse))
    # Q lags by 1.25 ns of the 64 ns in which the answer rises, and the mean of both by half.
    assert result.snr == pytest.approx(5.403141, rel=1e-2)
    readout["sideband"] = "lower"
    image = run_readout(bench(tmp_path, QUADRATURE, readout=readout, netlist=coarse))
    # Off the edges of the pulse, of which the delayed Q learns 1.25 ns later.
    kept, left = (np.abs(one.traces.excited[100:-60]).max() for one in (result, image))
    # Half of what moves within the delay, 0.6 ns/64 ns, is no quadrature.
    assert left < 0.01 * kept
