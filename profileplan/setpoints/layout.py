"""What stands where in a table of setpoints: which column holds what, between which signs?

The header is the first line with a column for the time; what stands above it is comment. A table
without a header has the columns that the machine file, or someone, says it has, and after them
signals.
"""

from __future__ import annotations

import csv
import math
import re
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, NamedTuple

from profileplan.errors import Fault, InputError
from profileplan.inputs.dialect import DECIMAL_SIGNS, DELIMITERS, TIME_HEADINGS, Dialect
from profileplan.setpoints.columns import (
    Column,
    Sheet,
    axis_headings,
    found_columns,
    signal_columns,
    usual_headings,
    usual_names,
)

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence
    from pathlib import Path
    from typing import BinaryIO

    from profileplan.inputs import Machine

COMMENT = "#"
"""Lines below the header that begin with it are no rows."""

MARKS = (b"#", b"%", b"//")
"""Lines before a table that begin with one of them are comment."""

HEAD = 1 << 18
"""Bytes from which the layout is told: a header and some rows."""

MOST_COMMENTS = 200
"""Lines above the header that are looked at."""

MOST_LINE = 1 << 16
"""Bytes of a line."""

ROWS_TRIED = 200
"""Rows by which a column is taken for a signal."""

MOST_DECIMALS = 12
"""Decimals that are told apart: more are below the rounding of numbers."""

STATES = ("0", "1", "0.0", "1.0")
"""How a table may write the states of a signal."""

NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", re.ASCII)

MARK = b"\xef\xbb\xbf"
"""What some programs put before a text to say that it is UTF-8."""

WIDE_MARKS = (b"\xff\xfe", b"\xfe\xff")
"""What stands before a text of two bytes a sign."""


@dataclass(frozen=True)
class Layout(Sheet):
    """What stands where in a text.

    Parameters
    ----------
    delimiter, decimal : str
    returns : bool
        Whether a line ends by CR alone.
    header : int
        The line before the first row, counted from 1: the header's, where there is one.
    body : int
        Where the rows begin [bytes].
    lenient : bool
        Whether a signal's cell may hold anything: it is NaN then.
    """

    delimiter: str
    decimal: str
    returns: bool
    header: int
    body: int
    lenient: bool = True

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
    columns: Sequence[str] | None = None,
) -> Layout:
    """Tell what stands where in a table.

    Parameters
    ----------
    file : Path
    machine : Machine
    dialect : Dialect, optional
        How it is written; default: as it looks, with headings renamed as in the machine file.
    headings : sequence of str, optional
        The headings of a table that has none, perhaps without those of signals at its end.
    columns : sequence of str, optional
        What a table without headings holds of each axis, in place of what the machine file says.

    Raises
    ------
    InputError
        The file cannot be read, or is no table for this machine: with all columns missed.
    """
    own = dialect or machine.setpoints.dialect
    head = _head(file)
    found = None
    if headings is None and (dialect is None or dialect.header):
        delimiters = _delimiters(own) if dialect is None else (dialect.delimiter,)
        found = _header(head.lines, delimiters, own)
    if found is None and (headings is not None or columns is not None or not own.header):
        usual = headings or usual_headings(machine, columns=columns, file=file)
        number, delimiter, names = _bare(head.lines, usual, own, dialect, file)
        place, header = "headings", number
    else:
        number, delimiter = found or _first_row(head.lines, DELIMITERS)
        if columns is not None:
            message = "is a header: what a table holds is said for one without"
            raise InputError([Fault(f"line {number + 1}", message, file)])
        names = _names(head.lines[number], number + 1, delimiter, own, file)
        place, header = f"line {number + 1}", number + 1
    layout = Layout(
        file=file,
        names=tuple(names),
        columns=found_columns(names, machine, file=file, place=place),
        delimiter=delimiter,
        decimal=own.decimal,
        returns=head.returns,
        header=header,
        body=head.start(header),
    )
    rows = [row.decode("latin-1") for row in head.lines[header : header + ROWS_TRIED]]
    if dialect is None:
        layout = replace(layout, decimal=_decimal(rows, delimiter))
    return _tried_layout(layout, rows, machine)


def has_time(file: Path, dialect: Dialect | None = None) -> bool:
    """Tell whether a file has a header with a column of time, as it is or as a dialect has it."""
    try:
        return _header(_head(file).lines, DELIMITERS, dialect or Dialect()) is not None
    except InputError:
        return False


def has_numbers_only(file: Path) -> bool:
    """Tell whether the first line of a file that is no comment holds several numbers, only."""
    try:
        lines = _head(file).lines
    except InputError:
        return False
    number, _ = _first_row(lines, DELIMITERS)
    text = lines[number].decode("utf-8", errors="replace")
    return any(len(_numbers(text, sign)) > 1 for sign in DELIMITERS)


def has_axes(file: Path, machine: Machine) -> bool:
    """Tell whether the first line of a file that is no comment has headings of axes, in any case.

    Such a table may lack the time, which is told then.
    """
    try:
        lines = _head(file).lines
    except InputError:
        return False
    number, delimiter = _first_row(lines, DELIMITERS)
    usual, known = usual_names(machine.setpoints.dialect), axis_headings(machine)
    folded = {heading.casefold() for heading in (*known, *usual)}
    text = lines[number][:MOST_LINE].decode("utf-8", errors="replace")
    return any(cell.strip(' "\r').casefold() in folded for cell in text.split(delimiter))


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


