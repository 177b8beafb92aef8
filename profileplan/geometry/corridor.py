"""Through which convex regions does a motion pass, one after the other?

A corridor says nothing of time, and gives no corner a shape: only where the motion may be. Its
regions are convex, and each shares a gate with the next. Positions are in axis units (mm, degree),
columns are the axes.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from collections.abc import Sequence

Array = npt.NDArray[np.float64]
"""An array of floats."""

Indices = npt.NDArray[np.intp]
"""An array of whole numbers that count something."""


INSIDE = 1e-9
"""Share of a region's size, or mm or degree, by which rounding may put a point outside."""


@dataclass(frozen=True, eq=False)
class Regions:
    """m convex sets of positions, all described alike.

    A position c belongs to a set when some share t of the way, from 0 to 1, has

        | ball c + ball_way t - centre | <= 1   and   rows c + rows_way t <= bound.

    A tube needs both for its way along a segment; a box needs only rows, a ball only the first.

    Parameters
    ----------
    ball : (m, q, d) array; ball_way, centre : (m, q) arrays
        Divided by the radius, so that they have no unit.
    rows : (m, k, d) array; rows_way, bound : (m, k) arrays [mm or deg]
    """

    ball: Array
    ball_way: Array
    centre: Array
    rows: Array
    rows_way: Array
    bound: Array

    def __len__(self) -> int:
        return len(self.ball)

    def at(self, chosen: slice | Indices) -> Regions:
        """Return some of the sets, in the order chosen."""
        return Regions(
            self.ball[chosen],
            self.ball_way[chosen],
            self.centre[chosen],
            self.rows[chosen],
            self.rows_way[chosen],
            self.bound[chosen],
        )

    def excess(self, positions: Array) -> Array:
        """Return how far positions, (m, d), one for each set, are outside: (m,), 0 inside.

        As a share of the ball's radius, or in the unit of the rows where these fail.
        """
        share, failed = self.reach(positions)
        return np.maximum(np.maximum(share - 1, failed), 0.0)

    def reach(self, positions: Array) -> tuple[Array, Array]:
        """Return how far out in their sets positions, (m, d), are.

        Returns
        -------
        share : (m,) array
            Distance from the ball's middle, as a share of its radius, least over the way.
        failed : (m,) array
            By how much the rows fail there; negative where they hold.
        """
        along = np.einsum("mkd,md->mk", self.rows, positions) - self.bound
        way = self.rows_way
        # Each row allows ways on one side of where it is just met.
        met = np.divide(-along, way, out=np.zeros_like(along), where=way != 0)
        least = np.where(way < 0, met, 0.0).max(axis=-1, initial=0.0)
        most = np.where(way > 0, met, 1.0).min(axis=-1, initial=1.0)
        apart = np.einsum("mqd,md->mq", self.ball, positions) - self.centre
        square = (self.ball_way**2).sum(axis=-1)
        nearest = np.divide(
            -(self.ball_way * apart).sum(axis=-1), square, out=np.zeros(len(self)), where=square > 0
        )
        t = np.clip(nearest, np.minimum(least, most), most)[:, np.newaxis]
        share = np.linalg.norm(apart + self.ball_way * t, axis=-1)
        return share, (along + way * t).max(axis=-1, initial=-np.inf)


