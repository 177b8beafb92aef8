"""How is a cycle played, how long does it take, and what limits it?

``plan`` turns a job into a ``Plan``: the motion of every step, the least time known for it, the
limits that hold it back, and what would have to change to meet a missed target.

A limit holds a step back if lowering it by ``PROBE`` makes the step longer. That is asked of the
laws themselves, by planning the step again under the changed limit; so is the time that a raise by
``RAISE`` would save.

To add a kind of step, write a function that turns its ``_Task`` into a ``_Motion`` and call it in
``_motion``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan import checks, setpoints
from profileplan.errors import PlanError
from profileplan.inputs import (
    Cycle,
    Job,
    Line,
    Machine,
    Move,
    PathStep,
    Payload,
    Signal,
    Wait,
    load_job,
)
from profileplan.motion.laws import DURATION_TOLERANCE, LAWS, Limits
from profileplan.motion.schedule import Schedule, ScheduledStep, SignalEvent
from profileplan.motion.synchronisation import (
    Way,
    line_durations,
    line_limits,
    lines,
    move,
    move_duration,
)
from profileplan.motion.trajectory import Trajectory

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from profileplan.inputs import LawName, Step
    from profileplan.motion.laws import Law
    from profileplan.motion.paths import Run
    from profileplan.motion.polynomials import Array, Flags

PROBE = 0.01
"""Share by which a limit is lowered to see whether it holds a step back."""

RAISE = 0.10
"""Share by which a limit is raised to see how much time that would save."""

SLOWER = 1e-9
"""Share by which a step must become longer before a lowered limit counts as one that holds it."""


COUNTS = 2e-3
"""Seconds that a bound must give for each share of it, as a share of the step, to be named."""

EVENT_ROUNDING = 1e-9
"""Time [s] by which rounding may put a signal outside the cycle."""


@dataclass(frozen=True)
class Limit:
    """Something that holds a step back.

    Parameters
    ----------
    axis : str, optional
        The axis; None for the step as a whole.
    quantity : str
        "velocity", "acceleration", "deceleration" or "jerk" of an axis; without an axis "speed"
        along the path, or "time": a duration that was asked for.
    saves : float [s]
        How much shorter the step would be with this limit a tenth higher and all else kept.
    """

    axis: str | None
    quantity: str
    saves: float = 0.0


@dataclass(frozen=True)
class HeldStretch:
    """What holds the motion back from one time of the cycle to another [s]."""

    start: float
    end: float
    limit: Limit


@dataclass(frozen=True, eq=False)
class PlannedStep(ScheduledStep):
    """A step of a cycle as it is played, and why it takes as long as it does.

    Parameters
    ----------
    limited_by : tuple of Limit
        What holds the step back, the strongest first; empty for a step that takes no time.
    least_time : float, optional [s]
        A time that no motion under the step's limits can be shorter than; None: none is known.
    stretches : tuple of HeldStretch
        What holds the step back where, for a step through a corridor.
    """

    limited_by: tuple[Limit, ...] = ()
    least_time: float | None = None
    stretches: tuple[HeldStretch, ...] = ()


@dataclass(frozen=True)
class Lever:
    """Something that could be changed to shorten the cycle.

    Parameters
    ----------
    limit : Limit
        What limits, with the time saved over the whole cycle by a tenth more of it.
    time : float [s]
        How long the steps take that it holds back more than anything else does.
    steps : tuple of str
        All steps that it holds back, in order of the time they take.
    """

    limit: Limit
    time: float
    steps: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class Plan(Schedule):
    """A planned cycle.

    Parameters
    ----------
    steps : tuple of PlannedStep
        One for each step of the cycle.
    notes : tuple of str
        What the reader of this plan must know and may not expect.

    Examples
    --------
    >>> from profileplan.inputs import Axis
    >>> machine = Machine(
    ...     name="feeder",
    ...     axes=(Axis("x", travel=(0.0, 500.0), velocity=1000.0, acceleration=5000.0),),
    ... )
    >>> cycle = Cycle(steps=(Move({"x": 300.0}),), start={"x": 0.0})
    >>> plan(machine, cycle).duration
    0.5
    """

    steps: tuple[PlannedStep, ...]
    notes: tuple[str, ...] = ()

    @property
    def target(self) -> float | None:
        """The cycle time to meet, where one was given [s]."""
        return self.job.cycle.target

    @property
    def meets_target(self) -> bool | None:
        """Whether the cycle is short enough; None without a target."""
        if self.target is None:
            return None
        return self.duration <= self.target * (1 + checks.LIMIT_TOLERANCE)

    @property
    def levers(self) -> tuple[Lever, ...]:
        """What could be changed to shorten the cycle, most time saved first, then time taken."""
        held: dict[tuple[str | None, str], list[tuple[PlannedStep, Limit]]] = {}
        for step in self.steps:
            for limit in step.limited_by:
                held.setdefault((limit.axis, limit.quantity), []).append((step, limit))
        levers = []
        for (axis, quantity), pairs in held.items():
            pairs.sort(key=lambda pair: -pair[0].duration)
            saves = sum(limit.saves for _, limit in pairs)
            first = (step.duration for step, limit in pairs if step.limited_by[0] is limit)
            names = tuple(step.name for step, _ in pairs)
            levers.append(Lever(Limit(axis, quantity, saves), sum(first), names))
        return tuple(sorted(levers, key=lambda lever: (-lever.limit.saves, -lever.time)))

    @cached_property
    def _findings(self) -> tuple[checks.Finding, ...]:
        return checks.check(self)

    def check(self) -> tuple[checks.Finding, ...]:
        """Judge every requirement, as ``checks.check`` does; once, for a plan does not change."""
        return self._findings

    def setpoints(
        self, period: float | None = None, columns: Sequence[str] = tuple(setpoints.COLUMNS)
    ) -> setpoints.SetpointTable:
        """Return the setpoints at a period [s], as ``setpoints.sample`` does."""
        return setpoints.sample(self, period=period, columns=columns)


def plan(
    source: str | Path | Job | Machine,
    cycle: Cycle | None = None,
    *,
    progress: Callable[[float, int], None] | None = None,
) -> Plan:
    """Plan a cycle.

    Parameters
    ----------
    source : path, Job or Machine
        A cycle file or a job; or a machine, with a cycle beside it.
    cycle : Cycle, optional
        With a machine only.
    progress : callable, optional
        Called with the steps planned so far, with parts of one, and the steps in all.

    Raises
    ------
    InputError
        Something in the files or the records is wrong.
    PlanError
        The job cannot be planned; the message says what would have to change.
    """
    job = _job(source, cycle)
    limits = Limits.of(job.machine)
    positions = job.positions()
    steps: list[PlannedStep] = []
    notes: list[str] = []
    start = 0.0
    for index, step in enumerate(job.cycle.steps):
        ends = (np.array(positions[index]), np.array(positions[index + 1]))
        within = None if progress is None else _within(progress, index, len(job.cycle.steps))
        task = _Task(job, index, step, ends, limits, within)
        motion = _motion(task)
        duration, least = motion.trajectory.duration, motion.least_time
        steps.append(
            PlannedStep(
                name=job.cycle.step_label(index),
                kind=step.kind,
                start=start,
                trajectory=motion.trajectory,
                limited_by=motion.limited_by,
                # Rounding may put the bound above a motion that reaches it.
                least_time=None if least is None else min(least, duration),
                stretches=tuple(
                    replace(held, start=start + held.start, end=start + held.end)
                    for held in motion.stretches
                ),
            )
        )
        start = steps[-1].end
        notes += [motion.note] if motion.note else []
        if progress:
            progress(index + 1, len(job.cycle.steps))
    return Plan(job, tuple(steps), _events(job, steps), notes=(*_notes(job), *notes))


@dataclass(frozen=True, eq=False)
class _Task:
    """One step to plan: where it begins and ends, and what bounds it."""

    job: Job
    index: int
    step: Step
    ends: tuple[Array, Array]
    limits: Limits
    progress: Callable[[float], None] | None = None

    def part_progress(self, number: int, count: int) -> Callable[[float], None] | None:
        """Return what takes the progress of one of the step's parts."""
        report = self.progress
        return None if report is None else lambda share: report((number + share) / count)

    @property
    def axes(self) -> tuple[str, ...]:
        return self.job.machine.axis_names

    def law(self, name: LawName | None) -> Law:
        return LAWS[name or self.job.cycle.law]

    def error(self, key: str, message: str) -> PlanError:
        place = f"steps[{self.index + 1}].{key}"
        parts = [str(self.job.cycle.source)] if self.job.cycle.source else []
        return PlanError(": ".join([*parts, place, message]))

    def asked(self, least: float, time: float | None) -> float:
        """Return the duration of a step that takes at least so long and is asked to take a time."""
        if time is None:
            return least
        if time < least * (1 - DURATION_TOLERANCE):
            shown = math.ceil(least * 1e6) / 1e6
            message = f"{time:g} s asked for; the least time within the limits is {shown:.6f} s"
            raise self.error("time", message)
        return max(time, least)


