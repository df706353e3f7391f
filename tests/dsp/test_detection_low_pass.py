"""Oracle: scipy.signal's Butterworth design and its cascade of sections."""

import numpy as np
import pytest
from scipy.signal import butter, sosfilt

from cosim.dsp.detection.low_pass import butterworth_sections, run_sections


@pytest.mark.parametrize("order", [1, 2, 5, 12])
@pytest.mark.parametrize("corner", [0.01, 0.2, 0.45])
def test_a_record_passes_as_through_another_design(order: int, corner: float) -> None:
    random = np.random.default_rng(order)
    records = random.standard_normal((2, 500)) + 1j * random.standard_normal((2, 500))
    found = run_sections(butterworth_sections(order, corner), records)
    wanted = sosfilt(butter(order, corner, fs=1.0, output="sos"), records)
    # Rounding of poles that lie close together at order 12 and a hundredth of the rate: 2e-13.
    assert found == pytest.approx(wanted, rel=0, abs=1e-12 * np.abs(wanted).max())
