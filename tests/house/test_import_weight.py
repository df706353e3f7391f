"""Oracle: sys.modules of a fresh interpreter."""

import subprocess
import sys

import pytest

import cosim

HEAVY = {"qutip", "matplotlib", "PySpice", "scipy.signal", "h5py", "numba", "pint", "pandas"}


def loaded_after(code: str) -> set[str]:
    script = f"import sys\n{code}\nprint('\\n'.join(sys.modules), file=sys.stderr)"
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True, timeout=60
    )
    return set(done.stderr.split())


def test_importing_the_package_stays_light() -> None:
    loaded = loaded_after("import cosim")
    assert "cosim" in loaded
    assert not loaded & (HEAVY | {"numpy", "scipy", "typer", "pydantic"})


def test_help_stays_light() -> None:
    code = (
        "from cosim.cli import main\n"
        "sys.argv = ['qcosim', '--help']\n"
        "try: main()\n"
        "except SystemExit as end: assert not end.code"
    )
    loaded = loaded_after(code)
    assert "typer" in loaded
    assert not loaded & (HEAVY | {"numpy", "pydantic"})


def test_reading_a_testbench_loads_no_solver() -> None:
    loaded = loaded_after("from cosim import load_testbench")
    assert not loaded & {"qutip", "matplotlib", "PySpice", "scipy.signal", "h5py", "numba"}


@pytest.mark.parametrize(
    ("modules", "absent"),
    [
        pytest.param(
            "cosim.gate",
            {"scipy.signal", "scipy.stats", "PySpice"},  # QuTiP loads matplotlib.
            marks=pytest.mark.full,
        ),
        (
            "cosim.readout, cosim.readout_decisions",
            {"scipy.signal", "scipy.stats", "qutip", "matplotlib", "PySpice"},
        ),
        ("cosim.dispatch", {"scipy.signal", "scipy.stats", "qutip", "matplotlib", "PySpice"}),
    ],
)
def test_a_chain_loads_what_it_uses(modules: str, absent: set[str]) -> None:
    assert not loaded_after(f"import {modules}") & absent


def test_the_door_is_explicit() -> None:
    assert sorted(cosim.__all__) == cosim.__all__
    for name in cosim.__all__:
        assert getattr(cosim, name) is not None
    assert set(cosim.__all__) <= set(dir(cosim))
    named = {name for names in cosim._HOMES.values() for name in names}
    assert named == set(cosim.__all__)


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        _ = cosim.nothing
