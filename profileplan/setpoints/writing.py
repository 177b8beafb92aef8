"""What does the drive get: positions at every tick of its period, in files that it can play."""

from __future__ import annotations

import csv
import io
import json
from typing import TYPE_CHECKING

from profileplan.inputs.dialect import Dialect
from profileplan.inputs.machine import DEFAULT_COLUMNS
from profileplan.setpoints import digits
from profileplan.setpoints.content import Content, Field, Source
from profileplan.setpoints.parts import Group, Part, Plain, write_rows
from profileplan.setpoints.sampling import Sampler

if TYPE_CHECKING:
    from collections.abc import Collection, Sequence
    from pathlib import Path

    from profileplan.motion.polynomials import Array
    from profileplan.motion.schedule import Schedule
    from profileplan.setpoints.content import Numbers
    from profileplan.setpoints.parts import Form, Progress
    from profileplan.setpoints.points import PvtTable


class Ticks(Source):
    """The rows of a table with a row at every tick."""

    def __init__(self, schedule: Schedule, content: Content, dialect: Dialect) -> None:
        super().__init__(schedule, content, dialect)
        self._speeds = Sampler(schedule, period=self.sampler.period, columns=("vel",))

    def velocity(self, rows: range) -> Array:
        """Return the velocities of all axes in some rows: (n, d) [mm/s or deg/s]."""
        return _given(self._speeds.table(rows).velocity)


class _Points:
    """The rows of a table with few uneven points."""

    def __init__(self, schedule: Schedule, points: PvtTable) -> None:
        self._points = points
        self._source = Source(
            schedule, points.content, points.dialect, nanoseconds=round(points.tick * 1e9)
        )
        self.fields = self._source.fields
        self.count = points.ticks.size

    def numbers(self, rows: range) -> list[Numbers]:
        """Return the numbers of each column in some rows, counted from 0."""
        some = slice(rows.start, rows.stop)
        return self._source.numbers_of(self._points.rows(some), self._points.ticks[some])

    def velocity(self, rows: range) -> Array:
        """Return the velocities of all axes in some rows: (n, d) [mm/s or deg/s]."""
        return self._points.velocity[rows.start : rows.stop]


