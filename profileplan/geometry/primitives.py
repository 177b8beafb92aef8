"""Where do the shapes of a drawing come to lie when they are shifted, turned, scaled, mirrored?

Three kinds of shapes are closed under all affine maps: lines, elliptical arcs, and rational Bezier
curves. A circular arc between two points is kept as such for as long as the map allows; where it
does not, it becomes an elliptical one. All are mapped by arrays, element by element, so that equal
points stay equal to the last bit; only at the end they become lines and circular arcs.

Points are (x, y, z); the bulge of an arc is that of `profileplan.geometry.shapes`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import numpy.typing as npt

from profileplan.geometry.curves import ellipse_chain, fitted
from profileplan.geometry.shapes import Pieces

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.geometry.corridor import Array, Indices

Flags = npt.NDArray[np.bool_]
"""An array of yes and no."""

ROUND = 1e-12
"""Relative difference of two half axes, or cosine between them, up to which they are a circle's."""


class Order(NamedTuple):
    """What each of n shapes belongs to, and its place in it: two (n,) arrays of int."""

    source: Indices
    rank: Indices

    def at(self, chosen: Indices) -> Order:
        """Return that of some of the shapes."""
        return Order(self.source[chosen], self.rank[chosen])


@dataclass(frozen=True, eq=False)
class Maps:
    """Affine maps: points x become linear x + shift.

    Parameters
    ----------
    linear : (k, 3, 3) array
    shift : (k, 3) array
    """

    linear: Array
    shift: Array

    def after(self, first: Maps) -> Maps:
        """Return the maps that each of these and one of the first make together, (k,)."""
        linear = np.einsum("kab,kbc->kac", self.linear, first.linear)
        return Maps(linear, _moved(first.shift, self.linear, self.shift))

    def at(self, chosen: Indices) -> Maps:
        """Return some of the maps."""
        return Maps(self.linear[chosen], self.shift[chosen])


@dataclass(frozen=True, eq=False)
class Strokes:
    """n straight lines, and circular arcs in horizontal planes.

    Parameters
    ----------
    start, end : (n, 3) arrays
    bulge : (n,) array
    order : Order
    """

    start: Array
    end: Array
    bulge: Array
    order: Order


@dataclass(frozen=True, eq=False)
class Rounds:
    """n elliptical arcs centre + one cos t + other sin t, from any t as far as the sweep goes.

    Parameters
    ----------
    start, end : (n, 3) arrays
        Where they begin and end; the same bits as of the neighbours that they meet there.
    centre, one, other : (n, 3) arrays
    first, sweep : (n,) arrays [rad]
    order : Order
    """

    start: Array
    end: Array
    centre: Array
    one: Array
    other: Array
    first: Array
    sweep: Array
    order: Order

    def at(self, chosen: Indices) -> Rounds:
        """Return some of them."""
        return Rounds(
            self.start[chosen],
            self.end[chosen],
            self.centre[chosen],
            self.one[chosen],
            self.other[chosen],
            self.first[chosen],
            self.sweep[chosen],
            self.order.at(chosen),
        )


@dataclass(frozen=True, eq=False)
class Beziers:
    """n rational Bezier curves of one degree k - 1.

    Parameters
    ----------
    points : (n, k, 4) array
        Homogeneous control points.
    order : Order
    """

    points: Array
    order: Order


