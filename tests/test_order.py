"""The order of outlines: least travel against all orders, and what must come before what."""

from __future__ import annotations

import time
from itertools import combinations, permutations, product
from typing import TYPE_CHECKING

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from profileplan.geometry import order as order_module
from profileplan.geometry.exchanges import Exchanges
from profileplan.geometry.order import order
from profileplan.geometry.shapes import Outline, Pieces

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.geometry.corridor import Array
    from profileplan.geometry.order import Travel

SEEDS = st.integers(0, 2**32 - 1)

START = np.array([0.0, 0.0])


def straight(one: Array, other: Array) -> Array:
    """Return times at 500 mm/s."""
    return np.asarray(np.hypot(*(one - other).T) / 500)


def lifted(one: Array, other: Array) -> Array:
    """Return times of two axes, one slower, that start and stop, with a lift between."""
    away = np.abs(one - other)
    axes = 2 * np.sqrt(away / np.array([2000.0, 500.0]))
    return np.asarray(0.4 + axes.max(axis=1))


def uphill(one: Array, other: Array) -> Array:
    """Return times that are longer one way than the other."""
    away = other - one
    return np.asarray(np.hypot(*away.T) / 500 + 0.001 * np.maximum(away[:, 1], 0))


def polygon(*points: Sequence[float], closed: bool = True) -> Outline:
    """Return straight pieces through points."""
    nodes = np.array([[*point, 0.0] for point in points])
    end = np.roll(nodes, -1, axis=0)
    count = len(nodes) if closed else len(nodes) - 1
    pieces = Pieces(nodes[:count], end[:count], np.zeros(count), np.zeros(count, dtype=np.intp))
    return Outline(pieces, closed=closed, layer="bead")


def circle(x: float, y: float, radius: float) -> Outline:
    """Return two half circles."""
    ends = np.array([[x + radius, y, 0], [x - radius, y, 0]])
    return Outline(
        Pieces(ends, ends[::-1], np.ones(2), np.zeros(2, dtype=np.intp)), closed=True, layer="bead"
    )


def mixed(seed: int, count: int) -> list[Outline]:
    """Return triangles and open lines, anywhere."""
    random = np.random.default_rng(seed)
    found = []
    for _ in range(count):
        points = random.uniform(0, 300, 2) + random.uniform(-60, 60, (3, 2))
        found.append(polygon(*points.tolist(), closed=bool(random.random() < 0.5)))
    return found


def time_of(outlines: Sequence[Outline], travel: Travel) -> float:
    """Return how long the travel from START through outlines takes."""
    leave = np.array([START, *(own.end[:2] for own in outlines[:-1])])
    return float(travel(leave, np.array([own.start[:2] for own in outlines])).sum())


def choices(outline: Outline) -> list[Outline]:
    """Return an outline with all starts, or in both directions."""
    if outline.closed:
        return [outline.starting_at(piece) for piece in range(len(outline.pieces))]
    return [outline, outline.reversed()]


def least(outlines: Sequence[Outline], travel: Travel, before: Sequence[tuple[int, int]]) -> float:
    """Return the least time over all orders, starts and directions, by trying them all.

    ``before`` are pairs of outlines of which one must come before the other.
    """
    options = [choices(own) for own in outlines]
    enter = [np.array([own.start[:2] for own in some]) for some in options]
    leave = [np.array([own.end[:2] for own in some]) for some in options]
    best = np.inf
    for sequence in permutations(range(len(outlines))):
        if any(sequence.index(one) > sequence.index(other) for one, other in before):
            continue
        picks = np.array(list(product(*(range(len(options[n])) for n in sequence))))
        total, here = np.zeros(len(picks)), np.tile(START, (len(picks), 1))
        for column, number in enumerate(sequence):
            total += travel(here, enter[number][picks[:, column]])
            here = leave[number][picks[:, column]]
        best = min(best, float(total.min()))
    return best


def assert_same_outlines(found: Sequence[Outline], outlines: Sequence[Outline]) -> None:
    """Assert that each outline is there once, with all its pieces, closed ones as drawn."""

    def names(some: Sequence[Outline]) -> list[tuple[object, ...]]:
        keys = []
        for own in some:
            ways = choices(own)
            lists = [tuple(way.pieces.start.ravel().tolist()) for way in ways]
            keys.append((own.closed, min(lists), own.length if own.closed else 0))
        return sorted(keys)

    for (_, one, length), (_, other, expected) in zip(names(found), names(outlines), strict=True):
        assert one == other
        assert_allclose(float(str(length)), float(str(expected)))


@pytest.mark.parametrize("travel", [straight, lifted, uphill])
@given(seed=SEEDS, count=st.integers(1, 5))
@settings(max_examples=15)
def test_a_few_outlines_are_traced_in_the_best_of_all_orders(
    travel: Travel, seed: int, count: int
) -> None:
    """Against all orders, with all starts and both directions."""
    outlines = mixed(seed, count)
    found = order(outlines, start=START, travel=travel)
    assert_same_outlines(found, outlines)
    assert_allclose(time_of(found, travel), least(outlines, travel, []), 1e-9)


