"""Installs an open process kit for tests: no dependency of the package, and no part of it."""

import subprocess
import sys
from pathlib import Path

PACKAGE, VERSION = "sky130", "0.15.3"
LIBRARY = "sky130.lib.spice"
MODELS = "combined_models/continuous"


def install_kit(place: Path) -> Path:
    """Install the package into a folder of its own; give the kit's top folder.

    A package index that cannot be reached is an error: a test on a kit must not pass without one.
    """
    command = [sys.executable, "-m", "pip", "install", "--quiet", "--no-deps"]
    done = subprocess.run(
        [*command, "--target", str(place), f"{PACKAGE}=={VERSION}"],
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    return place / PACKAGE / "src" / "sky130_fd_pr"
