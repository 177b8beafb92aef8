"""The command line: parse, call one function, print.

Results go to stdout, talk to stderr. Exit status 0: fine; 1: planned or checked, and a requirement
is not met; 2: bad input, or a job that cannot be planned.
"""

from __future__ import annotations

import os
import shutil
import signal
import sys
import time
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn

import click

from profileplan import __version__
from profileplan.errors import Fault, InputError, ProfileplanError

if TYPE_CHECKING:
    from collections.abc import Sequence
    from typing import Self

    from profileplan.checks import Finding
    from profileplan.inputs import Job
    from profileplan.planning import Limit, Plan, PlannedStep

REQUIREMENT_NOT_MET = 1
INTERRUPTED = 130
OUTPUT_LOST = 141
"""As a shell counts a process that an interrupt, or a closed pipe, has ended."""

NARROW, WIDE = 60, 160
"""Fewest and most columns that tables are fitted to."""

SHORT = {"velocity": "vel", "acceleration": "acc", "deceleration": "dec", "jerk": "jerk"}
"""How the step table abbreviates what limits a step."""

PROGRESS_AFTER = 1.0
"""Time [s] before progress is shown."""


class _Commands(click.Group):
    """Turns this project's errors into a message and an exit status."""

    def invoke(self, ctx: click.Context) -> object:
        try:
            return super().invoke(ctx)
        except ProfileplanError as error:
            click.echo(_lines(error), err=True, color=_color())
            ctx.exit(error.exit_status)
        except KeyboardInterrupt:
            click.echo("interrupted; no file is half-written", err=True)
            ctx.exit(INTERRUPTED)
        except OSError as error:
            # Whoever reads the output has closed it, or it has no room: keep Python from trying
            # to write the rest at its end.
            sys.stdout = open(os.devnull, "w", encoding="utf-8")  # noqa: PTH123, SIM115 - till the end
            if not isinstance(error, BrokenPipeError):
                click.echo(f"error: output cannot be written: {error.strerror}", err=True)
            ctx.exit(OUTPUT_LOST)


class _Measure(click.ParamType[float]):
    """A number in the program's units, or text with a unit: "0.8 m/s", "250 us"."""

    def __init__(self, name: str) -> None:
        self.name = name

    def convert(
        self, value: object, param: click.Parameter | None, ctx: click.Context | None
    ) -> float:
        from profileplan.inputs.quantities import Quantity, parse_quantity  # noqa: PLC0415

        if isinstance(value, float):
            return value
        try:
            return parse_quantity(_number(str(value)), Quantity[self.name.upper()])
        except ValueError as error:
            self.fail(str(error), param, ctx)


class _Progress:
    """Shows on a terminal's stderr how far a task of more than a second is."""

    def __init__(self, task: str, *, wanted: bool) -> None:
        self._task = task
        self._wanted = wanted and sys.stderr.isatty()
        self._due = time.monotonic() + PROGRESS_AFTER
        self._shown = False

    def __call__(self, done: float, total: int) -> None:
        if self._wanted and time.monotonic() >= self._due:
            self._due = time.monotonic() + 0.1
            self._shown = True
            click.echo(f"\r{self._task} {100 * done / total:3.0f} %", err=True, nl=False)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        if self._shown:
            click.echo("\r" + " " * (len(self._task) + 6) + "\r", err=True, nl=False)


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="profileplan")
def cli() -> None:
    """Plan the motion of Cartesian machines.

    From a machine's limits and a cycle to setpoint tables that a drive can play.

    \b
    Begin with:
      profileplan plan samples/kiln-loader/cycle.toml
      profileplan plan samples/kiln-loader/cycle.toml -o out

    \b
    Exit status:
      0  fine
      1  planned or checked, and a requirement is not met
      2  bad input, or a job that cannot be planned
    """  # noqa: D301 - click's mark for lines to keep as they are


_source = click.argument("source", type=click.Path(path_type=Path))
_machine = click.option(
    "-m",
    "--machine",
    type=click.Path(path_type=Path),
    help="Machine file; needed for a .csv, else in place of the one that the cycle file names.",
)
_speed = click.option(
    "--speed", type=_Measure("velocity"), help="Highest speed along a .csv path, mm/s or with unit."
)
_tolerance = click.option(
    "--tolerance", type=_Measure("length"), help="Tolerance of a .csv path, mm or with unit."
)
_json = click.option("--json", "as_json", is_flag=True, help="Print JSON instead of tables.")
_quiet = click.option("-q", "--quiet", is_flag=True, help="Print the verdict alone, in one line.")


