"""The laws of one axis before witnesses from outside: published examples and a general solver."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.polynomial import Polynomial
from numpy.testing import assert_allclose
from scipy import sparse
from scipy.optimize import Bounds, LinearConstraint, brentq, milp

from profileplan.motion.laws import LAWS, Limits, Moves, solve_quintic, solve_trapezoidal

if TYPE_CHECKING:
    from conftest import Row
    from profileplan.inputs import LawName


def limits_of(row: Row) -> Limits:
    """Return the limits that a published example names; those that it does not are none."""
    acceleration = row.given.get("acceleration", np.inf)
    return Limits(
        row.given.get("velocity", np.inf),
        acceleration,
        row.given.get("deceleration", acceleration),
        row.given.get("jerk", np.inf),
    )


def polynomials(law: LawName, moves: Moves, derivative: int) -> list[tuple[Polynomial, float]]:
    """Return a derivative of one move as numpy's polynomial, and the duration, of every phase."""
    pieces = LAWS[law].pieces(moves)
    return [
        (Polynomial(piece).deriv(derivative), float(duration))
        for piece, duration in zip(pieces, moves.phases, strict=True)
    ]


def mean_squared(law: LawName, moves: Moves, derivative: int) -> float:
    """Return the mean of the square of a derivative over the duration, exactly."""
    total = 0.0
    for polynomial, duration in polynomials(law, moves, derivative):
        total += float((polynomial**2).integ()(duration))
    return total / float(moves.duration)


def ramp_times(moves: Moves) -> tuple[float, float]:
    """Return how long a trapezoidal move speeds up and slows down."""
    return float(moves.phases[:3].sum()), float(moves.phases[4:].sum())


@pytest.mark.published("biagiotti-melchiorri-2008.toml", "trapezoidal")
def test_a_trapezoidal_example_of_biagiotti_and_melchiorri(row: Row) -> None:
    """Distance, duration and ramp give velocity and acceleration, and these the duration."""
    moves = solve_trapezoidal(row.given["distance"], limits_of(row))
    row.assert_printed(duration=moves.duration, ramp=ramp_times(moves)[0])


@pytest.mark.published("biagiotti-melchiorri-2008.toml", "fractions")
def test_given_fractions_of_ramp_and_jerk(row: Row) -> None:
    """Phases that are given as fractions of the duration come back from the limits they imply."""
    moves = solve_trapezoidal(row.given["distance"], limits_of(row))
    row.assert_printed(
        duration=moves.duration, ramp=ramp_times(moves)[0], jerk_time=moves.phases[0]
    )


@pytest.mark.published("spong-hutchinson-vidyasagar.toml", "trapezoidal")
def test_a_parabolic_blend_of_spong(row: Row) -> None:
    """Between the admissible velocities the blend gives the acceleration that the time needs."""
    moves = solve_trapezoidal(row.given["distance"], limits_of(row))
    row.assert_printed(duration=moves.duration, ramp=ramp_times(moves)[0])


@pytest.mark.published("niku.toml", "blends")
def test_positions_at_the_blends_of_niku(row: Row) -> None:
    """Not only times but positions on the way are printed."""
    start, end = row.given["start"], row.given["end"]
    moves = solve_trapezoidal(end - start, limits_of(row))
    cruise, lasts = polynomials("trapezoidal", moves, 0)[3]
    row.assert_printed(
        duration=moves.duration,
        ramp=ramp_times(moves)[0],
        at_first_blend=start + cruise(0.0),
        at_second_blend=start + cruise(lasts),
    )


@pytest.mark.published("siciliano-2009.toml", "least_acceleration")
def test_the_least_acceleration_for_a_time(row: Row) -> None:
    """Without a cruise the acceleration is least: 4 h / T²."""

    def lateness(acceleration: float) -> float:
        limits = Limits(np.inf, acceleration, acceleration, np.inf)
        duration = solve_trapezoidal(row.given["distance"], limits).duration
        return float(duration) - row.given["duration"]

    row.assert_printed(acceleration=brentq(lateness, 1.0, 100.0, xtol=1e-12))


@pytest.mark.published("siciliano-2009.toml", "blend")
def test_the_blend_that_an_acceleration_and_a_time_leave(row: Row) -> None:
    """Which cruise takes exactly the time is found by a solver of equations."""

    def move(velocity: float) -> Moves:
        return solve_trapezoidal(row.given["distance"], limits_of(row)._replace(velocity=velocity))

    cruise = brentq(lambda v: float(move(v).duration) - row.given["duration"], 1.0, 7.0)
    row.assert_printed(ramp=ramp_times(move(cruise))[0])


