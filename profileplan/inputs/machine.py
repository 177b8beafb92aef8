"""What the machine can do: the records of a machine file.

Linear axes count in mm, rotary axes in deg; rates per second. Every record judges its own values
when it is made and raises `InputError` with places relative to itself.
"""

from __future__ import annotations

import math
from dataclasses import KW_ONLY, dataclass, field
from typing import TYPE_CHECKING, Literal, NamedTuple, TypeAlias

from profileplan.inputs.dialect import KINDS, Dialect
from profileplan.inputs.mechanics import Mechanics, Motor
from profileplan.inputs.rules import (
    EXTENT,
    LIMIT,
    PERIOD,
    POSITION,
    RADIUS,
    RESOLUTION,
    Judge,
    Outline,
    is_number,
    join,
    quoted,
    shown,
)

if TYPE_CHECKING:
    from pathlib import Path

    from profileplan.inputs.drive import Drive

AxisKind: TypeAlias = Literal["linear", "rotary"]
TableUnits: TypeAlias = Literal["axis", "increments"]
AXIS_KINDS: tuple[AxisKind, ...] = ("linear", "rotary")
TABLE_UNITS: tuple[TableUnits, ...] = ("axis", "increments")

SETPOINT_UNITS = {
    "pos": "{}",
    "vel": "{}_s",
    "acc": "{}_s2",
    "jerk": "{}_s3",
    "force": "N",
    "torque": "Nm",
}
"""What a setpoint table can hold of an axis → its unit in the heading, {} for the axis's own."""

LOADS = ("force", "torque")
"""What only axes with mechanics have."""

DEFAULT_COLUMNS = ("pos", "vel", "acc")
"""What is written of each axis unless something else is asked for."""

FULL_TURN = 360.0
"""Travel of a rotary axis in a turn of its gear's output, unless something else is said [deg]."""

MOST_AXES = 12
WHOLE_NANOSECOND_TOLERANCE = 1e-6  # ns: a period of 1 s in double precision is rounded by 2e-7 ns


class AxisLimits(NamedTuple):
    """What bounds the motion of one axis, in its units per s, s² and s³; jerk may be infinite."""

    velocity: float
    acceleration: float
    deceleration: float
    jerk: float


