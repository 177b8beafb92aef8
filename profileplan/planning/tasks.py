"""What is one step to plan, and what holds it back?

A limit holds a step back if lowering it by ``PROBE`` makes the step longer. That is asked of the
laws themselves, by planning the step again under the changed limit; so is the time that a raise by
``RAISE`` would save.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan import checks
from profileplan.errors import PlanError
from profileplan.motion.laws import DURATION_TOLERANCE, LAWS, Limits
from profileplan.results import RAISE, Limit

if TYPE_CHECKING:
    from collections.abc import Callable

    from profileplan.inputs import Job, LawName, Step
    from profileplan.motion.laws import Law
    from profileplan.motion.polynomials import Array, Flags
    from profileplan.motion.schedule import Tracing
    from profileplan.motion.trajectory import Trajectory
    from profileplan.results import HeldStretch

PROBE = 0.01
"""Share by which a limit is lowered to see whether it holds a step back."""

SLOWER = 1e-9
"""Share by which a step must become longer before a lowered limit counts as one that holds it."""


@dataclass(frozen=True, eq=False)
class Task:
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
        """Names of the machine's axes."""
        return self.job.machine.axis_names

    def law(self, name: LawName | None) -> Law:
        """Return the law of a step that names one, or the cycle's."""
        return LAWS[name or self.job.cycle.law]

    def error(self, key: str, message: str) -> PlanError:
        """Return what says why the step cannot be planned."""
        place = self.job.cycle.where(self.index, key)
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
class Motion:
    """A planned step, before it has its place in the cycle."""

    trajectory: Trajectory
    limited_by: tuple[Limit, ...] = ()
    least_time: float | None = 0.0
    stretches: tuple[HeldStretch, ...] = ()
    note: str = ""
    tracing: tuple[Tracing, ...] = ()


class Probe(NamedTuple):
    """Changed limits to plan a step again under: (k, d) arrays; factors on the speed: (k,)."""

    limits: Limits
    speed: Array


def held_by(
    task: Task, durations: Callable[[Probe], Array], slack: float, moving: Flags
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
    found = durations(Probe(Limits(*np.moveaxis(factors * limits, 1, 0)), speed))
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
