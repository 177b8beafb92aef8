"""The command that writes setpoint tables as drives want them."""

from __future__ import annotations

import re
from contextlib import contextmanager
from dataclasses import replace
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

import click

from profileplan.cli import frame, tables
from profileplan.cli.jobs import job_of, planned_of, tell_amiss, tell_unplayed
from profileplan.cli.settings import (
    FORMS,
    PLACES,
    SETTINGS,
    TEXT,
    Interpolation,
    Sorted,
    dialect_options,
)
from profileplan.errors import Fault, InputError

if TYPE_CHECKING:
    from collections.abc import Collection, Iterator, Mapping, Sequence

    from profileplan.inputs import Axis, Drive, Job, Machine
    from profileplan.planning import Plan
    from profileplan.setpoints import Content, Dialect, Noise, Part, PvtTable

PEAK_TOLERANCE = 1e-5
"""Share of a limit that cubics may pass it by unsaid, if rounding explains it: where points can be
found that need no more than that, they are taken."""

POINTS_ERROR = 0.001
"""Greatest distance of cubics from the plan unless something else is asked for [mm or deg]."""

NANOSECOND = 1e-9
"""Between such times points stand, if not on ticks [s]."""

PARTS_TOLD = 3
"""Parts that begin in motion that are named; of more the number is told."""


@dialect_options
@frame.cli.command(cls=Sorted)
@frame.source
@frame.machine
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, dir_okay=False),
    required=True,
    help="The table to write, .csv, .jsonl, .npy or .parquet; replaced when complete.",
)
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
    columns: str | None,
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
            tell_unplayed(planned, content.period)
    _tell_joins(told.parts)
    _tell(told, planned, as_json=as_json, quiet=quiet)
    findings = planned.check()
    tell_amiss(findings)
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
    machine: Machine, *, columns: str | None, units: str | None, period: float | None
) -> Content:
    """Return what is written: as the machine file says, but for what is asked for."""
    from profileplan import setpoints  # noqa: PLC0415

    words = None
    if columns is not None:
        words = tuple(name.strip() for name in columns.split(",") if name.strip())
    return setpoints.Content.of(machine, columns=words, period=period, units=units)


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
    _tell_noise(noises)
    if content.period is not None:
        _tell_turns(order, content.period)
    return _Told(parts, "", {"rounding": [_noise_values(noise) for noise in noises]})


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
        _tell_peaks(found, place, axis)
        _tell_leaps(found, place, axis, planned.job.machine.setpoints.period)
    _tell_lost(planned, found)
    return _Told(parts, f"{_distance(found, planned.job)}; ", _distances(found), found.kept)


def _distances(found: PvtTable) -> dict[str, object]:
    return {
        "error": dict(zip(found.axes, found.error.tolist(), strict=True)),
        "rounding_share": dict(zip(found.axes, found.rounding.tolist(), strict=True)),
        "limits_kept": found.kept,
        "cubics": {
            axis: {quantity: float(values[place]) for quantity, values in found.peaks.items()}
            | {
                "leap": float(found.leaps[place]),
                "over_limit": {name: float(own[place]) for name, own in found.excess.items()},
                "explained": {name: float(own[place]) for name, own in found.explained.items()},
                "kept": not any(own[place] for own in found.broken.values()),
            }
            for place, axis in enumerate(found.axes)
        },
    }


def _distance(found: PvtTable, job: Job) -> str:
    """Return how far the cubics are from the plan, of the axis that is farthest."""
    worst = int(found.error.argmax())
    axis = job.machine.axes[worst]
    return (
        f"at most {found.error[worst]:.3g} {axis.unit} off the plan, {axis.name}, of which "
        f"rounding up to {found.rounding[worst]:.2g}"
    )


def _tell_peaks(found: PvtTable, place: int, axis: Axis) -> None:
    """Say on stderr which limit of an axis the cubics between points pass by most, if any."""
    broken = [name for name, axes in found.broken.items() if axes[place]]
    worst = max(broken or found.excess, key=lambda name: float(found.excess[name][place]))
    share, explained = found.excess[worst][place], found.explained[worst][place]
    if not broken and share <= PEAK_TOLERANCE:
        return
    reached = f"leave it by {100 * share:.2g} % of its length"
    if worst in found.peaks:
        limit = axis.limits._asdict()[worst]
        reached = f"reach {found.peaks[worst][place]:.6g}, {100 * share:.2g} % over {limit:g}"
    steps = "increments" if axis.name in found.content.drives else "steps"
    steps = f"rounding, of positions to {steps} of {2 * found.rounding[place]:.3g} {axis.unit},"
    if not broken:
        verdict = f"{steps} explains it: finer steps make it less"
    elif found.tick == NANOSECOND:
        verdict = (
            f"the limit is not kept; {steps} explains up to {100 * explained:.2g} %: take finer "
            "ones, or a greater --error, so that points are farther apart"
        )
    else:
        verdict = (
            f"the limit is not kept; {steps} explains {100 * explained:.2g} %. Points off ticks "
            "keep it: leave out --period and --interpolation, and tell the time in s, ms or us"
        )
    click.echo(
        f"note: {axis.name} {worst}: between points the drive's cubics {reached}; {verdict}",
        err=True,
    )


