"""Where is a rotary axis whose counter starts from 0 again after a turn?

The counter does not say in which turn it is. From row to row the axis takes the shorter way, or,
where it may turn by more than half of a wrap in that time, the way that its velocities tell.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from profileplan.inputs import Axis, Machine
    from profileplan.motion.polynomials import Array, Flags
    from profileplan.setpoints.columns import Column, Sheet

MOST_TURNS = 1000
"""Turns that a first row may be in: of more, those nearest to 0 are tried."""

NEAR = 1e-9
"""How far from its travel a row may be [turns]: what rounding makes of it."""

ROUNDED = 1e-3
"""What rounding may make of a step from row to row [turns]."""


class Turns:
    """Counts on what starts from 0 again, in the order of the rows.

    Parameters
    ----------
    sheet : Sheet
    machine : Machine
    """

    def __init__(self, sheet: Sheet, machine: Machine) -> None:
        self._own = {
            place: Turning(sheet, machine.axes[column.axis], column)
            for place, column in enumerate(sheet.columns)
            if column.wrap
        }

    def counted_on(self, numbers: Array) -> Array:
        """Return numbers as they stand in the file, (n, k), with all turns counted."""
        if not self._own:
            return numbers
        found = numbers.copy()
        for place, own in self._own.items():
            found[:, place] = own.counted_on(numbers, place)
        return found

    def of(self, place: int) -> Turning | None:
        """Return what was found in a column, if it may start from 0 again."""
        return self._own.get(place)

    def notes(self) -> list[str]:
        """Return what should be known of the columns."""
        return [note for own in self._own.values() for note in own.notes()]


class Turning:
    """A column that may start from 0 again.

    A drive's counter always does. A column of degrees does where it leaps inside of one wrap by
    more than the axis can turn in that time; else it is taken as it is.
    """

    def __init__(self, sheet: Sheet, axis: Axis, column: Column) -> None:
        self.axis = axis
        self._column = column
        self._time = sheet.columns[0].unit
        self._rate = sheet.find("vel", column.axis, drive=column.drive)
        self._rate_unit = 0.0 if self._rate is None else sheet.columns[self._rate].unit
        self._last: Array | None = None
        self._turns = 0
        self._far = False
        self.counted = self.turned = column.counted

    def counted_on(self, numbers: Array, place: int) -> Array:
        """Return the column's numbers with all turns counted: (n,)."""
        before = numbers[:1] if self._last is None else self._last
        rows = np.concatenate([before, numbers])
        own, wrap = rows[:, place], self._column.wrap
        steps = np.diff(own)
        turns = -np.rint((steps - self._expected(rows)) / wrap)
        if not self._column.counted:
            low, high = np.minimum(own[:-1], own[1:]), np.maximum(own[:-1], own[1:])
            inside = ((low >= 0) & (high <= wrap)) | ((low >= -wrap / 2) & (high <= wrap / 2))
            turns = np.where(inside & ~self._possible(rows, steps), turns, 0.0)
        counts = self._turns + np.cumsum(turns)
        self.turned = self.turned or bool(np.any(turns))
        self._turns = int(counts[-1])
        self._last = numbers[-1:].copy()
        counted: Array = own[1:] + wrap * counts
        return counted

    def notes(self) -> list[str]:
        """Return what should be known of it."""
        name, wrap = self._column.name, f"{self.wrap:g} {self.axis.unit}"
        if not self.turned:
            return []
        notes = []
        if not self._column.counted:
            notes.append(f"{name} starts again after {wrap}: its turns are counted")
        if self._far:
            told = "the shorter way is taken" if self._rate is None else "its velocities tell it"
            notes.append(f"{name} may turn by more than half of {wrap} between two rows; {told}")
        return notes

    @property
    def wrap(self) -> float:
        """What is counted until it starts again [mm or deg]."""
        return self._column.wrap * abs(self._column.unit)

    def _possible(self, rows: Array, steps: Array) -> Flags:
        """Tell which steps from row to row, (n - 1,), the axis can make as they stand.

        Over a time h its velocity bounds a step, and the mean of the velocities at both ends tells
        it to a h² / 4, with the greatest acceleration a.
        """
        spans = np.maximum(np.diff(rows[:, 0]) * self._time, 0.0)
        limits, way = self.axis.limits, steps * self._column.unit
        rounding = ROUNDED * self.wrap
        possible = np.abs(way) <= limits.velocity * spans + rounding
        if self._rate is not None:
            velocity = rows[:, self._rate] * self._rate_unit
            told = 0.5 * (velocity[:-1] + velocity[1:]) * spans
            sway = max(limits.acceleration, limits.deceleration) * spans**2 / 4
            possible &= np.abs(way - told) <= sway + rounding
        return possible

    def _expected(self, rows: Array) -> Array:
        """Return what the column is expected to change by, (n - 1,): 0 where a wrap tells it."""
        spans = np.maximum(np.diff(rows[:, 0]) * self._time, 0.0)
        reach = self.axis.velocity * spans
        far = reach >= self.wrap / 2
        if not far.any():
            return np.zeros(len(rows) - 1)
        self._far = True
        if self._rate is None:
            return np.zeros(len(rows) - 1)
        velocity = rows[:, self._rate] * self._rate_unit
        way = 0.5 * (velocity[:-1] + velocity[1:]) * spans
        expected: Array = np.where(far, np.clip(way, -reach, reach), 0.0) / self._column.unit
        return expected


def likely_turns(first: float, turning: Turning) -> list[int]:
    """Return the turns in which a first position [deg] is in the travel, the likeliest first.

    Of a counter the likeliest is that nearest to 0; what may not start again is taken as it is. If
    the position is in the travel in no turn, those that come nearest on either side are returned.
    """
    low, high = turning.axis.travel
    wrap = turning.wrap
    least = math.ceil((low - first) / wrap - NEAR)
    most = math.floor((high - first) / wrap + NEAR)
    if most < least:
        least, most = most, least
    nearest = -first / wrap if turning.counted else 0.0
    own = min(max(round(nearest), least), most)
    turns = range(max(least, own - MOST_TURNS), min(most, own + MOST_TURNS) + 1)
    found = sorted(turns, key=lambda turn: (abs(turn - nearest), -turn))[:MOST_TURNS]
    return found if turning.counted else [0, *(turn for turn in found if turn)]
