"""Which columns does a table have, and what do their numbers stand for?

Columns of axes are found by their names, in any of several units, and for axes with a drive in its
increments. An axis with two drives may have columns for both: those of the second are judged beside
those of the first, and stand for the axis where it has no others.
"""

from __future__ import annotations

import math
import re
from collections import Counter
from dataclasses import KW_ONLY, dataclass
from typing import TYPE_CHECKING, NamedTuple

from profileplan.errors import Fault, InputError
from profileplan.inputs.dialect import TIME_HEADINGS
from profileplan.inputs.machine import LOADS
from profileplan.inputs.rules import POSITION, near, shown
from profileplan.setpoints.content import INCREMENT_UNITS

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence
    from pathlib import Path

    from profileplan.inputs import Axis, Dialect, Machine

MOST_COLUMNS = 1000
"""Columns of a table: twelve axes and their signals are far fewer."""

FEW = 50
"""Of so many of the first rows one may hold something else in the column of a signal."""

TIMES: Mapping[str, float] = {"s": 1.0, "ms": 1e-3, "us": 1e-6}
"""Units of the time → s. A tick is the machine's period."""

UNITS: Mapping[str, Mapping[str, float]] = {
    "mm": {"mm": 1.0, "m": 1e3, "um": 1e-3},
    "deg": {"deg": 1.0, "rad": math.degrees(1.0), "mrad": math.degrees(1e-3)},
}
"""Unit of an axis → units in which a table may hold its positions, in the axis's own."""

RATES: Mapping[str, str] = {"pos": "", "vel": "_s", "acc": "_s2", "jerk": "_s3"}
"""Quantities that are judged, and how their units end."""

HIGHEST = 1e15
"""Greatest magnitude of a rate or a time: none that a machine has."""

SIGNALS_OF_ALL = "signals"
"""How the name of a file ends that has the signals, where each axis has a file of its own."""

PART = r"(?:_\d{3,})?"
"""How the name of a file may end that is a part of a table."""


class Column(NamedTuple):
    """A column that is read: where it is, its name, what it holds, of which axis (-1: of none).

    Its numbers are multiplied with ``unit`` and ``shift`` is added; beyond ``high`` in size, before
    the shift, none is one of a motion. After ``wrap`` they count from 0 again (0: never); where it
    is ``counted``, by a drive, they surely do. ``drive`` is 1 for the second drive of an axis.
    """

    cell: int
    name: str
    quantity: str
    axis: int = -1
    unit: float = 1.0
    shift: float = 0.0
    high: float = HIGHEST
    wrap: float = 0.0
    counted: bool = False
    drive: int = 0


class Spelling(NamedTuple):
    """What a heading says of the numbers below it; as in ``Column``."""

    unit: float
    shift: float = 0.0
    wrap: float = 0.0
    counted: bool = False


@dataclass(frozen=True)
class Sheet:
    """Which columns a table in a file has.

    Parameters
    ----------
    file : Path
    names : tuple of str
        All headings.
    columns : tuple of Column
        Those read: time first, then those of axes, then signals.
    decimals : tuple of int
        How many decimals the first rows have in the columns read.
    begins : float
        The time in the first row, as it is written; NaN where it is no number.
    coarse : tuple of str
        Names of the columns read whose numbers have less than double precision.
    """

    _: KW_ONLY
    file: Path
    names: tuple[str, ...]
    columns: tuple[Column, ...]
    decimals: tuple[int, ...] = ()
    begins: float = math.nan
    coarse: tuple[str, ...] = ()

    @property
    def unread(self) -> tuple[str, ...]:
        """Names of the columns that are not read, or where they are that have none."""
        read = {column.cell for column in self.columns}
        return tuple(
            name or f"column {index + 1} without a name"
            for index, name in enumerate(self.names)
            if index not in read
        )

    @property
    def axes(self) -> tuple[int, ...]:
        """Which axes of the machine are in it."""
        return tuple(
            column.axis for column in self.columns if column.quantity == "pos" and column.drive == 0
        )

    def find(self, quantity: str, axis: int, *, drive: int = 0) -> int | None:
        """Return which of the columns read holds a quantity of an axis."""
        for place, column in enumerate(self.columns):
            if (column.quantity, column.axis, column.drive) == (quantity, axis, drive):
                return place
        return None

    def signals(self) -> dict[str, int]:
        """Return which of the columns read are signals, by name."""
        return {c.name: place for place, c in enumerate(self.columns) if c.quantity == "signal"}


