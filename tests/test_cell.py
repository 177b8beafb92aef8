"""The cell is made of keep-outs and bodies, and grown so that nothing is forgotten."""

from __future__ import annotations

import math
import os
from typing import TYPE_CHECKING

import numpy as np
import pytest
import shapely
from ezdxf.filemanagement import new as new_document
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from shapely import affinity

import profileplan as pp
from profileplan.geometry.cell import blocks, bodies, difference, judge, obstacles
from profileplan.inputs.machine import Circle, Keepout, Tool

if TYPE_CHECKING:
    from pathlib import Path

HOOK = ((0.0, 0.0), (40.0, 0.0), (40.0, 30.0), (30.0, 30.0), (30.0, 10.0), (0.0, 10.0))
GRIPPER = ((-6.0, -4.0), (9.0, -4.0), (9.0, 1.0), (2.0, 1.0), (2.0, 7.0), (-6.0, 7.0))


def machine(
    *keepouts: Keepout, axes: str = "xyz", up: str | None = "+z", tool: Tool | None = None
) -> pp.Machine:
    """Return a machine with room; c is a rotary axis."""
    own = tuple(
        pp.Axis(
            name,
            kind="rotary" if name == "c" else "linear",
            travel=(-1000.0, 1000.0),
            velocity=1000.0,
            acceleration=8000.0,
        )
        for name in axes
    )
    return pp.Machine("cell", own, up=up, tool=tool or Tool(), keepouts=keepouts)


POST = Keepout("post", circle=Circle(100.0, 50.0, 20.0), top=180.0)


def drawn(file: Path, *outlines: tuple[tuple[float, float], ...], closed: bool = True) -> None:
    """Write a drawing in mm with polylines and a circle on layer POSTS, and a line elsewhere."""
    document = new_document(units=4)
    document.layers.add("POSTS")
    space = document.modelspace()
    for outline in outlines:
        space.add_lwpolyline(outline, close=closed, dxfattribs={"layer": "POSTS"})
    space.add_circle((200, 0), 25, dxfattribs={"layer": "POSTS"})
    space.add_line((0, 0), (5, 5), dxfattribs={"layer": "0"})
    document.saveas(file)


def test_a_circle_is_grown_to_a_circle() -> None:
    """Post, tool and margin are added; the polygon contains the circle and hardly more."""
    cell = machine(POST, tool=Tool(radius=45.0, margin=5.0))
    (obstacle,) = obstacles(cell, None)
    exact = 20.0 + 45.0 + 5.0
    corners = shapely.get_coordinates(obstacle.outline) - (100.0, 50.0)
    sides = shapely.Point(100.0, 50.0).distance(obstacle.outline.boundary)
    assert exact <= sides
    assert_allclose(np.hypot(*corners.T), exact, rtol=1e-4)
    assert (obstacle.name, obstacle.body, obstacle.top) == ("post", "tool", 185.0)


def test_a_part_adds_its_footprint_and_its_depth() -> None:
    """What hangs at the tool is wider, and needs more height, than the tool alone."""
    cell = machine(POST, tool=Tool(radius=10.0, margin=5.0))
    tool, part = obstacles(cell, pp.Payload(radius=150.0, below=12.0))
    assert (tool.body, tool.top, part.body, part.top) == ("tool", 185.0, "part", 197.0)
    assert_allclose(part.outline.bounds, (-75.0, -125.0, 275.0, 225.0), atol=0.02)


@pytest.mark.parametrize("payload", [None, pp.Payload(), pp.Payload(mass=3.0)])
def test_a_part_without_size_is_none(payload: pp.Payload | None) -> None:
    """Mass alone cannot hit anything."""
    assert [body.name for body in bodies(machine(POST), payload)] == ["tool"]


def test_depth_alone_makes_a_part() -> None:
    """A rod below the tool point hits what the tool passes over."""
    body = bodies(machine(POST), pp.Payload(below=30.0))[1]
    assert (body.name, body.below, body.footprint.geom_type) == ("part", 30.0, "Point")


