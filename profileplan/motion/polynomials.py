"""Where, inside an interval, does a polynomial vanish, and what are its extreme values?

Polynomials are arrays of coefficients in ascending powers along the last axis, one polynomial a
row, on the interval from 0 to a length of its own. Everything is vectorised over the rows.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]
"""An array of floats: the one name for it in this package."""

Flags = npt.NDArray[np.bool_]
"""An array of truth values."""

Indices = npt.NDArray[np.intp]
"""An array of whole numbers that count something."""

ITERATION_LIMIT = 200
"""Steps of the bracketed root search; every third halves the bracket: 180 reach the last bit."""

VALUE_ROUNDING = 4 * np.finfo(np.float64).eps
"""Rounding error of a value, as a share of the sum of the coefficients' magnitudes."""

ROOT_TOLERANCE = 4 * np.finfo(np.float64).eps
"""Width, as a share of the interval, at which a bracketed root counts as found."""


def evaluate(coefficients: Array, at: Array) -> Array:
    """Return the values of polynomials by Horner's rule.

    Parameters
    ----------
    coefficients : (..., k) array
        Ascending powers.
    at : (...) array
        One argument for each polynomial, or an array that broadcasts against their leading shape.

    Examples
    --------
    >>> evaluate(np.array([1.0, 2.0, 3.0]), np.array([0.0, 2.0]))
    array([ 1., 17.])
    """
    value = coefficients[..., -1] + np.zeros_like(at)
    for power in range(coefficients.shape[-1] - 2, -1, -1):
        value = value * at + coefficients[..., power]
    return value


def derivative(coefficients: Array) -> Array:
    """Return the coefficients of the first derivative: (..., k) → (..., k - 1), at least one.

    Examples
    --------
    >>> derivative(np.array([1.0, 2.0, 3.0]))
    array([2., 6.])
    """
    if coefficients.shape[-1] == 1:
        return np.zeros_like(coefficients)
    return coefficients[..., 1:] * np.arange(1.0, coefficients.shape[-1])


def shifted(coefficients: Array, offset: Array) -> Array:
    """Return the coefficients of the same polynomials about other places.

    Parameters
    ----------
    coefficients : (n, k, d) array
        Ascending powers, along the middle.
    offset : (n,) array
        Where each is expanded anew.

    Source: Taylor shift by repeated synthetic division: Knuth, The Art of Computer Programming,
    volume 2, section 4.6.4 (from memory).
    """
    expanded: Array = coefficients.copy()
    order = expanded.shape[1]
    for first in range(order - 1):
        for power in range(order - 2, first - 1, -1):
            expanded[:, power] += offset[:, np.newaxis] * expanded[:, power + 1]
    return expanded


def trimmed(coefficients: Array) -> Array:
    """Return the coefficients without the highest powers that no polynomial uses."""
    used = np.flatnonzero(coefficients.any(axis=tuple(range(coefficients.ndim - 1))))
    return coefficients[..., : int(used[-1]) + 1 if used.size else 1]


def roots(coefficients: Array, length: Array) -> Array:
    """Return the real roots of polynomials inside [0, length].

    A root at which the polynomial only touches zero may be missed: there its integral has no
    extreme, so the search for extremes does not need it.

    Parameters
    ----------
    coefficients : (m, k) array
        Ascending powers.
    length : (m,) array
        Right end of each interval, at least 0.

    Returns
    -------
    (m, k - 1) array
        Ascending; NaN where there are fewer roots. A polynomial that vanishes everywhere has none.

    Notes
    -----
    Between neighbouring roots of its derivative a polynomial is monotone and has at most one root,
    which a Newton search inside a shrinking bracket finds to the last bits. So the roots of the
    derivative, found in the same way, give those of the polynomial (Collins, Loos: Polynomial Real
    Root Isolation by Differentiation, 1976; value from memory).
    """
    used = trimmed(coefficients)
    scaled = used * np.power(length[:, np.newaxis], np.arange(used.shape[-1]))
    found = np.full((length.size, coefficients.shape[-1] - 1), np.nan)
    found[:, : used.shape[-1] - 1] = _unit_roots(scaled) * length[:, np.newaxis]
    return found


def extremes(coefficients: Array, length: Array) -> tuple[Array, Array, Array, Array]:
    """Return least and greatest value of polynomials on [0, length], and where they occur.

    Parameters
    ----------
    coefficients : (m, k) array
        Ascending powers.
    length : (m,) array
        Right end of each interval.

    Returns
    -------
    low, high, low_at, high_at : (m,) arrays
        Values, and the arguments at which they are taken.
    """
    inner = roots(derivative(coefficients), length)
    ends = np.stack([np.zeros_like(length), length], axis=-1)
    at = np.concatenate([ends, np.where(np.isnan(inner), 0.0, inner)], axis=-1)
    values = evaluate(coefficients[:, np.newaxis, :], at)
    rows = np.arange(length.size)
    lowest, highest = values.argmin(axis=-1), values.argmax(axis=-1)
    return values[rows, lowest], values[rows, highest], at[rows, lowest], at[rows, highest]


