"""Whether a machine and a cycle fit each other.

The places of faults are key paths of the cycle file, with steps counted from 1, or lines and
columns of the waypoint file that a point came from.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from types import MappingProxyType
from typing import TYPE_CHECKING

from profileplan.errors import Fault, InputError
from profileplan.inputs.cycle import (
    POINT_KEYS,
    STEP_KEYS,
    Cycle,
    Line,
    Move,
    PathStep,
    Signal,
    Step,
    Trace,
    Transfer,
    Wait,
    Waypoint,
)
from profileplan.inputs.machine import SETPOINT_UNITS
from profileplan.inputs.patterns import Written
from profileplan.inputs.rules import join, near, shown, tidy

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator, Mapping, Sequence
    from pathlib import Path

    from profileplan.inputs.machine import Axis, Machine
    from profileplan.inputs.patterns import Placed
    from profileplan.inputs.rules import Positions


NO_WAY = 1e-12
"""Distance [mm or deg] below which an axis is there already."""


@dataclass(frozen=True)
class Job:
    """A cycle on a machine, each checked against the other.

    Parameters
    ----------
    machine : Machine
        What does it.
    cycle : Cycle
        What is done.
    """

    machine: Machine
    cycle: Cycle

    def __post_init__(self) -> None:
        cycle = self.cycle
        faults = fit_faults(
            self.machine, cycle.start, cycle.steps, cycle.source, written=cycle.written
        )
        if not faults and _does_nothing(cycle):
            message = "nothing to do: no step moves an axis, and no step waits"
            faults = [Fault("", message, cycle.source)]
        if faults:
            raise InputError(tidy(faults))

    @property
    def files(self) -> tuple[Path, ...]:
        """The files that it is read from, each once: cycle, machine, waypoints, drawings."""
        named: list[Path | None] = [self.cycle.source, self.machine.source]
        named += [keepout.dxf for keepout in self.machine.keepouts]
        for step in self.cycle.steps:
            if isinstance(step, PathStep):
                named.append(step.file)
            elif isinstance(step, Trace):
                named.append(step.drawing)
        return tuple(dict.fromkeys(file for file in named if file is not None))

    def positions(
        self, ends: Mapping[int, Positions] = MappingProxyType({})
    ) -> tuple[tuple[float, ...], ...]:
        """Return where the axes are told to be between the steps.

        Parameters
        ----------
        ends : mapping
            Index of a step that follows a drawing → where it ends, by name of the axis.

        Returns
        -------
        tuple of tuples
            Entry 0 is the start, entry i + 1 the end of step i (counted from 0); each in the
            order of the machine's axes [mm or deg].
        """
        names = self.machine.axis_names
        now = dict(self.cycle.start)
        result = [tuple(now[name] for name in names)]
        for index, step in enumerate(self.cycle.steps):
            for stop in (*_stops(step), ends.get(index, {})):
                _go(now, stop)
            result.append(tuple(now[name] for name in names))
        return tuple(result)

    def points(self, index: int, start: Iterable[float]) -> tuple[tuple[float, ...], ...]:
        """Return the points that a step leads through, its end last: one for each that it names.

        Parameters
        ----------
        index : int
            The step, counted from 0.
        start : iterable of float
            Where the axes are before it, in their order [mm or deg].

        Returns
        -------
        tuple of tuples
            Each in the order of the machine's axes [mm or deg].
        """
        names = self.machine.axis_names
        now = dict(zip(names, map(float, start), strict=True))
        result = []
        for stop in _stops(self.cycle.steps[index]):
            _go(now, stop)
            result.append(tuple(now[name] for name in names))
        return tuple(result)

    def step_label(self, index: int) -> str:
        """Return a step's own name, or its kind and its number counted from 1.

        Parameters
        ----------
        index : int
            Counted from 0.
        """
        return self.cycle.step_label(index)


def fit_faults(
    machine: Machine,
    start: Positions,
    steps: Iterable[Step],
    file: Path | None,
    *,
    written: Sequence[Written] = (),
) -> list[Fault]:
    """Return what does not fit between a machine and a cycle's values, in their order.

    Parameters
    ----------
    machine : Machine
        What does it.
    start : mapping
        Axis name → position at the start [mm or deg].
    steps : iterable of Step
        What is done.
    file : Path, optional
        The cycle file.
    written : sequence of Written
        Where each step stands in the file, if the steps are not numbered as they are there.
    """
    axes = {axis.name: axis for axis in machine.axes}
    faults = [*_position_faults(axes, start, "start"), *_start_faults(axes, start)]
    # the steps of a group come once for each place: a place in the file keeps the rank of its first
    found: dict[str, list[Fault]] = {}
    outside: dict[Placed, _Outside] = {}
    for index, step in enumerate(steps):
        own = written[index] if written else Written(f"steps[{index + 1}]")
        here = found.setdefault(own.place, [])
        for fault in _step_faults(machine, axes, step):
            if placed := own.placed.get(fault.place):
                outside.setdefault(placed, _Outside(own, fault)).numbers.add(own.number)
            else:
                here.append(fault if fault.file else fault.within(own.place))
    for placed, places in outside.items():
        _add(found[places.first.place], places.told(placed, known=placed.axis in axes))
    faults += [fault for at_place in found.values() for fault in at_place]
    return [fault.within("", file) for fault in faults]


def _add(faults: list[Fault], new: Fault) -> None:
    """Add a fault, or its message to the fault that stands at its place already."""
    for index, fault in enumerate(faults):
        if fault.place == new.place:
            faults[index] = replace(fault, message=f"{fault.message}; {new.message}")
            return
    faults.append(new)


@dataclass(frozen=True)
class _Outside:
    """The places of a pattern that one axis of a machine cannot reach.

    Parameters
    ----------
    first : Written
        The first step that goes to one of them.
    fault : Fault
        The fault of that step, relative to it.
    numbers : set of int
        The numbers of all of them.
    """

    first: Written
    fault: Fault
    numbers: set[int] = field(default_factory=set)

    def told(self, placed: Placed, *, known: bool) -> Fault:
        """Return one fault for all the places.

        Parameters
        ----------
        placed : Placed
            What they have in common.
        known : bool
            Whether the machine has the axis.
        """
        place = f"{self.first.place}.{self.fault.place.split('.')[0]}.place"
        if not known:
            return Fault(place, f"{placed.axis} of {placed.pattern}: {self.fault.message}")
        offset = f" with {shown(placed.offset)} added" if placed.offset else ""
        total = f" ({len(self.numbers)} places in all)" if len(self.numbers) > 1 else ""
        message = f"place {self.first.number} of {placed.pattern}{offset}: {placed.axis} = "
        return Fault(place, f"{message}{self.fault.message}{total}")


def _start_faults(axes: Mapping[str, Axis], start: Positions) -> Iterator[Fault]:
    for name, axis in axes.items():
        if name not in start:
            message = f"missing; the start gives every axis a position, here {_travel(axis)}"
            yield Fault(join("start", name), message)


def _step_faults(machine: Machine, axes: Mapping[str, Axis], step: Step) -> Iterator[Fault]:
    """Yield the faults of a step; places are relative to it, or to the file that is named."""
    match step:
        case Move() | Transfer():
            yield from _position_faults(axes, step.to, step.kind)
        case Line():
            yield from _position_faults(axes, step.to, step.kind)
            yield from _speed_faults(axes, step.speed, step.to)
        case PathStep():
            yield from _point_faults(axes, step)
            named = [name for point in step.points for name in point.to]
            yield from _speed_faults(axes, step.speed, dict.fromkeys(named, 0.0))
        case Trace():
            yield from _position_faults(axes, step.at, "", STEP_KEYS[step.kind])
            yield from _lift_faults(machine, step)
            if step.with_signal is not None:
                yield from _signal_faults(axes, step.with_signal, "with_signal")
        case Signal():
            for output in step.states:
                yield from _signal_faults(axes, output, join("signal", output))
        case _:
            pass
    if isinstance(step, Transfer) and step.height is not None:
        yield from _height_faults(machine, step.height)


def _position_faults(
    axes: Mapping[str, Axis], positions: Positions, place: str, keys: tuple[str, ...] = ()
) -> Iterator[Fault]:
    """Yield the faults of positions; `keys` are other words that one may have meant."""
    for name, position in positions.items():
        if message := _position_fault(axes, name, position, keys):
            yield Fault(join(place, name), message)


def _position_fault(
    axes: Mapping[str, Axis], name: str, position: float, keys: tuple[str, ...] = ()
) -> str | None:
    axis = axes.get(name)
    if axis is None:
        hint = near(name, [*keys, *axes]) or f"; this machine has {', '.join(axes)}"
        return f"unknown axis{' or key' if keys else ''}{hint}"
    if not axis.travel[0] <= position <= axis.travel[1]:
        return f"{shown(position)} {axis.unit}; outside of the travel, {_travel(axis)}"
    return None


def _travel(axis: Axis) -> str:
    return f"{shown(axis.travel[0])} to {shown(axis.travel[1])} {axis.unit}"


def _point_faults(axes: Mapping[str, Axis], step: PathStep) -> Iterator[Fault]:
    """Yield the faults of a path's points, those of a file with line and column."""
    for index, point in enumerate(step.points, start=1):
        if step.file is None:
            yield from _position_faults(axes, point.to, f"path[{index}]", POINT_KEYS)
            continue
        for name, position in point.to.items():
            if message := _position_fault(axes, name, position, POINT_KEYS):
                # an unknown column is one fault, not one in each row
                place = line_and_column(point, name) if name in axes else f"column {name}"
                yield Fault(place, message, step.file)


