"""Corridors: which positions a tube holds, and whether a motion is followed through the regions."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from profileplan.geometry.corridor import tubes

if TYPE_CHECKING:
    from profileplan.geometry.corridor import Array, Corridor, Regions

ROUNDING = 1e-9
"""Share of a radius, or degree: what a dozen operations may lose."""

WAYS = 501
"""Shares of the way at which brute force looks."""

SEEDS = st.integers(0, 2**32 - 1)


def plane(points: list[tuple[float, ...]], tolerance: float = 1.0) -> Corridor:
    """Return the corridor of a path of linear axes."""
    array = np.array(points, dtype=np.float64)
    linear = [True] * array.shape[1]
    return tubes(array, tolerance=tolerance, linear=linear, angle_tolerance=0.5)


def pieces(*nodes: tuple[float, ...]) -> Array:
    """Return straight pieces from node to node: (n, 2, d)."""
    array = np.array(nodes, dtype=np.float64)
    return np.stack([array[:-1], array[1:]], axis=1)


def kept(corridor: Corridor, hulls: Array) -> bool:
    """Return whether a motion stays in the regions and passes every gate."""
    return corridor.follow(hulls).out <= 1 + ROUNDING


def by_brute_force(regions: Regions, positions: Array) -> Array:
    """Return the least excess over many shares of the way: at most half a step too high."""
    excess = np.full(len(regions), np.inf)
    for share in np.linspace(0, 1, WAYS):
        ball = np.einsum("mqd,md->mq", regions.ball, positions) + regions.ball_way * share
        out = np.linalg.norm(ball - regions.centre, axis=1) - 1
        rows = np.einsum("mkd,md->mk", regions.rows, positions) + regions.rows_way * share
        failed = (rows - regions.bound).max(axis=1, initial=-np.inf)
        excess = np.minimum(excess, np.maximum(out, failed))
    return np.asarray(np.maximum(excess, 0.0))


@pytest.mark.parametrize(
    "linear", [(True,), (True, True), (True,) * 3, (True, True, False), (True, False, False)]
)
@given(seed=SEEDS)
@settings(max_examples=15)
def test_a_tube_holds_what_some_share_of_the_way_explains(
    linear: tuple[bool, ...], seed: int
) -> None:
    """The closed form for the best share of the way, against trying many."""
    random = np.random.default_rng(seed)
    points = random.uniform(-20, 20, (9, len(linear)))
    tolerance, angle = random.uniform(1, 15), random.uniform(1, 15)
    regions = tubes(points, tolerance=tolerance, linear=linear, angle_tolerance=angle).regions
    # Round the segments, not anywhere: so that about half are inside.
    shares = random.uniform(-0.2, 1.2, (8, 1))
    positions = points[:-1] + shares * np.diff(points, axis=0)
    positions += random.uniform(-10, 10, positions.shape)
    found, expected = regions.excess(positions), by_brute_force(regions, positions)
    steepest = np.abs(np.diff(points, axis=0)).sum(axis=1).max() * max(1.0, 1 / tolerance)
    missed = steepest / (WAYS - 1)
    assert_allclose(found[expected == 0], 0.0, atol=ROUNDING, err_msg="inside by brute force")
    assert (found[expected > missed] > 0).all(), "outside by brute force"
    assert (found >= expected - missed).all(), "no share of the way is better than the best"


@given(seed=SEEDS)
@settings(max_examples=25)
def test_a_tube_is_all_that_is_near_its_segment(seed: int) -> None:
    """Distances of linear axes, against shapely's."""
    random = np.random.default_rng(seed)
    points, tolerance = random.uniform(-20, 20, (6, 2)), random.uniform(0.1, 10)
    regions = tubes(points, tolerance=tolerance, linear=(True, True), angle_tolerance=0.5).regions
    positions = random.uniform(-25, 25, (5, 2))
    distance = [
        shapely.LineString(points[index : index + 2]).distance(shapely.Point(position))
        for index, position in enumerate(positions)
    ]
    expected = np.maximum(np.array(distance) / tolerance - 1, 0.0)
    assert_allclose(regions.excess(positions), expected, 0, 1e-12 * 50 / tolerance)