@dataclass(frozen=True, eq=False)
class Corridor:
    """A chain of convex regions, with a gate between each and the next.

    Parameters
    ----------
    regions : Regions
        m sets, in the order passed.
    gates : Regions
        m - 1 sets: the motion passes from region i to region i + 1 inside gate i, which lies in
        both.
    points : (m + 1, d) array [mm or deg]
        Start, a point of every gate, end.
    """

    regions: Regions
    gates: Regions
    points: Array

    def part(self, first: int, last: int) -> Corridor:
        """Return the regions from ``first`` to ``last``, without ``last`` itself."""
        return Corridor(
            self.regions.at(slice(first, last)),
            self.gates.at(slice(first, last - 1)),
            self.points[first : last + 1],
        )

    def follow(self, hulls: Array) -> Followed:
        """Follow a motion through the regions, piece by piece.

        A piece stays in the region of the one before while its hull is inside; else it goes on to
        the next, if an end of a piece has been inside the gate between.

        Parameters
        ----------
        hulls : (n, k, d) array
            Points whose hull holds each piece, its ends first and last.
        """
        count, last = len(hulls), len(self.regions) - 1
        found = Followed(
            np.empty(count), np.empty(count), np.empty(count, dtype=np.intp), np.full(last, np.inf)
        )
        now = 0
        for piece, hull in enumerate(hulls):
            reach = self._reach(now, hull)
            self._pass(now, hull, found.gates)
            while not _inside(reach) and now < last and found.gates[now] <= 1 + INSIDE:
                ahead = self._reach(now + 1, hull)
                if not _inside(ahead) and ahead[0] >= reach[0]:
                    break
                now, reach = now + 1, ahead
                self._pass(now, hull, found.gates)
            found.share[piece], found.failed[piece] = reach
            found.region[piece] = now
        for gate in range(now, last):
            # What was never left behind may have been passed all the same.
            self._pass(gate, hulls[-1], found.gates)
        return found

    def _reach(self, region: int, hull: Array) -> tuple[float, float]:
        """Return how far out in a region the points of a hull are."""
        sets = self.regions.at(np.full(len(hull), region))
        share, failed = sets.reach(hull)
        return float(share.max()), float(failed.max(initial=-np.inf))

    def _pass(self, gate: int, hull: Array, gates: Array) -> None:
        """Note how near the ends of a piece come to the middle of a gate, as a share of it."""
        if gate < len(gates):
            share, _ = self.gates.at(np.full(2, gate)).reach(hull[[0, -1]])
            gates[gate] = min(gates[gate], float(share.min()))


class Followed(NamedTuple):
    """A motion in a corridor: for each of n pieces its region, and how far out in it the piece is.

    share, failed : (n,) arrays, as of ``Regions.reach``; region : (n,) array of int; gates : array,
    how near each gate's middle was passed, as a share of its radius.
    """

    share: Array
    failed: Array
    region: Indices
    gates: Array


def _inside(reach: tuple[float, float]) -> bool:
    return reach[0] <= 1 + INSIDE and reach[1] <= INSIDE


def tubes(
    points: Array,
    *,
    tolerance: float,
    linear: Sequence[bool],
    angle_tolerance: float,
    gate_tolerance: Array | None = None,
) -> Corridor:
    """Return the corridor of all motions within a tolerance of straight lines through points.

    A region is a tube round a segment, closed by half balls; a gate is the ball round a corner.
    So the tolerance holds both ways: no point of the motion is farther from the lines, and, as the
    motion passes every gate, no point of the lines is farther from the motion. Rotary axes turn in
    proportion to the way along a segment, within a tolerance of their own.

    Parameters
    ----------
    points : (m + 1, d) array [mm or deg]
        No two neighbours are equal.
    tolerance : float [mm]
        Radius of the tubes, above 0.
    linear : (d,) sequence of bool
        Which axes count in mm; the others are rotary.
    angle_tolerance : float [deg]
        Above 0 where a rotary axis moves.
    gate_tolerance : (m - 1,) array, optional [mm]
        How near the motion passes each inner point; default: the tolerance.
    """
    members = np.flatnonzero(linear)
    turning = np.flatnonzero(~np.asarray(linear))
    count, axes = len(points) - 1, points.shape[1]
    step = np.diff(points, axis=0)
    pick = np.zeros((members.size, axes))
    pick[np.arange(members.size), members] = 1.0
    turn = np.zeros((2 * turning.size, axes))
    turn[np.arange(turning.size), turning] = 1.0
    turn[turning.size + np.arange(turning.size), turning] = -1.0
    near = np.full(count - 1, tolerance)
    if gate_tolerance is not None:
        near = np.minimum(near, gate_tolerance)

    def sets(at: Array, way: Array, radius: Array) -> Regions:
        size = len(at)
        return Regions(
            ball=pick / radius[:, np.newaxis, np.newaxis],
            ball_way=-way[:, members] / radius[:, np.newaxis],
            centre=at[:, members] / radius[:, np.newaxis],
            rows=np.broadcast_to(turn, (size, *turn.shape)),
            rows_way=-way @ turn.T,
            bound=angle_tolerance + at @ turn.T,
        )

    inner = points[1:-1]
    return Corridor(
        regions=sets(points[:-1], step, np.full(count, tolerance)),
        gates=sets(inner, np.zeros_like(inner), near),
        points=points,
    )
