"""With how few points does a drive that interpolates by itself keep to the plan?

Between two points of positions, velocities and times such a drive follows the cubic that has these
positions and velocities at its ends. How far that is from the plan follows from the extremes of
the difference of two polynomials, so nothing between samples is missed. Positions and velocities
count as they are written, rounded to decimals or to increments of a drive, each from the plan: the
error that is stated includes what rounding does, and rounding never adds up.

The cubics keep the limits of the axes too, velocity, acceleration, deceleration and travel, beyond
what rounding explains (``point_limits.py``) by nothing at all. For that the points need not stand
on ticks: they are taken from the plan to the nanosecond, and breaks of the plan are hit. A cubic
has one jerk, a mean of the plan's over its span and so no greater; but where cubics meet the
acceleration leaps, which a drive plays as jerk for as long as it takes. These leaps are told.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.inputs.dialect import Dialect
from profileplan.inputs.rules import Judge, Range
from profileplan.setpoints.content import Content
from profileplan.setpoints.drives import judge_drives
from profileplan.setpoints.point_limits import (
    QUANTITIES,
    Spans,
    excess,
    rates,
)
from profileplan.setpoints.point_search import FINE, LEAST, NANOSECOND, Grid, Search
from profileplan.setpoints.sampling import TICK_TOLERANCE, SetpointTable, period_of, row_count

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping, Sequence

    from profileplan.motion.polynomials import Array, Flags
    from profileplan.motion.schedule import Schedule
    from profileplan.setpoints.digits import Whole

ERROR = Range(1e-7, 1000.0)
"""Errors that can be asked for [mm or deg]: finer ones are lost in the rounding of numbers."""

LONGEST = Range(50e-6, 1e6)

COLUMNS = ("pos", "vel")
"""What points hold of an axis."""


@dataclass(frozen=True, eq=False)
class PvtTable:
    """Points between which a drive interpolates by cubics.

    Parameters
    ----------
    axes : tuple of str
        Names of the d axes.
    tick : float [s]
        A nanosecond, or the period that points are to stand on.
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
        [mm/s, mm/s²].
    excess : mapping
        The same and "travel" → (d,) array, the greatest share by which the cubics pass the limit,
        of a travel the share of its length; negative inside it.
    explained : mapping
        How much of each rounding explains at most, in the span where it is greatest.
    broken : mapping
        Whether it is passed anywhere by more than rounding explains, or by more than a hundredth of
        it though rounding explains it: (d,) array of bool.
    leaps : (d,) array [mm/s²]
        The greatest change of acceleration where two cubics meet.
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
    excess: Mapping[str, Array]
    explained: Mapping[str, Array]
    broken: Mapping[str, Flags]
    leaps: Array
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
    def on_ticks(self) -> bool:
        """Whether points stand on ticks of a period, and not wherever they keep the limits."""
        return self.tick != NANOSECOND

    @property
    def kept(self) -> bool:
        """Whether the cubics keep all limits, within what rounding explains."""
        return not any(axes.any() for axes in self.broken.values())

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
    """Return few points whose cubics stay near the plan and inside the limits of the axes.

    From each point the next one is the farthest found that keeps both.

    Parameters
    ----------
    schedule : Schedule
    error : float [mm or deg]
        How far any axis may be from the plan at any instant.
    content : Content, optional
        If it has a period, points stand at whole multiples of it, the last one at the end or less
        than a period behind it; the limits may then be passed where a break of the plan is between
        two of them. Without one, and unless times are written as ticks, points stand at whole
        nanoseconds. Axes with a drive are rounded to its increments. Its columns are not asked.
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
        turn apart. ``broken`` tells which axes pass a limit all the same.

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
    dialect = dialect or Dialect()
    content = replace(content or Content(), columns=COLUMNS)
    judge_drives(schedule, content.drives)
    period = period_of(schedule, content.period)
    if longest is not None and longest < period * (1 - TICK_TOLERANCE):
        message = f"{longest:g} s; a tick of {period:g} s at least"
        raise InputError([Fault("longest", message)])
    free = content.period is None and dialect.time != "tick"
    search = Search(schedule, _grid(schedule, period, free=free), content, dialect)
    _judge_rounding(search, schedule, error)
    grid = search.grid
    tick = grid.nanoseconds * NANOSECOND
    most = grid.last if longest is None else int(longest / tick + TICK_TOLERANCE)
    stops = _stops(schedule, grid)
    # How far one gets from the first point is not known; a tick of the drive is a first guess.
    ticks, greatest, reach = [0], np.zeros(len(search.channels)), round(period / tick)
    while ticks[-1] < grid.last:
        start = ticks[-1]
        stop = min(start + most, int(stops[np.searchsorted(stops, start, side="right")]))
        found = search.farthest(start, stop, reach, error)
        reach = found.end - start
        ticks.append(found.end)
        greatest = np.maximum(greatest, found.error)
        if progress:
            progress(found.end, grid.last)
    return _table(schedule, search, (content, dialect), (np.array(ticks), greatest))


def _grid(schedule: Schedule, period: float, *, free: bool) -> Grid:
    """Return the times at which points may stand."""
    if not free:
        last = row_count(schedule, period) - 1
        return Grid(round(period / NANOSECOND), last, 1, last + 1)
    last = int(np.ceil(schedule.duration / NANOSECOND - TICK_TOLERANCE))
    return Grid(1, last, LEAST, FINE)


def _judge_rounding(search: Search, schedule: Schedule, error: float) -> None:
    """Refuse an error that rounding alone may pass."""
    units = [axis.unit for axis in schedule.job.machine.axes]
    faults = [
        Fault(
            "error",
            f"{error:g} {unit}; positions of {one.position.heading} are rounded to steps of "
            f"{one.step:.3g} {unit}, which alone are off by up to {one.step / 2:.3g}: "
            "allow more than that, or take finer steps",
        )
        for one in search.channels
        for unit in (units[one.axis],)
        if error < one.step / 2
    ]
    if faults:
        raise InputError(faults)


def _stops(schedule: Schedule, grid: Grid) -> Whole:
    """Return the ticks at which a point must stand: changes of signals, and the end."""
    times = np.array([event.time for event in schedule.events])
    exact = times / (grid.nanoseconds * NANOSECOND)
    changes = np.ceil(exact - TICK_TOLERANCE).astype(np.int64)
    return np.unique(np.append(changes[changes < grid.last], grid.last))


def _table(
    schedule: Schedule,
    search: Search,
    manner: tuple[Content, Dialect],
    found: tuple[Whole, Array],
) -> PvtTable:
    """Return the points at some ticks, and what their cubics do."""
    (content, dialect), (ticks, error) = manner, found
    axes = [one.axis for one in search.channels]
    count = len(schedule.trajectory.axes)

    def of_axes(values: Array, least: float = 0.0) -> Array:
        greatest = np.full(count, least)
        np.maximum.at(greatest, axes, values)
        return greatest

    position, velocity = search.states(ticks)
    length = np.diff(search.grid.seconds(ticks))[:, np.newaxis]
    spans = Spans(position[:-1], position[1:], velocity[:-1], velocity[1:], length)
    passed = excess(spans, search.bounds)
    worst = passed.plain.argmax(axis=1)[:, np.newaxis]
    greatest = [np.take_along_axis(part, worst, axis=1)[:, 0] for part in passed]
    beyond = passed.beyond().max(axis=1)
    peaks = rates(spans, search.bounds).greatest.max(axis=1)
    exact = schedule.trajectory
    seconds = search.grid.seconds(ticks)
    return PvtTable(
        axes=exact.axes,
        tick=search.grid.nanoseconds * NANOSECOND,
        ticks=ticks,
        position=_once(search.exact(ticks)[0], axes),
        velocity=_once(search.exact(ticks)[1], axes),
        signals=_signals(schedule, seconds, search.grid),
        error=of_axes(error),
        rounding=of_axes(np.array([one.step / 2 for one in search.channels])),
        peaks={name: of_axes(values) for name, values in zip(QUANTITIES[:3], peaks, strict=True)},
        excess={name: of_axes(greatest[0][row], -1.0) for row, name in enumerate(QUANTITIES)},
        explained={name: of_axes(greatest[1][row]) for row, name in enumerate(QUANTITIES)},
        broken={name: of_axes(beyond[row], -1.0) > 0 for row, name in enumerate(QUANTITIES)},
        leaps=of_axes(_leaps(spans)),
        content=content,
        dialect=dialect,
    )


def _once(values: Array, axes: Sequence[int]) -> Array:
    """Return the columns of axes, of which second drives repeat some: (n, d)."""
    return values[:, np.unique(axes, return_index=True)[1]]


def _leaps(spans: Spans) -> Array:
    """Return the greatest change of acceleration where cubics meet, begin or end: (c,)."""
    second, third = spans.powers
    rest = np.zeros((1, second.shape[1]))
    begins = np.concatenate([2 * second, rest])
    ends = np.concatenate([rest, 2 * second + 6 * third * spans.length])
    leaps: Array = np.abs(begins - ends).max(axis=0)
    return leaps


def _signals(schedule: Schedule, seconds: Array, grid: Grid) -> dict[str, Array]:
    """Return the states of signals at points, as a table at ticks has them."""
    shown = seconds + TICK_TOLERANCE * grid.nanoseconds * NANOSECOND
    states = {}
    for name in schedule.signals:
        own = [event for event in schedule.events if event.signal == name]
        values = np.array([0.0, *(float(event.state) for event in own)])
        states[name] = values[np.searchsorted([one.time for one in own], shown, side="right")]
    return states
