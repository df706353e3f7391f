"""Oracle: damaged, foreign, newer and older files made by hand with h5py; what must be said."""

import os
from dataclasses import dataclass, field
from pathlib import Path

import h5py
import numpy as np
import pytest

from cosim.archive import append, consolidate, read, read_table, write, write_part
from cosim.archive.layout import NumberedRun
from cosim.errors import ArchiveError, WaveformError
from cosim.waveform import Waveform


@dataclass(frozen=True, slots=True)
class Old:
    value: float
    samples: np.ndarray


@dataclass(frozen=True, slots=True)
class New:
    value: float
    bandwidth: float = 1e9
    names: tuple[str, ...] = field(default_factory=lambda: ("a",))


@dataclass(frozen=True, slots=True)
class Newer:
    value: float
    required: float


@pytest.fixture
def archive(tmp_path: Path) -> Path:
    path = tmp_path / "gate.h5"
    write(path, Old(0.5, np.linspace(0.0, 1.0, 5000)))
    return path


def says(path: Path, *words: str) -> None:
    """Each reader must raise an ArchiveError that names the file and has the words."""
    for reader in (read_table, lambda p: read(p, {"Old": Old})):
        with pytest.raises(ArchiveError) as caught:
            reader(path)
        assert path.name in str(caught.value)
        assert caught.value.hint
        for word in words:
            assert word in str(caught.value)


def test_missing_file_names_its_neighbours(archive: Path) -> None:
    says(archive.with_name("gates.h5"), "no such archive", "did you mean 'gate.h5'?")


def test_missing_folder(tmp_path: Path) -> None:
    says(tmp_path / "none" / "a.h5", "no such archive")
    with pytest.raises(ArchiveError, match=r"folder .*none does not exist"):
        write(tmp_path / "none" / "a.h5", New(1.0))


def test_folder(tmp_path: Path) -> None:
    says(tmp_path, "this is a folder")
    with pytest.raises(ArchiveError, match="this is a folder"):
        write(tmp_path, New(1.0))


def test_parts_without_their_head(archive: Path) -> None:
    write_part(archive, [NumberedRun(2, New(1.0))])
    archive.unlink()
    says(archive, "parts are in", "move the .h5 file and its folder")
    for writer in (append, write):
        with pytest.raises(ArchiveError, match="parts"):
            writer(archive, New(1.0))


def test_file_of_something_else(tmp_path: Path) -> None:
    path = tmp_path / "deck.h5"
    path.write_text("* not an archive\n" * 100)
    says(path, "not an HDF5 file")
    for writer in (append, write):
        with pytest.raises(ArchiveError, match="not an HDF5 file"):
            writer(path, New(1.0))
    assert path.read_text().startswith("* not")
    path.write_bytes(b"")
    says(path, "empty")


def test_foreign_hdf5_is_not_overwritten(tmp_path: Path) -> None:
    path = tmp_path / "other.h5"
    with h5py.File(path, "w") as file:
        file["data"] = np.arange(3)
    content = path.read_bytes()
    says(path, "not a cosim archive")
    for writer in (append, write):
        with pytest.raises(ArchiveError, match="not a cosim archive"):
            writer(path, New(1.0))
    assert path.read_bytes() == content


def test_newer_schema(archive: Path) -> None:
    with h5py.File(archive, "r+") as file:
        file.attrs["schema_version"] = 9
        file.attrs["package_version"] = "7.1.0"
    says(archive, "schema version 9", "reads up to 1", "qcosim 7.1.0")
    with pytest.raises(ArchiveError, match="schema version 9"):
        append(archive, New(1.0))


