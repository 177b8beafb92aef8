"""Outlines: what drawn pieces make, whatever their order, and what is found wrong with them."""

from __future__ import annotations

import time
from typing import TYPE_CHECKING

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from profileplan.geometry.outlines import Branch, Chained, Dropped, Gap, chain
from profileplan.geometry.overlaps import COVERING
from profileplan.geometry.shapes import Outline, Pieces

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.geometry.corridor import Array, Indices

SEEDS = st.integers(0, 2**32 - 1)

FEW_ROUNDINGS = 1e-9
"""mm: what a dozen operations on sizes of 100 mm may lose."""


def drawn(*rows: Sequence[float], sources: Sequence[int] | None = None) -> Pieces:
    """Return pieces from rows x, y, x, y and perhaps a bulge; an entity each, if not said."""
    table = np.array([[*row, 0.0][:5] for row in rows], dtype=np.float64).reshape(-1, 5)
    flat = np.zeros((len(table), 1))
    start, end = np.hstack([table[:, :2], flat]), np.hstack([table[:, 2:4], flat])
    return Pieces(start, end, table[:, 4], np.array(sources or range(len(table)), dtype=np.intp))


def joined(pieces: Pieces, joining: float = 0.01) -> Chained:
    """Return the outlines of pieces that are all on one layer."""
    return chain(pieces, ["bead"] * (int(pieces.source.max(initial=0)) + 1), joining=joining)


def polyline(*points: Sequence[float], source: int = 0) -> Pieces:
    """Return straight pieces of one entity through points."""
    nodes = np.array([[*point, 0.0] for point in points])
    count = len(nodes) - 1
    return Pieces(nodes[:-1], nodes[1:], np.zeros(count), np.full(count, source))


def together(*parts: Pieces) -> Pieces:
    """Return the pieces of all parts, one after the other."""
    return Pieces(
        np.concatenate([part.start for part in parts]),
        np.concatenate([part.end for part in parts]),
        np.concatenate([part.bulge for part in parts]),
        np.concatenate([part.source for part in parts]),
    )


def corners(outline: Outline) -> list[tuple[float, float]]:
    """Return where the pieces of an outline begin, and where the last ends."""
    points = np.concatenate([outline.pieces.start, outline.pieces.end[-1:]])[:, :2]
    return [(float(x), float(y)) for x, y in points.round(9)]


def scattered(seed: int) -> tuple[Pieces, Indices]:
    """Return pieces of random outlines, far from each other, and the outline of each.

    Lines and arcs; each piece is an entity; ends within 0.004 mm where they belong together.
    """
    random = np.random.default_rng(seed)
    parts, outline = [], []
    for number in range(int(random.integers(1, 6))):
        count = int(random.integers(3, 7))
        points = random.uniform(-40, 40, (count + 1, 3)) + np.array([200.0 * number, 0, 0])
        if random.random() < 0.5:
            points[-1] = points[0]
        bulge = random.choice([0.0, 0.5, -1.0, 0.1], count)
        off = random.normal(size=(count, 3))
        off *= 0.004 * random.random() / np.linalg.norm(off, axis=1, keepdims=True)
        source = np.zeros(count, dtype=np.intp)
        parts.append(Pieces(points[:-1], points[1:] + off, bulge, source))
        outline += [number] * count
    whole = together(*parts)
    numbered = Pieces(whole.start, whole.end, whole.bulge, np.arange(len(whole)))
    return numbered, np.array(outline)


def shuffled(pieces: Pieces, seed: int) -> Pieces:
    """Return pieces in another order, some of them the other way round."""
    random = np.random.default_rng(seed)
    other = pieces.chosen(random.permutation(len(pieces)))
    back = random.random(len(pieces)) < 0.5
    turned = back[:, np.newaxis]
    return Pieces(
        np.where(turned, other.end, other.start),
        np.where(turned, other.start, other.end),
        np.where(back, -other.bulge, other.bulge),
        other.source,
    )


def assert_follows(outline: Outline) -> None:
    """Assert that each piece begins where the one before ends, bit for bit."""
    assert_array_equal(outline.pieces.start[1:], outline.pieces.end[:-1])
    assert outline.closed == bool((outline.start == outline.end).all())


