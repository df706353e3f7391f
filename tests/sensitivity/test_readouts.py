"""Oracle: the closed form of errors by decay during a readout."""

from pathlib import Path

import pytest

from cosim.decks import read_deck
from cosim.errors import InputError
from cosim.keys import number_key
from cosim.sensitivity.changed_readouts import ChangedReadouts
from cosim.sensitivity.study import run_sensitivity
from tests.readout.benches import bench
from tests.sources import GAMBETTA_PROTOCOLS
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "readout"
# The field stands before the window begins, and follows a decay within 2/kappa = 6.4 ns.
STANDING = {
    "netlist": {"stop": "1.05 us"},
    "resonator": {
        "kappa_in": "50 MHz",
        "chi": "10 MHz",
        "start": "0 ns",
        "length": "1 us",
        "photons": 500.0,
    },
}
READOUT = {
    "window": ["500 ns", "1 us"],
    "t1": "50 us",
    "preparation_error": 0.001,
    "decay_times": 16,
    "shots": 1000,
    "records": 100,
}


@pytest.mark.full
def test_relaxation_and_preparation_in_closed_form(tmp_path: Path, validate: Validate) -> None:
    keys = ["readout.t1", "readout.preparation_error"]
    made = bench(tmp_path, readout=READOUT, sensitivity={"keys": keys}, **STANDING)
    result = run_sensitivity(made)
    items = {item.key: item for item in result.items}
    # A decay before the window or in its first half is an error: (750 ns)/(2 T1), of which
    # tau/(4 T1) falls in the window; its derivative is -1/T1 of that, to order t/T1 = 1.5 %.
    # A decay is seen later by the field's delay: 2 %, as in tests/readout.
    validate(
        "derivative of the assignment error by T1",
        f"{GAMBETTA_PROTOCOLS}; before the window a decay is an error at all times",
        -750e-9 / (2 * 50e-6**2),
        items["readout.t1"].first,
        "1/s",
        rel=0.035,
        card="D12",
    )
    # |1> is not reached with that chance, which is half of it in the mean of both states; a decay
    # that would have been an error anyway takes its part, twice the value, away.
    wanted = 0.5 * (1.0 - 2.0 * result.value)
    assert items["readout.preparation_error"].first == pytest.approx(wanted, rel=0.02)
    # The netlist ran for the testbench as it stands only.
    assert result.netlist_runs == 1
    assert not any(item.simulated for item in result.items)


def test_what_a_readout_has_to_simulate_again(tmp_path: Path) -> None:
    made = bench(tmp_path, readout={"t1": "50 us"})
    deck = read_deck(made)
    readouts = ChangedReadouts(made, deck)
    again = {
        text: readouts.simulated(number_key(made, deck, text, ""))
        for text in ("readout.t1", "readout.thermal_population", "readout.gain", "resonator.chi")
    }
    # Whether there are changes of the state is simulated, how often they come is judged.
    assert again == {
        "readout.t1": False,
        "readout.thermal_population": True,
        "readout.gain": True,
        "resonator.chi": True,
    }


def test_a_gates_metric_is_none_of_a_readout(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="of a readout wanted assignment_error"):
        run_sensitivity(bench(tmp_path, sensitivity={"metric": "free_frame"}))
