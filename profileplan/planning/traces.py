"""How is a drawing traced: from outline to outline, and along each in least time?

Between outlines the tool is carried as by a transfer: straight up by the lift, across, and down.
"""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from itertools import pairwise
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.geometry.cell import obstacles
from profileplan.geometry.sleeve import Sleeve, sleeve
from profileplan.geometry.trace import traced
from profileplan.inputs import Transfer
from profileplan.motion.laws import LAWS, Limits
from profileplan.motion.paths import Near, plan_run, stopping_run
from profileplan.motion.schedule import Tracing
from profileplan.motion.synchronisation import Way, move, move_duration
from profileplan.planning.rides import ride
from profileplan.planning.tasks import Motion, held_by
from profileplan.planning.transfers import Carry, carry, payload_before

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.geometry.cell import Obstacle
    from profileplan.geometry.order import Travel
    from profileplan.geometry.shapes import Outline
    from profileplan.geometry.trace import Traced
    from profileplan.inputs import Job, Trace
    from profileplan.motion.paths import Run
    from profileplan.motion.polynomials import Array
    from profileplan.motion.trajectory import Trajectory
    from profileplan.planning.tasks import Probe, Task


def read_trace(job: Job, step: Trace, limits: Limits, now: Array) -> Traced:
    """Return what a step follows of its drawing, from positions (d,) on.

    Raises
    ------
    InputError
        The drawing cannot be read or followed.
    """
    positions = dict(zip(job.machine.axis_names, now.tolist(), strict=True))
    travel = _travel(job, step, limits)
    return traced(step, job.machine, now=positions, travel=travel)


def _travel(job: Job, step: Trace, limits: Limits) -> Travel:
    """Return the times of the ways between points in plan, lifted and lowered."""
    law = LAWS[job.cycle.law]
    names = job.machine.axis_names
    plan = [names.index(name) for name in job.machine.horizontal_axes[:2]]
    lifting = 0.0
    if step.lift and job.machine.up_axis is not None:
        column = names.index(job.machine.up_axis)
        alone = Limits(*(np.asarray(limit)[column] for limit in limits))
        lifting = 2 * float(law.solve(np.array(step.lift), alone).duration)
    across = Limits(*(np.asarray(limit)[plan] for limit in limits))

    def times(start: Array, end: Array) -> Array:
        distance = (end - start)[:, : len(plan)]
        return move_duration(distance, across, law) + lifting

    return times


class _Cell(NamedTuple):
    """Where drawn points are on the machine: base (d,), columns of x, y and up, and its sign."""

    base: Array
    plan: list[int]
    up: int | None
    sign: float

    def at(self, points: Array) -> Array:
        """Return positions of drawn points, (n, 3) → (n, d)."""
        found = np.repeat(self.base[np.newaxis], len(points), axis=0)
        found[:, self.plan] = points[:, : len(self.plan)]
        if self.up is not None:
            found[:, self.up] += self.sign * points[:, 2]
        return found

    def lifted(self, position: Array, height: float) -> Array:
        """Return a position raised to a height above the working height, if it is not higher."""
        raised = position.copy()
        if self.up is not None and height:
            least = self.base[self.up] + self.sign * height
            raised[self.up] = self.sign * max(self.sign * position[self.up], self.sign * least)
        return raised


def plan_trace(task: Task, step: Trace, drawn: Traced) -> Motion:
    """Plan the tracing of outlines, in their order."""
    cell = _cell(task, step)
    runs = _runs(task, step, drawn, cell)
    parts: list[Run | Carry | Trajectory] = []
    ways: list[tuple[Array, Array]] = []
    now, places = task.ends[0], []
    blocks = obstacles(task.job.machine, payload_before(task)) if task.job.machine.keepouts else ()
    for run in runs:
        then = run.way.points[0]
        carried = _carried(task, step, (now, then), cell, blocks)
        if carried is None:
            way = list(pairwise(_between(cell, now, then, step.lift)))
            ways += way
            parts += [_moved(task, ends) for ends in way]
        else:
            parts.append(carried)
        places.append(len(parts))
        parts.append(run)
        now = run.way.points[-1]
    raised = cell.lifted(now, step.lift)
    if (raised != now).any():
        ways.append((now, raised))
        parts.append(_moved(task, ways[-1]))
    distance = np.array([end - start for start, end in ways]).reshape(-1, len(now))

    law = LAWS[task.job.cycle.law]

    def total(probe: Probe) -> Array:
        by_way = Limits(*(np.asarray(limit)[:, np.newaxis] for limit in probe.limits))
        whole: Array = move_duration(distance[np.newaxis], by_way, law).sum(axis=1)
        return whole

    held = held_by(task, total, 1.0, np.any(distance != 0, axis=0)) if len(ways) else ()
    saves = {(limit.quantity, limit.axis): limit.saves for limit in held}
    ridden = ride(task, parts, time=step.time, saves=saves)
    starts = [ridden.starts[place] for place in places]
    return replace(ridden.motion, tracing=_tracing(runs, starts, ridden.slower, drawn))


