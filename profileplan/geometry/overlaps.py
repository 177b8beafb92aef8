"""Which pieces of a drawing are drawn twice?

A piece of one entity is covered where a piece of another, on the same layer, runs as near to it as
no machine can tell. The longer piece covers the shorter; of equal ones the first that is drawn
stays. Pieces of one entity are never compared: a line that doubles back is meant. Lengths are in
mm.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import groupby
from operator import itemgetter
from typing import TYPE_CHECKING

import numpy as np
import shapely

from profileplan.geometry.shapes import Pieces

if TYPE_CHECKING:
    import numpy.typing as npt

    from profileplan.geometry.corridor import Array, Indices

    Flags = npt.NDArray[np.bool_]

COVERING = 1e-4
"""A piece covers what lies as near to it as this [mm]: far below what any machine can tell."""

LEAST_COVERED = 1e-3
"""Shorter overlaps are left, unless all of a piece is covered [mm]: so overlap pieces that meet."""

SLIVER = 2 * COVERING
"""What is left of a covered piece and shorter is covered too [mm]: COVERING lost at both ends."""

WHOLE = 0.999
"""Share of a piece shorter than LEAST_COVERED that counts as all of it."""

FLAT = 1e-6
"""Arcs whose chord is as near as this are compared as lines [mm]: their centres have no digits."""

PARALLEL = 0.05
"""Pieces whose directions differ by more cover nothing [rad]: they only meet or cross."""

CHUNK = 4096
"""How many points are searched for at once: bounds the memory where all pieces are near."""


def uncovered(pieces: Pieces, layer_of: Indices) -> tuple[Pieces, dict[tuple[int, int], float]]:
    """Return what no other entity covers.

    Parameters
    ----------
    pieces : Pieces
        None turns by more than a full circle, none has no length.
    layer_of : (m,) array of int
        The layer of each entity.

    Returns
    -------
    rest : Pieces
        In the same order; covered pieces are missing, or shortened to what is left.
    lost : dict
        How much of an entity was left out [mm], by its number and that of the one that covers it.
    """
    lost: dict[tuple[int, int], float] = {}
    weak, strong, low, high = _overlaps(pieces, *_pairs(pieces, layer_of))
    if not weak.size:
        return pieces, lost
    length, source = pieces.length.tolist(), pieces.source.tolist()
    rest: list[tuple[int, float, float]] = []
    rank = np.lexsort([strong, -high, low, weak])
    rows = zip(*(part[rank].tolist() for part in (weak, strong, low, high)), strict=True)
    for piece, covers in groupby(rows, itemgetter(0)):
        reached, pair = 0.0, (0, 0)
        for _, other, begin, finish in covers:
            pair = (source[piece], source[other])
            if (begin - reached) * length[piece] > SLIVER:
                rest.append((piece, reached, begin))
                reached = begin
            lost[pair] = lost.get(pair, 0.0) + max(0.0, finish - reached) * length[piece]
            reached = max(reached, finish)
        if (1 - reached) * length[piece] > SLIVER:
            rest.append((piece, reached, 1.0))
        else:
            lost[pair] += (1 - reached) * length[piece]
    covered = np.zeros(len(pieces), dtype=bool)
    covered[weak] = True
    index = np.concatenate([np.flatnonzero(~covered), np.array([r[0] for r in rest], np.intp)])
    free = index.size - len(rest)
    begins = np.concatenate([np.zeros(free), [r[1] for r in rest]])
    finishes = np.concatenate([np.ones(free), [r[2] for r in rest]])
    rank = np.lexsort([begins, index])
    return cut(pieces, index[rank], begins[rank], finishes[rank]), lost


def cut(pieces: Pieces, index: Indices, low: Array, high: Array) -> Pieces:
    """Return parts of chosen pieces, from a share of the way to another: (k,) each."""
    first, last = (low == 0)[:, np.newaxis], (high == 1)[:, np.newaxis]
    start = np.where(first, pieces.start[index], pieces.at(index, low))
    end = np.where(last, pieces.end[index], pieces.at(index, high))
    part = np.tan(np.arctan(pieces.bulge[index]) * (high - low))
    bulge = np.where((first & last)[:, 0], pieces.bulge[index], part)
    return Pieces(start, end, bulge, pieces.source[index])


def _pairs(pieces: Pieces, layer_of: Indices) -> tuple[Indices, Indices]:
    """Return pieces, and others that may cover them: longer ones, or as long and drawn before.

    They belong to different entities of one layer. Where pieces overlap, an end of one lies on the
    other, so ends are looked for in boxes; long pieces have several.
    """
    nothing = np.zeros(0, dtype=np.intp)
    drawn = np.unique(pieces.source)
    several = np.bincount(layer_of[drawn], minlength=layer_of.max(initial=0) + 1) > 1
    some = np.flatnonzero(several[layer_of[pieces.source]])
    if not some.size:
        return nothing, nothing
    length = pieces.length
    count = np.ceil(length[some] / length[some].mean()).astype(np.intp)
    piece = np.repeat(some, count)
    share = np.arange(piece.size) - np.repeat(np.cumsum(count) - count, count)
    whole = np.repeat(count, count)
    boxes = cut(pieces, piece, share / whole, (share + 1) / whole).bounds()[:, :, :2]
    low, high = boxes[:, 0] - COVERING, boxes[:, 1] + COVERING
    tree = shapely.STRtree(shapely.box(low[:, 0], low[:, 1], high[:, 0], high[:, 1]))
    ends = np.concatenate([pieces.start[some, :2], pieces.end[some, :2]])
    of, headings = np.tile(some, 2), np.concatenate(pieces.chosen(some).directions())
    carriers, layer, rank = _Carriers.of(pieces), layer_of[pieces.source], _ranks(pieces)
    found = [nothing]
    for begin in range(0, len(ends), CHUNK):
        hits = tree.query(shapely.points(ends[begin : begin + CHUNK]))
        point, other = hits[0] + begin, piece[hits[1]]
        one = of[point]
        peers = (pieces.source[one] != pieces.source[other]) & (layer[one] == layer[other])
        one, other, point = one[peers], other[peers], point[peers]
        along = carriers.follow(other, ends[point], headings[point])
        along &= carriers.flat[one] == carriers.flat[other]
        one, other = one[along], other[along]
        weaker = rank[one] > rank[other]
        code = np.where(weaker, one, other) * len(pieces) + np.where(weaker, other, one)
        found.append(np.unique(code))
    codes = np.unique(np.concatenate(found))
    return codes // len(pieces), codes % len(pieces)


def _ranks(pieces: Pieces) -> Indices:
    """Return how strong pieces are, the strongest 0: the longest, then the first drawn."""
    rank = np.empty(len(pieces), dtype=np.intp)
    order = np.argsort(-np.round(pieces.length / COVERING), kind="stable")
    rank[order] = np.arange(len(pieces))
    return rank


@dataclass(frozen=True, eq=False)
class _Carriers:
    """The whole lines and circles, in plan, that pieces are parts of.

    Parameters
    ----------
    flat : (n,) array of bool
    base : (n, 2) array [mm]
        A point of the line, or the centre of the circle.
    way : (n, 2) array
        Unit vector along the line; 0 for a line that stands upright.
    radius : (n,) array [mm]
    """

    flat: Flags
    base: Array
    way: Array
    radius: Array

    @classmethod
    def of(cls, pieces: Pieces) -> _Carriers:
        """Return the carriers of pieces."""
        flat, chord = _flat(pieces), pieces.chord
        long = np.where(chord > 0, chord, 1.0)[:, np.newaxis]
        base = pieces.start[:, :2].copy()
        base[~flat] = pieces.chosen(np.flatnonzero(~flat)).centre
        way = (pieces.end - pieces.start)[:, :2] / long
        return cls(flat, base, way, np.where(flat, 0.0, pieces.radius))

    def follow(self, index: Indices, points: Array, headings: Array) -> Flags:
        """Return whether points, (k, 2), with unit headings, (k, 2), go along carriers, (k,)."""
        flat, from_base = self.flat[index], points - self.base[index]
        away = np.where(flat, 1.0, np.hypot(from_base[:, 0], from_base[:, 1]))
        # The unit normal of the carrier at the point.
        way = self.way[index]
        normal = np.where(
            flat[:, np.newaxis],
            np.stack([-way[:, 1], way[:, 0]], axis=1),
            from_base / np.where(away > 0, away, 1.0)[:, np.newaxis],
        )
        beside = np.where(flat, (from_base * normal).sum(axis=1), away - self.radius[index])
        across = (headings * normal).sum(axis=1)
        along: Flags = (np.abs(beside) <= SLIVER) & (np.abs(across) <= PARALLEL)
        return along


def _flat(pieces: Pieces) -> Flags:
    """Return which pieces are lines, or arcs that cannot be told from lines."""
    flat: Flags = pieces.chord * np.abs(pieces.bulge) <= 2 * FLAT
    return flat


def _overlaps(
    pieces: Pieces, weak: Indices, strong: Indices
) -> tuple[Indices, Indices, Array, Array]:
    """Return which pieces of pairs are covered, by which, from what share of theirs to what."""
    flat = _flat(pieces)[weak]
    lines, arcs = np.flatnonzero(flat), np.flatnonzero(~flat)
    # Arcs can overlap at both ends, so each pair is looked at twice.
    arcs = np.concatenate([arcs, arcs])
    again = np.arange(arcs.size) >= arcs.size // 2
    low, high, out = (
        np.concatenate(both)
        for both in zip(
            _along_lines(pieces, weak[lines], strong[lines]),
            _along_arcs(pieces, weak[arcs], strong[arcs], again),
            strict=True,
        )
    )
    index = np.concatenate([lines, arcs])
    share = high - low
    enough = (share * pieces.length[weak[index]] > LEAST_COVERED) | (share > WHOLE)
    kept = np.flatnonzero((out <= COVERING) & enough)
    return weak[index[kept]], strong[index[kept]], low[kept], high[kept]


def _along_lines(pieces: Pieces, weak: Indices, strong: Indices) -> tuple[Array, Array, Array]:
    """Return from where to where lines run along others, as shares, and how far away at most."""
    origin, other = pieces.start[weak], pieces.start[strong]
    way, along = pieces.end[weak] - origin, pieces.end[strong] - other
    square, far = (way**2).sum(axis=1), (along**2).sum(axis=1)
    one = ((other - origin) * way).sum(axis=1) / square
    two = one + (along * way).sum(axis=1) / square
    low, high = (np.clip(end(one, two), 0.0, 1.0) for end in (np.minimum, np.maximum))
    out = np.zeros(len(weak))
    for share in (low, high):
        point = origin + way * share[:, np.newaxis] - other
        foot = np.clip((point * along).sum(axis=1) / far, 0.0, 1.0)
        away = point - along * foot[:, np.newaxis]
        out = np.maximum(out, np.sqrt((away**2).sum(axis=1)))
    return low, high, out


def _along_arcs(
    pieces: Pieces, weak: Indices, strong: Indices, again: Flags
) -> tuple[Array, Array, Array]:
    """Do the same for arcs; ``again`` looks a full turn farther back."""
    own, other = pieces.chosen(weak), pieces.chosen(strong)
    centre, sign, turn = own.centre, np.sign(own.turn), np.abs(own.turn)

    def ahead(points: Array) -> Array:
        """Return the angle from the start of the weak arc to points, in its direction."""
        away, first = points[:, :2] - centre, own.start[:, :2] - centre
        cross = first[:, 0] * away[:, 1] - first[:, 1] * away[:, 0]
        angle: Array = sign * np.arctan2(cross, (first * away).sum(axis=1))
        return angle

    sweep = sign * other.turn
    begin = ahead(other.start)
    # Ends of one arc are seen from the other's centre, so that flat arcs keep their digits.
    over = ahead(other.end) - begin - sweep
    finish = begin + sweep + over - 2 * np.pi * np.round(over / (2 * np.pi))
    back = np.floor(np.minimum(begin, finish) / (2 * np.pi)) + again
    begin, finish = begin - 2 * np.pi * back, finish - 2 * np.pi * back
    low, high = (np.clip(end(begin, finish) / turn, 0.0, 1.0) for end in (np.minimum, np.maximum))
    out = np.zeros(len(weak))
    for part in np.linspace(0, 1, 5):
        share = low + part * (high - low)
        point = pieces.at(weak, share)
        away = np.hypot(*(point[:, :2] - other.centre).T) - other.radius
        passed = np.clip((share * turn - begin) / (finish - begin), 0.0, 1.0)
        height = other.start[:, 2] + passed * (other.end[:, 2] - other.start[:, 2])
        out = np.maximum(out, np.hypot(away, point[:, 2] - height))
    return low, high, out
