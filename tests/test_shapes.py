"""Shapes: lengths, areas, bounds and points of lines and arcs, against other ways to find them."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
import pytest
import shapely
import shapely.affinity
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy.integrate import quad

from profileplan.geometry.shapes import Outline, Pieces, Similarity

if TYPE_CHECKING:
    from profileplan.geometry.corridor import Indices

ROUNDING = 1e-9
"""mm: what a dozen operations on sizes of 100 mm may lose, with arcs of up to 10 km radius."""

FINE = 1e-6
"""mm: how near to their arcs the chords are that shapely gets."""

SEEDS = st.integers(0, 2**32 - 1)

SHARES = np.linspace(0, 1, 2001)
"""Where brute force looks."""


def chained(seed: int, count: int = 6, *, closed: bool = False) -> Pieces:
    """Return random lines and arcs that follow each other, with heights."""
    random = np.random.default_rng(seed)
    points = random.uniform(-50, 50, (count + 1, 3))
    if closed:
        points[:, 2] = 0
        points[-1] = points[0]
    # From nearly straight to nearly a full circle, and lines.
    bulge = random.choice([-1, 1], count) * 10 ** random.uniform(-4, 1, count)
    bulge[random.random(count) < 0.3] = 0.0
    return Pieces(points[:-1], points[1:], bulge, random.integers(0, 3, count))


def star(seed: int) -> Outline:
    """Return a closed outline that does not cross itself: flat arcs round a middle."""
    random = np.random.default_rng(seed)
    angle = np.arange(7) * 2 * np.pi / 7 + random.uniform(-0.1, 0.1, 7)
    radius = random.uniform(40, 60, 7)
    points = np.column_stack([radius * np.cos(angle), radius * np.sin(angle), np.zeros(7)])
    bulge = random.uniform(-0.2, 0.2, 7)
    pieces = Pieces(points, np.roll(points, -1, axis=0), bulge, np.arange(7))
    return Outline(pieces, closed=True, layer="bead")


@given(seed=SEEDS)
@settings(max_examples=30)
def test_the_length_is_that_of_its_motion(seed: int) -> None:
    """The length of each piece, against scipy's integral of the speed along ``at``."""
    pieces = chained(seed)
    step = 1e-4

    def speed(share: float, index: Indices) -> float:
        """Return how fast a point moves along a piece, by differences of fourth order."""
        around = share + step * np.array([-2.0, -1.0, 1.0, 2.0])
        points = pieces.at(np.repeat(index, 4), around)
        return float(np.linalg.norm(np.array([1, -8, 8, -1]) @ points) / (12 * step))

    for number in range(len(pieces)):
        integral, _ = quad(speed, 0, 1, args=(np.array([number]),))
        assert_allclose(pieces.length[number], integral, 1e-8)


@given(seed=SEEDS)
@settings(max_examples=30)
def test_points_of_an_arc_are_as_far_from_its_centre_as_its_radius(seed: int) -> None:
    """Which is what makes it an arc; and equal shares turn by equal angles."""
    pieces = chained(seed)
    arcs = np.flatnonzero(pieces.bulge)
    for number in arcs.tolist():
        points = pieces.at(np.full(51, number), np.linspace(0, 1, 51))
        away = points[:, :2] - pieces.centre[number]
        radius = float(pieces.radius[number])
        assert_allclose(np.hypot(away[:, 0], away[:, 1]), radius, 1e-9)
        turned = np.unwrap(np.arctan2(away[:, 1], away[:, 0]))
        expected = np.linspace(0, pieces.turn[number], 51)
        assert_allclose(turned - turned[0], expected, atol=ROUNDING / radius + 1e-9)
        assert_allclose(np.diff(points[:, 2], 2), 0, atol=ROUNDING)


@given(seed=SEEDS)
@settings(max_examples=30)
def test_ends_are_at_shares_zero_and_one(seed: int) -> None:
    """So that cutting a piece leaves no gap."""
    pieces = chained(seed)
    index = np.arange(len(pieces))
    assert_allclose(pieces.at(index, np.zeros(len(pieces))), pieces.start, atol=ROUNDING)
    assert_allclose(pieces.at(index, np.ones(len(pieces))), pieces.end, atol=ROUNDING)


