"""How does a program get a table without reading text: as .npy or Parquet?

Values are not rounded there, but where a drive counts increments.
"""

from __future__ import annotations

from contextlib import closing
from importlib import import_module
from typing import TYPE_CHECKING

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.inputs.dialect import Dialect
from profileplan.setpoints.content import Content, Field, Source
from profileplan.setpoints.files import not_written, replacing_all
from profileplan.setpoints.pace import blocks, in_order

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path
    from types import ModuleType
    from typing import TypeAlias

    import numpy.typing as npt

    from profileplan.motion.schedule import Schedule

    Progress: TypeAlias = Callable[[int, int], None]

MAGIC = b"\x93NUMPY"
ALIGNMENT = 64
"""The rows of a .npy file begin at a multiple of it [bytes]."""


def write_npy(
    schedule: Schedule,
    file: Path,
    *,
    content: Content | None = None,
    dialect: Dialect | None = None,
    progress: Progress | None = None,
) -> int:
    """Write a setpoint table as a structured array of NumPy, and return its number of rows.

    Parameters
    ----------
    schedule : Schedule
    file : Path
        ``np.load(file)["x_pos_mm"]`` is a column of it.
    content : Content, optional
    dialect : Dialect, optional
        Of it count names and time.
    progress : callable, optional
        Called with the rows written so far and the rows in all.

    Raises
    ------
    InputError
        As for ``write_table``.

    Source: NumPy enhancement proposal 1 for the form of the file.
    """
    source = Source(schedule, content or Content(), dialect or Dialect())
    kind = np.dtype([(own.heading, _type(own)) for own in source.fields])
    jobs = blocks(range(source.count))
    with (
        replacing_all() as files,
        closing(in_order(lambda rows: _records(source, rows, kind).tobytes(), jobs)) as parts,
    ):
        stream = files.open(file)
        files.write(stream, _npy_head(kind, source.count))
        for rows in blocks(range(source.count)):
            files.write(stream, next(parts))
            if progress:
                progress(rows.stop, source.count)
    return source.count


def write_parquet(
    schedule: Schedule,
    file: Path,
    *,
    content: Content | None = None,
    dialect: Dialect | None = None,
    progress: Progress | None = None,
) -> int:
    """Write a setpoint table as Parquet, and return its number of rows.

    Parameters
    ----------
    schedule : Schedule
    file : Path
    content : Content, optional
    dialect : Dialect, optional
        Of it count names and time.
    progress : callable, optional
        Called with the rows written so far and the rows in all.

    Raises
    ------
    InputError
        As for ``write_table``, and if pyarrow is not installed.
    """
    arrow, parquet = _arrow(file)
    source = Source(schedule, content or Content(), dialect or Dialect())
    kind = np.dtype([(own.heading, _type(own)) for own in source.fields])
    schema = arrow.schema([(name, arrow.from_numpy_dtype(kind[name])) for name in kind.names or ()])
    jobs = blocks(range(source.count))
    with (
        replacing_all() as files,
        closing(in_order(lambda rows: _records(source, rows, kind), jobs)) as parts,
    ):
        stream = files.open(file)
        try:
            with parquet.ParquetWriter(stream, schema) as writer:
                for rows in blocks(range(source.count)):
                    records = next(parts)
                    columns = [np.ascontiguousarray(records[name]) for name in kind.names or ()]
                    writer.write_table(arrow.table(columns, schema=schema))
                    if progress:
                        progress(rows.stop, source.count)
        except OSError as error:
            raise not_written(file, error) from error
    return source.count


def _type(own: Field) -> str:
    """Return the type that holds a column's numbers."""
    if own.kind == "signal":
        return "|u1"
    return "<i8" if own.whole and not own.decimals and own.kind != "time" else "<f8"


def _records(source: Source, rows: range, kind: np.dtype[np.void]) -> npt.NDArray[np.void]:
    """Return some rows as records."""
    records = np.empty(len(rows), dtype=kind)
    for own, values in zip(source.fields, source.numbers(rows), strict=True):
        if not np.isfinite(values).all():
            raise InputError([Fault(own.heading, "is not finite; the motion cannot be written")])
        exact = values / 10.0**own.decimals if own.whole and own.decimals else values
        records[own.heading] = exact
    return records


def _npy_head(kind: np.dtype[np.void], count: int) -> bytes:
    """Return what stands before the records: the magic word, the version, and what follows."""
    content = f"{{'descr': {kind.descr!r}, 'fortran_order': False, 'shape': ({count},), }}"
    # Version 3 has names beyond ASCII; both have a length of four bytes.
    version = b"\x02\x00" if content.isascii() else b"\x03\x00"
    text = content.encode()
    padding = -(len(MAGIC) + len(version) + 4 + len(text) + 1) % ALIGNMENT
    text += b" " * padding + b"\n"
    return MAGIC + version + len(text).to_bytes(4, "little") + text


def _arrow(file: Path) -> tuple[ModuleType, ModuleType]:
    """Return the library that writes Parquet."""
    try:
        return import_module("pyarrow"), import_module("pyarrow.parquet")
    except ImportError as error:
        message = "Parquet needs pyarrow: install profileplan[parquet], or write .npy"
        raise InputError([Fault("", message, file)]) from error
