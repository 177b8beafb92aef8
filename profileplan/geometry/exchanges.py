"""Which changes of an order of outlines save time, until none does any more?

Two kinds of change are tried: a stretch is traced backward, and a few outlines in a row are moved
elsewhere. All changes that make neighbours of outlines that are near are judged at once; of those
that save time the best are made together, as far as they do not touch each other. Position 0 of an
order is the place where the tool stands before, and stays.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple, TypeAlias

import numpy as np
from scipy.spatial import cKDTree

from profileplan.geometry.corridor import Array

if TYPE_CHECKING:
    import numpy.typing as npt

    from profileplan.geometry.corridor import Indices

    Flags = npt.NDArray[np.bool_]

Travel: TypeAlias = Callable[[Array, Array], Array]
"""From where, (k, 2) [mm], to where, (k, 2) [mm], it takes how long: (k,) [s]."""

ROUNDS = 400
"""How often changes are looked for, at most."""

COMPLETE = 2
"""How often all outlines are looked at again after no change was found near the last changes."""

NEIGHBOURS = 8
"""Beside how many of the nearest others an end of an outline is tried."""

ALL_PAIRS = 40
"""Up to so many outlines each is tried beside every other."""

LONGEST_MOVED = 3
"""How many outlines in a row are moved elsewhere together."""

WORTH = 1e-9
"""Share of the whole time that a change must save: less is rounding."""


class _Changes(NamedTuple):
    """Changes of an order, (k,) each: outlines at positions low to high go behind a position.

    A stretch that is traced backward where it is stays behind the position before it.
    """

    low: Indices
    high: Indices
    behind: Indices
    backward: Flags
    saved: Array

    def at(self, chosen: Indices | Flags) -> _Changes:
        """Return some of them."""
        low, high, behind = self.low[chosen], self.high[chosen], self.behind[chosen]
        return _Changes(low, high, behind, self.backward[chosen], self.saved[chosen])


@dataclass(frozen=True, eq=False)
class _Order:
    """An order by position, with times.

    Parameters
    ----------
    enter, leave : (n + 1, 2) arrays [mm]
    step : (n + 1,) array [s]
        From each position to the next; 0 after the last.
    more : (n + 1,) array [s]
        By how much longer all steps before each take backward.
    outer : (n + 1,) array of int
        The position that must come after each; n + 1: none.
    inner : (n + 1,) array of int
        The last position that must come before each; -1: none.
    """

    enter: Array
    leave: Array
    step: Array
    more: Array
    outer: Indices
    inner: Indices
    travel: Travel

    @property
    def last(self) -> int:
        """The last position."""
        return len(self.step) - 1

    def before(self, leave: Array, position: Indices) -> Array:
        """Return the times from places, (k, 2), to what is at positions; 0 beyond the end."""
        there = position <= self.last
        times = np.zeros(len(position))
        if there.any():
            times[there] = self.travel(leave[there], self.enter[position[there]])
        return times


class Exchanges:
    """The search for changes that save time.

    Parameters
    ----------
    enter, leave : (n, 2) arrays [mm]
        Where outlines are entered and left, by their numbers; the other way round if they are
        traced backward.
    start : (2,) array [mm]
    parent : (n,) array of int
        Which outline must come after each; below 0: none.
    travel : callable
    """

    def __init__(
        self, enter: Array, leave: Array, *, start: Array, parent: Indices, travel: Travel
    ) -> None:
        self._travel = travel
        self._enter = np.concatenate([enter, start[np.newaxis]])
        self._leave = np.concatenate([leave, start[np.newaxis]])
        self._parent = np.append(parent, -1)
        self._bound = bool((parent >= 0).any())
        self._pairs = _neighbours(self._enter, self._leave)

    def best(self, sequence: Indices) -> tuple[Indices, Flags]:
        """Return an order that no change improves, and which outlines, by number, are turned.

        Parameters
        ----------
        sequence : (n,) array of int
            The order to begin with, in which what must come before does.
        """
        count = len(sequence)
        sequence = np.concatenate([[count], sequence])
        turned = np.zeros(count + 1, dtype=bool)
        # Which outlines have new neighbours since each kind of change was last looked for.
        fresh = [np.ones(count + 1, dtype=bool), np.ones(count + 1, dtype=bool)]
        complete = 0
        for turn in range(ROUNDS):
            kind = turn % 2
            now = self._order(sequence, turned)
            pairs = self._pairs[:, fresh[kind][self._pairs].any(axis=0)]
            position = np.argsort(sequence)
            look = (_turnings, _moves)[kind]
            changes = look(now, position[pairs], fresh[kind][sequence])
            changes = changes.at(changes.saved > WORTH * now.step.sum())
            if self._bound:
                changes = changes.at(_allowed(now, changes))
            made = changes.at(self._apart(changes, count))
            # Changes that had to wait are looked at again.
            fresh[kind][:] = False
            fresh[kind][sequence[changes.low]] = True
            for place in (made.low - 1, made.low, made.high, made.high + 1, made.behind):
                for beside in range(-LONGEST_MOVED, LONGEST_MOVED + 1):
                    touched = sequence[np.clip(place + beside, 0, count)]
                    fresh[0][touched] = fresh[1][touched] = True
            sequence, turned = _made(made, sequence, turned)
            if not fresh[0].any() and not fresh[1].any():
                # At last all are looked at once more: a change may be felt some outlines away.
                complete += 1
                if complete > COMPLETE:
                    break
                fresh[0][:] = fresh[1][:] = True
        return sequence[1:], turned[:-1]

    def _order(self, sequence: Indices, turned: Flags) -> _Order:
        """Return an order by position."""
        swap = turned[sequence][:, np.newaxis]
        one, other = self._enter[sequence], self._leave[sequence]
        enter, leave = np.where(swap, other, one), np.where(swap, one, other)
        step = np.append(self._travel(leave[:-1], enter[1:]), 0.0)
        back = self._travel(enter[1:], leave[:-1])
        more = np.concatenate([[0.0], np.cumsum(back - step[:-1])])
        position = np.append(np.argsort(sequence), len(sequence))
        outer = position[self._parent[sequence]]
        inner = np.full(len(sequence) + 1, -1)
        np.maximum.at(inner, outer, np.arange(len(sequence)))
        return _Order(enter, leave, step, more, outer, inner[:-1], self._travel)

    def _apart(self, changes: _Changes, count: int) -> Indices:
        """Return the best of changes that do not touch each other."""
        taken = np.zeros(count + 2, dtype=bool)
        chosen = []
        rank = np.lexsort([changes.behind, changes.high, changes.low, -changes.saved])
        rows = zip(rank.tolist(), *(part[rank].tolist() for part in changes[:3]), strict=True)
        for number, low, high, behind in rows:
            first, last = low - 1, high
            if self._bound:
                # What lies between is passed by, and must not change its place meanwhile.
                first, last = min(first, behind), max(last, behind)
            if not taken[behind] and not taken[first : last + 1].any():
                taken[first : last + 1] = True
                taken[behind] = True
                chosen.append(number)
        return np.array(chosen, dtype=np.intp)


def _neighbours(enter: Array, leave: Array) -> Indices:
    """Return pairs of outlines with ends that are near, either first: (2, p)."""
    count = len(enter)
    if count <= ALL_PAIRS:
        every = np.nonzero(~np.eye(count, dtype=bool))
        return np.array(every)
    points = np.concatenate([enter, leave])
    # Closed outlines are entered and left in the same point, so they are found twice.
    near = cKDTree(points).query(points, k=2 * NEIGHBOURS + 2)[1] % count
    one = np.repeat(np.arange(len(points)) % count, near.shape[1])
    code = np.unique(np.concatenate([one * count + near.ravel(), near.ravel() * count + one]))
    pairs = np.stack([code // count, code % count])
    found: Indices = pairs[:, pairs[0] != pairs[1]]
    return found


def _turnings(now: _Order, pairs: Indices, fresh: Flags) -> _Changes:
    """Return which stretches might be traced backward, so that the outlines of pairs meet."""
    one, other = pairs[:, pairs[0] < pairs[1]]
    # All up to the end too, from where anything is new.
    tail = np.flatnonzero(fresh)
    low = np.concatenate([one + 1, one, tail])
    high = np.concatenate([other, other - 1, np.full(tail.size, now.last)])
    code = np.unique((low * len(fresh) + high)[low > 0])
    low, high = code // len(fresh), code % len(fresh)
    gained = now.step[low - 1] + now.step[high] - (now.more[high] - now.more[low])
    first = now.travel(now.leave[low - 1], now.leave[high]) if low.size else np.zeros(0)
    hopeful = np.flatnonzero(gained > first)
    low, high, gained = low[hopeful], high[hopeful], (gained - first)[hopeful]
    gained -= now.before(now.enter[low], high + 1)
    return _Changes(low, high, low - 1, np.ones(low.size, dtype=bool), gained)


def _moves(now: _Order, pairs: Indices, fresh: Flags) -> _Changes:
    """Return which outlines might be moved elsewhere, so that the outlines of pairs meet."""
    found = [_Changes(*(np.zeros(0, np.intp),) * 3, np.zeros(0, bool), np.zeros(0))]
    one, other = pairs
    for more in range(min(LONGEST_MOVED, len(fresh) - 1)):
        # The outline is the first or the last of those moved; either may come to the other's side.
        low = np.concatenate([one, one, one - more, one - more])
        behind = np.concatenate([other, other - 1, other - 1, other])
        backward = np.repeat([False, True, False, True], one.size)
        high = low + more
        possible = (low > 0) & (high <= now.last) & (behind >= 0)
        possible &= (behind < low - 1) | (behind > high)
        low, high, behind, backward = (part[possible] for part in (low, high, behind, backward))
        spots = np.arange(1, now.last + 1 - more)
        closing = np.concatenate([[0.0], now.before(now.leave[spots - 1], spots + more + 1)])
        gained = now.step[low - 1] + now.step[high] + now.step[behind] - closing[low]
        gained -= np.where(backward, now.more[high] - now.more[low], 0.0)
        hopeful = np.flatnonzero(gained > WORTH * now.step.sum())
        low, high, behind, backward, gained = (
            part[hopeful] for part in (low, high, behind, backward, gained)
        )
        if not low.size:
            continue
        swap = backward[:, np.newaxis]
        into = np.where(swap, now.leave[high], now.enter[low])
        gained -= now.travel(now.leave[behind], into)
        rest = np.flatnonzero(gained > 0)
        low, high, behind, backward, gained = (
            part[rest] for part in (low, high, behind, backward, gained)
        )
        out = np.where(backward[:, np.newaxis], now.enter[low], now.leave[high])
        gained -= now.before(out, behind + 1)
        found.append(_Changes(low, high, behind, backward, gained))
    return _Changes(*(np.concatenate(parts) for parts in zip(*found, strict=True)))


def _allowed(now: _Order, changes: _Changes) -> Flags:
    """Return which changes keep what must come before something else there."""
    low, high, behind = changes.low, changes.high, changes.behind
    allowed = np.ones(low.size, dtype=bool)
    turned = changes.backward
    allowed[turned] = _least(now.outer, low[turned], high[turned]) > high[turned]
    moved = behind != low - 1
    for more in range(LONGEST_MOVED):
        at = np.minimum(low + more, high)
        passed = (now.outer[at] > high) & (now.outer[at] <= behind)
        # Of what must come before, some may be moved along; to refuse these too does no harm.
        passed |= (behind < low) & (now.inner[at] > behind)
        allowed &= ~(moved & passed)
    return allowed


def _least(values: Indices, low: Indices, high: Indices) -> Indices:
    """Return the least of values from low to high, both included: (k,)."""
    levels = [values]
    width = 1
    while 2 * width <= len(values):
        levels.append(np.minimum(levels[-1][:-width], levels[-1][width:]))
        width *= 2
    # Two stretches whose width is a power of two cover any other.
    level = np.frexp(high - low + 1)[1] - 1
    found = np.empty(low.size, dtype=np.intp)
    for number in np.unique(level):
        some = np.flatnonzero(level == number)
        table = levels[number]
        found[some] = np.minimum(table[low[some]], table[high[some] + 1 - 2**number])
    return found


def _made(changes: _Changes, sequence: Indices, turned: Flags) -> tuple[Indices, Flags]:
    """Return the order after changes that do not touch each other."""
    place = np.arange(len(sequence), dtype=np.float64)
    turned = turned.copy()
    rows = zip(*(part.tolist() for part in changes[:4]), strict=True)
    for low, high, behind, backward in rows:
        # Between two positions there is room for any number of outlines.
        spots = behind + np.arange(1, high - low + 2) / (high - low + 2)
        if behind == low - 1:
            spots = np.arange(low, high + 1, dtype=np.float64)
        place[low : high + 1] = spots[::-1] if backward else spots
        if backward:
            turned[sequence[low : high + 1]] ^= True
    return sequence[np.argsort(place, kind="stable")], turned
