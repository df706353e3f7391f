"""Oracle: scikit-rf's networks and media, chain matrices in closed form, published cards."""

import pickle
import sys
from pathlib import Path

import numpy as np
import pytest
import skrf
from hypothesis import given, settings
from hypothesis import strategies as st
from skrf.media.distributedCircuit import DistributedCircuit

from cosim.dsp.line import line_delay
from cosim.errors import CosimError, InputError, MissingDependencyError, WaveformError
from cosim.formats.touchstone import LineResponse, read_line

# The same examples in every run, so that a failure can be repeated; no limit on time.
PROPERTY = settings(derandomize=True, deadline=None, max_examples=150)

F = np.linspace(1e9, 10e9, 91)

# S21 is 0.5 at -30 degrees, S12 is 0.25 at 60 degrees, in every format.
TWO_PORT = {
    "RI": "# GHz S RI R 50\n1 0.1 0 0.4330127018922193 -0.25 0.125 0.21650635094610965 0 0.2\n",
    "MA": "# GHz S MA R 50\n1 0.1 0 0.5 -30 0.25 60 0.2 90\n",
    "DB": "# GHz S DB R 50\n1 -20 0 -6.020599913279624 -30 -12.041199826559248 60 -14 90\n",
    "Hz": "! a comment\n#hz s ma r 50\n1e9\t0.1 0 0.5 -30 ! 0.25\n  0.25 60 0.2 90\n",
    "default": "#\n1 0.1 0 0.5 -30 0.25 60 0.2 90\n",
}


def second_point(text: str) -> str:
    """The same once more at a frequency twice as high, since one point makes no line."""
    last = text[text.index("\n1") + 1 :]
    return text + "2" + last[1:]


def network(s: np.ndarray, z0: float | np.ndarray = 50.0, f: np.ndarray = F) -> skrf.Network:
    return skrf.Network(f=f, s=s, z0=z0, f_unit="Hz")


def write(folder: Path, net: skrf.Network) -> Path:
    net.write_touchstone(f"n{net.nports}", dir=str(folder))
    return folder / f"n{net.nports}.s{net.nports}p"


def random_passive(seed: int, ports: int) -> np.ndarray:
    rng = np.random.default_rng(seed)
    s = rng.normal(size=(F.size, ports, ports)) + 1j * rng.normal(size=(F.size, ports, ports))
    return s * (0.95 / np.linalg.svd(s, compute_uv=False).max(axis=1))[:, None, None]


def chain_to_scattering(a: np.ndarray, near: float, far: float) -> np.ndarray:
    """S21 of a chain matrix between real impedances (D. M. Pozar, "Microwave Engineering")."""
    total = a[:, 0, 0] * far + a[:, 0, 1] + a[:, 1, 0] * near * far + a[:, 1, 1] * near
    return 2.0 * np.sqrt(near * far) / total


def quarter_wave(f: np.ndarray, z: float, f0: float) -> np.ndarray:
    theta = 0.5 * np.pi * f / f0
    cos, sin = np.cos(theta), 1j * np.sin(theta)
    return np.array([[cos, z * sin], [sin / z, cos]]).transpose(2, 0, 1)


