"""Units of drawings ($INSUNITS) and lengths as they are typed: `0.2`, `0.2mm`, `0.005in`.

Source of the codes: DXF Reference, HEADER section, $INSUNITS (values 0 to 24). Metres per unit: the international
yard of 0.9144 m (1959); the US survey foot of 1200/3937 m; IAU 2012 Resolution B2 (astronomical unit), the light year
of 365.25 days and the parsec of 648000/pi astronomical units (IAU 2015 Resolution B2).
"""

import math
import re
from dataclasses import dataclass

from converter.errors import LengthError

__all__ = ["UNITLESS", "Length", "Unit", "parse_length", "to_drawing_units", "unit_from_code", "unit_from_name"]

_INCH, _SURVEY_FOOT, _AU = 0.0254, 1200.0 / 3937.0, 149_597_870_700.0


@dataclass(frozen=True, slots=True)
class Unit:
    """A unit of length.

    Attributes:
        code: value of $INSUNITS.
        symbol: short name, used in reports and after numbers.
        metres: length in metres; 0 for the unitless case.
        names: every spelling that is understood, lower case.
    """

    code: int
    symbol: str
    metres: float
    names: tuple[str, ...]


UNITLESS = Unit(0, "unitless", 0.0, ("unitless", "none"))
_UNITS = (
    UNITLESS,
    Unit(1, "in", _INCH, ("in", "inch", "inches", '"')),
    Unit(2, "ft", 12 * _INCH, ("ft", "foot", "feet", "'")),
    Unit(3, "mi", 63360 * _INCH, ("mi", "mile", "miles")),
    Unit(4, "mm", 1e-3, ("mm", "millimetre", "millimetres", "millimeter", "millimeters")),
    Unit(5, "cm", 1e-2, ("cm", "centimetre", "centimetres", "centimeter", "centimeters")),
    Unit(6, "m", 1.0, ("m", "metre", "metres", "meter", "meters")),
    Unit(7, "km", 1e3, ("km", "kilometre", "kilometres", "kilometer", "kilometers")),
    Unit(8, "uin", 1e-6 * _INCH, ("uin", "microinch", "microinches")),
    Unit(9, "mil", 1e-3 * _INCH, ("mil", "mils", "thou")),
    Unit(10, "yd", 36 * _INCH, ("yd", "yard", "yards")),
    Unit(11, "angstrom", 1e-10, ("angstrom", "angstroms")),
    Unit(12, "nm", 1e-9, ("nm", "nanometre", "nanometres", "nanometer", "nanometers")),
    Unit(13, "um", 1e-6, ("um", "µm", "μm", "micron", "microns", "micrometre", "micrometer")),
    Unit(14, "dm", 1e-1, ("dm", "decimetre", "decimetres", "decimeter", "decimeters")),
    Unit(15, "dam", 1e1, ("dam", "decametre", "decametres", "decameter", "decameters")),
    Unit(16, "hm", 1e2, ("hm", "hectometre", "hectometres", "hectometer", "hectometers")),
    Unit(17, "Gm", 1e9, ("gm", "gigametre", "gigametres", "gigameter", "gigameters")),
    Unit(18, "au", _AU, ("au", "astronomical-unit", "astronomical-units")),
    Unit(19, "ly", 299_792_458.0 * 365.25 * 86400.0, ("ly", "light-year", "light-years")),
    Unit(20, "pc", _AU * 648000.0 / math.pi, ("pc", "parsec", "parsecs")),
    Unit(21, "us-ft", _SURVEY_FOOT, ("us-ft", "us-survey-foot", "us-survey-feet")),
    Unit(22, "us-in", _SURVEY_FOOT / 12, ("us-in", "us-survey-inch", "us-survey-inches")),
    Unit(23, "us-yd", _SURVEY_FOOT * 3, ("us-yd", "us-survey-yard", "us-survey-yards")),
    Unit(24, "us-mi", _SURVEY_FOOT * 5280, ("us-mi", "us-survey-mile", "us-survey-miles")),
)
_BY_CODE = {unit.code: unit for unit in _UNITS}
_BY_NAME = {name: unit for unit in _UNITS for name in unit.names}
_NUMBER = r"[0-9]+\.?[0-9]*(?:[eE][-+]?[0-9]+)?|\.[0-9]+(?:[eE][-+]?[0-9]+)?"
_LENGTH = re.compile(rf"\s*({_NUMBER})(?:\s*/\s*([0-9]+))?\s*([^\s0-9.,+/][^\s,]*)?\s*", re.ASCII)


@dataclass(frozen=True, slots=True)
class Length:
    """A length as typed.

    Attributes:
        value: the number, not negative and finite.
        unit: its unit; None when only a number was typed: drawing units.
    """

    value: float
    unit: Unit | None = None

    def __str__(self) -> str:
        return f"{self.value:g}{self.unit.symbol if self.unit else ''}"


def unit_from_code(code: int) -> Unit:
    """Return the unit of a $INSUNITS value.

    Raises:
        LengthError: the value is not one of the DXF Reference.
    """
    if code not in _BY_CODE:
        raise LengthError(f"$INSUNITS {code} is none of the DXF Reference's values 0 to 24; state the units by --units")
    return _BY_CODE[code]


def unit_from_name(name: str) -> Unit:
    """Return the unit of a name such as `mm`, `inch`, `unitless`, in any case.

    Raises:
        LengthError: the name is not known.
    """
    unit = _BY_NAME.get(name.strip().lower())
    if unit is None:
        common = ", ".join(_BY_CODE[code].symbol for code in (4, 5, 6, 13, 1, 2))
        raise LengthError(f"{name!r} is not a unit; use one of {common} or another name of the DXF Reference's units")
    return unit


def parse_length(text: str) -> Length:
    """Read a length: a number, or a simple fraction such as `1/64`, with or without a unit.

    Raises:
        LengthError: not a finite number that is 0 or more, a decimal comma, a denominator of 0 or an unknown unit.
    """
    match = _LENGTH.fullmatch(text)
    if match is None:
        hint = "; write a decimal point, not a comma" if "," in text else ""
        raise LengthError(f"{text!r} is not a length; write a number such as 0.2, or one with a unit, 0.2mm{hint}")
    number, divisor, name = match.groups()
    if divisor is not None and (not number.isdigit() or int(divisor) == 0):
        raise LengthError(f"{text!r} is not a length; a fraction is one whole number over another, such as 1/64in")
    value = float(number) / float(divisor or 1)
    if not math.isfinite(value):
        raise LengthError(f"{text!r} is not a length: the number is too large")
    unit = unit_from_name(name) if name else None
    if unit is UNITLESS:
        raise LengthError(f"{text!r} is not a length: {name} is not a unit; leave it out for drawing units")
    return Length(value, unit)


def to_drawing_units(length: Length, drawing: Unit) -> float:
    """Return a length in the units of a drawing.

    Raises:
        LengthError: the length has a unit and the drawing states none.
    """
    if length.unit is None:
        return length.value
    if drawing.metres == 0.0:
        raise LengthError(
            f"{length} has a unit but the drawing states none ($INSUNITS is 0 or missing); "
            f"state the drawing's units, such as --units {length.unit.symbol}, or give the length in drawing units"
        )
    if length.unit is drawing:
        return length.value
    return length.value * (length.unit.metres / drawing.metres)
