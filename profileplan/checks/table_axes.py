"""Does an axis keep its limits, row by row?

The machine stands before the first row and after the last one. If a motion keeps its limits, then
so do the divided differences of its positions, each a mean of the derivative over the rows that it
spans. So a difference beyond a limit proves that every motion through these positions breaks it. A
column of velocity is judged by the velocity limit, and by how far the velocity at an instant can be
from its mean over the rows beside it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.checks.findings import FLOAT_ROUNDING, QUANTITIES, nearness, rate_unit
from profileplan.checks.table_cubics import LONG, Cubics, Points, cubics, doubts
from profileplan.checks.table_extremes import Doubt, Extreme, Places, Steps
from profileplan.checks.table_turns import HIGH, LOW

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.checks.findings import Finding, Row
    from profileplan.checks.table_turns import TravelTurns
    from profileplan.inputs import Axis
    from profileplan.motion.polynomials import Array

BETWEEN = "{} between points"
"""What a drive does that follows cubics between rows."""

CHECKS = {
    LOW: 0,
    HIGH: 0,
    "step": 0,
    **QUANTITIES,
    **{BETWEEN.format(quantity): order for quantity, order in QUANTITIES.items()},
    "rest at start": 1,
    "rest at end": 1,
    "velocity column": 1,
    "velocity column, agreement": 1,
    "velocity column, start": 1,
    "velocity column, end": 1,
    "acceleration column": 2,
    "deceleration column": 2,
    "acceleration column, agreement": 2,
    "jerk column": 3,
}
"""What is judged of an axis, and the derivatives whose unit it has."""

UNROUNDED = (HIGH, "velocity column, start", "velocity column, end")
"""Checks with limits that may be 0, beside which a share of rounding says nothing."""

BEFORE = 3
"""Rows before those judged that differences reach back to."""

SLOW = 1e-6
"""Share of the velocity limit below which an axis counts as standing still."""


@dataclass(frozen=True, eq=False)
class Window:
    """Rows to judge, behind the ``BEFORE`` rows that come before them.

    Parameters
    ----------
    places : Places
        Lines and times of all of them, (n + 3,).
    values : (n + 3, k) array
        The numbers of all columns, in units of the axes.
    spans : (n + 2,) array [s]
        Time from row to row, above 0: the period, or what the times say.
    real : int
        Rows before this one are not in the table: the machine stands there.
    """

    places: Places
    values: Array
    spans: Array
    real: int = 0

    @property
    def count(self) -> int:
        """How many rows are to be judged."""
        return len(self.values) - BEFORE

    def upto(self, count: int) -> Places:
        """Return the places of the last rows."""
        return Places(self.places.lines[-count:], self.places.time[-count:])


class Held(NamedTuple):
    """Which columns hold an axis's position, velocity, acceleration and jerk."""

    position: int
    velocity: int | None = None
    acceleration: int | None = None
    jerk: int | None = None


class Leap(NamedTuple):
    """A change of an axis's acceleration in no time, and where it is."""

    axis: Axis
    size: float
    row: Row