class TestReadLine:
    @pytest.mark.parametrize("form", TWO_PORT)
    def test_reads_the_formats_and_takes_s21(self, tmp_path: Path, form: str) -> None:
        path = tmp_path / "line.s2p"
        path.write_text(second_point(TWO_PORT[form]), encoding="utf-8")
        line = read_line(path)
        assert line.frequency[0] == 1e9
        # Sixteen digits in the file.
        assert line.transmission[0] == pytest.approx(0.5 * np.exp(-1j * np.pi / 6), rel=1e-14)
        back = read_line(path, ports=(2, 1))
        assert back.transmission[0] == pytest.approx(0.25 * np.exp(1j * np.pi / 3), rel=1e-14)
        assert (line.impedance, line.file_impedance) == (50.0, 50.0)
        assert line.warnings == ()

    def test_a_line_of_scikit_rf(self, tmp_path: Path) -> None:
        # 10 m of a coaxial line of 4.764248 ns/m and 50.04518 ohm (D. M. Pozar, "Microwave
        # Engineering", eps_r = 2.04, 0.51/1.68 mm; recalled from memory, computed).
        f = skrf.Frequency(0, 10, 4001, unit="GHz")
        media = DistributedCircuit(f, z0_port=50, C=95.19894e-12, L=238.4277e-9, R=0, G=0)
        line = read_line(write(tmp_path, media.line(10.0, "m")))
        # Seven digits of L and C; the mismatch of 0.05 % turns the phase by its square.
        delay = line_delay(line.frequency, line.transmission)
        assert delay == pytest.approx(47.64248e-9, rel=1e-6)
        assert line.largest_singular_value == pytest.approx(1.0, abs=1e-9)
        assert line.below == "present"
        assert line.above == "beyond 1e+10 Hz: magnitude held, phase by the line's delay"
        # Matched to the line's own impedance nothing comes back, so the magnitude is 1.
        own = read_line(tmp_path / "n2.s2p", impedance=50.04518)
        np.testing.assert_allclose(np.abs(own.transmission), 1.0, atol=1e-9)

    def test_an_attenuator_of_the_handbook(self, tmp_path: Path) -> None:
        # 10 dB T pad at 50 ohm ("Reference Data for Radio Engineers", chapter on attenuators;
        # recalled from memory, computed).
        series, shunt = 25.97469, 35.13642
        one = np.array([[1.0, series], [0.0, 1.0]])
        chain = one @ np.array([[1.0, 0.0], [1.0 / shunt, 1.0]]) @ one
        s = skrf.network.a2s(np.broadcast_to(chain, (F.size, 2, 2)).astype(complex), 50.0)
        line = read_line(write(tmp_path, network(s)))
        # Seven digits of the resistors.
        np.testing.assert_allclose(line.transmission, 10 ** (-10 / 20), rtol=1e-6)
        assert line.largest_singular_value < 0.4
        assert line.below.startswith("extrapolated from 1e+09 Hz")

    @pytest.mark.parametrize("ports", [2, 3, 4])
    def test_renormalises_as_scikit_rf_does(self, tmp_path: Path, ports: int) -> None:
        net = network(random_passive(ports, ports), 50.0)
        path = write(tmp_path, net)
        net.renormalize(75.0)
        line = read_line(path, impedance=75.0, ports=(1, ports))
        # Rounding; scikit-rf goes over impedances.
        np.testing.assert_allclose(line.transmission, net.s[:, ports - 1, 0], rtol=1e-10)
        assert (line.impedance, line.file_impedance) == (75.0, 50.0)

    def test_renormalises_an_ideal_line(self, tmp_path: Path) -> None:
        # At 0 Hz an ideal line has no impedance matrix; through it, all impedances give 1.
        f = np.linspace(0.0, 10e9, 11)
        turn = np.exp(-2j * np.pi * f * 0.05e-9)
        s = np.zeros((11, 2, 2), dtype=complex)
        s[:, 0, 1] = s[:, 1, 0] = turn
        line = read_line(write(tmp_path, network(s, f=f)), impedance=100.0)
        chain = quarter_wave(f, 50.0, 5e9)
        np.testing.assert_allclose(
            line.transmission, chain_to_scattering(chain, 100.0, 100.0), rtol=1e-12
        )

    def test_touchstone_2_with_unequal_impedances(self, tmp_path: Path) -> None:
        # A quarter-wave transformer from 50 to 100 ohm: Z1 = 70.71068 ohm, reflection 0 at f0 and
        # 0.1086077 at 0.8 f0 (D. M. Pozar, "Microwave Engineering"; recalled from memory,
        # computed).
        f = np.array([4e9, 5e9])
        chain = quarter_wave(f, 70.71068, 5e9)
        through = chain_to_scattering(chain, 50.0, 100.0)
        s = skrf.network.a2s(chain, np.array([[50.0, 100.0]] * 2, dtype=complex))
        assert np.abs(s[:, 0, 0]) == pytest.approx([0.1086077, 0.0], abs=1e-7)
        np.testing.assert_allclose(s[:, 1, 0], through, rtol=1e-12)
        rows = [
            " ".join([f"{x / 1e9:.17g}", *(f"{v.real:.17g} {v.imag:.17g}" for v in m.ravel())])
            for x, m in zip(f, s, strict=True)
        ]
        path = tmp_path / "transformer.ts"
        path.write_text(
            "[Version] 2.0\n# GHz S RI R 50\n[Number of Ports] 2\n"
            "[Two-Port Data Order] 12_21\n[Number of Frequencies] 2\n[Reference] 50 100\n"
            "[Network Data]\n" + "\n".join(rows) + "\n[End]\n",
            encoding="utf-8",
        )
        with pytest.raises(WaveformError, match=r"impedances 50, 100 ohm, so one must be chosen"):
            read_line(path)
        for impedance in (50.0, 100.0, 20.0):
            line = read_line(path, impedance=impedance)
            expected = chain_to_scattering(chain, impedance, impedance)
            np.testing.assert_allclose(line.transmission, expected, rtol=1e-12)


