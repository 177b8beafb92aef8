"""With how few straight tubes does a drawn outline get covered, inside its tolerance?

A tube round a straight leg stands for all of the outline that is near the leg: a chain of short
chords, or an arc. Its half-width is the tolerance less the distance between leg and outline, so
every point of a tube is within the tolerance of what is drawn; and since the legs follow the
outline from one end to the other, every drawn point is within the tolerance of a motion that passes
the tubes in order. True corners stay corners: a leg ends there.

Source: legs are found by narrowing a sector of directions, Williams: An efficient algorithm for the
piecewise linear approximation of planar curves, Computer Graphics and Image Processing 8 (1978)
(from memory); legs are then moved to the middle of what they stand for. Distances are measured
afterwards, and only the measured ones are relied upon.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from profileplan.geometry.corridor import Array, Indices
    from profileplan.geometry.shapes import Pieces

LEG_SHARE = 0.25
"""Distance between leg and outline, as a share of the tolerance, that the legs are sought for."""

FLAT_SHARE = 0.02
"""Sagitta of the chords that stand for arcs, as a share of the tolerance."""

MOST_SHARE = 0.6
"""Measured distance, as a share of the tolerance, above which a leg is cut in two."""

MOVED_TURN = math.cos(math.radians(75))
"""Cosine of the turn between legs from which on their common point stays on the drawing."""


@dataclass(frozen=True, eq=False)
class Sleeve:
    """Straight legs along an outline, and how wide the tubes round them are.

    Parameters
    ----------
    points : (m + 1, 3) array [mm]
        Ends of the legs, in order; the first and the last are those of the outline.
    radius : (m,) array [mm]
        Half-width of each tube, above 0.
    apart : float [mm]
        Greatest distance between a leg and what it stands for.
    """

    points: Array
    radius: Array
    apart: float


def sleeve(pieces: Pieces, *, tolerance: float) -> Sleeve:
    """Return legs along pieces that follow each other, as few as the tolerance allows.

    Parameters
    ----------
    pieces : Pieces
        Each begins where the one before ends.
    tolerance : float [mm]
        Above 0.
    """
    flat = FLAT_SHARE * tolerance if pieces.bulge.any() else 0.0
    points, _, _ = pieces.flattened(FLAT_SHARE * tolerance)
    cuts = _legs(points[:, :2], 2 * LEG_SHARE * tolerance)
    most = MOST_SHARE * tolerance
    while True:
        ends, apart, worst = _best_ends(points, cuts)
        # A leg between neighbouring points is the drawing itself: it cannot be cut.
        wide = (apart + flat > most) & (np.diff(cuts) > 1)
        if not wide.any():
            return Sleeve(ends, tolerance - flat - apart, float(apart.max()) + flat)
        cuts = np.union1d(cuts, worst[wide])


def _legs(points: Array, width: float) -> Indices:
    """Return which points legs end at so that those between are within a width of the leg's line.

    From the last cut a sector of directions is narrowed by each point that the leg is to pass; the
    leg ends at the last point in the sector before it closes, or before the way turns back.
    """
    x, y = points[:, 0].tolist(), points[:, 1].tolist()
    cuts, last = [0], len(x) - 1
    while cuts[-1] < last:
        cuts.append(_leg_end(x, y, cuts[-1], width))
    return np.array(cuts, dtype=np.intp)


def _leg_end(x: list[float], y: list[float], first: int, width: float) -> int:
    """Return the last point that a leg from a first one can end at."""
    last, x0, y0 = len(x) - 1, x[first], y[first]
    best, reach = first + 1, 0.0
    course, low, high = 0.0, -math.pi, math.pi
    begun = False
    for index in range(first + 1, last + 1):
        dx, dy = x[index] - x0, y[index] - y0
        distance = math.hypot(dx, dy)
        if distance < reach - width:
            # It turns back.
            return best
        if distance <= width:
            if not begun:
                best = index
            continue
        angle = math.atan2(dy, dx)
        if not begun:
            course, begun = angle, True
        # Counted from the first course, so that no angle jumps.
        angle = math.remainder(angle - course, 2 * math.pi)
        if low <= angle <= high:
            best = index
        half = math.asin(width / distance)
        low, high = max(low, angle - half), min(high, angle + half)
        if low > high:
            return best
        reach = max(reach, distance)
    return best


def _best_ends(points: Array, cuts: Indices) -> tuple[Array, Array, Indices]:
    """Return ends of legs, moved where that brings the legs nearer, with what ``_apart`` says."""
    still = points[cuts]
    moved = _moved(points, cuts)
    nearer = _apart(points, cuts, moved)[0] <= _apart(points, cuts, still)[0]
    keep = np.ones(len(cuts), dtype=bool)
    keep[:-1] &= nearer
    keep[1:] &= nearer
    ends = np.where(keep[:, np.newaxis], moved, still)
    return (ends, *_apart(points, cuts, ends))


def _moved(points: Array, cuts: Indices) -> Array:
    """Return the ends of legs moved to the middle of what the legs on both sides stand for."""
    ends = points[cuts].copy()
    if len(cuts) < 3:
        return ends
    low, high, normal = _sides(points, cuts)
    middle = 0.5 * (low + high)
    turn = (normal[1:] * normal[:-1]).sum(axis=1)
    both = normal[1:] + normal[:-1]
    # On an arc, where both legs are moved alike, this is where the moved legs meet.
    share = 0.5 * (middle[1:] + middle[:-1]) / np.maximum(1 + turn, 1.0)
    share[turn < MOVED_TURN] = 0.0
    ends[1:-1, :2] += share[:, np.newaxis] * both
    return ends


def _sides(points: Array, cuts: Indices) -> tuple[Array, Array, Array]:
    """Return how far points lie to the right and to the left of legs, and the legs' normals."""
    along = np.diff(points[cuts, :2], axis=0)
    length = np.hypot(along[:, 0], along[:, 1])
    normal = np.stack([-along[:, 1], along[:, 0]], axis=1) / np.where(length, length, 1)[:, None]
    leg = np.repeat(np.arange(len(cuts) - 1), np.diff(cuts))
    side = ((points[:-1, :2] - points[cuts[leg], :2]) * normal[leg]).sum(axis=1)
    low = np.minimum(np.minimum.reduceat(side, cuts[:-1]), 0.0)
    high = np.maximum(np.maximum.reduceat(side, cuts[:-1]), 0.0)
    return low, high, normal


def _apart(points: Array, cuts: Indices, ends: Array) -> tuple[Array, Indices]:
    """Return the distance between each leg and what it stands for, and the farthest point inside.

    Both ways: a point of the leg lies between the feet of two neighbouring points of the outline,
    or between an end of the leg and the foot of the point that it was moved from.
    """
    leg = np.repeat(np.arange(len(cuts) - 1), np.diff(cuts))
    start, along = ends[leg], np.diff(ends, axis=0)
    square = (along**2).sum(axis=1)
    offset = points[:-1] - start
    foot = (offset * along[leg]).sum(axis=1) / np.where(square, square, 1.0)[leg]
    nearest = start + np.clip(foot, 0.0, 1.0)[:, np.newaxis] * along[leg]
    distance = np.linalg.norm(points[:-1] - nearest, axis=1)
    moved = np.linalg.norm(points[cuts] - ends, axis=1)
    apart = np.maximum.reduceat(distance, cuts[:-1])
    inner = distance.copy()
    inner[cuts[:-1]] = -1.0
    order = np.lexsort((inner, leg))
    worst = order[np.concatenate([np.flatnonzero(np.diff(leg)), [leg.size - 1]])]
    return np.maximum(apart, np.maximum(moved[:-1], moved[1:])), worst
