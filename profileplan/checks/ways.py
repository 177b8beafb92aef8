"""Does a motion pass its points, stay inside its tolerance, and keep its speed?"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from profileplan.checks.findings import (
    PATH_TOLERANCE,
    REST_TOLERANCE,
    Finding,
    Worst,
    nearness,
    upper,
    worse,
)
from profileplan.geometry.corridor import tubes
from profileplan.inputs import Line, PathStep

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.geometry.corridor import Followed
    from profileplan.motion.polynomials import Array
    from profileplan.motion.schedule import Schedule, ScheduledStep
    from profileplan.motion.trajectory import Trajectory


def path_findings(schedule: Schedule) -> Iterator[Finding]:
    """Judge points and speeds of straight lines and paths, the worst of all steps."""
    missed: list[Worst] = []
    speeds: list[tuple[float, Worst, float]] = []
    rests: list[Worst] = []
    linear = schedule.job.machine.linear
    reached = max(map(nearness, schedule.job.machine.axes))
    for index, asked in enumerate(schedule.job.cycle.steps):
        if not isinstance(asked, Line | PathStep):
            continue
        step = schedule.steps[index]
        points, bounds = _points(schedule, index, asked)
        if isinstance(asked, PathStep) and asked.tolerance:
            followed = _followed(schedule, index, asked, bounds)
            yield _tolerances(step, asked, followed)
            bound = bounds[followed.region]
        else:
            distance, leads_to = _passes(step.trajectory, points, reached)
            missed.append(Worst(distance, step.end, step.name))
            bound = bounds[np.minimum(leads_to, len(points) - 1)]
        if isinstance(asked, PathStep) and any(point.wait for point in asked.points):
            rests.append(Worst(_rest_missing(step, asked, points, reached), step.end, step.name))
        speed = step.trajectory.speeds(linear)
        share = speed.value / bound
        worst = int(share.argmax())
        if np.isfinite(bound[worst]):
            time = step.start + float(speed.time[worst])
            found = Worst(float(speed.value[worst]), time, step.name)
            speeds.append((float(share[worst]), found, float(bound[worst])))
    if rests:
        yield upper(worse(*rests), "rest at points", REST_TOLERANCE, "s")
    if missed:
        yield upper(worse(*missed), "waypoints", reached, "mm or deg")
    if speeds:
        _, found, limit = max(speeds, key=lambda speed: speed[0])
        yield upper(found, "speed", limit, "mm/s")


def _rest_missing(step: ScheduledStep, asked: PathStep, points: Array, reached: float) -> float:
    """Return the most that a path's motion lacks of a rest at a point that asks for one [s]."""
    motion = step.trajectory
    still = np.abs(motion.coefficients[:, 1:]).max(axis=(1, 2)) == 0
    at = motion.coefficients[:, 0]
    lacking, piece = 0.0, 0
    for point, wanted in zip(points, asked.points, strict=True):
        if not wanted.wait:
            continue
        rest = 0.0
        while piece < still.size and rest < wanted.wait - REST_TOLERANCE:
            if still[piece] and np.abs(at[piece] - point).max() <= reached:
                rest += float(motion.durations[piece])
            piece += 1
        lacking = max(lacking, wanted.wait - rest)
    return lacking


def _near_points(asked: PathStep) -> Array:
    """Return how near a path's motion passes its inner points: (m - 1,) [mm]."""
    own = [np.inf if point.tolerance is None else point.tolerance for point in asked.points[:-1]]
    return np.clip(own, PATH_TOLERANCE, asked.tolerance)


def _followed(schedule: Schedule, index: int, asked: PathStep, speeds: Array) -> Followed:
    """Follow a path step's motion through the tubes round its segments, at speeds allowed there."""
    start = schedule.positions[index]
    points = np.array([start, *schedule.job.points(index, start)])
    # A point that stands where the last one did makes a segment of no length: a ball.
    corridor = tubes(
        points,
        tolerance=asked.tolerance,
        linear=schedule.job.machine.linear,
        angle_tolerance=asked.angle_tolerance,
        gate_tolerance=_near_points(asked),
    )
    trajectory = schedule.steps[index].trajectory
    found = trajectory.speeds(schedule.job.machine.linear).value
    return corridor.follow(trajectory.hulls(), (found, speeds))


def _tolerances(step: ScheduledStep, asked: PathStep, followed: Followed) -> Finding:
    """Judge a path's tolerance both ways: motion to path, and the path's corners to the motion.

    Rotary axes count by their own tolerance, and points by theirs: the share that is used of it.
    """
    worst = Worst(followed.out * asked.tolerance, step.end, step.name)
    finding = upper(worst, "tolerance", asked.tolerance, "mm")
    return replace(finding, ok=finding.margin >= -PATH_TOLERANCE)


def _points(schedule: Schedule, index: int, asked: Line | PathStep) -> tuple[Array, Array]:
    """Return the points that a step leads through, (m, d), and the speeds allowed, (m,)."""
    bound = np.inf if asked.speed is None else asked.speed
    points = np.array(schedule.job.points(index, schedule.positions[index]))
    if isinstance(asked, Line):
        return points, np.array([bound])
    own = [np.inf if point.speed is None else point.speed for point in asked.points]
    return points, np.minimum(own, bound)


def _passes(trajectory: Trajectory, points: Array, near: float) -> tuple[float, Array]:
    """Follow a motion past points, in order, that it must reach at ends of its pieces.

    Returns
    -------
    distance : float [mm or deg]
        From the point farthest from the motion's ends of pieces, in the order passed.
    leads_to : (n,) array
        Index of the point that each piece leads to; len(points) after the last.
    """
    ends = trajectory.at(trajectory.breaks)
    leads_to = np.empty(len(ends) - 1, dtype=int)
    reached, distance = 0, 0.0
    for index, end in enumerate(ends):
        while reached < len(points):
            away = float(np.abs(end - points[reached]).max())
            if away > near:
                break
            reached, distance = reached + 1, max(distance, away)
        if index < leads_to.size:
            leads_to[index] = reached
    if reached < len(points):
        away = np.abs(ends - points[reached]).max(axis=-1).min()
        distance = max(distance, float(away), 2 * near)
    return distance, leads_to
