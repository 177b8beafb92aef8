"""What does a table say that is no text of cells: JSON Lines, .npy or Parquet?

Such a table is read some records at a time. Its columns are told by their names, as in a text; an
.npy file of plain numbers is a table without headings. Rows are counted from 1.
"""

from __future__ import annotations

import json
import math
import struct
import tokenize
import warnings
from contextlib import contextmanager
from dataclasses import replace
from typing import TYPE_CHECKING, NamedTuple, Protocol

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.inputs.rules import Range, shown, tidy
from profileplan.setpoints.columns import (
    MOST_COLUMNS,
    Column,
    Sheet,
    found_columns,
    signal_columns,
    usual_headings,
    usual_names,
)
from profileplan.setpoints.files import parquet_libraries
from profileplan.setpoints.layout import MARK, MOST_LINE, ROWS_TRIED, opened
from profileplan.setpoints.reading import BLOCK, MOST_FAULTY, Rows, last_decimals, whole_lines

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping, Sequence
    from pathlib import Path

    import numpy.typing as npt

    from profileplan.inputs import Machine
    from profileplan.motion.polynomials import Array

NUMBER_BYTES = 16
"""About what a number takes in a text [bytes]: blocks of records are as large as those of texts."""

HEAD_OF_NPY = 1 << 18
"""Bytes of the description in an .npy file."""

NPY, PARQUET = "an .npy table", "a Parquet file"
"""What a file is called that is none."""

SLOWLY = {"buffer_size": BLOCK, "pre_buffer": False}
"""How a Parquet file is opened so that only a little of it is in memory."""

DAMAGES = (
    ValueError,
    TypeError,
    LookupError,
    AttributeError,
    ArithmeticError,
    EOFError,
    MemoryError,
    NotImplementedError,
    RecursionError,
    SyntaxError,
    OSError,
    struct.error,
    tokenize.TokenError,
)
"""What libraries raise on files that are damaged, or not what their names say."""


class Block(NamedTuple):
    """Some records: their numbers from 1, values (n, k), what is wrong, and how far reading is.

    A value is NaN where it is no number.
    """

    rows: Rows
    faults: Sequence[Fault]
    done: int
    total: int


class Records(Protocol):
    """A file of records."""

    @property
    def names(self) -> Sequence[str] | None:
        """The names of the columns; None where they have none."""

    @property
    def width(self) -> int:
        """How many columns there are."""

    def numeric(self, cell: int) -> bool:
        """Tell whether a column holds numbers."""

    def coarse(self, cell: int) -> bool:
        """Tell whether a column's numbers have less than double precision."""

    def blocks(self, columns: Sequence[Column], size: int) -> Iterator[Block]:
        """Yield the records, about so many bytes of text at a time."""


def record_sheet(
    file: Path,
    machine: Machine,
    *,
    headings: Sequence[str] | None = None,
    columns: Sequence[str] | None = None,
) -> Sheet:
    """Tell which columns a table of records has.

    Parameters
    ----------
    file : Path
        Its ending tells its form: a key of ``FORMS``.
    machine : Machine
    headings, columns : sequence of str, optional
        Of a table without names, as in ``layout_of``.

    Raises
    ------
    InputError
        The file cannot be read, or is no table for this machine.
    """
    records = _records(file)
    if records.names is None:
        usual = headings or usual_headings(machine, columns=columns, file=file)
        more = records.width - len(usual)
        names = [*usual, *(f"signal {number + 1}" for number in range(more))]
        if more < 0:
            raise InputError([_width_fault(records, usual, file)])
    elif columns is not None:
        message = "has named columns: what a table holds is said for one without"
        raise InputError([Fault("", message, file)])
    else:
        renamed = usual_names(machine.setpoints.dialect)
        usual = names = [renamed.get(name, name) for name in records.names]
    found = found_columns(names, machine, file=file)
    faults = [
        Fault("", f"column {shown(column.name)} holds no numbers", file)
        for column in found
        if not records.numeric(column.cell)
    ]
    if faults:
        raise InputError(faults)
    coarse = tuple(column.name for column in found if records.coarse(column.cell))
    sheet = Sheet(file=file, names=tuple(names), columns=found, coarse=coarse)
    sheet = _tried(records, sheet, machine)
    if len(sheet.signals()) < len(names) - len(usual):
        raise InputError([_width_fault(records, usual, file)])
    return sheet


