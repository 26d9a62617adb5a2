"""Quantities against the SI Brochure, scipy's constants and exact decimals."""

from __future__ import annotations

import math
from decimal import Decimal

import pytest
import scipy.constants
from hypothesis import given
from hypothesis import strategies as st

from eddyshed.solver.quantities import (
    UNITS,
    dimension_name,
    example_quantity,
    format_quantity,
    nearest,
    parse_quantity,
    quoted,
)


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        # BIPM, SI Brochure, 9th edition (2019), table 8: units accepted with the SI.
        ("1 min", "s", 60),
        ("1 h", "s", 3600),
        ("1 d", "s", 86400),
        # The same, table 7: prefixes.
        ("1 km", "m", 1e3),
        ("1 cm", "m", 1e-2),
        ("1 mm", "m", 1e-3),
        ("1 g", "kg", 1e-3),
        # IEC 80000-13: a kilobyte is 1000 bytes.
        ("4 GB", "B", 4e9),
        ("250 MB", "B", 2.5e8),
        ("8 kB", "B", 8e3),
        # The SI Brochure, table 4: derived units with special names, in base units.
        ("1 N", "kg m s-2", 1),
        ("1 Pa", "kg m-1 s-2", 1),
        ("1 J", "kg m2 s-2", 1),
        ("1 W", "kg m2 s-3", 1),
        # G. A. Wilkins, The IAU Style Manual (1989): Julian year of 365.25 d.
        ("1 yr", "s", 365.25 * 86400),
        ("1 yr", "s", scipy.constants.Julian_year),
        ("1 d", "s", scipy.constants.day),
        ("1 K", "K", 1),
    ],
)
def test_unit_has_its_size(text, unit, value):
    # One rational rounded once, and small integers: no error at all.
    assert parse_quantity(text, unit) == value


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("20 km", "m", 20000.0),
        ("6 h", "s", 21600.0),
        ("2.02e-11 1/m/s", "m-1 s-1", 2.02e-11),
        ("2e-11 m-1 s-1", "m-1 s-1", 2e-11),
        ("2e-11 m^-1 s^-1", "m-1 s-1", 2e-11),
        ("2e-11 m⁻¹ s⁻¹", "m-1 s-1", 2e-11),
        ("2e-11 m-1·s-1", "m-1 s-1", 2e-11),
        ("2e-11 m-1.s-1", "m-1 s-1", 2e-11),
        ("100 m2/s", "m2 s-1", 100.0),
        ("4.3e33 m8/s", "m8 s-1", 4.3e33),
        ("8e-12 s-2", "s-2", 8e-12),
        ("1e-9 m2 s-3", "m2 s-3", 1e-9),
        ("1e-9 m^2/s^3", "m2 s-3", 1e-9),
        ("1e-9 m**2/s**3", "m2 s-3", 1e-9),
        ("1e-9 W/kg", "m2 s-3", 1e-9),
        ("-1.5 cm/s", "m s-1", -0.015),
        (".5 m", "m", 0.5),
        ("7cm", "m", 0.07),
        ("0 km", "m", 0.0),
        ("0.5", "1", 0.5),
    ],
)
def test_spelling_is_read(text, unit, value):
    # Decimal arithmetic by hand, rounded once: the nearest float, no tolerance.
    assert parse_quantity(text, unit) == value


@pytest.mark.parametrize("text", ["0.01 1/d", "0.01/d", "0.01 d-1", "0.01 d^-1"])
def test_rate_per_day(text):
    # Two roundings here (0.01 and the quotient) and one in the parser, each half a
    # unit in the last place: less than two units apart.
    assert parse_quantity(text, "s-1") == pytest.approx(0.01 / 86400, rel=2**-51)


@pytest.mark.parametrize("spelling", ["6 h", "0.25 d", "360 min", "21.6e3 s"])
def test_all_spellings_of_a_value_are_one_float(spelling):
    assert parse_quantity(spelling, "s") == 21600.0
    assert parse_quantity(f"{spelling}-1", "s-1") == parse_quantity(
        spelling.replace(" ", " 1/"), "s-1"
    )


@given(
    number=st.decimals(-1000, 1000, places=9),
    symbol=st.sampled_from(["mm", "cm", "m", "km"]),
)
def test_value_is_the_nearest_float(number, symbol):
    # Python's decimal module computes the product exactly, float() rounds it once.
    factor = {"mm": "0.001", "cm": "0.01", "m": "1", "km": "1000"}[symbol]
    exact = float(number * Decimal(factor))
    assert parse_quantity(f"{number:f} {symbol}", "m") == exact


