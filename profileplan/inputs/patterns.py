"""Where do parts stand that are handled one after the other, and which steps handle them?

A `Pattern` has places in columns, rows and layers. `expand` goes through the places of one pattern,
or of several together, and makes the steps for each; the steps of one place make up a `Part`.
Places and parts are counted from 1. Positions are in axis units (mm or deg).
"""

from __future__ import annotations

import sys
from dataclasses import KW_ONLY, dataclass, field, replace
from types import MappingProxyType
from typing import TYPE_CHECKING, Literal, NamedTuple, TypeAlias

from profileplan.errors import Fault, InputError
from profileplan.inputs.rules import AXIS_UNIT, POSITION, Judge, Positions, join, near, shown

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Mapping, Sequence

    from profileplan.inputs.cycle import Step

RowOrder: TypeAlias = Literal["rows", "back and forth"]
ROW_ORDERS: tuple[RowOrder, ...] = ("rows", "back and forth")

GroupOrder: TypeAlias = Literal["given", "shortest"]
GROUP_ORDERS: tuple[GroupOrder, ...] = ("given", "shortest")

MOST_FREE = 60
"""How many parts may be put into the shortest order: all ways between their places are timed."""

MOST_STEPS = 100_000
"""How many steps parts may expand to, and how many places a pattern may have."""

DECIMALS = 9
"""Places are rounded to a billionth of mm or deg: multiples of a decimal pitch stay decimal."""

DIRECTIONS = ("column", "row", "layer")


@dataclass(frozen=True)
class Pattern:
    """Places in columns, rows and layers.

    Parameters
    ----------
    name : str
        What steps call it.
    origin : mapping
        Axis name → position of the first place [mm or deg].
    columns, rows, layers : int
        How many there are.
    column_pitch, row_pitch, layer_pitch : mapping
        Axis name → offset to the next one [mm or deg]; needed where there are several. The axes
        are among those of the origin; axes not named stay.
    order : {"rows", "back and forth"}
        Row by row, all in the same direction; or every second row of a layer is run backwards.
        Layers follow each other, and each begins at its first place.

    Examples
    --------
    >>> pair = Pattern("car", {"x": 100.0, "z": 30.0}, columns=2, column_pitch={"x": 160.0})
    >>> [dict(place) for place in pair.places()]
    [{'x': 100.0, 'z': 30.0}, {'x': 260.0, 'z': 30.0}]
    """

    name: str
    origin: Positions
    _: KW_ONLY
    columns: int = 1
    column_pitch: Positions = field(default_factory=dict)
    rows: int = 1
    row_pitch: Positions = field(default_factory=dict)
    layers: int = 1
    layer_pitch: Positions = field(default_factory=dict)
    order: RowOrder = "rows"

    def __post_init__(self) -> None:
        judge = Judge()
        judge.name("name", self.name)
        origin = judge.positions("origin", self.origin)
        object.__setattr__(self, "origin", origin)
        for direction, count, pitch in zip(DIRECTIONS, self._counts, self._pitches, strict=True):
            judge.whole(f"{direction}s", count, 1, MOST_STEPS)
            object.__setattr__(
                self, f"{direction}_pitch", _pitch(judge, direction, count, pitch, origin)
            )
        judge.choice("order", self.order, ROW_ORDERS)
        if not judge.faults:
            self._judge_reach(judge)
        judge.finish()

    @property
    def count(self) -> int:
        """How many places there are."""
        return self.columns * self.rows * self.layers

    def places(self) -> tuple[Positions, ...]:
        """Return the places in order: axis name → position [mm or deg]."""
        back_and_forth = self.order == "back and forth"
        return tuple(
            self._place(
                (self.columns - 1 - column if back_and_forth and row % 2 else column, row, layer)
            )
            for layer in range(self.layers)
            for row in range(self.rows)
            for column in range(self.columns)
        )

    @property
    def _counts(self) -> tuple[int, int, int]:
        return self.columns, self.rows, self.layers

    @property
    def _pitches(self) -> tuple[Positions, Positions, Positions]:
        return self.column_pitch, self.row_pitch, self.layer_pitch

    def _place(self, numbers: tuple[int, int, int]) -> Positions:
        """Return the place with a number in each direction, counted from 0."""
        steps = list(zip(numbers, self._pitches, strict=True))
        return MappingProxyType(
            {
                axis: tidied(start + sum(number * pitch.get(axis, 0.0) for number, pitch in steps))
                for axis, start in self.origin.items()
            }
        )

    def _judge_reach(self, judge: Judge) -> None:
        """Note a pattern that is too large, in number or in extent."""
        if self.count > MOST_STEPS:
            counts = " × ".join(str(count) for count in self._counts)
            judge.note(
                "", f"{counts} are {self.count:,} places; at most {MOST_STEPS:,} are allowed"
            )
            return
        for direction, count, pitch in zip(DIRECTIONS, self._counts, self._pitches, strict=True):
            for axis, step in pitch.items():
                beyond = self.origin[axis] + (count - 1) * step
                if not POSITION.holds(beyond):
                    judge.note(
                        join(f"{direction}_pitch", axis),
                        f"{shown(step)}; {direction} {count} would be at {shown(beyond)} "
                        f"{AXIS_UNIT}; allowed: {POSITION.describe(AXIS_UNIT)}",
                    )