def found_columns(
    names: Sequence[str], machine: Machine, *, file: Path, place: str = ""
) -> tuple[Column, ...]:
    """Return the columns of time and of axes.

    A file whose name ends with that of an axis, or any where the machine file asks for one file an
    axis, may have this axis only.

    Parameters
    ----------
    names : sequence of str
    machine : Machine
    file : Path
    place : str
        Where in the file the names stand.

    Raises
    ------
    InputError
        Columns are missing, stand twice or say the same: all of it.
    """
    faults = _name_faults(names, machine, file)
    if faults:
        raise InputError(Fault(place, fault, file) for fault in faults)
    return tuple(_columns(names, machine))


def usual_headings(machine: Machine, *, columns: Sequence[str] | None, file: Path) -> list[str]:
    """Return the headings that a table without them would have, up to those of signals.

    Parameters
    ----------
    machine : Machine
        Its settings tell the unit of the time, whether axes are counted, and which columns there
        are.
    columns : sequence of str, optional
        Which there are, in place of that.
    file : Path
        Where each axis has a file of its own its name tells the axis.
    """
    own = machine.setpoints
    axes: Sequence[Axis] = machine.axes
    if own.dialect.axis_files:
        axes = [axis for axis in machine.axes if named_by(file, axis.name)] or machine.axes
        if named_by(file, SIGNALS_OF_ALL):
            axes = ()
    headings = [TIME_HEADINGS[own.dialect.time]]
    for axis in axes:
        kinds = own.columns if columns is None else columns
        kinds = [kind for kind in kinds if kind not in LOADS or axis.has_loads(kind)]
        headings += _axis_headings(axis, kinds, counted=own.units == "increments")
    return headings


def axis_headings(machine: Machine) -> set[str]:
    """Return the headings of all columns of axes that are read."""
    return {
        heading
        for axis in machine.axes
        for quantity in RATES
        for drive in _drives(axis)
        for heading in _spellings(axis, quantity, drive=drive)
    }


def usual_names(dialect: Dialect) -> dict[str, str]:
    """Return the usual headings by those that a dialect has for them."""
    return {new: usual for usual, new in dialect.names.items()}


def signal_columns(
    sheet: Sheet, others: Mapping[int, int], rows: int, machine: Machine
) -> Iterator[Column]:
    """Yield the other columns that hold 0 and 1 only in the first rows, or nearly so.

    Parameters
    ----------
    sheet : Sheet
        With the columns of time and of axes.
    others : mapping
        Place of a column → how many of the first rows hold something else.
    rows : int
        How many these are.
    machine : Machine
    """
    known = tuple(
        f"{name}_{quantity}_"
        for axis in machine.axes
        for name in _names(axis)
        for quantity in (*RATES, *LOADS)
    )
    read = {column.cell for column in sheet.columns}
    for index, name in enumerate(sheet.names):
        if index in read or not rows or not name or name.startswith(known):
            continue
        if others.get(index, 0) <= rows // FEW:
            yield Column(index, name, "signal")


def named_by(file: Path, name: str) -> bool:
    """Tell whether the name of a file ends with that of an axis, perhaps before that of a part."""
    return re.fullmatch(rf".*[_-]{re.escape(name)}{PART}", file.stem) is not None


def _axis_headings(axis: Axis, kinds: Sequence[str], *, counted: bool) -> Iterator[str]:
    if axis.drive is None or not counted:
        yield from (axis.column(kind) for kind in kinds)
        return
    for name in _names(axis):
        for kind in kinds:
            if kind not in LOADS:
                yield f"{name}_{kind}_{INCREMENT_UNITS[kind]}"
            elif name == axis.name:
                # Two drives share one slide, and so one force.
                yield axis.column(kind)