@given(seed=SEEDS, mixing=SEEDS)
@settings(max_examples=60)
def test_any_order_and_direction_of_pieces_gives_the_same_outlines(seed: int, mixing: int) -> None:
    """As sets of pieces, closed or open; and they are those that were torn apart."""
    pieces, number = scattered(seed)
    for given_pieces in (pieces, shuffled(pieces, mixing)):
        found = joined(given_pieces)
        assert not found.branches
        sets = {frozenset(own.pieces.source.tolist()) for own in found.outlines}
        expected = {frozenset(np.flatnonzero(number == n).tolist()) for n in set(number.tolist())}
        assert expected == sets
        for own in found.outlines:
            assert_follows(own)
            members = np.flatnonzero(np.isin(np.arange(len(pieces)), own.pieces.source))
            ends = pieces.start[members[0]], pieces.end[members[-1]]
            assert own.closed == bool(np.linalg.norm(ends[0] - ends[1]) < 0.01)


@given(seed=SEEDS, mixing=SEEDS)
@settings(max_examples=40)
def test_an_outline_follows_its_first_drawn_piece(seed: int, mixing: int) -> None:
    """In its direction; a closed one begins with it. All pieces are kept as they were drawn."""
    pieces, _ = scattered(seed)
    pieces = shuffled(pieces, mixing)
    found = joined(pieces)
    row = {source: index for index, source in enumerate(pieces.source.tolist())}
    firsts = [min(row[s] for s in own.pieces.source.tolist()) for own in found.outlines]
    assert sorted(firsts) == firsts, "outlines are in the order of their first pieces"
    for first, own in zip(firsts, found.outlines, strict=True):
        gaps = own.pieces.length < 0.01
        kept = own.pieces.chosen(np.flatnonzero(~gaps))
        rows = np.array([row[source] for source in kept.source.tolist()])
        forward = np.isclose(kept.start, pieces.start[rows], rtol=0, atol=1e-6).all(axis=1)
        expected = np.where(forward[:, np.newaxis], pieces.start[rows], pieces.end[rows])
        assert_allclose(kept.start, expected, atol=1e-6)
        assert_allclose(kept.bulge, np.where(forward, 1, -1) * pieces.bulge[rows])
        assert forward[rows == first].all()
        if own.closed:
            assert_array_equal(own.start, pieces.start[first])


@given(seed=SEEDS)
@settings(max_examples=40)
def test_gaps_that_were_joined_are_listed_and_bridged(seed: int) -> None:
    """One for each place where joined ends were apart: as many as there are bridges, as long."""
    pieces, _ = scattered(seed)
    found = joined(pieces)
    bridges = [
        float(length)
        for own in found.outlines
        for length in own.pieces.length[own.pieces.length < 0.01]
    ]
    widths = [gap.width for gap in found.gaps if gap.joined]
    assert_allclose(sorted(widths), sorted(bridges), atol=FEW_ROUNDINGS)
    count = sum(len(own.pieces) for own in found.outlines)
    assert len(pieces) + len(widths) == count


def test_rounding_between_ends_is_healed() -> None:
    """Less than a millionth of a millimetre is no gap: an end is moved there."""
    found = joined(drawn((0, 0, 10, 0), (10 + 5e-7, 0, 10, 10), (10, 10, 3e-7, 4e-7)))
    (own,) = found.outlines
    assert own.closed
    assert not found.gaps
    assert len(own.pieces) == 3
    assert_follows(own)


def test_a_gap_is_bridged_by_a_straight_piece() -> None:
    """Of the entity before; the pieces beside it stay as they were drawn."""
    found = joined(drawn((0, 0, 10, 0, 1), (10.006, 0, 20, 0)))
    (own,) = found.outlines
    assert corners(own) == [(0, 0), (10, 0), (10.006, 0), (20, 0)]
    assert_array_equal(own.pieces.bulge, [1, 0, 0])
    assert_array_equal(own.pieces.source, [0, 0, 1])
    assert [(gap.joined, gap.layer) for gap in found.gaps] == [(True, "bead")]
    assert_allclose(found.gaps[0].width, 0.006)
    assert_allclose(found.gaps[0].position, (10.003, 0))


def test_open_ends_that_are_near_are_listed() -> None:
    """They may have been meant to meet, but are too far apart to be joined."""
    found = joined(drawn((0, 0, 10, 0), (10.5, 0, 20, 0)))
    assert [own.closed for own in found.outlines] == [False, False]
    assert found.gaps == (Gap((10.25, 0.0), 0.5, "bead", joined=False),)


