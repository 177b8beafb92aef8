"""What stands where in a table of setpoints: which column holds what, between which signs?

The header is the first line with a column for the time; what stands above it is comment. Columns
of axes are found by their names, in any of several units; others are signals if they hold 0 and 1.
"""

from __future__ import annotations

import csv
import math
import re
from collections import Counter
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, NamedTuple

from profileplan.errors import Fault, InputError
from profileplan.inputs.dialect import DELIMITERS, TIME_HEADINGS
from profileplan.inputs.rules import POSITION, near, shown

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence
    from pathlib import Path
    from typing import BinaryIO

    from profileplan.inputs import Axis, Dialect, Machine

COMMENT = "#"
"""Lines below the header that begin with it are no rows."""

MARKS = (b"#", b"%", b"//")
"""Lines before a table without a header that begin with one of them are comment."""

HEAD = 1 << 18
"""Bytes from which the layout is told: a header and some rows."""

MOST_COMMENTS = 200
"""Lines above the header that are looked at."""

MOST_COLUMNS = 1000
"""Columns of a table: twelve axes and their signals are far fewer."""

MOST_LINE = 1 << 16
"""Bytes of a line."""

ROWS_TRIED = 200
"""Rows by which a column is taken for a signal."""

FEW = 50
"""Of so many of the first rows one may hold something else in the column of a signal."""

MOST_DECIMALS = 12
"""Decimals that are told apart: more are below the rounding of numbers."""

STATES = ("0", "1", "0.0", "1.0")
"""How a table may write the states of a signal."""

MARK = b"\xef\xbb\xbf"
"""What some programs put before a text to say that it is UTF-8."""

WIDE_MARKS = (b"\xff\xfe", b"\xfe\xff")
"""What stands before a text of two bytes a sign."""

TIMES: Mapping[str, float] = {"s": 1.0, "ms": 1e-3, "us": 1e-6}
"""Units of the time → s. A tick is the machine's period."""

UNITS: Mapping[str, Mapping[str, float]] = {
    "mm": {"mm": 1.0, "m": 1e3, "um": 1e-3},
    "deg": {"deg": 1.0, "rad": math.degrees(1.0), "mrad": math.degrees(1e-3)},
}
"""Unit of an axis → units in which a table may hold its positions, in the axis's own."""

RATES: Mapping[str, str] = {"pos": "", "vel": "_s", "acc": "_s2", "jerk": "_s3"}
"""Quantities that are judged, and how their units end."""

FORCES = ("force", "torque")
"""Quantities that are known and not judged."""

HIGHEST = 1e15
"""Greatest magnitude of a rate or a time: none that a machine has."""


class Column(NamedTuple):
    """A column that is read: where it is, its name, what it holds, of which axis (-1: of none).

    Its numbers are multiplied with ``unit`` and ``shift`` is added; beyond ``high`` in size, before
    the shift, none is one of a motion.
    """

    cell: int
    name: str
    quantity: str
    axis: int = -1
    unit: float = 1.0
    shift: float = 0.0
    high: float = HIGHEST


@dataclass(frozen=True)
class Layout:
    """What stands where.

    Parameters
    ----------
    file : Path
    delimiter, decimal : str
    returns : bool
        Whether a line ends by CR alone.
    header : int
        The header's line, counted from 1.
    body : int
        Where the rows begin [bytes].
    names : tuple of str
        All headings.
    columns : tuple of Column
        Those read: time first, then those of axes, then signals.
    decimals : tuple of int
        How many decimals the first rows have in the columns read.
    lenient : bool
        Whether a signal's cell may hold anything: it is NaN then.
    """

    file: Path
    delimiter: str
    decimal: str
    returns: bool
    header: int
    body: int
    names: tuple[str, ...]
    columns: tuple[Column, ...]
    decimals: tuple[int, ...]
    lenient: bool = True

    @property
    def unread(self) -> tuple[str, ...]:
        """Names of the columns that are not read."""
        read = {column.cell for column in self.columns}
        return tuple(name for index, name in enumerate(self.names) if index not in read)

    def find(self, quantity: str, axis: int) -> int | None:
        """Return which of the columns read holds a quantity of an axis."""
        for place, column in enumerate(self.columns):
            if column.quantity == quantity and column.axis == axis:
                return place
        return None

    def signals(self) -> dict[str, int]:
        """Return which of the columns read are signals, by name."""
        return {c.name: place for place, c in enumerate(self.columns) if c.quantity == "signal"}

    def with_signals(self) -> Layout:
        """Return the layout that reads all other columns of numbers as signals."""
        read = {column.cell for column in self.columns if column.quantity != "signal"}
        kept = [column for column in self.columns if column.quantity != "signal"]
        kept += [
            Column(index, name, "signal", high=math.inf)
            for index, name in enumerate(self.names)
            if index not in read
        ]
        known = dict(zip(self.columns, self.decimals, strict=True))
        decimals = tuple(known.get(column, 0) for column in kept)
        return replace(self, columns=tuple(kept), decimals=decimals, lenient=False)


