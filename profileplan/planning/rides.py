"""How do runs through corridors and motions between them make one step, and what holds it back?"""

from __future__ import annotations

from itertools import accumulate
from typing import TYPE_CHECKING, NamedTuple, Protocol

from profileplan.motion.laws import DURATION_TOLERANCE
from profileplan.motion.trajectory import Trajectory
from profileplan.planning.tasks import Motion
from profileplan.results import RAISE, HeldStretch, Limit

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from profileplan.motion.least_time import Passage, Stretch
    from profileplan.planning.tasks import Task

COUNTS = 2e-3
"""Seconds that a bound must give for each share of it, as a share of the step, to be named."""


class Ridden(Protocol):
    """A part that can be slowed down: a run along a path, or a transfer."""

    @property
    def duration(self) -> float:
        """Its duration [s]."""

    @property
    def least(self) -> float:
        """A time [s] that it cannot be shorter than."""

    @property
    def passage(self) -> Passage | None:
        """Its motion through a corridor, where it is one."""

    @property
    def single(self) -> bool:
        """Whether nothing is left to be said where it is none."""

    def trajectory(self, axes: tuple[str, ...], *, duration: float) -> Trajectory:
        """Return the motion in a time [s]."""

    def gains(self) -> Mapping[tuple[str, int], float]:
        """Return how much sooner it ends for each share that a bound is loosened [s]."""

    def stretches(self) -> tuple[Stretch, ...]:
        """Return what holds it back where."""


class Ride(NamedTuple):
    """A step made of parts.

    motion : Motion
    starts : tuple of float [s]
        When each part begins, in the time of the step; the last is its end.
    slower : float
        How many times longer than their least time the runs take.
    """

    motion: Motion
    starts: tuple[float, ...]
    slower: float


def ride(
    task: Task,
    parts: Sequence[Ridden | Trajectory],
    *,
    time: float | None,
    saves: Mapping[tuple[str, str | None], float] | None = None,
) -> Ride:
    """Return parts one after the other, the runs slowed down where a longer time is asked for.

    Parameters
    ----------
    task : Task
    parts : sequence of Ridden and Trajectory
        Each begins where the one before ends.
    time : float, optional [s]
        Duration asked for.
    saves : mapping, optional
        What the trajectories would save by a tenth more of a limit: (quantity, axis) → time [s].
    """
    runs = [part for part in parts if not isinstance(part, Trajectory)]
    fixed = sum(part.duration for part in parts if isinstance(part, Trajectory))
    least = sum(run.duration for run in runs)
    duration = task.asked(least + fixed, time)
    slower = max((duration - fixed) / least, 1.0) if least else 1.0
    motions = [
        part
        if isinstance(part, Trajectory)
        else part.trajectory(task.axes, duration=part.duration * slower)
        for part in parts
    ]
    starts = tuple(accumulate((motion.duration for motion in motions), initial=0.0))
    chain = Trajectory.chain([motion for motion in motions if motion.duration] or motions[:1])
    bound = fixed + sum(run.least for run in runs)
    if slower > 1 + DURATION_TOLERANCE:
        return Ride(Motion(chain, (Limit(None, "time"),), bound), starts, slower)
    held = _held(task, runs, saves or {}, chain.duration)
    stretches = tuple(
        HeldStretch(start + s.start, start + s.end, Limit(_axis(task, s.axis), s.quantity))
        for start, part in zip(starts, parts, strict=False)
        if not isinstance(part, Trajectory)
        for s in part.stretches()
    )
    return Ride(Motion(chain, held, bound, stretches, _settled(runs, task)), starts, slower)


def _axis(task: Task, column: int) -> str | None:
    """Return the name of the axis of a column; -1 is none."""
    return None if column < 0 else task.axes[column]


def _held(
    task: Task,
    runs: Sequence[Ridden],
    saves: Mapping[tuple[str, str | None], float],
    duration: float,
) -> tuple[Limit, ...]:
    """Return what holds the parts back in all, the strongest first."""
    found = dict(saves)
    for run in runs:
        for (quantity, column), gain in run.gains().items():
            name = quantity, _axis(task, column)
            found[name] = found.get(name, 0.0) + RAISE * gain
    order = sorted(found.items(), key=lambda item: -item[1])
    return tuple(
        Limit(axis, quantity, saved)
        for (quantity, axis), saved in order
        if saved > RAISE * COUNTS * duration
    )


def _settled(runs: Sequence[Ridden], task: Task) -> str:
    """Return a note on runs that may not be the fastest found, and by what they still hold."""
    name = task.job.cycle.step_label(task.index)
    stops = sum(run.passage is None and not run.single for run in runs)
    if stops:
        return f"{name}: {stops} of {len(runs)} runs stop at every point; nothing faster was found"
    if any(run.passage is not None and not run.passage.settled for run in runs):
        return f"{name}: the search ended before it settled; limits and tolerance are kept"
    return ""