def test_heights_are_counted_upward_on_an_axis_that_counts_downward() -> None:
    """A top of z = 180 on such a machine is at height -180."""
    cell = machine(POST, up="-z", tool=Tool(margin=5.0))
    assert blocks(cell)[0].top == -180.0
    assert obstacles(cell, None)[0].top == -175.0


def test_nothing_is_low_on_a_flat_machine() -> None:
    """Without an up axis there is no way over a keep-out."""
    cell = machine(Keepout("post", circle=Circle(0.0, 0.0, 1.0)), axes="xy", up=None)
    assert blocks(cell)[0].top == math.inf
    assert obstacles(cell, None)[0].top == math.inf


@pytest.mark.parametrize("of", ["tool", "part"])
def test_a_rotary_axis_makes_an_outline_sweep_a_circle(of: str) -> None:
    """How the tool is turned is not followed, so every turn is kept clear."""
    tool = Tool(outline=GRIPPER) if of == "tool" else Tool()
    part = pp.Payload(outline=GRIPPER) if of == "part" else None
    still = bodies(machine(POST, tool=tool), part)[-1].footprint
    turning = bodies(machine(POST, axes="xyzc", tool=tool), part)[-1].footprint
    farthest = max(math.hypot(x, y) for x, y in GRIPPER)
    assert still.equals(shapely.Polygon(GRIPPER))
    for angle in range(0, 360, 15):
        assert turning.contains(affinity.rotate(still, angle, origin=(0, 0)))
    assert_allclose(turning.area, math.pi * farthest**2, rtol=1e-3)


@given(
    x=st.floats(-30.0, 70.0),
    y=st.floats(-30.0, 60.0),
    margin=st.sampled_from([0.0, 0.5, 8.0]),
    radius=st.sampled_from([None, 3.0, 20.0]),
)
@settings(max_examples=300)
def test_the_tool_touches_exactly_where_the_obstacle_is(
    x: float, y: float, margin: float, radius: float | None
) -> None:
    """Distance of tool and keep-out, placed by shapely, tells the same; outlines are not convex."""
    tool = Tool(outline=None if radius else GRIPPER, radius=radius, margin=margin)
    (obstacle,) = obstacles(machine(Keepout("hook", outline=HOOK), tool=tool), None)
    placed = (
        shapely.Point(x, y) if radius else shapely.Polygon([(x + a, y + b) for a, b in GRIPPER])
    )
    apart = placed.distance(shapely.Polygon(HOOK)) - (radius or 0.0) - margin
    here = shapely.Point(x, y)
    if apart < -1e-9:
        assert obstacle.outline.intersects(here)
    if apart > 1e-4 * ((radius or 0.0) + margin) + 1e-9:
        assert not obstacle.outline.intersects(here)


def test_a_sum_of_convex_outlines_has_the_area_of_the_formula() -> None:
    """Squares of sides a and b make one of side a + b (Minkowski sum; value from memory)."""
    whole = difference(shapely.box(0, 0, 7, 7), shapely.box(-1, -1, 2, 2))
    assert_allclose(whole.area, 10.0**2, rtol=1e-12)


def test_a_machine_with_one_horizontal_axis_has_a_cell() -> None:
    """It works at 0 of the other, and what does not reach there is not in its way."""
    cell = machine(POST, axes="xz")
    (obstacle,) = obstacles(cell, None)
    assert obstacle.outline.distance(shapely.LineString([(-1000, 0), (1000, 0)])) > 29.0


def test_every_closed_outline_of_a_layer_is_a_block(tmp_path: Path) -> None:
    """Curves are contained, other layers are not read, and all blocks bear the keep-out's name."""
    file = tmp_path / "cell.dxf"
    drawn(file, HOOK)
    found = blocks(machine(Keepout("posts", dxf=file, layer="POSTS", top=90.0)))
    assert [(block.name, block.top) for block in found] == [("posts", 90.0), ("posts", 90.0)]
    assert found[0].outline.equals(shapely.Polygon(HOOK))
    round_one = shapely.Point(200, 0).buffer(25, quad_segs=4096)
    assert found[1].outline.contains(round_one)
    assert found[1].outline.hausdorff_distance(round_one) < 5e-3


