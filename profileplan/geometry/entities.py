"""What do the entities of a block or of a layout draw, in its own coordinates?

Every kind of entity has a reader that only notes numbers; they become arrays once for all entities
of a block. What draws nothing to follow is noted with the reason. Angles are in degree as in DXF,
in rad where arrays say so; lengths are in the drawing's unit.

Source: group codes and the arbitrary axis algorithm are those of the DXF reference (from memory);
ezdxf reads the tags.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import degrees
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from ezdxf.entities.boundary_paths import (
    ArcEdge,
    EdgePath,
    EllipseEdge,
    LineEdge,
    PolylinePath,
    SplineEdge,
)
from ezdxf.entities.circle import Circle
from ezdxf.entities.dxfentity import DXFTagStorage
from ezdxf.entities.dxfgfx import DXFGraphic
from ezdxf.entities.ellipse import Ellipse
from ezdxf.entities.hatch import Hatch
from ezdxf.entities.insert import Insert
from ezdxf.entities.line import Line
from ezdxf.entities.lwpolyline import LWPolyline
from ezdxf.entities.polyline import Polyline
from ezdxf.entities.spline import Spline

from profileplan.geometry.primitives import (
    Beziers,
    Maps,
    Order,
    Primitives,
    Rounds,
    Strokes,
    mapped_rounds,
    mapped_strokes,
)
from profileplan.geometry.splines import Given, spline_chain

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from ezdxf.entities.dxfentity import DXFEntity

    from profileplan.geometry.corridor import Array

UP, NOWHERE = (0.0, 0.0, 1.0), (0.0, 0.0, 0.0)

LEAST_BULGE = 1e-14
"""Bulge below which an arc is a line: over 20 km its sagitta is 1e-7 mm, and its radius no number
to calculate with."""

NEAR_UP = 1 / 64
"""Bound of the arbitrary axis algorithm."""

SAME_ANGLE = 1e-9
"""Degree by which rounding may part the ends of a full circle."""

FRAME_POINT = 16
"""Flag of the vertices that only hold the frame of a fitted polyline."""

FOLLOWED = {"LINE", "ARC", "CIRCLE", "ELLIPSE", "LWPOLYLINE", "POLYLINE", "SPLINE", "INSERT"}

REASONS = {
    "a text": "TEXT MTEXT ATTRIB ATTDEF ARCALIGNEDTEXT RTEXT SHAPE",
    "a dimension or a note": "DIMENSION ARC_DIMENSION LARGE_RADIAL_DIMENSION LEADER MULTILEADER "
    "MLEADER TOLERANCE ACAD_TABLE",
    "a viewport": "VIEWPORT",
    "a body or a surface": "3DSOLID 3DFACE BODY REGION SURFACE EXTRUDEDSURFACE LOFTEDSURFACE "
    "REVOLVEDSURFACE SWEPTSURFACE PLANESURFACE MESH",
    "an image": "IMAGE WIPEOUT OLEFRAME OLE2FRAME PDFUNDERLAY DWFUNDERLAY DGNUNDERLAY",
    "a point": "POINT",
    "a filled area": "SOLID TRACE MPOLYGON",
    "endless": "XLINE RAY",
    "a hatch; boundaries are read on request": "HATCH",
}
"""Kinds of entities that draw nothing to follow, by the reason."""

REASON_OF = {kind: reason for reason, kinds in REASONS.items() for kind in kinds.split()}
OTHER_REASON = "no line that can be followed"
INVISIBLE = "invisible"
SURFACE = "a body or a surface"
NO_SIZE = "a block reference of scale 0"


class Slots(NamedTuple):
    """Entities in drawn order: their names, kinds, layers, and why they draw nothing, or ""."""

    handle: list[str]
    kind: list[str]
    layer: list[str]
    reason: list[str]


class Reference(NamedTuple):
    """A block reference.

    numbers : insertion point (3), scales (3), rotation [deg], spacings of rows and columns,
    normal (3).
    """

    slot: int
    block: str
    rows: int
    columns: int
    numbers: tuple[float, ...]

    @property
    def copies(self) -> int:
        """How often the block is drawn."""
        return self.rows * self.columns


class Misfit(NamedTuple):
    """What is wrong with the entity of a slot."""

    slot: int
    message: str


@dataclass(frozen=True, eq=False)
class Content:
    """What a block or a layout draws.

    Parameters
    ----------
    slots : Slots
    primitives : Primitives
        Their sources are numbers of slots.
    references : tuple of Reference
    misfits : tuple of Misfit
    """

    slots: Slots
    primitives: Primitives
    references: tuple[Reference, ...]
    misfits: tuple[Misfit, ...]


class _Noted(NamedTuple):
    """Shapes of one kind: their slots and ranks, and the numbers of each."""

    order: list[tuple[int, int]]
    numbers: list[tuple[float, ...]]

    def add(self, slot: int, numbers: tuple[float, ...], rank: int = 0) -> None:
        self.order.append((slot, rank))
        self.numbers.append(numbers)

    def arrays(self, width: int) -> tuple[Order, Array]:
        order = np.array(self.order, dtype=np.intp).reshape(-1, 2)
        numbers = np.array(self.numbers, dtype=np.float64).reshape(-1, width)
        return Order(order[:, 0], order[:, 1]), numbers


class _Path(NamedTuple):
    """A polyline in its own plane: (m, 5) array x, y, z, -, bulge; height, where one for all."""

    slot: int
    values: Array
    height: float
    closed: bool
    normal: tuple[float, ...]


def read_content(entities: Iterable[DXFEntity], *, hatches: bool, hidden: bool) -> Content:
    """Return what entities draw.

    Parameters
    ----------
    entities : iterable of DXFEntity
    hatches : bool
        Whether boundaries of hatches are drawn.
    hidden : bool
        Whether invisible entities are.
    """
    return _Collector(hatches=hatches, hidden=hidden).read(entities)


class _Collector:
    """Notes what entities draw."""

    def __init__(self, *, hatches: bool, hidden: bool) -> None:
        self._followed = FOLLOWED | {"HATCH"} if hatches else FOLLOWED
        self._hidden = hidden
        self._slots = Slots([], [], [], [])
        self._lines, self._arcs, self._ellipses = (_Noted([], []) for _ in range(3))
        self._paths: list[_Path] = []
        self._chains: list[tuple[int, Array]] = []
        self._references: list[Reference] = []
        self._misfits: list[Misfit] = []

    def read(self, entities: Iterable[DXFEntity]) -> Content:
        """Return what entities draw."""
        handles, kinds, layers, reasons = self._slots
        for entity in entities:
            kind, slot = entity.dxftype(), len(kinds)
            kinds.append(kind)
            handles.append(entity.dxf.handle or "(none)")
            graphic = isinstance(entity, DXFGraphic)
            layers.append(entity.dxf.layer if graphic else _layer(entity))
            if graphic and not self._hidden and _invisible(entity):
                reasons.append(INVISIBLE)
            elif kind not in self._followed or not graphic:
                reasons.append(REASON_OF.get(kind, OTHER_REASON))
            else:
                reasons.append("")
                self._note(entity, slot)
        return Content(
            self._slots, self._primitives(), tuple(self._references), tuple(self._misfits)
        )

    def _note(self, entity: DXFEntity, slot: int) -> None:
        match entity:
            case Line():
                self._lines.add(slot, (*entity.dxf.start, *entity.dxf.end))
            case LWPolyline():
                dxf = entity.dxf
                values = np.asarray(entity.lwpoints.values, dtype=np.float64).reshape(-1, 5)
                path = _Path(slot, values, dxf.elevation, entity.closed, tuple(dxf.extrusion))
                self._paths.append(path)
            case Circle():
                self._circle(entity, slot)
            case Insert():
                self._insert(entity, slot)
            case Polyline():
                self._polyline(entity, slot)
            case Ellipse():
                self._ellipse(entity, slot)
            case Spline():
                self._spline(entity, slot)
            case Hatch():
                self._hatch(entity, slot)

    def _circle(self, entity: Circle, slot: int) -> None:
        stated = entity.dxf.all_existing_dxf_attribs()
        radius = stated.get("radius", 0.0)
        if radius < 0:
            self._misfits.append(Misfit(slot, f"has a radius of {radius:g}; it must be above 0"))
            return
        span = (0.0, 360.0)
        if entity.dxftype() == "ARC":
            span = (stated.get("start_angle", 0.0), stated.get("end_angle", 360.0))
        centre, normal = stated.get("center", NOWHERE), stated.get("extrusion", UP)
        self._arcs.add(slot, (*centre, radius, *span, 1.0, *normal))

    def _ellipse(self, entity: Ellipse, slot: int) -> None:
        dxf = entity.dxf
        span = (degrees(dxf.start_param), degrees(dxf.end_param))
        own = (*dxf.center, *dxf.major_axis, *dxf.extrusion, dxf.ratio, *span, 1.0, 0.0, 0.0, 1.0)
        self._ellipses.add(slot, own)

    def _polyline(self, entity: Polyline, slot: int) -> None:
        if entity.is_polygon_mesh or entity.is_poly_face_mesh:
            self._slots.reason[slot] = SURFACE
            return
        flat = entity.is_2d_polyline
        values = [
            (*own.get("location", NOWHERE), 0.0, own.bulge if flat else 0.0)
            for own in (vertex.dxf for vertex in entity.vertices)
            if not own.flags & FRAME_POINT
        ]
        height, normal = np.nan, UP
        if flat:
            normal = tuple(entity.dxf.extrusion)
            if entity.dxf.hasattr("elevation"):
                height = entity.dxf.elevation.z
        array = np.array(values, dtype=np.float64).reshape(-1, 5)
        if flat and np.isnan(height) and len(array):
            height = float(array[0, 2])
        self._paths.append(_Path(slot, array, height, entity.is_closed, normal))

    def _spline(self, entity: Spline, slot: int) -> None:
        dxf = entity.dxf
        ends = [dxf.start_tangent, dxf.end_tangent]
        self._chain(
            slot,
            Given(
                dxf.degree,
                _points(entity.control_points),
                np.array(entity.weights, dtype=np.float64),
                np.array(entity.knots, dtype=np.float64),
                _points(entity.fit_points),
                tangents=(_vector(ends[0]), _vector(ends[1])),
                closed=entity.closed,
            ),
        )

    def _chain(self, slot: int, given: Given, maps: Maps | None = None) -> None:
        chain = spline_chain(given)
        if isinstance(chain, str):
            self._misfits.append(Misfit(slot, chain))
            return
        if maps is not None:
            chain[..., :3] = chain[..., :3] @ maps.linear[0].T
        self._chains.append((slot, chain))

    def _insert(self, entity: Insert, slot: int) -> None:
        # One copy of what is stated costs less than asking ezdxf for every default.
        stated = entity.dxf.all_existing_dxf_attribs()
        scales = (stated.get("xscale", 1.0), stated.get("yscale", 1.0), stated.get("zscale", 1.0))
        if scales[0] == 0 or scales[1] == 0:
            self._slots.reason[slot] = NO_SIZE
            return
        spacing = (stated.get("row_spacing", 0.0), stated.get("column_spacing", 0.0))
        # Instances that coincide are drawn once.
        rows = max(stated.get("row_count", 1), 1) if spacing[0] else 1
        columns = max(stated.get("column_count", 1), 1) if spacing[1] else 1
        turn, normal = stated.get("rotation", 0.0), stated.get("extrusion", UP)
        numbers = (*stated.get("insert", NOWHERE), *scales, turn, *spacing, *normal)
        self._references.append(Reference(slot, stated.get("name", ""), rows, columns, numbers))

    def _hatch(self, entity: Hatch, slot: int) -> None:
        normal, height = tuple(entity.dxf.extrusion), entity.dxf.elevation.z
        part = slot
        for path in entity.paths:
            if isinstance(path, PolylinePath):
                vertices = np.array(path.vertices, dtype=np.float64).reshape(-1, 3)
                values = np.zeros((len(vertices), 5))
                values[:, [0, 1, 4]] = vertices
                self._paths.append(_Path(part, values, height, True, normal))  # noqa: FBT003
                part = self._another(slot)
            elif isinstance(path, EdgePath):
                for edge in path.edges:
                    self._edge(edge, part, height, normal)
                    part = self._another(slot)
        if part != slot:
            for column in self._slots:
                column.pop()

    def _another(self, slot: int) -> int:
        """Return a slot for one more part of an entity."""
        for column in self._slots:
            column.append(column[slot])
        return len(self._slots.kind) - 1

    def _edge(self, edge: object, slot: int, height: float, normal: tuple[float, ...]) -> None:
        match edge:
            case LineEdge():
                values = np.array([[*end, 0.0, 0.0, 0.0] for end in (edge.start, edge.end)])
                self._paths.append(_Path(slot, values, height, False, normal))  # noqa: FBT003
            case ArcEdge():
                turn = 1.0 if edge.ccw else -1.0
                angles = (edge.start_angle, edge.end_angle)
                self._arcs.add(slot, (*edge.center, height, edge.radius, *angles, turn, *normal))
            case EllipseEdge():
                turn, span = 1.0 if edge.ccw else -1.0, (edge.start_angle, edge.end_angle)
                if not _full(*span):
                    span = (degrees(edge.start_param), degrees(edge.end_param))
                own = (*edge.center, height, *edge.major_axis, 0.0, 0.0, 0.0, 1.0, edge.ratio)
                self._ellipses.add(slot, (*own, *span, turn, *normal))
            case SplineEdge():
                ends = (edge.start_tangent, edge.end_tangent)
                given = Given(
                    edge.degree,
                    _flat(edge.control_points, height),
                    np.array(edge.weights, dtype=np.float64),
                    np.array(edge.knot_values, dtype=np.float64),
                    _flat(edge.fit_points, height),
                    tangents=(_vector(ends[0]), _vector(ends[1])),
                )
                frame = axes(np.array([normal]))
                self._chain(slot, given, Maps(frame, np.zeros((1, 3))))

    def _primitives(self) -> Primitives:
        order, numbers = self._lines.arrays(6)
        lines = Strokes(numbers[:, :3], numbers[:, 3:], np.zeros(len(numbers)), order)
        paths, bent = _path_strokes(self._paths)
        rounds = [bent, _circles(self._arcs), _ellipses(self._ellipses)]
        return Primitives(
            _joined(lines, paths),
            tuple(own for own in rounds if own.sweep.size),
            _beziers(self._chains),
        )


def _invisible(entity: DXFEntity) -> bool:
    return entity.dxf.hasattr("invisible") and bool(entity.dxf.invisible)


def _layer(entity: DXFEntity) -> str:
    """Return the layer of an entity that ezdxf only stores."""
    if isinstance(entity, DXFTagStorage):
        return str(entity.graphic_properties().get("layer", "0"))
    return "0"


def _vector(tangent: Iterable[float] | None) -> Array | None:
    """Return a tangent of two or three coordinates as (3,)."""
    if tangent is None:
        return None
    return np.array([*tangent, 0.0][:3], dtype=np.float64)


def _points(vertices: object) -> Array:
    """Return points that ezdxf holds packed: (n, 3)."""
    return np.asarray(getattr(vertices, "values", vertices), dtype=np.float64).reshape(-1, 3)


def _flat(points: Sequence[Iterable[float]], height: float) -> Array:
    """Return points in plan, at a height: (n, 3)."""
    return np.array([[*point, height][:3] for point in points], dtype=np.float64).reshape(-1, 3)


def axes(normals: Array) -> Array:
    """Return object coordinate systems by the arbitrary axis algorithm, axes in columns.

    Parameters
    ----------
    normals : (n, 3) array
        Of any length; of length 0 they count as upward.

    Returns
    -------
    (n, 3, 3) array
    """
    up = np.array([0.0, 0.0, 1.0])
    length = np.sqrt((normals**2).sum(axis=1, keepdims=True))
    z = np.divide(normals, length, out=np.tile(up, (len(normals), 1)), where=length != 0)
    steep = (np.abs(z[:, :2]) < NEAR_UP).all(axis=1)
    x = np.cross(np.where(steep[:, np.newaxis], [0.0, 1.0, 0.0], up), z)
    x /= np.sqrt((x**2).sum(axis=1, keepdims=True))
    return np.stack([x, np.cross(z, x), z], axis=2)


def _joined(one: Strokes, other: Strokes) -> Strokes:
    if not len(one.bulge) or not len(other.bulge):
        return other if len(other.bulge) else one
    return Strokes(
        np.concatenate([one.start, other.start]),
        np.concatenate([one.end, other.end]),
        np.concatenate([one.bulge, other.bulge]),
        Order(*(np.concatenate(pair) for pair in zip(one.order, other.order, strict=True))),
    )


def _path_strokes(paths: Sequence[_Path]) -> tuple[Strokes, Rounds]:
    """Return the lines and arcs of polylines, all at once; tilted arcs are elliptical."""
    count = np.array([len(path.values) for path in paths], dtype=np.intp)
    values = np.concatenate([np.zeros((0, 5)), *(path.values for path in paths)])
    path = np.repeat(np.arange(len(paths)), count)
    height = np.array([own.height for own in paths])[path]
    points = values[:, :3].copy()
    level = ~np.isnan(height)
    points[level, 2] = height[level]
    first = np.cumsum(count) - count
    follow = np.arange(1, len(path) + 1)
    last = first[count > 0] + count[count > 0] - 1
    follow[last] = first[count > 0]
    goes_on = np.ones(len(path), dtype=bool)
    goes_on[last] = np.array([own.closed for own in paths], dtype=bool)[count > 0]
    begin = np.flatnonzero(goes_on)
    slot = np.array([own.slot for own in paths], dtype=np.intp)
    order = Order(slot[path[begin]], begin - first[path[begin]])
    end, bulge = points[follow[begin]], values[begin, 4]
    bulge = np.where(np.abs(bulge) < LEAST_BULGE, 0.0, bulge)
    # A polyline of a single point has no length; an arc between equal points has no radius.
    strokes = Strokes(points[begin], end, bulge, order)
    normals = np.array([own.normal for own in paths], dtype=np.float64).reshape(-1, 3)
    upright = (normals == [0.0, 0.0, 1.0]).all(axis=1)
    tilted = ~upright[path[begin]]
    if not tilted.any():
        return strokes, _circles(_Noted([], []))
    frames = axes(normals[path[begin]][tilted])
    chosen, rest = np.flatnonzero(tilted), np.flatnonzero(~tilted)
    maps = Maps(frames, np.zeros((len(frames), 3)))
    mapped, bent = mapped_strokes(strokes, chosen, maps, order.at(chosen))
    stay = Strokes(strokes.start[rest], end[rest], bulge[rest], order.at(rest))
    return _joined(stay, mapped), bent


def _full(first: float, last: float) -> bool:
    """Return whether angles, or parameters, are those of a full circle."""
    return bool(_sweep(np.array([first]), np.array([last]))[0] == 360)


def _sweep(first: Array, last: Array) -> Array:
    """Return how far arcs go anticlockwise, from 0 for equal angles to 360: (n,) [deg]."""
    sweep = (last - first) % 360.0
    whole = (sweep < SAME_ANGLE) | (sweep > 360.0 - SAME_ANGLE)
    return np.where(whole, np.where(np.abs(last - first) < SAME_ANGLE, 0.0, 360.0), sweep)


def _rounds(order: Order, frame: tuple[Array, Array, Array], span: Array) -> Rounds:
    """Return arcs from centres and half axes; span is (n, 3): first and last angle, direction."""
    centre, one, other = frame
    sweep = np.radians(_sweep(span[:, 0], span[:, 1]))
    back = span[:, 2] < 0
    first = np.radians(np.where(back, span[:, 1], span[:, 0]))
    sweep = np.where(back, -sweep, sweep)
    begin, end = (
        centre + one * np.cos(angle)[:, np.newaxis] + other * np.sin(angle)[:, np.newaxis]
        for angle in (first, first + sweep)
    )
    whole = np.abs(sweep) == 2 * np.pi
    end[whole] = begin[whole]
    kept = np.flatnonzero((sweep != 0) & ((one != 0) | (other != 0)).any(axis=1))
    return Rounds(begin, end, centre, one, other, first, sweep, order).at(kept)


def _circles(noted: _Noted) -> Rounds:
    """Return circular arcs, each in its own plane."""
    order, numbers = noted.arrays(10)
    none, radius = np.zeros(len(numbers)), numbers[:, 3]
    frame = (
        numbers[:, :3],
        np.stack([radius, none, none], axis=1),
        np.stack([none, radius, none], axis=1),
    )
    return _in_planes(_rounds(order, frame, numbers[:, 4:7]), numbers[:, 7:], order)


def _ellipses(noted: _Noted) -> Rounds:
    """Return elliptical arcs; those of hatches each in its own plane."""
    order, numbers = noted.arrays(16)
    one, normal = numbers[:, 3:6], numbers[:, 6:9]
    across = np.cross(normal, one)
    length = np.sqrt((across**2).sum(axis=1, keepdims=True))
    unit = np.divide(across, length, out=np.zeros_like(across), where=length > 0)
    other = unit * np.sqrt((one**2).sum(axis=1, keepdims=True)) * numbers[:, 9:10]
    rounds = _rounds(order, (numbers[:, :3], one, other), numbers[:, 10:13])
    return _in_planes(rounds, numbers[:, 13:], order)


def _in_planes(rounds: Rounds, normals: Array, order: Order) -> Rounds:
    """Return arcs from the planes of their normals, one for each shape of an order."""
    if (normals == [0.0, 0.0, 1.0]).all():
        return rounds
    # Every slot has one round shape.
    place = np.searchsorted(order.source, rounds.order.source)
    frames = axes(normals[place])
    return mapped_rounds(rounds, Maps(frames, np.zeros((len(frames), 3))), rounds.order)


def _beziers(chains: Sequence[tuple[int, Array]]) -> tuple[Beziers, ...]:
    """Return the Bezier curves of all splines, by their degree."""
    found = []
    for size in sorted({chain.shape[1] for _, chain in chains}):
        group = [(slot, chain) for slot, chain in chains if chain.shape[1] == size]
        count = [len(chain) for _, chain in group]
        source = np.repeat(np.array([slot for slot, _ in group], dtype=np.intp), count)
        rank = np.concatenate([np.arange(length) for length in count])
        found.append(Beziers(np.concatenate([chain for _, chain in group]), Order(source, rank)))
    return tuple(found)
