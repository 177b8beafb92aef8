"""How do motions of any length enter a picture, without losing a peak?

Short ones go in as they are, as polynomials: a picture evaluates them as finely as it is looked at.
Long ones go in as the least and the greatest value in each of many equal stretches of time, which
are the exact extremes of the polynomials.
"""

from __future__ import annotations

import base64
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from profileplan.motion import polynomials
from profileplan.motion.trajectory import Trajectory

if TYPE_CHECKING:
    from profileplan.motion.polynomials import Array, Indices

MOST_NUMBERS = 300_000
"""Coefficients that go in as they are: 3.2 MB of text."""

STRETCHES = 8_000
"""Stretches of a long motion: more than the columns of any screen."""

QUANTITIES = ("position", "velocity", "acceleration", "jerk")
"""What curves show of an axis, in the order of the derivatives."""


AT_LIMIT = 0.999
"""Share of a limit from which on it counts as reached."""

AT_A_LIMIT = f"at a limit ({100 * AT_LIMIT:g} % of it or more)"
"""What is said of such a stretch of a curve."""

STANDING = 1e-9
"""Share of an axis's greatest speed below which it stands: it neither speeds up nor slows down."""


@dataclass(frozen=True, eq=False)
class Envelope:
    """The least and the greatest values of a motion in stretches of time that follow each other.

    Parameters
    ----------
    times : (k + 1,) array [s]
        Where stretches begin and end.
    low, high : (k, 4, d) arrays
        Of position, velocity, acceleration and jerk of every axis.
    """

    times: Array
    low: Array
    high: Array


def envelope(trajectory: Trajectory, stretches: int = STRETCHES) -> Envelope:
    """Return the extremes of a motion in equal stretches of time, exactly.

    Parameters
    ----------
    trajectory : Trajectory
    stretches : int
        At least 1.
    """
    times = np.linspace(0.0, trajectory.duration, stretches + 1)
    cuts = np.unique(np.concatenate([times, trajectory.breaks]))
    cut = _cut(trajectory, cuts)
    first = np.searchsorted(cuts, times[:-1])
    lows, highs = [], []
    for order in range(len(QUANTITIES)):
        rows = cut.coefficients.transpose(0, 2, 1)
        for _ in range(order):
            rows = polynomials.derivative(rows)
        flat = polynomials.trimmed(rows.reshape(-1, rows.shape[-1]))
        low, high, _, _ = polynomials.extremes(flat, np.repeat(cut.durations, len(cut.axes)))
        lows.append(np.minimum.reduceat(low.reshape(-1, len(cut.axes)), first))
        highs.append(np.maximum.reduceat(high.reshape(-1, len(cut.axes)), first))
    return Envelope(times, np.stack(lows, axis=1), np.stack(highs, axis=1))


def packed(trajectory: Trajectory) -> dict[str, object]:
    """Return a motion as plain values for a page.

    Returns
    -------
    dict
        Of a short one "breaks", (n + 1,), and "coefficients", (n, powers, d), 8 bytes a number; of
        a long one "times", (k + 1,), and "low" and "high", (k, 4, d), 4 bytes a number. Each is
        little-endian, as base64.
    """
    if not is_long(trajectory):
        powers = _powers(trajectory)
        own = trajectory.coefficients[:, :powers]
        return {
            "powers": powers,
            "breaks": text(trajectory.breaks),
            "coefficients": text(own),
        }
    found = envelope(trajectory)
    return {
        "times": text(found.times),
        "low": text(found.low, "<f4"),
        "high": text(found.high, "<f4"),
    }


def is_long(trajectory: Trajectory) -> bool:
    """Tell whether a motion is too long to go in as it is."""
    pieces, _, axes = trajectory.coefficients.shape
    return bool(pieces * _powers(trajectory) * axes > MOST_NUMBERS)


def text(values: Array | Indices, kind: str = "<f8") -> str:
    """Return an array's numbers in base64 (RFC 4648), row by row."""
    return base64.b64encode(np.ascontiguousarray(values, dtype=kind).tobytes()).decode("ascii")


def thinned(times: Array, values: Array, stretches: int = STRETCHES) -> tuple[Array, Array]:
    """Return fewer samples of a curve: the least and the greatest of every stretch, and both ends.

    Parameters
    ----------
    times : (m,) array [s]
        Ascending.
    values : (m,) array
    stretches : int
        Of equally many samples.

    Returns
    -------
    times, values : (k,) arrays
        As they were if there are no more than two of a stretch.
    """
    if times.size <= 2 * stretches:
        return times, values
    first = np.linspace(0, times.size, stretches, endpoint=False).astype(np.intp)
    stretch = np.repeat(np.arange(stretches), np.diff(np.append(first, times.size)))
    by_value = np.lexsort((values, stretch))
    lowest, highest = by_value[first], by_value[np.append(first[1:], times.size) - 1]
    kept = np.unique(np.concatenate([lowest, highest, [0, times.size - 1]]))
    return times[kept], values[kept]


def _powers(trajectory: Trajectory) -> int:
    """Return how many coefficients a piece needs."""
    used = np.flatnonzero(np.any(trajectory.coefficients != 0, axis=(0, 2)))
    return int(used[-1]) + 1 if used.size else 1


def _cut(trajectory: Trajectory, cuts: Array) -> Trajectory:
    """Return the same motion in pieces that begin at each of the times but the last."""
    starts = cuts[:-1]
    pieces = np.searchsorted(trajectory.breaks, starts, side="right") - 1
    pieces = np.clip(pieces, 0, trajectory.durations.size - 1)
    shifted = polynomials.shifted(
        trajectory.coefficients[pieces], starts - trajectory.breaks[pieces]
    )
    return Trajectory(trajectory.axes, np.diff(cuts), shifted)
