"""Does a rotary axis keep its travel whose counter does not tell in which turn it is?

The turn of the first row is one that keeps all rows in the travel, if there is one.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

from profileplan.checks.table_extremes import Doubt, Extreme, Places, Steps
from profileplan.setpoints.turns import likely_turns

if TYPE_CHECKING:
    from profileplan.checks.findings import Finding
    from profileplan.inputs import Axis
    from profileplan.motion.polynomials import Array
    from profileplan.setpoints.turns import Turning

LOW, HIGH = "travel, low end", "travel, high end"


class _Ends(NamedTuple):
    low: Extreme
    high: Extreme


class TravelTurns:
    """Judges the travel of an axis for every turn that its first row may be in.

    Parameters
    ----------
    axis : Axis
    turning : Turning
    steps : Steps
    """

    def __init__(self, axis: Axis, turning: Turning, steps: Steps) -> None:
        self._axis = axis
        self._turning = turning
        self._steps = steps
        self._wrap = turning.wrap
        self._ends: dict[int, _Ends] = {}
        self._first = 0.0

    def see(self, low: Array, high: Array, places: Places, doubt: Doubt) -> None:
        """Judge the lowest and highest positions at some rows, (n,)."""
        if not low.size:
            return
        if not self._ends:
            self._first = float(low[0])
            self._ends = {
                turn: _Ends(Extreme(self._steps), Extreme(self._steps))
                for turn in likely_turns(self._first, self._turning)
            }
        least, most = self._axis.travel
        lowest, highest = float(low.min()), float(high.max())
        for turn, ends in self._ends.items():
            by = turn * self._wrap
            if _tells(ends.low, -(lowest + by), -least):
                ends.low.see(-(low + by), -least, places, doubt)
            if _tells(ends.high, highest + by, most):
                ends.high.see(high + by, most, places, doubt)

    def chosen(self) -> dict[str, Extreme]:
        """Return what was found of the travel in the turn that fits best, by check."""
        turn = self._chosen()
        return {} if turn is None else dict(zip((LOW, HIGH), self._ends[turn], strict=True))

    def notes(self) -> list[str]:
        """Return whether other turns fit as well."""
        turn = self._chosen()
        if turn is None or not self._turning.turned:
            return []
        others = len(self._fitting()) - 1
        if others < 1:
            return []
        unit, name = self._axis.unit, self._axis.name
        taken = f"{self._first + turn * self._wrap:g} {unit}"
        keep = "turns keep" if others > 1 else "turn keeps"
        note = f"{name}: its counter does not tell the turn; {taken} is taken for the first row, "
        return [f"{note}and {others} other {keep} the travel as well"]

    def _fitting(self) -> list[int]:
        return [
            turn
            for turn, ends in self._ends.items()
            if all(found is not None and found.ok for found in _findings(ends))
        ]

    def _chosen(self) -> int | None:
        if not self._ends:
            return None
        if not self._turning.turned:
            return 0
        fitting = self._fitting()
        return fitting[0] if fitting else min(self._ends, key=lambda t: _excess(self._ends[t]))


def _tells(extreme: Extreme, value: float, limit: float) -> bool:
    """Tell whether a value is the worst so far, or beyond its limit."""
    return extreme.worst is None or value > extreme.worst.value or value > limit


def _findings(ends: _Ends) -> list[Finding | None]:
    return [ends.low.finding(LOW, ""), ends.high.finding(HIGH, "")]


def _excess(ends: _Ends) -> float:
    """Return by how much the travel is passed at most."""
    found = [end.worst for end in ends if end.worst is not None]
    return max((worst.value - worst.limit for worst in found), default=0.0)
