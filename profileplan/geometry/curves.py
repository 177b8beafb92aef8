"""Which lines and arcs stand for a drawn curve, and how far from it do they lie?

A curve is a rational Bezier curve of any degree; ellipses and B-splines are chains of them,
exactly. Points are homogeneous, (x w, y w, z w, w), with w above 0. A curve is cut in two until two
arcs that share a tangent, a biarc, follow it: so a smooth curve stays smooth. How far an arc lies
from it is bounded, not sampled: what is left between the two is itself a polynomial, and that lies
in the hull of its Bernstein coefficients. Arcs lie in plan; height is followed too, but changes
evenly along each arc.

Source: Bezier and B-spline identities (blossoms, subdivision, products in Bernstein form, variation
diminishing) as in G. Farin, Curves and Surfaces for CAGD; the biarc of equal tangent lengths is
common practice (from memory).
"""

from __future__ import annotations

from math import comb
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

if TYPE_CHECKING:
    from profileplan.geometry.corridor import Array, Indices

MOST_HALVINGS = 48
"""How often a curve is cut in two at most: 20 km to less than 1 nm."""

WIDEST = float(np.tan(np.pi / 8))
"""Greatest bulge of an arc that stands for a curve: a quarter of a circle."""

FLAT = 1e-10
"""Bulge below which an arc is drawn as a line: its sagitta is less than 1e-10 of its chord."""

AT_ONCE = 1024
"""How many curves are cut in two together: their arrays stay in the processor's cache."""

CROSSINGS = 6
"""Steps of the search for the place where a curve passes the joint of its arcs."""

SAME = 1e-9
"""Share of its extent that a leg of a control polygon needs to have a direction."""

SAME_KNOT = 1e-10
"""Share of a knot vector's range within which knots are one (that of DXF's knot tolerance)."""

UNEVEN = 0.0107
"""How far the share of an arc's length differs from that of its chord, over the turn squared.

The difference is greatest, 0.10526, for a half circle, where it is 0.010665 of the turn squared,
and tends to 0.008019 for flat arcs; derived, and tested against many turns.
"""


class Fitted(NamedTuple):
    """Lines and arcs that stand for curves, in order.

    start, end : (n, 3) arrays [mm]; bulge : (n,) array; curve : (n,) array of int, which curve each
    stands for; error : greatest distance between the two [mm]; left : how many curves could not be
    followed.
    """

    start: Array
    end: Array
    bulge: Array
    curve: Indices
    error: float
    left: Indices


class _Found(NamedTuple):
    """Lines and arcs: from where to where, bulge, which curve, and where its parameter begins."""

    start: Array
    end: Array
    bulge: Array
    curve: Indices
    at: Array


class _Trial(NamedTuple):
    """Two arcs for each of n curves: their joint, (n, 3), bulges, (n, 2), and error, (n,)."""

    joint: Array
    bulge: Array
    error: Array


def fitted(points: Array, *, error: float, most: int) -> Fitted:
    """Return lines and arcs within an error of rational Bezier curves.

    Parameters
    ----------
    points : (n, k, 4) array [mm]
        Homogeneous control points of n curves of degree k - 1.
    error : float [mm]
        Greatest distance.
    most : int
        Greatest number of lines and arcs.

    Returns
    -------
    Fitted
        Curves that are left have no pieces.
    """
    none = np.zeros((0, 3))
    parts = [Fitted(none, none, np.zeros(0), np.zeros(0, dtype=np.intp), 0.0, np.zeros(0, np.intp))]
    for first in range(0, len(points), AT_ONCE):
        part = _fitted(points[first : first + AT_ONCE], error, most)
        parts.append(part._replace(curve=part.curve + first, left=part.left + first))
        most = max(most - len(part.bulge), 0)
    return Fitted(
        np.concatenate([part.start for part in parts]),
        np.concatenate([part.end for part in parts]),
        np.concatenate([part.bulge for part in parts]),
        np.concatenate([part.curve for part in parts]),
        max(part.error for part in parts),
        np.concatenate([part.left for part in parts]),
    )


