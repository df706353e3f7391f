"""The commands of the studies, each of which is a table of the testbench."""

from collections.abc import Callable

# What `cli.py` registers: each command with the example of its help.
STUDY_COMMANDS: tuple[tuple[Callable[..., None], str], ...] = ()
