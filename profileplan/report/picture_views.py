"""What does a plan look like in space, on paper: from above, from the side, and in its tolerance?

Lengths of what is seen are in mm, sizes on paper in inches, widths of lines and text in points.
Speed is told by width as well as by colour.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from typing import TYPE_CHECKING, NamedTuple

import matplotlib as mpl
import numpy as np
import shapely
from matplotlib.collections import LineCollection
from matplotlib.lines import Line2D
from matplotlib.patches import PathPatch, Polygon
from matplotlib.path import Path

from profileplan.report.picture_style import (
    INK,
    PALE,
    SMALL,
    TINY,
    WARM,
    clean,
    number,
    shortened,
    ticked,
    width_of,
)

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from matplotlib.artist import Artist
    from matplotlib.axes import Axes

    from profileplan.motion.polynomials import Array, Indices
    from profileplan.report.scene import Hanging, Scene, Side, Standing

INSTANTS = 30_000
"""About as many instants of the motion are seen."""

LEVELS = 8
"""Steps of speed that are told apart."""

THIN, THICK = 0.7, 3.5
"""Widths of lines at rest and at the highest speed."""

COLOURS = mpl.colormaps["viridis"](np.linspace(0.0, 0.57, LEVELS))
"""Of speeds, the slowest first; each has a contrast of 3 to white at least."""

ROOM = 0.05
"""Room round what is in view, as a share of its size."""

FLAT = 0.08
"""Least height of a view, as a share of its width."""

AROUND = 0.6
"""How much of what stands round the motion is in view, as a share of the motion's size."""


FINE = 1e-4
"""Share of the motion's size by which a line may differ from it."""


class View(NamedTuple):
    """What is seen from one side: the bounds, (2, 2) [mm], of what is to the right and upward.

    factor : by how much deviations are shown larger; None where no deviation is shown.
    """

    title: str
    side: Side
    columns: tuple[int, int]
    bounds: Array
    factor: int | None = None

    @property
    def size(self) -> tuple[float, float]:
        """Width and height [mm]."""
        wide, high = (self.bounds[1] - self.bounds[0]).tolist()
        return wide, high

    @property
    def magnified(self) -> bool:
        """Whether deviations are all that it shows."""
        return self.factor is not None and self.factor > 1


class Box(NamedTuple):
    """An upright rectangle in a view [mm]."""

    left: float
    right: float
    low: float
    high: float