def _fitted(points: Array, error: float, most: int) -> Fitted:
    """Return lines and arcs for curves that are cut in two together."""
    found: list[_Found] = []
    live, curve, at = points, np.arange(len(points)), np.zeros(len(points))
    worst, count = 0.0, 0
    for halving in range(MOST_HALVINGS):
        place = live[..., :3] / live[..., 3:]
        first, last = place[:, 0], place[:, -1]
        trial, (extent, aside) = _biarcs(live, place), _thickness(place)
        good = trial.error <= error
        # Where no arc fits however small the curve is, it has a corner.
        corner = (extent <= error) & (aside <= error) & ~good
        straight = (trial.bulge == 0).all(axis=1) & good & (aside <= error)
        single, double = np.flatnonzero(corner | straight), np.flatnonzero(good & ~straight)
        joint, bulge = trial.joint[double], trial.bulge[double]
        middle = at[double] + 0.5 ** (halving + 1)
        found += [
            _Found(first[single], last[single], np.zeros(single.size), curve[single], at[single]),
            _Found(first[double], joint, bulge[:, 0], curve[double], at[double]),
            _Found(joint, last[double], bulge[:, 1], curve[double], middle),
        ]
        reached = np.concatenate([aside[single], trial.error[double]])
        worst = max(worst, float(reached.max(initial=0.0)))
        count += single.size + 2 * double.size
        rest = np.flatnonzero(~good & ~corner)
        live, curve, at = live[rest], curve[rest], at[rest]
        if not rest.size or count + 2 * rest.size > most:
            break
        live = np.concatenate(_halves(live, np.full(rest.size, 0.5)))
        at = np.concatenate([at, at + 0.5 ** (halving + 1)])
        curve = np.concatenate([curve, curve])
    start, end, arcs, owner, share = (np.concatenate(column) for column in zip(*found, strict=True))
    left = np.unique(curve)
    kept = np.flatnonzero(~np.isin(owner, left) & (start != end).any(axis=1))
    kept = kept[np.lexsort([share[kept], owner[kept]])]
    return Fitted(start[kept], end[kept], arcs[kept], owner[kept], worst, left)


def _biarcs(points: Array, place: Array) -> _Trial:
    """Return two arcs each that touch curves at both ends, and how far from them they may lie."""
    first, last = place[:, 0], place[:, -1]
    chord = (last - first)[:, :2]
    ahead, behind = _direction(place), -_direction(place[:, ::-1])
    # The tangents are equally long, d, and |chord - d (ahead + behind)| = 2 d.
    along = (chord * (ahead + behind)).sum(axis=1)
    apart = ((ahead - behind) ** 2).sum(axis=1)
    square = (chord**2).sum(axis=1)
    root = along + np.sqrt(along**2 + apart * square)
    reach = np.divide(square, root, out=np.zeros_like(root), where=root > 0)[:, np.newaxis]
    joint = 0.5 * (first + last)
    joint[:, :2] += 0.5 * reach * (ahead - behind)
    across = chord - reach * (ahead + behind)
    length = np.hypot(across[:, 0], across[:, 1])
    with np.errstate(all="ignore"):
        tangent = across / length[:, np.newaxis]
        share, over = _crossing(points, joint[:, :2], tangent)
        one, other = _halves(points, share)
        joint[:, 2] = one[:, -1, 2] / one[:, -1, 3]
        bulge = np.stack(
            [
                _bulge(ahead, joint[:, :2] - first[:, :2]),
                -_bulge(-behind, joint[:, :2] - last[:, :2]),
            ],
            axis=1,
        )
        bulge[np.abs(bulge) < FLAT] = 0.0
        error = over + np.maximum(
            _distance(one, first, joint, bulge[:, 0]), _distance(other, joint, last, bulge[:, 1])
        )
        error[~((np.abs(bulge) <= WIDEST).all(axis=1) & (error >= 0))] = np.inf
    return _Trial(joint, bulge, error)


def _bulge(tangent: Array, chord: Array) -> Array:
    """Return bulges of arcs that leave along unit tangents, (n, 2), and end a chord away."""
    length = np.hypot(chord[:, 0], chord[:, 1])
    cross = tangent[:, 0] * chord[:, 1] - tangent[:, 1] * chord[:, 0]
    # The tangent of half the angle between tangent and chord.
    return np.asarray(cross / (length + (tangent * chord).sum(axis=1)))


def _direction(place: Array) -> Array:
    """Return unit vectors in plan, (n, 2), in which curves leave their first control point."""
    legs = place[:, 1:, :2] - place[:, :1, :2]
    length = np.hypot(legs[..., 0], legs[..., 1])
    leg = np.argmax(length > SAME * length.max(axis=1, keepdims=True), axis=1)
    row = np.arange(len(place))
    own = length[row, leg][:, np.newaxis]
    unit: Array = np.divide(legs[row, leg], own, out=np.zeros((len(place), 2)), where=own > 0)
    return unit


