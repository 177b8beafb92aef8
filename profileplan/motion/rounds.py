"""What is the next better motion inside a corridor?

Least time is sought in convex rounds. ``step`` shortens the spans, all limits and regions being
linear in control points and spans about the last motion. ``refit`` then holds the ratios of the
spans and finds the control points that allow the least common scale: limits and regions are exact
there, so that its result keeps them at every instant. ``calm`` holds the spans and takes out what
time does not need. Unknowns are changes: of control points, and of spans relative to their length.

Source: cone programs, Boyd, Vandenberghe: Convex Optimization (2004), chapter 4 (from memory);
clarabel solves them. ``refit`` is derived: with a common scale c of all spans the limits on a
derivative of order k grow as c^k, and 1 + k (c - 1) <= c^k keeps it convex and safe.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple, TypeVar

import clarabel
import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from profileplan.motion.spline import Group, Spline, inner_points, node_points

if TYPE_CHECKING:
    from profileplan.geometry.corridor import Corridor, Regions
    from profileplan.motion.polynomials import Array, Flags, Indices
    from profileplan.motion.spline import Level, Points

Number = TypeVar("Number", np.float64, np.intp)

REST = 1e-9
"""Share of its velocity limit below which an axis counts as standing."""

NEARLY = 1e-8
"""The same share below which an axis is made to stand."""

MOST_ITERATIONS = 80
"""Iterations of the interior-point solver in one round."""

WIDEST_SCALE = (0.7, 2.0)
"""Least and greatest common scale of the spans in one ``refit``."""

SHORTEST_SPAN = 2e-5
"""Least duration of an interval [s]: in a shorter one rounding would show in the acceleration."""

ACCURACY, ROUGH_ACCURACY = 1e-7, 1e-5
"""Relative accuracy to which ``calm``, and the rounds before it, are solved.

