"""The command that draws a plan: plot."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from profileplan.cli import frame, tables
from profileplan.cli.jobs import job_of, planned_of

if TYPE_CHECKING:
    from pathlib import Path


@frame.cli.command()
@frame.source
@frame.machine
@frame.output("The picture to write, .png, .svg or .pdf; replaced when complete.")
@frame.speed
@frame.tolerance
@frame.quiet
def plot(
    *,
    source: Path,
    machine: Path | None,
    output: Path,
    speed: float | None,
    tolerance: float | None,
    quiet: bool,
) -> None:
    """Draw a plan as a static picture of A4, for documents.

    SOURCE is a cycle file (.toml), or with -m a waypoint file (.csv) or a drawing (.dxf).

    \b
    Examples:
      profileplan plot samples/kiln-loader/cycle.toml -o picture.pdf
      profileplan plot samples/sealant-portal/gasket.toml -o gasket.svg
      profileplan plot points.csv -m machine.toml --tolerance 2 -o points.png

    It shows the motion from above and from the side: the wider a line, the faster; keep-outs, tool
    and parts; the smallest clearance; and how far from a path or a drawing the motion is. Below
    are position, velocity, acceleration and jerk of every axis, with limits, marked where they are
    reached. The same plan always makes the same file.

    Pictures need matplotlib: pip install 'profileplan[report]'.
    """  # noqa: D301 - click's mark for lines to keep as they are
    from profileplan.report import pictures  # noqa: PLC0415

    pictures.judge(output)
    job = job_of(source, machine, speed, tolerance)
    frame.keep(job.files, output)
    planned = planned_of(job, talk=not quiet)
    findings = planned.check()
    pictures.write_picture(planned, output)
    click.echo(tables.verdict(planned), color=frame.color())
    if not quiet:
        click.echo(tables.requirements(findings), color=frame.color())
        click.echo(f"wrote {output}", err=True)
    frame.finish(met=all(finding.ok for finding in findings))
