"""How does a plan become one page that shows all of it, by itself and without a network?

What is written, sorted and judged is HTML; curves and views are drawn in the browser by BokehJS,
which the page carries, from the plan's own polynomials. The same plan gives the same bytes.
"""

from __future__ import annotations

import json
import math
from importlib.resources import files
from importlib.util import find_spec
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from profileplan import __version__, setpoints, wording
from profileplan.errors import Fault, InputError
from profileplan.report import curves, extra, rows
from profileplan.report.facts import tiles
from profileplan.report.loads import LoadCurve, load_curves
from profileplan.report.scene import Scene
from profileplan.report.timeline import lanes, pace, ticks
from profileplan.summary import CAUTION

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from profileplan.motion.polynomials import Array
    from profileplan.results import PlannedCycle

SCRIPTS = ("bokeh.min.js", "bokeh-api.min.js")
"""The parts of BokehJS that the page carries."""


def missing() -> str:
    """Return how to get what makes the page, if it is not there; else nothing."""
    return extra.missing("bokeh", "jinja2")


def write_page(planned: PlannedCycle, file: Path | str, *, date: str | None = None) -> None:
    """Write a plan as one self-contained page, which is replaced when it is complete.

    Parameters
    ----------
    planned : PlannedCycle
    file : path
        The page to write, .html.
    date : str, optional
        What the page says of when it was made; None: nothing, so that it is always the same.

    Raises
    ------
    InputError
        The libraries that make it are missing, or the file cannot be written.
    """
    file = Path(file)
    if absent := missing():
        raise InputError([Fault("", f"the page needs more: {absent}", file)])
    with setpoints.replacing(file) as stream:
        stream.write(page(planned, date=date))


def page(planned: PlannedCycle, *, date: str | None = None) -> str:
    """Return the page as text."""
    from jinja2 import Environment  # noqa: PLC0415
    from markupsafe import Markup  # noqa: PLC0415

    own = files("profileplan.report")
    template = Environment(autoescape=True, trim_blocks=True).from_string(
        (own / "page.html").read_text(encoding="utf-8")
    )
    scene, loads = Scene(planned), load_curves(planned)
    data = json.dumps(_data(planned, scene, loads), ensure_ascii=False, allow_nan=False)
    scripts = [*_bokeh(), (own / "page.js").read_text(encoding="utf-8")]
    return template.render(
        **_facts(planned, scene, loads),
        date=date,
        version=__version__,
        caution=CAUTION,
        css=Markup((own / "page.css").read_text(encoding="utf-8")),  # noqa: S704 - our own file
        scripts=[Markup(script) for script in scripts],  # noqa: S704 - as installed
        # Nothing in the data can end the element that it stands in.
        data=Markup(data.replace("<", "\\u003c")),  # noqa: S704
    )


def _bokeh() -> Iterator[str]:
    """Yield the scripts of BokehJS, without loading the library in Python."""
    spec = find_spec("bokeh")
    places = spec.submodule_search_locations if spec else None
    for name in SCRIPTS:
        for place in places or ():
            yield (Path(place) / "server" / "static" / "js" / name).read_text(encoding="utf-8")


def _facts(planned: PlannedCycle, scene: Scene, loads: Sequence[LoadCurve]) -> dict[str, object]:
    """Return what the template says in words."""
    source, findings = planned.job.cycle.source, planned.check()
    reduced = []
    if curves.is_long(planned.trajectory):
        wide = planned.duration / curves.STRETCHES
        reduced.append(
            f"A long cycle: curves and values are the least and the greatest of every {wide:.3g} s."
        )
    if scene.sides and scene.times[-1] < planned.trajectory.duration:
        reduced.append(f"The views show the way of the first {scene.times[-1]:.3g} s.")
    return {
        "title": planned.job.machine.name,
        "source": str(source) if source else "cycle made in a program",
        "tiles": list(tiles(planned)),
        "amiss": [wording.amiss(finding) for finding in findings if not finding.ok],
        "lanes": list(lanes(planned, scene)),
        "ticks": list(ticks(planned.duration)),
        "duration": repr(planned.duration),
        "step": f"{pace(planned):.6g}",
        "magnifications": scene.magnifications,
        "sides": [{"name": side.name, "label": side.label} for side in scene.sides],
        "drawn": bool(scene.drawn),
        "band": any(own.tolerance for own in scene.drawn),
        "keepouts": bool(scene.keepouts),
        "meeting": "" if scene.meeting is None else scene.meeting.what,
        "speed_unit": "mm/s along the linear axes",
        "reduced": " ".join(reduced),
        "at_a_limit": curves.AT_A_LIMIT,
        "long": curves.is_long(planned.trajectory),
        "axes": [
            {
                "name": axis.name,
                "index": index,
                "rows": [
                    *curves.QUANTITIES,
                    *(own.name for own in loads if own.axis == index),
                ],
            }
            for index, axis in enumerate(planned.job.machine.axes)
        ],
        "tables": list(rows.all_tables(planned)),
        "notes": planned.notes,
    }


