"""Drawings: what is drawn where, against ezdxf's own curves; what is left out; what is refused."""

from __future__ import annotations

import math
from collections import Counter
from typing import TYPE_CHECKING

import numpy as np
import pytest
from ezdxf.filemanagement import new as new_document
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy.special import ellipe

from plates import (
    FILE_DIGITS,
    PLACES,
    ROUNDING,
    SHAPES,
    assert_same_curves,
    new,
    refused,
    reread,
    ring,
)
from profileplan.geometry.drawing import Reading, Skipped, read_drawing
from profileplan.geometry.shapes import Outline

if TYPE_CHECKING:
    from pathlib import Path

    from ezdxf.document import Drawing as Document


@pytest.mark.parametrize("shape", SHAPES)
def test_every_kind_of_entity_is_followed(shape: str, tmp_path: Path) -> None:
    """Against ezdxf's own flattening, both ways, in plan and in height."""
    document = new()
    SHAPES[shape](document.modelspace())
    drawing = reread(document, tmp_path)
    assert drawing.skipped == ()
    assert drawing.error <= Reading().error
    assert_same_curves(drawing, document.modelspace())


@pytest.mark.parametrize("place", PLACES)
def test_blocks_are_drawn_as_ezdxf_draws_them(place: str, tmp_path: Path) -> None:
    """Every kind of entity, mapped in every way, inside another block with another map."""
    document = new()
    block = document.blocks.new("TRAY", base_point=(3, 4, 5))
    for draw in SHAPES.values():
        draw(block)
    outer = document.blocks.new("PALLET")
    outer.add_blockref("TRAY", (10, 20, 30), dxfattribs=PLACES[place])
    outer.add_blockref("TRAY", (-300, 20), dxfattribs={"rotation": 90, "yscale": -1})
    model = document.modelspace()
    model.add_blockref("PALLET", (5, 6, 7), dxfattribs={**PLACES[place], "zscale": 1.5})
    drawing = reread(document, tmp_path)
    assert len(drawing.entities) == 2 * len(SHAPES)
    assert_same_curves(drawing, model)


def test_arrays_of_blocks_are_drawn_as_ezdxf_draws_them(tmp_path: Path) -> None:
    """The grid is turned, but not scaled, with the reference."""
    document = new()
    ring(document.blocks.new("TILE"))
    model = document.modelspace()
    grid = {"row_count": 2, "column_count": 3, "row_spacing": 50, "column_spacing": 70}
    own = {"rotation": 30, "xscale": 0.5, "yscale": 0.5}
    model.add_blockref("TILE", (5, 6), dxfattribs={**grid, **own})
    document.blocks.new("ROW").add_blockref("TILE", (0, 0), dxfattribs=grid)
    model.add_blockref("ROW", (300, 0), dxfattribs={"rotation": -20, "xscale": -1, **grid})
    drawing = reread(document, tmp_path)
    assert_same_curves(drawing, model)
    assert len(drawing.entities) == 6 + 36


def test_arcs_stay_arcs_where_the_map_allows(tmp_path: Path) -> None:
    """Turned, scaled and mirrored they keep their bulge; stretched they must be followed."""
    document = new()
    block = document.blocks.new("TRAY")
    ring(block)
    block.add_circle((0, 0), 5)
    model = document.modelspace()
    model.add_blockref("TRAY", (5, 6), dxfattribs={"rotation": 33, "xscale": 2, "yscale": 2})
    model.add_blockref("TRAY", (5, 6), dxfattribs={"rotation": 33, "xscale": -2, "yscale": 2})
    drawing = reread(document, tmp_path)
    drawn = [0, 1, 0, -0.3, 0.2]
    assert_array_equal(drawing.pieces.bulge, [*drawn, 1, 1, *(-b for b in drawn), -1, -1])
    assert_allclose(drawing.pieces.radius[[5, 6]], 10, FILE_DIGITS)
    assert drawing.error == 0
    model.add_blockref("TRAY", (5, 6), dxfattribs={"xscale": 1.01})
    assert 0 < reread(document, tmp_path).error <= Reading().error


def test_pieces_of_an_entity_follow_each_other_to_the_last_bit(tmp_path: Path) -> None:
    """So that chains need no tolerance; closed ones close."""
    document = new()
    block = document.blocks.new("TRAY")
    closed = ["circle", "tilted circle", "ellipse", "outline", "old polyline", "circle as a spline"]
    for shape in ["spline with a corner", "arc past 0", "tilted polyline", *closed]:
        SHAPES[shape](block)
    stretched = {"xscale": 1.3, "rotation": 20}
    document.modelspace().add_blockref("TRAY", (1 / 3, 0.1), dxfattribs=stretched)
    pieces = reread(document, tmp_path).pieces
    for source in range(9):
        own = np.flatnonzero(pieces.source == source)
        assert own.size > 0
        assert_array_equal(np.diff(own), 1)
        assert_array_equal(pieces.end[own[:-1]], pieces.start[own[1:]])
        if source >= 3:
            assert_array_equal(pieces.end[own[-1]], pieces.start[own[0]])


