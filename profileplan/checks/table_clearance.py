"""Do the positions of a table keep the tool clear of everything in the cell?

The motion is seen as straight lines from row to row; what hangs at the tool is not known. Between
two rows the motion may be as far from the line as its acceleration lets it be, which is allowed
for. The distance of convex parts is a convex function along a line, which bounds it from below.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from profileplan.checks.table_extremes import FINEST, Doubt, Extreme, Places, Steps
from profileplan.geometry.cell import blocks, bodies
from profileplan.geometry.clearance import Pair

if TYPE_CHECKING:
    from profileplan.checks.findings import Finding
    from profileplan.inputs import Machine
    from profileplan.motion.polynomials import Array

CLEARANCE_TOLERANCE = 1e-6
"""By how much a distance may be too small [mm]."""

RUN = 64
"""Rows whose surroundings are looked at together first."""

HALVINGS = 12
"""Cuts of a line between two rows after which it is as good as its points."""


class ClearanceJudge:
    """Judges the distances of the tool and all keep-outs.

    Parameters
    ----------
    machine : Machine
    positions : sequence of int
        The columns of the axes' positions, in their order.
    steps : Steps
    """

    def __init__(self, machine: Machine, positions: list[int], steps: Steps) -> None:
        self._margin = machine.tool.margin
        self._pairs = [
            (f"{body.name} to {block.name}", pair)
            for body in bodies(machine, None)
            for block in blocks(machine)
            for pair in Pair.of(body, block)
        ]
        names = list(machine.axis_names)
        chosen = [*machine.horizontal_axes[:2]]
        self._columns = [positions[names.index(name)] for name in chosen]
        self._up = None if machine.up_axis is None else positions[names.index(machine.up_axis)]
        self._sign = machine.up_sign
        seen = [*chosen, *([machine.up_axis] if machine.up_axis is not None else [])]
        most = [max(axis.limits[1:3]) for axis in machine.axes if axis.name in seen]
        self._bend = float(np.linalg.norm(most))
        self._extreme = Extreme(steps)
        self._between = ""
        self._nearest = np.inf

    def see(self, values: Array, spans: Array, places: Places) -> None:
        """Judge rows, (n, k), and the lines between them; the first was judged before.

        Parameters
        ----------
        values : (n, k) array
        spans : (n - 1,) array [s]
        places : Places
            Of all rows.
        """
        if not self._pairs:
            return
        points = self._points(values)
        near = np.full(len(points), np.inf)
        doubt = np.full(len(points), CLEARANCE_TOLERANCE)
        which = np.zeros(len(points), dtype=np.intp)
        sag = np.concatenate([[0.0], self._bend * spans**2 / 8])
        boxes = _boxes(points)
        for number, (_, pair) in enumerate(self._pairs):
            for start in self._near_runs(pair, *boxes):
                run = slice(start, start + RUN + 1)
                found, allowed = self._distances(pair, points[run], sag[run])
                self._nearest = min(self._nearest, float(found.min()))
                better = np.flatnonzero(found + allowed < near[run] + doubt[run]) + start
                near[better], doubt[better] = found[better - start], allowed[better - start]
                which[better] = number
        seen = np.flatnonzero(np.isfinite(near))
        chosen = Places(places.lines[seen], places.time[seen])
        rounding = Doubt((FINEST,), (np.sqrt(3) / 2,), doubt[seen])
        worst = self._extreme.see(-near[seen], -self._margin, chosen, rounding)
        if worst is not None:
            self._between = self._pairs[which[seen[worst]]][0]

    def finding(self) -> Finding | None:
        """Return the finding on the smallest distance; None where there is nothing to hit."""
        found = self._extreme.finding("clearance", "mm")
        if found is None:
            return None
        value, limit = -found.value, self._margin
        return replace(
            found, value=value, limit=limit, margin=value - limit, rounding=0.0, what=self._between
        )

    def _points(self, values: Array) -> Array:
        points = np.zeros((len(values), 3))
        points[:, : len(self._columns)] = values[:, self._columns]
        if self._up is not None:
            points[:, 2] = self._sign * values[:, self._up]
        return points

    def _near_runs(self, pair: Pair, low: Array, high: Array) -> list[int]:
        """Return where runs of rows begin that may be nearer than the margin or than any before.

        Parameters
        ----------
        pair : Pair
        low, high : (m, 3) arrays
            Boxes round the runs [mm].
        """
        sought = max(self._margin, self._nearest)
        near = np.flatnonzero(pair.at_least(low, high) < sought)
        if near.size:
            middle = 0.5 * (low[near] + high[near])
            reach = np.linalg.norm(high[near] - middle, axis=1)
            near = near[pair.apart(middle) - reach < sought]
        found: list[int] = (near * RUN).tolist()
        return found

    def _distances(self, pair: Pair, points: Array, sag: Array) -> tuple[Array, Array]:
        """Return the distances of rows and of the lines before them, and what is allowed for.

        Lines count where they come nearer than the margin, by more than is allowed.
        """
        found = pair.apart(points)
        allowed = np.full(found.size, CLEARANCE_TOLERANCE)
        way = np.linalg.norm(np.diff(points, axis=0), axis=1)
        enough = self._margin - CLEARANCE_TOLERANCE - sag[1:]
        bound = 0.5 * (found[:-1] + found[1:] - way)
        least = np.minimum(found[:-1], found[1:])
        doubtful = np.flatnonzero((bound < enough) & (least >= enough))
        if doubtful.size:
            between = pair.apart(0.5 * (points[doubtful] + points[doubtful + 1]))
            most = np.maximum(found[doubtful], found[doubtful + 1])
            low = np.minimum(between, 2 * between - most)
            doubtful = doubtful[low < enough[doubtful]]
        for line in doubtful:
            value = _along(pair, points[line : line + 2], found[line : line + 2], enough[line])
            if value < enough[line]:
                found[line + 1] = value
                allowed[line + 1] = CLEARANCE_TOLERANCE + sag[line + 1]
        return found, allowed


def _boxes(points: Array) -> tuple[Array, Array]:
    """Return boxes round runs of rows, each with the first row of the next: two (m, 3) arrays."""
    starts = np.arange(0, len(points), RUN)
    nexts = points[np.minimum(starts + RUN, len(points) - 1)]
    low = np.minimum(np.minimum.reduceat(points, starts), nexts)
    high = np.maximum(np.maximum.reduceat(points, starts), nexts)
    return low, high


def _along(pair: Pair, ends: Array, distances: Array, enough: float) -> float:
    """Return the smallest distance on a line if it is smaller than enough."""
    begin, end = ends[:1], ends[1:]
    shares = np.array([[0.0], [1.0]])
    known = distances
    for _ in range(HALVINGS):
        middles = 0.5 * (shares[:-1] + shares[1:])
        between = pair.apart(begin + middles * (end - begin))
        # A convex function lies above the lines through its middle and either end.
        low = np.minimum(between, 2 * between - np.maximum(known[:-1], known[1:]))
        if low.min() >= enough:
            break
        # A convex function is smallest beside its smallest sample.
        shares, known = _merged(shares, middles), _merged(known, between)
        least = int(known.argmin())
        chosen = slice(max(least - 1, 0), least + 2)
        shares, known = shares[chosen], known[chosen]
    return float(known.min())


def _merged(ends: Array, middles: Array) -> Array:
    """Return values at ends and in the middles between them, in order."""
    merged: Array = np.empty((len(ends) + len(middles), *ends.shape[1:]))
    merged[::2], merged[1::2] = ends, middles
    return merged
