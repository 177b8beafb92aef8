"""With how few points does a drive that interpolates by itself keep to the plan?

Between two points of positions, velocities and times such a drive follows the cubic that has these
positions and velocities at its ends. How far that is from the plan follows from the extremes of
the difference of two polynomials, so nothing between samples is missed. Positions and velocities
count as they are written, rounded to decimals or to increments of a drive, each from the plan: the
error that is stated includes what rounding does, and rounding never adds up.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import comb
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.inputs.dialect import Dialect
from profileplan.inputs.rules import Judge, Range
from profileplan.motion import polynomials
from profileplan.setpoints.content import Content
from profileplan.setpoints.drives import judge_drives
from profileplan.setpoints.grids import as_read, position_step, written_fields
from profileplan.setpoints.sampling import TICK_TOLERANCE, Sampler, SetpointTable

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    from profileplan.motion.polynomials import Array
    from profileplan.motion.schedule import Schedule
    from profileplan.setpoints.content import Field
    from profileplan.setpoints.digits import Whole

ERROR = Range(1e-7, 1000.0)
"""Errors that can be asked for [mm or deg]: finer ones are lost in the rounding of numbers."""

LONGEST = Range(50e-6, 1e6)

TRIED = 8
"""Ends of a span that are tried at once."""

ORDER = 6

COLUMNS = ("pos", "vel")
"""What points hold of an axis."""

HALF_TURN = 1 - 1e-9
"""Share of half a turn of a wrapped axis from which its sense is in doubt."""


@dataclass(frozen=True, eq=False)
class PvtTable:
    """Points between which a drive interpolates by cubics.

    Parameters
    ----------
    axes : tuple of str
        Names of the d axes.
    tick : float [s]
    ticks : (n,) array of int
        Times of the points, in ticks.
    position : (n, d) array [mm]
        As the plan has them: what rounds them is the content and the dialect that they are
        written in.
    velocity : (n, d) array [mm/s]
    signals : mapping
        Name of a digital output → (n,) array of 0 and 1: its state from the point on.
    error : (d,) array [mm]
        The greatest distance of the cubics from the plan, between points as they are written.
    rounding : (d,) array [mm]
        The share of it that rounding positions can have at most: half of their step.
    peaks : mapping
        "velocity", "acceleration" and "deceleration" → (d,) array, the greatest of the cubics
        [mm/s, mm/s²]. Near where the plan changes its acceleration they pass the plan's.
    content : Content
    dialect : Dialect
    """

    axes: tuple[str, ...]
    tick: float
    ticks: Whole
    position: Array
    velocity: Array
    signals: Mapping[str, Array]
    error: Array
    rounding: Array
    peaks: Mapping[str, Array]
    content: Content
    dialect: Dialect

    def rows(self, some: slice) -> SetpointTable:
        """Return some of the points as a table of positions and velocities."""
        return SetpointTable(
            axes=self.axes,
            time=self.time[some],
            position=self.position[some],
            velocity=self.velocity[some],
            acceleration=None,
            jerk=None,
            signals={name: states[some] for name, states in self.signals.items()},
        )

    @property
    def time(self) -> Array:
        """Times of the points [s]: (n,)."""
        time: Array = self.ticks * round(self.tick * 1e9) / 1e9
        return time


def pvt(
    schedule: Schedule,
    *,
    error: float,
    content: Content | None = None,
    dialect: Dialect | None = None,
    longest: float | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> PvtTable:
    """Return few points whose cubics stay near the plan.

    From each point the next one is the farthest tick that keeps the error. That gives the fewest
    points wherever each shorter span from a later point keeps it too.

    Parameters
    ----------
    schedule : Schedule
    error : float [mm or deg]
        How far any axis may be from the plan at any instant.
    content : Content, optional
        Points stand at whole multiples of its period, the last one at the end or less than a
        period behind it; axes with a drive are rounded to its increments. Its columns are not
        asked.
    dialect : Dialect, optional
        The digits of the other axes.
    longest : float, optional [s]
        The longest time between two points that the drive takes.
    progress : callable, optional
        Called with the ticks done so far and the ticks in all.

    Returns
    -------
    PvtTable
        A point stands wherever a signal changes. Two points of a wrapped axis are less than half a
        turn apart.

    Raises
    ------
    InputError
        Numbers out of range, drives that cannot play it, or an error that the closest points do
        not keep.
    """
    judge = Judge()
    judge.number("error", error, ERROR, "mm or deg")
    judge.optional("longest", longest, LONGEST, "s")
    judge.finish()
    content = replace(content or Content(), columns=COLUMNS)
    spans = _Spans(schedule, content, dialect or Dialect())
    spans.judge_rounding(error)
    most = spans.last if longest is None else int(longest / spans.tick + TICK_TOLERANCE)
    if most < 1:
        message = f"{longest:g} s; a tick of {spans.tick:g} s at least"
        raise InputError([Fault("longest", message)])
    stops = spans.stops(schedule)
    ticks, greatest, reach = [0], np.zeros(len(spans.channels)), 1
    while ticks[-1] < spans.last:
        start = ticks[-1]
        stop = min(start + most, int(stops[np.searchsorted(stops, start, side="right")]))
        end, own = spans.farthest(start, stop, reach, error)
        reach = end - start
        ticks.append(end)
        greatest = np.maximum(greatest, own)
        if progress:
            progress(end, spans.last)
    return spans.table(np.array(ticks), greatest)


class _Channel(NamedTuple):
    """The position and the velocity of an axis, or of its second drive, as they are written."""

    axis: int
    position: Field
    velocity: Field
    step: float
    half_turn: float


class _Spans:
    """The plan, and how far cubics between its ticks are from it."""

    def __init__(self, schedule: Schedule, content: Content, dialect: Dialect) -> None:
        judge_drives(schedule, content.drives)
        self._sampler = Sampler(schedule, period=content.period, columns=COLUMNS)
        self.tick = self._sampler.period
        self.last = self._sampler.count - 1
        self._content, self._dialect = replace(content, period=self.tick), dialect
        trajectory = schedule.trajectory
        self.axes = trajectory.axes
        self._units = [axis.unit for axis in schedule.job.machine.axes]
        self.channels = self._found(schedule)
        # The last tick may stand behind the end: the plan rests there.
        rest = np.zeros((1, ORDER, len(self.axes)))
        rest[0, 0] = trajectory.last
        plan = np.concatenate([trajectory.coefficients, rest])
        self._coefficients = plan[:, :, [one.axis for one in self.channels]]
        self._breaks = np.append(trajectory.breaks, np.inf)

    def _found(self, schedule: Schedule) -> tuple[_Channel, ...]:
        low, high = schedule.trajectory.extremes()
        greatest = np.maximum(np.abs(low.value), np.abs(high.value))
        nanoseconds = self._sampler.nanoseconds
        fields = written_fields(schedule, self._content, self._dialect, nanoseconds)
        channels = []
        for position, velocity in zip(fields["pos"], fields["vel"], strict=True):
            axis = self.axes.index(position.name)
            step = position_step(position, float(greatest[axis]), self._dialect)
            wrap = None if position.counter is None else position.counter.drive.wrap
            half_turn = np.inf if wrap is None else wrap / 2
            channels.append(_Channel(axis, position, velocity, step, half_turn))
        return tuple(channels)

    def judge_rounding(self, error: float) -> None:
        """Refuse an error that rounding alone may pass."""
        faults = [
            Fault(
                "error",
                f"{error:g} {unit}; positions of {one.position.heading} are rounded to steps of "
                f"{one.step:.3g} {unit}, which alone are off by up to {one.step / 2:.3g}: "
                "allow more than that, or take finer steps",
            )
            for one in self.channels
            for unit in (self._units[one.axis],)
            if error < one.step / 2
        ]
        if faults:
            raise InputError(faults)

    def stops(self, schedule: Schedule) -> Whole:
        """Return the ticks at which a point must stand: changes of signals, and the end."""
        times = np.array([event.time for event in schedule.events])
        changes = np.ceil(times / self.tick - TICK_TOLERANCE).astype(np.int64)
        return np.unique(np.append(changes[changes < self.last], self.last))

    def table(self, ticks: Whole, error: Array) -> PvtTable:
        """Return the points at some ticks."""
        sampled = self._sampler.at(ticks)
        axes = [one.axis for one in self.channels]

        def of_axes(values: Array) -> Array:
            greatest = np.zeros(len(self.axes))
            np.maximum.at(greatest, axes, values)
            return greatest

        position, velocity = self._states(ticks)
        peaks = _peaks(position, velocity, np.diff(ticks) * round(self.tick * 1e9) / 1e9)
        return PvtTable(
            axes=self.axes,
            tick=self.tick,
            ticks=ticks,
            position=sampled.position,
            velocity=_known(sampled.velocity),
            signals=sampled.signals,
            error=of_axes(error),
            rounding=of_axes(np.array([one.step / 2 for one in self.channels])),
            peaks={quantity: of_axes(values) for quantity, values in peaks.items()},
            content=self._content,
            dialect=self._dialect,
        )

    def farthest(self, start: int, stop: int, reach: int, error: float) -> tuple[int, Array]:
        """Return the last tick up to ``stop`` whose cubic from ``start`` keeps an error, and it.

        Raises
        ------
        InputError
            Not even the next tick does.
        """
        length = stop - start
        lengths = np.unique(np.clip([1, reach // 2, reach, 2 * reach, 4 * reach], 1, length))
        best, best_error, beyond = 0, np.zeros(len(self.channels)), length + 1
        errors = np.empty((0, len(self.channels)))
        while lengths.size:
            errors = self._errors(start, start + lengths)
            good = np.flatnonzero((errors <= error).all(axis=1))
            if good.size:
                place = int(good[-1])
                best, best_error = int(lengths[place]), errors[place]
                later = lengths[place + 1 :]
            else:
                later = lengths
            if later.size:
                beyond = int(later[0])
            if not best:
                break
            if beyond > length:
                lengths = np.unique(np.clip([2 * best, 8 * best], best + 1, length))
                lengths = lengths[lengths > best]
            else:
                lengths = np.unique(np.linspace(best, beyond, TRIED + 2)[1:-1].astype(np.int64))
                lengths = lengths[(lengths > best) & (lengths < beyond)]
        if not best:
            raise InputError([self._too_coarse(start, errors[0], error)])
        return start + best, best_error

    def _too_coarse(self, start: int, found: Array, error: float) -> Fault:
        """Return the fault of a tick from which not even the next one keeps an error."""
        worst = int(found.argmax())
        name, least = self.channels[worst].position.heading, float(found[worst])
        at = f"points {self.tick:g} s apart at {start * self.tick:g} s"
        if np.isinf(least):
            message = f"{name} passes half a turn or more between {at}; take a finer tick"
            return Fault("period", message)
        message = (
            f"{error:g}; {at} are off by {least:g} in {name}: allow that, or take a finer tick"
        )
        return Fault("error", message)

    def _states(self, ticks: Whole) -> tuple[Array, Array]:
        """Return positions and velocities at rising ticks as they are read: (n, channels)."""
        sampled = self._sampler.at(ticks)
        velocity = _known(sampled.velocity)
        positions = [
            as_read(one.position, sampled.position[:, one.axis], self._dialect)
            for one in self.channels
        ]
        velocities = [
            as_read(one.velocity, velocity[:, one.axis], self._dialect) for one in self.channels
        ]
        return np.stack(positions, axis=1), np.stack(velocities, axis=1)

    def _errors(self, start: int, ends: Whole) -> Array:
        """Return how far the cubics from a tick to others are from the plan: (m, channels)."""
        times = np.append(start, ends) * round(self.tick * 1e9) / 1e9
        position, velocity = self._states(np.append(start, ends))
        cubics = _cubics(position, velocity, times[1:] - times[0])
        begin, until = times[0], times[1:]
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
        half_turns = np.array([one.half_turn for one in self.channels])
        found[np.abs(position[1:] - position[0]) >= half_turns * HALF_TURN] = np.inf
        return found


def _cubics(position: Array, velocity: Array, length: Array) -> Array:
    """Return the cubics from the first of some states to each of the others: (m, 6, d).

    Source: de Boor: A Practical Guide to Splines (2001), chapter IV (from memory).
    """
    span = length[:, np.newaxis]
    mean = (position[1:] - position[0]) / span
    cubics = np.zeros((length.size, ORDER, position.shape[1]))
    cubics[:, 0], cubics[:, 1] = position[0], velocity[0]
    cubics[:, 2] = (3 * mean - 2 * velocity[0] - velocity[1:]) / span
    cubics[:, 3] = (velocity[0] + velocity[1:] - 2 * mean) / span**2
    return cubics


def _peaks(position: Array, velocity: Array, length: Array) -> dict[str, Array]:
    """Return the greatest rates of the cubics between states in turn: each (channels,).

    Acceleration is linear in time, so it is greatest at an end, and velocity there or where the
    acceleration is zero. A span slows down where acceleration opposes the way that it covers.
    """
    span = length[:, np.newaxis]
    before, after = velocity[:-1], velocity[1:]
    mean = np.diff(position, axis=0) / span
    first = 2 * (3 * mean - 2 * before - after) / span
    last = 2 * (before + 2 * after - 3 * mean) / span
    bend = np.where(first * last < 0, first - last, 1.0)
    middle = np.where(first * last < 0, before + first**2 / bend * span / 2, 0.0)
    ends = np.stack([first, last])
    slows = ends * mean < 0
    sizes = np.abs(ends)
    return {
        "velocity": np.abs([before, after, middle]).max(axis=(0, 1)),
        "acceleration": np.where(slows, 0.0, sizes).max(axis=(0, 1)),
        "deceleration": np.where(slows, sizes, 0.0).max(axis=(0, 1)),
    }


def _shifted(coefficients: Array, by: Array) -> Array:
    """Return polynomials of time in powers of the time since an instant: (m, 6, d)."""
    weights = np.zeros((by.size, ORDER, ORDER))
    for power in range(ORDER):
        for lower in range(power + 1):
            weights[:, lower, power] = comb(power, lower) * by ** (power - lower)
    shifted: Array = weights @ coefficients
    return shifted


def _known(velocity: Array | None) -> Array:
    if velocity is None:
        message = "velocities are needed"
        raise ValueError(message)
    return velocity
