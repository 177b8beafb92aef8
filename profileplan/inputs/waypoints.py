"""What points a waypoint file lists.

A CSV file (RFC 4180) in UTF-8: a header of axis names in any order, with optional columns speed,
wait and name; then one point a row, in axis units. Columns are separated by ``;`` or ``,``; with
``;`` a decimal comma is understood. Blank lines are skipped. An empty cell means that the axis
stays. Whether the axes exist is judged later, against the machine.
"""

from __future__ import annotations

import csv
from io import StringIO
from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

from profileplan.errors import Fault, InputError
from profileplan.inputs.cycle import Waypoint
from profileplan.inputs.files import read_text
from profileplan.inputs.rules import limited, shown

if TYPE_CHECKING:
    from collections.abc import Iterator

EXTRA_COLUMNS = ("speed", "wait", "name")


class Row(NamedTuple):
    """The cells of a row, and the line it begins in."""

    line: int
    cells: list[str]


class Columns(NamedTuple):
    """Which cell of a row is what; `decimal` is what stands before the fraction, beside ``.``."""

    axes: tuple[tuple[str, int], ...]
    extras: dict[str, int]
    width: int
    decimal: str


def read_waypoints(path: Path | str) -> tuple[Waypoint, ...]:
    """Read a waypoint file.

    Parameters
    ----------
    path : Path or str
        A CSV file.

    Raises
    ------
    InputError
        With the faults of the file; beyond the first rows with a fault they are counted only.
    """
    path = Path(path)
    text = read_text(path)
    if "\0" in text:
        line = text[: text.index("\0")].count("\n") + 1
        raise InputError([Fault(f"line {line}", "has a NUL character; this is no text", path)])
    faults: list[Fault] = []
    points = _points(text, faults)
    if faults:
        raise InputError(limited([fault.within("", path) for fault in faults], path))
    return points


def _points(text: str, faults: list[Fault]) -> tuple[Waypoint, ...]:
    delimiter = _delimiter(text)
    rows = _rows(text, delimiter, faults)
    header = next(rows, None)
    if header is None:
        if not faults:
            faults.append(Fault("", "is empty; a header of axis names and points are needed"))
        return ()
    columns = _columns(header, delimiter, faults)
    if columns is None:
        return ()
    points = []
    empty = True
    for row in rows:
        empty = False
        point = _point(row, columns, faults)
        if point is not None:
            points.append(point)
    if empty and not faults:
        faults.append(Fault("", "has a header only; at least one point is needed"))
    return tuple(points)


def _delimiter(text: str) -> str:
    """Return what separates the columns of the first line that is not blank."""
    header = next((line for line in StringIO(text, newline="") if line.strip()), "")
    outside_quotes = "".join(header.split('"')[::2])
    return ";" if ";" in outside_quotes else ","


def _rows(text: str, delimiter: str, faults: list[Fault]) -> Iterator[Row]:
    """Yield the rows that are not blank; a fault in the quoting ends them."""
    reader = csv.reader(StringIO(text, newline=""), delimiter=delimiter, strict=True)
    line = 1
    try:
        for cells in reader:
            if cells and (len(cells) > 1 or cells[0].strip()):
                yield Row(line, cells)
            line = reader.line_num + 1
    except csv.Error as error:
        faults.append(Fault(f"line {line}", f"{error}; the quoting of this row is faulty"))


def _columns(header: Row, delimiter: str, faults: list[Fault]) -> Columns | None:
    """Return what the columns are, or None where the header is faulty."""
    names = [cell.strip() for cell in header.cells]
    place = f"line {header.line}"
    count = len(faults)
    decimal = "," if delimiter == ";" else "."
    if all(_number(name, decimal) is not None for name in names):
        faults.append(Fault(place, "has numbers only; the first row names the columns"))
        return None
    for index, name in enumerate(names):
        if not name:
            faults.append(Fault(f"{place}, column {index + 1}", "has no name"))
        elif name in names[:index]:
            faults.append(Fault(f"{place}, column {name}", f"{shown(name)} stands twice"))
    axes = tuple((name, i) for i, name in enumerate(names) if name not in EXTRA_COLUMNS)
    if not axes:
        faults.append(Fault(place, "names no axis; at least one column is needed"))
    extras = {name: i for i, name in enumerate(names) if name in EXTRA_COLUMNS}
    return Columns(axes, extras, len(names), decimal) if len(faults) == count else None


def _point(row: Row, columns: Columns, faults: list[Fault]) -> Waypoint | None:
    if len(row.cells) != columns.width:
        message = f"{len(row.cells)} cells; the header has {columns.width} columns"
        faults.append(Fault(f"line {row.line}", message))
        return None
    count = len(faults)
    to = {
        name: position
        for name, index in columns.axes
        if (position := _cell(row, index, name, columns, faults)) is not None
    }
    extras = columns.extras
    speed = _cell(row, extras["speed"], "speed", columns, faults) if "speed" in extras else None
    wait = _cell(row, extras["wait"], "wait", columns, faults) if "wait" in extras else None
    name = row.cells[extras["name"]].strip() if "name" in extras else ""
    if len(faults) > count:
        return None
    try:
        return Waypoint(to, speed=speed, wait=wait or 0.0, name=name or None, line=row.line)
    except InputError as error:
        faults += [
            Fault(f"line {row.line}" + (f", column {f.place}" if f.place else ""), f.message)
            for f in error.faults
        ]
        return None


def _cell(row: Row, index: int, name: str, columns: Columns, faults: list[Fault]) -> float | None:
    """Return the number in a cell; None where it is empty or faulty."""
    cell = row.cells[index]
    if not cell or cell.isspace():
        return None
    number = _number(cell, columns.decimal)
    if number is None:
        message = f"{shown(cell)}; a number in axis units is needed"
        if "," in cell and columns.decimal == ".":
            message += "; a decimal comma is understood where ; separates the columns"
        faults.append(Fault(f"line {row.line}, column {name}", message))
    return number


def _number(cell: str, decimal: str) -> float | None:
    # Python's own spelling of numbers has underscores and other scripts' digits
    if "_" in cell or not cell.isascii():
        return None
    try:
        return float(cell.replace(decimal, "."))
    except ValueError:
        return None