def read_records(
    sheet: Sheet, *, block: int = BLOCK, progress: Callable[[int, int], None] | None = None
) -> Iterator[Rows]:
    """Yield the rows of a table of records, some at a time.

    Parameters
    ----------
    sheet : Sheet
    block : int
        About how much is read together [bytes of text].
    progress : callable, optional
        Called with what was read so far and what there is in all.

    Raises
    ------
    InputError
        Rows are no numbers, after the last of them or too many; or there is no row, or the file
        is damaged.
    """
    records = _records(sheet.file)
    faults: list[Fault] = []
    count = 0
    for found in records.blocks(sheet.columns, block):
        good, more = _judged(found.rows, sheet)
        faults += [*found.faults, *more]
        count += len(found.rows.lines)
        if len(faults) > MOST_FAULTY:
            line = int(found.rows.lines[-1]) if found.rows.lines.size else 0
            faults = [
                *faults[:MOST_FAULTY],
                Fault("", f"given up at line {line:,}", sheet.file),
            ]
            break
        if good.lines.size and not faults:
            yield good
        if progress:
            progress(found.done, found.total)
    if faults:
        raise InputError(tidy(faults))
    if not count:
        raise InputError([Fault("", "has no rows", sheet.file)])


class _JsonLines:
    """An object of JSON in every line.

    Source: RFC 8259 for the objects.
    """

    def __init__(self, file: Path) -> None:
        self._file = file
        with opened(file) as stream:
            self._start = len(MARK) if stream.read(len(MARK)) == MARK else 0
            stream.seek(self._start)
            line, number = stream.readline(MOST_LINE + 1), 1
            while line and not line.strip():
                line, number = stream.readline(MOST_LINE + 1), number + 1
        place = f"line {number}"
        if len(line) > MOST_LINE:
            message = f"is longer than {MOST_LINE:,} bytes; no line of a table is"
            raise InputError([Fault(place, message, file)])
        try:
            pairs = json.loads(line, object_pairs_hook=_Pairs) if line else None
        except (ValueError, RecursionError):
            pairs = None
        if not isinstance(pairs, _Pairs):
            message = 'is no object of JSON; one a row is needed, such as {"t_s": 0, ...}'
            raise InputError([Fault(place, message if line else "has no rows", file)])
        self._own = [name for name, _ in pairs]
        self.names: Sequence[str] | None = self._own
        self.width = len(self._own)
        if self.width > MOST_COLUMNS:
            message = f"has {self.width:,} columns; at most {MOST_COLUMNS:,} are read"
            raise InputError([Fault(place, message, file)])
        self._values = [value for _, value in pairs]

    def numeric(self, cell: int) -> bool:
        """Tell whether the first row has a number there, or something that is told as a fault."""
        return isinstance(self._values[cell], (int, float, str, type(None)))

    def coarse(self, cell: int) -> bool:  # noqa: ARG002 - texts are read as doubles
        """Tell that none has less than double precision."""
        return False

    def blocks(self, columns: Sequence[Column], size: int) -> Iterator[Block]:
        """Yield the records."""
        keys = [self._own[column.cell] for column in columns]
        states = [column.quantity == "signal" for column in columns]
        number = 1
        with opened(self._file) as stream:
            total = stream.seek(0, 2)
            stream.seek(self._start)
            for text in whole_lines(stream, self._file, block=size):
                lines = text.split(b"\n")[:-1]
                filled = [n for n, line in enumerate(lines) if line.strip()]
                texts = [lines[n] for n in filled]
                values = _fast(texts, keys, states)
                faults: list[Fault] = []
                if values is None:
                    values, faults, kept = _slow(texts, keys, states)
                    faults = [
                        Fault(
                            f"line {number + filled[int(fault.place)]}", fault.message, self._file
                        )
                        for fault in faults
                    ]
                    filled = [filled[n] for n in kept]
                rows = Rows(np.array(filled, dtype=np.intp) + number, values)
                yield Block(rows, faults, stream.tell(), total)
                number += len(lines)


class _Pairs(list[tuple[str, object]]):
    """The names and values of an object of JSON, doubled ones too."""


def _fast(lines: Sequence[bytes], keys: Sequence[str], states: Sequence[bool]) -> Array | None:
    """Return the numbers of lines without a fault; None of others."""
    try:
        records = json.loads(b"[" + b",".join(lines) + b"]")
        if len(records) != len(lines) or not set(map(type, records)) <= {dict}:
            return None
        numbers = np.empty((len(lines), len(keys)))
        for place, (key, state) in enumerate(zip(keys, states, strict=True)):
            values = [record[key] for record in records]
            if not set(map(type, values)) <= ({int, float, bool} if state else {int, float}):
                return None
            numbers[:, place] = values
    except (ValueError, KeyError, OverflowError, RecursionError):
        return None
    return numbers


