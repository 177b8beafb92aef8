"""How is a motion described whose shape and whose timing are both free?

By splines in time: on every axis a polynomial of degree p on each interval (p = 3: constant jerk,
continuous acceleration; p = 2, for an axis without jerk limit: constant acceleration that may
jump). The intervals' durations are called spans, one set for all axes. Control points P give

    V_i = p (P_{i+1} - P_i) / (sum of p spans),     the velocity,
    A_i = (p - 1) (V_i - V_{i-1}) / (sum of p - 1 spans), and for p = 3 the jerk likewise,

and the derivative lies in the hull of its control values on every interval, the position in that of
its Bezier points. So what holds for them holds at every instant. Multiplying all spans by c keeps
the shape and divides these by c, c², c³.

Source: de Boor: A Practical Guide to Splines (1978), chapters IX to XI (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.motion.trajectory import ORDER, Trajectory

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.motion.polynomials import Array, Indices


class Level(NamedTuple):
    """A derivative of all axes of one degree, and how it follows from control points and spans.

    values : (n, g) array; by_points : (n, l + 1) array, the weights of P_i ... P_{i+l} in row i;
    by_spans : (n, p - 1 + l, g) array, its derivatives by the spans i - p + 1, ...; total : (n,)
    array, the sum of spans that it is divided by [s].
    """

    values: Array
    by_points: Array
    by_spans: Array
    total: Array


@dataclass(frozen=True, eq=False)
class Group:
    """The axes of one degree, and their control points.

    Parameters
    ----------
    degree : int
        3, or 2 without jerk limit.
    axes : (g,) array of int
        Their columns.
    points : (N + degree, g) array [mm or deg]
    """

    degree: int
    axes: Indices
    points: Array

    def levels(self, spans: Array) -> tuple[Level, ...]:
        """Return velocity, acceleration and, for degree 3, jerk as control values."""
        degree, size = self.degree, self.points.shape[1]
        values, by_points = self.points, np.ones((len(self.points), 1))
        by_spans = np.zeros((len(self.points), degree - 1, size))
        found = []
        for width in range(degree, 0, -1):
            total = window_sums(spans, width)
            factor = width / total
            values = factor[:, np.newaxis] * np.diff(values, axis=0)
            by_points = factor[:, np.newaxis] * _difference(by_points)
            by_spans = factor[:, np.newaxis, np.newaxis] * _difference(by_spans)
            share = (values / total[:, np.newaxis])[:, np.newaxis]
            by_spans[:, degree - width : degree] -= share
            found.append(Level(values, by_points, by_spans, total))
        return tuple(found)


class Points(NamedTuple):
    """Positions that follow from control points and spans.

    values : (n, g) array; first : index of the first control point of each row, (n,);
    by_points : (n, w) array, weights of the control points from there on; span : index of the first
    span, (n,), may be outside; by_spans : (n, s, g) array, derivatives by the spans from there on.
    """

    values: Array
    first: Indices
    by_points: Array
    span: Indices
    by_spans: Array


def window_sums(spans: Array, width: int) -> Array:
    """Return sums of neighbouring spans, those outside being 0: (N + width - 1,) [s]."""
    return np.convolve(spans, np.ones(width))


def inner_points(group: Group, spans: Array) -> tuple[Points, Points]:
    """Return the second and third Bezier point of every interval, each of N rows.

    The first and the last are convex combinations of these and of their neighbours'. Those of a
    polynomial of degree two are raised to degree three.
    """
    intervals = np.arange(spans.size)
    before = np.concatenate([[0.0], spans[:-1]])
    after = np.concatenate([spans[1:], [0.0]])
    if group.degree == 2:
        return _raised(group, spans, before, after)
    total = before + spans + after
    leg = np.diff(group.points, axis=0)[1 : spans.size + 1]
    found = []
    for part, counts in ((before, (1, 0, 0)), (before + spans, (1, 1, 0))):
        share = part / total
        slope = (np.array(counts) * total[:, np.newaxis] - part[:, np.newaxis]) / (
            total[:, np.newaxis] ** 2
        )
        found.append(
            Points(
                group.points[1 : spans.size + 1] + share[:, np.newaxis] * leg,
                intervals + 1,
                np.stack([1 - share, share], axis=-1),
                intervals - 1,
                slope[:, :, np.newaxis] * leg[:, np.newaxis, :],
            )
        )
    return found[0], found[1]


def node_points(group: Group, spans: Array, nodes: Indices) -> Points:
    """Return positions at inner nodes: node i stands between the intervals i - 1 and i."""
    left, right = spans[nodes - 1], spans[nodes]
    total = left + right
    share = right / total
    slope = np.stack([-right, left], axis=-1) / total[:, np.newaxis] ** 2
    if group.degree == 2:
        one, other = group.points[nodes], group.points[nodes + 1]
        return Points(
            share[:, np.newaxis] * one + (1 - share)[:, np.newaxis] * other,
            nodes,
            np.stack([share, 1 - share], axis=-1),
            nodes - 1,
            slope[:, :, np.newaxis] * (one - other)[:, np.newaxis, :],
        )
    second, third = inner_points(group, spans)
    weights = np.zeros((nodes.size, 3))
    weights[:, :2] = share[:, np.newaxis] * third.by_points[nodes - 1]
    weights[:, 1:] += (1 - share)[:, np.newaxis] * second.by_points[nodes]
    by_spans = np.zeros((nodes.size, 4, len(group.axes)))
    by_spans[:, :3] = share[:, np.newaxis, np.newaxis] * third.by_spans[nodes - 1]
    by_spans[:, 1:] += (1 - share)[:, np.newaxis, np.newaxis] * second.by_spans[nodes]
    one, other = third.values[nodes - 1], second.values[nodes]
    by_spans[:, 1:3] += slope[:, :, np.newaxis] * (one - other)[:, np.newaxis, :]
    values = share[:, np.newaxis] * one + (1 - share)[:, np.newaxis] * other
    return Points(values, nodes, weights, nodes - 2, by_spans)


@dataclass(frozen=True, eq=False)
class Spline:
    """A motion of d axes as splines.

    Parameters
    ----------
    spans : (N,) array [s]
    region : (N,) array of int
        The region of a corridor that each interval belongs to, never falling.
    groups : tuple of Group
        Together they have all the axes.
    """

    spans: Array
    region: Indices
    groups: tuple[Group, ...]

    @property
    def duration(self) -> float:
        """Duration of the motion [s]."""
        return float(self.spans.sum())

    @property
    def gates(self) -> Indices:
        """The nodes between intervals of different regions."""
        return np.flatnonzero(np.diff(self.region)) + 1

    def scaled(self, factor: float) -> Spline:
        """Return the same positions in another time."""
        return Spline(self.spans * factor, self.region, self.groups)

    def nodes(self) -> tuple[Array, Array, Array]:
        """Return positions, velocities and accelerations at all nodes: three (N + 1, d) arrays.

        Where an acceleration jumps, that after the node.
        """
        states, end = self.states(), self._end()
        return (
            np.concatenate([states[0], end[0]]),
            np.concatenate([states[1], end[1]]),
            np.concatenate([2 * states[2], end[2]]),
        )

    def part(self, first: int, last: int) -> Spline:
        """Return the motion from one node to another; its regions are counted from its first."""
        position, velocity, acceleration = (state[first : last + 1] for state in self.nodes())
        region = self.region[first:last] - self.region[first]
        states = (position, velocity, acceleration)
        return from_states(states, self.spans[first:last], region, self._degrees)

    @classmethod
    def chain(cls, parts: Sequence[Spline]) -> Spline:
        """Return motions one after the other: each begins in the state in which the last ended."""
        nodes = [part.nodes() for part in parts]
        joined = [
            np.concatenate([*(own[order][:-1] for own in nodes), nodes[-1][order][-1:]])
            for order in range(3)
        ]
        regions, offset = [], 0
        for part in parts:
            regions.append(part.region + offset)
            offset += int(part.region[-1]) + 1
        return from_states(
            (joined[0], joined[1], joined[2]),
            np.concatenate([part.spans for part in parts]),
            np.concatenate(regions),
            parts[0]._degrees,  # noqa: SLF001 - the same class
        )

    @property
    def _degrees(self) -> list[tuple[int, Indices]]:
        return [(group.degree, group.axes) for group in self.groups]

    def split(self, parts: Indices) -> Spline:
        """Return the same motion with interval i cut into ``parts[i]`` equal ones."""
        cubics, end = self.states(), self._end()
        interval = np.repeat(np.arange(self.spans.size), parts)
        first = np.cumsum(parts) - parts
        span = (self.spans / parts)[interval]
        local = (np.arange(interval.size) - first[interval]) * span
        cut = []
        for order in range(3):
            value = np.zeros((interval.size, cubics[0].shape[1]))
            for power in range(3 - order, -1, -1):
                falling = np.prod(np.arange(power + 1, power + order + 1))
                value = value * local[:, np.newaxis] + falling * cubics[power + order][interval]
            cut.append(np.concatenate([value, end[order]]))
        states = (cut[0], cut[1], cut[2])
        return from_states(states, span, self.region[interval], self._degrees)

    def states(self) -> tuple[Array, Array, Array, Array]:
        """Return the coefficients of every interval's cubic, ascending: four (N, d) arrays."""
        axes = sum(len(group.axes) for group in self.groups)
        zero = np.zeros((self.spans.size, axes))
        found = (zero, zero.copy(), zero.copy(), zero.copy())
        # From the control values, and not from differences of positions, which cancel.
        for group in self.groups:
            velocity, acceleration, *jerk = (level.values for level in group.levels(self.spans))
            inner = node_points(group, self.spans, np.arange(1, self.spans.size)).values
            found[0][:, group.axes] = np.concatenate([group.points[:1], inner])
            if jerk:
                before = np.concatenate([[0.0], self.spans[:-1]])
                share = (self.spans / (before + self.spans))[:, np.newaxis]
                velocity = share * velocity[:-2] + (1 - share) * velocity[1:-1]
                found[3][:, group.axes] = jerk[0] / 6
            found[1][:, group.axes] = velocity[: self.spans.size]
            found[2][:, group.axes] = acceleration[: self.spans.size] / 2
        return found

    def _end(self) -> Array:
        """Return position, velocity and acceleration at the end: (3, 1, d).

        As control values, so that a motion that ends at rest ends exactly so.
        """
        found = np.zeros((3, 1, sum(len(group.axes) for group in self.groups)))
        for group in self.groups:
            velocity, acceleration, *_ = group.levels(self.spans)
            values = (group.points, velocity.values, acceleration.values)
            found[:, 0, group.axes] = [own[-1] for own in values]
        return found

    def trajectory(self, axes: tuple[str, ...]) -> Trajectory:
        """Return the motion as a trajectory of axes with these names."""
        coefficients = np.zeros((self.spans.size, ORDER, len(axes)))
        for power, values in enumerate(self.states()):
            coefficients[:, power] = values
        return Trajectory(axes, self.spans, coefficients)


