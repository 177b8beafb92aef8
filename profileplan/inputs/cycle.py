"""What the machine is to do: the records of a cycle file.

Positions are in axis units (mm or deg), times in s, speeds in mm/s along the linear axes.
Every record judges its own values when it is made and raises `InputError`; the places are key
paths as in a cycle file, relative to the record. Steps and points are counted from 1.
"""

from __future__ import annotations

from dataclasses import KW_ONLY, dataclass, field
from types import MappingProxyType
from typing import TYPE_CHECKING, ClassVar, Literal, TypeAlias

from profileplan.inputs.machine import judge_footprint
from profileplan.inputs.patterns import Free, Part, Written
from profileplan.inputs.rules import (
    DURATION,
    EXTENT,
    LEAD,
    LIMIT,
    MASS,
    PAUSE,
    POSITION,
    SCALE,
    Judge,
    Outline,
    Positions,
    join,
    shown,
)

if TYPE_CHECKING:
    from collections.abc import Mapping
    from pathlib import Path

LawName: TypeAlias = Literal["trapezoidal", "quintic"]
LAW_NAMES: tuple[LawName, ...] = ("trapezoidal", "quintic")

Arrival: TypeAlias = Literal["together", "earliest"]
ARRIVALS: tuple[Arrival, ...] = ("together", "earliest")

Across: TypeAlias = Literal["line", "axes"]
ACROSS: tuple[Across, ...] = ("line", "axes")
Order: TypeAlias = Literal["drawn", "shortest"]
ORDERS: tuple[Order, ...] = ("drawn", "shortest")


@dataclass(frozen=True)
class Move:
    """Each axis goes to its place by its own law.

    Parameters
    ----------
    to : mapping
        Axis name → position [mm or deg]; axes not named stay.
    law : str, optional
        None: as the cycle says.
    arrival : {"together", "earliest"}
        Whether the axes arrive at the same time, or each as soon as it can.
    time : float, optional
        Duration asked for [s]; None: the least.
    name : str, optional
        What reports call the step.
    """

    kind: ClassVar[str] = "move"
    to: Positions
    _: KW_ONLY
    law: LawName | None = None
    arrival: Arrival = "together"
    time: float | None = None
    name: str | None = None

    def __post_init__(self) -> None:
        judge = _judge_step(self.name, law=self.law, time=self.time)
        object.__setattr__(self, "to", judge.positions(self.kind, self.to))
        judge.choice("arrival", self.arrival, ARRIVALS)
        if self.arrival == "earliest" and self.time is not None:
            judge.note("arrival", '"earliest" lets no axis take the time asked for; leave one out')
        judge.finish()


@dataclass(frozen=True)
class Line:
    """All axes go to a place along a straight line in space.

    Parameters
    ----------
    to : mapping
        Axis name → position [mm or deg]; axes not named stay.
    speed : float, optional
        Highest speed along the linear axes [mm/s].
    law, time, name : optional
        As for a move.
    """

    kind: ClassVar[str] = "line"
    to: Positions
    _: KW_ONLY
    speed: float | None = None
    law: LawName | None = None
    time: float | None = None
    name: str | None = None

    def __post_init__(self) -> None:
        judge = _judge_step(self.name, law=self.law, time=self.time)
        object.__setattr__(self, "to", judge.positions(self.kind, self.to))
        judge.optional("speed", self.speed, LIMIT, "mm/s")
        judge.finish()


@dataclass(frozen=True)
class Wait:
    """Nothing moves for `seconds`."""

    kind: ClassVar[str] = "wait"
    seconds: float
    name: str | None = None

    def __post_init__(self) -> None:
        judge = _judge_step(self.name)
        judge.number("wait", self.seconds, PAUSE, "s")
        judge.finish()


@dataclass(frozen=True)
class Signal:
    """Digital outputs take new states.

    Parameters
    ----------
    states : mapping
        Name of the output → its new state.
    lead : float
        How long before arrival they switch [s]; negative: after it.
    name : str, optional
        What reports call the step.
    """

    kind: ClassVar[str] = "signal"
    states: Mapping[str, bool]
    lead: float = 0.0
    name: str | None = None

    def __post_init__(self) -> None:
        judge = _judge_step(self.name)
        if not self.states:
            judge.note("signal", "names no output; at least one with true or false is needed")
        for output, state in self.states.items():
            judge.column(join("signal", output), output)
            judge.boolean(join("signal", output), state)
        object.__setattr__(self, "states", MappingProxyType(dict(self.states)))
        judge.number("lead", self.lead, LEAD, "s")
        judge.finish()


