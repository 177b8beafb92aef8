"""Do the cubics between points keep the limits of the axes?

A drive knows no limits of the plan: what reaches it must keep them by itself. Near where the plan
changes its acceleration a cubic swings beyond it, so being near the plan is not enough.

Nothing is allowed beyond a limit but what rounding explains, and of that a hundredth of the limit
at most, where increments are coarse. Let positions be written in steps of
p and velocities in steps of v. Then those at both ends are off by half a step, and over a time h a
cubic's position by p / 2 + v h / 8, its velocity by 3 p / (2 h) + v / 2 and its acceleration by
6 p / h² + 3 v / h. A point is taken from the plan at the time that is written, so the rounding of
times to nanoseconds only makes a change of acceleration be missed by half of one: from one greatest
acceleration a to the opposite one that is as if velocities were off by a times a nanosecond more.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

if TYPE_CHECKING:
    from profileplan.motion.polynomials import Array

LIMIT_TOLERANCE = 1e-9
"""Share by which a value may pass its limit: what rounding of doubles explains."""

SHARES = (1e-5, 1e-4, 1e-3, 1e-2)
"""Shares of a limit that are put down to rounding, though it may explain more: the first where
points can be found that pass their limits by no more, then the next. What passes a limit by more
than the last does not keep it: the drive does it, whatever explains it."""

SLOW = 1e-6
"""Share of the velocity limit below which an axis counts as standing still."""

QUANTITIES = ("velocity", "acceleration", "deceleration", "travel")
"""What limits bound, in the order of the first axis of arrays here."""


class Spans(NamedTuple):
    """Cubics between pairs of points: positions and velocities, (m, c) each, and times, (m, 1) [s].

    m spans of c axes; those of second drives count too.
    """

    start: Array
    stop: Array
    begin: Array
    end: Array
    length: Array

    @property
    def powers(self) -> tuple[Array, Array]:
        """Coefficients of the second and the third power of time: (m, c) each.

        Source: de Boor: A Practical Guide to Splines (2001), chapter IV (from memory).
        """
        mean = (self.stop - self.start) / self.length
        second = (3 * mean - 2 * self.begin - self.end) / self.length
        return second, (self.begin + self.end - 2 * mean) / self.length**2


class Bounds(NamedTuple):
    """What axes may do, and in what steps they are written: (c,) each, ``most`` (3, c).

    ``most``: velocity, acceleration and deceleration; ``low`` and ``high``: ends of the travel,
    with what rounding of doubles makes of them; ``step`` of positions, ``rate_step`` of velocities,
    with what rounding of times makes of them.
    """

    most: Array
    low: Array
    high: Array
    step: Array
    rate_step: Array


class Rates(NamedTuple):
    """What cubics do at most.

    ``greatest`` velocity, acceleration and deceleration, (3, m, c); the ends of positions, (m, c).
    """

    greatest: Array
    lowest: Array
    highest: Array


class Excess(NamedTuple):
    """By which shares of limits cubics pass them: (4, m, c) each, in the order of ``QUANTITIES``.

    ``plain``: as it is, negative inside a limit, the share of its length of a travel;
    ``rounding``: how much of it rounding explains at most.
    """

    plain: Array
    rounding: Array

    def beyond(self, share: float = SHARES[-1]) -> Array:
        """Return what is left of it, if so great a share is put down to rounding at most."""
        left: Array = self.plain - np.minimum(self.rounding, share)
        return left


def rates(spans: Spans, bounds: Bounds) -> Rates:
    """Return what cubics do at most, exactly.

    Acceleration is linear in time. So it is greatest, while the axis speeds up, slows down or
    stands, at an end of the span or where the velocity passes the one below which the axis counts
    as standing: a share of its limit, or what rounding makes of a standstill. A standing axis is
    bounded by the greater of its limits.
    """
    second, third = spans.powers
    slow = SLOW * bounds.most[0] + bounds.rate_step + 3 * bounds.step / spans.length
    times = _instants(spans, (second, third), slow)
    place = spans.start + times * (spans.begin + times * (second + times * third))
    speed = spans.begin + times * (2 * second + times * 3 * third)
    push = 2 * second + 6 * third * times
    middle = 0.5 * (times[:-1] + times[1:])
    run = spans.begin + middle * (2 * second + middle * 3 * third)
    along = run * (2 * second + 6 * third * middle)
    sizes = np.maximum(np.abs(push[:-1]), np.abs(push[1:]))
    stands = np.abs(run) <= slow
    slows = np.where(stands, bounds.most[2] > bounds.most[1], along < 0)
    return Rates(
        np.stack(
            [
                np.maximum(np.abs(speed).max(axis=0), np.abs(spans.end)),
                np.where(slows, 0.0, sizes).max(axis=0),
                np.where(slows, sizes, 0.0).max(axis=0),
            ]
        ),
        np.minimum(place.min(axis=0), spans.stop),
        np.maximum(place.max(axis=0), spans.stop),
    )


def excess(spans: Spans, bounds: Bounds) -> Excess:
    """Return by how much cubics pass limits, and what rounding explains of it."""
    found, length = rates(spans, bounds), spans.length
    travel = bounds.high - bounds.low
    out = np.maximum(bounds.low - found.lowest, found.highest - bounds.high) / travel
    off = (bounds.step / 2 + bounds.rate_step * length / 8) / travel
    most = bounds.most[:, np.newaxis]
    speed = 1.5 * bounds.step / length + bounds.rate_step / 2
    rate = 6 * bounds.step / length**2 + 3 * bounds.rate_step / length
    return Excess(
        np.concatenate([found.greatest / most - 1, out[np.newaxis]]),
        np.concatenate([np.stack([speed, rate, rate]) / most + LIMIT_TOLERANCE, off[np.newaxis]]),
    )


def _instants(spans: Spans, powers: tuple[Array, Array], slow: Array) -> Array:
    """Return the rising times at which cubics may turn from one case to the other: (k, m, c)."""
    second, third = powers
    ends = [np.zeros_like(second), np.broadcast_to(spans.length, second.shape)]
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        inner = [-second / (3 * third)]
        for level in (0.0, slow, -slow):
            # Press et al.: Numerical Recipes (2007), section 5.6 (from memory).
            rest = spans.begin - level
            root = np.sqrt(second**2 - 3 * third * rest)
            both = -(second + np.copysign(root, second))
            inner += [both / (3 * third), rest / both]
    times = np.stack([*ends, *inner])
    instants: Array = np.sort(
        np.clip(np.where(np.isfinite(times), times, 0.0), 0.0, spans.length), axis=0
    )
    return instants
