"""Which is the shortest way in plan round what a tool cannot go over?

Along the straight lines between corners of obstacles that see each other (the visibility graph).

Source: Lozano-Perez, Wesley: An algorithm for planning collision-free paths among polyhedral
obstacles, Communications of the ACM 22 (1979) (from memory).
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import shapely
from scipy.sparse import csr_array
from scipy.sparse.csgraph import dijkstra

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.geometry.cell import Obstacle
    from profileplan.geometry.corridor import Array

ROUND = 2e-3
"""Share of an outline's size by which it may be grown to have fewer corners."""

MOST_CORNERS = 24
"""Corners of an outline from which on it is simplified."""

TOUCH = 1e-7
"""Way [mm] inside an outline that counts as touching it."""

MOST_LINES = 200_000
"""Most lines of sight that are looked at in one go."""


def detour(
    start: Array, end: Array, obstacles: Sequence[Obstacle], *, room: Array
) -> tuple[Array, ...] | None:
    """Return the corners of the shortest way round obstacles, or None where there is none.

    Parameters
    ----------
    start, end : (2,) arrays [mm]
    obstacles : sequence of Obstacle
        What is gone round.
    room : (2, 2) array [mm]
        Lowest and highest positions in plan.
    """
    whole = shapely.union_all([_simpler(obstacle.outline) for obstacle in obstacles])
    blocked = shapely.buffer(whole, -TOUCH)
    corners = shapely.get_coordinates(whole)
    inside = ((corners >= room[0]) & (corners <= room[1])).all(axis=1)
    points = np.concatenate([[start, end], np.unique(corners[inside], axis=0)])
    shapely.prepare(blocked)
    one, other = np.triu_indices(len(points), 1)
    seen = np.zeros(one.size, dtype=bool)
    for first in range(0, one.size, MOST_LINES):
        part = slice(first, first + MOST_LINES)
        lines = shapely.linestrings(np.stack([points[one[part]], points[other[part]]], axis=1))
        seen[part] = ~shapely.intersects(blocked, lines)
    one, other = one[seen], other[seen]
    length = np.hypot(*(points[one] - points[other]).T)
    graph = csr_array((length, (one, other)), shape=(len(points), len(points)))
    found = dijkstra(graph, directed=False, indices=np.array([0]), return_predecessors=True)
    distance, before = found[0][0], found[1][0]
    if not np.isfinite(distance[1]):
        return None
    way, at = [], int(before[1])
    while at > 0:
        way.append(points[at])
        at = int(before[at])
    return tuple(way[::-1])


def _simpler(outline: shapely.Polygon) -> shapely.Polygon:
    """Return an outline that contains another, with fewer corners where it has many."""
    if len(outline.exterior.coords) <= MOST_CORNERS:
        return outline
    low_x, low_y, high_x, high_y = outline.bounds
    slack = ROUND * max(high_x - low_x, high_y - low_y)
    grown = outline.simplify(slack).buffer(slack, join_style="mitre")
    return grown if grown.contains(outline) else outline