def _data(planned: PlannedCycle, scene: Scene, loads: Sequence[LoadCurve]) -> dict[str, object]:
    """Return what the page's script needs, as plain values."""
    machine = planned.job.machine
    return {
        "duration": planned.duration,
        "at_limit": curves.AT_LIMIT,
        "standing": curves.STANDING,
        "axes": [
            {
                "name": axis.name,
                "kind": axis.kind,
                "unit": axis.unit,
                "travel": list(axis.travel),
                "limits": {
                    name: value if math.isfinite(value) else None
                    for name, value in axis.limits._asdict().items()
                },
            }
            for axis in machine.axes
        ],
        "motion": curves.packed(planned.trajectory),
        "loads": [
            {
                "axis": own.axis,
                "name": own.name,
                "unit": own.unit,
                "limit": own.limit,
                "times": curves.text(own.times),
                "values": curves.text(own.values, "<f4"),
            }
            for own in loads
        ],
        "steps": [
            {"name": step.name, "start": step.start, "end": step.end} for step in planned.steps
        ],
        **_space(scene),
    }


def _space(scene: Scene) -> dict[str, object]:
    """Return what is seen in space, as plain values."""
    if not scene.sides:
        return {"sides": [], "columns": [None, None, None], "drawn": [], "hanging": []}
    # Far from 0, single precision is good enough only from a corner of what is seen.
    low = scene.extent[0]
    return {
        "sides": [side._asdict() for side in scene.sides],
        "columns": list(scene.columns),
        "extent": scene.extent.tolist(),
        "track": {
            "times": curves.text(scene.times),
            # Of polynomials the page knows them.
            "points": curves.text(scene.seen(scene.planned.trajectory.at(scene.times)) - low, "<f4")
            if curves.is_long(scene.planned.trajectory)
            else None,
            "feet": None
            if np.isnan(scene.feet).all()
            else curves.text(scene.feet - low[:2], "<f4"),
            "classes": curves.text(scene.speed_classes(scene.times), "u1"),
            "most": scene.top_speed,
        },
        "drawn": [{"step": own.step, "line": curves.text(own.line, "<f4")} for own in scene.drawn],
        "bands": {
            str(factor): [[_corners(ring) for ring in part] for part in scene.bands(factor)]
            for factor in scene.magnifications
        },
        "keepouts": [
            {
                "name": own.name,
                "outlines": [_corners(outline) for outline in own.outlines],
                "top": own.top,
            }
            for own in scene.keepouts
        ],
        "tool": None if scene.tool is None else _corners(scene.tool),
        "hanging": [
            {
                "start": own.start,
                "end": own.end,
                "outline": None if own.outline is None else _corners(own.outline),
                "below": own.below,
            }
            for own in scene.hanging
        ],
        "meeting": _meeting(scene),
    }


def _meeting(scene: Scene) -> dict[str, object] | None:
    own = scene.meeting
    if own is None:
        return None
    return {
        "time": own.time,
        "label": f"{wording.short(own.value, 4)} mm",
        "gap": own.gap.tolist(),
        "heights": None if own.heights is None else list(own.heights),
    }


def _corners(points: Array) -> list[list[float]]:
    """Return points rounded to what a picture can show: a thousandth of a mm."""
    rounded: list[list[float]] = (np.round(points, 3) + 0.0).tolist()
    return rounded
