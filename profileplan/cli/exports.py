"""The command that writes setpoint tables as drives want them."""

from __future__ import annotations

import re
from contextlib import contextmanager
from dataclasses import replace
from typing import TYPE_CHECKING, NamedTuple

import click

from profileplan.cli import frame, remarks, tables
from profileplan.cli.jobs import job_of, planned_of
from profileplan.cli.settings import (
    FORMS,
    PLACES,
    SETTINGS,
    TEXT,
    Columns,
    Interpolation,
    Sorted,
    dialect_options,
)
from profileplan.errors import Fault, InputError

if TYPE_CHECKING:
    from collections.abc import Collection, Iterator, Mapping
    from pathlib import Path

    from profileplan.inputs import Drive, Machine
    from profileplan.planning import Plan
    from profileplan.setpoints import Content, Dialect, Part

POINTS_ERROR = 0.001
"""Greatest distance of cubics from the plan unless something else is asked for [mm or deg]."""


@dialect_options
@frame.cli.command(cls=Sorted)
@frame.source
@frame.machine
@frame.output("The table to write, .csv, .jsonl, .npy or .parquet; replaced when complete.")
@click.option(
    "--period",
    type=frame.Measure("time"),
    help='Time between rows, s or with unit: 0.001, "250 us".',
)
@click.option(
    "--interpolation",
    type=Interpolation(),
    metavar="BASE,EXPONENT",
    help="The period as CiA 402 has it: 250,-6 for 250 × 10^-6 s.",
)
@click.option(
    "--columns",
    type=Columns(),
    help="What to write for each axis: any of pos, vel, acc, jerk, force, torque; default: as the "
    "machine file says, or pos,vel,acc.",
)
@click.option("--units", type=click.Choice(["axis", "increments"]), help="What positions count.")
@click.option(
    "--points",
    type=click.Choice(["ticks", "pvt"]),
    default="ticks",
    show_default=True,
    help="A row a tick; or few uneven points with position and velocity, and cubics between them "
    "that keep the limits but for what rounding explains, 1 % at most. These stand at whole "
    "nanoseconds; or on ticks, if --period is given or times are ticks, where a limit may be "
    "passed. If one is, the status is 1.",
)
@click.option(
    "--error",
    type=frame.Measure("length"),
    help="Greatest distance of those cubics from the plan, rounding included, mm or deg; "
    f"default: {POINTS_ERROR:g}.",
)
@click.option(
    "--longest",
    type=frame.Measure("time"),
    help="Longest time between two of them, s or with unit.",
)
@frame.speed
@frame.tolerance
@frame.as_json
@frame.quiet
def export(  # noqa: PLR0913 - one parameter an option
    *,
    source: Path,
    machine: Path | None,
    output: Path,
    period: float | None,
    interpolation: tuple[int, int] | None,
    columns: tuple[str, ...] | None,
    units: str | None,
    points: str,
    error: float | None,
    longest: float | None,
    speed: float | None,
    tolerance: float | None,
    as_json: bool,
    quiet: bool,
    **written: object,
) -> None:
    """Write the setpoint table alone.

    \b
    Examples:
      profileplan export samples/kiln-loader/cycle.toml -o setpoints.csv
      profileplan export cycle.toml -o setpoints.csv --period "250 us" --columns pos,vel
      profileplan export cycle.toml -o drive.csv --delimiter semicolon --decimal comma --time ms
      profileplan export cycle.toml -o drive.csv --decimals pos=4,vel=2 --name x_pos_mm=POS_X
      profileplan export cycle.toml -o drive.csv --units increments --rows-a-file 65536
      profileplan export cycle.toml -o points.csv --points pvt --error 0.005

    What is not said here is as the machine file's [setpoints] says. The last row is the first tick
    at or after the end of the motion, at rest and on target.
    """  # noqa: D301 - click's mark for lines to keep as they are
    talk = not (as_json or quiet)
    job = job_of(source, machine, speed, tolerance)
    frame.keep(job.files, output)
    form = _form(output, points)
    given = {name: value for name, value in written.items() if value not in (None, ())}
    _judge_options(given, form)
    asked = {"columns": columns, "units": units, "error": error, "longest": longest}
    _judge_points(points, asked)
    period = _period(period, interpolation)
    asked["period"] = period
    named = {*given, *(name for name, value in asked.items() if value is not None)}
    with _named_by_options(named, job.machine):
        dialect = _dialect(job.machine, given)
        content = _content(job.machine, columns=columns, units=units, period=period)
        planned = planned_of(job, talk=talk)
        _judge_names(planned, content, dialect, given.get("names"))
        order = _Order(planned, output, content, dialect, talk)
        if points == "pvt":
            # What the machine file says is the period of ticks; points need none.
            order = order._replace(content=replace(content, period=period))
            told = _write_points(order, POINTS_ERROR if error is None else error, longest)
        else:
            told = _write_ticks(order, form)
            remarks.tell_unplayed(planned, content.period)
    remarks.tell_joins(told.parts)
    _tell(told, planned, as_json=as_json, quiet=quiet)
    findings = planned.check()
    remarks.tell_amiss(findings)
    frame.finish(met=told.kept and all(finding.ok for finding in findings))