@cli.command()
@_source
@_machine
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, file_okay=False),
    help="Folder for setpoints.csv and summary.json; made if missing.",
)
@_speed
@_tolerance
@_json
@_quiet
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

    SOURCE is a cycle file (.toml), or a waypoint file (.csv) with -m.

    \b
    Examples:
      profileplan plan samples/kiln-loader/cycle.toml
      profileplan plan samples/kiln-loader/cycle.toml -o out --json
      profileplan plan points.csv -m machine.toml --speed "0.3 m/s"

    The table has a row for each step: when it begins, how long it takes, what limits it (the
    strongest first), and how much of each limit it uses in percent, with the axis that uses most.
    """  # noqa: D301 - click's mark for lines to keep as they are
    planned = _planned(_job(source, machine, speed, tolerance), talk=not (as_json or quiet))
    from profileplan import setpoints, summary  # noqa: PLC0415

    values = summary.summarise(planned)
    if output is not None:
        _make_folder(output)
        _keep_sources(planned.job, output / "setpoints.csv", output / "summary.json")
        with _Progress("writing setpoints", wanted=not (as_json or quiet)) as progress:
            setpoints.write_csv(planned, output / "setpoints.csv", progress=progress)
        summary.write_json(values, output / "summary.json")
        _tell_unplayed(planned, None)
    if as_json:
        click.echo(summary.text(values), nl=False)
    elif quiet:
        click.echo(_verdict(planned), color=_color())
    else:
        _show_plan(planned)
        if output is not None:
            click.echo(f"wrote setpoints.csv and summary.json to {output}", err=True)
    _finish(all(finding.ok for finding in planned.check()))


@cli.command()
@_source
@_machine
@_speed
@_tolerance
@_json
@_quiet
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

    SOURCE is a cycle file (.toml), a waypoint file (.csv) with -m, or a setpoint table (.csv with
    a column t_s) with -m: of that the positions are judged, by travel and by their differences
    against the limits.

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
        findings = _table_findings(source, machine)
    else:
        job = _job(source, machine, speed, tolerance)
        findings = _planned(job, talk=not (as_json or quiet)).check()
    met = all(finding.ok for finding in findings)
    if as_json:
        from profileplan import summary  # noqa: PLC0415

        checks = [summary.finding_values(finding) for finding in findings]
        click.echo(summary.text({"requirements_met": met, "checks": checks}), nl=False)
    else:
        if not quiet:
            click.echo(_findings_table(findings), color=_color())
        click.echo(_requirements(findings), color=_color())
    _finish(met)


@cli.command()
@_source
@_machine
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, dir_okay=False),
    required=True,
    help="The table to write; replaced when complete.",
)
@click.option(
    "--period", type=_Measure("time"), help='Time between rows, s or with unit: 0.001, "250 us".'
)
@click.option(
    "--columns",
    default="pos,vel,acc",
    show_default=True,
    help="What to write for each axis: any of pos, vel, acc, jerk.",
)
@_speed
@_tolerance
@_json
@_quiet
def export(  # noqa: PLR0913 - one parameter an option
    *,
    source: Path,
    machine: Path | None,
    output: Path,
    period: float | None,
    columns: str,
    speed: float | None,
    tolerance: float | None,
    as_json: bool,
    quiet: bool,
) -> None:
    """Write the setpoint table alone.

    \b
    Examples:
      profileplan export samples/kiln-loader/cycle.toml -o setpoints.csv
      profileplan export cycle.toml -o setpoints.csv --period "250 us" --columns pos,vel

    The last row is the first tick at or after the end of the motion, at rest and on target.
    """  # noqa: D301 - click's mark for lines to keep as they are
    planned = _planned(_job(source, machine, speed, tolerance), talk=not (as_json or quiet))
    from profileplan import setpoints, summary  # noqa: PLC0415

    names = [name.strip() for name in columns.split(",") if name.strip()]
    _keep_sources(planned.job, output)
    with _Progress("writing setpoints", wanted=not (as_json or quiet)) as progress:
        rows = setpoints.write_csv(planned, output, period=period, columns=names, progress=progress)
    _tell_unplayed(planned, period)
    if as_json:
        click.echo(summary.text({"file": str(output), "rows": rows}), nl=False)
    else:
        click.echo(f"{output}: {rows} rows; {_verdict(planned)}", color=_color())
        if not quiet:
            click.echo(summary.CAUTION, err=True)
    _finish(all(finding.ok for finding in planned.check()))


def main() -> NoReturn:
    """Run the command line and exit with its status."""
    # A request to end is an interrupt: what is half-written is taken away.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    cli.main(prog_name="profileplan")
    raise SystemExit


def _lines(error: ProfileplanError) -> str:
    """Return an error as it is shown: what kind, then one line for each fault."""
    if isinstance(error, InputError):
        return "\n".join(f"error: {fault}" for fault in error.faults)
    return f"error: {error}"


def _number(text: str) -> float | str:
    """Return a number as such, and any other text as it is."""
    try:
        return float(text)
    except ValueError:
        return text


def _color() -> bool | None:
    """Return whether to colour: not where NO_COLOR is set, else where there is a terminal."""
    return False if os.environ.get("NO_COLOR") else None


def _finish(met: bool) -> None:
    if not met:
        click.get_current_context().exit(REQUIREMENT_NOT_MET)


def _job(source: Path, machine: Path | None, speed: float | None, tolerance: float | None) -> Job:
    from profileplan.inputs import load_job  # noqa: PLC0415

    return load_job(source, machine=machine, speed=speed, tolerance=tolerance)


def _planned(job: Job, *, talk: bool) -> Plan:
    """Plan a job, with progress, and say on stderr what the plan leaves out."""
    from profileplan import planning  # noqa: PLC0415

    with _Progress("planning", wanted=talk) as progress:
        planned = planning.plan(job, progress=progress)
    for note in planned.notes:
        click.echo(f"note: {note}", err=True)
    return planned


def _table_findings(source: Path, machine: Path | None) -> Sequence[Finding]:
    from profileplan import checks, setpoints  # noqa: PLC0415
    from profileplan.inputs import read_machine  # noqa: PLC0415

    if machine is None:
        message = "a setpoint table is judged by a machine's limits: give its file with -m"
        raise InputError([Fault("", message, source)])
    limits = read_machine(machine)
    return checks.check_table(setpoints.read_csv(source, limits), limits)


def _keep_sources(job: Job, *outputs: Path) -> None:
    """Refuse to write over what the job was read from."""
    from profileplan.inputs import PathStep  # noqa: PLC0415

    files = [job.cycle.source, job.machine.source]
    files += [step.file for step in job.cycle.steps if isinstance(step, PathStep)]
    sources = {file.resolve() for file in files if file is not None}
    for output in outputs:
        if output.resolve() in sources:
            message = "the job is read from this file; choose another to write to"
            raise InputError([Fault("", message, output)])


def _tell_unplayed(planned: Plan, period: float | None) -> None:
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
    click.echo(_step_table(planned), color=_color())
    click.echo(f"\n{_verdict(planned)}", color=_color())
    click.echo(_requirements(planned.check()), color=_color())
    for finding in planned.check():
        if not finding.ok and finding.check != "cycle time":
            click.echo(f"  {_where(finding)}", color=_color())
    if planned.meets_target is False:
        click.echo(_levers(planned), color=_color())
    from profileplan.summary import CAUTION  # noqa: PLC0415

    click.echo("\n" + click.wrap_text(CAUTION, width=_width()))


def _step_table(planned: Plan) -> str:
    from profileplan.summary import uses  # noqa: PLC0415

    uses_of = [f"{word} %" for word in SHORT.values()]
    heads = ["#", "step", "kind", "start s", "time s", "limited by", *uses_of]
    rows = []
    for number, step in enumerate(planned.steps, start=1):
        shares = [_most(by_axis) for by_axis in uses(planned, step).values()]
        times = [f"{step.start:.3f}", f"{step.duration:.3f}"]
        rows.append([str(number), step.name, step.kind, *times, _held(step), *shares])
    return _table(heads, rows, text=("step", "kind", "limited by"))


def _most(shares: dict[str, float]) -> str:
    """Return the greatest share of a limit in percent, and the axis that uses it."""
    axis, share = max(shares.items(), key=lambda item: item[1], default=("", 0.0))
    return f"{100 * share:.0f} {axis}" if share > 0 else ""


def _held(step: PlannedStep) -> str:
    """Return what limits a step, axis by axis, the strongest first."""
    by_axis: dict[str, list[str]] = {}
    for limit in step.limited_by:
        word = SHORT.get(limit.quantity, limit.quantity)
        by_axis.setdefault(limit.axis or _plain(limit.quantity), []).append(
            word if limit.axis else ""
        )
    return "; ".join(
        f"{name} {', '.join(quantities)}".strip() for name, quantities in by_axis.items()
    )


def _plain(quantity: str) -> str:
    """Return what limits a step as a whole, in words."""
    return {"speed": "speed asked for", "time": "time asked for"}.get(quantity, quantity)


def _verdict(planned: Plan) -> str:
    taken = f"cycle time {planned.duration:.3f} s"
    if planned.target is None:
        return taken
    apart = abs(planned.target - planned.duration)
    if planned.meets_target:
        return f"{taken}; target {planned.target:g} s {_good('met')}, {apart:.3f} s to spare"
    short = f"{apart:.3f}" if apart >= 0.0005 else f"{apart:.1g}"
    return f"{taken}; target {planned.target:.9g} s {_bad('MISSED')} by {short} s"


def _requirements(findings: Sequence[Finding]) -> str:
    failed = sum(not finding.ok for finding in findings)
    if failed:
        return f"{_bad('NOT MET')}: {failed} of {len(findings)} requirements"
    open_ones = sum(not finding.decided for finding in findings)
    if open_ones:
        rest = len(findings) - open_ones
        return (
            f"{rest} requirements {_good('met')}; {open_ones} cannot be told from so few decimals"
        )
    return f"all {len(findings)} requirements {_good('met')}"


def _levers(planned: Plan) -> str:
    """Return what would shorten the cycle, and the steps by the time that they take."""
    heads = ["what limits", "saved by 10 % more, s", "steps that it limits"]
    rows = [
        [_name(lever.limit), f"{lever.limit.saves:.3f}", "; ".join(lever.steps)]
        for lever in planned.levers
        if lever.limit.quantity != "time"
    ]
    longest = sorted(planned.steps, key=lambda step: -step.duration)[:5]
    asked = sum(step.duration for step in planned.steps if _asks_for_time(step))
    lines = []
    if rows:
        table = _table(heads, rows, text=(heads[0], heads[2]))
        lines = ["", "What would shorten the cycle:", "", table]
    if asked:
        lines.append(f"\nWaits and times asked for take {asked:.3f} s.")
    names = "; ".join(f"{step.name} {step.duration:.3f} s" for step in longest if step.duration)
    lines.append(click.wrap_text(f"Longest steps: {names}.", width=_width()))
    return "\n".join(lines)


def _asks_for_time(step: PlannedStep) -> bool:
    return any(limit.quantity == "time" for limit in step.limited_by)


def _name(limit: Limit) -> str:
    return f"{limit.axis} {limit.quantity}" if limit.axis else _plain(limit.quantity)


def _findings_table(findings: Sequence[Finding]) -> str:
    heads = ["requirement", "value", "limit", "margin", "unit", "use %", "where", "met"]
    rows = [
        [
            _required(finding),
            _short(finding.value),
            _short(finding.limit),
            _short(finding.margin, 3),
            finding.unit,
            "" if finding.use is None else f"{100 * finding.use:.1f}",
            _at(finding),
            _met(finding),
        ]
        for finding in findings
    ]
    return _table(heads, rows, text=("requirement", "unit", "where", "met"))


def _met(finding: Finding) -> str:
    """Return whether a requirement is met; "?" where the table is too coarse to tell."""
    if not finding.decided:
        return "?"
    return _good("yes") if finding.ok else _bad("NO")


def _required(finding: Finding) -> str:
    return f"{finding.axis} {finding.check}" if finding.axis else finding.check


def _short(value: float, digits: int = 6) -> str:
    """Return a number in few digits. What rounding alone makes, below a billionth, is 0."""
    return f"{round(value, 9) + 0.0:.{digits}g}"


def _at(finding: Finding) -> str:
    """Return where the worst case is; nowhere in particular where it is 0."""
    parts = [finding.step] if finding.step and round(finding.value, 9) else []
    if finding.time is not None and round(finding.value, 9):
        parts.append(f"at {finding.time:.3f} s")
    return " ".join(parts)


def _where(finding: Finding) -> str:
    return (
        f"{_required(finding)}: {finding.value:.6g} {finding.unit}, "
        f"allowed {finding.limit:.6g} {finding.unit}, {_at(finding)}"
    )


def _good(word: str) -> str:
    return click.style(word, fg="green")


def _bad(word: str) -> str:
    return click.style(word, fg="red", bold=True)


def _width() -> int:
    return min(max(shutil.get_terminal_size((100, 24)).columns, NARROW), WIDE)


def _table(heads: Sequence[str], rows: Sequence[Sequence[str]], *, text: Sequence[str]) -> str:
    """Return a table fitted to the terminal: columns of text are wrapped, numbers never."""
    import tabulate  # noqa: PLC0415

    tabulate.MIN_PADDING = 0  # of headings: they need no more room than numbers do

    widths = [
        max(len(click.unstyle(cell)) for cell in (head, *column))
        for head, *column in zip(heads, *rows, strict=True)
    ]
    flexible = [index for index, head in enumerate(heads) if head in text]
    spare = _width() - sum(widths) - 2 * (len(heads) - 1)
    while spare < 0 and any(widths[index] > 8 for index in flexible):
        widest = max(flexible, key=lambda index: widths[index])
        widths[widest] -= 1
        spare += 1
    return tabulate.tabulate(
        rows,
        heads,
        tablefmt="simple",
        disable_numparse=True,
        colalign=["left" if head in text else "right" for head in heads],
        maxcolwidths=[widths[index] if index in flexible else None for index in range(len(heads))],
    )
