"""What a cycle file says, with the waypoint files that it names.

Groups of steps (``for_each``) are expanded here: a cycle has plain steps alone.

A step that is faulty is stood in for by a harmless one, so that the others keep their numbers and
can be judged too.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple, TypeAlias

from profileplan.errors import Fault, InputError
from profileplan.inputs.cycle import (
    ACROSS,
    ARRIVALS,
    LAW_NAMES,
    ORDERS,
    POINT_KEYS,
    STEP_KEYS,
    Cycle,
    Line,
    Move,
    PathStep,
    Payload,
    Place,
    Signal,
    Step,
    Trace,
    Transfer,
    Wait,
    Waypoint,
)
from profileplan.inputs.groups import Groups, read_patterns
from profileplan.inputs.quantities import Quantity
from profileplan.inputs.rules import POSITION, near, shown, tidy
from profileplan.inputs.table import Table, is_like_number, open_table
from profileplan.inputs.waypoints import waypoint_reading

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    from profileplan.inputs.machine import AxisKind, Machine
    from profileplan.inputs.patterns import Written
    from profileplan.inputs.rules import Positions

    Kinds: TypeAlias = Mapping[str, AxisKind]


class Reading(NamedTuple):
    """What a cycle file says as far as it can be made out; `cycle` is None where it cannot."""

    cycle: Cycle | None
    start: Positions
    steps: tuple[Step, ...]
    written: tuple[Written, ...]
    faults: list[Fault]


def read_cycle(path: Path | str, machine: Machine | None = None) -> Cycle:
    """Read a cycle file, and the waypoint files of its paths.

    Parameters
    ----------
    path : Path or str
        A TOML file.
    machine : Machine, optional
        Tells which axes are rotary, so that units of positions can be judged.

    Raises
    ------
    InputError
        With every fault of the files.
    """
    reading = cycle_reading(open_table(Path(path)), machine)
    if reading.cycle is None or reading.faults:
        raise InputError(tidy(reading.faults))
    return reading.cycle


def cycle_reading(table: Table, machine: Machine | None) -> Reading:
    """Return what a cycle file says, with its faults.

    Parameters
    ----------
    table : Table
        The file.
    machine : Machine, optional
        Tells which axes are rotary.
    """
    kinds: Kinds = {axis.name: axis.kind for axis in machine.axes} if machine else {}
    start = _start(table, kinds)
    tables = table.tables("steps")
    if tables is None:
        table.note("steps", "missing; at least one step is needed: [[steps]]")
    groups = Groups(read_patterns(table, kinds), kinds, lambda inner: _step(inner, kinds))
    made = groups.expanded(tables or ())
    named = machine_path(table)
    cycle = table.build(
        lambda: Cycle(
            made.steps,
            start,
            target=table.optional_number("target", Quantity.TIME),
            law=table.choice("law", LAW_NAMES, default=Cycle.law),
            machine=named,
            source=table.file,
            parts=made.parts,
            free=made.free,
            # without groups the steps are numbered as they are in the file
            written=made.written if made.parts else (),
        )
    )
    return Reading(cycle, _harmless(start), made.steps, made.written, table.faults)


def machine_path(table: Table) -> Path | None:
    """Return the machine file that a cycle file names, if it does.

    Parameters
    ----------
    table : Table
        The cycle file.
    """
    text = table.optional_text("machine")
    return None if text is None else table.file.parent / text


def _start(table: Table, kinds: Kinds) -> Positions:
    start = table.table("start")
    if start is None:
        table.note("start", "missing; the position of every axis at the start is needed: [start]")
        return {}
    return start.positions(start.raw, kinds)


def _step(table: Table, kinds: Kinds) -> Step | None:
    """Return the step that a table describes; None where there is nothing to make of it."""
    found = [kind for kind in READERS if kind in table.raw]
    if len(found) != 1:
        table.note("", _which_step(table, found))
        return None
    kind = found[0]
    for key in table.raw:
        if key not in STEP_KEYS[kind] and key not in kinds and (why := _belongs(key, kind)):
            table.note(key, why)
            table.skip(key)
    return READERS[kind](table, kinds)


def _which_step(table: Table, found: list[str]) -> str:
    if found:
        return f"has {' and '.join(found)}; one step does one thing"
    hints = (near(key, (*READERS, "for_each")) for key in table.raw)
    hint = next((hint for hint in hints if hint), "")
    return f"does nothing; one of {', '.join(READERS)} is needed{hint}"


def _belongs(key: str, kind: str) -> str | None:
    """Say to which other kinds of step a key belongs; None where it belongs to none."""
    others = [other for other, keys in STEP_KEYS.items() if key in keys]
    if not others:
        return None
    allowed = f"a {kind} takes {', '.join(STEP_KEYS[kind])}"
    if (kind, key) == ("move", "speed"):
        allowed = "a move is bounded by its axes"
    return f"{key} belongs to {', '.join(others)}; {allowed}"


def _to(table: Table, kind: str, kinds: Kinds) -> Positions:
    to = table.table(kind)
    return to.positions(to.raw, kinds) if to else {}


def _harmless(positions: Positions) -> Positions:
    """Return positions with 0 for those out of range, for a record that stands in."""
    return {name: p if POSITION.holds(p) else 0.0 for name, p in positions.items()}


def _move(table: Table, kinds: Kinds) -> Step | None:
    to = _to(table, "move", kinds)
    return table.build(
        lambda: Move(
            to,
            law=table.optional_choice("law", LAW_NAMES),
            arrival=table.choice("arrival", ARRIVALS, default=Move.arrival),
            time=table.optional_number("time", Quantity.TIME),
            name=table.optional_text("name"),
        ),
        lambda: Move(_harmless(to)),
    )


def _line(table: Table, kinds: Kinds) -> Step | None:
    to = _to(table, "line", kinds)
    return table.build(
        lambda: Line(
            to,
            speed=table.optional_number("speed", Quantity.VELOCITY),
            law=table.optional_choice("law", LAW_NAMES),
            time=table.optional_number("time", Quantity.TIME),
            name=table.optional_text("name"),
        ),
        lambda: Line(_harmless(to)),
    )


def _wait(table: Table, _kinds: Kinds) -> Step | None:
    return table.build(
        lambda: Wait(table.number("wait", Quantity.TIME), name=table.optional_text("name"))
    )


def _signal(table: Table, _kinds: Kinds) -> Step | None:
    states = table.table("signal")
    named = {key: states.boolean(key, default=False) for key in states.raw} if states else {}
    return table.build(
        lambda: Signal(
            named,
            lead=table.number("lead", Quantity.TIME, default=Signal.lead),
            name=table.optional_text("name"),
        ),
        lambda: Signal(named),
    )


def _payload(table: Table, _kinds: Kinds) -> Step | None:
    payload = table.table("payload")
    if payload is None:
        return None
    step = table.build(
        lambda: Payload(
            payload.number("mass", Quantity.MASS, default=Payload.mass),
            radius=payload.optional_number("radius", Quantity.LENGTH),
            outline=payload.outline("outline"),
            below=payload.number("below", Quantity.LENGTH, default=Payload.below),
            name=table.optional_text("name"),
        )
    )
    payload.finish()
    return step


def _path(table: Table, kinds: Kinds) -> Step | None:
    points, file = _points(table, kinds)
    # where the points are unusable, one that is harmless lets the other values be judged
    judged = (Waypoint({"-": 0.0}),) if points is None else points
    step = table.build(
        lambda: PathStep(
            judged,
            file=file,
            tolerance=table.number("tolerance", Quantity.LENGTH, default=PathStep.tolerance),
            angle_tolerance=table.number(
                "angle_tolerance", Quantity.ANGLE, default=PathStep.angle_tolerance
            ),
            speed=table.optional_number("speed", Quantity.VELOCITY),
            time=table.optional_number("time", Quantity.TIME),
            law=table.optional_choice("law", LAW_NAMES),
            name=table.optional_text("name"),
        ),
        lambda: PathStep(judged, file=file),
    )
    return None if points is None else step


def _points(table: Table, kinds: Kinds) -> tuple[tuple[Waypoint, ...] | None, Path | None]:
    """Return the points of a path, None where they are unusable, and the file they are from."""
    raw = table.raw["path"]
    if isinstance(raw, str):
        file = table.file.parent / table.text("path")
        points, faults = waypoint_reading(file)
        table.faults += faults
        return points or None, file
    if not isinstance(raw, list):
        table.skip("path")
        table.note("path", f"{shown(raw)}; points, or the name of a waypoint file, are needed")
        return None, None
    tables = table.tables("path") or []
    return tuple(_waypoint(inner, kinds) or Waypoint({"-": 0.0}) for inner in tables), None


def _waypoint(table: Table, kinds: Kinds) -> Waypoint | None:
    to = table.positions([key for key in table.raw if key not in POINT_KEYS], kinds)
    return table.build(
        lambda: Waypoint(
            to,
            speed=table.optional_number("speed", Quantity.VELOCITY),
            wait=table.number("wait", Quantity.TIME, default=Waypoint.wait),
            tolerance=table.optional_number("tolerance", Quantity.LENGTH),
            name=table.optional_text("name"),
        ),
        lambda: Waypoint(_harmless(to)),
    )


def _transfer(table: Table, kinds: Kinds) -> Step | None:
    to = _to(table, "transfer", kinds)
    return table.build(
        lambda: Transfer(
            to,
            height=table.optional_number("height", Quantity.LENGTH),
            lift=table.number("lift", Quantity.LENGTH, default=Transfer.lift),
            lower=table.number("lower", Quantity.LENGTH, default=Transfer.lower),
            across=table.choice("across", ACROSS, default=Transfer.across),
            time=table.optional_number("time", Quantity.TIME),
            name=table.optional_text("name"),
        ),
        lambda: Transfer(_harmless(to)),
    )


def _trace(table: Table, kinds: Kinds) -> Step | None:
    at = table.positions(_trace_axes(table, kinds), kinds)
    place = table.table("place")
    drawing = table.file.parent / table.text("trace")
    return table.build(
        lambda: Trace(
            drawing,
            layers=table.texts("layers"),
            place=_place(place) if place else Place(),
            at=at,
            tolerance=table.number("tolerance", Quantity.LENGTH, default=Trace.tolerance),
            speed=table.optional_number("speed", Quantity.VELOCITY),
            lift=table.number("lift", Quantity.LENGTH, default=Trace.lift),
            with_signal=table.optional_text("with_signal"),
            lead=table.number("lead", Quantity.TIME, default=Trace.lead),
            order=table.choice("order", ORDERS, default=Trace.order),
            inside_first=table.boolean("inside_first", default=Trace.inside_first),
            lead_in=table.optional_number("lead_in", Quantity.LENGTH),
            joining=table.number("joining", Quantity.LENGTH, default=Trace.joining),
            drawn_height=table.boolean("drawn_height", default=Trace.drawn_height),
            unit=table.optional_text("unit"),
            space=table.optional_text("space") or Trace.space,
            hidden=table.boolean("hidden", default=Trace.hidden),
            hatches=table.boolean("hatches", default=Trace.hatches),
            time=table.optional_number("time", Quantity.TIME),
            name=table.optional_text("name"),
        ),
        lambda: Trace(drawing, at=_harmless(at)),
    )


def _trace_axes(table: Table, kinds: Kinds) -> list[str]:
    """Return the keys of a trace that name axes.

    Without a machine these are all that are no keys of any step and hold a number.
    """
    for name in kinds:
        table.skip(name)
    others = [key for key in table.raw if key not in READERS and key not in STEP_KEYS["trace"]]
    if kinds:
        return [key for key in others if key in kinds]
    return [key for key in others if not _belongs(key, "trace") and is_like_number(table.raw[key])]


def _place(table: Table) -> Place:
    place = table.build(
        lambda: Place(
            x=table.number("x", Quantity.LENGTH, default=Place.x),
            y=table.number("y", Quantity.LENGTH, default=Place.y),
            turn=table.number("turn", Quantity.ANGLE, default=Place.turn),
            scale=table.factor("scale", Place.scale),
            mirror=table.boolean("mirror", default=Place.mirror),
        )
    )
    return place or Place()


READERS: dict[str, Callable[[Table, Kinds], Step | None]] = {
    "move": _move,
    "line": _line,
    "wait": _wait,
    "signal": _signal,
    "payload": _payload,
    "path": _path,
    "transfer": _transfer,
    "trace": _trace,
}
