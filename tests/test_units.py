"""Units and typed lengths."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from converter.errors import LengthError
from converter.units import UNITLESS, Length, parse_length, to_drawing_units, unit_from_code, unit_from_name

MM, INCH = unit_from_name("mm"), unit_from_name("in")


@pytest.mark.parametrize(
    ("text", "value", "unit"),
    [
        ("0.2", 0.2, None),
        (" 0.2 mm ", 0.2, MM),
        ("0.005in", 0.005, INCH),
        ("0.005INCH", 0.005, INCH),
        ('0.5"', 0.5, INCH),
        ("1/64in", 1 / 64, INCH),
        ("1 / 64", 1 / 64, None),
        (".5mm", 0.5, MM),
        ("2.", 2.0, None),
        ("1e-3m", 1e-3, unit_from_name("metre")),
        ("0", 0.0, None),
        ("5µm", 5.0, unit_from_name("micron")),
    ],
)
def test_lengths_are_read(text, value, unit):
    assert parse_length(text) == Length(value, unit)


@pytest.mark.parametrize(
    ("text", "hint"),
    [
        ("", "write a number"),
        ("mm", "write a number"),
        ("-1", "write a number"),
        ("0,2mm", "decimal point"),
        ("1 1/2in", "write a number"),
        ("1/0", "fraction"),
        ("0.5/2", "fraction"),
        ("1e999", "too large"),
        ("nan", "write a number"),
        ("inf", "write a number"),
        ("3 furlongs", "not a unit"),
        ("3 unitless", "leave it out"),
        ("0x10", "not a"),
        ("1_000", "not a"),
    ],
)
def test_what_is_not_a_length_is_refused_with_a_hint(text, hint):
    with pytest.raises(LengthError, match=hint) as caught:
        parse_length(text)
    assert "\n" not in str(caught.value)


@given(st.text(max_size=12))
def test_any_text_is_a_length_or_one_clear_error(text):
    message, value = "", 0.0
    try:
        value = parse_length(text).value
    except LengthError as error:
        message = str(error)
    assert "\n" not in message
    assert value >= 0.0


def test_lengths_become_drawing_units():
    assert to_drawing_units(parse_length("0.2"), UNITLESS) == 0.2
    assert to_drawing_units(parse_length("0.2mm"), MM) == 0.2  # no rounding within one unit
    assert to_drawing_units(parse_length("25.4mm"), INCH) == pytest.approx(1.0, rel=1e-15)
    assert to_drawing_units(parse_length("1in"), MM) == pytest.approx(25.4, rel=1e-15)


def test_a_unit_in_a_drawing_without_units_says_what_to_do():
    with pytest.raises(LengthError, match="--units mm"):
        to_drawing_units(parse_length("0.2mm"), UNITLESS)


def test_unknown_codes_and_names_are_refused():
    with pytest.raises(LengthError, match="--units"):
        unit_from_code(25)
    with pytest.raises(LengthError, match="not a unit"):
        unit_from_name("cubit")


def test_every_symbol_is_read_back():
    for code in range(1, 25):
        unit = unit_from_code(code)
        assert parse_length(f"2{unit.symbol}") == Length(2.0, unit)
