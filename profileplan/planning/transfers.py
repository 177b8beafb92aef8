"""How does a tool get from pick to place: over what is in the way, or round it, the sooner?

The motion is the fastest through the free space that ``geometry.transfer`` builds. Up, across and
down by laws, the way across begun as early as the heights allow, is always at hand, and is taken
where the search finds nothing faster.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import shapely

from profileplan.geometry.cell import obstacles as obstacles_of
from profileplan.geometry.detour import detour
from profileplan.geometry.transfer import Blocked, Errand, edges, over
from profileplan.inputs import Move, Payload
from profileplan.motion import least_time as search
from profileplan.motion.laws import LAWS, Limits
from profileplan.motion.rounds import Bounds
from profileplan.motion.synchronisation import move, move_duration
from profileplan.motion.trajectory import Trajectory
from profileplan.planning.rides import ride
from profileplan.planning.steps import plan_move

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping, Sequence

    from profileplan.geometry.cell import Obstacle
    from profileplan.geometry.corridor import Corridor, Regions
    from profileplan.inputs import Transfer
    from profileplan.motion.least_time import Passage, Stretch
    from profileplan.motion.polynomials import Array
    from profileplan.planning.tasks import Motion, Task

NO_WAY = 1e-9
"""Way in plan [mm] below which a transfer goes up or down only."""

NUDGE = 1e-4
"""Share by which a limit is raised to find what the laws gain by it."""

TOUCH = 1e-6
"""Distance [mm] from free space at which a place counts as in it."""

ROUND_WORTH = 1.1
"""A transfer that takes so many times the least of its axes, or less, is not timed round."""

HALVINGS = 60
"""Times that an interval is halved to find when a height or a place is reached."""


@dataclass(frozen=True, eq=False)
class Frame:
    """What the columns of a corridor are on the machine.

    Parameters
    ----------
    start : (d,) array [mm or deg]
        Position where the motion begins.
    origin : (k,) array
        The same in the corridor's columns.
    to_machine : (k, d) array
        How far each axis of the machine goes with each column.
    owner : (4, k) array of int
        The machine's axis whose limit bounds each column: velocity, acceleration, ...
    """

    start: Array
    origin: Array
    to_machine: Array
    owner: Array

    def trajectory(self, axes: tuple[str, ...], reduced: Trajectory) -> Trajectory:
        """Return a motion of the corridor's columns as one of the machine's axes."""
        coefficients = reduced.coefficients @ self.to_machine
        coefficients[:, 0] += self.start - self.origin @ self.to_machine
        return Trajectory(axes, reduced.durations, coefficients)


@dataclass(frozen=True, eq=False)
class Carry:
    """A planned transfer, as a part of a ride.

    Parameters
    ----------
    frame : Frame
    corridor : Corridor
    bounds : Bounds
    passage : Passage, optional
        The motion through the free space; None: that of the laws is the fastest.
    laws : callable
        Up, across and down by laws, overlapped, on the machine's axes, under given limits; None
        where that does not clear what is in the way.
    limits : Limits of (d,) arrays
    duration, least : float [s]
        Of the motion, and a time that none can be shorter than.
    """

    frame: Frame
    corridor: Corridor
    bounds: Bounds
    passage: Passage | None
    laws: Callable[[Limits], Trajectory | None]
    limits: Limits
    duration: float
    least: float

    single = True
    """Where the laws are the fastest, nothing is left to be said."""

    def trajectory(self, axes: tuple[str, ...], *, duration: float) -> Trajectory:
        """Return the motion in a time [s], its own or a longer one."""
        if self.passage is None:
            motion = self.laws(self.limits)
            if motion is not None:
                return motion.stretched(duration) if duration > self.duration else motion
            message = "a transfer without a motion"
            raise ValueError(message)
        spline = self.passage.spline
        if duration > self.duration:
            spline = search.in_time(self.passage, self.corridor, self.bounds, duration=duration)
        names = tuple(str(column) for column in range(len(self.frame.origin)))
        return self.frame.trajectory(axes, spline.trajectory(names))

    def gains(self) -> Mapping[tuple[str, int], float]:
        """Return how much sooner it ends for each share that a bound is loosened [s]."""
        found: dict[tuple[str, int], float] = {}
        if self.passage is not None:
            for (quantity, column), gain in search.gains(self.passage).items():
                name = quantity, self._axis(quantity, column)
                found[name] = found.get(name, 0.0) + gain
            return found
        for row, quantity in enumerate(Limits._fields):
            for axis in np.flatnonzero(self.frame.to_machine.any(axis=0)):
                raised = [np.array(limit, dtype=np.float64) for limit in self.limits]
                raised[row][axis] *= 1 + NUDGE
                motion = self.laws(Limits(*raised))
                if motion is not None and np.isfinite(raised[row][axis]):
                    found[quantity, int(axis)] = (self.duration - motion.duration) / NUDGE
        return found

    def stretches(self) -> tuple[Stretch, ...]:
        """Return what holds it back where, in its own time; axes are columns or -1."""
        if self.passage is None:
            return ()
        return tuple(
            held._replace(axis=self._axis(held.quantity, held.axis))
            for held in search.stretches(self.passage)
        )

    def _axis(self, quantity: str, column: int) -> int:
        if column < 0:
            return -1
        return int(self.frame.owner[Limits._fields.index(quantity), column])


def payload_before(task: Task) -> Payload | None:
    """Return what hangs at the tool when a step begins."""
    steps = task.job.cycle.steps[: task.index]
    return next((step for step in reversed(steps) if isinstance(step, Payload)), None)


def plan_transfer(task: Task, step: Transfer) -> Motion:
    """Plan a transfer over, or round, what is in the way.

    Raises
    ------
    PlanError
        There is no way: the message names the keep-out, the height needed and the height there is.
    """
    if _errand(task, step, task.ends) is None:
        return plan_move(task, Move(step.to, law="trapezoidal", time=step.time))
    blocks = obstacles_of(task.job.machine, payload_before(task))
    return ride(task, [carry(task, step, task.ends, blocks)], time=step.time).motion


def carry(
    task: Task, step: Transfer, ends: tuple[Array, Array], obstacles: Sequence[Obstacle]
) -> Carry | Trajectory:
    """Return the fastest transfer between two positions.

    Raises
    ------
    PlanError
        There is no way.
    """
    errand = _errand(task, step, ends)
    if errand is None:
        law = LAWS[task.job.cycle.law]
        duration = float(move_duration(ends[1] - ends[0], task.limits, law))
        return move(task.axes, ends, task.limits, law=law, duration=duration)
    space = over(errand, obstacles)
    found = [] if isinstance(space, Blocked) else [_planned(task, errand, ends, obstacles, space)]
    if not isinstance(space, Blocked) or space.where == "on the way":
        found += _round(task, errand, ends, obstacles)
    carried = [one for one in found if one is not None]
    if not carried:
        message = _refusal(task, space) if isinstance(space, Blocked) else "no motion was found"
        raise task.error(task.step.kind, message)
    return min(carried, key=lambda one: one.duration)


def quick_duration(
    task: Task, step: Transfer, ends: tuple[Array, Array], obstacles: Sequence[Obstacle]
) -> float:
    """Return about how long a transfer takes [s], without a search; infinite: it is blocked.

    Over what is in the way it is the time by laws; round it, that of the slowest axis over all of
    its ways, as corners are hardly felt.
    """
    errand = _errand(task, step, ends)
    if errand is None:
        return _least(task, ends)
    space = over(errand, obstacles)
    by_laws = None
    if not isinstance(space, Blocked):
        by_laws = _overlapped(task, errand, ends, obstacles)
    elif space.where != "on the way":
        return np.inf
    names, plan = list(task.axes), task.job.machine.horizontal_axes[:2]
    found = [np.inf if by_laws is None else by_laws.duration]
    if found[0] <= ROUND_WORTH * _least(task, ends) or (
        by_laws is not None and not _may_go_round(errand, obstacles)
    ):
        return found[0]
    for way, _ in _ways_round(errand, obstacles):
        distance = np.abs(ends[1] - ends[0])
        legs = np.abs(np.diff(way.corners, axis=0)).sum(axis=0)
        distance[[names.index(name) for name in plan]] = legs[: len(plan)]
        if task.job.machine.up_axis is not None:
            top = max(np.concatenate(edges(way, obstacles))[:, 1].max(), way.height or -np.inf)
            rise = np.maximum(top - np.array([errand.start[2], errand.end[2]]), 0.0).sum()
            up = names.index(task.job.machine.up_axis)
            distance[up] = max(distance[up], rise)
        found.append(_least(task, (np.zeros(len(names)), distance)))
    return min(found)


def _may_go_round(errand: Errand, obstacles: Sequence[Obstacle]) -> bool:
    """Tell whether something is in the way and does not part the room from side to side."""
    if len(edges(errand, obstacles)[0]) == 1:
        return False
    ground = min(float(errand.start[2]), float(errand.end[2]))
    low = shapely.union_all([own.outline for own in obstacles if own.top > ground])
    parts = shapely.get_parts(shapely.difference(shapely.box(*errand.room.ravel()), low))
    ends = shapely.points([errand.start[:2], errand.end[:2]])
    return bool((shapely.distance(parts[:, np.newaxis], ends) <= TOUCH).all(axis=1).any())


def _errand(task: Task, step: Transfer, ends: tuple[Array, Array]) -> Errand | None:
    """Return what is to be done as geometry sees it, or None where nothing moves in plan."""
    machine, names = task.job.machine, list(task.axes)
    plan = [names.index(name) for name in machine.horizontal_axes[:2]]
    places = np.zeros((2, 3))
    places[:, : len(plan)] = np.array(ends)[:, plan]
    room = np.zeros((2, 2))
    for column, axis in enumerate(plan):
        room[:, column] = machine.axes[axis].travel
    roof = 0.0
    if machine.up_axis is not None:
        up = names.index(machine.up_axis)
        places[:, 2] = machine.up_sign * np.array(ends)[:, up]
        roof = max(machine.up_sign * end for end in machine.axes[up].travel)
    if np.hypot(*(places[1] - places[0])[:2]) <= NO_WAY:
        return None
    height = None if step.height is None else machine.up_sign * step.height
    return Errand(
        places[0],
        places[1],
        roof=roof,
        room=room,
        height=height,
        lift=step.lift,
        lower=step.lower,
        free=step.across == "axes",
    )


def _round(
    task: Task, errand: Errand, ends: tuple[Array, Array], obstacles: Sequence[Obstacle]
) -> list[Carry | None]:
    """Return the transfers round what cannot be gone over, and round all that is in the way."""
    ways = _ways_round(errand, obstacles)
    return [_planned(task, way, ends, obstacles, space) for way, space in ways]


def _ways_round(errand: Errand, obstacles: Sequence[Obstacle]) -> Iterator[tuple[Errand, Corridor]]:
    """Yield the ways round, with their free space."""
    roof = errand.roof if errand.height is None else min(errand.roof, errand.height)
    never = [obstacle for obstacle in obstacles if obstacle.top > roof]
    ground = min(float(errand.start[2]), float(errand.end[2]))
    low = [obstacle for obstacle in obstacles if obstacle.top > ground]
    for avoided in (never, low):
        if not avoided or (avoided is low and len(low) == len(never)):
            continue
        via = detour(errand.start[:2], errand.end[:2], avoided, room=errand.room)
        if not via:
            continue
        way = replace(errand, free=True, via=via)
        space = over(way, obstacles)
        if not isinstance(space, Blocked):
            yield way, space


def _refusal(task: Task, blocked: Blocked) -> str:
    """Return why there is no way, with the height needed and the height there is."""
    machine = task.job.machine
    axis = machine.up_axis or "height"
    sign = machine.up_sign
    there = f"{axis} = {sign * blocked.there:.6g} mm"
    if not blocked.obstacle:
        return f"the straight ways need {axis} = {sign * blocked.needed:.6g} mm; there is {there}"
    what = f"{blocked.obstacle} ({blocked.body} and margin)"
    if not np.isfinite(blocked.needed):
        needed = f"{what} may not be entered at any height"
        if blocked.where != "on the way":
            return f"{needed}, and {blocked.where} the tool is in it"
    else:
        needed = f"{what} needs {axis} = {sign * blocked.needed:.6g} mm"
    if blocked.where != "on the way":
        return f"{needed}, and {blocked.where} it is {there}"
    return f"{needed}, the highest there is is {there}, and there is no way round within travel"


def _planned(
    task: Task,
    errand: Errand,
    ends: tuple[Array, Array],
    obstacles: Sequence[Obstacle],
    space: Corridor,
) -> Carry | None:
    """Return the fastest motion through free space, or by laws, or None."""
    frame, corridor, bounds = _columns(task, errand, ends, space)
    passage = search.least_time(corridor, bounds)

    def laws(limits: Limits) -> Trajectory | None:
        return _overlapped(replace(task, limits=limits), errand, ends, obstacles)

    by_laws = None if errand.via else laws(task.limits)
    if by_laws is not None and (passage is None or by_laws.duration < passage.spline.duration):
        passage = None
    if by_laws is None and passage is None:
        return None
    known = by_laws if passage is None else passage.spline
    duration = known.duration if known is not None else 0.0
    least = min(_least(task, ends), duration)
    return Carry(frame, corridor, bounds, passage, laws, task.limits, duration, least)


class _Column(NamedTuple):
    """A column of a corridor: how far the machine's axes go with it, its limits, and their axes."""

    to_machine: Array
    limits: Array
    owner: Array