@given(seed=SEEDS)
@settings(max_examples=30)
def test_directions_are_those_of_small_steps(seed: int) -> None:
    """The tangents at both ends, against differences."""
    pieces = chained(seed)
    index, step = np.arange(len(pieces)), 1e-7
    for found, share in zip(pieces.directions(), (0.0, 1.0 - step), strict=True):
        ahead = pieces.at(index, np.full(len(pieces), share + step))
        moved = (ahead - pieces.at(index, np.full(len(pieces), share)))[:, :2]
        assert_allclose(found, moved / np.linalg.norm(moved, axis=1, keepdims=True), atol=1e-6)


@given(seed=SEEDS)
@settings(max_examples=50)
def test_bounds_are_the_extremes_of_all_points(seed: int) -> None:
    """No point is outside, and the bounds are met, up to what brute force misses."""
    pieces = chained(seed)
    for number, (low, high) in enumerate(pieces.bounds()):
        points = pieces.at(np.full(SHARES.size, number), SHARES)
        assert (points >= low - ROUNDING).all()
        assert (points <= high + ROUNDING).all()
        # Between two shares an arc rises above them by its sagitta at most.
        half = 0.5 * abs(pieces.turn[number]) / (SHARES.size - 1)
        missed = ROUNDING
        if pieces.bulge[number]:
            missed += pieces.radius[number] * (1 - math.cos(half))
        assert_allclose(points.min(axis=0), low, atol=missed)
        assert_allclose(points.max(axis=0), high, atol=missed)


@given(seed=SEEDS)
@settings(max_examples=30)
def test_flattened_chords_are_within_the_error(seed: int) -> None:
    """Halfway along each chord an arc is farthest away, and nowhere else do the chords differ."""
    pieces = chained(seed)
    for error in (1.0, 0.01):
        points, piece, share = pieces.flattened(error)
        assert_allclose(points[:-1], pieces.at(piece, share), atol=ROUNDING)
        assert_array_equal(points[-1], pieces.end[-1])
        following = np.append(share[1:], 1.0)
        following = np.where(following == 0, 1.0, following)
        middle = pieces.at(piece, 0.5 * (share + following))
        away = np.linalg.norm((middle - 0.5 * (points[:-1] + points[1:]))[:, :2], axis=1)
        assert away.max() <= error + ROUNDING
        # No more chords than needed, but two for each arc.
        arcs = np.flatnonzero(pieces.bulge)
        widest = 2 * np.arccos(1 - np.minimum(error / pieces.radius[arcs], 1.0))
        count = np.bincount(piece, minlength=len(pieces))
        assert (count[arcs] <= np.maximum(np.ceil(np.abs(pieces.turn[arcs]) / widest), 2)).all()
        assert (np.delete(count, arcs) == 1).all()


@given(seed=SEEDS)
@settings(max_examples=30)
def test_outlines_have_the_length_area_and_bounds_of_shapelys(seed: int) -> None:
    """Of the polygon through points of the arcs, within what its chords miss."""
    own = star(seed)
    polygon = shapely.Polygon(own.pieces.flattened(FINE)[0][:, :2])
    assert polygon.is_valid
    assert_allclose(own.area, polygon.area, atol=own.length * FINE)
    # A chord is shorter than its arc by a share of about 8/3 (sagitta / chord)^2.
    assert_allclose(own.length, polygon.length, rtol=1e-6)
    low_x, low_y, high_x, high_y = polygon.bounds
    expected = [[low_x, low_y, 0], [high_x, high_y, 0]]
    assert_allclose(own.bounds(), expected, atol=2 * FINE)


@given(seed=SEEDS)
@settings(max_examples=30)
def test_reversed_outlines_run_backward(seed: int) -> None:
    """The same points in the other order; the area changes its sign, the length nothing."""
    own = star(seed)
    back = own.reversed()
    assert_allclose(back.area, -own.area, ROUNDING)
    assert_allclose(back.length, own.length, 1e-12)
    count = len(own.pieces)
    shares = np.linspace(0, 1, count)
    index = np.arange(count)
    forward = own.pieces.at(index, shares)
    assert_allclose(back.pieces.at(count - 1 - index, 1 - shares), forward, atol=ROUNDING)
    assert_array_equal(back.pieces.source[::-1], own.pieces.source)
    assert_array_equal(back.reversed().pieces.start, own.pieces.start)
    assert_array_equal(back.reversed().pieces.bulge, own.pieces.bulge)


