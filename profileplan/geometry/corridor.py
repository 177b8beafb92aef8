"""Through which convex regions does a motion pass, one after the other?

A corridor says nothing of time, and gives no corner a shape: only where the motion may be. Its
regions are convex, and each shares a gate with the next. Positions are in axis units (mm, degree),
columns are the axes.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from collections.abc import Sequence

Array = npt.NDArray[np.float64]
"""An array of floats."""

Flags = npt.NDArray[np.bool_]
"""An array of truth values."""

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
        least = np.clip(np.where(way < 0, met, 0.0).max(axis=-1, initial=0.0), 0.0, 1.0)
        most = np.clip(np.where(way > 0, met, 1.0).min(axis=-1, initial=1.0), 0.0, 1.0)
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
    still : (2, d) array of bool, optional
        Axes that stand still in the first region, and in the last.
    clear : float, optional [mm]
        Height above 0 of the free space of a cell; 0: the regions are those of a tolerance.
    """

    regions: Regions
    gates: Regions
    points: Array
    still: Flags = field(default_factory=lambda: np.zeros((2, 1), dtype=bool))
    clear: float = 0.0

    def __post_init__(self) -> None:
        size = (2, self.points.shape[1])
        object.__setattr__(self, "still", np.broadcast_to(self.still, size))

    def part(self, first: int, last: int) -> Corridor:
        """Return the regions from ``first`` to ``last``, without ``last`` itself."""
        inner = np.array([[first == 0], [last == len(self.regions)]])
        return replace(
            self,
            regions=self.regions.at(slice(first, last)),
            gates=self.gates.at(slice(first, last - 1)),
            points=self.points[first : last + 1],
            still=self.still & inner,
        )

    def follow(self, hulls: Array, load: tuple[Array, Array] | None = None) -> Followed:
        """Follow a motion through the regions, piece by piece, in the way that suits it best.

        A piece is in the region of the piece before, or in a later one if the node between is in
        the gates on the way. Regions overlap, and a path may turn back on itself, so there are
        several ways to count pieces to regions. Of those that stay inside the one of the least
        greatest load is taken; if there is none, the one that is least far outside.

        Parameters
        ----------
        hulls : (n, k, d) array
            Points whose hull holds each piece, its ends first and last.
        load : (n,) array and (m,) array, optional
            What the pieces ask for, and what the regions allow: the load is the one over the other.
        """
        costs = load or (np.zeros(len(hulls)), np.ones(len(self.regions)))
        inside = self._followed(hulls, costs, most=1 + INSIDE)
        return (
            inside
            or self._followed(hulls, costs, most=np.inf)
            or Followed(np.inf, np.zeros(len(hulls), dtype=np.intp))
        )

    def _followed(self, hulls: Array, load: tuple[Array, Array], *, most: float) -> Followed | None:
        """Return the best way through, of those that are nowhere farther out than ``most``."""
        last, (asked, allowed) = len(self.regions) - 1, load
        states = {0: _State(0.0, 0.0, 0)}
        came: list[dict[int, _State]] = []
        for piece, hull in enumerate(hulls):
            came.append(self._entered(states, hull[0], most))
            states = {}
            for region, state in came[-1].items():
                out = max(state.out, self._out(self.regions, region, hull))
                if out <= most:
                    cost = max(state.load, float(asked[piece] / allowed[region]))
                    states[region] = _State(cost if np.isfinite(most) else out, out, region)
        final = self._entered(states, hulls[-1, -1], most)
        if last not in final:
            return None
        region, path = final[last].origin, []
        for entered in reversed(came):
            path.append(region)
            region = entered[region].origin
        return Followed(final[last].out, np.array(path[::-1], dtype=np.intp))

    def _entered(self, states: dict[int, _State], node: Array, most: float) -> dict[int, _State]:
        """Return the regions that a motion can be in after a node, the best way for each."""
        entered = {region: state._replace(origin=region) for region, state in states.items()}
        for region in sorted(states):
            state, ahead = states[region]._replace(origin=region), region
            while ahead < len(self.gates):
                out = max(state.out, self._out(self.gates, ahead, node[np.newaxis]))
                state = state._replace(out=out, load=state.load if np.isfinite(most) else out)
                ahead += 1
                if out > most or (ahead in entered and entered[ahead][:2] <= state[:2]):
                    break
                entered[ahead] = state
        return entered

    def _out(self, sets: Regions, number: int, points: Array) -> float:
        """Return how far out of a set points are: 1 at its border, more outside."""
        share, failed = sets.at(np.full(len(points), number)).reach(points)
        return float(np.maximum(share, 1 + failed).max())