@dataclass(frozen=True, eq=False)
class Primitives:
    """Shapes of all kinds.

    Parameters
    ----------
    strokes : Strokes
    rounds : tuple of Rounds
    beziers : tuple of Beziers
    """

    strokes: Strokes
    rounds: tuple[Rounds, ...] = ()
    beziers: tuple[Beziers, ...] = ()

    def __len__(self) -> int:
        rounds = sum(len(part.sweep) for part in self.rounds)
        return len(self.strokes.bulge) + rounds + sum(len(part.points) for part in self.beziers)

    def placed(self, maps: Maps, sources: Indices) -> Primitives:
        """Return them once for every map.

        Parameters
        ----------
        maps : Maps
            k maps.
        sources : (k, m) array of int
            What each of their m sources is called in each place; below 0: left out.
        """
        strokes, bent = placed_strokes(self.strokes, maps, sources)
        rounds = [_placed_rounds(part, maps, sources) for part in self.rounds]
        beziers = [_placed_beziers(part, maps, sources) for part in self.beziers]
        return Primitives(strokes, (*rounds, bent), tuple(beziers))

    def beyond(self, limit: float) -> tuple[Indices, Array]:
        """Return the sources whose coordinates are no numbers or beyond a limit, and the values."""
        parts: list[tuple[Indices, Array]] = [
            (self.strokes.order.source, np.maximum(abs(self.strokes.start), abs(self.strokes.end)))
        ]
        for own in self.rounds:
            arcs = [own.start, own.end, own.centre, own.one, own.other]
            parts.append((own.order.source, np.maximum.reduce([abs(arc) for arc in arcs])))
        for curves in self.beziers:
            place = abs(curves.points[..., :3]) / curves.points[..., 3:]
            parts.append((curves.order.source, place.max(axis=1)))
        source = np.concatenate([part[0] for part in parts])
        size = np.concatenate([part[1].max(axis=1, initial=0.0) for part in parts])
        bad = np.flatnonzero(~(size <= limit))
        return source[bad], size[bad]

    def without(self, sources: Indices) -> Primitives:
        """Return those of all other sources."""
        own = self.strokes
        keep = np.flatnonzero(~np.isin(own.order.source, sources))
        rounds = [
            part.at(np.flatnonzero(~np.isin(part.order.source, sources))) for part in self.rounds
        ]
        beziers = []
        for part in self.beziers:
            kept = np.flatnonzero(~np.isin(part.order.source, sources))
            beziers.append(Beziers(part.points[kept], part.order.at(kept)))
        return Primitives(
            Strokes(own.start[keep], own.end[keep], own.bulge[keep], own.order.at(keep)),
            tuple(rounds),
            tuple(beziers),
        )


def _moved(points: Array, linear: Array, shift: Array | None) -> Array:
    """Return points mapped, element by element: the result of one does not depend on others.

    The shapes of points, (..., 3), linear, (..., 3, 3), and shift, (..., 3), are broadcast.
    """
    moved = np.empty((*np.broadcast_shapes(points.shape[:-1], linear.shape[:-2]), 3))
    for row in range(3):
        out = linear[..., row, 0] * points[..., 0] + linear[..., row, 1] * points[..., 1]
        out += linear[..., row, 2] * points[..., 2]
        moved[..., row] = out if shift is None else out + shift[..., row]
    return moved


def _apart(order: Order, sources: Indices) -> tuple[Indices, Indices, Order]:
    """Return in which places which shapes are drawn, and their order there."""
    names = sources[:, order.source]
    place, shape = np.nonzero(names >= 0)
    return place, shape, Order(names[place, shape], order.rank[shape])


def placed_strokes(strokes: Strokes, maps: Maps, sources: Indices) -> tuple[Strokes, Rounds]:
    """Return strokes once for every map: those that stay so, and those that become elliptical."""
    place, shape, order = _apart(strokes.order, sources)
    return mapped_strokes(strokes, shape, maps.at(place) if len(sources) > 1 else maps, order)


