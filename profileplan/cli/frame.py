"""What do all commands share: the group, errors as messages, progress, kinds of options?

Results go to stdout, talk to stderr. Exit status 0: fine; 1: planned or checked, and a requirement
is not met, or nothing was found; 2: bad input, or a job that cannot be planned.
"""

from __future__ import annotations

import contextlib
import os
import signal
import sys
import time
from importlib import import_module
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn, TypeVar

import click

from profileplan import __version__
from profileplan.errors import Fault, InputError, ProfileplanError

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable
    from typing import Self

FC = TypeVar("FC", bound="Callable[..., object] | click.Command")
"""What an option is put to."""

REQUIREMENT_NOT_MET = 1
INTERRUPTED = 130
OUTPUT_LOST = 141
"""As a shell counts a process that an interrupt, or a closed pipe, has ended."""

PROGRESS_AFTER = 1.0
"""Time [s] before progress is shown."""


HOMES = {
    "plan": "jobs",
    "check": "jobs",
    "export": "exports",
    "outline": "drawings",
    "plot": "pictures",
}
"""Commands, as help lists them → the modules that add them to the group."""


class Commands(click.Group):
    """Loads a command when it is called, and turns this project's errors into a message."""

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002 - click's interface
        """Return the names of all commands."""
        return list(HOMES)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """Return a command; its module adds it."""
        if cmd_name in HOMES:
            import_module(f"profileplan.cli.{HOMES[cmd_name]}")
        return super().get_command(ctx, cmd_name)

    def invoke(self, ctx: click.Context) -> object:
        """Run a command."""
        try:
            return super().invoke(ctx)
        except ProfileplanError as error:
            click.echo(_lines(error), err=True, color=color())
            ctx.exit(error.exit_status)
        except KeyboardInterrupt:
            click.echo("interrupted; no file is half-written", err=True)
            ctx.exit(INTERRUPTED)
        except OSError as error:
            # Whoever reads the output has closed it, or it has no room: what is still to be
            # written at the end goes nowhere.
            with contextlib.suppress(OSError):
                os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            if not isinstance(error, BrokenPipeError):
                click.echo(f"error: output cannot be written: {error.strerror}", err=True)
            ctx.exit(OUTPUT_LOST)


class Measure(click.ParamType[float]):
    """A number in the program's units, or text with a unit: "0.8 m/s", "250 us"."""

    def __init__(self, name: str) -> None:
        self.name = name

    def convert(
        self, value: object, param: click.Parameter | None, ctx: click.Context | None
    ) -> float:
        """Return the number, or end with what is wrong with it."""
        from profileplan.inputs.quantities import Quantity, parse_quantity  # noqa: PLC0415

        if isinstance(value, float):
            return value
        try:
            return parse_quantity(_number(str(value)), Quantity[self.name.upper()])
        except ValueError as error:
            self.fail(str(error), param, ctx)


class Progress:
    """Shows on a terminal's stderr how far a task of more than a second is."""

    def __init__(self, task: str, *, wanted: bool) -> None:
        self._task = task
        self._wanted = wanted and sys.stderr.isatty()
        self._due = time.monotonic() + PROGRESS_AFTER
        self._shown = False

    def __call__(self, done: float, total: int) -> None:
        """Take note of how much is done."""
        if self._wanted and time.monotonic() >= self._due:
            self._due = time.monotonic() + 0.1
            self._shown = True
            click.echo(f"\r{self._task} {100 * done / total:3.0f} %", err=True, nl=False)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        if self._shown:
            click.echo("\r" + " " * (len(self._task) + 6) + "\r", err=True, nl=False)


@click.group(cls=Commands, context_settings={"help_option_names": ["-h", "--help"]})
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
      1  planned or checked, and a requirement is not met; a drawing with nothing to follow
      2  bad input, or a job that cannot be planned
    """  # noqa: D301 - click's mark for lines to keep as they are


source = click.argument("source", type=click.Path(path_type=Path))
machine = click.option(
    "-m",
    "--machine",
    type=click.Path(path_type=Path),
    help="Machine file; needed for a .csv or .dxf, else in place of the one in the cycle file.",
)


def output(help_text: str) -> Callable[[FC], FC]:
    """Return the option that names the file to write."""
    return click.option(
        "-o",
        "--output",
        type=click.Path(path_type=Path, dir_okay=False),
        required=True,
        help=help_text,
    )


speed = click.option(
    "--speed",
    type=Measure("velocity"),
    help="Highest speed along a .csv path or a .dxf drawing, mm/s or with unit.",
)
tolerance = click.option(
    "--tolerance",
    type=Measure("length"),
    help="Tolerance of a .csv path or a .dxf drawing, mm or with unit.",
)
as_json = click.option("--json", "as_json", is_flag=True, help="Print JSON instead of tables.")
quiet = click.option("-q", "--quiet", is_flag=True, help="Print the verdict alone, in one line.")


def main() -> NoReturn:
    """Run the command line and exit with its status."""
    # A request to end is an interrupt: what is half-written is taken away.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    cli.main(prog_name="profileplan")
    raise SystemExit


def color() -> bool | None:
    """Return whether to colour: not where NO_COLOR is set, else where there is a terminal."""
    return False if os.environ.get("NO_COLOR") else None


def finish(*, met: bool) -> None:
    """End with the exit status of a result."""
    if not met:
        click.get_current_context().exit(REQUIREMENT_NOT_MET)


def keep(sources: Iterable[Path | None], *outputs: Path) -> None:
    """Refuse to write over what is read."""
    taken = {os.path.realpath(file) for file in sources if file is not None}
    for output in outputs:
        if os.path.realpath(output) in taken:
            message = "the job is read from this file; choose another to write to"
            raise InputError([Fault("", message, output)])


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
