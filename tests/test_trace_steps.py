"""Tracing a drawing: on the drawing, at the speed, with the output on, and lifted in between."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise
from typing import TYPE_CHECKING

import ezdxf.filemanagement
import numpy as np
import pytest
import shapely
from numpy.testing import assert_allclose

import profileplan as pp
from portal import failures, machine

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from ezdxf.layouts.layout import Modelspace

WORK, LIFT, TOLERANCE, SPEED = 5.0, 10.0, 0.05, 120.0
START = {"x": 0.0, "y": 0.0, "z": 60.0}
PORTAL = replace(machine([500, 500, 200], [3000, 3000, 2000], [60000, 60000, 40000]), up="+z")
ROUNDING = 2e-4
"""Distance [mm] by which chords that stand for arcs and for the motion are off."""


def rounded(space: Modelspace) -> None:
    """Draw a closed outline with lines and arcs."""
    bulge = math.tan(math.pi / 8)
    corners = [(10, 0, 0), (40, 0, bulge), (50, 10, 0), (50, 30, bulge), (40, 40, 0), (10, 40, 0)]
    space.add_lwpolyline(corners, format="xyb", close=True)


def spots(space: Modelspace) -> None:
    """Draw three circles, the second far off."""
    for x in (10, 90, 30):
        space.add_circle((x, 20), 4)


def square(space: Modelspace) -> None:
    """Draw straight lines only."""
    space.add_lwpolyline([(0, 0), (30, 0), (30, 30), (0, 30)], close=True)


@pytest.fixture(name="drawing")
def fixture_drawing(tmp_path: Path) -> Callable[..., Path]:
    """Return what writes a drawing in mm and returns its file."""

    def write(draw: Callable[[Modelspace], None], unit: int = 4) -> Path:
        document = ezdxf.filemanagement.new("R2010")
        document.units = unit
        draw(document.modelspace())
        file = tmp_path / "outline.dxf"
        document.saveas(file)
        return file

    return write


def plan(file: Path, of: pp.Machine = PORTAL, **keys: object) -> pp.Plan:
    """Return the plan of one trace."""
    known: dict[str, object] = {
        "at": {"z": WORK},
        "lift": LIFT,
        "tolerance": TOLERANCE,
        "speed": SPEED,
        "place": pp.Place(x=100.0, y=80.0),
    }
    step = pp.Trace(file, **(known | keys))  # type: ignore[arg-type]
    return pp.plan(of, pp.Cycle(steps=(step,), start=START))


def followed(of: pp.Plan, number: int = 0) -> np.ndarray:
    """Return dense samples of the motion along an outline: (n, 3) [mm]."""
    times = of.steps[0].tracing[number]
    return of.steps[0].trajectory.at(np.linspace(times.enters, times.leaves, 3001))


def circle(x: float, y: float, radius: float) -> shapely.LineString:
    """Return a circle as a line of short chords."""
    turn = np.linspace(0, 2 * np.pi, 3001)
    return shapely.LineString(
        np.column_stack([x + radius * np.cos(turn), y + radius * np.sin(turn)])
    )


def apart(motion: np.ndarray, line: shapely.LineString) -> float:
    """Return the greatest distance both ways, by shapely."""
    way = shapely.LineString(motion[:, :2])
    out = shapely.distance(shapely.points(motion[:, :2]), line).max()
    missed = shapely.distance(shapely.points(shapely.get_coordinates(line)), way).max()
    return float(max(out, missed))


def test_the_motion_stays_on_the_drawing(drawing: Callable[..., Path]) -> None:
    """Both ways, at the working height, by shapely and by the shipped check."""
    own = plan(drawing(spots))
    assert failures(own) == []
    for number, x in enumerate((10, 90, 30)):
        motion = followed(own, number)
        assert apart(motion, circle(100 + x, 100, 4)) <= TOLERANCE + ROUNDING
        assert_allclose(motion[:, 2], WORK, atol=1e-9)


def test_the_speed_is_kept_and_used(drawing: Callable[..., Path]) -> None:
    """An outline with room for it is traced at the speed asked for."""
    own = plan(drawing(rounded))
    times = own.steps[0].tracing[0]
    inside = np.linspace(times.enters, times.leaves, 5001)
    speed = np.linalg.norm(own.steps[0].trajectory.at(inside, 1)[:, :2], axis=1)
    assert speed.max() <= SPEED * (1 + 1e-9)
    assert np.median(speed) > 0.98 * SPEED
    assert {f.check for f in own.check()} >= {"tolerance", "speed"}


def test_a_drawing_is_mirrored_scaled_turned_and_shifted(drawing: Callable[..., Path]) -> None:
    """In this order: the circle at (10, 20) comes to (-30, 60), (-60, -30), (140, 120)."""
    place = pp.Place(x=200.0, y=150.0, turn=90.0, scale=3.0, mirror=True)
    own = plan(drawing(spots), place=place)
    motion = followed(own)
    assert apart(motion, circle(200 - 60, 150 - 30, 12)) <= TOLERANCE + ROUNDING
    assert failures(own) == []


def test_inches_are_scaled(drawing: Callable[..., Path]) -> None:
    """A circle of radius 4 in is one of 101.6 mm: 25.4 mm are an inch, exactly."""
    own = plan(drawing(lambda s: s.add_circle((5, 5), 4), unit=1), place=pp.Place(x=10.0, y=10.0))
    assert apart(followed(own), circle(137.0, 137.0, 101.6)) <= TOLERANCE + ROUNDING


def test_the_output_is_on_while_tracing(drawing: Callable[..., Path]) -> None:
    """It switches when the outline begins and ends, earlier by the lead."""
    for lead_in in (None, 6.0):
        own = plan(drawing(spots), with_signal="valve", lead=0.02, lead_in=lead_in)
        assert own.signals == ("valve",)
        assert [event.state for event in own.events] == [True, False] * 3
        times = own.steps[0].tracing
        expected = [t - 0.02 for one in times for t in (one.begins, one.ends)]
        assert_allclose([event.time for event in own.events], expected, atol=1e-9)
        for number, x in enumerate((10, 90, 30)):
            # a circle begins and ends at its rightmost point
            here = own.trajectory.at([times[number].begins, times[number].ends])
            assert_allclose(here, [[104 + x, 100, WORK]] * 2, atol=TOLERANCE)


def test_the_ways_in_and_out_are_straight_on(drawing: Callable[..., Path]) -> None:
    """Along the direction of the outline at its ends, so that it is passed with speed."""
    own = plan(drawing(spots), lead_in=6.0)
    assert failures(own) == []
    times = own.steps[0].tracing[0]
    ends = own.trajectory.at([times.enters, times.leaves])
    assert_allclose(ends[:, :2], [[114, 94], [114, 106]], atol=1e-9)
    speed = np.linalg.norm(own.trajectory.at([times.begins, times.ends], 1), axis=1)
    assert (speed > 0.5 * SPEED).all()
    without = plan(drawing(spots)).steps[0].tracing[0]
    assert times.ends - times.begins < without.ends - without.begins


def test_the_tool_is_lifted_between_outlines(drawing: Callable[..., Path]) -> None:
    """And at the end; on the way from one to the next it goes across above that height only."""
    own = plan(drawing(spots))
    assert_allclose(own.trajectory.at([own.duration])[0, 2], WORK + LIFT, atol=1e-9)
    for one, other in pairwise(own.steps[0].tracing):
        between = own.trajectory.at(np.linspace(one.leaves, other.enters, 2001))
        away = [np.abs(between[:, :2] - between[end, :2]).max(axis=1) > 1e-6 for end in (0, -1)]
        assert between[away[0] & away[1], 2].min() >= WORK + LIFT - 1e-6


def test_without_lift_the_tool_goes_across_at_its_height(drawing: Callable[..., Path]) -> None:
    """A height is not invented."""
    own = plan(drawing(spots), lift=0.0)
    first = own.steps[0].tracing[0].enters
    assert_allclose(own.trajectory.at(np.linspace(first, own.duration, 500))[:, 2], WORK, atol=1e-9)


def test_the_shortest_order_is_not_longer_than_the_drawn(drawing: Callable[..., Path]) -> None:
    """The far circle is left for the last."""
    drawn, shortest = plan(drawing(spots)), plan(drawing(spots), order="shortest")
    assert shortest.duration < drawn.duration
    ways = [followed(shortest, number)[:, 0] for number in range(3)]
    centres = [0.5 * (way.min() + way.max()) for way in ways]
    assert_allclose(centres, [110, 130, 190], atol=0.5)


def test_straight_lines_need_no_tolerance(drawing: Callable[..., Path]) -> None:
    """With 0 the motion stops at every corner, in the time of the same lines as steps."""
    own = plan(drawing(square), tolerance=0.0, speed=None)
    assert failures(own) == []
    times = own.steps[0].tracing[0]
    corners = [(100, 80), (130, 80), (130, 110), (100, 110), (100, 80)]
    lines = tuple(pp.Line({"x": float(x), "y": float(y)}) for x, y in corners[1:])
    start = {"x": 100.0, "y": 80.0, "z": WORK}
    stops = pp.plan(PORTAL, pp.Cycle(steps=lines, start=start))
    assert_allclose(times.leaves - times.enters, stops.duration, rtol=1e-12)


def test_a_curve_without_tolerance_is_refused(drawing: Callable[..., Path]) -> None:
    """The message names the entity and says what is needed."""
    with pytest.raises(pp.InputError, match=r"layer 0, handle \w+: CIRCLE: a curve needs a tol"):
        plan(drawing(spots), tolerance=0.0)


def test_what_is_outside_of_the_travel_is_named(drawing: Callable[..., Path]) -> None:
    """Outline, layer, handle, and by how much."""
    low, high = PORTAL.axis("x").travel
    place = pp.Place(x=high - 50.0, y=80.0)
    with pytest.raises(pp.InputError) as error:
        plan(drawing(spots), place=place)
    (fault,) = error.value.faults
    assert "layer 0, handle" in fault.place
    assert f"x = {high + 44:g} mm, 44 mm beyond the travel of x" in fault.message
    assert low < high


def test_a_missing_drawing_is_a_fault(tmp_path: Path) -> None:
    """With its name, and no traceback."""
    with pytest.raises(pp.InputError, match=r"nowhere\.dxf"):
        plan(tmp_path / "nowhere.dxf")


def test_a_time_asked_for_is_taken(drawing: Callable[..., Path]) -> None:
    """Outlines and the ways between them are slowed down alike."""
    fast = plan(drawing(spots))
    slow = plan(drawing(spots), time=1.5 * fast.duration)
    assert_allclose(slow.duration, 1.5 * fast.duration, rtol=1e-12)
    assert failures(slow) == []
    assert [limit.quantity for limit in slow.steps[0].limited_by] == ["time"]


def test_a_later_step_goes_on_from_the_end(drawing: Callable[..., Path]) -> None:
    """Axes that it does not name stay where the tracing left them."""
    step = pp.Trace(drawing(spots), at={"z": WORK}, lift=LIFT, tolerance=TOLERANCE)
    own = pp.plan(PORTAL, pp.Cycle(steps=(step, pp.Move({"z": 60.0})), start=START))
    assert failures(own) == []
    assert_allclose(own.positions[-1], [34, 20, 60], atol=1e-9)


def test_a_motion_beside_the_drawing_is_found(drawing: Callable[..., Path]) -> None:
    """The check does not believe the planner: a shifted motion is out of the tolerance."""
    own = plan(drawing(rounded))
    coefficients = own.steps[0].trajectory.coefficients.copy()
    coefficients[:, 0, 0] += 0.2
    moved = replace(own.steps[0].trajectory, coefficients=coefficients)
    spoilt = replace(own, steps=(replace(own.steps[0], trajectory=moved),))
    assert any(f.check == "tolerance" and not f.ok for f in spoilt.check())


def test_a_drawing_alone_is_a_job(drawing: Callable[..., Path], tmp_path: Path) -> None:
    """With the machine beside it, from 0 of every axis."""
    file = tmp_path / "machine.toml"
    axes = "\n".join(
        f"[axes.{name}]\ntravel = [-10, 200]\nvelocity = 500\nacceleration = 3000"
        for name in ("x", "y")
    )
    file.write_text(f'name = "Portal"\n{axes}\n', encoding="utf-8")
    own = pp.plan(pp.load_job(drawing(rounded), machine=file, tolerance=0.1, speed=80.0))
    assert failures(own) == []
    assert own.steps[0].kind == "trace"