def _tell_leaps(found: PvtTable, place: int, axis: Axis, period: float) -> None:
    """Say on stderr where an acceleration leaps by more than the jerk limit allows in a tick."""
    leap = float(found.leaps[place])
    if axis.jerk is not None and leap > axis.jerk * period:
        click.echo(
            f"note: {axis.name} jerk: where cubics meet the acceleration leaps by up to "
            f"{leap:.4g} {axis.unit}/s²; played in a tick of {period:g} s that is "
            f"{leap / period / axis.jerk:.2g} times the jerk limit: a smaller --error makes it "
            "less",
            err=True,
        )


def _tell_lost(planned: Plan, found: PvtTable) -> None:
    """Say on stderr which signals change back before a point shows them."""
    if found.tick != NANOSECOND:
        tell_unplayed(planned, found.tick)
        return
    for name in planned.signals:
        times = [event.time for event in planned.events if event.signal == name]
        lost = sum(after - before < NANOSECOND for before, after in pairwise(times))
        if lost:
            click.echo(
                f"note: {name} changes and changes back at once, {lost} times: the table does "
                "not show it",
                err=True,
            )


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
            "parts": [_part_values(part) for part in parts],
            **told.values,
        }
        click.echo(summary.text(values), nl=False)
        return
    more = f" and {len(parts) - 1} more files" if len(parts) > 1 else ""
    verdict = tables.verdict(planned)
    click.echo(f"{parts[0].file}{more}: {rows} rows; {told.more}{verdict}", color=frame.color())
    if not quiet:
        click.echo(summary.CAUTION, err=True)


def _part_values(part: Part) -> dict[str, object]:
    return {
        "file": str(part.file),
        "axis": part.axis or None,
        "first_row": part.first,
        "rows": part.rows,
        "starts_at_rest": part.starts_at_rest,
    }


def _tell_joins(parts: Sequence[Part]) -> None:
    """Say on stderr which parts begin while the axes move."""
    moving = [part for part in parts if part.axis == parts[0].axis and not part.starts_at_rest]
    for part in moving[:PARTS_TOLD]:
        click.echo(f"note: {part.file.name} {part.joins}", err=True)
    if len(moving) > PARTS_TOLD:
        click.echo(f"note: … and {len(moving) - PARTS_TOLD} more parts in motion", err=True)


def _tell_turns(order: _Order, period: float) -> None:
    """Say on stderr which wrapped axes may turn so far that no one can tell which way."""
    from profileplan import setpoints  # noqa: PLC0415

    for turn in setpoints.doubtful_turns(order.planned, order.content.drives, period):
        click.echo(
            f"note: {turn.name} turns by up to {turn.angle:.4g} deg between two rows, half of its "
            f"wrap of {turn.wrap:g} or more: its sense is in doubt; take a period below "
            f"{turn.longest:.2g} s",
            err=True,
        )


def _tell_noise(noises: Sequence[Noise]) -> None:
    """Say on stderr where rounding is large against a limit, and what makes it small.

    Of each axis the loudest quantity is told.
    """
    loudest: dict[str, Noise] = {}
    for noise in noises:
        other = loudest.get(noise.axis)
        if noise.advice is not None and (other is None or _share(other) < _share(noise)):
            loudest[noise.axis] = noise
    for noise in loudest.values():
        click.echo(
            f"note: {noise.axis} {noise.quantity}: from these positions a drive derives up to "
            f"{noise.derived:.3g}, from exact ones {noise.exact:.3g}, the limit is "
            f"{noise.limit:.3g}; {noise.advice}",
            err=True,
        )


def _share(noise: Noise) -> float:
    return noise.rounding / noise.limit


def _noise_values(noise: Noise) -> dict[str, object]:
    return {
        "axis": noise.axis,
        "quantity": noise.quantity,
        "limit": noise.limit,
        "exact": noise.exact,
        "derived": noise.derived,
        "rounding": noise.rounding,
        "time_s": noise.time,
        "ok": noise.ok,
    }