@given(seed=SEEDS)
@settings(max_examples=25)
def test_a_gate_lies_in_both_of_its_regions(seed: int) -> None:
    """Then a motion inside the gate may go on to the next region."""
    random = np.random.default_rng(seed)
    points = random.uniform(-20, 20, (6, 3))
    near = random.uniform(0.1, 4, 4)
    corridor = tubes(
        points,
        tolerance=2.0,
        linear=(True, True, False),
        angle_tolerance=3.0,
        gate_tolerance=near,
    )
    for _ in range(20):
        away = random.normal(size=(4, 2))
        away *= (np.minimum(near, 2.0) / np.linalg.norm(away, axis=1))[:, np.newaxis]
        turned = random.uniform(-3, 3, (4, 1))
        inside = points[1:-1] + 0.999 * np.concatenate([away, turned], axis=1)
        assert_allclose(corridor.gates.excess(inside), 0.0, atol=ROUNDING)
        for first in (0, 1):
            regions = corridor.regions.at(slice(first, first + 4))
            assert_allclose(regions.excess(inside), 0.0, atol=ROUNDING)
        outside = points[1:-1] + 1.001 * np.concatenate([away, 0 * turned], axis=1)
        assert (corridor.gates.excess(outside) > 0).all()


def test_a_rotary_axis_turns_in_proportion_to_the_way() -> None:
    """Half of the turn belongs to half of the way, within the angle's own tolerance."""
    points = np.array([[0.0, 0.0], [100.0, 90.0]])
    tube = tubes(points, tolerance=2.0, linear=(True, False), angle_tolerance=1.0).regions
    # 2 mm of way may lie between the motion and its place, in which c turns by 1.8 degrees.
    allowed = [[50.0, 45.0], [50.0, 47.7], [50.0, 42.3], [-1.9, -0.9], [100.0, 89.0]]
    assert_array_equal([tube.excess(np.array([own]))[0] for own in allowed], 0.0)
    refused = [[50.0, 47.9], [50.0, 42.1], [100.0, 91.1], [-2.1, 0.0], [0.0, -1.1]]
    found = [float(tube.excess(np.array([own]))[0]) for own in refused]
    assert min(found) > 0, dict(zip(map(str, refused), found, strict=True))


CORNER: list[tuple[float, ...]] = [(0.0, 0.0), (100.0, 0.0), (100.0, 100.0)]


@pytest.mark.parametrize(
    "nodes",
    [
        ((0.0, 0.0), (100.0, 0.0), (100.0, 100.0)),
        ((0.0, 0.0), (50.0, 0.9), (99.1, 0.0), (100.0, 50.0), (100.0, 100.0)),
        ((0.0, 0.0), (99.2, 0.1), (99.9, 0.8), (100.0, 100.0)),
        ((0.0, 0.0), (100.9, 0.0), (100.0, 0.9), (100.0, 100.0)),
        ((0.0, 0.0), (100.0, -0.9), (100.0, 100.0)),
    ],
    ids=["at the corner", "early", "early and late", "beyond", "outside"],
)
def test_a_corner_may_be_passed_anywhere_in_its_gate(nodes: tuple[tuple[float, ...], ...]) -> None:
    """Where the motion goes from one region to the next is free."""
    corridor = plane(CORNER)
    found = corridor.follow(pieces(*nodes))
    assert kept(corridor, pieces(*nodes)), found
    assert found.region[0] == 0
    assert found.region[-1] == 1


@pytest.mark.parametrize(
    "nodes",
    [
        ((0.0, 0.0), (98.9, 0.0), (100.0, 1.1), (100.0, 100.0)),
        ((0.0, 0.0), (100.0, 100.0)),
        ((0.0, 0.0), (101.2, 0.0), (100.0, 0.0), (100.0, 100.0)),
        ((0.0, 0.0), (50.0, 1.1), (100.0, 0.0), (100.0, 100.0)),
        ((0.0, 0.0), (98.0, 0.0)),
        ((0.0, 0.0), (100.0, 0.0), (100.0, 50.0), (98.9, 50.0), (100.0, 100.0)),
    ],
    ids=["corner cut", "straight across", "beyond", "beside", "corner not reached", "beside later"],
)
def test_what_leaves_the_tolerance_is_found(nodes: tuple[tuple[float, ...], ...]) -> None:
    """A judge that never objects is none. The end alone is judged elsewhere: by arrival."""
    found = plane(CORNER).follow(pieces(*nodes))
    assert not kept(plane(CORNER), pieces(*nodes)), found


def test_how_far_out_is_told_as_a_share_of_the_tolerance() -> None:
    """The value of a finding: distance over tolerance, for the motion and for each corner."""
    motion = pieces((0.0, 0.0), (50.0, 0.5), (99.4, 0.0), (100.0, 100.0))
    found = plane(CORNER, tolerance=2.0).follow(motion)
    assert_allclose(found.out, 0.3, rtol=1e-12)
    outside = plane(CORNER, tolerance=0.25).follow(motion)
    assert_allclose(outside.out, 2.4, rtol=1e-12)