def _axis_column(task: Task, axis: int, sign: float = 1.0) -> _Column:
    own = np.array(task.limits)[:, axis]
    return _Column(sign * np.eye(len(task.axes))[axis], own, np.full(4, axis))


def _course(task: Task, errand: Errand, ends: tuple[Array, Array]) -> _Column:
    """Return the way in plan as a column: the axes go in proportion, the slowest bounds it."""
    names, machine = list(task.axes), task.job.machine
    plan = [names.index(name) for name in machine.horizontal_axes[:2]]
    along = np.zeros(len(names))
    along[plan] = (ends[1] - ends[0])[plan] / errand.length
    share = np.abs(along[plan])
    own = np.full((4, len(plan)), np.inf)
    np.divide(np.array(task.limits)[:, plan], share, out=own, where=share > 0)
    return _Column(along, own.min(axis=1), np.array(plan)[own.argmin(axis=1)])


def _frame(
    task: Task, errand: Errand, ends: tuple[Array, Array]
) -> tuple[list[_Column], list[int], list[int]]:
    """Return the columns, which of the free space's they are, and the axes that go freely."""
    names, machine = list(task.axes), task.job.machine
    plan = [names.index(name) for name in machine.horizontal_axes[:2]]
    up = None if machine.up_axis is None else names.index(machine.up_axis)
    if errand.free:
        columns, kept = [_axis_column(task, axis) for axis in plan], list(range(len(plan)))
    else:
        columns, kept = [_course(task, errand, ends)], [0]
    if up is not None:
        columns.append(_axis_column(task, up, machine.up_sign))
        kept.append(2 if errand.free else 1)
    others = [a for a in np.flatnonzero(ends[1] - ends[0]).tolist() if a not in (*plan, up)]
    return [*columns, *(_axis_column(task, axis) for axis in others)], kept, others


