"""How are views and curves of a plan laid out on a sheet of A4?

Places and sizes on the sheet are in inches, from its left and its top.
"""

from __future__ import annotations

import io
import math
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, Rectangle

from profileplan import wording
from profileplan.report.curves import AT_A_LIMIT
from profileplan.report.picture_rows import Curve, curves_of
from profileplan.report.picture_style import (
    INK,
    LARGE,
    LINE,
    PALE,
    PLAIN,
    SMALL,
    TINY,
    WARM,
    clean,
    number,
    shortened,
    style,
    ticked,
    width_of,
)
from profileplan.report.picture_views import Looks, draw_speeds, draw_view
from profileplan.report.scene import Scene
from profileplan.summary import CAUTION

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from matplotlib.artist import Artist
    from matplotlib.axes import Axes

    from profileplan.motion.polynomials import Array
    from profileplan.report.picture_views import View
    from profileplan.results import PlannedCycle

SHORT_SIDE, LONG_SIDE = 8.27, 11.69
"""Of A4 (ISO 216)."""

MARGIN, FOOT = 0.55, 0.62
"""Room left free at the sides and above, and what stands below the curves."""

MOST_STEPS, MOST_LINES = 400, 100
"""Steps that are drawn one by one, and those that have a line in every curve."""

ABREAST = 4
"""Most axes beside each other."""

SCALE = 0.42
"""Room for the numbers of a scale, left of it."""

VIEWS = {1: 3.4, 2: 2.3, 3: 1.3}
"""Height of the views, with so many blocks of curves below them."""

TOLD = 3
"""Most requirements not met that are told one by one."""

SEEN = 0.2
"""Share of a limit from which on a curve is shown with it; else the curve would be flat."""

THOUSANDS = 10_000
"""Numbers from here on are counted in thousands."""


class Place(NamedTuple):
    """A place on the sheet: its left and its upper edge, its width and height [inches]."""

    left: float
    top: float
    wide: float
    high: float


class Sheet(Figure):
    """A figure that a notebook shows, whichever way it shows figures."""

    def place(self, at: Place) -> Axes:
        """Return new axes at a place."""
        width, height = self.get_size_inches()
        return self.add_axes(
            (at.left / width, 1 - (at.top + at.high) / height, at.wide / width, at.high / height)
        )

    def write(self, at: tuple[float, float], text: str, size: float, color: str = INK) -> None:
        """Write a line of text, whose upper left corner is at a place."""
        width, height = self.get_size_inches()
        room = width - MARGIN - at[0]
        self.text(
            at[0] / width,
            1 - at[1] / height,
            shortened(text, size, room),
            fontsize=size,
            color=color,
            va="top",
        )

    def _repr_png_(self) -> bytes:
        """Return the picture for a notebook."""
        stream = io.BytesIO()
        with style():
            self.savefig(stream, format="png", dpi=110, metadata={"Software": None})
        return stream.getvalue()


def laid_out(planned: PlannedCycle) -> Sheet:
    """Return a sheet with views and curves of a plan.

    Parameters
    ----------
    planned : PlannedCycle
    """
    looks = Looks(Scene(planned))
    axes = planned.job.machine.axes
    blocks = math.ceil(len(axes) / ABREAST)
    upright = bool(looks.views) or blocks > 1
    size = (SHORT_SIDE, LONG_SIDE) if upright else (LONG_SIDE, SHORT_SIDE)
    sheet = Sheet(figsize=size)
    FigureCanvasAgg(sheet)
    top = _head(sheet, planned)
    if looks.views:
        top = _views(sheet, looks, top, VIEWS[blocks])
    top = _steps(sheet, planned, top)
    abreast = math.ceil(len(axes) / blocks)
    curves = curves_of(planned)
    panels = _panels(curves)
    each = (size[1] - FOOT - top) / blocks
    for block in range(blocks):
        place = Place(MARGIN, top + block * each, size[0] - 2 * MARGIN, each)
        chosen = slice(block * abreast, (block + 1) * abreast)
        columns = list(zip(planned.job.machine.axis_names, panels, strict=True))[chosen]
        _block(sheet, place, columns, (planned, abreast))
    _foot(sheet, curves, lines=bool(_breaks(planned)))
    return sheet