def _crossing(points: Array, joint: Array, tangent: Array) -> tuple[Array, Array]:
    """Return where curves pass the normals at joints, and how far beside them that is: two (n,)."""
    offset = points[..., :2] - points[..., 3:] * joint[:, np.newaxis]
    ahead = (offset * tangent[:, np.newaxis]).sum(axis=-1)
    low, high = np.zeros(len(points)), np.ones(len(points))
    share = np.full(len(points), 0.5)
    value = _value(ahead, share)
    below, above = ahead[:, 0], ahead[:, -1]
    for _ in range(CROSSINGS):
        # False position, where the end that stays counts half (Illinois).
        up = value > 0
        above, below = np.where(up, value, 0.5 * above), np.where(up, 0.5 * below, value)
        high, low = np.where(up, share, high), np.where(up, low, share)
        slope = above - below
        step = np.divide(-below, slope, out=np.full_like(slope, 0.5), where=slope > 0)
        share = low + (high - low) * np.clip(step, 0.0, 1.0)
        value = _value(ahead, share)
    return share, np.abs(value) / _value(points[..., 3], share)


def _value(values: Array, share: Array) -> Array:
    """Return polynomials, (n, k) in Bernstein form, at one place each."""
    while values.shape[1] > 1:
        values = values[:, :-1] + (values[:, 1:] - values[:, :-1]) * share[:, np.newaxis]
    found: Array = values[:, 0]
    return found


def _halves(points: Array, share: Array) -> tuple[Array, Array]:
    """Cut curves in two at shares of their parameter (de Casteljau)."""
    one, other = np.empty_like(points), np.empty_like(points)
    one[:, 0], other[:, -1] = points[:, 0], points[:, -1]
    at = share[:, np.newaxis, np.newaxis]
    for row in range(1, points.shape[1]):
        points = points[:, :-1] + (points[:, 1:] - points[:, :-1]) * at
        one[:, row], other[:, -1 - row] = points[:, 0], points[:, -1]
    return one, other


def _thickness(place: Array) -> tuple[Array, Array]:
    """Return the extent in plan of control points, and how far from their chord they lie."""
    extent = np.ptp(place[..., :2], axis=1).max(axis=1)
    away, chord = place - place[:, :1], (place[:, -1] - place[:, 0])[:, np.newaxis]
    square = (chord**2).sum(axis=-1)
    along = (away * chord).sum(axis=-1)
    share = np.divide(along, square, out=np.zeros_like(along), where=square > 0)
    foot = chord * np.clip(share, 0.0, 1.0)[..., np.newaxis]
    return extent, np.sqrt(((away - foot) ** 2).sum(axis=-1)).max(axis=1)


def _distance(points: Array, start: Array, end: Array, bulge: Array) -> Array:
    """Return bounds of the distance between curves and arcs that end together: (n,) [mm].

    With d from the start to a point of the curve, n the arc's unit normal there and c its
    curvature, c |d|² / 2 - d n is e + c e² / 2, where e is the distance to the circle. Where the
    control polygon goes on along the chord, the curve does, and its nearest point is on the arc.
    """
    chord = (end - start)[:, :2]
    length = np.hypot(chord[:, 0], chord[:, 1])
    weight = points[..., 3]
    least = weight.min(axis=1)
    offset = points[..., :2] - weight[..., np.newaxis] * start[:, np.newaxis, :2]
    unit = chord / length[:, np.newaxis]
    along = offset[..., 0] * unit[:, :1] + offset[..., 1] * unit[:, 1:]
    left = offset[..., 1] * unit[:, :1] - offset[..., 0] * unit[:, 1:]
    sine, cosine = 2 * bulge / (1 + bulge**2), (1 - bulge**2) / (1 + bulge**2)
    curvature = 2 * sine / length
    inward = along * sine[:, np.newaxis] + left * cosine[:, np.newaxis]
    gap = 0.5 * curvature[:, np.newaxis] * (_product(along, along) + _product(left, left))
    gap -= _product(inward, weight)
    bound = np.abs(gap).max(axis=1) / least**2
    room = 1 - 2 * np.abs(curvature) * bound
    aside = np.where(room > 0, 2 * bound / (1 + np.sqrt(np.maximum(room, 0))), np.inf)
    # Rounding may turn back a leg that has no length.
    rounding = 1e-15 * np.abs(start).max(axis=1) + SAME * length
    steps = np.diff(along / weight, axis=1).min(axis=1)
    aside[~(steps >= -rounding)] = np.inf
    rise = end[:, 2] - start[:, 2]
    height = points[..., 2] - weight * start[:, np.newaxis, 2]
    uneven = height - along * (rise / length)[:, np.newaxis]
    turn = 4 * np.arctan(np.abs(bulge))
    # The last term: the nearest point of the arc lies a little further along the chord.
    higher = np.abs(uneven).max(axis=1) / least + np.abs(rise) * (
        UNEVEN * turn**2 + np.where(np.isfinite(aside), aside, 0.0) * np.abs(sine) / length
    )
    whole: Array = np.hypot(aside, higher)
    return whole


