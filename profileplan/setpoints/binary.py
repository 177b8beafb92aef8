"""How does a program get a table without reading text: as .npy or Parquet?

Values are not rounded there, but where a drive counts increments.
"""

from __future__ import annotations

import io
from typing import TYPE_CHECKING

import numpy as np

from profileplan.inputs.dialect import Dialect
from profileplan.setpoints.content import Content, Field
from profileplan.setpoints.files import parquet_libraries
from profileplan.setpoints.parts import Group, Part, Plain, write_rows
from profileplan.setpoints.writing import Ticks

if TYPE_CHECKING:
    from collections.abc import Collection, Sequence
    from pathlib import Path
    from types import ModuleType

    from typing_extensions import Buffer

    from profileplan.motion.schedule import Schedule
    from profileplan.setpoints.content import Numbers
    from profileplan.setpoints.parts import Progress

MAGIC = b"\x93NUMPY"
ALIGNMENT = 64
"""The rows of a .npy file begin at a multiple of it [bytes]."""


def write_npy(
    schedule: Schedule,
    file: Path,
    *,
    content: Content | None = None,
    dialect: Dialect | None = None,
    kept: Collection[Path] = (),
    progress: Progress | None = None,
) -> tuple[Part, ...]:
    """Write a setpoint table as a structured array of NumPy, and return its files.

    Parameters
    ----------
    schedule, content, kept, progress
        As for ``write_table``.
    file : Path
        ``np.load(file)["x_pos_mm"]`` is a column of it.
    dialect : Dialect, optional
        Of it count names, time and how the table is split.

    Raises
    ------
    InputError
        As for ``write_table``.

    Source: NumPy enhancement proposal 1 for the form of the file.
    """
    dialect = dialect or Dialect()
    rows = Ticks(schedule, content or Content(), dialect)
    form = _Npy(rows.fields)
    return write_rows(rows, file, form=form, dialect=dialect, kept=kept, progress=progress)


def write_parquet(
    schedule: Schedule,
    file: Path,
    *,
    content: Content | None = None,
    dialect: Dialect | None = None,
    kept: Collection[Path] = (),
    progress: Progress | None = None,
) -> tuple[Part, ...]:
    """Write a setpoint table as Parquet, and return its files.

    Parameters
    ----------
    schedule, file, content, kept, progress
        As for ``write_table``.
    dialect : Dialect, optional
        Of it count names, time and how the table is split. How a part joins the one before stands
        in its metadata, as "joins", where the dialect tells joins.

    Raises
    ------
    InputError
        As for ``write_table``, and if pyarrow is not installed.
    """
    libraries = parquet_libraries(file)
    dialect = dialect or Dialect()
    rows = Ticks(schedule, content or Content(), dialect)
    form = _Parquet(rows.fields, libraries, tell_joins=dialect.tell_joins)
    return write_rows(rows, file, form=form, dialect=dialect, kept=kept, progress=progress)


class _Records:
    """Rows as records of numbers."""

    def __init__(self, fields: Sequence[Field]) -> None:
        self._fields = fields

    def kind(self, group: Group) -> np.dtype[np.void]:
        """Return the type of a group's records."""
        own = [self._fields[column] for column in group.columns]
        return np.dtype([(one.heading, _type(one)) for one in own])

    def rows(self, numbers: Sequence[Numbers], group: Group) -> bytes:
        """Return some rows of a group's columns."""
        records = np.empty(numbers[0].size, dtype=self.kind(group))
        for column, values in zip(group.columns, numbers, strict=True):
            own = self._fields[column]
            scaled = own.whole and own.decimals
            records[own.heading] = values / 10.0**own.decimals if scaled else values
        return records.tobytes()


class _Npy(_Records):
    """Records behind a line that says what they are."""

    def encoder(self, part: Part, group: Group) -> Plain:
        """Return what makes a part's file."""
        return Plain(_npy_head(self.kind(group), part.rows))


class _Parquet(_Records):
    """Columns in the form of Parquet."""

    def __init__(
        self,
        fields: Sequence[Field],
        libraries: tuple[ModuleType, ModuleType],
        *,
        tell_joins: bool,
    ) -> None:
        super().__init__(fields)
        self._libraries = libraries
        self._tell_joins = tell_joins

    def encoder(self, part: Part, group: Group) -> _ParquetFile:
        """Return what makes a part's file."""
        joins = part.joins if self._tell_joins else ""
        return _ParquetFile(self._libraries, self.kind(group), joins)


class _ParquetFile:
    """What the library writes goes to memory first, and from there to the file."""

    def __init__(
        self, libraries: tuple[ModuleType, ModuleType], kind: np.dtype[np.void], joins: str
    ) -> None:
        self._arrow, parquet = libraries
        self._kind = kind
        arrow = self._arrow
        names = kind.names or ()
        self._schema = arrow.schema(
            [(name, arrow.from_numpy_dtype(kind[name])) for name in names],
            metadata={"joins": joins} if joins else None,
        )
        self._made = _Passage()
        self._writer = parquet.ParquetWriter(self._made, self._schema)

    def head(self) -> bytes:
        """Return what stands before the rows."""
        return self._made.taken()

    def body(self, rows: bytes) -> bytes:
        """Return what some rows add to the file."""
        records = np.frombuffer(rows, dtype=self._kind)
        columns = [np.ascontiguousarray(records[name]) for name in self._kind.names or ()]
        self._writer.write_table(self._arrow.table(columns, schema=self._schema))
        return self._made.taken()

    def tail(self) -> bytes:
        """Return what stands behind the rows."""
        self._writer.close()
        return self._made.taken()


class _Passage(io.RawIOBase):
    """A stream that keeps what is written until it is taken."""

    def __init__(self) -> None:
        super().__init__()
        self._parts: list[bytes] = []
        self._size = 0

    def writable(self) -> bool:
        """Tell that it takes bytes."""
        return True

    def write(self, content: Buffer, /) -> int:
        """Keep some bytes."""
        self._parts.append(bytes(content))
        self._size += len(self._parts[-1])
        return len(self._parts[-1])

    def tell(self) -> int:
        """Return how many bytes were written."""
        return self._size

    def taken(self) -> bytes:
        """Return what was written since the last time."""
        content = b"".join(self._parts)
        self._parts.clear()
        return content


def _type(own: Field) -> str:
    """Return the type that holds a column's numbers."""
    if own.kind == "signal":
        return "|u1"
    return "<i8" if own.whole and not own.decimals and own.kind != "time" else "<f8"


def _npy_head(kind: np.dtype[np.void], count: int) -> bytes:
    """Return what stands before the records: the magic word, the version, and what follows."""
    content = f"{{'descr': {kind.descr!r}, 'fortran_order': False, 'shape': ({count},), }}"
    # Version 3 has names beyond ASCII; both have a length of four bytes.
    version = b"\x02\x00" if content.isascii() else b"\x03\x00"
    text = content.encode()
    padding = -(len(MAGIC) + len(version) + 4 + len(text) + 1) % ALIGNMENT
    text += b" " * padding + b"\n"
    return MAGIC + version + len(text).to_bytes(4, "little") + text
