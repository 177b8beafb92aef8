"""Splines whose timing is free, against scipy's B-splines and against differences."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy.interpolate import BSpline

from profileplan.motion.spline import (
    Group,
    Spline,
    from_states,
    inner_points,
    node_points,
    window_sums,
)

if TYPE_CHECKING:
    from collections.abc import Callable

    from profileplan.motion.polynomials import Array, Indices
    from profileplan.motion.spline import Points

AXES = ("x", "y", "z")

ROUNDING = 1e-11
"""Relative to the greatest value: what some dozen operations may lose."""

NUDGE = 1e-6
"""Share of a span by which it is changed to see what follows."""

NUDGED = 1e-7
"""Relative accuracy of central differences with such a nudge."""

SEEDS = st.integers(0, 2**32 - 1)


def spans_of(random: np.random.Generator, count: int) -> Array:
    """Return spans whose longest is a hundred times the shortest, or so."""
    return np.asarray(10 ** random.uniform(-1.5, 0.5, count))


def group_of(random: np.random.Generator, degree: int, count: int) -> Group:
    """Return a group of two axes over some intervals, anywhere and not at rest at its ends."""
    points = random.uniform(-100, 100, (count + degree, 2))
    return Group(degree, np.arange(2), points)


def mixed(seed: int) -> Spline:
    """Return a spline of two axes with jerk limit and one without, in three regions."""
    random = np.random.default_rng(seed)
    count = int(random.integers(3, 12))
    groups = (
        Group(3, np.array([0, 2]), random.uniform(-100, 100, (count + 3, 2))),
        Group(2, np.array([1]), random.uniform(-100, 100, (count + 2, 1))),
    )
    return Spline(spans_of(random, count), np.sort(random.integers(0, 3, count)), groups)


def knots(spans: Array, degree: int) -> Array:
    """Return the knots of a spline of a degree whose ends are its first and last control point."""
    times = np.concatenate([[0.0], np.cumsum(spans)])
    ends = np.ones(degree)
    return np.concatenate([times[0] * ends, times, times[-1] * ends])


def bspline(group: Group, spans: Array) -> BSpline[np.float64]:
    """Return a group as scipy's spline."""
    return BSpline(knots(spans, group.degree), group.points, group.degree)


def inside(spans: Array) -> Array:
    """Return times inside all intervals, where every derivative is defined."""
    starts = np.cumsum(spans) - spans
    return np.asarray((starts[:, np.newaxis] + spans[:, np.newaxis] * [0.01, 0.4, 0.99]).ravel())


@pytest.mark.parametrize("degree", [2, 3])
@given(seed=SEEDS)
@settings(max_examples=30)
def test_control_values_are_those_of_the_derivatives(degree: int, seed: int) -> None:
    """A level's values make the spline of one degree less that scipy gets by differentiating."""
    random = np.random.default_rng(seed)
    count = int(random.integers(1, 12))
    spans, group = spans_of(random, count), group_of(random, degree, count)
    levels = group.levels(spans)
    assert len(levels) == degree
    for order, level in enumerate(levels, start=1):
        own = BSpline(knots(spans, degree - order), level.values, degree - order)
        expected = bspline(group, spans).derivative(order)(inside(spans))
        scale = np.abs(level.values).max()
        assert_allclose(own(inside(spans)), expected, 1e-9, 1e-9 * scale, err_msg=f"order {order}")


@pytest.mark.parametrize("degree", [2, 3])
@given(seed=SEEDS)
@settings(max_examples=20)
def test_weights_of_control_points_give_the_values(degree: int, seed: int) -> None:
    """The rounds are linear in control points through these weights alone."""
    random = np.random.default_rng(seed)
    count = int(random.integers(2, 12))
    spans, group = spans_of(random, count), group_of(random, degree, count)
    for level in group.levels(spans):
        width = level.by_points.shape[1]
        windows = np.lib.stride_tricks.sliding_window_view(group.points, width, axis=0)
        by_weights = np.einsum("nl,ngl->ng", level.by_points, windows)
        assert_allclose(by_weights, level.values, 0, ROUNDING * weight_of(level.by_points, group))
    nodes = np.arange(1, count)
    for points in (*inner_points(group, spans), node_points(group, spans, nodes)):
        index = points.first[:, np.newaxis] + np.arange(points.by_points.shape[1])
        by_weights = np.einsum("nw,nwg->ng", points.by_points, group.points[index])
        assert_allclose(by_weights, points.values, 0, ROUNDING * 100)
        assert_allclose(points.by_points.sum(axis=1), 1.0, ROUNDING, err_msg="a mean of points")
        assert (points.by_points >= 0).all(), "a convex combination stays in their hull"


