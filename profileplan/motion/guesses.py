"""With what motions does the search for the least time begin?

With the points of a corridor, and spans guessed in two ways: as for a stop at every gate, and as
for a point that passes the gates on arcs at the speed which the lateral acceleration allows. Their
positions are near those of the corridor's points; limits and regions are kept only after a refit.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.motion.laws import LAWS, Limits
from profileplan.motion.rounds import held_points
from profileplan.motion.spline import Group, Spline
from profileplan.motion.synchronisation import line_limits

if TYPE_CHECKING:
    from profileplan.geometry.corridor import Corridor
    from profileplan.motion.polynomials import Array, Indices
    from profileplan.motion.rounds import Bounds

INTERVALS = 6
"""Least number of intervals of a region: as many as a start and a stop need, and some."""

WHOLE = 20
"""Least number of intervals of a corridor: in one region several axes may start and stop."""

MOST_FEW = 3
"""Most intervals of a region of a long chain that is passed much sooner than a stop in it takes."""

LONG_CHAIN = 12
"""Regions from which on the number of intervals sets the cost."""

PASSED_SOON = 3.0
"""How many times longer than passing a region a start and a stop in it take, for few intervals."""

SMALLEST_SPAN = 0.03
"""Least span of a start, as a share of its region's duration."""

FELT = 1.0
"""How many times longer than a halt takes it is felt before and after."""

MARGINS = (4, 60)
"""Fewest and most regions beside a stop that it is taken to change."""

STRAIGHT = 1e-6
"""Half angle of a corner [rad] below which it counts as straight on, or as straight back."""


def guesses(corridor: Corridor, bounds: Bounds) -> list[Spline]:
    """Return splines along the points of a corridor, to begin the search with."""
    own = _own_limits(corridor, bounds)
    moves = LAWS["trapezoidal"].solve(np.ones(len(corridor.regions)), own)
    times = _passing_times(corridor, bounds, own)
    counts = _counts(moves.duration, times, own, bounds)
    stopping = [
        _spans(phases, int(count)) for phases, count in zip(moves.phases, counts, strict=True)
    ]
    passing = [
        np.full(spans.size, time / spans.size) for spans, time in zip(stopping, times, strict=True)
    ]
    return [_along(corridor, bounds, spans) for spans in (stopping, passing)]


class Extent(NamedTuple):
    """How much work the regions of a corridor make, and how far a stop among them is felt.

    intervals : (m,) array of int, those of the guesses; margin : regions beside a stop.
    """

    intervals: Indices
    margin: int


def extent(corridor: Corridor, bounds: Bounds) -> Extent:
    """Return the number of intervals in each region, and the regions that a stop changes."""
    own = _own_limits(corridor, bounds)
    stopping = LAWS["trapezoidal"].solve(np.ones(len(corridor.regions)), own).duration
    passing = _passing_times(corridor, bounds, own)
    halt = bounds.velocity / bounds.deceleration + bounds.acceleration / bounds.jerk
    margin = FELT * float(halt.max()) / float(np.median(passing))
    return Extent(_counts(stopping, passing, own, bounds), math.ceil(np.clip(margin, *MARGINS)))


def _own_limits(corridor: Corridor, bounds: Bounds) -> Limits:
    """Return the limits along the way through each region, in shares of it."""
    limits = Limits(bounds.velocity, bounds.acceleration, bounds.deceleration, bounds.jerk)
    way = np.diff(corridor.points, axis=0)
    return line_limits(way, limits, linear=bounds.linear.tolist(), speed=bounds.speed)


def _counts(stopping: Array, passing: Array, own: Limits, bounds: Bounds) -> Indices:
    """Return how many intervals regions have, from the times of stops in them and of passing them.

    In a long chain a region that is passed much sooner than a stop in it would take needs few, and
    the fewer the shorter it takes against the time in which an acceleration is built up.
    """
    counts = np.full(stopping.size, max(INTERVALS, math.ceil(WHOLE / stopping.size)))
    if stopping.size < LONG_CHAIN:
        return counts
    built_up = float((bounds.acceleration / bounds.jerk).min())
    few = np.full(stopping.size, MOST_FEW)
    if built_up > 0:
        few = np.clip(np.ceil(MOST_FEW * passing / built_up), 1, MOST_FEW).astype(np.intp)
    few[:2] = few[-2:] = MOST_FEW
    short = stopping > PASSED_SOON / np.asarray(own.velocity)
    counts[short] = few[short]
    return counts


