"""Which forces and torques does a motion take?

Of each axis by itself, as the axes of a Cartesian machine do not act on each other: its mass is
constant, nothing turns with it (no Coriolis or centrifugal terms), and gravity is constant.

    force = (mass + payload) · acceleration + weight + friction + damping · velocity
    torque = force · travel a radian · loss + inertia · angular acceleration + drag torque

Weight acts on the up axis alone, less its counterbalance. Friction opposes the velocity; at
standstill there is none. The loss is 1 / efficiency while the motor drives, the efficiency while
the load drives the motor, and 1 at standstill, where the motor bears the weight: a brake would
spare it that. All are positive in the direction in which the position rises. Of a rotary axis the
moment about the axis stands for the force, and rad for m.

Source: Newton's second law with Coulomb's and viscous friction, in the form in which handbooks
choose motors for feed axes (from memory; worked examples: tests/published/axis-loads.toml).
Standard gravity: 3rd General Conference on Weights and Measures (1901).

Inside a piece of a trajectory force and torque are polynomials of time between the roots of
velocity and force, so extremes come from roots and means from exact integrals, never from samples.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal, NamedTuple, TypeAlias

import numpy as np

from profileplan.inputs import Payload
from profileplan.motion import polynomials
from profileplan.motion.trajectory import ORDER, VELOCITY_FLOOR

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.inputs import Axis, Machine, Mechanics
    from profileplan.motion.polynomials import Array, Flags, Indices
    from profileplan.motion.schedule import Schedule

Loads: TypeAlias = "dict[str, Array]"
"""Name of an axis → its forces or torques."""

GRAVITY = 9.80665
"""Standard acceleration of gravity [m/s²], exact by definition."""

GAUSS_POINTS = 5
"""Points of the quadrature: exact to degree 9, and the square of a torque has degree 8."""

PER_MINUTE = 60 / (2 * math.pi)
"""Turns a minute in a radian a second."""


class Instant(NamedTuple):
    """A value, when it is taken [s from the beginning of the cycle], and in which step."""

    value: float
    time: float
    step: str


@dataclass(frozen=True)
class AxisLoad:
    """What a cycle takes of one axis, at its worst and on average.

    The average is the root of the mean square over the whole cycle, standstill included. Where the
    axis has no lead, what concerns the motor is None; a rotary axis has no force.

    Parameters
    ----------
    axis : str
    force : (Instant, Instant), optional
        Least and greatest force at the slide [N].
    rms_force : float, optional [N]
    torque : (Instant, Instant), optional
        Least and greatest torque at the motor's shaft [N·m].
    rms_torque : float, optional [N·m]
    speed : Instant, optional
        Greatest speed of the motor, either way [1/min].
    power : (Instant, Instant), optional
        Least and greatest power at the motor's shaft [W]; negative where the load drives it.
    """

    axis: str
    force: tuple[Instant, Instant] | None
    rms_force: float | None
    torque: tuple[Instant, Instant] | None
    rms_torque: float | None
    speed: Instant | None
    power: tuple[Instant, Instant] | None

    @property
    def peak_force(self) -> Instant | None:
        """The force of the greatest magnitude, with its sign."""
        return None if self.force is None else greater(*self.force)

    @property
    def peak_torque(self) -> Instant | None:
        """The torque of the greatest magnitude, with its sign."""
        return None if self.torque is None else greater(*self.torque)


def greater(low: Instant, high: Instant) -> Instant:
    """Return the one of the greater magnitude; the second of equals."""
    return low if -low.value > high.value else high


def loads(schedule: Schedule) -> tuple[AxisLoad, ...]:
    """Return what a cycle takes of every axis that has mechanics, exactly.

    Parameters
    ----------
    schedule : Schedule

    Returns
    -------
    tuple of AxisLoad
        In file order. Extremes at a jump are those of either side; before and after each step, and
        when the cycle is over, the axes stand and bear their weight.
    """
    machine = schedule.job.machine
    motion = _Motion(schedule)
    models = [_Model.of(machine, axis) for axis in machine.axes]
    return tuple(_axis_load(motion, model) for model in models if model is not None)


def forces(schedule: Schedule, times: Sequence[float] | Array) -> Loads:
    """Return the forces at the slides at given times.

    Parameters
    ----------
    schedule : Schedule
    times : (m,) array [s]
        From the beginning of the cycle, in any order. At a break the piece that begins there
        counts; from the end on the axes stand.

    Returns
    -------
    mapping
        Name of a linear axis with mechanics → (m,) array [N].
    """
    return _sampled(schedule, times, "force")


def torques(schedule: Schedule, times: Sequence[float] | Array) -> Loads:
    """Return the torques at the motors' shafts at given times.

    Parameters
    ----------
    schedule, times
        As for ``forces``.

    Returns
    -------
    mapping
        Name of an axis whose mechanics have a lead → (m,) array [N·m].
    """
    return _sampled(schedule, times, "torque")


class LoadSampler:
    """Works out forces and torques from sampled motions.

    Parameters
    ----------
    schedule : Schedule
    quantities : sequence of str
        Of "force" and "torque".
    """

    def __init__(self, schedule: Schedule, quantities: Sequence[str]) -> None:
        machine = schedule.job.machine
        borne = _borne(schedule)
        low, high = schedule.trajectory.extremes(1)
        floors = VELOCITY_FLOOR * np.maximum(-low.value, high.value)
        self._axes = [
            _Sampled(model, column, float(floors[column]), borne.by(model))
            for column, axis in enumerate(machine.axes)
            if (model := _Model.of(machine, axis))
        ]
        self._quantities = tuple(quantities)

    def at(self, pieces: Indices, *, velocity: Array, acceleration: Array) -> dict[str, Loads]:
        """Return the loads of a sampled motion: quantity → axis → (m,) array [N or N·m].

        Parameters
        ----------
        pieces : (m,) array
            Indices of the pieces of the schedule's trajectory; their number where it is over.
        velocity, acceleration : (m, d) arrays [mm/s, mm/s²]
        """
        found: dict[str, Loads] = {quantity: {} for quantity in self._quantities}
        for axis in self._axes:
            force, torque = axis.loads(pieces, velocity, acceleration)
            for quantity, values in (("force", force), ("torque", torque)):
                if quantity in found and axis.model.axis.has_loads(quantity):
                    found[quantity][axis.model.axis.name] = values
        return found


class _Sampled(NamedTuple):
    """An axis to sample.

    Its model, its column, the velocity up to which it stands [mm/s], and its payload in each piece.
    """

    model: _Model
    column: int
    floor: float
    payload: Array

    def loads(self, pieces: Indices, velocity: Array, acceleration: Array) -> tuple[Array, Array]:
        """Return force and torque, (m,) [N, N·m]."""
        model, own = self.model, velocity[:, self.column]
        rates = (own * model.metres, acceleration[:, self.column] * model.metres)
        direction = np.where(np.abs(own) > self.floor, np.sign(own), 0.0)
        payload = self.payload[pieces]
        force = model.inertial(*rates, payload) + model.constant(direction, payload)
        torque = (
            force * model.loss(force * direction) * model.travel_a_radian
            + model.rotor(rates[1])
            + model.mechanics.drag_torque * direction
        )
        return force, torque


def _sampled(
    schedule: Schedule, times: Sequence[float] | Array, quantity: Literal["force", "torque"]
) -> Loads:
    """Return the loads of every axis that has them, at times of the schedule [s]."""
    times = np.asarray(times, dtype=np.float64)
    motion = schedule.trajectory
    pieces = np.clip(
        np.searchsorted(motion.breaks, times, side="right") - 1, 0, motion.durations.size
    )
    sampler = LoadSampler(schedule, (quantity,))
    return sampler.at(pieces, velocity=motion.at(times, 1), acceleration=motion.at(times, 2))[
        quantity
    ]


class _Model(NamedTuple):
    """One axis: its mechanics in SI units.

    ``metres`` is what a unit of its position is [m/mm or rad/deg], ``weight`` the force of gravity
    on it without payload, and ``heavy`` what a kg of payload adds to it [N, N/kg]; ``rubs`` what a
    kg adds to its friction [N/kg]; ``reach`` the travel in a radian of the motor [m/rad].
    """

    axis: Axis
    mechanics: Mechanics
    metres: float
    weight: float
    heavy: float
    rubs: float
    reach: float | None

    @classmethod
    def of(cls, machine: Machine, axis: Axis) -> _Model | None:
        """Return the model of an axis, if it has mechanics."""
        mechanics = axis.mechanics
        if mechanics is None:
            return None
        metres = math.radians(1.0) if axis.kind == "rotary" else 1e-3
        weight = heavy = rubs = 0.0
        if axis.name == machine.up_axis:
            heavy = machine.up_sign * GRAVITY
            weight = heavy * (mechanics.mass or 0.0) - machine.up_sign * mechanics.counterbalance
        elif axis.kind == "linear":
            rubs = mechanics.friction * GRAVITY
        turn = axis.motor_turn
        reach = None if turn is None else turn * metres / (2 * math.pi)
        return cls(axis, mechanics, metres, weight, heavy, rubs, reach)

    @property
    def mass(self) -> float:
        """What it moves without payload [kg or kg·m²]."""
        return (self.mechanics.mass or 0.0) + (self.mechanics.load_inertia or 0.0)

    def constant(self, direction: Array, payload: Array) -> Array:
        """Return the part of the force that rates do not change [N or N·m]."""
        moved = self.mass + payload
        friction = (self.mechanics.drag + self.rubs * moved) * direction
        weight: Array = self.weight + self.heavy * payload
        return weight + friction

    def inertial(self, velocity: Array, acceleration: Array, payload: Array) -> Array:
        """Return the part of the force that follows from rates [m/s or rad/s, and per s]."""
        force: Array = (self.mass + payload) * acceleration + self.mechanics.damping * velocity
        return force

    def loss(self, power: Array) -> Array:
        """Return the factor by which the transmission changes the torque of the load.

        power : of the load, of which the sign alone counts.
        """
        driven = np.where(power > 0, 1 / self.mechanics.efficiency, 1.0)
        factor: Array = np.where(power < 0, self.mechanics.efficiency, driven)
        return factor

    def rotor(self, acceleration: Array) -> Array:
        """Return the torque that what turns takes [N·m], from m/s² or rad/s²."""
        torque: Array = self.mechanics.inertia / self.travel_a_radian * acceleration
        return torque

    @property
    def travel_a_radian(self) -> float:
        """Travel in a radian of the motor, where there is a lead [m or rad]."""
        return math.nan if self.reach is None else self.reach


class _Borne(NamedTuple):
    """What hangs at the tool in each piece, (n + 1,): mass [kg], inertia about the tool [kg·m²].

    The last of each counts when the motion is over.
    """

    mass: Array
    inertia: Array

    def by(self, model: _Model) -> Array:
        """Return what counts on an axis."""
        if not model.mechanics.carries_payload:
            return np.zeros_like(self.mass)
        return self.inertia if model.axis.kind == "rotary" else self.mass


def _borne(schedule: Schedule) -> _Borne:
    """Return the payload in each piece of a schedule's trajectory."""
    steps = schedule.steps
    lasting = {id(step) for step in steps if step.duration > 0} or {id(steps[0])}
    payload = Payload()
    masses: list[float] = []
    inertias: list[float] = []
    for asked, step in zip(schedule.job.cycle.steps, steps, strict=True):
        if isinstance(asked, Payload):
            payload = asked
        if id(step) in lasting:
            count = step.trajectory.durations.size
            masses += [payload.mass] * count
            inertias += [payload.mass * _spread(payload)] * count
    return _Borne(
        np.array([*masses, payload.mass]), np.array([*inertias, payload.mass * _spread(payload)])
    )