def _pitch(
    judge: Judge, direction: str, count: object, pitch: Positions, origin: Positions
) -> Positions:
    """Judge the offset from one column, row or layer to the next, and return a copy of it."""
    key = f"{direction}_pitch"
    if not pitch:
        if isinstance(count, int) and count > 1:
            judge.note(key, f"missing; {count} {direction}s need the offset to the next, by axis")
        return MappingProxyType({})
    judged = judge.positions(key, pitch)
    for axis in judged:
        if axis not in origin:
            hint = near(axis, origin) or f"; it has {', '.join(origin)}"
            judge.note(join(key, axis), f"the origin has no axis {axis}{hint}")
    return judged


@dataclass(frozen=True)
class Part:
    """The steps that handle one part.

    Parameters
    ----------
    name : str
        What reports call it.
    first, last : int
        Its first and its last step in the cycle, counted from 0.
    """

    name: str
    first: int
    last: int

    def __post_init__(self) -> None:
        judge = Judge()
        judge.name("name", self.name)
        judge.whole("first", self.first, 0, sys.maxsize)
        judge.whole("last", self.last, 0, sys.maxsize)
        if not judge.faults and self.last < self.first:
            judge.note("last", f"{self.last}; before the first step, {self.first}")
        judge.finish()


@dataclass(frozen=True)
class Free:
    """Parts whose places may be used in any order.

    Each part's steps go to the places of a first pattern, and after that to those of a second, if
    there is one. Every place of the one may be matched with any of the other.

    Parameters
    ----------
    parts : tuple of int
        The first and the last of the parts in the cycle, counted from 0.
    slots : tuple of int
        For each step of a part the pattern whose place it goes to, 0 or 1; -1: to none.
    """

    parts: tuple[int, int]
    slots: tuple[int, ...]

    def __post_init__(self) -> None:
        judge = Judge()
        parts = judge.records("parts", self.parts, (int,))
        object.__setattr__(self, "parts", parts)
        object.__setattr__(self, "slots", judge.records("slots", self.slots, (int,)))
        if not judge.faults:
            if len(parts) != len(("first", "last")) or not 0 <= parts[0] <= parts[1]:
                judge.note("parts", f"{shown(parts)}; the first and the last part are needed")
            elif parts[1] - parts[0] >= MOST_FREE:
                judge.note("parts", too_free(parts[1] - parts[0] + 1))
            used = [slot for slot in self.slots if slot != -1]
            if not used or not set(used) <= {0, 1}:
                judge.note("slots", "0, 1 or -1 for each step are needed, and not -1 alone")
            elif back_again(used) is not None:
                judge.note("slots", "go back to a pattern that was left; each is gone to once")
        judge.finish()

    def judge(self, judge: Judge, key: str, parts: Sequence[Part], *, begin: int) -> bool:
        """Note what does not fit the parts of a cycle, from one on, and tell if all does."""
        first, last = self.parts
        own = parts[first : last + 1]
        if first < begin or last >= len(parts):
            message = f"{first} to {last}; groups follow each other"
            judge.note(f"{key}.parts", f"{message}, and there are {len(parts)} parts")
        elif any(part.last - part.first + 1 != len(self.slots) for part in own):
            message = f"{len(self.slots)}; as many as each of the parts has steps are needed"
            judge.note(f"{key}.slots", message)
        elif own[-1].last - own[0].first + 1 != len(own) * len(self.slots):
            judge.note(f"{key}.parts", f"{first} to {last}; there are steps between them")
        else:
            return True
        return False


class Expansion(NamedTuple):
    """The steps for all parts, and which of them belong to which part."""

    steps: tuple[Step, ...]
    parts: tuple[Part, ...]


class Placed(NamedTuple):
    """A position that comes from a pattern's place: which pattern and axis, and the offset."""

    pattern: str
    axis: str
    offset: float


class Written(NamedTuple):
    """Where a step stands in a cycle file.

    Parameters
    ----------
    place : str
        Its key path.
    part : str
        The part that it is expanded for; empty: for none.
    number : int
        The place that it is expanded for, counted from 1; 0: for none.
    placed : mapping
        Key path of a position, relative to the step → where it comes from, if from a place.
    """

    place: str
    part: str = ""
    number: int = 0
    placed: Mapping[str, Placed] = MappingProxyType({})


