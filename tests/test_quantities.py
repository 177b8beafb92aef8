"""Text units against their published factors."""

import re
import tomllib
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from profileplan.inputs.quantities import UNITS, Quantity, parse_quantity

PUBLISHED = tomllib.loads((Path(__file__).parent / "published" / "units.toml").read_text("utf-8"))

TWO_ROUNDINGS = 4.5e-16  # relative: a product and a quotient in double precision

SIMPLE_UNITS = [
    ("mm", Quantity.LENGTH, 1.0),
    ("m", Quantity.LENGTH, 1000.0),
    ("in", Quantity.LENGTH, 25.4),
    ("m/s", Quantity.VELOCITY, 1000.0),
    ("m/s²", Quantity.ACCELERATION, 1000.0),
    ("g", Quantity.ACCELERATION, 9806.65),
    ("g", Quantity.MASS, 0.001),
    ("rev", Quantity.ANGLE, 360.0),
    ("rpm", Quantity.ANGULAR_VELOCITY, 6.0),
    ("min", Quantity.TIME, 60.0),
]


@pytest.mark.parametrize("text", PUBLISHED["exact"])
def test_a_unit_that_is_exact_by_definition_is_exact(text: str) -> None:
    """A factor that is off in its last bit would show up in every table that is exported."""
    published = PUBLISHED["exact"][text]
    expected = published["value"]
    actual = parse_quantity(text, Quantity[published["quantity"]])
    assert expected == actual


@pytest.mark.parametrize("text", PUBLISHED["printed"])
def test_the_radian_agrees_with_the_printed_digits(text: str) -> None:
    """Angles in radian go through an irrational factor, which is easily turned upside down."""
    published = PUBLISHED["printed"][text]
    radian = parse_quantity("1 rad", Quantity.ANGLE)
    actual = parse_quantity(text, Quantity.ANGLE) / radian
    assert_allclose(actual, published["radians"], rtol=0, atol=published["tolerance"])


@pytest.mark.parametrize(
    ("text", "quantity", "expected"),
    [
        ("1.5 m/s", Quantity.VELOCITY, 1500.0),
        ("0.5 g", Quantity.ACCELERATION, 4903.325),
        ("2 in", Quantity.LENGTH, 50.8),
        ("90 deg", Quantity.ANGLE, 90.0),
        ("90°", Quantity.ANGLE, 90.0),
        ("0.25 rev", Quantity.ANGLE, 90.0),
        ("60 rpm", Quantity.ANGULAR_VELOCITY, 360.0),
        ("60 rpm/s", Quantity.ANGULAR_ACCELERATION, 360.0),
        ("90 mm/min", Quantity.VELOCITY, 1.5),
        ("3600 mm/min^2", Quantity.ACCELERATION, 1.0),
        ("2 m/ms", Quantity.VELOCITY, 2e6),
        ("80 ms", Quantity.TIME, 0.08),
        ("50 us", Quantity.TIME, 50e-6),
        ("3.2 kg", Quantity.MASS, 3.2),
        ("250 g", Quantity.MASS, 0.25),
        ("-.5e1mm", Quantity.LENGTH, -5.0),
        ("  +7  mm ", Quantity.LENGTH, 7.0),
        (12, Quantity.LENGTH, 12.0),
        (1.25, Quantity.TIME, 1.25),
    ],
)
def test_a_text_with_a_unit_is_read(text: float | str, quantity: Quantity, expected: float) -> None:
    """These are the spellings that a user meets in data sheets."""
    assert expected == parse_quantity(text, quantity)


@pytest.mark.parametrize(
    "text", ["200 m/s^3", "200 m/s³", "200 m/s3", "200 m/s/s/s", "200 m/s2/s", "200 m / s^3"]
)
def test_powers_are_read_in_every_spelling(text: str) -> None:
    """Not every keyboard has a superscript."""
    assert parse_quantity(text, Quantity.JERK) == 200_000.0


