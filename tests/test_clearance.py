"""What comes too near is found at every instant, and nothing else is."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest
import shapely
from click.testing import CliRunner
from ezdxf.filemanagement import new as new_document
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from shapely import affinity

import profileplan as pp
from profileplan.cli import cli
from profileplan.geometry.cell import obstacles
from profileplan.inputs.machine import Circle, Keepout, Tool
from profileplan.summary import finding_values

if TYPE_CHECKING:
    from pathlib import Path

    from profileplan.inputs import Step

SLACK = 1e-6
"""How exactly the smallest distance is to be found [mm]."""

SAMPLES = 2001

HOOK = ((0.0, 0.0), (40.0, 0.0), (40.0, 30.0), (30.0, 30.0), (30.0, 10.0), (0.0, 10.0))
GRIPPER = ((-6.0, -4.0), (9.0, -4.0), (9.0, 1.0), (2.0, 1.0), (2.0, 7.0), (-6.0, 7.0))
BOX = ((0.0, 0.0), (60.0, 0.0), (60.0, 40.0), (0.0, 40.0))


def machine(
    *keepouts: Keepout, axes: str = "xyz", up: str | None = "+z", tool: Tool | None = None
) -> pp.Machine:
    """Return a fast machine with room; c is a rotary axis."""
    own = tuple(
        pp.Axis(
            name,
            kind="rotary" if name == "c" else "linear",
            travel=(-2000.0, 2000.0),
            velocity=3000.0,
            acceleration=20000.0,
            jerk=500000.0,
        )
        for name in axes
    )
    return pp.Machine("cell", own, up=up, tool=tool or Tool(), keepouts=keepouts)


def plan(cell: pp.Machine, start: dict[str, float], *steps: Step) -> pp.Plan:
    """Plan steps from a start; axes that it does not name are at 0."""
    return pp.plan(cell, pp.Cycle(steps=steps, start=dict.fromkeys(cell.axis_names, 0.0) | start))


def smallest(planned: pp.Plan) -> pp.Finding:
    """Return the finding on the smallest clearance."""
    (found,) = (finding for finding in planned.check() if finding.check == "clearance")
    return found


def entered(planned: pp.Plan) -> dict[str, pp.Finding]:
    """Return the findings on keep-outs that are not kept clear of, by what they say first."""
    return {f.what.split(",")[0]: f for f in planned.check() if f.check == "keep-out"}


def test_without_keepouts_nothing_is_judged() -> None:
    """Nothing can be hit."""
    names = {finding.check for finding in plan(machine(), {}, pp.Move({"x": 5.0})).check()}
    assert not names & {"clearance", "keep-out"}


def test_circles_pass_at_the_distance_of_centres_less_the_radii() -> None:
    """A round tool passes a round post on a straight line: known exactly."""
    cell = machine(
        Keepout("post", circle=Circle(0.0, 100.0, 20.0)), tool=Tool(radius=45.0, margin=5.0)
    )
    found = smallest(plan(cell, {"x": -300.0}, pp.Line({"x": 400.0})))
    assert_allclose(found.value, 100.0 - 20.0 - 45.0, rtol=0, atol=SLACK)
    assert (found.ok, found.limit, found.what, found.unit) == (True, 5.0, "tool to post", "mm")
    assert_allclose(found.margin, 30.0, rtol=0, atol=SLACK)
    assert found.use is None
    assert found.step == "line 1"


def test_the_time_of_the_smallest_distance_is_the_passing() -> None:
    """A straight line past the middle of a symmetric way: half of its time."""
    cell = machine(Keepout("post", circle=Circle(0.0, 100.0, 20.0)))
    planned = plan(cell, {"x": -300.0}, pp.Wait(0.25), pp.Line({"x": 300.0}))
    found = smallest(planned)
    assert_allclose(found.time or 0.0, 0.25 + planned.steps[1].duration / 2, rtol=0, atol=1e-4)


def test_beside_and_over_an_edge_the_distance_is_that_of_the_corner() -> None:
    """Gaps of 3 in plan and 4 in height are 5 from the edge (Pythagoras)."""
    cell = machine(Keepout("wall", outline=BOX, top=50.0))
    planned = plan(cell, {"x": -3.0, "y": 20.0, "z": 54.0}, pp.Wait(0.1))
    assert_allclose(smallest(planned).value, 5.0, rtol=0, atol=SLACK)


@pytest.mark.parametrize(
    ("height", "value", "ok"), [(62.0, 12.0, True), (55.0, 5.0, True), (54.0, 4.0, False)]
)
def test_over_a_wall_the_height_above_it_counts(height: float, value: float, *, ok: bool) -> None:
    """The distance is constant all along the top, which must not keep the search busy."""
    cell = machine(Keepout("wall", outline=BOX, top=50.0), tool=Tool(radius=10.0, margin=5.0))
    planned = plan(cell, {"x": -200.0, "y": 20.0, "z": height}, pp.Line({"x": 300.0}))
    found = smallest(planned)
    assert_allclose(found.value, value, rtol=0, atol=SLACK)
    assert found.ok is ok


def test_past_a_wall_at_the_margin_exactly_is_clear() -> None:
    """A planner goes as near as it may; rounding must not refuse that."""
    cell = machine(Keepout("wall", outline=BOX), tool=Tool(radius=10.0, margin=5.0))
    found = smallest(plan(cell, {"x": -200.0, "y": -15.0}, pp.Line({"x": 300.0})))
    assert_allclose(found.value, 5.0, rtol=0, atol=SLACK)
    assert found.ok


def test_a_margin_of_zero_allows_touching_and_no_entering() -> None:
    """Along the side is clear; a micrometre inside is not clear, for a mere point too."""
    cell = machine(Keepout("wall", outline=BOX))
    assert smallest(plan(cell, {"x": -200.0}, pp.Line({"x": 300.0}))).ok
    inside = smallest(plan(cell, {"x": -200.0, "y": 0.01}, pp.Line({"x": 300.0})))
    assert not inside.ok
    assert_allclose(inside.value, -0.01, rtol=0, atol=SLACK)


@pytest.mark.parametrize("fast", ["x", "y"])
def test_a_thin_post_between_samples_is_found(fast: str) -> None:
    """At 3 m/s a post of 0.02 mm is passed in 7 µs: no sampling at the period sees it."""
    slow = "y" if fast == "x" else "x"
    place = {fast: 3.21, slow: 0.0}
    post = Keepout("wire", circle=Circle(place["x"], place["y"], 0.01))
    planned = plan(machine(post), {fast: -900.0}, pp.Line({fast: 900.0}))
    table = planned.setpoints(period=0.001).position[:, :2]
    assert np.hypot(*(table - (place["x"], place["y"])).T).min() > 0.05
    found = smallest(planned)
    assert not found.ok
    assert_allclose(found.value, -0.01, rtol=0, atol=SLACK)


def test_a_violated_keepout_is_named_with_step_time_place_and_what_is_missing() -> None:
    """Each of those that are violated, and no other."""
    cell = machine(
        Keepout("post", circle=Circle(100.0, 60.0, 20.0), top=180.0),
        Keepout("wall", outline=((400.0, 0.0), (420.0, 0.0), (420.0, 9.0), (400.0, 9.0))),
        Keepout("far", circle=Circle(900.0, 900.0, 20.0)),
        tool=Tool(radius=37.0, margin=5.0),
    )
    planned = plan(cell, {}, pp.Move({"x": 200.0}, name="past the post"), pp.Move({"x": 300.0}))
    (found,) = entered(planned).values()
    assert found.what == "tool to post, at x 100 y 0 z 0"
    assert (found.step, found.ok, found.limit) == ("past the post", False, 5.0)
    assert_allclose((found.value, found.margin), (3.0, -2.0), rtol=0, atol=SLACK)
    assert_allclose(found.time or 0.0, planned.steps[0].duration / 2, rtol=0, atol=1e-4)
    both = plan(cell, {}, pp.Move({"x": 200.0}), pp.Move({"x": 500.0}, name="through"))
    assert {name: f.step for name, f in entered(both).items()} == {
        "tool to post": "move 1",
        "tool to wall": "through",
    }
    assert smallest(both).what == "tool to wall"


def test_what_is_between_stands_in_the_summary() -> None:
    """A script reads which body comes near to which keep-out; other findings have no such key."""
    cell = machine(Keepout("post", circle=Circle(0.0, 100.0, 20.0)))
    values = [finding_values(finding) for finding in plan(cell, {}, pp.Wait(0.1)).check()]
    assert [row["what"] for row in values if "what" in row] == ["tool to post"]


def test_a_part_counts_from_the_step_that_picks_it_until_the_next() -> None:
    """The same way is clear before, too near with the part, and clear again after its release."""
    cell = machine(Keepout("wall", outline=BOX, top=50.0), tool=Tool(radius=5.0, margin=2.0))
    over = pp.Line({"x": 300.0}), pp.Line({"x": -200.0})
    part = pp.Payload(mass=1.0, radius=30.0, below=20.0)
    planned = plan(
        cell, {"x": -200.0, "y": 20.0, "z": 60.0}, *over, part, *over, pp.Payload(), *over
    )
    found = entered(planned)["part to wall"]
    assert found.step in {"line 4", "line 5"}
    assert_allclose(found.value, -10.0, rtol=0, atol=SLACK)
    without = plan(cell, {"x": -200.0, "y": 20.0, "z": 60.0}, *over, part, pp.Payload(), *over)
    assert_allclose(smallest(without).value, 10.0, rtol=0, atol=SLACK)


def test_a_part_counts_while_it_is_picked() -> None:
    """Even where the next step puts it down again."""
    cell = machine(Keepout("wall", outline=BOX))
    picked = pp.Payload(radius=30.0)
    planned = plan(cell, {"x": -20.0, "y": 20.0}, pp.Wait(0.1), picked, pp.Payload(), pp.Wait(0.1))
    assert_allclose(smallest(planned).value, -10.0, rtol=0, atol=SLACK)
    assert smallest(planned).step == "payload 2"


def test_the_beginning_counts() -> None:
    """A cycle that starts inside a keep-out starts with a collision."""
    cell = machine(Keepout("wall", outline=BOX))
    found = smallest(plan(cell, {"x": 30.0, "y": 5.0}, pp.Move({"y": -100.0})))
    assert not found.ok
    assert found.value <= -5.0 + SLACK


def test_an_axis_that_counts_downward_is_turned() -> None:
    """There z = 40 is 10 above a top of z = 50, and 10 below it on a machine that counts upward."""
    post = Keepout("wall", outline=BOX, top=50.0)
    here = {"x": 30.0, "y": 20.0, "z": 40.0}
    assert_allclose(smallest(plan(machine(post, up="-z"), here, pp.Wait(0.1))).value, 10.0)
    assert_allclose(smallest(plan(machine(post), here, pp.Wait(0.1))).value, -10.0)


def test_a_machine_with_one_horizontal_axis_works_at_0_of_the_other() -> None:
    """A wall that begins at 12 beside it is 12 away."""
    beside = tuple((x, y + 12.0) for x, y in BOX)
    cell = machine(Keepout("wall", outline=beside), axes="xz")
    found = smallest(plan(cell, {"x": -100.0}, pp.Line({"x": 200.0})))
    assert_allclose(found.value, 12.0, rtol=0, atol=SLACK)


def test_a_turning_gripper_keeps_clear_with_its_farthest_corner() -> None:
    """On a machine with a rotary axis it counts as the circle that it sweeps."""
    cell = machine(Keepout("wall", outline=BOX), axes="xyzc", tool=Tool(outline=GRIPPER))
    found = smallest(plan(cell, {"x": -200.0, "y": -30.0}, pp.Line({"x": 300.0})))
    farthest = max(math.hypot(x, y) for x, y in GRIPPER)
    assert_allclose(found.value, 30.0 - farthest, rtol=0, atol=SLACK)


def test_keepouts_of_a_drawing_are_kept_clear_of(tmp_path: Path) -> None:
    """A slot and a circle, passed at 7 from the slot; curves count no more than 5e-3 too near."""
    file = tmp_path / "cell.dxf"
    document = new_document(units=4)
    bulged = [(0, 0, 0), (60, 0, 1), (60, 40, 0), (0, 40, 1)]
    document.modelspace().add_lwpolyline(bulged, format="xyb", close=True)
    document.modelspace().add_circle((200, 40), 20)
    document.saveas(file)
    cell = machine(Keepout("posts", dxf=file, layer="0"))
    found = smallest(plan(cell, {"x": -200.0, "y": -7.0}, pp.Line({"x": 400.0})))
    assert_allclose(found.value, 7.0, rtol=0, atol=5e-3)
    assert found.value <= 7.0 + SLACK
    through = smallest(plan(cell, {"x": -200.0, "y": 20.0}, pp.Line({"x": 400.0})))
    assert_allclose(through.value, -20.0, rtol=0, atol=5e-3)


def test_no_part_of_a_hook_hides_how_deep_it_is_entered() -> None:
    """Two squares beside each other are a keep-out that is not convex with a third on top."""
    corners = ((0, 0), (80, 0), (80, 40), (60, 40), (60, 60), (20, 60), (20, 40), (0, 40))
    block = Keepout("block", outline=tuple((float(x), float(y)) for x, y in corners))
    found = smallest(plan(machine(block), {"x": 40.0, "y": -100.0}, pp.Line({"y": 150.0})))
    # The largest circle inside touches the bottom and both inner corners (20, 40), (60, 40): with
    # centre (40, r) that is r² = 20² + (40 - r)², so r = 25; the tool passes its centre.
    assert_allclose(found.value, -25.0, rtol=0, atol=2e-3)


def played(cell: pp.Machine, motion: pp.Trajectory) -> pp.Plan:
    """Return a cycle in which a motion is played, whatever a planner would make."""
    planned = plan(cell, {}, pp.Wait(1.0))
    return replace(planned, steps=(replace(planned.steps[0], trajectory=motion),))


def curved(seed: int, pieces: int) -> pp.Trajectory:
    """Return a motion of random pieces of degree five about the keep-out; they do not join."""
    rng = np.random.default_rng(seed)
    durations = rng.uniform(0.05, 0.4, pieces)
    coefficients = rng.normal(size=(pieces, 6, 3)) * np.array([60.0, 60.0, 40.0])
    coefficients[:, 0] += (20.0, 10.0, 60.0)
    coefficients /= durations[:, np.newaxis, np.newaxis] ** np.arange(6)[:, np.newaxis]
    return pp.Trajectory(("x", "y", "z"), durations, coefficients)


@st.composite
def passes(draw: st.DrawFn) -> tuple[pp.Plan, shapely.Polygon, shapely.Polygon]:
    """Draw a motion past a keep-out with the outlines of tool and keep-out, as polygons."""
    place = st.floats(-150.0, 150.0)
    height = st.floats(0.0, 120.0)
    post = draw(st.sampled_from([BOX, HOOK, HOOK[::-1]]))
    own = draw(st.sampled_from([BOX[:3], GRIPPER]))
    cell = machine(Keepout("post", outline=post, top=50.0), tool=Tool(outline=own, margin=5.0))
    if draw(st.booleans()):
        motion = curved(draw(st.integers(0, 10**6)), draw(st.integers(1, 4)))
        return played(cell, motion), shapely.Polygon(own), shapely.Polygon(post)
    step = draw(st.sampled_from([pp.Move, pp.Line]))
    law = draw(st.sampled_from(["trapezoidal", "quintic"]))
    ends = [{"x": draw(place), "y": draw(place), "z": draw(height)} for _ in range(3)]
    steps = (pp.Wait(0.1), *(step(end, law=law) for end in ends[1:]))
    return plan(cell, ends[0], *steps), shapely.Polygon(own), shapely.Polygon(post)


@given(case=passes())
@settings(max_examples=120)
def test_dense_samples_find_nothing_nearer(
    case: tuple[pp.Plan, shapely.Polygon, shapely.Polygon],
) -> None:
    """Tool and keep-out placed by shapely, sample by sample, are the second judge.

    Between samples the distance changes by no more than the way, so the smallest is no less than
    the smallest sample less half of that. Where they overlap only the sign is compared.
    """
    planned, tool, post = case
    motion = planned.trajectory
    times = np.linspace(0.0, planned.duration, SAMPLES)
    positions = motion.at(times)
    corners = shapely.get_coordinates(tool)
    placed = shapely.polygons(positions[:, np.newaxis, :2] + corners)
    apart = np.hypot(shapely.distance(placed, post), np.maximum(positions[:, 2] - 50.0, 0.0))
    way = float(motion.speeds((True, True, True)).value.max()) * times[1]
    finding = smallest(planned)
    assert max(finding.value, 0.0) <= apart.min() + SLACK
    # A piece that does not join the one before begins between two samples: its end is one more.
    joined = motion.jumps(0).value.max() < SLACK
    assert not joined or max(finding.value, 0.0) >= apart.min() - way / 2
    # The smallest is attained where it is said to be.
    there = motion.at([finding.time or 0.0])[0]
    at = affinity.translate(tool, there[0], there[1])
    attained = math.hypot(at.distance(post), max(there[2] - 50.0, 0.0))
    assert not joined or abs(max(finding.value, 0.0) - attained) <= SLACK
    assert finding.ok == (finding.value >= 5.0 - SLACK)


def test_past_a_point_inside_a_parabola_the_distance_is_known() -> None:
    """A curved piece: y = x² / (2 p) passes a point at height h > p on its axis.

    The least of x² + (y - h)² is at y = h - p, where it is 2 h p - p² (by elimination of x).
    """
    pieces = np.zeros((1, 6, 3))
    speed, focal, height = 100.0, 30.0, 50.0
    pieces[0, :2, 0] = (-100.0, speed)
    pieces[0, :3, 1] = (1e4 / (2 * focal), -100.0 * speed / focal, speed**2 / (2 * focal))
    motion = pp.Trajectory(("x", "y", "z"), np.array([2.0]), pieces)
    cell = machine(Keepout("post", circle=Circle(0.0, height, 1.0)))
    expected = math.sqrt(2 * height * focal - focal**2) - 1.0
    found = smallest(played(cell, motion))
    assert_allclose(found.value, expected, rtol=0, atol=SLACK)
    assert_allclose(abs((found.time or 0.0) - 1.0) * speed, math.sqrt(2 * 20.0 * focal), atol=0.1)


def test_round_a_post_the_distance_of_an_arc_is_kept_all_along() -> None:
    """Nearly constant on a curve, where no interval is much nearer than another.

    Arcs as cubic Bezier curves of 90° are 2.7e-4 of the radius outside at most, never inside
    (common practice: control points at 0.5523 of the radius; value from memory).
    """
    k = 4 / 3 * (math.sqrt(2) - 1)
    hull = 80.0 * np.array([(1, 0), (1, k), (k, 1), (0, 1)])
    to_powers = np.array([(1, 0, 0, 0), (-3, 3, 0, 0), (3, -6, 3, 0), (-1, 3, -3, 1)])
    pieces = np.zeros((4, 6, 3))
    for quarter in range(4):
        turn = np.linalg.matrix_power(np.array([(0, 1), (-1, 0)]), quarter)
        pieces[quarter, :4, :2] = to_powers @ (hull @ turn) / 0.2 ** np.arange(4)[:, np.newaxis]
    motion = pp.Trajectory(("x", "y", "z"), np.full(4, 0.2), pieces)
    cell = machine(Keepout("post", circle=Circle(0.0, 0.0, 50.0)))
    assert_allclose(smallest(played(cell, motion)).value, 30.0, rtol=0, atol=SLACK)


def test_a_standing_tool_is_affine_to_a_turned_cell() -> None:
    """Turned outlines have the same distance: nothing depends on the directions of the axes."""
    for angle in (0.0, 30.0, 77.0):
        turned = affinity.rotate(shapely.Polygon(HOOK), angle, origin=(0, 0))
        corners = tuple(map(tuple, shapely.get_coordinates(turned)[:-1].tolist()))
        here = affinity.rotate(shapely.Point(15.0, 20.0), angle, origin=(0, 0))
        cell = machine(Keepout("hook", outline=corners))
        found = smallest(plan(cell, {"x": here.x, "y": here.y}, pp.Wait(0.1)))
        assert_allclose(found.value, 10.0, rtol=0, atol=SLACK)


@given(share=st.floats(0.0, 1.0), carried=st.booleans())
@settings(max_examples=60)
def test_at_the_edge_of_an_obstacle_the_clearance_is_the_margin(
    share: float, *, carried: bool
) -> None:
    """Planner and check mean the same: what an obstacle allows is clear, and by hardly more."""
    cell = machine(Keepout("hook", outline=HOOK), tool=Tool(outline=GRIPPER, margin=4.0))
    part = pp.Payload(radius=25.0) if carried else pp.Payload()
    edge = obstacles(cell, part)[-1].outline.exterior
    here = edge.interpolate(share, normalized=True)
    found = smallest(plan(cell, {"x": here.x, "y": here.y}, part, pp.Wait(0.1)))
    assert found.ok
    assert found.value <= 4.0 + 1e-4 * (4.0 + 25.0)


MACHINE = """
[axes.x]
travel = [0, 900]
velocity = 500
acceleration = 3000

