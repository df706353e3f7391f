"""Oracle: ngspice, once through its shared library and once as a program that writes the file."""

import subprocess
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cosim.circuit.analysis import Tolerances, TransientRequest
from cosim.circuit.netlist import deck_from_text
from cosim.circuit.simulator import simulate
from cosim.errors import CosimError, WaveformError
from cosim.formats.columns import read_columns
from cosim.formats.rawfile import RawPlot, read_raw

# The same examples in every run, so that a failure can be repeated; no limit on time.
PROPERTY = settings(derandomize=True, deadline=None, max_examples=200)

R, C, AMPLITUDE = 50.0, 1e-12, 1.0
CIRCUIT = f"""* a low-pass
v1 in 0 dc 0.5 ac 1 sin(0 {AMPLITUDE} 1g)
r1 in out {R}
c1 out 0 {C}
r2 out 0 1meg
.options reltol=1e-5 vntol=1e-8 abstol=1e-12 method=trap trtol=1e6
"""
COMMANDS = """.control
save all
tran 10p 1n 0 10p
write tran.raw
write some.raw v(out) out-in
set filetype=ascii
write tran_ascii.raw
wrdata pairs.txt v(out) i(v1)
set numdgt=15
set wr_vecnames
set wr_singlescale
wrdata table.txt v(out) i(v1)
ac dec 2 1meg 10g
set appendwrite
write mixed_ascii.raw
op
write mixed_ascii.raw
set filetype=binary
setplot ac1
write mixed.raw
setplot tran1
write mixed.raw
tran 20p 0.5n 0 20p
write mixed.raw
unset appendwrite
set nopadding
let short = vector(3)
write unpadded.raw v(out) short
set filetype=ascii
write unpadded_ascii.raw v(out) short
.endc
.end
"""
# Binary files hold the simulator's own doubles.  ASCII ones hold 16 significant digits.
DIGITS = 1e-15