TURNING_BACK = [
    [(0.0, 0.0), (100.0, 0.0), (0.0, 0.0)],
    [(0.0, 0.0), (100.0, 0.0), (50.0, 0.0), (80.0, 0.0)],
    [(0.0, 0.0), (100.0, 0.0), (50.0, 0.5), (80.0, 0.0)],
    [(0.0, 0.0), (300.0, 0.0), (300.0, 1.0), (0.0, 1.0)],
    [(0.0, 0.0), (100.0, 0.0), (0.0, 0.0), (100.0, 0.0), (0.0, 0.0)],
    [(0.0, 0.0), (100.0, 0.0), (99.0, 0.0), (199.0, 0.0)],
    [(0.0, 0.0), (50.0, 0.0), (100.0, 0.0), (150.0, 0.0)],
    [(0.0, 0.0), (0.0, 0.0), (100.0, 0.0), (100.0, 0.0), (100.0, 50.0), (100.0, 50.0)],
]


@pytest.mark.parametrize("points", TURNING_BACK, ids=str)
@pytest.mark.parametrize("between", [1, 7])
def test_the_path_itself_is_always_inside(points: list[tuple[float, ...]], between: int) -> None:
    """Also where regions lie upon each other, so that a position does not tell which is meant."""
    corner = np.array(points)
    shares = np.linspace(0, 1, between + 1)[:-1, np.newaxis]
    inner = [one + shares * (other - one) for one, other in pairwise(corner)]
    nodes = np.concatenate([*inner, corner[-1:]])
    hulls = np.stack([nodes[:-1], nodes[1:]], axis=1)
    corridor = plane(points, tolerance=5.0)
    assert kept(corridor, hulls), corridor.follow(hulls)


@given(seed=SEEDS)
@settings(max_examples=40)
def test_a_motion_near_the_path_is_inside(seed: int) -> None:
    """Corners on a coarse grid: many paths turn back, cross themselves or run beside themselves."""
    random = np.random.default_rng(seed)
    points = 10.0 * random.integers(0, 4, (random.integers(3, 9), 2))
    moves = np.any(np.diff(points, axis=0) != 0, axis=1)
    points = points[np.concatenate([[True], moves])]
    if len(points) < 2:
        return
    tolerance = float(random.choice([0.5, 3.0, 12.0]))
    nodes = [points[0]]
    for one, other in pairwise(points):
        shares = np.sort(random.uniform(0, 1, (random.integers(0, 4), 1)), axis=0)
        nodes += [*(one + shares * (other - one)), other]
    motion = np.array(nodes)
    away = random.normal(size=motion.shape)
    away *= random.uniform(0, tolerance, (len(motion), 1)) / np.linalg.norm(
        away, axis=1, keepdims=True
    )
    motion[1:-1] += 0.999 * away[1:-1]
    hulls = np.stack([motion[:-1], motion[1:]], axis=1)
    corridor = tubes(points, tolerance=tolerance, linear=(True, True), angle_tolerance=0.5)
    assert kept(corridor, hulls), (points.tolist(), tolerance, corridor.follow(hulls))


@given(seed=SEEDS)
@settings(max_examples=40)
def test_a_motion_beside_the_path_is_outside(seed: int) -> None:
    """Whatever its order: a node farther than the tolerance from the whole path breaks it."""
    random = np.random.default_rng(seed)
    points = random.uniform(0, 100, (random.integers(3, 7), 2))
    motion = points.copy()
    spoilt = int(random.integers(1, len(points) - 1))
    motion[spoilt] += random.uniform(-20, 20, 2)
    away = shapely.LineString(points).distance(shapely.Point(motion[spoilt]))
    missed = shapely.LineString(motion).distance(shapely.Point(points[spoilt]))
    hulls = np.stack([motion[:-1], motion[1:]], axis=1)
    for worst in (away, missed):
        corridor = tubes(
            points, tolerance=0.99 * worst + 1e-6, linear=(True, True), angle_tolerance=0.5
        )
        if worst > 0.01:
            assert not kept(corridor, hulls), corridor.follow(hulls)


def test_a_rotary_axis_that_never_turns_is_found() -> None:
    """There and back by 90 degrees: who stays at 0 has been everywhere but at the corner."""
    points = np.array([[0.0], [90.0], [0.0]])
    corridor = tubes(points, tolerance=1.0, linear=(False,), angle_tolerance=0.5)
    assert kept(corridor, pieces((0.0,), (45.0,), (90.0,), (45.0,), (0.0,)))
    assert not kept(corridor, pieces((0.0,), (0.0,), (0.0,)))