def _carried(
    task: Task,
    step: Trace,
    ends: tuple[Array, Array],
    cell: _Cell,
    blocks: Sequence[Obstacle],
) -> Carry | Trajectory | None:
    """Return the transfer from one outline to the next, or None where nothing is lifted.

    It goes straight up by the lift and down again, so that nothing is touched that was laid.
    """
    now, then = ends
    if cell.up is None or not step.lift or (now[cell.plan] == then[cell.plan]).all():
        return None
    height = cell.lifted(now, step.lift)[cell.up]
    lift, lower = (float(cell.sign * (height - place[cell.up])) for place in ends)
    lower = min(lower, step.lift)
    to = dict(zip(task.axes, then.tolist(), strict=True))
    return carry(task, Transfer(to, lift=lift, lower=lower), ends, blocks)


def _cell(task: Task, step: Trace) -> _Cell:
    machine, names = task.job.machine, task.axes
    base = task.ends[0].copy()
    for name, position in step.at.items():
        base[names.index(name)] = position
    up = None if machine.up_axis is None else names.index(machine.up_axis)
    plan = [names.index(name) for name in machine.horizontal_axes[:2]]
    return _Cell(base, plan, up, machine.up_sign)


def _between(cell: _Cell, now: Array, then: Array, lift: float) -> list[Array]:
    """Return the positions from one place to another: lifted, across, lowered."""
    height = cell.lifted(now, lift)
    across = then.copy()
    if cell.up is not None and lift:
        across[cell.up] = height[cell.up]
    stops = [now]
    for stop in (height, across, then):
        if (stop != stops[-1]).any():
            stops.append(stop)
    return stops


def _moved(task: Task, ends: tuple[Array, Array]) -> Trajectory:
    law = LAWS[task.job.cycle.law]
    duration = float(move_duration(ends[1] - ends[0], task.limits, law))
    return move(task.axes, ends, task.limits, law=law, duration=duration)


def _runs(task: Task, step: Trace, drawn: Traced, cell: _Cell) -> list[Run]:
    """Plan the motion along each outline; outlines do not depend on each other."""
    done = 0
    report = task.progress

    def planned(outline: Outline) -> Run:
        return _run(task, step, drawn, (cell, outline))

    runs = []
    with ThreadPoolExecutor(os.cpu_count()) as pool:
        for run in pool.map(planned, drawn.outlines):
            runs.append(run)
            done += 1
            if report:
                report(done / len(drawn.outlines))
    return runs


def _run(task: Task, step: Trace, drawn: Traced, where: tuple[_Cell, Outline]) -> Run:
    """Plan the motion along an outline."""
    cell, outline = where
    linear = np.array(task.job.machine.linear)
    speed = np.inf if step.speed is None else step.speed
    if not step.tolerance:
        points = cell.at(np.concatenate([outline.pieces.start, outline.pieces.end[-1:]]))
        return stopping_run(_way(points, speed), task.limits, linear=linear)
    legs = _legs(outline, step.tolerance - drawn.error, led=drawn.led)
    near = Near(
        tolerance=legs.radius,
        angle_tolerance=0.0,
        at_points=np.minimum(legs.radius[1:], legs.radius[:-1]),
        any=step.tolerance + legs.apart,
        travel=np.array([axis.travel for axis in task.job.machine.axes]).T,
    )
    return plan_run(_way(cell.at(legs.points), speed), task.limits, linear=linear, near=near)


def _way(points: Array, speed: float) -> Way:
    count = len(points)
    return Way(points, np.full(count - 1, speed), np.zeros(count), np.zeros(count))


def _legs(outline: Outline, tolerance: float, *, led: bool) -> Sleeve:
    """Return the legs along an outline; its ways in and out have legs of their own."""
    own = outline.pieces
    cuts = [0, 1, len(own) - 1, len(own)] if led else [0, len(own)]
    parts = [
        sleeve(own.chosen(slice(one, other)), tolerance=tolerance) for one, other in pairwise(cuts)
    ]
    return Sleeve(
        np.concatenate([parts[0].points[:1], *(part.points[1:] for part in parts)]),
        np.concatenate([part.radius for part in parts]),
        max(part.apart for part in parts),
    )


def _tracing(
    runs: Sequence[Run], starts: Sequence[float], slower: float, drawn: Traced
) -> tuple[Tracing, ...]:
    """Return when each outline is followed, in the time of the step."""
    inner = (1, -2) if drawn.led else (0, -1)
    return tuple(
        Tracing(*(start + slower * float(run.passed()[point]) for point in (0, *inner, -1)))
        for run, start in zip(runs, starts, strict=True)
    )
