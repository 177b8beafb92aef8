"""How soon can a motion be through a corridor, and what holds it back?

``least_time`` begins with spans guessed from the closed forms of stops at every gate, refits, and
then goes in turns of ``step`` and ``refit``: after each turn the motion keeps every limit and every
region at every instant, and a turn that does not shorten it is not taken. Twice as many intervals
then give the jerk more places to switch. At last ``calm`` takes out what time does not need.

Rounds are bounded and deterministic. Where none is found at all there is no motion, and the caller
has the closed forms.
"""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import TYPE_CHECKING, NamedTuple, TypeVar

import numpy as np

from profileplan.motion import rounds
from profileplan.motion.guesses import extent, guesses
from profileplan.motion.laws import LAWS, Limits
from profileplan.motion.spline import Group, Spline, inner_points

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable

    from profileplan.geometry.corridor import Corridor
    from profileplan.motion.guesses import Extent
    from profileplan.motion.polynomials import Array
    from profileplan.motion.rounds import Bounds, Price

FIRST_TRUST, WIDEST_TRUST, LEAST_TRUST = 0.3, 0.5, 2e-3
"""Relative changes of a span that one step may make."""

COARSE_GAIN, FINE_GAIN = 4e-3, 5e-4
"""Share of the duration that a step must promise for the rounds to go on."""

COARSE_ROUNDS, FINE_ROUNDS = 25, 8
"""Most turns before and after the intervals are cut in two."""

REFITS, SETTLED = 6, 0.15
"""Most refits in a row, and the gain at which another is not worth it."""

ALONE = 2e-4
"""Share by which a motion may be longer than the slowest axis alone to be as short as any."""

HEADROOM = 2e-6
"""Share of time given up, so that the last round has room for its accuracy."""

WINDOW = 160
"""Intervals of a part that is planned at a time, before they are cut in two."""

HELD_SPANS = 2
"""Spans beside a node on which the state there depends."""

EASED = (0.0, 0.1, 0.25, 0.5, 1.0)
"""Shares by which the middle of a blended part is slowed down until it is inside all limits."""

FREED_AFTER = 24
"""Spans from a held state on until they are as free as any."""

ACCEPTED = 1e-6
"""Share by which limits may be passed before all is scaled at the end."""

ROUNDING = 1e-12
"""Share of the time given up for the rounding of the trajectory's coefficients."""

INSIDE = 1e-6
"""Share of a region's size by which rounding may put a point outside before a motion is refused."""


@dataclass(frozen=True, eq=False)
class Passage:
    """A motion of least time through a corridor.

    Parameters
    ----------
    spline : Spline
    prices : tuple of Price
        Multipliers of the last step: what each bound costs, by interval.
    settled : bool
        Whether the last step promised no more than the gain asked for; else it may be improved.
    """

    spline: Spline
    prices: tuple[Price, ...]
    settled: bool


Planned = TypeVar("Planned")


class Stretch(NamedTuple):
    """What holds a motion back from one time to another [s]: a quantity, and an axis or -1."""

    start: float
    end: float
    quantity: str
    axis: int


def least_time(
    corridor: Corridor, bounds: Bounds, *, progress: Callable[[float], None] | None = None
) -> Passage | None:
    """Return the fastest motion found through a corridor, at rest at both ends.

    A long corridor is planned in parts: first in parts that begin and end at rest, and overlap, so
    that their ends can be left out; then from the middle of each of those to the middle of the
    next, keeping the state that the motion has there. Parts do not depend on each other, so all
    cores are used, with the same result.

    Parameters
    ----------
    corridor : Corridor
    bounds : Bounds
        Limits of the corridor's axes.
    progress : callable, optional
        Called with the share of the work that is done.

    Returns
    -------
    Passage or None
        None where no motion was found: stop at every gate instead.
    """
    gentle = np.minimum(bounds.acceleration, bounds.deceleration)
    found = _searched(corridor, bounds, progress)
    if (bounds.acceleration == bounds.deceleration).all() or _least_there_is(
        found, corridor, bounds
    ):
        return found
    # Which limit counts depends on the direction, and its search may end in a worse place than one
    # that begins with the motion under the smaller limit for both.
    both = replace(bounds, acceleration=gentle, deceleration=gentle)
    other = _searched(corridor, both, progress)
    candidates = [found, other]
    if other is not None:
        again = []
        for ends in _windows(_cuts(extent(corridor, bounds))):
            spline, free = _held(other.spline, corridor, ends)
            own, turns = _section(corridor, bounds, ends), _Turns(FINE_ROUNDS, FINE_GAIN)
            again.append(_descend(Passage(spline, (), settled=False), *own, free, turns))
        candidates.append(_joined(again, corridor, bounds))
    motions = [passage for passage in candidates if passage is not None]
    return min(motions, key=lambda passage: passage.spline.duration, default=None)