def expand(
    name: str,
    patterns: Sequence[Pattern],
    make: Callable[[Mapping[str, Positions]], Iterable[Step]],
    *,
    index: int = 0,
    first: int = 1,
    last: int | None = None,
) -> Expansion:
    """Make the steps for each place of patterns that are gone through together.

    Parameters
    ----------
    name : str
        What is handled: "tile" makes parts "tile 1", "tile 2" and so on. Steps are called
        "tile 1: pick", and those without a name by kind and number in the part:
        "tile 1: transfer 2".
    patterns : sequence of Pattern
        At least one; all with the same number of places.
    make : callable
        Takes name of pattern → its place (axis name → position) and returns the steps there: the
        same number at each place.
    index : int
        Where in the cycle the steps will stand: the index of the first, counted from 0.
    first, last : int
        The places that are gone through, counted from 1; None: up to the last.

    Raises
    ------
    InputError
        The patterns or the places do not fit, or there would be too many steps.

    Examples
    --------
    >>> from profileplan.inputs import Cycle, Move, Wait
    >>> stack = Pattern("stack", {"z": 220.0}, layers=3, layer_pitch={"z": -8.0})
    >>> made = expand("tile", [stack], lambda at: [Move(at["stack"]), Wait(0.1)])
    >>> made.steps[4].name
    'tile 3: move 1'
    >>> cycle = Cycle(made.steps, {"z": 300.0}, parts=made.parts)
    """
    judge = Judge()
    judge.name("name", name)
    count = judge_places(judge, patterns)
    last = count if last is None else last
    judge_span(judge, {"first": first, "last": last}, patterns)
    judge.finish()
    names = [pattern.name for pattern in patterns]
    together = list(zip(*(pattern.places() for pattern in patterns), strict=True))
    steps: list[Step] = []
    parts = []
    for number, places in enumerate(together[first - 1 : last], start=first):
        at = dict(zip(names, places, strict=True))
        part = f"{name} {number}"
        begin = len(steps)
        for own, step in enumerate(make(at), start=1):
            label = step.name or f"{step.kind} {own}"
            steps.append(replace(step, name=f"{part}: {label}"))
        if len(steps) == begin:
            raise InputError([Fault("steps", f"no steps for {part}; at least one is needed")])
        if len(steps) > MOST_STEPS:
            raise InputError([Fault("steps", too_many(last - first + 1, len(steps) - begin))])
        parts.append(Part(part, index + begin, index + len(steps) - 1))
    return Expansion(tuple(steps), tuple(parts))


def judge_places(judge: Judge, patterns: Sequence[Pattern]) -> int:
    """Note patterns that cannot be gone through together, and return how many places they have."""
    if not patterns:
        judge.note("for_each", "no pattern; at least one is needed")
        return 0
    if len({pattern.count for pattern in patterns}) > 1:
        found = ", ".join(f"{pattern.name} has {pattern.count}" for pattern in patterns)
        judge.note("for_each", f"{found} places; gone through together, all have the same number")
    judge.unique(
        ((f"for_each[{i}]", pattern.name) for i, pattern in enumerate(patterns, start=1)),
        "each pattern is gone through once",
    )
    return patterns[0].count


def judge_span(judge: Judge, span: Mapping[str, object], patterns: Sequence[Pattern]) -> None:
    """Note what is wrong with a first and a last place that are gone through, under their keys."""
    if not patterns:
        return
    count = patterns[0].count
    for key, number in span.items():
        if isinstance(number, int) and number > count:
            judge.note(key, f"{number}; {patterns[0].name} has {count} places")
        else:
            judge.whole(key, number, 1, count)
    first, last = span.values()
    if isinstance(first, int) and isinstance(last, int) and last < first <= count and last > 0:
        judge.note(tuple(span)[1], f"{last}; before the first place that is gone through, {first}")


def too_many(places: int, steps: int) -> str:
    """Say that places and the steps at each make too many steps."""
    return (
        f"{places:,} places of {steps:,} steps each; "
        f"all parts together may have {MOST_STEPS:,} steps"
    )


def too_free(parts: int) -> str:
    """Say that there are too many parts to put into the shortest order."""
    return f"{parts:,} parts; the shortest order is sought for at most {MOST_FREE}"


def back_again(used: Sequence[int]) -> int | None:
    """Return which of the patterns that steps go to, in order, was left before; None: none."""
    for number in range(1, len(used)):
        if used[number] != used[number - 1] and used[number] in used[: number - 1]:
            return number
    return None


def tidied(position: float) -> float:
    """Return a position without what sums of decimal numbers leave beyond their decimals."""
    return round(position, DECIMALS)
