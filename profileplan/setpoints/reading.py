"""What does a table say that another program, or this one, has written?

Positions of every axis are needed, other columns of axes are read where they are there. A table is
read in blocks, so that it may be larger than the memory. All faults are told at once, with their
lines.
"""

from __future__ import annotations

import csv
import io
import math
import re
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.inputs.rules import PERIOD, Range, shown, tidy
from profileplan.setpoints.layout import (
    COMMENT,
    MOST_DECIMALS,
    MOST_LINE,
    NUMBER,
    has_time,
    layout_of,
    opened,
    split,
)
from profileplan.setpoints.sampling import COLUMNS, SetpointTable
from profileplan.setpoints.turns import Turns, likely_turns

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator
    from pathlib import Path
    from typing import BinaryIO

    from profileplan.inputs import Dialect, Machine
    from profileplan.motion.polynomials import Array, Indices
    from profileplan.setpoints.columns import Column, Sheet
    from profileplan.setpoints.layout import Layout

BLOCK = 1 << 20
"""Bytes that are read together: more cost memory, fewer cost time."""

MOST_FAULTY = 1000
"""Faulty rows after which reading stops."""

NOT_FINITE = re.compile(r"[+-]?(nan|inf|infinity)", re.ASCII | re.IGNORECASE)


class Rows(NamedTuple):
    """Some rows of a table: their lines, (n,), and the numbers of the columns read, (n, k)."""

    lines: Indices
    numbers: Array


def read_csv(file: Path, machine: Machine, dialect: Dialect | None = None) -> SetpointTable:
    """Read a setpoint table.

    Parameters
    ----------
    file : Path
    machine : Machine
        Its axes tell which columns there are; positions of every axis are needed, other columns
        of theirs are read where they are there, and all others are signals.
    dialect : Dialect, optional
        How it is written; default: as it looks.

    Raises
    ------
    InputError
        The file cannot be read, lacks a column, or has rows that are no numbers: all of them, with
        their lines.
    """
    layout = layout_of(file, machine, dialect=dialect).with_signals()
    blocks = list(read_rows(layout))
    rows = Rows(
        np.concatenate([block.lines for block in blocks]),
        np.concatenate([block.numbers for block in blocks]),
    )
    if fault := _time_fault(rows, layout):
        raise InputError([fault])
    return _table(rows, layout, machine)


def is_table(file: Path, dialect: Dialect | None = None) -> bool:
    """Tell whether a file is a setpoint table: one of its columns is the time.

    Parameters
    ----------
    file : Path
    dialect : Dialect, optional
        With the names that headings may have.
    """
    return has_time(file, dialect)


def read_rows(
    layout: Layout, *, block: int = BLOCK, progress: Callable[[int, int], None] | None = None
) -> Iterator[Rows]:
    """Yield the rows of a table, some at a time.

    Parameters
    ----------
    layout : Layout
    block : int
        About how much is read together [bytes].
    progress : callable, optional
        Called with the bytes read so far and the bytes in all.

    Raises
    ------
    InputError
        Rows are no numbers, after the last of them or too many; or there is no row.
    """
    faults: list[Fault] = []
    count, line = 0, layout.header + 1
    with opened(layout.file) as stream:
        total = stream.seek(0, io.SEEK_END)
        stream.seek(layout.body)
        lines = whole_lines(
            stream, layout.file, block=block, line=layout.header + 1, returns=layout.returns
        )
        for text in lines:
            found = _fast(text, layout, line)
            if found is None:
                found, more = _slow(text, layout, line)
                faults += more
            count += len(found.lines)
            line += text.count(b"\n")
            if len(faults) > MOST_FAULTY:
                faults = [
                    *faults[:MOST_FAULTY],
                    Fault("", f"given up at line {line:,}", layout.file),
                ]
                break
            if found.lines.size and not faults:
                yield found
            if progress:
                progress(stream.tell(), total)
    if faults:
        raise InputError(tidy(faults))
    if not count:
        place = f"line {layout.header}"
        raise InputError([Fault(place, "has no rows below its header", layout.file)])