class _State(NamedTuple):
    """The best way to be in a region so far: its greatest load, how far out, whence it came."""

    load: float
    out: float
    origin: int


class Followed(NamedTuple):
    """A motion in a corridor.

    out : how far out its worst piece or gate is, 1 at the border; region : (n,) array of int, the
    region that each piece is counted to.
    """

    out: float
    region: Indices


def tubes(
    points: Array,
    *,
    tolerance: float | Array,
    linear: Sequence[bool],
    angle_tolerance: float,
    gate_tolerance: Array | None = None,
    travel: Array | None = None,
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
    tolerance : float or (m,) array [mm]
        Radius of the tubes, above 0.
    linear : (d,) sequence of bool
        Which axes count in mm; the others are rotary.
    angle_tolerance : float [deg]
        Above 0 where a rotary axis moves.
    gate_tolerance : (m - 1,) array, optional [mm]
        How near the motion passes each inner point, at most the tolerances of the tubes beside it;
        default: these.
    travel : (2, d) array, optional [mm or deg]
        Lowest and highest positions, which the motion does not leave inside its tolerance.
    """
    members = np.flatnonzero(linear)
    turning = np.flatnonzero(~np.asarray(linear, dtype=bool))
    count, axes = len(points) - 1, points.shape[1]
    step = np.diff(points, axis=0)
    pick = np.zeros((members.size, axes))
    pick[np.arange(members.size), members] = 1.0
    turn = np.zeros((2 * turning.size, axes))
    turn[np.arange(turning.size), turning] = 1.0
    turn[turning.size + np.arange(turning.size), turning] = -1.0
    low, high = np.full((2, axes), [[-np.inf], [np.inf]]) if travel is None else travel
    radius = np.broadcast_to(np.asarray(tolerance, dtype=np.float64), (count,))
    room = np.where(linear, radius.max(), angle_tolerance)
    above = np.flatnonzero(points.max(axis=0) + room > high)
    below = np.flatnonzero(points.min(axis=0) - room < low)
    ends = np.concatenate([np.eye(axes)[above], -np.eye(axes)[below]])
    end_bound = np.concatenate([high[above], -low[below]])
    near = np.minimum(radius[1:], radius[:-1])
    if gate_tolerance is not None:
        near = np.minimum(near, gate_tolerance)

    def sets(at: Array, way: Array, radius: Array) -> Regions:
        size = len(at)
        return Regions(
            ball=pick / radius[:, np.newaxis, np.newaxis],
            ball_way=-way[:, members] / radius[:, np.newaxis],
            centre=at[:, members] / radius[:, np.newaxis],
            rows=np.broadcast_to(np.concatenate([turn, ends]), (size, len(turn) + len(ends), axes)),
            rows_way=np.concatenate([-way @ turn.T, np.zeros((size, len(ends)))], axis=1),
            bound=np.concatenate(
                [angle_tolerance + at @ turn.T, np.broadcast_to(end_bound, (size, len(ends)))],
                axis=1,
            ),
        )

    inner = points[1:-1]
    return Corridor(
        regions=sets(points[:-1], step, radius),
        gates=sets(inner, np.zeros_like(inner), near),
        points=points,
    )
