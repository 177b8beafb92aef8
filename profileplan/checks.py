"""Does a finished motion keep every requirement?

Judges a schedule by the exact extremes of its polynomials, and a setpoint table by its differences,
without knowing what made either: nothing here comes from the laws or from the planner. A limit
holds when it is exceeded by no more than rounding explains (``LIMIT_TOLERANCE``).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.geometry.corridor import tubes
from profileplan.inputs import Line, PathStep, Payload, Signal, Wait

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from profileplan.geometry.corridor import Followed
    from profileplan.inputs import Axis, Machine, Step
    from profileplan.motion.polynomials import Array
    from profileplan.motion.schedule import Schedule, ScheduledStep
    from profileplan.motion.trajectory import Peak, Trajectory
    from profileplan.setpoints import SetpointTable

LIMIT_TOLERANCE = 1e-9
"""Share by which a value may pass its limit: what rounding explains."""

ARRIVAL_TOLERANCE = 1e-9
"""Greatest distance [mm or deg] from a commanded position that counts as arrival, and greatest jump
of a position between two pieces."""

PATH_TOLERANCE = 1e-6
"""Distance [mm or deg] by which a path's tolerance may be passed."""

REST_TOLERANCE = 1e-9
"""Time [s] by which a rest at a point may be too short."""

TIME_ROUNDING = 8 * np.finfo(np.float64).eps
"""Rounding of the time of a break, as a share of the duration of its step."""

TICK_TOLERANCE = 1e-9
"""Greatest deviation [s] of a row's time from an even period."""

FLOAT_ROUNDING = 8.0
"""Rounding of a computed position or time, in units of its last binary digit."""

QUANTITIES = {"velocity": 1, "acceleration": 2, "deceleration": 2, "jerk": 3}
"""The limits of an axis, in the order of its record, and the derivatives that they bound."""


SHARED = (*QUANTITIES, "speed", "cycle time", "tolerance")
"""Checks whose limits are used up in part."""


@dataclass(frozen=True)
class Finding:
    """One requirement, and what the motion makes of it.

    Parameters
    ----------
    check : str
        What is required: "travel, low end", "velocity", "arrival", "cycle time", ...
    axis : str, optional
        The axis it concerns; None for the motion as a whole.
    value, limit : float
        The worst value of the motion, and what is allowed, in ``unit``.
    margin : float
        How far the value stays from the limit, in ``unit``; negative where it passes it.
    unit : str
        Unit of all three.
    ok : bool
        Whether the requirement is met.
    rounding : float
        Share of the value that rounding can explain, in ``unit``: it is allowed for.
    time : float, optional
        When the worst value occurs, from the beginning of the cycle [s].
    step : str, optional
        The step in which it occurs.
    """

    check: str
    axis: str | None
    value: float
    limit: float
    margin: float
    unit: str
    ok: bool
    rounding: float = 0.0
    time: float | None = None
    step: str | None = None

    @property
    def use(self) -> float | None:
        """Share of the limit that is used, 1 at the limit; None where a share means nothing."""
        return self.value / self.limit if self.check in SHARED and self.limit > 0 else None

    @property
    def decided(self) -> bool:
        """Whether rounding leaves enough of the value to judge it by."""
        return self.rounding < self.limit or not self.rounding


def check(schedule: Schedule) -> tuple[Finding, ...]:
    """Judge every requirement on a schedule, exactly and at every instant.

    Travel, velocity, acceleration, deceleration and jerk of every axis; no jump in position,
    velocity or, where the jerk is limited, acceleration, within steps and between them; arrival
    where the cycle says; speed along the path and duration where they are given; the target.

    Parameters
    ----------
    schedule : Schedule

    Returns
    -------
    tuple of Finding
        The worst case of each requirement: axis by axis in file order, then the whole.
    """
    by_axis = zip(
        *(_travel(schedule), _limits(schedule), _continuity(schedule), _arrival(schedule)),
        strict=True,
    )
    findings = [finding for groups in by_axis for group in groups for finding in group]
    return (*findings, *_paths(schedule), *_times(schedule))