@pytest.mark.parametrize(("distance", "count"), [(0.00999, 1), (0.01001, 2)])
def test_ends_are_joined_up_to_the_distance_asked_for(distance: float, count: int) -> None:
    """In space: the distance counts heights too."""
    pieces = drawn((0, 0, 10, 0), (10, 0, 20, 5))
    lifted = pieces.start.copy()
    lifted[1, 2] = distance
    found = joined(Pieces(lifted, pieces.end, pieces.bulge, pieces.source))
    assert len(found.outlines) == count


def test_layers_are_not_joined() -> None:
    """Nor do pieces of one layer cover those of another: they are traced for other reasons."""
    pieces = drawn((0, 0, 10, 0), (10, 0, 10, 10), (0, 0, 10, 0))
    found = chain(pieces, ["bead", "mark", "mark"])
    assert [own.layer for own in found.outlines] == ["bead", "mark"]
    assert [len(own.pieces) for own in found.outlines] == [1, 2]
    assert not found.dropped
    assert not found.gaps


def test_a_short_line_is_not_closed() -> None:
    """Both its ends are near enough to be joined, but it encloses nothing."""
    found = joined(drawn((0, 0, 0.005, 0), (50, 0, 50.004, 0), (50.004, 0, 50.008, 0)))
    assert [own.closed for own in found.outlines] == [False, False]
    assert not found.gaps


def test_pieces_shorter_than_the_joining_distance_stay() -> None:
    """A fine chain of single lines, all ends of which are near each other, is one outline."""
    x = np.arange(41) * 0.004
    rows = [(x[n], 0.5 * x[n] ** 2, x[n + 1], 0.5 * x[n + 1] ** 2) for n in range(40)]
    pieces = shuffled(drawn(*rows), 3)
    found = joined(pieces)
    (own,) = found.outlines
    assert len(own.pieces) == 40
    assert not found.branches
    assert not found.gaps


def test_pieces_without_length_are_left_out() -> None:
    """They have no direction, and their neighbours meet all the same."""
    found = joined(drawn((0, 0, 1, 0), (1, 0, 1, 0), (1, 0, 1, 1), (5, 5, 5 + 1e-10, 5)))
    assert [corners(own) for own in found.outlines] == [[(0, 0), (1, 0), (1, 1)]]


def test_no_pieces_make_no_outlines() -> None:
    """An empty drawing is refused elsewhere, with its name."""
    found = chain(drawn(), [])
    assert (found.outlines, found.gaps, found.dropped, found.branches) == ((), (), (), ())


def test_two_half_circles_are_one_closed_outline() -> None:
    """That is how circles come out of a drawing."""
    found = joined(drawn((1, 0, -1, 0, 1), (-1, 0, 1, 0, 1), sources=[0, 0]))
    (circle,) = found.outlines
    assert circle.closed
    assert_allclose(circle.area, np.pi, 1e-12)


def test_an_arc_that_is_nearly_a_circle_keeps_its_shape_when_it_is_closed() -> None:
    """To move an end of it by a millionth would change its radius, so it has two halves."""
    away = 4e-7
    bulge = float(np.tan((2 * np.pi - away / 10) / 4))
    (circle,) = joined(drawn((10, 0, 10, -away, bulge))).outlines
    assert circle.closed
    assert_allclose(circle.pieces.radius, 10, atol=1e-6)
    assert_allclose(circle.area, 100 * np.pi, 1e-6)


def test_the_straightest_goes_on_where_more_than_two_meet() -> None:
    """The third stays open, and the point is listed."""
    found = joined(drawn((0, 0, 5, 5), (10, 0.1, 10, 9), (10, 0.1, 20, 0.5), (0, 0, 10, 0.1)))
    # As the first piece, which is drawn from (0, 0) to (5, 5).
    assert [corners(own) for own in found.outlines] == [
        [(20, 0.5), (10, 0.1), (0, 0), (5, 5)],
        [(10, 0.1), (10, 9)],
    ]
    assert found.branches == (Branch((10.0, 0.1), "bead", 3),)


def test_arcs_go_on_along_their_tangents() -> None:
    """The direction that counts is that of the arc at its end, not that of its chord."""
    found = joined(drawn((0, 0, 10, 0), (10, 0, 20, 4), (10, 0, 10, 20, 1)))
    assert [own.pieces.source.tolist() for own in found.outlines] == [[0, 2], [1]]