def test_entities_come_in_drawn_order_however_deep_they_are(tmp_path: Path) -> None:
    """Blocks are expanded by kind, not in order, so the order is to be proven."""
    document = new()
    leaf = document.blocks.new("LEAF")
    leaf.add_line((0, 0), (1, 0))
    twig = document.blocks.new("TWIG")
    twig.add_blockref("LEAF", (0, 0))
    twig.add_line((1, 0), (2, 0))
    twig.add_blockref("LEAF", (2, 0))
    model = document.modelspace()
    model.add_blockref("TWIG", (0, 0), dxfattribs={"column_count": 2, "column_spacing": 3})
    model.add_arc((6.5, 0), 0.5, 180, 0)
    model.add_blockref("LEAF", (7, 0))
    drawing = reread(document, tmp_path)
    assert_allclose(drawing.pieces.start[:, 0], np.arange(8), atol=ROUNDING)
    kinds = [entity.kind for entity in drawing.entities]
    twigs = ["LINE in block LEAF", "LINE in block TWIG", "LINE in block LEAF"]
    assert kinds == [*twigs, *twigs, "ARC", "LINE in block LEAF"]
    handles = [entity.dxf.handle for entity in model]
    assert [entity.handle for entity in drawing.entities] == [handles[0]] * 6 + handles[1:]


def test_boundaries_of_hatches_are_read_on_request(tmp_path: Path) -> None:
    """Both kinds of boundaries, every kind of edge, against areas and lengths in closed form."""
    document = new()
    hatch = document.modelspace().add_hatch()
    hatch.paths.add_polyline_path([(0, 0), (10, 0, 1), (10, 10)], is_closed=True)
    edges = hatch.paths.add_edge_path()
    edges.add_line((20, 0), (30, 0))
    edges.add_arc((30, 5), 5, 270, 90, ccw=True)
    edges.add_ellipse((25, 10), (5, 0), 0.5, 0, 180, ccw=True)
    edges.add_spline(control_points=[(20, 10), (19, 7), (21, 3), (20, 0)], degree=3)
    edges.add_arc((50, 5), 5, 90, 270, ccw=False)
    hidden = reread(document, tmp_path)
    assert len(hidden.pieces) == 0
    assert [skip.kind for skip in hidden.skipped] == ["HATCH"]
    drawing = reread(document, tmp_path, hatches=True)
    assert {entity.kind for entity in drawing.entities} == {"HATCH"}
    pieces = drawing.pieces
    half_ellipse = 2 * 5 * ellipe(1 - 0.5**2)
    expected = [10 + 5 * math.pi + math.hypot(10, 10), 10, 5 * math.pi, half_ellipse]
    lengths = np.bincount(pieces.source, pieces.length)
    assert_allclose(lengths[:4], expected, rtol=1e-4)
    assert_allclose(lengths[5], 5 * math.pi, FILE_DIGITS)
    clockwise = np.flatnonzero(pieces.source == 5)
    assert_allclose(pieces.start[clockwise[0], :2], [50, 0], atol=ROUNDING)
    assert (pieces.bulge[clockwise] < 0).all()


@pytest.mark.parametrize(
    ("code", "name", "scale"),
    [(1, "inch", 25.4), (2, "ft", 304.8), (4, "mm", 1), (5, "cm", 10), (6, "m", 1000)],
)
def test_the_drawing_says_its_unit(code: int, name: str, scale: float, tmp_path: Path) -> None:
    """An inch taken as a millimetre is the most expensive mistake that a reader can make."""
    document = new(unit=code)
    document.modelspace().add_line((0, 0), (3, 0))
    drawing = reread(document, tmp_path)
    assert (drawing.unit, drawing.scale, drawing.unit_source) == (name, scale, "drawing")
    assert drawing.notes == ()
    assert_allclose(drawing.pieces.end, [[3 * scale, 0, 0]], FILE_DIGITS)
    given = reread(document, tmp_path, unit="m")
    assert (given.unit, given.unit_source) == ("m", "given")
    assert given.pieces.end[0, 0] == 3000


@pytest.mark.parametrize(("measurement", "unit"), [(0, "inch"), (1, "mm")])
def test_without_a_unit_the_measurement_counts(measurement: int, unit: str, tmp_path: Path) -> None:
    """And the report says so."""
    document = new(unit=0)
    document.header["$MEASUREMENT"] = measurement
    document.modelspace().add_line((0, 0), (3, 0))
    drawing = reread(document, tmp_path)
    assert (drawing.unit, drawing.unit_source) == (unit, "measurement")
    assert "$MEASUREMENT" in drawing.notes[0]