def test_truncated_anywhere(archive: Path) -> None:
    content = archive.read_bytes()
    for size in range(1, len(content), len(content) // 50):
        archive.write_bytes(content[:size])
        says(archive)


def test_a_flipped_bit_in_the_samples_is_found(archive: Path) -> None:
    with h5py.File(archive) as file:
        chunk = file["runs/000001/samples"].id.get_chunk_info(0)
    content = bytearray(archive.read_bytes())
    content[chunk.byte_offset + chunk.size // 2] ^= 1
    archive.write_bytes(content)
    with pytest.raises(ArchiveError, match="damaged"):
        read(archive, {"Old": Old})


def test_a_lost_object_is_found(archive: Path) -> None:
    with h5py.File(archive, "r+") as file:
        del file["runs/000001"]
    with pytest.raises(ArchiveError, match="damaged"):
        read(archive, {"Old": Old})


@pytest.mark.filterwarnings(
    # Python 3.12 and later warn of any fork while numpy's threads exist; the child only reads.
    "ignore:This process:DeprecationWarning"
)
def test_no_permission(archive: Path) -> None:
    archive.chmod(0)
    pid = os.fork()
    if pid == 0:
        message = ""
        try:
            os.chdir(archive.parent)
            if os.getuid() == 0:
                os.setuid(65534)  # Permissions do not bind root.
            read_table(archive.name)
        except ArchiveError as error:
            message = str(error)
        finally:
            os._exit(0 if "no permission to read" in message else 1)
    assert os.waitpid(pid, 0)[1] == 0


def test_no_such_run_lists_what_exists(archive: Path) -> None:
    write_part(archive, [NumberedRun(n, New(1.0)) for n in (2, 3, 7, 9, 10)])
    with pytest.raises(ArchiveError, match=r"no run 4\n  runs: 1 to 3, 7, 9 to 10"):
        read(archive, {}, 4)


def test_unknown_kind_comes_as_a_dict(archive: Path) -> None:
    found = read(archive, {})
    assert (found["kind"], found["value"], found["samples"].size) == ("Old", 0.5, 5000)
    assert set(found) == {"kind", "value", "samples"}


def test_field_that_an_older_file_lacks_takes_its_default(archive: Path) -> None:
    assert read(archive, {"Old": New}) == New(0.5, 1e9, ("a",))


def test_field_without_default_is_named(archive: Path) -> None:
    with pytest.raises(ArchiveError, match=r"the Old in /runs/000001 has no field 'required'"):
        read(archive, {"Old": Newer})


def test_values_that_the_class_refuses(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, Waveform(np.array([0.0, 1.0]), np.array([0.0, 1.0])))
    with h5py.File(path, "r+") as file:
        file["runs/000001/t"][...] = [1.0, 0.0]
    with pytest.raises(ArchiveError, match="is not valid: the time must rise") as caught:
        read(path, {"Waveform": Waveform})
    assert "Waveform in /runs/000001" in str(caught.value)
    assert isinstance(caught.value.__cause__, WaveformError)


def test_a_damaged_part_stops_the_merge_and_nothing_is_lost(archive: Path) -> None:
    write_part(archive, [NumberedRun(2, New(1.0))])
    bad = write_part(archive, [NumberedRun(3, New(1.0))])
    bad.write_bytes(bad.read_bytes()[:-100])
    with pytest.raises(ArchiveError, match=bad.name):
        consolidate(archive)
    bad.unlink()
    assert read_table(archive)["id"].tolist() == [1, 2]


def test_part_needs_runs_and_an_archive(archive: Path) -> None:
    with pytest.raises(ArchiveError, match="at least one run"):
        write_part(archive, [])
    with pytest.raises(ArchiveError, match="no such archive"):
        write_part(archive.with_name("none.h5"), [NumberedRun(1, New(1.0))])
    assert [item.name for item in archive.parent.iterdir()] == [archive.name]


def test_write_does_not_mix_with_the_parts_of_another_archive(archive: Path) -> None:
    write_part(archive, [NumberedRun(2, New(1.0))])
    with pytest.raises(ArchiveError, match="would be mixed"):
        write(archive, New(2.0))