def mapped_strokes(
    strokes: Strokes, shape: Indices, maps: Maps, order: Order
) -> tuple[Strokes, Rounds]:
    """Return chosen strokes, each by its own map or all by the only one."""
    start, end, bulge = strokes.start[shape], strokes.end[shape], strokes.bulge[shape]
    similar, mirrored = _similar(maps.linear)
    begin, finish = (_moved(points, maps.linear, maps.shift) for points in (start, end))
    sign = np.broadcast_to(np.where(mirrored, -1.0, 1.0), bulge.shape)
    bent = (bulge != 0) & ~similar
    keep, rest = np.flatnonzero(~bent), np.flatnonzero(bent)
    if rest.size == 0:
        none = Rounds(*(np.zeros((0, 3)),) * 5, *(np.zeros(0),) * 2, order.at(rest))
        return Strokes(begin, finish, bulge * sign, order), none
    stay = Strokes(begin[keep], finish[keep], (bulge * sign)[keep], order.at(keep))
    own = maps.at(rest) if len(maps.linear) > 1 else maps
    along = end[rest] - start[rest]
    left = np.stack([-along[:, 1], along[:, 0], np.zeros(rest.size)], axis=1)
    arc = bulge[rest]
    centre = 0.5 * (start[rest] + end[rest]) + left * ((1 - arc**2) / (4 * arc))[:, np.newaxis]
    one = start[rest] - centre
    other = np.stack([-one[:, 1], one[:, 0], np.zeros(rest.size)], axis=1)
    return stay, Rounds(
        begin[rest],
        finish[rest],
        _moved(centre, own.linear, own.shift),
        _moved(one, own.linear, None),
        _moved(other, own.linear, None),
        np.zeros(rest.size),
        4 * np.arctan(arc),
        order.at(rest),
    )


def _similar(linear: Array) -> tuple[Flags, Flags]:
    """Return which maps keep circles in horizontal planes so, and which mirror them: two (k,)."""
    return _circular(linear[..., :, 0], linear[..., :, 1])


def _circular(one: Array, other: Array) -> tuple[Flags, Flags]:
    """Return which half axes, (n, 3), are those of horizontal circles, and which run clockwise."""
    square, own = (one[:, :2] ** 2).sum(axis=1), (other[:, :2] ** 2).sum(axis=1)
    size = np.maximum(square, own)
    skew = np.abs((one[:, :2] * other[:, :2]).sum(axis=1))
    # Lengths differ by half as much as their squares.
    even = (np.abs(square - own) <= 2 * ROUND * size) & (skew <= ROUND * size)
    level = np.maximum(np.abs(one[:, 2]), np.abs(other[:, 2])) <= ROUND * np.sqrt(size)
    return even & level, one[:, 0] * other[:, 1] < one[:, 1] * other[:, 0]


def _placed_rounds(rounds: Rounds, maps: Maps, sources: Indices) -> Rounds:
    place, shape, order = _apart(rounds.order, sources)
    return mapped_rounds(rounds.at(shape), maps.at(place), order)


def mapped_rounds(rounds: Rounds, maps: Maps, order: Order) -> Rounds:
    """Return elliptical arcs, each by its own map."""
    return Rounds(
        _moved(rounds.start, maps.linear, maps.shift),
        _moved(rounds.end, maps.linear, maps.shift),
        _moved(rounds.centre, maps.linear, maps.shift),
        _moved(rounds.one, maps.linear, None),
        _moved(rounds.other, maps.linear, None),
        rounds.first,
        rounds.sweep,
        order,
    )


def _placed_beziers(beziers: Beziers, maps: Maps, sources: Indices) -> Beziers:
    place, shape, order = _apart(beziers.order, sources)
    points = beziers.points[shape]
    own = maps.at(place)
    placed = np.empty_like(points)
    moved = _moved(points[..., :3], own.linear[:, np.newaxis], None)
    placed[..., :3] = moved + own.shift[:, np.newaxis] * points[..., 3:]
    placed[..., 3] = points[..., 3]
    return Beziers(placed, order)


class Drawn(NamedTuple):
    """Lines and arcs in the order of their sources.

    pieces : Pieces; error : greatest distance to what they stand for [mm]; left : (k,) array of
    int, sources that could not be followed.
    """

    pieces: Pieces
    error: float
    left: Indices


class _Part(NamedTuple):
    start: Array
    end: Array
    bulge: Array
    order: Order