@dataclass(frozen=True, eq=False)
class Looks:
    """All that the views of a plan share.

    Parameters
    ----------
    scene : Scene
    """

    scene: Scene

    @cached_property
    def times(self) -> Array:
        """Instants of the motion, (m,) [s]: even ones, and every break if these are not more."""
        motion = self.scene.planned.trajectory
        breaks = motion.breaks if motion.breaks.size <= INSTANTS else motion.breaks[[0, -1]]
        count = max(INSTANTS - breaks.size, INSTANTS // 2)
        return np.unique(np.concatenate([breaks, np.linspace(0.0, motion.duration, count)]))

    @cached_property
    def way(self) -> Array:
        """Where the tool point is at those, (m, 3) [mm]."""
        return self.scene.seen(self.scene.planned.trajectory.at(self.times))

    @cached_property
    def levels(self) -> Indices:
        """The step of speed between each two instants, (m - 1,), counted from 0."""
        return self.scene.speed_classes(self.times, LEVELS)

    @cached_property
    def views(self) -> tuple[View, ...]:
        """Plan and side, where they exist, and the tolerance where it is too small to be seen."""
        factor = self.scene.magnifications[-1]
        found = _aligned([self._view(side, None if factor > 1 else 1) for side in self.scene.sides])
        if found and found[0].side.name == "plan" and factor > 1:
            followed = [own for own in self.scene.drawn if own.tolerance]
            lines = np.concatenate([own.line[:, :2] for own in followed])
            wide = factor * max(own.tolerance for own in followed)
            bounds = _roomy(np.concatenate([lines - wide, lines + wide]))
            title = f"inside the tolerance: deviations × {factor}"
            found.append(View(title, found[0].side, (0, 1), bounds, factor))
        return tuple(found)

    @cached_property
    def clearance(self) -> str:
        """The smallest clearance, in words; nothing where there is nothing to keep clear of."""
        meeting = self.scene.meeting
        if meeting is None:
            return ""
        kept = f" ({meeting.margin:g} mm required)" if meeting.margin else ""
        what = f"{meeting.what}, at {meeting.time:.3f} s"
        return f"smallest clearance {meeting.value:.2f} mm{kept}: {what}"

    @cached_property
    def legend(self) -> list[tuple[Artist, str]]:
        """Samples of what is drawn beside the motion, with their meaning."""
        if not self.views:
            return []
        scene = self.scene
        some = np.zeros((2, 2))
        found: list[tuple[Artist, str]] = [(_start(some[0]), "start")]
        if scene.keepouts:
            found.append((_keepout(some), "keep-out"))
        if scene.tool is not None and self.views[0].side.name == "plan":
            nearest = " and where nearest" if scene.meeting is not None else ""
            found.append((_tool(some), f"tool at the start{nearest}"))
        if any(True for side in scene.sides for _ in self.parts(side)):
            found.append((_part(some), "part where taken and let go"))
        deviations = any(own.factor is not None for own in self.views)
        if deviations and scene.drawn:
            found.append((_drawn(some), "line to follow"))
            if any(own.tolerance for own in scene.drawn):
                found.append((_band([[some]]), "within the tolerance"))
        if any(own.magnified for own in self.views):
            found.append((_motion(some), "motion"))
        if scene.meeting is not None:
            found.append((_gap(some), "smallest clearance"))
        return found

    def parts(self, side: Side) -> Iterator[Array]:
        """Yield outlines, (n, 2), of what hangs at the tool, where it is taken and let go."""
        for own in self.scene.hanging:
            yield from self._hangs(own, (own.start, own.end), side)

    def parts_at(self, time: float, side: Side) -> Iterator[Array]:
        """Yield the outline, (n, 2), of what hangs at the tool at a time [s], if anything does."""
        for own in self.scene.hanging:
            if own.start <= time < own.end:
                yield from self._hangs(own, (time,), side)

    def stands(self, standing: Standing, outline: Array, view: View) -> Array:
        """Return the outline of a keep-out in a view, (n, 2)."""
        if view.side.name == "plan":
            return outline
        floor, ceiling = view.bounds[:, 1] if not view.side.falls else view.bounds[::-1, 1]
        top = ceiling if standing.top is None else standing.top
        return _box(outline, float(floor), float(top))

    def _view(self, side: Side, factor: int | None) -> View:
        """Return a view that holds the motion, and what stands and hangs about it."""
        plan = side.name == "plan"
        columns = (0, 1) if plan else (0, 2)
        own = self.way[:, columns]
        low, high = own.min(axis=0), own.max(axis=0)
        room = AROUND * max(float((high - low).max()), 1.0)
        corners = [own, *self.parts(side)]
        if plan and self.scene.tool is not None:
            corners.append(self.scene.tool + self.way[0, :2])
        for standing in self.scene.keepouts:
            top = float(high[1]) if standing.top is None else standing.top
            corners += [
                np.clip(one if plan else _box(one, top, top), low - room, high + room)
                for one in standing.outlines
            ]
        bounds = _roomy(np.concatenate(corners))
        return View(side.label, side, columns, bounds, factor)

    def _hangs(self, own: Hanging, times: tuple[float, ...], side: Side) -> Iterator[Array]:
        """Yield the outline of what hangs at the tool at some times [s]."""
        if own.outline is None:
            return
        for place in self.scene.seen(self.scene.planned.trajectory.at(times)):
            if side.name == "plan":
                yield own.outline + place[:2]
            else:
                below = float(place[2]) - self.scene.machine.up_sign * own.below
                yield _box(own.outline + place[:2], below, float(place[2]))


def draw_view(axes: Axes, looks: Looks, view: View, size: tuple[float, float]) -> None:
    """Draw a view.

    Parameters
    ----------
    axes : matplotlib.axes.Axes
        As wide to its height as the view.
    looks : Looks
    view : View
    size : tuple of float
        Width and height of the axes [inches].
    """
    (left, low), (right, high) = view.bounds.tolist()
    axes.set(xlim=(left, right), ylim=(high, low) if view.side.falls else (low, high))
    axes.set_aspect("equal")
    ticked(axes.xaxis, left, right, size[0])
    ticked(axes.yaxis, low, high, size[1])
    axes.set_xlabel(f"{view.side.right}, mm", fontsize=TINY, labelpad=1.0)
    if view.side.up is None:
        axes.set_yticks([])
    else:
        axes.set_ylabel(f"{view.side.up}, mm", fontsize=TINY, labelpad=1.0)
    axes.set_title(shortened(view.title, SMALL, size[0]), loc="left", fontsize=SMALL, pad=3.0)
    if view.magnified:
        _draw_deviations(axes, looks, view)
        return
    taken = _draw_meeting(axes, looks, view, size[0])
    _draw_standing(axes, looks, view, (size[0], taken))
    if view.side.name == "plan" and looks.scene.tool is not None:
        axes.add_patch(_tool(looks.scene.tool + looks.way[0, :2]))
    for shape in looks.parts(view.side):
        axes.add_patch(_part(shape))
    if view.factor is not None:
        _draw_drawn(axes, looks, view)
    axes.add_collection(_ribbons(looks.way[:, view.columns], looks.levels), autolim=False)
    axes.add_line(_start(looks.way[0, view.columns]))


def draw_speeds(axes: Axes, looks: Looks, wide: float) -> None:
    """Draw how fast a line of a width and colour is, on axes of a width [inches]."""
    top = looks.scene.top_speed or 1.0
    edges = np.linspace(0.0, top, LEVELS + 1).tolist()
    for level, ends in enumerate(pairwise(edges)):
        axes.plot(
            ends,
            [0.5, 0.5],
            color=COLOURS[level],
            linewidth=_thickness(level),
            solid_capstyle="butt",
        )
    axes.set(xlim=(0.0, top), ylim=(0.0, 1.0), yticks=[])
    for side in ("left", "right", "top", "bottom"):
        axes.spines[side].set_visible(False)
    ticked(axes.xaxis, 0.0, top, wide)
    even = [float(value) for value in axes.get_xticks() if value < 0.8 * top]
    axes.set_xticks([*even, top], [*map(number, even), number(float(f"{top:.4g}"))])
    axes.set_title("speed of the tool point, mm/s", loc="left", fontsize=TINY, pad=1.0)


def _draw_standing(axes: Axes, looks: Looks, view: View, taken_of: tuple[float, list[Box]]) -> None:
    """Draw keep-outs, with their names where these have room.

    `taken_of`: the width of the axes [inches], and where names cannot be.
    """
    wide, taken = taken_of
    scale = wide / view.size[0]
    shapes = [
        (standing.name, looks.stands(standing, outline, view))
        for standing in looks.scene.keepouts
        for outline in standing.outlines
    ]
    own = [_bounds(np.clip(shape, *view.bounds)) for _, shape in shapes]
    for (name, shape), bounds in zip(shapes, own, strict=True):
        axes.add_patch(_keepout(shape))
        text = clean(name)
        size = (width_of(text, TINY) + 0.08) / scale, 0.14 / scale
        others = [*taken, *(box for box in own if box is not bounds)]
        # What is named in the first view hides nothing in the next.
        avoided = looks.way[:, view.columns], others
        box, hits = _free(bounds, size, view.bounds, avoided)
        named = view is looks.views[0] or not hits
        if box is not None and named and not any(_meet(box, other) for other in taken):
            taken.append(box)
            _label(axes, box, text)


def _free(
    shape: Box, size: tuple[float, float], bounds: Array, avoided: tuple[Array, list[Box]]
) -> tuple[Box | None, int]:
    """Return where the name of a shape hides least, in it or beside it, and how much it hides.

    None where it has no room.

    Parameters
    ----------
    shape : Box
    size : tuple of float
        Width and height of the name [mm].
    bounds : (2, 2) array
        What is in view.
    avoided : tuple
        Points, (m, 2), and boxes that it would hide.
    """
    wide, high = size
    points, boxes = avoided
    levels = [shape.low + share * (shape.high - shape.low) for share in (0.5, 0.15, 0.85)]
    middle = 0.5 * (shape.left + shape.right)
    places = [(shape.right + 0.5 * wide, level) for level in levels]
    places += [(shape.left - 0.5 * wide, level) for level in levels]
    places += [(middle, shape.high + 0.6 * high), (middle, shape.low - 0.6 * high)]
    if shape.right - shape.left > wide and shape.high - shape.low > high:
        places = [*((middle, level) for level in levels), *places]
    found: list[tuple[int, int, Box]] = []
    for turn, (x, y) in enumerate(places):
        box = Box(x - 0.5 * wide, x + 0.5 * wide, y - 0.5 * high, y + 0.5 * high)
        inside = (box.left, box.low) >= bounds[0], (box.right, box.high) <= bounds[1]
        if np.all(inside):
            hidden = np.all((points > box[0::2]) & (points < box[1::2]), axis=1)
            hits = int(np.any(hidden)) + sum(_meet(box, other) for other in boxes)
            found.append((hits, turn, box))
    if not found:
        return None, 0
    hits, _, best = min(found)
    return best, hits


def _draw_drawn(axes: Axes, looks: Looks, view: View) -> None:
    """Draw lines as drawn, and in plan what is within their tolerances."""
    if view.side.name == "plan":
        polygons = looks.scene.bands(1.0)
        if polygons:
            axes.add_patch(_band(polygons))
    for own in looks.scene.drawn:
        axes.add_line(_drawn(own.line[:, view.columns]))


def _draw_deviations(axes: Axes, looks: Looks, view: View) -> None:
    """Draw how far the motion is from what is drawn, much larger than it is."""
    factor = float(view.factor or 1)
    scene = looks.scene
    axes.add_patch(_band(scene.bands(factor)))
    there = scene.seen(scene.planned.trajectory.at(scene.times))[:, :2]
    moved = scene.feet + factor * (there - scene.feet)
    for own in scene.drawn:
        if own.tolerance:
            axes.add_line(_drawn(own.line[:, :2]))
            axes.add_line(
                _motion(moved[slice(*np.searchsorted(scene.times, [own.start, own.end]))])
            )


def _draw_meeting(axes: Axes, looks: Looks, view: View, wide: float) -> list[Box]:
    """Draw the smallest clearance where it is, and what is there; return what its value covers."""
    meeting = looks.scene.meeting
    if meeting is None:
        return []
    at = looks.scene.seen(looks.scene.planned.trajectory.at([meeting.time]))[0]
    ends = meeting.gap
    if view.side.name == "side":
        height = float(at[2])
        ends = np.stack([meeting.gap[:, 0], meeting.heights or (height, height)], axis=1)
    elif looks.scene.tool is not None:
        axes.add_patch(_tool(looks.scene.tool + at[:2]))
    for shape in looks.parts_at(meeting.time, view.side):
        axes.add_patch(_part(shape))
    axes.add_line(_gap(ends))
    x, y = ends.mean(axis=0).tolist()
    axes.add_line(_ring(x, y))
    text = f"{meeting.value:.2f} mm"
    inch = view.size[0] / wide
    ring = Box(x - 0.1 * inch, x + 0.1 * inch, y - 0.1 * inch, y + 0.1 * inch)
    size = (width_of(text, TINY) + 0.08) * inch, 0.14 * inch
    place, _ = _free(ring, size, view.bounds, (looks.way[:, view.columns], []))
    if place is None:
        return [ring]
    _label(axes, place, text, WARM)
    return [ring, place]


def _label(axes: Axes, at: Box, text: str, color: str = PALE) -> None:
    """Write a name, or a value, where it has room."""
    axes.text(
        0.5 * (at.left + at.right),
        0.5 * (at.low + at.high),
        text,
        ha="center",
        va="center",
        fontsize=TINY,
        color=color,
        zorder=9,
        clip_on=True,
        bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.9, "pad": 0.8},
    )