What they leave over is scaled away. All of them keep the limits and regions to ``ACCURACY``.
"""

REGULARISATION = 1e-9
"""What the solver adds to its pivots where it does not refine its solutions."""

LOWNESS = 1.0
"""Weight of the mean height, as a share of the greatest, against the jerk, in ``calm``."""


@dataclass(frozen=True, eq=False)
class Bounds:
    """What bounds the motion.

    Parameters
    ----------
    velocity, acceleration, deceleration, jerk : (d,) arrays
        Limits of the axes; a jerk of infinity is none.
    speed : (m,) array [mm/s]
        Limit of the speed along the path in each region; infinity is none.
    linear : (d,) array of bool
        The axes along which the speed is counted.
    low : int
        Column of the axis that is kept low where time does not need it high; -1: none.
    """

    velocity: Array
    acceleration: Array
    deceleration: Array
    jerk: Array
    speed: Array
    linear: Flags
    low: int = -1


class Price(NamedTuple):
    """How much the least time falls if a bound is loosened: its multiplier.

    quantity : "velocity", "acceleration", "deceleration", "jerk", "speed" or "tolerance"
    axis : column of the axis, or -1
    interval : (n,) array, the intervals of the spline
    value : (n,) array, share of the duration for each share of the bound
    """

    quantity: str
    axis: int
    interval: Indices
    value: Array


class Outcome(NamedTuple):
    """What a round found: no spline where it found nothing."""

    spline: Spline | None
    prices: tuple[Price, ...] = ()


class _Mark(NamedTuple):
    """Rows whose multipliers, times a weight, are prices."""

    price: Price
    rows: Indices


class Sides(NamedTuple):
    """Bounds of velocity and acceleration control values by direction, as shares of ``scale``.

    Slowing down has a limit of its own, so what an acceleration may be depends on the direction in
    which the axis moves: it is kept where the limits differ.
    """

    scale: Array
    velocity: tuple[Array, Array]
    acceleration: tuple[Array, Array]


def sides(group: Group, velocity: Array, bounds: Bounds) -> Sides:
    """Return what bounds the axes of a group, given their velocity control values."""
    up, down = bounds.acceleration[group.axes], bounds.deceleration[group.axes]
    scale = np.maximum(up, down)
    small = REST * bounds.velocity[group.axes]
    windows = np.lib.stride_tricks.sliding_window_view(velocity, group.degree, axis=0)
    forward = windows.min(axis=-1) >= -small
    backward = (windows.max(axis=-1) <= small) & ~forward
    either = np.minimum(up, down)
    high = np.where(forward, up, np.where(backward, down, either)) / scale
    low = np.where(forward, down, np.where(backward, up, either)) / scale
    asks = up != down
    floor, ceiling = np.ones_like(velocity), np.ones_like(velocity)
    for offset in range(group.degree):
        rows = slice(offset, offset + len(windows))
        floor[rows][forward & asks] = 0.0
        ceiling[rows][backward & asks] = 0.0
    if group.degree == 3:
        # A node belongs to two intervals.
        high, low = _least_of_neighbours(high), _least_of_neighbours(low)
    return Sides(scale, (floor, ceiling), (low, high))


def stilled(spline: Spline, bounds: Bounds) -> Spline:
    """Return a spline whose axes stand still where they nearly do, if they may not slow down alike.

    A round leaves a velocity of rounding where an axis turns round. Its direction would decide
    which limit holds there, so the two control points that it comes from are made one.
    """
    groups = []
    for group in spline.groups:
        points = group.points.copy()
        velocity = group.levels(spline.spans)[0].values
        asks = bounds.acceleration[group.axes] != bounds.deceleration[group.axes]
        nearly = (np.abs(velocity) < NEARLY * bounds.velocity[group.axes]) & asks
        nearly[: group.degree - 1] = nearly[-group.degree :] = False
        for row, axis in np.argwhere(nearly):
            points[row + 1, axis] = points[row, axis]
        groups.append(Group(group.degree, group.axes, points))
    return Spline(spline.spans, spline.region, tuple(groups))


def overrun(spline: Spline, bounds: Bounds) -> float:
    """Return the scale of time at which a spline's limits on derivatives are just kept."""
    least = 0.0
    for group in spline.groups:
        levels = group.levels(spline.spans)
        velocity = levels[0].values
        least = max(least, float((np.abs(velocity) / bounds.velocity[group.axes]).max()))
        side = sides(group, velocity, bounds)
        values = levels[1].values / side.scale
        low, high = side.acceleration
        least = max(least, float(np.sqrt(np.maximum(values / high, -values / low).max())))
        if group.degree == 3:
            jerk = np.abs(levels[2].values) / bounds.jerk[group.axes]
            least = max(least, float(np.cbrt(jerk.max())))
        members = bounds.linear[group.axes]
        if members.any() and np.isfinite(bounds.speed).any():
            speed = np.linalg.norm(velocity[:, members], axis=1)
            least = max(least, float((speed / speed_bounds(group, spline, bounds)).max()))
    return least


def step(spline: Spline, corridor: Corridor, bounds: Bounds, *, trust: Array) -> Outcome:
    """Return the motion of least time under limits linear about a spline.

    Parameters
    ----------
    trust : (N,) array
        Greatest relative change of each span.
    """
    spans = spline.spans
    program = _Program(spline, corridor, times=spans.size)
    program.cost[program.time] = spans / spline.duration
    columns = program.time.start + np.arange(spans.size)
    shortest = np.clip(1 - SHORTEST_SPAN / spans, 0.0, trust)
    for sign, most in ((1.0, trust), (-1.0, shortest)):
        program.rows(most)
        program.entries(np.arange(spans.size), columns, np.full(spans.size, sign))
    program.constrain(bounds)
    return program.solve(rough=True)


def refit(spline: Spline, corridor: Corridor, bounds: Bounds) -> Outcome:
    """Return the fastest motion with a spline's ratios of spans, exactly inside the limits."""
    program = _Program(spline, corridor, times=1)
    program.cost[program.time] = 1.0
    room = min(1 - WIDEST_SCALE[0], max(1 - SHORTEST_SPAN / float(spline.spans.min()), 0.0))
    program.rows(np.array([WIDEST_SCALE[1] - 1, room]))
    program.entries(np.arange(2), np.full(2, program.time.start), np.array([1.0, -1.0]))
    program.constrain(bounds)
    return program.solve(rough=True)