def _least_there_is(found: Passage | None, corridor: Corridor, bounds: Bounds) -> bool:
    """Return whether a motion takes no longer than the slowest axis alone."""
    limits = Limits(bounds.velocity, bounds.acceleration, bounds.deceleration, bounds.jerk)
    alone = LAWS["trapezoidal"].solve(corridor.points[-1] - corridor.points[0], limits).duration
    return found is not None and found.spline.duration <= float(alone.max()) * (1 + ALONE)


def _searched(
    corridor: Corridor, bounds: Bounds, progress: Callable[[float], None] | None
) -> Passage | None:
    """Return the fastest motion found by one search."""
    size = extent(corridor, bounds)
    cuts = _cuts(size)
    ends = _windows(cuts)
    tell = _Progress(progress, 2 * len(ends))
    with ThreadPoolExecutor(os.cpu_count()) as pool:

        def coarse(margin: int) -> list[Spline] | None:
            wide = _widened(cuts, margin)
            found = tell.each(pool.map(lambda own: _coarse(*_section(corridor, bounds, own)), wide))
            parts = [part for part in found if part is not None]
            return parts if len(parts) == len(wide) else None

        def begun(whole: Spline) -> list[Spline] | None:
            found = list(pool.map(lambda own: _begun(whole, corridor, bounds, own), ends))
            starts = [start for start in found if start is not None]
            return starts if len(starts) == len(ends) else None

        margin = size.margin if len(cuts) > 2 else 0
        parts = coarse(margin)
        starts = parts and begun(_blended(parts, _widened(cuts, margin), cuts))
        if margin and not starts:
            # From rest to rest, what is put together is inside all limits as it is.
            parts = coarse(0)
            starts = parts and begun(Spline.chain(parts))
        if not starts:
            return None
        work = zip(starts, ends, strict=True)
        passages = tell.each(pool.map(lambda own: _fine(own[0], corridor, bounds, own[1]), work))
    return _joined(passages, corridor, bounds)


class _Progress:
    """Tells how many of a number of parts are done."""

    def __init__(self, progress: Callable[[float], None] | None, count: int) -> None:
        self._progress = progress
        self._count = count
        self._done = 0

    def each(self, results: Iterable[Planned]) -> list[Planned]:
        """Return results as they come."""
        found = []
        for result in results:
            found.append(result)
            self._done += 1
            if self._progress:
                self._progress(min(self._done / self._count, 1.0))
        return found


def in_time(passage: Passage, corridor: Corridor, bounds: Bounds, *, duration: float) -> Spline:
    """Return a motion through a corridor in a longer time, with the least mean square of jerk.

    Jerk, and not acceleration, for it is what a frame answers to. The spans keep their ratios.
    """
    slower = passage.spline.scaled(duration / passage.spline.duration)
    found = rounds.calm(slower, corridor, bounds).spline
    if found is not None and rounds.overrun(found, bounds) <= 1 and _inside(found, corridor):
        return found
    return slower


def lower_bound(corridor: Corridor, bounds: Bounds, *, tolerance: float) -> float:
    """Return a time [s] that no motion through tubes of a tolerance [mm] can be shorter than.

    An axis must come as near as the tolerance to each of its own turning points, in order, and
    stand still between two of them. From one standstill to the next it takes at least the least
    time for the distance without jerk limit; alone from start to end, with it.
    """
    limits = Limits(bounds.velocity, bounds.acceleration, bounds.deceleration, bounds.jerk)
    free = limits._replace(jerk=np.full_like(bounds.jerk, np.inf))
    law = LAWS["trapezoidal"]
    least = law.solve(corridor.points[-1] - corridor.points[0], limits).duration.max()
    for axis in np.flatnonzero(bounds.linear):
        way = _forced_ways(corridor.points[:, axis], tolerance)
        single = Limits(*np.array(free)[:, axis])
        least = max(least, float(law.solve(way, single).duration.sum()))
    return float(least)