def _columns(
    task: Task, errand: Errand, ends: tuple[Array, Array], space: Corridor
) -> tuple[Frame, Corridor, Bounds]:
    """Return the corridor with columns for all axes that move, and what they are."""
    columns, kept, others = _frame(task, errand, ends)
    corridor = _widened(space, kept, ends[0][others], ends[1][others])
    velocity, acceleration, deceleration, jerk = np.array([own.limits for own in columns]).T
    bounds = Bounds(
        velocity,
        acceleration,
        deceleration,
        jerk,
        speed=np.full(len(corridor.regions), np.inf),
        linear=np.arange(len(columns)) < len(kept),
        low=-1 if task.job.machine.up_axis is None else len(kept) - 1,
    )
    frame = Frame(
        ends[0],
        corridor.points[0],
        np.array([column.to_machine for column in columns]),
        np.array([column.owner for column in columns]).T,
    )
    return frame, corridor, bounds


def _widened(space: Corridor, kept: list[int], first: Array, last: Array) -> Corridor:
    """Return a corridor of some columns, with more that go freely from a first to a last value."""
    more = len(first)
    legs = np.linalg.norm(np.diff(space.points, axis=0), axis=1)
    share = np.concatenate([[0.0], np.cumsum(legs)]) / max(float(legs.sum()), NO_WAY)
    extra = first + share[:, np.newaxis] * (last - first)
    if space.still[0].any():
        extra[:2] = first
    if space.still[1].any():
        extra[-2:] = last
    still = np.repeat(space.still[:, :1], more, axis=1)
    return replace(
        space,
        regions=_wide(space.regions, kept, more),
        gates=_wide(space.gates, kept, more),
        points=np.concatenate([space.points[:, kept], extra], axis=1),
        still=np.concatenate([space.still[:, kept], still], axis=1),
    )


