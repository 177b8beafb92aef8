"""What stands in a table: which columns, in which order, with which numbers?"""

from __future__ import annotations

from dataclasses import KW_ONLY, dataclass, field, replace
from types import MappingProxyType
from typing import TYPE_CHECKING, NamedTuple, TypeAlias

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.inputs.dialect import TIME_DIGITS, TIME_HEADINGS, Dialect
from profileplan.inputs.machine import DEFAULT_COLUMNS
from profileplan.setpoints.drives import Counter, counters, judge_drives
from profileplan.setpoints.sampling import COLUMNS, LOAD_DECIMALS, Sampler, judge_loads, period_of

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    from profileplan.inputs import Axis, Drive, Machine
    from profileplan.motion.polynomials import Array
    from profileplan.motion.schedule import Schedule
    from profileplan.setpoints.digits import Whole
    from profileplan.setpoints.sampling import SetpointTable

Numbers: TypeAlias = "Array | Whole"

MOST_ROWS = 1_000_000_000
"""Longest table that is begun: about 100 GB on disk."""

INCREMENT_UNITS = {"pos": "inc", "vel": "inc_s", "acc": "inc_s2", "jerk": "inc_s3"}
"""Quantities in increments → how their headings end."""

INCREMENT_DECIMALS = 3
"""Decimals of velocities, accelerations and jerks in increments."""

WRITTEN = (*COLUMNS, *LOAD_DECIMALS)
"""What a table can hold of an axis."""


@dataclass(frozen=True)
class Content:
    """What a table holds.

    Parameters
    ----------
    columns : sequence of str
        Of pos, vel, acc, jerk, force and torque, in the order wanted. Forces [N] and torques [N·m]
        are there once for each axis whose mechanics tell them, in the axis's own direction,
        whatever its drives count.
    period : float, optional [s]
        Default: that of the machine file.
    drives : mapping
        Name of an axis → its drive: the axis is written in increments.
    """

    columns: Sequence[str] = DEFAULT_COLUMNS
    _: KW_ONLY
    period: float | None = None
    drives: Mapping[str, Drive] = field(default_factory=dict)

    def __post_init__(self) -> None:
        columns = tuple(self.columns)
        object.__setattr__(self, "columns", columns)
        object.__setattr__(self, "drives", MappingProxyType(dict(self.drives)))
        known = ", ".join(WRITTEN)
        faults = [
            Fault("columns", f'"{column}" is not written; {known} are')
            for column in columns
            if column not in WRITTEN
        ]
        repeated = sorted({column for column in columns if columns.count(column) > 1})
        faults += [Fault("columns", f'"{column}" is named twice') for column in repeated]
        if not columns:
            faults.append(Fault("columns", f"names no column; {known} are written"))
        if faults:
            raise InputError(faults)

    @classmethod
    def of(
        cls,
        machine: Machine,
        *,
        columns: Sequence[str] | None = None,
        period: float | None = None,
        units: str | None = None,
    ) -> Content:
        """Return what a machine file asks for, with columns, period [s] and units in its place.

        Raises
        ------
        InputError
            Increments are asked for, and no axis has a drive; forces or torques, and no axis has
            mechanics that tell them.
        """
        settings = machine.setpoints
        units = units or settings.units
        drives = {axis.name: axis.drive for axis in machine.axes if axis.drive is not None}
        if units == "increments" and not drives:
            message = "increments; no axis has a drive: give [axes.NAME.drive]"
            raise InputError([Fault("setpoints.units", message, machine.source)])
        columns = settings.columns if columns is None else columns
        judge_loads(machine, columns)
        return cls(
            columns,
            period=settings.period if period is None else period,
            drives=drives if units == "increments" else {},
        )


class Field(NamedTuple):
    """A column of a table.

    heading as it is written; kind "time", one of ``WRITTEN``, or "signal"; name of the axis or
    the signal; ``whole`` where its numbers are whole ones of 10 to the power of -``decimals``.
    """

    heading: str
    kind: str
    name: str
    decimals: int
    whole: bool
    counter: Counter | None = None


class Source:
    """The columns of a schedule's table, and their numbers row by row.

    Raises
    ------
    InputError
        A period out of range, a table too long, drives that cannot play it, headings that are
        used twice, forces or torques of which nothing is known.

    Parameters
    ----------
    schedule : Schedule
    content : Content
    dialect : Dialect
    nanoseconds : int, optional
        What times count, where it is not the period.
    """

    def __init__(
        self,
        schedule: Schedule,
        content: Content,
        dialect: Dialect,
        *,
        nanoseconds: int | None = None,
    ) -> None:
        self.sampler = Sampler(schedule, period=content.period, columns=content.columns)
        self.count = self.sampler.count
        if self.count > MOST_ROWS:
            message = (
                f"{self.count} rows at a period of {self.sampler.period} s; "
                f"at most {MOST_ROWS} are written"
            )
            raise InputError([Fault("period", message)])
        if content.drives:
            judge_drives(schedule, content.drives)
        self._axes = schedule.job.machine.axis_names
        nanoseconds = nanoseconds or self.sampler.nanoseconds
        self.fields = table_fields(schedule, content, dialect, nanoseconds)
        self._per_time, _ = _time_scale(nanoseconds, dialect)

    def numbers(self, rows: range) -> list[Numbers]:
        """Return the numbers of each column in some rows, counted from 0."""
        return self.numbers_of(self.sampler.table(rows), np.arange(rows.start, rows.stop))

    def numbers_of(self, table: SetpointTable, ticks: Whole) -> list[Numbers]:
        """Return the numbers of each column of a table whose rows stand at some ticks."""
        return [self._numbers(table, ticks, column) for column in self.fields]

    def _numbers(self, table: SetpointTable, ticks: Whole, column: Field) -> Numbers:
        if column.kind == "time":
            return ticks * self._per_time
        if column.kind == "signal":
            return table.signals[column.name].astype(np.int64)
        if column.kind in LOAD_DECIMALS:
            return (table.force if column.kind == "force" else table.torque)[column.name]
        values = {
            "pos": table.position,
            "vel": table.velocity,
            "acc": table.acceleration,
            "jerk": table.jerk,
        }[column.kind]
        if values is None:
            message = f"{column.kind} is not sampled"
            raise ValueError(message)
        own: Array = values[:, self._axes.index(column.name)]
        if column.counter is None:
            return own
        return column.counter.increments(own) if column.kind == "pos" else column.counter.rate(own)