@dataclass(frozen=True)
class Axis:
    """One axis and its limits.

    Parameters
    ----------
    name : str
        Heads the axis's columns; no reserved word.
    travel : tuple of float
        Lowest and highest allowed position [mm or deg].
    velocity, acceleration : float
        Limits [mm/s, mm/s² or deg/s, deg/s²].
    kind : {"linear", "rotary"}
        A linear axis counts in mm, a rotary one in deg.
    deceleration : float, optional
        Limit while slowing down; None: as acceleration.
    jerk : float, optional
        Limit [mm/s³ or deg/s³]; None: not limited.
    resolution : float, optional
        What a drive increment stands for [mm or deg].
    mechanics : Mechanics, optional
        What it moves, and through which transmission.
    motor : Motor, optional
        What its motor can do; needs mechanics with a lead.
    drive : Drive, optional
        What counts its position.
    """

    name: str
    _: KW_ONLY
    travel: tuple[float, float]
    velocity: float
    acceleration: float
    kind: AxisKind = "linear"
    deceleration: float | None = None
    jerk: float | None = None
    resolution: float | None = None
    mechanics: Mechanics | None = None
    motor: Motor | None = None
    drive: Drive | None = None

    def __post_init__(self) -> None:
        judge = Judge()
        unit = self.unit
        judge.column("", self.name)
        judge.choice("kind", self.kind, AXIS_KINDS)
        object.__setattr__(self, "travel", _judged_travel(judge, self.travel, unit))
        judge.number("velocity", self.velocity, LIMIT, f"{unit}/s")
        judge.number("acceleration", self.acceleration, LIMIT, f"{unit}/s²")
        judge.optional("deceleration", self.deceleration, LIMIT, f"{unit}/s²")
        judge.optional("jerk", self.jerk, LIMIT, f"{unit}/s³")
        judge.optional("resolution", self.resolution, RESOLUTION, unit)
        self._judge_mechanics(judge)
        judge.finish()

    @property
    def unit(self) -> Literal["mm", "deg"]:
        """The unit of a position."""
        return "deg" if self.kind == "rotary" else "mm"

    def column(self, quantity: str) -> str:
        """Return the heading of the axis's column in a setpoint table.

        Parameters
        ----------
        quantity : str
            A key of ``SETPOINT_UNITS``.
        """
        return f"{self.name}_{quantity}_{SETPOINT_UNITS[quantity].format(self.unit)}"

    @property
    def motor_turn(self) -> float | None:
        """Travel in a turn of the motor [mm or deg]; None where mechanics do not say it."""
        if self.mechanics is None:
            return None
        drive = self.drive
        lead, gear = self.mechanics.lead, self.mechanics.gear
        if lead is None:
            lead = FULL_TURN if self.kind == "rotary" else None
            lead = lead if drive is None else drive.lead
        if gear is None:
            gear = (1, 1) if drive is None else drive.gear
        return None if lead is None else lead * gear[1] / gear[0]

    def has_loads(self, quantity: str) -> bool:
        """Tell whether its mechanics say enough for its "force" or its "torque".

        A rotary axis has a torque only.
        """
        if quantity == "torque":
            return self.motor_turn is not None
        return self.mechanics is not None and self.kind == "linear"

    @property
    def limits(self) -> AxisLimits:
        """All limits, those left out filled in."""
        return AxisLimits(
            self.velocity,
            self.acceleration,
            self.acceleration if self.deceleration is None else self.deceleration,
            math.inf if self.jerk is None else self.jerk,
        )

    def _judge_mechanics(self, judge: Judge) -> None:
        """Judge what only the kind of the axis tells of its mechanics, motor and drive."""
        mechanics = self.mechanics
        _judge_record(judge, "mechanics", mechanics, Mechanics)
        _judge_record(judge, "motor", self.motor, Motor)
        if isinstance(mechanics, Mechanics):
            unfit: dict[str, float | None] = {"load_inertia": mechanics.load_inertia}
            if self.kind == "rotary":
                unfit = {
                    "mass": mechanics.mass,
                    "friction": mechanics.friction or None,
                    "counterbalance": mechanics.counterbalance or None,
                }
            for key, value in unfit.items():
                if value is not None:
                    judge.note(f"mechanics.{key}", f"{shown(value)}; not on a {self.kind} axis")
        if self.drive is not None and self.drive.wrap is not None and self.kind == "linear":
            judge.note("drive.wrap", f"{shown(self.drive.wrap)}; only on a rotary axis")
        if self.motor is not None and mechanics is None:
            judge.note("motor", "its torque is not known without mechanics: give them")
        if self.motor is not None and isinstance(mechanics, Mechanics) and not self.motor_turn:
            judge.note("mechanics.lead", "missing; needed for the torque of the motor")


@dataclass(frozen=True)
class Circle:
    """A circle in the plane of the horizontal axes, mm."""

    x: float
    y: float
    radius: float

    def __post_init__(self) -> None:
        judge = Judge()
        judge.number("x", self.x, POSITION, "mm")
        judge.number("y", self.y, POSITION, "mm")
        judge.number("radius", self.radius, RADIUS, "mm")
        judge.finish()


@dataclass(frozen=True)
class Keepout:
    """A place that the tool must not enter: exactly one of `outline`, `circle` and `dxf`.

    Parameters
    ----------
    name : str
        What messages call it.
    outline : tuple of pairs, optional
        Corners [mm].
    circle : Circle, optional
        A round one.
    dxf, layer : optional
        A drawing, and the layer of it whose outlines are meant.
    top : float, optional
        The position of the up axis up to which it blocks [mm]; None: to any height.
    """

    name: str
    _: KW_ONLY
    outline: Outline | None = None
    circle: Circle | None = None
    dxf: Path | None = None
    layer: str | None = None
    top: float | None = None

    def __post_init__(self) -> None:
        judge = Judge()
        judge.name("name", self.name)
        shapes = {"outline": self.outline, "circle": self.circle, "dxf": self.dxf}
        given = [key for key, shape in shapes.items() if shape is not None]
        if len(given) != 1:
            found = " and ".join(given) if given else "none of them"
            judge.note("", f"has {found}; exactly one of outline, circle, dxf is needed")
        object.__setattr__(self, "outline", judge.outline("outline", self.outline))
        judge.optional_name("layer", self.layer)
        if self.dxf is not None and self.layer is None:
            judge.note("layer", "missing; a drawing needs the name of the layer that is meant")
        if self.dxf is None and self.layer is not None:
            judge.note("layer", f"{shown(self.layer)}; only with dxf")
        judge.optional("top", self.top, POSITION, "mm")
        judge.finish()


