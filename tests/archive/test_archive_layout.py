"""Oracle: h5py and xarray (with warnings as errors) read values, units and axes by themselves."""

from dataclasses import dataclass, field
from pathlib import Path

import h5py
import numpy as np
import pytest
import xarray

from cosim.archive import NumberedRun, append, consolidate, read, write, write_part
from cosim.waveform import Envelope, Waveform

PAULI = ("I", "X", "Y", "Z")


@dataclass(frozen=True, slots=True)
class Channel:
    transfer: np.ndarray = field(
        metadata={
            "axes": ("pauli_out", "pauli_in"),
            "labels": {"pauli_out": PAULI, "pauli_in": PAULI},
        }
    )
    square: np.ndarray = field(metadata={"axes": ("level", "level")})
    plain: np.ndarray


@dataclass(frozen=True, slots=True)
class Result:
    title: str
    carrier_frequency: float = field(metadata={"unit": "Hz"})
    seed: int
    locked: bool
    window: tuple[float, float] = field(metadata={"unit": "s"})
    waveform: Waveform
    envelope: Envelope
    channel: Channel
    time: np.ndarray = field(metadata={"unit": "s", "axes": ("time",)})
    vectors: dict[str, np.ndarray] = field(metadata={"unit": "A", "axes": ("time",)})
    wall_times: dict[str, float] = field(metadata={"unit": "s"})
    log: tuple[str, ...] = ()
    note: str | None = None
    quality: np.ndarray = field(default_factory=lambda: np.zeros(0))


def result(seed: int = 7) -> Result:
    rng = np.random.default_rng(seed)
    t = np.linspace(0.0, 1e-7, 3001)
    return Result(
        title="π/2 at 6 GHz",
        carrier_frequency=6e9,
        seed=seed,
        locked=True,
        window=(5e-9, 95e-9),
        waveform=Waveform(t, np.sin(1e9 * t), "A"),
        envelope=Envelope(2e-9, 0.5e-9, rng.random(50) + 1j * rng.random(50), 6e9),
        channel=Channel(rng.random((4, 4)), rng.random((3, 3)), rng.random((2, 3, 4))),
        time=t,
        vectors={"v(out)": np.cos(t), "i(x1/r1)": np.ones_like(t)},
        wall_times={"deck": 0.25, "ngspice": 3.5},
        log=("one", "two"),
    )


@pytest.fixture(params=["written", "appended", "part", "merged"])
def archive(request: pytest.FixtureRequest, tmp_path: Path) -> tuple[Path, str]:
    """The same run on each way into a file; the file and the run's group."""
    path = tmp_path / "a.h5"
    write(path, result())
    if request.param == "written":
        return path, "runs/000001"
    if request.param == "appended":
        append(path, result())
        return path, "runs/000002"
    # The runs before it shift all addresses, so that a reference kept as it was would point wrong.
    part = write_part(path, [NumberedRun(n, result()) for n in (3, 4)])
    if request.param == "part":
        return part, "runs/000004"
    consolidate(path)
    return path, "runs/000004"


def open_group(archive: tuple[Path, str], name: str = "") -> xarray.Dataset:
    path, run = archive
    with xarray.open_dataset(path, engine="h5netcdf", group=f"{run}/{name}") as dataset:
        return dataset.load()


def test_waveform_in_xarray(archive: tuple[Path, str]) -> None:
    dataset = open_group(archive, "waveform")
    expected = result().waveform
    assert dataset["v"].dims == ("t",)
    assert dataset["v"].attrs["units"] == "A"
    assert dataset["t"].attrs["units"] == "s"
    np.testing.assert_array_equal(dataset["v"], expected.v)
    np.testing.assert_array_equal(dataset["v"].coords["t"], expected.t)


def test_envelope_has_its_time_axis(archive: tuple[Path, str]) -> None:
    dataset = open_group(archive, "envelope")
    expected = result().envelope
    assert dataset["iq"].dims == ("t",)
    np.testing.assert_array_equal(dataset["iq"], expected.iq)
    np.testing.assert_array_equal(dataset["t"], 2e-9 + 0.5e-9 * np.arange(50))
    assert dataset["t"].attrs["units"] == "s"
    assert dataset["iq"].attrs["units"] == "V"
    assert dataset["carrier_frequency"].attrs["units"] == "Hz"