def layout_of(
    file: Path,
    machine: Machine,
    *,
    dialect: Dialect | None = None,
    headings: Sequence[str] | None = None,
) -> Layout:
    """Tell what stands where in a table.

    Parameters
    ----------
    file : Path
    machine : Machine
    dialect : Dialect, optional
        How it is written; default: as it looks, with headings renamed as in the machine file.
    headings : sequence of str, optional
        The headings of a table that has none.

    Raises
    ------
    InputError
        The file cannot be read, or is no table for this machine: with all columns missed.
    """
    if dialect is not None and not dialect.header and headings is None:
        raise InputError([Fault("", "has no header; its headings are needed", file)])
    head = _head(file)
    lines = head.lines
    usual = _usual(dialect or machine.setpoints.dialect)
    delimiters = DELIMITERS if dialect is None else (dialect.delimiter,)
    found = _header(lines, delimiters, usual) if headings is None else None
    number, delimiter = found or _first_row(lines, delimiters)
    line = lines[number] if headings is None else b""
    if headings is None:
        text = _decoded(line, number + 1, file)
        cells = _cells(text, delimiter, number + 1, file)
        names = [usual.get(cell, cell) for cell in cells]
    else:
        # What would be the header's line comes before the first row.
        number, names = number - 1, list(headings)
    faults = _long_faults(line, names) or _name_faults(names, machine)
    if faults:
        place = "headings" if headings is not None else f"line {number + 1}"
        raise InputError(Fault(place, fault, file) for fault in faults)
    rows = [row.decode("latin-1") for row in lines[number + 1 : number + 1 + ROWS_TRIED]]
    layout = Layout(
        file=file,
        delimiter=delimiter,
        decimal=_decimal(rows, delimiter) if dialect is None else dialect.decimal,
        returns=head.returns,
        header=number + 1,
        body=head.start(number + 1),
        names=tuple(names),
        columns=tuple(_columns(names, machine)),
        decimals=(),
    )
    table = list(_tried(rows, layout))
    columns = (*layout.columns, *_signals(layout, table, machine))
    decimals = tuple(
        max((_written(row[column.cell], layout.decimal) for row in table), default=0)
        for column in columns
    )
    return replace(layout, columns=columns, decimals=decimals)


def has_time(file: Path, dialect: Dialect | None = None) -> bool:
    """Tell whether a file has a header with a column of time, as it is or as a dialect has it."""
    try:
        return _header(_head(file).lines, DELIMITERS, _usual(dialect)) is not None
    except InputError:
        return False


def split(text: str, delimiter: str) -> list[str]:
    """Return the cells of a line.

    Raises
    ------
    csv.Error
        It has quotes that do not close.
    """
    text = text.strip("\r\n")
    if '"' not in text:
        return text.split(delimiter)
    return next(csv.reader([text], delimiter=delimiter, strict=True, skipinitialspace=True), [])


