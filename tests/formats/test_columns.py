"""Oracle: numpy's own writer, and files typed in as oscilloscopes and simulators write them."""

import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from cosim.errors import CosimError, InputError, MissingFileError, WaveformError
from cosim.formats.columns import read_columns
from cosim.waveform import Waveform

# The same examples in every run, so that a failure can be repeated; no limit on time.
PROPERTY = settings(derandomize=True, deadline=None, max_examples=200)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("columns")


def write(folder: Path, text: str, encoding: str = "utf-8") -> Path:
    path = folder / "wave.csv"
    path.write_bytes(text.encode(encoding))
    return path


# Every file here holds the same signal: 0, 10, 20 ns and 0, 0.25, -0.5 V.  Layouts are those of
# the trade, recalled from memory; no file is copied.
SAME_SIGNAL = {
    "units in the header": "time (ns),v (V)\n0,0\n10,0.25\n20,-0.5\n",
    "square brackets": "t [ns],u [mV]\n0,0\n10,250\n20,-500\n",
    "no blank before the unit": "time(ns),CH1(mV)\n0,0\n10,250\n20,-500\n",
    "slash": "t/ns;u/mV\n0;0\n10;250\n20;-500\n",
    "row of units": "Time,CH1\ns,V\n0,0\n1e-8,0.25\n2E-08,-5.0e-1\n",
    "units in words": "Source,CH1\nSecond,Volt\n0,0\n+1e-8,.25\n2.e-08,-.5\n",
    "units in brackets, blank line": "Time,Channel A\n(ns),(mV)\n\n0,0\n10,250\n20,-500\n",
    "channel number as name": "x-axis,1\nsecond,Volt\n0,0\n1e-8,0.25\n2e-8,-0.5\n",
    "preamble": (
        'Model,"SCOPE, 4 channels"\nSample Interval,1e-08\nRecord Length,3\nLabels,,\n\n'
        "TIME (s),CH1 (V)\n0,0\n1e-8,0.25\n2e-8,-0.5\n"
    ),
    "tabs": "time (ns)\tV(out) (mV)\n0\t0\n10\t250\n20\t-500\n",
    "blanks": "  time (ns)   v(out) (mV)\n  0   0  \n  10  250\n\t20 -500 \n\n",
    "comments": "# today, a rush\n% t (s)\n; v\ntime (ns),v (V)\n0,0\n# a\n10,0.25\n\n20,-0.5",
    "header in a comment": "# a title\n# time (ns), v (V)\n0 0\n10 0.25\n20 -0.5\n",
    "windows": "time (ns),v (V)\r\n0,0\r\n10,0.25\r\n20,-0.5\r\n",
    "old mac": "time (ns),v (V)\r0,0\r10,0.25\r20,-0.5\r",
    "byte order mark": "\ufefftime (ns),v (V)\n0,0\n10,0.25\n20,-0.5\n",
    "quotes": '"time (ns)","v(a, b) (V)"\n"0","0"\n"10","0.25"\n"20","-0.5"\n',
    "comma in brackets": "time (ns),v(a,b) (V)\n0,0\n10,0.25\n20,-0.5\n",
    "trailing separator": "time (ns),v (V),\n0,0,\n10,0.25,\n20,-0.5,\n",
    "trailing separator in rows only": "time (ns),v (V)\n0,0,\n10,0.25,\n20,-0.5,\n",
    "blanks after commas": "time (ns), v (V)\n0, 0\n10, 0.25\n20, -0.5 \n",
}