@dataclass(frozen=True)
class Tool:
    """The footprint around the tool point: a radius, an outline, or (neither) a point.

    `radius` and the corners of `outline` are in mm, and so is `margin`, the clearance kept to
    anything.
    """

    radius: float | None = None
    outline: Outline | None = None
    margin: float = 0.0

    def __post_init__(self) -> None:
        judge = Judge()
        object.__setattr__(self, "outline", judge_footprint(judge, "", self.radius, self.outline))
        judge.number("margin", self.margin, EXTENT, "mm")
        judge.finish()


@dataclass(frozen=True)
class SetpointSettings:
    """How the motion is sampled and written.

    Parameters
    ----------
    period : float
        Time between rows [s]: a whole number of ns from 50 µs to 1 s.
    columns : tuple of str
        What is written of each axis: pos, vel, acc, jerk, force, torque.
    units : {"axis", "increments"}
        Whether axes with a drive are written in its increments.
    dialect : Dialect
        How the table is written.
    """

    period: float = 0.001
    _: KW_ONLY
    columns: tuple[str, ...] = DEFAULT_COLUMNS
    units: TableUnits = "axis"
    dialect: Dialect = field(default_factory=Dialect)

    def __post_init__(self) -> None:
        judge = Judge()
        object.__setattr__(self, "columns", tuple(self.columns))
        for index, column in enumerate(self.columns, start=1):
            judge.choice(f"columns[{index}]", column, KINDS)
        if len(set(self.columns)) != len(self.columns) or not self.columns:
            judge.note("columns", "at least one is needed, and none twice")
        judge.choice("units", self.units, TABLE_UNITS)
        judge.number("period", self.period, PERIOD, "s")
        if is_number(self.period) and PERIOD.holds(self.period):
            nanoseconds = self.period * 1e9
            if abs(nanoseconds - round(nanoseconds)) > WHOLE_NANOSECOND_TOLERANCE:
                nearest = f"{round(nanoseconds)}e-9"
                judge.note(
                    "period",
                    f"{self.period!r} s; allowed: a whole number of nanoseconds, such as {nearest}",
                )
        judge.finish()


