"""Which steps does a cycle file give for each place of its patterns?

In a group (``for_each``) a position table of a move, a line, a transfer or a point of a path may
have two keys that are no axes there: ``place = "NAME"`` gives every axis of that pattern its
current place, and ``offset = { z = 50 }`` is added to it. Other keys are positions of axes, as
everywhere, and override the place. Groups do not nest. With ``order = "shortest"`` the places of a
group may be used in any order, and those of two patterns matched freely.

A group is read once, with its first places, so that each fault in it is found once. A faulty one is
stood in for by a wait of no time.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, NamedTuple, TypeGuard

from profileplan.errors import Fault, InputError
from profileplan.inputs.cycle import Line, Move, PathStep, Trace, Transfer, Wait
from profileplan.inputs.patterns import (
    GROUP_ORDERS,
    MOST_FREE,
    MOST_STEPS,
    ROW_ORDERS,
    Free,
    GroupOrder,
    Part,
    Pattern,
    Placed,
    Written,
    back_again,
    expand,
    judge_places,
    judge_span,
    tidied,
    too_free,
    too_many,
)
from profileplan.inputs.rules import Judge, join, near, quoted, shown
from profileplan.inputs.table import Table, is_array, is_like_number

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping, Sequence

    from profileplan.inputs.cycle import Step
    from profileplan.inputs.machine import AxisKind
    from profileplan.inputs.rules import Positions

POSITION_TABLES = ("move", "line", "transfer")
"""Kinds of step whose one table of positions may name a place."""

STAND_IN = Pattern("-", {"-": 0.0})

PLACE_KEYS = ("place", "offset")

GROUP_KEYS = ("for_each", "name", "steps", "from", "to", "order")

MOST_MATCHED = 2
"""How many patterns a group may have whose order is free."""


class Known(NamedTuple):
    """A pattern of the file; where it is faulty, one that stands in for it."""

    pattern: Pattern
    sound: bool


@dataclass(frozen=True)
class Expanded:
    """What tables of steps give: the steps, where each stands, the parts, and which are free."""

    steps: tuple[Step, ...]
    written: tuple[Written, ...]
    parts: tuple[Part, ...] = ()
    free: tuple[Free, ...] = ()


class Slot(NamedTuple):
    """A position table that names a place.

    Parameters
    ----------
    key : str
        Its key path, relative to the step.
    pattern : str
        Whose place it names.
    offsets : mapping
        The axes that come from the place → what is added to them [mm or deg].
    """

    key: str
    pattern: str
    offsets: Positions

    def positions(self, at: Mapping[str, Positions]) -> Positions:
        """Return the positions that come from the places `at`."""
        place = at[self.pattern]
        return {axis: tidied(place[axis] + offset) for axis, offset in self.offsets.items()}


class Template(NamedTuple):
    """A step at the first places, with the tables that change from place to place."""

    step: Step
    place: str
    slots: tuple[Slot, ...]

    def at(self, places: Mapping[str, Positions]) -> Step:
        """Return the step at other places: name of pattern → place."""
        if not self.slots:
            return self.step
        new = {slot.key: slot.positions(places) for slot in self.slots}
        match self.step:
            case Move() | Line() | Transfer():
                return replace(self.step, to={**self.step.to, **new[self.step.kind]})
            case PathStep():
                points = tuple(
                    replace(point, to={**point.to, **new.get(f"path[{number}]", {})})
                    for number, point in enumerate(self.step.points, start=1)
                )
                return replace(self.step, points=points)
            case _:
                return self.step

    @property
    def placed(self) -> Mapping[str, Placed]:
        """Key path of each position that comes from a place → where it comes from."""
        return {
            join(slot.key, axis): Placed(slot.pattern, axis, offset)
            for slot in self.slots
            for axis, offset in slot.offsets.items()
        }


@dataclass(frozen=True)
class Groups:
    """Reads steps, and groups of steps, of a cycle file.

    Parameters
    ----------
    known : mapping
        Name → pattern.
    kinds : mapping
        The kinds of the machine's axes, as far as they are known.
    read_step : callable
        Reads a table of a step; None where there is nothing to make of it.
    """

    known: Mapping[str, Known]
    kinds: Mapping[str, AxisKind]
    read_step: Callable[[Table], Step | None]

    def expanded(self, tables: Sequence[Table]) -> Expanded:
        """Return what tables of steps and groups give, with the faults noted there."""
        steps: list[Step] = []
        written: list[Written] = []
        parts: dict[str, Part] = {}
        free: list[Free] = []
        left = MOST_STEPS
        for table in tables:
            if "for_each" not in table.raw:
                steps.append(self._template(table, None).step)
                written.append(Written(table.place))
                continue
            made = self._group(table, len(steps), left)
            twice = next((part.name for part in made.parts if part.name in parts), None)
            if twice is None:
                free += (
                    replace(own, parts=(len(parts), len(parts) + own.parts[1])) for own in made.free
                )
                parts |= {part.name: part for part in made.parts}
                steps += made.steps
            else:
                there = written[parts[twice].first].place.rpartition(".")[0]
                table.note("name", f"{shown(twice)} is a part of {there} too; parts are unique")
                steps += (replace(step, name=None) for step in made.steps)
            written += made.written
            left -= len(made.steps)
        return Expanded(tuple(steps), tuple(written), tuple(parts.values()), tuple(free))

    def _group(self, table: Table, index: int, most: int) -> Expanded:
        """Return what a group gives, at most so many steps, from an index on."""
        gone = self._gone_through(table)
        patterns = [known.pattern for known in gone.values()]
        judge = Judge()
        sound = bool(gone) and all(known.sound for known in gone.values())
        count = judge_places(judge, patterns) if sound else 1
        sound = sound and not judge.faults
        first, last = self._span(table, judge, patterns if sound else [], count)
        inner = table.tables("steps")
        if not inner:
            table.note("steps", "missing; at least one step is needed: steps = [{ ... }]")
        templates = [self._template(each, gone) for each in inner or ()]
        order = table.choice("order", GROUP_ORDERS, default=GROUP_ORDERS[0])
        slots = _free_slots(table, list(gone), templates, last - first + 1, order=order)
        name = table.text("name", "part")
        judge.name("name", name)
        usable = "-" if any(fault.place == "name" for fault in judge.faults) else name
        places = last - first + 1
        if places * len(templates) > most:
            judge.note("steps", too_many(places, len(templates)))
            last, sound = first, sound and len(templates) <= most
        table.faults += [fault.within(table.place, table.file) for fault in judge.faults]
        for key in GROUP_KEYS:
            table.skip(key)
        table.finish()
        if not sound or not templates:
            return Expanded((Wait(0),), (Written(table.place),))
        made = _made(table, usable, templates, patterns=patterns, span=(index, first, last))
        if not slots or not made.parts:
            return made
        return replace(made, free=(Free((0, len(made.parts) - 1), slots),))

    def _gone_through(self, table: Table) -> dict[str, Known]:
        """Return the patterns that a group goes through; what stands in for those unknown."""
        raw = table.raw["for_each"]
        names = raw if is_array(raw) else [raw] if isinstance(raw, str) else []
        if not names:
            message = f"{shown(raw)}; a pattern's name, or an array of names, is needed"
            table.note("for_each", message)
        gone: dict[str, Known] = {}
        for number, name in enumerate(names, start=1):
            place = join(table.place, "for_each") + (f"[{number}]" if is_array(raw) else "")
            if not isinstance(name, str):
                _note(table, place, f"{shown(name)}; the name of a pattern is needed")
            elif name in gone:
                _note(table, place, f"{shown(name)} stands here twice; each is gone through once")
            elif name not in self.known:
                _note(table, place, self._unknown(name))
            known = self.known.get(name) if isinstance(name, str) else None
            gone.setdefault(str(name), known or Known(STAND_IN, sound=False))
        return gone

    def _unknown(self, name: str) -> str:
        if not self.known:
            return f"{shown(name)}; this file has no [[patterns]]"
        hint = near(name, self.known) or f"; this file has {quoted(self.known)}"
        return f"unknown pattern {shown(name)}{hint}"

    def _span(
        self, table: Table, judge: Judge, patterns: Sequence[Pattern], count: int
    ) -> tuple[int, int]:
        """Return the first and the last place that a group goes through; all where faulty."""
        before = len(judge.faults)
        first, last = table.whole("from", 1), table.whole("to", count)
        judge_span(judge, {"from": first, "to": last}, patterns)
        return (1, count) if len(judge.faults) > before or not patterns else (first, last)

    def _template(self, table: Table, gone: Mapping[str, Known] | None) -> Template:
        """Return a step at the first places of the patterns gone through; None: in no group."""
        if "for_each" in table.raw:
            table.note("for_each", "stands inside of a for_each; groups do not nest")
            return Template(Wait(0), table.place, ())
        points = table.raw.get("path")
        raw = {**table.raw, **({"path": list(points)} if is_array(points) else {})}
        slots: list[Slot] = []
        faulty = False
        for key, inner in _with_places(table):
            if gone is None:
                faulty = self._refused(inner) or faulty
                continue
            own, slot = self._placed(key, inner, gone)
            _put(raw, key, own)
            faulty = faulty or slot is None
            slots += [slot] if slot else []
        within = Table(raw, place=table.place, file=table.file, faults=table.faults)
        step = self.read_step(within)
        if step is None or faulty:
            return Template(Wait(0), table.place, ())
        return Template(step, table.place, tuple(slots))

    def _refused(self, table: Table) -> bool:
        """Note the keys of a place in a position table of no group, and tell if there are any.

        An axis may be called so.
        """
        keys = [
            key
            for key in PLACE_KEYS
            if key in table.raw and key not in self.kinds and _means_place(key, table.raw[key])
        ]
        for key in keys:
            table.note(key, "only the steps of a for_each go to places; give axis positions")
        return bool(keys)

    def _placed(
        self, key: str, table: Table, gone: Mapping[str, Known]
    ) -> tuple[Mapping[str, object], Slot | None]:
        """Return a position table with the first place, and its slot; None where it is faulty."""
        own = {word: raw for word, raw in table.raw.items() if word not in PLACE_KEYS}
        offset = table.table("offset")
        added = offset.positions(offset.raw, self.kinds) if offset else {}
        if "place" not in table.raw:
            table.note("offset", 'is added to a place; place = "NAME" is missing')
            return own or {"-": 0.0}, None
        before = len(table.faults)
        name = table.text("place")
        if len(table.faults) == before and name not in gone:
            table.note("place", self._not_here(name, gone))
        if name not in gone:
            return own or {"-": 0.0}, None
        pattern, sound = gone[name]
        offset_place = join(table.place, "offset")
        for axis in added:
            if axis in own:
                message = f"{axis} has a position beside, which overrides the place; leave one out"
                _note(table, join(offset_place, axis), message)
            elif sound and axis not in pattern.origin:
                hint = near(axis, pattern.origin) or f"; it has {', '.join(pattern.origin)}"
                message = f"{name} has no axis {axis}{hint}"
                _note(table, join(offset_place, axis), message)
        offsets = {axis: added.get(axis, 0.0) for axis in pattern.origin if axis not in own}
        slot = Slot(key, name, offsets)
        return own | dict(slot.positions({name: pattern.origin})), slot

    def _not_here(self, name: str, gone: Mapping[str, Known]) -> str:
        if name in self.known:
            return f"{shown(name)} is not gone through here; for_each has {quoted(gone)}"
        return self._unknown(name)


def read_patterns(table: Table, kinds: Mapping[str, AxisKind]) -> dict[str, Known]:
    """Read the patterns of a cycle file, with the faults noted there.

    Parameters
    ----------
    table : Table
        The file.
    kinds : mapping
        The kinds of the machine's axes, as far as they are known.

    Returns
    -------
    dict
        Name → pattern.
    """
    known: dict[str, Known] = {}
    for inner in table.tables("patterns") or ():
        before = len(table.faults)
        name = inner.text("name")
        if name in known:
            inner.note("name", f"{shown(name)} is the name of another pattern too")
        pattern = _pattern(inner, name, kinds)
        sound = pattern is not None and len(table.faults) == before
        known.setdefault(name, Known(pattern if pattern and sound else STAND_IN, sound))
    return known


def _pattern(table: Table, name: str, kinds: Mapping[str, AxisKind]) -> Pattern | None:
    if "origin" not in table.raw:
        table.note("origin", "missing; the axis positions of the first place are needed")
    origin, *pitches = (
        _axes(table, key, kinds) for key in ("origin", "column_pitch", "row_pitch", "layer_pitch")
    )
    return table.build(
        lambda: Pattern(
            name,
            origin,
            columns=table.whole("columns", Pattern.columns),
            column_pitch=pitches[0],
            rows=table.whole("rows", Pattern.rows),
            row_pitch=pitches[1],
            layers=table.whole("layers", Pattern.layers),
            layer_pitch=pitches[2],
            order=table.choice("order", ROW_ORDERS, default=Pattern.order),
        )
    )


def _axes(table: Table, key: str, kinds: Mapping[str, AxisKind]) -> Positions:
    """Return positions or offsets by axis, without those of axes that the machine does not have."""
    inner = table.table(key)
    if inner is None:
        return {}
    for axis in inner.raw:
        if kinds and axis not in kinds:
            hint = near(axis, kinds) or f"; this machine has {', '.join(kinds)}"
            inner.note(axis, f"unknown axis{hint}")
    return inner.positions([axis for axis in inner.raw if not kinds or axis in kinds], kinds)


def _free_slots(
    table: Table,
    names: Sequence[str],
    templates: Sequence[Template],
    count: int,
    *,
    order: GroupOrder,
) -> tuple[int, ...]:
    """Return for each step of a group the pattern that it goes to; none: the order is as given."""
    if order == "given" or not names:
        return ()
    if len(names) > MOST_MATCHED:
        message = f'"shortest" is for one pattern or two; for_each has {len(names)}'
        table.note("order", message)
        return ()
    before = len(table.faults)
    if count > MOST_FREE:
        table.note("order", too_free(count))
    slots = _slots(table, names, templates)
    if len(table.faults) == before:
        for number, name in enumerate(names):
            if number not in slots:
                table.note("order", f'"shortest"; no step goes to a place of {name}')
    return slots if len(table.faults) == before else ()


def _slots(table: Table, names: Sequence[str], templates: Sequence[Template]) -> tuple[int, ...]:
    """Return the number of each step's pattern, -1 for none, and note what cannot be free."""
    slots: list[int] = []
    used: list[int] = []
    for template in templates:
        own = list(dict.fromkeys(names.index(slot.pattern) for slot in template.slots))
        if isinstance(template.step, Trace):
            message = 'a group of order = "shortest" goes to places only; trace outside of it'
            _note(table, join(template.place, "trace"), message)
        if len(own) > 1:
            other = next(s for s in template.slots if s.pattern != template.slots[0].pattern)
            message = f'goes to {quoted(names)} in one step; order = "shortest" needs a step each'
            _note(table, f"{template.place}.{other.key}", message)
        elif own and back_again([*used, *own]) is not None:
            message = f'goes back to {names[own[0]]}; order = "shortest" has its steps together'
            _note(table, f"{template.place}.{template.slots[0].key}", message)
        slots.append(own[0] if own else -1)
        used += own
    return tuple(slots)