BARE = "0\nSECTION\n2\nENTITIES\n0\nLINE\n8\n0\n10\n0\n20\n0\n11\n3\n21\n0\n0\nENDSEC\n0\nEOF\n"


def test_a_file_that_says_no_unit_is_taken_as_mm(tmp_path: Path) -> None:
    """Files without a header carry none, whatever defaults a library holds for it."""
    file = tmp_path / "bare.dxf"
    file.write_text(BARE)
    drawing = read_drawing(file)
    assert (drawing.unit, drawing.scale, drawing.unit_source) == ("mm", 1, "none")
    assert "taken as mm" in drawing.notes[0]
    assert_array_equal(drawing.pieces.end, [[3, 0, 0]])


@pytest.mark.parametrize("version", ["R12", "R2000", "R2004", "R2007", "R2010", "R2013", "R2018"])
@pytest.mark.parametrize("form", ["asc", "bin"])
def test_all_versions_are_read(version: str, form: str, tmp_path: Path) -> None:
    """As text and binary."""
    document = new_document(version)
    document.modelspace().add_polyline2d([(0, 0, 0.5), (30, 0, 0)], format="xyb")
    file = tmp_path / "plate.dxf"
    document.saveas(file, fmt=form)
    assert_array_equal(read_drawing(file).pieces.bulge, [0.5])


def test_what_is_left_out_is_listed(tmp_path: Path) -> None:
    """Once for each kind, layer and reason."""
    document = new()
    model = document.modelspace()
    block = document.blocks.new("BOLTS")
    block.add_text("M8")
    for _ in range(3):
        model.add_text("sealant", dxfattribs={"layer": "NOTES"})
        model.add_blockref("BOLTS", (0, 0), dxfattribs={"layer": "HOLES"})
    model.add_point((0, 0))
    model.add_line((1, 1), (1, 1))
    model.add_circle((1, 1), 0)
    model.add_lwpolyline([(1, 1)])
    model.add_blockref("BOLTS", (0, 0)).dxf.unprotected_set("xscale", 0.0)
    model.add_blockref("NOWHERE", (0, 0))
    model.add_xline((0, 0), (1, 0))
    model.add_3dface([(0, 0), (1, 0), (1, 1)])
    drawing = reread(document, tmp_path)
    assert len(drawing.pieces) == 0
    assert Counter(drawing.skipped) == Counter(
        [
            Skipped("TEXT", "NOTES", "a text", 3),
            Skipped("TEXT in block BOLTS", "HOLES", "a text", 3),
            Skipped("POINT", "0", "a point", 1),
            Skipped("LINE", "0", "no length", 1),
            Skipped("CIRCLE", "0", "no length", 1),
            Skipped("LWPOLYLINE", "0", "no length", 1),
            Skipped("INSERT", "0", "a block reference of scale 0", 1),
            Skipped("INSERT", "0", "of a block that is not in the drawing", 1),
            Skipped("XLINE", "0", "endless", 1),
            Skipped("3DFACE", "0", "a body or a surface", 1),
        ]
    )


def hidden_plate() -> Document:
    """Return a document of lines on layers in all states, and in blocks on such layers."""
    document = new()
    document.layers.add("COLD").freeze()
    document.layers.add("DARK").off()
    document.layers.add("SCREEN").dxf.plot = 0
    model = document.modelspace()
    block = document.blocks.new("BOLTS")
    for number, layer in enumerate(["0", "EDGE", "COLD", "DARK", "SCREEN", "Defpoints"]):
        model.add_line((0, number), (1, number), dxfattribs={"layer": layer})
        block.add_line((0, number), (1, number), dxfattribs={"layer": layer})
    model.add_line((0, 9), (1, 9), dxfattribs={"invisible": 1})
    for layer in ["EDGE", "COLD", "DARK"]:
        model.add_blockref("BOLTS", (0, 0), dxfattribs={"layer": layer})
    return document


def test_layers_are_drawn_as_a_person_sees_them(tmp_path: Path) -> None:
    """Freezing the layer of a reference hides all in it; switching it off only what is on "0"."""
    drawing = reread(hidden_plate(), tmp_path)
    seen = Counter((entity.kind, entity.layer) for entity in drawing.entities)
    inside = "LINE in block BOLTS"
    assert seen == {
        ("LINE", "0"): 1,
        ("LINE", "EDGE"): 1,
        (inside, "EDGE"): 3,
    }
    skipped = {(skip.kind, skip.layer, skip.reason): skip.count for skip in drawing.skipped}
    assert skipped["INSERT", "COLD", "on a frozen layer"] == 1
    assert skipped[inside, "DARK", "on a layer that is switched off"] == 3
    assert skipped["LINE", "SCREEN", "on a layer that is not plotted"] == 1
    assert skipped["LINE", "0", "invisible"] == 1
    assert len(reread(hidden_plate(), tmp_path, hidden=True).entities) == 7 + 18
    assert set(drawing.layers) == {"0", "Defpoints", "COLD", "DARK", "SCREEN", "EDGE"}