@given(
    value=st.floats(1e-12, 1e12) | st.floats(-1e12, -1e-12),
    unit=st.sampled_from(["m", "s", "s-1", "m8 s-1", "m-1 s-1", "K"]),
)
def test_format_reads_back_within_the_printed_digits(value, unit):
    # Six significant digits: half a unit of the sixth is at most 5e-6 of the
    # value; the rest of the tolerance is for the rounding of the conversion.
    text = format_quantity(value, unit)
    assert parse_quantity(text, unit) == pytest.approx(value, rel=5.0001e-6)


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (20000, "m", "20 km"),
        (4e9, "B", "4 GB"),
        (2.56e8, "B", "256 MB"),
        (1500, "m", "1.5 km"),
        (40075000, "m", "40075 km"),
        (0.05, "m", "5 cm"),
        (1e-7, "m", "0.0001 mm"),
        (0, "m", "0 m"),
        (86400, "s", "1 d"),
        (21600, "s", "6 h"),
        (5400, "s", "1.5 h"),
        (-600, "s", "-10 min"),
        (30 * 86400, "s", "30 d"),
        (1000 * 86400, "s", "1000 d"),
        (31557600, "s", "1 yr"),
        (123456.789, "s", "1.4289 d"),
        (1e5, "s", "1.15741 d"),
        (0.25, "s", "0.25 s"),
        (math.inf, "m", "inf"),
        (2.3148148e-7, "s-1", "2.31481e-07 s-1"),
        (-0.0, "m2 s-1", "0 m2 s-1"),
    ],
)
def test_format_for_people(value, unit, text):
    assert format_quantity(value, unit) == text


@pytest.mark.parametrize(
    ("text", "unit", "message"),
    [
        ("6 h", "m", '"6 h" is a time, but a length is expected, e.g. "20 km"'),
        (
            "1e-9 m2 s-2",
            "m2 s-3",
            '"1e-9 m2 s-2" is an energy per mass (m2 s-2), but a power per mass '
            '(m2 s-3) is expected, e.g. "1e-9 m2/s3"',
        ),
        (
            "3 kg m-1 s-5",
            "K",
            '"3 kg m-1 s-5" is a quantity in kg m-1 s-5, but a temperature is '
            'expected, e.g. "280 K"',
        ),
        ("20", "m", '"20" has no unit: a length is expected, e.g. "20 km"'),
        ("20 Km", "m", 'unknown unit "Km" (did you mean "km"?)'),
        ("3 days", "s", 'unknown unit "days" (did you mean "d"?)'),
        ("3 kilometers", "m", 'unknown unit "kilometers" (did you mean "km"?)'),
        ("3 foo", "m", 'unknown unit "foo" (known: mm cm m km s min'),
        ("4 degC", "K", '"degC" is an offset unit'),
        ("4 °C", "K", "give kelvin (0 degC is 273.15 K)"),
        ("1 1/m s", "m-1 s-1", "one factor after each slash"),
        ("1 1/(m s)", "m-1 s-1", "has parentheses: write 1/m/s or m-1 s-1"),
        ("1 m/s-1", "m s-1", "a slash and a negative exponent"),
        ("2 3 km", "m", 'has a factor "3" that is no unit'),
        ("1 m100", "m", 'has a factor "m100" that is no unit'),
        ("1,5 km", "m", 'has a factor ",5" that is no unit'),
        ("km", "m", '"km" does not start with a number'),
        ("inf m", "m", "does not start with a number"),
        ("nan m", "m", "does not start with a number"),
        ("", "m", '"" does not start with a number'),
        ("1" * 200 + " m", "m", '..." does not start with a number'),
        ("1e999 m", "m", "beyond the range of floating-point numbers"),
        ("1e308 km", "m", "beyond the range of floating-point numbers"),
        ("1e-400 m", "m", "beyond the range of floating-point numbers"),
        ("5e-324 mm", "m", "beyond the range of floating-point numbers"),
    ],
)
def test_bad_quantity_is_told(text, unit, message):
    with pytest.raises(ValueError, match=r".") as caught:
        parse_quantity(text, unit)
    assert message in str(caught.value)


@given(text=st.text(max_size=30) | st.from_regex(r"[0-9.e+-]{0,9} [a-zA-Z0-9/ ^.-]*"))
def test_any_text_gives_a_number_or_a_line(text):
    try:
        told = str(parse_quantity(text, "m2 s-1"))
    except ValueError as error:
        told = str(error)
    # Everything quoted from the input is escaped: the message is one line.
    assert len(told.splitlines()) == 1
    assert "is expected" in told or "beyond" in told or math.isfinite(float(told))


@pytest.mark.parametrize("unit", [*UNITS, "m2 s-3", "kg m-1 s-5", "m-1 s-1", "1"])
def test_example_is_of_the_dimension_and_can_be_read(unit):
    base = {"g": "kg", "N": "kg m s-2"}.get(unit, unit)
    assert math.isfinite(parse_quantity(example_quantity(base), base))
    assert dimension_name(base) == dimension_name(unit)


def test_negative_zero_is_zero():
    assert math.copysign(1, parse_quantity("-0 km", "m")) == 1


def test_words_for_messages():
    assert quoted('a\n"\u2028') == '"a\\n"\\u2028"'
    assert quoted("x" * 65) == f'"{"x" * 64}..."'
    assert nearest("Viscocity", ["drag", "viscosity"]) == "viscosity"
    assert nearest("zzz", ["drag", "viscosity"]) is None