def _ribbons(points: Array, levels: Indices) -> LineCollection:
    """Return a way in runs of equal speed, the slow and thin ones above the fast and wide ones."""
    # What takes no way is not seen.
    moves = np.flatnonzero(np.any(points[1:] != points[:-1], axis=1))
    if not moves.size:
        return LineCollection([])
    levels, ends = levels[moves], np.append(points[moves], points[-1:], axis=0)
    first = np.flatnonzero(np.diff(levels, prepend=-1))
    last = np.append(first[1:], levels.size)
    own = levels[first]
    runs = shapely.simplify(
        [shapely.LineString(ends[one : other + 1]) for one, other in zip(first, last, strict=True)],
        FINE * float(np.ptp(points, axis=0).max()),
        # Lines have no inside; to watch over it takes long where points are many on a line.
        preserve_topology=False,
    )
    order = np.argsort(-own, kind="stable")
    return LineCollection(
        [shapely.get_coordinates(runs[index]) for index in order],
        colors=COLOURS[own[order]],
        linewidths=[_thickness(level) for level in own[order].tolist()],
        capstyle="round",
        joinstyle="round",
        zorder=4,
    )


def _thickness(level: int) -> float:
    return THIN + (THICK - THIN) * level / (LEVELS - 1)


def _roomy(points: Array) -> Array:
    """Return bounds round points, (n, 2), with room, and not too flat: (2, 2)."""
    low, high = points.min(axis=0), points.max(axis=0)
    middle, half = 0.5 * (low + high), 0.5 * (high - low)
    greatest = max(float(half.max()), 0.5)
    half = np.maximum(half + ROOM * greatest, FLAT * greatest)
    return np.stack([middle - half, middle + half])


