"""How far is a motion from what is drawn, and what is drawn from the motion?

Measured on dense samples, by exact distances to lines and arcs, and without regard to how the
motion was found. Between two samples a distance can be greater by what the spacing allows.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import shapely

if TYPE_CHECKING:
    from profileplan.geometry.corridor import Array, Indices
    from profileplan.geometry.shapes import Pieces

CHORD_SHARE = 0.1
"""Sagitta of the chords that the nearest piece is sought by, as a share of the spacing."""


def deviation(motion: Array, pieces: Pieces, *, spacing: float) -> tuple[float, float]:
    """Return how far a motion and pieces are from each other.

    Parameters
    ----------
    motion : (k, 3) array [mm]
        Points of the motion, near enough to each other to stand for it as straight lines.
    pieces : Pieces
        What is drawn.
    spacing : float [mm]
        Greatest distance between samples of the pieces.

    Returns
    -------
    out : float [mm]
        Greatest distance from a point of the motion to the nearest piece.
    missed : float [mm]
        Greatest distance from a sample of the pieces to the motion.
    """
    return _out(motion, pieces, spacing), _missed(motion, pieces, spacing)


def _out(motion: Array, pieces: Pieces, spacing: float) -> float:
    flat, piece, _ = pieces.flattened(CHORD_SHARE * spacing)
    nearest = piece[_nearest(flat, motion)]
    foot = pieces.at(nearest, _shares(pieces, nearest, motion))
    return float(np.linalg.norm(motion - foot, axis=1).max())


def _missed(motion: Array, pieces: Pieces, spacing: float) -> float:
    count = np.maximum(np.ceil(pieces.length / spacing), 1).astype(np.intp)
    piece = np.repeat(np.arange(len(pieces)), count)
    first = np.cumsum(count) - count
    share = (np.arange(piece.size) - first[piece]) / count[piece]
    samples = np.concatenate([pieces.at(piece, share), pieces.end[-1:]])
    nearest = _nearest(motion, samples)
    start, along = motion[nearest], motion[nearest + 1] - motion[nearest]
    square = (along**2).sum(axis=1)
    foot = ((samples - start) * along).sum(axis=1) / np.where(square, square, 1.0)
    apart = samples - start - np.clip(foot, 0.0, 1.0)[:, np.newaxis] * along
    return float(np.linalg.norm(apart, axis=1).max())


def _nearest(line: Array, points: Array) -> Indices:
    """Return which leg of a line, (k + 1, 3), is the nearest in plan to each of some points."""
    legs = shapely.linestrings(np.stack([line[:-1, :2], line[1:, :2]], axis=1))
    found: Indices = shapely.STRtree(np.atleast_1d(np.asarray(legs))).query_nearest(
        shapely.points(points[:, :2]), all_matches=False
    )[1]
    return found


def _shares(pieces: Pieces, index: Indices, points: Array) -> Array:
    """Return the share of the way along chosen pieces at which each is nearest to a point."""
    start, end = pieces.start[index], pieces.end[index]
    along = end - start
    square = (along**2).sum(axis=1)
    line = ((points - start) * along).sum(axis=1) / np.where(square, square, 1.0)
    turn = pieces.turn[index]
    arcs = turn != 0
    centre = np.where(arcs[:, np.newaxis], pieces.centre[index], 0.0)
    first, here = start[:, :2] - centre, points[:, :2] - centre
    turned = np.arctan2(
        first[:, 0] * here[:, 1] - first[:, 1] * here[:, 0], (first * here).sum(axis=1)
    )
    # Ahead in the arc's direction; what is farther behind than ahead is nearer to the start.
    ahead = (np.sign(turn) * turned) % (2 * np.pi)
    whole = np.where(arcs, np.abs(turn), 1.0)
    ahead = np.where(ahead - whole > 0.5 * (2 * np.pi - whole), 0.0, ahead)
    shares: Array = np.clip(np.where(arcs, ahead / whole, line), 0.0, 1.0)
    return shares
