"""Oracle: the SI prefixes and exact decimal values; scipy.constants for degrees."""

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants

from cosim.errors import UnitError
from cosim.units import format_quantity, parse_parameter, parse_quantity


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("10 ns", "s", 10e-9),
        ("10ns", "s", 10e-9),
        (" 2.016 ps ", "s", 2.016e-12),
        ("6.2 GHz", "Hz", 6.2e9),
        ("-300 MHz", "Hz", -300e6),
        ("85 MHz/V", "Hz/V", 85e6),
        ("0.5 GHz/mV", "Hz/V", 0.5e12),
        ("20 dB", "dB", 20.0),
        ("-130 dBc/Hz", "dBc/Hz", -130.0),
        ("4.2 K", "K", 4.2),
        ("20 mK", "K", 20e-3),
        ("27 degC", "K", constants.convert_temperature(27.0, "Celsius", "Kelvin")),
        ("90 deg", "rad", math.pi / 2),
        ("50 ohm", "ohm", 50.0),
        ("1e-9 s", "s", 1e-9),
        ("10 µs", "s", 10e-6),
        ("3.5 mV um", "V m", 3.5e-9),
        ("3.5 mV µm", "V m", 3.5e-9),
        ("2 V nm", "V m", 2e-9),
        ("1.2 % um", "1 m", 1.2e-8),
        ("0.012 um", "1 m", 1.2e-8),
        (0.25, "1", 0.25),
    ],
)
def test_quantities(text: object, unit: str, value: float) -> None:
    # One rounding of a decimal number to a float is all that may differ.
    assert parse_quantity(text, unit) == pytest.approx(value, rel=2.3e-16)


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        ("4.2", "K"),
        (4.2, "K"),
        (True, "1"),
        ("ten ns", "s"),
        ("10 s", "Hz"),
        ("3.5 mVum", "V m"),
        ("3.5 um mV", "V m"),
        ("3.5 mV", "V m"),
        ("1 %", "1 m"),
        ("1 % mV", "1 m"),
        ("9**9**9 Hz", "Hz"),
        ("inf Hz", "Hz"),
        ("nan s", "s"),
        ("1e999 s", "s"),
        ("[1,2] ns", "s"),
        ("1 u", "s"),
        ("", "s"),
        (float("nan"), "1"),
    ],
)
def test_what_is_not_a_quantity(text: object, unit: str) -> None:
    with pytest.raises(UnitError):
        parse_quantity(text, unit)


def test_a_missing_unit_is_told_with_an_example() -> None:
    with pytest.raises(UnitError, match=r'such as "4\.2 K", got "4\.2" without a unit$'):
        parse_quantity("4.2", "K")


@pytest.mark.parametrize(
    ("text", "unit", "words"),
    [("80n", "s", '"ns"'), ("6.2 Ghz", "Hz", '"GHz"'), ("1 v", "V", '"V"')],
)
def test_what_was_probably_meant_is_said(text: str, unit: str, words: str) -> None:
    with pytest.raises(UnitError, match=f"did you mean {words}"):
        parse_quantity(text, unit)


@pytest.mark.parametrize(
    ("value", "number"), [(93, 93.0), (1.5, 1.5), ("1.1 V", 1.1), ("2 um", 2e-6), ("1e-6", 1e-6)]
)
def test_parameters(value: object, number: float) -> None:
    # One rounding of a decimal number to a float is all that may differ.
    assert parse_parameter(value) == pytest.approx(number, rel=2.3e-16)


@pytest.mark.parametrize("value", ["1u", "5M", "5meg", "1k", "x", "", True, None, float("inf")])
def test_spice_suffixes_and_nonsense_are_refused(value: object) -> None:
    with pytest.raises(UnitError):
        parse_parameter(value)


def test_a_spice_suffix_is_answered_with_what_to_write() -> None:
    with pytest.raises(UnitError, match="write a number"):
        parse_parameter("5M")


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (6.2e9, "Hz", "6.2 GHz"),
        (2.016e-12, "s", "2.016 ps"),
        (-5e-3, "V", "-5 mV"),
        (0.0, "V", "0 V"),
        (4.2, "K", "4.2 K"),
        (math.nan, "s", "-"),
    ],
)
def test_writing(value: float, unit: str, text: str) -> None:
    assert format_quantity(value, unit) == text


@settings(derandomize=True, deadline=None)
@given(st.floats(allow_nan=False, allow_infinity=False, min_value=-1e6, max_value=1e6))
def test_a_number_keeps_all_its_digits(number: float) -> None:
    assert parse_quantity(f"{number!r} Hz", "Hz") == number


@settings(derandomize=True, deadline=None)
@given(st.text(max_size=12), st.sampled_from(["s", "Hz", "V", "K", "Hz/V", "dB", "rad"]))
def test_any_text_gives_a_number_or_a_unit_error(text: str, unit: str) -> None:
    try:
        value = parse_quantity(text, unit)
    except UnitError:
        return
    assert math.isfinite(value)
