"""What is played when: the motions of a cycle one after the other, and its signals.

A schedule says nothing of how its motions were found. It is all that the export needs, and all
that the checks judge.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from types import MappingProxyType
from typing import TYPE_CHECKING, NamedTuple

from profileplan.inputs import Signal, Trace
from profileplan.motion.trajectory import Trajectory

if TYPE_CHECKING:
    from collections.abc import Mapping

    from profileplan.geometry.trace import Traced
    from profileplan.inputs import Job


class Tracing(NamedTuple):
    """When an outline is followed, in the time of the step [s].

    The way in goes from ``enters`` to ``begins``, the outline itself to ``ends``, the way out to
    ``leaves``.
    """

    enters: float
    begins: float
    ends: float
    leaves: float


@dataclass(frozen=True, eq=False)
class ScheduledStep:
    """One step of a cycle as it is played.

    Parameters
    ----------
    name : str
        The step's own name, or one made of its kind and number; no two are equal.
    kind : str
        "move", "line", ...
    start : float [s]
        From the beginning of the cycle.
    trajectory : Trajectory
        From time 0 of the step. A step that takes no time stays where it is.
    tracing : tuple of Tracing
        When it follows each outline of its drawing.
    """

    name: str
    kind: str
    start: float
    trajectory: Trajectory
    tracing: tuple[Tracing, ...] = field(default=(), kw_only=True)

    @property
    def duration(self) -> float:
        """Duration of the step [s]."""
        return self.trajectory.duration

    @property
    def end(self) -> float:
        """End of the step from the beginning of the cycle [s]."""
        return self.start + self.trajectory.duration


@dataclass(frozen=True)
class SignalEvent:
    """A digital output takes a state, at a time [s] from the beginning of the cycle."""

    time: float
    signal: str
    state: bool


@dataclass(frozen=True, eq=False)
class Schedule:
    """The steps of a job in the order played, and its signal events in order of time.

    Parameters
    ----------
    job : Job
        The machine and the cycle that were asked for; ``steps`` answers its steps one to one.
    steps : tuple of ScheduledStep
    events : tuple of SignalEvent
    drawn : mapping
        Index of a step that follows a drawing, counted from 0 → what it follows.
    """

    job: Job
    steps: tuple[ScheduledStep, ...]
    events: tuple[SignalEvent, ...]
    drawn: Mapping[int, Traced] = field(default_factory=lambda: MappingProxyType({}), kw_only=True)

    @property
    def duration(self) -> float:
        """The cycle time [s]."""
        return self.steps[-1].end

    @cached_property
    def positions(self) -> tuple[tuple[float, ...], ...]:
        """Where the axes are told to be: at the start, and after each step [mm or deg]."""
        return self.job.positions({index: own.end for index, own in self.drawn.items()})

    @cached_property
    def trajectory(self) -> Trajectory:
        """The motion of the whole cycle."""
        return Trajectory.chain([step.trajectory for step in self.steps])

    @property
    def signals(self) -> tuple[str, ...]:
        """Names of the signals, in the order in which the cycle file first uses them."""
        names: list[str] = []
        for step in self.job.cycle.steps:
            if isinstance(step, Signal):
                names += step.states
            elif isinstance(step, Trace) and step.with_signal is not None:
                names.append(step.with_signal)
        return tuple(dict.fromkeys(names))
