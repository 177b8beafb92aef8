"""How does one axis get from rest to rest within its limits?

A law solves whole arrays of moves at once: any shape of distances and of limits that broadcast
together. ``solve`` gives durations, peaks and phases of the fastest motion of that law;
``Moves.stretched`` the same law in a longer time; ``pieces`` its polynomials. Distances are mm or
degree, times s. A limit of infinity is no limit.

To add a law, write its two functions and enter them in ``LAWS``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, NamedTuple, Protocol

import numpy as np

from profileplan.motion.trajectory import ORDER

if TYPE_CHECKING:
    from collections.abc import Mapping

    from profileplan.inputs import LawName, Machine
    from profileplan.motion.polynomials import Array

DURATION_TOLERANCE = 1e-9
"""Share by which a given duration may fall short of the least one and still count as equal."""

QUINTIC_VELOCITY = 15 / 8
QUINTIC_ACCELERATION = 10 / np.sqrt(3)
QUINTIC_JERK = 60.0
"""Peaks of 10 u³ - 15 u⁴ + 6 u⁵, unit distance in unit time: at u = 1/2, (3 ± √3)/6 and 0.

Biagiotti, Melchiorri: Trajectory Planning for Automatic Machines and Robots (2008), section 2.1
(from memory; the tests find them from the polynomial).
"""


class Limits(NamedTuple):
    """What bounds the motion of an axis: arrays or floats, above 0; infinity is no limit.

    velocity [mm/s]; acceleration [mm/s²], speeding up; deceleration [mm/s²], slowing down;
    jerk [mm/s³].
    """

    velocity: Array | float
    acceleration: Array | float
    deceleration: Array | float
    jerk: Array | float

    @classmethod
    def of(cls, machine: Machine) -> Limits:
        """Return the limits of all axes of a machine, each a (d,) array."""
        return cls(*np.array([axis.limits for axis in machine.axes], dtype=np.float64).T)


@dataclass(frozen=True, eq=False)
class Moves:
    """Rest-to-rest moves of one law, each array of one shape (...).

    Parameters
    ----------
    distance : (...) array [mm]
        With its sign.
    duration : (...) array [s]
    velocity, acceleration, deceleration, jerk : (...) arrays
        Greatest magnitudes that the move attains [mm/s, mm/s², mm/s², mm/s³]. The jerk is
        infinite where the acceleration jumps.
    phases : (..., k) array [s]
        Durations of the law's phases; they sum to the duration.
    """

    distance: Array
    duration: Array
    velocity: Array
    acceleration: Array
    deceleration: Array
    jerk: Array
    phases: Array

    def stretched(self, duration: Array | float) -> Moves:
        """Return the same moves in longer times: the same positions, run through more slowly.

        Every peak falls: with c = old duration / new duration the velocity to c times, the
        acceleration to c² times and the jerk to c³ times its size. A move over no distance waits.

        Parameters
        ----------
        duration : (...) array [s]
            At least the present durations.

        Raises
        ------
        ValueError
            A duration is shorter than the move's own.

        Source: Hollerbach: Dynamic Scaling of Manipulator Trajectories (1984); from memory.
        """
        duration = np.broadcast_to(np.asarray(duration, dtype=np.float64), self.duration.shape)
        if np.any(duration < self.duration * (1 - DURATION_TOLERANCE)):
            message = f"a move that takes {self.duration} s cannot be stretched to {duration} s"
            raise ValueError(message)
        lasts = self.duration > 0
        # A time that falls short by rounding is the move's own.
        duration = np.maximum(duration, self.duration)
        c = np.divide(self.duration, duration, out=np.ones_like(duration), where=lasts)
        phases = self.phases / c[..., np.newaxis]
        middle = phases.shape[-1] // 2
        phases[..., middle] = np.where(lasts, phases[..., middle], duration)
        return replace(
            self,
            duration=duration,
            velocity=self.velocity * c,
            acceleration=self.acceleration * c**2,
            deceleration=self.deceleration * c**2,
            jerk=self.jerk * c**3,
            phases=phases,
        )


class _Solve(Protocol):
    def __call__(self, distance: Array | float, limits: Limits) -> Moves: ...


class _Pieces(Protocol):
    def __call__(self, moves: Moves) -> Array: ...


@dataclass(frozen=True)
class Law:
    """A motion law: how fast it is under given limits, and its polynomials.

    Parameters
    ----------
    solve : callable
        ``solve(distance, limits)`` → the fastest ``Moves`` of this law.
    pieces : callable
        ``pieces(moves)`` → (..., k, 6) coefficients of the k phases in ascending powers of the
        time since the phase began: the distance covered, from 0 to ``abs(distance)``.
    """

    solve: _Solve
    pieces: _Pieces


def solve_trapezoidal(distance: Array | float, limits: Limits) -> Moves:
    """Return the least-time moves: trapezoidal velocity, corners rounded where jerk is limited.

    Seven phases: jerk up, constant acceleration, jerk down, constant velocity, and the same for
    slowing down. Those that the distance leaves no room for have no duration. No motion that keeps
    the four limits is faster.

    Parameters
    ----------
    distance : (...) array [mm]
    limits : Limits
        Broadcast against the distance.

    Source: Biagiotti, Melchiorri: Trajectory Planning for Automatic Machines and Robots (2008),
    sections 3.2 and 3.4 (from memory), for equal limits; the peak velocity for separate
    deceleration is derived at ``_peak_velocity``.

    Examples
    --------
    >>> round(float(solve_trapezoidal(10.0, Limits(5.0, 10.0, 10.0, 30.0)).duration), 4)
    2.8333
    """
    distance, velocity, acceleration, deceleration, jerk = _broadcast(distance, limits)
    length = np.abs(distance)
    unreached = _peak_velocity(length, acceleration, deceleration, jerk)
    cruises = unreached > velocity
    peak = np.where(cruises, velocity, unreached)
    up, steady_up, acceleration = _ramp(peak, acceleration, jerk)
    down, steady_down, deceleration = _ramp(peak, deceleration, jerk)
    ramps = up + 0.5 * steady_up + down + 0.5 * steady_down
    cruise = np.divide(length, peak, out=np.zeros_like(peak), where=cruises)
    cruise = np.where(cruises, np.maximum(cruise - ramps, 0.0), 0.0)
    phases = np.stack([up, steady_up, up, cruise, down, steady_down, down], axis=-1)
    return Moves(
        distance=distance,
        duration=phases.sum(axis=-1),
        velocity=peak,
        acceleration=acceleration,
        deceleration=deceleration,
        jerk=np.where(length > 0, jerk, 0.0),
        phases=phases,
    )


def pieces_trapezoidal(moves: Moves) -> Array:
    """Return the polynomials of the seven phases: (..., 7, 6).

    The ramp up is computed from the start, the ramp down from the end, so that both are met
    exactly; what rounding is left over stands between them.
    """
    up, steady_up, _, _, down, steady_down, _ = np.moveaxis(moves.phases, -1, 0)
    peak, a, d = moves.velocity, moves.acceleration, moves.deceleration
    half_jerk_up, half_jerk_down = _half_jerk(a, up), _half_jerk(d, down)
    length, zero = np.abs(moves.distance), np.zeros_like(peak)
    gained, lost = 0.5 * a * up, 0.5 * d * down
    end_of_ramp = peak * (up + 0.5 * steady_up)
    start_of_stop = length - peak * (down + 0.5 * steady_down)
    phases = [
        (zero, zero, zero, half_jerk_up / 3),
        (a * up**2 / 6, gained, 0.5 * a, zero),
        (end_of_ramp - (peak - gained / 3) * up, peak - gained, 0.5 * a, -half_jerk_up / 3),
        (end_of_ramp, peak, zero, zero),
        (start_of_stop, peak, zero, -half_jerk_down / 3),
        (start_of_stop + (peak - lost / 3) * down, peak - lost, -0.5 * d, zero),
        (length - d * down**2 / 6, lost, -0.5 * d, half_jerk_down / 3),
    ]
    cubic = np.stack([np.stack(phase, axis=-1) for phase in phases], axis=-2)
    return np.concatenate([cubic, np.zeros((*cubic.shape[:-1], ORDER - 4))], axis=-1)


def solve_quintic(distance: Array | float, limits: Limits) -> Moves:
    """Return the moves of least duration that are one polynomial of degree five.

    Velocity and acceleration are zero at both ends. Its acceleration is as large speeding up as
    slowing down, so the smaller of the two limits counts.

    Parameters
    ----------
    distance : (...) array [mm]
    limits : Limits
        Broadcast against the distance.

    Source: as for ``QUINTIC_VELOCITY``.

    Examples
    --------
    >>> float(solve_quintic(0.5, Limits(1.0, 10.0, 10.0, 100.0)).duration)
    0.9375
    """
    distance, velocity, acceleration, deceleration, jerk = _broadcast(distance, limits)
    length = np.abs(distance)
    duration = np.maximum(
        QUINTIC_VELOCITY * length / velocity,
        np.sqrt(QUINTIC_ACCELERATION * length / np.minimum(acceleration, deceleration)),
    )
    duration = np.maximum(duration, np.cbrt(QUINTIC_JERK * length / jerk))
    rate = np.divide(1.0, duration, out=np.zeros_like(duration), where=duration > 0)
    peak_acceleration = QUINTIC_ACCELERATION * length * rate**2
    return Moves(
        distance=distance,
        duration=duration,
        velocity=QUINTIC_VELOCITY * length * rate,
        acceleration=peak_acceleration,
        deceleration=peak_acceleration,
        jerk=QUINTIC_JERK * length * rate**3,
        phases=np.stack([0.5 * duration, 0.5 * duration], axis=-1),
    )


def pieces_quintic(moves: Moves) -> Array:
    """Return the polynomial 10 u³ - 15 u⁴ + 6 u⁵, u = t / T, times the distance: (..., 2, 6).

    In two halves, for at the end of the whole the powers nearly cancel. With u = 1/2 + w it is
    1/2 + 15/8 w - 5 w³ + 6 w⁵.
    """
    rate = np.divide(
        1.0, moves.duration, out=np.zeros_like(moves.duration), where=moves.duration > 0
    )
    halves = np.array([[0.0, 0.0, 0.0, 10.0, -15.0, 6.0], [0.5, 1.875, 0.0, -5.0, 0.0, 6.0]])
    powers = (rate[..., np.newaxis] ** np.arange(ORDER))[..., np.newaxis, :]
    pieces: Array = np.abs(moves.distance)[..., np.newaxis, np.newaxis] * halves * powers
    return pieces


LAWS: Mapping[LawName, Law] = {
    "trapezoidal": Law(solve_trapezoidal, pieces_trapezoidal),
    "quintic": Law(solve_quintic, pieces_quintic),
}
"""The laws by the names that a cycle file knows them by."""


def _broadcast(distance: Array | float, limits: Limits) -> list[Array]:
    """Return distance and the four limits as float arrays of one shape.

    Raises
    ------
    ValueError
        A distance is not finite, or a limit not above 0.
    """
    arrays = [np.asarray(item, dtype=np.float64) for item in (distance, *limits)]
    if not np.all(np.isfinite(arrays[0])) or not all(np.all(limit > 0) for limit in arrays[1:]):
        message = "distances are finite and limits above 0 (infinity: no limit)"
        raise ValueError(message)
    return list(np.broadcast_arrays(*arrays))


def _peak_velocity(length: Array, acceleration: Array, deceleration: Array, jerk: Array) -> Array:
    """Return the peak velocity of moves that no velocity limit bounds, (...) [mm/s].

    A ramp to the velocity V under acceleration a and jerk j takes V/a + a/j where V >= a²/j (the
    acceleration is reached), else 2 √(V/j), and covers V/2 times that. The two ramps fill the
    length h. With p the smaller and q the larger of the two accelerations:

    both reached:    V² (1/p + 1/q)/2 + V (p + q)/(2j) = h, a quadratic in V;
    only p reached:  (u²/(2p)) (u + p/√j)² = h with u = √V, so u (u + p/√j) = √(2 p h);
    none reached:    V √(V/j) 2 = 2 h, so V = ∛(h² j/4).

    Roots are written so that nothing cancels.
    """
    smaller, larger = np.minimum(acceleration, deceleration), np.maximum(acceleration, deceleration)
    softness = 1.0 / jerk
    square, linear = 0.5 / smaller + 0.5 / larger, 0.5 * (smaller + larger) * softness
    reached = linear + np.sqrt(linear**2 + 4 * square * length)
    peak = np.divide(2 * length, reached, out=np.zeros_like(length), where=length > 0)
    if not np.any(softness):
        return peak
    root = np.sqrt(2 * smaller * length)
    bend = smaller * np.sqrt(softness)
    partly = np.divide(
        2 * root, bend + np.sqrt(bend**2 + 4 * root), out=np.zeros_like(length), where=length > 0
    )
    peak = np.where(peak < larger**2 * softness, partly**2, peak)
    limited = np.where(np.isfinite(jerk), jerk, 0.0)
    none = np.cbrt(0.25 * length**2 * limited)
    return np.where(peak < smaller**2 * softness, none, peak)


def _ramp(peak: Array, acceleration: Array, jerk: Array) -> tuple[Array, Array, Array]:
    """Return jerk time, time of constant acceleration, attained acceleration of ramps to a peak."""
    up = np.minimum(acceleration / jerk, np.sqrt(peak / jerk))
    bounded = np.isfinite(jerk)
    attained = np.minimum(acceleration, np.where(bounded, jerk, 0.0) * up)
    attained = np.where(bounded, attained, acceleration)
    steady = np.maximum(
        np.divide(peak, attained, out=np.zeros_like(peak), where=peak > 0) - up, 0.0
    )
    return up, steady, np.where(peak > 0, attained, 0.0)


def _half_jerk(acceleration: Array, jerk_time: Array) -> Array:
    """Return half the jerk of a phase that builds up an acceleration; 0 where it jumps."""
    rate = np.divide(1.0, jerk_time, out=np.zeros_like(jerk_time), where=jerk_time > 0)
    return 0.5 * acceleration * rate