def _forced_ways(positions: Array, tolerance: float) -> Array:
    """Return the distances between the standstills that a tolerance forces on an axis [mm].

    A turn is forced where the way to the next one is longer than both tolerances; a shorter way
    back need not be gone, so both its ends are passed over.
    """
    steps = np.diff(positions)
    moving = positions[np.concatenate([[True], steps != 0])]
    if moving.size < 2:
        return np.zeros(1)
    turns = np.flatnonzero(np.diff(np.sign(np.diff(moving)))) + 1
    ends = [0.0, *moving[turns] - moving[0], moving[-1] - moving[0]]
    while len(ends) > 2:
        room = np.full(len(ends), tolerance)
        room[0] = room[-1] = 0.0
        way: Array = np.abs(np.diff(ends)) - room[1:] - room[:-1]
        shortest = int(way.argmin())
        if way[shortest] > 0:
            return way
        inner = {shortest, shortest + 1} - {0, len(ends) - 1}
        ends = [end for index, end in enumerate(ends) if index not in inner]
    whole: Array = np.abs(np.diff(ends))
    return whole


def stretches(passage: Passage) -> tuple[Stretch, ...]:
    """Return what holds the motion back, stretch by stretch: the bound of the highest price."""
    spline = passage.spline
    names = list(dict.fromkeys((price.quantity, price.axis) for price in passage.prices))
    if not names:
        return ()
    costs = np.zeros((len(names), spline.spans.size))
    for price in passage.prices:
        np.add.at(costs[names.index((price.quantity, price.axis))], price.interval, price.value)
    highest = costs.argmax(axis=0)
    cuts = np.concatenate([[0], np.flatnonzero(np.diff(highest)) + 1, [highest.size]])
    times = np.concatenate([[0.0], np.cumsum(spline.spans)])
    return tuple(
        Stretch(float(times[one]), float(times[other]), *names[highest[one]])
        for one, other in pairwise(cuts)
    )


def gains(passage: Passage) -> dict[tuple[str, int], float]:
    """Return how much sooner the motion ends for each share that a bound is loosened [s]."""
    found: dict[tuple[str, int], float] = {}
    for price in passage.prices:
        name = (price.quantity, price.axis)
        share = float(price.value.sum())
        found[name] = found.get(name, 0.0) + share * passage.spline.duration
    return found


def _cuts(size: Extent) -> list[int]:
    """Return the regions at which a long corridor is cut into parts that begin and end at rest.

    All have about as many intervals.
    """
    passed = np.cumsum(size.intervals)
    number = min(max(round(int(passed[-1]) / WINDOW), 1), passed.size)
    shares = passed[-1] * np.arange(1, number) / number
    inner = np.searchsorted(passed, shares) + 1
    return [0, *sorted({int(cut) for cut in inner if cut < passed.size}), passed.size]


def _widened(cuts: list[int], margin: int) -> list[tuple[int, int]]:
    """Return the regions of parts from cut to cut, wider by a margin inside the corridor."""
    return [(max(one - margin, 0), min(other + margin, cuts[-1])) for one, other in pairwise(cuts)]


