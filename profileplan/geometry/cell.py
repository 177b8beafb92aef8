"""Where may the tool point not be, in a cell with keep-outs?

Everything is seen in plan: x is the position of the machine's first horizontal axis, y that of the
second, 0 where there is none [mm]. Heights are counted upward, whichever way the up axis counts.
A shape is a core, a point or a polygon, and all that is within a radius of it, so that circles are
exact. A polygon that stands for a shape contains it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import TYPE_CHECKING, NamedTuple, TypeAlias

import numpy as np
import shapely

from profileplan.errors import Fault, InputError
from profileplan.inputs import Payload

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from shapely.geometry.base import BaseGeometry

    from profileplan.geometry.drawing import Drawing
    from profileplan.inputs import Job, Keepout, Machine, Tool
    from profileplan.inputs.rules import Outline

Core: TypeAlias = shapely.Polygon | shapely.Point

QUADRANT = 64
"""Sides of a polygon that stands for a quarter of a circle."""

OUTWARD = (1 + 1e-12) / math.cos(math.pi / (4 * QUADRANT))
"""How much larger the radius of its corners is than the circle inside it: by 8e-5 of itself. A
little is for rounding."""

EXACT = 1e-3
"""Greatest distance [mm] of curves of a drawing from the lines that stand for them."""

FLAT = 1e-9
"""Share of its area by which a polygon may miss its hull and still counts as convex."""

MOST_KEPT = 64
"""How many cells are remembered: steps ask for the same again and again."""


@dataclass(frozen=True, eq=False)
class Shape:
    """A core, and all that is within a radius of it [mm]."""

    core: Core
    radius: float = 0.0

    @cached_property
    def outline(self) -> Core:
        """A polygon that contains it, or the point that it is."""
        if self.radius <= 0:
            return self.core
        return self.core.buffer(self.radius * OUTWARD, quad_segs=QUADRANT)

    @cached_property
    def parts(self) -> tuple[Core, ...]:
        """Convex cores that make up the core."""
        return convex_parts(self.core)


@dataclass(frozen=True, eq=False)
class Body:
    """What must keep clear: the tool, or a part that hangs at it. It reaches upward without end.

    Parameters
    ----------
    name : str
        "tool" or "part".
    shape : Shape
        Around the tool point at the origin.
    below : float
        How far it reaches below the tool point [mm].
    """

    name: str
    shape: Shape
    below: float

    @property
    def footprint(self) -> Core:
        """A polygon that contains it in plan, or the tool point alone."""
        return self.shape.outline


@dataclass(frozen=True, eq=False)
class Block:
    """A keep-out as it stands in the cell; one of a drawing is a block for each outline.

    Parameters
    ----------
    name : str
    shape : Shape
    top : float
        Height up to which it blocks, counted upward [mm]; infinity: to any.
    """

    name: str
    shape: Shape
    top: float

    @property
    def outline(self) -> Core:
        """A polygon that contains it in plan."""
        return self.shape.outline


@dataclass(frozen=True, eq=False)
class Obstacle:
    """Where the tool point may not be, because of one body and one block.

    Parameters
    ----------
    name : str
        The keep-out's.
    body : str
        The body's.
    outline : Polygon
        In plan, with holes where there are any: never smaller than exact, round corners larger by
        up to 1e-4 of their radius.
    top : float
        Least height of the tool point over it, counted upward [mm]; infinity: never over it.
    """

    name: str
    body: str
    outline: shapely.Polygon
    top: float


def blocks(machine: Machine) -> tuple[Block, ...]:
    """Return a machine's keep-outs as they stand in its cell.

    Raises
    ------
    InputError
        An outline crosses itself, or a drawing cannot be read or has no closed outlines alone.
    """
    return _blocks(_Cell.of(machine))


def bodies(machine: Machine, payload: Payload | None) -> tuple[Body, ...]:
    """Return what must keep clear: the tool, and a part if it has a footprint or a depth.

    On a machine with a rotary axis an outline counts as the circle that it sweeps.

    Raises
    ------
    InputError
        An outline crosses itself.
    """
    return _bodies(_Cell.of(machine), payload)


def obstacles(machine: Machine, payload: Payload | None) -> tuple[Obstacle, ...]:
    """Return where the tool point may not be, body by body.

    Raises
    ------
    InputError
        As from ``blocks`` and ``bodies``.
    """
    return _obstacles(_Cell.of(machine), payload)


def judge(job: Job) -> None:
    """Find everything that is wrong with a job's cell, before anything is planned in it.

    Raises
    ------
    InputError
        With the faults of keep-outs, of the tool and of all payloads.
    """
    cell, cycle = _Cell.of(job.machine), job.cycle
    faults: list[Fault] = []
    for made in (_blocks, _tool):
        try:
            made(cell)
        except InputError as error:
            faults += error.faults
    for index, step in enumerate(cycle.steps):
        if not isinstance(step, Payload):
            continue
        try:
            _part(cell, step)
        except InputError as error:
            place = cycle.step_place(index)
            faults += [fault.within(place, cycle.source) for fault in error.faults]
    if faults:
        raise InputError(dict.fromkeys(faults))


def difference(core: Core, other: Core) -> BaseGeometry:
    """Return where the origin of one shape is when it touches another: the other less the one.

    Parameters
    ----------
    core : Point or Polygon
        What stands still.
    other : Point or Polygon
        What moves, about its origin.
    """
    if isinstance(core, shapely.Point) and isinstance(other, shapely.Point):
        return shapely.Point(core.x - other.x, core.y - other.y)
    ours, theirs = map(shapely.get_coordinates, convex_parts(core)), convex_parts(other)
    sums = [
        (one[:, np.newaxis] - shapely.get_coordinates(two)).reshape(-1, 2)
        for one in ours
        for two in theirs
    ]
    # Hulls that share more than a point make one polygon, as the parts of each core do.
    return shapely.union_all([shapely.MultiPoint(corners).convex_hull for corners in sums])


def convex_parts(core: Core) -> tuple[Core, ...]:
    """Return convex cores that make up one: itself, or triangles."""
    if isinstance(core, shapely.Point):
        return (core,)
    hull = core.convex_hull
    if hull.area - core.area <= FLAT * hull.area:
        return (core,)
    triangles = shapely.constrained_delaunay_triangles(core).geoms
    return tuple(part for part in triangles if isinstance(part, shapely.Polygon))


class _Cell(NamedTuple):
    """What of a machine makes its cell; hashable, so that a cell is made once.

    Drawings count with the time of their last change: one that was changed is read again.
    """

    keepouts: tuple[Keepout, ...]
    tool: Tool
    up: str | None
    turns: bool
    source: Path | None
    changed: tuple[int, ...]

    @classmethod
    def of(cls, machine: Machine) -> _Cell:
        drawings = [keepout.dxf for keepout in machine.keepouts if keepout.dxf is not None]
        return cls(
            machine.keepouts,
            machine.tool,
            machine.up,
            not all(machine.linear),
            machine.source,
            tuple(_changed(drawing) for drawing in drawings),
        )

    def height(self, top: float | None) -> float:
        """Return a position of the up axis counted upward; infinity where there is none."""
        if top is None or self.up is None:
            return math.inf
        return -top if self.up.startswith("-") else top


def _changed(drawing: Path) -> int:
    try:
        return drawing.stat().st_mtime_ns
    except OSError:
        # The reader tells why it cannot be read.
        return 0


@lru_cache(maxsize=MOST_KEPT)
def _blocks(cell: _Cell) -> tuple[Block, ...]:
    found: list[Block] = []
    faults: list[Fault] = []
    for number, keepout in enumerate(cell.keepouts, start=1):
        try:
            shapes = list(_shapes(keepout))
        except InputError as error:
            # What is wrong with a drawing says itself where it is.
            faults += [
                fault if fault.file else fault.within(f"keepouts[{number}]", cell.source)
                for fault in error.faults
            ]
        else:
            found += [Block(keepout.name, shape, cell.height(keepout.top)) for shape in shapes]
    if faults:
        raise InputError(faults)
    return tuple(found)


@lru_cache(maxsize=MOST_KEPT)
def _bodies(cell: _Cell, payload: Payload | None) -> tuple[Body, ...]:
    tool = _tool(cell)
    return (tool,) if payload is None or not _reaches(payload) else (tool, _part(cell, payload))


def _tool(cell: _Cell) -> Body:
    tool = cell.tool
    try:
        return Body("tool", _footprint(tool.radius, tool.outline, turns=cell.turns), 0.0)
    except InputError as error:
        raise InputError(fault.within("tool", cell.source) for fault in error.faults) from None


def _part(cell: _Cell, payload: Payload) -> Body:
    try:
        shape = _footprint(payload.radius, payload.outline, turns=cell.turns)
    except InputError as error:
        raise InputError(fault.within("payload") for fault in error.faults) from None
    return Body("part", shape, payload.below)


def _reaches(payload: Payload) -> bool:
    return payload.radius is not None or payload.outline is not None or payload.below > 0


@lru_cache(maxsize=MOST_KEPT)
def _obstacles(cell: _Cell, payload: Payload | None) -> tuple[Obstacle, ...]:
    margin = cell.tool.margin
    return tuple(
        Obstacle(block.name, body.name, outline, block.top + margin + body.below)
        for body in _bodies(cell, payload)
        for block in _blocks(cell)
        for outline in _outlines(body, block, margin)
    )


def _outlines(body: Body, block: Block, margin: float) -> Iterator[shapely.Polygon]:
    """Yield where the tool point may not be in plan; rounding may have cut it in two."""
    whole = difference(block.shape.core, body.shape.core)
    distance = block.shape.radius + body.shape.radius + margin
    if distance > 0:
        whole = whole.buffer(distance * OUTWARD, quad_segs=QUADRANT)
    for part in shapely.get_parts(whole).tolist():
        if isinstance(part, shapely.Polygon):
            yield part


def _footprint(radius: float | None, outline: Outline | None, *, turns: bool) -> Shape:
    """Return the shape around the tool point."""
    if outline is None:
        return Shape(shapely.Point(0.0, 0.0), radius or 0.0)
    if turns:
        return Shape(shapely.Point(0.0, 0.0), max(math.hypot(x, y) for x, y in outline))
    return Shape(_polygon(outline))


def _shapes(keepout: Keepout) -> Iterator[Shape]:
    """Yield the shapes of a keep-out in plan."""
    if keepout.circle is not None:
        circle = keepout.circle
        yield Shape(shapely.Point(circle.x, circle.y), circle.radius)
    elif keepout.outline is not None:
        yield Shape(_polygon(keepout.outline))
    elif keepout.dxf is not None and keepout.layer is not None:
        yield from _drawn(keepout.dxf, keepout.layer)


def _polygon(corners: Outline) -> shapely.Polygon:
    """Return the polygon of corners.

    Raises
    ------
    InputError
        It crosses or touches itself: what is inside would be a guess.
    """
    polygon = shapely.Polygon(corners)
    if not polygon.is_valid:
        reason = shapely.is_valid_reason(polygon)
        where = reason[reason.find("[") :].strip("[]").replace(" ", ", ")
        message = f"crosses or touches itself at ({where}) mm; a simple outline is needed"
        raise InputError([Fault("outline", message)])
    return polygon


def _drawn(file: Path, layer: str) -> Iterator[Shape]:
    """Yield the shapes that a layer of a drawing encloses; those inside others are filled too.

    Raises
    ------
    InputError
        The drawing cannot be read, or the layer has an open outline or none.
    """
    # ezdxf costs more start-up than all else: only a drawing pays for it.
    from profileplan.geometry.drawing import Reading, read_drawing  # noqa: PLC0415
    from profileplan.geometry.outlines import chain  # noqa: PLC0415

    drawing = read_drawing(file, Reading(layers=(layer,), error=EXACT))
    layers = [entity.layer for entity in drawing.entities]
    chained = chain(drawing.pieces, layers).outlines
    faults = [
        _drawn_fault(drawing, outline.pieces.source[0], "is not closed, so it keeps nothing out")
        for outline in chained
        if not outline.closed
    ]
    if not chained:
        message = "draws nothing on this layer; closed outlines are needed"
        faults = [Fault(f"layer {layer}", message, file)]
    for outline in chained:
        if not outline.closed:
            continue
        points, _, _ = outline.pieces.flattened(EXACT)
        polygon = shapely.Polygon(points[:, :2])
        if not polygon.is_valid:
            source = outline.pieces.source[0]
            faults.append(_drawn_fault(drawing, source, "its outline crosses or touches itself"))
        elif not faults:
            curved = outline.pieces.bulge.any() or drawing.error
            # Mitred corners lie outside of round ones; curves are no farther than this.
            error = (EXACT + drawing.error) if curved else 0.0
            yield Shape(polygon.buffer(error, join_style="mitre") if error else polygon)
    if faults:
        raise InputError(faults)


def _drawn_fault(drawing: Drawing, source: int, message: str) -> Fault:
    entity = drawing.entities[source]
    place = f"layer {entity.layer}, handle {entity.handle}"
    return Fault(place, f"{entity.kind}: {message}", drawing.file)