def calm(spline: Spline, corridor: Corridor, bounds: Bounds) -> Outcome:
    """Return the motion with a spline's spans, the least jerk and the most central way."""
    program = _Program(spline, corridor, times=0)
    program.constrain(bounds)
    program.quieten(bounds)
    return program.solve()


class _Program:
    """A convex program about a spline: entries x + slack = right side, the slack in a cone.

    Parameters
    ----------
    times : int
        Unknown times: all N spans; 1, a common scale, as whose powers limits grow; or none.
    """

    def __init__(self, spline: Spline, corridor: Corridor, *, times: int) -> None:
        self.spline = spline
        self.corridor = corridor
        self.scales = times == 1
        self.column: list[Indices] = []
        self.unit = 1e-300
        count = 0
        for group in spline.groups:
            free = ~held_points(spline, group, corridor)
            columns = np.where(free, count - 1 + np.cumsum(free).reshape(free.shape), -1)
            count += int(free.sum())
            self.column.append(columns)
            self.unit = max(self.unit, float(np.abs(np.diff(group.points, axis=0)).mean()))
        self.time = slice(count, count + times)
        self.way = count + times
        self.cost = np.zeros(self.way + 2 * spline.spans.size)
        self.quadratic = sp.csc_matrix((self.cost.size, self.cost.size))
        self.count = self.first = 0
        self.parts: list[tuple[Indices, Indices, Array]] = []
        self.right: list[Array] = []
        self.linear: list[Indices] = []
        self.cones: list[object] = []
        self.marks: list[_Mark] = []
        self.velocity = [group.levels(spline.spans)[0].values for group in spline.groups]

    def constrain(self, bounds: Bounds) -> None:
        """Add the limits, the regions and the gates."""
        spline, corridor = self.spline, self.corridor
        for number, group in enumerate(spline.groups):
            levels = group.levels(spline.spans)
            side = sides(group, levels[0].values, bounds)
            limit = bounds.velocity[group.axes]
            self._rates(number, 0, levels[0], limit, side.velocity)
            self._rates(number, 1, levels[1], side.scale, side.acceleration)
            if group.degree == 3:
                both = np.ones_like(levels[2].values)
                self._rates(number, 2, levels[2], bounds.jerk[group.axes], (both, both))
            if bounds.linear[group.axes].any() and np.isfinite(bounds.speed).any():
                self._speed(number, levels[0], bounds)
        ways = np.arange(2 * spline.spans.size)
        for sign, right in ((-1.0, 0.0), (1.0, 1.0)):
            self.rows(np.full(ways.size, right))
            self.entries(ways, self.way + ways, np.full(ways.size, sign))
        inner = [inner_points(group, spline.spans) for group in spline.groups]
        intervals = np.arange(spline.spans.size)
        regions = corridor.regions.at(spline.region)
        for which in range(2):
            way = self.way + which * intervals.size + intervals
            self._inside(regions, [pair[which] for pair in inner], way, intervals)
        gates = spline.gates
        if gates.size:
            points = [node_points(group, spline.spans, gates) for group in spline.groups]
            self._inside(corridor.gates, points, np.full(gates.size, -1), gates)

    def quieten(self, bounds: Bounds) -> None:
        """Let the cost be the mean square of jerk (or acceleration) over its limit."""
        spline = self.spline
        blocks = []
        for number, group in enumerate(spline.groups):
            level = group.levels(spline.spans)[-1]
            limit = bounds.jerk if group.degree == 3 else bounds.acceleration
            weight = np.sqrt(spline.spans / spline.duration)
            for axis, column in enumerate(group.axes):
                own = min(float(limit[column]), float(np.abs(level.values).max()) + 1.0)
                rows = np.arange(len(level.values))[:, np.newaxis]
                points = rows + np.arange(level.by_points.shape[1])
                columns = self.column[number][points, axis]
                values = self.unit / own * weight[:, np.newaxis] * level.by_points
                kept = columns >= 0
                entries = (
                    values[kept],
                    (np.broadcast_to(rows, columns.shape)[kept], columns[kept]),
                )
                block = sp.csc_matrix(entries, shape=(len(rows), self.cost.size))
                blocks.append(block)
                self.cost += block.T @ (weight * level.values[:, axis] / own)
            for place in np.flatnonzero(group.axes == bounds.low):
                self._lowered(number, int(place))
        stacked = sp.vstack(blocks)
        self.quadratic = sp.triu(stacked.T @ stacked, format="csc")

    def _lowered(self, number: int, place: int) -> None:
        """Add the mean of an axis's control points to the cost, as a share of their range."""
        columns = self.column[number][:, place]
        free = columns[columns >= 0]
        size = float(np.ptp(self.spline.groups[number].points[:, place]))
        if size > 0:
            self.cost[free] += LOWNESS * self.unit / size / max(free.size, 1)

    def rows(self, right: Array, *, cone: int = 0) -> None:
        """Begin rows with these right sides; a cone has so many of them, 0: each its own."""
        self.first = self.count
        self.count += right.size
        self.right.append(right.reshape(-1))
        if cone:
            self.cones += [clarabel.SecondOrderConeT(cone)] * (right.size // cone)
        else:
            self.cones.append(clarabel.NonnegativeConeT(right.size))
            self.linear.append(np.arange(self.first, self.count))

    def priced(
        self, quantity: str, axis: int, interval: Indices, weight: Array, rows: Indices
    ) -> None:
        """Let multipliers of rows, times a weight, be prices; rows as for ``entries``."""
        held = np.clip(interval, 0, self.spline.spans.size - 1)
        self.marks.append(_Mark(Price(quantity, axis, held, weight), self.first + rows))

    def entries(self, rows: Indices, columns: Indices, values: Array) -> None:
        """Add entries in rows counted from the last first one; columns below 0 are no unknowns."""
        shape = np.broadcast_shapes(rows.shape, columns.shape, values.shape)
        self.parts.append(
            (
                _spread(rows + self.first, shape),
                _spread(columns, shape),
                _spread(values, shape),
            )
        )

    def solve(self, *, rough: bool = False) -> Outcome:
        """Return the spline that the solution stands for, with the multipliers.

        A rough solution is not refined, which halves the time.
        """
        rows, columns, values = (np.concatenate(part) for part in zip(*self.parts, strict=True))
        kept = (columns >= 0) & (values != 0)
        entries = (values[kept], (rows[kept], columns[kept]))
        matrix = sp.csc_matrix(entries, shape=(self.count, self.cost.size))
        right, empty = np.concatenate(self.right), np.ones(self.count, dtype=bool)
        empty[rows[kept]] = False
        # What no unknown can change, such as the bound at a fixed end, is no matter of this round.
        linear = np.concatenate(self.linear)
        right[linear[empty[linear]]] = 1.0
        settings = clarabel.DefaultSettings()
        settings.verbose = False
        settings.presolve_enable = False
        settings.max_iter = MOST_ITERATIONS
        settings.max_threads = 1
        settings.tol_gap_abs = settings.tol_gap_rel = ROUGH_ACCURACY if rough else ACCURACY
        settings.tol_feas = ACCURACY
        if rough:
            settings.iterative_refinement_enable = False
            settings.static_regularization_constant = REGULARISATION
        solution = clarabel.DefaultSolver(
            self.quadratic, self.cost, matrix, right, self.cones, settings
        ).solve()
        if str(solution.status) not in {"Solved", "AlmostSolved"}:
            return Outcome(None)
        multipliers = np.array(solution.z)
        prices = [
            mark.price._replace(value=mark.price.value * multipliers[mark.rows])
            for mark in self.marks
        ]
        return Outcome(self._moved(np.array(solution.x)), tuple(prices))

    def _moved(self, found: Array) -> Spline:
        """Return the spline with the changes found."""
        groups = []
        for group, columns in zip(self.spline.groups, self.column, strict=True):
            points = group.points.copy()
            free = columns >= 0
            points[free] += self.unit * found[columns[free]]
            groups.append(Group(group.degree, group.axes, points))
        spans = self.spline.spans
        if self.time.stop > self.time.start:
            spans = spans * (1 + found[self.time])
        return Spline(spans, self.spline.region, tuple(groups))

    def _span_entries(self, rows: Indices, first: Indices, values: Array) -> None:
        """Add entries for relative changes of spans from ``first`` on: values are per second."""
        if self.scales or self.time.stop == self.time.start:
            return
        spans = self.spline.spans
        index = first[..., np.newaxis] + np.arange(values.shape[-1])
        inside = (index >= 0) & (index < spans.size)
        held = np.clip(index, 0, spans.size - 1)
        columns = np.where(inside, self.time.start + held, -1)
        self.entries(rows[..., np.newaxis], columns, values * spans[held])

    def _scale_entries(self, rows: Indices, values: Array) -> None:
        """Add entries for the common scale of all spans, where it is an unknown."""
        if self.scales:
            self.entries(rows, np.array(self.time.start), values)

    def _rates(
        self, number: int, order: int, level: Level, limit: Array, side: tuple[Array, Array]
    ) -> None:
        """Add the rows that keep a derivative between its bounds, shares of a limit.

        They are a (2, g, n) array: below and above, axis, control value.
        """
        group = self.spline.groups[number]
        limited = np.flatnonzero(np.isfinite(limit))
        own = limit[limited, np.newaxis]
        sign = np.array([-1.0, 1.0])[:, np.newaxis, np.newaxis]
        share = np.stack([side[0][:, limited].T, side[1][:, limited].T])
        self.rows(share - sign * level.values[:, limited].T / own)
        index = np.arange(len(level.values))
        rows = np.arange(share.size).reshape(share.shape)
        self._price_rates(number, order, limited, sign * share)
        points = index[:, np.newaxis] + np.arange(level.by_points.shape[1])
        columns = self.column[number][points][:, :, limited].transpose(2, 0, 1)
        weight = (sign * self.unit / own)[..., np.newaxis]
        self.entries(rows[..., np.newaxis], columns, weight * level.by_points)
        self._scale_entries(rows, -(order + 1) * share)
        if order:
            by_spans = level.by_spans[..., limited].transpose(2, 0, 1)
            by_spans = sign[..., np.newaxis] * by_spans / own[..., np.newaxis]
        else:
            # Multiplied by the sum of spans, the bound on a velocity is linear as it is.
            by_spans = np.repeat(-(share / level.total)[..., np.newaxis], group.degree, -1)
        self._span_entries(rows, index - group.degree + 1, by_spans)

    def _price_rates(self, number: int, order: int, limited: Indices, signed: Array) -> None:
        """Mark the last rows as prices of a limit; an acceleration's by the axis's direction."""
        group = self.spline.groups[number]
        size = signed.shape[-1]
        # A velocity's row i is that of the interval before, in the middle of which it counts.
        index = np.arange(size) - (group.degree - 2 if order == 0 else 0)
        for place, (side, axis) in enumerate(np.ndindex(signed.shape[:-1])):
            column, own = int(group.axes[limited[axis]]), signed[side, axis]
            rows = place * size + np.arange(size)
            if order != 1:
                self.priced(("velocity", "", "jerk")[order], column, index, np.abs(own), rows)
                continue
            velocity = self.velocity[number][:, limited[axis]]
            there = 0.5 * (velocity[:size] + velocity[1 : 1 + size])
            slows = there * own < 0
            slowing, other = np.where(slows, np.abs(own), 0.0), np.where(slows, 0.0, np.abs(own))
            self.priced("deceleration", column, index, slowing, rows)
            self.priced("acceleration", column, index, other, rows)

    def _speed(self, number: int, level: Level, bounds: Bounds) -> None:
        """Add the cones that keep the speed along the path."""
        group = self.spline.groups[number]
        members = np.flatnonzero(bounds.linear[group.axes])
        limit = speed_bounds(group, self.spline, bounds)
        index = np.flatnonzero(np.isfinite(limit))
        limit, size = limit[index, np.newaxis], members.size + 1
        right = np.ones((index.size, size))
        right[:, 1:] = level.values[index][:, members] / limit
        self.rows(right, cone=size)
        rows = np.arange(index.size) * size
        self.priced("speed", -1, index - 1, np.ones(index.size), rows)
        self._scale_entries(rows, -np.ones(index.size))
        by_spans = np.repeat(-1 / level.total[index, np.newaxis], group.degree, 1)
        self._span_entries(rows, index - group.degree + 1, by_spans)
        for row, axis in enumerate(members, start=1):
            columns = self.column[number][index[:, np.newaxis] + np.arange(2), axis]
            weights = -self.unit / limit * level.by_points[index]
            self.entries(rows[:, np.newaxis] + row, columns, weights)

    def _inside(
        self, regions: Regions, points: list[Points], way: Indices, interval: Indices
    ) -> None:
        """Add the cones and rows that keep points, one in each region, inside."""
        values = self._values(points)
        count, size = len(values), regions.ball.shape[1] + 1
        if size > 1:
            right = np.ones((count, size))
            right[:, 1:] = np.einsum("nqd,nd->nq", regions.ball, values) - regions.centre
            self.rows(right, cone=size)
            rows = np.arange(count * size).reshape(count, size)
            self.priced("tolerance", -1, interval, np.ones(count), rows[:, 0])
            self.entries(rows[:, 1:], way[:, np.newaxis], -regions.ball_way)
            self._point_entries(rows[:, 1:], points, -regions.ball)
        if regions.bound.size:
            self.rows(regions.bound - np.einsum("nkd,nd->nk", regions.rows, values))
            each = np.arange(regions.bound.size).reshape(regions.bound.shape)
            if self.corridor.clear > 0:
                weight = np.full(len(values), self.corridor.clear)
                for row in each.T:
                    self.priced("clearance", -1, interval, weight, row)
            self.entries(each, way[:, np.newaxis], regions.rows_way)
            self._point_entries(each, points, regions.rows)

    def _values(self, points: list[Points]) -> Array:
        """Return the positions of all axes: (n, d)."""
        size = sum(len(group.axes) for group in self.spline.groups)
        values = np.zeros((len(points[0].values), size))
        for group, own in zip(self.spline.groups, points, strict=True):
            values[:, group.axes] = own.values
        return values

    def _point_entries(self, rows: Indices, points: list[Points], normals: Array) -> None:
        """Add the entries of positions times normals: rows (n, k), normals (n, k, d)."""
        for number, (group, own) in enumerate(zip(self.spline.groups, points, strict=True)):
            factor = normals[:, :, group.axes, np.newaxis]
            first = own.first[:, np.newaxis] + np.arange(own.by_points.shape[1])
            columns = self.column[number][first].transpose(0, 2, 1)[:, np.newaxis]
            by_points = own.by_points[:, np.newaxis, np.newaxis]
            self.entries(rows[..., np.newaxis, np.newaxis], columns, self.unit * factor * by_points)
            by_spans = np.einsum("nkg,nsg->nks", normals[:, :, group.axes], own.by_spans)
            self._span_entries(rows, own.span[:, np.newaxis], by_spans)


def _spread(values: npt.NDArray[Number], shape: tuple[int, ...]) -> npt.NDArray[Number]:
    """Return values in the order of a shape that they are spread over."""
    return (values if values.shape == shape else np.broadcast_to(values, shape)).ravel()


def held_points(spline: Spline, group: Group, corridor: Corridor) -> Flags:
    """Return which control points keep their place: (N + degree, g) array of bool.

    Those of the rests at both ends, and of the axes that stand still in the first or last region.
    """
    held = np.zeros(group.points.shape, dtype=bool)
    held[: group.degree] = held[-group.degree :] = True
    first, last = corridor.still[:, group.axes]
    begun = int(np.searchsorted(spline.region, 1)) + group.degree
    ended = int(np.searchsorted(spline.region, len(corridor.regions) - 1))
    held[:begun] |= first
    held[ended:] |= last
    return held


def speed_bounds(group: Group, spline: Spline, bounds: Bounds) -> Array:
    """Return the speed that each velocity control value of a group is allowed."""
    by_interval = bounds.speed[spline.region]
    padded = np.concatenate([np.full(group.degree - 1, np.inf), by_interval])
    padded = np.concatenate([padded, np.full(group.degree - 1, np.inf)])
    least: Array = np.lib.stride_tricks.sliding_window_view(padded, group.degree).min(axis=-1)
    return least


def _least_of_neighbours(values: Array) -> Array:
    """Return for every node the least of the intervals beside it: (N, g) → (N + 1, g)."""
    before = np.concatenate([values[:1], values])
    after = np.concatenate([values, values[-1:]])
    least: Array = np.minimum(before, after)
    return least
