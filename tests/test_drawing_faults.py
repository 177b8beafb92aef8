"""Drawings that are damaged, impossible or hostile: read in part, or refused with reasons."""

from __future__ import annotations

import math
from contextlib import suppress
from typing import TYPE_CHECKING

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from plates import (
    FILE_DIGITS,
    SHAPES,
    new,
    refused,
    refused_document,
    reread,
)
from profileplan.errors import InputError
from profileplan.geometry.drawing import MOST_PIECES, Reading, read_drawing

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from ezdxf.entities.dxfentity import DXFEntity
    from ezdxf.layouts.base import BaseLayout


@pytest.mark.parametrize("version", ["R12", "R2010"])
def test_files_that_were_cut_off_are_read_as_far_as_possible(version: str, tmp_path: Path) -> None:
    """All entities but the one that was cut, with a note; a file cut in its header draws none."""
    document = new(version)
    for number in range(100):
        document.modelspace().add_line((1, number), (2, number))
    file = tmp_path / "cut.dxf"
    document.saveas(file)
    text = file.read_text()
    begin = text.index("ENTITIES\n")
    for cut in (begin + 3000, begin + 3001, begin + 3017):
        file.write_text(text[:cut])
        drawing = read_drawing(file)
        count = text[begin:cut].count("LINE\n") - 1
        assert count > 10
        assert_array_equal(drawing.pieces.start[:, :2], [[1, row] for row in range(count)])
        assert_array_equal(drawing.pieces.end[:, :2], [[2, row] for row in range(count)])
        assert "damaged" in drawing.notes[0]
    file.write_text(text[:300])
    assert len(read_drawing(file).pieces) == 0


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "is empty"),
        (b"PK\x03\x04" + bytes(100), "is a ZIP archive"),
        (b"AC1032" + bytes(100), "is a DWG file"),
        (np.random.default_rng(1).bytes(9999), "is not a DXF file"),
        (b"x, y\n1, 2\n", "is not a DXF file"),
        (b"0\nSECTION\n2\nENTITIES\nx\nLINE\n0\nENDSEC\n0\nEOF\n", "cannot be read as a DXF file"),
    ],
)
def test_files_of_other_kinds_are_refused(content: bytes, message: str, tmp_path: Path) -> None:
    """With one sentence that says what was found."""
    file = tmp_path / "plate.dxf"
    file.write_bytes(content)
    (fault,) = refused(file)
    assert message in fault


def test_what_is_no_file_is_refused(tmp_path: Path) -> None:
    """A missing one and a directory."""
    assert refused(tmp_path / "none.dxf") == [": no such file"]
    assert "is a directory" in refused(tmp_path)[0]


def test_blocks_that_draw_themselves_are_refused(tmp_path: Path) -> None:
    """Directly or in a ring: there is no end to them."""
    for names in (["A"], ["A", "B", "C"]):
        document = new()
        for name, inner in zip(names, [*names[1:], names[0]], strict=True):
            document.blocks.new(name).add_blockref(inner, (1, 0))
        document.modelspace().add_blockref("A", (0, 0))
        (fault,) = refused_document(document, tmp_path)
        assert "draws itself" in fault
        assert all(f'"{name}"' in fault for name in names)


def test_blocks_that_explode_are_refused_before_they_do(tmp_path: Path) -> None:
    """Thirty blocks of ten references each would draw 10^30 lines; an array of 10^12 as well."""
    document = new()
    document.blocks.new("N0").add_line((0, 0), (1, 0))
    for level in range(1, 31):
        block = document.blocks.new(f"N{level}")
        for number in range(10):
            block.add_blockref(f"N{level - 1}", (number, 0))
    model = document.modelspace()
    model.add_blockref("N30", (0, 0))
    (fault,) = refused_document(document, tmp_path)
    assert "10^30" in fault
    assert f"{MOST_PIECES:,}" in fault
    model.delete_all_entities()
    grid = {"row_count": 10**6, "column_count": 10**6, "row_spacing": 1, "column_spacing": 1}
    model.add_blockref("N0", (0, 0), dxfattribs=grid)
    (fault,) = refused_document(document, tmp_path)
    assert "entities" in fault


def test_deep_blocks_are_no_harm(tmp_path: Path) -> None:
    """A thousand blocks, each in the next."""
    document = new()
    document.blocks.new("N0").add_line((0, 0), (1, 0))
    for level in range(1, 1001):
        document.blocks.new(f"N{level}").add_blockref(f"N{level - 1}", (0.5, 0))
    document.modelspace().add_blockref("N1000", (0, 0))
    assert_allclose(reread(document, tmp_path).pieces.start, [[500, 0, 0]], FILE_DIGITS)