def _head(sheet: Sheet, planned: PlannedCycle) -> float:
    """Write what is planned, and how it is judged; return where that ends."""
    source = planned.job.cycle.source
    name = planned.job.machine.name
    top = MARGIN - 0.1
    sheet.write((MARGIN, top), f"{name}, {source.name}" if source else name, LARGE)
    findings = planned.check()
    told = f"{wording.verdict(planned)}; {wording.requirements(findings)}"
    sheet.write((MARGIN, top + 0.25), told, PLAIN)
    top += 0.43
    amiss = [finding for finding in findings if not finding.ok and finding.check != "cycle time"]
    for finding in amiss[:TOLD]:
        sheet.write((MARGIN, top), wording.amiss(finding), SMALL, WARM)
        top += 0.15
    if len(amiss) > TOLD:
        sheet.write((MARGIN, top), f"and {len(amiss) - TOLD} more not met", SMALL, WARM)
        top += 0.15
    return top


def _views(sheet: Sheet, looks: Looks, top: float, most: float) -> float:
    """Draw the views, and what their lines mean; return where that ends."""
    wide = float(sheet.get_size_inches()[0]) - 2 * MARGIN
    bottom = top
    for view, place, numbered in _arranged(looks.views, Place(MARGIN, top, wide, most)):
        axes = sheet.place(place)
        draw_view(axes, looks, view, (place.wide, place.high))
        if not numbered:
            axes.set_xlabel("")
            axes.tick_params(labelbottom=False)
        bottom = max(bottom, place.top + place.high)
    top = bottom + 0.36
    if looks.clearance:
        sheet.write((MARGIN, top), looks.clearance, SMALL, WARM)
        top += 0.17
    draw_speeds(sheet.place(Place(MARGIN, top + 0.12, 1.6, 0.08)), looks, 1.6)
    width, height = sheet.get_size_inches()
    handles = [handle for handle, _ in looks.legend]
    sheet.legend(
        handles,
        [label for _, label in looks.legend],
        loc="upper left",
        bbox_to_anchor=((MARGIN + 1.9) / width, 1 - top / height),
        ncols=4,
        borderaxespad=0.0,
        borderpad=0.2,
        columnspacing=1.6,
        handlelength=2.2,
    )
    return top + 0.45


def _arranged(views: Sequence[View], at: Place) -> Iterator[tuple[View, Place, bool]]:
    """Yield views with their places, and whether numbers stand below them.

    They are beside or below each other, whichever makes them larger.
    All are of one scale, but those that show deviations.
    """
    gap, head = SCALE + 0.1, 0.2
    own = [view for view in views if not view.magnified]
    wide = at.wide if len(own) == len(views) else 0.56 * at.wide
    widths = [view.size[0] for view in own]
    heights = [view.size[1] for view in own]
    beside = min((wide - gap * len(own)) / sum(widths), (at.high - head) / max(heights))
    stacked = min((wide - gap) / max(widths), (at.high - head * len(own)) / sum(heights))
    scale = max(beside, stacked)
    left, top = at.left + SCALE, at.top + head
    for view, width, height in zip(own, widths, heights, strict=True):
        place = Place(left, top, width * scale, height * scale)
        # Above another of the same width, its numbers are those below.
        yield view, place, beside >= stacked or view is own[-1]
        if beside >= stacked:
            left += place.wide + gap
        else:
            top += place.high + head
    for view in views:
        if view.magnified:
            room = at.wide - wide - gap
            fit = min(room / view.size[0], (at.high - head) / view.size[1])
            corner = at.left + wide + gap, at.top + head
            yield view, Place(*corner, view.size[0] * fit, view.size[1] * fit), True


def _steps(sheet: Sheet, planned: PlannedCycle, top: float) -> float:
    """Draw when each step is; return where that ends."""
    wide = float(sheet.get_size_inches()[0]) - 2 * MARGIN
    place = Place(MARGIN, top + 0.15, wide, 0.27)
    axes = sheet.place(place)
    axes.set(xlim=(0.0, planned.duration), ylim=(0.0, 1.0), yticks=[])
    axes.set_title("steps, s", loc="left", fontsize=SMALL, pad=2.0)
    ticked(axes.xaxis, 0.0, planned.duration, wide)
    lasting = [(n, step) for n, step in enumerate(planned.steps, start=1) if step.duration > 0]
    if len(lasting) > MOST_STEPS:
        _middle(axes, 0.5 * planned.duration, f"{len(planned.steps)} steps")
        return place.top + place.high + 0.22
    rooms = [step.duration / planned.duration * wide - 0.06 for _, step in lasting]
    # A few numbers among many steps would say nothing.
    fit = sum(width_of(str(n), TINY) <= room for (n, _), room in zip(lasting, rooms, strict=True))
    for turn, ((index, step), room) in enumerate(zip(lasting, rooms, strict=True)):
        color = "#f0f2f4" if turn % 2 else "#dfe4e8"
        axes.add_patch(Rectangle((step.start, 0.0), step.duration, 1.0, facecolor=color))
        text = _fitted(step.name, str(index) if 2 * fit > len(lasting) else "", room)
        _middle(axes, step.start + 0.5 * step.duration, text)
    return place.top + place.high + 0.22


