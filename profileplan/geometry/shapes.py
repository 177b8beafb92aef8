"""What is drawn: chains of straight lines and circular arcs, exactly.

A piece is a line or an arc from one point to the next. Its bulge is the tangent of a quarter of the
angle that it turns through, above 0 anticlockwise, 0 for a line, so that a half circle has 1 or -1.
Arcs lie in plan (x, y); height changes evenly along them.

Source: the bulge is that of DXF polylines (DXF reference, group code 42, from memory). With chord c
and bulge b the sagitta is b c / 2, the radius c (1 + b^2) / (4 b), the turn 4 atan b.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from profileplan.geometry.corridor import Array, Indices

LEAST_ARCS = 2
"""Least number of chords of an arc that is flattened."""


@dataclass(frozen=True, eq=False)
class Pieces:
    """Lines and arcs, each by itself.

    Parameters
    ----------
    start, end : (n, 3) arrays [mm]
    bulge : (n,) array
        Tangent of a quarter of the turn; 0: a line.
    source : (n,) array of int
        Which entity of the drawing each comes from.
    """

    start: Array
    end: Array
    bulge: Array
    source: Indices

    def __len__(self) -> int:
        return len(self.bulge)

    @property
    def chord(self) -> Array:
        """Length of the straight line from start to end in plan, (n,) [mm]."""
        along = self.end - self.start
        length: Array = np.hypot(along[:, 0], along[:, 1])
        return length

    @property
    def turn(self) -> Array:
        """Angle from the direction at the start to that at the end, (n,) [rad]."""
        return 4 * np.arctan(self.bulge)

    @property
    def radius(self) -> Array:
        """Radius of the arcs, (n,) [mm]; infinity for lines."""
        flat = np.where(self.bulge == 0, 1.0, np.abs(self.bulge))
        found: Array = np.where(self.bulge == 0, np.inf, self.chord * (1 + flat**2) / (4 * flat))
        return found

    @property
    def length(self) -> Array:
        """Length of each, (n,) [mm]."""
        arc = np.abs(self.turn)
        # arc / sin is 1 for a line, and keeps its digits for the flattest arc
        half = np.where(arc > 0, 0.5 * arc, 1.0)
        plan = self.chord * np.where(arc > 0, half / np.sin(half), 1.0)
        whole: Array = np.hypot(plan, self.end[:, 2] - self.start[:, 2])
        return whole

    @property
    def centre(self) -> Array:
        """Centres of the arcs in plan, (n, 2) [mm]; not a number for lines."""
        along = (self.end - self.start)[:, :2]
        flat = np.where(self.bulge == 0, np.nan, self.bulge)
        left = np.stack([-along[:, 1], along[:, 0]], axis=1)
        middle = 0.5 * (self.start + self.end)[:, :2]
        found: Array = middle + left * ((1 - flat**2) / (4 * flat))[:, np.newaxis]
        return found

    def at(self, index: Indices, share: Array) -> Array:
        """Return points at shares of the way, from 0 to 1, along chosen pieces: (k, 3) [mm].

        Parameters
        ----------
        index : (k,) array of int
        share : (k,) array
        """
        start, end, bulge = self.start[index], self.end[index], self.bulge[index]
        turn = 4 * np.arctan(bulge)
        along = end - start
        left = np.stack([-along[:, 1], along[:, 0]], axis=1)
        half = np.where(turn == 0, 1.0, 0.5 * turn)
        # From the start a point on the arc lies at sin(a s / 2) / sin(a / 2) of the chord's length,
        # turned from the chord by (s - 1) a / 2.
        reach = np.where(turn == 0, share, np.sin(share * half) / np.sin(half))
        angle = (share - 1) * 0.5 * turn
        found: Array = start + along * share[:, np.newaxis]
        found[:, :2] = (
            start[:, :2]
            + along[:, :2] * (reach * np.cos(angle))[:, np.newaxis]
            + left * (reach * np.sin(angle))[:, np.newaxis]
        )
        return found

    def directions(self) -> tuple[Array, Array]:
        """Return the unit tangents in plan at the starts and at the ends: two (n, 2) arrays."""
        along = (self.end - self.start)[:, :2]
        angle, half = np.arctan2(along[:, 1], along[:, 0]), 0.5 * self.turn
        first, last = angle - half, angle + half
        return (
            np.stack([np.cos(first), np.sin(first)], axis=1),
            np.stack([np.cos(last), np.sin(last)], axis=1),
        )

    def bounds(self) -> Array:
        """Return the lowest and the highest position of each: (n, 2, 3) [mm]."""
        low, high = np.minimum(self.start, self.end), np.maximum(self.start, self.end)
        arcs = np.flatnonzero(self.bulge)
        centre, radius = self.centre[arcs], self.radius[arcs]
        before = (self.start[arcs, :2] - centre).T
        first, turn = np.arctan2(before[1], before[0]), self.turn[arcs]
        for quarter in range(4):
            # How far the arc turns until it points along an axis, in its own direction.
            ahead = np.sign(turn) * (0.5 * np.pi * quarter - first) % (2 * np.pi)
            passed = arcs[ahead <= np.abs(turn)]
            column, side = quarter % 2, 1.0 if quarter < 2 else -1.0
            tip = (centre[:, column] + side * radius)[ahead <= np.abs(turn)]
            low[passed, column] = np.minimum(low[passed, column], tip)
            high[passed, column] = np.maximum(high[passed, column], tip)
        return np.stack([low, high], axis=1)

    def reversed(self) -> Pieces:
        """Return them in the other order and direction."""
        return Pieces(self.end[::-1], self.start[::-1], -self.bulge[::-1], self.source[::-1])

    def chosen(self, which: slice | Indices) -> Pieces:
        """Return some of them."""
        return Pieces(self.start[which], self.end[which], self.bulge[which], self.source[which])

    def flattened(self, error: float) -> tuple[Array, Indices, Array]:
        """Return points on the pieces; straight lines between them are within an error.

        Parameters
        ----------
        error : float [mm]
            Greatest sagitta, above 0.

        Returns
        -------
        points : (k + 1, 3) array [mm]
            The start of each piece that follows the last, points on its arc, and the last end.
        piece : (k,) array of int
            The piece that each point but the last lies on.
        share : (k,) array
            How far along it.
        """
        flat = np.minimum(error / np.where(self.bulge == 0, np.inf, self.radius), 1.0)
        widest = 2 * np.arccos(1 - flat)
        turn = np.abs(self.turn)
        count = np.ones(len(self), dtype=np.intp)
        arcs = turn > 0
        count[arcs] = np.maximum(np.ceil(turn[arcs] / widest[arcs]), LEAST_ARCS).astype(np.intp)
        piece = np.repeat(np.arange(len(self)), count)
        first = np.cumsum(count) - count
        share = (np.arange(piece.size) - first[piece]) / count[piece]
        points = self.at(piece, share)
        return np.concatenate([points, self.end[-1:]]), piece, share


@dataclass(frozen=True, eq=False)
class Outline:
    """Pieces that follow each other, as they are traced.

    Parameters
    ----------
    pieces : Pieces
        Each begins where the one before ends.
    closed : bool
        Whether the last ends where the first begins.
    layer : str
        The layer of the drawing that they are on.
    """

    pieces: Pieces
    closed: bool
    layer: str

    @property
    def start(self) -> Array:
        """Where it begins, (3,) [mm]."""
        first: Array = self.pieces.start[0]
        return first

    @property
    def end(self) -> Array:
        """Where it ends, (3,) [mm]."""
        last: Array = self.pieces.end[-1]
        return last

    @cached_property
    def length(self) -> float:
        """Length [mm]."""
        return float(self.pieces.length.sum())

    @property
    def smallest_radius(self) -> float:
        """Smallest radius of its arcs [mm]; infinity without any."""
        return float(self.pieces.radius.min(initial=np.inf))

    @cached_property
    def area(self) -> float:
        """Area in plan that a closed outline encloses [mm²], above 0 anticlockwise."""
        one, other = self.pieces.start, self.pieces.end
        middle = one[0]
        cross = (one[:, 0] - middle[0]) * (other[:, 1] - middle[1]) - (other[:, 0] - middle[0]) * (
            one[:, 1] - middle[1]
        )
        # The segment between an arc and its chord.
        turn = self.pieces.turn
        radius = np.where(turn == 0, 0.0, self.pieces.radius)
        return float(0.5 * (cross + radius**2 * (turn - np.sin(turn))).sum())

    def bounds(self) -> Array:
        """Return the lowest and the highest position: (2, 3) [mm]."""
        own = self.pieces.bounds()
        return np.stack([own[:, 0].min(axis=0), own[:, 1].max(axis=0)])

    def reversed(self) -> Outline:
        """Return it in the other direction."""
        return replace(self, pieces=self.pieces.reversed())

    def starting_at(self, piece: int) -> Outline:
        """Return a closed outline that begins with another piece."""
        order = np.roll(np.arange(len(self.pieces)), -piece)
        return replace(self, pieces=self.pieces.chosen(order))

    def mapped(self, place: Similarity) -> Outline:
        """Return it placed elsewhere."""
        own = self.pieces
        bulge = own.bulge * (-1.0 if place.mirrored else 1.0)
        pieces = Pieces(place(own.start), place(own.end), bulge, own.source)
        return replace(self, pieces=pieces)


@dataclass(frozen=True, eq=False)
class Similarity:
    """Mirror at the y axis, scale, turn and shift, in this order.

    Parameters
    ----------
    shift : (2,) array [mm]
    turn : float [rad]
        Anticlockwise.
    scale : float
    mirrored : bool
    """

    shift: Array
    turn: float = 0.0
    scale: float = 1.0
    mirrored: bool = False

    def __call__(self, points: Array) -> Array:
        """Return points, (n, 3), in their place; heights are scaled only."""
        cosine, sine = np.cos(self.turn), np.sin(self.turn)
        x = -points[:, 0] if self.mirrored else points[:, 0]
        placed = np.stack(
            [cosine * x - sine * points[:, 1], sine * x + cosine * points[:, 1], points[:, 2]],
            axis=1,
        )
        placed *= self.scale
        placed[:, :2] += self.shift
        return placed
