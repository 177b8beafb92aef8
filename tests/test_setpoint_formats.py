"""Tables as drives want them: digits, dialects, parts, increments, points, other formats."""

from __future__ import annotations

import csv
import errno
import json
import os
import signal
import subprocess
import sys
import tracemalloc
from dataclasses import replace
from decimal import ROUND_HALF_EVEN, Decimal, localcontext
from fractions import Fraction
from typing import TYPE_CHECKING

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy.interpolate import CubicHermiteSpline

import profileplan as pp
from profileplan import setpoints
from profileplan.setpoints import Content, Dialect, Drive, Twin, digits, drives, pace

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from profileplan.inputs.dialect import TimeUnit

MACHINE = pp.Machine(
    name="portal",
    axes=(
        pp.Axis("x", travel=(-800.0, 800.0), velocity=500.0, acceleration=3000.0, jerk=60000.0),
        pp.Axis(
            "c", kind="rotary", travel=(-720.0, 720.0), velocity=200.0, acceleration=900.0, jerk=9e3
        ),
    ),
)

CYCLE = pp.Cycle(
    steps=(
        pp.Move({"x": 300.0, "c": -45.0}),
        pp.Signal({"valve": True}, lead=0.0304),
        pp.Wait(0.1003),
        pp.Signal({"valve": False}),
        pp.Move({"x": -200.0, "c": 400.0}),
    ),
    start={"x": 0.0, "c": 0.0},
)

PLAN = pp.plan(MACHINE, CYCLE)

EVERYTHING = Content(tuple(setpoints.COLUMNS))


def nearest(value: float, decimals: int) -> str:
    """Return a number rounded half to even, by decimal arithmetic on its exact value."""
    with localcontext() as context:
        context.prec = 800
        text = f"{Decimal(value).quantize(Decimal(1).scaleb(-decimals), ROUND_HALF_EVEN):f}"
    return text.removeprefix("-") if not Decimal(text) else text


def written(values: list[float], decimals: int) -> list[str]:
    """Return numbers as the table writes them."""
    return digits.text([np.array(values)], [digits.Cell(decimals=decimals)]).decode().split()


@settings(max_examples=300, deadline=None)
@given(
    st.lists(st.floats(allow_nan=False, allow_infinity=False), min_size=1, max_size=20),
    st.integers(0, digits.MOST_DECIMALS),
)
def test_any_number_is_rounded_by_its_exact_value(values: list[float], decimals: int) -> None:
    """Whatever its size, the last decimal is the nearest one."""
    assert written(values, decimals) == [nearest(value, decimals) for value in values]


@settings(max_examples=300, deadline=None)
@given(st.integers(-(10**14), 10**14), st.integers(0, 12), st.integers(-3, 3))
def test_numbers_beside_a_middle_go_to_the_right_side(
    whole: int, decimals: int, steps: int
) -> None:
    """Scaling rounds: a number just off the middle of two decimals must not be taken for it."""
    value = float(Fraction(2 * whole + 1, 2 * 10**decimals))
    for _ in range(abs(steps)):
        value = float(np.nextafter(value, np.inf * steps))
    assert written([value], decimals) == [nearest(value, decimals)]


@pytest.mark.parametrize("decimals", [0, 1, 4, 6, 9, 15])
def test_extreme_numbers_are_written(decimals: int) -> None:
    """Zeros, the smallest and the greatest doubles, and both sides of where scaling is exact."""
    edge = 2.0**53 / 10**decimals
    values = [0.0, -0.0, 5e-324, -5e-324, 1.7976931348623157e308, -1e300, 0.5, -0.5, 9.5, 9999.5]
    values += [edge, -edge, float(np.nextafter(edge, 0)), float(np.nextafter(edge, np.inf))]
    assert written(values, decimals) == [nearest(value, decimals) for value in values]


@given(st.lists(st.integers(-(2**53), 2**53), min_size=1, max_size=20), st.integers(0, 9))
def test_whole_numbers_are_written_digit_by_digit(numbers: list[int], decimals: int) -> None:
    """Increments and ticks are never rounded."""
    cell = digits.Cell(decimals=decimals)
    cells = digits.text([np.array(numbers, dtype=np.int64)], [cell]).decode().split()
    assert [Decimal(text) for text in cells] == [Decimal(n).scaleb(-decimals) for n in numbers]


