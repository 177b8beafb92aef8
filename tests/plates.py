"""Drawings for tests: every kind of entity, every way to place a block; ezdxf as a witness."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest
import shapely
from ezdxf.entities.circle import Circle
from ezdxf.entities.ellipse import Ellipse
from ezdxf.entities.insert import Insert
from ezdxf.entities.line import Line
from ezdxf.entities.lwpolyline import LWPolyline
from ezdxf.entities.polyline import Polyline
from ezdxf.entities.spline import Spline
from ezdxf.filemanagement import new as new_document
from ezdxf.math import BSpline, ConstructionArc, Matrix44

from profileplan.errors import InputError
from profileplan.geometry.drawing import Drawing, Reading, read_drawing

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable
    from pathlib import Path

    from ezdxf.document import Drawing as Document
    from ezdxf.entities.dxfentity import DXFEntity
    from ezdxf.layouts.base import BaseLayout
    from ezdxf.math import Vec3

    from profileplan.geometry.corridor import Array

FINE = 5e-4
"""Sagitta [mm] at which ezdxf flattens its curves here."""

ROUNDING = 1e-9
"""mm: what mapping a few hundred mm through nested blocks may lose."""

FILE_DIGITS = 1e-12
"""Relative: DXF files written by ezdxf hold 16 digits."""

PLANES = ([0, 1], [0, 2], [1, 2])

TILTED = (0.3, -0.4, 0.8)


def new(version: str = "R2010", unit: int = 4) -> Document:
    """Return an empty document in mm."""
    document = new_document(version)
    document.units = unit
    return document


def reread(document: Document, folder: Path, **reading: object) -> Drawing:
    """Return what a document draws once it is written to a file."""
    file = folder / "plate.dxf"
    document.saveas(file)
    return read_drawing(file, Reading(**reading))  # type: ignore[arg-type]


def refused(file: Path, **reading: object) -> list[str]:
    """Return the faults for which a file is refused."""
    with pytest.raises(InputError) as error:
        read_drawing(file, Reading(**reading))  # type: ignore[arg-type]
    assert all(fault.file == file for fault in error.value.faults)
    return [f"{fault.place}: {fault.message}" for fault in error.value.faults]


def refused_document(document: Document, folder: Path, **reading: object) -> list[str]:
    """Return the faults for which a document is refused once it is written to a file."""
    file = folder / "plate.dxf"
    document.saveas(file)
    return refused(file, **reading)


def by_ezdxf(entities: Iterable[DXFEntity], place: Matrix44 | None = None) -> Array:
    """Return the ends of the chords of ezdxf's own flattening of entities: (n, 2, 3).

    Blocks are flattened in their own coordinates, and the points mapped by ezdxf's matrices: ezdxf
    cannot turn every entity, or every reference, into one that is mapped in any way.
    """
    place = place or Matrix44()
    found = []
    for entity in entities:
        if isinstance(entity, Insert):
            for copy in entity.multi_insert():
                block = copy.block()
                assert block is not None
                found.append(by_ezdxf(block, copy.matrix44() @ place))
            continue
        parts: Iterable[DXFEntity] = [entity]
        if isinstance(entity, LWPolyline | Polyline):
            parts = entity.virtual_entities()
        for part in parts:
            points = np.array([(*point,) for point in place.transform_vertices(_flattened(part))])
            found.append(np.stack([points[:-1], points[1:]], axis=1))
    return np.concatenate(found)


def _flattened(entity: DXFEntity) -> list[Vec3]:
    match entity:
        case Line():
            return [entity.dxf.start, entity.dxf.end]
        case Circle():
            return list(entity.flattening(FINE))
        case Ellipse() | Spline():
            return list(entity.flattening(FINE, 8))
    raise TypeError(entity)


def by_pieces(drawing: Drawing) -> Array:
    """Return the ends of the chords of all pieces: one (n, 2, 3)."""
    points, piece, _ = drawing.pieces.flattened(FINE)
    ends = points[1:].copy()
    last = np.flatnonzero(np.diff(piece, append=-1))
    ends[last] = drawing.pieces.end
    return np.stack([points[:-1], ends], axis=1)


def farthest(one: Array, other: Array) -> float:
    """Return how far the ends of chords, (n, 2, 3), are from other chords, in any view [mm]."""
    worst = 0.0
    for columns in PLANES:
        tree = shapely.STRtree(np.asarray(shapely.linestrings(other[..., columns])))
        probes = shapely.points(np.unique(one[..., columns].reshape(-1, 2), axis=0))
        _, distance = tree.query_nearest(probes, return_distance=True, all_matches=False)
        worst = max(worst, float(distance.max()))
    return worst


def assert_same_curves(drawing: Drawing, entities: Iterable[DXFEntity]) -> None:
    """Compare what was read with ezdxf's own flattening, both ways and in three views."""
    ours, theirs = by_pieces(drawing), by_ezdxf(entities)
    # Blocks are stretched up to three times, twice.
    allowed = drawing.error + 10 * FINE
    assert farthest(ours, theirs) <= allowed
    assert farthest(theirs, ours) <= allowed


def ring(layout: BaseLayout) -> None:
    """Draw a closed outline of lines and arcs."""
    corners = [(0, 0, 0), (30, 0, 1), (30, 20, 0), (10, 25, -0.3), (0, 20, 0.2)]
    layout.add_lwpolyline(corners, format="xyb", close=True)