def _made(
    table: Table,
    name: str,
    templates: Sequence[Template],
    *,
    patterns: Sequence[Pattern],
    span: tuple[int, int, int],
) -> Expanded:
    """Return what the steps of a group make: `span` has their index, the first and last place."""
    index, first, last = span
    try:
        made = expand(
            name,
            patterns,
            lambda at: [template.at(at) for template in templates],
            index=index,
            first=first,
            last=last,
        )
    except InputError as error:
        # only a place and an offset that are in range each can add up to what is not
        table.note("steps", "; ".join(map(str, error.faults[:1])))
        return Expanded((Wait(0),), (Written(table.place),))
    origins = [(template.place, template.placed) for template in templates]
    written = tuple(
        Written(place, part.name, number, placed)
        for number, part in enumerate(made.parts, start=first)
        for place, placed in origins
    )
    return Expanded(made.steps, written, made.parts)


def _with_places(table: Table) -> Iterator[tuple[str, Table]]:
    """Yield the position tables of a step that have keys of a place, by key path in the step."""
    for kind in POSITION_TABLES:
        raw = table.raw.get(kind)
        if _has_place(raw):
            place = join(table.place, kind)
            yield kind, Table(raw, place=place, file=table.file, faults=table.faults)
    points = table.raw.get("path")
    for number, raw in enumerate(points if is_array(points) else (), start=1):
        if _has_place(raw):
            place = f"{join(table.place, 'path')}[{number}]"
            key = f"path[{number}]"
            yield key, Table(raw, place=place, file=table.file, faults=table.faults)


def _has_place(raw: object) -> TypeGuard[dict[str, object]]:
    return isinstance(raw, dict) and any(key in raw for key in PLACE_KEYS)


def _means_place(key: str, raw: object) -> bool:
    """Tell whether a value can be meant for a key of a place only, and for no axis called so."""
    if key == "offset":
        return isinstance(raw, dict)
    return isinstance(raw, str) and not is_like_number(raw)


def _put(raw: dict[str, object], key: str, own: Mapping[str, object]) -> None:
    """Replace a position table of a step, whose points are a list of its own."""
    points = raw.get("path")
    if key in raw or not is_array(points):
        raw[key] = dict(own)
    else:
        points[int(key[len("path[") : -1]) - 1] = dict(own)


def _note(table: Table, place: str, message: str) -> None:
    """Note a fault at a place of the file."""
    table.faults.append(Fault(place, message, table.file))