def _spread(payload: Payload) -> float:
    """Return the inertia of a kg of an even plate of the payload's footprint [m²].

    About the tool point, on an axis that stands upright on the plate. Without a footprint the
    payload is a point there.

    Source: polar moments of polygon and circle, Green's theorem; textbook result, from memory.
    """
    if payload.radius is not None:
        return 0.5 * payload.radius**2 * 1e-6
    if payload.outline is None:
        return 0.0
    corner = np.array(payload.outline, dtype=np.float64)
    after = np.roll(corner, -1, axis=0)
    cross = corner[:, 0] * after[:, 1] - corner[:, 1] * after[:, 0]
    squares = (corner**2 + corner * after + after**2).sum(axis=1)
    return float((cross * squares).sum() / cross.sum()) / 6 * 1e-6


class _Motion:
    """The motion of a whole schedule, with what hangs at the tool in each piece."""

    def __init__(self, schedule: Schedule) -> None:
        trajectory = schedule.trajectory
        self.schedule = schedule
        self.columns = schedule.job.machine.axis_names
        self.lengths = trajectory.durations
        self.breaks = trajectory.breaks
        self.duration = trajectory.duration
        self.coefficients = trajectory.coefficients
        self.borne = _borne(schedule)
        lasting = [step for step in schedule.steps if step.duration > 0] or schedule.steps[:1]
        # Behind the last piece the axes stand in the last step, with what hangs at the tool then.
        self.names = [*(step.name for step in lasting), schedule.steps[-1].name]
        self.owners = np.repeat(
            np.arange(len(self.names)), [*(step.trajectory.durations.size for step in lasting), 1]
        )

    def instant(self, value: float, at: float, piece: int) -> Instant:
        """Return a value taken at a time [s] of a piece."""
        time = float(self.breaks[piece]) + at
        return Instant(value, time, self.names[int(self.owners[piece])])