def _slow(
    lines: Sequence[bytes], keys: Sequence[str], states: Sequence[bool]
) -> tuple[Array, list[Fault], list[int]]:
    """Return the numbers of lines, what is wrong with which line, and the lines that have some."""
    table: list[list[float]] = []
    faults: list[Fault] = []
    kept: list[int] = []
    for number, line in enumerate(lines):
        if len(line) > MOST_LINE:
            message = f"is longer than {MOST_LINE:,} bytes; no line of a table is"
            faults.append(Fault(str(number), message))
            continue
        try:
            record = json.loads(line)
        except (ValueError, RecursionError):
            record = None
        if not isinstance(record, dict):
            faults.append(Fault(str(number), "is no object of JSON"))
            continue
        wrong = []
        values = []
        for key, state in zip(keys, states, strict=True):
            value = record.get(key)
            usable = isinstance(value, (int, float)) and not isinstance(value, bool)
            if not usable and not state:
                what = f"{shown(value)} is not a number in" if key in record else "lacks"
                wrong.append(f"{what} column {shown(key)}")
            values.append(_float(value))
        if wrong:
            faults.append(Fault(str(number), "; ".join(wrong[:3])))
        else:
            kept.append(number)
            table.append(values)
    return np.array(table, dtype=np.float64).reshape(len(table), len(keys)), faults, kept


def _float(value: object) -> float:
    """Return a number of JSON; NaN of what is none."""
    try:
        return float(value) if isinstance(value, (int, float)) else math.nan
    except OverflowError:
        return math.inf