@contextmanager
def opened(file: Path) -> Iterator[BinaryIO]:
    """Open a file, and tell as a fault why it cannot be read.

    Raises
    ------
    InputError
        It cannot be opened or read.
    """
    try:
        with file.open("rb") as stream:
            yield stream
    except FileNotFoundError:
        raise InputError([Fault("", "no such file", file)]) from None
    except IsADirectoryError:
        raise InputError([Fault("", "is a directory; a file is needed", file)]) from None
    except OSError as error:
        reason = (error.strerror or str(error)).lower()
        raise InputError([Fault("", f"cannot be read: {reason}", file)]) from None


class _Head(NamedTuple):
    """The first lines of a file, whether they end by CR alone, and the bytes of a mark before."""

    lines: list[bytes]
    returns: bool
    mark: int

    def start(self, line: int) -> int:
        """Return where a line begins, from 0 [bytes]."""
        return self.mark + sum(len(line) + 1 for line in self.lines[:line])


def _head(file: Path) -> _Head:
    """Read the first lines of a file. With a CR before an LF a line ends by the LF."""
    with opened(file) as stream:
        data = stream.read(HEAD)
    if data.startswith(WIDE_MARKS):
        message = "is UTF-16; the file must be saved as UTF-8"
        raise InputError([Fault("", message, file)])
    mark = len(MARK) if data.startswith(MARK) else 0
    returns = b"\n" not in data and b"\r" in data
    lines = data[mark:].split(b"\r" if returns else b"\n")
    if len(data) == HEAD and len(lines) > 1:
        del lines[-1]  # it may have been cut
    return _Head(lines, returns, mark)


def _usual(dialect: Dialect | None) -> dict[str, str]:
    """Return the usual headings by those that a dialect has for them."""
    return {} if dialect is None else {new: usual for usual, new in dialect.names.items()}


def _header(
    lines: Sequence[bytes], delimiters: Sequence[str], usual: Mapping[str, str]
) -> tuple[int, str] | None:
    """Return the line of the header, from 0, and its delimiter: where the time has a column."""
    times = set(TIME_HEADINGS.values())
    for number, line in enumerate(lines[:MOST_COMMENTS]):
        if len(line) > MOST_LINE:
            continue
        text = line.decode("utf-8", errors="replace")
        for delimiter in delimiters:
            try:
                cells = [cell.strip() for cell in split(text, delimiter)]
            except csv.Error:
                continue
            if len(cells) > 1 and not times.isdisjoint(usual.get(cell, cell) for cell in cells):
                return number, delimiter
    return None


def _first_row(lines: Sequence[bytes], delimiters: Sequence[str]) -> tuple[int, str]:
    """Return the first line that is no comment, from 0, and what most likely parts its cells."""
    number = next(
        (n for n, line in enumerate(lines) if line.strip() and not line.startswith(MARKS)), 0
    )
    text = lines[number].decode("utf-8", errors="replace")
    return number, max(delimiters, key=text.count)


def _decoded(line: bytes, number: int, file: Path) -> str:
    try:
        return line.decode("utf-8")
    except UnicodeDecodeError as error:
        byte = error.object[error.start]
        message = f"byte 0x{byte:02x} is not UTF-8; the file must be saved as UTF-8"
        raise InputError([Fault(f"line {number}", message, file)]) from None


def _cells(text: str, delimiter: str, number: int, file: Path) -> list[str]:
    try:
        return [cell.strip() for cell in split(text, delimiter)] if text.strip() else []
    except csv.Error as error:
        raise InputError([Fault(f"line {number}", f"is no valid CSV: {error}", file)]) from error


def _long_faults(line: bytes, names: Sequence[str]) -> list[str]:
    if len(line) > MOST_LINE:
        return [f"is longer than {MOST_LINE:,} bytes; no line of a table is"]
    if len(names) > MOST_COLUMNS:
        return [f"has {len(names):,} columns; at most {MOST_COLUMNS:,} are read"]
    return []


