"""The laws of one axis: closed forms, and properties over all decades of limits and distances."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.polynomial import Polynomial
from numpy.testing import assert_allclose, assert_array_equal
from scipy.interpolate import PPoly
from scipy.optimize import brentq

from profileplan.inputs import LAW_NAMES
from profileplan.motion.laws import LAWS, Limits, Moves, solve_quintic, solve_trapezoidal
from profileplan.motion.trajectory import ORDER

if TYPE_CHECKING:
    from profileplan.inputs import LawName
    from profileplan.motion.polynomials import Array

LIMIT_TOLERANCE = 1e-12
"""Share by which rounding may pass a limit: a thousandth of what the checks allow."""

TIME_TOLERANCE = 1e-12
"""Relative: rounding of a duration."""

POWERS_OF_LIMITS = (1, 2, 2, 3)
"""By which powers of a uniform slowing velocity, accelerations and jerk fall."""


def decades(low: float, high: float) -> st.SearchStrategy[float]:
    """Draw numbers that are as likely in one decade as in another."""
    return st.floats(low, high).map(lambda exponent: 10.0**exponent)


DISTANCES = st.builds(lambda size, sign: sign * size, decades(-9, 6), st.sampled_from([-1.0, 1.0]))

EVEN_LIMITS = st.builds(
    lambda velocity, acceleration, rise: Limits(
        velocity, acceleration, acceleration, acceleration * rise
    ),
    decades(-3, 5),
    decades(-3, 6),
    st.one_of(st.just(np.inf), decades(-4, 8)),
)
"""Limits with one acceleration; the jerk may be unlimited."""

LIMITS = st.builds(
    lambda limits, brakes: limits._replace(deceleration=limits.acceleration * brakes),
    EVEN_LIMITS,
    st.one_of(st.just(1.0), decades(-5, 5)),
)
"""Limits of which each may be decades from the others."""

LAWS_BY_NAME = pytest.mark.parametrize("law", LAW_NAMES)


class Curve(NamedTuple):
    """The polynomials of one move and how long each lasts, read by numpy and scipy."""

    pieces: Array
    durations: Array

    @classmethod
    def of(cls, law: LawName, moves: Moves) -> Curve:
        """Take the phases that last."""
        lasting = moves.phases > 0
        return cls(LAWS[law].pieces(moves)[lasting], moves.phases[lasting])

    @property
    def duration(self) -> float:
        """The sum of the phases [s]."""
        return float(self.durations.sum())

    def phases(self, derivative: int) -> list[tuple[Polynomial, float]]:
        """Return a derivative as numpy's polynomial, and the duration, of every phase."""
        return [
            (Polynomial(piece).deriv(derivative), float(duration))
            for piece, duration in zip(self.pieces, self.durations, strict=True)
        ]

    def extremes(self, derivative: int) -> tuple[float, float]:
        """Return the least and the greatest value of a derivative."""
        values: list[float] = []
        for polynomial, duration in self.phases(derivative):
            turning = polynomial.deriv().trim().roots().real
            inner = turning[(turning > 0) & (turning < duration)]
            values.extend(polynomial(np.concatenate([[0.0, duration], inner])).tolist())
        return min(values), max(values)

    def breaks(self, derivative: int) -> tuple[Array, Array]:
        """Return the values at the beginnings and at the ends of the phases."""
        phases = self.phases(derivative)
        return (
            np.array([polynomial(0.0) for polynomial, _ in phases]),
            np.array([polynomial(duration) for polynomial, duration in phases]),
        )

    def positions(self, shares: Array) -> Array:
        """Return the positions at shares of the duration, by scipy."""
        breaks = np.concatenate([[0.0], np.cumsum(self.durations)])
        position = PPoly(self.pieces[:, ::-1].T, breaks)
        return np.asarray(position(shares * breaks[-1]), dtype=np.float64)


# Closed forms and identities.


def closed_form(h: float, v: float, a: float, j: float) -> float:
    """Return the least time from rest to rest under equal accelerations.

    Biagiotti, Melchiorri (2008), sections 3.2 and 3.4, for rest to rest; from memory, recomputed.
    """
    if np.isinf(j):
        return h / v + v / a if h >= v**2 / a else 2 * math.sqrt(h / a)
    if v * j >= a**2 and h >= v**2 / a + v * a / j:
        return h / v + v / a + a / j
    if v * j < a**2 and h >= 2 * v * math.sqrt(v / j):
        return h / v + 2 * math.sqrt(v / j)
    if h >= 2 * a**3 / j**2:
        return a / j + math.sqrt((a / j) ** 2 + 4 * h / a)
    return 4 * float(np.cbrt(h / (2 * j)))


