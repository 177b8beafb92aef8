"""What stands in the page's tables, in words and numbers with units?"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, fields, is_dataclass
from typing import TYPE_CHECKING, NamedTuple

from profileplan import wording
from profileplan.inputs.files import fingerprint
from profileplan.summary import part_times, uses

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    from profileplan.inputs import Axis, Keepout, Machine
    from profileplan.results import PlannedCycle

UNITS = {
    "mass": "kg",
    "load_inertia": "kg·m²",
    "inertia": "kg·m²",
    "drag_torque": "N·m",
    "counterbalance": "N",
    "rated_torque": "N·m",
    "peak_torque": "N·m",
    "speed": "1/min",
    "increments": "a turn",
}
"""Values of drives, mechanics and motors whose unit is the same on all axes."""

MOST_STEPS = 400
"""Steps that a table and the timeline have one by one."""


class Row(NamedTuple):
    """Cells; whether they tell of a fault; what of the cycle they are about.

    That is a name, which a block of the timeline may have too, and from when to when [s].
    """

    cells: Sequence[str]
    bad: bool = False
    mark: str = ""
    start: float = 0.0
    end: float = 0.0


@dataclass(frozen=True)
class PageTable:
    """A table: heading, names of columns, rows, which columns are numbers, a line before it."""

    key: str
    head: str
    names: Sequence[str]
    rows: Sequence[Row]
    numbers: frozenset[int] = field(default_factory=frozenset)
    text: str = ""


def all_tables(planned: PlannedCycle) -> Iterator[PageTable]:
    """Yield the tables of the page in order."""
    yield _steps(planned)
    if planned.job.cycle.parts:
        yield _parts(planned)
    if planned.levers:
        yield _levers(planned)
    yield _requirements(planned)
    yield _axes(planned.job.machine)
    yield _cell(planned.job.machine)
    yield _files(planned)


def step_mark(index: int) -> str:
    """Return by what name a step, counted from 0, is known in the page."""
    return f"step-{index}"


def _steps(planned: PlannedCycle) -> PageTable:
    rows = []
    for index, step in enumerate(planned.steps[:MOST_STEPS]):
        used = [wording.most(by_axis) for by_axis in uses(planned, step).values()]
        least = "" if step.least_time is None else f"{step.least_time:.3f}"
        cells = [str(index + 1), step.name, step.kind, f"{step.start:.3f}", f"{step.duration:.3f}"]
        found = [*cells, least, wording.held(step), *used]
        rows.append(Row(found, mark=step_mark(index), start=step.start, end=step.end))
    more = len(planned.steps) - len(rows)
    names = ["#", "step", "kind", "start s", "time s", "not below s", "limited by"]
    return PageTable(
        "steps",
        "Steps",
        [*names, *(f"{word} %" for word in wording.SHORT.values())],
        rows,
        frozenset({0, 3, 4, 5, 7, 8, 9, 10}),
        f"The first {len(rows)} of {len(planned.steps)} steps; summary.json has all."
        if more
        else "",
    )


def _parts(planned: PlannedCycle) -> PageTable:
    times = part_times(planned)
    rows = [
        Row(
            [time.part.name, f"{time.start:.3f}", f"{time.duration:.3f}"],
            mark=f"part-{number}",
            start=time.start,
            end=time.start + time.duration,
        )
        for number, time in enumerate(times[:MOST_STEPS])
    ]
    return PageTable("parts", "Parts", ["part", "start s", "time s"], rows, frozenset({1, 2}))


def _levers(planned: PlannedCycle) -> PageTable:
    rows = [
        Row(
            [
                wording.lever(own.limit),
                f"{own.limit.saves:.3f}",
                f"{own.time:.3f}",
                wording.listed(own.steps),
            ]
        )
        for own in planned.levers
        if own.limit.quantity != "time"
    ]
    names = ["what limits", "saved by 10 % more, s", "strongest for, s", "steps that it limits"]
    return PageTable("levers", "What would shorten the cycle", names, rows, frozenset({1, 2}))


def _requirements(planned: PlannedCycle) -> PageTable:
    rows = [
        Row([*wording.requirement(finding), "yes" if finding.ok else "NO"], bad=not finding.ok)
        for finding in planned.check()
    ]
    names = [*wording.REQUIREMENT, "met"]
    return PageTable("requirements", "Requirements", names, rows, frozenset({1, 2, 3, 5}))


def _axes(machine: Machine) -> PageTable:
    """Return the machine data of the axes, a column an axis."""
    rows = [
        Row([name, *(values.get(name, "") for values in map(_axis, machine.axes))])
        for name in dict.fromkeys(name for axis in machine.axes for name in _axis(axis))
    ]
    names = ["axis", *(axis.name for axis in machine.axes)]
    return PageTable("machine", "Machine as understood", names, rows)


def _axis(axis: Axis) -> Mapping[str, str]:
    """Return the data of an axis with their units."""
    unit, limits = axis.unit, axis.limits
    jerk = f"{limits.jerk:g} {unit}/s³" if math.isfinite(limits.jerk) else "not limited"
    resolution = "" if axis.resolution is None else f"{axis.resolution:g} {unit}"
    found = {
        "kind": axis.kind,
        "travel": f"{axis.travel[0]:g} to {axis.travel[1]:g} {unit}",
        "velocity": f"{limits.velocity:g} {unit}/s",
        "acceleration": f"{limits.acceleration:g} {unit}/s²",
        "deceleration": f"{limits.deceleration:g} {unit}/s²",
        "jerk": jerk,
        "resolution": resolution,
    }
    for name in ("drive", "mechanics", "motor"):
        found[name] = _told(getattr(axis, name), axis)
    return {name: value for name, value in found.items() if value}


def _told(record: object, axis: Axis) -> str:
    """Return a record's values that were given, each by its name and with its unit."""
    if record is None or not is_dataclass(record):
        return ""
    linear = axis.kind == "linear"
    own_units = {
        **UNITS,
        **dict.fromkeys(("lead", "offset", "wrap"), axis.unit),
        "drag": "N" if linear else "N·m",
        "damping": "N per m/s" if linear else "N·m per rad/s",
    }
    told = []
    for own in fields(record):
        value, name = getattr(record, own.name), own.name.replace("_", " ")
        if value is None or value == own.default:
            continue
        if is_dataclass(value):
            told.append(f"{name}: {_told(value, axis)}")
        elif isinstance(value, tuple):
            told.append(f"{name} {' : '.join(f'{part:g}' for part in value)}")
        else:
            number = f"{value:.12g}" if isinstance(value, float) else str(value)
            told.append(f"{name} {number} {own_units.get(own.name, '')}".strip())
    return ", ".join(told)