def rational(layout: BaseLayout, *, closed: bool = False) -> None:
    """Draw a spline with weights."""
    points = [(0, 0, 0), (10, 30, 5), (30, 20, 0), (40, -20, 2), (60, 0, 0), (70, 20, 1)]
    weights = [1, 3, 0.5, 1, 2, 1]
    if closed:
        layout.add_rational_spline(
            [*points, *points[:3]], [*weights, *weights[:3]], degree=3, knots=list(range(13))
        )
    else:
        layout.add_rational_spline(points, weights, degree=3)


def quintic(layout: BaseLayout) -> None:
    """Draw a spline of degree 5."""
    layout.add_open_spline([(0, 0), (5, 20), (20, 30), (40, 0), (50, 5), (60, 40), (70, 0)], 5)


def cornered(layout: BaseLayout) -> None:
    """Draw a spline with a corner: a knot as often as the degree."""
    points = [(0, 0), (5, 20), (20, 30), (40, 0), (50, 5), (60, 40), (70, 0)]
    spline = layout.add_open_spline(points, 3)
    spline.knots = [0, 0, 0, 0, 1, 1, 1, 2, 2, 2, 2]


def tangents(layout: BaseLayout) -> None:
    """Draw a spline through points with given ends."""
    spline = layout.add_spline([(0, 0), (30, 20), (60, 0), (60, 50)])
    spline.dxf.start_tangent, spline.dxf.end_tangent = (0, 1, 0), (-1, 0, 0)


POINTS_3D = [(0, 0, 0), (10, 0, 5), (10, 10, 5), (30, 5, -4)]

SHAPES: dict[str, Callable[[BaseLayout], object]] = {
    "line": lambda own: own.add_line((1, 2, 3), (40, 50, -6)),
    "arc": lambda own: own.add_arc((10, 20, 3), 30, 20, 250),
    "arc past 0": lambda own: own.add_arc((10, 20), 30, 300, 45),
    "arc turned over": lambda own: own.add_arc(
        (10, 20, 3), 30, 20, 100, dxfattribs={"extrusion": (0, 0, -1)}
    ),
    "tilted arc": lambda own: own.add_arc(
        (10, 20, 3), 30, 20, 100, dxfattribs={"extrusion": TILTED}
    ),
    "circle": lambda own: own.add_circle((10, 20, 3), 30),
    "tilted circle": lambda own: own.add_circle((1, 2), 30, dxfattribs={"extrusion": TILTED}),
    "upright circle": lambda own: own.add_circle((1, 2), 30, dxfattribs={"extrusion": (1, 0, 0)}),
    "ellipse": lambda own: own.add_ellipse((10, 20, 3), (30, 40, 0), 0.3),
    "slender ellipse": lambda own: own.add_ellipse((0, 0), (50, 0), 1e-3),
    "elliptical arc": lambda own: own.add_ellipse((1, 2), (50, 0), 0.7, 1.0, 5.5),
    "ellipse turned over": lambda own: own.add_ellipse(
        (1, 2), (50, 0), 0.7, 1.0, 5.5, dxfattribs={"extrusion": (0, 0, -1)}
    ),
    "tilted ellipse": lambda own: own.add_ellipse(
        (1, 2), (40, 30, 0), 0.7, 1.0, 5.5, dxfattribs={"extrusion": TILTED}
    ),
    "outline": ring,
    "raised polyline": lambda own: own.add_lwpolyline(
        [(0, 0, 0.5), (30, 0, -1), (50, 9, 0)], format="xyb", dxfattribs={"elevation": 7}
    ),
    "polyline turned over": lambda own: own.add_lwpolyline(
        [(0, 0, 0.5), (30, 0, -1), (50, 9, 0)],
        format="xyb",
        dxfattribs={"elevation": 7, "extrusion": (0, 0, -1)},
    ),
    "tilted polyline": lambda own: own.add_lwpolyline(
        [(0, 0, 0.5), (30, 0, -1), (50, 9, 0)], format="xyb", dxfattribs={"extrusion": TILTED}
    ),
    "old polyline": lambda own: own.add_polyline2d(
        [(0, 0, 0.5), (30, 0, -1), (50, 9, 0.2)], format="xyb", close=True
    ),
    "polyline in space": lambda own: own.add_polyline3d(POINTS_3D, close=True),
    "spline": lambda own: own.add_open_spline([(0, 0), (5, 20), (20, 30), (40, 0), (50, 5, 9)]),
    "rational spline": rational,
    "spline of degree 5": quintic,
    "spline of degree 1": lambda own: own.add_open_spline([(0, 0), (5, 20), (20, 30)], 1),
    "spline with a corner": cornered,
    "spline through points": lambda own: own.add_spline([(0, 0), (30, 20), (60, 0), (60, 50)]),
    "spline through two points": lambda own: own.add_spline([(0, 0), (30, 20)]),
    "spline with tangents": tangents,
    "circle as a spline": lambda own: own.add_rational_spline(
        BSpline.from_arc(ConstructionArc((5, 5), 20, 0, 360)).control_points,
        BSpline.from_arc(ConstructionArc((5, 5), 20, 0, 360)).weights(),
        2,
        BSpline.from_arc(ConstructionArc((5, 5), 20, 0, 360)).knots(),
    ),
}

PLACES: dict[str, dict[str, object]] = {
    "as it is": {},
    "shifted and turned": {"rotation": 33},
    "mirrored": {"xscale": -1, "rotation": 70},
    "scaled": {"xscale": 2.5, "yscale": 2.5, "zscale": 2.5, "rotation": -20},
    "stretched": {"xscale": 3, "yscale": 0.5, "rotation": 15},
    "turned over": {"extrusion": (0, 0, -1), "rotation": 15},
    "tilted": {"extrusion": TILTED, "rotation": 15},
    "tilted, stretched and mirrored": {"extrusion": TILTED, "xscale": 0.7, "yscale": -1.4},
}