def _middle(axes: Axes, at: float, text: str) -> None:
    """Write in the band of steps, round a time [s]."""
    if text:
        axes.text(at, 0.48, text, fontsize=TINY, ha="center", va="center", linespacing=1.05)


def _fitted(name: str, index: str, room: float) -> str:
    """Return a name in one line or two, or else a number, or nothing, as there is room [inches]."""
    name = clean(name)
    if width_of(name, TINY) <= room:
        return name
    words = name.split(" ")
    pairs = [(" ".join(words[:cut]), " ".join(words[cut:])) for cut in range(1, len(words))]
    widths = [max(width_of(line, TINY) for line in pair) for pair in pairs]
    if pairs and min(widths) <= room:
        return "\n".join(pairs[widths.index(min(widths))])
    return index if width_of(index, TINY) <= room else ""


class _Panel(NamedTuple):
    """A curve on its scale: what it spans, what a number counts, and what is said beside it."""

    curve: Curve
    low: float
    high: float
    scale: float
    aside: str


def _panels(curves: Sequence[Sequence[Curve]]) -> list[list[_Panel]]:
    """Return the panels of all axes. What is of one kind and unit has one scale of numbers."""
    ranges = [[_range(curve) for curve in own] for own in curves]
    greatest: dict[tuple[str, str], float] = {}
    for own, spans in zip(curves, ranges, strict=True):
        for curve, (low, high, _) in zip(own, spans, strict=True):
            key = curve.title, curve.unit
            greatest[key] = max(greatest.get(key, 0.0), -low, high)
    found = []
    for own, spans in zip(curves, ranges, strict=True):
        panels = []
        for curve, (low, high, out) in zip(own, spans, strict=True):
            scale = 1000.0 if greatest[curve.title, curve.unit] >= THOUSANDS else 1.0
            aside = "" if out is None else "no limit"
            if out is not None and math.isfinite(out):
                aside = f"limit {number(out / scale)}"
            panels.append(_Panel(curve, low, high, scale, aside))
        found.append(panels)
    return found


def _block(
    sheet: Sheet,
    at: Place,
    columns: Sequence[tuple[str, Sequence[_Panel]]],
    of: tuple[PlannedCycle, int],
) -> None:
    """Draw the curves of some axes beside each other; `of`: the plan, and room for how many."""
    planned, abreast = of
    wide = at.wide / abreast
    head, below = 0.17, 0.27
    last = planned.duration
    breaks = _breaks(planned)
    for column, (name, panels) in enumerate(columns):
        high = (at.high - below) / len(panels)
        for row, panel in enumerate(panels):
            left, top = at.left + column * wide + SCALE, at.top + row * high + head
            place = Place(left, top, wide - SCALE, high - head - 0.04)
            axes = sheet.place(place)
            axes.set_xlim(0.0, last)
            ticked(axes.xaxis, 0.0, last, place.wide)
            _draw_panel(axes, name, panel, place)
            axes.vlines(breaks, panel.low, panel.high, colors=LINE, linewidths=0.35, zorder=0.5)
            if row < len(panels) - 1:
                axes.tick_params(labelbottom=False)
            else:
                axes.set_xlabel("time, s", fontsize=TINY, labelpad=1.0)


def _breaks(planned: PlannedCycle) -> list[float]:
    """Return when steps begin [s], but the first; nothing where lines would hide the curves."""
    found = [step.start for step in planned.steps if step.duration > 0][1:]
    return found if len(found) <= MOST_LINES else []