class _Order(NamedTuple):
    """What is to be written, and where."""

    planned: Plan
    output: Path
    content: Content
    dialect: Dialect
    talk: bool

    @property
    def kept(self) -> list[Path]:
        """Files that the job is read from."""
        return list(self.planned.job.files)


class _Told(NamedTuple):
    """What was written, what is said of it, and whether it keeps the limits."""

    parts: tuple[Part, ...]
    more: str
    values: dict[str, object]
    kept: bool = True


def _form(output: Path, points: str) -> str:
    """Return the ending of the file to write.

    Raises
    ------
    InputError
        No such files are written.
    """
    form, allowed = output.suffix.lower(), TEXT if points == "pvt" else FORMS
    if form not in allowed:
        message = f'"{form}" is not written; {", ".join(allowed)} can be'
        raise InputError([Fault("", message, output)])
    return form


def _judge_options(given: Collection[str], form: str) -> None:
    """Refuse options that would have no effect."""
    faults = [
        Fault(setting.name, f"has no effect on {form}; only on {', '.join(setting.forms)}")
        for setting in SETTINGS
        if setting.field in given and form not in setting.forms
    ]
    if faults:
        raise InputError(faults)


def _judge_points(points: str, asked: Mapping[str, object]) -> None:
    """Refuse what only the other kind of points has."""
    where, names = "ticks", ["columns"]
    if points == "ticks":
        where, names = "pvt", ["error", "longest"]
    faults = [
        Fault(f"--{name}", f"only with --points {where}")
        for name in names
        if asked[name] is not None
    ]
    if faults:
        raise InputError(faults)


def _period(period: float | None, interpolation: tuple[int, int] | None) -> float | None:
    """Return the period that is asked for [s].

    Raises
    ------
    InputError
        It is given twice, or no table has it.
    """
    from profileplan.inputs import SetpointSettings, period_from_base  # noqa: PLC0415

    if interpolation is None:
        if period is not None:
            with _named_by_options(("period",), None):
                SetpointSettings(period)
        return period
    if period is not None:
        raise InputError([Fault("--interpolation", "is a period too; give it or --period")])
    try:
        return period_from_base(*interpolation)
    except InputError as error:
        raise InputError(
            Fault(f"--interpolation {fault.place}", fault.message) for fault in error.faults
        ) from None


def _dialect(machine: Machine, given: Mapping[str, object]) -> Dialect:
    """Return the machine's dialect, changed by what is given."""
    by_field = {setting.field: setting for setting in SETTINGS}
    return machine.setpoints.dialect.changed(
        {name: by_field[name].value(value) for name, value in given.items()}
    )


def _content(
    machine: Machine, *, columns: tuple[str, ...] | None, units: str | None, period: float | None
) -> Content:
    """Return what is written: as the machine file says, but for what is asked for."""
    from profileplan import setpoints  # noqa: PLC0415

    return setpoints.Content.of(machine, columns=columns, period=period, units=units)


@contextmanager
def _named_by_options(given: Collection[str], machine: Machine | None) -> Iterator[None]:
    """Name the option, or else the place in the machine file, where a value is at fault."""
    try:
        yield
    except InputError as error:
        raise InputError(_placed(fault, given, machine) for fault in error.faults) from None


