"""Parts into NAME.h5, and archives into one: small ones in memory, others in a child process."""

import json
import os
import shutil
import subprocess
import sys
from collections.abc import Container, Iterable, Sequence
from contextlib import suppress
from pathlib import Path
from typing import Any

import cosim
from cosim.archive import merging
from cosim.archive.checksums import CHECKSUM
from cosim.archive.files import archive_files, is_merged, list_parts, merged_part_path, opened
from cosim.archive.layout import PLAN
from cosim.archive.merging import find_owners, foreign_runs, merge_files, sources_of
from cosim.archive.publishing import (
    image_of,
    locked,
    publish,
    publish_file,
    remove_parts,
    temporary_path,
    unwritable,
)
from cosim.archive.store import owners_of, resolved
from cosim.errors import ArchiveError

# Up to this size all files together are merged in memory, which saves the start of a process.
_IN_MEMORY = 4 * 2**20  # bytes
_SMALL_PART = 8 * 2**20  # bytes of a part that is merged into another one
_MERGED_PART = 32 * 2**20  # bytes of the parts that are merged into one


def consolidate(path: str | os.PathLike[str], keep: Container[int] | None = None) -> int:
    """Merge the parts of an archive into NAME.h5 and remove them.

    Of an archive of any size, a bounded part is held in memory: above 4 MiB the new file is
    written by a process of its own, since HDF5 can crash where the disk is full.

    Parameters
    ----------
    path : path
        NAME.h5.
    keep : container of int or None
        Numbers of the runs whose records are kept; of the others, their rows and series are.
        None keeps all.

    Returns
    -------
    int
        How many parts were merged.

    Raises
    ------
    ArchiveError
        If a file cannot be read or written. Whatever happens, no run is lost: the parts stay
        until NAME.h5 holds them.
    """
    target = resolved(path)
    with locked(target):
        files = archive_files(target)
        kept = None if keep is None else _kept(files, keep)
        if files[1:] or kept is not None:
            _write_merged(target, target, [files], kept, packed=True)
        remove_parts(target, files[1:])
    return len(files) - 1


def compact(path: str | os.PathLike[str]) -> int:
    """Merge the small parts of an archive into larger ones, which are parts still.

    Parameters
    ----------
    path : path
        NAME.h5.

    Returns
    -------
    int
        By how many parts there are fewer.

    Raises
    ------
    ArchiveError
        If a part cannot be read or written; no run is lost.
    """
    target = resolved(path)
    with locked(target):
        return compact_parts(target, archive_files(target)[1:])


def compact_parts(target: Path, parts: Sequence[Path]) -> int:
    """Merge small parts into larger ones, for a writer that holds the lock.

    Parameters
    ----------
    target : Path
        NAME.h5.
    parts : sequence of Path
        All its parts, in the order of their publication.

    Returns
    -------
    int
        By how many parts there are fewer.

    Raises
    ------
    ArchiveError
        If a part cannot be read or written; no run is lost.
    """
    groups = _neighbours([(part, part.stat().st_size) for part in parts])
    for group in groups:
        _write_merged(merged_part_path(group), target, [group], None, packed=False)
        remove_parts(target, group)
    return sum(len(group) - 1 for group in groups)


def _neighbours(parts: Sequence[tuple[Path, int]]) -> list[list[Path]]:
    """Choose neighbours that become one part, from the newest on.

    A part that is merged already joins again only if those after it are not much smaller, so that
    a row is copied a few times in all and not once for each merge.
    """
    groups: list[list[Path]] = [[]]
    total = 0
    for part, size in reversed(parts):
        small = size <= (4 * total if is_merged(part) else _SMALL_PART)
        if not small or total + size > _MERGED_PART:
            groups.append([])
            total = 0
            small = not is_merged(part) and size <= _SMALL_PART
        if small:
            groups[-1].insert(0, part)
            total += size
    return [group for group in groups if len(group) > 1]


