"""The command on drawings: outline."""

from __future__ import annotations

import itertools
from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

import click

from profileplan.cli import frame, tables

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator

    from profileplan.geometry.listing import Listing

SHOWN = 40
"""Most outlines in the table; JSON has all."""

SHOWN_FAULTS = 20
"""Most gaps, overlaps and the like in each of their tables."""

SOURCES = {
    "drawing": "as the drawing says",
    "measurement": "by the drawing's system of measurement",
    "given": "as given",
    "none": "taken, for the drawing says none",
}
"""Who says what the unit is, in words."""


class _Columns(NamedTuple):
    """Headings of a table: those of text, and all."""

    heads: tuple[str, ...]
    text: tuple[str, ...]


LAYERS = _Columns(("layer", "entities", "left out", "outlines", "length mm"), ("layer",))
OUTLINES = _Columns(
    (
        *("#", "layer", "form", "length mm", "pieces", "least r mm"),
        *("starts at x, y mm", "begins with"),
    ),
    ("layer", "form", "begins with"),
)
GAPS = _Columns(("layer", "x mm", "y mm", "width mm", "gap"), ("layer", "gap"))
OVERLAPS = _Columns(
    ("layer", "drawn twice", "length mm", "covered by"), ("layer", "drawn twice", "covered by")
)
BRANCHES = _Columns(("layer", "x mm", "y mm", "ends that meet"), ("layer",))
SKIPPED = _Columns(("count", "left out", "layer", "reason"), ("left out", "layer", "reason"))


@frame.cli.command()
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--layer", "layers", multiple=True, help="Read this layer; may be repeated.")
@click.option("--unit", help="The drawing's unit, whatever it says itself: mm, inch, ...")
@click.option(
    "--joining",
    type=frame.Measure("length"),
    default=0.01,
    show_default=True,
    help="Join ends that are so near, mm or with unit.",
)
@click.option("--space", default="model", show_default=True, help='"model", or a layout\'s name.')
@click.option(
    "--hidden", is_flag=True, help="Read what is frozen, off, unplotted or invisible too."
)
@click.option("--hatches", is_flag=True, help="Read the boundaries of hatches too.")
@click.option(
    "--order",
    type=click.Choice(["drawn", "shortest"]),
    default="drawn",
    show_default=True,
    help="Outlines as drawn, or with short ways between them.",
)
@click.option(
    "--inside-first", is_flag=True, help="What lies inside of an outline comes before it."
)
@frame.as_json
@click.option("-q", "--quiet", is_flag=True, help="Print what is found in one line.")
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, dir_okay=False),
    help="A picture to write (.svg): outlines, their order, gaps.",
)
def outline(  # noqa: PLR0913 - one parameter an option
    *,
    file: Path,
    layers: tuple[str, ...],
    unit: str | None,
    joining: float,
    space: str,
    hidden: bool,
    hatches: bool,
    order: str,
    inside_first: bool,
    as_json: bool,
    quiet: bool,
    output: Path | None,
) -> None:
    """Tell what is to be followed in a drawing.

    FILE is a drawing (.dxf). Lines, arcs and curves are joined into outlines, wherever their ends
    meet; told are layers, outlines, gaps between ends, what is drawn twice, and what is left out
    and why. A trace step of a cycle follows the same outlines.

    \b
    Examples:
      profileplan outline samples/sealant-portal/gasket.dxf
      profileplan outline samples/sealant-portal/gasket.dxf -o gasket.svg
      profileplan outline gasket.dxf --layer BEAD --order shortest --json

    Ends that are farther apart than --joining but within 1 mm are told as gaps left open.

    \b
    Exit status:
      0  at least one outline is found
      1  there is nothing to follow
      2  bad input
    """  # noqa: D301 - click's mark for lines to keep as they are
    from profileplan.geometry.drawing import Reading, read_drawing  # noqa: PLC0415
    from profileplan.geometry.listing import listing  # noqa: PLC0415

    if output is not None:
        frame.keep([file], output)
    reading = Reading(layers=layers or None, unit=unit, space=space, hidden=hidden, hatches=hatches)
    found = listing(
        read_drawing(file, reading),
        joining=joining,
        shortest=order == "shortest",
        inside_first=inside_first,
    )
    if output is not None and found.outlines:
        _write_picture(found, output)
    for note in found.notes:
        click.echo(f"note: {note}", err=True)
    if as_json:
        from profileplan import summary  # noqa: PLC0415

        click.echo(summary.text(found.values()), nl=False)
    elif quiet:
        click.echo(found.brief)
    else:
        click.echo("\n\n".join(_parts(found)), color=frame.color())
    if output is not None:
        told = (
            f"wrote {output}" if found.outlines else f"{output} is not written: it would be empty"
        )
        click.echo(told, err=True)
    frame.finish(met=bool(found.outlines))


