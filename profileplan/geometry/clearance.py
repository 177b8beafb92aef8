"""How far are a body and a block from each other, while the body is shifted but never turned?

A body is a prism from its bottom upward, a block one from its top downward, so their distance is
that of a corner: the gap in plan and the gap in height as its legs. Where they overlap it is below
0: the smaller of what is missing in plan and in height. As a function of where the tool point is
it never changes faster than the tool point moves, and for convex bodies and blocks it is convex.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
import shapely

from profileplan.geometry.cell import difference

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.geometry.cell import Block, Body, Core
    from profileplan.geometry.corridor import Array


@dataclass(frozen=True, eq=False)
class Pair:
    """A convex part of a body, and one of a block.

    Parameters
    ----------
    body, block : Point or Polygon
        Convex cores.
    radius : float
        Sum of the radii round both cores [mm].
    top : float
        Height of the tool point at which the body is as high as the block [mm].
    """

    body: Core
    block: Core
    radius: float
    top: float

    @classmethod
    def of(cls, body: Body, block: Block) -> Iterator[Pair]:
        """Yield the pairs of parts of a body and a block."""
        radius = body.shape.radius + block.shape.radius
        for one in body.shape.parts:
            for other in block.shape.parts:
                yield cls(one, other, radius, block.top + body.below)

    @cached_property
    def _corners(self) -> Array:
        corners: Array = shapely.get_coordinates(self.body)
        return corners

    @cached_property
    def _sides(self) -> tuple[Array, Array]:
        """Outward normals, (m, 2), and offsets, (m,), of where the cores overlap."""
        hull = difference(self.block, self.body)
        corners: Array = shapely.get_coordinates(hull.normalize())
        along = np.diff(corners, axis=0)
        # A normalised outline runs clockwise, so outward is to the left.
        normals = np.stack([-along[:, 1], along[:, 0]], axis=1)
        normals /= np.hypot(along[:, 0], along[:, 1])[:, np.newaxis]
        return normals, (normals * corners[:-1]).sum(axis=1)

    def apart(self, points: Array) -> Array:
        """Return the distances with the tool point at points, (n, 3) → (n,) [mm]."""
        plan = points[:, :2]
        placed = (
            np.asarray(shapely.points(plan + self._corners))
            if isinstance(self.body, shapely.Point)
            else np.asarray(shapely.polygons(plan[:, np.newaxis] + self._corners))
        )
        gap = np.asarray(shapely.distance(placed, self.block))
        within = np.flatnonzero(gap == 0)
        round_ones = isinstance(self.body, shapely.Point) and isinstance(self.block, shapely.Point)
        if within.size and not round_ones:
            normals, offsets = self._sides
            gap[within] = np.minimum((plan[within] @ normals.T - offsets).max(axis=1), 0.0)
        return _joined(gap - self.radius, points[:, 2] - self.top)

    def at_least(self, low: Array, high: Array) -> Array:
        """Return lower bounds of the distances with the tool point in boxes, (n, 3) → (n,) [mm]."""
        box = self.body.bounds, self.block.bounds
        return _box_bound(box, self.radius, low, high, top=self.top)


def at_least(body: Body, block: Block, *, low: Array, high: Array) -> Array:
    """Return lower bounds of distances with the tool point in boxes, (n, 3) → (n,) [mm]."""
    radius = body.shape.radius + block.shape.radius
    box = body.shape.core.bounds, block.shape.core.bounds
    return _box_bound(box, radius, low, high, top=block.top + body.below)


def depth(body: Body, block: Block, points: Array) -> Array:
    """Return the distances with the tool point at points, (n, 3) → (n,) [mm].

    The whole of both counts, which may be deeper in each other than any of their parts are.
    """
    whole = difference(block.shape.core, body.shape.core)
    placed = np.asarray(shapely.points(points[:, :2]))
    gap = np.asarray(shapely.distance(placed, whole))
    gap = np.where(gap > 0, gap, -np.asarray(shapely.distance(placed, whole.boundary)))
    radius = body.shape.radius + block.shape.radius
    return _joined(gap - radius, points[:, 2] - block.top - body.below)


def _joined(one: Array, other: Array) -> Array:
    """Return the distance from gaps in two directions, (n,) each; below 0 for overlaps."""
    outside = np.hypot(np.maximum(one, 0.0), np.maximum(other, 0.0))
    joined: Array = np.where(outside > 0, outside, np.maximum(one, other))
    return joined


def _box_bound(
    boxes: tuple[tuple[float, ...], tuple[float, ...]],
    radius: float,
    low: Array,
    high: Array,
    *,
    top: float,
) -> Array:
    body, block = map(np.array, boxes)
    before = block[:2] - (high[:, :2] + body[2:])
    behind = low[:, :2] + body[:2] - block[2:]
    gap = np.maximum(before, behind)
    return _joined(_joined(gap[:, 0], gap[:, 1]) - radius, low[:, 2] - top)
