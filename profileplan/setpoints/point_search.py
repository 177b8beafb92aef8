"""How far may the next point be, so that the cubic in between keeps the error and the limits?

Where the error allows it, a point stands at a break of the plan, to the nanosecond: between breaks
of motions of limited jerk the plan is a cubic itself. Where a break or the peak of an acceleration
is passed inside a span, the middle of the span is the place for it: the cubic's acceleration, a
straight line that is the nearest to the plan's in a certain mean, then stays below the peak. Near
the ends of a span it would pass it.
"""

from __future__ import annotations

from math import comb
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.motion import polynomials
from profileplan.setpoints.grids import as_read, position_step, written_fields
from profileplan.setpoints.point_limits import SHARES, Bounds, Spans, excess

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.inputs import Dialect
    from profileplan.motion.polynomials import Array
    from profileplan.motion.schedule import Schedule
    from profileplan.setpoints.content import Content, Field
    from profileplan.setpoints.digits import Whole

ORDER = 6

NANOSECOND = 1e-9

TRIED = 8
"""Ends of a span that are tried at once."""

EVEN = 32
"""Ends, evenly spread over the reach of the error, of which the limits are looked at."""

BREAKS = 24
"""Breaks of the plan inside this reach that are looked at: the first and the last ones."""

HALVINGS = 24
"""Shorter and shorter spans that are tried where none of these ends will do."""

FINE = 64
"""Part of a span to which the reach of the error is found, where times are free."""

LEAST = 10_000
"""Time between two points [ns] below which rounding alone makes the cubic."""

HALF_TURN = 1 - 1e-9
"""Share of half a turn of a wrapped axis from which its sense is in doubt."""

NEAR = 1e-9
"""Distance from the end of a travel that counts as reached [mm or deg]."""


class Channel(NamedTuple):
    """The position and the velocity of an axis, or of its second drive, as they are written."""

    axis: int
    position: Field
    velocity: Field
    step: float
    rate_step: float
    half_turn: float


class Grid(NamedTuple):
    """Times at which points may stand: whole multiples of ``nanoseconds`` up to the ``last`` one.

    ``least``: how many of them are between two points at least; ``fine``: to which part of a span
    the reach of an error is found.
    """

    nanoseconds: int
    last: int
    least: int
    fine: int

    def seconds(self, whole: Whole) -> Array:
        """Return times [s]."""
        times: Array = whole * self.nanoseconds / 1e9
        return times

    def beside(self, times: Array) -> Whole:
        """Return the times of the grid next to others, below and above."""
        exact = times / (self.nanoseconds * NANOSECOND)
        below, above = np.floor(exact), np.ceil(exact)
        return np.unique(np.concatenate([below, above])).astype(np.int64)


class Span(NamedTuple):
    """A span: its end, and its error on every channel [mm]."""

    end: int
    error: Array


