"""What every figure of a result has around it: title, caution, and the file."""

import os

from matplotlib.figure import Figure

from cosim.errors import InputError
from cosim.terminal import CAUTION


def write_figure(
    figure: Figure, title: str, path: str | os.PathLike[str], *, margin: float = 0.02
) -> None:
    """Add title and caution to a figure, and write it.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        With a constrained layout.
    title : str
        Above it.
    path : path
        File to write; its ending says the format.
    margin : float
        Part of the height that is kept free for the caution.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    figure.suptitle(title, wrap=True)
    figure.text(0.995, 0.002, CAUTION, ha="right", va="bottom", fontsize=6, color="0.45")
    rect = (0, margin, 1, 1 - margin)
    figure.get_layout_engine().set(rect=rect)  # type: ignore[union-attr, call-arg]
    try:
        figure.savefig(path, dpi=150)
    except (OSError, ValueError) as error:
        raise InputError(f"the figure {os.fspath(path)} cannot be written: {error}") from None