class _Parts(NamedTuple):
    """Parts of pieces in which the formulas keep their case, k of them.

    pieces (k,); from ``start`` to ``end`` (k,) in the time of the piece [s]; ``direction`` (k,) of
    the motion, 1, 0 or -1; coefficients (k, 5) of velocity and acceleration [m or rad, and s].
    """

    pieces: Indices
    start: Array
    end: Array
    direction: Array
    velocity: Array
    acceleration: Array

    def split(self, rows: Array) -> tuple[_Parts, Indices]:
        """Return the parts cut at the roots of polynomials (k, m), and which part each was of."""
        found = polynomials.roots(rows, self.end)
        found[~(found > self.start[:, np.newaxis])] = np.nan
        cuts = np.concatenate([self.start[:, np.newaxis], found, self.end[:, np.newaxis]], axis=-1)
        # NaN would sort last: it becomes a part of no length at the end, which is left out.
        cuts = np.sort(np.where(np.isnan(cuts), self.end[:, np.newaxis], cuts), axis=-1)
        wide = cuts[:, 1:] > cuts[:, :-1]
        wide[:, 0] |= self.start == self.end  # a standstill between steps
        owners, places = np.nonzero(wide)
        kept = self.take(owners)
        return kept._replace(start=cuts[owners, places], end=cuts[owners, places + 1]), owners

    def take(self, which: Indices | Flags) -> _Parts:
        """Return some of the parts."""
        return _Parts(
            *(self.pieces[which], self.start[which], self.end[which], self.direction[which]),
            *(self.velocity[which], self.acceleration[which]),
        )

    def joined(self, others: _Parts) -> _Parts:
        """Return these parts and others."""
        return _Parts(
            np.concatenate([self.pieces, others.pieces]),
            np.concatenate([self.start, others.start]),
            np.concatenate([self.end, others.end]),
            np.concatenate([self.direction, others.direction]),
            np.concatenate([self.velocity, others.velocity]),
            np.concatenate([self.acceleration, others.acceleration]),
        )

    def middle(self, rows: Array) -> Array:
        """Return the values of polynomials (k, m) in the middle of each part."""
        return polynomials.evaluate(rows, 0.5 * (self.start + self.end))