[axes.y]
travel = [0, 900]
velocity = 500
acceleration = 3000

[tool]
radius = 45
margin = 5

[[keepouts]]
name = "kiln car post"
circle = { x = 400, y = 100, radius = 20 }
"""


@pytest.mark.parametrize(("y", "status"), [(29, 0), (33, 1)])
def test_the_command_line_says_what_comes_too_near(tmp_path: Path, y: int, status: int) -> None:
    """Exit status 1 is for scripts, the sentence for people."""
    (tmp_path / "machine.toml").write_text(MACHINE, encoding="utf-8")
    start, steps = f"{{ x = 0, y = {y} }}", "[{ line = { x = 800 } }]"
    file = tmp_path / "cycle.toml"
    text = f'machine = "machine.toml"\nstart = {start}\nsteps = {steps}\n'
    file.write_text(text, encoding="utf-8")
    checked = CliRunner(env={"COLUMNS": "160"}).invoke(cli, ["check", str(file)])
    assert checked.exit_code == status
    assert "clearance, tool to kiln car post" in checked.stdout
    planned = CliRunner(env={"COLUMNS": "160"}).invoke(cli, ["plan", str(file)])
    assert planned.exit_code == status
    missed = "keep-out, tool to kiln car post, at x 400 y 33: 2 mm, at least 5 mm, line 1 at "
    assert (missed in planned.stdout) is bool(status)