def line_and_column(point: Waypoint, column: str) -> str:
    """Return the place of a value in a waypoint file.

    Parameters
    ----------
    point : Waypoint
        The point, with its line.
    column : str
        The heading.
    """
    return f"line {point.line}, column {column}" if point.line else f"column {column}"


def _speed_faults(
    axes: Mapping[str, Axis], speed: float | None, named: Positions
) -> Iterator[Fault]:
    known = [axes[name] for name in named if name in axes]
    if speed is not None and known and all(axis.kind == "rotary" for axis in known):
        names = ", ".join(axis.name for axis in known)
        yield Fault(
            "speed",
            f"{shown(speed)} mm/s; counts along linear axes, and only rotary ones are named: "
            f"{names}; leave it out",
        )


def _signal_faults(axes: Mapping[str, Axis], output: str, place: str) -> Iterator[Fault]:
    for axis in axes.values():
        if output in map(axis.column, SETPOINT_UNITS):
            message = f"{shown(output)} is a column of axis {axis.name} in the setpoint table"
            yield Fault(place, f"{message}; choose another name")


def _lift_faults(machine: Machine, step: Trace) -> Iterator[Fault]:
    """Yield what stands against raising the tool between outlines."""
    if not machine.horizontal_axes:
        yield Fault("trace", "this machine has no horizontal linear axis to follow a drawing with")
    if not step.lift:
        return
    if machine.up_axis is None:
        message = f"{shown(step.lift)} mm; this machine has no up axis: give `up` in its file"
        yield Fault("lift", message)
    elif machine.up_axis in step.at:
        axis = machine.axis(machine.up_axis)
        raised = step.at[machine.up_axis] + machine.up_sign * step.lift
        if not axis.travel[0] <= raised <= axis.travel[1]:
            message = f"{shown(step.lift)} mm raises {axis.name} to {shown(raised)} {axis.unit}"
            yield Fault("lift", f"{message}; outside of its travel, {_travel(axis)}")