def _placed(fault: Fault, given: Collection[str], machine: Machine | None) -> Fault:
    field = re.split(r"[.\[]", fault.place, maxsplit=1)[0]
    if field not in PLACES or (fault.file is not None and field not in given):
        return fault
    inner = fault.place.removeprefix(field).removeprefix(".")
    # The two that must differ may have been given one here and one there.
    if field == "decimal" and field not in given and "delimiter" in given:
        field = "delimiter"
    if field in given or machine is None or field in {"error", "longest"}:
        return Fault(f"{PLACES[field]} {inner}".strip(), fault.message)
    return fault.within("setpoints", machine.source)


def _judge_names(planned: Plan, content: Content, dialect: Dialect, given: object) -> None:
    """Refuse new names of what heads no column, and say which of the machine file head none."""
    from profileplan import setpoints  # noqa: PLC0415

    unused = setpoints.unused_names(planned, content, dialect)
    asked = {heading for heading, _ in given} if isinstance(given, tuple) else set()
    faults = [
        Fault(f"--name {heading}", f"no such column; there are {', '.join(unused.headings)}")
        for heading in unused.absent
        if heading in asked
    ]
    if faults:
        raise InputError(faults)
    for heading in unused.unknown:
        click.echo(f"note: setpoints.names: {heading} heads no column of this table", err=True)


def _write_ticks(order: _Order, form: str) -> _Told:
    """Write a table with a row a tick, and say what rounding does to it."""
    from profileplan import setpoints  # noqa: PLC0415

    write = {
        ".csv": setpoints.write_table,
        ".jsonl": setpoints.write_json_lines,
        ".npy": setpoints.write_npy,
        ".parquet": setpoints.write_parquet,
    }[form]
    planned, output, content, dialect, talk = order
    with frame.Progress("writing setpoints", wanted=talk) as progress:
        parts = write(
            planned, output, content=content, dialect=dialect, kept=order.kept, progress=progress
        )
    with frame.Progress("looking at rounding", wanted=talk) as progress:
        noises = setpoints.rounding_noise(
            planned, content=content, dialect=dialect, progress=progress
        )
    if form not in TEXT:
        # Only counts are rounded there.
        counted = {name for drive in content.drives.items() for name in _drive_names(*drive)}
        noises = tuple(noise for noise in noises if noise.axis in counted)
    remarks.tell_noise(noises)
    if content.period is not None:
        remarks.tell_turns(planned, content.drives, content.period)
    return _Told(parts, "", {"rounding": [remarks.noise_values(noise) for noise in noises]})


def _drive_names(axis: str, drive: Drive) -> tuple[str, ...]:
    return (axis,) if drive.also is None else (axis, drive.also.name)


def _write_points(order: _Order, error: float, longest: float | None) -> _Told:
    """Write few uneven points, and say how far their cubics are from the plan."""
    from profileplan import setpoints  # noqa: PLC0415

    planned, output, content, dialect, talk = order
    with frame.Progress("finding points", wanted=talk) as progress:
        found = setpoints.pvt(
            planned,
            error=error,
            content=content,
            dialect=dialect,
            longest=longest,
            progress=progress,
        )
    with frame.Progress("writing setpoints", wanted=talk) as progress:
        parts = setpoints.write_pvt(planned, found, output, kept=order.kept, progress=progress)
    for place, axis in enumerate(planned.job.machine.axes):
        remarks.tell_peaks(found, place, axis)
        remarks.tell_leaps(found, place, axis, planned.job.machine.setpoints.period)
    remarks.tell_lost(planned, found)
    more = f"{remarks.distance(found, planned.job)}; "
    return _Told(parts, more, remarks.distances(found), found.kept)


def _tell(told: _Told, planned: Plan, *, as_json: bool, quiet: bool) -> None:
    """Print what was written."""
    from profileplan import summary  # noqa: PLC0415

    parts = told.parts
    rows = sum(part.rows for part in parts if part.axis == parts[0].axis)
    if as_json:
        values = {
            "file": str(parts[0].file),
            "files": [str(part.file) for part in parts],
            "rows": rows,
            "parts": [remarks.part_values(part) for part in parts],
            **told.values,
        }
        click.echo(summary.text(values), nl=False)
        return
    more = f" and {len(parts) - 1} more files" if len(parts) > 1 else ""
    verdict = tables.verdict(planned)
    click.echo(f"{parts[0].file}{more}: {rows} rows; {told.more}{verdict}", color=frame.color())
    if not quiet:
        click.echo(summary.CAUTION, err=True)