@given(DISTANCES, EVEN_LIMITS)
def test_durations_agree_with_the_closed_forms(distance: float, limits: Limits) -> None:
    """One formula for each case of which limits are reached; the case must be found rightly."""
    velocity, acceleration, _, jerk = map(float, limits)
    expected = closed_form(abs(distance), velocity, acceleration, jerk)
    duration = solve_trapezoidal(distance, limits).duration
    assert_allclose(duration, expected, rtol=TIME_TOLERANCE)


@given(DISTANCES, EVEN_LIMITS)
def test_the_duration_is_the_sum_of_the_ratios_of_peaks(distance: float, limits: Limits) -> None:
    """With attained peaks T = h/v + v/a + a/j in every case, when both ramps are alike."""
    moves = solve_trapezoidal(distance, limits)
    ratios = (
        abs(distance) / moves.velocity
        + moves.velocity / moves.acceleration
        + moves.acceleration / moves.jerk
    )
    assert_allclose(moves.duration, ratios, rtol=TIME_TOLERANCE)


@given(DISTANCES, LIMITS)
def test_the_peak_velocity_is_the_one_whose_ramps_fill_the_way(
    distance: float, limits: Limits
) -> None:
    """For separate deceleration a solver of equations finds the same peak."""
    velocity, acceleration, deceleration, jerk = map(float, limits)

    def ramp(peak: float, limit: float) -> float:
        reached = peak * jerk >= limit**2
        return peak / limit + limit / jerk if reached else 2 * math.sqrt(peak / jerk)

    def excess(logarithm: float) -> float:
        peak = np.exp(logarithm)
        way = 0.5 * peak * (ramp(peak, acceleration) + ramp(peak, deceleration))
        return float(np.log(way / abs(distance)))

    unbounded = float(np.exp(brentq(excess, np.log(1e-30), np.log(1e30), xtol=1e-13)))
    peak = min(velocity, unbounded)
    ramps = ramp(peak, acceleration) + ramp(peak, deceleration)
    cruise = max(abs(distance) / peak - 0.5 * ramps, 0.0) if unbounded > velocity else 0.0
    moves = solve_trapezoidal(distance, limits)
    assert_allclose(moves.velocity, peak, rtol=1e-11)
    assert_allclose(moves.duration, ramps + cruise, rtol=1e-11)


@pytest.mark.parametrize(
    "limits",
    [Limits(5.0, 10.0, 10.0, 30.0), Limits(2.0, 10.0, 4.0, 30.0), Limits(9.0, 2.0, 8.0, 3.0)],
)
def test_nothing_jumps_where_another_limit_takes_over(limits: Limits) -> None:
    """A little more way takes a little more time, from one case to the next as within each.

    The time grows at most as by a cruise at the peak velocity over the added way, and at least by
    two thirds of that, which is the growth where only the jerk counts.
    """
    distances = np.geomspace(1e-4, 1e3, 20_001)
    moves = solve_trapezoidal(distances, limits)
    steps, growth = np.diff(distances), np.diff(moves.duration)
    rounding = 1e-14 * moves.duration[1:]
    assert np.all(growth <= steps / moves.velocity[:-1] + rounding)
    assert np.all(growth >= 2 / 3 * steps / moves.velocity[1:] - rounding)


BORDERS = {
    "velocity just reached, no jerk limit": (2.5, Limits(5.0, 10.0, 10.0, np.inf)),
    "velocity just reached": (25 / 6, Limits(5.0, 10.0, 10.0, 30.0)),
    "acceleration just reached": (20 / 9, Limits(5.0, 10.0, 10.0, 30.0)),
    "both just reached": (20 / 9, Limits(10 / 3, 10.0, 10.0, 30.0)),
    "velocity just reached, acceleration not": (
        2 * 2 * (2 / 30) ** 0.5,
        Limits(2.0, 10.0, 10.0, 30.0),
    ),
}


