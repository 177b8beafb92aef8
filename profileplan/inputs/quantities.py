"""How many mm, deg, s, kg, N or N·m a written quantity is.

A number is in axis units already; a text is a number with a unit, such as ``"1.5 m/s"``. A unit
is a name, or a name over units of time: ``mm/min``, ``m/s^2``, ``m/s²``, ``m/s2``. Factors are
exact fractions wherever the unit is defined by one, so that ``"80 ms"`` and 0.08 are the same.
"""

from __future__ import annotations

import math
import re
from enum import Enum
from typing import Literal, NamedTuple, TypeAlias

from profileplan.inputs.rules import is_number, shown

Base: TypeAlias = Literal["mm", "deg", "s", "kg", "N", "N·m", "kg·m²", "1/min"]


class Quantity(Enum):
    """What is measured: its name, base unit, power of seconds below it, units to choose from."""

    LENGTH = ("a length", "mm", 0, "µm, mm, cm, m, in, ft")
    VELOCITY = ("a velocity", "mm", 1, "mm/s, m/s, mm/min, m/min, in/s")
    ACCELERATION = ("an acceleration", "mm", 2, "mm/s², m/s², g")
    JERK = ("a jerk", "mm", 3, "mm/s³, m/s³, g/s")
    ANGLE = ("an angle", "deg", 0, "deg, rad, rev")
    ANGULAR_VELOCITY = ("an angular velocity", "deg", 1, "deg/s, rad/s, rev/s, rpm")
    ANGULAR_ACCELERATION = ("an angular acceleration", "deg", 2, "deg/s², rad/s², rpm/s")
    ANGULAR_JERK = ("an angular jerk", "deg", 3, "deg/s³, rad/s³")
    TIME = ("a time", "s", 0, "s, ms, µs, min, h")
    MASS = ("a mass", "kg", 0, "kg, g, t, lb")
    FORCE = ("a force", "N", 0, "N, kN")
    TORQUE = ("a torque", "N·m", 0, "N·m, mN·m, kN·m, N·cm")
    INERTIA = ("a moment of inertia", "kg·m²", 0, "kg·m², kg·cm², g·cm²")
    TURNING = ("a speed of turning", "1/min", 0, "1/min, rpm, rev/s, rad/s, deg/s")

    def __init__(self, title: str, base: Base, rate: int, choices: str) -> None:
        self.title = title
        self.base = base
        self.rate = rate
        self.choices = choices

    @property
    def unit(self) -> str:
        """The unit that numbers without one are in."""
        return self.base + ("", "/s", "/s²", "/s³")[self.rate]


class Unit(NamedTuple):
    """A named unit: `factor` / `divisor` of `base` over seconds to the power of `rate`."""

    base: Base
    rate: int
    factor: float
    divisor: float = 1


UNITS: dict[str, tuple[Unit, ...]] = {
    "mm": (Unit("mm", 0, 1),),
    "cm": (Unit("mm", 0, 10),),
    "m": (Unit("mm", 0, 1000),),
    "µm": (Unit("mm", 0, 1, 1000),),
    "in": (Unit("mm", 0, 254, 10),),
    "ft": (Unit("mm", 0, 3048, 10),),
    # standard gravity is 9.80665 m/s² exactly; the same letter is the gram
    "g": (Unit("mm", 2, 980665, 100), Unit("kg", 0, 1, 1000)),
    # turns are counted a minute: what is turned in a second is turned sixty times in one
    "deg": (Unit("deg", 0, 1), Unit("1/min", -1, 1, 6)),
    "°": (Unit("deg", 0, 1),),
    "rad": (Unit("deg", 0, 180, math.pi), Unit("1/min", -1, 30, math.pi)),
    "mrad": (Unit("deg", 0, 180, 1000 * math.pi),),
    "rev": (Unit("deg", 0, 360), Unit("1/min", -1, 60)),
    "rpm": (Unit("deg", 1, 6), Unit("1/min", 0, 1)),
    "1": (Unit("1/min", -1, 60),),
    "s": (Unit("s", 0, 1),),
    "ms": (Unit("s", 0, 1, 1000),),
    "µs": (Unit("s", 0, 1, 1_000_000),),
    "min": (Unit("s", 0, 60),),
    "h": (Unit("s", 0, 3600),),
    "kg": (Unit("kg", 0, 1),),
    "t": (Unit("kg", 0, 1000),),
    "lb": (Unit("kg", 0, 45359237, 100_000_000),),
    "N": (Unit("N", 0, 1),),
    "kN": (Unit("N", 0, 1000),),
    "N·m": (Unit("N·m", 0, 1),),
    "mN·m": (Unit("N·m", 0, 1, 1000),),
    "kN·m": (Unit("N·m", 0, 1000),),
    "N·cm": (Unit("N·m", 0, 1, 100),),
    "kg·m²": (Unit("kg·m²", 0, 1),),
    "kg·cm²": (Unit("kg·m²", 0, 1, 10_000),),
    "g·cm²": (Unit("kg·m²", 0, 1, 10_000_000),),
}