def _aligned(views: list[View]) -> list[View]:
    """Return views that show as much to the left and to the right as each other."""
    if not views:
        return views
    left = min(float(view.bounds[0, 0]) for view in views)
    right = max(float(view.bounds[1, 0]) for view in views)
    return [
        view._replace(bounds=np.array([[left, view.bounds[0, 1]], [right, view.bounds[1, 1]]]))
        for view in views
    ]


def _box(outline: Array, bottom: float, top: float) -> Array:
    """Return what an outline in plan looks like from the side, (4, 2)."""
    left, right = outline[:, 0].min(), outline[:, 0].max()
    return np.array([[left, bottom], [right, bottom], [right, top], [left, top]])


def _bounds(points: Array) -> Box:
    """Return the box round points, (n, 2)."""
    (left, low), (right, high) = points.min(axis=0).tolist(), points.max(axis=0).tolist()
    return Box(left, right, low, high)


def _meet(one: Box, other: Box) -> bool:
    return (
        one.left < other.right
        and other.left < one.right
        and one.low < other.high
        and other.low < one.high
    )


def _keepout(shape: Array) -> Polygon:
    return Polygon(shape, facecolor="#eef0f2", edgecolor="#8a9099", hatch="////", lw=0.7, zorder=1)


def _tool(shape: Array) -> Polygon:
    return Polygon(shape, facecolor="none", edgecolor=INK, lw=0.7, ls=(0, (1, 1.5)), zorder=3)


