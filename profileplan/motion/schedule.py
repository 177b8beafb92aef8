"""What is played when: the motions of a cycle one after the other, and its signals.

A schedule says nothing of how its motions were found. It is all that the export needs, and all
that the checks judge.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from profileplan.inputs import Signal
from profileplan.motion.trajectory import Trajectory

if TYPE_CHECKING:
    from profileplan.inputs import Job


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
    """

    name: str
    kind: str
    start: float
    trajectory: Trajectory

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
    """

    job: Job
    steps: tuple[ScheduledStep, ...]
    events: tuple[SignalEvent, ...]

    @property
    def duration(self) -> float:
        """The cycle time [s]."""
        return self.steps[-1].end

    @cached_property
    def trajectory(self) -> Trajectory:
        """The motion of the whole cycle."""
        return Trajectory.chain([step.trajectory for step in self.steps])

    @property
    def signals(self) -> tuple[str, ...]:
        """Names of the signals, in the order in which the cycle file first uses them."""
        steps = [step for step in self.job.cycle.steps if isinstance(step, Signal)]
        return tuple(dict.fromkeys(name for step in steps for name in step.states))
