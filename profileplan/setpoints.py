"""What does the drive get: positions at every tick of its period, in a file that it can play.

A table's rows stand at 0, period, 2 periods, ...; the last one is the first tick at or after the
end of the motion, at rest and on target. Units are those of the axes. Files are written under a
temporary name and then put in place, so that a reader finds the whole file or none.
"""

from __future__ import annotations

import csv
import io
import os
import tempfile
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.inputs import SetpointSettings
from profileplan.inputs.files import read_text
from profileplan.inputs.rules import PERIOD, POSITION, tidy

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping, Sequence
    from typing import TextIO

    from profileplan.inputs import Machine
    from profileplan.motion.polynomials import Array
    from profileplan.motion.schedule import Schedule, SignalEvent

TICK_TOLERANCE = 1e-6
"""Share of a period by which an end or a signal may miss a tick and still count as on it. Less
than the nanosecond that periods are counted in, more than the rounding of times."""

MOST_DECIMALS = 12
"""Decimals of a position that are told apart: more are below the rounding of numbers."""

ROWS_AT_A_TIME = 16384
"""Rows that are sampled and written together: more cost memory, fewer cost time."""

MOST_ROWS = 1_000_000_000
"""Longest table that is begun: about 100 GB on disk."""


class Column(NamedTuple):
    """A quantity that a table can hold for every axis."""

    derivative: int
    decimals: int


COLUMNS: Mapping[str, Column] = {
    "pos": Column(0, 9),
    "vel": Column(1, 6),
    "acc": Column(2, 6),
    "jerk": Column(3, 6),
}
"""Quantities by the names that select them. Positions have nine decimals, for a drive takes their
third difference: at a period of 1 ms rounding is then at most 4 mm/s³ of jerk."""

DEFAULT_COLUMNS = ("pos", "vel", "acc")


@dataclass(frozen=True, eq=False)
class SetpointTable:
    """Setpoints at the ticks of a drive's period.

    Parameters
    ----------
    axes : tuple of str
        Names of the d axes.
    time : (n,) array [s]
    position : (n, d) array [mm]
    velocity, acceleration, jerk : (n, d) arrays, optional [mm/s, mm/s², mm/s³]
    signals : mapping
        Name of a digital output → (n,) array of 0 and 1.
    position_step : float [mm]
        What the last decimal of the positions stands for; 0 where they are not rounded.
    """

    axes: tuple[str, ...]
    time: Array
    position: Array
    velocity: Array | None
    acceleration: Array | None
    jerk: Array | None
    signals: Mapping[str, Array]
    position_step: float = 0.0


def row_count(schedule: Schedule, period: float) -> int:
    """Return the number of rows of a schedule's table at a period [s]."""
    return int(np.ceil(schedule.duration / period - TICK_TOLERANCE)) + 1


def sample(
    schedule: Schedule,
    *,
    period: float | None = None,
    columns: Sequence[str] = tuple(COLUMNS),
    rows: range | None = None,
) -> SetpointTable:
    """Return the setpoints of a schedule at the ticks of a period.

    Parameters
    ----------
    schedule : Schedule
    period : float, optional [s]
        Default: that of the machine file.
    columns : sequence of str
        Keys of ``COLUMNS``; positions are always there.
    rows : range, optional
        The rows wanted, counted from 0; default: all.
    """
    period = _period(schedule, period)
    last = row_count(schedule, period) - 1
    rows = rows if rows is not None else range(last + 1)
    ticks = np.arange(rows.start, rows.stop)
    # The period is a whole number of nanoseconds, so the product is exact before the division.
    time = ticks * round(period * 1e9) / 1e9
    # The last row stands at the end or after it: at rest, on target.
    at = np.where(ticks == last, np.inf, time)
    trajectory = schedule.trajectory
    values = {
        name: trajectory.at(at, column.derivative)
        for name, column in COLUMNS.items()
        if name in columns or name == "pos"
    }
    return SetpointTable(
        axes=trajectory.axes,
        time=time,
        position=values["pos"],
        velocity=values.get("vel"),
        acceleration=values.get("acc"),
        jerk=values.get("jerk"),
        signals=_signals(schedule, time + TICK_TOLERANCE * period),
    )


