"""Commands on jobs: plan, check."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from profileplan.cli import frame, tables
from profileplan.errors import Fault, InputError

if TYPE_CHECKING:
    from collections.abc import Sequence

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
    help="Folder for setpoints.csv and summary.json; made if missing.",
)
@frame.speed
@frame.tolerance
@frame.as_json
@frame.quiet
def plan(  # noqa: PLR0913 - one parameter an option
    *,
    source: Path,
    machine: Path | None,
    output: Path | None,
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

    The table has a row for each step: when it begins, how long it takes, what limits it (the
    strongest first), and how much of each limit it uses in percent, with the axis that uses most.
    """  # noqa: D301 - click's mark for lines to keep as they are
    planned = planned_of(job_of(source, machine, speed, tolerance), talk=not (as_json or quiet))
    from profileplan import setpoints, summary  # noqa: PLC0415

    values = summary.summarise(planned)
    if output is not None:
        _make_folder(output)
        frame.keep(sources_of(planned.job), output / "setpoints.csv", output / "summary.json")
        own = planned.job.machine.setpoints
        with frame.Progress("writing setpoints", wanted=not (as_json or quiet)) as progress:
            setpoints.write_table(
                planned,
                output / "setpoints.csv",
                content=setpoints.Content.of(planned.job.machine),
                dialect=own.dialect,
                progress=progress,
            )
        summary.write_json(values, output / "summary.json")
        tell_unplayed(planned, None)
    if as_json:
        click.echo(summary.text(values), nl=False)
    elif quiet:
        click.echo(tables.verdict(planned), color=frame.color())
    else:
        _show_plan(planned)
        if output is not None:
            click.echo(f"wrote setpoints.csv and summary.json to {output}", err=True)
    frame.finish(met=all(finding.ok for finding in planned.check()))


@frame.cli.command()
@frame.source
@frame.machine
@frame.speed
@frame.tolerance
@frame.as_json
@frame.quiet
def check(
    *,
    source: Path,
    machine: Path | None,
    speed: float | None,
    tolerance: float | None,
    as_json: bool,
    quiet: bool,
) -> None:
    """Judge every requirement, with value, limit and margin.

    SOURCE is a cycle file (.toml), or with -m a waypoint file (.csv), a drawing (.dxf), or a
    setpoint table (.csv with a time column), ours or another's. Of a table all columns that are
    known are judged: travel, steps, differences and rates against the limits, agreement of
    positions and velocities, time, rest at both ends, clearance; with the first row of each fault.

    \b
    Examples:
      profileplan check samples/kiln-loader/cycle.toml
      profileplan check out/setpoints.csv -m samples/kiln-loader/machine.toml
    """  # noqa: D301 - click's mark for lines to keep as they are
    from profileplan import setpoints  # noqa: PLC0415

    if source.suffix.lower() == ".csv" and setpoints.is_table(source):
        if speed is not None or tolerance is not None:
            message = "--speed and --tolerance are for waypoints; this is a setpoint table"
            raise InputError([Fault("", message, source)])
        findings = _table_findings(source, machine, talk=not (as_json or quiet))
    else:
        job = job_of(source, machine, speed, tolerance)
        findings = planned_of(job, talk=not (as_json or quiet)).check()
    met = all(finding.ok for finding in findings)
    if as_json:
        from profileplan import summary  # noqa: PLC0415

        checks = [summary.finding_values(finding) for finding in findings]
        click.echo(summary.text({"requirements_met": met, "checks": checks}), nl=False)
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


def _table_findings(source: Path, machine: Path | None, *, talk: bool) -> Sequence[Finding]:
    """Judge a table, with progress, and say on stderr which columns are not judged."""
    from profileplan import checks  # noqa: PLC0415

    limits = _limits(source, machine)
    # Where the machine file says nothing of its own, the table says how it is written.
    own = limits.setpoints.dialect
    dialect = None if own == type(own)() else own
    with frame.Progress("checking", wanted=talk) as progress:
        judged = checks.judge_file(source, limits, dialect=dialect, progress=progress)
    if judged.unjudged:
        click.echo(f"note: not judged: {', '.join(judged.unjudged)}", err=True)
    return judged.findings


def sources_of(job: Job) -> list[Path | None]:
    """Return the files that a job is read from."""
    from profileplan.inputs import PathStep, Trace  # noqa: PLC0415

    files = [job.cycle.source, job.machine.source]
    for step in job.cycle.steps:
        if isinstance(step, PathStep):
            files.append(step.file)
        elif isinstance(step, Trace):
            files.append(step.drawing)
    return files


def tell_unplayed(planned: Plan, period: float | None) -> None:
    """Say on stderr which signals change back before a row shows them."""
    from profileplan import setpoints  # noqa: PLC0415

    for event in setpoints.unplayed(planned, period):
        state = "on" if event.state else "off"
        click.echo(
            f"note: {event.signal} goes {state} at {event.time:.6f} s and changes again before "
            "the next row: the table does not show it",
            err=True,
        )


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
    for finding in planned.check():
        if not finding.ok and finding.check != "cycle time":
            click.echo(f"  {tables.where(finding)}", color=frame.color())
    if planned.meets_target is False:
        click.echo(tables.levers(planned), color=frame.color())
    from profileplan.summary import CAUTION  # noqa: PLC0415

    click.echo("\n" + click.wrap_text(CAUTION, width=tables.width()))