def _name_faults(names: Sequence[str], machine: Machine, file: Path) -> list[str]:
    """Return what is wrong with a table's headings."""
    if not names:
        return ["is empty; a header of column names is needed"]
    if len(names) > MOST_COLUMNS:
        return [f"has {len(names):,} columns; at most {MOST_COLUMNS:,} are read"]
    counts = Counter(names)
    # What has no name is not read.
    faults = [f"column {shown(name)} stands twice" for name in names if name and counts[name] > 1]
    times = [name for name in names if name in TIME_HEADINGS.values()]
    if not times:
        others = ", ".join(heading for heading in TIME_HEADINGS.values() if heading != "t_s")
        faults.append(f'column "t_s" is missing, or {others}{_hint("t_s", names)}')
    elif len(times) > 1 and times[0] != times[1]:
        faults.append(f"columns {shown(times[0])} and {shown(times[1])} both hold the time")
    needed = _needed(names, machine, file)
    for axis in machine.axes:
        for quantity in RATES:
            spelled = [
                [name for name in _spellings(axis, quantity, drive=drive) if name in counts]
                for drive in _drives(axis)
            ]
            faults += [
                f"columns {shown(held[0])} and {shown(held[1])} hold the same"
                for held in spelled
                if len(held) > 1
            ]
            if not any(spelled) and quantity == "pos" and axis in needed:
                name = axis.column("pos")
                faults.append(
                    f"column {shown(name)} is missing{_hint(name, _unknown(names, machine))}"
                )
    return list(dict.fromkeys(faults))


def _needed(names: Sequence[str], machine: Machine, file: Path) -> Sequence[Axis]:
    """Return the axes whose positions must be there."""
    held = [
        axis
        for axis in machine.axes
        if any(
            name in names
            for drive in _drives(axis)
            for quantity in RATES
            for name in _spellings(axis, quantity, drive=drive)
        )
    ]
    named = [axis for axis in machine.axes if named_by(file, axis.name)]
    apart = machine.setpoints.dialect.axis_files
    if len(held) == 1 and (held == named or apart):
        return held
    if not held and named_by(file, SIGNALS_OF_ALL):
        return ()
    return named if named and not held else machine.axes


def _unknown(names: Sequence[str], machine: Machine) -> list[str]:
    """Return the headings that stand for no quantity of any axis: what is none was meant."""
    known = {
        spelling
        for axis in machine.axes
        for drive in _drives(axis)
        for quantity in RATES
        for spelling in _spellings(axis, quantity, drive=drive)
    }
    return [name for name in names if name not in known]


def _hint(name: str, names: Sequence[str]) -> str:
    return near(name, [other for other in names[:100] if len(other) < 50])


def _names(axis: Axis) -> tuple[str, ...]:
    """Return the name of an axis, and that of its second drive if it has one."""
    twin = None if axis.drive is None else axis.drive.also
    return (axis.name,) if twin is None else (axis.name, twin.name)


def _drives(axis: Axis) -> range:
    """Return the numbers of the drives of an axis."""
    return range(len(_names(axis)))


def _spellings(axis: Axis, quantity: str, *, drive: int) -> dict[str, Spelling]:
    """Return the names under which a table may hold a quantity of a drive of an axis."""
    own = axis.drive
    place = own if own is None or drive == 0 else own.also
    start, end = f"{_names(axis)[drive]}_{quantity}_", RATES[quantity]
    position = quantity == "pos"
    turn = own.wrap if own is not None and own.wrap is not None and position else 0.0
    found = {
        f"{start}{unit}{end}": Spelling(size, wrap=turn / size)
        for unit, size in UNITS[axis.unit].items()
    }
    if own is None or place is None:
        return found
    found[f"{start}inc{end}"] = Spelling(
        place.direction / float(own.ratio),
        -place.offset if position else 0.0,
        float(own.wrap_increments or 0) if position else 0.0,
        counted=True,
    )
    return found


def _columns(names: Sequence[str], machine: Machine) -> Iterator[Column]:
    """Yield the columns of time and of axes; of a second drive behind those of the first."""
    period = machine.setpoints.period
    times = {heading: TIMES.get(unit, period) for unit, heading in TIME_HEADINGS.items()}
    name = next(name for name in names if name in times)
    yield Column(names.index(name), name, "time", unit=times[name])
    for number, axis in enumerate(machine.axes):
        for quantity in RATES:
            high = POSITION.high if quantity == "pos" else HIGHEST
            place = 0
            for drive in _drives(axis):
                for name, spelling in _spellings(axis, quantity, drive=drive).items():
                    if name in names:
                        unit, shift, wrap, counted = spelling
                        yield Column(
                            names.index(name),
                            name,
                            quantity,
                            number,
                            unit,
                            shift,
                            high,
                            wrap,
                            counted,
                            place,
                        )
                        place += 1
