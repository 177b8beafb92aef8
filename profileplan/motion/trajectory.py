"""Where is each axis at any time, and how large do its motion's derivatives become?

A ``Trajectory`` is polynomial pieces in time for all axes of a machine, of degree five at most. It
is exact: values, derivatives and extremes come from the polynomials, never from samples. Arrays
are (n, d): pieces or times first, axes last. Units are those of the axes: mm or degree, and s.
"""

from __future__ import annotations

from bisect import bisect_right
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property
from itertools import accumulate, pairwise
from math import comb
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.motion import polynomials

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.motion.polynomials import Array

ORDER = 6
"""Coefficients of a piece: degree five and below."""

VELOCITY_FLOOR = 1e-10
"""Share of an axis's greatest speed below which it counts as standing, when its acceleration is
called speeding up or slowing down: rounding decides the direction of a slower motion."""


class Peak(NamedTuple):
    """The greatest value of a quantity on every axis, and when it is first taken.

    value : (d,) array, never negative; time : (d,) array [s].
    """

    value: Array
    time: Array


class Peaks(NamedTuple):
    """Greatest magnitudes on every axis over a whole trajectory.

    velocity [mm/s], acceleration [mm/s²] while it does not oppose the velocity, deceleration
    [mm/s²] while it does, jerk [mm/s³] inside the pieces (a jump of the acceleration between two
    pieces is no jerk: ``Trajectory.jumps(2)`` finds it). For a rotary axis deg for mm.
    """

    velocity: Peak
    acceleration: Peak
    deceleration: Peak
    jerk: Peak