@pytest.mark.parametrize(("distance", "limits"), BORDERS.values(), ids=BORDERS)
@pytest.mark.parametrize("off", [0.0, 1e-16, 1e-12, 1e-8, 1e-5])
@pytest.mark.parametrize("side", [-1, 1])
def test_a_hair_beside_a_border_no_limit_is_passed(
    distance: float, limits: Limits, off: float, side: int
) -> None:
    """Where one case ends and the next begins, rounding must not choose a wrong one."""
    beside = distance * (1 + side * off)
    moves = solve_trapezoidal(beside, limits)
    told = [moves.velocity, moves.acceleration, moves.deceleration, moves.jerk]
    assert np.all(np.array(told) <= np.array(limits) * (1 + LIMIT_TOLERANCE)), f"{told}"
    velocity, acceleration, _, jerk = map(float, limits)
    expected = closed_form(beside, velocity, acceleration, jerk)
    assert_allclose(moves.duration, expected, rtol=TIME_TOLERANCE)


# Properties of every law.


@LAWS_BY_NAME
@given(distance=DISTANCES, limits=LIMITS)
def test_no_limit_is_passed(law: LawName, distance: float, limits: Limits) -> None:
    """Neither by the peaks that are told, nor by the extremes of the polynomials."""
    moves = LAWS[law].solve(distance, limits)
    curve = Curve.of(law, moves)
    backward, forward = curve.extremes(1)
    slowing, speeding = curve.extremes(2)
    jerk = max(abs(value) for value in curve.extremes(3))
    found = np.array([forward, speeding, -slowing, jerk])
    within = np.array(limits) * (1 + LIMIT_TOLERANCE)
    assert np.all(found <= within), f"{found} beyond {limits}"
    assert backward >= -LIMIT_TOLERANCE * forward, "it moves backward"
    told = np.array([moves.velocity, moves.acceleration, moves.deceleration, moves.jerk])
    assert np.all(told <= within), f"{told} beyond {limits}"
    finite = np.isfinite(told)
    assert_allclose(found[finite], told[finite], rtol=LIMIT_TOLERANCE, err_msg="peaks as told")


@LAWS_BY_NAME
@given(distance=DISTANCES, limits=LIMITS)
def test_it_arrives_at_rest(law: LawName, distance: float, limits: Limits) -> None:
    """Position, velocity and, under a jerk limit, acceleration run on without a jump."""
    moves = LAWS[law].solve(distance, limits)
    curve = Curve.of(law, moves)
    assert_allclose(curve.duration, moves.duration, rtol=TIME_TOLERANCE)
    sizes = [abs(distance), float(moves.velocity)]
    if np.isfinite(moves.jerk):
        sizes.append(float(max(moves.acceleration, moves.deceleration)))
    for derivative, size in enumerate(sizes):
        target = abs(distance) if derivative == 0 else 0.0
        starts, ends = curve.breaks(derivative)
        expected, actual = np.append(starts, target), np.insert(ends, 0, 0.0)
        assert_allclose(actual, expected, rtol=0, atol=1e-13 * size, err_msg=f"{derivative}")


@LAWS_BY_NAME
@given(distance=DISTANCES, limits=LIMITS)
def test_backward_it_is_the_same_motion(law: LawName, distance: float, limits: Limits) -> None:
    """With acceleration and deceleration swapped it is the motion run backward in time."""
    swapped = limits._replace(acceleration=limits.deceleration, deceleration=limits.acceleration)
    moves, mirrored = LAWS[law].solve(distance, limits), LAWS[law].solve(-distance, swapped)
    assert_allclose(mirrored.duration, moves.duration, rtol=TIME_TOLERANCE)
    atol = TIME_TOLERANCE * float(moves.duration)
    assert_allclose(mirrored.phases[::-1], moves.phases, rtol=0, atol=atol)
    assert_array_equal(mirrored.distance, -moves.distance)
    shares = np.linspace(0, 1, 33)
    there, back = Curve.of(law, moves).positions(shares), Curve.of(law, mirrored).positions(shares)
    assert_allclose(there, abs(distance) - back[::-1], rtol=0, atol=1e-12 * abs(distance))