def _part(shape: Array) -> Polygon:
    return Polygon(shape, facecolor="none", edgecolor="#7a4a00", lw=0.7, ls=(0, (5, 2)), zorder=3)


def _band(polygons: Sequence[Sequence[Array]]) -> PathPatch:
    rings = (Path(ring, closed=True) for polygon in polygons for ring in polygon)
    path = Path.make_compound_path(*rings)
    return PathPatch(path, facecolor="#f6dcc0", edgecolor="#c98a45", lw=0.4, zorder=2)


def _drawn(points: Array) -> Line2D:
    return Line2D(*points.T, color=INK, lw=0.6, ls=(0, (4, 2)), zorder=5)


def _motion(points: Array) -> Line2D:
    return Line2D(*points.T, color="#0b57a4", lw=0.9, zorder=6)


def _gap(ends: Array) -> Line2D:
    return Line2D(*ends.T, color=WARM, lw=1.4, marker="|", markersize=5, zorder=8)


def _ring(x: float, y: float) -> Line2D:
    return Line2D([x], [y], color=WARM, marker="o", ms=11, mew=1.0, fillstyle="none", zorder=8)


def _start(point: Array) -> Line2D:
    x, y = point.tolist()
    found = Line2D([x], [y], color=INK, marker="s", ms=4, mfc="white", ls="none", zorder=6)
    # On the edge of a small view it is whole.
    found.set_clip_on(False)
    return found
