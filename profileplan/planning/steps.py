"""How are moves, lines and paths planned?"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from profileplan.motion.laws import LAWS, Limits
from profileplan.motion.synchronisation import (
    Way,
    line_durations,
    line_limits,
    lines,
    move,
    move_duration,
)
from profileplan.motion.trajectory import Trajectory
from profileplan.planning.rides import ride
from profileplan.planning.tasks import Motion, Probe, Task, held_by

if TYPE_CHECKING:
    from profileplan.inputs import Line, Move, PathStep
    from profileplan.motion.laws import Law
    from profileplan.motion.polynomials import Array


def plan_move(task: Task, step: Move) -> Motion:
    """Plan a move from point to point, every axis by its own law."""
    law = task.law(step.law)
    distance = task.ends[1] - task.ends[0]
    least = float(move_duration(distance, task.limits, law))
    duration = task.asked(least, step.time)
    together = duration if step.arrival == "together" else None
    trajectory = move(task.axes, task.ends, task.limits, law=law, duration=together)

    def durations(probe: Probe) -> Array:
        return move_duration(distance, probe.limits, law)

    return Motion(
        trajectory,
        held_by(task, durations, duration / least if least else 1.0, distance != 0),
        float(move_duration(distance, task.limits, LAWS["trapezoidal"])),
    )


def plan_line(task: Task, step: Line) -> Motion:
    """Plan a straight line in space."""
    speed = np.array([np.inf if step.speed is None else step.speed])
    return _straight(task, Way(np.stack(task.ends), speed, np.zeros(2), np.zeros(2)), step)


def plan_path(task: Task, step: PathStep) -> Motion:
    """Plan a path through points: inside its tolerance, or with a stop at every point."""
    points = np.array([task.ends[0], *task.job.points(task.index, task.ends[0])])
    bound = np.inf if step.speed is None else step.speed
    own = [np.inf if point.speed is None else point.speed for point in step.points]
    waits = np.array([0.0, *(point.wait for point in step.points)])
    near = [step.tolerance if p.tolerance is None else p.tolerance for p in step.points]
    way = Way(points, np.minimum(own, bound), waits, np.array([0.0, *near]))
    return _tolerant(task, way, step) if step.tolerance else _straight(task, way, step)


def _tolerant(task: Task, way: Way, step: PathStep) -> Motion:
    """Plan a path inside its tolerance: from each rest to the next in least time."""
    # scipy and the solver cost more start-up than all else: only such a path pays for them.
    from profileplan.motion.paths import Near, plan_run  # noqa: PLC0415

    parts = list(way.parts())
    travel = np.array([axis.travel for axis in task.job.machine.axes]).T
    runs = [
        plan_run(
            part,
            task.limits,
            linear=np.array(task.job.machine.linear),
            near=Near(
                tolerance=np.full(len(part.points) - 1, step.tolerance),
                angle_tolerance=step.angle_tolerance,
                at_points=part.near[1:-1],
                any=step.tolerance,
                travel=travel,
            ),
            progress=task.part_progress(number, len(parts)),
        )
        for number, part in enumerate(parts)
    ]
    rests = [Trajectory.rest(task.axes, part.points[0], float(part.waits[0])) for part in parts]
    end = Trajectory.rest(task.axes, way.points[-1], float(way.waits[-1]))
    ridden = [part for pair in zip(rests, runs, strict=True) for part in pair]
    return ride(task, [*ridden, end], time=step.time).motion


def _straight(task: Task, way: Way, step: Line | PathStep) -> Motion:
    """Plan straight lines from point to point with a stop at every point."""
    law, linear = task.law(step.law), task.job.machine.linear
    distance = np.diff(way.points, axis=0)
    bounds = line_limits(distance, task.limits, linear=linear, speed=way.speeds)
    durations = line_durations(distance, bounds, law)
    waits = float(way.waits.sum())
    moving = float(durations.sum())
    duration = task.asked(moving + waits, step.time)
    if moving:
        durations = durations * max((duration - waits) / moving, 1.0)
    else:
        durations = np.full(durations.size, (duration - waits) / durations.size)
    trajectory = lines(task.axes, way.points, bounds, law=law, durations=durations, waits=way.waits)

    def total(limits: Limits, speeds: Array, law: Law) -> float:
        by_line = line_limits(distance, limits, linear=linear, speed=speeds)
        return float(line_durations(distance, by_line, law).sum()) + waits

    def durations_under(probe: Probe) -> Array:
        return np.array(
            [
                total(Limits(*limits), way.speeds * speed, law)
                for limits, speed in zip(np.stack(probe.limits, 1), probe.speed, strict=True)
            ]
        )

    held = held_by(
        task,
        durations_under,
        duration / (moving + waits) if moving else 1.0,
        np.any(distance != 0, axis=0),
    )
    return Motion(trajectory, held, total(task.limits, way.speeds, LAWS["trapezoidal"]))
