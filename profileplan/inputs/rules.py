"""Which values a record may hold.

The one place where ranges and names are judged, whether a record comes from a file or was built
in code. Ranges are in axis units (mm or deg, s) and kg. A fault's text gives the value found
first, then what is allowed.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from numbers import Real
from types import MappingProxyType
from typing import TYPE_CHECKING, TypeAlias, TypeGuard, TypeVar

from profileplan.errors import Fault, InputError

if TYPE_CHECKING:
    from pathlib import Path

Positions: TypeAlias = Mapping[str, float]
"""Axis name → position, mm or deg."""

Outline: TypeAlias = tuple[tuple[float, float], ...]
"""Corners of a closed polygon, mm; the last is joined to the first."""

Record = TypeVar("Record")


ABOVE_ZERO = 5e-324  # the least positive number: a range from it leaves out zero only


@dataclass(frozen=True)
class Range:
    """The values from `low` to `high`, both allowed.

    Every range is finite, so that NaN and infinity lie outside of it.
    """

    low: float
    high: float

    def holds(self, value: float) -> bool:
        """Tell whether `value` is allowed."""
        return self.low <= value <= self.high

    def describe(self, unit: str) -> str:
        """Say what is allowed, with its unit."""
        if self.low == ABOVE_ZERO:
            return f"above 0 and at most {self.high:g} {unit}"
        if self.low > 0:
            return f"above 0, from {self.low:g} to {self.high:g} {unit}"
        return f"{self.low:g} to {self.high:g} {unit}"


LIMIT = Range(1e-6, 1e12)  # velocity, acceleration, deceleration, jerk, speed
POSITION = Range(-1e7, 1e7)
EXTENT = Range(0, 1e7)  # margins, tolerances, heights raised
RADIUS = Range(ABOVE_ZERO, 1e7)
RESOLUTION = Range(1e-9, 1e7)
PAUSE = Range(0, 1e6)
DURATION = Range(ABOVE_ZERO, 1e6)
LEAD = Range(-1e6, 1e6)
PERIOD = Range(50e-6, 1)
MASS = Range(0, 1e6)
SCALE = Range(1e-6, 1e6)

AXIS_UNIT = "mm or deg"  # where a record does not know its axes' kinds

RESERVED_WORDS = ("speed", "wait", "tolerance", "name", "t_s")
"""Columns of a waypoint file or of a setpoint table: no name for an axis or a signal."""

ROWS_SHOWN = 20  # a slip is often repeated in every row of a table: beyond these it is counted

LEAST_AREA = 1e-9  # mm²: an outline with less is a line, whatever rounding makes of it


class Judge:
    """Collects everything that is wrong with the values of one record."""

    def __init__(self) -> None:
        self.faults: list[Fault] = []

    def note(self, place: str, message: str) -> None:
        """Add a fault at a place relative to the record."""
        self.faults.append(Fault(place, message))

    def number(self, place: str, value: object, allowed: Range, unit: str) -> None:
        """Note a value that is no number in the range `allowed`."""
        if isinstance(value, float) and allowed.holds(value):
            return  # the short way, as a file may have 100,000 rows
        if not is_number(value):
            self.note(place, f"{shown(value)}; a number in {unit} is needed")
        elif not allowed.holds(value):
            self.note(place, f"{shown(value)} {unit}; allowed: {allowed.describe(unit)}")

    def optional(self, place: str, value: object, allowed: Range, unit: str) -> None:
        """Judge a number that may be left out (None)."""
        if value is not None:
            self.number(place, value, allowed, unit)

    def whole(self, place: str, value: object, least: int, most: int) -> None:
        """Note a value that is no whole number from `least` to `most`."""
        if isinstance(value, bool) or not isinstance(value, int):
            self.note(place, f"{shown(value)}; a whole number is needed")
        elif not least <= value <= most:
            self.note(place, f"{shown(value)}; allowed: {least:,} to {most:,}")

    def choice(self, place: str, value: object, names: tuple[str, ...]) -> None:
        """Note a value that is none of `names`."""
        if value not in names:
            self.note(place, f"{shown(value)}; allowed: {quoted(names)}{near(value, names)}")

    def boolean(self, place: str, value: object) -> None:
        """Note a value that is neither true nor false."""
        if not isinstance(value, bool):
            self.note(place, f"{shown(value)}; allowed: true or false")

    def name(self, place: str, value: object) -> None:
        """Note what is no name: empty, not printable, or with space at an end."""
        if not isinstance(value, str):
            self.note(place, f"{shown(value)}; a name (text) is needed")
        elif not value or not value.isprintable() or value != value.strip():
            self.note(
                place,
                f"{shown(value)}; a name has printable characters, and no space at its ends",
            )

    def optional_name(self, place: str, value: object) -> None:
        """Judge a name that may be left out (None)."""
        if value is not None:
            self.name(place, value)

    def column(self, place: str, value: object) -> None:
        """Note what cannot head a column: an unfit name or a reserved word."""
        self.name(place, value)
        if value in RESERVED_WORDS:
            self.note(place, f"{shown(value)} is reserved; no name for an axis or a signal")

    def positions(self, place: str, value: object) -> Positions:
        """Judge positions and return them as a read-only copy in the same order."""
        if not isinstance(value, Mapping):
            self.note(place, f"{shown(value)}; axis names with positions are needed")
            return MappingProxyType({})
        if not value:
            self.note(place, "names no axis; at least one position is needed")
        judged: dict[str, float] = {}
        for name, position in value.items():
            if isinstance(position, float) and POSITION.holds(position):
                judged[name] = position  # the short way again
            elif is_number(position) and POSITION.holds(position):
                judged[name] = float(position)
            else:
                self.number(join(place, str(name)), position, POSITION, AXIS_UNIT)
        return MappingProxyType(judged)

    def outline(self, place: str, value: Iterable[tuple[float, float]] | None) -> Outline | None:
        """Judge an outline that may be left out (None), and return it as a tuple of pairs."""
        if value is None:
            return None
        try:
            corners = tuple((x, y) for x, y in value)
        except (TypeError, ValueError):
            self.note(place, f"{shown(value)}; points [x, y] are needed")
            return None
        before = len(self.faults)
        for index, corner in enumerate(corners, start=1):
            for axis, number in zip("xy", corner, strict=True):
                self.number(f"{place}[{index}].{axis}", number, POSITION, "mm")
        if len(corners) < 3:
            self.note(place, f"{len(corners)} points; at least 3 are needed")
        elif len(self.faults) == before and _area(corners) < LEAST_AREA:
            self.note(place, "encloses no area; its points lie on a line")
        return corners

    def records(
        self, place: str, value: Iterable[Record], kinds: tuple[type, ...]
    ) -> tuple[Record, ...]:
        """Note what is no record of `kinds`, and return the others."""
        try:
            items = tuple(value)
        except TypeError:
            self.note(place, f"{shown(value)}; a sequence is needed")
            return ()
        needed = " or ".join(kind.__name__ for kind in kinds)
        for index, item in enumerate(items, start=1):
            if not isinstance(item, kinds):
                self.note(f"{place}[{index}]", f"{shown(item)}; needed: {needed}")
        return tuple(item for item in items if isinstance(item, kinds))

    def unique(self, places: Iterable[tuple[str, str]], what: str) -> None:
        """Note each name that an earlier (place, name) has already."""
        first: dict[str, str] = {}
        for place, name in places:
            if name in first:
                self.note(place, f"{shown(name)} is the name of {first[name]} too; {what}")
            first.setdefault(name, place.removesuffix(".name"))

    def finish(self) -> None:
        """Raise what was found.

        Raises
        ------
        InputError
            If there was any fault.
        """
        if self.faults:
            raise InputError(self.faults)


def is_number(value: object) -> TypeGuard[float]:
    """Tell whether a value is a real number; true and false are none."""
    return isinstance(value, float) or (isinstance(value, Real) and not isinstance(value, bool))


def shown(value: object) -> str:
    """Write a value as the user would, shortened where it is long."""
    match value:
        case bool():
            text = str(value).lower()
        case int() if value.bit_length() > 200:
            text = "a whole number of more than 60 digits"
        case int() | float():
            text = f"{value:.12g}"
        case str():
            text = f'"{shortened(value)}"'
        case Mapping():
            text = "a table"
        case list() | tuple():
            text = "an array"
        case None:
            text = "nothing"
        case _:
            text = shortened(str(value))
    return text


def shortened(text: str, length: int = 60) -> str:
    """Return a text that can be printed, in one line that is no longer than asked for."""
    clean = "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in text)
    return clean if len(clean) <= length else clean[: length - 1] + "…"


def quoted(names: Iterable[str]) -> str:
    """List names in quotes."""
    return ", ".join(f'"{name}"' for name in names)


def near(word: object, known: Iterable[str]) -> str:
    """Return a hint at the known word that `word` is nearly like, or nothing."""
    words = list(known)
    if not isinstance(word, str):
        return ""
    # only a faulty file pays for the import
    from difflib import get_close_matches  # noqa: PLC0415

    folded = {name.casefold(): name for name in words}
    matches = get_close_matches(word.casefold(), folded, n=1)
    return f'; did you mean "{folded[matches[0]]}"?' if matches else ""


def tidy(faults: Iterable[Fault]) -> list[Fault]:
    """Keep what the user can act on.

    Of each place the first fault stays, as what follows there is a consequence of it; of the
    rows of a table the first with a fault stay, and the others are counted.
    """
    first: dict[tuple[Path | str | None, str], Fault] = {}
    for fault in faults:
        first.setdefault((fault.file, fault.place), fault)
    kept = []
    rows: dict[Path | str | None, int] = {}
    for fault in first.values():
        if fault.place.startswith("line "):
            rows[fault.file] = rows.get(fault.file, 0) + 1
            if rows[fault.file] > ROWS_SHOWN:
                continue
        kept.append(fault)
    more = [(file, count - ROWS_SHOWN) for file, count in rows.items() if count > ROWS_SHOWN]
    return [*kept, *(Fault("", f"… and {count} more", file) for file, count in more)]


def join(place: str, key: str) -> str:
    """Return the key path of `key` inside `place`; a key that is no plain word is quoted."""
    word = key if re.fullmatch(r"[\w-]+", key) else shown(key)
    return f"{place}.{word}" if place else word


def _area(corners: Outline) -> float:
    """Area enclosed by an outline, mm² (the shoelace formula)."""
    following = (*corners[1:], corners[0])
    return abs(sum(a[0] * b[1] - b[0] * a[1] for a, b in zip(corners, following, strict=True))) / 2