def _along(corridor: Corridor, bounds: Bounds, spans: list[Array]) -> Spline:
    """Return the spline along the points of a corridor with some spans in each region."""
    way = np.diff(corridor.points, axis=0)
    region = np.repeat(np.arange(len(way)), [len(own) for own in spans])
    joined = np.concatenate(spans)
    # Where each interval's middle lies on the way through its region.
    durations = np.array([own.sum() for own in spans])
    first = np.concatenate([[0.0], np.cumsum(durations)])[region]
    middle = (np.cumsum(joined) - 0.5 * joined - first) / durations[region]
    along = corridor.points[region] + np.clip(middle, 0, 1)[:, np.newaxis] * way[region]
    groups = []
    for degree, axes in _degrees(bounds):
        points = np.empty((joined.size + degree, axes.size))
        points[degree:-degree] = along[degree - 1 : joined.size - 1][:, axes]
        points[:degree], points[-degree:] = corridor.points[0, axes], corridor.points[-1, axes]
        groups.append(Group(degree, axes, points))
    spline = Spline(joined, region, tuple(groups))
    for group in groups:
        held = held_points(spline, group, corridor)
        half = len(held) // 2
        # What stands still does so where it begins, or where it ends.
        group.points[:half][held[:half]] = np.broadcast_to(
            corridor.points[0, group.axes], group.points[:half].shape
        )[held[:half]]
        group.points[half:][held[half:]] = np.broadcast_to(
            corridor.points[-1, group.axes], group.points[half:].shape
        )[held[half:]]
    return spline


def _degrees(bounds: Bounds) -> list[tuple[int, Indices]]:
    """Return degree 2, whose acceleration jumps, where no axis has a jerk limit, else 3.

    One for all axes: only then can they move in proportion, as a thin tube asks. The acceleration
    of an axis without jerk limit then changes within an interval, which may become short.
    """
    degree = 3 if np.isfinite(bounds.jerk).any() else 2
    return [(degree, np.arange(bounds.jerk.size))]


def _spans(phases: Array, count: int) -> Array:
    """Return spans that begin and end with the phases of a law, at least so many."""
    whole = float(phases.sum())
    if count <= MOST_FEW:
        return np.full(count, whole / count)
    spans = phases[phases > 1e-9 * whole].tolist()
    while len(spans) < count:
        longest = int(np.argmax(spans))
        spans[longest : longest + 1] = [0.5 * spans[longest]] * 2
    bounded = np.maximum(spans, SMALLEST_SPAN * whole)
    scaled: Array = bounded * (whole / bounded.sum())
    return scaled


def _passing_times(corridor: Corridor, bounds: Bounds, own: Limits) -> Array:
    """Return how long a point takes for each region that passes the gates on arcs [s].

    An arc of radius R that rounds a corner of half angle h leaves it by R (1 / cos h - 1), within
    the gate, and begins R tan h before it, at most half a segment. Lateral acceleration v^2 / R and
    jerk v^3 / R^2 bound its speed; between arcs the speed changes at constant acceleration.
    """
    way = np.diff(corridor.points, axis=0)[:, bounds.linear]
    length = np.linalg.norm(way, axis=1)
    # Limits are shares of the way; where nothing moves but rotary axes the way is counted as 1.
    counted = np.where(length > 0, length, 1.0)
    velocity, up, down, jerk = (np.asarray(limit) * counted for limit in own)
    acceleration = np.minimum(np.minimum(up, down), np.cbrt(4 * counted * jerk**2))
    course = way / counted[:, np.newaxis]
    cosine = np.clip((course[1:] * course[:-1]).sum(axis=1), -1.0, 1.0)
    half = np.clip(0.5 * np.arccos(cosine), STRAIGHT, 0.5 * np.pi - STRAIGHT)
    inner = corridor.gates.ball
    room = 1 / np.abs(inner).max(axis=(1, 2), initial=1e-9)
    near = 0.5 * np.minimum(counted[1:], counted[:-1])
    radius = np.minimum(room / (1 / np.cos(half) - 1), near / np.tan(half))
    lateral = np.minimum(acceleration[1:], acceleration[:-1])
    sideways = np.minimum(jerk[1:], jerk[:-1])
    passed = np.minimum(np.sqrt(lateral * radius), np.cbrt(sideways * radius**2))
    passed = np.minimum(passed, np.minimum(velocity[1:], velocity[:-1]))
    speeds = [0.0, *passed, 0.0]
    gained = 2 * acceleration * counted
    for index, gain in enumerate(gained):
        speeds[index + 1] = min(speeds[index + 1], math.sqrt(speeds[index] ** 2 + gain))
    for index in range(len(gained) - 1, -1, -1):
        speeds[index] = min(speeds[index], math.sqrt(speeds[index + 1] ** 2 + gained[index]))
    first, last = np.array(speeds[:-1]), np.array(speeds[1:])
    top = np.minimum(np.sqrt(0.5 * (first**2 + last**2 + gained)), velocity)
    changing = counted - (top**2 - 0.5 * (first**2 + last**2)) / acceleration
    times: Array = (2 * top - first - last) / acceleration + np.maximum(changing, 0.0) / top
    return times