@dataclass(frozen=True)
class Payload:
    """What hangs at the tool from here on.

    Parameters
    ----------
    mass : float
        Mass [kg].
    radius, outline : optional
        Its footprint around the tool point [mm]; they exclude each other.
    below : float
        How far it reaches below the tool point [mm].
    name : str, optional
        What reports call the step.
    """

    kind: ClassVar[str] = "payload"
    mass: float = 0.0
    _: KW_ONLY
    radius: float | None = None
    outline: Outline | None = None
    below: float = 0.0
    name: str | None = None

    def __post_init__(self) -> None:
        judge = _judge_step(self.name)
        judge.number("payload.mass", self.mass, MASS, "kg")
        outline = judge_footprint(judge, self.kind, self.radius, self.outline)
        object.__setattr__(self, "outline", outline)
        judge.number("payload.below", self.below, EXTENT, "mm")
        judge.finish()


@dataclass(frozen=True)
class Waypoint:
    """One point of a path.

    Parameters
    ----------
    to : mapping
        Axis name → position [mm or deg]; axes not named stay.
    speed : float, optional
        Highest speed on the way to this point [mm/s].
    wait : float
        How long the motion stops here [s].
    tolerance : float, optional
        How near the motion passes [mm], at most as the path's own; 0: it stops here. None: as the
        path's own.
    name : str, optional
        What reports call the point.
    line : int, optional
        The line of the waypoint file it stands in.
    """

    to: Positions
    _: KW_ONLY
    speed: float | None = None
    wait: float = 0.0
    tolerance: float | None = None
    name: str | None = None
    line: int | None = field(default=None, compare=False)

    def __post_init__(self) -> None:
        judge = Judge()
        object.__setattr__(self, "to", judge.positions("", self.to))
        judge.optional("speed", self.speed, LIMIT, "mm/s")
        judge.number("wait", self.wait, PAUSE, "s")
        judge.optional("tolerance", self.tolerance, EXTENT, "mm")
        judge.optional_name("name", self.name)
        judge.finish()


@dataclass(frozen=True)
class PathStep:
    """Through points without stopping, the corners rounded within the tolerance.

    Parameters
    ----------
    points : tuple of Waypoint
        At least one.
    file : Path, optional
        The waypoint file they came from.
    tolerance : float
        Farthest distance between motion and path, both ways [mm]; 0: stop at every point.
    angle_tolerance : float
        The same for rotary axes [deg].
    speed : float, optional
        Highest speed along the linear axes [mm/s].
    time : float, optional
        Duration asked for [s]; None: the least.
    law, name : optional
        As for a move.
    """

    kind: ClassVar[str] = "path"
    points: tuple[Waypoint, ...]
    _: KW_ONLY
    file: Path | None = None
    tolerance: float = 0.0
    angle_tolerance: float = 0.5
    speed: float | None = None
    time: float | None = None
    law: LawName | None = None
    name: str | None = None

    def __post_init__(self) -> None:
        judge = _judge_step(self.name, law=self.law, time=self.time)
        points = judge.records("path", self.points, (Waypoint,))
        object.__setattr__(self, "points", points)
        if not points and not judge.faults:
            judge.note("path", "no points; at least one is needed")
        judge.number("tolerance", self.tolerance, EXTENT, "mm")
        judge.number("angle_tolerance", self.angle_tolerance, EXTENT, "deg")
        judge.optional("speed", self.speed, LIMIT, "mm/s")
        judge.finish()


@dataclass(frozen=True)
class Transfer:
    """Up, across and down.

    Parameters
    ----------
    to : mapping
        Axis name → position [mm or deg]; axes not named stay.
    height : float, optional
        Position of the up axis while across [mm]; None: as the clearance asks.
    lift, lower : float
        How far to rise straight before, and to sink straight after [mm].
    across : {"line", "axes"}
        Straight between the places, or each axis by itself.
    time : float, optional
        Duration asked for [s]; None: the least.
    name : str, optional
        What reports call the step.
    """

    kind: ClassVar[str] = "transfer"
    to: Positions
    _: KW_ONLY
    height: float | None = None
    lift: float = 0.0
    lower: float = 0.0
    across: Across = "line"
    time: float | None = None
    name: str | None = None

    def __post_init__(self) -> None:
        judge = _judge_step(self.name, time=self.time)
        object.__setattr__(self, "to", judge.positions(self.kind, self.to))
        judge.optional("height", self.height, POSITION, "mm")
        judge.number("lift", self.lift, EXTENT, "mm")
        judge.number("lower", self.lower, EXTENT, "mm")
        judge.choice("across", self.across, ACROSS)
        judge.finish()