@dataclass(frozen=True)
class Machine:
    """A Cartesian machine.

    Parameters
    ----------
    name : str
        What reports call it.
    axes : tuple of Axis
        1 to 12, in the order of the columns.
    up : str, optional
        Sign and name of the linear axis that points up: ``"+z"``, or ``"-z"`` where z counts
        downward. None: a flat machine.
    tool : Tool
        What moves.
    keepouts : tuple of Keepout
        What it must not hit.
    setpoints : SetpointSettings
        How the motion is sampled.
    source : Path, optional
        The file it was read from.
    """

    name: str
    axes: tuple[Axis, ...]
    _: KW_ONLY
    up: str | None = None
    tool: Tool = field(default_factory=Tool)
    keepouts: tuple[Keepout, ...] = ()
    setpoints: SetpointSettings = field(default_factory=SetpointSettings)
    source: Path | None = None

    def __post_init__(self) -> None:
        judge = Judge()
        judge.name("name", self.name)
        object.__setattr__(self, "axes", judge.records("axes", self.axes, (Axis,)))
        object.__setattr__(self, "keepouts", judge.records("keepouts", self.keepouts, (Keepout,)))
        if not 1 <= len(self.axes) <= MOST_AXES:
            judge.note("axes", f"{len(self.axes)} axes; allowed: 1 to {MOST_AXES}")
        judge.unique(
            ((join("axes", axis.name), axis.name) for axis in self.axes), "each axis has its own"
        )
        judge.unique(
            ((f"keepouts[{i}].name", k.name) for i, k in enumerate(self.keepouts, start=1)),
            "each keep-out has its own",
        )
        self._judge_height(judge)
        self._judge_mechanics(judge)
        self._judge_twins(judge)
        judge.finish()

    @property
    def axis_names(self) -> tuple[str, ...]:
        """The names of the axes, in order."""
        return tuple(axis.name for axis in self.axes)

    @property
    def linear(self) -> tuple[bool, ...]:
        """Which axes are linear, in order."""
        return tuple(axis.kind == "linear" for axis in self.axes)

    @property
    def up_axis(self) -> str | None:
        """The name of the axis that points up or down, if there is one."""
        return None if self.up is None else self.up[1:]

    @property
    def up_sign(self) -> float:
        """1 where the up axis counts upward, -1 where it counts downward."""
        return -1.0 if self.up is not None and self.up[0] == "-" else 1.0

    @property
    def horizontal_axes(self) -> tuple[str, ...]:
        """The linear axes but the up axis, of which the first two span the plan."""
        return tuple(
            axis.name for axis in self.axes if axis.kind == "linear" and axis.name != self.up_axis
        )

    def axis(self, name: str) -> Axis:
        """Return the axis of a name.

        Raises
        ------
        KeyError
            If there is none.
        """
        for axis in self.axes:
            if axis.name == name:
                return axis
        raise KeyError(name)

    def lacks(self, column: str) -> str | None:
        """Return what is missing where no axis has such a column, a key of ``SETPOINT_UNITS``."""
        if column not in LOADS or any(axis.has_loads(column) for axis in self.axes):
            return None
        known = [axis.name for axis in self.axes if axis.mechanics is not None]
        if known and column == "torque":
            return f"the mechanics of {', '.join(known)} have no lead: give lead, and gear"
        linear = [axis.name for axis in self.axes if axis.kind == "linear"]
        if not linear and column == "force":
            return "no axis is linear; a rotary one has a torque only"
        names = linear if column == "force" else self.axis_names
        more = " with its lead" if column == "torque" else ""
        return f"no axis has mechanics: give [axes.{names[0]}.mechanics]{more}"

    def _judge_height(self, judge: Judge) -> None:
        linear = [axis.name for axis in self.axes if axis.kind == "linear"]
        allowed = tuple(f"{sign}{name}" for name in linear for sign in "+-")
        if self.up is not None and self.up not in allowed:
            choices = quoted(allowed) if allowed else "nothing, as no axis is linear"
            judge.note(
                "up", f"{shown(self.up)}; allowed: a sign and the name of a linear axis: {choices}"
            )
        for index, keepout in enumerate(self.keepouts, start=1):
            if self.up is None and keepout.top is not None:
                judge.note(
                    f"keepouts[{index}].top",
                    f"{shown(keepout.top)} mm; only on a machine with an up axis: give `up`",
                )

    def _judge_mechanics(self, judge: Judge) -> None:
        for index, column in enumerate(self.setpoints.columns, start=1):
            lack = self.lacks(column)
            if lack is not None:
                judge.note(f"setpoints.columns[{index}]", f"{shown(column)}; {lack}")
        for axis in self.axes:
            if axis.mechanics is None:
                continue
            place = join(join("axes", axis.name), "mechanics")
            friction, counterbalance = axis.mechanics.friction, axis.mechanics.counterbalance
            if friction and axis.name == self.up_axis:
                message = "the guides of the up axis bear no weight: give drag"
                judge.note(f"{place}.friction", f"{shown(friction)}; {message}")
            if counterbalance and axis.name != self.up_axis:
                message = "only on the up axis, as `up` names it"
                judge.note(f"{place}.counterbalance", f"{shown(counterbalance)} N; {message}")

    def _judge_twins(self, judge: Judge) -> None:
        """Judge the names of second drives, which head columns as those of axes do."""
        taken = list(self.axis_names)
        for axis in self.axes:
            twin = None if axis.drive is None else axis.drive.also
            if twin is None:
                continue
            if twin.name in taken:
                message = f"{shown(twin.name)} is a name already; a drive has its own"
                judge.note(f"{join('axes', axis.name)}.drive.also", message)
            taken.append(twin.name)


def judge_footprint(
    judge: Judge, place: str, radius: float | None, outline: Outline | None
) -> Outline | None:
    """Judge a radius and an outline, which exclude each other; return the outline, frozen.

    Parameters
    ----------
    judge : Judge
        Takes the faults.
    place : str
        Key path of the table that holds both.
    radius : float, optional
        Radius [mm].
    outline : tuple of pairs, optional
        Corners [mm].
    """
    judge.optional(join(place, "radius"), radius, EXTENT, "mm")
    if radius is not None and outline is not None:
        judge.note(place, "has radius and outline; at most one of them is allowed")
    return judge.outline(join(place, "outline"), outline)


def _judge_record(judge: Judge, place: str, value: object, kind: type) -> None:
    if value is not None and not isinstance(value, kind):
        judge.note(place, f"{shown(value)}; needed: {kind.__name__}")


def _judged_travel(judge: Judge, travel: tuple[float, float], unit: str) -> tuple[float, float]:
    try:
        low, high = travel
    except (TypeError, ValueError):
        judge.note("travel", f"{shown(travel)}; allowed: [lowest, highest] position in {unit}")
        return travel
    judge.number("travel[1]", low, POSITION, unit)
    judge.number("travel[2]", high, POSITION, unit)
    if is_number(low) and is_number(high) and low >= high:
        judge.note(
            "travel",
            f"[{shown(low)}, {shown(high)}] {unit}; the lowest position comes first, "
            "and the highest is above it",
        )
    return (low, high)