def cells_of(file: Path, delimiter: str = ",") -> list[list[str]]:
    """Return the cells of a table."""
    with file.open(encoding="utf-8", newline="") as stream:
        return list(csv.reader(stream, delimiter=delimiter))


def numbers_of(file: Path) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
    """Return the numbers below a table's header: (n, columns)."""
    return np.array([[float(cell) for cell in row] for row in cells_of(file)[1:]])


def test_the_usual_dialect_is_what_printf_writes(tmp_path: Path) -> None:
    """The form of the table is fixed: compared with Python's own formatting, byte for byte."""
    file = tmp_path / "table.csv"
    setpoints.write_table(PLAN, file, content=EVERYTHING)
    table = PLAN.setpoints()
    form = ",".join(["%.3f", *["%.9f", "%.6f", "%.6f", "%.6f"] * 2, "%d"]) + "\r\n"
    values = [table.position, table.velocity, table.acceleration, table.jerk]
    shown = np.stack([value for value in values if value is not None], axis=-1)
    shown = np.where(np.abs(shown) <= [5e-10, 5e-7, 5e-7, 5e-7], 0.0, shown)
    rows = zip(
        table.time.tolist(),
        shown.reshape(table.time.size, -1).tolist(),
        table.signals["valve"].tolist(),
        strict=True,
    )
    wanted = "".join(form % (time, *row, state) for time, row, state in rows)
    assert file.read_bytes().split(b"\r\n", 1)[1] == wanted.encode()


@pytest.mark.parametrize("delimiter", [";", "\t", "|"])
def test_a_decimal_comma_is_read_back_where_that_is_the_custom(
    tmp_path: Path, delimiter: str
) -> None:
    """A spreadsheet of a locale with decimal commas."""
    usual, local = tmp_path / "usual.csv", tmp_path / "local.csv"
    setpoints.write_table(PLAN, usual)
    dialect = Dialect(delimiter=delimiter, decimal=",", line_end="lf")
    setpoints.write_table(PLAN, local, dialect=dialect)
    raw = local.read_bytes()
    assert b"\r" not in raw
    assert b"." not in raw
    assert [[cell.replace(",", ".") for cell in row] for row in cells_of(local, delimiter)] == (
        cells_of(usual)
    )


@pytest.mark.parametrize(
    ("time", "heading", "first"),
    [("s", "t_s", "0.00025"), ("ms", "t_ms", "0.25"), ("us", "t_us", "250"), ("tick", "tick", "1")],
)
def test_time_is_written_in_the_unit_asked_for(
    tmp_path: Path, time: TimeUnit, heading: str, first: str
) -> None:
    """Exactly, as the multiple of the period that it is."""
    file = tmp_path / "table.csv"
    content = Content(("pos",), period=0.00025)
    setpoints.write_table(PLAN, file, content=content, dialect=Dialect(time=time))
    rows = cells_of(file)
    assert rows[0][0] == heading
    assert [Decimal(row[0]) for row in rows[1:]] == [
        index * Decimal(first) for index in range(len(rows) - 1)
    ]


def test_digits_headings_and_comments_are_as_told(tmp_path: Path) -> None:
    """What a drive's reader wants it gets."""
    file = tmp_path / "table.csv"
    dialect = Dialect(
        decimals={"pos": 3},
        significant={"vel": 4},
        names={"x_pos_mm": "Actual X"},
        comments=("portal", "in mm"),
        comment_mark="//",
    )
    setpoints.write_table(PLAN, file, content=Content(("pos", "vel")), dialect=dialect)
    lines = file.read_text(encoding="utf-8").splitlines()
    assert lines[:2] == ["// portal", "// in mm"]
    rows = list(csv.reader(lines[2:]))
    assert rows[0][:3] == ["t_s", "Actual X", "x_vel_mm_s"]
    table = PLAN.setpoints()
    assert table.velocity is not None
    assert [row[1] for row in rows[1:]] == [nearest(x, 3) for x in table.position[:, 0].tolist()]
    read = np.array([float(row[2]) for row in rows[1:]])
    assert_allclose(read, table.velocity[:, 0], rtol=5e-4)
    assert all(len(row[2].replace("-", "").replace(".", "")) <= 9 for row in rows[1:])