@dataclass(frozen=True)
class Place:
    """Where a drawing lies: it is mirrored at its y axis, scaled, turned, and then shifted.

    Parameters
    ----------
    x, y : float
        Where its origin comes to lie on the horizontal axes [mm].
    turn : float
        Anticlockwise [deg].
    scale : float
    mirror : bool
    """

    x: float = 0.0
    y: float = 0.0
    turn: float = 0.0
    scale: float = 1.0
    mirror: bool = False

    def __post_init__(self) -> None:
        judge = Judge()
        judge.number("x", self.x, POSITION, "mm")
        judge.number("y", self.y, POSITION, "mm")
        judge.number("turn", self.turn, POSITION, "deg")
        judge.number("scale", self.scale, SCALE, "times")
        judge.boolean("mirror", self.mirror)
        judge.finish()


@dataclass(frozen=True)
class Trace:
    """Follow the outlines of a drawing.

    Parameters
    ----------
    drawing : Path
        The drawing.
    layers : tuple of str, optional
        The layers that are followed; None: all.
    place : Place
        Where the drawing lies.
    at : mapping
        Axis name → position while tracing [mm or deg]: the up axis has the working height.
    tolerance : float
        Farthest distance between motion and drawing, both ways [mm].
    speed : float, optional
        Highest speed along the linear axes [mm/s].
    lift : float
        Height raised between outlines [mm].
    with_signal : str, optional
        The output that is on while tracing.
    lead : float
        How long before an outline begins, and before it ends, the output switches [s].
    order : {"drawn", "shortest"}
        Outlines as drawn, or with the least travel between them.
    inside_first : bool
        Whether outlines inside of others come first.
    lead_in : float, optional
        Length of a straight way into each outline and out of it, along its direction there [mm].
    joining : float
        Ends of drawn pieces that are so near are joined [mm].
    drawn_height : bool
        Whether the height of the drawing is added to the working height.
    unit : str, optional
        The drawing's unit of length; None: as the drawing says.
    space : str
        "model", or the name of a layout.
    hidden, hatches : bool
        Whether hidden entities, and boundaries of hatches, are followed as well.
    time : float, optional
        Duration asked for [s]; None: the least.
    name : str, optional
        What reports call the step.
    """

    kind: ClassVar[str] = "trace"
    drawing: Path
    _: KW_ONLY
    layers: tuple[str, ...] | None = None
    place: Place = field(default_factory=Place)
    at: Positions = field(default_factory=dict)
    tolerance: float = 0.0
    speed: float | None = None
    lift: float = 0.0
    with_signal: str | None = None
    lead: float = 0.0
    order: Order = "drawn"
    inside_first: bool = False
    lead_in: float | None = None
    joining: float = 0.01
    drawn_height: bool = False
    unit: str | None = None
    space: str = "model"
    hidden: bool = False
    hatches: bool = False
    time: float | None = None
    name: str | None = None

    def __post_init__(self) -> None:
        judge = _judge_step(self.name, time=self.time)
        at = judge.positions("", self.at) if self.at else MappingProxyType({})
        object.__setattr__(self, "at", at)
        if self.layers is not None:
            object.__setattr__(self, "layers", judge.records("layers", self.layers, (str,)))
            if not self.layers:
                judge.note("layers", "names no layer; leave it out to follow all")
        judge.number("tolerance", self.tolerance, EXTENT, "mm")
        judge.optional("speed", self.speed, LIMIT, "mm/s")
        judge.number("lift", self.lift, EXTENT, "mm")
        if self.with_signal is not None:
            judge.column("with_signal", self.with_signal)
        judge.number("lead", self.lead, LEAD, "s")
        judge.choice("order", self.order, ORDERS)
        judge.optional("lead_in", self.lead_in, EXTENT, "mm")
        judge.number("joining", self.joining, EXTENT, "mm")
        for key in ("inside_first", "drawn_height", "hidden", "hatches"):
            judge.boolean(key, getattr(self, key))
        judge.finish()


Step: TypeAlias = Move | Line | Wait | Signal | Payload | PathStep | Transfer | Trace
STEP_TYPES = (Move, Line, Wait, Signal, Payload, PathStep, Transfer, Trace)

POINT_KEYS = ("speed", "wait", "tolerance", "name")
"""The keys that a point may have besides the names of axes."""

STEP_KEYS = {
    "move": ("law", "arrival", "time", "name"),
    "line": ("speed", "law", "time", "name"),
    "wait": ("name",),
    "signal": ("lead", "name"),
    "payload": ("name",),
    "path": ("tolerance", "angle_tolerance", "speed", "time", "law", "name"),
    "transfer": ("height", "lift", "lower", "across", "time", "name"),
    "trace": (
        *("layers", "place", "tolerance", "speed", "lift", "with_signal", "lead"),
        *("order", "inside_first", "lead_in", "joining", "drawn_height"),
        *("unit", "space", "hidden", "hatches", "time", "name"),
    ),
}
"""Kind of a step → the keys that a step of it may have in a cycle file, besides its kind."""