def test_crossing_lines_are_joined_in_pairs() -> None:
    """Four ends in a point: both lines go on straight."""
    rows = [(0, 0, 5, 5), (5, 5, 10, 10), (0, 10, 5, 5), (5, 5, 10, 0)]
    found = joined(shuffled(drawn(*rows), 1))
    sets = {frozenset(own.pieces.source.tolist()) for own in found.outlines}
    assert sets == {frozenset([0, 1]), frozenset([2, 3])}
    assert found.branches == (Branch((5.0, 5.0), "bead", 4),)


def test_what_one_entity_draws_stays_together() -> None:
    """Two closed entities that touch are two outlines; what ends at a corner is listed."""
    square = polyline((0, 0), (10, 0), (10, 10), (0, 10), (0, 0))
    other = polyline((10, 10), (20, 10), (20, 20), (10, 20), (10, 10), source=1)
    line = polyline((10, 0), (30, 0), source=2)
    found = joined(together(square, other, line))
    assert [own.closed for own in found.outlines] == [True, True, False]
    assert [own.pieces.source.tolist() for own in found.outlines] == [[0] * 4, [1] * 4, [2]]
    assert found.branches == (Branch((10.0, 0.0), "bead", 3),)


def test_a_line_that_doubles_back_is_kept() -> None:
    """A spike within one entity is meant; only other entities cover."""
    pieces = polyline((0, 0), (10, 0), (10, 5), (10, 0), (20, 0))
    found = joined(pieces)
    (own,) = found.outlines
    assert corners(own) == [(0, 0), (10, 0), (10, 5), (10, 0), (20, 0)]
    assert not found.dropped


def test_too_many_ends_in_a_point_stay_open() -> None:
    """None of a hundred rays goes on straight for a reason; no work is spent on it either."""
    angle = np.linspace(0, 2 * np.pi, 100, endpoint=False)
    rays = [(0, 0, 9 * np.cos(a), 9 * np.sin(a)) for a in angle]
    found = joined(drawn(*rays))
    assert len(found.outlines) == 100
    assert [branch.ends for branch in found.branches] == [100]


@pytest.mark.parametrize("bulge", [0.0, 0.3, -1.0])
@pytest.mark.parametrize("back", [False, True])
def test_a_piece_drawn_twice_is_traced_once(bulge: float, back: bool) -> None:
    """In either direction; the first that is drawn stays."""
    twice = (9, 4, 1, 2, -bulge) if back else (1, 2, 9, 4, bulge)
    pieces = drawn((1, 2, 9, 4, bulge), twice)
    found = joined(pieces)
    (own,) = found.outlines
    assert own.pieces.source.tolist() == [0]
    length = float(pieces.length[0])
    assert [(d.source, d.covered_by) for d in found.dropped] == [(1, 0)]
    assert_allclose(found.dropped[0].length, length)


def test_a_line_inside_of_a_longer_one_is_covered() -> None:
    """Whichever is drawn first."""
    found = joined(drawn((3, 0, 4, 0), (0, 0, 10, 0), (20, 0, 10, 0)))
    assert [own.pieces.source.tolist() for own in found.outlines] == [[1, 2]]
    assert found.dropped == (Dropped(0, "bead", 1.0, 1),)


def test_a_line_that_overlaps_another_is_shortened() -> None:
    """To what is left, which goes on where the other ends."""
    found = joined(drawn((0, 0, 10, 0), (12, 0, 5, 0)))
    (own,) = found.outlines
    assert corners(own) == [(0, 0), (10, 0), (12, 0)]
    assert [(d.source, d.covered_by) for d in found.dropped] == [(1, 0)]
    assert_allclose(found.dropped[0].length, 5)


def test_a_circle_is_covered_by_an_equal_one_that_begins_elsewhere() -> None:
    """Each half is covered by parts of two others."""
    first = drawn((1, 0, -1, 0, 1), (-1, 0, 1, 0, 1), sources=[0, 0])
    second = drawn((0, 1, 0, -1, -1), (0, -1, 0, 1, -1), sources=[1, 1])
    found = joined(together(first, second))
    (circle,) = found.outlines
    assert circle.closed
    assert set(circle.pieces.source.tolist()) == {0}
    assert_allclose(found.dropped[0].length, 2 * np.pi)