def _delimiters(own: Dialect) -> tuple[str, ...]:
    """Return what may part cells, what the machine file says first."""
    return (own.delimiter, *(sign for sign in DELIMITERS if sign != own.delimiter))


def _header(
    lines: Sequence[bytes], delimiters: Sequence[str], own: Dialect
) -> tuple[int, str] | None:
    """Return the line of the header, from 0, and its delimiter: where the time has a column.

    A comment may look like one, and a heading like a comment: so comments are looked at last.
    """
    usual, times = usual_names(own), set(TIME_HEADINGS.values())
    marks = (*MARKS, own.comment_mark.encode()) if own.comment_mark else MARKS
    numbered = list(enumerate(lines[:MOST_COMMENTS]))
    for number, line in sorted(numbered, key=lambda pair: pair[1].startswith(marks)):
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


def _first_row(
    lines: Sequence[bytes], delimiters: Sequence[str], marks: tuple[bytes, ...] = MARKS
) -> tuple[int, str]:
    """Return the first line that is no comment, from 0, and what most likely parts its cells."""
    number = next(
        (n for n, line in enumerate(lines) if line.strip() and not line.startswith(marks)), 0
    )
    text = lines[number].decode("utf-8", errors="replace")
    return number, max(delimiters, key=text.count)


def _bare(
    lines: Sequence[bytes],
    headings: Sequence[str],
    own: Dialect,
    dialect: Dialect | None,
    file: Path,
) -> tuple[int, str, list[str]]:
    """Return the first row of a table without a header, from 0, its delimiter and its headings.

    Raises
    ------
    InputError
        It has fewer columns, or more that do not hold 0 and 1 only.
    """
    marks = (*MARKS, own.comment_mark.encode()) if own.comment_mark else MARKS
    delimiters = _delimiters(own) if dialect is None else (dialect.delimiter,)
    number, delimiter = _first_row(lines, delimiters, marks)
    text = lines[number][:MOST_LINE].decode("utf-8", errors="replace")
    known = dict.fromkeys(headings)
    delimiter = next(
        (sign for sign in delimiters if len(_numbers(text, sign)) >= len(headings)), delimiter
    )
    place = f"line {number + 1}"
    _judge_length(lines[number], place, file)
    cells = _cells(text, delimiter, number + 1, file)
    more = len(cells) - len(headings)
    if cells and more >= 0:
        signals = [name for name in (f"signal {n + 1}" for n in range(more)) if name not in known]
        others = _others(lines[number : number + ROWS_TRIED], delimiter, len(cells))
        if len(signals) == more and not any(others[len(headings) :]):
            return number, delimiter, [*headings, *signals]
    if not cells:
        message = "is empty; rows of numbers are needed"
    else:
        message = f"{len(cells)} columns and no header; expected {len(headings)}: "
        message += f"{', '.join(headings)}, and then only signals of 0 and 1"
    raise InputError([Fault(place, message, file)])


def _others(lines: Sequence[bytes], delimiter: str, count: int) -> list[int]:
    """Return in how many of some lines with so many cells each cell is neither 0 nor 1."""
    found = [0] * count
    for line in lines:
        try:
            cells = split(line.decode("latin-1"), delimiter)
        except csv.Error:
            continue
        if len(cells) == count:
            found = [n + (c.strip() not in STATES) for n, c in zip(found, cells, strict=True)]
    return found


def _numbers(text: str, delimiter: str) -> list[str]:
    """Return the cells of a line if all of them are numbers, with either decimal sign."""
    try:
        cells = [cell.strip() for cell in split(text, delimiter)]
    except csv.Error:
        return []
    for sign in DECIMAL_SIGNS:
        if all(NUMBER.fullmatch(cell.replace(sign, ".")) for cell in cells):
            return cells
    return []


def _names(line: bytes, number: int, delimiter: str, own: Dialect, file: Path) -> list[str]:
    """Return the headings in a line by their usual names."""
    _judge_length(line, f"line {number}", file)
    text = _decoded(line, number, file)
    cells = _cells(text, delimiter, number, file)
    if _numbers(text, delimiter):
        message = "holds numbers and no headings; a table without a header is read by what "
        message += "[setpoints] says, with header = false, or by --columns"
        raise InputError([Fault(f"line {number}", message, file)])
    usual = usual_names(own)
    return [usual.get(cell, cell) for cell in cells]


def _judge_length(line: bytes, place: str, file: Path) -> None:
    if len(line) > MOST_LINE:
        message = f"is longer than {MOST_LINE:,} bytes; no line of a table is"
        raise InputError([Fault(place, message, file)])


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


def _tried_layout(layout: Layout, rows: Sequence[str], machine: Machine) -> Layout:
    """Return a layout with what the first rows tell: signals, decimals, the first time."""
    table = list(_tried(rows, layout))
    others = {
        index: sum(cells[index] not in STATES for cells in table)
        for index in range(len(layout.names))
    }
    columns = (*layout.columns, *signal_columns(layout, others, len(table), machine))
    decimals = tuple(
        max((_written(row[column.cell], layout.decimal) for row in table), default=0)
        for column in columns
    )
    begins = table[0][columns[0].cell].replace(layout.decimal, ".") if table else ""
    return replace(
        layout,
        columns=columns,
        decimals=decimals,
        begins=float(begins) if NUMBER.fullmatch(begins) else math.nan,
    )


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