def write_csv(
    schedule: Schedule,
    file: Path,
    *,
    period: float | None = None,
    columns: Sequence[str] = DEFAULT_COLUMNS,
    progress: Progress | None = None,
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
    content = Content(columns, period=period)
    return write_table(schedule, file, content=content, progress=progress)[0].rows


def write_table(
    schedule: Schedule,
    file: Path,
    *,
    content: Content | None = None,
    dialect: Dialect | None = None,
    kept: Collection[Path] = (),
    progress: Progress | None = None,
) -> tuple[Part, ...]:
    """Write the setpoint table of a schedule as a drive wants it, and return its files.

    Parameters
    ----------
    schedule : Schedule
    file : Path
        The table. Where each axis has a file, or the rows are split, the names of axes and the
        numbers of parts are put to its stem: ``table_x_002.csv``.
    content : Content, optional
        Default: position, velocity and acceleration at the machine's period.
    dialect : Dialect, optional
        Default: as README describes.
    kept : collection of Path
        Files that must not be written over.
    progress : callable, optional
        Called with the rows written so far and the rows in all.

    Returns
    -------
    tuple of Part
        In the order of the rows. A table is split where all axes stand, if they do in any row of
        the part but its first, and else where the part is full.

    Raises
    ------
    InputError
        A period out of range, a table too long, drives that cannot play it, or files that cannot
        be written.
    """
    dialect = dialect or Dialect()
    rows = Ticks(schedule, content or Content(), dialect)
    form = _Csv(rows.fields, dialect)
    return write_rows(rows, file, form=form, dialect=dialect, kept=kept, progress=progress)


def write_json_lines(
    schedule: Schedule,
    file: Path,
    *,
    content: Content | None = None,
    dialect: Dialect | None = None,
    kept: Collection[Path] = (),
    progress: Progress | None = None,
) -> tuple[Part, ...]:
    """Write a setpoint table with an object of JSON a line, and return its files.

    Parameters
    ----------
    schedule, file, content, kept, progress
        As for ``write_table``.
    dialect : Dialect, optional
        Of it count digits, names, time and how the table is split; all else is as JSON wants it.

    Raises
    ------
    InputError
        As for ``write_table``.

    Source: RFC 8259 for the objects.
    """
    dialect = dialect or Dialect()
    rows = Ticks(schedule, content or Content(), dialect)
    form = _JsonLines(rows.fields, dialect)
    return write_rows(rows, file, form=form, dialect=dialect, kept=kept, progress=progress)


def write_pvt(
    schedule: Schedule,
    points: PvtTable,
    file: Path,
    *,
    kept: Collection[Path] = (),
    progress: Progress | None = None,
) -> tuple[Part, ...]:
    """Write points between which a drive interpolates, and return their files.

    Parameters
    ----------
    schedule : Schedule
        What they were made of.
    points : PvtTable
        Written in the dialect, and in the increments, that its errors are those of.
    file : Path
        JSON Lines if it ends in ``.jsonl``, else CSV.
    kept, progress
        As for ``write_table``.

    Raises
    ------
    InputError
        A file cannot be written.
    """
    rows = _Points(schedule, points)
    form: Form = _Csv(rows.fields, points.dialect)
    if file.suffix.lower() == ".jsonl":
        form = _JsonLines(rows.fields, points.dialect)
    return write_rows(rows, file, form=form, dialect=points.dialect, kept=kept, progress=progress)


class _Csv:
    """Rows of cells.

    Source: RFC 4180, with other delimiters, signs and line ends where a dialect has them.
    """

    def __init__(self, fields: Sequence[Field], dialect: Dialect) -> None:
        self._fields = fields
        self._dialect = dialect

    def rows(self, numbers: Sequence[Numbers], group: Group) -> bytes:
        """Return some rows of a group's columns."""
        delimiter = self._dialect.delimiter.encode()
        cells = [
            _cell(self._fields[column], delimiter if place else b"", self._dialect)
            for place, column in enumerate(group.columns)
        ]
        return digits.text(numbers, cells, self._dialect.end)

    def encoder(self, part: Part, group: Group) -> Plain:
        """Return what makes a part's file: comments and the header come first."""
        dialect = self._dialect
        lines = list(dialect.comments)
        if dialect.tell_joins and part.joins:
            lines.append(part.joins)
        end = dialect.end.decode()
        head = "".join(f"{dialect.comment_mark} {line}".strip() + end for line in lines)
        if dialect.header:
            stream = io.StringIO()
            writer = csv.writer(stream, delimiter=dialect.delimiter, lineterminator=end)
            writer.writerow([self._fields[column].heading for column in group.columns])
            head += stream.getvalue()
        return Plain(head.encode())


class _JsonLines:
    """An object a row."""

    def __init__(self, fields: Sequence[Field], dialect: Dialect) -> None:
        self._fields = fields
        self._dialect = dialect

    def rows(self, numbers: Sequence[Numbers], group: Group) -> bytes:
        """Return some rows of a group's columns."""
        cells = []
        for place, column in enumerate(group.columns):
            own = self._fields[column]
            key = json.dumps(own.heading, ensure_ascii=False).encode()
            before = (b"," if place else b"{") + key + b":"
            cells.append(_cell(own, before, self._dialect, point=b"."))
        return digits.text(numbers, cells, b"}\n")

    def encoder(self, part: Part, group: Group) -> Plain:  # noqa: ARG002 - no file begins otherwise
        """Return what makes a part's file: nothing but its rows."""
        return Plain()


def _cell(own: Field, before: bytes, dialect: Dialect, *, point: bytes = b"") -> digits.Cell:
    significant = None if own.whole else dialect.significant.get(own.kind)
    return digits.Cell(before, own.decimals, point or dialect.decimal.encode(), significant)


def _given(velocity: Array | None) -> Array:
    if velocity is None:
        message = "velocities are not sampled"
        raise ValueError(message)
    return velocity
