"""Oracle: pip, which builds the wheel and installs it into an empty folder."""

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]


@pytest.mark.full
def test_the_built_wheel_has_all_it_needs(tmp_path: Path) -> None:
    pip = [sys.executable, "-m", "pip", "--quiet", "--disable-pip-version-check"]
    # Building leaves its own folders beside the source, so a copy is built.
    source = tmp_path / "source"
    shutil.copytree(ROOT / "cosim", source / "cosim")
    for name in ("pyproject.toml", "README.md", "LICENSE"):
        shutil.copy(ROOT / name, source)
    subprocess.run([*pip, "wheel", "--no-deps", "-w", tmp_path, source], check=True, timeout=300)
    (wheel,) = tmp_path.glob("qcosim-*.whl")
    site = tmp_path / "site"
    subprocess.run([*pip, "install", "--no-deps", "--target", site, wheel], check=True, timeout=300)
    assert {path.name for path in site.iterdir() if path.is_dir()} >= {"cosim"}
    assert not (site / "tests").exists()
    assert (site / "cosim" / "py.typed").is_file()
    code = (
        "import cosim, cosim.circuit.simulator as s; print(cosim.__file__); "
        "s.simulator_version(); cosim.run"
    )
    done = subprocess.run(
        [sys.executable, "-P", "-c", code],
        env={**os.environ, "PYTHONPATH": str(site)},
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=120,
        check=True,
    )
    assert done.stdout.strip() == str(site / "cosim" / "__init__.py")