class Search:
    """The plan, and what cubics between times of a grid make of it.

    Parameters
    ----------
    schedule : Schedule
    grid : Grid
    content : Content
    dialect : Dialect
    """

    def __init__(self, schedule: Schedule, grid: Grid, content: Content, dialect: Dialect) -> None:
        self.grid, self._dialect = grid, dialect
        trajectory = schedule.trajectory
        self.channels = channels(schedule, content, dialect, grid.nanoseconds)
        self.bounds = _bounds(schedule, self.channels)
        axes = [one.axis for one in self.channels]
        # The last point may stand behind the end: the plan rests there.
        rest = np.zeros((1, ORDER, len(trajectory.axes)))
        rest[0, 0] = trajectory.last
        self._coefficients = np.concatenate([trajectory.coefficients, rest])[:, :, axes]
        self._breaks = np.append(trajectory.breaks, np.inf)
        self._meets = grid.beside(trajectory.breaks)
        self._turns = np.unique(
            np.concatenate(
                [
                    self._meets,
                    grid.beside(_peaks_inside(self._coefficients[:-1], trajectory.breaks)),
                ]
            )
        )
        self._half_turns = np.array([one.half_turn for one in self.channels])

    def states(self, times: Whole) -> tuple[Array, Array]:
        """Return positions and velocities at times of the grid as they are read: (n, channels)."""
        position, velocity = self.exact(times)
        for column, one in enumerate(self.channels):
            position[:, column] = as_read(one.position, position[:, column], self._dialect)
            velocity[:, column] = as_read(one.velocity, velocity[:, column], self._dialect)
        return position, velocity

    def exact(self, times: Whole) -> tuple[Array, Array]:
        """Return positions and velocities at times of the grid as the plan has them."""
        at = self.grid.seconds(times)
        at[times >= self.grid.last] = self._breaks[-2]
        piece = np.searchsorted(self._breaks, at, side="right") - 1
        local = (at - self._breaks[piece])[:, np.newaxis]
        coefficients = self._coefficients[piece]
        position = np.zeros(coefficients[:, 0].shape)
        velocity = np.zeros_like(position)
        for power in range(ORDER - 1, 0, -1):
            position = (position + coefficients[:, power]) * local
            velocity = velocity * local + power * coefficients[:, power]
        return position + coefficients[:, 0], velocity

    def spans(self, start: int, ends: Whole) -> Spans:
        """Return the cubics from a time of the grid to others."""
        position, velocity = self.states(np.append(start, ends))
        seconds = self.grid.seconds(np.append(start, ends))
        length = (seconds[1:] - seconds[0])[:, np.newaxis]
        shape = position[1:].shape
        return Spans(
            np.broadcast_to(position[0], shape),
            position[1:],
            np.broadcast_to(velocity[0], shape),
            velocity[1:],
            length,
        )

    def farthest(self, start: int, stop: int, reach: int, error: float) -> Span:
        """Return the longest span found up to ``stop`` that keeps an error and all limits.

        Where none keeps the limits, it is the one that passes them least.

        Raises
        ------
        InputError
            Not even the next time of the grid keeps the error.
        """
        least = min(self.grid.least, stop - start)
        far, found = self._reach(start, stop, (least, reach), error)
        if not far:
            raise InputError([self._too_coarse(start, found, error)])
        ends = self._candidates(start, stop, far)
        over = self._over(start, ends)
        best = self._first(start, ends[over <= 0][::-1], error)
        if best is not None:
            return self._refined(start, best, ends, (stop, error))
        return self._least_bad(start, stop, ends, error)

    def _refined(self, start: int, best: Span, ends: Whole, judged: tuple[int, float]) -> Span:
        """Return a longer span than one that is good, before the next end that was tried."""
        stop, error = judged
        for _ in range(2):
            later = ends[ends > best.end]
            if best.end in self._meets or not later.size:
                return best
            between = np.linspace(best.end, later[0], TRIED + 2)[1:-1].astype(np.int64)
            between = self._allowed(between[between > best.end], start, stop)
            if not between.size:
                return best
            over = self._over(start, between)
            best = self._first(start, between[over <= 0][::-1], error) or best
            ends = np.union1d(ends, between)
        return best

    def _first(self, start: int, ends: Whole, error: float) -> Span | None:
        """Return the first of some ends whose span keeps an error, if one does."""
        for place in range(0, ends.size, TRIED):
            some = np.sort(ends[place : place + TRIED])
            errors = self.errors(start, some)
            good = np.flatnonzero((errors <= error).all(axis=1))
            if good.size:
                return Span(int(some[good[-1]]), errors[good[-1]])
        return None

    def _over(self, start: int, ends: Whole, share: float = SHARES[0]) -> Array:
        """Return by how much cubics pass limits on any channel, at most 0 if they do not: (m,)."""
        passed = excess(self.spans(start, ends), self.bounds)
        over: Array = np.max(passed.beyond(share), axis=(0, 2))
        return over

    def _least_bad(self, start: int, stop: int, ends: Whole, error: float) -> Span:
        """Return the span that passes the limits least, the longest of equals.

        First shorter ones are tried, then those that rounding explains more of.
        """
        length = int(ends[-1]) - start
        shorter = start + np.rint(length * 0.7 ** np.arange(1, HALVINGS)).astype(np.int64)
        ends = np.union1d(ends, self._allowed(shorter, start, stop))
        for share in SHARES:
            over = self._over(start, ends, share)
            best = self._first(start, ends[over <= 0][::-1], error)
            if best is not None:
                return best
        errors = self.errors(start, ends)
        over = np.where((errors <= error).all(axis=1), over, np.inf)
        worst = ends.size - 1 - int(over[::-1].argmin())
        return Span(int(ends[worst]), errors[worst])

    def _candidates(self, start: int, stop: int, far: int) -> Whole:
        """Return rising ends that may be good ones, up to the reach of the error."""
        end = start + far
        # The reach of the error is not found to the last nanosecond.
        low, high = np.searchsorted(self._meets, [start, end + far // FINE], side="right")
        meets = self._meets[low:high]
        low, high = np.searchsorted(self._turns, [start, (start + end) // 2], side="right")
        turns = self._turns[low:high]
        ends = [
            start + (far * np.arange(1, EVEN + 1)) // EVEN,
            meets[:BREAKS],
            meets[-BREAKS:],
            2 * turns[:BREAKS] - start,
            2 * turns[-BREAKS:] - start,
            np.array([end]),
        ]
        return self._allowed(np.unique(np.concatenate(ends)), start, stop)

    def _allowed(self, ends: Whole, start: int, stop: int) -> Whole:
        """Return those ends that are not too near to the start or to a point that must be."""
        least = self.grid.least
        far = (ends - start >= least) & ((stop - ends >= least) | (ends == stop))
        chosen: Whole = ends[(far & (ends <= stop)) | ((ends == stop) & (stop > start))]
        if not chosen.size:
            return np.array([stop])
        return chosen

    def _reach(
        self, start: int, stop: int, tried: tuple[int, int], error: float
    ) -> tuple[int, Array]:
        """Return how long a span keeps an error, 0 if none does, and the errors of the shortest."""
        length = stop - start
        least, reach = tried
        lengths = np.unique(
            np.clip([least, reach // 2, reach, 2 * reach, 4 * reach], least, length)
        )
        best, beyond = 0, length + 1
        shortest: Array | None = None
        while lengths.size:
            errors = self.errors(start, start + lengths)
            shortest = errors[0] if shortest is None else shortest
            good = np.flatnonzero((errors <= error).all(axis=1))
            later = lengths
            if good.size:
                best = int(lengths[good[-1]])
                later = lengths[good[-1] + 1 :]
            if later.size:
                beyond = int(later[0])
            if not best:
                break
            if beyond > length:
                lengths = np.unique(np.clip([2 * best, 8 * best], best + 1, length))
                lengths = lengths[lengths > best]
            elif (beyond - best) * self.grid.fine < best:
                break
            else:
                lengths = np.unique(np.linspace(best, beyond, TRIED + 2)[1:-1].astype(np.int64))
                lengths = lengths[(lengths > best) & (lengths < beyond)]
        return best, np.zeros(len(self.channels)) if shortest is None else shortest

    def _too_coarse(self, start: int, found: Array, error: float) -> Fault:
        """Return the fault of a time from which not even the next one keeps an error."""
        worst = int(found.argmax())
        name, least = self.channels[worst].position.heading, float(found[worst])
        tick = self.grid.nanoseconds * self.grid.least * NANOSECOND
        at = f"points {tick:g} s apart at {start * self.grid.nanoseconds * NANOSECOND:g} s"
        if np.isinf(least):
            message = f"{name} passes half a turn or more between {at}; take a finer tick"
            return Fault("period", message)
        message = (
            f"{error:g}; {at} are off by {least:g} in {name}: allow that, or take a finer tick"
        )
        return Fault("error", message)

    def errors(self, start: int, ends: Whole) -> Array:
        """Return how far the cubics from a time to others are from the plan: (m, channels)."""
        spans = self.spans(start, ends)
        begin = start * self.grid.nanoseconds / 1e9
        until = self.grid.seconds(ends)
        cubics = np.zeros((ends.size, ORDER, len(self.channels)))
        cubics[:, 0], cubics[:, 1] = spans.start, spans.begin
        cubics[:, 2], cubics[:, 3] = spans.powers
        first = int(np.searchsorted(self._breaks, begin, side="right")) - 1
        last = np.searchsorted(self._breaks, until, side="left") - 1
        counts = np.maximum(last - first + 1, 1)
        owner = np.repeat(np.arange(ends.size), counts)
        piece = first + np.arange(owner.size) - np.repeat(np.cumsum(counts) - counts, counts)
        low = np.maximum(self._breaks[piece], begin)
        high = np.minimum(self._breaks[piece + 1], until[owner])
        plan = _shifted(self._coefficients[piece], low - self._breaks[piece])
        cubic = _shifted(cubics[owner], low - begin)
        rows = (plan - cubic).transpose(0, 2, 1).reshape(-1, ORDER)
        lengths = np.repeat(np.maximum(high - low, 0.0), len(self.channels))
        least, most, _, _ = polynomials.extremes(rows, lengths)
        size = np.maximum(-least, most).reshape(owner.size, -1)
        found: Array = np.maximum.reduceat(size, np.cumsum(counts) - counts, axis=0)
        found[np.abs(spans.stop - spans.start) >= self._half_turns * HALF_TURN] = np.inf
        return found


def channels(
    schedule: Schedule, content: Content, dialect: Dialect, nanoseconds: int
) -> tuple[Channel, ...]:
    """Return what is written of axes and of second drives, and in what steps."""
    names = schedule.trajectory.axes
    greatest = [
        np.maximum(-low.value, high.value)
        for low, high in (schedule.trajectory.extremes(), schedule.trajectory.extremes(1))
    ]
    fields = written_fields(schedule, content, dialect, nanoseconds)
    found = []
    for position, velocity in zip(fields["pos"], fields["vel"], strict=True):
        axis = names.index(position.name)
        counter = position.counter
        wrap = None if counter is None else counter.drive.wrap
        # Velocities are never counted, but written with decimals, of increments too.
        ratio = 1.0 if counter is None else float(counter.drive.ratio)
        plain = velocity._replace(counter=None)
        found.append(
            Channel(
                axis,
                position,
                velocity,
                position_step(position, float(greatest[0][axis]), dialect),
                position_step(plain, ratio * float(greatest[1][axis]), dialect) / ratio,
                np.inf if wrap is None else wrap / 2,
            )
        )
    return tuple(found)


def _bounds(schedule: Schedule, own: Sequence[Channel]) -> Bounds:
    """Return what the channels may do: their limits, or what the plan itself does beyond them."""
    machine, trajectory = schedule.job.machine, schedule.trajectory
    limits = np.array([axis.limits[:3] for axis in machine.axes]).T
    peaks = np.stack([peak.value for peak in trajectory.peaks[:3]])
    travel = np.array([axis.travel for axis in machine.axes]).T
    low, high = trajectory.extremes()
    axes = [one.axis for one in own]
    hardest = peaks[1:].max(axis=0)
    return Bounds(
        np.maximum(limits, peaks)[:, axes],
        np.minimum(travel[0] - NEAR, low.value)[axes],
        np.maximum(travel[1] + NEAR, high.value)[axes],
        np.array([one.step for one in own]),
        np.array([one.rate_step for one in own]) + 2 * NANOSECOND * hardest[axes],
    )


def _peaks_inside(coefficients: Array, breaks: Array) -> Array:
    """Return the times at which accelerations have extremes inside pieces: (n,) [s]."""
    rows = coefficients[:, 3:].transpose(0, 2, 1).reshape(-1, ORDER - 3) * [6.0, 24.0, 60.0]
    count = coefficients.shape[2]
    roots = polynomials.roots(rows, np.repeat(np.diff(breaks), count))
    times: Array = (roots + np.repeat(breaks[:-1], count)[:, np.newaxis]).ravel()
    return times[np.isfinite(times)]


def _shifted(coefficients: Array, by: Array) -> Array:
    """Return polynomials of time in powers of the time since an instant: (m, 6, d)."""
    weights = np.zeros((by.size, ORDER, ORDER))
    for power in range(ORDER):
        for lower in range(power + 1):
            weights[:, lower, power] = comb(power, lower) * by ** (power - lower)
    shifted: Array = weights @ coefficients
    return shifted