def _product(one: Array, other: Array) -> Array:
    """Return products of polynomials of equal degree, (n, k) in Bernstein form: (n, 2 k - 1)."""
    degree = one.shape[1] - 1
    choose = np.array([comb(degree, row) for row in range(degree + 1)], dtype=np.float64)
    both = np.array([comb(2 * degree, row) for row in range(2 * degree + 1)], dtype=np.float64)
    product = np.zeros((len(one), 2 * degree + 1))
    scaled = other * choose
    for row in range(degree + 1):
        product[:, row : row + degree + 1] += (one[:, row] * choose[row])[:, np.newaxis] * scaled
    scaled_back: Array = product / both
    return scaled_back


def bezier_chain(control: Array, knots: Array, degree: int) -> Array:
    """Return the Bezier curves that a B-spline consists of, one for each interval of its knots.

    Parameters
    ----------
    control : (n, 4) array
        Homogeneous control points, or points of any other dimension.
    knots : (n + degree + 1,) array
        Never falling, and within it no knot more often than the degree. The curve spans
        ``knots[degree]`` to ``knots[n]``.
    degree : int

    Returns
    -------
    (m, degree + 1, 4) array
        The last point of each is the first of the next.
    """
    knots = one_knot(knots)
    spans = degree + np.flatnonzero(np.diff(knots[degree : len(control) + 1]) > 0)
    local = control[spans[:, np.newaxis] + np.arange(-degree, 1)]
    near = knots[spans[:, np.newaxis] + np.arange(1 - degree, degree + 1)]
    low, high = knots[spans], knots[spans + 1]
    points = np.broadcast_to(local, (degree + 1, *local.shape))
    row = np.arange(degree + 1)[:, np.newaxis]
    for level in range(1, degree + 1):
        # The blossom of the polynomial at `low`, `degree - row` times, and `high`, `row` times.
        at = np.where(level <= row, high, low)[..., np.newaxis]
        before, after = near[:, level - 1 : degree], near[:, degree : 2 * degree - level + 1]
        share = ((at - before) / (after - before))[..., np.newaxis]
        points = points[:, :, :-1] * (1 - share) + points[:, :, 1:] * share
    chain = np.ascontiguousarray(points[:, :, 0].swapaxes(0, 1))
    chain[:-1, -1] = chain[1:, 0]
    return chain


def one_knot(knots: Array) -> Array:
    """Return knots of which those that differ by no more than rounding are equal."""
    step = np.diff(knots, prepend=knots[:1]) > SAME_KNOT * (knots[-1] - knots[0])
    first = np.flatnonzero(np.concatenate([[True], step[1:]]))
    return np.asarray(knots[first[np.cumsum(step)]])


def ellipse_chain(
    centre: Array, half_axes: tuple[Array, Array], first: Array, sweep: Array
) -> tuple[Array, Indices]:
    """Return the Bezier curves that elliptical arcs consist of, each at most a quarter.

    Parameters
    ----------
    centre : (n, 3) array [mm]
    half_axes : two (n, 3) arrays [mm]
        The arc is centre + one cos t + other sin t; they need not be perpendicular.
    first, sweep : (n,) arrays [rad]
        Where t begins, and how far it goes.

    Returns
    -------
    points : (m, 3, 4) array
        Homogeneous.
    arc : (m,) array of int
        Which arc each belongs to.
    """
    count = np.maximum(np.ceil(np.abs(sweep) / (0.5 * np.pi) - SAME), 1).astype(np.intp)
    arc = np.repeat(np.arange(len(centre)), count)
    row = np.arange(arc.size) - np.repeat(np.cumsum(count) - count, count)
    half = 0.5 * sweep[arc] / count[arc]
    low = first[arc] + 2 * half * row
    weight = np.cos(half)
    points = np.empty((arc.size, 3, 4))
    one, other, middle = half_axes[0][arc], half_axes[1][arc], centre[arc]
    for column, (angle, share) in enumerate(
        [(low, np.ones_like(half)), (low + half, weight), (low + 2 * half, np.ones_like(half))]
    ):
        cosine, sine = np.cos(angle)[:, np.newaxis], np.sin(angle)[:, np.newaxis]
        points[:, column, :3] = middle * share[:, np.newaxis] + one * cosine + other * sine
        points[:, column, 3] = share
    inner = np.flatnonzero(row[1:])
    points[inner, 2] = points[inner + 1, 0]
    return points, arc
