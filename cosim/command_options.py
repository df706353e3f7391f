"""What several commands of the command line share; light, since `--help` imports it."""

import os
from pathlib import Path
from typing import Annotated

import typer

from cosim.errors import InputError

TestbenchPath = Annotated[Path, typer.Argument(metavar="TESTBENCH.toml", help="The testbench.")]
ArchivePath = Annotated[Path, typer.Argument(metavar="ARCHIVE.h5", help="The archive.")]
JsonFlag = Annotated[bool, typer.Option("--json", help="Print numbers for machines, no table.")]
PlotOption = Annotated[
    Path | None, typer.Option(metavar="FILE", help="Write a figure (png, pdf or svg).")
]


def check_output(path: Path | None, *endings: str) -> None:
    """Refuse a name that cannot be written before anything long is run.

    Parameters
    ----------
    path : Path or None
        The file; None for none.
    endings : str
        Endings that it may have.

    Raises
    ------
    InputError
        Naming what is wrong.
    """
    if path is None:
        return
    if path.suffix.lower() not in endings:
        raise InputError(f"'{path}': wanted a name that ends in {' or '.join(endings)}")
    folder = path.absolute().parent
    if not folder.is_dir():
        raise InputError(f"'{path}': the folder {folder} does not exist")
    if not os.access(folder, os.W_OK):
        raise InputError(f"'{path}': the folder {folder} cannot be written to")