class TestReadColumns:
    @pytest.mark.parametrize("layout", SAME_SIGNAL)
    def test_reads_the_layouts_of_the_trade(self, tmp_path: Path, layout: str) -> None:
        found = read_columns(write(tmp_path, SAME_SIGNAL[layout]))
        assert len(found) == 1
        (wave,) = found.values()
        # "10 ns" is the float nearest to 1e-8, not 10 times a rounded 1e-9.
        assert wave.t.tolist() == [0.0, 1e-8, 2e-8]
        assert wave.v.tolist() == [0.0, 0.25, -0.5]
        assert wave.unit == "V"

    @pytest.mark.parametrize("encoding", ["latin-1", "utf-8", "utf-8-sig", "utf-16"])
    def test_reads_micro_in_any_encoding(self, tmp_path: Path, encoding: str) -> None:
        path = write(tmp_path, "Zeit für alles (µs),i(v1) (µA)\n0,1\n1,2\n", encoding)
        wave = read_columns(path)["i(v1)"]
        assert wave.t.tolist() == [0.0, 1e-6]
        assert wave.v.tolist() == [1e-6, 2e-6]
        assert wave.unit == "A"

    def test_reads_the_greek_letter_for_micro(self, tmp_path: Path) -> None:
        path = write(tmp_path, "t (\N{GREEK SMALL LETTER MU}s),v (V)\n0,1\n1,2\n")
        assert read_columns(path)["v"].t[1] == 1e-6

    def test_takes_units_from_the_keywords(self, tmp_path: Path) -> None:
        path = write(tmp_path, "time,V(out)\n0,0\n1,2\n")
        found = read_columns(path, time_unit="ps", unit="mV")
        assert list(found) == ["V(out)"]
        assert found["V(out)"].t[1] == 1e-12
        assert found["V(out)"].v[1] == 2e-3

    def test_reads_numbers_without_a_header(self, tmp_path: Path) -> None:
        found = read_columns(write(tmp_path, "0 1 2\n1 3 4\n"), time_unit="s", unit="A")
        assert {name: wave.v.tolist() for name, wave in found.items()} == {
            "column 2": [1.0, 3.0],
            "column 3": [2.0, 4.0],
        }

    def test_drops_a_time_that_is_repeated_before_each_vector(self, tmp_path: Path) -> None:
        path = write(tmp_path, " time  v(a)  time  v(b)\n 0 1 0 2\n 1 3 1 4\n")
        found = read_columns(path, time_unit="s", unit="V")
        assert list(found) == ["v(a)", "v(b)"]

    def test_picks_columns_by_name_and_leaves_text_alone(self, tmp_path: Path) -> None:
        # The first row of numbers is found by its numbers, so text stands behind it only.
        path = write(tmp_path, "v(p) (V),t (ns),phase (deg),v(n) (V)\n1,0,9,2\n3,1,off,4\n")
        found = read_columns(path, time="T", values=["v(n)", "V(p) (V)"])
        assert list(found) == ["v(n)", "V(p) (V)"]
        assert found["v(n)"].v.tolist() == [2.0, 4.0]
        assert found["V(p) (V)"].v.tolist() == [1.0, 3.0]

    def test_a_node_named_like_a_unit_is_not_a_unit(self, tmp_path: Path) -> None:
        path = write(tmp_path, "time (s),v(A)\n0,1\n1,2\n")
        assert read_columns(path, unit="V")["v(A)"].unit == "V"

    @PROPERTY
    @given(
        values=arrays(
            float, st.tuples(st.integers(2, 20), st.just(3)), elements=st.floats(-1e30, 1e30)
        ),
        separator=st.sampled_from([",", ";", "\t", " "]),
        marks=st.sampled_from(["", "# "]),
    )
    def test_reads_back_what_numpy_writes(
        self, folder: Path, values: np.ndarray, separator: str, marks: str
    ) -> None:
        values[:, 0] = np.cumsum(1.0 + np.arange(len(values))) * math.pi
        path = folder / "round_trip.csv"
        header = separator.join(["time (s)", "v (V)", "i (A)"])
        # 17 significant digits give every double back exactly (IEEE 754-2019, 5.12.2).
        np.savetxt(path, values, "%.17g", delimiter=separator, header=header, comments=marks)
        found = read_columns(path)
        assert (found["v"].t == values[:, 0]).all()
        assert (found["v"].v == values[:, 1]).all()
        assert (found["i"].v == values[:, 2]).all()
        assert (found["v"].unit, found["i"].unit) == ("V", "A")