@dataclass(frozen=True)
class Cycle:
    """A sequence of steps.

    Parameters
    ----------
    steps : tuple of Step
        At least one.
    start : mapping
        Axis name → position at the start [mm or deg]; gives every axis.
    target : float, optional
        Cycle time to meet [s].
    law : str
        The law of steps that name none.
    machine : Path, optional
        The machine file that the cycle file names.
    source : Path, optional
        The file it was read from.
    parts : tuple of Part
        Which steps handle which part, in order; steps may belong to none.
    free : tuple of Free
        Parts whose places may be used in any order: a plan takes the shortest that it finds.
    written : tuple of Written
        Where each step stands in the file, if the steps are not numbered as they are there.
    """

    steps: tuple[Step, ...]
    start: Positions
    _: KW_ONLY
    target: float | None = None
    law: LawName = "trapezoidal"
    machine: Path | None = None
    source: Path | None = None
    parts: tuple[Part, ...] = ()
    free: tuple[Free, ...] = ()
    written: tuple[Written, ...] = field(default=(), compare=False, repr=False)

    def __post_init__(self) -> None:
        judge = Judge()
        steps = judge.records("steps", self.steps, STEP_TYPES)
        object.__setattr__(self, "steps", steps)
        if not steps and not judge.faults:
            judge.note("steps", "no steps; at least one is needed")
        if self.written and len(self.written) != len(self.steps):
            judge.note(
                "written", f"{len(self.written)} of {len(self.steps)} steps; give all or none"
            )
            object.__setattr__(self, "written", ())
        object.__setattr__(self, "start", judge.positions("start", self.start))
        judge.optional("target", self.target, DURATION, "s")
        judge.choice("law", self.law, LAW_NAMES)
        self._judge_labels(judge)
        self._judge_parts(judge)
        object.__setattr__(self, "free", judge.records("free", self.free, (Free,)))
        if not judge.faults:
            self._judge_free(judge)
        judge.finish()

    def step_label(self, index: int) -> str:
        """Return a step's own name, or its kind and its number counted from 1.

        Parameters
        ----------
        index : int
            Counted from 0.
        """
        step = self.steps[index]
        return step.name or f"{step.kind} {index + 1}"

    def step_place(self, index: int) -> str:
        """Return the key path of a step in the cycle file.

        Parameters
        ----------
        index : int
            Counted from 0.
        """
        return self.written[index].place if self.written else f"steps[{index + 1}]"

    def where(self, index: int, key: str) -> str:
        """Return the key path of a step's key in the cycle file, and the part that it is for.

        Parameters
        ----------
        index : int
            Counted from 0.
        key : str
            Of the step.
        """
        part = self.written[index].part if self.written else ""
        return f"{self.step_place(index)}.{key}{f' ({part})' if part else ''}"

    def _judge_parts(self, judge: Judge) -> None:
        parts = judge.records("parts", self.parts, (Part,))
        object.__setattr__(self, "parts", parts)
        judge.unique(
            ((f"parts[{i}].name", part.name) for i, part in enumerate(parts, start=1)),
            "names of parts are unique",
        )
        free = 0
        for number, part in enumerate(parts, start=1):
            if part.first < free:
                judge.note(f"parts[{number}].first", f"{part.first}; parts follow each other")
            elif part.last >= len(self.steps):
                message = f"{part.last}; there are {len(self.steps)} steps, counted from 0"
                judge.note(f"parts[{number}].last", message)
            free = part.last + 1

    def _judge_free(self, judge: Judge) -> None:
        begin = 0
        for number, free in enumerate(self.free, start=1):
            if free.judge(judge, f"free[{number}]", self.parts, begin=begin):
                own = self.parts[free.parts[0] : free.parts[1] + 1]
                if any(isinstance(s, Trace) for s in self.steps[own[0].first : own[-1].last + 1]):
                    judge.note(f"free[{number}].parts", "trace; only what goes to places is free")
            begin = free.parts[1] + 1

    def _judge_labels(self, judge: Judge) -> None:
        labels = [self.step_label(index) for index in range(len(self.steps))]
        first: dict[str, int] = {}
        for index, label in enumerate(labels):
            earlier = first.setdefault(label, index)
            if earlier != index:
                faulty = index if self.steps[index].name else earlier
                other = earlier if faulty == index else index
                judge.note(
                    f"{self.step_place(faulty)}.name",
                    f"{shown(label)} stands for {self.step_place(other)} already; "
                    "step names are unique",
                )


def _judge_step(
    name: str | None, *, law: LawName | None = None, time: float | None = None
) -> Judge:
    """Judge what steps have in common, and return the judge for the rest."""
    judge = Judge()
    judge.optional_name("name", name)
    if law is not None:
        judge.choice("law", law, LAW_NAMES)
    judge.optional("time", time, DURATION, "s")
    return judge