def check_table(table: SetpointTable, machine: Machine) -> tuple[Finding, ...]:
    """Judge the positions of a setpoint table by their differences.

    The machine stands before the first row and after the last one. If a motion keeps its limits,
    then so do the first, second and third difference of its positions, divided by the period, its
    square and its cube: each is a mean of the derivative over the rows that it spans. So a
    difference beyond a limit proves that every motion through these positions breaks it.

    Parameters
    ----------
    table : SetpointTable
    machine : Machine

    Returns
    -------
    tuple of Finding
        Axis by axis: travel, velocity, acceleration, deceleration and jerk; then the period.
        Where rounding alone could break a limit the finding is not ``decided``.
    """
    steps = np.diff(table.time)
    period = float(np.median(steps)) if steps.size else machine.setpoints.period
    findings: list[Finding] = []
    for column, axis in enumerate(machine.axes):
        findings += _table_travel(table, axis, table.position[:, column])
        findings += _differences(table, axis, table.position[:, column], period)
    uneven = np.abs(steps - period)
    if uneven.size:
        worst = int(uneven.argmax())
        findings.append(
            _upper(
                _Worst(float(uneven[worst]), float(table.time[worst + 1])),
                "even period",
                TICK_TOLERANCE,
                "s",
            )
        )
    return tuple(findings)


class _Worst(NamedTuple):
    """The worst value of a quantity: when [s from the beginning of the cycle], in which step."""

    value: float
    time: float | None = None
    step: str | None = None


def _worse(*cases: _Worst) -> _Worst:
    """Return the case of the greatest value; the first of equals."""
    return max(cases, key=lambda case: case.value)


def _upper(worst: _Worst, check: str, limit: float, unit: str, axis: Axis | None = None) -> Finding:
    """Return the finding that a value stays at or below a limit."""
    return Finding(
        check=check,
        axis=axis.name if axis else None,
        value=worst.value,
        limit=float(limit),
        margin=float(limit) - worst.value,
        unit=unit,
        ok=bool(worst.value <= limit * (1 + LIMIT_TOLERANCE)),
        time=worst.time,
        step=worst.step,
    )


def _nearness(axis: Axis) -> float:
    """Return how near a position counts as reached [mm or deg]: far from 0 none is finer."""
    spacing = float(np.spacing(max(map(abs, axis.travel))))
    return max(ARRIVAL_TOLERANCE, FLOAT_ROUNDING * spacing)


def _rate_unit(axis: Axis, derivative: int) -> str:
    """Return the unit of a derivative of an axis's position."""
    return axis.unit + ("", "/s", "/s²", "/s³")[derivative]


def _worst(schedule: Schedule, peaks: Sequence[Peak]) -> list[_Worst]:
    """Return the greatest of the steps' peaks on every axis."""
    values = np.stack([peak.value for peak in peaks])
    found = []
    for column, index in enumerate(values.argmax(axis=0)):
        step = schedule.steps[index]
        time = step.start + float(peaks[index].time[column])
        found.append(_Worst(float(values[index, column]), time, step.name))
    return found


def _limits(schedule: Schedule) -> Iterator[list[Finding]]:
    """Judge velocity, acceleration, deceleration and jerk, axis by axis."""
    by_quantity = [
        _worst(schedule, [step.trajectory.peaks[row] for step in schedule.steps])
        for row in range(len(QUANTITIES))
    ]
    for column, axis in enumerate(schedule.job.machine.axes):
        yield [
            _upper(by_quantity[row][column], quantity, limit, _rate_unit(axis, order), axis)
            for row, (quantity, order) in enumerate(QUANTITIES.items())
            if np.isfinite(limit := axis.limits[row])
        ]


def _travel(schedule: Schedule) -> Iterator[list[Finding]]:
    """Judge both ends of the travel, axis by axis."""
    extremes = [step.trajectory.extremes() for step in schedule.steps]
    lows = _worst(schedule, [low._replace(value=-low.value) for low, _ in extremes])
    highs = _worst(schedule, [high for _, high in extremes])
    for low, high, axis in zip(lows, highs, schedule.job.machine.axes, strict=True):
        yield _travel_ends(axis, low._replace(value=-low.value), high)


