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

SHORTEST = 1e-3
"""Share of the cycle below which a step of many has no block of its own in the timeline."""

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
    lanes, left_out = _lanes(planned, scene)
    reduced = ""
    if planned.trajectory.coefficients.size > curves.MOST_NUMBERS:
        wide = planned.duration / curves.STRETCHES
        reduced = (
            f"A long cycle: curves show the least and the greatest value of every {wide:.3g} s."
        )
    return {
        "title": planned.job.machine.name,
        "source": str(source) if source else "cycle made in a program",
        "tiles": list(_tiles(planned)),
        "amiss": [wording.amiss(finding) for finding in findings if not finding.ok],
        "lanes": lanes,
        "left_out": left_out,
        "ticks": list(_ticks(planned.duration)),
        "duration": repr(planned.duration),
        "step": f"{max(planned.job.machine.setpoints.period, planned.duration / 100_000):.6g}",
        "magnifications": scene.magnifications,
        "sides": [{"name": side.name, "label": _label(side.name)} for side in scene.sides],
        "drawn": bool(scene.drawn),
        "band": any(own.tolerance for own in scene.drawn),
        "keepouts": bool(scene.keepouts),
        "meeting": "" if scene.meeting is None else scene.meeting.what,
        "speed_unit": "mm/s along the linear axes",
        "reduced": reduced,
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


def _time(planned: PlannedCycle) -> Tile:
    figure, target = f"{planned.duration:.3f} s", planned.target
    if target is None:
        return Tile("Cycle time", figure, "no target given")
    apart = f"{abs(target - planned.duration):.3f} s"
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
        f"10 % more would save {first.limit.saves:.3f} s ({100 * share:.1f} % of the cycle)",
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


def _lanes(planned: PlannedCycle, scene: Scene) -> tuple[list[Lane], str]:
    """Return the rows of the timeline, and what is said of steps that have no block."""
    whole = planned.duration or 1.0

    def block(mark: str, kind: str, text: str, start: float, end: float) -> Block:
        left, width = 100 * start / whole, 100 * (end - start) / whole
        return Block(mark, kind, text, start, end, f"{left:.4f}", f"{width:.4f}")

    shortest = SHORTEST * whole if len(planned.steps) > rows.MOST_STEPS else 0.0
    steps = []
    asked = planned.job.cycle.steps
    for index, step in enumerate(planned.steps):
        if step.duration > shortest:
            kind = "wait" if isinstance(asked[index], Wait) else "step"
            steps.append(block(rows.step_mark(index), kind, step.name, step.start, step.end))
    lanes = [Lane("steps", steps)]
    for number, name in enumerate(planned.signals):
        on = [
            block(f"signal-{number}-{turn}", "on", name, *times)
            for turn, times in enumerate(_on(planned, name))
        ]
        lanes.append(Lane(name, on))
    held = [
        block(f"payload-{turn}", "held", _held_text(own.mass), own.start, own.end)
        for turn, own in enumerate(scene.hanging)
    ]
    if held:
        lanes.append(Lane("payload", held))
    short = sum(step.duration > 0 for step in planned.steps) - len(steps)
    return lanes, f"{short} steps below {shortest:.3g} s are not shown." if short else ""


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
    return {
        "sides": [side._asdict() for side in scene.sides],
        "columns": list(scene.columns),
        "extent": scene.extent.tolist(),
        "track": {
            "times": curves.text(scene.times),
            "feet": curves.text(scene.feet, "<f4"),
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