def _windows(cuts: list[int]) -> list[tuple[int, int]]:
    """Return the regions from the middle of one part to the middle of the next."""
    middles = [(one + other) // 2 for one, other in pairwise(cuts)] if len(cuts) > 2 else []
    return list(pairwise([0, *middles, cuts[-1]]))


def _blended(parts: list[Spline], ends: list[tuple[int, int]], cuts: list[int]) -> Spline:
    """Return wide parts as one motion: each counts between its cuts.

    Where they overlap they are alike, far from their ends. So control points of the one up to a
    cut, and of the other from there on, make a motion that is near to both.
    """
    spans, regions = [], []
    points: list[list[Array]] = [[] for _ in parts[0].groups]
    for number, (part, own) in enumerate(zip(parts, ends, strict=True)):
        first, last = np.searchsorted(part.region + own[0], cuts[number : number + 2])
        spans.append(part.spans[first:last])
        regions.append(part.region[first:last] + own[0])
        for group, found in zip(part.groups, points, strict=True):
            middle = (group.degree + 1) // 2
            begin = first + middle if number else 0
            end = last + middle if number + 1 < len(parts) else None
            found.append(group.points[begin:end])
    groups = [
        Group(group.degree, group.axes, np.concatenate(found))
        for group, found in zip(parts[0].groups, points, strict=True)
    ]
    return Spline(np.concatenate(spans), np.concatenate(regions), tuple(groups))


def _section(corridor: Corridor, bounds: Bounds, ends: tuple[int, int]) -> tuple[Corridor, Bounds]:
    """Return some regions of a corridor, and the bounds there."""
    return corridor.part(*ends), replace(bounds, speed=bounds.speed[slice(*ends)])


def _coarse(corridor: Corridor, bounds: Bounds) -> Spline | None:
    """Return a first motion, with few intervals, at rest at both ends."""
    first = _start(corridor, bounds)
    if first is None:
        return None
    free = np.ones(first.spans.size)
    turns = _Turns(COARSE_ROUNDS, COARSE_GAIN)
    return _descend(Passage(first, (), settled=False), corridor, bounds, free, turns).spline


def _begun(
    whole: Spline, corridor: Corridor, bounds: Bounds, ends: tuple[int, int]
) -> Spline | None:
    """Return the motion from one region to another inside all limits, with twice the intervals."""
    spline, free = _held(whole, corridor, ends)
    own = _section(corridor, bounds, ends)
    found: Spline | None = spline
    if not free.all():
        slower = (replace(spline, spans=spline.spans * (1 + more * free)) for more in EASED)
        fitted = (_fitted(one, *own, free) for one in slower)
        found = next((one for one in fitted if one is not None), None)
    return None if found is None else found.split(np.full(found.spans.size, 2))


def _fine(spline: Spline, corridor: Corridor, bounds: Bounds, ends: tuple[int, int]) -> Passage:
    """Return the motion from one region to another as short as it gets, and calm."""
    free = _free(spline, corridor, ends)
    own = _section(corridor, bounds, ends)
    start = Passage(spline, (), settled=False)
    found = _descend(start, *own, free, _Turns(FINE_ROUNDS, FINE_GAIN))
    return replace(found, spline=_calmed(found.spline, *own, free))


def _held(whole: Spline, corridor: Corridor, ends: tuple[int, int]) -> tuple[Spline, Array]:
    """Return the motion from one region to another, and which of its spans are free."""
    first, last = np.searchsorted(whole.region, ends)
    spline = whole.part(int(first), int(last))
    return spline, _free(spline, corridor, ends)


def _free(spline: Spline, corridor: Corridor, ends: tuple[int, int]) -> Array:
    """Return how free spans are: 0 where the state at an end depends on them, 1 far from there.

    Where the motion goes on beyond, the state there is kept, and what is near changes little.
    """
    free = np.ones(spline.spans.size)
    rising = np.arange(1 - HELD_SPANS, free.size + 1 - HELD_SPANS) / FREED_AFTER
    if ends[0] > 0:
        free = np.minimum(free, np.maximum(rising, 0.0))
    if ends[1] < len(corridor.regions):
        free = np.minimum(free, np.maximum(rising[::-1], 0.0))
    return free


def _joined(passages: list[Passage], corridor: Corridor, bounds: Bounds) -> Passage | None:
    """Return passages that follow each other as one, inside all limits."""
    whole = rounds.stilled(Spline.chain([passage.spline for passage in passages]), bounds)
    prices, offset = [], 0
    for passage in passages:
        weight = passage.spline.duration / whole.duration
        prices += [
            price._replace(interval=price.interval + offset, value=price.value * weight)
            for price in passage.prices
        ]
        offset += passage.spline.spans.size
    # What the accuracy of the rounds has left over is scaled away.
    kept = whole.scaled(max(1.0, rounds.overrun(whole, bounds) * (1 + ROUNDING)))
    if not _inside(kept, corridor):
        return None
    return Passage(kept, tuple(prices), all(passage.settled for passage in passages))


def _start(corridor: Corridor, bounds: Bounds) -> Spline | None:
    """Return a motion inside all limits: the faster of those that the guesses lead to."""
    found = [_fitted_guess(guess, corridor, bounds) for guess in guesses(corridor, bounds)]
    motions = [spline for spline in found if spline is not None]
    return min(motions, key=lambda spline: spline.duration, default=None)


def _fitted_guess(guess: Spline, corridor: Corridor, bounds: Bounds) -> Spline | None:
    """Return a motion inside all limits with the ratios of a guess's spans."""
    for slower in (1.0, 2.0, 4.0):
        found = _refitted(guess.scaled(slower), corridor, bounds)
        if found is not None:
            return found
    return None


def _refitted(spline: Spline, corridor: Corridor, bounds: Bounds) -> Spline | None:
    """Return the fastest motion with a spline's ratios of spans, or None."""
    best: Spline | None = None
    for _ in range(REFITS):
        found = rounds.refit(spline, corridor, bounds).spline
        if found is None:
            scale = rounds.overrun(spline, bounds)
            if best is not None or scale <= 1:
                return best
            spline = spline.scaled(scale)
            continue
        # Where the scale is far from one, other powers of it would suit the limits better.
        change = abs(found.duration / spline.duration - 1)
        spline = found.scaled(rounds.overrun(found, bounds))
        if best is None or spline.duration < best.duration:
            best = spline
        if change < SETTLED:
            break
    return best


class _Turns(NamedTuple):
    """How many turns are made at most, and the gain that a step must promise."""

    most: int
    least_gain: float


def _fitted(spline: Spline, corridor: Corridor, bounds: Bounds, free: Array) -> Spline | None:
    """Return a motion inside all limits with a spline's spans, the free ones longer if need be."""
    if free.all():
        return _refitted(spline, corridor, bounds)
    last = np.inf
    for _ in range(REFITS):
        found = rounds.refit(spline, corridor, bounds).spline
        excess = np.inf if found is None else found.spans[0] / spline.spans[0] - 1
        if found is not None and excess <= ACCEPTED:
            return replace(found, spans=spline.spans)
        if excess >= last or found is None:
            return None
        last = excess
        spline = replace(spline, spans=spline.spans * (1 + 1.5 * excess * free))
    return None


def _descend(
    passage: Passage, corridor: Corridor, bounds: Bounds, free: Array, turns: _Turns
) -> Passage:
    """Return the passage after turns of step and refit, each taken only if it shortens it."""
    spline, trust, prices = passage.spline, FIRST_TRUST, passage.prices
    for _ in range(turns.most):
        outcome = rounds.step(spline, corridor, bounds, trust=trust * free)
        promised, reached = turns.least_gain, 0.0
        if outcome.spline is not None:
            promised = 1 - outcome.spline.duration / spline.duration
            prices = outcome.prices
            found = _fitted(outcome.spline, corridor, bounds, free)
            if found is not None and found.duration < spline.duration:
                reached = 1 - found.duration / spline.duration
                spline = found
        if reached > 0.7 * promised:
            trust = min(1.6 * trust, WIDEST_TRUST)
        elif reached < 0.35 * promised:
            trust *= 0.4
        slow = 0 < reached < 0.5 * turns.least_gain and promised < 3 * turns.least_gain
        if promised < turns.least_gain or slow:
            return Passage(spline, prices, settled=True)
        if trust < LEAST_TRUST:
            break
    return Passage(spline, prices, settled=False)


def _calmed(spline: Spline, corridor: Corridor, bounds: Bounds, free: Array) -> Spline:
    """Return a motion as fast, but for the headroom, without needless jerk and wandering."""
    roomy = replace(spline, spans=spline.spans * (1 + HEADROOM * free))
    found = rounds.calm(roomy, corridor, bounds).spline
    if found is None or rounds.overrun(found, bounds) > 1 + ACCEPTED:
        return spline
    return found if _inside(found, corridor) else spline


def _inside(spline: Spline, corridor: Corridor) -> bool:
    """Return whether every point of a motion is in its region."""
    axes = corridor.points.shape[1]
    sets = corridor.regions.at(spline.region)
    for which in range(2):
        positions = np.zeros((spline.spans.size, axes))
        for group in spline.groups:
            positions[:, group.axes] = inner_points(group, spline.spans)[which].values
        if (sets.excess(positions) > INSIDE).any():
            return False
    nodes = spline.states()[0][spline.gates]
    return not len(nodes) or not (corridor.gates.excess(nodes) > INSIDE).any()