def whole_lines(
    stream: BinaryIO, file: Path, *, block: int = BLOCK, line: int = 1, returns: bool = False
) -> Iterator[bytes]:
    """Yield bytes that end with a line, some lines at a time.

    Parameters
    ----------
    stream : file
    file : Path
        What it is called.
    block : int
        About how much is read together [bytes].
    line : int
        The number of its next line.
    returns : bool
        Whether lines end by CR alone.

    Raises
    ------
    InputError
        A line is so long that this is no table.
    """
    rest = b""
    while data := stream.read(block):
        if returns:
            data = data.replace(b"\r", b"\n")
        end = data.rfind(b"\n") + 1
        if end:
            whole = rest + data[:end]
            yield whole
            line += whole.count(b"\n")
            rest = data[end:]
        else:
            rest += data
        if len(rest) > MOST_LINE:
            message = f"is longer than {MOST_LINE:,} bytes; no line of a table is"
            raise InputError([Fault(f"line {line}", message, file)])
    if rest:
        yield rest + b"\n"


def converted(numbers: Array, sheet: Sheet) -> Array:
    """Return numbers, (n, k), in s and the units of the axes."""
    units = [column.unit for column in sheet.columns]
    found: Array = numbers * units + [column.shift for column in sheet.columns]
    return found


def last_decimals(numbers: Array, least: Indices) -> Indices:
    """Return how many decimals columns have: at least as many as given, (k,), or ``MOST_DECIMALS``.

    Parameters
    ----------
    numbers : (n, k) array
    least : (k,) array of int
    """
    found = least.copy()
    # What is no signal may hold any number.
    with np.errstate(over="ignore", invalid="ignore"):
        for column in range(numbers.shape[1]):
            values = numbers[:, column]
            while found[column] < MOST_DECIMALS:
                scaled = values * 10.0 ** found[column]
                if np.all(np.abs(scaled - np.rint(scaled)) <= 2 * np.spacing(np.abs(scaled))):
                    break
                found[column] += 1
    return found


def _fast(text: bytes, layout: Layout, line: int) -> Rows | None:
    """Return the rows of a text, all lines of which are rows without a fault; None of others."""
    if b'"' in text:
        # Where cells hold no delimiter, and only then, the count of cells is right without quotes.
        text = text.replace(b'"', b"")
    signs = np.frombuffer(text, np.uint8)
    ends = np.flatnonzero(signs == ord("\n"))
    parted = np.searchsorted(np.flatnonzero(signs == ord(layout.delimiter)), ends)
    if np.any(np.diff(parted, prepend=0) != len(layout.names) - 1):
        return None
    if layout.decimal == ",":
        text = text.replace(b",", b".")
    try:
        numbers = np.loadtxt(
            io.StringIO(text.decode("latin-1")),
            delimiter=layout.delimiter,
            comments=None,
            usecols=[column.cell for column in layout.columns],
            ndmin=2,
        )
    except ValueError:
        return None
    high = np.array([column.high / abs(column.unit) for column in layout.columns])
    if len(numbers) != ends.size or not np.all(np.abs(numbers) <= high):
        return None
    return Rows(np.arange(line, line + ends.size), numbers)


def _slow(text: bytes, layout: Layout, line: int) -> tuple[Rows, list[Fault]]:
    """Return the rows of a text without the faulty ones, and the faults."""
    lines: list[int] = []
    table: list[list[float]] = []
    faults: list[Fault] = []
    for number, row in enumerate(text.split(b"\n")[:-1], start=line):
        if len(row) > MOST_LINE:
            message = f"is longer than {MOST_LINE:,} bytes; no line of a table is"
            faults.append(Fault(f"line {number}", message, layout.file))
            continue
        words = row.decode("utf-8", errors="replace").strip("\r\n")
        if not words.strip() or words.startswith(COMMENT):
            continue
        values, wrong = _row(words, layout)
        if wrong:
            faults.append(Fault(f"line {number}", "; ".join(wrong[:3]), layout.file))
            if len(faults) > MOST_FAULTY:
                break
        else:
            lines.append(number)
            table.append(values)
    numbers = np.array(table, dtype=np.float64).reshape(len(table), len(layout.columns))
    return Rows(np.array(lines, dtype=np.intp), numbers), faults