def unplayed(schedule: Schedule, period: float | None = None) -> tuple[SignalEvent, ...]:
    """Return the signal events that no row shows, for the signal changes again before the next."""
    period = _period(schedule, period)
    row = {id(event): np.ceil(event.time / period - TICK_TOLERANCE) for event in schedule.events}
    lost = []
    for name in schedule.signals:
        events = [event for event in schedule.events if event.signal == name]
        lost += [one for one, other in pairwise(events) if row[id(one)] == row[id(other)]]
    return tuple(lost)


def header(machine: Machine, columns: Sequence[str], signals: Sequence[str]) -> list[str]:
    """Return the names of a table's columns: time, the axes in file order, the signals."""
    names = ["t_s"]
    names += [axis.column(column) for axis in machine.axes for column in columns]
    return [*names, *signals]


def write_csv(
    schedule: Schedule,
    file: Path,
    *,
    period: float | None = None,
    columns: Sequence[str] = DEFAULT_COLUMNS,
    progress: Callable[[int, int], None] | None = None,
) -> int:
    """Write the setpoint table of a schedule, and return its number of rows.

    Parameters
    ----------
    schedule : Schedule
    file : Path
        Replaced when the table is complete; untouched when it cannot be completed.
    period : float, optional [s]
        Default: that of the machine file.
    columns : sequence of str
        Keys of ``COLUMNS``, in the order wanted.
    progress : callable, optional
        Called with the rows written so far and the rows in all.

    Raises
    ------
    InputError
        An unknown column, a period that is out of range, a table too long, or a file that cannot
        be written.

    Source: RFC 4180 for the form of the file.
    """
    machine = schedule.job.machine
    period = _period(schedule, period)
    _judge_columns(columns)
    count = row_count(schedule, period)
    if count > MOST_ROWS:
        message = f"{count} rows at a period of {period} s; at most {MOST_ROWS} are written"
        raise InputError([Fault("period", message)])
    row = _row_format(machine, columns, schedule.signals, period)
    with replacing(file) as stream:
        csv.writer(stream).writerow(header(machine, columns, schedule.signals))
        for start in range(0, count, ROWS_AT_A_TIME):
            rows = range(start, min(start + ROWS_AT_A_TIME, count))
            table = sample(schedule, period=period, columns=columns, rows=rows)
            stream.write(row * len(rows) % tuple(_numbers(table, columns).ravel().tolist()))
            if progress:
                progress(rows.stop, count)
    return count


def read_csv(file: Path, machine: Machine) -> SetpointTable:
    """Read a setpoint table as ``write_csv`` writes it.

    Parameters
    ----------
    file : Path
    machine : Machine
        Its axes tell which columns there are; positions of every axis are needed, other columns
        of theirs are read where they are there, and all others are signals.

    Raises
    ------
    InputError
        The file cannot be read, lacks a column, or has rows that are no numbers: all of them, with
        their lines.
    """
    text = read_text(file)
    end = text.find("\n") + 1 or len(text)
    try:
        names = [name.strip() for name in next(csv.reader([text[:end]], strict=True), [])]
    except csv.Error as error:
        raise InputError([Fault("line 1", f"is no valid CSV: {error}", file)]) from error
    if missing := _header_faults(names, machine):
        raise InputError(Fault("line 1", fault, file) for fault in missing)
    numbers = _parse(text[end:], len(names), file)
    faults = _number_faults(names, numbers, machine)
    if faults:
        raise InputError(Fault(place, fault, file) for place, fault in faults)
    return _table(names, numbers, machine)


def is_table(file: Path) -> bool:
    """Tell whether a CSV file is a setpoint table: one of its columns is the time, ``t_s``."""
    try:
        with file.open(encoding="utf-8-sig", errors="replace", newline="") as stream:
            return "t_s" in next(csv.reader(stream), [])
    except (OSError, csv.Error):
        return False