def _name_faults(names: Sequence[str], machine: Machine) -> list[str]:
    """Return what is wrong with a table's header."""
    if not names:
        return ["is empty; a header of column names is needed"]
    counts = Counter(names)
    faults = [f"column {shown(name)} stands twice" for name in names if counts[name] > 1]
    times = [name for name in names if name in TIME_HEADINGS.values()]
    if not times:
        faults.append(f'column "t_s" is missing{_hint("t_s", names)}')
    elif len(times) > 1 and times[0] != times[1]:
        faults.append(f"columns {shown(times[0])} and {shown(times[1])} both hold the time")
    for axis in machine.axes:
        for quantity in RATES:
            held = [name for name in _spellings(axis, quantity) if name in counts]
            if len(held) > 1:
                faults.append(f"columns {shown(held[0])} and {shown(held[1])} hold the same")
            elif not held and quantity == "pos":
                name = axis.column("pos")
                faults.append(f"column {shown(name)} is missing{_hint(name, names)}")
    return list(dict.fromkeys(faults))


def _hint(name: str, names: Sequence[str]) -> str:
    return near(name, [other for other in names[:100] if len(other) < 50])


def _spellings(axis: Axis, quantity: str) -> dict[str, tuple[float, float]]:
    """Return the names under which a table may hold a quantity of an axis.

    With each: what a number is multiplied with, and what is added to that.
    """
    start, end = f"{axis.name}_{quantity}_", RATES[quantity]
    found = {f"{start}{unit}{end}": (size, 0.0) for unit, size in UNITS[axis.unit].items()}
    drive = axis.drive
    # A counter that wraps does not tell where its axis is.
    if drive is not None and drive.wrap is None:
        shift = -drive.offset if quantity == "pos" else 0.0
        found[f"{start}inc{end}"] = (drive.direction / float(drive.ratio), shift)
    return found


def _columns(names: Sequence[str], machine: Machine) -> Iterator[Column]:
    """Yield the columns of time and of axes."""
    period = machine.setpoints.period
    times = {heading: TIMES.get(unit, period) for unit, heading in TIME_HEADINGS.items()}
    name = next(name for name in names if name in times)
    yield Column(names.index(name), name, "time", unit=times[name])
    for number, axis in enumerate(machine.axes):
        for quantity in RATES:
            high = POSITION.high if quantity == "pos" else HIGHEST
            for name, (unit, shift) in _spellings(axis, quantity).items():
                if name in names:
                    yield Column(names.index(name), name, quantity, number, unit, shift, high)


def _decimal(rows: Sequence[str], delimiter: str) -> str:
    """Return the decimal sign: a comma where it does not part cells and no point is used."""
    text = "".join(rows[:-1] if len(rows) > 1 else rows)
    if delimiter == ",":
        # Cells with a comma inside must be quoted.
        return "," if '"' in text and "." not in text and _quoted_commas(rows) else "."
    return "," if text.count(",") > text.count(".") else "."


def _quoted_commas(rows: Sequence[str]) -> bool:
    try:
        return any("," in cell for row in rows[:20] for cell in split(row, ","))
    except csv.Error:
        return False


def _tried(rows: Sequence[str], layout: Layout) -> Iterator[list[str]]:
    """Yield the cells of the first rows that have as many as the header."""
    for row in rows:
        try:
            cells = split(row, layout.delimiter)
        except csv.Error:
            continue
        if len(cells) == len(layout.names) and not row.startswith(COMMENT):
            yield [cell.strip() for cell in cells]


def _written(cell: str, decimal: str) -> int:
    """Return how many decimals a number is written with."""
    match = re.fullmatch(rf"[+-]?\d*(?:[{decimal}](\d*))?(?:[eE]([+-]?\d{{1,3}}))?", cell)
    if match is None:
        return 0
    decimals = len(match[1] or "") - int(match[2] or 0)
    return min(max(decimals, 0), MOST_DECIMALS)


def _signals(layout: Layout, table: list[list[str]], machine: Machine) -> Iterator[Column]:
    """Yield the other columns that hold 0 and 1 only in the first rows, or nearly so."""
    known = {f"{axis.name}_{quantity}_" for axis in machine.axes for quantity in (*RATES, *FORCES)}
    read = {column.cell for column in layout.columns}
    for index, name in enumerate(layout.names):
        if index in read or not table or any(name.startswith(start) for start in known):
            continue
        others = sum(cells[index] not in STATES for cells in table)
        if others <= len(table) // FEW:
            yield Column(index, name, "signal")
