"""Roots and extremes of polynomials, against numpy's polynomials and against dense sampling."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.polynomial import Polynomial
from numpy.testing import assert_allclose, assert_array_equal

from profileplan.motion import polynomials

if TYPE_CHECKING:
    from profileplan.motion.polynomials import Array

LENGTHS = [1e-9, 1e-3, 1.0, 7.0, 1e6]
"""Intervals as short and as long as any phase of a motion."""

VALUE_TOLERANCE = 1e-14
"""Rounding of a value, as a share of the sum of the magnitudes of its terms."""

QUINTIC_VELOCITY = [0.0, 0.0, 30.0, -60.0, 30.0]
"""Velocity of the quintic law over unit time: double roots at both ends."""

EXAMPLES = st.lists(
    st.lists(
        st.one_of(
            st.floats(-1, 1).map(lambda number: round(number, 12)),
            st.integers(-3, 3).map(float),
            st.floats(-18, 0).map(lambda exponent: 10.0**exponent),
        ),
        min_size=1,
        max_size=9,
    ),
    min_size=1,
    max_size=6,
)
"""Lists of polynomials over unit length: plain numbers, small integers, vanishing coefficients."""


def rows(polynomials_over_unit_length: list[list[float]], length: float) -> tuple[Array, Array]:
    """Return polynomials of one shape on [0, length], and the lengths."""
    width = max(len(row) for row in polynomials_over_unit_length)
    padded = [row + [0.0] * (width - len(row)) for row in polynomials_over_unit_length]
    coefficients = np.array(padded) / length ** np.arange(width)
    return coefficients, np.full(len(padded), length)


def roots_of(polynomial_over_unit_length: list[float], length: float = 1.0) -> Array:
    """Return the roots that are found, as shares of the length."""
    found = polynomials.roots(*rows([polynomial_over_unit_length], length))[0]
    shares: Array = found[~np.isnan(found)] / length
    return shares


def value(row: list[float] | Array, at: Array, derivative: int = 0) -> Array:
    """Return a polynomial over unit length by numpy."""
    return np.asarray(Polynomial(row).deriv(derivative)(at), dtype=np.float64)


@given(EXAMPLES, st.sampled_from(LENGTHS))
def test_every_root_is_one(examples: list[list[float]], length: float) -> None:
    """What is reported as a root lies in the interval, and the polynomial vanishes there."""
    for row in examples:
        found = roots_of(row, length)
        assert_array_equal(np.sort(found), found)
        assert np.all((found >= 0) & (found <= 1 + 2e-16)), f"{row}: {found}"
        size = np.abs(row).sum()
        assert_allclose(value(row, found), 0, atol=VALUE_TOLERANCE * size, err_msg=f"{row}")


@given(EXAMPLES, st.sampled_from(LENGTHS))
def test_no_change_of_sign_is_missed(examples: list[list[float]], length: float) -> None:
    """Between two samples of opposite sign there is a root, whatever the polynomial."""
    shares = np.linspace(0, 1, 201)
    for row in examples:
        found = roots_of(row, length)
        values = value(row, shares)
        clear = np.flatnonzero(np.abs(values) > VALUE_TOLERANCE * np.abs(row).sum())
        for before, after in pairwise(clear):
            if values[before] * values[after] < 0:
                inside = (found >= shares[before]) & (found <= shares[after])
                assert inside.any(), f"{row}: no root in {shares[[before, after]]}, only {found}"


@given(
    st.lists(st.integers(-10, 40), min_size=1, max_size=8, unique=True),
    st.floats(0.1, 10),
    st.sampled_from(LENGTHS),
)
def test_chosen_roots_are_found(twentieths: list[int], factor: float, length: float) -> None:
    """A polynomial built from simple roots has exactly those that lie inside."""
    chosen = np.sort(np.array(twentieths) / 20)
    row = np.asarray((factor * Polynomial.fromroots(chosen)).coef, dtype=np.float64)
    inside = chosen[(chosen >= 0) & (chosen <= 1)]
    # How far rounding of the coefficients can move a root: by their sum over the slope there.
    slope = np.abs(value(row, inside, 1))
    atol = VALUE_TOLERANCE * np.abs(row).sum() / slope
    found = roots_of(list(row), length)
    at_ends = np.isin(inside, [0, 1])
    # A root that rounding moves across an end of the interval is rightly gone.
    for root, tolerance, at_end in zip(inside, atol, at_ends, strict=True):
        missed = np.abs(found - root).min(initial=np.inf)
        assert at_end or missed <= tolerance, f"{chosen}: {root} missed by {missed}"
    for root in found:
        assert np.any(np.abs(inside - root) <= atol), f"{chosen}: {root} is none of them"


@pytest.mark.parametrize("degree", range(1, 9))
def test_roots_agree_with_those_of_a_companion_matrix(degree: int) -> None:
    """Eigenvalues are another way to the same roots."""
    random = np.random.default_rng(degree)
    for row in random.normal(size=(120, degree + 1)):
        every = Polynomial(row).roots()
        real = np.sort(every[np.abs(every.imag) < 1e-7 * np.abs(every)].real)
        inside = real[(real > 0) & (real < 1)]
        assert_allclose(roots_of(list(row)), inside, rtol=0, atol=1e-9, err_msg=f"{row}")


@pytest.mark.parametrize("length", [2.0**-30, 1.0, 2.0**20])  # scaling by them rounds nothing
@pytest.mark.parametrize(
    ("row", "expected"),
    [
        ([0.0, 1.0], [0]),
        ([-1.0, 1.0], [1]),
        ([0.0, 1.0, -1.0], [0, 1]),
        ([0.0, 1.0, -3.0, 2.0], [0, 0.5, 1]),
        ([0.0, -1.0, 4.0, -5.0, 2.0], [0, 0.5]),
    ],
)
def test_a_simple_root_at_an_end_is_found(
    row: list[float], expected: list[float], length: float
) -> None:
    """There an acceleration begins or ends, and a part with another limit with it."""
    found = roots_of(row, length)
    for root in expected:
        assert_allclose(np.abs(found - root).min(), 0, atol=1e-15, err_msg=f"{root}: {found}")


@pytest.mark.parametrize("length", LENGTHS)
def test_a_double_root_at_an_end_gives_no_root_inside(length: float) -> None:
    """The velocity of the quintic law vanishes at its ends only, and rounding adds nothing."""
    found = roots_of(QUINTIC_VELOCITY, length)
    assert_array_equal(np.minimum(found, 1 - found), np.zeros(found.size))
    turning = roots_of([0.0, 60.0, -180.0, 120.0], length)
    assert_allclose(turning, [0, 0.5, 1], rtol=0, atol=1e-15)


@pytest.mark.parametrize("length", LENGTHS)
@pytest.mark.parametrize("leading", [0.0, 1e-300, 1e-30, 1e-17, -1e-17, -1e-30])
def test_a_leading_coefficient_near_zero_moves_no_root(leading: float, length: float) -> None:
    """Coefficients that cancelled to rounding must not turn up as wild roots."""
    assert_allclose(roots_of([-1.0, 4.0, leading], length), [0.25], rtol=1e-15)
    assert_allclose(
        roots_of([3.0, -16.0, 16.0, leading, leading], length), [0.25, 0.75], rtol=1e-14
    )


@pytest.mark.parametrize("row", [[0.0], [0.0, 0.0, 0.0], [5.0], [-1e-300], [2.0, 0.0, 0.0, 0.0]])
def test_a_constant_has_no_root(row: list[float]) -> None:
    """Not even one that is zero: where everything is a root, nothing is worth a cut."""
    assert roots_of(row).size == 0


def test_every_row_is_searched_on_its_own_interval() -> None:
    """A root beyond one row's interval may lie inside another's."""
    coefficients = np.tile([-2.0, 1.0, 0.0], (3, 1))
    found = polynomials.roots(coefficients, np.array([1.0, 2.0, 1e6]))
    assert found.shape == (3, 2)
    assert_allclose(found[:, 0], [np.nan, 2.0, 2.0], rtol=1e-15)
    assert np.isnan(found[:, 1]).all()


def test_an_interval_of_no_length_has_its_value_as_extremes() -> None:
    """Pieces of a trajectory may take no time."""
    found = polynomials.extremes(np.array([[3.0, -1.0, 2.0, 5.0]]), np.zeros(1))
    assert_array_equal(np.concatenate(found), [3.0, 3.0, 0.0, 0.0])


@given(EXAMPLES, st.sampled_from(LENGTHS))
def test_no_sample_lies_beyond_the_extremes(examples: list[list[float]], length: float) -> None:
    """Extremes are those of the polynomial, so dense samples stay within and come close."""
    coefficients, lengths = rows(examples, length)
    low, high, low_at, high_at = polynomials.extremes(coefficients, lengths)
    shares = np.linspace(0, 1, 2001)
    for row, (least, greatest, *at) in zip(
        examples, np.stack([low, high, low_at, high_at], axis=-1), strict=True
    ):
        values = value(row, shares)
        size = np.abs(row).sum() + np.finfo(np.float64).tiny
        assert greatest >= values.max() - VALUE_TOLERANCE * size, f"{row}"
        assert least <= values.min() + VALUE_TOLERANCE * size, f"{row}"
        # Between samples a value differs by an eighth of curvature times the square of their gap.
        curvature = np.abs(Polynomial(row).deriv(2).coef).sum()
        reach = curvature / 8 / 2000**2 + VALUE_TOLERANCE * size
        assert_allclose([least, greatest], [values.min(), values.max()], rtol=0, atol=reach)
        taken = value(row, np.array(at) / length)
        assert_allclose(taken, [least, greatest], rtol=0, atol=VALUE_TOLERANCE * size)


@given(EXAMPLES)
def test_values_and_derivatives_agree_with_numpy(examples: list[list[float]]) -> None:
    """Horner's rule and the rule of powers, once more by a general-purpose library."""
    coefficients, _ = rows(examples, 1.0)
    at = np.linspace(0, 1, 5)
    values = polynomials.evaluate(coefficients[:, np.newaxis], at)
    slopes = polynomials.derivative(coefficients)
    for row, found, slope in zip(examples, values, slopes, strict=True):
        size = np.abs(row).sum()
        assert_allclose(found, value(row, at), rtol=0, atol=VALUE_TOLERANCE * size)
        expected = np.asarray(Polynomial(row).deriv().coef, dtype=np.float64)
        assert_allclose(slope[: expected.size], expected, rtol=1e-15)
        assert_array_equal(slope[expected.size :], 0)


def test_highest_powers_that_none_uses_are_cut() -> None:
    """A power that one row uses stays for all; a polynomial keeps at least its constant."""
    coefficients = np.array([[1.0, 0.0, 0.0, 0.0], [1.0, 0.0, 3.0, 0.0]])
    assert_array_equal(polynomials.trimmed(coefficients), coefficients[:, :3])
    assert_array_equal(polynomials.trimmed(np.zeros((2, 4))), np.zeros((2, 1)))