@contextmanager
def replacing(file: Path) -> Iterator[TextIO]:
    """Open a text file that takes its place only when it was written to the end.

    Raises
    ------
    InputError
        The file cannot be written.
    """
    file = file.resolve()
    mode = 0o666 & ~_umask()
    try:
        if file.exists():
            mode = file.stat().st_mode & 0o777
            if not file.is_file():
                # A device or a pipe holds nothing that could be half-written.
                with file.open("w", encoding="utf-8", newline="") as stream:
                    yield stream
                return
        handle, name = tempfile.mkstemp(dir=file.parent, prefix=f".{file.name}.", suffix=".part")
    except OSError as error:
        raise _not_written(file, error) from error
    temporary = Path(name)
    try:
        with os.fdopen(handle, "w", encoding="utf-8", newline="") as stream:
            yield stream
        temporary.chmod(mode)
        temporary.replace(file)
    except OSError as error:
        raise _not_written(file, error) from error
    finally:
        temporary.unlink(missing_ok=True)


def _not_written(file: Path, error: OSError) -> InputError:
    return InputError([Fault("", f"cannot be written: {error.strerror or error}", file)])


def _umask() -> int:
    """Return the process's mask of file permissions; reading it means setting it twice."""
    mask = os.umask(0o022)
    os.umask(mask)
    return mask


def _period(schedule: Schedule, period: float | None) -> float:
    """Return the period asked for, judged as one in a machine file is, or the machine's own [s]."""
    return (
        schedule.job.machine.setpoints.period if period is None else SetpointSettings(period).period
    )


def _judge_columns(columns: Sequence[str]) -> None:
    known = ", ".join(COLUMNS)
    faults = [
        Fault("columns", f'"{column}" is not written; {known} are')
        for column in columns
        if column not in COLUMNS
    ]
    repeated = {column for column in columns if list(columns).count(column) > 1}
    faults += [Fault("columns", f'"{column}" is named twice') for column in sorted(repeated)]
    if not columns:
        faults.append(Fault("columns", f"names no column; {known} are written"))
    if faults:
        raise InputError(faults)


def _row_format(
    machine: Machine, columns: Sequence[str], signals: Sequence[str], period: float
) -> str:
    """Return the printf form of a row. RFC 4180 ends a line by CR LF."""
    nanoseconds = f"{round(period * 1e9):09d}"
    decimals = len(nanoseconds[-9:].rstrip("0"))
    cells = [f"%.{decimals}f"]
    cells += [f"%.{COLUMNS[column].decimals}f" for _ in machine.axes for column in columns]
    return ",".join([*cells, *("%d" for _ in signals)]) + "\r\n"


def _numbers(table: SetpointTable, columns: Sequence[str]) -> Array:
    """Return the numbers of a table in the order of its header: (n, columns)."""
    values = {
        "pos": table.position,
        "vel": table.velocity,
        "acc": table.acceleration,
        "jerk": table.jerk,
    }
    parts: list[Array] = [table.time[:, np.newaxis]]
    by_column = []
    for column in columns:
        value = values[column]
        if value is not None:
            smallest = 0.5 * 10.0 ** -COLUMNS[column].decimals
            # What rounds to zero is zero, so that no "-0.000" is written.
            by_column.append(np.where(np.abs(value) <= smallest, 0.0, value))
    if by_column:
        parts.append(np.stack(by_column, axis=-1).reshape(table.time.size, -1))
    parts += [state[:, np.newaxis] for state in table.signals.values()]
    return np.concatenate(parts, axis=1)


def _signals(schedule: Schedule, time: Array) -> dict[str, Array]:
    """Return the states of all signals at given times, off before their first event."""
    states = {}
    for name in schedule.signals:
        events = [event for event in schedule.events if event.signal == name]
        after = np.searchsorted([event.time for event in events], time, side="right")
        states[name] = np.array([0.0, *(float(event.state) for event in events)])[after]
    return states