def test_channel_has_labelled_axes(archive: tuple[Path, str]) -> None:
    dataset = open_group(archive, "channel")
    expected = result().channel
    assert dataset["transfer"].dims == ("pauli_out", "pauli_in")
    assert dataset["transfer"].sel(pauli_out="X", pauli_in="Z") == expected.transfer[1, 3]
    assert dataset["square"].dims == ("level", "level_")
    assert dataset["plain"].dims == ("plain_index0", "plain_index1", "plain_index2")
    np.testing.assert_array_equal(dataset["plain"], expected.plain)


def test_arrays_of_a_dict_have_the_axis_of_their_owner(archive: tuple[Path, str]) -> None:
    dataset = open_group(archive, "vectors")
    assert dataset["v(out)"].dims == ("time",)
    assert dataset["v(out)"].attrs["units"] == "A"
    np.testing.assert_array_equal(dataset["time"], result().time)
    assert dataset["time"].attrs["units"] == "s"


def test_numbers_of_a_dict_are_labelled_by_its_keys(archive: tuple[Path, str]) -> None:
    times = open_group(archive)["wall_times"]
    assert times.dims == ("wall_times_key",)
    assert times.sel(wall_times_key="ngspice") == 3.5
    assert times.attrs["units"] == "s"


def test_numbers_of_a_dict_as_a_group_are_read_too(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, result())
    with h5py.File(path, "r+") as file:
        run = file["runs/000001"]
        del run["wall_times"]
        # As archives had them before their numbers stood in one dataset.
        group = run.create_group("wall_times", track_order=True)
        group.attrs["kind"] = "dict"
        for name, seconds in {"deck": 0.5, "ngspice": 7.0}.items():
            group[name] = seconds
    types = {"Result": Result, "Waveform": Waveform, "Envelope": Envelope, "Channel": Channel}
    assert read(path, types).wall_times == {"deck": 0.5, "ngspice": 7.0}


def test_scalars_and_texts(archive: tuple[Path, str]) -> None:
    dataset = open_group(archive)
    assert dataset.attrs["kind"] == "Result"
    assert dataset["title"] == "π/2 at 6 GHz"
    assert dataset["carrier_frequency"] == 6e9
    assert dataset["carrier_frequency"].attrs["units"] == "Hz"
    assert dataset["seed"] == 7
    assert dataset["locked"].dtype == np.bool_
    assert list(dataset["window"].values) == [5e-9, 95e-9]
    assert dataset["window"].attrs["units"] == "s"
    assert list(dataset["log"].values) == ["one", "two"]
    assert dataset["quality"].size == 0


def test_every_number_has_units_and_every_axis_a_scale(archive: tuple[Path, str]) -> None:
    path, _ = archive
    seen = []

    def visit(name: str, item: object) -> None:
        if not isinstance(item, h5py.Dataset):
            return
        seen.append(name)
        if item.dtype.kind in "iufc":
            assert item.attrs["units"], name
        for length, dimension in zip(item.shape, item.dims, strict=True):
            if h5py.h5ds.is_scale(item.id):
                continue
            scale = dimension[0]
            # A copied reference that still holds an address of the old file ends here.
            assert scale.parent == item.parent, name
            assert scale.shape == (length,), name

    with h5py.File(path) as file:
        file.visititems(visit)
        assert file.attrs["format"] == "cosim archive"
        assert file.attrs["schema_version"] == 1
        assert file.attrs["created"].endswith("+00:00")
        assert file.attrs["package_version"]
    assert len(seen) > 40


def test_long_arrays_are_packed_and_checked(archive: tuple[Path, str]) -> None:
    path, run = archive
    with h5py.File(path) as file:
        long, short = file[run]["waveform/v"], file[run]["envelope/iq"]
        assert (long.compression, long.compression_opts, long.shuffle) == ("gzip", 1, True)
        assert long.fletcher32
        assert short.chunks is None


def test_nothing_is_pickled(archive: tuple[Path, str]) -> None:
    path, _ = archive
    kinds = []
    with h5py.File(path) as file:
        file.visititems(lambda _, item: kinds.append(getattr(item, "dtype", np.dtype(float))))
    plain = [kind for kind in kinds if kind.kind in "biufc" or h5py.check_string_dtype(kind)]
    assert len(plain) == len(kinds)


def test_table_in_xarray(archive: tuple[Path, str]) -> None:
    path, run = archive
    with xarray.open_dataset(path, engine="h5netcdf", group="table") as table:
        row = table.sel(id=int(run.rpartition("/")[2])).load()
    assert row["kind"] == "Result"
    assert row["status"] == "done"
    assert row["envelope.carrier_frequency"] == 6e9
    assert row["envelope.carrier_frequency"].attrs["units"] == "Hz"
    assert row["wall_time"].attrs["units"] == "s"