@pytest.mark.parametrize("travel", [straight, lifted, uphill])
def test_more_outlines_are_traced_in_nearly_the_best_order(
    travel: Travel, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The search without the exact comparison, which more outlines get: against all orders."""
    monkeypatch.setattr(order_module, "EXACT", 2)
    ratios = []
    for seed in range(12):
        outlines = mixed(seed, 5)
        found = order(outlines, start=START, travel=travel)
        assert_same_outlines(found, outlines)
        ratios.append(time_of(found, travel) / least(outlines, travel, []))
    assert min(ratios) > 1 - 1e-9
    assert max(ratios) < 1.05
    assert np.median(ratios) < 1 + 1e-9


@pytest.mark.parametrize("count", [12, 13])
def test_the_search_comes_near_the_exact_order_of_a_dozen(
    count: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The exact comparison is proven by all orders of five; here it judges the search."""
    ratios = []
    for seed in range(4):
        outlines = mixed(seed, count)
        found = time_of(order(outlines, start=START, travel=lifted), lifted)
        with monkeypatch.context() as patch:
            patch.setattr(order_module, "EXACT", count)
            ratios.append(found / time_of(order(outlines, start=START, travel=lifted), lifted))
    assert max(ratios) < 1.05
    assert min(ratios) > 1 - 1e-9


@pytest.mark.parametrize("travel", [lifted, uphill])
def test_no_change_of_an_improved_order_saves_time(travel: Travel) -> None:
    """All stretches traced backward and all short ones moved, one by one, by brute force."""
    count = 12
    for seed in range(5):
        enter, leave = np.random.default_rng(seed).uniform(0, 300, (2, count, 2))
        search = Exchanges(enter, leave, start=START, parent=np.full(count, -1), travel=travel)
        sequence, turned = search.best(np.arange(count))
        ways = list(zip(sequence.tolist(), turned[sequence].tolist(), strict=True))

        def spent(
            ways: list[tuple[int, bool]], enter: Array = enter, leave: Array = leave
        ) -> float:
            """Return the time of an order of outlines, some of them turned."""
            into = np.array([leave[own] if back else enter[own] for own, back in ways])
            out = np.array([enter[own] if back else leave[own] for own, back in ways])
            return float(travel(np.concatenate([[START], out[:-1]]), into).sum())

        others = []
        for low, high in combinations(range(count + 1), 2):
            stretch, rest = ways[low:high], ways[:low] + ways[high:]
            back = [(own, not turn) for own, turn in stretch[::-1]]
            others.append(ways[:low] + back + ways[high:])
            if len(stretch) <= 3:
                others += [
                    rest[:at] + part + rest[at:]
                    for part in (stretch, back)
                    for at in range(len(rest) + 1)
                ]
        assert spent(ways) <= min(map(spent, others)) * (1 + 1e-8)


def test_many_places_are_visited_about_as_fast_as_theory_says() -> None:
    """The shortest way through n random places in area A is about 0.7124 sqrt(n A).

    Constant of Johnson, McGeoch and Rothberg (1996), from memory; the border adds a few percent at
    n = 1000, and the way has no return. A search of this kind is usually within 5 %.
    """
    count, side = 1000, 1000.0
    places = np.random.default_rng(5).uniform(0, side, (count, 2))
    dots = [circle(x, y, 1e-3) for x, y in places]
    found = order(dots, start=START, travel=straight)
    length = 500 * time_of(found, straight)
    expected = 0.7124 * np.sqrt(count) * side
    assert 0.97 * expected < length < 1.10 * expected


@given(seed=SEEDS, count=st.integers(0, 30))
@settings(max_examples=10)
def test_the_order_never_takes_longer_than_drawn(seed: int, count: int) -> None:
    """Nor does it lose an outline."""
    outlines = mixed(seed, count)
    for travel in (straight, uphill):
        found = order(outlines, start=START, travel=travel)
        assert_same_outlines(found, outlines)
        if count:
            assert time_of(found, travel) <= time_of(outlines, travel) + 1e-12


def test_a_good_drawn_order_is_kept() -> None:
    """Where nothing is gained nothing is changed."""
    row = [polygon((x, 0), (x + 5, 0), closed=False) for x in range(0, 200, 10)]
    found = order(row, start=START, travel=straight)
    assert [own.start[0] for own in found] == [own.start[0] for own in row]


def test_as_drawn_is_as_drawn() -> None:
    """Neither the order nor the starts are touched."""
    outlines = mixed(3, 9)
    assert order(outlines, start=START, travel=straight, shortest=False) == tuple(outlines)


def test_closed_outlines_keep_their_direction() -> None:
    """A bead is laid on a certain side of its edge."""
    squares = [polygon((x, 0), (x, 5), (x + 5, 5), (x + 5, 0)) for x in (40, 0, 20)]
    found = order(squares, start=START, travel=straight)
    assert [own.area for own in found] == [-25, -25, -25]


def test_an_outline_of_many_pieces_is_entered_where_it_is_near() -> None:
    """Only some of its starts are compared, and the nearest is among them."""
    angle = np.linspace(0, 2 * np.pi, 2000, endpoint=False)
    ring = polygon(*np.column_stack([100 + 50 * np.cos(angle), 50 * np.sin(angle)]).tolist())
    (found,) = order([ring], start=START, travel=straight)
    assert_allclose(found.start[:2], [50, 0], atol=0.2)


def nested(seed: int) -> list[Outline]:
    """Return circles and lines, many of them inside of others, none of which cross."""
    random = np.random.default_rng(seed)
    found: list[Outline] = []

    def fill(x: float, y: float, radius: float) -> None:
        """Draw a circle and, perhaps, others and a line inside."""
        found.append(circle(x, y, radius))
        if radius > 5 and random.random() < 0.7:
            if random.random() < 0.5:
                found.append(polygon((x, y - 0.1), (x, y + 0.1), closed=False))
            for side in (-1, 1)[: int(random.integers(1, 3))]:
                fill(x + side * 0.5 * radius, y, radius * random.uniform(0.2, 0.4))

    for number in range(int(random.integers(1, 8))):
        fill(100.0 * number, random.uniform(0, 300), random.uniform(10, 49))
    return [found[index] for index in random.permutation(len(found))]


def containing(outlines: Sequence[Outline]) -> list[tuple[int, int]]:
    """Return pairs of an outline and one round it, by shapely, one pair at a time."""
    lines = [shapely.LineString(own.pieces.flattened(1e-3)[0][:, :2]) for own in outlines]
    return [
        (inner, outer)
        for inner, line in enumerate(lines)
        for outer, own in enumerate(outlines)
        if inner != outer and own.closed and shapely.Polygon(lines[outer]).contains(line)
    ]


@given(seed=SEEDS, shortest=st.booleans())
@settings(max_examples=20)
def test_what_lies_inside_comes_first(seed: int, shortest: bool) -> None:
    """On every level, and whether or not travel is shortened."""
    outlines = nested(seed)
    found = order(outlines, start=START, travel=lifted, inside_first=True, shortest=shortest)
    assert_same_outlines(found, outlines)
    assert [(one, other) for one, other in containing(found) if one > other] == []


@given(seed=SEEDS)
@settings(max_examples=10)
def test_the_best_order_of_a_few_with_others_inside_is_found(seed: int) -> None:
    """Against all orders in which what lies inside comes first."""
    outlines = nested(seed)[:6]
    found = order(outlines, start=START, travel=lifted, inside_first=True)
    assert_allclose(time_of(found, lifted), least(outlines, lifted, containing(outlines)), 1e-9)


def test_the_search_gains_much_though_insides_come_first() -> None:
    """A grid of rings with a hole each, drawn at random: each pair costs one short way at best."""
    random = np.random.default_rng(2)
    outlines = [
        circle(30 * x, 30 * y, radius) for x in range(8) for y in range(8) for radius in (3, 10)
    ]
    outlines = [outlines[index] for index in random.permutation(len(outlines))]
    found = order(outlines, start=START, travel=straight, inside_first=True)
    assert [(one, other) for one, other in containing(found) if one > other] == []
    # From hole to ring 7 mm, from ring to the next hole about 17 mm, from row to row no more.
    assert time_of(found, straight) < 1.25 * 64 * (7 + 17) / 500


def test_crossing_and_spoiled_outlines_are_ordered_all_the_same() -> None:
    """What crosses itself has an inside too; what only crosses the border is not inside."""
    bow = polygon((0, 0), (20, 20), (20, 0), (0, 20))
    inside = polygon((17, 9), (17, 11), (18, 10))
    across = polygon((-5, 10), (40, 10), closed=False)
    double = polygon((50, 0), (60, 0))
    outlines = [bow, across, double, inside]
    found = order(outlines, start=START, travel=straight, inside_first=True, shortest=False)
    starts = [own.start[:2].tolist() for own in found]
    assert starts == [[-5, 10], [50, 0], [17, 9], [0, 0]]


def test_the_same_outlines_are_ordered_the_same_again() -> None:
    """A job is planned the same every time."""
    outlines = mixed(8, 40)
    one, other = (order(outlines, start=START, travel=lifted) for _ in range(2))
    for mine, its in zip(one, other, strict=True):
        assert_array_equal(mine.pieces.start, its.pieces.start)


def test_thousands_of_circles_take_seconds() -> None:
    """Four times as many take less than ten times as long, not sixteen times."""
    seconds = []
    for count in (1000, 4000):
        places = np.random.default_rng(1).uniform(0, 30 * np.sqrt(count), (count, 2))
        dots = [circle(x, y, 5) for x, y in places]
        begin = time.process_time()
        order(dots, start=START, travel=straight)
        seconds.append(time.process_time() - begin)
    assert seconds[0] < 5
    assert seconds[1] < 10 * seconds[0]