def _axis_load(motion: _Motion, model: _Model) -> AxisLoad:
    """Return what a cycle takes of an axis."""
    parts = _parts_of_one_direction(motion, model)
    force = _force(motion, model, parts)
    parts, owners = parts.split(force)
    force = force[owners]
    linear = model.axis.kind == "linear"
    torque = speed = None
    if model.reach is not None:
        factor = model.loss(parts.middle(force) * parts.direction)
        torque = force * factor[:, np.newaxis] * model.reach + model.rotor(parts.acceleration)
        torque[:, 0] += model.mechanics.drag_torque * parts.direction
        speed = parts.velocity / model.reach
    return AxisLoad(
        axis=model.axis.name,
        force=_extremes(motion, parts, force) if linear else None,
        rms_force=_root_mean_square(motion, parts, force) if linear else None,
        torque=None if torque is None else _extremes(motion, parts, torque),
        rms_torque=None if torque is None else _root_mean_square(motion, parts, torque),
        speed=None if speed is None else _fastest(motion, parts, speed),
        power=None
        if torque is None or speed is None
        else _extremes(motion, parts, _product(torque, speed)),
    )


def _parts_of_one_direction(motion: _Motion, model: _Model) -> _Parts:
    """Return the pieces of an axis's motion cut where it turns round."""
    column = motion.columns.index(model.axis.name)
    velocity = polynomials.derivative(motion.coefficients[:, :, column]) * model.metres
    acceleration = np.zeros_like(velocity)
    acceleration[:, :-1] = polynomials.derivative(velocity)
    count = motion.lengths.size
    whole = _Parts(
        *(np.arange(count), np.zeros(count), motion.lengths, np.zeros(count)),
        *(velocity, acceleration),
    )
    parts, _ = whole.take(motion.lengths > 0).split(velocity[motion.lengths > 0])
    there = parts.middle(parts.velocity)
    low, high, _, _ = polynomials.extremes(velocity, motion.lengths)
    floor = VELOCITY_FLOOR * max(-float(low.min()), float(high.max()))
    moves = np.abs(there) > floor
    # Between a root and an end that rounding keeps apart nothing moves, though the piece does.
    in_motion = np.zeros(count, dtype=np.bool_)
    in_motion[parts.pieces[moves]] = True
    parts = parts._replace(direction=np.where(moves, np.sign(there), 0.0))
    return parts.take(moves | ~in_motion[parts.pieces]).joined(_standstills(motion))