@LAWS_BY_NAME
@given(distance=DISTANCES, limits=LIMITS, time=decades(-3, 3), way=decades(-3, 3))
def test_units_of_time_and_length_do_not_matter(
    law: LawName, distance: float, limits: Limits, time: float, way: float
) -> None:
    """Times grow by c when limits fall by its powers; lengths scale everything but time."""
    scaled = Limits(
        *(limit * way / time**power for limit, power in zip(limits, POWERS_OF_LIMITS, strict=True))
    )
    moves, other = LAWS[law].solve(distance, limits), LAWS[law].solve(distance * way, scaled)
    assert_allclose(other.duration, moves.duration * time, rtol=TIME_TOLERANCE)
    assert_allclose(other.velocity, moves.velocity * way / time, rtol=TIME_TOLERANCE)
    atol = TIME_TOLERANCE * float(other.duration)
    assert_allclose(other.phases, moves.phases * time, rtol=0, atol=atol)


@LAWS_BY_NAME
@given(distance=DISTANCES, limits=LIMITS, which=st.integers(0, 4), factor=st.floats(1, 1e3))
def test_more_of_a_limit_never_costs_time(
    law: LawName, distance: float, limits: Limits, which: int, factor: float
) -> None:
    """And less way never does: otherwise advice on what to change would be wrong."""
    raised = list(limits)
    way = distance
    if which < len(raised):
        raised[which] *= factor
    else:
        way /= factor
    before = LAWS[law].solve(distance, limits).duration
    after = LAWS[law].solve(way, Limits(*raised)).duration
    assert after <= before * (1 + TIME_TOLERANCE), f"{before} s became {after} s"


@given(DISTANCES, LIMITS)
def test_at_every_moment_some_limit_is_reached(distance: float, limits: Limits) -> None:
    """A motion that reaches none for a while could be faster; which one tells the phase."""
    moves = solve_trapezoidal(distance, limits)
    lasts = moves.phases > 1e-12 * moves.duration
    for phases, reached, limit in (
        ((1,), moves.acceleration, limits.acceleration),
        ((3,), moves.velocity, limits.velocity),
        ((5,), moves.deceleration, limits.deceleration),
    ):
        if lasts[list(phases)].any():
            assert_allclose(reached, limit, rtol=LIMIT_TOLERANCE, err_msg=f"phases {phases}")
    pieces = LAWS["trapezoidal"].pieces(moves)
    for phase in np.flatnonzero(lasts[[0, 2, 4, 6]]) * 2:
        jerk = 6 * abs(pieces[phase, 3])
        assert_allclose(jerk, limits.jerk, rtol=LIMIT_TOLERANCE, err_msg=f"phase {phase}")


@given(DISTANCES, LIMITS)
def test_no_shorter_quintic_keeps_its_limits(distance: float, limits: Limits) -> None:
    """One of its peaks is at its limit, so any shorter time would pass it."""
    moves = solve_quintic(distance, limits)
    gentler = min(float(limits.acceleration), float(limits.deceleration))
    uses = [moves.velocity / limits.velocity, moves.acceleration / gentler]
    uses.append(moves.jerk / limits.jerk)
    assert_allclose(max(uses), 1, rtol=LIMIT_TOLERANCE)
    assert moves.duration >= solve_trapezoidal(distance, limits).duration * (1 - TIME_TOLERANCE)


@given(DISTANCES, LIMITS)
def test_a_jerk_limit_out_of_reach_is_none(distance: float, limits: Limits) -> None:
    """The two ways of computing, with and without, meet."""
    softest = limits._replace(jerk=np.inf)
    without = solve_trapezoidal(distance, softest)
    least_ramp = float(without.velocity) / max(
        float(limits.acceleration), float(limits.deceleration)
    )
    jerk = 1e9 * float(max(limits.acceleration, limits.deceleration)) / least_ramp
    within = solve_trapezoidal(distance, limits._replace(jerk=jerk))
    assert_allclose(within.duration, without.duration, rtol=1e-8)
    assert within.duration >= without.duration * (1 - TIME_TOLERANCE)


# Longer times, waits, refusals.