def _travel_ends(axis: Axis, low: _Worst, high: _Worst) -> list[Finding]:
    """Return the findings that an axis stays between the ends of its travel."""
    upper = _upper(high, "travel, high end", axis.travel[1], axis.unit, axis)
    lower = _upper(low, "travel, low end", axis.travel[0], axis.unit, axis)
    ends = [replace(lower, margin=low.value - axis.travel[0]), upper]
    return [replace(end, ok=end.margin >= -_nearness(axis)) for end in ends]


def _continuity(schedule: Schedule) -> Iterator[list[Finding]]:
    """Judge jumps in position, in velocity and, with a jerk limit, in acceleration.

    A trajectory rests before its beginning and after its end, so a step that begins or ends with a
    velocity counts as a jump; positions are compared from step to step.
    """
    jumps = [
        _worst(schedule, [step.trajectory.jumps(order) for step in schedule.steps])
        for order in range(3)
    ]
    between = _gaps(schedule)
    longest = max(step.duration for step in schedule.steps)
    for column, axis in enumerate(schedule.job.machine.axes):
        position = _worse(jumps[0][column], between[column])
        findings = [_upper(position, "position jump", _nearness(axis), axis.unit, axis)]
        names = ("velocity jump", "acceleration jump")
        for order, name in enumerate(names[: 2 if np.isfinite(axis.limits.jerk) else 1], start=1):
            # Limits of this derivative and of the next, which rounding of a time multiplies.
            own, following = axis.limits[order - 1], max(axis.limits[order : order + 2])
            if order == 2:
                own, following = max(axis.limits[1:3]), axis.limits.jerk
            allowed = LIMIT_TOLERANCE * own + TIME_ROUNDING * longest * following
            unit = _rate_unit(axis, order)
            findings.append(_upper(jumps[order][column], name, allowed, unit, axis))
        yield findings


def _gaps(schedule: Schedule) -> list[_Worst]:
    """Return the greatest jump in position from a step to the next, on every axis."""
    steps = schedule.steps
    gaps = [_Worst(0.0)] * len(schedule.job.machine.axes)
    for before, after in pairwise(steps):
        gap = np.abs(after.trajectory.first - before.trajectory.last)
        gaps = [
            _worse(worst, _Worst(float(here), after.start, after.name))
            for worst, here in zip(gaps, gap, strict=True)
        ]
    return gaps


def _arrival(schedule: Schedule) -> Iterator[list[Finding]]:
    """Judge the ends of all steps, and the start, by the positions that the cycle commands."""
    commanded = np.array(schedule.job.positions())
    steps = schedule.steps
    reached = np.stack([steps[0].trajectory.first, *(step.trajectory.last for step in steps)])
    missed = np.abs(reached - commanded)
    for column, axis in enumerate(schedule.job.machine.axes):
        index = int(missed[:, column].argmax())
        step = steps[max(index - 1, 0)]
        time = step.end if index else 0.0
        worst = _Worst(float(missed[index, column]), time, step.name)
        yield [_upper(worst, "arrival", _nearness(axis), axis.unit, axis)]


def _paths(schedule: Schedule) -> Iterator[Finding]:
    """Judge points and speeds of straight lines and paths, the worst of all steps."""
    missed: list[_Worst] = []
    speeds: list[tuple[float, _Worst, float]] = []
    rests: list[_Worst] = []
    linear = schedule.job.machine.linear
    reached = max(map(_nearness, schedule.job.machine.axes))
    for index, asked in enumerate(schedule.job.cycle.steps):
        if not isinstance(asked, Line | PathStep):
            continue
        step = schedule.steps[index]
        points, bounds = _points(schedule, index, asked)
        if isinstance(asked, PathStep) and asked.tolerance:
            followed = _followed(schedule, index, asked, bounds)
            yield _tolerances(step, asked, followed)
            bound = bounds[followed.region]
        else:
            distance, leads_to = _passes(step.trajectory, points, reached)
            missed.append(_Worst(distance, step.end, step.name))
            bound = bounds[np.minimum(leads_to, len(points) - 1)]
        if isinstance(asked, PathStep) and any(point.wait for point in asked.points):
            rests.append(_Worst(_rest_missing(step, asked, points, reached), step.end, step.name))
        speed = step.trajectory.speeds(linear)
        share = speed.value / bound
        worst = int(share.argmax())
        if np.isfinite(bound[worst]):
            time = step.start + float(speed.time[worst])
            found = _Worst(float(speed.value[worst]), time, step.name)
            speeds.append((float(share[worst]), found, float(bound[worst])))
    if rests:
        yield _upper(_worse(*rests), "rest at points", REST_TOLERANCE, "s")
    if missed:
        yield _upper(_worse(*missed), "waypoints", reached, "mm or deg")
    if speeds:
        _, found, limit = max(speeds, key=lambda speed: speed[0])
        yield _upper(found, "speed", limit, "mm/s")