class TestDifferentialPairs:
    @pytest.mark.parametrize("seed", range(3))
    def test_is_the_mixed_mode_transmission_of_scikit_rf(self, tmp_path: Path, seed: int) -> None:
        net = network(random_passive(seed, 4))
        path = write(tmp_path, net)
        # scikit-rf pairs ports 0 and 1, and 2 and 3; its result is d0, d1, c0, c1.
        adjacent = net.copy()
        adjacent.se2gmm(p=2)
        line = read_line(path, ports=((1, 2), (3, 4)))
        np.testing.assert_allclose(line.transmission, adjacent.s[:, 1, 0], rtol=1e-12)
        odd = net.copy()
        odd.renumber([0, 2, 1, 3], [0, 1, 2, 3])
        odd.se2gmm(p=2)
        line = read_line(path, ports=((1, 3), (2, 4)))
        np.testing.assert_allclose(line.transmission, odd.s[:, 1, 0], rtol=1e-12)

    def test_two_equal_lines_are_one(self, tmp_path: Path) -> None:
        turn = 0.8 * np.exp(-2j * np.pi * F * 1e-10)
        s = np.zeros((F.size, 4, 4), dtype=complex)
        for near, far in ((0, 1), (2, 3)):
            s[:, near, far] = s[:, far, near] = turn
        path = write(tmp_path, network(s))
        line = read_line(path, ports=((1, 3), (2, 4)))
        np.testing.assert_allclose(line.transmission, turn, rtol=1e-14)
        assert line.warnings == ()
        # Twisted: the other sign.
        twisted = read_line(path, ports=((1, 3), (4, 2)))
        np.testing.assert_allclose(twisted.transmission, -turn, rtol=1e-14)
        # Numbered along the sides instead: nothing gets through, and it says so.
        wrong = read_line(path, ports=((1, 2), (3, 4)))
        assert np.abs(wrong.transmission).max() < 0.81
        assert "port 1 leaves at port 2, not at port 3" in wrong.warnings[0]


class TestPassivity:
    def test_a_little_gain_is_told(self, tmp_path: Path) -> None:
        s = random_passive(1, 2) * (1.0 + 2e-3) / 0.95
        line = read_line(write(tmp_path, network(s)))
        # Rounding of the singular value.
        assert line.largest_singular_value == pytest.approx(1.002, rel=1e-12)
        assert (
            "not quite passive: its largest singular value exceeds 1 by 2.0e-03"
            in (line.warnings[0])
        )

    def test_gain_is_refused(self, tmp_path: Path) -> None:
        path = write(tmp_path, network(random_passive(1, 2) * 1.2 / 0.95))
        with pytest.raises(WaveformError, match=r"not passive: .* is 1\.2"):
            read_line(path)