@dataclass(frozen=True, eq=False)
class _Motion:
    """A planned step, before it has its place in the cycle."""

    trajectory: Trajectory
    limited_by: tuple[Limit, ...] = ()
    least_time: float | None = 0.0
    stretches: tuple[HeldStretch, ...] = ()
    note: str = ""


def _job(source: str | Path | Job | Machine, cycle: Cycle | None) -> Job:
    """Return the job that the arguments of ``plan`` name."""
    if isinstance(source, Machine):
        if cycle is None:
            message = "a machine alone is no job: plan(machine, cycle)"
            raise TypeError(message)
        return Job(source, cycle)
    if cycle is not None:
        message = "a cycle goes with a machine: plan(machine, cycle)"
        raise TypeError(message)
    return source if isinstance(source, Job) else load_job(Path(source))


def _within(
    progress: Callable[[float, int], None], index: int, count: int
) -> Callable[[float], None]:
    """Return what takes the progress inside a step, as a share of it."""
    return lambda share: progress(index + share, count)


def _motion(task: _Task) -> _Motion:
    step = task.step
    if isinstance(step, Move):
        return _move(task, step)
    if isinstance(step, Line):
        return _line(task, step)
    if isinstance(step, PathStep):
        return _path(task, step)
    if isinstance(step, Wait):
        held = Limit(None, "time")
        rest = Trajectory.rest(task.axes, task.ends[0], step.seconds)
        return _Motion(rest, (held,) if step.seconds else (), step.seconds)
    if isinstance(step, Signal | Payload):
        return _Motion(Trajectory.rest(task.axes, task.ends[0]))
    raise task.error(step.kind, f"this version does not plan steps of the kind {step.kind}")