FAULTS = {
    "no units": ("time,v\n0,1\n1,2\n", r"unit for the column 'time'.*line 2"),
    "no unit of the value": ("time (s),v\n0,1\n1,2\n", r"unit for the column 'v'"),
    "numbers only": ("0,1\n1,2\n", r"unit for the column 'column 1'"),
    "unit of another kind": ("time (s),f (GHz)\n0,1\n1,2\n", r"'f \(GHz\)'.*voltage.*'GHz'"),
    "gap": ("t (s),v (V)\n0,1\n1,\n2,3\n", r":3: the column 'v \(V\)' is empty"),
    "gap in the first row": ("t (s),v (V)\n,1\n1,2\n", r":2: the column 't \(s\)' is empty"),
    "time runs back": ("t (ns),v (V)\n0,1\n# c\n\n2,1\n1,2\n", r":6: .*back: 1 ns after 2 ns"),
    "time repeats": ("t (s),v (V)\n0,1\n1,2\n1,3\n", r":4: .*stands still: 1 s after 1 s"),
    "nan": ("t (s),v (V)\n0,1\n1,nan\n", r":3: wanted a finite number .*got nan"),
    "infinite": ("t (s),v (V)\n0,1\n1,-inf\n", r":3: wanted a finite number .*got -inf"),
    "too large": ("t (s),v (V)\n0,1\n1,1e999\n", r":3: wanted a finite number .*got inf"),
    "text": ("t (s),v (V)\n0,1\n1,overload\n", r":3: wanted a number .*'overload'"),
    "text in the first row": ("t (s),v (V)\n0,off\n1,2\n2,3\n", r":2: .*number '0' beside .*'off'"),
    "end mark": ("t (s),v (V)\n0,1\n1,2\nEND\n", r":4: wanted a number .*'END'"),
    "SPICE suffix": ("t (s),v (V)\n0,1\n1,2m\n", r":3: wanted a number .*'2m'"),
    "decimal comma": ("t (s);v (V)\n0,0;1,5\n1,0;2,5\n", r":2: .*decimal comma in '0,0'"),
    "decimal comma later": ("t (s);v (V)\n0;1\n1;2,5\n", r":3: .*decimal comma in '2,5'"),
    "decimal comma between blanks": ("t (s) v (V)\n0,0 1,5\n", r":2: .*decimal comma in '0,0'"),
    "decimal comma in quotes": ('t (s),v (V)\n"0,0","1,5"\n', r":2: .*decimal comma in '0,0'"),
    "decimal commas between commas": ("t (s),v (V)\n0,0,1,5\n1,0,2,5\n", r"decimal comma in '0,0'"),
    "longer row": ("t (s),v (V)\n0,1\n1,2,5\n", r":3: wanted 2 columns as in line 2, got 3"),
    "shorter row": ("t (s),v (V)\n0,1\n1\n", r":3: the column 'v \(V\)' is empty"),
    "one row": ("t (s),v (V)\n0,1\n", r"at least two rows of numbers, got 1"),
    "header only": ("t (s),v (V)\n", r"rows of at least two numbers, got none in 1 lines"),
    "comments only": ("# t (s),v (V)\n", r"got none"),
    "empty": ("", r"the file is empty"),
    "blank": (" \n\n", r"the file is empty"),
    "binary": ("t (s),v (V)\n0,1\n\x00\x01\n", r"binary file"),
    "two of one name": ("t (s),v (V),v (V)\n0,1,2\n1,2,3\n", r"two columns are called 'v'"),
    "one column": ("t (s)\n0\n1\n", r"at least two numbers"),
}


