"""How is a path run through inside a tolerance: in least time, from each stop to the next?

A run is the part of a path between two stops. One segment is a straight line, for which the closed
form is the least time; several are a corridor of tubes. Where no motion through the corridor is
found, or none that is faster, the run stops at every point, which is always possible.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.geometry.corridor import tubes
from profileplan.motion import least_time as search
from profileplan.motion.laws import LAWS, Limits
from profileplan.motion.rounds import Bounds
from profileplan.motion.synchronisation import line_durations, line_limits, lines
from profileplan.motion.trajectory import ORDER, Trajectory

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    from profileplan.geometry.corridor import Corridor
    from profileplan.motion.least_time import Passage, Stretch
    from profileplan.motion.polynomials import Array, Flags, Indices
    from profileplan.motion.synchronisation import Way

NUDGE = 1e-4
"""Share by which a limit is raised to find what a straight line gains by it."""

INSET = 2e-6
"""Share of the tolerance kept free, so that rounding cannot carry the motion outside."""


@dataclass(frozen=True, eq=False)
class Run:
    """A planned run.

    Parameters
    ----------
    way : Way
    limits : Limits of (d,) arrays
    linear : (d,) array of bool
    passage : Passage, optional
        The motion through the corridor; None: a stop at every point.
    corridor, bounds : optional
        Those of the passage, for the axes that move.
    duration, least : float [s]
        Of the motion, and a time that none can be shorter than.
    """

    way: Way
    limits: Limits
    linear: Flags
    passage: Passage | None
    corridor: Corridor | None
    bounds: Bounds | None
    duration: float
    least: float

    @property
    def moving(self) -> Indices:
        """Columns of the axes that move."""
        return np.flatnonzero(np.ptp(self.way.points, axis=0) > 0)

    @property
    def single(self) -> bool:
        """Whether this is one straight line, or no way at all."""
        return len(self.way.points) <= 2

    def trajectory(self, axes: tuple[str, ...], *, duration: float) -> Trajectory:
        """Return the motion in a time [s], the run's own or a longer one."""
        if len(self.way.points) == 1:
            return Trajectory.rest(axes, self.way.points[0], duration)
        slower = max(duration / self.duration, 1.0)
        if self.passage is None or self.corridor is None or self.bounds is None:
            own, durations = self._lines()
            law = LAWS["trapezoidal"]
            return lines(axes, self.way.points, own, law=law, durations=durations * slower)
        spline = self.passage.spline
        if slower > 1:
            spline = search.in_time(self.passage, self.corridor, self.bounds, duration=duration)
        moving = spline.trajectory(tuple(axes[column] for column in self.moving))
        coefficients = np.zeros((moving.durations.size, ORDER, len(axes)))
        coefficients[:, 0] = self.way.points[0]
        coefficients[:, :, self.moving] = moving.coefficients
        return Trajectory(axes, moving.durations, coefficients)

    def gains(self) -> Mapping[tuple[str, int], float]:
        """Return how much sooner the run ends for each share that a bound is loosened [s]."""
        if self.passage is not None:
            columns = [*self.moving, -1]
            return {
                (quantity, int(columns[axis])): gain
                for (quantity, axis), gain in search.gains(self.passage).items()
            }
        found = {}
        for row, quantity in enumerate(Limits._fields):
            for axis in self.moving:
                raised = [np.array(limit, dtype=np.float64) for limit in self.limits]
                raised[row][axis] *= 1 + NUDGE
                found[quantity, int(axis)] = self._saved(Limits(*raised), 1.0)
        found["speed", -1] = self._saved(self.limits, 1 + NUDGE)
        return found

    def stretches(self) -> tuple[Stretch, ...]:
        """Return what holds the run back where, in its own time; axes are columns or -1."""
        if self.passage is None:
            gains = self.gains()
            if not gains:
                return ()
            quantity, axis = max(gains, key=lambda name: gains[name])
            return (search.Stretch(0.0, self.duration, quantity, axis),)
        columns = [*self.moving, -1]
        return tuple(
            held._replace(axis=int(columns[held.axis])) for held in search.stretches(self.passage)
        )

    def durations(self) -> Array:
        """Return the least times of straight lines from point to point, with a stop at each [s]."""
        return self._lines()[1]

    def passed(self) -> Array:
        """Return when each point is passed, in the run's own time: (m + 1,) [s]."""
        if self.passage is None:
            return np.concatenate([[0.0], np.cumsum(self._lines()[1])])
        spline = self.passage.spline
        nodes = np.searchsorted(spline.region, np.arange(len(self.way.points)))
        times: Array = np.concatenate([[0.0], np.cumsum(spline.spans)])[nodes]
        return times

    def _lines(self, limits: Limits | None = None, faster: float = 1.0) -> tuple[Limits, Array]:
        """Return limits along the lines from point to point, and their least durations."""
        distance = np.diff(self.way.points, axis=0)
        own = line_limits(
            distance,
            limits or self.limits,
            linear=self.linear.tolist(),
            speed=self.way.speeds * faster,
        )
        return own, line_durations(distance, own, LAWS["trapezoidal"])

    def _saved(self, limits: Limits, faster: float) -> float:
        """Return the time saved for each share by which stops at every point are nudged [s]."""
        _, durations = self._lines(limits, faster)
        return max(self.duration - float(durations.sum()), 0.0) / NUDGE