def _move(task: _Task, step: Move) -> _Motion:
    law = task.law(step.law)
    distance = task.ends[1] - task.ends[0]
    least = float(move_duration(distance, task.limits, law))
    duration = task.asked(least, step.time)
    together = duration if step.arrival == "together" else None
    trajectory = move(task.axes, task.ends, task.limits, law=law, duration=together)

    def durations(probe: _Probe) -> Array:
        return move_duration(distance, probe.limits, law)

    return _Motion(
        trajectory,
        _held_by(task, durations, duration / least if least else 1.0, distance != 0),
        float(move_duration(distance, task.limits, LAWS["trapezoidal"])),
    )


def _line(task: _Task, step: Line) -> _Motion:
    speed = np.array([np.inf if step.speed is None else step.speed])
    return _straight(task, Way(np.stack(task.ends), speed, np.zeros(2), np.zeros(2)), step)


def _path(task: _Task, step: PathStep) -> _Motion:
    points = np.array([task.ends[0], *task.job.points(task.index)])
    bound = np.inf if step.speed is None else step.speed
    own = [np.inf if point.speed is None else point.speed for point in step.points]
    waits = np.array([0.0, *(point.wait for point in step.points)])
    near = [step.tolerance if p.tolerance is None else p.tolerance for p in step.points]
    way = Way(points, np.minimum(own, bound), waits, np.array([0.0, *near]))
    return _tolerant(task, way, step) if step.tolerance else _straight(task, way, step)


