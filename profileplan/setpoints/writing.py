"""What does the drive get: positions at every tick of its period, in files that it can play.

Rows are made and written block by block, so memory does not grow with the length of a table. Files
take their places when all of them are complete.
"""

from __future__ import annotations

import csv
import io
import json
import re
from contextlib import closing
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.inputs.dialect import Dialect
from profileplan.inputs.machine import DEFAULT_COLUMNS
from profileplan.setpoints import digits, pace
from profileplan.setpoints.content import Content, Field, Source
from profileplan.setpoints.files import replacing_all
from profileplan.setpoints.pace import blocks, in_order
from profileplan.setpoints.sampling import Sampler

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Sequence
    from pathlib import Path
    from typing import BinaryIO, TypeAlias

    from profileplan.motion.schedule import Schedule
    from profileplan.setpoints.content import Numbers
    from profileplan.setpoints.files import Replacements
    from profileplan.setpoints.points import PvtTable

    Progress: TypeAlias = Callable[[int, int], None]

STANDING = 5e-7
"""Velocity that a table shows as zero [mm/s or deg/s]: half of its last decimal."""

SIGNAL_FILE = "signals"
"""Ending of the name of the file with the signals, where each axis has a file."""


NUMBERED = re.compile(r"(.*)_(\d{3,})")
"""The stem of the name of a part's file: the table's, and the number of the part."""


class Part(NamedTuple):
    """A file of a table.

    Parameters
    ----------
    file : Path
    axis : str
        Whose columns it holds; empty for all.
    first : int
        The first row in it, counted from 0.
    rows : int
    starts_at_rest : bool
        Whether all axes stand in the row before its first, from which it goes on.
    """

    file: Path
    axis: str
    first: int
    rows: int
    starts_at_rest: bool