def merge(path: str | os.PathLike[str], others: Sequence[str | os.PathLike[str]]) -> int:
    """Bring the runs of other archives of the same plan into an archive.

    Of a run that stands in several archives the one that is done wins over one that is not, then
    the one that started later. The other archives stay as they are.

    Parameters
    ----------
    path : path
        NAME.h5, which is made if it does not exist.
    others : sequence of path
        The other archives, at least one.

    Returns
    -------
    int
        How many runs came in.

    Raises
    ------
    ArchiveError
        If a file cannot be read or written, an archive has no plan or another one, or is named
        twice. `path` is then as it was, or consolidated.
    """
    target = resolved(path)
    sources = [resolved(other) for other in others]
    if not sources or len({target, *sources}) < len(sources) + 1:
        raise ArchiveError(
            f"{target}: wanted other archives to merge, each once, got {len(sources)}",
            hint="name each archive once, and not the one that they go into",
        )
    new = not target.exists() and not list_parts(target)
    archives = [] if new else [target]
    plans = {_plan_digest(item): item for item in (*archives, *sources)}
    if len(plans) > 1:
        first, second = list(plans.values())[:2]
        raise ArchiveError(
            f"{second}: planned otherwise than {first}, so that equal numbers are not equal runs",
            hint="merge archives of one sweep only",
        )
    if not new:
        # A part that stayed after a crash would win over what came in.
        consolidate(target)
    with locked(target):
        own: Sequence[Path] = () if new else archive_files(target)
        files = [own, *(archive_files(item) for item in sources)]
        return _write_merged(target, target, files, None, packed=True)


def _plan_digest(path: Path) -> str:
    archive_files(path)
    with opened(path) as file:
        if PLAN not in file:
            raise ArchiveError(
                f"{path}: the archive has no plan, so that its runs cannot be told from others",
                hint="merge archives of sweeps",
            )
        return str(file[PLAN].attrs[CHECKSUM])


def _kept(files: Iterable[Path], keep: Container[int]) -> list[int]:
    return [number for number in owners_of(files) if number in keep]


def _write_merged(
    path: Path,
    archive: Path,
    archives: Sequence[Sequence[Path]],
    keep: Sequence[int] | None,
    packed: bool,
) -> int:
    """Write a file of an archive from those of several, and tell how many runs of theirs it has.

    The runs of the first archive do not count if there are others.
    """
    paths = [item for files in archives for item in files]
    indices = [index for index, files in enumerate(archives) for _ in files]
    size = sum(item.stat().st_size for item in paths)
    if size > _IN_MEMORY:
        return _write_in_child(path, archive, archives, keep, packed, size)
    with sources_of(paths) as sources:
        owners = find_owners(sources, indices)
        kept = None if keep is None else frozenset(keep)

        def write(file: Any) -> None:
            merge_files(file, sources, owners, kept, packed)

        image = image_of(path, write)
    publish(path, image, archive)
    return foreign_runs(owners, archives)


def _write_in_child(
    path: Path,
    archive: Path,
    archives: Sequence[Sequence[Path]],
    keep: Sequence[int] | None,
    packed: bool,
    size: int,
) -> int:
    free = shutil.disk_usage(path.parent).free
    if free < size:
        raise ArchiveError(
            f"{path}: not merged, wanted {size / 1e6:.0f} MB of free space, got {free / 1e6:.0f}",
            hint="free some space; the archive is as it was, with its parts",
        )
    temporary = temporary_path(path, archive)
    order = {
        "archives": [[str(item.absolute()) for item in files] for files in archives],
        "keep": keep,
        "packed": packed,
        "target": str(temporary.absolute()),
        "parent": os.getpid(),
    }
    try:
        count = _run_child(path, order)
        publish_file(temporary, path)
    except BaseException:
        with suppress(OSError):
            os.unlink(temporary)
        raise
    return count


def _run_child(path: Path, order: dict[str, Any]) -> int:
    # The child finds this package where this process has found it, and other packages too.
    folder = str(Path(cosim.__file__).parents[1])
    environment = os.environ | {
        "PYTHONPATH": os.pathsep.join([folder, *filter(None, [os.environ.get("PYTHONPATH")])])
    }
    try:
        done = subprocess.run(
            [sys.executable, "-P", "-m", merging.__name__],
            input=json.dumps(order),
            capture_output=True,
            text=True,
            env=environment,
            check=False,
        )
    except OSError as error:
        raise unwritable(path, error) from error
    if done.returncode:
        last = done.stderr.strip().splitlines()[-1:] or [f"it was ended by {-done.returncode}"]
        raise ArchiveError(
            f"{path}: not merged, the process that writes the new file failed: {last[0]}",
            hint="the archive is as it was, with its parts; is there space left on the disk?",
        )
    return int(done.stdout)