@pytest.mark.published("uniform-acceleration.toml", "triangular")
def test_slowing_down_harder_than_speeding_up(row: Row) -> None:
    """Peak velocity and both times follow from the kinematics of uniform acceleration."""
    moves = solve_trapezoidal(row.given["distance"], limits_of(row))
    speeds_up, slows_down = ramp_times(moves)
    row.assert_printed(
        velocity=moves.velocity, ramp=speeds_up, stop=slows_down, duration=moves.duration
    )


@pytest.mark.published("uniform-acceleration.toml", "effort")
def test_the_effort_of_a_unit_move(row: Row) -> None:
    """The mean square of the acceleration, integrated exactly, tells how warm the motor gets."""
    moves = solve_trapezoidal(row.given["distance"], limits_of(row))
    mean_square = mean_squared("trapezoidal", moves, 2)
    row.assert_printed(duration=moves.duration, rms_acceleration=np.sqrt(mean_square))


@pytest.mark.published("limited-jerk.toml", "seven_segments")
def test_a_duration_under_limited_jerk(row: Row) -> None:
    """One example for every case of which limits are reached, and for the borders between."""
    moves = solve_trapezoidal(row.given["distance"], limits_of(row))
    row.assert_printed(duration=moves.duration)


@pytest.mark.published("limited-jerk.toml", "one_limit")
def test_durations_when_one_limit_counts(row: Row) -> None:
    """Bang-bang motion in the acceleration, then in the jerk, all else out of reach."""
    distance, far = row.given["distance"], 1e6
    a, j = row.given["acceleration"], row.given["jerk"]
    by_acceleration = solve_trapezoidal(distance, Limits(far, a, a, np.inf))
    by_jerk = solve_trapezoidal(distance, Limits(far, far, far, j))
    row.assert_printed(
        by_acceleration=by_acceleration.duration / np.sqrt(distance / a),
        by_jerk=by_jerk.duration / np.cbrt(distance / j),
    )


@pytest.mark.published("polynomial-laws.toml", "degree_five")
def test_peaks_and_effort_of_degree_five(row: Row) -> None:
    """From the polynomial itself, and the law says the same of it."""
    limits = Limits(row.printed["velocity"][0].value, np.inf, np.inf, np.inf)
    moves = solve_quintic(row.given["distance"], limits)
    assert_allclose(moves.duration, row.given["duration"], rtol=1e-15)
    peaks = []
    for derivative in (1, 2, 3):
        sizes: list[float] = []
        for polynomial, duration in polynomials("quintic", moves, derivative):
            turning = polynomial.deriv().roots().real
            at = np.concatenate([[0.0, duration], turning[(turning > 0) & (turning < duration)]])
            sizes.extend(np.abs(polynomial(at)).tolist())
        peaks.append(max(sizes))
    row.assert_printed(
        velocity=peaks[0],
        acceleration=peaks[1],
        jerk=peaks[2],
        mean_squared_velocity=mean_squared("quintic", moves, 1),
        mean_squared_acceleration=mean_squared("quintic", moves, 2),
    )
    told = [moves.velocity, moves.acceleration, moves.jerk]
    assert_allclose(told, peaks, rtol=1e-13)


@pytest.mark.published("polynomial-laws.toml", "limits")
def test_a_duration_of_degree_five(row: Row) -> None:
    """Each limit alone gives a duration, and the longest of them counts."""
    row.assert_printed(duration=solve_quintic(row.given["distance"], limits_of(row)).duration)


@pytest.mark.published("polynomial-laws.toml", "coefficients")
def test_coefficients_of_degree_five(row: Row) -> None:
    """Every phase is a part of the one polynomial in time that is printed."""
    start, distance = row.given["start"], row.given["end"] - row.given["start"]
    fastest = solve_quintic(distance, Limits(1e3, 1e3, 1e3, 1e3))
    moves = fastest.stretched(row.given["duration"])
    assert_allclose(moves.phases.sum(), row.given["duration"], rtol=1e-15)
    begins = np.cumsum(moves.phases) - moves.phases
    for (polynomial, _), begin in zip(polynomials("quintic", moves, 0), begins, strict=True):
        whole = start + polynomial(Polynomial([-begin, 1.0]))
        row.assert_printed(coefficients=whole.coef)


SOLVER_TOLERANCE = 1e-9
"""Share of the way that the solver may gain by its own rounding."""

GRID_TOLERANCE = 2e-4
"""Share of the way that equal cells cost, since switches of the motion fall inside of them."""

CELLS = 300
"""Equal cells of time in which the solver may choose the acceleration."""