def from_states(
    states: tuple[Array, Array, Array],
    spans: Array,
    region: Indices,
    degrees: list[tuple[int, Indices]],
) -> Spline:
    """Return the spline through positions, velocities and accelerations at all nodes.

    Parameters
    ----------
    states : three (N + 1, d) arrays
        They belong to such a spline: nothing is fitted.
    degrees : list of (degree, columns)
    """
    position, velocity, acceleration = states
    before = np.concatenate([[0.0], spans])[:, np.newaxis]
    after = np.concatenate([spans, [0.0]])[:, np.newaxis]
    groups = []
    for degree, axes in degrees:
        p, v, a = position[:, axes], velocity[:, axes], acceleration[:, axes]
        if degree == 3:
            inner = p + v * (after - before) / 3 - a * after * before / 6
            if spans.size > 1:
                # From the ends' own states, so that rest is rest to the last digit.
                inner[1] = inner[0] + (v[0] + a[0] * spans[0] / 2) * (spans[0] + spans[1]) / 3
                end_leg = (v[-1] - a[-1] * spans[-1] / 2) * (spans[-1] + spans[-2]) / 3
                inner[-2] = inner[-1] - end_leg
        else:
            inner = p[:-1] + v[:-1] * after[:-1] / 2
            inner[-1] = p[-1] - v[-1] * spans[-1] / 2
        groups.append(Group(degree, axes, np.concatenate([p[:1], inner, p[-1:]])))
    return Spline(spans, region, tuple(groups))


