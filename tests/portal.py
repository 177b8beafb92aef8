"""A portal, its paths with a tolerance, and a second judge of them: what their tests share."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from itertools import pairwise
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
import shapely

import profileplan as pp

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.motion.polynomials import Array

    Points: TypeAlias = Sequence[tuple[float, ...]]

GAP = 5e-3
"""Share of a duration by which two searches for the same least time may differ."""

SLACK = 1e-6
"""Distance [mm or deg] by which a tolerance may be passed."""

SAMPLES = 4001

NAMES = "xyzc"


def machine(
    velocity: Sequence[float],
    acceleration: Sequence[float],
    jerk: Sequence[float | None] | None,
    *,
    slowing: float | None = None,
    rotary: str = "",
) -> pp.Machine:
    """Return a machine with much room; ``slowing`` is deceleration over acceleration."""
    axes = [
        pp.Axis(
            name,
            kind="rotary" if name in rotary else "linear",
            travel=(-1e5, 1e5),
            velocity=own_velocity,
            acceleration=own_acceleration,
            deceleration=None if slowing is None else slowing * own_acceleration,
            jerk=own_jerk,
        )
        for name, own_velocity, own_acceleration, own_jerk in zip(
            NAMES, velocity, acceleration, jerk or [None] * len(velocity), strict=False
        )
    ]
    return pp.Machine(name="portal", axes=tuple(axes))


PORTAL = machine([2000, 1500], [12000, 9000], [200000, 150000])
STEPPED: Points = ((0, 0), (100, 0), (100, 100), (300, 50))


def job(points: Points, step: pp.PathStep) -> pp.Cycle:
    """Return a cycle of one path, with its first point as the start."""
    return pp.Cycle(steps=(step,), start=dict(zip(NAMES, map(float, points[0]), strict=False)))


def through(points: Points) -> tuple[pp.Waypoint, ...]:
    """Return the points of a path, without the first."""
    return tuple(
        pp.Waypoint(dict(zip(NAMES, map(float, point), strict=False))) for point in points[1:]
    )


@cache
def planned(
    points: Points = STEPPED,
    tolerance: float = 2.0,
    of: pp.Machine = PORTAL,
    speed: float | None = None,
    time: float | None = None,
) -> pp.Plan:
    """Return the plan of a path; many tests ask for the same."""
    step = pp.PathStep(through(points), tolerance=tolerance, speed=speed, time=time)
    return pp.plan(of, job(points, step))


def raised(axis: int, quantity: str, factor: float) -> pp.Machine:
    """Return the portal with one limit of one axis raised, and all others kept."""
    axes = [replace(own, deceleration=own.acceleration) for own in PORTAL.axes]
    limits = axes[axis].limits._asdict()
    axes[axis] = replace(axes[axis], **{quantity: factor * limits[quantity]})
    return replace(PORTAL, axes=tuple(axes))


def failures(schedule: pp.Plan) -> list[str]:
    """Return the findings that are not met, as text."""
    return [
        f"{f.check} of {f.axis}: {f.value!r} of {f.limit!r} {f.unit}"
        for f in pp.check(schedule)
        if not f.ok
    ]


def spoilt(plan: pp.Plan, trajectory: pp.Trajectory) -> list[str]:
    """Return what is found when another motion is played than the one planned."""
    step = replace(plan.steps[0], trajectory=trajectory)
    return failures(pp.Plan(plan.job, (step,), ()))


def to_segments(positions: Array, points: Array) -> Array:
    """Return the distances from positions to every segment: (n, m)."""
    found = []
    for one, other in pairwise(points):
        way = other - one
        square = float(way @ way)
        share = np.clip((positions - one) @ way / square, 0, 1) if square else 0 * positions[:, 0]
        found.append(np.linalg.norm(positions - one - share[:, np.newaxis] * way, axis=1))
    return np.stack(found, axis=1)


def assert_within(plan: pp.Plan, points: Points, tolerance: float) -> None:
    """Compare motion and path both ways, on dense samples; in the plane by shapely.

    Between two samples the motion leaves its chord by at most a dt² / 8, which is allowed for at
    the corners; the motion's own distance needs no allowance, for samples lie on it.
    """
    drawn = np.array(points, dtype=np.float64)
    times = np.linspace(0, plan.duration, SAMPLES)
    sampled = plan.trajectory.at(times)[:, : drawn.shape[1]]
    if drawn.shape[1] == 2:
        line = shapely.LineString(drawn)
        away = shapely.distance(line, shapely.points(sampled))
        missed = shapely.distance(shapely.LineString(sampled), shapely.points(drawn))
    else:
        away = to_segments(sampled, drawn).min(axis=1)
        missed = to_segments(drawn, sampled).min(axis=1)
    assert away.max() <= tolerance + SLACK, f"motion {away.max()} mm from the path"
    peaks = plan.trajectory.peaks
    most = np.maximum(peaks.acceleration.value, peaks.deceleration.value)
    chord = float(np.linalg.norm(most)) * times[1] ** 2 / 8
    assert missed.max() <= tolerance + SLACK + chord, f"corner {missed.max()} mm from the motion"
