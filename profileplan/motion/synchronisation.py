"""How do several axes get from one position to another together?

Two kinds of motion: from point to point, each axis by its own law; and along straight lines, by one
law for the way covered. Both are rest to rest. Positions are (..., d) arrays in axis order [mm or
degree]; limits are records of (..., d) arrays.

Which rule the axes that are not the slowest follow
---------------------------------------------------
They run through the same law as when alone, only more slowly: every axis is stretched to the time
of the slowest. With c = own least time / common time, velocity falls to c, acceleration to c² and
jerk to c³ of what the axis uses alone. All three fall together, by factors that can be read off the
duration, and what excites the frame falls fastest. The least possible peak torque would be had by
keeping the velocity at its limit instead, but then neither velocity nor jerk would fall, and an
axis with time to spare would still run to its limits.
"""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.motion.laws import Limits
from profileplan.motion.trajectory import ORDER, Trajectory

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from profileplan.motion.laws import Law, Moves
    from profileplan.motion.polynomials import Array


class Way(NamedTuple):
    """A path: points (m + 1, d) [mm], speed limits (m,) [mm/s], rests (m + 1,) [s].

    ``near``, (m + 1,) [mm]: how near the motion passes each point; 0: it stops there.
    """

    points: Array
    speeds: Array
    waits: Array
    near: Array

    def parts(self) -> Iterator[Way]:
        """Yield the parts between the stops, without points that stand where the last one did."""
        stopping = (self.waits > 0) | (self.near <= 0)
        stops = [0, *(np.flatnonzero(stopping[1:-1]) + 1), len(self.points) - 1]
        for first, last in pairwise(stops):
            points = self.points[first : last + 1]
            moves = np.any(np.diff(points, axis=0) != 0, axis=1)
            kept = np.concatenate([[True], moves])
            yield Way(
                points[kept],
                self.speeds[first:last][moves],
                self.waits[[first, last]],
                self.near[first : last + 1][kept],
            )


def move_duration(distance: Array, limits: Limits, law: Law) -> Array:
    """Return the least time of moves from point to point: that of the slowest axis.

    Parameters
    ----------
    distance : (..., d) array [mm]
    limits : Limits of (..., d) arrays
    law : Law

    Returns
    -------
    (...) array [s]
    """
    slowest: Array = law.solve(distance, limits).duration.max(axis=-1)
    return slowest


def move(
    axes: tuple[str, ...],
    ends: tuple[Array, Array],
    limits: Limits,
    *,
    law: Law,
    duration: float | None = None,
) -> Trajectory:
    """Return the motion from one position to another, each axis by its own law.

    Parameters
    ----------
    axes : tuple of str
        Names of the d axes.
    ends : pair of (d,) arrays [mm]
        Start and end.
    limits : Limits of (d,) arrays
    law : Law
    duration : float, optional [s]
        The time that every axis takes, at least the least time of the slowest. Without it every
        axis stops as early as it can.
    """
    start, end = ends
    moves = law.solve(end - start, limits)
    if duration is not None:
        moves = moves.stretched(duration)
    pieces = law.pieces(moves) * np.sign(moves.distance)[:, np.newaxis, np.newaxis]
    pieces[..., 0] += start[:, np.newaxis]
    parts = []
    for axis, name in enumerate(axes):
        kept = moves.phases[axis] > 0
        if kept.any():
            part = Trajectory((name,), moves.phases[axis, kept], pieces[axis, kept, :, np.newaxis])
        else:
            part = Trajectory.rest((name,), start[axis : axis + 1])
        parts.append(part)
    return Trajectory.stack(parts)


def line_limits(
    distance: Array, limits: Limits, *, linear: Sequence[bool], speed: Array | float = np.inf
) -> Limits:
    """Return what bounds the share of the way along straight lines, from 0 to 1.

    On a straight line every axis moves in proportion to the way, so each of its limits, divided by
    its distance, bounds the way: the least of them counts.

    Parameters
    ----------
    distance : (..., d) array [mm]
    limits : Limits of (..., d) arrays
    linear : (d,) sequence of bool
        The axes along which ``speed`` is counted.
    speed : (...) array or float [mm/s]
        Limit of the speed along the path; infinity is none.

    Returns
    -------
    Limits of (...) arrays [1/s, 1/s², 1/s², 1/s³]
        Infinite where nothing moves.
    """
    size = np.abs(distance)

    def least(limit: Array | float) -> Array:
        share = np.full(np.broadcast_shapes(size.shape, np.shape(limit)), np.inf)
        bound: Array = np.divide(limit, size, out=share, where=size > 0).min(axis=-1)
        return bound

    way = np.sqrt(np.sum(np.where(np.asarray(linear), distance, 0.0) ** 2, axis=-1))
    by_speed = np.full(np.broadcast_shapes(way.shape, np.shape(speed)), np.inf)
    np.divide(speed, way, out=by_speed, where=way > 0)
    own = Limits(*(least(limit) for limit in limits))
    return own._replace(velocity=np.minimum(own.velocity, by_speed))


def line_durations(distance: Array, limits: Limits, law: Law) -> Array:
    """Return the least times of straight lines under limits along the way, as of ``line_limits``.

    Parameters
    ----------
    distance : (..., d) array [mm]
    limits : Limits of (...) arrays
    law : Law

    Returns
    -------
    (...) array [s]
        Zero where nothing moves.
    """
    return _way(distance, limits, law).duration


def lines(
    axes: tuple[str, ...],
    points: Array,
    limits: Limits,
    *,
    law: Law,
    durations: Array,
    waits: Array | None = None,
) -> Trajectory:
    """Return the motion along straight lines from point to point, at rest at every point.

    Parameters
    ----------
    axes : tuple of str
        Names of the d axes.
    points : (m + 1, d) array [mm]
    limits : Limits of (m,) arrays
        Along each line's way, as of ``line_limits``.
    law : Law
    durations : (m,) array [s]
        At least those of ``line_durations``; a line of no length waits so long.
    waits : (m + 1,) array, optional [s]
        How long the motion rests at each point.
    """
    distance = np.diff(points, axis=0)
    moves = _way(distance, limits, law).stretched(durations)
    coefficients = law.pieces(moves)[..., np.newaxis] * distance[:, np.newaxis, np.newaxis, :]
    coefficients[:, :, 0] += points[:-1, np.newaxis, :]
    rests = np.zeros((len(points), 1, ORDER, len(axes)))
    rests[:, 0, 0] = points
    pauses = np.zeros(len(points)) if waits is None else waits
    # One row a line: its phases, then the rest at its end.
    phases = np.concatenate([moves.phases, pauses[1:, np.newaxis]], axis=-1)
    coefficients = np.concatenate([coefficients, rests[1:]], axis=1)
    phases = np.concatenate([pauses[:1], phases.reshape(-1)])
    coefficients = np.concatenate([rests[0], coefficients.reshape(-1, ORDER, len(axes))])
    kept = phases > 0
    if not kept.any():
        return Trajectory.rest(axes, points[0])
    return Trajectory(axes, phases[kept], coefficients[kept])


def _way(distance: Array, limits: Limits, law: Law) -> Moves:
    """Return the moves along the way of straight lines, 1 for each, 0 where nothing moves."""
    moving = np.any(distance != 0, axis=-1)
    # Nothing bounds a line of no length; any finite limits give it its duration of zero.
    finite = Limits(*(np.where(moving, limit, 1.0) for limit in limits))
    return law.solve(np.where(moving, 1.0, 0.0), finite)