def test_only_the_layers_asked_for_are_read(tmp_path: Path) -> None:
    """In any case, as in DXF; an unknown one is a fault that lists those there are."""
    drawing = reread(hidden_plate(), tmp_path, layers=("edge",))
    assert {entity.layer for entity in drawing.entities} == {"EDGE"}
    faults = refused(drawing.file, layers=("EDGES", "x"), unit="furlong", error=0.0)
    assert len(faults) == 4
    assert 'there is no layer "EDGES"' in faults[2]
    assert 'did you mean "EDGE"' in faults[2]
    (fault,) = refused(drawing.file, space="Sheet")
    assert '"model", "Layout1"' in fault


def test_a_layout_is_read_by_its_name(tmp_path: Path) -> None:
    """Model space is the default."""
    document = new()
    document.modelspace().add_line((0, 0), (1, 0))
    document.layout("Layout1").add_line((0, 0), (2, 0))
    assert reread(document, tmp_path).pieces.end[0, 0] == 1
    assert reread(document, tmp_path, space="layout1").pieces.end[0, 0] == 2


def test_an_ellipse_is_as_long_as_the_elliptic_integral_says(tmp_path: Path) -> None:
    """Source: circumference 4 a E(e), NIST Handbook of Mathematical Functions 19.30(i), memory."""
    document = new()
    document.modelspace().add_ellipse((3, 4), (0, 100), 0.3)
    pieces = reread(document, tmp_path, error=1e-5).pieces
    assert_allclose(pieces.length.sum(), 400 * ellipe(1 - 0.3**2), rtol=1e-8)
    area = Outline(pieces, closed=True, layer="0").area
    # within the error along the whole outline
    assert_allclose(area, math.pi * 100 * 30, atol=1e-5 * pieces.length.sum())


def test_a_parabola_is_as_long_and_holds_as_much_as_archimedes_says(tmp_path: Path) -> None:
    """A spline of degree 2: area 4/3 of its triangle; length in closed form (from memory)."""
    document = new()
    document.modelspace().add_open_spline([(-50, 0), (0, 100), (50, 0)], 2)
    document.modelspace().add_line((50, 0), (-50, 0))
    pieces = reread(document, tmp_path, error=1e-5).pieces
    curve = pieces.source == 0
    # y = 50 - x² / 50, from -50 to 50: slope 2 at the ends
    length = 50 * math.sqrt(1 + 2**2) + 25 * math.asinh(2)
    assert_allclose(pieces.length[curve].sum(), length, rtol=1e-8)
    area = -Outline(pieces, closed=True, layer="0").area
    assert_allclose(area, 4 / 3 * (0.5 * 100 * 50), rtol=1e-7)


@given(
    turn=st.floats(0, 360),
    scale=st.floats(0.1, 10),
    mirrored=st.booleans(),
    shift=st.tuples(st.floats(-500, 500), st.floats(-500, 500)),
)
@settings(max_examples=15, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_a_moved_drawing_has_the_moved_pieces(
    turn: float, scale: float, mirrored: bool, shift: tuple[float, float], tmp_path: Path
) -> None:
    """Shifted, turned, scaled or mirrored: exact shapes keep their bulges."""
    document = new()
    block = document.blocks.new("PLATE")
    model = document.modelspace()
    for layout in (block, model):
        ring(layout)
        layout.add_arc((10, 20), 30, 20, 250)
        layout.add_circle((10, 20, 3), 30)
    still = reread(document, tmp_path).pieces
    model.delete_all_entities()
    side = -scale if mirrored else scale
    model.add_blockref(
        "PLATE", shift, dxfattribs={"rotation": turn, "xscale": side, "yscale": scale}
    )
    moved = reread(document, tmp_path).pieces
    angle = math.radians(turn)
    matrix = np.array([[math.cos(angle), -math.sin(angle)], [math.sin(angle), math.cos(angle)]])
    for before, after in ((still.start, moved.start), (still.end, moved.end)):
        expected = before[:, :2] * [side, scale] @ matrix.T + shift
        assert_allclose(after[:, :2], expected, atol=ROUNDING)
    assert_allclose(moved.bulge, still.bulge * (-1 if mirrored else 1), FILE_DIGITS)