def _difference(stencil: Array) -> Array:
    """Return row i + 1 less row i of weights that begin one column later in each row."""
    shape = (len(stencil) - 1, stencil.shape[1] + 1, *stencil.shape[2:])
    found = np.zeros(shape)
    found[:, 1:] = stencil[1:]
    found[:, :-1] -= stencil[:-1]
    return found


def _raised(group: Group, spans: Array, before: Array, after: Array) -> tuple[Points, Points]:
    """Return the inner Bezier points of degree three of parabolas."""
    intervals = np.arange(spans.size)
    points = group.points
    found = []
    for other, index in ((before, 0), (after, 2)):
        # The parabola's end lies between its middle point and the neighbour's.
        total = spans + other
        share = spans / total
        neighbour, middle = points[index : index + spans.size], points[1 : spans.size + 1]
        weights = np.zeros((spans.size, 3))
        weights[:, index] = share / 3
        weights[:, 1] = (2 + (1 - share)) / 3
        slope = np.zeros((spans.size, 3, points.shape[1]))
        apart = (neighbour - middle) / 3
        slope[:, 1] = (other / total**2)[:, np.newaxis] * apart
        slope[:, index] = (-spans / total**2)[:, np.newaxis] * apart
        values = middle + share[:, np.newaxis] * apart
        found.append(Points(values, intervals, weights, intervals - 1, slope))
    return found[0], found[1]