def _wide(sets: Regions, kept: list[int], more: int) -> Regions:
    """Return sets with some of their columns, and more that are free in them."""
    rows = np.pad(sets.rows[:, :, kept], ((0, 0), (0, 0), (0, more)))
    # A row of which nothing is left always holds.
    bound = np.where((rows != 0).any(axis=2), sets.bound, 1.0)
    ball = np.zeros((len(sets), 0, len(kept) + more))
    return replace(sets, ball=ball, rows=rows, bound=bound)


def _overlapped(
    task: Task, errand: Errand, ends: tuple[Array, Array], obstacles: Sequence[Obstacle]
) -> Trajectory | None:
    """Return up, across and down by laws, the way across begun as early as the heights allow.

    The least start of the way across that has the tool above every height in time follows from the
    times at which the laws reach heights and places; the way down likewise, backwards.
    """
    columns, kept, others = _frame(task, replace(errand, free=False), ends)
    law = LAWS["trapezoidal"]
    limits = [Limits(*column.limits[:, np.newaxis]) for column in columns]
    alone = [np.array([errand.length]), *(np.array([(ends[1] - ends[0])[a]]) for a in others)]
    own = [limits[0], *limits[len(kept) :]]
    across = max(
        float(law.solve(way, each).duration.max()) for way, each in zip(alone, own, strict=True)
    )
    course = move(("s",), (np.zeros(1), alone[0]), own[0], law=law, duration=across)
    rising, falling = edges(errand, obstacles)
    low, high = float(errand.start[2]), float(errand.end[2])
    top = max(low, high, rising[:, 1].max(), falling[:, 1].max(), errand.height or -np.inf)
    begins, whole, parts = 0.0, across, [_Part(columns[0].to_machine, course, 0.0)]
    if len(kept) > 1:
        up, down = (
            move(("u",), (np.zeros(1), np.array([rise])), limits[1], law=law)
            for rise in (top - low, high - top)
        )
        begins = max(0.0, *(_when(up, h - low) - _when(course, at) for at, h in rising))
        ends_at = (
            _when(course, at) + down.duration - _when(down, h - top, last=True) for at, h in falling
        )
        whole = max(begins + across, up.duration + down.duration, *(begins + at for at in ends_at))
        toward = columns[1].to_machine
        parts += [_Part(toward, up, 0.0), _Part(toward, down, whole - down.duration)]
    elif top > max(low, high):
        return None
    parts[0] = parts[0]._replace(begins=begins)
    for column, way, each in zip(columns[len(kept) :], alone[1:], own[1:], strict=True):
        motion = move(("o",), (np.zeros(1), way), each, law=law, duration=across)
        parts.append(_Part(column.to_machine, motion, begins))
    return _played(task.axes, ends[0], parts, whole)