@pytest.fixture(scope="module")
def files(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("raw")
    (folder / ".spiceinit").write_text("\n", encoding="utf-8")
    (folder / "commands.cir").write_text(CIRCUIT + COMMANDS, encoding="utf-8")
    (folder / "batch.cir").write_text(CIRCUIT + ".tran 10p 1n 0 10p\n.end\n", encoding="utf-8")
    for arguments in (["commands.cir"], ["-r", "batch.raw", "batch.cir"]):
        # Its exit code is 1 whenever the deck itself asks for no print or plot.
        done = subprocess.run(
            ["ngspice", "-b", *arguments],
            cwd=folder,
            stdin=subprocess.DEVNULL,
            capture_output=True,
            timeout=60,
            check=False,
        )
    assert (folder / "unpadded_ascii.raw").exists(), done.stdout
    assert (folder / "batch.raw").exists(), done.stderr
    return folder


@pytest.fixture(scope="module")
def library_run() -> dict[str, np.ndarray]:
    request = TransientRequest(
        stop=1e-9,
        step=10e-12,
        saves=("v(in)", "v(out)", "i(v1)"),
        tolerances=Tolerances(reltol=1e-5, vntol=1e-8, abstol=1e-12),
    )
    result = simulate(deck_from_text(CIRCUIT + ".end\n"), request)
    return {"time": result.time, **result.vectors}


@pytest.mark.ngspice
class TestAgainstTheSimulator:
    @pytest.mark.parametrize(
        ("name", "error"),
        [("batch.raw", 0.0), ("tran.raw", 0.0), ("tran_ascii.raw", DIGITS)],
    )
    def test_equals_what_the_shared_library_gives(
        self, files: Path, library_run: dict[str, np.ndarray], name: str, error: float
    ) -> None:
        plot = read_raw(files / name)
        assert (plot.title, plot.name, plot.axis) == ("* a low-pass", "Transient Analysis", "time")
        assert plot.units == {"time": "s", "v(in)": "V", "v(out)": "V", "i(v1)": "A"}
        assert list(plot.vectors) == list(plot.units)
        for key, values in library_run.items():
            np.testing.assert_allclose(plot.vectors[key], values, rtol=error, atol=0.0)
            assert plot.vectors[key].dtype == np.float64

    def test_reads_expressions_without_a_unit(self, files: Path) -> None:
        plot = read_raw(files / "some.raw")
        assert plot.units == {"time": "s", "v(out)": "V", "out-in": ""}
        whole = read_raw(files / "tran.raw").vectors
        assert (plot.vectors["out-in"] == whole["v(out)"] - whole["v(in)"]).all()

    @pytest.mark.parametrize("name", ["mixed.raw", "mixed_ascii.raw"])
    def test_complex_values_are_those_of_the_low_pass(self, files: Path, name: str) -> None:
        plot = read_raw(files / name, plot="ac analysis")
        assert plot.axis == "frequency"
        f = plot.vectors["frequency"]
        assert f.dtype == np.float64
        assert plot.units["frequency"] == "Hz"
        # Voltage divider of R and C beside 1 megohm; ngspice's .ac is exp(+j omega t).
        y = 2j * np.pi * f * C + 1e-6
        np.testing.assert_allclose(plot.vectors["v(out)"], 1.0 / (1.0 + R * y), rtol=1e-12)

    def test_finds_plots_by_name(self, files: Path) -> None:
        first = read_raw(files / "mixed.raw", plot="Transient Analysis 1")
        second = read_raw(files / "mixed.raw", plot="Transient Analysis 2")
        assert first.vectors["time"][-1] == pytest.approx(1e-9, rel=1e-12)
        assert second.vectors["time"][-1] == pytest.approx(0.5e-9, rel=1e-12)
        assert read_raw(files / "mixed_ascii.raw", plot="Operating Point").vectors["v(in)"] == 0.5

    @pytest.mark.parametrize("name", ["unpadded.raw", "unpadded_ascii.raw"])
    def test_reads_vectors_of_unequal_length(self, files: Path, name: str) -> None:
        plot = read_raw(files / name)
        assert plot.vectors["short"].tolist() == [0.0, 1.0, 2.0]
        whole = read_raw(files / "mixed.raw", plot="Transient Analysis 2")
        for key in ("time", "v(out)"):
            np.testing.assert_allclose(plot.vectors[key], whole.vectors[key], rtol=DIGITS)

    def test_tables_of_wrdata_are_read_as_columns(self, files: Path) -> None:
        plot = read_raw(files / "tran.raw").vectors
        found = read_columns(files / "table.txt", values=["v(out)"], time_unit="s", unit="V")
        # numdgt=15 gives 15 digits behind the point.
        np.testing.assert_allclose(found["v(out)"].t, plot["time"], rtol=1e-15)
        np.testing.assert_allclose(found["v(out)"].v, plot["v(out)"], rtol=1e-15)
        # Without a header the time stands before each vector; the default is 8 digits.
        found = read_columns(files / "pairs.txt", time_unit="s", unit="V")
        assert "column 2" in found
        np.testing.assert_allclose(found["column 2"].v, plot["v(out)"], rtol=1e-8)


@pytest.mark.ngspice
class TestFaults:
    def test_several_plots_and_none_named(self, files: Path) -> None:
        message = "holds 3 plots: AC Analysis, Transient Analysis 1, Transient Analysis 2"
        with pytest.raises(WaveformError, match=message):
            read_raw(files / "mixed.raw")

    def test_a_plot_that_does_not_exist(self, files: Path) -> None:
        with pytest.raises(WaveformError, match=r"no plot 'noise'\n.*'AC Analysis'"):
            read_raw(files / "mixed.raw", plot="noise")
        with pytest.raises(WaveformError, match="no plot 'Transient Analysis'"):
            read_raw(files / "mixed.raw", plot="Transient Analysis")

    @pytest.mark.parametrize("name", ["tran.raw", "tran_ascii.raw"])
    def test_a_truncated_file_says_how_much_is_there(
        self, files: Path, tmp_path: Path, name: str
    ) -> None:
        data = (files / name).read_bytes()
        count = read_raw(files / name).vectors["time"].size
        head = data.index(b"Values:") if b"Values:" in data else data.index(b"Binary:")
        cut = tmp_path / "cut.raw"
        cut.write_bytes(data[: head + 8 + (len(data) - head) // 2])
        with pytest.raises(WaveformError, match=rf"after (\d+) of {count} points") as caught:
            read_raw(cut)
        found = int(str(caught.value).split(" after ")[1].split()[0])
        assert abs(found - count / 2) < 0.1 * count
        cut.write_bytes(data[: head - 30])
        with pytest.raises(WaveformError, match="within the head"):
            read_raw(cut)

    def test_an_ended_simulation(self, files: Path, tmp_path: Path) -> None:
        # ngspice -r writes 0 points first and the right number when it is through.
        data = (files / "batch.raw").read_bytes()
        count = read_raw(files / "batch.raw").vectors["time"].size
        head = data.replace(b"No. Points: %d" % count, b"No. Points: 0")
        (tmp_path / "ended.raw").write_bytes(head)
        with pytest.raises(WaveformError, match=f"0 points and about {count} follow"):
            read_raw(tmp_path / "ended.raw")

    def test_a_damaged_point(self, files: Path, tmp_path: Path) -> None:
        text = (files / "tran_ascii.raw").read_text(encoding="utf-8")
        for old, new, message in (
            ("\n 7\t", "\n 8\t", "point 7, got those of 8"),
            ("\n 7\t", "\n 7x\t", "wanted numbers behind 'Values:'"),
            ("real", "real complex", "wanted 'real' or 'complex'"),
            ("No. Variables: 4", "No. Variables: 5", "promises 5 vectors and names 4"),
            ("No. Variables: 4", "No. Variables: -4", "wanted 'no. variables: ' and a count"),
            ("\tv(in)\t", "\tv(out)\t", r"two vectors are called 'v\(out\)'"),
            ("Flags: real", "Flags: real forward", "LTspice"),
            ("Plotname:", "Plotname", "got the line 'Plotname Transient Analysis'"),
        ):
            assert old in text
            (tmp_path / "bad.raw").write_text(text.replace(old, new, 1), encoding="utf-8")
            with pytest.raises(WaveformError, match=message):
                read_raw(tmp_path / "bad.raw")


class TestOtherFiles:
    @pytest.mark.parametrize(
        ("data", "message"),
        [
            (b"", "empty"),
            (b"time (s),v (V)\n0,1\n", "starts with 'Title:', got 'time"),
            ("Title: * a\nDate: x\n".encode("utf-16-le"), "UTF-16 text as LTspice writes it"),
            (b"\x89HDF\r\n\x1a\n", "got '.HDF"),
        ],
    )
    def test_are_refused(self, tmp_path: Path, data: bytes, message: str) -> None:
        (tmp_path / "other.raw").write_bytes(data)
        with pytest.raises(WaveformError, match=message):
            read_raw(tmp_path / "other.raw")

    def test_a_missing_file(self, tmp_path: Path) -> None:
        with pytest.raises(FileNotFoundError):
            read_raw(tmp_path / "none.raw")


def plot_or_error(path: Path) -> RawPlot | str:
    try:
        return read_raw(path)
    except CosimError as error:
        return str(error)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("any")


def written(values: np.ndarray, ascii_form: bool, flags: str) -> bytes:
    """A raw file by the layout of the format, without ngspice."""
    count, width = values.shape
    names = "".join(f"\t{i}\tv({i})\tvoltage\n" for i in range(width))
    head = (
        f"Title: t\nDate: d\nPlotname: p\nFlags: {flags}\nNo. Variables: {width}\n"
        f"No. Points: {count}\nVariables:\n{names}"
    )
    if not ascii_form:
        return (
            head.encode()
            + b"Binary:\n"
            + values.astype("<c16" if values.imag.any() else values.dtype).tobytes()
        )
    rows = []
    for index, row in enumerate(values):
        cells = [repr(v) for v in row.tolist()]
        if flags == "complex":
            cells = [f"{v.real!r},{v.imag!r}" for v in row.tolist()]
        rows.append(f" {index}\t" + "\n\t".join(cells) + "\n\n")
    return (head + "Values:\n" + "".join(rows)).encode()


class TestProperties:
    @PROPERTY
    @given(
        seed=st.integers(0, 2**31),
        shape=st.tuples(st.integers(1, 6), st.integers(1, 4)),
        ascii_form=st.booleans(),
        flags=st.sampled_from(["real", "complex"]),
    )
    def test_a_written_file_comes_back(
        self, folder: Path, seed: int, shape: tuple[int, int], ascii_form: bool, flags: str
    ) -> None:
        rng = np.random.default_rng(seed)
        values = rng.normal(size=shape) * 10.0 ** rng.integers(-20, 20, shape)
        if flags == "complex":
            values = values + 1j * rng.normal(size=shape)
            values[:, 0] = values[:, 0].real
        path = folder / "round_trip.raw"
        path.write_bytes(written(values, ascii_form, flags))
        plot = read_raw(path)
        for index, array in enumerate(plot.vectors.values()):
            assert (array == values[:, index]).all()

    @PROPERTY
    @given(data=st.data(), ascii_form=st.booleans())
    def test_any_damage_gives_a_plot_or_an_error_of_the_package(
        self, folder: Path, data: st.DataObject, ascii_form: bool
    ) -> None:
        whole = bytearray(written(np.arange(12.0).reshape(4, 3), ascii_form, "real"))
        for _ in range(data.draw(st.integers(1, 4))):
            place = data.draw(st.integers(0, len(whole) - 1))
            whole[place : place + data.draw(st.integers(0, 3))] = data.draw(st.binary(max_size=3))
        path = folder / "damaged.raw"
        path.write_bytes(bytes(whole))
        found = plot_or_error(path)
        assert isinstance(found, RawPlot) or "damaged.raw" in found
