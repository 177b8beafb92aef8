"""Does a setpoint table keep the limits, whoever wrote it?"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.checks.findings import TICK_TOLERANCE, Finding
from profileplan.checks.table_axes import BEFORE, AxisJudge, Held, Window
from profileplan.checks.table_extremes import Doubt, Extreme, Places, Steps
from profileplan.errors import Fault, InputError
from profileplan.inputs.rules import PERIOD
from profileplan.setpoints.layout import layout_of
from profileplan.setpoints.reading import BLOCK, Rows, converted, last_decimals, read_rows

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator, Sequence
    from pathlib import Path

    from profileplan.checks.table_clearance import ClearanceJudge
    from profileplan.inputs import Dialect, Machine
    from profileplan.motion.polynomials import Array
    from profileplan.setpoints import SetpointTable
    from profileplan.setpoints.layout import Layout

FIRST_ROWS = 1000
"""Rows that tell the period."""

MANY = 0.9
"""Share of rows that a pace must explain."""

REPEATED = 1e-15
"""A step backward in time [s] that stands for none at all: a repeated stamp has it."""

LONG = 1e6
"""Time [s] that is taken for a step backward in time, so that nothing is told of it."""

RARE = 0.01
"""Share of rows in which a column may hold something else than 0 and 1 and is still a signal."""

OF_POSITIONS = (
    "travel, low end",
    "travel, high end",
    "velocity",
    "acceleration",
    "deceleration",
    "jerk",
)
"""What is judged of the positions of a table in memory."""


class TableJudgement(NamedTuple):
    """What a table in a file makes of the requirements, and which columns were not judged."""

    findings: tuple[Finding, ...]
    unjudged: tuple[str, ...]


class Pace(NamedTuple):
    """How the times of a table go on.

    ``period`` [s] from row to row; ``tolerance`` [s] of it; ``even``: whether differences are
    taken by it, or by the times; ``required``: whether times must keep it.
    """

    period: float
    tolerance: float
    even: bool = True
    required: bool = True


def check_table(table: SetpointTable, machine: Machine) -> tuple[Finding, ...]:
    """Judge the positions of a setpoint table by their differences.

    The machine stands before the first row and after the last one. If a motion keeps its limits,
    then so do the first, second and third difference of its positions, divided by the period, its
    square and its cube: each is a mean of the derivative over the rows that it spans. So a
    difference beyond a limit proves that every motion through these positions breaks it.

    Parameters
    ----------
    table : SetpointTable
    machine : Machine

    Returns
    -------
    tuple of Finding
        Axis by axis: travel, velocity, acceleration, deceleration and jerk; then the period.
        Where rounding alone could break a limit the finding is not ``decided``.
    """
    spans = np.diff(table.time)
    period = float(np.median(spans)) if spans.size else machine.setpoints.period
    count = len(machine.axes)
    positions = list(range(1, count + 1))
    steps = Steps(np.ones(count + 1), positions, known=table.position_step)
    held = [Held(position) for position in positions]
    judge = _TableJudge(machine, held, steps, Pace(period, TICK_TOLERANCE))
    # A table in memory has no lines; its rows are counted from 1.
    numbers = np.column_stack([table.time, table.position])
    judge.see(Rows(np.arange(1, len(numbers) + 1), numbers))
    judge.finish()
    kept = (*OF_POSITIONS, "even period")
    return tuple(
        replace(finding, line=None, first=None)
        for finding in judge.findings()
        if finding.check in kept
    )


def check_file(
    path: Path,
    machine: Machine,
    *,
    dialect: Dialect | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> tuple[Finding, ...]:
    """Judge a setpoint table of any size in a file, as ``judge_file`` does."""
    return judge_file(path, machine, dialect=dialect, progress=progress).findings


def judge_file(
    path: Path,
    machine: Machine,
    *,
    dialect: Dialect | None = None,
    headings: Sequence[str] | None = None,
    progress: Callable[[int, int], None] | None = None,
    block: int = BLOCK,
) -> TableJudgement:
    """Judge a setpoint table of any size in a file.

    Parameters
    ----------
    path : Path
    machine : Machine
    dialect : Dialect, optional
        How it is written; default: as it looks.
    headings : sequence of str, optional
        The headings of a table that has none.
    progress : callable, optional
        Called with the bytes read so far and the bytes in all.
    block : int
        About how much is read together [bytes].

    Returns
    -------
    TableJudgement
        Findings axis by axis: travel, step, the differences of positions, columns of rates, rest at
        both ends; then times, signals and the clearance. Each has the line of the worst value,
        and, if it is not met, the first row that breaks it.

    Raises
    ------
    InputError
        The file cannot be read, is no table for this machine, or has rows that are no numbers.
    """
    layout = layout_of(path, machine, dialect=dialect, headings=headings)
    columns = layout.columns
    positions = [index for index, column in enumerate(columns) if column.quantity == "pos"]
    held = [
        Held(positions[axis], *(layout.find(rate, axis) for rate in ("vel", "acc", "jerk")))
        for axis in range(len(machine.axes))
    ]
    units = np.abs([column.unit for column in columns])
    steps = Steps(units, positions, decimals=layout.decimals)
    judge: _TableJudge | None = None
    signals = {name: _Signal(steps) for name in layout.signals()}
    for rows in _gathered(read_rows(layout, block=block, progress=progress)):
        numbers = converted(rows.numbers, layout)
        steps.see(rows.numbers)
        if judge is None:
            rates = all(one.velocity is not None for one in held)
            pace = _pace(rows, layout, machine, rates=rates)
            judge = _TableJudge(machine, held, steps, pace)
            if machine.keepouts:
                # Only a cell with something to hit pays for the geometry.
                from profileplan.checks.table_clearance import ClearanceJudge  # noqa: PLC0415

                judge.clearance = ClearanceJudge(machine, positions, steps)
        judge.see(Rows(rows.lines, numbers))
        places = Places(rows.lines, numbers[:, 0])
        for name, column in layout.signals().items():
            signals[name].see(numbers[:, column], places)
    if judge is None:  # what has no rows has raised
        return TableJudgement((), ())
    judge.finish()
    found = list(judge.findings())
    states = {name: signal.finding(name) for name, signal in signals.items()}
    found += [finding for finding in states.values() if finding is not None]
    found += judge.nearest()
    none = [name for name, finding in states.items() if finding is None]
    return TableJudgement(tuple(found), (*layout.unread, *none))


class _Signal:
    """Judges whether a column holds 0 and 1 only."""

    def __init__(self, steps: Steps) -> None:
        self._extreme = Extreme(steps)
        self._others = 0
        self._rows = 0

    def see(self, values: Array, places: Places) -> None:
        other = ~((values == 0) | (values == 1))
        self._others += int(np.count_nonzero(other))
        self._rows += values.size
        self._extreme.see(other.astype(np.float64), 0.0, places)

    def finding(self, name: str) -> Finding | None:
        """Return the finding; None of a column that seems to be no signal."""
        if self._others > max(1.0, RARE * self._rows):
            return None
        found = self._extreme.finding("rows not 0 or 1", "")
        if found is None:
            return None
        count = float(self._others)
        return replace(found, value=count, margin=-count, what=name)


class _TableJudge:
    """Judges rows in their order."""

    def __init__(self, machine: Machine, held: list[Held], steps: Steps, pace: Pace) -> None:
        self._pace = pace
        self._axes = [
            AxisJudge(axis, one, steps) for axis, one in zip(machine.axes, held, strict=True)
        ]
        self._even, self._rising = Extreme(steps), Extreme(steps)
        self._last: Window | None = None
        self.clearance: ClearanceJudge | None = None

    def see(self, rows: Rows) -> None:
        """Judge rows: lines and numbers in units of the axes, time first."""
        time = rows.numbers[:, 0]
        if self._last is None:
            window = self._first(rows)
            self._see_start(window, rows)
        else:
            before = self._last
            lines = np.concatenate([before.places.lines[-BEFORE:], rows.lines])
            times = np.concatenate([before.places.time[-BEFORE:], time])
            spans = np.concatenate([before.spans[1 - BEFORE :], self._spans(times[BEFORE - 1 :])])
            values = np.concatenate([before.values[-BEFORE:], rows.numbers])
            real = max(0, before.real - before.count)
            window = Window(Places(lines, times), values, spans, real)
        for axis in self._axes:
            axis.see(window)
        start = max(BEFORE - 1, window.real)
        self._see_times(Places(window.places.lines[start:], window.places.time[start:]))
        if self.clearance is not None:
            kept = Places(window.places.lines[BEFORE - 1 :], window.places.time[BEFORE - 1 :])
            self.clearance.see(window.values[BEFORE - 1 :], window.spans[BEFORE - 1 :], kept)
        self._last = window

    def finish(self) -> None:
        """Judge the end: the machine stands after the last row."""
        last = self._last
        if last is None:
            return
        end = Places(last.places.lines[-1:], last.places.time[-1:])
        span = float(last.spans[-1])
        for axis in self._axes:
            axis.see_end(last.values[-2:], span, end, name="end")
            axis.see_end_column(axis.velocity(last.values[-1]), end, name="end")
        rows = [-3, -2, -1, -1, -1, -1]
        spans = np.concatenate([last.spans[-2:], np.full(BEFORE, span)])
        places = Places(last.places.lines[rows], last.places.time[rows])
        still = Window(places, last.values[rows], spans, 2 * BEFORE)
        for axis in self._axes:
            axis.see_standstill(still)

    def findings(self) -> Iterator[Finding]:
        """Yield the findings on axes and times."""
        for axis in self._axes:
            yield from axis.findings()
        if self._pace.required and (found := self._even.finding("even period", "s")):
            yield found
        if found := self._rising.finding("rising time", "s"):
            least = -found.value if found.value != REPEATED else 0.0
            yield replace(found, value=least, limit=0.0, margin=least)

    def nearest(self) -> list[Finding]:
        """Return the finding on the clearance, if there is anything to hit."""
        found = None if self.clearance is None else self.clearance.finding()
        return [] if found is None else [found]

    def _first(self, rows: Rows) -> Window:
        """Return the window of the first rows: the machine stands before them."""
        copies = [0] * BEFORE + list(range(len(rows.lines)))
        time = rows.numbers[copies, 0]
        spans = self._spans(time[BEFORE:])
        first = spans[0] if spans.size else self._pace.period
        spans = np.concatenate([np.full(BEFORE, first), spans])
        return Window(Places(rows.lines[copies], time), rows.numbers[copies], spans, BEFORE)

    def _see_start(self, window: Window, rows: Rows) -> None:
        # A table of one row is compared with the standstill before it.
        pair = rows.numbers[:2] if len(rows.lines) > 1 else rows.numbers[[0, 0]]
        start = Places(rows.lines[:1], rows.numbers[:1, 0])
        for axis in self._axes:
            axis.see_end(pair, float(window.spans[BEFORE - 1]), start, name="start")
            axis.see_end_column(axis.velocity(rows.numbers[0]), start, name="start")

    def _spans(self, times: Array) -> Array:
        """Return the times from row to row that differences are taken by: above 0."""
        if self._pace.even:
            return np.full(max(times.size - 1, 0), self._pace.period)
        spans = np.diff(times)
        # Nothing can be told of what happens in no time.
        return np.where(spans > 0, spans, LONG)

    def _see_times(self, places: Places) -> None:
        spans = np.diff(places.time)
        later = Places(places.lines[1:], places.time[1:])
        uneven = np.abs(spans - self._pace.period)
        doubt = Doubt(noise=4 * np.spacing(np.abs(later.time)))
        self._even.see(uneven, self._pace.tolerance, later, doubt)
        self._rising.see(np.where(spans == 0, REPEATED, -spans), 0.0, later)


def _gathered(blocks: Iterable[Rows]) -> Iterator[Rows]:
    """Yield blocks of rows, of which the first has enough to tell the period."""
    first: list[Rows] = []
    count = 0
    for rows in blocks:
        if count >= FIRST_ROWS:
            yield rows
            continue
        first.append(rows)
        count += len(rows.lines)
        if count >= FIRST_ROWS:
            yield _joined(first)
    if first and count < FIRST_ROWS:
        yield _joined(first)


def _joined(blocks: list[Rows]) -> Rows:
    return Rows(
        np.concatenate([rows.lines for rows in blocks]),
        np.concatenate([rows.numbers for rows in blocks]),
    )


def _pace(rows: Rows, layout: Layout, machine: Machine, *, rates: bool) -> Pace:
    """Return how the times of a table go on, by its first rows.

    Parameters
    ----------
    rows : Rows
    layout : Layout
    machine : Machine
    rates : bool
        Whether every axis has a column of velocity: then times may be uneven.

    Raises
    ------
    InputError
        The period is out of range.
    """
    column = layout.columns[0]
    stamps = rows.numbers[:FIRST_ROWS, :1]
    time = stamps[:, 0] * column.unit
    spans = np.diff(time)
    if not spans.size:
        return Pace(machine.setpoints.period, TICK_TOLERANCE)
    period = float(np.median(spans))
    # To the picosecond: differences of times are rounded.
    if not PERIOD.holds(round(period, 12)):
        message = f"rows {period:g} s apart; allowed: {PERIOD.describe('s')}"
        raise InputError([Fault(column.name, message, layout.file)])
    off = np.abs(spans - period) - 4 * np.spacing(np.abs(time[1:]))
    decimals = last_decimals(stamps, np.array(layout.decimals[:1], dtype=np.intp))
    digit = float(10.0 ** -decimals[0]) * column.unit
    mean = float((time[-1] - time[0]) / spans.size)
    for likely in (machine.setpoints.period, mean):
        # Stamps may be rounded: then they are as near to an even pace as their last decimal.
        ticks = time[0] + likely * np.arange(time.size)
        rounded = np.mean(np.abs(time - ticks) <= digit * (1 + TICK_TOLERANCE)) > MANY
        share = likely / digit
        whole = abs(share - round(share)) * digit <= TICK_TOLERANCE
        if rounded and not whole and (likely != mean or np.mean(off <= TICK_TOLERANCE) < MANY):
            return Pace(likely, digit * (1 + TICK_TOLERANCE))
    if np.mean(off <= TICK_TOLERANCE) > 0.5:
        return Pace(period, TICK_TOLERANCE)
    return Pace(period, TICK_TOLERANCE, even=False, required=not rates)
