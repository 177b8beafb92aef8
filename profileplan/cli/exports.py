"""The command that writes setpoint tables as drives want them."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, TypeVar

import click

from profileplan.cli import frame, tables
from profileplan.cli.jobs import job_of, planned_of, sources_of, tell_unplayed
from profileplan.errors import Fault, InputError

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from profileplan.setpoints import Dialect, Noise

Word = TypeVar("Word", bound=str)

DELIMITERS = {"comma": ",", "semicolon": ";", "tab": "\t", "bar": "|"}
"""Words for delimiters that a shell would have to quote."""

SIGNS = {"point": ".", "comma": ","}

FORMS = (".csv", ".jsonl", ".npy", ".parquet")
"""Endings of the files that are written."""


@frame.cli.command()
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
    "--columns",
    help="What to write for each axis: any of pos, vel, acc, jerk; default: as the machine file "
    "says, or pos,vel,acc.",
)
@click.option("--units", type=click.Choice(["axis", "increments"]), help="What positions count.")
@click.option("--delimiter", type=click.Choice(list(DELIMITERS)), help="Between two cells.")
@click.option("--decimal", type=click.Choice(list(SIGNS)), help="The decimal sign.")
@click.option("--time", "unit", type=click.Choice(["s", "ms", "us", "tick"]), help="Of the time.")
@click.option("--line-end", type=click.Choice(["crlf", "lf"]), help="What ends a line.")
@click.option("--header/--no-header", default=None, help="Whether headings are written.")
@click.option("--axis-files", is_flag=True, help="One file an axis.")
@click.option("--rows-a-file", type=int, metavar="N", help="Split after so many rows at most.")
@click.option(
    "--points",
    type=click.Choice(["ticks", "pvt"]),
    default="ticks",
    show_default=True,
    help="A row a tick; or few uneven points with position and velocity, cubics between them.",
)
@click.option(
    "--error",
    type=frame.Measure("length"),
    default=0.001,
    show_default=True,
    help="Greatest distance of those cubics from the plan, mm or deg.",
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
    columns: str | None,
    units: str | None,
    delimiter: str | None,
    decimal: str | None,
    unit: str | None,
    line_end: str | None,
    header: bool | None,
    axis_files: bool,
    rows_a_file: int | None,
    points: str,
    error: float,
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
      profileplan export cycle.toml -o drive.csv --delimiter semicolon --decimal comma --time ms
      profileplan export cycle.toml -o points.csv --points pvt --error 0.005

    What is not said here is as the machine file's [setpoints] says. The last row is the first tick
    at or after the end of the motion, at rest and on target.
    """  # noqa: D301 - click's mark for lines to keep as they are
    talk = not (as_json or quiet)
    job = job_of(source, machine, speed, tolerance)
    frame.keep(sources_of(job), output)
    form = _form(output, points)
    own = job.machine.setpoints
    dialect = replace(
        own.dialect,
        delimiter=own.dialect.delimiter if delimiter is None else DELIMITERS[delimiter],
        decimal=own.dialect.decimal if decimal is None else SIGNS[decimal],
        time=_word(unit, ("s", "ms", "us", "tick"), own.dialect.time),
        line_end=_word(line_end, ("crlf", "lf"), own.dialect.line_end),
        header=own.dialect.header if header is None else header,
        axis_files=axis_files or own.dialect.axis_files,
        rows_a_file=rows_a_file or own.dialect.rows_a_file,
    )
    _judge_split(dialect, output, form)
    planned = planned_of(job, talk=talk)
    from profileplan import setpoints, summary  # noqa: PLC0415

    content = setpoints.Content.of(
        job.machine,
        columns=None if columns is None else _words(columns),
        period=period,
        units=units or own.units,
    )
    with frame.Progress("writing setpoints", wanted=talk) as progress:
        if points == "pvt":
            found = setpoints.pvt(planned, error=error, tick=content.period)
            files, rows = [output], setpoints.write_pvt(planned, found, output, dialect=dialect)
        elif form == ".csv":
            parts = setpoints.write_table(
                planned, output, content=content, dialect=dialect, progress=progress
            )
            files = [part.file for part in parts]
            rows = sum(part.rows for part in parts if part.axis == parts[0].axis)
        else:
            write = {
                ".jsonl": setpoints.write_json_lines,
                ".npy": setpoints.write_npy,
                ".parquet": setpoints.write_parquet,
            }[form]
            files = [output]
            rows = write(planned, output, content=content, dialect=dialect, progress=progress)
    if points == "ticks":
        tell_unplayed(planned, content.period)
        _tell_noise(setpoints.rounding_noise(planned, content=content, dialect=dialect))
    if as_json:
        names = [str(file) for file in files]
        click.echo(summary.text({"file": names[0], "files": names, "rows": rows}), nl=False)
    else:
        more = f" and {len(files) - 1} more files" if len(files) > 1 else ""
        click.echo(f"{files[0]}{more}: {rows} rows; {tables.verdict(planned)}", color=frame.color())
        if not quiet:
            click.echo(summary.CAUTION, err=True)
    frame.finish(met=all(finding.ok for finding in planned.check()))


def _form(output: Path, points: str) -> str:
    """Return the ending of the file to write.

    Raises
    ------
    InputError
        No such files are written.
    """
    form, allowed = output.suffix.lower(), FORMS[:1] if points == "pvt" else FORMS
    if form not in allowed:
        message = f'"{form}" is not written; {", ".join(allowed)} can be'
        raise InputError([Fault("", message, output)])
    return form


def _judge_split(dialect: Dialect, output: Path, form: str) -> None:
    """Refuse what would be left out in silence: only .csv tables are split."""
    if form != ".csv" and (dialect.axis_files or dialect.rows_a_file is not None):
        message = f"axis_files and rows_a_file are for .csv tables; this is {form}"
        raise InputError([Fault("", message, output)])


def _word(given: str | None, words: Iterable[Word], otherwise: Word) -> Word:
    """Return the word that is given, or another one."""
    return next((word for word in words if word == given), otherwise)


def _words(columns: str) -> tuple[str, ...]:
    return tuple(name.strip() for name in columns.split(",") if name.strip())


def _tell_noise(noises: Sequence[Noise]) -> None:
    """Say on stderr where rounding is large against a limit, and what makes it small."""
    for noise in noises:
        if noise.advice is not None:
            click.echo(f"note: {noise.axis} {noise.quantity}: {noise.advice}", err=True)