def _header_faults(names: Sequence[str], machine: Machine) -> list[str]:
    """Return what is wrong with a table's header."""
    if not names:
        return ["is empty; a header of column names is needed"]
    faults = [f'column "{name}" stands twice' for name in names if names.count(name) > 1]
    needed = ["t_s", *(axis.column("pos") for axis in machine.axes)]
    faults += [f'column "{name}" is missing' for name in needed if name not in names]
    return list(dict.fromkeys(faults))


def _parse(body: str, width: int, file: Path) -> Array:
    """Return the numbers below the header: (n, columns)."""
    if not body.strip():
        raise InputError([Fault("line 1", "has no rows below its header", file)])
    try:
        numbers = np.loadtxt(
            io.StringIO(body), delimiter=",", ndmin=2, quotechar='"', comments=None
        )
    except ValueError:
        numbers = np.empty((0, 0))
    if numbers.shape[1] == width:
        return numbers
    # Only a faulty table is looked at row by row.
    faults = []
    for line, row in enumerate(body.splitlines(), start=2):
        if row.strip() and (fault := _row_fault(row, width)):
            faults.append(Fault(f"line {line}", fault, file))
    raise InputError(tidy(faults or [Fault("", "is no table of numbers", file)]))


def _row_fault(row: str, width: int) -> str | None:
    """Return what is wrong with a row of a table."""
    cells = next(csv.reader([row]), [])
    if len(cells) != width:
        return f"{len(cells)} cells; the header has {width}"
    for cell in cells:
        try:
            float(cell)
        except ValueError:
            return f'"{cell}" is not a number'
    return None


def _number_faults(names: Sequence[str], numbers: Array, machine: Machine) -> list[tuple[str, str]]:
    """Return places and faults of numbers that no motion can have."""
    row = np.argwhere(~np.isfinite(numbers))
    if row.size:
        return [(f"line {row[0, 0] + 2}", f'column "{names[row[0, 1]]}" is not a finite number')]
    for axis in machine.axes:
        position = numbers[:, names.index(axis.column("pos"))]
        far = np.flatnonzero(np.abs(position) > POSITION.high)
        if far.size:
            value = position[far[0]]
            message = f"{axis.column('pos')} {value:g}; allowed: {POSITION.describe(axis.unit)}"
            return [(f"line {far[0] + 2}", message)]
    steps = np.diff(numbers[:, names.index("t_s")])
    backward = np.flatnonzero(steps <= 0)
    if backward.size:
        return [(f"line {backward[0] + 3}", "t_s does not rise from the row before")]
    # To the picosecond: differences of times are rounded.
    if steps.size and not PERIOD.holds(period := round(float(np.median(steps)), 12)):
        return [("t_s", f"rows {period:g} s apart; allowed: {PERIOD.describe('s')}")]
    return []


def _last_digit(position: Array) -> float:
    """Return what the last decimal of positions stands for: that of the finest of them."""
    for decimals in range(MOST_DECIMALS):
        scaled = position * 10.0**decimals
        if np.all(np.abs(scaled - np.rint(scaled)) <= 2 * np.spacing(np.abs(scaled))):
            return 10.0**-decimals
    return 10.0**-MOST_DECIMALS


def _table(names: Sequence[str], numbers: Array, machine: Machine) -> SetpointTable:
    """Return the table that named columns of numbers make."""
    found: dict[str, Array] = {}
    taken = {"t_s"}
    for column in COLUMNS:
        own = [axis.column(column) for axis in machine.axes]
        taken.update(own)
        if all(name in names for name in own):
            found[column] = numbers[:, [names.index(name) for name in own]]
    return SetpointTable(
        axes=machine.axis_names,
        time=numbers[:, names.index("t_s")],
        position=found["pos"],
        velocity=found.get("vel"),
        acceleration=found.get("acc"),
        jerk=found.get("jerk"),
        signals={
            name: numbers[:, column] for column, name in enumerate(names) if name not in taken
        },
        position_step=_last_digit(found["pos"]),
    )
