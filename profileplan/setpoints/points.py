"""With how few points does a drive that interpolates by itself keep to the plan?

Between two points of positions, velocities and times such a drive follows the cubic that has these
positions and velocities at its ends. How far that is from the plan follows from the extremes of
the difference of two polynomials, so nothing between samples is missed.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import comb
from typing import TYPE_CHECKING

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.inputs.rules import Judge, Range
from profileplan.motion import polynomials
from profileplan.setpoints.digits import rounded
from profileplan.setpoints.sampling import COLUMNS, TICK_TOLERANCE, Sampler, SetpointTable

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    from profileplan.motion.polynomials import Array
    from profileplan.motion.schedule import Schedule
    from profileplan.setpoints.digits import Whole

ERROR = Range(1e-7, 1000.0)
"""Errors that can be asked for [mm or deg]: finer ones are lost in the rounding of numbers."""

LONGEST = Range(50e-6, 1e6)

TRIED = 8
"""Ends of a span that are tried at once."""

ORDER = 6


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
    velocity : (n, d) array [mm/s]
    signals : mapping
        Name of a digital output → (n,) array of 0 and 1: its state from the point on.
    error : (d,) array [mm]
        The greatest distance of the cubics from the plan.
    """

    axes: tuple[str, ...]
    tick: float
    ticks: Whole
    position: Array
    velocity: Array
    signals: Mapping[str, Array]
    error: Array

    @property
    def rows(self) -> SetpointTable:
        """The points as a table of positions and velocities."""
        return SetpointTable(
            self.axes, self.time, self.position, self.velocity, None, None, self.signals
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
    tick: float | None = None,
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
    tick : float, optional [s]
        Points stand at whole multiples of it, the last one at the end or less than a tick behind
        it. Default: the period of the machine file.
    longest : float, optional [s]
        The longest time between two points that the drive takes.
    progress : callable, optional
        Called with the ticks done so far and the ticks in all.

    Returns
    -------
    PvtTable
        Positions and velocities are rounded as they are written, and the error is that of the
        rounded ones. A point stands wherever a signal changes.

    Raises
    ------
    InputError
        Numbers out of range, or an error that the closest points do not keep.
    """
    judge = Judge()
    judge.number("error", error, ERROR, "mm or deg")
    judge.optional("longest", longest, LONGEST, "s")
    judge.finish()
    spans = _Spans(schedule, tick)
    most = spans.last if longest is None else int(longest / spans.tick + TICK_TOLERANCE)
    if most < 1:
        message = f"{longest:g} s; a tick of {spans.tick:g} s at least"
        raise InputError([Fault("longest", message)])
    stops = spans.stops(schedule)
    ticks, greatest, reach = [0], np.zeros(len(spans.axes)), 1
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


class _Spans:
    """The plan, and how far cubics between its ticks are from it."""

    def __init__(self, schedule: Schedule, tick: float | None) -> None:
        self._sampler = Sampler(schedule, period=tick, columns=("pos", "vel"))
        self.tick = self._sampler.period
        self.last = self._sampler.count - 1
        trajectory = schedule.trajectory
        self.axes = trajectory.axes
        # The last tick may stand behind the end: the plan rests there.
        rest = np.zeros((1, ORDER, len(self.axes)))
        rest[0, 0] = trajectory.last
        self._coefficients = np.concatenate([trajectory.coefficients, rest])
        self._breaks = np.append(trajectory.breaks, np.inf)

    def stops(self, schedule: Schedule) -> Whole:
        """Return the ticks at which a point must stand: changes of signals, and the end."""
        times = np.array([event.time for event in schedule.events])
        changes = np.ceil(times / self.tick - TICK_TOLERANCE).astype(np.int64)
        return np.unique(np.append(changes[changes < self.last], self.last))

    def table(self, ticks: Whole, error: Array) -> PvtTable:
        """Return the points at some ticks."""
        position, velocity = self._states(ticks)
        sampled = self._sampler.at(ticks)
        return PvtTable(self.axes, self.tick, ticks, position, velocity, sampled.signals, error)

    def farthest(self, start: int, stop: int, reach: int, error: float) -> tuple[int, Array]:
        """Return the last tick up to ``stop`` whose cubic from ``start`` keeps an error, and it.

        Raises
        ------
        InputError
            Not even the next tick does.
        """
        length = stop - start
        lengths = np.unique(np.clip([1, reach // 2, reach, 2 * reach, 4 * reach], 1, length))
        best, best_error, beyond = 0, np.zeros(len(self.axes)), length + 1
        errors = np.empty((0, len(self.axes)))
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
            least = float(errors[0].max())
            message = (
                f"{error:g}; points {self.tick:g} s apart at {start * self.tick:g} s are off by "
                f"{least:g}: allow that, or take a finer tick"
            )
            raise InputError([Fault("error", message)])
        return start + best, best_error

    def _states(self, ticks: Whole) -> tuple[Array, Array]:
        """Return positions and velocities at rising ticks, rounded as they are written."""
        sampled = self._sampler.at(ticks)
        velocity = sampled.velocity
        if velocity is None:
            message = "velocities are needed"
            raise ValueError(message)
        return _written(sampled.position, "pos"), _written(velocity, "vel")

    def _errors(self, start: int, ends: Whole) -> Array:
        """Return how far the cubics from a tick to others are from the plan: (m, d)."""
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
        lengths = np.repeat(np.maximum(high - low, 0.0), len(self.axes))
        least, most, _, _ = polynomials.extremes(rows, lengths)
        size = np.maximum(-least, most).reshape(owner.size, -1)
        return np.maximum.reduceat(size, np.cumsum(counts) - counts, axis=0)


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


def _shifted(coefficients: Array, by: Array) -> Array:
    """Return polynomials of time in powers of the time since an instant: (m, 6, d)."""
    weights = np.zeros((by.size, ORDER, ORDER))
    for power in range(ORDER):
        for lower in range(power + 1):
            weights[:, lower, power] = comb(power, lower) * by ** (power - lower)
    shifted: Array = weights @ coefficients
    return shifted


def _written(values: Array, kind: str) -> Array:
    """Return values as they are read back from a table."""
    decimals = COLUMNS[kind].decimals
    whole, great = rounded(values.ravel(), decimals)
    written = whole / 10.0**decimals
    written[great] = values.ravel()[great]
    return written.reshape(values.shape)
