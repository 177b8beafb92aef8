"""Legs along outlines: near enough, both ways, and few."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from profileplan.geometry.shapes import Outline, Pieces, Similarity
from profileplan.geometry.sleeve import sleeve

TOLERANCE = 0.05


def pieces(points: object, bulges: object = 0.0) -> Pieces:
    """Return pieces through points in plan."""
    plan = np.asarray(points, dtype=np.float64)
    at = np.column_stack([plan, np.zeros(len(plan))])
    count = len(plan) - 1
    bulge = np.broadcast_to(np.asarray(bulges, dtype=np.float64), (count,))
    return Pieces(at[:-1], at[1:], bulge, np.zeros(count, dtype=np.intp))


def drawn(own: Pieces) -> shapely.LineString:
    """Return what is drawn as a line of very short chords."""
    return shapely.LineString(own.flattened(1e-4 * TOLERANCE)[0][:, :2])


def assert_covers(own: Pieces, tolerance: float = TOLERANCE) -> None:
    """Every point of a tube is near the drawing, every drawn point near its legs: by shapely."""
    found = sleeve(own, tolerance=tolerance)
    line, slack = drawn(own), 2e-4 * tolerance
    legs = shapely.LineString(found.points[:, :2])
    samples = shapely.points(shapely.get_coordinates(shapely.segmentize(line, tolerance / 4)))
    assert shapely.distance(samples, legs).max() <= found.apart + slack
    for leg, radius in zip(
        np.stack([found.points[:-1], found.points[1:]], 1), found.radius, strict=True
    ):
        assert 0 < radius <= tolerance
        round_leg = shapely.LineString(leg[:, :2]).buffer(radius, quad_segs=8)
        border = shapely.points(shapely.get_coordinates(shapely.segmentize(round_leg, tolerance)))
        assert shapely.distance(border, line).max() <= tolerance + slack
    assert_allclose(found.points[[0, -1]], np.stack([own.start[0], own.end[-1]]))


SHAPES = {
    "circle": pieces([[0, 0], [20, 0], [0, 0]], 1.0),
    "chords of a circle": pieces(
        10 * np.column_stack([f(np.linspace(0, 2 * np.pi, 1001)) for f in (np.cos, np.sin)])
    ),
    "square": pieces([[0, 0], [10, 0], [10, 10], [0, 10], [0, 0]]),
    "spike": pieces([[0, 0], [10, 0], [10, 5], [10, 0], [20, 0]]),
    "to and fro": pieces([[0, 0], [10, 0], [4, 0], [20, 0]]),
    "rounded": pieces(
        [[0, 0], [10, 0], [12, 2], [12, 10], [10, 12]], [0, 0.41421356, 0, 0.41421356]
    ),
    "micro steps after a corner": pieces([[0, 0], [10, 0], [10.001, 0.004], [10, 0.01], [10, 8]]),
    "smaller than the tolerance": pieces(
        0.01 * np.column_stack([f(np.linspace(0, 2 * np.pi, 11)) for f in (np.cos, np.sin)])
    ),
}


@pytest.mark.parametrize("name", SHAPES)
def test_tubes_are_inside_the_tolerance_both_ways(name: str) -> None:
    """Proven region by region, as the planner relies on nothing else."""
    assert_covers(SHAPES[name])


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 10**6),
    kind=st.sampled_from(["arcs", "smooth", "noise"]),
    tolerance=st.floats(0.01, 2.0),
)
def test_tubes_of_any_outline_are_inside_the_tolerance(
    seed: int, kind: str, tolerance: float
) -> None:
    """Arcs at random, smooth chains of chords, and chains that turn at every point."""
    random = np.random.default_rng(seed)
    if kind == "arcs":
        own = pieces(random.uniform(0, 20, (8, 2)), random.normal(0, 0.7, 7))
    elif kind == "smooth":
        course = np.cumsum(random.normal(0, 0.05, 150))
        own = pieces(np.cumsum(0.2 * np.column_stack([np.cos(course), np.sin(course)]), axis=0))
    else:
        own = pieces(np.cumsum(random.normal(0, tolerance, (60, 2)), axis=0))
    assert_covers(own, tolerance)


def test_few_legs_stand_for_a_circle() -> None:
    """A leg moved to the middle of its arc has half the sagitta on each side: r - r cos(a / 2)."""
    radius = 10.0
    found = sleeve(SHAPES["circle"], tolerance=TOLERANCE)
    turn = 2 * np.arccos(1 - 0.5 * TOLERANCE / radius)
    assert len(found.radius) <= 1.05 * 2 * np.pi / turn + 2
    assert found.radius.min() >= 0.5 * TOLERANCE


def test_legs_do_not_depend_on_how_finely_a_curve_is_drawn() -> None:
    """Regions stand for the curve, and not for its chords."""
    counts = []
    for chords in (500, 5000, 20000):
        angle = np.linspace(0, 2 * np.pi, chords + 1)
        own = pieces(10 * np.column_stack([np.cos(angle), np.sin(angle)]))
        counts.append(len(sleeve(own, tolerance=TOLERANCE).radius))
    assert max(counts) - min(counts) <= 2


def test_corners_and_tips_stay_where_they_are_drawn() -> None:
    """A true corner is passed within the tolerance, and so is the tip of a spike."""
    for name in ("square", "spike"):
        own = SHAPES[name]
        found = sleeve(own, tolerance=TOLERANCE)
        assert_allclose(found.points[:, :2], np.concatenate([own.start, own.end[-1:]])[:, :2])
        assert_allclose(found.radius, TOLERANCE)


def test_points_on_a_straight_line_make_one_leg() -> None:
    """However many there are."""
    x = np.linspace(0, 100, 1000)
    found = sleeve(pieces(np.column_stack([x, 0.5 * x])), tolerance=TOLERANCE)
    assert len(found.radius) == 1
    assert_allclose(found.radius, TOLERANCE, rtol=1e-9)


def test_heights_count() -> None:
    """A chain that is straight in plan and bent in height needs legs for its bends."""
    own = pieces(np.column_stack([np.linspace(0, 10, 101), np.zeros(101)]))
    height = np.abs(np.linspace(-5, 5, 101))
    own.start[:, 2], own.end[:, 2] = height[:-1], height[1:]
    found = sleeve(own, tolerance=TOLERANCE)
    assert len(found.radius) >= 2
    assert found.apart <= TOLERANCE
    line = np.interp(own.start[:, 0], found.points[:, 0], found.points[:, 2])
    assert np.abs(line - own.start[:, 2]).max() <= TOLERANCE


@pytest.mark.parametrize("name", ["circle", "rounded", "square"])
def test_a_turned_and_scaled_drawing_has_turned_and_scaled_legs(name: str) -> None:
    """With the tolerance scaled as well."""
    place = Similarity(np.array([30.0, -7.0]), 0.7, 3.0)
    own = Outline(SHAPES[name], closed=False, layer="A")
    here = sleeve(own.pieces, tolerance=TOLERANCE)
    there = sleeve(own.mapped(place).pieces, tolerance=3 * TOLERANCE)
    assert_allclose(there.points, place(here.points), atol=1e-6)
    assert_allclose(there.radius, 3 * here.radius, atol=1e-6)
