"""How does a plan become one page that shows all of it, by itself and without a network?

What is written, sorted and judged is HTML; curves and views are drawn in the browser by BokehJS,
which the page carries, from the plan's own polynomials. The same plan gives the same bytes.
"""

from __future__ import annotations

import json
import math
from importlib.resources import files
from importlib.util import find_spec
from itertools import groupby
from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan import __version__, setpoints, wording
from profileplan.checks.findings import MOTOR_CHECKS
from profileplan.errors import Fault, InputError
from profileplan.inputs import Wait
from profileplan.report import curves, rows
from profileplan.report.loads import LoadCurve, load_curves
from profileplan.report.scene import Scene
from profileplan.summary import CAUTION

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from profileplan.checks import Finding
    from profileplan.motion.polynomials import Array
    from profileplan.results import PlannedCycle

SCRIPTS = ("bokeh.min.js", "bokeh-api.min.js")
"""The parts of BokehJS that the page carries."""

NEEDED = ("bokeh", "jinja2")
"""Libraries that make the page."""

HOW_TO_GET = "pip install 'profileplan[report]'"

MOST_BLOCKS = 400
"""Blocks of a row of the timeline; of more, those that are near each other are drawn as one."""

SHORT = 0.0095
"""Times below would be a few milliseconds."""

TICKS = 8
"""About so many times are written under the timeline."""


class Tile(NamedTuple):
    """A fact of the first screen: heading, number, a line below, "good", "bad" or "" with its sign.

    ``share`` of what is allowed, None where there is none; ``bar`` is it in percent, at most 100.
    """

    head: str
    figure: str
    text: str
    state: str = ""
    share: float | None = None

    @property
    def sign(self) -> str:
        """What tells of the state without colour."""
        return {"good": "✓", "bad": "✕"}.get(self.state, "")

    @property
    def bar(self) -> float:
        """The share in percent, at most 100."""
        return min(100 * (self.share or 0.0), 100.0)


class Block(NamedTuple):
    """A stretch of time in the timeline.

    mark : by what name it is known in the page; kind : "step", "wait", "on" or "held"; start, end
    [s]; left, width : where it is drawn, in percent.
    """

    mark: str
    kind: str
    text: str
    start: float
    end: float
    left: str
    width: str

    @property
    def label(self) -> str:
        """What is read aloud."""
        return f"{self.text}, {self.start:.3f} to {self.end:.3f} s"


class Lane(NamedTuple):
    """A row of the timeline."""

    name: str
    blocks: Sequence[Block]


def missing() -> str:
    """Return how to get what makes the page, if it is not there; else nothing."""
    absent = [name for name in NEEDED if find_spec(name) is None]
    return f"{' and '.join(absent)} not found: {HOW_TO_GET}" if absent else ""


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
        "tiles": list(_tiles(planned)),
        "amiss": [wording.amiss(finding) for finding in findings if not finding.ok],
        "lanes": list(lanes(planned, scene)),
        "ticks": list(_ticks(planned.duration)),
        "duration": repr(planned.duration),
        "step": f"{_step(planned):.6g}",
        "magnifications": scene.magnifications,
        "sides": [{"name": side.name, "label": _label(side.name)} for side in scene.sides],
        "drawn": bool(scene.drawn),
        "band": any(own.tolerance for own in scene.drawn),
        "keepouts": bool(scene.keepouts),
        "meeting": "" if scene.meeting is None else scene.meeting.what,
        "speed_unit": "mm/s along the linear axes",
        "reduced": " ".join(reduced),
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


def _label(side: str) -> str:
    return {"plan": "Seen from above", "side": "Seen from the side"}[side]


def _tiles(planned: PlannedCycle) -> Iterator[Tile]:
    """Yield the facts of the first screen."""
    findings = planned.check()
    failed = [finding for finding in findings if not finding.ok]
    if failed:
        yield Tile(
            "Can it be done?",
            f"No: {len(failed)} of {len(findings)} not met",
            "; ".join(wording.required(finding) for finding in failed[:3]),
            "bad",
        )
    else:
        yield Tile("Can it be done?", "Yes", wording.requirements(findings), "good")
    yield _time(planned)
    yield _held(planned)
    yield _clearance(findings)
    yield _motor(findings)


def _step(planned: PlannedCycle) -> float:
    """Return by how much an arrow key shifts the time [s]: a tick of the setpoints, or more."""
    duration = planned.duration
    return min(max(planned.job.machine.setpoints.period, duration / 100_000), duration / 100) or 1.0


def _seconds(time: float) -> str:
    """Return a time to the millisecond, and a short one in four digits."""
    return f"{time:.3f} s" if time >= SHORT else f"{time:.4g} s"


def _time(planned: PlannedCycle) -> Tile:
    figure, target = _seconds(planned.duration), planned.target
    if target is None:
        return Tile("Cycle time", figure, "no target given")
    apart = _seconds(abs(target - planned.duration))
    told = f"{apart} to spare" if planned.meets_target else f"{apart} too long"
    share = planned.duration / target
    state = "good" if planned.meets_target else "bad"
    return Tile(
        "Cycle time",
        figure,
        f"target {target:g} s, {told} ({100 * share:.1f} % of it)",
        state,
        share,
    )