def _tolerant(task: _Task, way: Way, step: PathStep) -> _Motion:
    """Plan a path inside its tolerance: from each rest to the next in least time."""
    # scipy and the solver cost more start-up than all else: only such a path pays for them.
    from profileplan.motion.paths import Near, plan_run  # noqa: PLC0415

    parts = list(way.parts())
    travel = np.array([axis.travel for axis in task.job.machine.axes]).T
    runs = [
        plan_run(
            part,
            task.limits,
            linear=np.array(task.job.machine.linear),
            near=Near(
                tolerance=np.full(len(part.points) - 1, step.tolerance),
                angle_tolerance=step.angle_tolerance,
                at_points=part.near[1:-1],
                any=step.tolerance,
                travel=travel,
            ),
            progress=task.part_progress(number, len(parts)),
        )
        for number, part in enumerate(parts)
    ]
    least, waits = sum(run.duration for run in runs), float(way.waits.sum())
    duration = task.asked(least + waits, step.time)
    slower = (duration - waits) / least if least else 1.0
    rests = [Trajectory.rest(task.axes, part.points[0], float(part.waits[0])) for part in parts]
    end = Trajectory.rest(task.axes, way.points[-1], float(way.waits[-1]))
    motions = [run.trajectory(task.axes, duration=run.duration * slower) for run in runs]
    chain = Trajectory.chain([m for pair in zip(rests, motions, strict=True) for m in pair] + [end])
    bound = sum(run.least for run in runs) + waits
    if slower > 1 + DURATION_TOLERANCE:
        return _Motion(chain, (Limit(None, "time"),), bound)
    held, stretches = _held_runs(task, runs)
    return _Motion(chain, held, bound, stretches, _settled(runs, task))


def _held_runs(
    task: _Task, runs: Sequence[Run]
) -> tuple[tuple[Limit, ...], tuple[HeldStretch, ...]]:
    """Return what holds the runs of a path back: in all, and where."""
    names = [*task.axes, None]
    gains: dict[tuple[str, int], float] = {}
    held, start = [], 0.0
    for run in runs:
        for name, gain in run.gains().items():
            gains[name] = gains.get(name, 0.0) + gain
        start += float(run.way.waits[0])
        held += [
            HeldStretch(start + s.start, start + s.end, Limit(names[s.axis], s.quantity))
            for s in run.stretches()
        ]
        start += run.duration
    order = sorted(gains.items(), key=lambda item: -item[1])
    limits = [
        Limit(names[axis], quantity, RAISE * gain)
        for (quantity, axis), gain in order
        if gain > COUNTS * start
    ]
    return tuple(limits), tuple(held)


def _settled(runs: Sequence[Run], task: _Task) -> str:
    """Return a note on runs that may not be the fastest found, and by what they still hold."""
    name = task.job.cycle.step_label(task.index)
    stops = sum(run.passage is None and not run.single for run in runs)
    if stops:
        return f"{name}: {stops} of {len(runs)} runs stop at every point; nothing faster was found"
    if any(run.passage is not None and not run.passage.settled for run in runs):
        return f"{name}: the search ended before it settled; limits and tolerance are kept"
    return ""


def _straight(task: _Task, way: Way, step: Line | PathStep) -> _Motion:
    """Plan straight lines from point to point with a stop at every point."""
    law, linear = task.law(step.law), task.job.machine.linear
    distance = np.diff(way.points, axis=0)
    bounds = line_limits(distance, task.limits, linear=linear, speed=way.speeds)
    durations = line_durations(distance, bounds, law)
    waits = float(way.waits.sum())
    moving = float(durations.sum())
    duration = task.asked(moving + waits, step.time)
    if moving:
        durations = durations * max((duration - waits) / moving, 1.0)
    else:
        durations = np.full(durations.size, (duration - waits) / durations.size)
    trajectory = lines(task.axes, way.points, bounds, law=law, durations=durations, waits=way.waits)

    def total(limits: Limits, speeds: Array, law: Law) -> float:
        by_line = line_limits(distance, limits, linear=linear, speed=speeds)
        return float(line_durations(distance, by_line, law).sum()) + waits

    def durations_under(probe: _Probe) -> Array:
        return np.array(
            [
                total(Limits(*limits), way.speeds * speed, law)
                for limits, speed in zip(np.stack(probe.limits, 1), probe.speed, strict=True)
            ]
        )

    held = _held_by(
        task,
        durations_under,
        duration / (moving + waits) if moving else 1.0,
        np.any(distance != 0, axis=0),
    )
    return _Motion(trajectory, held, total(task.limits, way.speeds, LAWS["trapezoidal"]))