def _rest_missing(step: ScheduledStep, asked: PathStep, points: Array, reached: float) -> float:
    """Return the most that a path's motion lacks of a rest at a point that asks for one [s]."""
    motion = step.trajectory
    still = np.abs(motion.coefficients[:, 1:]).max(axis=(1, 2)) == 0
    at = motion.coefficients[:, 0]
    lacking, piece = 0.0, 0
    for point, wanted in zip(points, asked.points, strict=True):
        if not wanted.wait:
            continue
        rest = 0.0
        while piece < still.size and rest < wanted.wait - REST_TOLERANCE:
            if still[piece] and np.abs(at[piece] - point).max() <= reached:
                rest += float(motion.durations[piece])
            piece += 1
        lacking = max(lacking, wanted.wait - rest)
    return lacking


def _near_points(asked: PathStep) -> Array:
    """Return how near a path's motion passes its inner points: (m - 1,) [mm]."""
    own = [np.inf if point.tolerance is None else point.tolerance for point in asked.points[:-1]]
    return np.clip(own, PATH_TOLERANCE, asked.tolerance)


def _followed(schedule: Schedule, index: int, asked: PathStep, speeds: Array) -> Followed:
    """Follow a path step's motion through the tubes round its segments, at speeds allowed there."""
    start = schedule.job.positions()[index]
    points = np.array([start, *schedule.job.points(index)])
    # A point that stands where the last one did makes a segment of no length: a ball.
    corridor = tubes(
        points,
        tolerance=asked.tolerance,
        linear=schedule.job.machine.linear,
        angle_tolerance=asked.angle_tolerance,
        gate_tolerance=_near_points(asked),
    )
    trajectory = schedule.steps[index].trajectory
    found = trajectory.speeds(schedule.job.machine.linear).value
    return corridor.follow(trajectory.hulls(), (found, speeds))


def _tolerances(step: ScheduledStep, asked: PathStep, followed: Followed) -> Finding:
    """Judge a path's tolerance both ways: motion to path, and the path's corners to the motion.

    Rotary axes count by their own tolerance, and points by theirs: the share that is used of it.
    """
    worst = _Worst(followed.out * asked.tolerance, step.end, step.name)
    finding = _upper(worst, "tolerance", asked.tolerance, "mm")
    return replace(finding, ok=finding.margin >= -PATH_TOLERANCE)


def _points(schedule: Schedule, index: int, asked: Line | PathStep) -> tuple[Array, Array]:
    """Return the points that a step leads through, (m, d), and the speeds allowed, (m,)."""
    bound = np.inf if asked.speed is None else asked.speed
    points = np.array(schedule.job.points(index))
    if isinstance(asked, Line):
        return points, np.array([bound])
    own = [np.inf if point.speed is None else point.speed for point in asked.points]
    return points, np.minimum(own, bound)


