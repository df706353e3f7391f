"""The archives of jobs that divide a sweep among themselves."""

import re
from pathlib import Path

_SHARE = re.compile(r"\.(\d+)-of-(\d+)\.h5$")


def share_path(path: Path, part: int, parts: int) -> Path:
    """Name the archive of one share.

    Parameters
    ----------
    path : Path
        The archive of the whole sweep, NAME.h5.
    part, parts : int
        Which share, from 1, of how many.

    Returns
    -------
    Path
        NAME.03-of-64.h5; the archive itself where there is only one share.
    """
    if parts == 1:
        return path
    return path.with_name(f"{path.stem}.{part:0{len(str(parts))}d}-of-{parts}{path.suffix}")


def shares_beside(path: Path) -> tuple[Path, ...]:
    """Find the archives of shares of a sweep.

    Parameters
    ----------
    path : Path
        The archive of the whole sweep, NAME.h5, which need not exist.

    Returns
    -------
    tuple of Path
        Those in the same folder, in the order of their names.
    """
    folder = path.absolute().parent
    beside = folder.iterdir() if folder.is_dir() else ()
    return tuple(
        sorted(
            item
            for item in beside
            if item.name.startswith(f"{path.stem}.") and _SHARE.match(item.name[len(path.stem) :])
        )
    )