@pytest.mark.parametrize(
    ("draw", "message"),
    [
        (lambda own: own.add_line((0, 0), (math.nan, 0)), "no finite number"),
        (lambda own: own.add_circle((0, math.inf), 3), "no finite number"),
        (lambda own: own.add_lwpolyline([(0, 0), (math.nan, 0), (1, 1)]), "no finite number"),
        (lambda own: own.add_line((0, 0), (3e8, 0)), "reaches 3e+08 mm"),
        (lambda own: own.add_arc((0, 0), 3e7, 0, 30), "reaches 3e+07 mm"),
        (lambda own: own.add_lwpolyline([(0, 0, 1e9), (1, 0, 0)], format="xyb"), "reaches"),
        (lambda own: own.add_circle((0, 0), -5), "radius of -5"),
        (lambda own: own.add_ellipse((0, 0), (1e9, 0), 0.3), "reaches 1e+09 mm"),
        (lambda own: own.add_spline([(0, 0), (math.nan, 1), (2, 2)]), "no numbers"),
    ],
)
def test_impossible_numbers_are_faults_of_their_entity(
    draw: Callable[[BaseLayout], DXFEntity], message: str, tmp_path: Path
) -> None:
    """Named by handle and layer."""
    document = new()
    entity = draw(document.modelspace())
    entity.dxf.layer = "EDGE"
    (fault,) = refused_document(document, tmp_path)
    assert fault.startswith(f"{entity.dxftype()} {entity.dxf.handle}: ")
    assert '"EDGE"' in fault
    assert message in fault


@pytest.mark.parametrize(
    ("knots", "weights", "degree", "message"),
    [
        ([0, 0, 0, 1, 1, 1], [], 3, "6 knots; 4 control points need 8"),
        ([0, 0, 0, 0, 2, 1, 1, 1], [], 3, "knots fall"),
        ([0, 0, 0, math.nan, 1, 1, 1, 1], [], 3, "no numbers"),
        ([0, 0, 0, 0, 1, 1, 1, 1], [1, 0, 1, 1], 3, "weights"),
        ([0, 0, 0, 0, 1, 1, 1, 1], [1, 1], 3, "2 weights"),
        ([0, 0, 0.5, 0.5, 1, 1], [], 1, "gap"),
        ([], [], 7, "at least 8 are needed"),
    ],
)
def test_impossible_splines_are_faults(
    knots: list[float], weights: list[float], degree: int, message: str, tmp_path: Path
) -> None:
    """Each says what it needs."""
    document = new()
    spline = document.modelspace().add_open_spline([(0, 0), (1, 2), (3, 2), (4, 0)], 3)
    spline.dxf.degree, spline.knots, spline.weights = degree, knots, weights
    (fault,) = refused_document(document, tmp_path)
    assert fault.startswith(f"SPLINE {spline.dxf.handle}: ")
    assert message in fault


def test_many_faults_are_listed_in_part(tmp_path: Path) -> None:
    """Nobody reads a hundred."""
    document = new()
    for number in range(100):
        document.modelspace().add_line((0, number), (math.nan, 0))
    faults = refused_document(document, tmp_path)
    assert len(faults) == 21
    assert faults[-1] == ": and 80 more"


VALUES = ["nan", "inf", "-1", "0", "1e300", "abc", "", "99999999999", "2", "1e8", "TRAY", "INSERT"]


@given(
    changes=st.lists(st.tuples(st.floats(0, 1), st.sampled_from(VALUES)), min_size=1, max_size=6)
)
@settings(max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_no_file_breaks_the_reader(changes: list[tuple[float, str]], tmp_path: Path) -> None:
    """Lines changed at random: all numbers of what is read are finite, or there are faults."""
    document = new()
    block = document.blocks.new("TRAY")
    for shape in SHAPES.values():
        shape(block)
        shape(document.modelspace())
    document.modelspace().add_blockref("TRAY", (1, 2), dxfattribs={"row_count": 2})
    file = tmp_path / "plate.dxf"
    if not file.exists():
        document.saveas(file)
        (tmp_path / "lines").write_text(file.read_text())
    lines = (tmp_path / "lines").read_text().split("\n")
    first = lines.index("BLOCKS")
    for share, value in changes:
        # values stand in every second line
        lines[(first + int(share * (len(lines) - first - 9))) | 1] = value
    file.write_text("\n".join(lines))
    with suppress(InputError):
        drawing = read_drawing(file, Reading(error=0.1))
        own = drawing.pieces
        assert np.isfinite([own.start, own.end]).all()
        assert np.isfinite(own.length).all()
        assert len(drawing.entities) == own.source.max(initial=-1) + 1
