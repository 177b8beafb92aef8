"""Commands on jobs: plan, check."""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

import click

from profileplan import wording
from profileplan.cli import frame, remarks, tables
from profileplan.cli.settings import FORMS, Columns, Digits
from profileplan.errors import Fault, InputError

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from profileplan.checks import Finding
    from profileplan.inputs import Job, Machine
    from profileplan.planning import Plan


@frame.cli.command()
@frame.source
@frame.machine
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, file_okay=False),
    help="Folder for setpoints.csv, summary.json and the page report.html; made if missing.",
)
@click.option("--dated", is_flag=True, help="Put today's date on the page.")
@frame.speed
@frame.tolerance
@frame.as_json
@frame.quiet
def plan(  # noqa: PLR0913 - one parameter an option
    *,
    source: Path,
    machine: Path | None,
    output: Path | None,
    dated: bool,
    speed: float | None,
    tolerance: float | None,
    as_json: bool,
    quiet: bool,
) -> None:
    """Plan a cycle and tell how long it takes and what limits it.

    SOURCE is a cycle file (.toml), or with -m a waypoint file (.csv) or a drawing (.dxf).

    \b
    Examples:
      profileplan plan samples/kiln-loader/cycle.toml
      profileplan plan samples/kiln-loader/cycle.toml -o out --json
      profileplan plan points.csv -m machine.toml --speed "0.3 m/s"

    report.html is one file that opens in any browser, without a network, and prints on A4.

    The table has a row for each step: when it begins, how long it takes, what limits it (the
    strongest first), and how much of each limit it uses in percent, with the axis that uses most.
    """  # noqa: D301 - click's mark for lines to keep as they are
    planned = planned_of(job_of(source, machine, speed, tolerance), talk=not (as_json or quiet))
    from profileplan import summary  # noqa: PLC0415

    values = summary.summarise(planned)
    written = ""
    if output is not None:
        written = _write(planned, values, output, dated=dated, talk=not (as_json or quiet))
    if as_json:
        click.echo(summary.text(values), nl=False)
    elif quiet:
        click.echo(tables.verdict(planned), color=frame.color())
        remarks.tell_amiss(planned.check())
    else:
        _show_plan(planned)
        if written:
            click.echo(f"wrote {written} to {output}", err=True)
    frame.finish(met=all(finding.ok for finding in planned.check()))


@frame.cli.command()
@frame.source
@frame.machine
@click.option(
    "--columns",
    type=Columns(),
    help="What a table without a header holds of each axis, behind the time: any of pos, vel, acc, "
    "jerk, force, torque; default: as the machine file says.",
)
@click.option(
    "--points",
    type=click.Choice(["ticks", "pvt"]),
    help="What rows of a table are: ticks; or points with cubics between them. Default: as it "
    "looks.",
)
@click.option(
    "--significant",
    type=Digits(),
    metavar="KIND=N,...",
    help="Significant digits that a table is rounded to: pos=7; default: as the machine file says.",
)
@frame.speed
@frame.tolerance
@frame.as_json
@frame.quiet
def check(  # noqa: PLR0913 - one parameter an option
    *,
    source: Path,
    machine: Path | None,
    columns: tuple[str, ...] | None,
    points: str | None,
    significant: dict[str, int] | None,
    speed: float | None,
    tolerance: float | None,
    as_json: bool,
    quiet: bool,
) -> None:
    """Judge every requirement, with value, limit and margin.

    SOURCE is a cycle file (.toml), or with -m a waypoint file (.csv), a drawing (.dxf), or a
    setpoint table (.csv with a time column, .jsonl, .npy or .parquet), ours or another's. Of a
    table all columns that are known are judged: travel, steps, differences and rates against the
    limits, agreement of positions and velocities, time, rest at both ends, clearance; with the
    first row of each fault. A part of a table that is split is judged with the parts beside it.

    \b
    Examples:
      profileplan check samples/kiln-loader/cycle.toml
      profileplan check out/setpoints.csv -m samples/kiln-loader/machine.toml
      profileplan check bare.csv -m machine.toml --columns pos,vel
    """  # noqa: D301 - click's mark for lines to keep as they are
    if _is_table(source, machine, columns):
        if speed is not None or tolerance is not None:
            message = "--speed and --tolerance are for waypoints; this is a setpoint table"
            raise InputError([Fault("", message, source)])
        asked = _Asked(columns, points, significant)
        findings, notes = _table_findings(source, machine, asked, talk=not (as_json or quiet))
    elif (columns, points, significant) != (None, None, None):
        message = "--columns, --points and --significant are for setpoint tables; this is none"
        raise InputError([Fault("", message, source)])
    else:
        job = job_of(source, machine, speed, tolerance)
        planned = planned_of(job, talk=not (as_json or quiet))
        findings, notes = planned.check(), planned.notes
    met = all(finding.ok for finding in findings)
    if as_json:
        from profileplan import summary  # noqa: PLC0415

        checks = [summary.finding_values(finding) for finding in findings]
        values = {"requirements_met": met, "checks": checks, "notes": list(notes)}
        click.echo(summary.text(values), nl=False)
    else:
        if not quiet:
            click.echo(tables.findings_table(findings), color=frame.color())
        click.echo(tables.requirements(findings), color=frame.color())
    frame.finish(met=met)


def job_of(source: Path, machine: Path | None, speed: float | None, tolerance: float | None) -> Job:
    """Read a job."""
    from profileplan.inputs import load_job  # noqa: PLC0415

    return load_job(source, machine=machine, speed=speed, tolerance=tolerance)