class _Probe(NamedTuple):
    """Changed limits to plan a step again under: (k, d) arrays; factors on the speed: (k,)."""

    limits: Limits
    speed: Array


def _held_by(
    task: _Task, durations: Callable[[_Probe], Array], slack: float, moving: Flags
) -> tuple[Limit, ...]:
    """Return what holds a step back, the strongest first.

    Parameters
    ----------
    durations : callable
        Least times of the step under changed limits, (k,) [s].
    slack : float
        Planned duration over least time: above 1 it was asked for.
    moving : (d,) array of bool
        The axes that move in this step.
    """
    if slack > 1 + DURATION_TOLERANCE:
        return (Limit(None, "time"),)
    limits = np.array(task.limits)
    members = np.argwhere(np.isfinite(limits) & moving)
    count = len(members) + 1
    # As it is; each member, and last the speed, lowered; each raised.
    factors, speed = np.ones((2 * count + 1, *limits.shape)), np.ones(2 * count + 1)
    for number, (row, axis) in enumerate(members):
        factors[1 + number, row, axis] = 1 - PROBE
        factors[1 + count + number, row, axis] = 1 + RAISE
    speed[count], speed[2 * count] = 1 - PROBE, 1 + RAISE
    found = durations(_Probe(Limits(*np.moveaxis(factors * limits, 1, 0)), speed))
    slower = found[1 : 1 + count] - found[0]
    saves = np.maximum(found[0] - found[1 + count :], 0.0)
    quantities = tuple(checks.QUANTITIES)
    held = [
        Limit(task.axes[axis], quantities[row], float(saved))
        for (row, axis), saved in zip(members, saves, strict=False)
    ]
    held.append(Limit(None, "speed", float(saves[-1])))
    order = np.argsort(-slower, kind="stable")
    return tuple(held[index] for index in order if slower[index] > SLOWER * found[0])


def _events(job: Job, steps: Sequence[PlannedStep]) -> tuple[SignalEvent, ...]:
    """Return the signal events in order of time.

    Raises
    ------
    PlanError
        A signal would switch outside the cycle, or before an earlier step's switching of it.
    """
    duration = steps[-1].end
    latest: dict[str, SignalEvent] = {}
    events = []
    for index, (asked, step) in enumerate(zip(job.cycle.steps, steps, strict=True)):
        if not isinstance(asked, Signal):
            continue
        time = step.start - asked.lead
        place = f"{job.cycle.source or 'cycle'}: steps[{index + 1}].lead: {asked.lead:g} s"
        if time < -EVENT_ROUNDING or time > duration + EVENT_ROUNDING:
            message = f"{place} puts it at {time:.6g} s; the cycle lasts from 0 to {duration:.6g} s"
            raise PlanError(message)
        for signal, state in asked.states.items():
            event = SignalEvent(min(max(time, 0.0), duration), signal, state)
            if signal in latest and latest[signal].time > event.time:
                message = (
                    f"{place} makes {signal} switch at {event.time:.6g} s, before it switches at "
                    f"{latest[signal].time:.6g} s for an earlier step"
                )
                raise PlanError(message)
            latest[signal] = event
            events.append(event)
    return tuple(sorted(events, key=lambda event: event.time))


def _notes(job: Job) -> tuple[str, ...]:
    """Return what this version leaves out of what the job's files say."""
    machine, steps = job.machine, job.cycle.steps
    notes = []
    if machine.keepouts:
        notes.append(f"clearance is not checked ({len(machine.keepouts)} keep-outs recorded)")
    if any(axis.mechanics for axis in machine.axes):
        notes.append("loads on motors and mechanics are not checked (axes with mechanics)")
    if any(isinstance(step, Payload) for step in steps):
        notes.append("payloads are recorded; their mass and size do not enter the plan")
    return tuple(notes)
