"""Which curves show how an axis moves, and how near it comes to its limits?

A curve is one quantity of one axis over the time of the cycle. Its values hold the exact extremes
of every piece of the motion, or of every stretch of a long one, so that no peak is lost. Units are
mm or degree, and s.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.motion import polynomials
from profileplan.report.curves import AT_LIMIT, QUANTITIES, STANDING, envelope
from profileplan.report.loads import load_curves

if TYPE_CHECKING:
    from profileplan.inputs import Axis
    from profileplan.motion.polynomials import Array, Flags, Indices
    from profileplan.motion.trajectory import Trajectory
    from profileplan.report.loads import LoadCurve
    from profileplan.results import PlannedCycle

SAMPLES = 900
"""About as many values of a curve: more than paper shows. More pieces are a long motion."""


AT_END = 1e-6
"""Share of the travel within which a position is at its end."""


class Curve(NamedTuple):
    """One quantity of an axis over time.

    title : what it is; unit : of its values, such as "mm/s".
    times : (m,) array [s], ascending, one twice where the value jumps; values : (m,) array.
    low, high : (m,) arrays, between which the values are allowed; infinite where nothing limits.
    held : (m,) array, where a limit is reached.
    """

    title: str
    unit: str
    times: Array
    values: Array
    low: Array
    high: Array
    held: Flags


def curves_of(planned: PlannedCycle) -> tuple[tuple[Curve, ...], ...]:
    """Return the curves of every axis: position to jerk, and its loads where they are known.

    Parameters
    ----------
    planned : PlannedCycle
    """
    trajectory, loads = planned.trajectory, load_curves(planned)
    samples = _long(trajectory) if trajectory.durations.size > SAMPLES else _short(trajectory)
    return tuple(
        (
            *(_curve(axis, title, samples[index][k]) for k, title in enumerate(QUANTITIES)),
            *(_load(own) for own in loads if own.axis == index),
        )
        for index, axis in enumerate(planned.job.machine.axes)
    )


def reached(values: Array, low: Array, high: Array) -> Flags:
    """Tell where values are at a limit, of which one is below 0 and the other above.

    Parameters
    ----------
    values, low, high : (m,) arrays
    """
    return np.asarray((values >= AT_LIMIT * high) | (values <= AT_LIMIT * low))


class _Samples(NamedTuple):
    """A quantity: times, values there, least and greatest velocity about each; all (m,)."""

    times: Array
    values: Array
    slowest: Array
    fastest: Array


def _short(trajectory: Trajectory) -> list[list[_Samples]]:
    """Return samples of every axis and quantity: evenly in each piece, its ends and extremes."""
    durations = trajectory.durations
    step = max(trajectory.duration, np.finfo(np.float64).tiny) / SAMPLES
    counts = np.ceil(durations / step).astype(np.intp) + 1
    pieces = np.repeat(np.arange(durations.size), counts)
    turn = np.arange(pieces.size) - np.repeat(np.cumsum(counts) - counts, counts)
    local = turn / np.maximum(counts[pieces] - 1, 1) * durations[pieces]
    own = [trajectory.coefficients.transpose(2, 0, 1)]
    for _ in QUANTITIES[1:]:
        own.append(polynomials.derivative(own[-1]))
    at = pieces, local, durations
    return [
        [_sampled(trajectory.breaks, every[axis], own[1][axis], at) for every in own]
        for axis in range(len(trajectory.axes))
    ]


def _sampled(
    breaks: Array, quantity: Array, velocity: Array, at: tuple[Indices, Array, Array]
) -> _Samples:
    """Return samples of polynomials, (n, k), at given times in given pieces, and at extremes."""
    pieces, local, durations = at
    _, _, low_at, high_at = polynomials.extremes(polynomials.trimmed(quantity), durations)
    every = np.arange(durations.size)
    pieces = np.concatenate([pieces, every, every])
    local = np.concatenate([local, low_at, high_at])
    order = np.lexsort((local, pieces))
    pieces, local = pieces[order], local[order]
    moving = polynomials.evaluate(velocity[pieces], local)
    values = polynomials.evaluate(quantity[pieces], local)
    return _Samples(breaks[pieces] + local, values, moving, moving)


def _long(trajectory: Trajectory) -> list[list[_Samples]]:
    """Return the extremes in equal stretches, in the order in which the motion passes them."""
    found = envelope(trajectory, SAMPLES)
    width = np.diff(found.times)
    times = np.stack([found.times[:-1] + 0.25 * width, found.times[:-1] + 0.75 * width], axis=1)

    def samples(order: int, axis: int) -> _Samples:
        low, high = found.low[:, order, axis], found.high[:, order, axis]
        falls = np.gradient(0.5 * (low + high)) < 0
        pairs = np.stack([np.where(falls, high, low), np.where(falls, low, high)], axis=1)
        slowest, fastest = (np.repeat(own[:, 1, axis], 2) for own in (found.low, found.high))
        return _Samples(times.ravel(), pairs.ravel(), slowest, fastest)

    return [
        [samples(order, axis) for order in range(len(QUANTITIES))]
        for axis in range(len(trajectory.axes))
    ]


def _curve(axis: Axis, title: str, samples: _Samples) -> Curve:
    """Return a curve with what limits it."""
    unit = axis.unit + ("", "/s", "/s²", "/s³")[QUANTITIES.index(title)]
    values = samples.values
    if title == "position":
        least, most = axis.travel
        # A share of the travel would mark what is far from its ends.
        near = AT_END * (most - least)
        low, high = np.full_like(values, least), np.full_like(values, most)
        held = np.asarray((values >= most - near) | (values <= least + near))
        return Curve(title, unit, samples.times, values, low, high, held)
    if title == "acceleration":
        low, high = _bounds(axis, samples)
    else:
        limit = axis.limits.velocity if title == "velocity" else axis.limits.jerk
        low, high = np.full_like(values, -limit), np.full_like(values, limit)
    return Curve(title, unit, samples.times, values, low, high, reached(values, low, high))


def _load(own: LoadCurve) -> Curve:
    """Return a load with what limits it."""
    limit = np.inf if own.limit is None else own.limit
    low, high = np.full_like(own.values, -limit), np.full_like(own.values, limit)
    held = reached(own.values, low, high)
    return Curve(own.name, own.unit, own.times, own.values, low, high, held)


def _bounds(axis: Axis, samples: _Samples) -> tuple[Array, Array]:
    """Return what bounds an acceleration below and above: another limit where it slows down."""
    floor = STANDING * max(np.abs(samples.slowest).max(), np.abs(samples.fastest).max())
    onward, back = samples.fastest > floor, samples.slowest < -floor
    gain, loss = axis.limits.acceleration, axis.limits.deceleration
    both = max(gain, loss)
    high = np.where(onward & back, both, np.where(back, loss, gain))
    low = np.where(onward & back, both, np.where(onward, loss, gain))
    return -low, high