def test_a_header_can_be_left_out(tmp_path: Path) -> None:
    """Some drives take numbers only."""
    bare, usual = tmp_path / "bare.csv", tmp_path / "usual.csv"
    setpoints.write_table(PLAN, bare, dialect=Dialect(header=False))
    setpoints.write_table(PLAN, usual)
    assert bare.read_bytes() == usual.read_bytes().split(b"\r\n", 1)[1]


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Dialect(decimal=","), "they must differ"),
        (lambda: Dialect(delimiter=":"), "delimiter"),
        (lambda: Dialect(decimals={"pos": 16}), "decimals.pos"),
        (lambda: Dialect(decimals={"position": 3}), "decimals"),
        (lambda: Dialect(significant={"pos": 0}), "significant.pos"),
        (lambda: Dialect(significant={"pos": 5}, decimals={"pos": 5}), "at most one"),
        (lambda: Dialect(comments=("one\ntwo",)), r"comments\[1\]"),
        (lambda: Dialect(rows_a_file=1), "rows_a_file"),
        (lambda: Drive(0, lead=10.0), "increments"),
        (lambda: Drive(1000, lead=-1.0), "lead"),
        (lambda: Drive(1000, lead=10.0, gear=(1, 0)), r"gear\[2\]"),
        (lambda: Drive(1000, lead=10.0, direction=2), "direction"),
        (lambda: Drive(1000, lead=7.0, wrap=360.0), "a whole number is needed"),
    ],
)
def test_settings_that_cannot_be_are_refused(make: Callable[[], object], words: str) -> None:
    """At once, with the place and what is allowed."""
    with pytest.raises(pp.InputError, match=words):
        make()


def test_names_that_head_no_column_or_two_are_refused(tmp_path: Path) -> None:
    """A slip in a mapping must not pass in silence."""
    for names, words in (
        ({"x_pos": "X"}, "no such column"),
        ({"x_pos_mm": "valve"}, "heads two columns"),
    ):
        with pytest.raises(pp.InputError, match=words):
            setpoints.write_table(PLAN, tmp_path / "table.csv", dialect=Dialect(names=names))
    assert not list(tmp_path.iterdir())


def test_each_axis_can_have_a_file(tmp_path: Path) -> None:
    """With the time in each, and the signals in a file of their own."""
    whole = tmp_path / "whole.csv"
    setpoints.write_table(PLAN, whole)
    parts = setpoints.write_table(PLAN, tmp_path / "t.csv", dialect=Dialect(axis_files=True))
    assert [part.file.name for part in parts] == ["t_x.csv", "t_c.csv", "t_signals.csv"]
    joined = [
        [*x, *c[1:], *state[1:]]
        for x, c, state in zip(*(cells_of(part.file) for part in parts), strict=True)
    ]
    assert joined == cells_of(whole)


@pytest.mark.parametrize("most", [7, 100, 100_000])
def test_parts_follow_each_other_without_a_gap(tmp_path: Path, most: int) -> None:
    """All rows, none twice, none more than the drive takes; a join at rest is one."""
    whole = tmp_path / "whole.csv"
    setpoints.write_table(PLAN, whole)
    parts = setpoints.write_table(PLAN, tmp_path / "t.csv", dialect=Dialect(rows_a_file=most))
    header, *rows = cells_of(whole)
    joined: list[list[str]] = []
    for part in parts:
        own_header, *own = cells_of(part.file)
        assert own_header == header
        assert len(own) == part.rows <= most
        assert part.first == len(joined)
        joined += own
    assert joined == rows
    velocity = PLAN.setpoints().velocity
    assert velocity is not None
    for part in parts[1:]:
        assert part.starts_at_rest == (np.abs(velocity[part.first - 1]).max() <= 5e-7)
    if most == 100:
        assert {part.starts_at_rest for part in parts[1:]} == {True, False}


def test_parts_tell_how_they_join(tmp_path: Path) -> None:
    """In a comment, where the drive allows one."""
    dialect = Dialect(rows_a_file=100, tell_joins=True)
    for part in setpoints.write_table(PLAN, tmp_path / "t.csv", dialect=dialect)[1:]:
        state = "at rest" if part.starts_at_rest else "in motion"
        first = part.file.read_text(encoding="utf-8").splitlines()[0]
        assert first == f"# goes on from row {part.first}, {state}"


def test_parts_of_a_longer_table_are_not_left_in_silence(tmp_path: Path) -> None:
    """A drive that is fed all parts would play the old ones too."""
    many = Dialect(rows_a_file=100)
    setpoints.write_table(PLAN, tmp_path / "t.csv", dialect=many)
    with pytest.raises(pp.InputError, match="left of a table with more parts"):
        setpoints.write_table(PLAN, tmp_path / "t.csv", dialect=Dialect(rows_a_file=400))
    setpoints.write_table(PLAN, tmp_path / "t.csv", dialect=many)