class TestFaults:
    @pytest.fixture
    def good(self, tmp_path: Path) -> Path:
        return write(tmp_path, network(random_passive(1, 2)))

    def test_a_carrier_outside(self, good: Path) -> None:
        assert read_line(good, carrier_frequency=10e9).frequency[-1] == 10e9
        message = r"n2\.s2p: the file covers 1 GHz to 10 GHz, .*carrier at 10\.1 GHz"
        with pytest.raises(WaveformError, match=message):
            read_line(good, carrier_frequency=10.1e9)

    @pytest.mark.parametrize(
        ("ports", "message"),
        [
            ((1, 3), "from 1 to 2"),
            ((0, 1), "from 1 to 2"),
            ((1, 1), "different ports"),
            (((1, 2), (3, 4)), "from 1 to 2"),
            (((1,), (2, 1)), "two pairs"),
            ((1, 2, 3), "two ports or two pairs"),
        ],
    )
    def test_impossible_ports(self, good: Path, ports: tuple[int, int], message: str) -> None:
        with pytest.raises(InputError, match=message):
            read_line(good, ports=ports)

    @pytest.mark.parametrize("impedance", [0.0, -50.0, float("nan")])
    def test_impossible_impedances(self, good: Path, impedance: float) -> None:
        with pytest.raises(InputError, match="must be positive"):
            read_line(good, impedance=impedance)

    @pytest.mark.parametrize(
        ("name", "text", "message"),
        [
            ("a.s2p", "", "empty"),
            ("a.s2p", "\x00\x01", "binary"),
            ("a.s2p", "hello\n", "cannot be read as Touchstone"),
            ("a.csv", TWO_PORT["MA"], r"cannot be read as Touchstone(.|\n)*must end in \.s2p"),
            ("a.s2p", TWO_PORT["MA"], "at least two frequencies, got 1"),
            ("a.s3p", second_point(TWO_PORT["MA"]), "cannot be read as Touchstone"),
            ("a.s2p", TWO_PORT["MA"] + TWO_PORT["MA"][16:], "the frequency must rise"),
            ("a.s2p", second_point(TWO_PORT["MA"]).replace(" S ", " Z "), "got Z-parameters"),
            ("a.s2p", second_point(TWO_PORT["MA"]).replace("0.5 ", "nan "), "not finite"),
        ],
    )
    def test_other_files(self, tmp_path: Path, name: str, text: str, message: str) -> None:
        (tmp_path / name).write_text(text, encoding="utf-8")
        with pytest.raises(WaveformError, match=message) as caught:
            read_line(tmp_path / name)
        assert name in str(caught.value)

    def test_a_missing_file(self, tmp_path: Path) -> None:
        with pytest.raises(FileNotFoundError):
            read_line(tmp_path / "none.s2p")

    def test_nothing_in_a_file_is_run(self, tmp_path: Path) -> None:
        # An old text pickle is no binary file; scikit-rf's Network would load it.
        path, touched = tmp_path / "evil.s2p", tmp_path / "touched"
        path.write_bytes(pickle.dumps(Touch(str(touched)), protocol=0))
        with pytest.raises(WaveformError, match="cannot be read as Touchstone"):
            read_line(path)
        assert not touched.exists()

    def test_without_the_extra(self, good: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        for name in ("skrf", "skrf.io", "skrf.io.touchstone"):
            monkeypatch.setitem(sys.modules, name, None)
        with pytest.raises(MissingDependencyError, match=r'pip install "qcosim\[rf\]"'):
            read_line(good)


class Touch:
    """Makes a file when it is unpickled."""

    def __init__(self, path: str) -> None:
        self.path = path

    def __reduce__(self) -> tuple[object, tuple[str, str]]:
        return open, (self.path, "w")


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("touchstone")


def line_or_error(path: Path) -> LineResponse | str:
    try:
        return read_line(path)
    except CosimError as error:
        return str(error)


class TestAnyText:
    @PROPERTY
    @given(
        text=st.one_of(
            st.text(max_size=80),
            st.text(alphabet='0123456789.eE+-# \t\n!SMARGHz[]"', max_size=120),
            st.lists(
                st.sampled_from(
                    "# GHz S MA R 50|1 .1 0 .5 0 .5 0 .1 0|2 .1 0 .5 0 .5 0 .1 0|1|!|R x|[End]|"
                    "[Version] 2.0|[Reference] 50 a|[Number of Ports] 2".split("|")
                ),
                max_size=8,
            ).map("\n".join),
        )
    )
    def test_gives_a_line_or_an_error_of_the_package(self, folder: Path, text: str) -> None:
        path = folder / "any.s2p"
        path.write_bytes(text.encode("utf-8", errors="replace"))
        found = line_or_error(path)
        assert isinstance(found, LineResponse) or "any.s2p" in found