@pytest.mark.parametrize("text", ["5 \u00b5m", "5 \u03bcm", "5 um"])
def test_micro_is_read_in_every_spelling(text: str) -> None:
    """The micro sign and the Greek letter look the same on the screen."""
    assert parse_quantity(text, Quantity.LENGTH) == 0.005


@pytest.mark.parametrize("quantity", Quantity)
def test_the_choices_that_a_message_lists_are_all_read(quantity: Quantity) -> None:
    """A message that recommends what is then refused would be worse than none."""
    for unit in (*quantity.choices.split(", "), quantity.unit):
        assert parse_quantity(f"1 {unit}", quantity) > 0, unit


@pytest.mark.parametrize(
    ("value", "quantity", "words"),
    [
        ("90 deg", Quantity.LENGTH, '"90 deg"; a length is needed, and "deg" is no unit'),
        ("5 mm", Quantity.VELOCITY, '"5 mm"; a velocity is needed'),
        ("5 mm/s", Quantity.ANGULAR_VELOCITY, "allowed are deg/s, rad/s, rev/s, rpm"),
        ("5 kg", Quantity.ACCELERATION, '"kg" is no unit'),
        ("5 m/kg", Quantity.VELOCITY, '"m/kg" is no unit'),
        ("5 m/s^4", Quantity.JERK, '"m/s^4" is no unit'),
        ("1,5 m/s", Quantity.VELOCITY, 'write a decimal point instead of the comma: "1.5 m/s"'),
        ("1,5", Quantity.TIME, 'write a decimal point instead of the comma: "1.5"'),
        ("2000", Quantity.VELOCITY, 'a text needs a unit, such as "2000 mm/s"'),
        ("fast", Quantity.VELOCITY, '"fast"; needed: a velocity'),
        ("nan mm", Quantity.LENGTH, "needed: a length"),
        ("", Quantity.MASS, 'such as "1 kg"'),
        (True, Quantity.MASS, "true; needed: a mass, as a number in kg"),
        (None, Quantity.MASS, "nothing; needed"),
        ([1], Quantity.TIME, "an array; needed: a time"),
        pytest.param(10**400, Quantity.LENGTH, "more than 60 digits; beyond all limits", id="huge"),
    ],
)
def test_what_is_no_such_quantity_is_refused(value: object, quantity: Quantity, words: str) -> None:
    """The message gives what was found and what to write instead."""
    with pytest.raises(ValueError, match=re.escape(words)):
        parse_quantity(value, quantity)


@given(value=st.floats(-1e12, 1e12, allow_subnormal=False), unit=st.sampled_from(SIMPLE_UNITS))
def test_a_number_survives_being_written_with_a_unit(
    value: float, unit: tuple[str, Quantity, float]
) -> None:
    """Writing a value in another unit and reading it costs no more than rounding."""
    name, quantity, factor = unit
    actual = parse_quantity(f"{value!r} {name}", quantity)
    assert_allclose(actual, value * factor, rtol=TWO_ROUNDINGS)


@given(st.integers(-(10**9), 10**9))
def test_whole_milliseconds_are_the_nearest_double(number: int) -> None:
    """``"9 ms"`` must be the same number as 0.009, or ticks would not be whole."""
    assert parse_quantity(f"{number} ms", Quantity.TIME) == number / 1000


@given(st.text(), st.sampled_from(Quantity))
def test_no_text_raises_anything_but_value_error(text: str, quantity: Quantity) -> None:
    """A user may write whatever there is."""
    try:
        parse_quantity(text, quantity)
    except ValueError as error:
        message = str(error)
    else:
        message = "read"
    assert message.isprintable()


def test_every_unit_has_a_base_of_its_own() -> None:
    """Two units of one name and base would be ambiguous."""
    for name, units in UNITS.items():
        bases = [unit.base for unit in units]
        assert sorted(bases) == sorted(set(bases)), name
