"""Which Bezier curves are a spline, as it is drawn by control points or by fit points?

A spline through fit points alone is the cubic that common programs draw: its parameter is the
length of the chords, and where no tangents are given it ends without curvature, or, if it is
closed, goes on smoothly.

Source: conditions on knots and weights as in G. Farin, Curves and Surfaces for CAGD; the rule for
fit points is that of ezdxf's documentation of ``fit_points_to_cad_cv``, and tested against it.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from scipy.interpolate import make_interp_spline

from profileplan.geometry.curves import bezier_chain, one_knot

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.geometry.corridor import Array

MOST_DEGREE = 25
"""Greatest degree of a spline; DXF allows 11."""

MOST_COORDINATE = 1e30
"""Greatest coordinate of fit points: the system of equations must not overflow."""

SAME_POINT = 1e-12
"""Share of its greatest coordinate by which rounding may part the ends of a closed spline."""

MOST_UNEQUAL = 1e6
"""Greatest ratio of the weights of a spline."""


class Given(NamedTuple):
    """A spline as it is drawn.

    control, fit : (n, 3) and (m, 3) arrays; weights, knots : arrays, empty where not given;
    tangents : (3,) arrays at both ends, where given; closed : bool.
    """

    degree: int
    control: Array
    weights: Array
    knots: Array
    fit: Array
    tangents: tuple[Array | None, Array | None] = (None, None)
    closed: bool = False


def spline_chain(given: Given) -> Array | str:
    """Return the Bezier curves of a spline, (m, k, 4), homogeneous, or what is wrong with it."""
    if not len(given.control):
        return _through(given)
    knots = given.knots if given.knots.size else _open_uniform(len(given.control), given.degree)
    fault = next(_faults(given, knots), "")
    if fault:
        return fault
    weights = given.weights if given.weights.size else np.ones(len(given.control))
    weights = weights / weights.max()
    control = np.concatenate([given.control * weights[:, np.newaxis], weights[:, np.newaxis]], 1)
    return _closed(bezier_chain(control, knots, given.degree))


def _open_uniform(count: int, degree: int) -> Array:
    """Return evenly spaced knots of a spline that ends at its first and last control points."""
    inner = np.arange(1, max(count - degree, 1), dtype=np.float64)
    last = max(float(count - degree), 1.0)
    return np.concatenate([np.zeros(degree + 1), inner, np.full(degree + 1, last)])


def _faults(given: Given, knots: Array) -> Iterator[str]:
    """Yield what is wrong with a spline by control points; the first stands for what follows."""
    degree, count, weights = given.degree, len(given.control), given.weights
    if not 1 <= degree <= MOST_DEGREE:
        yield f"is a spline of degree {degree}; 1 to {MOST_DEGREE} can be read"
    if count <= degree:
        yield (
            f"is a spline of degree {degree} with {count} control points; "
            f"at least {degree + 1} are needed"
        )
    if len(knots) != count + degree + 1:
        needed = count + degree + 1
        yield f"is a spline with {len(knots)} knots; {count} control points need {needed}"
    if weights.size not in {0, count}:
        yield f"is a spline with {weights.size} weights for {count} control points"
    if not (np.isfinite(knots).all() and np.isfinite(weights).all()):
        yield "is a spline with knots or weights that are no numbers"
    if (np.diff(knots) < 0).any():
        yield "is a spline whose knots fall; each must be at least the one before"
    if weights.size and weights.min() <= weights.max() / MOST_UNEQUAL:
        yield (
            f"is a spline with weights from {weights.min():g} to {weights.max():g}; "
            f"they must be above 0, and none more than {MOST_UNEQUAL:g} times another"
        )
    domain = one_knot(knots)[degree : count + 1]
    later, earlier = domain[degree:], domain[: max(len(domain) - degree, 0)]
    if ((later == earlier) & (later > domain[0]) & (later < domain[-1])).any():
        yield f"is a spline with a knot more often than its degree, {degree}: it has a gap"


def _through(given: Given) -> Array | str:
    """Return the Bezier curves of the spline through fit points, or what is wrong with them."""
    points = given.fit
    if not (np.abs(points) <= MOST_COORDINATE).all():
        return "is a spline with coordinates that are no numbers, or too great ones"
    if given.closed and len(points):
        points = np.concatenate([points, points[:1]])
    if len(points) < 2:
        return np.zeros((0, 4, 4))
    step = np.sqrt((np.diff(points, axis=0) ** 2).sum(axis=1))
    points = points[np.concatenate([[True], step > 0])]
    along = np.concatenate([[0.0], np.cumsum(step[step > 0])])
    if len(points) < 2:
        return np.zeros((0, 4, 4))
    if given.closed and len(points) > 3:
        curve = make_interp_spline(along, points, k=3, bc_type="periodic")
    else:
        first, last = (_end_condition(tangent) for tangent in given.tangents)
        ends = ([first], [last])
        # scipy-stubs know only one of the forms of scipy's documentation
        curve = make_interp_spline(along, points, k=3, bc_type=ends)  # type: ignore[arg-type]
    control = np.concatenate([curve.c, np.ones((len(curve.c), 1))], axis=1)
    return _closed(bezier_chain(control, np.asarray(curve.t, dtype=np.float64), 3))


def _closed(chain: Array) -> Array:
    """Return a chain that closes to the last bit where it does but for rounding."""
    if len(chain) and np.abs(chain[-1, -1] - chain[0, 0]).max() <= SAME_POINT * np.abs(chain).max():
        chain[-1, -1] = chain[0, 0]
    return chain


def _end_condition(tangent: Array | None) -> tuple[int, Array]:
    """Return the derivative that is known at an end: its order and value."""
    length = 0.0 if tangent is None else float(np.sqrt((tangent**2).sum()))
    if tangent is None or not np.isfinite(length) or length == 0:
        return 2, np.zeros(3)
    return 1, tangent / length
