"""Which files make up a table, and what is read of them?

A table may be split into parts, numbered at the end of their names. Parts that lie beside each
other, have the same columns and whose times go on from one to the next are one table.
"""

from __future__ import annotations

from bisect import bisect_left
from dataclasses import dataclass, field, replace
from itertools import count
from typing import TYPE_CHECKING

from profileplan.errors import InputError
from profileplan.setpoints.layout import Layout, layout_of
from profileplan.setpoints.parts import NUMBERED
from profileplan.setpoints.reading import BLOCK, Rows, read_rows
from profileplan.setpoints.records import FORMS, read_records, record_sheet

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator, Sequence
    from pathlib import Path
    from typing import TypeAlias

    from profileplan.inputs import Dialect, Machine
    from profileplan.setpoints.columns import Sheet

    Progress: TypeAlias = Callable[[int, int], None]


@dataclass(frozen=True, eq=False)
class TableFiles:
    """The files of a table.

    Parameters
    ----------
    sheet : Sheet
        What its columns are, with as many decimals as any part has.
    parts : tuple of Sheet
        One a file, in the order of the rows.
    strange : tuple of Path
        Files that have the names of the parts before or behind these, and are no tables.
    """

    sheet: Sheet
    parts: tuple[Sheet, ...]
    strange: tuple[Path, ...] = ()
    _begins: list[int] = field(default_factory=list)

    def read(self, *, block: int = BLOCK, progress: Progress | None = None) -> Iterator[Rows]:
        """Yield the rows, some at a time; lines are counted on from part to part.

        Parameters
        ----------
        block : int
            About how much is read together [bytes of text].
        progress : callable, optional
            Called with what was read so far and what there is in all [bytes].

        Raises
        ------
        InputError
            Rows are no numbers, or a file is damaged.
        """
        self._begins.clear()
        sizes = [part.file.stat().st_size for part in self.parts]
        last = done = 0
        for part, size in zip(self.parts, sizes, strict=True):
            begin = last
            self._begins.append(begin)
            told = None if progress is None else _shifted(progress, done, size, sum(sizes))
            for rows in _rows(part, block, told):
                last = begin + int(rows.lines[-1])
                yield Rows(rows.lines + begin, rows.numbers)
            done += size

    def place(self, line: int) -> tuple[Path, int]:
        """Return the file that a line is in that was read, and which line of the file it is."""
        part = bisect_left(self._begins, line) - 1
        return self.parts[part].file, line - self._begins[part]


def table_files(
    file: Path,
    machine: Machine,
    *,
    dialect: Dialect | None = None,
    headings: Sequence[str] | None = None,
    columns: Sequence[str] | None = None,
) -> TableFiles:
    """Return the table that a file holds or is a part of.

    Parameters
    ----------
    file : Path
        Its ending tells its form: .jsonl, .npy, .parquet; any other is a text.
    machine : Machine
    dialect, headings, columns
        As for ``layout_of``.

    Raises
    ------
    InputError
        The file cannot be read, or is no table for this machine.
    """

    def sheet_of(part: Path) -> Sheet:
        if part.suffix.lower() in FORMS:
            return record_sheet(part, machine, headings=headings, columns=columns)
        return layout_of(part, machine, dialect=dialect, headings=headings, columns=columns)

    def joined(own: Sheet, numbers: Iterable[int], *, upward: bool) -> Iterator[Sheet]:
        """Yield the parts of some numbers while each goes on from the one next to it."""
        for number in numbers:
            part = file.with_name(f"{stem}_{number:03d}{file.suffix}")
            if not part.exists():
                return
            try:
                other = sheet_of(part)
            except InputError:
                strange.append(part)
                return
            later, earlier = (other, own) if upward else (own, other)
            if other.names != own.names or not earlier.begins < later.begins:
                return
            yield other
            own = other

    strange: list[Path] = []
    own = sheet_of(file)
    match = NUMBERED.fullmatch(file.stem)
    if match is None:
        return TableFiles(own, (own,))
    stem, number = match[1], int(match[2])
    before = list(joined(own, range(number - 1, 0, -1), upward=False))[::-1]
    parts = [*before, own, *joined(own, count(number + 1), upward=True)]
    sheets = _alike(parts)
    return TableFiles(sheets[0], sheets, tuple(strange))


def _alike(parts: Sequence[Sheet]) -> tuple[Sheet, ...]:
    """Return parts of one table: what the first holds, all do."""
    first = parts[0]
    places = [
        {
            column.cell: decimals
            for column, decimals in zip(part.columns, part.decimals, strict=True)
        }
        for part in parts
    ]
    decimals = tuple(max(place.get(column.cell, 0) for place in places) for column in first.columns)
    return tuple(replace(part, columns=first.columns, decimals=decimals) for part in parts)


def _rows(part: Sheet, block: int, progress: Progress | None) -> Iterator[Rows]:
    if isinstance(part, Layout):
        return read_rows(part, block=block, progress=progress)
    return read_records(part, block=block, progress=progress)


def _shifted(progress: Progress, done: int, size: int, total: int) -> Progress:
    """Return what tells of one of several files as of all of them."""

    def told(own: int, of: int) -> None:
        progress(done + size * own // max(of, 1), total)

    return told