def _held(planned: PlannedCycle) -> Tile:
    levers = [own for own in planned.levers if own.limit.quantity != "time"]
    if not levers:
        return Tile("What limits it", "times asked for", "no limit holds a step back")
    first = levers[0]
    share = first.limit.saves / planned.duration if planned.duration else 0.0
    return Tile(
        "What limits it",
        wording.lever(first.limit),
        f"10 % more would save {_seconds(first.limit.saves)} ({100 * share:.1f} % of the cycle)",
    )


def _clearance(findings: Sequence[Finding]) -> Tile:
    head = "Smallest clearance"
    finding = next((own for own in findings if own.check == "clearance"), None)
    if finding is None:
        return Tile(head, "not judged", "the machine file has no keep-outs")
    margin = wording.short(round(finding.margin, 6), 3)
    told = (
        f"{wording.short(finding.limit, 4)} mm kept, margin {margin} mm; "
        f"{finding.what}, {wording.at(finding)}"
    )
    return Tile(
        head, f"{wording.short(finding.value, 4)} mm", told, "good" if finding.ok else "bad"
    )


def _motor(findings: Sequence[Finding]) -> Tile:
    head = "Tightest motor"
    motors = [own for own in findings if own.check in MOTOR_CHECKS and own.use is not None]
    if not motors:
        return Tile(head, "not judged", "the machine file says nothing of motors")
    worst = max(motors, key=lambda own: own.use or 0.0)
    told = (
        f"{wording.required(worst)}: {wording.short(worst.value, 4)} of "
        f"{wording.short(worst.limit, 4)} {worst.unit}, margin {wording.short(worst.margin, 3)}"
    )
    share = worst.use or 0.0
    return Tile(head, f"{100 * share:.0f} %", told, "good" if worst.ok else "bad", share)


def lanes(planned: PlannedCycle, scene: Scene) -> Iterator[Lane]:
    """Yield the rows of the timeline."""
    whole = planned.duration or 1.0

    def block(mark: str, kind: str, text: str, times: tuple[float, float]) -> Block:
        left, width = 100 * times[0] / whole, 100 * (times[1] - times[0]) / whole
        return Block(mark, kind, text, *times, f"{left:.4f}", f"{width:.4f}")

    def lane(name: str, blocks: list[Block]) -> Lane:
        if len(blocks) <= MOST_BLOCKS:
            return Lane(name, blocks)
        fused = []
        for _, group in groupby(blocks, lambda own: int(own.start / whole * MOST_BLOCKS)):
            first, *more = group
            last = more[-1] if more else first
            kind = first.kind if all(own.kind == first.kind for own in more) else "step"
            text = first.text if first.text == last.text else f"{first.text} … {last.text}"
            fused.append(block(first.mark, kind, text, (first.start, last.end)))
        return Lane(name, fused)

    asked = planned.job.cycle.steps
    steps = [
        block(
            rows.step_mark(index),
            "wait" if isinstance(asked[index], Wait) else "step",
            step.name,
            (step.start, step.end),
        )
        for index, step in enumerate(planned.steps)
        if step.duration > 0
    ]
    yield lane("steps", steps)
    for number, name in enumerate(planned.signals):
        times = enumerate(_on(planned, name))
        yield lane(name, [block(f"signal-{number}-{turn}", "on", name, own) for turn, own in times])
    held = [
        block(f"payload-{turn}", "held", _held_text(own.mass), (own.start, own.end))
        for turn, own in enumerate(scene.hanging)
    ]
    if held:
        yield lane("payload", held)


def _held_text(mass: float) -> str:
    return f"{mass:g} kg" if mass else "part"


def _on(planned: PlannedCycle, name: str) -> Iterator[tuple[float, float]]:
    """Yield from when to when a signal is on [s]."""
    start: float | None = None
    for event in planned.events:
        if event.signal != name:
            continue
        if event.state and start is None:
            start = event.time
        elif not event.state and start is not None:
            yield start, event.time
            start = None
    if start is not None:
        yield start, planned.duration


def _ticks(duration: float) -> Iterator[dict[str, str]]:
    """Yield round times and where they stand in percent."""
    if duration <= 0:
        return
    raw = duration / TICKS
    decade = 10.0 ** math.floor(math.log10(raw))
    spacing = next(factor * decade for factor in (1, 2, 5, 10) if factor * decade >= raw)
    # The last time would stand out of the page if it were at its very end.
    for number in range(int(0.985 * duration / spacing) + 1):
        yield {"left": f"{100 * number * spacing / duration:.4f}", "text": f"{number * spacing:g}"}


def _data(planned: PlannedCycle, scene: Scene, loads: Sequence[LoadCurve]) -> dict[str, object]:
    """Return what the page's script needs, as plain values."""
    machine = planned.job.machine
    return {
        "duration": planned.duration,
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