class _Group(NamedTuple):
    """The columns that go to one file, by their places in the table."""

    axis: str
    columns: tuple[int, ...]


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
    progress : callable, optional
        Called with the rows written so far and the rows in all.

    Returns
    -------
    tuple of Part
        In the order of the rows. A table is split where all axes stand, if they do in any row of
        the part, and else where the part is full.

    Raises
    ------
    InputError
        A period out of range, a table too long, drives that cannot play it, or files that cannot
        be written.
    """
    content, dialect = content or Content(), dialect or Dialect()
    source = Source(schedule, content, dialect)
    groups = _groups(source.fields, dialect)
    cuts, still = _cuts(schedule, source, dialect)
    parts = [
        Part(_named(file, group, index, dialect), group.axis, cut.start, len(cut), rest)
        for index, (cut, rest) in enumerate(zip(cuts, still, strict=True), start=1)
        for group in groups
    ]
    _judge_names(file, parts)
    cells = _csv_cells(source.fields, groups, dialect)

    def rows_text(rows: range) -> list[bytes]:
        numbers = source.numbers(rows)
        _judge_finite(numbers, source.fields)
        return [
            digits.text([numbers[column] for column in group.columns], own, dialect.end)
            for group, own in zip(groups, cells, strict=True)
        ]

    jobs = (rows for cut in cuts for rows in blocks(cut))
    with replacing_all() as files, closing(in_order(rows_text, jobs)) as texts:
        for index, cut in enumerate(cuts):
            own_parts = parts[index * len(groups) : (index + 1) * len(groups)]
            streams = [files.open(part.file) for part in own_parts]
            for group, part, stream in zip(groups, own_parts, streams, strict=True):
                files.write(stream, _head(source, group, part, dialect))
            for rows in blocks(cut):
                _write_all(files, streams, next(texts))
                if progress:
                    progress(rows.stop, source.count)
            for stream in streams:
                files.close(stream)
    return tuple(parts)


def write_json_lines(
    schedule: Schedule,
    file: Path,
    *,
    content: Content | None = None,
    dialect: Dialect | None = None,
    progress: Progress | None = None,
) -> int:
    """Write a setpoint table with an object of JSON a line, and return its number of rows.

    Parameters
    ----------
    schedule : Schedule
    file : Path
    content : Content, optional
    dialect : Dialect, optional
        Of it count digits, names and time; all else is as JSON wants it.
    progress : callable, optional
        Called with the rows written so far and the rows in all.

    Raises
    ------
    InputError
        As for ``write_table``.

    Source: RFC 8259 for the objects.
    """
    dialect = dialect or Dialect()
    source = Source(schedule, content or Content(), dialect)
    befores = [
        (b"{" if place == 0 else b",") + json.dumps(own.heading, ensure_ascii=False).encode() + b":"
        for place, own in enumerate(source.fields)
    ]
    cells = [
        _cell(own, before, dialect, point=b".")
        for own, before in zip(source.fields, befores, strict=True)
    ]

    def rows_text(rows: range) -> bytes:
        numbers = source.numbers(rows)
        _judge_finite(numbers, source.fields)
        return digits.text(numbers, cells, b"}\n")

    jobs = blocks(range(source.count))
    with replacing_all() as files, closing(in_order(rows_text, jobs)) as texts:
        stream = files.open(file)
        for rows in blocks(range(source.count)):
            files.write(stream, next(texts))
            if progress:
                progress(rows.stop, source.count)
    return source.count


def write_pvt(
    schedule: Schedule, points: PvtTable, file: Path, *, dialect: Dialect | None = None
) -> int:
    """Write points between which a drive interpolates, and return their number.

    Parameters
    ----------
    schedule : Schedule
        What they were made of.
    points : PvtTable
    file : Path
    dialect : Dialect, optional
        Of one file; positions and velocities with fewer decimals than usual are off by more than
        the points' error says.

    Raises
    ------
    InputError
        The dialect asks for several files, or the file cannot be written.
    """
    dialect = dialect or Dialect()
    faults = [
        Fault(place, "only for tables with a row at every tick")
        for place, given in (
            ("axis_files", dialect.axis_files),
            ("rows_a_file", dialect.rows_a_file is not None),
        )
        if given
    ]
    if faults:
        raise InputError(faults)
    content = Content(("pos", "vel"), period=points.tick)
    source = Source(schedule, content, dialect)
    group = _groups(source.fields, dialect)[0]
    cells = _csv_cells(source.fields, [group], dialect)[0]
    numbers = source.numbers_of(points.rows, points.ticks)
    with replacing_all() as files:
        stream = files.open(file)
        part = Part(file, "", 0, points.ticks.size, starts_at_rest=True)
        files.write(stream, _head(source, group, part, dialect))
        files.write(stream, digits.text(numbers, cells, dialect.end))
    return points.ticks.size


def _groups(fields: Sequence[Field], dialect: Dialect) -> list[_Group]:
    """Return which columns go to which file."""
    if not dialect.axis_files:
        return [_Group("", tuple(range(len(fields))))]
    members: dict[tuple[bool, str], list[int]] = {}
    for place, own in enumerate(fields[1:], start=1):
        signal = own.kind == "signal"
        members.setdefault((signal, SIGNAL_FILE if signal else own.name), []).append(place)
    return [_Group(name, (0, *places)) for (_, name), places in members.items()]


def _cuts(schedule: Schedule, source: Source, dialect: Dialect) -> tuple[list[range], list[bool]]:
    """Return the rows of each part, and whether all axes stand in the row before it."""
    most = dialect.rows_a_file or source.count
    speeds = Sampler(schedule, period=source.sampler.period, columns=("vel",))
    cuts: list[range] = []
    still = [True]
    start = 0
    while start + most < source.count:
        end, rests = _last_rest(speeds, range(start, start + most))
        cuts.append(range(start, end))
        still.append(rests)
        start = end
    return [*cuts, range(start, source.count)], still


def _last_rest(speeds: Sampler, rows: range) -> tuple[int, bool]:
    """Return behind which of some rows a part ends, and whether the axes stand there."""
    stop = rows.stop
    while stop > rows.start:
        begin = max(stop - pace.ROWS_AT_A_TIME, rows.start)
        velocity = speeds.table(range(begin, stop)).velocity
        if velocity is not None:
            standing = np.flatnonzero((np.abs(velocity) <= STANDING).all(axis=1))
            if standing.size:
                return begin + int(standing[-1]) + 1, True
        stop = begin
    return rows.stop, False


def _named(file: Path, group: _Group, number: int, dialect: Dialect) -> Path:
    """Return the name of a part's file."""
    stem = file.stem
    if group.axis:
        stem += f"_{group.axis}"
    if dialect.rows_a_file is not None:
        stem += f"_{number:03d}"
    return file.with_name(stem + file.suffix)