def table_fields(
    schedule: Schedule, content: Content, dialect: Dialect, nanoseconds: int
) -> tuple[Field, ...]:
    """Return the columns of a table at a period in ns: time, axes in file order, signals."""
    _, decimals = _time_scale(nanoseconds, dialect)
    fields = [Field(TIME_HEADINGS[dialect.time], "time", "", decimals, whole=True)]
    for axis in schedule.job.machine.axes:
        fields += _axis_fields(axis, content, dialect)
    fields += [Field(name, "signal", name, 0, whole=True) for name in schedule.signals]
    return _renamed(fields, dialect, schedule.job.machine)


def _time_scale(nanoseconds: int, dialect: Dialect) -> tuple[int, int]:
    """Return what a tick is in units of the last decimal of the time, and how many decimals."""
    if dialect.time == "tick":
        return 1, 0
    decimals = TIME_DIGITS[dialect.time]
    while decimals and nanoseconds % 10 == 0:
        nanoseconds //= 10
        decimals -= 1
    return nanoseconds, decimals


def _axis_fields(axis: Axis, content: Content, dialect: Dialect) -> Iterator[Field]:
    """Yield the columns of an axis."""
    drive = content.drives.get(axis.name)
    own = None if drive is None else counters(axis, drive)
    for place, counter in enumerate(own or (None,)):
        for kind in content.columns:
            if kind in LOAD_DECIMALS:
                # Two drives share one slide, and so one force.
                if place == 0 and axis.has_loads(kind):
                    decimals = dialect.decimals.get(kind, LOAD_DECIMALS[kind])
                    yield Field(axis.column(kind), kind, axis.name, decimals, whole=False)
            elif counter is None:
                decimals = dialect.decimals.get(kind, COLUMNS[kind].decimals)
                yield Field(axis.column(kind), kind, axis.name, decimals, whole=False)
            else:
                heading = f"{counter.name}_{kind}_{INCREMENT_UNITS[kind]}"
                whole = kind == "pos"
                decimals = 0 if whole else dialect.decimals.get(kind, INCREMENT_DECIMALS)
                yield Field(heading, kind, axis.name, decimals, whole, counter)


class Unused(NamedTuple):
    """New names that a dialect has for columns that a table does not have.

    headings of the table; ``absent``, usual headings that it does not have; ``unknown``, those of
    them that no table of the machine has, signals left out.
    """

    headings: tuple[str, ...]
    absent: tuple[str, ...]
    unknown: tuple[str, ...]


def unused_names(schedule: Schedule, content: Content, dialect: Dialect) -> Unused:
    """Return what a dialect gives other names, and a table does not have."""
    nanoseconds = round(period_of(schedule, content.period) * 1e9)
    fields = table_fields(schedule, content, replace(dialect, names={}), nanoseconds)
    headings = tuple(column.heading for column in fields)
    absent = tuple(heading for heading in dialect.names if heading not in headings)
    usual = _usual_headings(schedule.job.machine) if absent else set()
    return Unused(headings, absent, tuple(heading for heading in absent if heading not in usual))


def _usual_headings(machine: Machine) -> set[str]:
    """Return the headings of all columns that tables of a machine can have, signals left out."""
    drives = {axis.name: axis.drive for axis in machine.axes if axis.drive is not None}
    contents = (Content(WRITTEN), Content(WRITTEN, drives=drives))
    return {
        *TIME_HEADINGS.values(),
        *(
            column.heading
            for content in contents
            for axis in machine.axes
            for column in _axis_fields(axis, content, Dialect())
        ),
    }


def _renamed(fields: Sequence[Field], dialect: Dialect, machine: Machine) -> tuple[Field, ...]:
    """Return columns under the names that the dialect gives them.

    A dialect may name columns of the machine's other tables, and signals of other cycles.
    """
    headings = [column.heading for column in fields]
    known = _usual_headings(machine) if dialect.names else set()
    starts = ("t_", *(f"{name}_" for name in machine.axis_names))
    faults = [
        Fault(f"names.{heading}", f"no such column; there are {', '.join(headings)}")
        for heading in dialect.names
        if heading not in headings and heading not in known and heading.startswith(starts)
    ]
    new = [dialect.names.get(heading, heading) for heading in headings]
    faults += [
        Fault("names", f'"{name}" heads two columns')
        for name in dict.fromkeys(new)
        if new.count(name) > 1
    ]
    if faults:
        raise InputError(faults)
    return tuple(column._replace(heading=name) for column, name in zip(fields, new, strict=True))
