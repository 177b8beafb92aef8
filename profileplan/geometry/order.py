"""In which order are outlines traced, so that the way between them takes the least time?

What counts is the time that the machine needs from the end of one outline to the start of the next,
and from where it stands to the first; it is asked for, whatever it depends on. An open outline may
be traced from either end. A closed one keeps its direction, but may begin with any of its pieces.
Outlines that lie inside of others may be asked to come before them.

Up to EXACT outlines the best order is found. With more, each outline is followed by the nearest;
then stretches are turned round and short ones moved elsewhere, as long as that saves time, and the
starts of closed outlines are chosen anew, by turns. A few outlines are also exchanged at random, to
begin from elsewhere. Every loop has a bound, and the result never takes longer than the order
drawn.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import shapely
from scipy.spatial import cKDTree

from profileplan.geometry.exchanges import Exchanges, Travel

if TYPE_CHECKING:
    from collections.abc import Sequence

    import numpy.typing as npt

    from profileplan.geometry.corridor import Array, Indices
    from profileplan.geometry.shapes import Outline

    Flags = npt.NDArray[np.bool_]

__all__ = ["Travel", "order"]

EXACT = 10
"""Up to so many outlines all orders are compared, without listing them."""

STARTS = 8
"""At how many of its pieces a closed outline may begin, at a time."""

PROMISING = 1.5
"""Up to how many times as long as the order by the nearest the drawn one is improved too."""

MOST_SHAKEN = 100
"""With more outlines no order but the first found is looked for from elsewhere."""

SHAKES = 20
"""How often an order is changed at random to improve it from there."""

TURNS = 6
"""How often starts and order are improved by turns, at most."""

NEIGHBOURS = 8
"""Of how many that are near the one that is reached first comes next."""

WORTH = 1e-9
"""Share of the whole time that a change must save: less is rounding."""

SAGITTA = 0.01
"""How far arcs may be from the chords by which it is judged what lies inside [mm]."""

CHUNK = 512
"""How many outlines are looked up at once: bounds the memory where all lie inside each other."""


def order(
    outlines: Sequence[Outline],
    *,
    start: Array,
    travel: Travel,
    inside_first: bool = False,
    shortest: bool = True,
) -> tuple[Outline, ...]:
    """Return outlines in the order, and with the starts and directions, of least travel.

    Parameters
    ----------
    outlines : sequence of Outline
        As drawn.
    start : (2,) array [mm]
        Where the tool is before.
    travel : callable
        The time from places, (k, 2), to others: (k,) [s].
    inside_first : bool
        Whether what lies inside of a closed outline must come before it.
    shortest : bool
        Whether travel is shortened; otherwise outlines stay as drawn, but for ``inside_first``.
    """
    if not outlines:
        return ()
    parent = _parents(outlines) if inside_first else np.full(len(outlines), -1)
    drawn = _Tour(_after_inner(np.arange(len(outlines)), parent), np.zeros(len(outlines), np.intp))
    if not shortest:
        return drawn.of(outlines)
    job = _Job(tuple(outlines), np.asarray(start, dtype=np.float64), travel, parent)
    if len(outlines) <= EXACT:
        found = [_settled(job, drawn), _exact(job, drawn)]
        found.append(_settled(job, found[-1]))
    else:
        nearest = _by_nearest(job)
        found = [_improved(job, nearest)]
        if job.time(drawn) < PROMISING * job.time(nearest):
            found.append(_improved(job, drawn))
        if len(outlines) <= MOST_SHAKEN:
            found.append(_shaken(job, min(found, key=job.time)))
    return min([drawn, *found], key=job.time).of(outlines)


@dataclass(frozen=True, eq=False)
class _Tour:
    """An order.

    Parameters
    ----------
    sequence : (n,) array of int
        Outlines, as they are traced.
    begin : (n,) array of int
        With which piece each outline, by its own number, begins; an open one that is traced
        backward: 1.
    """

    sequence: Indices
    begin: Indices

    def of(self, outlines: Sequence[Outline]) -> tuple[Outline, ...]:
        """Return the outlines so."""
        placed = []
        for number in self.sequence.tolist():
            own, begin = outlines[number], int(self.begin[number])
            if begin:
                own = own.starting_at(begin) if own.closed else own.reversed()
            placed.append(own)
        return tuple(placed)


class _Job:
    """What is to be ordered.

    Parameters
    ----------
    outlines : tuple of Outline
    start : (2,) array [mm]
    travel : callable
    parent : (n,) array of int
        The outline round each, that must come after it; below 0: none.
    """

    def __init__(
        self, outlines: tuple[Outline, ...], start: Array, travel: Travel, parent: Indices
    ) -> None:
        self.start, self.travel, self.parent = start, travel, parent
        self.closed = np.array([own.closed for own in outlines])
        # An open outline has two places to begin: its ends.
        self.places = [
            own.pieces.start[:, :2] if own.closed else np.stack([own.start[:2], own.end[:2]])
            for own in outlines
        ]

    def ends(self, number: Indices, begin: Indices) -> tuple[Array, Array]:
        """Return where outlines are entered and left if they begin so: (k, 2) each."""
        pairs = list(zip(number.tolist(), begin.tolist(), strict=True))
        enter = np.array([self.places[own][at] for own, at in pairs])
        leave = np.array(
            [self.places[own][at if self.closed[own] else 1 - at] for own, at in pairs]
        )
        return enter, leave

    def time(self, tour: _Tour) -> float:
        """Return how long the travel of a tour takes [s]."""
        enter, leave = self.ends(tour.sequence, tour.begin[tour.sequence])
        return float(self.travel(np.concatenate([self.start[np.newaxis], leave[:-1]]), enter).sum())


def _parents(outlines: Sequence[Outline]) -> Indices:
    """Return the smallest closed outline round each, by its number; below 0: none."""
    parent = np.full(len(outlines), -1)
    points = [own.pieces.flattened(SAGITTA)[0][:, :2] for own in outlines]
    rings = np.array([n for n, own in enumerate(outlines) if own.closed and len(points[n]) > 3])
    if not rings.size:
        return parent
    areas = shapely.polygons([shapely.linearrings(points[n]) for n in rings])
    spoiled = ~shapely.is_valid(areas)
    # Only what crosses itself is mended: the rest is judged as drawn.
    areas[spoiled] = shapely.make_valid(areas[spoiled], method="structure", keep_collapsed=False)
    shapely.prepare(areas)
    size = shapely.area(areas)
    own_size = np.zeros(len(outlines))
    own_size[rings] = size
    tree = shapely.STRtree(areas)
    for begin in range(0, len(outlines), CHUNK):
        lines = np.array([shapely.LineString(p) for p in points[begin : begin + CHUNK]])
        inner, outer = tree.query(lines)
        larger = size[outer] > own_size[inner + begin]
        inner, outer = inner[larger], outer[larger]
        inside = shapely.covers(areas[outer], lines[inner])
        inner, outer = inner[inside] + begin, outer[inside]
        smallest = np.lexsort([outer, -size[outer]])
        parent[inner[smallest]] = rings[outer[smallest]]
    return parent


def _after_inner(sequence: Indices, parent: Indices) -> Indices:
    """Return an order in which outlines with others inside come just after the last of these."""
    position = np.empty(len(sequence))
    position[sequence] = np.arange(len(sequence))
    depth = _depths(parent)
    for level in range(int(depth.max(initial=0)), 0, -1):
        inner = np.flatnonzero(depth == level)
        np.maximum.at(position, parent[inner], position[inner])
    return np.lexsort([np.arange(len(sequence)), -depth, position])


def _depths(parent: Indices) -> Indices:
    """Return inside how many others each outline lies."""
    depth = np.zeros(len(parent), dtype=np.intp)
    above = parent.copy()
    while (inside := above >= 0).any():
        depth += inside
        above = np.where(inside, parent[above], -1)
    return depth


def _by_nearest(job: _Job) -> _Tour:
    """Return the order in which each outline is followed by the one that is entered soonest.

    Of the nearest in a straight line, the one that the machine reaches first.
    """
    counts = [len(places) for places in job.places]
    points = np.concatenate(job.places)
    owner = np.repeat(np.arange(len(counts)), counts)
    first = np.cumsum(counts) - counts
    waiting = np.ones(len(counts), dtype=bool)
    begin = np.zeros(len(counts), dtype=np.intp)
    sequence: list[int] = []
    here, index, tree, built = job.start, np.arange(len(points)), cKDTree(points), len(counts)
    while len(sequence) < len(counts):
        left = len(counts) - len(sequence)
        if 2 * left < built:
            # Without those that are done, so that few of the nearest are in vain.
            index, built = np.flatnonzero(waiting[owner]), left
            tree = cKDTree(points[index])
        wanted = NEIGHBOURS
        while True:
            wanted = min(wanted, index.size)
            near = index[np.atleast_1d(tree.query(here, k=wanted)[1])]
            near = near[waiting[owner[near]]]
            if near.size:
                break
            wanted *= 4
        times = job.travel(np.broadcast_to(here, (near.size, 2)), points[near])
        best = int(near[np.argmin(times)])
        number = int(owner[best])
        begin[number] = best - first[number]
        waiting[number] = False
        sequence.append(number)
        here = points[best] if job.closed[number] else job.places[number][1 - begin[number]]
    return _Tour(_after_inner(np.array(sequence), job.parent), begin)


def _candidates(job: _Job, tour: _Tour) -> Indices:
    """Return with which pieces each outline of a sequence may begin: (n, STARTS).

    Of very many those that are near to the outlines before and after. Where there are fewer, some
    stand there twice.
    """
    enter, leave = job.ends(tour.sequence, tour.begin[tour.sequence])
    before = np.concatenate([job.start[np.newaxis], leave[:-1]])
    after = np.concatenate([enter[1:], enter[-1:]])
    found = np.empty((len(tour.sequence), STARTS), dtype=np.intp)
    for row, number in enumerate(tour.sequence.tolist()):
        places = job.places[number]
        if len(places) <= STARTS:
            found[row] = np.arange(STARTS) % len(places)
            continue
        last = row == len(tour.sequence) - 1
        detour = np.hypot(*(places - before[row]).T)
        detour += 0.0 if last else np.hypot(*(places - after[row]).T)
        near = np.argpartition(detour, STARTS - 1)[: STARTS - 1]
        found[row] = [tour.begin[number], *np.sort(near)]
    return found


def _settled(job: _Job, tour: _Tour) -> _Tour:
    """Return the same order with the best starts and directions, of those looked at."""
    options = _candidates(job, tour)
    count = len(options)
    enter, leave = (
        part.reshape(count, STARTS, 2)
        for part in job.ends(np.repeat(tour.sequence, STARTS), options.ravel())
    )
    one = np.repeat(leave[:-1], STARTS, axis=1).reshape(-1, 2)
    other = np.tile(enter[1:], (1, STARTS, 1)).reshape(-1, 2)
    steps = job.travel(one, other).reshape(-1, STARTS, STARTS) if count > 1 else np.zeros((0, 1, 1))
    total = job.travel(np.tile(job.start, (STARTS, 1)), enter[0])
    came = np.zeros((count, STARTS), dtype=np.intp)
    for row, step in enumerate(steps, start=1):
        sums = total[:, np.newaxis] + step
        came[row] = sums.argmin(axis=0)
        total = sums.min(axis=0)
    begin, chosen = tour.begin.copy(), int(total.argmin())
    for row in range(count - 1, -1, -1):
        begin[tour.sequence[row]] = options[row, chosen]
        chosen = int(came[row, chosen])
    return _Tour(tour.sequence, begin)


def _exact(job: _Job, tour: _Tour) -> _Tour:
    """Return the best order of few outlines, with the starts that are looked at in a given one.

    The best way through every set of outlines, by which it ends with: built up from smaller sets.
    """
    count = len(tour.sequence)
    options = np.empty((count, STARTS), dtype=np.intp)
    options[tour.sequence] = _candidates(job, tour)
    number = np.repeat(np.arange(count), STARTS)
    enter, leave = job.ends(number, options.ravel())
    size = number.size
    steps = job.travel(np.repeat(leave, size, axis=0), np.tile(enter, (size, 1)))
    steps = steps.reshape(size, size)
    first = job.travel(np.tile(job.start, (size, 1)), enter)
    best = np.full((2**count, size), np.inf)
    came = np.full((2**count, size), -1)
    inside = np.array(
        [sum(1 << n for n in range(count) if job.parent[n] == own) for own in range(count)]
    )
    for done in range(2**count):
        ready = (done >> number) & 1 == 0
        ready &= inside[number] & ~done == 0
        sums = best[done][:, np.newaxis] + steps if done else first[np.newaxis]
        least, whence = sums.min(axis=0), sums.argmin(axis=0)
        then = done | (1 << number)
        last = np.flatnonzero(ready & np.isfinite(least))
        best[then[last], last] = least[last]
        came[then[last], last] = whence[last]
    done, end = 2**count - 1, int(best[-1].argmin())
    sequence: list[int] = []
    begin = np.zeros(count, dtype=np.intp)
    while done:
        own = int(number[end])
        sequence.append(own)
        begin[own] = options[own, end % STARTS]
        done, end = done & ~(1 << own), int(came[done, end])
    return _Tour(np.array(sequence[::-1]), begin)


def _improved(job: _Job, tour: _Tour) -> _Tour:
    """Return a better order: starts and order are improved by turns, until nothing is gained."""
    tour = _settled(job, tour)
    time = job.time(tour)
    for _ in range(TURNS):
        enter, leave = job.ends(np.arange(len(tour.sequence)), tour.begin)
        search = Exchanges(enter, leave, start=job.start, parent=job.parent, travel=job.travel)
        sequence, turned = search.best(tour.sequence)
        begin = np.where(turned & ~job.closed, 1 - tour.begin, tour.begin)
        found = _settled(job, _Tour(sequence, begin))
        shorter = job.time(found)
        if shorter >= time * (1 - WORTH):
            break
        tour, time = found, shorter
    return tour


def _shaken(job: _Job, tour: _Tour) -> _Tour:
    """Return a better order: stretches are exchanged at random, always the same, and improved."""
    random = np.random.default_rng(0)
    count = len(tour.sequence)
    time = job.time(tour)
    for _ in range(SHAKES):
        one, two, three = np.sort(random.choice(np.arange(1, count + 1), 3, replace=False))
        parts = np.split(tour.sequence, [one - 1, two - 1, three - 1])
        mixed = np.concatenate([parts[0], parts[2], parts[1], parts[3]])
        found = _improved(job, _Tour(_after_inner(mixed, job.parent), tour.begin))
        shorter = job.time(found)
        if shorter < time:
            tour, time = found, shorter
    return tour
