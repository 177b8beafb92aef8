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
from profileplan.inputs.cycle import POINT_KEYS, Waypoint
from profileplan.inputs.files import read_text
from profileplan.inputs.rules import shown, tidy

if TYPE_CHECKING:
    from collections.abc import Iterator


class Row(NamedTuple):
    """The cells of a row, and the line it begins in."""

    line: int
    cells: list[str]


class Columns(NamedTuple):
    """Which cells of a row hold numbers, and which the name; what stands before a fraction."""

    numbers: tuple[tuple[str, int], ...]
    name: int | None
    width: int
    decimal: str


class Reading(NamedTuple):
    """The points of the rows that are sound, and the faults of the file."""

    points: tuple[Waypoint, ...]
    faults: list[Fault]


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
    reading = waypoint_reading(Path(path))
    if reading.faults:
        raise InputError(tidy(reading.faults))
    return reading.points


def waypoint_reading(path: Path) -> Reading:
    """Return what a waypoint file lists, as far as it can be made out, with its faults.

    Parameters
    ----------
    path : Path
        A CSV file.
    """
    try:
        text = read_text(path)
    except InputError as error:
        return Reading((), list(error.faults))
    faults: list[Fault] = []
    if "\0" in text:
        line = text[: text.index("\0")].count("\n") + 1
        faults.append(Fault(f"line {line}", "has a NUL character; this is no text"))
        points: tuple[Waypoint, ...] = ()
    else:
        points = _points(text, faults)
    return Reading(points, [fault.within("", path) for fault in faults])


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
    points = tuple(point for row in rows if (point := _point(row, columns, faults)) is not None)
    if not points and not faults:
        faults.append(Fault("", "has a header only; at least one point is needed"))
    return points


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
    for index, name in enumerate(names):
        if not name:
            faults.append(Fault(f"{place}, column {index + 1}", "has no name"))
        elif name in names[:index]:
            faults.append(Fault(f"{place}, column {name}", f"{shown(name)} stands twice"))
    if all(name in POINT_KEYS for name in names):
        faults.append(Fault(place, "names no axis; at least one column is needed"))
    numbers = tuple((name, index) for index, name in enumerate(names) if name != "name")
    name_index = names.index("name") if "name" in names else None
    columns = Columns(numbers, name_index, len(names), decimal)
    return columns if len(faults) == count else None


def _point(row: Row, columns: Columns, faults: list[Fault]) -> Waypoint | None:
    """Return the point of a row, or None where it is faulty."""
    line, cells = row
    if len(cells) != columns.width:
        message = f"{len(cells)} cells; the header has {columns.width} columns"
        faults.append(Fault(f"line {line}", message))
        return None
    count = len(faults)
    to: dict[str, float] = {}
    for column, index in columns.numbers:
        cell = cells[index]
        if cell and not cell.isspace():
            number = _number(cell, columns.decimal)
            if number is None:
                faults.append(_no_number(row, cell, column, columns))
            else:
                to[column] = number
    if len(faults) > count:
        return None
    speed = to.pop("speed", None)
    wait = to.pop("wait", 0.0)
    tolerance = to.pop("tolerance", None)
    name = None if columns.name is None else cells[columns.name].strip() or None
    try:
        return Waypoint(to, speed=speed, wait=wait, tolerance=tolerance, name=name, line=line)
    except InputError as error:
        for fault in error.faults:
            place = f"line {line}, column {fault.place}" if fault.place else f"line {line}"
            faults.append(Fault(place, fault.message))
        return None


def _no_number(row: Row, cell: str, column: str, columns: Columns) -> Fault:
    message = f"{shown(cell)}; a number in axis units is needed"
    if "," in cell and columns.decimal == ".":
        message += "; a decimal comma is understood where ; separates the columns"
    return Fault(f"line {row.line}, column {column}", message)


def _number(cell: str, decimal: str) -> float | None:
    # Python's own spelling of numbers has underscores and other scripts' digits
    if "_" in cell or not cell.isascii():
        return None
    try:
        return float(cell.replace(decimal, "."))
    except ValueError:
        return None