@LAWS_BY_NAME
@given(distance=DISTANCES, limits=LIMITS, slowing=decades(0, 6))
def test_a_stretched_move_is_the_same_more_slowly(
    law: LawName, distance: float, limits: Limits, slowing: float
) -> None:
    """Peaks fall by c, c² and c³, the time is exact, the positions are the same."""
    moves = LAWS[law].solve(distance, limits)
    duration = slowing * float(moves.duration)
    stretched = moves.stretched(duration)
    assert_array_equal(stretched.duration, duration)
    assert_allclose(stretched.phases.sum(), duration, rtol=TIME_TOLERANCE)
    told = [moves.velocity, moves.acceleration, moves.deceleration, moves.jerk]
    expected = [peak / slowing**power for peak, power in zip(told, POWERS_OF_LIMITS, strict=True)]
    actual = [stretched.velocity, stretched.acceleration, stretched.deceleration, stretched.jerk]
    assert_allclose(actual, expected, rtol=TIME_TOLERANCE)
    fast, slow = Curve.of(law, moves), Curve.of(law, stretched)
    shares = np.linspace(0, 1, 33)
    atol = 1e-12 * abs(distance)
    assert_allclose(slow.positions(shares), fast.positions(shares), rtol=0, atol=atol)
    slowing_down, speeding_up = slow.extremes(2)
    found = [slow.extremes(1)[1], speeding_up, -slowing_down]
    assert_allclose(found, actual[:3], rtol=LIMIT_TOLERANCE)


@LAWS_BY_NAME
def test_a_stretched_move_never_passes_a_limit(law: LawName) -> None:
    """A time that is the least one up to rounding is not shorter in effect."""
    limits = Limits(5.0, 10.0, 8.0, 30.0)
    moves = LAWS[law].solve(10.0, limits)
    for factor in (1 - 2e-16, 1.0, 1 + 2e-16, 1.5):
        stretched = moves.stretched(moves.duration * factor)
        told = [getattr(stretched, name) for name in limits._fields]
        assert np.all(np.array(told) <= np.array(limits) * (1 + 1e-14)), f"{told}"


@LAWS_BY_NAME
@pytest.mark.parametrize("share", [0.0, 0.5, 1 - 1e-8])
def test_a_shorter_time_is_refused(law: LawName, share: float) -> None:
    """The message names the time that is needed and the one that was asked for."""
    moves = LAWS[law].solve(10.0, Limits(5.0, 10.0, 10.0, 30.0))
    with pytest.raises(ValueError, match=f"takes {moves.duration} s cannot be stretched to"):
        moves.stretched(share * float(moves.duration))


@LAWS_BY_NAME
def test_one_short_time_among_many_is_refused(law: LawName) -> None:
    """An array is refused as a whole."""
    moves = LAWS[law].solve(np.array([1.0, 10.0]), Limits(5.0, 10.0, 10.0, 30.0))
    with pytest.raises(ValueError, match="cannot be stretched"):
        moves.stretched(moves.duration * [2.0, 0.9])


@LAWS_BY_NAME
@given(limits=LIMITS, wait=st.one_of(st.just(0.0), decades(-6, 6)))
def test_no_way_takes_no_time_and_stretched_it_waits(
    law: LawName, limits: Limits, wait: float
) -> None:
    """An axis that does not move must neither slow the others down nor divide by zero."""
    moves = LAWS[law].solve(0.0, limits)
    assert_array_equal(moves.duration, 0.0)
    assert_array_equal(LAWS[law].pieces(moves), np.zeros((*moves.phases.shape, ORDER)))
    waiting = moves.stretched(wait)
    assert_array_equal(waiting.duration, wait)
    assert_array_equal(waiting.phases.sum(), wait)
    assert_array_equal(LAWS[law].pieces(waiting), np.zeros((*moves.phases.shape, ORDER)))
    peaks = [waiting.velocity, waiting.acceleration, waiting.deceleration, waiting.jerk]
    assert_array_equal(peaks, np.zeros(4))


# Arrays of moves.