def _row(words: str, layout: Layout) -> tuple[list[float], list[str]]:
    """Return the numbers of a row, and what is wrong with it."""
    try:
        cells = split(words, layout.delimiter)
    except csv.Error as error:
        return [], [f"is no valid CSV: {error}"]
    if len(cells) != len(layout.names):
        return [], [f"{len(cells)} cells; the header has {len(layout.names)}"]
    values, wrong = [], []
    for column in layout.columns:
        cell = cells[column.cell].strip()
        if layout.decimal == ",":
            cell = cell.replace(",", ".")
        value = float(cell) if NUMBER.fullmatch(cell) else math.nan
        any_will_do = layout.lenient and column.quantity == "signal"
        if not any_will_do and (fault := _cell_fault(cells[column.cell], value, column)):
            wrong.append(fault)
        values.append(value)
    return values, wrong


def _cell_fault(cell: str, value: float, column: Column) -> str | None:
    """Return what is wrong with a cell."""
    name = f"column {shown(column.name)}"
    if not cell.strip():
        return f"{name} is empty"
    if NOT_FINITE.fullmatch(cell.strip()) or math.isinf(value):
        return f"{name} is not a finite number"
    if math.isnan(value):
        return f"{shown(cell)} is not a number in {name}"
    most = column.high / abs(column.unit)
    if abs(value) > most:
        unit = column.name.rpartition("_")[2] if column.quantity == "pos" else ""
        return f"{column.name} {value:g}; allowed: {Range(-most, most).describe(unit).strip()}"
    return None


def _time_fault(rows: Rows, layout: Layout) -> Fault | None:
    """Return what is wrong with the times of a table."""
    name, unit = layout.columns[0].name, layout.columns[0].unit
    steps = np.diff(rows.numbers[:, 0]) * unit
    backward = np.flatnonzero(steps <= 0)
    if backward.size:
        place = f"line {rows.lines[backward[0] + 1]}"
        return Fault(place, f"{name} does not rise from the row before", layout.file)
    # To the picosecond: differences of times are rounded.
    if steps.size and not PERIOD.holds(period := round(float(np.median(steps)), 12)):
        message = f"rows {period:g} s apart; allowed: {PERIOD.describe('s')}"
        return Fault(name, message, layout.file)
    return None


def _table(rows: Rows, layout: Layout, machine: Machine) -> SetpointTable:
    """Return the table that rows make. Rates count where every axis has them.

    Raises
    ------
    InputError
        Axes are missing: they are in other files.
    """
    missed = [axis.name for n, axis in enumerate(machine.axes) if n not in layout.axes]
    if missed:
        message = f"has no positions of {', '.join(missed)}; those of all axes are needed"
        raise InputError([Fault("", message, layout.file)])
    turns = Turns(layout, machine)
    numbers = converted(turns.counted_on(rows.numbers), layout)
    for place, column in enumerate(layout.columns):
        if (turning := turns.of(place)) is not None and turning.turned:
            position, travel = numbers[:, place], machine.axes[column.axis].travel
            likely = np.array(likely_turns(float(position[0]), turning)) * turning.wrap
            kept = (position.min() + likely >= travel[0]) & (position.max() + likely <= travel[1])
            # Of several turns that keep the travel the likeliest; of none the same.
            numbers[:, place] = position + likely[int(kept.argmax())]
    found: dict[str, Array] = {}
    own: list[int] = []
    for quantity in COLUMNS:
        places = [layout.find(quantity, axis) for axis in range(len(machine.axes))]
        held = [place for place in places if place is not None]
        if len(held) == len(places):
            found[quantity] = numbers[:, held]
            own = held if quantity == "pos" else own
    decimals = last_decimals(rows.numbers[:, own], np.array(layout.decimals)[own])
    steps = 10.0**-decimals * [abs(layout.columns[place].unit) for place in own]
    return SetpointTable(
        axes=machine.axis_names,
        time=numbers[:, 0],
        position=found["pos"],
        velocity=found.get("vel"),
        acceleration=found.get("acc"),
        jerk=found.get("jerk"),
        signals={name: numbers[:, place] for name, place in layout.signals().items()},
        # The finest tells of the writer: a short number may have lost its zeros.
        position_step=float(steps.min()),
    )
