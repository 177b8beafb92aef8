"""Lines and arcs for curves: within the error, smooth, no more than needed; splines as scipy's."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy.interpolate import BSpline
from scipy.spatial import cKDTree

from profileplan.geometry.curves import UNEVEN, Fitted, bezier_chain, ellipse_chain, fitted
from profileplan.geometry.shapes import Pieces
from profileplan.geometry.splines import Given, spline_chain

if TYPE_CHECKING:
    from profileplan.geometry.corridor import Array

MANY = 10**6

ROUNDING = 1e-9
"""Relative to curves of some 100 mm: what halving them a dozen times may lose."""

SAMPLING = 1e-4
"""mm by which a curve of some 10 mm may lie beside lines through 4000 points of it."""

SEEDS = st.integers(0, 2**32 - 1)

NONE = np.zeros(0)


def pieces_of(fit: Fitted) -> Pieces:
    """Return the lines and arcs of a fit."""
    return Pieces(fit.start, fit.end, fit.bulge, fit.curve)


def places(points: Array, shares: Array) -> Array:
    """Return points of rational Bezier curves by de Casteljau: (n, m, 3)."""
    rows = np.repeat(points[:, np.newaxis], len(shares), axis=1)
    while rows.shape[2] > 1:
        rows = rows[:, :, :-1] * (1 - shares[:, np.newaxis, np.newaxis]) + (
            rows[:, :, 1:] * shares[:, np.newaxis, np.newaxis]
        )
    found: Array = rows[:, :, 0, :3] / rows[:, :, 0, 3:]
    return found


def apart(points: Array, line: Array) -> float:
    """Return how far points are, at most, from the straight lines next to their nearest corner."""
    best = np.full(len(points), np.inf)
    # several: two branches of a curve may be near each other
    for nearest in np.asarray(cKDTree(line).query(points, k=12)[1]).T:
        for first in (np.maximum(nearest - 1, 0), np.minimum(nearest, len(line) - 2)):
            start, way = line[first], line[first + 1] - line[first]
            square = np.maximum((way**2).sum(axis=1), 1e-300)
            share = np.clip(((points - start) * way).sum(axis=1) / square, 0, 1)
            foot = start + way * share[:, np.newaxis]
            best = np.minimum(best, np.linalg.norm(points - foot, axis=1))
    return float(best.max())


def farthest(points: Array, fit: Fitted) -> float:
    """Return how far curves and their arcs are from each other, at most, in space [mm]."""
    worst = 0.0
    pieces = pieces_of(fit)
    for number in range(len(points)):
        curve = places(points[number : number + 1], np.linspace(0, 1, 4001))[0]
        own = np.flatnonzero(pieces.source == number)
        count = max(3, 8000 // max(own.size, 1))
        index, share = np.repeat(own, count), np.tile(np.linspace(0, 1, count), own.size)
        arcs = pieces.at(index, share)
        worst = max(worst, apart(curve, arcs), apart(arcs, curve))
    return worst


def cubic(seed: int, *, height: float = 0.0, weights: float = 1.0) -> Array:
    """Return two random rational cubics of some 10 mm."""
    random = np.random.default_rng(seed)
    points = np.empty((2, 4, 4))
    points[..., :3] = random.uniform(-5, 5, (2, 4, 3)) * [1, 1, height]
    points[..., 3] = weights ** random.uniform(-1, 1, (2, 4))
    points[..., :3] *= points[..., 3:]
    return points


@pytest.mark.parametrize(("height", "weights"), [(0.0, 1.0), (0.0, 4.0), (1.0, 1.0), (1.0, 4.0)])
@given(seed=SEEDS)
@settings(max_examples=12)
def test_the_error_that_is_stated_holds(height: float, weights: float, seed: int) -> None:
    """Against dense samples of both: any cubics, also with loops and cusps, weights, heights."""
    points = cubic(seed, height=height, weights=weights)
    fit = fitted(points, error=0.05, most=MANY)
    assert fit.left.size == 0
    assert fit.error <= 0.05
    assert farthest(points, fit) <= fit.error + SAMPLING


@given(seed=SEEDS)
@settings(max_examples=20)
def test_smooth_curves_stay_smooth(seed: int) -> None:
    """No corner where the curve has none: a tool would stop there."""
    points = cubic(seed)
    fit = fitted(points[:1], error=0.01, most=MANY)
    first, last = pieces_of(fit).directions()
    assert_array_equal(fit.start[1:], fit.end[:-1])
    # a cusp may be cut where the curve is smaller than the error
    tiny = (np.abs(fit.end - fit.start).max(axis=1) <= 0.01) & (fit.bulge == 0)
    smooth = ~(tiny[1:] | tiny[:-1])
    assert_allclose((first[1:] * last[:-1]).sum(axis=1)[smooth], 1, atol=ROUNDING)


def test_ten_times_the_accuracy_costs_little_more_than_twice_the_arcs() -> None:
    """Biarcs are of third order, so cube root of ten; halving makes it a little more."""
    points = cubic(3)
    coarse, fine = (len(fitted(points, error=e, most=MANY).bulge) for e in (1e-2, 1e-5))
    assert fine <= 20 * coarse


def test_a_straight_curve_is_one_line() -> None:
    """Whatever its degree and however uneven its parameter."""
    points = np.array([[[0, 0, 0, 1], [1, 2, 3, 1], [9, 18, 27, 1], [10, 20, 30, 1]]], dtype=float)
    fit = fitted(points, error=1e-3, most=MANY)
    assert_array_equal(fit.bulge, [0])
    assert_array_equal(fit.end, [[10, 20, 30]])


def test_a_circle_drawn_as_a_curve_is_that_circle() -> None:
    """Four arcs of a circle in rational form: the biarcs lie on it."""
    points, _ = ellipse_chain(
        np.zeros((1, 3)),
        (np.array([[20.0, 0, 0]]), np.array([[0, 20.0, 0]])),
        np.zeros(1),
        np.array([2 * np.pi]),
    )
    fit = fitted(points, error=1e-3, most=MANY)
    assert_allclose(pieces_of(fit).radius, 20, rtol=1e-12)
    assert fit.error < 1e-12
    assert len(fit.bulge) == 8


def test_a_cusp_ends() -> None:
    """Where the velocity is 0 inside a curve, no arc fits however small the curve is."""
    points = np.array([[[0, 0, 0, 1], [10, 10, 0, 1], [0, 10, 0, 1], [10, 0, 0, 1]]], dtype=float)
    fit = fitted(points, error=1e-4, most=MANY)
    assert fit.left.size == 0
    assert len(fit.bulge) < 200
    assert farthest(points, fit) <= fit.error + SAMPLING


def test_too_many_pieces_are_refused() -> None:
    """The curves that are left are named."""
    fit = fitted(cubic(1), error=1e-6, most=100)
    assert fit.left.size > 0
    assert not np.isin(fit.curve, fit.left).any()


def test_a_share_of_the_arc_and_of_the_chord_differ_by_what_is_said() -> None:
    """The bound of heights uses it; the turn is a quarter of a circle at most."""
    share = np.linspace(0, 1, 10001)
    for turn in np.geomspace(1e-3, np.pi, 50):
        along = 0.5 + np.sin((share - 0.5) * turn) / (2 * np.sin(0.5 * turn))
        assert np.abs(along - share).max() <= UNEVEN * turn**2


@pytest.mark.parametrize("degree", [1, 2, 3, 5])
@pytest.mark.parametrize("clamped", [True, False])
@given(seed=SEEDS)
@settings(max_examples=10)
def test_splines_are_those_of_scipy(degree: int, clamped: bool, seed: int) -> None:
    """At many parameters, for any knots."""
    random = np.random.default_rng(seed)
    count = degree + 6
    knots = np.sort(random.integers(0, 9, count + degree + 1)).astype(float)
    inner, times = np.unique(knots, return_counts=True)
    knots = np.sort(np.repeat(inner, np.minimum(times, degree)))
    if clamped:
        knots = np.concatenate([np.full(degree, knots[0]), knots, np.full(degree, knots[-1])])
    count = len(knots) - degree - 1
    if count <= degree or knots[degree] == knots[count]:
        return
    control = random.uniform(-5, 5, (count, 3))
    given_spline = Given(degree, control, NONE, knots, np.zeros((0, 3)))
    chain = spline_chain(given_spline)
    assert not isinstance(chain, str), chain
    spans = np.unique(knots[degree : count + 1])
    shares = np.linspace(0, 1, 7)
    at = spans[:-1, np.newaxis] + shares * np.diff(spans)[:, np.newaxis]
    expected = BSpline(knots, control, degree)(at[:, :-1])
    assert_allclose(places(chain, shares)[:, :-1], expected, atol=ROUNDING)


def test_closed_splines_through_points_close_smoothly() -> None:
    """The direction at the joint is one; so is the curvature."""
    fit_points = np.array([[0, 0, 0], [10, 0, 0], [12, 9, 0], [3, 14, 0]], dtype=float)
    chain = spline_chain(Given(3, np.zeros((0, 3)), NONE, NONE, fit_points, closed=True))
    assert not isinstance(chain, str)
    assert_allclose(chain[:, 0, :3], fit_points, atol=ROUNDING)
    assert_array_equal(chain[-1, -1], chain[0, 0])
    chords = np.linalg.norm(np.diff(fit_points, axis=0, append=fit_points[:1]), axis=1)
    before = (chain[-1, 3] - chain[-1, 2]) / chords[-1]
    assert_allclose(before, (chain[0, 1] - chain[0, 0]) / chords[0], atol=ROUNDING)


def test_a_chain_has_no_gaps() -> None:
    """To the last bit."""
    random = np.random.default_rng(5)
    knots = np.array([0, 0, 0, 0, 1 / 3, 0.4, 0.4, 0.7, 1, 1, 1, 1])
    chain = bezier_chain(random.uniform(-5, 5, (8, 4)), knots, 3)
    assert_array_equal(chain[1:, 0], chain[:-1, -1])