def planned_of(job: Job, *, talk: bool) -> Plan:
    """Plan a job, with progress, and say on stderr what the plan leaves out."""
    from profileplan import planning  # noqa: PLC0415

    with frame.Progress("planning", wanted=talk) as progress:
        planned = planning.plan(job, progress=progress)
    for note in planned.notes:
        click.echo(f"note: {note}", err=True)
    return planned


def _limits(source: Path, machine: Path | None) -> Machine:
    """Return the machine that a table is judged by."""
    from profileplan.inputs import read_machine  # noqa: PLC0415

    if machine is None:
        message = "a setpoint table is judged by a machine's limits: give its file with -m"
        raise InputError([Fault("", message, source)])
    return read_machine(machine)


def _is_table(source: Path, machine: Path | None, columns: tuple[str, ...] | None) -> bool:
    """Tell whether a file is a setpoint table: by its ending, its headings, or numbers alone."""
    form = source.suffix.lower()
    if form != ".csv":
        return form in FORMS
    from profileplan import setpoints  # noqa: PLC0415
    from profileplan.setpoints.layout import has_axes, has_numbers_only  # noqa: PLC0415

    if columns is not None or setpoints.is_table(source) or has_numbers_only(source):
        return True
    if machine is None:
        return False
    limits = _limits(source, machine)
    return setpoints.is_table(source, limits.setpoints.dialect) or has_axes(source, limits)


class _Asked(NamedTuple):
    """Options that say how a table is to be understood."""

    columns: tuple[str, ...] | None
    points: str | None
    significant: dict[str, int] | None


def _table_findings(
    source: Path, machine: Path | None, asked: _Asked, *, talk: bool
) -> tuple[Sequence[Finding], Sequence[str]]:
    """Judge a table, with progress, and say on stderr what is not judged, or how."""
    from profileplan import checks  # noqa: PLC0415

    limits = _limits(source, machine)
    columns, points, significant = asked
    if significant is not None:
        limits = _with_digits(limits, significant)
    manner = checks.Manner(
        columns=None if columns is None else _known(columns),
        points=None if points is None else points == "pvt",
    )
    with frame.Progress("checking", wanted=talk) as progress:
        judged = checks.judge_file(source, limits, manner=manner, progress=progress)
    unjudged = [f"not judged: {', '.join(judged.unjudged)}"] if judged.unjudged else []
    notes = [*unjudged, *judged.notes]
    for note in notes:
        click.echo(f"note: {note}", err=True)
    return judged.findings, notes


def _with_digits(machine: Machine, significant: Mapping[str, int]) -> Machine:
    """Return a machine whose tables have significant digits.

    Raises
    ------
    InputError
        There are too few or too many.
    """
    own = machine.setpoints
    try:
        dialect = own.dialect.changed({"significant": significant})
    except InputError as error:
        raise InputError(
            replace(fault, place=f"--{fault.place.replace('.', ' ', 1)}") for fault in error.faults
        ) from None
    return replace(machine, setpoints=replace(own, dialect=dialect))


def _known(columns: tuple[str, ...]) -> tuple[str, ...]:
    """Return the words of --columns.

    Raises
    ------
    InputError
        One is not known.
    """
    from profileplan.inputs.dialect import KINDS  # noqa: PLC0415
    from profileplan.inputs.rules import near, shown  # noqa: PLC0415

    faults = [
        Fault("--columns", f"{shown(word)}; allowed: {', '.join(KINDS)}{near(word, KINDS)}")
        for word in columns
        if word not in KINDS
    ]
    if faults:
        raise InputError(faults)
    return columns


def _write(
    planned: Plan, values: Mapping[str, object], folder: Path, *, dated: bool, talk: bool
) -> str:
    """Write what a plan is handed over as, and return the names of the files."""
    from profileplan import setpoints, summary  # noqa: PLC0415
    from profileplan.report import page  # noqa: PLC0415

    table, record, report = (
        folder / name for name in ("setpoints.csv", "summary.json", "report.html")
    )
    _make_folder(folder)
    frame.keep(planned.job.files, table, record, report)
    own = planned.job.machine.setpoints
    content = setpoints.Content.of(planned.job.machine)
    with frame.Progress("writing setpoints", wanted=talk) as progress:
        setpoints.write_table(
            planned, table, content=content, dialect=own.dialect, progress=progress
        )
    summary.write_json(values, record)
    remarks.tell_unplayed(planned, None)
    if absent := page.missing():
        click.echo(f"note: no report.html: {absent}", err=True)
        return f"{table.name} and {record.name}"
    today = datetime.now().astimezone().date().isoformat()
    page.write_page(planned, report, date=today if dated else None)
    return f"{table.name}, {record.name} and {report.name}"


def _make_folder(folder: Path) -> None:
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        message = f"cannot be made: {error.strerror or error}"
        raise InputError([Fault("", message, folder)]) from error


def _show_plan(planned: Plan) -> None:
    source = planned.job.cycle.source
    click.echo(f"{planned.job.machine.name}{f', {source}' if source else ''}\n")
    click.echo(tables.step_table(planned), color=frame.color())
    click.echo(f"\n{tables.verdict(planned)}", color=frame.color())
    if planned.job.cycle.parts:
        click.echo(tables.parts(planned))
    click.echo(tables.requirements(planned.check()), color=frame.color())
    for line in wording.all_amiss(planned.check()):
        click.echo(f"  {line}", color=frame.color())
    if planned.meets_target is False:
        click.echo(tables.levers(planned), color=frame.color())
    from profileplan.summary import CAUTION  # noqa: PLC0415

    click.echo("\n" + click.wrap_text(CAUTION, width=tables.width()))
