"""What is to be seen of a plan in space: from above, and from the side?

Positions are those of the axes: across is the first horizontal axis, along the second, height the
up axis, each as the machine counts it [mm].
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.inputs import PathStep, Payload, Trace

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.inputs import Machine, Tool
    from profileplan.motion.polynomials import Array, Flags, Indices
    from profileplan.results import PlannedCycle

CORNERS = 48
"""Corners of what is drawn for a circle."""

FLATTENED = 0.1
"""Share of a tolerance by which what is drawn may differ from a curve."""

FINE = 0.02
"""The same share of one that is magnified."""

COARSE = 2e-4
"""The same as a share of what is in view, where the tolerance is finer than can be seen."""

SEEN = 0.02
"""Share of what is in view that the tolerance is magnified to."""

BEND = 0.2
"""Share of a tolerance by which the motion may differ from what is drawn of it."""

ROOM = 0.3
"""Share of the size of what is followed that its tolerance is magnified to at most."""

INSTANTS = 6_000
"""About as many instants of a motion of few pieces are drawn in space."""

A_PIECE = 4
"""Instants of every piece of a motion of many; those that bend the way are kept."""

MOST_INSTANTS = 40_000
"""No more are drawn in space: the motion from the beginning on."""

SPEEDS = 5
"""Classes of speed that are told apart."""


class Side(NamedTuple):
    """A view: "plan" or "side", and the axes to the right and upward; None: the axis is not there.

    ``falls`` where the second axis counts downward.
    """

    name: str
    right: str
    up: str | None
    falls: bool = False

    @property
    def label(self) -> str:
        """What it is called."""
        return f"{self.name} view"


class Standing(NamedTuple):
    """A keep-out: its name, its outlines in plan, (n, 2) each, up to where it blocks [mm]."""

    name: str
    outlines: tuple[Array, ...]
    top: float | None


class Hanging(NamedTuple):
    """What hangs at the tool from one time to another [s].

    outline : (n, 2) array round the tool point, or None; below [mm]; mass [kg].
    """

    start: float
    end: float
    outline: Array | None
    below: float
    mass: float


class Drawn(NamedTuple):
    """A line to follow: in which step, (n, 3) across, along and height, how near [mm], when [s]."""

    step: int
    line: Array
    tolerance: float
    start: float
    end: float


class Meeting(NamedTuple):
    """The smallest clearance: how much, how much is kept, between what, when, and where.

    gap : (2, 2) array, the shortest line in plan; heights : of what is over the keep-out and of the
    keep-out, None where it is not over it.
    """

    value: float
    margin: float
    what: str
    time: float
    gap: Array
    heights: tuple[float, float] | None


@dataclass(frozen=True, eq=False)
class Scene:
    """A plan as seen in space.

    Parameters
    ----------
    planned : PlannedCycle
    """

    planned: PlannedCycle

    @property
    def machine(self) -> Machine:
        """The machine."""
        return self.planned.job.machine

    @cached_property
    def sides(self) -> tuple[Side, ...]:
        """The views that the axes of the machine allow."""
        across, up = self.machine.horizontal_axes[:2], self.machine.up_axis
        found = []
        if len(across) == 2 or (across and up is None):
            found.append(Side("plan", across[0], across[1] if len(across) == 2 else None))
        if up is not None:
            falls = self.machine.up_sign < 0
            found += [Side("side", name, up, falls) for name in across[:1]]
        return tuple(found)

    @cached_property
    def columns(self) -> tuple[int | None, int | None, int | None]:
        """Which axes are across, along and height, counted from 0."""
        names = list(self.machine.axis_names)
        across = [names.index(name) for name in self.machine.horizontal_axes[:2]]
        up = None if self.machine.up_axis is None else names.index(self.machine.up_axis)
        first, second = [*across, None, None][:2]
        return first, second, up

    def seen(self, positions: Array) -> Array:
        """Return positions of all axes, (m, d), as across, along and height, (m, 3); 0 for none."""
        found = np.zeros((len(positions), 3))
        for column, axis in enumerate(self.columns):
            if axis is not None:
                found[:, column] = positions[:, axis]
        return found

    @cached_property
    def keepouts(self) -> tuple[Standing, ...]:
        """The keep-outs, in file order."""
        if not self.machine.keepouts:
            return ()
        # shapely costs more start-up than all else: only a cell pays for it.
        import shapely  # noqa: PLC0415

        from profileplan.geometry.cell import blocks  # noqa: PLC0415

        rings: dict[str, list[Array]] = {}
        for block in blocks(self.machine):
            rings.setdefault(block.name, []).append(
                np.asarray(shapely.get_coordinates(shapely.get_exterior_ring(block.outline)))
            )
        tops = {keepout.name: keepout.top for keepout in self.machine.keepouts}
        return tuple(Standing(name, tuple(own), tops[name]) for name, own in rings.items())

    @cached_property
    def tool(self) -> Array | None:
        """The tool's footprint round the tool point, (n, 2); None for a point."""
        return self._footprint(self.machine.tool)

    @cached_property
    def hanging(self) -> tuple[Hanging, ...]:
        """What hangs at the tool, one after the other; nothing where nothing does."""
        found: list[Hanging] = []
        for asked, step in zip(self.planned.job.cycle.steps, self.planned.steps, strict=True):
            if not isinstance(asked, Payload):
                continue
            if found and math.isinf(found[-1].end):
                found[-1] = found[-1]._replace(end=step.start)
            outline = self._footprint(asked)
            below, mass = asked.below or 0.0, asked.mass or 0.0
            if outline is not None or below or mass:
                found.append(Hanging(step.start, math.inf, outline, below, mass))
        last = self.planned.duration
        return tuple(own._replace(end=min(own.end, last)) for own in found)

    @cached_property
    def drawn(self) -> tuple[Drawn, ...]:
        """The lines that paths and drawings ask for, in order."""
        return tuple(self._drawn())

    @cached_property
    def extent(self) -> Array:
        """The least and the greatest position, (2, 3) [mm]: of the motion and of what stands."""
        low, high = self.planned.trajectory.extremes()
        ends = [self.seen(np.stack([low.value, high.value]))]
        for standing in self.keepouts:
            for outline in standing.outlines:
                corners = np.full((len(outline), 3), np.nan)
                corners[:, :2] = outline
                ends.append(corners)
        points = np.concatenate(ends)
        return np.stack([np.nanmin(points, axis=0), np.nanmax(points, axis=0)])

    @property
    def size(self) -> float:
        """The greater extent in plan, or in height if that is all [mm]."""
        spans = np.diff(self.extent, axis=0)[0]
        return float(spans[:2].max() or spans.max() or 1.0)

    @cached_property
    def magnifications(self) -> tuple[int, ...]:
        """By how much deviations are shown larger: 1, and where tolerances are small, more."""
        allowed = max((own.tolerance for own in self.drawn), default=0.0)
        if not allowed:
            return (1,)
        # Larger bands of small outlines would cover each other.
        spans = [np.ptp(own.line[:, :2], axis=0).max() for own in self.drawn if own.tolerance]
        most = min(SEEN * self.size, ROOM * float(np.median(spans)) or math.inf) / allowed
        round_ones = [factor * 10**decade for decade in range(7) for factor in (1, 2, 5)]
        larger = [factor for factor in round_ones if 1 < factor <= most]
        # The greatest, and the last but two.
        return (1, *larger[:-4:-2][::-1])

    def bands(self, factor: float) -> tuple[tuple[Array, ...], ...]:
        """Return what is within the tolerance, magnified, in plan: polygons.

        Each is its outer ring, (n, 2), and those of its holes.
        """
        if not any(own.tolerance for own in self.drawn):
            return ()
        import shapely  # noqa: PLC0415

        allowed: dict[tuple[int, float], list[Array]] = {}
        for own in self.drawn:
            if own.tolerance and len(np.unique(own.line[:, :2], axis=0)) > 1:
                allowed.setdefault((own.step, own.tolerance), []).append(own.line[:, :2])
        found = []
        for (_, tolerance), lines in allowed.items():
            radius = tolerance * factor
            whole = shapely.MultiLineString([shapely.LineString(line) for line in lines])
            fine = FINE if factor > 1 else FLATTENED
            band = shapely.simplify(shapely.buffer(whole, radius, quad_segs=6), fine * radius)
            for part in getattr(band, "geoms", [band]):
                rings = [part.exterior, *part.interiors]
                found.append(tuple(np.asarray(shapely.get_coordinates(ring)) for ring in rings))
        return tuple(found)

    @cached_property
    def times(self) -> Array:
        """Instants between which the motion is drawn as straight, (m,) [s].

        Among them are the ends of steps and of what is followed.
        """
        motion = self.planned.trajectory
        share = np.linspace(
            0.0, 1.0, max(A_PIECE, INSTANTS // motion.durations.size), endpoint=False
        )
        within = motion.breaks[:-1, np.newaxis] + motion.durations[:, np.newaxis] * share
        ends = np.array(
            [
                *(0.0, motion.duration),
                *(step.start for step in self.planned.steps),
                *(time for own in self.drawn for time in (own.start, own.end)),
            ]
        )
        ends = np.unique(np.clip(ends, 0.0, motion.duration))
        times = np.unique(np.concatenate([within.ravel(), ends]))
        if times.size > 2 * INSTANTS:
            times = times[self._needed(times, np.searchsorted(times, ends))]
        return times[:MOST_INSTANTS]

    def _needed(self, times: Array, cuts: Indices) -> Flags:
        """Tell which instants bend the way or change the class of speed; those at cuts do, too."""
        import shapely  # noqa: PLC0415

        near = np.full(cuts.size - 1, COARSE * self.size)
        for own in self.drawn:
            if own.tolerance:
                first, last = np.searchsorted(times[cuts], [own.start, own.end])
                near[first:last] = np.minimum(near[first:last], BEND * own.tolerance)
        needed = np.zeros(times.size, dtype=bool)
        needed[cuts] = True
        needed[1:-1] |= np.diff(self.speed_classes(times)) != 0
        way = self.seen(self.planned.trajectory.at(times))
        runs = np.repeat(np.arange(near.size), np.diff(cuts) + 1)
        index = np.arange(runs.size) - runs
        for columns in ([0, 1], [0, 2], [1, 2]):
            # The third coordinate tells which corners are left.
            corners = np.column_stack([way[:, columns], np.arange(times.size)])[index]
            lines = shapely.linestrings(corners, indices=runs)
            left = shapely.simplify(lines, near, preserve_topology=False)
            needed[shapely.get_coordinates(left, include_z=True)[:, 2].astype(np.intp)] = True
        return needed

    @cached_property
    def top_speed(self) -> float:
        """The greatest speed of the linear axes together [mm/s], exactly."""
        return float(self.planned.trajectory.speeds(self.machine.linear).value.max())

    def speed_classes(self, times: Array, classes: int = SPEEDS) -> Indices:
        """Return the class of speed between each two of (m,) times [s], from 0: (m - 1,)."""
        middles = 0.5 * (times[1:] + times[:-1])
        velocity = self.planned.trajectory.at(middles, 1)[:, list(self.machine.linear)]
        share = np.linalg.norm(velocity, axis=1) / (self.top_speed or 1.0)
        found: Indices = np.clip(np.floor(share * classes), 0, classes - 1).astype(np.intp)
        return found

    @cached_property
    def feet(self) -> Array:
        """The point of what is drawn that is nearest in plan, at each of the times: (m, 2) [mm].

        Not a number where the motion follows no line within a tolerance.
        """
        feet = np.full((self.times.size, 2), np.nan)
        followed = [own for own in self.drawn if own.tolerance and len(own.line) > 1]
        if not followed:
            return feet
        import shapely  # noqa: PLC0415

        there = self.seen(self.planned.trajectory.at(self.times))[:, :2]
        for own in followed:
            first = np.searchsorted(self.times, own.start)
            inside = slice(int(first), int(np.searchsorted(self.times, own.end, side="right")))
            line = shapely.linestrings(own.line[:, :2])
            way = shapely.line_locate_point(line, shapely.points(there[inside]))
            nearest = shapely.line_interpolate_point(line, way)
            feet[inside] = shapely.get_coordinates(nearest)
        return feet

    @cached_property
    def meeting(self) -> Meeting | None:
        """Where the clearance is smallest; None where there is nothing to keep clear of."""
        finding = next((own for own in self.planned.check() if own.check == "clearance"), None)
        if finding is None or finding.time is None:
            return None
        import shapely  # noqa: PLC0415

        from profileplan.geometry.cell import blocks, bodies  # noqa: PLC0415

        payload = self._payload(finding.step)
        own, _, other = finding.what.partition(" to ")
        body = next(body for body in bodies(self.machine, payload) if body.name == own)
        at = self.seen(self.planned.trajectory.at([finding.time]))[0]
        moved = shapely.transform(body.footprint, lambda corners: corners + at[:2])
        lines = [
            shapely.shortest_line(moved, block.outline)
            for block in blocks(self.machine)
            if block.name == other
        ]
        nearest = min(lines, key=shapely.length)
        heights = None
        top = next(keepout.top for keepout in self.machine.keepouts if keepout.name == other)
        if top is not None:
            bottom = float(at[2] - self.machine.up_sign * body.below)
            over = self.machine.up_sign * (bottom - top) > 0
            heights = (bottom, top) if over else None
        gap = np.asarray(shapely.get_coordinates(nearest))
        return Meeting(finding.value, finding.limit, finding.what, finding.time, gap, heights)

    def _payload(self, step: str | None) -> Payload | None:
        """Return what hangs at the tool in a step."""
        payload = None
        for asked, own in zip(self.planned.job.cycle.steps, self.planned.steps, strict=True):
            payload = asked if isinstance(asked, Payload) else payload
            if own.name == step:
                break
        return payload

    def _footprint(self, of: Tool | Payload) -> Array | None:
        """Return a footprint, (n, 2); what a rotary axis turns counts as the circle it sweeps.

        ``geometry.cell`` has it as a shape; a page without keep-outs need not load that.
        """
        radius = of.radius
        if of.outline is not None:
            corners = np.array(of.outline, dtype=np.float64)
            if all(self.machine.linear):
                return corners
            radius = float(np.hypot(*corners.T).max())
        if not radius:
            return None
        angle = np.linspace(0, 2 * np.pi, CORNERS, endpoint=False)
        return radius * np.stack([np.cos(angle), np.sin(angle)], axis=1)

    def _drawn(self) -> Iterator[Drawn]:
        job = self.planned.job
        for index, (asked, step) in enumerate(
            zip(job.cycle.steps, self.planned.steps, strict=True)
        ):
            if isinstance(asked, PathStep):
                start = self.planned.positions[index]
                points = np.array([start, *job.points(index, start)])
                yield Drawn(index, self.seen(points), asked.tolerance, step.start, step.end)
            elif isinstance(asked, Trace):
                yield from self._traced(index, asked)

    def _traced(self, index: int, asked: Trace) -> Iterator[Drawn]:
        """Yield the outlines of a drawing, as they are placed."""
        step = self.planned.steps[index]
        base = self.seen(np.array([self.planned.positions[index]]))[0]
        if self.machine.up_axis is not None:
            base[2] = asked.at.get(self.machine.up_axis, base[2])
        outlines = self.planned.drawn[index].outlines
        for outline, times in zip(outlines, step.tracing, strict=True):
            error = FLATTENED * asked.tolerance or COARSE * max(outline.length, 1.0)
            points = outline.pieces.flattened(error)[0].copy()
            points[:, 2] = base[2] + self.machine.up_sign * points[:, 2]
            start, end = step.start + times.enters, step.start + times.leaves
            yield Drawn(index, points, asked.tolerance, start, end)