def _cell(machine: Machine) -> PageTable:
    """Return the rest of the machine data: up axis, tool, keep-outs, setpoints."""
    tool, own = machine.tool, machine.setpoints
    shape = "a point"
    if tool.radius:
        shape = f"radius {tool.radius:g} mm"
    elif tool.outline:
        shape = f"outline of {len(tool.outline)} corners"
    rows = [
        Row(["name", machine.name]),
        Row(["up", machine.up or "none: a flat machine"]),
        Row(["tool", f"{shape}, {tool.margin:g} mm kept clear"]),
        *(Row([f"keep-out {keepout.name}", _keepout(keepout)]) for keepout in machine.keepouts),
        Row(
            [
                "setpoints",
                f"every {own.period * 1e3:g} ms, {', '.join(own.columns)}, in {_units(own.units)}",
            ]
        ),
    ]
    return PageTable("cell", "Cell and setpoints", ["item", "as understood"], rows)


def _units(units: str) -> str:
    return "drive increments" if units == "increments" else "axis units"


def _keepout(keepout: Keepout) -> str:
    if keepout.circle is not None:
        own = keepout.circle
        shape = f"circle of radius {own.radius:g} mm at {own.x:g}, {own.y:g} mm"
    elif keepout.outline is not None:
        shape = f"outline of {len(keepout.outline)} corners"
    else:
        shape = f"layer {keepout.layer} of {keepout.dxf}"
    return f"{shape}, {'to any height' if keepout.top is None else f'up to {keepout.top:g} mm'}"


def _files(planned: PlannedCycle) -> PageTable:
    rows = [
        Row([str(file), fingerprint(file) or "cannot be read any more"])
        for file in planned.job.files
    ]
    if not rows:
        rows = [Row(["records made in a program", ""])]
    return PageTable("files", "Files", ["file", "SHA-256"], rows)