def _height_faults(machine: Machine, height: float) -> Iterator[Fault]:
    if machine.up_axis is None:
        message = f"{shown(height)} mm; this machine has no up axis: give `up` in its file"
        yield Fault("height", message)
    else:
        axis = machine.axis(machine.up_axis)
        if not axis.travel[0] <= height <= axis.travel[1]:
            yield Fault(
                "height",
                f"{shown(height)} mm; outside of the travel of {axis.name}, {_travel(axis)}",
            )


def _go(now: dict[str, float], stop: Positions) -> None:
    """Change positions to those that a stop names; a smaller way than any machine's is none."""
    for name, position in stop.items():
        if abs(position - now[name]) >= NO_WAY:
            now[name] = position


def _stops(step: Step) -> tuple[Positions, ...]:
    """Return the positions that a step names, in order."""
    match step:
        case Move() | Line() | Transfer():
            return (step.to,)
        case PathStep():
            return tuple(point.to for point in step.points)
        case _:
            return ()


def _does_nothing(cycle: Cycle) -> bool:
    return not any(_waits(step) for step in cycle.steps) and not _moves(cycle)


def _waits(step: Step) -> bool:
    match step:
        case Wait():
            return step.seconds > 0
        case PathStep():
            return any(point.wait > 0 for point in step.points)
        case _:
            return False


def _moves(cycle: Cycle) -> bool:
    if any(
        isinstance(step, Trace) or (isinstance(step, Transfer) and step.lift > 0)
        for step in cycle.steps
    ):
        return True
    # the first position that differs from the start is a motion, whatever lies between
    return any(
        abs(position - cycle.start[name]) >= NO_WAY
        for step in cycle.steps
        for stop in _stops(step)
        for name, position in stop.items()
    )