class _Npy:
    """An array of NumPy: records with names, or rows of numbers.

    It is mapped to memory only while a block is copied, so that none of it stays there.
    """

    def __init__(self, file: Path) -> None:
        self._file = file
        with opened(file):
            pass
        with _damage_told(file, NPY):
            array = self._array()
            self._count = array.shape[0] if array.ndim else 0
            self._kind = array.dtype
            shape: tuple[int, ...] = array.shape
        names = self._kind.names
        if not (len(shape) == 1 and names) and not (len(shape) == 2 and not names):
            message = f"holds an array of shape {shape}; records with named fields, or rows and "
            message += "columns of numbers, are needed"
            raise InputError([Fault("", message, file)])
        self._own = list(names or ())
        self.names: Sequence[str] | None = self._own if names else None
        self.width = len(self._own) if names else shape[-1]

    def numeric(self, cell: int) -> bool:
        """Tell whether a column holds numbers."""
        kind = self._type(cell)
        return kind.kind in "biuf" and kind.shape == ()

    def coarse(self, cell: int) -> bool:
        """Tell whether a column's numbers have less than double precision."""
        kind = self._type(cell)
        return kind.kind == "f" and kind.itemsize < np.dtype(np.float64).itemsize

    def blocks(self, columns: Sequence[Column], size: int) -> Iterator[Block]:
        """Yield the records."""
        step = max(1, size // (NUMBER_BYTES * len(columns)))
        for start in range(0, self._count, step):
            stop = min(start + step, self._count)
            with _damage_told(self._file, NPY), np.errstate(all="ignore"):
                part = np.array(self._array()[start:stop])
                numbers = np.column_stack(
                    [
                        np.asarray(
                            part[self._own[column.cell]] if self._own else part[:, column.cell],
                            dtype=np.float64,
                        )
                        for column in columns
                    ]
                )
            rows = Rows(np.arange(start + 1, stop + 1), numbers)
            yield Block(rows, (), stop, self._count)

    def _type(self, cell: int) -> np.dtype[np.generic]:
        fields = self._kind.fields
        return self._kind if fields is None else fields[self._own[cell]][0]

    def _array(self) -> npt.NDArray[np.generic]:
        with warnings.catch_warnings():
            # Of old or odd descriptions; they are read or refused.
            warnings.simplefilter("ignore")
            return np.lib.format.open_memmap(self._file, mode="r", max_header_size=HEAD_OF_NPY)


class _Parquet:
    """Columns in the form of Parquet."""

    def __init__(self, file: Path) -> None:
        self._file = file
        with opened(file):
            pass
        arrow, parquet = parquet_libraries(file)
        self._damages = (arrow.ArrowException, *DAMAGES)
        self._file_of = parquet.ParquetFile
        with _damage_told(file, PARQUET, self._damages), self._file_of(file, **SLOWLY) as found:
            self._own: list[str] = list(found.schema_arrow.names)
            types = arrow.types
            self._numeric = [
                bool(types.is_integer(kind) or types.is_floating(kind) or types.is_boolean(kind))
                for kind in found.schema_arrow.types
            ]
            self._coarse = [
                bool(types.is_float16(kind) or types.is_float32(kind))
                for kind in found.schema_arrow.types
            ]
            self._count = int(found.metadata.num_rows)
        self.names: Sequence[str] | None = self._own
        self.width = len(self._own)

    def numeric(self, cell: int) -> bool:
        """Tell whether a column holds numbers."""
        return self._numeric[cell]

    def coarse(self, cell: int) -> bool:
        """Tell whether a column's numbers have less than double precision."""
        return self._coarse[cell]

    def blocks(self, columns: Sequence[Column], size: int) -> Iterator[Block]:
        """Yield the records."""
        names = [self._own[column.cell] for column in columns]
        step = max(1, size // (NUMBER_BYTES * len(columns)))
        start = 0
        file = self._file
        with _damage_told(file, PARQUET, self._damages), self._file_of(file, **SLOWLY) as found:
            for batch in found.iter_batches(batch_size=step, columns=names):
                numbers = np.column_stack(
                    [
                        np.asarray(
                            batch.column(batch.schema.get_field_index(name)).to_numpy(
                                zero_copy_only=False
                            ),
                            dtype=np.float64,
                        )
                        for name in names
                    ]
                )
                stop = start + len(numbers)
                rows = Rows(np.arange(start + 1, stop + 1), numbers)
                yield Block(rows, (), stop, max(stop, self._count))
                start = stop


FORMS: Mapping[str, Callable[[Path], Records]] = {
    ".jsonl": _JsonLines,
    ".npy": _Npy,
    ".parquet": _Parquet,
}
"""Endings of files → what reads them."""


def _records(file: Path) -> Records:
    return FORMS[file.suffix.lower()](file)


def _judged(rows: Rows, sheet: Sheet) -> tuple[Rows, list[Fault]]:
    """Return the rows of numbers that a motion may have, and what is wrong with the others."""
    high = np.array(
        [
            math.inf if column.quantity == "signal" else column.high / abs(column.unit)
            for column in sheet.columns
        ]
    )
    signal = np.isinf(high)
    good = (np.abs(rows.numbers) <= high) | signal
    whole = good.all(axis=1)
    if whole.all():
        return rows, []
    faults = []
    for row in np.flatnonzero(~whole)[: MOST_FAULTY + 1].tolist():
        wrong = [
            _value_fault(float(rows.numbers[row, place]), sheet.columns[place])
            for place in np.flatnonzero(~good[row]).tolist()
        ]
        faults.append(Fault(f"line {rows.lines[row]}", "; ".join(wrong[:3]), sheet.file))
    return Rows(rows.lines[whole], rows.numbers[whole]), faults


def _value_fault(value: float, column: Column) -> str:
    if not math.isfinite(value):
        return f"column {shown(column.name)} is not a finite number"
    most = column.high / abs(column.unit)
    unit = column.name.rpartition("_")[2] if column.quantity == "pos" else ""
    return f"{column.name} {value:g}; allowed: {Range(-most, most).describe(unit).strip()}"


def _tried(records: Records, sheet: Sheet, machine: Machine) -> Sheet:
    """Return a sheet with what the first rows tell: signals, decimals, the first time."""
    names = sheet.names
    read = {column.cell for column in sheet.columns}
    free = [n for n in range(len(names)) if n not in read and records.numeric(n)]
    tried = replace(sheet, columns=(*sheet.columns, *(Column(n, names[n], "signal") for n in free)))
    first = next(iter(records.blocks(tried.columns, BLOCK >> 4)), None)
    numbers = np.empty((0, len(tried.columns))) if first is None else first.rows.numbers
    numbers = numbers[:ROWS_TRIED]
    states = (numbers == 0) | (numbers == 1)
    others = dict.fromkeys(range(len(names)), len(numbers))
    for place, column in enumerate(tried.columns):
        if records.numeric(column.cell):
            others[column.cell] = int(np.count_nonzero(~states[:, place]))
    columns = (*sheet.columns, *signal_columns(sheet, others, len(numbers), machine))
    places = [tried.columns.index(column) for column in columns]
    lines = np.arange(1, len(numbers) + 1)
    good, _ = _judged(Rows(lines, numbers[:, places]), replace(sheet, columns=columns))
    decimals = last_decimals(good.numbers, np.zeros(len(columns), dtype=np.intp))
    return replace(
        sheet,
        columns=columns,
        decimals=tuple(decimals.tolist()),
        begins=float(numbers[0, 0]) if len(numbers) else math.nan,
    )


def _width_fault(records: Records, usual: Sequence[str], file: Path) -> Fault:
    message = f"{records.width} columns without names; expected {len(usual)}: {', '.join(usual)}, "
    return Fault("", f"{message}and then only signals of 0 and 1", file)


@contextmanager
def _damage_told(
    file: Path, what: str, damages: tuple[type[BaseException], ...] = DAMAGES
) -> Iterator[None]:
    """Tell as a fault that a library cannot read a file.

    Raises
    ------
    InputError
        It cannot.
    """
    try:
        yield
    except InputError:
        raise
    except damages as error:
        reason = "".join(sign for sign in " ".join(str(error).split()) if sign.isprintable())
        message = f"is damaged, or not {what}: {reason[:200] or type(error).__name__}"
        raise InputError([Fault("", message, file)]) from None
