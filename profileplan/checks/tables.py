"""Does a setpoint table keep the limits, whoever wrote it?"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.checks.findings import TICK_TOLERANCE, Finding
from profileplan.checks.table_axes import BEFORE, AxisJudge, Held, Window
from profileplan.checks.table_cubics import LONG, refined
from profileplan.checks.table_digits import significant_decimals
from profileplan.checks.table_extremes import Doubt, Extreme, Places, Steps
from profileplan.checks.table_notes import leap_note, notes_on, placed
from profileplan.checks.table_turns import TravelTurns
from profileplan.checks.table_twins import TwinJudge
from profileplan.errors import Fault, InputError
from profileplan.inputs.rules import PERIOD
from profileplan.setpoints.reading import BLOCK, Rows, converted, last_decimals
from profileplan.setpoints.sets import table_files
from profileplan.setpoints.turns import Turns

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
    from pathlib import Path

    import numpy.typing as npt

    from profileplan.checks.table_axes import Leap
    from profileplan.checks.table_clearance import ClearanceJudge
    from profileplan.inputs import Dialect, Machine
    from profileplan.motion.polynomials import Array
    from profileplan.setpoints import SetpointTable
    from profileplan.setpoints.columns import Sheet
    from profileplan.setpoints.sets import TableFiles

FIRST_ROWS = 1000
"""Rows that tell the period."""

MANY = 0.9
"""Share of rows that a pace must explain."""

REPEATED = 1e-15
"""A step backward in time [s] that stands for none at all: a repeated stamp has it."""

LEAST = 1e-12
"""Time [s] between two rows below which they have the same stamp."""

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
    """What a table in a file makes of the requirements.

    ``unjudged``: names of columns that were not judged. ``notes``: what should be known of how the
    others were.
    """

    findings: tuple[Finding, ...]
    unjudged: tuple[str, ...]
    notes: tuple[str, ...] = ()


class Manner(NamedTuple):
    """How a table in a file is to be understood.

    ``dialect``: how it is written; default: as it looks. ``headings``: those of a table that has
    none; or ``columns``: what such a table holds of each axis. ``points``: whether a drive follows
    cubics from row to row; default: where rows are uneven.
    """

    dialect: Dialect | None = None
    headings: Sequence[str] | None = None
    columns: Sequence[str] | None = None
    points: bool | None = None


class Pace(NamedTuple):
    """How the times of a table go on.

    ``period`` [s] from row to row; ``tolerance`` [s] of it; ``even``: whether differences are
    taken by it, or by the times; ``required``: whether times must keep it; ``points``: whether a
    drive follows cubics from row to row.
    """

    period: float
    tolerance: float
    even: bool = True
    required: bool = True
    points: bool = False


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
    axes = [
        AxisJudge(axis, Held(position), steps)
        for axis, position in zip(machine.axes, positions, strict=True)
    ]
    judge = _TableJudge(axes, steps, Pace(period, TICK_TOLERANCE))
    # A table in memory has no lines; its rows are counted from 1.
    numbers = np.column_stack([table.time, table.position])
    judge.see(Rows(np.arange(1, len(numbers) + 1), numbers))
    judge.finish()
    kept = (*OF_POSITIONS, "even period")
    return tuple(
        replace(finding, line=None, first=None)
        for finding in (*judge.findings(), *judge.times())
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
    return judge_file(path, machine, manner=Manner(dialect), progress=progress).findings


def judge_file(
    path: Path,
    machine: Machine,
    *,
    manner: Manner | None = None,
    progress: Callable[[int, int], None] | None = None,
    block: int = BLOCK,
) -> TableJudgement:
    """Judge a setpoint table of any size in a file.

    Parameters
    ----------
    path : Path
        A text of cells; or JSON Lines, .npy or Parquet, by its ending. If it is a part of a table
        that is split, and others lie beside it, all are judged as one table.
    machine : Machine
    manner : Manner, optional
        How it is to be understood; default: as it looks.
    progress : callable, optional
        Called with the bytes read so far and the bytes in all.
    block : int
        About how much is read together [bytes].

    Returns
    -------
    TableJudgement
        Findings axis by axis: travel, step, the differences of positions, what cubics between
        points do, columns of rates, rest at both ends; then second drives, times, signals and the
        clearance. Each has the line of the worst value, and, if it is not met, the first row that
        breaks it.

    Raises
    ------
    InputError
        The file cannot be read, is no table for this machine, or has rows that are no numbers.
    """
    manner = manner or Manner()
    files = table_files(
        path,
        machine,
        dialect=manner.dialect,
        headings=manner.headings,
        columns=manner.columns,
    )
    judge: _FileJudge | None = None
    for rows in _gathered(files.read(block=block, progress=progress)):
        if judge is None:
            own = manner.dialect or machine.setpoints.dialect
            fixed = significant_decimals(rows.numbers, files.sheet, machine, own.significant)
            judge = _FileJudge(files.sheet, machine, rows, points=manner.points, fixed=fixed)
        judge.see(rows)
    if judge is None:  # what has no rows has raised
        return TableJudgement((), ())
    return judge.judgement(files)


class _FileJudge:
    """Judges the rows of a table in a file, in their order."""

    def __init__(
        self,
        sheet: Sheet,
        machine: Machine,
        rows: Rows,
        *,
        points: bool | None,
        fixed: Mapping[int, int],
    ) -> None:
        self._sheet = sheet
        self._machine = machine
        held = {
            number: Held(place, *(sheet.find(rate, number) for rate in ("vel", "acc", "jerk")))
            for place, column in enumerate(sheet.columns)
            if column.quantity == "pos" and column.drive == 0 and (number := column.axis) >= 0
        }
        units = np.abs([column.unit for column in sheet.columns])
        positions = [one.position for one in held.values()]
        self._steps = Steps(units, positions, decimals=sheet.decimals, fixed=fixed)
        self._turns = Turns(sheet, machine)
        pace = _pace(rows, sheet, machine, held=tuple(held.values()), points=points)
        self._travels = {
            number: TravelTurns(machine.axes[number], turning, self._steps)
            for number, one in held.items()
            if (turning := self._turns.of(one.position)) is not None
        }
        axes = {
            number: AxisJudge(
                machine.axes[number],
                one,
                self._steps,
                turns=self._travels.get(number),
                between=pace.points,
            )
            for number, one in held.items()
        }
        self._judge = _TableJudge(list(axes.values()), self._steps, pace)
        self._pace = pace
        if machine.keepouts and len(held) == len(machine.axes):
            # Only a cell with something to hit pays for the geometry.
            from profileplan.checks.table_clearance import ClearanceJudge  # noqa: PLC0415

            self._judge.clearance = ClearanceJudge(machine, positions, self._steps)
            if pace.points:
                self._judge.cubics = [
                    (one.position, one.velocity)
                    for one in held.values()
                    if one.velocity is not None
                ]
        self._twins = [
            TwinJudge(sheet, number, machine.axes[number], steps=self._steps) for number in held
        ]
        self._signals = {name: _Signal(self._steps) for name in sheet.signals()}

    def see(self, rows: Rows) -> None:
        """Judge rows, as they stand in the file."""
        self._steps.see(rows.numbers)
        numbers = converted(self._turns.counted_on(rows.numbers), self._sheet)
        self._judge.see(Rows(rows.lines, numbers))
        places = Places(rows.lines, numbers[:, 0])
        for twin in self._twins:
            twin.see(numbers, places)
        for name, column in self._sheet.signals().items():
            self._signals[name].see(numbers[:, column], places)

    def judgement(self, files: TableFiles) -> TableJudgement:
        """Return what was found in all rows."""
        self._judge.finish()
        found = list(self._judge.findings())
        found += [finding for twin in self._twins for finding in twin.findings()]
        found += list(self._judge.times())
        states = {name: signal.finding(name) for name, signal in self._signals.items()}
        found += [finding for finding in states.values() if finding is not None]
        found += self._judge.nearest()
        none = [name for name, finding in states.items() if finding is None]
        notes = [
            *notes_on(files, self._machine, points=self._pace.points),
            *self._turns.notes(),
            *(note for travel in self._travels.values() for note in travel.notes()),
            *(leap_note(leap, files) for leap in self._judge.leaps()),
        ]
        if len(files.parts) > 1:
            found = [placed(finding, files) for finding in found]
        return TableJudgement(tuple(found), (*self._sheet.unread, *none), tuple(notes))


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

    def __init__(self, axes: list[AxisJudge], steps: Steps, pace: Pace) -> None:
        self._pace = pace
        self._axes = axes
        self._even, self._rising = Extreme(steps), Extreme(steps)
        self._last: Window | None = None
        self.clearance: ClearanceJudge | None = None
        self.cubics: Sequence[tuple[int, int]] = ()

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
            values, spans = window.values[BEFORE - 1 :], window.spans[BEFORE - 1 :]
            if self.cubics:
                values, spans, kept = refined(values, spans, kept, held=self.cubics)
            self.clearance.see(values, spans, kept)
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
            axis.see_last(end)
        rows = [-3, -2, -1, -1, -1, -1]
        spans = np.concatenate([last.spans[-2:], np.full(BEFORE, span)])
        places = Places(last.places.lines[rows], last.places.time[rows])
        still = Window(places, last.values[rows], spans, 2 * BEFORE)
        for axis in self._axes:
            axis.see_standstill(still)

    def findings(self) -> Iterator[Finding]:
        """Yield the findings on axes."""
        for axis in self._axes:
            yield from axis.findings()

    def times(self) -> Iterator[Finding]:
        """Yield the findings on times."""
        if self._pace.required and (found := self._even.finding("even period", "s")):
            yield found
        if found := self._rising.finding("rising time", "s"):
            least = -found.value if found.value != REPEATED else 0.0
            yield replace(found, value=least, limit=0.0, margin=least)

    def leaps(self) -> list[Leap]:
        """Return where the accelerations of axes with a jerk limit leap by most."""
        return [axis.leap for axis in self._axes if axis.leap is not None]

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
        return np.where(spans > LEAST, spans, LONG)

    def _see_times(self, places: Places) -> None:
        spans = np.diff(places.time)
        later = Places(places.lines[1:], places.time[1:])
        uneven = np.abs(spans - self._pace.period)
        doubt = Doubt(noise=4 * np.spacing(np.abs(later.time)))
        self._even.see(uneven, self._pace.tolerance, later, doubt)
        backward = np.where(np.abs(spans) <= LEAST, REPEATED, -spans)
        self._rising.see(backward, 0.0, later)


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


def _pace(
    rows: Rows, sheet: Sheet, machine: Machine, *, held: Sequence[Held], points: bool | None
) -> Pace:
    """Return how the times of a table go on, by its first rows.

    Uneven rows with positions and velocities, and no more, are points between which a drive follows
    cubics; with accelerations too it is not known what it follows.

    Parameters
    ----------
    rows : Rows
    sheet : Sheet
    machine : Machine
    held : sequence of Held
        What there is of each axis: if every one has a velocity, times may be uneven.
    points : bool, optional
        Whether the rows are known to be such points, or to be none.

    Raises
    ------
    InputError
        The period is out of range, or velocities are missed.
    """
    column = sheet.columns[0]
    rates = bool(held) and all(one.velocity is not None for one in held)
    if points and not rates:
        message = "needed for points between which a drive follows cubics"
        raise InputError([Fault("columns of velocity", message, sheet.file)])
    time = rows.numbers[:FIRST_ROWS, 0] * column.unit
    spans = np.diff(time)
    if not spans.size:
        return Pace(machine.setpoints.period, TICK_TOLERANCE)
    period = float(np.median(spans))
    bare = points is None and rates and all(one.acceleration is None for one in held)
    cubic = Pace(period, TICK_TOLERANCE, even=False, required=False, points=True)
    # To the picosecond: differences of times are rounded.
    if points or (bare and period > PERIOD.high):
        return cubic
    if not PERIOD.holds(round(period, 12)):
        message = f"rows {period:g} s apart; allowed: {PERIOD.describe('s')}"
        raise InputError([Fault(column.name, message, sheet.file)])
    off = np.abs(spans - period) - 4 * np.spacing(np.abs(time[1:])) > TICK_TOLERANCE
    found = _rounded_pace(rows.numbers[:FIRST_ROWS, :1], sheet, machine, off)
    # Stamps as coarse as the time between them tell nothing: these are points at whole numbers.
    if found is not None and not (bare and found.tolerance > found.period / 4):
        return found
    # Points may stand as far apart as allowed for most of the time.
    ticks = abs(period - machine.setpoints.period) <= TICK_TOLERANCE
    if np.mean(off) < (0.5 if ticks or not bare else 1 - MANY):
        return Pace(period, TICK_TOLERANCE)
    return (
        cubic
        if bare
        else Pace(period, TICK_TOLERANCE, even=False, required=not rates or points is False)
    )


def _rounded_pace(
    stamps: Array, sheet: Sheet, machine: Machine, off: npt.NDArray[np.bool_]
) -> Pace | None:
    """Return the pace of stamps that are rounded to fewer decimals than their period has.

    Then they are as near to an even pace as their last decimal.

    Parameters
    ----------
    stamps : (n, 1) array
    sheet : Sheet
    machine : Machine
    off : (n - 1,) array of bool
        Which of them are not a median period behind the one before.
    """
    unit = sheet.columns[0].unit
    time = stamps[:, 0] * unit
    decimals = last_decimals(stamps, np.array(sheet.decimals[:1], dtype=np.intp))
    digit = float(10.0 ** -decimals[0]) * unit
    mean = float((time[-1] - time[0]) / off.size)
    for likely in (machine.setpoints.period, mean):
        ticks = time[0] + likely * np.arange(time.size)
        rounded = np.mean(np.abs(time - ticks) <= digit * (1 + TICK_TOLERANCE)) > MANY
        share = likely / digit
        whole = abs(share - round(share)) * digit <= TICK_TOLERANCE
        if rounded and not whole and (likely != mean or np.mean(~off) < MANY):
            return Pace(likely, digit * (1 + TICK_TOLERANCE))
    return None