def _judge_names(file: Path, parts: Sequence[Part]) -> None:
    """Refuse names of files that cannot be, and parts of a longer table that would stay."""
    faults = [
        Fault("", f'"{part.axis}" cannot be part of the name of a file', file)
        for part in parts
        if {"/", "\\", "\0"} & set(part.axis)
    ]
    names = [part.file for part in parts]
    faults += [
        Fault("", "would be written twice: rename the axis", name)
        for name in dict.fromkeys(names)
        if names.count(name) > 1
    ]
    faults += [
        Fault("", "is left of a table with more parts; remove it", left)
        for left in _left_parts(parts)
    ]
    if faults:
        raise InputError(faults)


def _left_parts(parts: Sequence[Part]) -> Iterator[Path]:
    """Yield files that would be taken for the parts that come next."""
    own = {part.file for part in parts}
    for file in own:
        match = NUMBERED.fullmatch(file.stem)
        if match:
            number = int(match[2]) + 1
            left = file.with_name(f"{match[1]}_{number:03d}{file.suffix}")
            if left not in own and left.exists():
                yield left


def _csv_cells(
    fields: Sequence[Field], groups: Sequence[_Group], dialect: Dialect
) -> list[list[digits.Cell]]:
    delimiter = dialect.delimiter.encode()
    return [
        [
            _cell(fields[column], delimiter if place else b"", dialect)
            for place, column in enumerate(group.columns)
        ]
        for group in groups
    ]


def _cell(own: Field, before: bytes, dialect: Dialect, *, point: bytes = b"") -> digits.Cell:
    significant = None if own.whole else dialect.significant.get(own.kind)
    return digits.Cell(before, own.decimals, point or dialect.decimal.encode(), significant)


def _head(source: Source, group: _Group, part: Part, dialect: Dialect) -> bytes:
    """Return what stands above the rows of a part: comments, and the header."""
    lines = list(dialect.comments)
    if dialect.tell_joins and part.first:
        state = "at rest" if part.starts_at_rest else "in motion"
        lines.append(f"goes on from row {part.first}, {state}")
    end = dialect.end.decode()
    content = "".join(f"{dialect.comment_mark} {line}".strip() + end for line in lines)
    if dialect.header:
        stream = io.StringIO()
        writer = csv.writer(stream, delimiter=dialect.delimiter, lineterminator=end)
        writer.writerow([source.fields[column].heading for column in group.columns])
        content += stream.getvalue()
    return content.encode()


def _judge_finite(numbers: Sequence[Numbers], fields: Sequence[Field]) -> None:
    """Refuse what is no number: a drive would take it for one."""
    faults = [
        Fault(own.heading, "is not finite; the motion cannot be written")
        for own, values in zip(fields, numbers, strict=True)
        if not np.isfinite(values).all()
    ]
    if faults:
        raise InputError(faults)


def _write_all(files: Replacements, streams: Sequence[BinaryIO], contents: Sequence[bytes]) -> None:
    for stream, content in zip(streams, contents, strict=True):
        files.write(stream, content)