def farthest(duration: float, limits: Limits) -> float:
    """Return how far a motion from rest to rest can get in a time, found by HiGHS.

    Unknowns are the velocities at the ends of cells, then the accelerations: one for each cell, or,
    where jerk is limited, at the ends of cells and linear between. What is found keeps the limits
    at every time, so it is a true motion: the parabolas of velocity are held at the points (value,
    value + slope · step / 2, next value), in whose range they stay.
    """
    step, smooth = duration / CELLS, bool(np.isfinite(limits.jerk))
    at, after = sparse.eye_array(CELLS, CELLS + 1), sparse.eye_array(CELLS, CELLS + 1, k=1)
    if smooth:
        gain, shares = 0.5 * step * (at + after), (step**2 / 3, step**2 / 6)
        rates = shares[0] * at.sum(axis=0) + shares[1] * after.sum(axis=0)
    else:
        gain, rates = step * sparse.eye_array(CELLS), np.full(CELLS, 0.5 * step**2)
    way = np.concatenate([step * at.sum(axis=0), rates])
    constraints = [LinearConstraint(sparse.hstack([after - at, -gain]), 0.0, 0.0)]
    if smooth:
        change = sparse.hstack([0.0 * at, after - at])
        constraints.append(LinearConstraint(change, -limits.jerk * step, limits.jerk * step))
        middle = sparse.hstack([at, 0.5 * step * at])
        constraints.append(LinearConstraint(middle, 0.0, limits.velocity))
    low = np.concatenate([np.zeros(CELLS + 1), np.full(rates.size, -limits.deceleration)])
    high = np.concatenate(
        [np.full(CELLS + 1, limits.velocity), np.full(rates.size, limits.acceleration)]
    )
    rest = [0, CELLS, CELLS + 1, -1] if smooth else [0, CELLS]
    low[rest] = high[rest] = 0.0
    found = milp(-way, constraints=constraints, bounds=Bounds(low, high))
    assert found.success, found.message
    return -float(found.fun)


REGIMES = {
    "trapezoid": (10.0, Limits(5.0, 10.0, 10.0, np.inf)),
    "triangle": (1.0, Limits(5.0, 10.0, 10.0, np.inf)),
    "trapezoid, strong brakes": (10.0, Limits(5.0, 4.0, 15.0, np.inf)),
    "triangle, weak brakes": (3.0, Limits(9.0, 10.0, 3.0, np.inf)),
    "all seven segments": (10.0, Limits(5.0, 10.0, 10.0, 30.0)),
    "no cruise": (3.0, Limits(5.0, 10.0, 10.0, 30.0)),
    "jerk alone": (1.0, Limits(5.0, 10.0, 10.0, 30.0)),
    "cruise, acceleration not reached": (3.0, Limits(2.0, 10.0, 10.0, 30.0)),
    "all reached, weak brakes": (12.0, Limits(5.0, 10.0, 5.0, 30.0)),
    "cruise, only the weak brakes reached": (4.0, Limits(2.0, 10.0, 4.0, 30.0)),
    "no cruise, only the weak acceleration reached": (2.0, Limits(9.0, 3.0, 12.0, 20.0)),
    "no cruise, both reached, strong brakes": (9.0, Limits(9.0, 4.0, 8.0, 30.0)),
}


@pytest.mark.parametrize(("distance", "limits"), REGIMES.values(), ids=REGIMES)
def test_no_motion_gets_there_sooner(distance: float, limits: Limits) -> None:
    """In its time a solver gets as far but no farther, and in 0.99 of it not so far.

    What is done in 0.99 of the time could be stretched to all of it and enlarged by 1 / 0.99 with
    no limit passed, so in 0.99 of the time at most 0.99 of the way can be done. The grid costs a
    fiftieth of that, so it hides no faster motion.
    """
    duration = float(solve_trapezoidal(distance, limits).duration)
    in_time = farthest(duration, limits)
    assert in_time <= distance * (1 + SOLVER_TOLERANCE), f"{in_time} in {duration} s"
    assert in_time >= distance * (1 - GRID_TOLERANCE), f"{in_time} in {duration} s"
    sooner = farthest(0.99 * duration, limits)
    assert sooner <= 0.99 * distance * (1 + SOLVER_TOLERANCE), f"{sooner} in 0.99 of the time"


@settings(max_examples=50)
@given(
    st.floats(-1, 1),
    st.tuples(*[st.floats(-1, 1)] * 3),
    st.one_of(st.just(np.inf), st.floats(-1, 2)),
)
def test_no_motion_gets_farther_under_any_limits(
    distance: float, limits: tuple[float, float, float], jerk: float
) -> None:
    """Whichever phases there are: within a hundredth, which the grid may cost, it is the least."""
    own = Limits(*(10.0**exponent for exponent in (*limits, jerk)))
    way = 10.0**distance
    in_time = farthest(float(solve_trapezoidal(way, own).duration), own)
    assert in_time <= way * (1 + SOLVER_TOLERANCE), f"{in_time} of {way}"
    assert in_time >= way * 0.99, f"{in_time} of {way}"