def drawn(parts: Sequence[Primitives], *, error: float, most: int, farthest: float) -> Drawn:
    """Return lines and arcs that stand for primitives, ordered by source and rank.

    Parameters
    ----------
    parts : sequence of Primitives [mm]
    error : float [mm]
        Greatest distance.
    most : int
        Greatest number of pieces that stand for curves.
    farthest : float [mm]
        Of curves that begin or end beyond, only the chord is drawn: they are to be refused, and
        would need very many pieces.
    """
    none, nobody = np.zeros((0, 3)), np.zeros(0, dtype=np.intp)
    found = [_Part(none, none, np.zeros(0), Order(nobody, nobody))]
    found += [
        _Part(own.strokes.start, own.strokes.end, own.strokes.bulge, own.strokes.order)
        for own in parts
    ]
    beziers = [curves for own in parts for curves in own.beziers]
    for own in parts:
        for rounds in own.rounds:
            circles, curves = _arcs(rounds)
            found.append(circles)
            beziers.append(curves)
    worst, left = 0.0, []
    for size in sorted({curves.points.shape[1] for curves in beziers if len(curves.points)}):
        group = [curves for curves in beziers if curves.points.shape[1] == size]
        source = np.concatenate([curves.order.source for curves in group])
        rank = np.concatenate([curves.order.rank for curves in group])
        points = np.concatenate([own.points for own in group])
        ends = points[:, [0, -1], :3] / points[:, [0, -1], 3:]
        near = (np.abs(ends) <= farthest).all(axis=(1, 2))
        order, inside, far = Order(source, rank), np.flatnonzero(near), np.flatnonzero(~near)
        found.append(_Part(ends[far, 0], ends[far, 1], np.zeros(far.size), order.at(far)))
        fit = fitted(points[inside], error=error, most=most)
        found.append(_Part(fit.start, fit.end, fit.bulge, order.at(inside[fit.curve])))
        worst = max(worst, fit.error)
        left.append(source[inside[fit.left]])
    return Drawn(_sorted(found), worst, np.concatenate([nobody, *left]))


def _sorted(found: list[_Part]) -> Pieces:
    """Return the pieces of all parts by source and rank, without those of no length."""
    parts = [part for part in found if len(part.bulge)] or found[:1]
    start, end, bulge = (np.concatenate([part[column] for part in parts]) for column in range(3))
    source = np.concatenate([part.order.source for part in parts])
    rank = np.concatenate([part.order.rank for part in parts])
    kept = np.flatnonzero((start != end).any(axis=1))
    own = source[kept]
    if len(parts) > 1 or (np.diff(own) < 0).any():
        # Stable: the arcs of one curve are in order.
        kept = kept[np.lexsort([rank[kept], own])]
    if kept.size == len(bulge) and len(parts) == 1:
        return Pieces(start, end, bulge, source)
    return Pieces(start[kept], end[kept], bulge[kept], source[kept])


def _arcs(rounds: Rounds) -> tuple[_Part, Beziers]:
    """Return circular arcs, those of more than half a circle in two, and curves for the others."""
    circular, clockwise = _circular(rounds.one, rounds.other)
    own, rest = rounds.at(np.flatnonzero(circular)), rounds.at(np.flatnonzero(~circular))
    sweep = np.where(clockwise[circular], -own.sweep, own.sweep)
    halved = np.abs(sweep) > np.pi * (1 + ROUND)
    bulge = np.tan(sweep / np.where(halved, 8, 4))
    bulge[np.abs(np.abs(bulge) - 1) < ROUND] = np.sign(bulge[np.abs(np.abs(bulge) - 1) < ROUND])
    middle = (own.first + 0.5 * own.sweep)[:, np.newaxis]
    joint = own.centre + own.one * np.cos(middle) + own.other * np.sin(middle)
    whole, two = np.flatnonzero(~halved), np.flatnonzero(halved)
    shape = np.concatenate([whole, two, two])
    start = np.concatenate([own.start[whole], own.start[two], joint[two]])
    end = np.concatenate([own.end[whole], joint[two], own.end[two]])
    part = _Part(start, end, bulge[shape], own.order.at(shape))
    points, arc = ellipse_chain(rest.centre, (rest.one, rest.other), rest.first, rest.sweep)
    if arc.size:
        begin = np.flatnonzero(np.diff(arc, prepend=-1))
        points[begin, 0, :3] = rest.start
        points[np.append(begin[1:], arc.size) - 1, 2, :3] = rest.end
    return part, Beziers(points, rest.order.at(arc))
