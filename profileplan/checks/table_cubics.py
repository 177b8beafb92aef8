"""What does a drive do between points of positions and velocities?

It follows the cubic that has both at either end. Its acceleration is linear in time, so that all
extremes are at roots of polynomials of degree two at most, and nothing between points is missed.

Limits are judged as they stand: nothing is allowed but what rounding of positions and velocities
explains. No more is unavoidable. A cubic from break to break of a plan of limited jerk is the plan
itself; and one that has a peak of a smoother acceleration in its middle stays below it, for over a
span h its acceleration is low by a twenty-fourth of h² times the fourth derivative there, and high
by a twelfth only at its ends. Rounding of times is not allowed for, but for a nanosecond, the
finest that times are written to: a point is where the table says at the time that the table says,
whatever motion it was taken from.

Source: de Boor: A Practical Guide to Splines (2001), chapter IV, for the cubics (from memory).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.checks.findings import FLOAT_ROUNDING
from profileplan.checks.table_extremes import Doubt, Places

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.motion.polynomials import Array

LONG = 1e6
"""Time [s] that is taken for a step backward in time, so that nothing is told of it."""

NANOSECOND = 1e-9
"""The finest that times are written to [s]: by half of it a change of acceleration is missed."""

PIECES = 16
"""Straight lines in place of a cubic, where the clearance is judged."""


class Points(NamedTuple):
    """Positions and velocities at points, (n,), and the times between them, (n - 1,) [s].

    ``slow`` is the velocity below which an axis counts as standing still, (n - 1,).
    """

    position: Array
    velocity: Array
    spans: Array
    slow: Array


class Cubics(NamedTuple):
    """What cubics do at most: each (n - 1,).

    Lowest and highest position; greatest velocity; greatest acceleration where the axis speeds up,
    slows down and stands; jerk; accelerations at the begin and at the end of each.
    """

    lowest: Array
    highest: Array
    velocity: Array
    speeding: Array
    slowing: Array
    standing: Array
    jerk: Array
    begin: Array
    end: Array


def cubics(points: Points) -> Cubics:
    """Return what the cubics between points do at most.

    Between the roots of the acceleration and of the velocity less ± ``slow`` an axis speeds up,
    slows down or stands, and its acceleration is greatest at either end.
    """
    start, stop = points.velocity[:-1], points.velocity[1:]
    span = points.spans
    mean = np.diff(points.position) / span
    second = (3 * mean - 2 * start - stop) / span
    third = (start + stop - 2 * mean) / span**2
    instants = [np.zeros(span.size), span]
    with np.errstate(divide="ignore", invalid="ignore"):
        instants.append(-second / (3 * third))
        for level in (np.zeros(span.size), points.slow, -points.slow):
            instants += _roots(3 * third, 2 * second, start - level)
    times = np.stack(instants)
    times = np.sort(np.clip(np.where(np.isfinite(times), times, 0.0), 0.0, span), axis=0)
    place = points.position[:-1] + times * (start + times * (second + times * third))
    speed = start + times * (2 * second + times * 3 * third)
    acceleration = 2 * second + 6 * third * times
    middle = 0.5 * (times[:-1] + times[1:])
    runs = start + middle * (2 * second + middle * 3 * third)
    pushes = 2 * second + 6 * third * middle
    greater = np.maximum(np.abs(acceleration[:-1]), np.abs(acceleration[1:]))
    stands = np.abs(runs) <= points.slow
    slows = ~stands & (runs * pushes < 0)
    return Cubics(
        np.minimum(place.min(axis=0), points.position[1:]),
        np.maximum(place.max(axis=0), points.position[1:]),
        np.maximum(np.abs(speed).max(axis=0), np.abs(stop)),
        np.where(stands | slows, 0.0, greater).max(axis=0),
        np.where(slows, greater, 0.0).max(axis=0),
        np.where(stands, greater, 0.0).max(axis=0),
        np.abs(6 * third),
        2 * second,
        2 * second + 6 * third * span,
    )


def doubts(
    points: Points, times: Array, columns: tuple[int, int], *, most: float
) -> tuple[Doubt, ...]:
    """Return what rounding makes of the positions of cubics and their first three derivatives.

    Let both positions be off by p and both velocities by v, over a time h. Then the cubic is off by
    p + v h / 4 at most, since the weights of the velocities are u (1 - u)² and u² (1 - u); its
    derivatives by 3 p / h + v, 12 p / h² + 6 v / h and 24 p / h³ + 12 v / h². A change from an
    acceleration a to its opposite that is missed by half a nanosecond adds a times a nanosecond to
    the velocity.

    Parameters
    ----------
    points : Points
    times : (n,) array [s]
    columns : (int, int)
        Those of position and velocity.
    most : float
        The greatest acceleration of the axis.
    """
    span = points.spans
    far = np.maximum(np.abs(points.position[:-1]), np.abs(points.position[1:]))
    fast = np.maximum(np.abs(points.velocity[:-1]), np.abs(points.velocity[1:]))
    late = np.spacing(np.abs(times[1:]))
    place = FLOAT_ROUNDING * (np.spacing(far) + late * fast)
    speed = FLOAT_ROUNDING * np.spacing(fast) + NANOSECOND * most
    weights = [
        (np.ones(span.size), span / 4),
        (3 / span, np.ones(span.size)),
        (12 / span**2, 6 / span),
        (24 / span**3, 12 / span**2),
    ]
    return tuple(
        Doubt(columns, (first / 2, second / 2), first * place + second * speed)
        for first, second in weights
    )


def refined(
    values: Array, spans: Array, places: Places, *, held: Sequence[tuple[int, int]]
) -> tuple[Array, Array, Places]:
    """Return rows with points of their cubics between them, and their times and places.

    Parameters
    ----------
    values : (n, k) array
    spans : (n - 1,) array [s]
    places : Places
    held : sequence of (int, int)
        The columns of position and velocity, axis by axis; others keep the row before.
    """
    if not spans.size:
        return values, spans, places
    share = (np.arange(PIECES) + 1)[:, np.newaxis] / PIECES
    rest = 1 - share
    more = np.repeat(values[1:], PIECES, axis=0)
    # Of points that do not follow each other nothing is known but where they are.
    time = np.where(spans < LONG, spans, 0.0)
    for position, velocity in held:
        begin, end = values[:-1, position], values[1:, position]
        start, stop = values[:-1, velocity] * time, values[1:, velocity] * time
        cubic = (
            begin * rest**2 * (1 + 2 * share)
            + end * share**2 * (3 - 2 * share)
            + share * rest * (start * rest - stop * share)
        )
        more[:, position] = cubic.T.ravel()
    rows = np.concatenate([[0], np.repeat(np.arange(1, len(values)), PIECES)])
    return (
        np.concatenate([values[:1], more]),
        np.repeat(spans / PIECES, PIECES),
        Places(places.lines[rows], places.time[rows]),
    )


def _roots(square: Array, linear: Array, constant: Array) -> list[Array]:
    """Return both roots of polynomials of degree two; NaN or infinity of those that there are not.

    Source: Press et al.: Numerical Recipes (2007), section 5.6 (from memory).
    """
    root = np.sqrt(linear**2 - 4 * square * constant)
    sum_of_both = -0.5 * (linear + np.copysign(root, linear))
    return [sum_of_both / square, constant / sum_of_both]
