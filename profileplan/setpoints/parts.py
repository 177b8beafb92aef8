"""Which rows and columns of a table go to which file, and in what order are the files written?

A table is one file, or one an axis, or parts of so many rows, in any form. Rows are made and
written block by block, so memory does not grow with the length of a table. Files take their places
when all of them are complete.
"""

from __future__ import annotations

import os
import re
from collections import Counter
from contextlib import closing
from typing import TYPE_CHECKING, NamedTuple, Protocol

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.inputs.dialect import LEAST_ROWS
from profileplan.setpoints import pace
from profileplan.setpoints.files import replacing_all
from profileplan.setpoints.pace import blocks, in_order

if TYPE_CHECKING:
    from collections.abc import Callable, Collection, Iterator, Sequence
    from pathlib import Path
    from typing import BinaryIO, TypeAlias

    import numpy.typing as npt

    from profileplan.inputs import Dialect
    from profileplan.setpoints.content import Field, Numbers
    from profileplan.setpoints.files import Replacements

    Progress: TypeAlias = Callable[[int, int], None]

STANDING = 5e-7
"""Velocity that a table shows as zero [mm/s or deg/s]: half of its last decimal."""

SIGNAL_FILE = "signals"
"""Ending of the name of the file with the signals, where each axis has a file."""

MOST_FILES = 10_000
"""Files that a table is split into at most: more are a slip of the hand."""

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

    @property
    def joins(self) -> str:
        """How it joins the part before; empty for the first one."""
        state = "at rest" if self.starts_at_rest else "in motion"
        return f"goes on from row {self.first}, {state}" if self.first else ""


class Group(NamedTuple):
    """The columns that go to one file, by their places in the table."""

    axis: str
    columns: tuple[int, ...]


class Rows(Protocol):
    """The rows of a table: ticks of a period, or uneven points."""

    @property
    def fields(self) -> Sequence[Field]:
        """The columns."""

    @property
    def count(self) -> int:
        """How many rows there are."""

    def numbers(self, rows: range) -> list[Numbers]:
        """Return the numbers of each column in some rows, counted from 0."""

    def velocity(self, rows: range) -> npt.NDArray[np.float64]:
        """Return the velocities of all axes in some rows: (n, d) [mm/s or deg/s]."""


class Encoder(Protocol):
    """What makes one file of the rows of a part."""

    def head(self) -> bytes:
        """Return what stands before the rows."""

    def body(self, rows: bytes) -> bytes:
        """Return what some rows add to the file."""

    def tail(self) -> bytes:
        """Return what stands behind the rows."""


class Form(Protocol):
    """How the files of a table are written."""

    def rows(self, numbers: Sequence[Numbers], group: Group) -> bytes:
        """Return some rows of a group's columns; many are made at once, on several cores."""

    def encoder(self, part: Part, group: Group) -> Encoder:
        """Return what makes a part's file of its rows."""


class Plain(NamedTuple):
    """A file that is its rows, one after the other, behind what stands before them."""

    before: bytes = b""

    def head(self) -> bytes:
        """Return what stands before the rows."""
        return self.before

    def body(self, rows: bytes) -> bytes:
        """Return the rows as they are."""
        return rows

    def tail(self) -> bytes:
        """Return nothing."""
        return b""


class _Output:
    """A file that is being written."""

    def __init__(self, files: Replacements, part: Part, encoder: Encoder) -> None:
        self._files = files
        self._encoder = encoder
        self._stream: BinaryIO = files.open(part.file)
        files.write(self._stream, encoder.head())

    def write(self, rows: bytes) -> None:
        """Add some rows."""
        self._files.write(self._stream, self._encoder.body(rows))

    def close(self) -> None:
        """Complete the file."""
        self._files.write(self._stream, self._encoder.tail())
        self._files.close(self._stream)