def weight_of(weights: Array, group: Group) -> float:
    """Return the greatest value that weighted points can sum to."""
    return float(np.abs(weights).sum(axis=1).max() * np.abs(group.points).max())


def by_differences(values: Callable[[Array], Array], spans: Array) -> Array:
    """Return derivatives of values, (n, g), by every span: (n, N, g), from differences."""
    found = []
    for index, span in enumerate(spans):
        nudge = np.zeros_like(spans)
        nudge[index] = NUDGE * span
        found.append((values(spans + nudge) - values(spans - nudge)) / (2 * NUDGE * span))
    return np.stack(found, axis=1)


def spread(derivatives: Array, first: Indices, count: int) -> Array:
    """Return derivatives by the spans from ``first`` on as derivatives by all that exist."""
    found = np.zeros((len(derivatives), count, derivatives.shape[2]))
    for row, start in enumerate(first.tolist()):
        for offset in range(derivatives.shape[1]):
            if 0 <= start + offset < count:
                found[row, start + offset] += derivatives[row, offset]
    return found


@pytest.mark.parametrize("degree", [2, 3])
@given(seed=SEEDS)
@settings(max_examples=20)
def test_derivatives_by_spans_agree_with_differences(degree: int, seed: int) -> None:
    """A wrong one would point the search into a direction in which it gains nothing."""
    random = np.random.default_rng(seed)
    count = int(random.integers(2, 10))
    spans, group = spans_of(random, count), group_of(random, degree, count)
    for order, level in enumerate(group.levels(spans)):
        first = np.arange(len(level.values)) - degree + 1

        def rate(changed: Array, order: int = order) -> Array:
            return group.levels(changed)[order].values

        expected = by_differences(rate, spans)
        actual = spread(level.by_spans, first, count)
        scale = np.abs(level.values).max() / spans.min()
        assert_allclose(actual, expected, 1e-6, NUDGED * scale, err_msg=f"order {order + 1}")
    nodes = np.arange(1, count)
    places: tuple[Callable[[Array], Points], ...] = (
        lambda changed: inner_points(group, changed)[0],
        lambda changed: inner_points(group, changed)[1],
        lambda changed: node_points(group, changed, nodes),
    )
    for place in places:
        points = place(spans)

        def positions(changed: Array, place: Callable[[Array], Points] = place) -> Array:
            return place(changed).values

        expected = by_differences(positions, spans)
        actual = spread(points.by_spans, points.span, count)
        assert_allclose(actual, expected, 1e-6, NUDGED * 200 / spans.min())


def test_sums_of_spans_reach_beyond_both_ends() -> None:
    """Knots at an end coincide: spans outside are zero."""
    assert_array_equal(window_sums(np.array([1.0, 2.0, 4.0]), 2), [1.0, 3.0, 6.0, 4.0])
    assert_array_equal(window_sums(np.array([1.0, 2.0, 4.0]), 1), [1.0, 2.0, 4.0])


@given(seed=SEEDS)
@settings(max_examples=30)
def test_a_trajectory_is_the_same_spline(seed: int) -> None:
    """Position and all derivatives, of axes of both degrees."""
    spline = mixed(seed)
    trajectory = spline.trajectory(AXES)
    assert_allclose(trajectory.duration, spline.duration, rtol=1e-14)
    times = inside(spline.spans)
    for group in spline.groups:
        for order in range(group.degree + 1):
            expected = bspline(group, spline.spans)(times, nu=order)
            actual = trajectory.at(times, order)[:, group.axes]
            scale = np.abs(expected).max() + 100.0
            assert_allclose(actual, expected, 1e-9, 1e-9 * scale, err_msg=f"order {order}")


@given(seed=SEEDS)
@settings(max_examples=30)
def test_a_trajectory_jumps_in_nothing_that_its_degree_makes_continuous(seed: int) -> None:
    """Acceleration is continuous with degree three, velocity with degree two."""
    spline = mixed(seed)
    trajectory = spline.trajectory(AXES)
    inner = trajectory.breaks[1:-1]
    for group in spline.groups:
        for order in range(group.degree):
            own = bspline(group, spline.spans)
            scale = np.abs(own(inside(spline.spans), nu=order)).max()
            scale += np.abs(own(inside(spline.spans), nu=group.degree)).max()
            coefficients = trajectory.coefficients[:, :, group.axes]
            before = np.zeros((len(inner), len(group.axes)))
            for power in range(3, order - 1, -1):
                falling = np.prod(np.arange(power - order + 1.0, power + 1))
                before = before * spline.spans[:-1, np.newaxis] + falling * coefficients[:-1, power]
            after = np.prod(np.arange(1.0, order + 1)) * coefficients[1:, order]
            assert_allclose(before, after, 0, 1e-10 * scale, err_msg=f"order {order}")