@pytest.mark.parametrize("apart", [0.5e-4, 2e-4])
def test_pieces_cover_others_up_to_a_ten_thousandth(apart: float) -> None:
    """What is farther away was drawn for a reason."""
    found = joined(drawn((0, 0, 10, 0), (2, apart, 8, apart)))
    assert len(found.dropped) == (1 if apart < COVERING else 0)


def overlapping(seed: int) -> Pieces:
    """Return lines on the diagonal and arcs of one circle round (200, 0), an entity each."""
    random = np.random.default_rng(seed)
    rows = [(one, one, other, other, 0.0) for one, other in random.uniform(-30, 30, (4, 2))]
    radius = random.uniform(1, 50)
    for _ in range(4):
        first, turn = random.uniform(0, 2 * np.pi), random.choice([-1, 1]) * random.uniform(0.2, 6)
        (x, y), (u, v) = (
            (200 + radius * np.cos(a), radius * np.sin(a)) for a in (first, first + turn)
        )
        rows.append((x, y, u, v, np.tan(turn / 4)))
    return drawn(*rows)


def unrolled(pieces: Pieces) -> shapely.Geometry:
    """Return the union of such pieces: lines on y = 0, and on y = 1 the circle, a turn long."""
    parts = []
    for start, end, turn, radius in zip(
        pieces.start, pieces.end, pieces.turn, pieces.radius, strict=True
    ):
        if turn == 0:
            root = np.sqrt(2)
            parts.append(shapely.LineString([(start[0] * root, 0), (end[0] * root, 0)]))
            continue
        first = np.arctan2(start[1], start[0] - 200)
        low = min(first, first + turn) % (2 * np.pi)
        for begin in (low, low - 2 * np.pi):
            ends = np.clip([begin, begin + abs(turn)], 0, 2 * np.pi) * radius
            if ends[1] > ends[0]:
                parts.append(shapely.LineString([(ends[0], 1), (ends[1], 1)]))
    return shapely.union_all(parts)


@given(seed=SEEDS)
@settings(max_examples=100)
def test_nothing_is_traced_twice_and_all_is_traced(seed: int) -> None:
    """The union, by shapely, of what is drawn is that of what is traced, and as long."""
    pieces = overlapping(seed)
    found = joined(pieces)
    traced = together(*(own.pieces for own in found.outlines))
    whole, rest = unrolled(pieces), unrolled(traced)
    length = shapely.length(whole)
    # Each of the pieces may lose what cannot be told from nothing, at both ends.
    slack = 16 * 1e-3
    assert_allclose([shapely.length(rest), traced.length.sum()], length, atol=slack)
    assert_allclose(shapely.length(shapely.union(whole, rest, grid_size=1e-6)), length, atol=slack)
    lost = sum(dropped.length for dropped in found.dropped)
    assert_allclose(length + lost, pieces.length.sum(), atol=slack)


def spiral(count: int) -> Array:
    """Return points of a spiral, (count + 1, 3)."""
    turn = np.linspace(2, 200 * np.pi, count + 1)
    return np.column_stack([turn * np.cos(turn), turn * np.sin(turn), np.zeros(count + 1)])


def seconds(pieces: Pieces) -> float:
    """Return how long it takes to chain pieces into one outline."""
    begin = time.process_time()
    found = joined(pieces)
    passed = time.process_time() - begin
    assert [len(own.pieces) for own in found.outlines] == [len(pieces)]
    return passed


def test_ten_times_the_pieces_take_little_more_than_ten_times_as_long() -> None:
    """Shuffled single lines: n log n; a search of all by all would take a hundred times as long."""
    times = []
    for count in (5_000, 50_000):
        nodes = spiral(count)
        lines = Pieces(nodes[:-1], nodes[1:], np.zeros(count), np.arange(count))
        times.append(seconds(shuffled(lines, 1)))
    assert times[1] < 30 * times[0]


def test_a_million_points_of_one_entity_take_seconds() -> None:
    """They are in order as they are drawn, so that nothing is searched for."""
    nodes = spiral(10**6)
    pieces = Pieces(nodes[:-1], nodes[1:], np.zeros(10**6), np.zeros(10**6, dtype=np.intp))
    assert seconds(pieces) < 10