def test_a_changed_drawing_is_read_again(tmp_path: Path) -> None:
    """A cell is remembered, but not beyond the next change of its drawing."""
    file = tmp_path / "cell.dxf"
    cell = machine(Keepout("posts", dxf=file, layer="POSTS"))
    drawn(file, HOOK)
    os.utime(file, ns=(0, 0))
    before = len(blocks(cell))
    assert blocks(cell) is blocks(machine(Keepout("posts", dxf=file, layer="POSTS")))
    drawn(file, HOOK, ((-50.0, -50.0), (-40.0, -50.0), (-40.0, -40.0)))
    assert (before, len(blocks(cell))) == (2, 3)


def test_an_open_outline_of_a_drawing_is_refused(tmp_path: Path) -> None:
    """It keeps nothing out; the message names file, layer and handle."""
    file = tmp_path / "cell.dxf"
    drawn(file, HOOK, HOOK[::-1][:3], closed=False)
    with pytest.raises(pp.InputError) as refused:
        blocks(machine(Keepout("posts", dxf=file, layer="POSTS")))
    for fault in refused.value.faults:
        assert fault.file == file
        assert fault.place.startswith("layer POSTS, handle ")
        assert "is not closed" in fault.message
    assert refused.value.faults


def test_faults_of_all_keepouts_are_told_at_once(tmp_path: Path) -> None:
    """A missing drawing, a missing layer and an outline that crosses itself."""
    file = tmp_path / "cell.dxf"
    drawn(file)
    crossed = ((0.0, 0.0), (10.0, 0.0), (0.0, 10.0), (20.0, 12.0))
    cell = machine(
        Keepout("a", dxf=tmp_path / "none.dxf", layer="POSTS"),
        Keepout("b", dxf=file, layer="POST"),
        Keepout("c", outline=crossed),
    )
    with pytest.raises(pp.InputError) as refused:
        blocks(cell)
    told = str(refused.value)
    assert "none.dxf" in told
    assert 'no layer "POST"' in told
    assert "keepouts[3].outline: crosses or touches itself at (6.25, 3.75) mm" in told


@pytest.mark.parametrize("of", ["tool", "payload"])
def test_a_footprint_that_crosses_itself_is_refused(of: str) -> None:
    """What is inside of it would be a guess."""
    crossed = ((0.0, 0.0), (10.0, 0.0), (0.0, 10.0), (20.0, 12.0))
    tool = Tool(outline=crossed) if of == "tool" else Tool()
    part = pp.Payload(outline=crossed) if of == "payload" else None
    with pytest.raises(pp.InputError, match=rf"{of}.outline: crosses or touches itself"):
        obstacles(machine(POST, tool=tool), part)


def test_faults_of_cell_and_payloads_are_told_before_anything_is_planned() -> None:
    """Keep-out, tool and part at once, each at its place in the files."""
    crossed = ((0.0, 0.0), (10.0, 0.0), (0.0, 10.0), (20.0, 12.0))
    cell = machine(Keepout("a", outline=crossed), tool=Tool(outline=crossed))
    steps = (pp.Wait(1.0), pp.Payload(outline=crossed), pp.Payload())
    with pytest.raises(pp.InputError) as refused:
        judge(pp.Job(cell, pp.Cycle(steps=steps, start=dict.fromkeys("xyz", 0.0))))
    places = [fault.place for fault in refused.value.faults]
    assert places == ["keepouts[1].outline", "tool.outline", "steps[2].payload.outline"]
    sound = pp.Cycle(steps=(pp.Wait(1.0), pp.Payload(radius=3.0)), start=dict.fromkeys("xyz", 0.0))
    judge(pp.Job(machine(POST), sound))
