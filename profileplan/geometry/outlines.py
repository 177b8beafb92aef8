"""Which outlines do the pieces of a drawing make, and where is the drawing at fault?

Ends that lie together are joined, whatever the order and the direction of their pieces, within a
layer only. What an entity draws in one go stays in one go; where other ends meet in a crowd, the
straightest goes on. What is drawn twice is left out once. Nothing is bent: where joined ends are
apart, a straight piece bridges them. Lengths are in mm.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from profileplan.geometry.overlaps import cut, uncovered
from profileplan.geometry.shapes import Outline, Pieces

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    import numpy.typing as npt

    from profileplan.geometry.corridor import Array, Indices

    Flags = npt.NDArray[np.bool_]

LEAST_LENGTH = 1e-9
"""Shorter pieces are left out [mm]: they have no direction."""

SNAP = 1e-6
"""Ends as near as this are one point, which drawing programs round differently [mm]."""

NEAR = 1.0
"""Open ends as near as this may have been meant to meet, so they are listed [mm]."""

CLOSING = 2.0
"""How many times longer than the gap a chain must be to be closed: a short line is no loop."""

MOST_MEETING = 64
"""Where more ends lie in a point, none goes on straight: all of them stay open."""

NEIGHBOURS = 8
"""How many ends near one, but not in the same point, are looked at."""

SAME_TURN = 1e-9
"""Turns that differ by less are equally straight [rad]."""


@dataclass(frozen=True)
class Gap:
    """Ends that were joined though they are apart, or an open end and the nearest other open end.

    Parameters
    ----------
    position : pair of float [mm]
        The middle between the ends.
    width : float [mm]
        How far the ends are apart.
    layer : str
    joined : bool
    """

    position: tuple[float, float]
    width: float
    layer: str
    joined: bool


@dataclass(frozen=True)
class Dropped:
    """What an entity drew and was left out, because another entity covers it.

    Parameters
    ----------
    source : int
        The entity.
    layer : str
    length : float [mm]
        How much was left out.
    covered_by : int
        The other entity.
    """

    source: int
    layer: str
    length: float
    covered_by: int


@dataclass(frozen=True)
class Branch:
    """A point where more than two pieces meet, and not all of them go on as drawn.

    Parameters
    ----------
    position : pair of float [mm]
    layer : str
    ends : int
        How many pieces meet there.
    """

    position: tuple[float, float]
    layer: str
    ends: int


@dataclass(frozen=True, eq=False)
class Chained:
    """The outlines of a drawing, and what was found wrong on the way.

    Parameters
    ----------
    outlines : tuple of Outline
        In the order of their first drawn pieces.
    gaps : tuple of Gap
    dropped : tuple of Dropped
    branches : tuple of Branch
    """

    outlines: tuple[Outline, ...]
    gaps: tuple[Gap, ...]
    dropped: tuple[Dropped, ...]
    branches: tuple[Branch, ...]


def chain(pieces: Pieces, layers: Sequence[str], *, joining: float = 0.01) -> Chained:
    """Join pieces into outlines.

    An outline has the direction of its first drawn piece; a closed one begins with it.

    Parameters
    ----------
    pieces : Pieces
        In the order drawn.
    layers : sequence of str
        The layer of each entity.
    joining : float [mm]
        How far ends that are joined may be apart, in space.
    """
    names = list(dict.fromkeys(layers))
    number = {name: index for index, name in enumerate(names)}
    layer_of = np.array([number[layer] for layer in layers], dtype=np.intp)
    kept, lost = uncovered(_sound(pieces), layer_of)
    dropped = tuple(
        Dropped(source, layers[source], lost[source, by], by)
        for source, by in sorted(lost)
        if lost[source, by] > 0
    )
    if not len(kept):
        return Chained((), (), dropped, ())
    joints = _Joints(_Ends.of(kept, layer_of))
    crowds = _joined(joints, joining)
    chains, bridges = _bridged(_laid(kept, joints))
    meetings = sorted([*crowds, *_touched(chains, joints, crowds, joining)])
    return Chained(
        chains.outlines(names),
        tuple(gap.named(names) for gap in (*bridges, *_apart(joints))),
        dropped,
        tuple(meeting.named(names) for meeting in meetings),
    )


def _sound(pieces: Pieces) -> Pieces:
    """Return pieces that have a length, none of which turns by more than half a circle.

    The ends of a wider arc may be so near that to move one by nothing at all would spoil it.
    """
    known = pieces.chosen(np.flatnonzero(pieces.length >= LEAST_LENGTH))
    wide = np.abs(known.bulge) > 1 + SAME_TURN
    if not wide.any():
        return known
    index = np.repeat(np.arange(len(known)), 1 + wide)
    second = np.concatenate([[False], index[1:] == index[:-1]])
    low = np.where(second, 0.5, 0.0)
    return cut(known, index, low, np.where(wide[index] & ~second, 0.5, 1.0))


@dataclass(frozen=True, eq=False)
class _Ends:
    """Runs, which are pieces of one entity that follow each other as drawn, and their ends.

    End 2 r is the start of run r, end 2 r + 1 its end.

    Parameters
    ----------
    first, last : (r,) arrays of int
        Pieces.
    length : (r,) array [mm]
    closed : (r,) array of bool
        Whether a run ends where it begins.
    layer : (r,) array of int
    points : (2 r, 3) array [mm]
    out : (2 r, 2) array
        Unit tangents, out of the piece.
    """

    first: Indices
    last: Indices
    length: Array
    closed: Flags
    layer: Indices
    points: Array
    out: Array

    @classmethod
    def of(cls, pieces: Pieces, layer_of: Indices) -> _Ends:
        """Return the runs of pieces."""
        follows = (pieces.source[1:] == pieces.source[:-1]) & (
            pieces.start[1:] == pieces.end[:-1]
        ).all(axis=1)
        first = np.flatnonzero(np.concatenate([[True], ~follows]))
        last = np.append(first[1:], len(pieces)) - 1
        begin, finish = pieces.start[first], pieces.end[last]
        into = pieces.chosen(first).directions()[0]
        out = pieces.chosen(last).directions()[1]
        return cls(
            first,
            last,
            np.add.reduceat(pieces.length, first),
            (begin == finish).all(axis=1),
            layer_of[pieces.source[first]],
            np.stack([begin, finish], axis=1).reshape(-1, 3),
            np.stack([-into, out], axis=1).reshape(-1, 2),
        )

    def turn(self, one: Indices, other: Indices) -> Array:
        """Return by how much the direction changes from one end to another: (k,) [rad]."""
        mine, its = self.out[one], self.out[other]
        cross = mine[:, 0] * its[:, 1] - mine[:, 1] * its[:, 0]
        turn: Array = np.arctan2(np.abs(cross), -(mine * its).sum(axis=1))
        return turn


class _Joints:
    """Which end is joined with which: the other end's number, below 0 for an open one."""

    def __init__(self, ends: _Ends) -> None:
        self.ends = ends
        mates = np.full(len(ends.points), -1)
        loops = 2 * np.flatnonzero(ends.closed)
        mates[loops], mates[loops + 1] = loops + 1, loops
        self.mates: list[int] = mates.tolist()
        self._chain = list(range(len(ends.first)))
        self._length: list[float] = ends.length.tolist()

    def join(self, one: Indices, other: Indices) -> None:
        """Join pairs of ends, (k,) each, the straightest first, the nearest of these first."""
        points = self.ends.points
        gap = np.sqrt(((points[one] - points[other]) ** 2).sum(axis=1))
        turn = np.round(self.ends.turn(one, other) / SAME_TURN)
        rank = np.lexsort([other, one, np.round(gap / SNAP), turn])
        rows = (one[rank].tolist(), other[rank].tolist(), gap[rank].tolist())
        for mine, its, apart in zip(*rows, strict=True):
            if self.mates[mine] < 0 and self.mates[its] < 0 and self.may_meet(mine, its, apart):
                self.mates[mine], self.mates[its] = its, mine
                kept, gone = self._root(mine // 2), self._root(its // 2)
                if kept != gone:
                    self._chain[gone] = kept
                    self._length[kept] += self._length[gone]

    def may_meet(self, one: int, other: int, gap: float) -> bool:
        """Return whether ends are of different chains, or of one long enough to be closed."""
        root = self._root(one // 2)
        return root != self._root(other // 2) or self._length[root] >= CLOSING * gap

    def _root(self, run: int) -> int:
        """Return the run by which a chain is known."""
        chain = self._chain
        while chain[run] != run:
            chain[run] = chain[chain[run]]
            run = chain[run]
        return run


class _Meeting(NamedTuple):
    """A branch: the first end there, how many meet, where, and all ends that were joined there."""

    first: int
    ends: int
    position: tuple[float, float]
    layer: int
    members: tuple[int, ...]

    def named(self, names: Sequence[str]) -> Branch:
        """Return it as it is reported."""
        return Branch(self.position, names[self.layer], self.ends)


class _Width(NamedTuple):
    """A gap, with its layer by number."""

    position: tuple[float, float]
    width: float
    layer: int
    joined: bool

    def named(self, names: Sequence[str]) -> Gap:
        """Return it as it is reported."""
        return Gap(self.position, self.width, names[self.layer], self.joined)


def _placed(points: Array, layer: Indices, farthest: float) -> Array:
    """Return points, (k, 3), with layers farther apart than a distance: (k, 4)."""
    return np.column_stack([points, layer * (2.0 * farthest + 1.0)])


def _near(points: Array, farthest: float) -> tuple[Indices, Indices]:
    """Return which of points, (k, 4), are near each other, each pair once."""
    if len(points) < 2:
        return np.zeros(0, dtype=np.intp), np.zeros(0, dtype=np.intp)
    _, other = _nearest(points, points, farthest=farthest, count=NEIGHBOURS + 1)
    one, slot = np.nonzero(other < len(points))
    found = other[one, slot]
    code = np.unique(np.minimum(one, found) * len(points) + np.maximum(one, found))
    mine, its = code // len(points), code % len(points)
    apart = mine != its
    return mine[apart], its[apart]


def _nearest(points: Array, places: Array, *, farthest: float, count: int) -> tuple[Array, Indices]:
    """Return the points nearest to places and how far they are, (p, count) each.

    Where there are fewer, the number is that of the points and the distance is infinity.
    """
    ranks = np.arange(1, count + 1)
    # The bound itself is meant to be near enough.
    bound = float(np.nextafter(farthest, np.inf))
    distance, number = cKDTree(points).query(places, k=ranks, distance_upper_bound=bound)
    return np.asarray(distance), np.asarray(number, dtype=np.intp)


def _groups(count: int, pairs: tuple[Indices, Indices]) -> Indices:
    """Return numbers of the groups that pairs make of some things: (count,)."""
    graph = coo_array((np.ones(len(pairs[0]), dtype=bool), pairs), shape=(count, count))
    label: Indices = connected_components(graph, directed=False)[1].astype(np.intp)
    return label


def _spots(points: Array) -> Indices:
    """Return which of points, (k, 4), are one point but for rounding, by a number for each."""
    rank = np.lexsort(points.T)
    new = np.concatenate([[True], (points[rank[1:]] != points[rank[:-1]]).any(axis=1)])
    node = np.empty(len(points), dtype=np.intp)
    node[rank] = np.cumsum(new) - 1
    distinct = points[rank[new]]
    return _groups(len(distinct), _near(distinct, SNAP))[node]


def _within(members: Indices, spot: Indices) -> tuple[Indices, Indices]:
    """Return all pairs of ends in the same spot, unless these are too many."""
    rank = np.argsort(spot, kind="stable")
    count = np.bincount(spot)
    first = np.cumsum(count) - count
    one, other = [members[:0]], [members[:0]]
    for size in range(2, min(MOST_MEETING, count.max(initial=0)) + 1):
        begin = first[count == size]
        for mine, its in zip(*np.triu_indices(size, 1), strict=True) if begin.size else ():
            one.append(members[rank[begin + mine]])
            other.append(members[rank[begin + its]])
    return np.concatenate(one), np.concatenate(other)


def _crowds(ends: _Ends, members: Indices, label: Indices) -> list[_Meeting]:
    """Return where more than two ends are in one group."""
    count = np.bincount(label)
    rank = np.argsort(label, kind="stable")
    groups = np.split(members[rank], np.cumsum(count)[:-1])
    found = []
    for number in np.flatnonzero(count > 2):
        group = groups[number]
        x, y, _ = ends.points[group[0]].tolist()
        layer = int(ends.layer[group[0] // 2])
        found.append(_Meeting(int(group[0]), group.size, (x, y), layer, tuple(group.tolist())))
    return found


def _joined(joints: _Joints, joining: float) -> list[_Meeting]:
    """Join ends: first those in the same point, then those that are near. Return the crowds."""
    ends = joints.ends
    layer = np.repeat(ends.layer, 2)
    free = np.flatnonzero(np.repeat(~ends.closed, 2))
    if not free.size:
        return []
    spot = _spots(_placed(ends.points[free], layer[free], SNAP))
    joints.join(*_within(free, spot))
    crowds = _crowds(ends, free, spot)
    left = np.flatnonzero(np.array(joints.mates)[free] < 0)
    one, other = _near(_placed(ends.points[free[left]], layer[free[left]], joining), joining)
    apart = spot[left[one]] != spot[left[other]]
    one, other = one[apart], other[apart]
    joints.join(free[left[one]], free[left[other]])
    return crowds + _crowds(ends, free[left], _groups(left.size, (one, other)))


@dataclass(frozen=True, eq=False)
class _Chains:
    """Outlines, one after the other.

    Parameters
    ----------
    pieces : Pieces
        As they are traced.
    chain : (n,) array of int
        The outline of each.
    closed : (m,) array of bool
    layer : (m,) array of int
    tips : (m, 2) array of int
        The ends of runs where outlines begin and end.
    """

    pieces: Pieces
    chain: Indices
    closed: Flags
    layer: Indices
    tips: Indices

    @property
    def first(self) -> Indices:
        """Where each begins, and where the last ends: (m + 1,)."""
        return np.searchsorted(self.chain, np.arange(len(self.closed) + 1))

    def outlines(self, names: Sequence[str]) -> tuple[Outline, ...]:
        """Return them one by one."""
        bounds, closed = self.first.tolist(), self.closed.tolist()
        return tuple(
            Outline(self.pieces.chosen(slice(*part)), loop, names[layer])
            for part, loop, layer in zip(pairwise(bounds), closed, self.layer.tolist(), strict=True)
        )


def _walks(mates: Sequence[int]) -> Iterator[tuple[list[int], bool]]:
    """Yield the ends by which outlines enter their runs, and whether they are closed."""
    seen = bytearray(len(mates) // 2)
    for run in range(len(seen)):
        if seen[run]:
            continue
        ahead, enter = [2 * run], mates[2 * run + 1]
        while enter >= 0 and enter != 2 * run:
            ahead.append(enter)
            enter = mates[enter ^ 1]
        closed, behind = enter >= 0, []
        before = -1 if closed else mates[2 * run]
        while before >= 0:
            behind.append(before ^ 1)
            before = mates[before ^ 1]
        walk = behind[::-1] + ahead
        for end in walk:
            seen[end // 2] = True
        yield walk, closed


def _laid(pieces: Pieces, joints: _Joints) -> _Chains:
    """Return the pieces as joined ends bid to trace them."""
    ends = joints.ends
    walks = list(_walks(joints.mates))
    enter = np.array([end for walk, _ in walks for end in walk], dtype=np.intp)
    run, back = enter // 2, enter % 2 == 1
    count = (ends.last - ends.first + 1)[run]
    step = np.arange(count.sum()) - np.repeat(np.cumsum(count) - count, count)
    flip = np.repeat(back, count)
    begin = np.repeat(np.where(back, ends.last[run], ends.first[run]), count)
    own = pieces.chosen(begin + np.where(flip, -step, step))
    turned = flip[:, np.newaxis]
    traced = Pieces(
        np.where(turned, own.end, own.start),
        np.where(turned, own.start, own.end),
        np.where(flip, -own.bulge, own.bulge),
        own.source,
    )
    chain = np.repeat(np.arange(len(walks)), [len(walk) for walk, _ in walks])
    tips = np.array([(walk[0], walk[-1] ^ 1) for walk, _ in walks], dtype=np.intp)
    closed = np.array([loop for _, loop in walks])
    return _Chains(traced, np.repeat(chain, count), closed, ends.layer[tips[:, 0] // 2], tips)


def _bridged(chains: _Chains) -> tuple[_Chains, list[_Width]]:
    """Make each piece begin where the one before ends, bit for bit; return where they were apart.

    What is apart by rounding is moved, what is farther apart gets a straight piece between.
    """
    own, first = chains.pieces, chains.first
    after = np.arange(1, len(own) + 1)
    final = first[1:] - 1
    after[final] = np.where(chains.closed, first[:-1], final)
    joint = np.ones(len(own), dtype=bool)
    joint[final] = chains.closed
    away = np.where(joint[:, np.newaxis], own.start[after] - own.end, 0.0)
    width = np.sqrt((away**2).sum(axis=1))
    bridge = np.flatnonzero(width > SNAP)
    heal = np.flatnonzero((width > 0) & (width <= SNAP))
    start, end = own.start.copy(), own.end.copy()
    wrap = heal[after[heal] <= heal]
    inner = heal[after[heal] > heal]
    start[after[inner]] = end[inner]
    end[wrap] = start[after[wrap]]
    middle = 0.5 * (own.end + own.start[after])[bridge, :2]
    layer = chains.layer[chains.chain[bridge]]
    gaps = [
        _Width((x, y), apart, number, joined=True)
        for (x, y), apart, number in zip(
            middle.tolist(), width[bridge].tolist(), layer.tolist(), strict=True
        )
    ]
    pieces = Pieces(
        np.insert(start, bridge + 1, end[bridge], axis=0),
        np.insert(end, bridge + 1, start[after[bridge]], axis=0),
        np.insert(own.bulge, bridge + 1, 0.0),
        np.insert(own.source, bridge + 1, own.source[bridge]),
    )
    # Healing may have taken all its length from a piece as short as rounding.
    some = np.flatnonzero((pieces.start != pieces.end).any(axis=1))
    chain = np.insert(chains.chain, bridge + 1, chains.chain[bridge])[some]
    return replace(chains, pieces=pieces.chosen(some), chain=chain), gaps


def _touched(
    chains: _Chains, joints: _Joints, crowds: Sequence[_Meeting], joining: float
) -> Iterator[_Meeting]:
    """Yield where open ends lie at a joint, of another outline or farther along their own."""
    ends, first = joints.ends, chains.first
    crowded = {end for crowd in crowds for end in crowd.members}
    opens = np.flatnonzero(~chains.closed)
    tips = [(tip, o, s) for o in opens for s, tip in enumerate(chains.tips[o].tolist())]
    tips = [row for row in tips if row[0] not in crowded]
    inner = np.ones(len(chains.pieces), dtype=bool)
    inner[first[opens]] = False
    joint = np.flatnonzero(inner)
    if not tips or not joint.size:
        return
    number, outline, side = np.array(tips).T
    of = chains.chain[joint]
    distances, nearest = _nearest(
        _placed(ends.points[number], ends.layer[number // 2], joining),
        _placed(chains.pieces.start[joint], chains.layer[of], joining),
        farthest=joining,
        count=1,
    )
    hit = np.flatnonzero(nearest[:, 0] < len(number))
    distance, tip, of = distances[hit, 0], nearest[hit, 0], of[hit]
    reached = np.concatenate([[0.0], np.cumsum(chains.pieces.length)])
    here = reached[joint[hit]]
    way = np.where(side[tip] == 0, here - reached[first[of]], reached[first[of + 1]] - here)
    other = (of != outline[tip]) | (way >= CLOSING * distance)
    met, count = np.unique(np.unique(np.stack([tip, of])[:, other], axis=1)[0], return_counts=True)
    for found, others in zip(met.tolist(), count.tolist(), strict=True):
        end = int(number[found])
        x, y, _ = ends.points[end].tolist()
        yield _Meeting(end, 1 + 2 * others, (x, y), int(ends.layer[end // 2]), (end,))


def _apart(joints: _Joints) -> Iterator[_Width]:
    """Yield where an open end has another near that it may have been meant to meet."""
    ends = joints.ends
    left = np.flatnonzero(np.array(joints.mates) < 0)
    layer = ends.layer[left // 2]
    one, other = (left[pair] for pair in _near(_placed(ends.points[left], layer, NEAR), NEAR))
    width = np.sqrt(((ends.points[one] - ends.points[other]) ** 2).sum(axis=1))
    rank = np.lexsort([other, one, width])
    nearest: dict[int, tuple[int, int, float]] = {}
    for mine, its, apart in zip(
        one[rank].tolist(), other[rank].tolist(), width[rank].tolist(), strict=True
    ):
        if apart > SNAP and joints.may_meet(mine, its, apart):
            nearest.setdefault(mine, (mine, its, apart))
            nearest.setdefault(its, (mine, its, apart))
    for mine, its, apart in sorted(set(nearest.values())):
        x, y, _ = (0.5 * (ends.points[mine] + ends.points[its])).tolist()
        yield _Width((x, y), apart, int(ends.layer[mine // 2]), joined=False)