def test_threads_and_blocks_do_not_show(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """One thread or two, small blocks or one: the same bytes, in every format."""
    writers = (setpoints.write_table, setpoints.write_json_lines, setpoints.write_npy)
    seen = set()
    for workers, rows in ((1, 10**6), (2, 13), (2, 100)):
        monkeypatch.setattr(pace, "MOST_WORKERS", workers)
        monkeypatch.setattr(pace, "ROWS_AT_A_TIME", rows)
        for writer in writers:
            writer(PLAN, tmp_path / writer.__name__, content=EVERYTHING)
        seen.add(tuple((tmp_path / writer.__name__).read_bytes() for writer in writers))
    assert len(seen) == 1


GEAR = Drive(10_000, lead=20.0, gear=(3, 1), direction=-1, offset=5.5)
"""1500 increments a mm, backward."""


def test_the_ratio_of_a_drive_is_exact() -> None:
    """Counted by hand: lines × 4 × gear / lead, with a lead that no double holds."""
    assert GEAR.ratio == 1500
    assert Drive(4 * 2500, lead=5.08, gear=(7, 3)).ratio == Fraction(10_000 * 7 * 100, 3 * 508)
    assert Drive(131_072, lead=360.0, gear=(100, 1), wrap=360.0).wrap_increments == 13_107_200


def test_increments_are_those_nearest_to_each_position(tmp_path: Path) -> None:
    """No error accumulates, and reading back gives every one exactly."""
    file = tmp_path / "table.csv"
    twin = Twin("x2", direction=1, offset=-3.25)
    drive = Drive(10_000, lead=20.0, gear=(3, 1), direction=-1, offset=5.5, also=twin)
    setpoints.write_table(PLAN, file, content=Content(("pos",), drives={"x": drive}))
    header, *rows = cells_of(file)
    assert header[:3] == ["t_s", "x_pos_inc", "x2_pos_inc"]
    exact = [Fraction(x) for x in PLAN.setpoints().position[:, 0].tolist()]
    for place, direction, offset in ((1, -1, Fraction("5.5")), (2, 1, Fraction("-3.25"))):
        counts = [int(row[place]) for row in rows]
        off = [
            abs(count - direction * (x + offset) * 1500)
            for count, x in zip(counts, exact, strict=True)
        ]
        assert max(off) <= Fraction(1, 2) + Fraction(1, 10**6)
    for place, counter in enumerate(drives.counters(MACHINE.axes[0], drive), start=1):
        back = counter.positions(np.array([int(row[place]) for row in rows]))
        assert_allclose(back, PLAN.setpoints().position[:, 0], rtol=0, atol=0.50001 / 1500)


def test_rates_are_in_increments_too(tmp_path: Path) -> None:
    """Velocity and acceleration of the plan times the ratio, with the drive's sign."""
    file = tmp_path / "table.csv"
    content = Content(("pos", "vel", "acc"), drives={"x": GEAR})
    setpoints.write_table(PLAN, file, content=content)
    assert cells_of(file)[0][1:4] == ["x_pos_inc", "x_vel_inc_s", "x_acc_inc_s2"]
    table, numbers = PLAN.setpoints(), numbers_of(file)
    assert table.velocity is not None
    assert table.acceleration is not None
    assert_allclose(numbers[:, 2], -1500 * table.velocity[:, 0], rtol=0, atol=5.1e-4)
    assert_allclose(numbers[:, 3], -1500 * table.acceleration[:, 0], rtol=0, atol=5.1e-4)


def test_a_wrapped_axis_counts_one_turn(tmp_path: Path) -> None:
    """Each count within the turn, and the same angle as the plan's."""
    file = tmp_path / "table.csv"
    drive = Drive(3600, lead=360.0, wrap=360.0)
    setpoints.write_table(PLAN, file, content=Content(("pos",), drives={"c": drive}))
    counts = numbers_of(file)[:, 2]
    assert counts.min() >= 0
    assert counts.max() < 3600
    turns = (PLAN.setpoints().position[:, 1] - counts / 10) / 360
    assert_allclose(turns, np.rint(turns), atol=0.0501 / 360)
    assert np.ptp(np.rint(turns)) >= 1


@pytest.mark.parametrize(
    ("given_drives", "words"),
    [
        ({"z": GEAR}, "axes.z: no such axis"),
        ({"x": Drive(3600, lead=360.0, wrap=360.0)}, "only on a rotary axis"),
        ({"x": Drive(2**30, lead=1.0)}, "a counter of 32 bits holds"),
        ({"x": Drive(1000, lead=1.0, also=Twin("c"))}, "is a name already"),
    ],
)
def test_drives_that_cannot_play_it_are_refused(
    tmp_path: Path, given_drives: dict[str, Drive], words: str
) -> None:
    """Before a file is touched."""
    with pytest.raises(pp.InputError, match=words):
        setpoints.write_table(PLAN, tmp_path / "t.csv", content=Content(drives=given_drives))
    assert not list(tmp_path.iterdir())


def test_noise_of_rounding_is_what_differences_of_the_file_show(tmp_path: Path) -> None:
    """The report against the written increments, differenced here; excess only by rounding."""
    content = Content(("pos",), drives={"x": GEAR})
    file = tmp_path / "table.csv"
    setpoints.write_table(PLAN, file, content=content)
    steps = np.pad(numbers_of(file)[:, 1] / 1500, 3, mode="edge")
    noise = {one.quantity: one for one in setpoints.rounding_noise(PLAN, content=content)[:4]}
    assert_allclose(noise["velocity"].derived, np.abs(np.diff(steps)).max() * 1e3, rtol=1e-9)
    slowing = max(noise["acceleration"].derived, noise["deceleration"].derived)
    assert_allclose(slowing, np.abs(np.diff(steps, 2)).max() * 1e6, rtol=1e-6)
    assert_allclose(noise["jerk"].derived, np.abs(np.diff(steps, 3)).max() * 1e9, rtol=1e-3)
    for one in noise.values():
        assert one.exact <= one.limit * (1 + 1e-6)
        assert one.derived <= one.exact + one.rounding * (1 + 1e-6)
        assert one.ok
    assert noise["jerk"].excess > 1, "1500 increments a mm are too few for a jerk at 1 ms"


def test_advice_on_noise_keeps_what_it_promises() -> None:
    """The resolution it names makes it fall silent, a period 1 % longer than named too."""
    loud = setpoints.rounding_noise(PLAN, content=Content(drives={"x": GEAR}))[3]
    assert loud.quantity == "jerk"
    assert loud.advice is not None
    words = loud.advice.split()
    finer, longer = float(words[words.index("of", 8) + 1]), float(words[words.index("period") + 2])
    fine = Drive(round(1.05 / finer), lead=1.0)
    quiet = setpoints.rounding_noise(PLAN, content=Content(drives={"x": fine}))[3]
    assert quiet.advice is None
    slow = Content(drives={"x": GEAR}, period=round(longer * 1.05, 6))
    assert setpoints.rounding_noise(PLAN, content=slow)[3].advice is None


def test_blocks_of_the_noise_report_join(monkeypatch: pytest.MonkeyPatch) -> None:
    """Differences across the joints count once, as those inside."""
    whole = setpoints.rounding_noise(PLAN)
    monkeypatch.setattr(setpoints.rounding, "ROWS_AT_A_TIME", 11)
    assert setpoints.rounding_noise(PLAN) == whole


@pytest.mark.parametrize("error", [1.0, 0.01, 0.0005])
def test_points_keep_the_error_that_they_state(error: float) -> None:
    """Against scipy's cubics between the points, at many instants."""
    points = setpoints.pvt(PLAN, error=error)
    cubic = CubicHermiteSpline(points.time, points.position.round(9), points.velocity.round(6))
    times = np.linspace(0.0, PLAN.duration, 200_001)
    off = np.abs(cubic(times) - PLAN.trajectory.at(times)).max(axis=0)
    assert (off <= points.error + 1e-9).all()
    assert (points.error <= error).all()
    assert_allclose(off, points.error, rtol=1e-4, atol=1e-9)
    assert points.ticks[0] == 0
    assert points.kept
    assert points.time[-2] < PLAN.duration <= points.time[-1]
    assert_array_equal(points.velocity[-1], 0.0)


def test_no_fewer_points_keep_the_error() -> None:
    """Against the shortest chain over all pairs of ticks, found by trying them all.

    The machine may do more than the plan does, so that the error alone counts.
    """
    cycle = pp.Cycle(steps=(pp.Move({"x": 60.0, "c": 20.0}),), start={"x": 0.0, "c": 0.0})
    plan = pp.plan(MACHINE, cycle)
    axes = tuple(replace(axis, velocity=2000.0, acceleration=20_000.0) for axis in MACHINE.axes)
    plan = replace(plan, job=replace(plan.job, machine=replace(MACHINE, axes=axes)))
    tick, error = 0.01, 0.02
    points = setpoints.pvt(plan, error=error, content=Content(period=tick))
    table = plan.setpoints(period=tick)
    assert table.velocity is not None
    position, velocity = table.position.round(9), table.velocity.round(6)
    fewest = [0] + [10**9] * (table.time.size - 1)
    for end in range(1, table.time.size):
        for start in range(end):
            pair = [start, end]
            cubic = CubicHermiteSpline(table.time[pair], position[pair], velocity[pair])
            times = np.linspace(table.time[start], table.time[end], 200)
            if np.abs(cubic(times) - plan.trajectory.at(times)).max() <= error:
                fewest[end] = min(fewest[end], fewest[start] + 1)
    assert points.ticks.size == fewest[-1] + 1


def test_points_stand_where_signals_change_and_at_most_so_far_apart() -> None:
    """An output switches with a point, and drives limit the time between two."""
    points = setpoints.pvt(PLAN, error=1.0, longest=0.05)
    assert np.diff(points.ticks).max() <= 50_000_000
    for event in PLAN.events:
        place = int(np.searchsorted(points.ticks, np.ceil(event.time / 1e-9 - 1e-6)))
        assert points.ticks[place] == np.ceil(event.time / 1e-9 - 1e-6)
        assert points.signals["valve"][place] == event.state
        assert points.signals["valve"][place - 1] != event.state


def test_an_error_that_no_points_keep_is_told() -> None:
    """With what is possible."""
    with pytest.raises(pp.InputError, match="or take a finer tick"):
        setpoints.pvt(PLAN, error=1e-7, content=Content(period=0.1))
    for error in (0.0, -1.0, float("nan")):
        with pytest.raises(pp.InputError, match="error"):
            setpoints.pvt(PLAN, error=error)
    with pytest.raises(pp.InputError, match="longest"):
        setpoints.pvt(PLAN, error=0.1, content=Content(period=0.01), longest=0.001)


def test_points_are_written_as_they_are(tmp_path: Path) -> None:
    """Position and velocity at uneven times, in any dialect."""
    file = tmp_path / "points.csv"
    points = setpoints.pvt(PLAN, error=0.001, dialect=Dialect(time="ms"))
    (part,) = setpoints.write_pvt(PLAN, points, file)
    header, *_ = cells_of(file)
    assert header == ["t_ms", "x_pos_mm", "x_vel_mm_s", "c_pos_deg", "c_vel_deg_s", "valve"]
    numbers = numbers_of(file)
    assert len(numbers) == part.rows == points.ticks.size
    assert_allclose(numbers[:, 0], points.ticks / 1e6, rtol=0, atol=1e-9)
    assert_allclose(numbers[:, 1], points.position[:, 0], rtol=0, atol=5.1e-10)
    assert_allclose(numbers[:, 4], points.velocity[:, 1], rtol=0, atol=5.1e-7)


@pytest.mark.parametrize(
    ("base", "exponent", "period"),
    [(25, -5, 0.00025), (1, -3, 0.001), (2, -3, 0.002), (125, -6, 0.000125), (10, -4, 0.001)],
)
def test_periods_from_a_base_and_an_exponent(base: int, exponent: int, period: float) -> None:
    """IEC 61800-7-201, object 60C2h: 25 and -5 are 250 µs; the others by its formula."""
    assert setpoints.period_from_base(base, exponent) == period
    back = setpoints.base_from_period(period)
    assert setpoints.period_from_base(*back) == period


@pytest.mark.parametrize(
    ("base", "exponent", "words"),
    [
        (0, -3, "base"),
        (256, -3, "base"),
        (1, -129, "exponent"),
        (1, 64, "exponent"),
        (1, 63, "period"),
        (255, -128, "period"),
    ],
)
def test_bases_and_exponents_out_of_range_are_refused(base: int, exponent: int, words: str) -> None:
    """Base 1 to 255, exponent -128 to 63, and a period that a table has."""
    with pytest.raises(pp.InputError, match=words):
        setpoints.period_from_base(base, exponent)


def test_a_period_without_a_base_is_refused() -> None:
    """333 µs need a base of 333."""
    with pytest.raises(pp.InputError, match="255 at most"):
        setpoints.base_from_period(0.000333)


def test_json_lines_hold_the_same_numbers(tmp_path: Path) -> None:
    """One object a line, as the json module reads it."""
    file, table = tmp_path / "table.jsonl", tmp_path / "table.csv"
    dialect = Dialect(decimal=",", delimiter=";", names={"x_pos_mm": 'X "left"'})
    (part,) = setpoints.write_json_lines(PLAN, file, dialect=dialect)
    setpoints.write_table(PLAN, table)
    rows = [json.loads(line) for line in file.read_text(encoding="utf-8").splitlines()]
    assert len(rows) == part.rows
    assert list(rows[0])[1] == 'X "left"'
    assert [list(row.values()) for row in rows] == numbers_of(table).tolist()


def test_numpy_loads_what_was_sampled(tmp_path: Path) -> None:
    """By name, unrounded; increments as whole numbers; names beyond ASCII too."""
    file = tmp_path / "table.npy"
    content = Content(("pos", "vel"), drives={"c": Drive(3600, lead=360.0)})
    dialect = Dialect(names={"valve": "Düse"}, time="ms")
    (part,) = setpoints.write_npy(PLAN, file, content=content, dialect=dialect)
    read, table = np.load(file), PLAN.setpoints()
    assert table.velocity is not None
    assert read.shape == (part.rows,)
    assert_array_equal(read["x_pos_mm"], table.position[:, 0])
    assert_array_equal(read["x_vel_mm_s"], table.velocity[:, 0])
    assert_array_equal(read["t_ms"], np.arange(part.rows))
    assert read["c_pos_inc"].dtype == np.int64
    assert_array_equal(read["c_pos_inc"], np.rint(table.position[:, 1] * 10))
    assert_array_equal(read["Düse"], table.signals["valve"])


def test_parquet_holds_what_was_sampled(tmp_path: Path) -> None:
    """As pyarrow reads it, where that is installed."""
    parquet = pytest.importorskip("pyarrow.parquet")
    file = tmp_path / "table.parquet"
    (part,) = setpoints.write_parquet(PLAN, file)
    read = parquet.read_table(file)
    assert read.num_rows == part.rows
    assert_array_equal(read["x_pos_mm"].to_numpy(), PLAN.setpoints().position[:, 0])


def test_parquet_without_its_library_is_told(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """With what to install."""
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(pp.InputError, match=r"install profileplan\[parquet\]"):
        setpoints.write_parquet(PLAN, tmp_path / "table.parquet")
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("library", ["polars", "pandas"])
def test_other_readers_of_csv_find_the_same_numbers(tmp_path: Path, library: str) -> None:
    """Where they are installed."""
    reader = pytest.importorskip(library)
    file = tmp_path / "table.csv"
    setpoints.write_table(PLAN, file)
    read = reader.read_csv(file)
    assert list(read.columns) == cells_of(file)[0]
    assert_allclose(read.to_numpy(), numbers_of(file), rtol=1e-15)


def test_a_full_disk_is_told_and_leaves_the_old_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Some systems find no room only when the file is brought to the disk."""
    file = tmp_path / "table.csv"
    file.write_text("old")

    def full(_: int) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "fsync", full)
    for writer in (setpoints.write_table, setpoints.write_json_lines, setpoints.write_npy):
        with pytest.raises(pp.InputError, match=r"table\.csv: cannot be written: No space left"):
            writer(PLAN, file)
        assert file.read_text() == "old"
        assert [file] == list(tmp_path.iterdir())


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="no device that is always full")  # noqa: PTH110
def test_a_device_without_room_is_told(tmp_path: Path) -> None:
    """The system's own refusal, in the middle of the rows."""
    link = tmp_path / "table.csv"
    link.symlink_to("/dev/full")
    with pytest.raises(pp.InputError, match="No space left"):
        setpoints.write_table(PLAN, link, content=Content(period=0.0001))


PROGRAM = """
import resource, sys
from pathlib import Path
import profileplan as pp
from profileplan import setpoints

axis = pp.Axis("x", travel=(-9.0, 9.0), velocity=5.0, acceleration=3.0)
cycle = pp.Cycle(steps=(pp.Move({"x": 1.0}), pp.Wait(600.0)), start={"x": 0.0})
plan = pp.plan(pp.Machine(name="portal", axes=(axis,)), cycle)

def tell(done, count):
    print(done, flush=True)
"""


def test_a_killed_process_leaves_the_old_file(tmp_path: Path) -> None:
    """Killed between two blocks, without a chance to tidy up."""
    file = tmp_path / "table.csv"
    file.write_text("old")
    run = (
        "setpoints.write_table(plan, Path(sys.argv[1]), "
        "content=setpoints.Content(period=0.0001), progress=tell)"
    )
    with subprocess.Popen(
        [sys.executable, "-c", PROGRAM + run, str(file)], stdout=subprocess.PIPE, text=True
    ) as process:
        assert process.stdout is not None
        assert int(process.stdout.readline()) > 0
        process.send_signal(signal.SIGKILL)
    assert process.returncode == -signal.SIGKILL
    assert file.read_text() == "old"


@pytest.mark.skipif(sys.platform == "win32", reason="no limit to the size of a file")
def test_a_limit_to_the_size_of_a_file_is_told(tmp_path: Path) -> None:
    """The system refuses to write more in the middle of the table."""
    file = tmp_path / "table.csv"
    file.write_text("old")
    run = """
resource.setrlimit(resource.RLIMIT_FSIZE, (1_000_000, 1_000_000))
try:
    setpoints.write_table(plan, Path(sys.argv[1]), content=setpoints.Content(period=0.0001))
except pp.InputError as error:
    print(error)
"""
    result = subprocess.run(
        [sys.executable, "-c", PROGRAM + run, str(file)],
        capture_output=True,
        text=True,
        check=True,
    )
    assert result.stdout == f"{file}: cannot be written: File too large\n"
    assert file.read_text() == "old"
    assert [file] == list(tmp_path.iterdir())


@pytest.mark.skipif(sys.platform == "win32", reason="no limit to open files")
def test_more_parts_than_a_process_may_open_files(tmp_path: Path) -> None:
    """A part is closed before the next one is begun."""
    run = """
resource.setrlimit(resource.RLIMIT_NOFILE, (40, 40))
dialect = setpoints.Dialect(rows_a_file=10)
content = setpoints.Content(period=1.0)
print(len(setpoints.write_table(plan, Path(sys.argv[1]), content=content, dialect=dialect)))
"""
    result = subprocess.run(
        [sys.executable, "-c", PROGRAM + run, str(tmp_path / "t.csv")],
        capture_output=True,
        text=True,
        check=True,
    )
    assert int(result.stdout) == len(list(tmp_path.iterdir())) > 60


def test_memory_does_not_grow_with_length(tmp_path: Path) -> None:
    """Ten times the rows: what is in use at most differs by how the threads overlap, no more."""
    cycle = pp.Cycle(steps=(pp.Move({"x": 1.0}), pp.Wait(40.0)), start={"x": 0.0, "c": 0.0})
    plan = pp.plan(MACHINE, cycle)
    peaks = []
    for period in (0.0005, 0.00005):
        setpoints.write_table(plan, tmp_path / "t.csv", content=Content(period=0.1))
        tracemalloc.start()
        try:
            setpoints.write_table(plan, tmp_path / "t.csv", content=Content(period=period))
            peaks.append(tracemalloc.get_traced_memory()[1])
        finally:
            tracemalloc.stop()
    assert peaks[1] < 2 * peaks[0]
    assert peaks[1] < (tmp_path / "t.csv").stat().st_size / 2


def test_several_files_are_put_in_place_together(tmp_path: Path) -> None:
    """A fault in the last part leaves all the old ones."""
    old = {}
    for part in setpoints.write_table(PLAN, tmp_path / "t.csv", dialect=Dialect(axis_files=True)):
        part.file.write_text("old")
        old[part.file] = "old"

    def stop(_done: int, _total: int) -> None:
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        setpoints.write_table(
            PLAN, tmp_path / "t.csv", dialect=Dialect(axis_files=True), progress=stop
        )
    assert {file: file.read_text() for file in tmp_path.iterdir()} == old


def test_the_header_is_quoted_for_its_delimiter(tmp_path: Path) -> None:
    """RFC 4180, section 2, rule 6, with another delimiter in place of the comma."""
    name = "valve; left"
    steps = (pp.Signal({name: True}), pp.Wait(0.01))
    plan = pp.plan(MACHINE, pp.Cycle(steps=steps, start={"x": 0.0, "c": 0.0}))
    file = tmp_path / "table.csv"
    setpoints.write_table(plan, file, dialect=Dialect(delimiter=";"))
    assert cells_of(file, ";")[0][-1] == name
    assert b'"valve; left"' in file.read_bytes()