@given(seed=SEEDS, piece=st.integers(0, 6))
@settings(max_examples=30)
def test_another_start_leaves_a_closed_outline_as_it_is(seed: int, piece: int) -> None:
    """It begins there, all pieces follow each other, and the area and length are the same."""
    own = star(seed)
    other = own.starting_at(piece)
    assert_array_equal(other.start, own.pieces.start[piece])
    assert_array_equal(other.end, other.start)
    assert_array_equal(other.pieces.start[1:], other.pieces.end[:-1])
    assert_allclose([other.area, other.length], [own.area, own.length], 1e-12)


@given(
    seed=SEEDS,
    turn=st.floats(-7, 7),
    scale=st.floats(0.01, 100),
    mirrored=st.booleans(),
)
@settings(max_examples=30)
def test_mapped_outlines_are_where_shapely_places_them(
    seed: int, turn: float, scale: float, mirrored: bool
) -> None:
    """Mirrored, scaled, turned and shifted by shapely, one after the other."""
    own = star(seed)
    place = Similarity(np.array([3.0, -8.0]), turn=turn, scale=scale, mirrored=mirrored)
    index, shares = np.repeat(np.arange(7), 20), np.tile(np.linspace(0, 1, 20), 7)
    line = shapely.LineString(own.pieces.at(index, shares)[:, :2])
    line = shapely.affinity.scale(line, -1 if mirrored else 1, 1, origin=(0, 0))
    line = shapely.affinity.scale(line, scale, scale, origin=(0, 0))
    line = shapely.affinity.rotate(line, turn, origin=(0, 0), use_radians=True)
    line = shapely.affinity.translate(line, 3.0, -8.0)
    found = own.mapped(place)
    points = found.pieces.at(index, shares)[:, :2]
    assert_allclose(points, shapely.get_coordinates(line), atol=ROUNDING * max(scale, 1.0))
    assert_allclose(found.length, own.length * scale, 1e-9)
    sign = -1 if mirrored else 1
    assert_allclose(found.area, sign * own.area * scale**2, 1e-9)


@pytest.mark.parametrize("degrees", [30, 90, 180, 270, 350])
def test_a_circular_segment_has_the_area_of_handbooks(degrees: float) -> None:
    """A = r² (φ - sin φ) / 2, from memory of any handbook's page on plane figures."""
    radius, turn = 12.5, math.radians(degrees)
    ends = radius * np.array([[1, 0, 0], [math.cos(turn), math.sin(turn), 0]])
    pieces = Pieces(ends, ends[::-1], np.array([math.tan(turn / 4), 0.0]), np.zeros(2, np.intp))
    segment = Outline(pieces, closed=True, layer="")
    assert_allclose(segment.area, radius**2 * (turn - math.sin(turn)) / 2, 1e-12)
    chord = 2 * radius * math.sin(turn / 2)
    assert_allclose(segment.length, radius * turn + chord, 1e-12)
    assert_allclose(segment.smallest_radius, radius, 1e-12)


def test_two_half_circles_are_a_circle() -> None:
    """Circumference, area and box of a circle, in closed form."""
    ends = np.array([[7.0, 2, 1], [1, 2, 1]])
    pieces = Pieces(ends, ends[::-1], np.ones(2), np.zeros(2, dtype=np.intp))
    circle = Outline(pieces, closed=True, layer="")
    assert_allclose(circle.length, 6 * math.pi, 1e-13)
    assert_allclose(circle.area, 9 * math.pi, 1e-13)
    assert_allclose(circle.bounds(), [[1, -1, 1], [7, 5, 1]], atol=1e-12)
    assert_allclose(pieces.centre, [[4, 2], [4, 2]], atol=1e-12)
    assert_allclose(pieces.radius, 3, 1e-13)


def test_lines_have_no_radius_and_no_centre() -> None:
    """So that nothing takes a line for an arc."""
    pieces = Pieces(np.zeros((1, 3)), np.array([[3.0, 4, 12]]), np.zeros(1), np.zeros(1, np.intp))
    assert pieces.radius[0] == np.inf
    assert np.isnan(pieces.centre).all()
    assert pieces.length[0] == 13
    assert Outline(pieces, closed=False, layer="").smallest_radius == np.inf