class _Part(NamedTuple):
    """A motion from 0 on, in which direction it takes the machine's axes, and when it begins."""

    to_machine: Array
    motion: Trajectory
    begins: float


def _when(motion: Trajectory, way: float, *, last: bool = False) -> float:
    """Return when a motion from 0 on, that does not turn back, has first gone a way [s].

    Or, with ``last``, when it has not yet gone more.
    """
    breaks = motion.at(motion.breaks)[1:, 0]
    sign = 1.0 if breaks[-1] >= 0 else -1.0
    reached = np.maximum.accumulate(sign * breaks)
    piece = int(np.searchsorted(reached[:-1], sign * way, side="right" if last else "left"))
    # One number at a time costs less without arrays.
    powers = (sign * motion.coefficients[piece, ::-1, 0]).tolist()
    early, late = 0.0, float(motion.durations[piece])
    for _ in range(HALVINGS):
        middle = 0.5 * (early + late)
        gone = 0.0
        for power in powers:
            gone = gone * middle + power
        if gone < sign * way or (last and gone <= sign * way):
            early = middle
        else:
            late = middle
    return float(motion.breaks[piece]) + (early if last else late)


def _played(
    axes: tuple[str, ...], start: Array, parts: Sequence[_Part], duration: float
) -> Trajectory:
    """Return motions that are played together, each from its beginning, as one."""
    padded = []
    for number, part in enumerate(parts):
        name = (str(number),)
        end = part.motion.at([part.motion.duration])[0]
        after = max(duration - part.begins - part.motion.duration, 0.0)
        before = Trajectory.rest(name, np.zeros(1), part.begins)
        moving = replace(part.motion, axes=name)
        padded.append(Trajectory.chain([before, moving, Trajectory.rest(name, end, after)]))
    both = Trajectory.stack(padded)
    coefficients = both.coefficients @ np.array([part.to_machine for part in parts])
    coefficients[:, 0] += start
    return Trajectory(axes, both.durations, coefficients)


def _least(task: Task, ends: tuple[Array, Array]) -> float:
    """Return the time of the slowest axis alone, which no transfer can be shorter than [s]."""
    return float(move_duration(ends[1] - ends[0], task.limits, LAWS["trapezoidal"]))
