"""How is a cycle played, how long does it take, and what limits it?

``plan`` turns a job into a ``Plan``: the motion of every step, the least time known for it, the
limits that hold it back, and what would have to change to meet a missed target.

To add a kind of step, write a function that turns its ``Task`` into a ``Motion`` and call it in
``_motion``.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from profileplan.errors import InputError, PlanError
from profileplan.inputs import (
    Cycle,
    Job,
    Line,
    Machine,
    Move,
    PathStep,
    Payload,
    Signal,
    Step,
    Trace,
    Transfer,
    Wait,
    Waypoint,
    load_job,
)
from profileplan.motion.laws import Limits
from profileplan.motion.schedule import SignalEvent
from profileplan.motion.trajectory import Trajectory
from profileplan.planning.plan import Plan
from profileplan.planning.steps import plan_line, plan_move, plan_path
from profileplan.planning.tasks import Motion, Task
from profileplan.results import Limit, PlannedStep

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Sequence

    from profileplan.errors import Fault
    from profileplan.geometry.trace import Traced

EVENT_ROUNDING = 1e-9
"""Time [s] by which rounding may put a signal outside the cycle."""


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
    _judge_cell(job)
    limits = Limits.of(job.machine)
    drawn = _drawn(job, limits)
    orders: tuple[str, ...] = ()
    if job.cycle.free:
        # scipy and shapely cost more start-up than all else: only a free order pays for them.
        from profileplan.planning.matching import ordered  # noqa: PLC0415

        job, orders = ordered(job, {index: own.end for index, own in drawn.items()})
        # What is traced after a group begins where the group now ends.
        drawn = _drawn(job, limits)
    positions = job.positions({index: own.end for index, own in drawn.items()})
    steps: list[PlannedStep] = []
    notes: list[str] = []
    alike = _Alike()
    start = 0.0
    for index, step in enumerate(job.cycle.steps):
        ends = (np.array(positions[index]), np.array(positions[index + 1]))
        within = None if progress is None else _within(progress, index, len(job.cycle.steps))
        motion = alike.motion(Task(job, index, step, ends, limits, within), drawn.get(index))
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
                tracing=motion.tracing,
            )
        )
        start = steps[-1].end
        notes += [motion.note] if motion.note else []
        if progress:
            progress(index + 1, len(job.cycle.steps))
    for own in drawn.values():
        notes += own.notes
    return Plan(
        job, tuple(steps), _events(job, steps), notes=(*_notes(job), *orders, *notes), drawn=drawn
    )


def _judge_cell(job: Job) -> None:
    """Find what is wrong with keep-outs, tool and payloads, before anything is planned."""
    if job.machine.keepouts:
        # shapely costs more start-up than all else: only a cell pays for it.
        from profileplan.geometry.cell import judge  # noqa: PLC0415

        judge(job)


def _drawn(job: Job, limits: Limits) -> dict[int, Traced]:
    """Return what the steps follow of their drawings, by index of the step.

    Raises
    ------
    InputError
        With the faults of all drawings.
    """
    found: dict[int, Traced] = {}
    faults: list[Fault] = []
    for index, step in enumerate(job.cycle.steps):
        if not isinstance(step, Trace):
            continue
        # ezdxf, scipy and shapely cost more start-up than all else: only a trace pays for them.
        from profileplan.planning.traces import read_trace  # noqa: PLC0415

        ends = {known: own.end for known, own in found.items()}
        try:
            found[index] = read_trace(job, step, limits, np.array(job.positions(ends)[index]))
        except InputError as error:
            faults += error.faults
    if faults:
        raise InputError(tuple(dict.fromkeys(faults)))
    return found


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


class _Alike:
    """Plans a step once and takes its motion for all that are alike.

    Steps are alike that differ in their names only, begin and end at the same positions to the last
    bit, and have the same payload. What follows a drawing is planned each time.
    """

    def __init__(self) -> None:
        self._known: dict[tuple[object, ...], tuple[str, Motion]] = {}
        self._payload: tuple[object, ...] = ()

    def motion(self, task: Task, drawn: Traced | None) -> Motion:
        """Return the motion of a step; the steps are given in their order."""
        step, label = task.step, task.job.cycle.step_label(task.index)
        if isinstance(step, Payload):
            self._payload = _content(step)
        if isinstance(step, Trace):
            return _motion(task, drawn)
        key = (*(end.tobytes() for end in task.ends), self._payload, _content(step))
        if key not in self._known:
            self._known[key] = label, _motion(task, drawn)
        first, motion = self._known[key]
        if first != label and motion.note.startswith(f"{first}: "):
            return replace(motion, note=f"{label}: {motion.note.removeprefix(f'{first}: ')}")
        return motion


def _content(step: Step) -> tuple[object, ...]:
    """Return all that a step asks for besides its name, to be compared and hashed."""
    own = (_hashable(getattr(step, f.name)) for f in fields(step) if f.name != "name")
    return (step.kind, *own)


def _hashable(value: object) -> object:
    if isinstance(value, Mapping):
        return tuple(value.items())
    if isinstance(value, tuple):
        return tuple(map(_hashable, value))
    if isinstance(value, Waypoint):
        return (tuple(value.to.items()), value.speed, value.wait, value.tolerance)
    return value


def _motion(task: Task, drawn: Traced | None) -> Motion:
    """Return the motion of a step; what only some kinds need is imported with these."""
    match task.step:
        case Move() as step:
            found = plan_move(task, step)
        case Line() as step:
            found = plan_line(task, step)
        case PathStep() as step:
            found = plan_path(task, step)
        case Trace() as step:
            from profileplan.planning.traces import plan_trace  # noqa: PLC0415

            if drawn is None:
                raise task.error(step.kind, "its drawing was not read")
            found = plan_trace(task, step, drawn)
        case Transfer() as step:
            from profileplan.planning.transfers import plan_transfer  # noqa: PLC0415

            found = plan_transfer(task, step)
        case Wait(seconds=seconds):
            rest = Trajectory.rest(task.axes, task.ends[0], seconds)
            found = Motion(rest, (Limit(None, "time"),) if seconds else (), seconds)
        case _:
            found = Motion(Trajectory.rest(task.axes, task.ends[0]))
    return found


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
        if not isinstance(asked, Signal | Trace):
            continue
        place = f"{job.cycle.source or 'cycle'}: {job.cycle.where(index, 'lead')}: {asked.lead:g} s"
        for time, signal, state in _switched(asked, step):
            if time < -EVENT_ROUNDING or time > duration + EVENT_ROUNDING:
                message = (
                    f"{place} puts it at {time:.6g} s; the cycle lasts from 0 to {duration:.6g} s"
                )
                raise PlanError(message)
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


def _switched(asked: Signal | Trace, step: PlannedStep) -> Iterator[tuple[float, str, bool]]:
    """Yield what a step switches: time from the beginning of the cycle [s], signal, state."""
    if isinstance(asked, Signal):
        for signal, state in asked.states.items():
            yield step.start - asked.lead, signal, state
    elif asked.with_signal is not None:
        for outline in step.tracing:
            yield step.start + outline.begins - asked.lead, asked.with_signal, True
            yield step.start + outline.ends - asked.lead, asked.with_signal, False


def _notes(job: Job) -> tuple[str, ...]:
    """Return what this version leaves out of what the job's files say."""
    machine, steps = job.machine, job.cycle.steps
    notes = []
    known = [axis for axis in machine.axes if axis.mechanics is not None]
    unjudged = [axis.name for axis in known if axis.motor is None]
    if unjudged:
        names = ", ".join(unjudged)
        notes.append(f"loads of {names} are not judged: [axes.NAME.motor] says what a motor bears")
    if any(isinstance(step, Payload) and step.mass for step in steps):
        notes.append(
            "the mass of payloads enters forces and torques, not the limits of the plan"
            if known
            else "the mass of payloads is not used: no axis has mechanics"
        )
    return tuple(notes)