@dataclass(frozen=True, eq=False)
class Trajectory:
    """Piecewise polynomial motion of d axes.

    Parameters
    ----------
    axes : tuple of str
        Names of the d axes.
    durations : (n,) array [s]
        How long each piece lasts, at least 0; the first begins at time 0. Kept rather than the
        times of the breaks, whose differences are rounded the more the later they are.
    coefficients : (n, 6, d) array
        Ascending powers of the time since the piece's own beginning [mm, mm/s, ...].

    Examples
    --------
    >>> rise = Trajectory(("x",), np.array([2.0]), np.eye(6)[[2]].reshape(1, 6, 1))
    >>> rise.at([0.0, 1.0, 2.0]).ravel()
    array([0., 1., 4.])
    >>> rise.at([1.0], 1).item()
    2.0
    """

    axes: tuple[str, ...]
    durations: Array
    coefficients: Array

    def __post_init__(self) -> None:
        needed = (self.durations.size, ORDER, len(self.axes))
        if not needed[0] or self.coefficients.shape != needed:
            message = f"coefficients of shape {needed} needed, not {self.coefficients.shape}"
            raise ValueError(message)

    @cached_property
    def breaks(self) -> Array:
        """Times at which the pieces begin and end, from 0 on: (n + 1,) [s]."""
        return np.concatenate([[0.0], np.cumsum(self.durations)])

    @property
    def duration(self) -> float:
        """Time from beginning to end [s]."""
        return float(self.breaks[-1])

    @cached_property
    def first(self) -> Array:
        """Position at the beginning, (d,) [mm]."""
        position: Array = self.coefficients[0, 0]
        return position

    @cached_property
    def last(self) -> Array:
        """Position at the end, (d,) [mm]."""
        position: Array = self._at_ends_of_pieces(0)[-1]
        return position

    def at(self, times: Sequence[float] | Array, derivative: int = 0) -> Array:
        """Return position, or a derivative of it, at given times.

        Before its beginning and from its end on the motion is at rest: position held, derivatives
        zero. At a break the piece that begins there counts.

        Parameters
        ----------
        times : (m,) array [s]
        derivative : int
            0 position, 1 velocity, 2 acceleration, 3 jerk, ...

        Returns
        -------
        (m, d) array
        """
        times = np.asarray(times, dtype=np.float64)
        pieces = np.searchsorted(self.breaks, times, side="right") - 1
        pieces = np.clip(pieces, 0, self.durations.size - 1)
        local = np.clip(times - self.breaks[pieces], 0.0, self.durations[pieces])
        coefficients = self._derivative(derivative)
        value = np.zeros((times.size, len(self.axes)))
        for power in range(coefficients.shape[1] - 1, -1, -1):
            value = value * local[:, np.newaxis] + coefficients[pieces, power]
        if derivative:
            value[(times < 0) | (times >= self.duration)] = 0.0
        return value

    def extremes(self, derivative: int = 0) -> tuple[Peak, Peak]:
        """Return the least and the greatest value of every axis with its time, exactly.

        Parameters
        ----------
        derivative : int
            0 position, 1 velocity, 2 acceleration, 3 jerk.

        Returns
        -------
        low, high : Peak
            ``value`` (d,) and ``time`` (d,) [s].
        """
        count, axes = self.coefficients.shape[0], len(self.axes)
        rows = self._rows(derivative)
        low, high, low_at, high_at = polynomials.extremes(rows, self._row_lengths)
        starts = self.breaks[:-1, np.newaxis]
        low, high = low.reshape(count, axes), high.reshape(count, axes)
        low_at = low_at.reshape(count, axes) + starts
        high_at = high_at.reshape(count, axes) + starts
        columns = np.arange(axes)
        lowest, highest = low.argmin(axis=0), high.argmax(axis=0)
        return (
            Peak(low[lowest, columns], low_at[lowest, columns]),
            Peak(high[highest, columns], high_at[highest, columns]),
        )

    @cached_property
    def peaks(self) -> Peaks:
        """Greatest velocity, acceleration, deceleration and jerk of every axis, exactly.

        The acceleration is bounded by another limit where it opposes the velocity, so every piece
        is cut where velocity or acceleration change sign and each part is counted where it belongs.
        """
        velocity = self._magnitude(1)
        acceleration, deceleration = self._speeding_and_slowing(VELOCITY_FLOOR * velocity.value)
        return Peaks(velocity, acceleration, deceleration, self._magnitude(3))

    def between(self, first: float, last: float) -> Trajectory:
        """Return the pieces between the breaks nearest to two times [s], at least one."""
        breaks = self.breaks
        begin = min(int(np.abs(breaks - first).argmin()), breaks.size - 2)
        end = max(int(np.abs(breaks - last).argmin()), begin + 1)
        return Trajectory(self.axes, self.durations[begin:end], self.coefficients[begin:end])

    def jumps(self, derivative: int) -> Peak:
        """Return the greatest jump at a break on every axis: 0 in position, 1 in velocity, ...

        The motion is at rest before its beginning and after its end, so a velocity there is a jump.
        """
        ends = self._at_ends_of_pieces(derivative)
        starts = self._derivative(derivative)[:, 0]
        outside = np.zeros((1, len(self.axes)))
        before = np.concatenate([starts[:1] if derivative == 0 else outside, ends])
        after = np.concatenate([starts, ends[-1:] if derivative == 0 else outside])
        jump = np.abs(after - before)
        worst = jump.argmax(axis=0)
        return Peak(jump[worst, np.arange(len(self.axes))], self.breaks[worst])

    def speeds(self, members: Sequence[bool]) -> Peak:
        """Return the greatest speed along the path of some axes in every piece, exactly.

        Parameters
        ----------
        members : (d,) sequence of bool
            The axes whose velocities count: the linear ones.

        Returns
        -------
        Peak
            ``value`` (n,) [mm/s] and ``time`` (n,) [s].
        """
        velocity = polynomials.trimmed(self._derivative(1).transpose(0, 2, 1))
        width = velocity.shape[-1]
        squared = np.zeros((velocity.shape[0], 2 * width - 1))
        for axis in np.flatnonzero(members):
            for power in range(width):
                squared[:, power : power + width] += (
                    velocity[:, axis, power : power + 1] * velocity[:, axis]
                )
        _, high, _, high_at = polynomials.extremes(squared, self.durations)
        return Peak(np.sqrt(np.maximum(high, 0.0)), self.breaks[:-1] + high_at)

    def hulls(self) -> Array:
        """Return the Bezier points of every piece, whose hull holds it: (n, k, d) [mm].

        The first and the last are its ends.

        Source: Farin: Curves and Surfaces for CAGD (2002), chapter 5 (from memory).
        """
        coefficients = polynomials.trimmed(self.coefficients.transpose(0, 2, 1))
        # Of degree three at least: a parabola's own middle point lies farther out.
        degree = max(coefficients.shape[-1] - 1, 3)
        scaled = coefficients * self.durations[:, np.newaxis, np.newaxis] ** np.arange(
            coefficients.shape[-1]
        )
        weights = np.array(
            [
                [comb(point, power) / comb(degree, power) for power in range(scaled.shape[-1])]
                for point in range(degree + 1)
            ]
        )
        hulls: Array = np.einsum("kp,ndp->nkd", weights, scaled)
        return hulls

    def stretched(self, duration: float) -> Trajectory:
        """Return the same positions in another time.

        With c = old duration / new duration velocities are multiplied by c, accelerations by c²,
        jerks by c³.

        Source: Hollerbach: Dynamic Scaling of Manipulator Trajectories (1984); from memory.
        """
        c = self.duration / duration
        powers = np.power(c, np.arange(ORDER))
        return Trajectory(self.axes, self.durations / c, self.coefficients * powers[:, np.newaxis])

    @classmethod
    def rest(cls, axes: tuple[str, ...], position: Array, duration: float = 0.0) -> Trajectory:
        """Return a stay at a position, (d,) [mm], for a time [s]."""
        coefficients = np.zeros((1, ORDER, len(axes)))
        coefficients[0, 0] = position
        return cls(axes, np.array([duration]), coefficients)

    @classmethod
    def chain(cls, parts: Sequence[Trajectory]) -> Trajectory:
        """Return trajectories of the same axes played one after the other.

        Parts that take no time are left out, unless nothing else is there.
        """
        lasting = [part for part in parts if part.duration > 0] or list(parts[:1])
        return cls(
            lasting[0].axes,
            np.concatenate([part.durations for part in lasting]),
            np.concatenate([part.coefficients for part in lasting]),
        )

    @classmethod
    def stack(cls, parts: Sequence[Trajectory]) -> Trajectory:
        """Return one trajectory of all axes of trajectories that are played at the same time.

        All begin together; one that ends before the others rests where it ended. Breaks are the
        union of theirs, so every piece is one polynomial on every axis. Their differences are
        taken from exact sums: a short phase late in a long motion would lose its last digits.
        """
        if len(parts) == 1:
            return parts[0]
        sums = [list(accumulate(map(Fraction, part.durations.tolist()))) for part in parts]
        breaks = sorted({Fraction(0), *(time for own in sums for time in own)})
        if len(breaks) == 1:
            breaks *= 2
        durations = np.array([float(after - before) for before, after in pairwise(breaks)])
        coefficients = [
            part._expanded(breaks[:-1], [Fraction(0), *own])  # noqa: SLF001 - the same class
            for part, own in zip(parts, sums, strict=True)
        ]
        axes = tuple(axis for part in parts for axis in part.axes)
        return cls(axes, durations, np.concatenate(coefficients, axis=-1))

    def _expanded(self, starts: Sequence[Fraction], own: Sequence[Fraction]) -> Array:
        """Return the coefficients about other times, given the exact times of the own breaks."""
        pieces = np.array([bisect_right(own, start) - 1 for start in starts])
        inside = pieces < self.durations.size
        offsets = [float(start - own[piece]) for start, piece in zip(starts, pieces, strict=True)]
        pieces = np.minimum(pieces, self.durations.size - 1)
        expanded = polynomials.shifted(self.coefficients[pieces], np.where(inside, offsets, 0.0))
        expanded[~inside, 0] = self.last
        expanded[~inside, 1:] = 0.0
        return expanded

    def _derivative(self, order: int) -> Array:
        """Return the coefficients of a derivative: (n, 6 - order, d), at least one power."""
        coefficients = self.coefficients
        for _ in range(min(order, ORDER - 1)):
            powers = np.arange(1.0, coefficients.shape[1])
            coefficients = coefficients[:, 1:] * powers[:, np.newaxis]
        return coefficients if order < ORDER else np.zeros_like(coefficients)

    def _rows(self, derivative: int) -> Array:
        """Return a derivative's polynomials one a row, piece by piece, axis by axis: (n d, k)."""
        by_axis = self._derivative(derivative).transpose(0, 2, 1)
        return polynomials.trimmed(by_axis.reshape(-1, by_axis.shape[-1]))

    @cached_property
    def _row_lengths(self) -> Array:
        """Durations of the pieces in the order of ``_rows``: (n d,) [s]."""
        return np.repeat(self.durations, len(self.axes))

    def _at_ends_of_pieces(self, derivative: int) -> Array:
        """Return the value just before the end of each piece: (n, d)."""
        by_axis = self._derivative(derivative).transpose(0, 2, 1)
        return polynomials.evaluate(by_axis, self.durations[:, np.newaxis])

    def _magnitude(self, derivative: int) -> Peak:
        """Return the greatest magnitude of a derivative on every axis."""
        low, high = self.extremes(derivative)
        downward = -low.value > high.value
        return Peak(
            np.where(downward, -low.value, high.value), np.where(downward, low.time, high.time)
        )

    def _speeding_and_slowing(self, floor: Array) -> tuple[Peak, Peak]:
        """Return peak magnitudes of the acceleration along and against the velocity.

        Parameters
        ----------
        floor : (d,) array [mm/s]
            Slower than this an axis counts as standing.
        """
        velocity, acceleration = self._rows(1), self._rows(2)
        lengths = self._row_lengths
        ends = np.stack([np.zeros_like(lengths), lengths], axis=-1)
        inner = [
            polynomials.roots(rows, lengths)
            for rows in (velocity, acceleration, polynomials.derivative(acceleration))
        ]
        cuts = np.sort(np.concatenate([ends, *inner], axis=-1), axis=-1)
        # NaN sorts last; a cut at the end of the piece adds an empty part.
        cuts = np.where(np.isnan(cuts), lengths[:, np.newaxis], cuts)
        middles = 0.5 * (cuts[:, :-1] + cuts[:, 1:])
        velocity_there = polynomials.evaluate(velocity[:, np.newaxis, :], middles)
        acceleration_there = polynomials.evaluate(acceleration[:, np.newaxis, :], middles)
        sizes = np.abs(polynomials.evaluate(acceleration[:, np.newaxis, :], cuts))
        size = np.maximum(sizes[:, :-1], sizes[:, 1:])
        at = np.where(sizes[:, :-1] >= sizes[:, 1:], cuts[:, :-1], cuts[:, 1:])
        at += np.repeat(self.breaks[:-1], len(self.axes))[:, np.newaxis]
        moving = np.abs(velocity_there) > np.tile(floor, self.durations.size)[:, np.newaxis]
        slowing = velocity_there * acceleration_there < 0
        return (
            self._greatest(np.where(moving & ~slowing, size, 0.0), at),
            self._greatest(np.where(moving & slowing, size, 0.0), at),
        )

    def _greatest(self, size: Array, at: Array) -> Peak:
        """Return the greatest of sizes (n d, k) on every axis, and the time of it."""
        count, axes = self.durations.size, len(self.axes)
        by_axis = size.reshape(count, axes, -1).swapaxes(0, 1).reshape(axes, -1)
        times = at.reshape(count, axes, -1).swapaxes(0, 1).reshape(axes, -1)
        worst = by_axis.argmax(axis=-1)
        return Peak(by_axis[np.arange(axes), worst], times[np.arange(axes), worst])