def _write_picture(found: Listing, output: Path) -> None:
    from profileplan import setpoints  # noqa: PLC0415
    from profileplan.geometry.picture import picture  # noqa: PLC0415

    # Complete before the file is touched.
    text = picture(found)
    with setpoints.replacing(output) as stream:
        stream.write(text)


def _parts(found: Listing) -> Iterator[str]:
    """Yield what is shown of a drawing, table by table."""
    scale = "" if found.unit == "mm" else f" of {found.scale:.10g} mm"
    yield f"{found.file}, unit {found.unit}{scale}, {SOURCES[found.unit_source]}"
    yield from _layers(found)
    if found.outlines:
        yield _outlines(found)
    yield from _faults(found)
    if found.skipped:
        rows = ([str(s.count), _clean(s.kind), _clean(s.layer), s.reason] for s in found.skipped)
        yield _listed(SKIPPED, rows, len(found.skipped))
    yield f"{found.brief}\n{_more(found)}" if found.outlines else tables.bad("NOTHING TO FOLLOW")


def _more(found: Listing) -> str:
    """Return how long the ways between outlines are, and how exact curves."""
    travel = f"{found.travel:.1f} mm between outlines"
    if not found.error:
        return travel
    return f"{travel}; curves are followed within {found.error:.2g} mm"


def _layers(found: Listing) -> Iterator[str]:
    used = [layer for layer in found.layers if layer.entities or layer.skipped]
    rows = [
        [
            _clean(layer.name),
            str(layer.entities),
            str(layer.skipped),
            str(layer.outlines),
            f"{layer.length:.3f}",
        ]
        for layer in used
    ]
    if rows:
        yield _listed(LAYERS, rows, len(rows), most=SHOWN)


def _outlines(found: Listing) -> str:
    rows = (
        [
            str(row.number),
            _clean(row.layer),
            "closed" if row.closed else "open",
            f"{row.length:.3f}",
            str(row.pieces),
            "" if row.smallest_radius is None else f"{row.smallest_radius:.3f}",
            ", ".join(_coordinates(row.start)),
            _clean(f"{row.handle} {row.kind}"),
        ]
        for row in found.outlines
    )
    return _listed(OUTLINES, rows, len(found.outlines), most=SHOWN)


def _faults(found: Listing) -> Iterator[str]:
    """Yield tables of what is wrong with a drawing."""
    if found.gaps:
        # What is left open first: it is what a user must mend.
        gaps = sorted(found.gaps, key=lambda gap: gap.joined)
        rows = (
            [
                _clean(gap.layer),
                *_coordinates(gap.position),
                f"{gap.width:.3g}",
                "joined" if gap.joined else tables.bad("LEFT OPEN"),
            ]
            for gap in gaps
        )
        yield _listed(GAPS, rows, len(gaps))
    if found.overlaps:
        rows = (
            [
                _clean(lap.layer),
                _clean(f"{lap.handle} {lap.kind}"),
                f"{lap.length:.3f}",
                _clean(lap.covered_by),
            ]
            for lap in found.overlaps
        )
        yield _listed(OVERLAPS, rows, len(found.overlaps))
    if found.branches:
        rows = (
            [_clean(branch.layer), *_coordinates(branch.position), str(branch.ends)]
            for branch in found.branches
        )
        yield _listed(BRANCHES, rows, len(found.branches))


def _clean(name: str) -> str:
    """Return a drawing's name without what would steer the terminal."""
    return "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in name)


def _coordinates(position: tuple[float, float]) -> list[str]:
    # What rounds to zero is zero: no "-0.000".
    return [f"{round(value, 3) + 0.0:.3f}" for value in position]


def _listed(
    columns: _Columns,
    rows: Iterable[list[str]],
    count: int,
    *,
    most: int = SHOWN_FAULTS,
) -> str:
    """Return a table of the first rows, and how many more there are."""
    shown = tables.table(columns.heads, list(itertools.islice(rows, most)), text=columns.text)
    return shown if count <= most else f"{shown}\n… and {count - most} more; --json lists all"