def _passes(trajectory: Trajectory, points: Array, near: float) -> tuple[float, Array]:
    """Follow a motion past points, in order, that it must reach at ends of its pieces.

    Returns
    -------
    distance : float [mm or deg]
        From the point farthest from the motion's ends of pieces, in the order passed.
    leads_to : (n,) array
        Index of the point that each piece leads to; len(points) after the last.
    """
    ends = trajectory.at(trajectory.breaks)
    leads_to = np.empty(len(ends) - 1, dtype=int)
    reached, distance = 0, 0.0
    for index, end in enumerate(ends):
        while reached < len(points):
            away = float(np.abs(end - points[reached]).max())
            if away > near:
                break
            reached, distance = reached + 1, max(distance, away)
        if index < leads_to.size:
            leads_to[index] = reached
    if reached < len(points):
        away = np.abs(ends - points[reached]).max(axis=-1).min()
        distance = max(distance, float(away), 2 * near)
    return distance, leads_to


def _times(schedule: Schedule) -> Iterator[Finding]:
    """Judge durations that were asked for, and the cycle time by its target."""
    asked = [
        (abs(step.duration - time), step)
        for step, time in zip(schedule.steps, map(_asked, schedule.job.cycle.steps), strict=True)
        if time is not None
    ]
    if asked:
        off, step = max(asked, key=lambda pair: pair[0])
        worst = _Worst(off, step.end, step.name)
        yield _upper(worst, "time asked for", LIMIT_TOLERANCE * max(step.duration, 1.0), "s")
    if schedule.job.cycle.target is not None:
        whole = _Worst(schedule.duration, schedule.duration)
        yield _upper(whole, "cycle time", schedule.job.cycle.target, "s")


def _asked(step: Step) -> float | None:
    """Return the duration that a step of a cycle file asks for [s]."""
    if isinstance(step, Wait):
        return step.seconds
    return None if isinstance(step, Signal | Payload) else step.time


def _table_travel(table: SetpointTable, axis: Axis, position: Array) -> list[Finding]:
    low, high = int(position.argmin()), int(position.argmax())
    return _travel_ends(
        axis,
        _Worst(float(position[low]), float(table.time[low])),
        _Worst(float(position[high]), float(table.time[high])),
    )


def _differences(
    table: SetpointTable, axis: Axis, position: Array, period: float
) -> Iterator[Finding]:
    """Judge the differences of an axis's positions, padded with standstill at both ends.

    Notes
    -----
    A row's second difference spans a period before and one after it. If the axis stood still at
    some instant in one of these, its mean velocity there is at most half of period times greatest
    acceleration. So where both are larger and of one sign, the axis ran one way, and acceleration
    or deceleration bounds the difference by its sign; elsewhere the greater of the two does.
    """
    rest = np.pad(position, 3, mode="edge")
    velocity = np.diff(rest) / period
    acceleration = np.diff(velocity) / period
    limits = axis.limits
    before, after = velocity[:-1], velocity[1:]
    still = 0.5 * period * max(limits.acceleration, limits.deceleration)
    one_way = (np.minimum(np.abs(before), np.abs(after)) > still) & (before * after > 0)
    slows = acceleration * (before + after) < 0
    slows = np.where(one_way, slows, limits.deceleration > limits.acceleration)
    size = np.abs(acceleration)
    # A position is rounded as it is written, as a number, and as the time that it belongs to is.
    last_digit = table.position_step + FLOAT_ROUNDING * float(
        np.spacing(np.abs(position).max()) + np.spacing(table.time[-1]) * np.abs(velocity).max()
    )
    sizes = {
        "velocity": np.abs(velocity),
        "acceleration": np.where(slows, 0.0, size),
        "deceleration": np.where(slows, size, 0.0),
        "jerk": np.abs(np.diff(acceleration)) / period,
    }
    for row, (quantity, order) in enumerate(QUANTITIES.items()):
        limit = limits[row]
        if not np.isfinite(limit):
            continue
        worst = int(sizes[quantity].argmax())
        time = float(table.time[min(max(worst - 3 + order, 0), table.time.size - 1)])
        found = _Worst(float(sizes[quantity][worst]), time)
        # The magnitudes of a difference's weights sum to 2^order; each position may be half of its
        # last digit off.
        rounding = 2 ** (order - 1) * last_digit / period**order
        finding = _upper(found, quantity, limit, _rate_unit(axis, order), axis)
        within = found.value <= limit * (1 + LIMIT_TOLERANCE) + rounding
        yield replace(finding, rounding=rounding, ok=bool(within))