# the micro sign and the Greek letter look alike, as do two dots for "times"; "u" and "*" are what
# keyboards have
LOOKALIKES = str.maketrans(
    {
        "\N{GREEK SMALL LETTER MU}": "\N{MICRO SIGN}",
        "\N{DOT OPERATOR}": "\N{MIDDLE DOT}",
        "*": "\N{MIDDLE DOT}",
    }
)
SPELLINGS = {
    "um": "µm",
    "us": "µs",
    "Nm": "N·m",
    "mNm": "mN·m",
    "kNm": "kN·m",
    "Ncm": "N·cm",
    **{
        spelling: unit
        for unit in ("kg·m²", "kg·cm²", "g·cm²")
        for square in ("²", "2", "^2")
        for dot in ("·", "")
        if (spelling := unit.replace("²", square).replace("·", dot)) != unit
    },
}

NUMBER_WITH_UNIT = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*(.*)", re.ASCII)
TIME_POWER = re.compile(r"(\D*?)(?:\^?([123])|([²³]))?")
SUPERSCRIPTS = {"²": 2, "³": 3}


def parse_quantity(value: object, quantity: Quantity) -> float:
    """Return a quantity in axis units.

    Parameters
    ----------
    value : int, float or str
        A number in axis units, or a text of a number and a unit. Whether the number is in an
        allowed range is not judged here: it may be infinite or NaN.
    quantity : Quantity
        What is measured.

    Raises
    ------
    ValueError
        If it is no such quantity; the message says what was found and what is allowed.

    Examples
    --------
    >>> parse_quantity("1.5 m/s", Quantity.VELOCITY)
    1500.0
    >>> parse_quantity("0.5 g", Quantity.ACCELERATION)
    4903.325
    """
    if is_number(value):
        try:
            return float(value)
        except OverflowError:
            raise ValueError(f"{shown(value)}; beyond all limits") from None
    match = NUMBER_WITH_UNIT.fullmatch(value.strip()) if isinstance(value, str) else None
    unit = _unit(match[2], quantity) if match else None
    if match is None or unit is None:
        raise ValueError(f"{shown(value)}; {_what_is_needed(value, quantity)}")
    return float(match[1]) * unit.factor / unit.divisor


def _what_is_needed(value: object, quantity: Quantity) -> str:
    if not isinstance(value, str):
        return (
            f"needed: {quantity.title}, as a number in {quantity.unit} "
            f'or a text with a unit such as "1 {quantity.unit}"'
        )
    text = value.strip()
    with_point = text.replace(",", ".")
    if with_point != text and NUMBER_WITH_UNIT.fullmatch(with_point):
        return f"write a decimal point instead of the comma: {shown(with_point)}"
    match = NUMBER_WITH_UNIT.fullmatch(text)
    if match is None:
        return f'needed: {quantity.title}, a number with a unit such as "1 {quantity.unit}"'
    if not match[2]:
        return f'a text needs a unit, such as "{text} {quantity.unit}"; a number has no quotes'
    return (
        f"{quantity.title} is needed, and {shown(match[2])} is no unit of it: "
        f"allowed are {quantity.choices}"
    )


def _unit(text: str, quantity: Quantity) -> Unit | None:
    """Return what a unit is worth, or None where it is no unit of the quantity."""
    head, *below = (part.strip() for part in text.translate(LOOKALIKES).split("/"))
    rate, factor, divisor = 0, 1.0, 1.0
    for part in below:
        match = TIME_POWER.fullmatch(part)
        time = _named(match[1], "s") if match else None
        if match is None or time is None:
            return None
        power = int(match[2] or SUPERSCRIPTS.get(match[3], 1))
        rate += power
        factor *= time.divisor**power
        divisor *= time.factor**power
    named = _named(head, quantity.base)
    if named is None or named.rate + rate != quantity.rate:
        return None
    return Unit(quantity.base, quantity.rate, named.factor * factor, named.divisor * divisor)


def _named(name: str, base: Base) -> Unit | None:
    units = UNITS.get(SPELLINGS.get(name, name), ())
    return next((unit for unit in units if unit.base == base), None)