class Near(NamedTuple):
    """How near a motion stays to the lines from point to point.

    tolerance : (m,) array [mm]; angle_tolerance [deg]; at_points : (m - 1,) array [mm], how near it
    passes each point; any : [mm], how near any motion that may be taken comes to each point; travel
    : (2, d) array, the positions that it does not leave.
    """

    tolerance: Array
    angle_tolerance: float
    at_points: Array
    any: float
    travel: Array


def stopping_run(way: Way, limits: Limits, *, linear: Flags) -> Run:
    """Return the motion that stops at every point, in the least time.

    Parameters
    ----------
    way : Way
    limits : Limits of (d,) arrays
    linear : (d,) array of bool
    """
    stops = Run(way, limits, linear, None, None, None, 0.0, 0.0)
    duration = float(stops.durations().sum())
    return replace(stops, duration=duration, least=duration)


def plan_run(
    way: Way,
    limits: Limits,
    *,
    linear: Flags,
    near: Near,
    progress: Callable[[float], None] | None = None,
) -> Run:
    """Plan the motion from one stop to the next.

    Parameters
    ----------
    way : Way
        Neighbouring points differ.
    limits : Limits of (d,) arrays
    linear : (d,) array of bool
    near : Near
        The tolerance is above 0. Where the angle tolerance is 0 and a rotary axis moves, the run
        stops at every point.
    progress : callable, optional
        Called with the share of the work that is done.
    """
    moving = np.flatnonzero(np.ptp(way.points, axis=0) > 0)
    stops = stopping_run(way, limits, linear=linear)
    if stops.single:
        return stops
    velocity, acceleration, deceleration, jerk = np.array(limits)[:, moving]
    bounds = Bounds(
        velocity, acceleration, deceleration, jerk, speed=way.speeds, linear=linear[moving]
    )
    corridor = tubes(
        way.points[:, moving],
        tolerance=near.tolerance * (1 - INSET),
        linear=linear[moving].tolist(),
        angle_tolerance=near.angle_tolerance * (1 - INSET),
        gate_tolerance=near.at_points * (1 - INSET),
        travel=near.travel[:, moving],
    )
    least = search.lower_bound(corridor, bounds, tolerance=near.any)
    passage = None
    if near.angle_tolerance > 0 or linear[moving].all():
        passage = search.least_time(corridor, bounds, progress=progress)
    if passage is None or passage.spline.duration > stops.duration:
        return replace(stops, least=min(least, stops.duration))
    found = passage.spline.duration
    return Run(way, limits, linear, passage, corridor, bounds, found, min(least, found))
