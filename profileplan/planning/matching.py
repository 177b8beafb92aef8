"""In which order are the places of a group used, and which goes with which, for the least travel?

A part's steps go to a pick, and after that to a place. From a pick to a place the machine goes
loaded, from a place to the next pick empty. Both are timed for all pairs, by laws and without a
search. A sequence of picks and places then costs the sum of its ways, those from the position
before and to the steps after included. Small groups are solved exactly; others by the best
assignment of loaded and of empty ways, joined to one sequence, and by exchanges. The two
assignments are also what no sequence can be shorter than.

With one pattern each pick is its own place.

Sources: Held, Karp: A dynamic programming approach to sequencing problems, Journal of the SIAM 10
(1962); Karp: A patching algorithm for the nonsymmetric traveling-salesman problem, SIAM Journal on
Computing 8 (1979) (both from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt
from scipy.optimize import linear_sum_assignment

from profileplan.geometry.cell import obstacles as obstacles_of
from profileplan.inputs import Job, Line, Move, PathStep, Payload, Trace, Transfer
from profileplan.motion.laws import LAWS, Limits
from profileplan.motion.synchronisation import line_durations, line_limits, move_duration
from profileplan.planning.tasks import Task
from profileplan.planning.transfers import quick_duration

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping, Sequence

    from profileplan.geometry.cell import Obstacle
    from profileplan.inputs import Step
    from profileplan.inputs.patterns import Free, Part
    from profileplan.inputs.rules import Positions
    from profileplan.motion.polynomials import Array

Numbers: TypeAlias = npt.NDArray[np.int64]

State: TypeAlias = tuple[int, int, int]
"""Sets of the picks and of the places used up, as bits, and the last place."""

Reached: TypeAlias = tuple[float, tuple[tuple[int, int], ...]]
"""The least time to a state [s], and the picks and places up to it."""

EXACT = 7
"""Most parts of two patterns that all sequences are compared for."""

EXACT_ALONE = 11
"""The same for one pattern."""

ROUNDS = 200
"""Most exchanges that are made from one sequence on."""

SHAKES, SHAKEN_PARTS = 30, 40_000
"""Times that a sequence is disturbed and improved anew, and most squares of parts in all."""

LONGEST_SHIFT = 3
"""Most parts that are moved elsewhere together."""

BEYOND = 20
"""Most steps after a group whose way still depends on where the group ends."""

WORTH = 0.005
"""Share of the travel that an order must save to be taken: the motion planned is not that by laws,
and for less the order given is kept."""

GAIN = 1e-9
"""Seconds by which a sequence must be shorter to count so."""

DECIMALS = 9
"""Ways that are equal when rounded so [mm or deg] take the same time."""


class Ordered(NamedTuple):
    """A job whose groups have the order that was found, and what is to be said of it."""

    job: Job
    notes: tuple[str, ...]


class Ways(NamedTuple):
    """Times of the ways of a group of n parts [s]; infinite: there is none.

    loaded : (n, n) array
        From each pick to each place.
    empty : (n + 1, n + 1) array
        From before the group, and from each place; to each pick, and to what comes after.
    """

    loaded: Array
    empty: Array

    def total(self, picks: Numbers, places: Numbers) -> Array:
        """Return the times of sequences: (..., n) numbers of picks and places → (...) [s]."""
        empty, last = self.empty, len(self.loaded)
        ways = empty[1 + places[..., :-1], picks[..., 1:]].sum(axis=-1)
        ways = ways + self.loaded[picks, places].sum(axis=-1)
        total: Array = ways + empty[0, picks[..., 0]] + empty[1 + places[..., -1], last]
        return total


class Succession(NamedTuple):
    """Numbers of the picks and of the places in the order of their use: (n,) each."""

    picks: Numbers
    places: Numbers


class Found(NamedTuple):
    """A sequence, and a time that none can be shorter than [s]."""

    sequence: Succession
    bound: float


def ordered(job: Job, ends: Mapping[int, Positions]) -> Ordered:
    """Return a job whose free groups are in the shortest order found.

    Parameters
    ----------
    job : Job
    ends : mapping
        Index of a step that follows a drawing → where it ends.
    """
    notes = []
    for free in job.cycle.free:
        group = _Group.of(job, free, ends)
        ways = group.ways()
        found = shortest(ways)
        new = _rearranged(job, group, found.sequence)
        given, best = group.travel(job), group.travel(new)
        # Where a place leaves an axis to the part before, the ways do not add up to the travel.
        told = abs(best - float(ways.total(*found.sequence))) <= GAIN * max(best, 1.0)
        shorter = best < given - max(GAIN, WORTH * best)
        job = new if shorter else job
        notes.append(_note(group, given, best if shorter else given, found.bound if told else None))
    return Ordered(Job(job.machine, replace(job.cycle, free=())), tuple(notes))


def shortest(ways: Ways) -> Found:
    """Return the shortest sequence that is found, and what none can be shorter than.

    For up to `EXACT` parts, or `EXACT_ALONE` of one pattern, there is no shorter one.
    """
    count = len(ways.loaded)
    big = _big(ways)
    finite = Ways(*(np.where(np.isfinite(times), times, big) for times in ways))
    alone = np.isinf(ways.loaded[~np.eye(count, dtype=bool)]).all()
    if count <= (EXACT_ALONE if alone else EXACT):
        sequence = _exact(finite, big)
        return Found(sequence, float(finite.total(*sequence)))
    given = Succession(np.arange(count), np.arange(count))
    changes = _changes(count)
    tried = [_improved(finite, start, changes) for start in (given, _patched(finite))]
    best = min(tried, key=lambda sequence: float(finite.total(*sequence)))
    best = _shaken(finite, best, changes)
    bound = sum(float(times[linear_sum_assignment(times)].sum()) for times in finite)
    return Found(best, bound)


def _big(ways: Ways) -> float:
    """Return a time that stands for no way: longer than any sequence."""
    longest = max(float(times[np.isfinite(times)].max(initial=0.0)) for times in ways)
    return 1.0 + 2.0 * (len(ways.loaded) + 1) * longest


def _exact(ways: Ways, big: float) -> Succession:
    """Return the shortest sequence of all, by the sets of picks and places that are used up."""
    count = len(ways.loaded)
    loaded, empty = ways.loaded.tolist(), ways.empty.tolist()
    pairs = [(i, j) for i in range(count) for j in range(count) if loaded[i][j] < big]
    if len(pairs) < count or len({i for i, _ in pairs}) < count:
        return Succession(np.arange(count), np.arange(count))
    states: dict[State, Reached] = {(0, 0, -1): (0.0, ())}
    for _ in range(count):
        longer: dict[State, Reached] = {}
        for (picked, placed, at), (time, way) in states.items():
            for i, j in pairs:
                if picked >> i & 1 or placed >> j & 1:
                    continue
                total = time + empty[at + 1][i] + loaded[i][j]
                state = picked | 1 << i, placed | 1 << j, j
                if state not in longer or total < longer[state][0]:
                    longer[state] = total, (*way, (i, j))
        states = longer
    ended = [(time + empty[at + 1][count], way) for (_, _, at), (time, way) in states.items()]
    if not ended:
        return Succession(np.arange(count), np.arange(count))
    best = np.array(min(ended)[1], dtype=np.int64)
    return Succession(best[:, 0], best[:, 1])


def _patched(ways: Ways) -> Succession:
    """Return the best loaded and the best empty ways, joined to one sequence where it costs least.

    Together they make rounds; two rounds become one where two ways of a kind change their ends.
    """
    count = len(ways.loaded)
    place_of, after = (linear_sum_assignment(times)[1].astype(np.int64) for times in ways)
    while True:
        rounds = _rounds(place_of, after)
        if not rounds.any():
            break
        of_pick = np.zeros(count + 1, dtype=np.int64)
        of_pick[after] = rounds
        swaps = []
        for times, ends, label in (
            (ways.empty, after, rounds),
            (ways.loaded, place_of, of_pick[:count]),
        ):
            crossed = times[:, ends]
            own = crossed.diagonal()
            more = crossed + crossed.T - own[:, np.newaxis] - own
            more[label[:, np.newaxis] == label] = np.inf
            one, other = divmod(int(more.argmin()), len(more))
            swaps.append((float(more[one, other]), ends, one, other))
        _, ends, one, other = min(swaps, key=lambda swap: swap[0])
        ends[[one, other]] = ends[[other, one]]
    picks, at = [], 0
    while (pick := int(after[at])) < count:
        picks.append(pick)
        at = 1 + int(place_of[pick])
    return Succession(np.array(picks), place_of[picks])


def _rounds(place_of: Numbers, after: Numbers) -> Numbers:
    """Return which round each start of an empty way is in, the one through both ends being 0."""
    to = np.append(1 + place_of, 0)[after]
    found = np.full(len(after), -1, dtype=np.int64)
    for number, begin in enumerate(range(len(after))):
        at = begin
        while found[at] < 0:
            found[at] = number
            at = int(to[at])
    return found


def _changes(count: int) -> Numbers:
    """Return orders that differ a little from the one before: (k, n) places in it."""
    base = list(range(count))
    found = []
    for one in range(count):
        for other in range(one + 1, count):
            swapped = base.copy()
            swapped[one], swapped[other] = other, one
            found += [swapped, base[:one] + base[one : other + 1][::-1] + base[other + 1 :]]
        for size in range(1, LONGEST_SHIFT + 1):
            moved, rest = base[one : one + size], base[:one] + base[one + size :]
            found += [rest[:to] + moved + rest[to:] for to in range(len(rest) + 1) if to != one]
    return np.unique(np.array(found, dtype=np.int64), axis=0)


def _shaken(ways: Ways, best: Succession, changes: Numbers) -> Succession:
    """Return the shortest sequence that comes of disturbing one and improving it again.

    Two stretches that follow each other change places, of the picks, of the places or of both. The
    numbers are drawn from a fixed seed: the same ways give the same sequence.
    """
    count, draw = len(ways.loaded), np.random.default_rng(0)
    for number in range(min(SHAKES, SHAKEN_PARTS // count**2)):
        cuts = np.sort(draw.choice(count + 1, 3, replace=False))
        first, middle, other, last = np.split(np.arange(count), cuts)
        mixed = np.concatenate([first, other, middle, last])
        picks, places = best
        disturbed = Succession(
            picks[mixed] if number % 3 != 1 else picks, places[mixed] if number % 3 else places
        )
        new = _improved(ways, disturbed, changes)
        if float(ways.total(*new)) < float(ways.total(*best)) - GAIN:
            best = new
    return best


def _improved(ways: Ways, sequence: Succession, changes: Numbers) -> Succession:
    """Return a sequence from which no single change of picks, of places or of both gains more."""
    total = float(ways.total(*sequence))
    for _ in range(ROUNDS):
        picks, places = sequence
        tried = [
            Succession(picks[changes], np.broadcast_to(places, changes.shape)),
            Succession(np.broadcast_to(picks, changes.shape), places[changes]),
            Succession(picks[changes], places[changes]),
        ]
        totals = [ways.total(*each) for each in tried]
        kind = int(np.argmin([each.min() for each in totals]))
        row = int(totals[kind].argmin())
        if totals[kind][row] >= total - GAIN:
            break
        total = float(totals[kind][row])
        sequence = Succession(tried[kind].picks[row], tried[kind].places[row])
    return sequence


@dataclass(eq=False)
class _Clock:
    """Times ways by laws, each way once."""

    job: Job
    limits: Limits
    _obstacles: dict[int, tuple[Payload | None, tuple[Obstacle, ...]]] = field(default_factory=dict)
    _known: dict[tuple[object, ...], float] = field(default_factory=dict)

    def ride(
        self, steps: Iterable[Step], state: Array, payload: Payload | None
    ) -> tuple[float, Array]:
        """Return how long steps travel from a position on [s], and where they end."""
        total = 0.0
        for step in steps:
            if isinstance(step, Payload):
                payload = step
            points = [state]
            for stop in _stops(step):
                points.append(self._at(points[-1], stop))
            if len(points) > 1:
                total += self._time(step, np.array(points), payload)
            state = points[-1]
        return total, state

    def _at(self, state: Array, stop: Positions) -> Array:
        names = self.job.machine.axis_names
        return np.array([stop.get(name, own) for name, own in zip(names, state, strict=True)])

    def _time(self, step: Step, points: Array, payload: Payload | None) -> float:
        blocks = self._blocks(payload) if isinstance(step, Transfer) else ()
        asked: tuple[object, ...] = (step.kind, getattr(step, "time", None))
        if isinstance(step, Transfer):
            asked += (step.height, step.lift, step.lower, step.across, id(blocks) if blocks else 0)
        elif isinstance(step, Move | Line | PathStep):
            asked += (step.law, getattr(step, "speed", None))
        # Where nothing stands around, a way takes the same time wherever it begins.
        there = bool(blocks) or (isinstance(step, Transfer) and step.height is not None)
        way = points if there or isinstance(step, PathStep) else np.diff(points, axis=0)
        key = (*asked, np.round(way, DECIMALS).tobytes())
        if key not in self._known:
            self._known[key] = max(self._least(step, points, blocks), getattr(step, "time", 0) or 0)
        return self._known[key]

    def _least(self, step: Step, points: Array, blocks: tuple[Obstacle, ...]) -> float:
        """Return the least time of a step by laws; a path is taken to stop at every point."""
        distance = np.diff(points, axis=0)
        match step:
            case Transfer():
                ends = points[0], points[-1]
                task = Task(self.job, 0, step, ends, self.limits)
                return quick_duration(task, step, ends, blocks)
            case Move(law=law):
                return float(
                    move_duration(distance[0], self.limits, LAWS[law or self.job.cycle.law])
                )
            case Line(law=law, speed=speed) | PathStep(law=law, speed=speed):
                own = [p.speed for p in step.points] if isinstance(step, PathStep) else [None]
                bound = np.inf if speed is None else speed
                speeds = np.array([min(bound, np.inf if each is None else each) for each in own])
                linear = self.job.machine.linear
                bounds = line_limits(distance, self.limits, linear=linear, speed=speeds)
                law_of = LAWS[law or self.job.cycle.law]
                return float(line_durations(distance, bounds, law_of).sum())
            case _:
                return 0.0

    def _blocks(self, payload: Payload | None) -> tuple[Obstacle, ...]:
        if id(payload) not in self._obstacles:
            same = (own for hangs, own in self._obstacles.values() if _alike(hangs, payload))
            blocks = next(same, None) or obstacles_of(self.job.machine, payload)
            self._obstacles[id(payload)] = payload, blocks
        return self._obstacles[id(payload)][1]


def _alike(one: Payload | None, other: Payload | None) -> bool:
    if one is None or other is None:
        return one is other
    return replace(one, name=None) == replace(other, name=None)


def _stops(step: Step) -> tuple[Positions, ...]:
    """Return the positions that a step goes to, in order."""
    match step:
        case Move() | Line() | Transfer():
            return (step.to,)
        case PathStep():
            return tuple(point.to for point in step.points)
        case _:
            return ()


@dataclass(frozen=True, eq=False)
class _Group:
    """Parts in any order.

    Parameters
    ----------
    parts : tuple of Part
    steps : tuple of tuple of Step
        Those of each part, as given.
    second : tuple of bool
        Which steps go to the places of the second pattern.
    spans : tuple of int
        How many steps of a part come before the first way ends, and before the second ends.
    clock : _Clock
    states : (k, d) array
        Positions before each step of the group, and after the last.
    before : Payload, optional
        What hangs at the tool before the group.
    after : tuple of Step
        What follows, as far as its ways depend on where the group ends.
    """

    parts: tuple[Part, ...]
    steps: tuple[tuple[Step, ...], ...]
    second: tuple[bool, ...]
    spans: tuple[int, int]
    clock: _Clock
    states: Array
    before: Payload | None
    after: tuple[Step, ...]

    @classmethod
    def of(cls, job: Job, free: Free, ends: Mapping[int, Positions]) -> _Group:
        """Return the group of a job that may be put into any order."""
        parts = job.cycle.parts[free.parts[0] : free.parts[1] + 1]
        begin, end = parts[0].first, parts[-1].last + 1
        used = [slot for slot in free.slots if slot >= 0]
        second = tuple(slot not in (-1, used[0]) for slot in free.slots)
        first_way = max(at for at, slot in enumerate(free.slots) if slot == used[0]) + 1
        second_way = max((at for at, own in enumerate(second) if own), default=-1) + 1
        steps = job.cycle.steps
        return cls(
            parts,
            tuple(steps[part.first : part.last + 1] for part in parts),
            second,
            (first_way, second_way or first_way),
            _Clock(job, Limits.of(job.machine)),
            np.array(job.positions(ends)[begin : end + 1]),
            _hanging(steps[:begin], None),
            _beyond(steps[end:], {n for s in steps[begin:end] for to in _stops(s) for n in to}),
        )

    def ways(self) -> Ways:
        """Return the times of all ways between places."""
        count, (picked, placed) = len(self.parts), self.spans
        loaded = np.full((count, count), np.inf)
        empty = np.full((count + 1, count + 1), np.inf)
        for i, own in enumerate(self.steps):
            at_pick = self.states[i * len(own) + picked]
            hangs = _hanging(own[:picked], _hanging(own, self.before))
            for j in range(count) if any(self.second) else (i,):
                steps = self._mixed(i, j)[picked:placed]
                loaded[i, j] = self.clock.ride(steps, at_pick, hangs)[0]
            empty[0, i] = self.clock.ride(own[:picked], self.states[0], self.before)[0]
        for j, own in enumerate(self.steps):
            at_place = self.states[j * len(own) + placed]
            hangs = _hanging(own[:placed], _hanging(own, self.before))
            for i, other in enumerate(self.steps):
                if i != j or any(self.second):
                    steps = (*own[placed:], *other[:picked])
                    empty[1 + j, i] = self.clock.ride(steps, at_place, hangs)[0]
            steps = (*own[placed:], *self.after)
            empty[1 + j, count] = self.clock.ride(steps, at_place, hangs)[0]
        return Ways(loaded, empty)

    def travel(self, job: Job) -> float:
        """Return how long the group travels in a job [s]."""
        steps = job.cycle.steps[self.parts[0].first : self.parts[-1].last + 1]
        return self.clock.ride((*steps, *self.after), self.states[0], self.before)[0]

    def _mixed(self, i: int, j: int) -> tuple[Step, ...]:
        """Return the steps of a part with the pick of one and the place of another."""
        both = zip(self.second, self.steps[i], self.steps[j], strict=True)
        return tuple(placed if second else picked for second, picked, placed in both)


def _hanging(steps: Sequence[Step], before: Payload | None) -> Payload | None:
    """Return what hangs at the tool after steps."""
    return next((step for step in reversed(steps) if isinstance(step, Payload)), before)


def _beyond(steps: Sequence[Step], left: set[str]) -> tuple[Step, ...]:
    """Return the steps after a group up to where none of its axes stands where it left it."""
    found: list[Step] = []
    for step in steps[:BEYOND]:
        if not left or isinstance(step, Trace):
            break
        found.append(step)
        left = left - {name for to in _stops(step) for name in to}
    return tuple(found)


def _rearranged(job: Job, group: _Group, sequence: Succession) -> Job:
    """Return a job whose group uses picks and places in another sequence; parts keep their names.

    What goes to no place belongs to the pick.
    """
    steps, written = list(job.cycle.steps), list(job.cycle.written)
    for part, i, j in zip(group.parts, *(each.tolist() for each in sequence), strict=True):
        for own, second in enumerate(group.second):
            at, source = part.first + own, group.parts[j if second else i].first + own
            steps[at] = replace(job.cycle.steps[source], name=job.cycle.steps[at].name)
            if written:
                written[at] = job.cycle.written[source]._replace(part=job.cycle.written[at].part)
    return Job(job.machine, replace(job.cycle, steps=tuple(steps), written=tuple(written)))


def _note(group: _Group, given: float, best: float, bound: float | None) -> str:
    """Say what the order of a group gains, and how far it may be from the least."""
    first, last = group.parts[0].name, group.parts[-1].name
    name = f"{first} to {last.rpartition(' ')[2]}"
    gained = f"order of {len(group.parts)} parts: {best:.2f} s of travel by laws"
    if not np.isfinite(best):
        return f"{name}: the order is kept as given; by laws there is no way through all places"
    instead = f" instead of {given:.2f} s" if np.isfinite(given) else ", where there was no way"
    gained += f"{instead} as given" if best < given else ", as given"
    if bound is None:
        return f"{name}: {gained}"
    over = 100 * (best / bound - 1) if bound else 0.0
    least = f"at most {math.ceil(10 * over) / 10:.1f} % above the least possible"
    return f"{name}: {gained}; {'no order is shorter' if over <= 100 * GAIN else least}"