def _draw_panel(axes: Axes, name: str, panel: _Panel, place: Place) -> None:
    """Draw a curve with its limits."""
    curve, unit = panel.curve, panel.curve.unit
    if panel.scale > 1:
        if unit.startswith("mm"):
            unit = unit.removeprefix("m")
        else:
            unit = "kW" if unit == "W" else f"1000 {unit}"
    axes.set_ylim(panel.low, panel.high)
    ticked(axes.yaxis, panel.low, panel.high, place.high, panel.scale)
    if panel.aside and not np.any(curve.values):
        axes.set_yticks([0.0])
    lettering = shortened(f"{name} {curve.title}, {unit}", SMALL, place.wide)
    axes.set_title(lettering, loc="left", fontsize=SMALL, pad=2.0)
    for limits, edge in ((curve.low, panel.low), (curve.high, panel.high)):
        if np.any((limits > panel.low) & (limits < panel.high)):
            times, corners = _corners(curve.times, limits)
            face, line = "#f3ece6", "#cdbfb3"
            axes.fill_between(
                times, corners, edge, facecolor=face, edgecolor=line, hatch="/////", lw=0.0
            )
            axes.plot(times, corners, color="#8c5a2b", lw=0.6)
    if panel.aside and width_of(lettering, SMALL) + width_of(panel.aside, TINY) < place.wide - 0.1:
        axes.set_title(panel.aside, loc="right", fontsize=TINY, pad=2.0, color=PALE)
    axes.plot(curve.times, curve.values, color=INK, lw=0.8, zorder=3, solid_joinstyle="round")
    above = curve.high - curve.values < curve.values - curve.low
    for held in (curve.held & above, curve.held & ~above):
        if np.any(held):
            values = np.where(held, curve.values, np.nan)
            axes.plot(curve.times, values, color=WARM, lw=2.2, zorder=2.5, solid_capstyle="round")
            # A limit that is reached for an instant has no line.
            alone = held & ~np.append(held[1:], False) & ~np.append(False, held[:-1])
            at = curve.times[alone], curve.values[alone]
            axes.plot(*at, color=WARM, marker="o", ms=2.2, mew=0.0, ls="none", zorder=2.5)


def _corners(times: Array, values: Array) -> tuple[Array, Array]:
    """Return a curve of level stretches without what lies inside of them."""
    changes = np.diff(values) != 0
    kept = np.concatenate([[True], changes]) | np.concatenate([changes, [True]])
    return times[kept], values[kept]


def _range(curve: Curve) -> tuple[float, float, float | None]:
    """Return what a scale spans, and a limit that is not within it."""
    least, most = float(curve.values.min()), float(curve.values.max())
    low, high = float(curve.low.min()), float(curve.high.max())
    outside = None
    if curve.title == "position":
        span = max(most - least, 1e-6 * max(abs(least), abs(most)), 1e-6)
        ends = [least, most]
        ends += [limit for limit in (low, high) if least - span <= limit <= most + span]
        least, most = min(ends), max(ends)
    else:
        greatest, limit = max(-least, most), max(-low, high)
        if greatest >= SEEN * limit:
            greatest = max(greatest, limit)
        else:
            outside = limit
        least, most = -greatest, greatest
    room = 0.12 * (most - least) or 1.0
    return least - room, most + room, outside


def _foot(sheet: Sheet, curves: Sequence[Sequence[Curve]], *, lines: bool) -> None:
    """Write what lines of curves mean, and what every reader must know."""
    width, height = sheet.get_size_inches()
    found: list[tuple[Artist, str]] = [
        (Line2D([], [], color=INK, lw=0.8), "motion"),
        (Patch(facecolor="#f3ece6", edgecolor="#cdbfb3", hatch="/////", lw=0.0), "beyond a limit"),
    ]
    if lines:
        found.append((Line2D([], [], color=LINE, lw=0.6), "a step begins"))
    if any(np.any(curve.held) for own in curves for curve in own):
        found.insert(1, (Line2D([], [], color=WARM, lw=2.2), AT_A_LIMIT))
    sheet.legend(
        [handle for handle, _ in found],
        [label for _, label in found],
        loc="upper left",
        bbox_to_anchor=(MARGIN / width, (FOOT - 0.06) / height),
        ncols=4,
        borderaxespad=0.0,
        borderpad=0.0,
        columnspacing=1.6,
        handlelength=2.2,
    )
    sheet.write((MARGIN, float(height) - 0.36), CAUTION, TINY, PALE)
