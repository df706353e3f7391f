"""Oracle: an ideal line of known loss and delay, written as a Touchstone file."""

import cmath
from pathlib import Path

import numpy as np
import pytest

import cosim
from cosim.errors import InputError, WaveformError
from tests.conftest import BenchMaker, Tables

pytestmark = pytest.mark.ngspice

DECK = """a gated carrier on a pair
.func window(t) {min(max((t-3n)/4n,0),1)*min(max((25n-t)/4n,0),1)}
bp p 0 v={0.1*cos(2*pi*1g*time)*window(time)}
bn n 0 v={-0.1*cos(2*pi*1g*time)*window(time)}
.tran 1n 30n
.end
"""
LOSS, DELAY = 3.0, 2.5e-9  # dB; 2.5 carrier periods


def tables(**drive: object) -> Tables:
    return {
        "drive": {"carrier": "1 GHz", "probe": "v(p)", **drive},
        "qubit": {"frequency": "1 GHz", "rabi_per_volt": "150 MHz/V"},
        "gate": {"target": "x90"},
    }


def write_line(path: Path, last: float = 5e9, *, pairs: bool = False) -> None:
    """A matched line, or two uncoupled ones (ports 1 to 2 and 3 to 4)."""
    ports = 4 if pairs else 2
    lines = ["# Hz S RI R 50"]
    for f in np.arange(0, last + 1, 25e6):
        through = 10 ** (-LOSS / 20) * cmath.exp(-2j * cmath.pi * f * DELAY)
        s = np.zeros((ports, ports), complex)
        for near in range(0, ports, 2):
            s[near, near + 1] = s[near + 1, near] = through
        # Two ports stand column by column in the file, more ports row by row.
        order = s.T if ports == 2 else s
        cells = " ".join(f"{x.real:.15g} {x.imag:.15g}" for x in order.flat)
        lines.append(f"{f:.15g} {cells}")
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def test_a_line_of_known_loss_and_delay(make_bench: BenchMaker, tmp_path: Path) -> None:
    write_line(tmp_path / "cable.s2p")
    direct = cosim.run(make_bench(DECK, tables(attenuation=f"{LOSS} dB")))
    result = cosim.run(make_bench(DECK, tables(line="cable.s2p")))
    # Half a period of delay more than two turns the carrier by 180 degrees.
    assert result.rotation.angle == pytest.approx(direct.rotation.angle, rel=1e-5)
    assert result.rotation.axis[0] == pytest.approx(-direct.rotation.axis[0], abs=1e-5)
    assert result.free_frame.average_gate_fidelity == pytest.approx(
        # The angle's own tolerance, at a gate that is off by some degrees.
        direct.free_frame.average_gate_fidelity,
        abs=1e-6,
    )
    assert result.pulse.start - direct.pulse.start == pytest.approx(DELAY, abs=1e-12)
    assert "probe" in result.extra
    assert any("delays by 2.5 ns" in text for text in result.warnings)
    assert [file.path[-9:] for file in result.run.deck_files] == ["/deck.cir", "cable.s2p"]


def test_a_differential_pair(make_bench: BenchMaker, tmp_path: Path) -> None:
    write_line(tmp_path / "pair.s4p", pairs=True)
    pair = tables(probe="v(p) - v(n)", line="pair.s4p", line_ports=[[1, 3], [2, 4]])
    direct = tables(probe="v(p) - v(n)", attenuation=f"{LOSS} dB")
    found = cosim.run(make_bench(DECK, pair)).rotation.angle
    assert found == pytest.approx(cosim.run(make_bench(DECK, direct)).rotation.angle, rel=1e-5)


def test_a_file_that_does_not_cover_the_carrier(make_bench: BenchMaker, tmp_path: Path) -> None:
    write_line(tmp_path / "low.s2p", last=0.9e9)
    with pytest.raises(WaveformError, match="carrier"):
        cosim.run(make_bench(DECK, tables(line="low.s2p")))
    with pytest.raises(InputError, match=r"none\.s2p"):
        cosim.run(make_bench(DECK, tables(line="none.s2p")))