@given(seed=SEEDS)
@settings(max_examples=30)
def test_inner_points_are_the_bezier_points_of_the_pieces(seed: int) -> None:
    """What keeps these in a region keeps the whole piece there."""
    spline = mixed(seed)
    hulls = spline.trajectory(AXES).hulls()
    assert hulls.shape[1] == 4, "cubic pieces"
    for group in spline.groups:
        for which, points in enumerate(inner_points(group, spline.spans), start=1):
            assert_allclose(points.values, hulls[:, which, group.axes], 0, 1e-10 * 100)
        nodes = np.arange(1, spline.spans.size)
        inner = node_points(group, spline.spans, nodes).values
        assert_allclose(inner, hulls[1:, 0, group.axes], 0, 1e-10 * 100)
        assert_allclose(inner, hulls[:-1, -1, group.axes], 0, 1e-10 * 100)


@given(seed=SEEDS)
@settings(max_examples=30)
def test_cutting_intervals_keeps_the_motion(seed: int) -> None:
    """More places where the jerk may switch, and nothing else, before the fine rounds."""
    spline = mixed(seed)
    random = np.random.default_rng(seed)
    parts = random.integers(1, 4, spline.spans.size)
    cut = spline.split(parts)
    assert_array_equal(cut.region, np.repeat(spline.region, parts))
    assert_allclose(cut.spans, np.repeat(spline.spans / parts, parts), rtol=1e-14)
    times = inside(spline.spans)
    for order in range(4):
        expected = spline.trajectory(AXES).at(times, order)
        # Third differences over short spans: rounding is magnified by the spans' third power.
        scale = np.abs(expected).max() + 100 / cut.spans.min() ** order
        actual = cut.trajectory(AXES).at(times, order)
        assert_allclose(actual, expected, 0, ROUNDING * scale, err_msg=f"order {order}")


@given(seed=SEEDS)
@settings(max_examples=20)
def test_states_at_nodes_give_back_the_control_points(seed: int) -> None:
    """Nothing is lost between the two ways to write a spline."""
    spline = mixed(seed)
    trajectory = spline.trajectory(AXES)
    nodes = np.concatenate([[0.0], np.cumsum(spline.spans)])
    # At an end a trajectory is at rest, and a spline need not be: its pieces tell.
    states = [
        np.stack([bspline_at(spline, axis, nodes, order) for axis in range(3)], axis=1)
        for order in range(3)
    ]
    assert_allclose(states[0], trajectory.at(nodes), 0, 1e-9 * 100)
    degrees = [(group.degree, group.axes) for group in spline.groups]
    again = from_states((states[0], states[1], states[2]), spline.spans, spline.region, degrees)
    for group, own in zip(spline.groups, again.groups, strict=True):
        assert_array_equal(own.axes, group.axes)
        assert_allclose(own.points, group.points, 0, 1e-8 * 100)


def bspline_at(spline: Spline, axis: int, times: Array, order: int) -> Array:
    """Return a derivative of one axis at some times, at a break the one after it."""
    for group in spline.groups:
        if axis in group.axes:
            column = int(np.flatnonzero(group.axes == axis)[0])
            return np.asarray(bspline(group, spline.spans)(times, nu=order))[:, column]
    raise AssertionError(axis)


@given(seed=SEEDS, factor=st.floats(0.1, 10))
@settings(max_examples=20)
def test_another_time_keeps_the_positions(seed: int, factor: float) -> None:
    """Velocities fall with the factor, accelerations with its square, jerks with its cube."""
    spline = mixed(seed)
    slower = spline.scaled(factor)
    for group in spline.groups:
        levels = zip(group.levels(spline.spans), group.levels(slower.spans), strict=True)
        for order, (level, other) in enumerate(levels, start=1):
            scale = np.abs(level.values).max()
            assert_allclose(other.values * factor**order, level.values, 0, 1e-11 * scale)
    shares = np.linspace(0, 1, 50)
    assert_allclose(
        slower.trajectory(AXES).at(shares * slower.duration),
        spline.trajectory(AXES).at(shares * spline.duration),
        0,
        1e-8 * 100,
    )


def test_gates_stand_where_the_region_changes() -> None:
    """The nodes at which a motion passes from a region to the next."""
    groups = (Group(3, np.arange(1), np.zeros((9, 1))),)
    spline = Spline(np.ones(6), np.array([0, 0, 1, 1, 1, 2]), groups)
    assert_array_equal(spline.gates, [2, 5])