class TestFaults:
    @pytest.mark.parametrize("fault", FAULTS)
    def test_says_what_and_where(self, tmp_path: Path, fault: str) -> None:
        text, message = FAULTS[fault]
        with pytest.raises(WaveformError, match=message) as caught:
            read_columns(write(tmp_path, text))
        assert "wave.csv" in str(caught.value)

    def test_a_missing_file(self, tmp_path: Path) -> None:
        with pytest.raises(FileNotFoundError, match=r"none\.csv: there is no such file") as caught:
            read_columns(tmp_path / "none.csv")
        assert isinstance(caught.value, MissingFileError)

    def test_a_folder(self, tmp_path: Path) -> None:
        with pytest.raises(InputError, match="got a folder"):
            read_columns(tmp_path)

    def test_a_column_that_does_not_exist(self, tmp_path: Path) -> None:
        path = write(tmp_path, "time (s),v(out) (V)\n0,1\n1,2\n")
        with pytest.raises(WaveformError, match=r"no column 'v\(ou\)'\n.*did you mean 'v\(out\)'"):
            read_columns(path, values=["v(ou)"])
        with pytest.raises(WaveformError, match="no column 'tim'"):
            read_columns(path, time="tim")

    def test_an_ambiguous_column(self, tmp_path: Path) -> None:
        path = write(tmp_path, "t (s),v (V),v (V)\n0,1,2\n1,2,3\n")
        with pytest.raises(WaveformError, match="'v' could be any of the columns 2, 3"):
            read_columns(path, values=["v"])

    def test_the_time_as_a_value(self, tmp_path: Path) -> None:
        path = write(tmp_path, "t (s),v (V)\n0,1\n1,2\n")
        with pytest.raises(WaveformError, match="asked for as a value"):
            read_columns(path, values=["t"])

    @pytest.mark.parametrize(
        ("time_unit", "unit", "message"),
        [
            ("ms", None, "is in s, but `time_unit` says ms"),
            (None, "A", "is in V, but `unit` says A"),
            ("V", None, "`time_unit`: wanted a unit of time, got 'V'"),
            (None, "ohm", "`unit`: wanted a unit of voltage or current, got 'ohm'"),
            (None, "furlong", "got 'furlong'"),
        ],
    )
    def test_units_that_contradict(
        self, tmp_path: Path, time_unit: str | None, unit: str | None, message: str
    ) -> None:
        path = write(tmp_path, "t (s),v (V)\n0,1\n1,2\n")
        with pytest.raises(WaveformError, match=message):
            read_columns(path, time_unit=time_unit, unit=unit)


CELLS = st.one_of(
    st.floats().map(repr),
    st.integers(-3, 3).map(str),
    st.sampled_from(
        ["", "time (ns)", "v (V)", "s", "V", "#", "%", ";", '"', "0,5", "nan", "x", "."]
    ),
)
TEXTS = st.one_of(
    st.text(max_size=60),
    st.text(alphabet='0123456789.eE+-,;\t "#%\n\r()sV', max_size=80),
    st.builds(
        lambda rows, separator, end: end.join(separator.join(row) for row in rows),
        st.lists(st.lists(CELLS, min_size=1, max_size=3), max_size=6),
        st.sampled_from([",", ";", "\t", " "]),
        st.sampled_from(["\n", "\r\n"]),
    ),
)


def waveforms_or_error(path: Path, time_unit: str | None, unit: str | None) -> str:
    """The message of the error; empty when waveforms came. Any other error goes through."""
    try:
        found = read_columns(path, time_unit=time_unit, unit=unit)
    except CosimError as error:
        return str(error)
    assert found
    assert all(isinstance(wave, Waveform) for wave in found.values())
    return ""


class TestAnyText:
    @settings(PROPERTY, max_examples=300)
    @given(text=TEXTS, named=st.booleans())
    def test_gives_waveforms_or_an_error_of_the_package(
        self, folder: Path, text: str, named: bool
    ) -> None:
        path = folder / "any.csv"
        path.write_bytes(text.encode("utf-8", errors="replace"))
        units = ("ns", "V") if named else (None, None)
        message = waveforms_or_error(path, *units)
        assert not message or "any.csv" in message

    @PROPERTY
    @given(data=st.binary(max_size=100))
    def test_any_bytes_too(self, folder: Path, data: bytes) -> None:
        path = folder / "bytes.csv"
        path.write_bytes(data)
        message = waveforms_or_error(path, "ns", "V")
        assert not message or "bytes.csv" in message