@LAWS_BY_NAME
@given(
    cases=st.lists(
        st.tuples(st.one_of(st.just(0.0), DISTANCES), LIMITS, decades(0, 3)),
        min_size=1,
        max_size=8,
    )
)
def test_an_array_of_moves_is_each_of_them(
    law: LawName, cases: list[tuple[float, Limits, float]]
) -> None:
    """Element by element, whatever else stands in the array, to the last bit."""
    distances = np.array([distance for distance, _, _ in cases])
    limits = Limits(*np.array([limits for _, limits, _ in cases]).T)
    moves = LAWS[law].solve(distances, limits)
    slowing = np.array([factor for _, _, factor in cases])
    longer = moves.stretched(moves.duration * slowing)
    pieces = LAWS[law].pieces(longer)
    for index, (distance, own, factor) in enumerate(cases):
        alone = LAWS[law].solve(distance, own)
        alone_longer = alone.stretched(alone.duration * factor)
        for name in Moves.__dataclass_fields__:
            for whole, single in ((moves, alone), (longer, alone_longer)):
                assert_allclose(
                    getattr(whole, name)[index], getattr(single, name), rtol=1e-14, err_msg=name
                )
        expected = LAWS[law].pieces(alone_longer)
        assert_allclose(pieces[index], expected, rtol=1e-13, atol=1e-13 * abs(distance))


@LAWS_BY_NAME
def test_distances_and_limits_broadcast(law: LawName) -> None:
    """Many lines of a path against the limits of every axis, in one call."""
    distances = np.array([[1.0, -2.0, 0.0], [30.0, 0.5, -4.0]])
    acceleration = np.array([10.0, 20.0, 5.0])
    jerk = np.array([[30.0], [np.inf]])
    limits = Limits(5.0, acceleration, 8.0, jerk)
    moves = LAWS[law].solve(distances, limits)
    assert moves.duration.shape == (2, 3)
    assert moves.phases.shape[:-1] == (2, 3)
    assert LAWS[law].pieces(moves).shape == (*moves.phases.shape, ORDER)
    for row in range(2):
        for axis in range(3):
            own = Limits(5.0, acceleration[axis], 8.0, jerk[row, 0])
            alone = LAWS[law].solve(distances[row, axis], own)
            assert_allclose(moves.duration[row, axis], alone.duration, rtol=1e-15)
    assert LAWS[law].solve(
        np.ones((3, 1)), Limits(5.0, acceleration, 8.0, 30.0)
    ).duration.shape == (
        3,
        3,
    )
    assert LAWS[law].solve(np.zeros((0, 3)), limits._replace(jerk=30.0)).duration.shape == (0, 3)


def test_an_array_may_hold_a_hundred_thousand_moves() -> None:
    """A path of many points is planned at once; mixed limits in one array stay apart."""
    random = np.random.default_rng(1)
    count = 100_000
    distance = random.uniform(-1, 1, count) * 10 ** random.uniform(-9, 6, count)
    acceleration = 10 ** random.uniform(-3, 6, count)
    jerk = np.where(random.random(count) < 0.3, np.inf, 10 ** random.uniform(-3, 9, count))
    velocity = 10 ** random.uniform(-3, 5, count)
    moves = solve_trapezoidal(distance, Limits(velocity, acceleration, acceleration, jerk))
    cases = np.stack([np.abs(distance), velocity, acceleration, jerk], axis=-1)[::50]
    expected = [closed_form(*case) for case in cases.tolist()]
    assert_allclose(moves.duration[::50], expected, rtol=TIME_TOLERANCE)


def test_unlike_shapes_are_refused() -> None:
    """Three distances cannot meet the limits of two axes."""
    with pytest.raises(ValueError, match="shape mismatch"):
        solve_trapezoidal(np.ones(3), Limits(np.ones(2), 1.0, 1.0, 1.0))


@LAWS_BY_NAME
@pytest.mark.parametrize("distance", [np.nan, np.inf, -np.inf, [1.0, np.nan]])
def test_a_distance_that_is_none_is_refused(law: LawName, distance: float | list[float]) -> None:
    """Otherwise the whole plan would turn into nothing without a word."""
    with pytest.raises(ValueError, match="distances are finite"):
        LAWS[law].solve(np.array(distance), Limits(1.0, 1.0, 1.0, 1.0))


@LAWS_BY_NAME
@pytest.mark.parametrize("limit", [0.0, -1.0, np.nan])
@pytest.mark.parametrize("name", Limits._fields)
def test_a_limit_that_is_not_above_zero_is_refused(law: LawName, name: str, limit: float) -> None:
    """Nothing could move under it, or it is none."""
    with pytest.raises(ValueError, match="limits above 0"):
        LAWS[law].solve(1.0, Limits(1.0, 1.0, 1.0, 1.0)._replace(**{name: limit}))