def _standstills(motion: _Motion) -> _Parts:
    """Return the instants before and after each step and after the cycle, when all axes stand."""
    firsts = np.flatnonzero(np.diff(motion.owners, prepend=-1))
    lasts = firsts[1:] - 1
    pieces = np.concatenate([firsts, lasts])
    at = np.concatenate([np.zeros(firsts.size), motion.lengths[lasts]])
    still = np.zeros((pieces.size, ORDER - 1))
    return _Parts(pieces, at, at, np.zeros(pieces.size), still, still)


def _force(motion: _Motion, model: _Model, parts: _Parts) -> Array:
    """Return the coefficients of the force in each part, (k, 5) [N or N·m]."""
    payload = motion.borne.by(model)[parts.pieces]
    force = model.inertial(parts.velocity, parts.acceleration, payload[:, np.newaxis])
    force[:, 0] += model.constant(parts.direction, payload)
    return force


def _extremes(motion: _Motion, parts: _Parts, rows: Array) -> tuple[Instant, Instant]:
    """Return the least and the greatest value of polynomials over all parts."""
    turning = polynomials.roots(polynomials.derivative(rows), parts.end)
    inside = turning > parts.start[:, np.newaxis]
    turning = np.where(inside, turning, parts.start[:, np.newaxis])
    at = np.concatenate([parts.start[:, np.newaxis], turning, parts.end[:, np.newaxis]], axis=-1)
    values = polynomials.evaluate(rows[:, np.newaxis, :], at)
    found = []
    for flat in (int(values.argmin()), int(values.argmax())):
        part, place = divmod(flat, at.shape[1])
        value, time = float(values[part, place]), float(at[part, place])
        found.append(motion.instant(value, time, int(parts.pieces[part])))
    return found[0], found[1]


def _fastest(motion: _Motion, parts: _Parts, speed: Array) -> Instant:
    """Return the greatest magnitude of a motor's speed [1/min], given in rad/s."""
    fastest = greater(*_extremes(motion, parts, speed))
    return fastest._replace(value=abs(fastest.value) * PER_MINUTE)


def _root_mean_square(motion: _Motion, parts: _Parts, rows: Array) -> float:
    """Return the root of the mean square of polynomials over the whole motion.

    By Gauss's quadrature, which is exact here. Source: Press et al.: Numerical Recipes (2007),
    section 4.6 (from memory).
    """
    points, weights = np.polynomial.legendre.leggauss(GAUSS_POINTS)
    half = 0.5 * (parts.end - parts.start)
    if not motion.duration:
        half += 0.5 / half.size  # what takes no time counts evenly
    at = (0.5 * (parts.start + parts.end))[:, np.newaxis] + half[:, np.newaxis] * points
    squares = polynomials.evaluate(rows[:, np.newaxis, :], at) ** 2
    return math.sqrt(float((squares @ weights * half).sum()) / (motion.duration or 1.0))


def _product(one: Array, other: Array) -> Array:
    """Return the coefficients of products of polynomials: (k, m), (k, n) → (k, m + n - 1)."""
    width = other.shape[1]
    product = np.zeros((one.shape[0], one.shape[1] + width - 1))
    for power in range(one.shape[1]):
        product[:, power : power + width] += one[:, power : power + 1] * other
    return product
