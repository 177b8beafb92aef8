"""Does a finished motion keep every requirement?

Judges a schedule by the exact extremes of its polynomials, without knowing what made it: nothing
here comes from the laws or from the planner.
"""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

from profileplan.checks.findings import (
    LIMIT_TOLERANCE,
    QUANTITIES,
    TIME_ROUNDING,
    Finding,
    Worst,
    nearness,
    rate_unit,
    travel_ends,
    upper,
    worse,
)
from profileplan.checks.traces import trace_findings
from profileplan.checks.ways import path_findings
from profileplan.inputs import Payload, Signal, Wait

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from profileplan.inputs import Step
    from profileplan.motion.schedule import Schedule
    from profileplan.motion.trajectory import Peak


def check(schedule: Schedule) -> tuple[Finding, ...]:
    """Judge every requirement on a schedule, exactly and at every instant.

    Travel, velocity, acceleration, deceleration and jerk of every axis; no jump in position,
    velocity or, where the jerk is limited, acceleration, within steps and between them; arrival
    where the cycle says; torque and speed of motors; speed along the path and duration where they
    are given; clearance of keep-outs; the target.

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
        _motors(schedule),
        strict=True,
    )
    findings = [finding for groups in by_axis for group in groups for finding in group]
    return (
        *findings,
        *path_findings(schedule),
        *trace_findings(schedule),
        *_clearance(schedule),
        *_times(schedule),
    )


def _worst(schedule: Schedule, peaks: Sequence[Peak]) -> list[Worst]:
    """Return the greatest of the steps' peaks on every axis."""
    values = np.stack([peak.value for peak in peaks])
    found = []
    for column, index in enumerate(values.argmax(axis=0)):
        step = schedule.steps[index]
        time = step.start + float(peaks[index].time[column])
        found.append(Worst(float(values[index, column]), time, step.name))
    return found


def _limits(schedule: Schedule) -> Iterator[list[Finding]]:
    """Judge velocity, acceleration, deceleration and jerk, axis by axis."""
    by_quantity = [
        _worst(schedule, [step.trajectory.peaks[row] for step in schedule.steps])
        for row in range(len(QUANTITIES))
    ]
    for column, axis in enumerate(schedule.job.machine.axes):
        yield [
            upper(by_quantity[row][column], quantity, limit, rate_unit(axis, order), axis)
            for row, (quantity, order) in enumerate(QUANTITIES.items())
            if np.isfinite(limit := axis.limits[row])
        ]


def _travel(schedule: Schedule) -> Iterator[list[Finding]]:
    """Judge both ends of the travel, axis by axis."""
    extremes = [step.trajectory.extremes() for step in schedule.steps]
    lows = _worst(schedule, [low._replace(value=-low.value) for low, _ in extremes])
    highs = _worst(schedule, [high for _, high in extremes])
    for low, high, axis in zip(lows, highs, schedule.job.machine.axes, strict=True):
        yield travel_ends(axis, low._replace(value=-low.value), high)


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
        position = worse(jumps[0][column], between[column])
        findings = [upper(position, "position jump", nearness(axis), axis.unit, axis)]
        names = ("velocity jump", "acceleration jump")
        for order, name in enumerate(names[: 2 if np.isfinite(axis.limits.jerk) else 1], start=1):
            # Limits of this derivative and of the next, which rounding of a time multiplies.
            own, following = axis.limits[order - 1], max(axis.limits[order : order + 2])
            if order == 2:
                own, following = max(axis.limits[1:3]), axis.limits.jerk
            allowed = LIMIT_TOLERANCE * own + TIME_ROUNDING * longest * following
            unit = rate_unit(axis, order)
            findings.append(upper(jumps[order][column], name, allowed, unit, axis))
        yield findings


def _gaps(schedule: Schedule) -> list[Worst]:
    """Return the greatest jump in position from a step to the next, on every axis."""
    steps = schedule.steps
    gaps = [Worst(0.0)] * len(schedule.job.machine.axes)
    for before, after in pairwise(steps):
        gap = np.abs(after.trajectory.first - before.trajectory.last)
        gaps = [
            worse(worst, Worst(float(here), after.start, after.name))
            for worst, here in zip(gaps, gap, strict=True)
        ]
    return gaps


def _arrival(schedule: Schedule) -> Iterator[list[Finding]]:
    """Judge the ends of all steps, and the start, by the positions that the cycle commands."""
    commanded = np.array(schedule.positions)
    steps = schedule.steps
    reached = np.stack([steps[0].trajectory.first, *(step.trajectory.last for step in steps)])
    missed = np.abs(reached - commanded)
    for column, axis in enumerate(schedule.job.machine.axes):
        index = int(missed[:, column].argmax())
        step = steps[max(index - 1, 0)]
        time = step.end if index else 0.0
        worst = Worst(float(missed[index, column]), time, step.name)
        yield [upper(worst, "arrival", nearness(axis), axis.unit, axis)]


def _motors(schedule: Schedule) -> Iterator[list[Finding]]:
    """Judge the motors axis by axis, where there are any."""
    axes = schedule.job.machine.axes
    if all(axis.motor is None for axis in axes):
        yield from ([] for _ in axes)
        return
    # Only a machine with motors pays for it.
    from profileplan.checks.motors import motor_findings  # noqa: PLC0415

    yield from motor_findings(schedule)


def _clearance(schedule: Schedule) -> Iterator[Finding]:
    """Judge the distances from keep-outs, where there are any."""
    if schedule.job.machine.keepouts:
        # shapely costs more start-up than all other checks: only a cell pays for it.
        from profileplan.checks.clearance import clearance_findings  # noqa: PLC0415

        yield from clearance_findings(schedule)


def _times(schedule: Schedule) -> Iterator[Finding]:
    """Judge durations that were asked for, and the cycle time by its target."""
    asked = [
        (abs(step.duration - time), step)
        for step, time in zip(schedule.steps, map(_asked, schedule.job.cycle.steps), strict=True)
        if time is not None
    ]
    if asked:
        off, step = max(asked, key=lambda pair: pair[0])
        worst = Worst(off, step.end, step.name)
        yield upper(worst, "time asked for", LIMIT_TOLERANCE * max(step.duration, 1.0), "s")
    if schedule.job.cycle.target is not None:
        whole = Worst(schedule.duration, schedule.duration)
        yield upper(whole, "cycle time", schedule.job.cycle.target, "s")


def _asked(step: Step) -> float | None:
    """Return the duration that a step of a cycle file asks for [s]."""
    if isinstance(step, Wait):
        return step.seconds
    return None if isinstance(step, Signal | Payload) else step.time
