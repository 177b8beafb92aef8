"""How many increments of a drive is a position, and which velocity does the drive see?"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.inputs.rules import shown

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    from profileplan.inputs import Axis, Drive, Machine
    from profileplan.motion.polynomials import Array
    from profileplan.motion.schedule import Schedule
    from profileplan.setpoints.digits import Whole

MOST_INCREMENTS = 2**31 - 1
"""Greatest number that a drive's counter of 32 bits holds."""


class Counter(NamedTuple):
    """One counter of an axis: the drive's own, or that of its twin."""

    name: str
    drive: Drive
    direction: int
    offset: float

    def increments(self, position: Array) -> Whole:
        """Return the increments nearest to positions, each from the position itself: (n,).

        So no error accumulates: every one is half an increment off at most.
        """
        whole = self.counted(position)
        turn = self.drive.wrap_increments
        return whole if turn is None else np.mod(whole, turn)

    def counted(self, position: Array) -> Whole:
        """Return the increments nearest to positions, counted on over all turns: (n,)."""
        exact = self.direction * (position + self.offset) * float(self.drive.ratio)
        whole: Whole = np.rint(exact).astype(np.int64)
        return whole

    def rate(self, values: Array) -> Array:
        """Return velocities, accelerations or jerks in increments per s, s² or s³: (n,)."""
        scaled: Array = self.direction * float(self.drive.ratio) * values
        return scaled

    def positions(self, increments: Whole) -> Array:
        """Return the positions that increments stand for; of a wrapped axis those in one turn."""
        back: Array = self.direction * increments / float(self.drive.ratio) - self.offset
        return back


def counters(axis: Axis, drive: Drive) -> tuple[Counter, ...]:
    """Return the counters of an axis, one or two."""
    own = Counter(axis.name, drive, drive.direction, drive.offset)
    twin = drive.also
    if twin is None:
        return (own,)
    return (own, Counter(twin.name, drive, twin.direction, twin.offset))


def judge_drives(schedule: Schedule, drives: Mapping[str, Drive]) -> None:
    """Refuse drives that cannot play a schedule.

    Raises
    ------
    InputError
        Drives of axes that there are not, names used twice, a wrap on a linear axis, positions
        beyond the counter of 32 bits.
    """
    machine = schedule.job.machine
    faults = [
        Fault(f"axes.{name}", "no such axis") for name in drives if name not in machine.axis_names
    ]
    taken = [*machine.axis_names, *schedule.signals]
    for axis, drive in _driven(machine, drives):
        if drive.also is not None:
            if drive.also.name in taken:
                message = f"{shown(drive.also.name)} is a name already; a drive has its own"
                faults.append(Fault(f"axes.{axis.name}.drive.also", message))
            taken.append(drive.also.name)
        if drive.wrap is not None and axis.kind == "linear":
            faults.append(Fault(f"axes.{axis.name}.drive.wrap", "only on a rotary axis"))
    low, high = schedule.trajectory.extremes()
    for axis, drive in _driven(machine, drives):
        column = machine.axis_names.index(axis.name)
        ends = [float(low.value[column]), float(high.value[column])]
        faults += _overflows(axis, drive, ends)
    if faults:
        raise InputError(replace(fault, file=machine.source) for fault in faults)


class Turn(NamedTuple):
    """How far a wrapped axis may turn between two rows.

    name of its drive; angle and wrap [deg]; the longest period [s] in which it turns by less than
    half of the wrap, so that no one can take it for the other way round.
    """

    name: str
    angle: float
    wrap: float
    longest: float


def doubtful_turns(
    schedule: Schedule, drives: Mapping[str, Drive], period: float
) -> tuple[Turn, ...]:
    """Return the wrapped axes that may turn by half of their wrap in a period [s], or more."""
    low, high = schedule.trajectory.extremes(1)
    machine = schedule.job.machine
    turns = []
    for axis, drive in _driven(machine, drives):
        column = machine.axis_names.index(axis.name)
        fastest = max(-float(low.value[column]), float(high.value[column]))
        if drive.wrap is not None and fastest * period >= drive.wrap / 2:
            longest = drive.wrap / 2 / fastest
            turns.append(Turn(axis.name, fastest * period, drive.wrap, longest))
    return tuple(turns)


def _driven(machine: Machine, drives: Mapping[str, Drive]) -> Iterator[tuple[Axis, Drive]]:
    for axis in machine.axes:
        if axis.name in drives:
            yield axis, drives[axis.name]


def _overflows(axis: Axis, drive: Drive, ends: Sequence[float]) -> Iterator[Fault]:
    """Yield the counters that do not hold what the axis does."""
    for counter in counters(axis, drive):
        ratio = float(drive.ratio)
        most = max(abs(end + counter.offset) for end in ends) * ratio
        turn = drive.wrap_increments
        held = most if turn is None else turn
        if held > MOST_INCREMENTS:
            message = f"{counter.name} counts up to {held:.0f} increments; "
            message += f"a counter of 32 bits holds {MOST_INCREMENTS}"
            yield Fault(f"axes.{axis.name}.drive", message)