class AxisJudge:
    """Judges an axis.

    Parameters
    ----------
    axis : Axis
    held : Held
    steps : Steps
    turns : TravelTurns, optional
        What judges the travel, where the counter does not tell the turn.
    between : bool
        Whether the axis follows cubics between rows.
    """

    def __init__(
        self,
        axis: Axis,
        held: Held,
        steps: Steps,
        *,
        turns: TravelTurns | None = None,
        between: bool = False,
    ) -> None:
        self._axis = axis
        self._held = held
        self._between = held.velocity if between else None
        self._steps = steps
        self._turns = turns
        self._found: dict[str, Extreme] = {}
        self._most = max(axis.limits.acceleration, axis.limits.deceleration)
        self._last_acceleration = 0.0
        self.leap: Leap | None = None

    def see(self, window: Window) -> None:
        """Judge the rows of a window."""
        with np.errstate(over="ignore"):
            noise = self._noise(window)
            self._see_travel(window)
            self._see_differences(window, noise)
            self._see_columns(window)
            self._see_agreement(window, noise)
            if self._between is not None:
                self._see_cubics(window, (self._held.position, self._between))

    def see_standstill(self, window: Window) -> None:
        """Judge the differences of the last rows and the standstill behind them."""
        self._see_differences(window, self._noise(window))

    def see_end(self, rows: Array, span: float, places: Places, *, name: str) -> None:
        """Judge whether the axis stands at an end of the table, by two rows, (2, k).

        From rest an axis gets no farther than a h² / 2 in the time h, and than j h³ / 6.
        """
        column = self._held.position
        size = np.abs(np.diff(rows[:, column])) / span
        limit = min(self._most * span / 2, self._axis.limits.jerk * span**2 / 6)
        noise = FLOAT_ROUNDING * float(np.spacing(np.abs(rows[:, column]).max())) / span
        doubt = Doubt((column,), (1 / span,), noise)
        self._extreme(f"rest at {name}").see(size, limit, places, doubt)

    def see_end_column(self, velocity: float, places: Places, *, name: str) -> None:
        """Judge whether a velocity in the first or the last row is 0."""
        if self._held.velocity is not None:
            doubt = Doubt((self._held.velocity,), (0.5,))
            value = np.array([abs(velocity)])
            self._extreme(f"velocity column, {name}").see(value, 0.0, places, doubt)

    def see_last(self, places: Places) -> None:
        """Take account of the standstill behind the last row, where a cubic ends."""
        size = abs(self._last_acceleration)
        if self.leap is not None and size > self.leap.size:
            self.leap = Leap(self._axis, size, places.row(-1))

    def velocity(self, values: Array) -> float:
        """Return what the column of velocity says in a row, (k,); 0 where there is none."""
        return 0.0 if self._held.velocity is None else float(values[self._held.velocity])

    def findings(self) -> Iterator[Finding]:
        """Yield what was found."""
        if self._turns is not None:
            self._found |= self._turns.chosen()
        for check, order in CHECKS.items():
            extreme = self._found.get(check)
            unit = rate_unit(self._axis, order)
            finding = extreme.finding(check, unit, self._axis) if extreme else None
            if finding is None:
                continue
            if check == LOW:
                # Positions were judged with the other sign.
                finding = replace(
                    finding, value=-finding.value, limit=self._axis.travel[0], rounding=0.0
                )
            if check in UNROUNDED:
                finding = replace(finding, rounding=0.0)
            yield finding

    def _extreme(self, check: str) -> Extreme:
        return self._found.setdefault(check, Extreme(self._steps))

    def _see_travel(self, window: Window) -> None:
        position = window.values[BEFORE:, self._held.position]
        doubt = Doubt((self._held.position,), (0.5,), nearness(self._axis))
        if self._between is not None:
            # As of cubics, with which these are judged together.
            doubt = Doubt((*doubt.columns, self._between), (0.5, 0.0), doubt.noise)
        self._see_ends(position, position, window.upto(position.size), doubt)

    def _see_cubics(self, window: Window, columns: tuple[int, int]) -> None:
        """Judge the cubics that end in the rows of a window, by columns of position and velocity.

        Of points that do not follow each other nothing can be told.
        """
        start = max(BEFORE - 1, window.real)
        rows, spans = window.values[start:, columns], window.spans[start:]
        position, velocity = (self._steps.coarsest(column) for column in columns)
        slow = SLOW * self._axis.limits.velocity + velocity + 3 * position / spans
        points = Points(rows[:, 0], rows[:, 1], spans, slow)
        found = cubics(points)
        allowed = doubts(points, window.places.time[start:], columns, most=self._most)
        if self._axis.jerk is not None:
            self._see_leaps(found, window.upto(len(rows)))
        follow = np.flatnonzero(spans < LONG)
        found = Cubics(*(part[follow] for part in found))
        places = window.upto(spans.size)
        ends = Places(places.lines[follow], places.time[follow])
        place = allowed[0].of(follow)
        place = place._replace(noise=place.noise + nearness(self._axis))
        self._see_ends(found.lowest, found.highest, ends, place)
        limits = self._axis.limits
        sizes = {
            "velocity": found.velocity,
            "acceleration": found.speeding,
            "deceleration": found.slowing,
            "jerk": found.jerk,
        }
        greater = max(("acceleration", "deceleration"), key=lambda name: getattr(limits, name))
        sizes[greater] = np.maximum(sizes[greater], found.standing)
        for row, (quantity, order) in enumerate(QUANTITIES.items()):
            if np.isfinite(limits[row]):
                doubt = allowed[order].of(follow)
                extreme = self._extreme(BETWEEN.format(quantity))
                extreme.see(sizes[quantity], limits[row], ends, doubt)

    def _see_ends(self, lowest: Array, highest: Array, places: Places, doubt: Doubt) -> None:
        """Judge whether lowest and highest positions are in the travel."""
        if self._turns is not None:
            self._turns.see(lowest, highest, places, doubt)
            return
        low, high = self._axis.travel
        self._extreme(LOW).see(-lowest, -low, places, doubt)
        self._extreme(HIGH).see(highest, high, places, doubt)

    def _see_leaps(self, found: Cubics, places: Places) -> None:
        """Find the greatest change of acceleration where cubics meet, or the first one begins."""
        if not found.begin.size:
            return
        before = np.concatenate([[self._last_acceleration], found.end[:-1]])
        sizes = np.abs(found.begin - before)
        most = int(sizes.argmax())
        if self.leap is None or sizes[most] > self.leap.size:
            self.leap = Leap(self._axis, float(sizes[most]), places.row(most))
        self._last_acceleration = float(found.end[-1])

    def _see_differences(self, window: Window, noise: Array) -> None:
        """Judge the differences that end in the rows of a window.

        A second difference spans a time before and one after its row. If the axis stood still at
        some instant in one of these, its mean velocity there is at most half of that time by the
        greatest acceleration. So where both are larger and of one sign, the axis ran one way, and
        acceleration or deceleration bounds the difference by its sign; elsewhere the greater of
        the two does.
        """
        spans = window.spans
        rates, weights = _differences(window.values[:, self._held.position], spans)
        velocity, acceleration, jerk = rates
        limits = self._axis.limits
        before, after = velocity[:-1], velocity[1:]
        still = 0.5 * np.maximum(spans[:-1], spans[1:]) * self._most
        one_way = (np.minimum(np.abs(before), np.abs(after)) > still) & (before * after > 0)
        slows = np.where(
            one_way, acceleration * (before + after) < 0, limits.deceleration > limits.acceleration
        )
        size = np.abs(acceleration)
        sizes = {
            "velocity": np.abs(velocity),
            "acceleration": np.where(slows, 0.0, size),
            "deceleration": np.where(slows, size, 0.0),
            "jerk": np.abs(jerk),
        }
        places = window.upto(window.count)
        way = np.abs(np.diff(window.values[:, self._held.position]))[-window.count :]
        doubt = Doubt((self._held.position,), (1.0,), noise)
        most = limits.velocity * spans[-window.count :]
        self._extreme("step").see(way, most, places, doubt)
        for row, (quantity, order) in enumerate(QUANTITIES.items()):
            if np.isfinite(limits[row]):
                weight = weights[order - 1][-window.count :]
                doubt = Doubt((self._held.position,), (weight,), noise * weight)
                values = sizes[quantity][-window.count :]
                self._extreme(quantity).see(values, limits[row], places, doubt)

    def _see_columns(self, window: Window) -> None:
        """Judge the columns of rates by the limits. At standstill the greater of both bounds."""
        limits, held = self._axis.limits, self._held
        places = window.upto(window.count)
        if held.velocity is not None:
            size = np.abs(window.values[BEFORE:, held.velocity])
            doubt = Doubt((held.velocity,), (0.5,))
            self._extreme("velocity column").see(size, limits.velocity, places, doubt)
        if held.acceleration is not None:
            values = window.values[BEFORE:, held.acceleration]
            slows = np.full(values.size, limits.deceleration > limits.acceleration)
            if held.velocity is not None:
                velocity = window.values[BEFORE:, held.velocity]
                # What is slower than the last decimals tell may run the other way.
                runs = np.abs(velocity) > SLOW * limits.velocity
                slows = np.where(runs, values * velocity < 0, slows)
                greater = np.where(runs, 0.0, self._most)
            else:
                greater = np.full(values.size, self._most)
            doubt = Doubt((held.acceleration,), (0.5,))
            for name, chosen in (("acceleration", ~slows), ("deceleration", slows)):
                size = np.where(chosen, np.abs(values), 0.0)
                limit = np.maximum(getattr(limits, name), greater)
                self._extreme(f"{name} column").see(size, limit, places, doubt)
        if held.jerk is not None and np.isfinite(limits.jerk):
            size = np.abs(window.values[BEFORE:, held.jerk])
            doubt = Doubt((held.jerk,), (0.5,))
            self._extreme("jerk column").see(size, limits.jerk, places, doubt)

    def _see_agreement(self, window: Window, noise: Array) -> None:
        """Judge how far rates in a row are from the mean rates over the rows beside it.

        Over a time h an acceleration up to a changes the velocity by a h, so that its mean is
        within a h / 2 of its value at either end. Over the times h and k before and after a row
        that makes a (h² + k²) / (2 (h + k)); with a bounded jerk j, by Taylor's theorem,
        a |k - h| / 2 + j (h³ + k³) / (6 (h + k)). The same holds one derivative higher.
        """
        held, jerk = self._held, self._axis.limits.jerk
        start = max(1, window.real)
        if held.velocity is None or len(window.values) < start + 3:
            return
        values = window.values[start:]
        spans = window.spans[start:]
        before, after = spans[:-1], spans[1:]
        both = before + after
        sway = (before**2 + after**2) / (2 * both)
        bend = self._most * np.abs(after - before) / 2 + jerk * (before**3 + after**3) / (6 * both)
        limit = np.minimum(self._most * sway, bend)
        lines, time = window.places
        places = Places(lines[start + 1 : -1], time[start + 1 : -1])
        position, velocity = values[:, held.position], values[:, held.velocity]
        size = np.abs(velocity[1:-1] - (position[2:] - position[:-2]) / both)
        own = FLOAT_ROUNDING * (
            np.spacing(np.abs(velocity[1:-1])) + np.spacing(places.time) * self._most
        )
        noise = noise[start - 1 :] * 2 / both + own
        doubt = Doubt((held.position, held.velocity), (1 / both, 0.5), noise)
        self._extreme("velocity column, agreement").see(size, limit, places, doubt)
        if held.acceleration is None or not np.isfinite(jerk):
            return
        acceleration = values[1:-1, held.acceleration]
        size = np.abs(acceleration - (velocity[2:] - velocity[:-2]) / both)
        noise = FLOAT_ROUNDING * np.spacing(np.abs(acceleration)) + 2 * own / both
        doubt = Doubt((held.velocity, held.acceleration), (1 / both, 0.5), noise)
        self._extreme("acceleration column, agreement").see(size, jerk * sway, places, doubt)

    def _noise(self, window: Window) -> Array:
        """Return what the rounding of numbers and times makes of positions, (n,) [mm].

        The greatest of the ``BEFORE`` + 1 rows that a difference spans.
        """
        position = window.values[:, self._held.position]
        speed = np.abs(np.diff(position)) / window.spans
        late = np.spacing(np.abs(window.places.time[1:])) * speed
        widest: Array = _widest(np.spacing(np.abs(position)), BEFORE + 1) + _widest(late, BEFORE)
        return FLOAT_ROUNDING * widest


def _widest(values: Array, count: int) -> Array:
    """Return the greatest of so many values in a row, at each of them."""
    widest = values[: values.size - count + 1]
    for start in range(1, count):
        widest = np.maximum(widest, values[start : values.size - count + 1 + start])
    return widest


def _differences(position: Array, spans: Array) -> tuple[list[Array], list[Array]]:
    """Return the divided differences of positions that stand for their first three derivatives.

    With each: what it changes by if every position is half a unit off, to the worse side.
    """
    rates, weights = [np.diff(position) / spans], [1 / spans]
    wide = spans
    for order in (2, 3):
        wide = wide[:-1] + spans[order - 1 :]
        rates.append(order * np.diff(rates[-1]) / wide)
        weights.append(order * (weights[-1][:-1] + weights[-1][1:]) / wide)
    return rates, weights