def _unit_roots(coefficients: Array) -> Array:
    """Return roots in [0, 1]: (m, k) → (m, k - 1), ascending, NaN where missing."""
    degree = coefficients.shape[-1] - 1
    if degree == 0:
        return np.empty((coefficients.shape[0], 0))
    if degree == 1:
        return _linear_roots(coefficients)
    if degree == 2:
        return _quadratic_roots(coefficients)
    turning = _unit_roots(derivative(coefficients))
    count = coefficients.shape[0]
    edges = np.concatenate(
        [np.zeros((count, 1)), np.where(np.isnan(turning), 1.0, turning), np.ones((count, 1))],
        axis=-1,
    )
    values = evaluate(coefficients[:, np.newaxis, :], edges)
    # What rounding alone can explain is zero: a double root at an end of the interval, say.
    values[np.abs(values) <= VALUE_ROUNDING * np.abs(coefficients).sum(axis=-1, keepdims=True)] = 0
    low, high = values[:, :-1], values[:, 1:]
    found = np.where((high == 0) & (low != 0), edges[:, 1:], np.nan)
    found[:, 0] = np.where((low[:, 0] == 0) & (high[:, 0] != 0), 0.0, found[:, 0])
    rows, columns = np.nonzero(low * high < 0)
    found[rows, columns] = _bracketed(
        coefficients[rows], edges[rows, columns], edges[rows, columns + 1]
    )
    return np.sort(found, axis=-1)


def _linear_roots(coefficients: Array) -> Array:
    """Return the roots of straight lines in [0, 1]: (m, 2) → (m, 1)."""
    constant, slope = coefficients[:, 0], coefficients[:, 1]
    # A root beyond the interval is refused before the division, which could overflow.
    inside = (slope != 0) & (np.abs(constant) <= np.abs(slope)) & (constant * slope <= 0)
    root = np.full(constant.shape, np.nan)
    np.divide(-constant, slope, out=root, where=inside)
    return root[:, np.newaxis]


def _quadratic_roots(coefficients: Array) -> Array:
    """Return the roots of parabolas in [0, 1] by the formula that does not cancel: (m, 3) → (m, 2).

    Source: Press et al.: Numerical Recipes (2007), section 5.6 (from memory).
    """
    constant, linear, square = coefficients.T
    square_free = linear**2 - 4 * square * constant
    real = square_free >= 0
    half = -0.5 * (linear + np.copysign(np.sqrt(np.where(real, square_free, 0.0)), linear))
    pairs = np.stack(
        [
            _linear_roots(np.stack(pair, axis=-1))[:, 0]
            for pair in ((-half, square), (-constant, half))
        ],
        axis=-1,
    )
    return np.sort(np.where(real[:, np.newaxis], pairs, np.nan), axis=-1)


def _bracketed(coefficients: Array, low: Array, high: Array) -> Array:
    """Return the root between ``low`` and ``high``, where the polynomial changes sign once.

    Newton's step where it stays inside the bracket, else, and at every third step, its middle.
    """
    slopes = derivative(coefficients)
    rising = evaluate(coefficients, high) > evaluate(coefficients, low)
    low, high = low.copy(), high.copy()
    at = 0.5 * (low + high)
    active = np.arange(low.size)
    for step in range(ITERATION_LIMIT):
        if not active.size:
            return at
        here = at[active]
        value = evaluate(coefficients[active], here)
        beyond = (value > 0) == rising[active]
        exact = value == 0
        high[active] = np.where(beyond | exact, here, high[active])
        low[active] = np.where(~beyond | exact, here, low[active])
        slope = evaluate(slopes[active], here)
        newton = here - np.divide(value, slope, out=np.full_like(value, np.inf), where=slope != 0)
        inside = (newton > low[active]) & (newton < high[active]) & (step % 3 != 2)
        at[active] = np.where(inside, newton, 0.5 * (low[active] + high[active]))
        moved = np.abs(at[active] - here)
        done = (high[active] - low[active] <= ROOT_TOLERANCE) | (inside & (moved <= ROOT_TOLERANCE))
        active = active[~done]
    message = f"a bracketed root was not found in {ITERATION_LIMIT} steps"
    raise ArithmeticError(message)
