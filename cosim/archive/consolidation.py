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
from cosim.archive.files import list_parts, opened
from cosim.archive.layout import PLAN
from cosim.archive.merging import Owners, find_owners, merge_files, sources_of
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
from cosim.archive.sweeps import archive_files
from cosim.errors import ArchiveError

# Up to this size all files together are merged in memory, which saves the start of a process.
_IN_MEMORY = 32 * 2**20  # bytes


def consolidate(path: str | os.PathLike[str], keep: Container[int] | None = None) -> int:
    """Merge the parts of an archive into NAME.h5 and remove them.

    Of an archive of any size, a bounded part is held in memory: above 32 MiB the new file is
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
            _write_merged(target, [files], kept)
        remove_parts(target, files[1:])
    return len(files) - 1


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
        files = [archive_files(item) for item in (*archives, *sources)]
        owners = _write_merged(target, files, None)
    own = 0 if new else len(files[0])
    return int((owners.source >= own).sum())


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
    target: Path, archives: Sequence[Sequence[Path]], keep: Sequence[int] | None
) -> Owners:
    """Write one file from many in the place of `target`."""
    paths = [path for archive in archives for path in archive]
    indices = [index for index, archive in enumerate(archives) for _ in archive]
    size = sum(path.stat().st_size for path in paths)
    with sources_of(paths) as sources:
        owners = find_owners(sources, indices)
        if size <= _IN_MEMORY:
            kept = None if keep is None else frozenset(keep)

            def write(file: Any) -> None:
                merge_files(file, sources, owners, kept, packed=True)

            image = image_of(target, write)
    if size <= _IN_MEMORY:
        publish(target, image, target)
    else:
        _write_in_child(target, archives, keep, size)
    return owners


def _write_in_child(
    target: Path, archives: Sequence[Sequence[Path]], keep: Sequence[int] | None, size: int
) -> None:
    free = shutil.disk_usage(target.parent).free
    if free < size:
        raise ArchiveError(
            f"{target}: not merged, wanted {size / 1e6:.0f} MB of free space, got {free / 1e6:.0f}",
            hint="free some space; the archive is as it was, with its parts",
        )
    temporary = temporary_path(target, target)
    order = {
        "archives": [[str(path.absolute()) for path in archive] for archive in archives],
        "keep": keep,
        "target": str(temporary.absolute()),
        "parent": os.getpid(),
    }
    try:
        _run_child(target, order)
        publish_file(temporary, target)
    except BaseException:
        with suppress(OSError):
            os.unlink(temporary)
        raise


def _run_child(target: Path, order: dict[str, Any]) -> None:
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
        raise unwritable(target, error) from error
    if done.returncode:
        last = done.stderr.strip().splitlines()[-1:] or [f"it was ended by {-done.returncode}"]
        raise ArchiveError(
            f"{target}: not merged, the process that writes the new file failed: {last[0]}",
            hint="the archive is as it was, with its parts; is there space left on the disk?",
        )
