"""Through which free space does a tool go from one place to another, over what is in the way?

Heights are counted upward [mm]. Along the straight way in plan the obstacles make a skyline; over
each stretch of it the tool must be above, beside them it may come down. Free space is a chain of
convex regions: for every stretch the space above its height, as far on both sides as the skyline
is no higher; where the tool is free in plan, the side of each higher obstacle on which the stretch
lies. Below the places themselves it never goes.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import shapely

from profileplan.geometry.corridor import Corridor, Regions

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from profileplan.geometry.cell import Obstacle
    from profileplan.geometry.corridor import Array

SHORTEST = 1e-9
"""Way [mm] over an obstacle below which it is only touched."""

HEIGHT_ROOM = 0.01
"""Distance [mm] below a height asked for that counts as reaching it."""

END_ROOM = 0.01
"""Way [mm] beyond its ends that the straight way in plan is let have, as no search ends on edge."""

CLEAR = 1e-9
"""Height [mm] by which rounding may put a place too low."""


@dataclass(frozen=True, eq=False)
class Errand:
    """From where to where a tool goes, and how.

    Parameters
    ----------
    start, end : (3,) arrays [mm]
        In plan, and the height.
    roof : float [mm]
        Greatest height there is.
    room : (2, 2) array [mm]
        Lowest and highest positions in plan.
    height : float, optional [mm]
        Highest point asked for.
    lift, lower : float [mm]
        Least straight ways up and down at both ends.
    free : bool
        Whether the tool may leave the straight way in plan.
    via : tuple of (2,) arrays [mm]
        Corners of the way in plan, where it leads round something; the tool is free then.
    """

    start: Array
    end: Array
    roof: float
    room: Array
    height: float | None = None
    lift: float = 0.0
    lower: float = 0.0
    free: bool = False
    via: tuple[Array, ...] = ()

    @property
    def corners(self) -> Array:
        """The way in plan: (k, 2) [mm]."""
        return np.array([self.start[:2], *self.via, self.end[:2]])

    @property
    def length(self) -> float:
        """Length of the way in plan [mm]."""
        legs = np.diff(self.corners, axis=0)
        return float(np.hypot(legs[:, 0], legs[:, 1]).sum())


class Blocked(NamedTuple):
    """Why there is no way over: an obstacle, the height needed there, and the height there is."""

    obstacle: str
    body: str
    needed: float
    there: float
    where: str


class _Stretch(NamedTuple):
    """A straight part of the way in plan, with the least height there.

    first, last : how far along the way it begins and ends [mm]; begin, end : (2,) arrays [mm].
    """

    first: float
    last: float
    begin: Array
    end: Array
    height: float
    over: tuple[Obstacle, ...]


class _Rows(NamedTuple):
    """Linear bounds of a region: normals (k, d) and bounds (k,)."""

    normals: Array
    bounds: Array


def over(errand: Errand, obstacles: Sequence[Obstacle]) -> Corridor | Blocked:
    """Return the free space over obstacles from one place to another.

    Parameters
    ----------
    errand : Errand
    obstacles : sequence of Obstacle

    Returns
    -------
    Corridor or Blocked
        Columns: the way in plan and the height, or x, y and the height where the tool is free.
    """
    skyline = _skyline(errand, obstacles)
    blocked = _blocked(errand, skyline)
    if blocked is not None:
        return blocked
    chain = _Chain(errand)
    if errand.lift:
        chain.add(_lifted(errand, errand.start))
        raised = float(errand.start[2]) + errand.lift
        chain.through(0.0, errand.start[:2], raised, least=raised)
    top = max(range(len(skyline)), key=lambda number: (skyline[number].height, number))
    for number, stretch in enumerate(skyline):
        rows = _region(errand, obstacles, skyline, number)
        if number:
            sides = (skyline[number - 1].height, stretch.height)
            floors = (_floor(errand, index, len(skyline)) for index in (number - 1, number))
            chain.through(stretch.first, stretch.begin, max(*sides, *floors))
        chain.add(rows)
        if errand.height is not None and number == top:
            middle = 0.5 * (stretch.begin + stretch.end)
            along = 0.5 * (stretch.first + stretch.last)
            chain.through(along, middle, errand.height, least=errand.height - HEIGHT_ROOM)
            chain.add(rows)
    if errand.lower:
        raised = float(errand.end[2]) + errand.lower
        chain.through(errand.length, errand.end[:2], raised, least=raised)
        chain.add(_lifted(errand, errand.end))
    return chain.corridor()


def edges(errand: Errand, obstacles: Sequence[Obstacle]) -> tuple[Array, Array]:
    """Return from where and up to where on the way the tool must be above which height.

    Returns
    -------
    rising : (k, 2) array [mm]
        Along the way, and the height that it must have from there on, on the way over something.
    falling : (k, 2) array [mm]
        The same for where it must have a height up to there.
    """
    walls = [stretch for stretch in _skyline(errand, obstacles) if np.isfinite(stretch.height)]
    start, end = float(errand.start[2]), float(errand.end[2])
    rising = [(wall.first, wall.height) for wall in walls]
    falling = [(wall.last, wall.height) for wall in walls]
    # Straight up and down come before and after all of the way.
    rising.append((0.0, start + errand.lift))
    falling.append((errand.length, end + errand.lower))
    return np.array(rising), np.array(falling)


def _skyline(errand: Errand, obstacles: Sequence[Obstacle]) -> list[_Stretch]:
    """Return the stretches of the way between which the least height changes, leg by leg."""
    found: list[_Stretch] = []
    passed = 0.0
    for begin, end in pairwise(errand.corners):
        length = float(np.hypot(*(end - begin)))
        leg = [
            _Stretch(
                passed + one * length,
                passed + other * length,
                begin + one * (end - begin),
                begin + other * (end - begin),
                max((obstacle.top for obstacle in over), default=-np.inf),
                over,
            )
            for one, other, over in _covered(begin, end, obstacles)
        ]
        joined: list[_Stretch] = []
        for stretch in leg:
            if joined and joined[-1].height == stretch.height:
                over = (*joined[-1].over, *stretch.over)
                joined[-1] = joined[-1]._replace(last=stretch.last, end=stretch.end, over=over)
            else:
                joined.append(stretch)
        found += joined
        passed += length
    return found


def _covered(
    begin: Array, end: Array, obstacles: Sequence[Obstacle]
) -> Iterator[tuple[float, float, tuple[Obstacle, ...]]]:
    """Yield shares of a leg between which the same obstacles lie under it."""
    leg, length = shapely.LineString([begin, end]), float(np.hypot(*(end - begin)))
    spans: list[tuple[float, float, Obstacle]] = []
    for obstacle in obstacles:
        if length <= SHORTEST:
            if shapely.contains_properly(obstacle.outline, shapely.Point(begin)):
                spans.append((0.0, 1.0, obstacle))
            continue
        for part in shapely.get_parts(shapely.intersection(leg, obstacle.outline)):
            # Along an edge an obstacle is touched, and not passed over.
            if part.length > SHORTEST and obstacle.outline.contains(part.centroid):
                ends = [leg.project(shapely.Point(at)) / length for at in part.coords]
                spans.append((min(ends), max(ends), obstacle))
    cuts = sorted({0.0, 1.0, *(end for span in spans for end in span[:2])})
    for one, other in pairwise(cuts):
        middle = 0.5 * (one + other)
        yield one, other, tuple(span[2] for span in spans if span[0] < middle < span[1])


def _blocked(errand: Errand, skyline: Sequence[_Stretch]) -> Blocked | None:
    """Return what stands in the way for good, the worst of all."""
    roof = errand.roof if errand.height is None else min(errand.roof, errand.height)
    places = (
        ("at the start", float(errand.start[2]), skyline[0]),
        ("at the end", float(errand.end[2]), skyline[-1]),
        *(("on the way", roof, stretch) for stretch in skyline),
    )
    for where, there, stretch in places:
        if stretch.height > there + CLEAR:
            worst = max(stretch.over, key=lambda obstacle: obstacle.top)
            return Blocked(worst.name, worst.body, stretch.height, there, where)
    straight = max(errand.start[2] + errand.lift, errand.end[2] + errand.lower)
    if straight > roof + CLEAR:
        return Blocked("", "", float(straight), roof, "straight up")
    return None


def _floor(errand: Errand, number: int, count: int) -> float:
    """Return how low the tool may come in a stretch beside obstacles."""
    start, end = float(errand.start[2]), float(errand.end[2])
    if number == 0:
        return start
    return end if number == count - 1 else min(start, end)


def _region(
    errand: Errand, obstacles: Sequence[Obstacle], skyline: Sequence[_Stretch], number: int
) -> _Rows:
    """Return the bounds of the free space of a stretch."""
    stretch = skyline[number]
    first = last = number
    while first > 0 and skyline[first - 1].height <= stretch.height:
        first -= 1
    while last + 1 < len(skyline) and skyline[last + 1].height <= stretch.height:
        last += 1
    rows = [_above(errand, stretch, number, len(skyline)), _below(errand)]
    ends = (skyline[first].first, skyline[last].last)
    if not errand.free:
        whole = errand.length
        rows += _between((ends[0] or -END_ROOM, ends[1] if ends[1] < whole else whole + END_ROOM))
    else:
        rows += _beside(errand, obstacles, stretch)
    return _Rows(np.array([row for row, _ in rows]), np.array([bound for _, bound in rows]))


def _above(errand: Errand, stretch: _Stretch, number: int, count: int) -> tuple[list[float], float]:
    plan = [0.0, 0.0] if errand.free else [0.0]
    if np.isfinite(stretch.height):
        return [*plan, -1.0], -stretch.height
    if count > 1 or errand.length <= SHORTEST:
        floor = _floor(errand, number, count)
        if count == 1:
            floor = min(float(errand.start[2]), float(errand.end[2]))
        return [*plan, -1.0], -floor
    # With nothing in the way it stays above the straight line.
    rise = float(errand.end[2] - errand.start[2]) / errand.length
    if not errand.free:
        return [rise, -1.0], -float(errand.start[2])
    course = (errand.end - errand.start)[:2] / errand.length
    along = rise * course
    return [*along.tolist(), -1.0], float(along @ errand.start[:2] - errand.start[2])


def _below(errand: Errand) -> tuple[list[float], float]:
    roof = errand.roof if errand.height is None else min(errand.roof, errand.height)
    return [*([0.0, 0.0] if errand.free else [0.0]), 1.0], roof


def _between(ends: tuple[float, float]) -> list[tuple[list[float], float]]:
    return [([-1.0, 0.0], -ends[0]), ([1.0, 0.0], ends[1])]


def _beside(
    errand: Errand, obstacles: Sequence[Obstacle], stretch: _Stretch
) -> list[tuple[list[float], float]]:
    """Return for each higher obstacle the side of it on which a stretch lies."""
    part = shapely.LineString([stretch.begin, stretch.end])
    low, high = errand.room.tolist()
    rows = [([-1.0, 0.0, 0.0], -low[0]), ([0.0, -1.0, 0.0], -low[1])]
    rows += [([1.0, 0.0, 0.0], high[0]), ([0.0, 1.0, 0.0], high[1])]
    for obstacle in obstacles:
        if obstacle.top <= stretch.height:
            continue
        for piece in _convex(obstacle.outline, part):
            normal, bound = _side(piece, part)
            rows.append(([*normal.tolist(), 0.0], bound))
    return rows


def _convex(outline: shapely.Polygon, part: shapely.LineString) -> Iterator[shapely.Polygon]:
    """Yield convex pieces of an outline: its hull, if a part of the way is outside of it."""
    hull = outline.convex_hull
    if shapely.intersection(hull, part).length <= SHORTEST and isinstance(hull, shapely.Polygon):
        yield hull
        return
    yield from shapely.get_parts(shapely.constrained_delaunay_triangles(outline))


def _side(piece: shapely.Polygon, part: shapely.LineString) -> tuple[Array, float]:
    """Return the edge line of a convex piece, (2,) and bound, that a part of the way is beyond.

    Beyond is n p <= bound. Of all edges that have the whole part beyond the farthest is taken.
    """
    corners = shapely.get_coordinates(shapely.normalize(piece).exterior)
    if not shapely.is_ccw(shapely.normalize(piece).exterior):
        corners = corners[::-1]
    along = np.diff(corners, axis=0)
    length = np.hypot(along[:, 0], along[:, 1])
    kept = length > SHORTEST
    outward = np.stack([along[:, 1], -along[:, 0]], axis=1)[kept] / length[kept, np.newaxis]
    from_edge = (outward * corners[:-1][kept]).sum(axis=1)
    points = shapely.get_coordinates(part)
    apart = (points @ outward.T - from_edge).min(axis=0)
    best = int(apart.argmax())
    # Touching is as near as it gets: rounding may put an end of the part inside.
    return -outward[best], -float(from_edge[best] + min(apart[best], 0.0))


def _lifted(errand: Errand, place: Array) -> _Rows:
    """Return the bounds of the straight way up or down at a place."""
    plan = [0.0, 0.0] if errand.free else [0.0]
    rows = [([*plan, -1.0], -float(place[2])), _below(errand)]
    return _Rows(np.array([row for row, _ in rows]), np.array([bound for _, bound in rows]))


class _Chain:
    """Regions one after the other, with the places that gates are passed at."""

    def __init__(self, errand: Errand) -> None:
        self.errand = errand
        self.regions: list[_Rows] = []
        self.places: list[list[float]] = []
        self.least: list[float] = []

    def add(self, rows: _Rows) -> None:
        """Add a region."""
        self.regions.append(rows)

    def through(self, along: float, place: Array, height: float, least: float = -np.inf) -> None:
        """Go on through a gate at a place and a height, not below a least one."""
        self.places.append(self._at(along, place, height))
        self.least.append(least)

    def corridor(self) -> Corridor:
        """Return the chain as a corridor."""
        errand = self.errand
        first = self._at(0.0, errand.start[:2], float(errand.start[2]))
        last = self._at(errand.length, errand.end[:2], float(errand.end[2]))
        points = np.array([first, *self.places, last])
        up = -np.eye(points.shape[1])[-1:]
        gates = [
            _Rows(
                np.concatenate([one.normals, other.normals, up]),
                np.concatenate([one.bounds, other.bounds, [-least]]),
            )
            for (one, other), least in zip(pairwise(self.regions), self.least, strict=True)
        ]
        still = np.ones((2, points.shape[1]), dtype=bool)
        still[0] &= bool(errand.lift)
        still[1] &= bool(errand.lower)
        still[:, -1] = False
        return Corridor(
            regions=_as_regions(self.regions, points.shape[1]),
            gates=_as_regions(gates, points.shape[1]),
            points=points,
            still=still,
            clear=max(float(np.ptp(points[:, -1])), 1.0),
        )

    def _at(self, along: float, place: Array, height: float) -> list[float]:
        return [*(place.tolist() if self.errand.free else [along]), height]


def _as_regions(rows: Sequence[_Rows], columns: int) -> Regions:
    """Return bounds as regions; those with fewer rows get some that always hold."""
    count, most = len(rows), max((len(own.bounds) for own in rows), default=0)
    normals, bounds = np.zeros((count, most, columns)), np.ones((count, most))
    for number, own in enumerate(rows):
        finite = np.isfinite(own.bounds)
        normals[number, : len(own.bounds)][finite] = own.normals[finite]
        bounds[number, : len(own.bounds)][finite] = own.bounds[finite]
    return Regions(
        ball=np.zeros((count, 0, columns)),
        ball_way=np.zeros((count, 0)),
        centre=np.zeros((count, 0)),
        rows=normals,
        rows_way=np.zeros((count, most)),
        bound=bounds,
    )