def write_rows(
    rows: Rows,
    file: Path,
    *,
    form: Form,
    dialect: Dialect,
    kept: Collection[Path] = (),
    progress: Progress | None = None,
) -> tuple[Part, ...]:
    """Write the files of a table, and return them in the order of their rows.

    Parameters
    ----------
    rows : Rows
    file : Path
        Where each axis has a file, or the rows are split, the names of axes and the numbers of
        parts are put to its stem: ``table_x_002.csv``.
    form : Form
    dialect : Dialect
        Of it count ``axis_files`` and ``rows_a_file``.
    kept : collection of Path
        Files that must not be written over.
    progress : callable, optional
        Called with the rows written so far and the rows in all.

    Raises
    ------
    InputError
        Numbers that are not finite, or files that cannot be written.
    """
    groups = _groups(rows.fields, dialect)
    cuts, still = _cuts(rows, dialect.rows_a_file)
    if len(cuts) * len(groups) > MOST_FILES:
        message = f"{dialect.rows_a_file}; that makes {len(cuts) * len(groups)} files of "
        message += f"{rows.count} rows; allowed: {MOST_FILES} files"
        raise InputError([Fault("rows_a_file", message)])
    parts = [
        Part(_named(file, group, index, dialect), group.axis, cut.start, len(cut), rest)
        for index, (cut, rest) in enumerate(zip(cuts, still, strict=True), start=1)
        for group in groups
    ]
    _judge_names(file, parts, kept)

    def made(some: range) -> list[bytes]:
        numbers = rows.numbers(some)
        _judge_finite(numbers, rows.fields)
        return [form.rows([numbers[place] for place in group.columns], group) for group in groups]

    width = len(rows.fields)
    jobs = (some for cut in cuts for some in blocks(cut, width))
    with replacing_all() as files, closing(in_order(made, jobs)) as contents:
        for index, cut in enumerate(cuts):
            own = parts[index * len(groups) : (index + 1) * len(groups)]
            outputs = [
                _Output(files, part, form.encoder(part, group))
                for group, part in zip(groups, own, strict=True)
            ]
            for some in blocks(cut, width):
                for output, content in zip(outputs, next(contents), strict=True):
                    output.write(content)
                if progress:
                    progress(some.stop, rows.count)
            for output in outputs:
                output.close()
    return tuple(parts)


def _groups(fields: Sequence[Field], dialect: Dialect) -> list[Group]:
    """Return which columns go to which file."""
    if not dialect.axis_files:
        return [Group("", tuple(range(len(fields))))]
    members: dict[tuple[bool, str], list[int]] = {}
    for place, own in enumerate(fields[1:], start=1):
        signal = own.kind == "signal"
        members.setdefault((signal, SIGNAL_FILE if signal else own.name), []).append(place)
    return [Group(name, (0, *places)) for (_, name), places in members.items()]


def _cuts(rows: Rows, most: int | None) -> tuple[list[range], list[bool]]:
    """Return the rows of each part, and whether all axes stand in the row before it.

    A row alone is no motion that a drive could play, so no part has only one, if that can be.
    """
    most = most or rows.count
    cuts: list[range] = []
    still = [True]
    start = 0
    while start + most < rows.count:
        stop = max(min(start + most, rows.count - LEAST_ROWS), start + LEAST_ROWS)
        end, rests = _last_rest(rows, range(start + LEAST_ROWS - 1, stop))
        cuts.append(range(start, end))
        still.append(rests)
        start = end
    return [*cuts, range(start, rows.count)], still


def _last_rest(rows: Rows, some: range) -> tuple[int, bool]:
    """Return behind which of some rows a part ends, and whether the axes stand there."""
    stop = some.stop
    while stop > some.start:
        begin = max(stop - pace.ROWS_AT_A_TIME, some.start)
        velocity = rows.velocity(range(begin, stop))
        standing = np.flatnonzero((np.abs(velocity) <= STANDING).all(axis=1))
        if standing.size:
            return begin + int(standing[-1]) + 1, True
        stop = begin
    return some.stop, False


def _named(file: Path, group: Group, number: int, dialect: Dialect) -> Path:
    """Return the name of a part's file."""
    stem = file.stem
    if group.axis:
        stem += f"_{group.axis}"
    if dialect.rows_a_file is not None:
        stem += f"_{number:03d}"
    return file.with_name(stem + file.suffix)


def _judge_names(file: Path, parts: Sequence[Part], kept: Collection[Path]) -> None:
    """Refuse names of files that cannot be, and parts of a longer table that would stay."""
    faults = [
        Fault("", f'"{part.axis}" cannot be part of the name of a file', file)
        for part in parts
        if {"/", "\\", "\0"} & set(part.axis)
    ]
    names = [part.file for part in parts]
    faults += [
        Fault("", "would be written twice: rename the axis", name)
        for name, times in Counter(names).items()
        if times > 1
    ]
    taken = {os.path.realpath(other) for other in kept}
    faults += [
        Fault("", "the job is read from this file; choose another to write to", name)
        for name in names
        if os.path.realpath(name) in taken
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
    for part in parts:
        match = NUMBERED.fullmatch(part.file.stem)
        if match:
            number = int(match[2]) + 1
            left = part.file.with_name(f"{match[1]}_{number:03d}{part.file.suffix}")
            if left not in own and left.exists():
                yield left


def _judge_finite(numbers: Sequence[Numbers], fields: Sequence[Field]) -> None:
    """Refuse what is no number: a drive would take it for one."""
    faults = [
        Fault(own.heading, "is not finite; the motion cannot be written")
        for own, values in zip(fields, numbers, strict=True)
        if not np.isfinite(values).all()
    ]
    if faults:
        raise InputError(faults)
