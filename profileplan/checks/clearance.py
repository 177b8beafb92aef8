"""Does the motion keep clear of everything in the cell, at every instant?

The distance of convex parts is a convex function of the tool point, so on a straight line three
values bound it from below; a motion is no farther from its chord than its acceleration lets it be.
Every interval of time whose bound may be less than the smallest distance found is cut in two,
until none is left. Nothing here comes from what planned the motion.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.checks.findings import Finding
from profileplan.geometry.cell import blocks, bodies
from profileplan.geometry.clearance import Pair, at_least, depth
from profileplan.inputs import Payload
from profileplan.motion import polynomials
from profileplan.motion.trajectory import ORDER, Trajectory

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from profileplan.geometry.cell import Block, Body
    from profileplan.motion.polynomials import Array, Indices
    from profileplan.motion.schedule import Schedule

CLEARANCE_TOLERANCE = 1e-6
"""How exactly the smallest distance is found, and by how much it may be too small [mm]."""

MOST_HALVINGS = 64
"""Cuts after which an interval of any length is an instant."""

BATCH = 50_000
"""Most intervals, and about as many pieces of the motion, that are looked at together."""

DEPTH_SPACING = 1.0
"""Greatest way [mm] between samples that tell how deep two cores overlap, if few enough do."""

MOST_DEPTHS = 20_000
"""Most such samples of a batch of pieces."""

DEPTH_ROUNDS, DEPTH_SHARES = 3, 33
"""How often the surroundings of the deepest sample are sampled again, and by how many."""


class Nearest(NamedTuple):
    """The smallest distance of a body and a keep-out: how large [mm], when [s], in which step."""

    value: float
    time: float
    step: int
    body: Body
    block: Block


@dataclass(frozen=True, eq=False)
class _Motion:
    """Pieces of the cycle's motion as seen in the cell: x and y in plan, and the height.

    coefficients : (n, 6, 3) array; durations, starts : (n,) arrays [s], from the beginning of the
    cycle; step : (n,) array of int.
    """

    coefficients: Array
    durations: Array
    starts: Array
    step: Indices

    def chosen(self, which: Indices) -> _Motion:
        """Return some of the pieces."""
        return _Motion(
            self.coefficients[which], self.durations[which], self.starts[which], self.step[which]
        )

    def at(self, piece: Indices, time: Array) -> Array:
        """Return positions at times since the beginnings of pieces: (k, 3) [mm]."""
        by_axis = self.coefficients[piece].transpose(0, 2, 1)
        return polynomials.evaluate(by_axis, time[:, np.newaxis])

    @cached_property
    def boxes(self) -> tuple[Array, Array]:
        """Return boxes that hold the pieces: two (n, 3) arrays [mm]."""
        hulls = Trajectory(("x", "y", "z"), self.durations, self.coefficients).hulls()
        return hulls.min(axis=1), hulls.max(axis=1)

    @cached_property
    def bend(self) -> Array:
        """Return the greatest acceleration in each piece: (n,) [mm/s²]."""
        rows = self.coefficients.transpose(0, 2, 1)
        for _ in range(2):
            rows = polynomials.derivative(rows)
        rows = polynomials.trimmed(rows.reshape(-1, rows.shape[-1]))
        low, high, _, _ = polynomials.extremes(rows, np.repeat(self.durations, 3))
        most = np.maximum(np.abs(low), np.abs(high)).reshape(-1, 3)
        bend: Array = np.linalg.norm(most, axis=1)
        return bend


class _Intervals(NamedTuple):
    """Intervals of pieces: piece, begin and end [s], the distances at both [mm]; (k,) each."""

    piece: Indices
    begin: Array
    end: Array
    first: Array
    last: Array

    def chosen(self, which: Indices | slice) -> _Intervals:
        """Return some of them."""
        return _Intervals(
            self.piece[which],
            self.begin[which],
            self.end[which],
            self.first[which],
            self.last[which],
        )

    def cut(self, middle: Array, between: Array) -> _Intervals:
        """Return the halves, given the middles and the distances there."""
        return _Intervals(
            np.concatenate([self.piece, self.piece]),
            np.concatenate([self.begin, middle]),
            np.concatenate([middle, self.end]),
            np.concatenate([self.first, between]),
            np.concatenate([between, self.last]),
        )


def clearance_findings(schedule: Schedule) -> Iterator[Finding]:
    """Judge the smallest distance of the cycle, and every keep-out that is not kept clear of."""
    margin = schedule.job.machine.tool.margin
    found: dict[str, Nearest] = {}
    for motion, body, block in _cases(schedule):
        # It matters if it is the smallest of all, or smaller than the margin.
        smallest = min((nearest.value for nearest in found.values()), default=np.inf)
        sought = max(smallest, margin)
        if block.name in found:
            sought = min(sought, found[block.name].value)
        nearest = _nearest(body, block, motion, sought=sought)
        if nearest is not None:
            found[block.name] = nearest
    ranked = sorted(
        (_deepest(schedule, nearest) for nearest in found.values()),
        key=lambda nearest: nearest.value,
    )
    if ranked:
        yield _finding(schedule, ranked[0], "clearance")
    for nearest in ranked:
        finding = _finding(schedule, nearest, "keep-out")
        if not finding.ok:
            yield replace(finding, what=f"{finding.what}, {_place(schedule, nearest)}")


def _cases(schedule: Schedule) -> Iterator[tuple[_Motion, Body, Block]]:
    """Yield what is to be looked at: the motion in batches, with each body and each block."""
    machine = schedule.job.machine
    for payload, motion in _motions(schedule):
        for body in bodies(machine, payload):
            for block in blocks(machine):
                yield motion, body, block


def _finding(schedule: Schedule, nearest: Nearest, check: str) -> Finding:
    margin = schedule.job.machine.tool.margin
    return Finding(
        check=check,
        axis=None,
        value=nearest.value,
        limit=margin,
        margin=nearest.value - margin,
        unit="mm",
        ok=nearest.value >= margin - CLEARANCE_TOLERANCE,
        time=nearest.time,
        step=schedule.steps[nearest.step].name,
        what=f"{nearest.body.name} to {nearest.block.name}",
    )


def _place(schedule: Schedule, nearest: Nearest) -> str:
    """Return in words where the axes are."""
    step = schedule.steps[nearest.step]
    position = step.trajectory.at([nearest.time - step.start])[0]
    axes = schedule.job.machine.axis_names
    return "at " + " ".join(
        f"{axis} {round(float(value), 3) + 0.0:g}"
        for axis, value in zip(axes, position, strict=True)
    )


def _motions(schedule: Schedule) -> Iterator[tuple[Payload | None, _Motion]]:
    """Yield the motion in batches of steps during which the same hangs at the tool."""
    payload: Payload | None = None
    steps: list[int] = []
    pieces = 0
    for index, asked in enumerate(schedule.job.cycle.steps):
        picks = isinstance(asked, Payload) and asked != payload
        if steps and (picks or pieces > BATCH):
            yield payload, _motion(schedule, steps)
            steps, pieces = [], 0
        payload = asked if isinstance(asked, Payload) else payload
        steps.append(index)
        pieces += schedule.steps[index].trajectory.durations.size
    yield payload, _motion(schedule, steps)


def _motion(schedule: Schedule, steps: Sequence[int]) -> _Motion:
    """Return the pieces of some steps as seen in the cell."""
    machine = schedule.job.machine
    names = list(machine.axis_names)
    played = [schedule.steps[index] for index in steps]
    whole = np.concatenate([step.trajectory.coefficients for step in played])
    seen = np.zeros((len(whole), ORDER, 3))
    for column, name in enumerate(machine.horizontal_axes[:2]):
        seen[:, :, column] = whole[:, :, names.index(name)]
    if machine.up_axis is not None:
        seen[:, :, 2] = machine.up_sign * whole[:, :, names.index(machine.up_axis)]
    return _Motion(
        seen,
        np.concatenate([step.trajectory.durations for step in played]),
        np.concatenate([step.start + step.trajectory.breaks[:-1] for step in played]),
        np.repeat(steps, [step.trajectory.durations.size for step in played]),
    )


def _nearest(body: Body, block: Block, motion: _Motion, *, sought: float) -> Nearest | None:
    """Return the smallest distance of a body and a block, if it is smaller than one sought."""
    low, high = motion.boxes
    bound = at_least(body, block, low=low, high=high)
    found = None
    for pair in Pair.of(body, block):
        near = np.flatnonzero(bound < sought - CLEARANCE_TOLERANCE)
        near = near[pair.at_least(low[near], high[near]) < sought - CLEARANCE_TOLERANCE]
        if not near.size:
            continue
        own = motion.chosen(near)
        value, piece, time = _smallest(pair, own, sought)
        if value < sought:
            sought, start = value, float(own.starts[piece])
            found = Nearest(value, start + time, int(own.step[piece]), body, block)
    return found


def _smallest(pair: Pair, motion: _Motion, sought: float) -> tuple[float, int, float]:
    """Return the smallest distance, in which piece, and when in its own time.

    Where none is smaller than the one sought, it may be larger than the smallest.
    """
    bound = pair.at_least(*motion.boxes)
    likely = np.array([bound.argmin()])
    value = float(pair.apart(motion.at(likely, np.zeros(1)))[0])
    found = (value, int(likely[0]), 0.0)
    near = np.flatnonzero(bound < min(value, sought) - CLEARANCE_TOLERANCE)
    begin, end = np.zeros(near.size), motion.durations[near]
    first, last = pair.apart(motion.at(near, begin)), pair.apart(motion.at(near, end))
    waiting = [(0, _Intervals(near, begin, end, first, last))]
    for ends in ((begin, first), (end, last)):
        found = min(found, _least(near, *ends), key=lambda case: case[0])
    while waiting:
        halvings, intervals = waiting.pop()
        middle = 0.5 * (intervals.begin + intervals.end)
        between = pair.apart(motion.at(intervals.piece, middle))
        found = min(found, _least(intervals.piece, middle, between), key=lambda case: case[0])
        low = _bound(intervals, between, motion.bend[intervals.piece])
        left = np.flatnonzero(low < min(found[0], sought) - CLEARANCE_TOLERANCE)
        if not left.size or halvings == MOST_HALVINGS:
            continue
        halves = intervals.chosen(left).cut(middle[left], between[left])
        waiting += [
            (halvings + 1, halves.chosen(slice(start, start + BATCH)))
            for start in range(0, halves.piece.size, BATCH)
        ]
    return found


def _least(piece: Indices, time: Array, distance: Array) -> tuple[float, int, float]:
    """Return the smallest of some distances, with its piece and time; infinity of none."""
    if not distance.size:
        return np.inf, 0, 0.0
    index = int(distance.argmin())
    return float(distance[index]), int(piece[index]), float(time[index])


def _bound(intervals: _Intervals, between: Array, bend: Array) -> Array:
    """Return lower bounds of the distances in intervals: (k,) [mm].

    A motion with acceleration a is within s = a h² / 8 of its chord, in the time h. The distance
    along the chord is convex: with A, M, B at its ends and in its middle it lies above the straight
    lines from A and from B through M, so it is at least the least of M, 2 M - A and 2 M - B.
    """
    sag = bend * (intervals.end - intervals.begin) ** 2 / 8
    chord = between - sag
    beyond = 2 * chord - np.maximum(intervals.first, intervals.last)
    low: Array = np.minimum(chord, beyond) - sag
    return low


def _deepest(schedule: Schedule, nearest: Nearest) -> Nearest:
    """Return where a keep-out that is entered is entered deepest.

    A convex one is as it was found. Of another no part may be entered as deep as the whole: its
    depth is sampled, by samples no more than ``DEPTH_SPACING`` apart if few enough do, the deepest
    then more finely.
    """
    if nearest.value > CLEARANCE_TOLERANCE:
        return nearest
    for motion, body, block in _cases(schedule):
        if block.name != nearest.block.name or len(block.shape.parts) * len(body.shape.parts) == 1:
            continue
        low, high = motion.boxes
        inside = np.flatnonzero(at_least(body, block, low=low, high=high) <= 0)
        if inside.size:
            found = _deepest_in(motion.chosen(inside), body, block)
            nearest = min(nearest, found, key=lambda case: case.value)
    return nearest


def _deepest_in(motion: _Motion, body: Body, block: Block) -> Nearest:
    """Sample how deep a body is in a block, and the surroundings of the deepest sample again."""
    low, high = motion.boxes
    way = np.linalg.norm(high - low, axis=1)
    spacing = max(DEPTH_SPACING, float(way.sum()) / MOST_DEPTHS)
    count = 1 + np.ceil(way / spacing).astype(np.intp)
    piece = np.repeat(np.arange(count.size), count)
    share = (np.arange(piece.size) - (np.cumsum(count) - count)[piece]) / np.maximum(count - 1, 1)[
        piece
    ]
    time = share * motion.durations[piece]
    value, at, when = _least(piece, time, depth(body, block, motion.at(piece, time)))
    lasts = float(motion.durations[at])
    width = lasts / max(int(count[at]) - 1, 1)
    for _ in range(DEPTH_ROUNDS):
        time = np.clip(when + width * np.linspace(-1, 1, DEPTH_SHARES), 0.0, lasts)
        piece = np.full(DEPTH_SHARES, at)
        again = _least(piece, time, depth(body, block, motion.at(piece, time)))
        value, at, when = min((value, at, when), again, key=lambda case: case[0])
        width *= 2 / (DEPTH_SHARES - 1)
    return Nearest(value, float(motion.starts[at]) + when, int(motion.step[at]), body, block)
