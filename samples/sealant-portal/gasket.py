"""The gasket of a kiln door, seen from above: writes ``gasket.dxf`` beside this file.

``python gasket.py [FILE]``. Every run writes the same bytes. One slot has a gap of 0.006 mm, as
drawing by hand leaves them.
"""
# ruff: noqa: INP001 - a script beside what it writes, no module of a package

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING

import ezdxf
from ezdxf import units

if TYPE_CHECKING:
    from ezdxf.document import Drawing
    from ezdxf.layouts import Modelspace

WIDTH, HEIGHT = 360.0, 240.0
CORNER = 30.0
"""Radius of the outer corners."""

QUARTER = 0.41421356237309503
"""Bulge of a quarter of a circle: the tangent of 22.5 degrees."""

SLOT_LENGTH, SLOT_RADIUS = 100.0, 6.0
"""From centre to centre of a slot's round ends."""

GAP = 0.006

BOLT_HOLES = ((24.0, 44.0), (24.0, 120.0), (24.0, 196.0), (64.0, 90.0))
BOLT_RADIUS = 4.5


def gasket() -> Drawing:
    """Return the drawing, in mm."""
    drawing = ezdxf.new("R2010", units=units.MM)
    for name, color in (("BEAD", 1), ("HOLES", 5), ("TEXT", 7), ("HIDDEN", 8)):
        drawing.layers.add(name, color=color)
    drawing.layers.get("HIDDEN").freeze()
    block = drawing.blocks.new("BOLTS")
    for centre in BOLT_HOLES:
        block.add_circle(centre, BOLT_RADIUS, dxfattribs={"layer": "HOLES"})
    model = drawing.modelspace()
    outside(model)
    slot(model, WIDTH / 2, 30.0, gap=GAP)
    slot(model, WIDTH / 2, HEIGHT - 24.0, gap=0.0)
    window(model)
    model.add_blockref("BOLTS", (0.0, 0.0), dxfattribs={"layer": "HOLES"})
    mirrored = {"layer": "HOLES", "xscale": -1.0}
    model.add_blockref("BOLTS", (WIDTH, 0.0), dxfattribs=mirrored)
    words(model)
    return drawing


def outside(model: Modelspace) -> None:
    """Draw the outer edge: a rectangle with round corners, anticlockwise."""
    right, top = WIDTH - CORNER, HEIGHT - CORNER
    corners = [
        (CORNER, 0.0, 0.0),
        (right, 0.0, QUARTER),
        (WIDTH, CORNER, 0.0),
        (WIDTH, top, QUARTER),
        (right, HEIGHT, 0.0),
        (CORNER, HEIGHT, QUARTER),
        (0.0, top, 0.0),
        (0.0, CORNER, QUARTER),
    ]
    model.add_lwpolyline(corners, format="xyb", close=True, dxfattribs={"layer": "BEAD"})


def slot(model: Modelspace, x: float, y: float, *, gap: float) -> None:
    """Draw a slot about a point as four pieces, neither in order nor in one direction."""
    left, right = x - SLOT_LENGTH / 2, x + SLOT_LENGTH / 2
    low, high = y - SLOT_RADIUS, y + SLOT_RADIUS
    on = {"layer": "BEAD"}
    model.add_line((left, low), (right, low), dxfattribs=on)
    model.add_arc((left, y), SLOT_RADIUS, 90.0, 270.0, dxfattribs=on)
    model.add_line((left, high), (right - gap, high), dxfattribs=on)
    model.add_arc((right, y), SLOT_RADIUS, 270.0, 90.0, dxfattribs=on)


def window(model: Modelspace) -> None:
    """Draw the window: straight below, a spline as an arch above, ends in any order."""
    on = {"layer": "BEAD"}
    arch = [(260, 130), (260, 168), (216, 184), (180, 184), (144, 184), (100, 168), (100, 130)]
    model.add_line((100, 68), (260, 68), dxfattribs=on)
    model.add_open_spline([(x, y, 0) for x, y in arch], degree=3, dxfattribs=on)
    model.add_line((260, 130), (260, 68), dxfattribs=on)
    model.add_line((100, 130), (100, 68), dxfattribs=on)


def words(model: Modelspace) -> None:
    """Draw what is for people: a title, and on the frozen layer a note with its measure."""
    model.add_text("KILN DOOR GASKET", height=8, dxfattribs={"layer": "TEXT", "insert": (118, 100)})
    on = {"layer": "HIDDEN"}
    model.add_text("fits the doors of kilns 1 to 3", height=5, dxfattribs=on | {"insert": (0, -18)})
    model.add_line((0, -30), (WIDTH, -30), dxfattribs=on)
    model.add_line((0, -34), (0, -26), dxfattribs=on)
    model.add_line((WIDTH, -34), (WIDTH, -26), dxfattribs=on)
    model.add_text("360", height=5, dxfattribs=on | {"insert": (174, -28)})


def main() -> None:
    """Write the drawing."""
    file = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).with_suffix(".dxf")
    # No times and no random numbers in the header.
    ezdxf.options.write_fixed_meta_data_for_testing = True
    gasket().saveas(file)


if __name__ == "__main__":
    main()
