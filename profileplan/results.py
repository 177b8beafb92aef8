"""What is a plan: its steps, why they take as long as they do, and what would shorten them."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from profileplan import checks, setpoints
from profileplan.motion.schedule import Schedule, ScheduledStep

if TYPE_CHECKING:
    from collections.abc import Sequence


RAISE = 0.10
"""Share by which a limit is raised to see how much time that would save."""


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
        How much shorter the step would be with this limit higher by ``RAISE``, and all else kept.
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
class PlannedCycle(Schedule):
    """A planned cycle: all that there is to tell of it.

    Parameters
    ----------
    steps : tuple of PlannedStep
        One for each step of the cycle.
    notes : tuple of str
        What the reader of this plan must know and may not expect.
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
        self, period: float | None = None, columns: Sequence[str] | None = None
    ) -> setpoints.SetpointTable:
        """Return the setpoints at a period [s], as ``setpoints.sample``; default: all rates."""
        wanted = tuple(setpoints.COLUMNS) if columns is None else columns
        return setpoints.sample(self, period=period, columns=wanted)
