"""Tables from anywhere: what is judged, in which row it is found, and what is no table."""

from __future__ import annotations

import contextlib
import csv
import io
from dataclasses import replace
from functools import cache
from typing import TYPE_CHECKING

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

import profileplan as pp
from profileplan.checks.findings import Row
from profileplan.checks.tables import Manner, check_file, judge_file
from profileplan.inputs import Dialect, Drive
from profileplan.setpoints import Content, is_table, read_csv, write_table

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from profileplan.checks import Finding
    from profileplan.inputs import Step

MACHINE = pp.Machine(
    name="portal",
    axes=(
        pp.Axis(
            "x",
            travel=(0.0, 800.0),
            velocity=500.0,
            acceleration=3000.0,
            deceleration=2000.0,
            jerk=60000.0,
        ),
        pp.Axis("c", kind="rotary", travel=(-90.0, 90.0), velocity=200.0, acceleration=900.0),
    ),
)

RATES = ["pos", "vel", "acc", "jerk"]


def planned(machine: pp.Machine = MACHINE, *targets: tuple[float, float]) -> pp.Plan:
    """Plan moves between places of x and c, with a lamp that is lit on the way."""
    moves = [pp.Move({"x": x, "c": c}) for x, c in targets or ((700.0, -40.0), (300.0, 20.0))]
    steps: tuple[Step, ...] = (
        pp.Signal({"lamp": True}),
        *moves,
        pp.Signal({"lamp": False}),
        pp.Wait(0.05),
    )
    return pp.plan(machine, pp.Cycle(steps=steps, start={"x": 100.0, "c": 0.0}))


PLAN = planned()


@cache
def good_cells() -> tuple[tuple[str, ...], ...]:
    """Return the cells of a good table, header first."""
    table = PLAN.setpoints(period=0.001)
    rates = (table.position, table.velocity, table.acceleration, table.jerk)
    numbers = np.stack([rate for rate in rates if rate is not None], axis=2).reshape(-1, 8)
    names = [axis.column(rate) for axis in MACHINE.axes for rate in RATES]
    rows = [
        (f"{time:.3f}", *(f"{value:.9f}" for value in row), f"{state:.0f}")
        for time, row, state in zip(table.time, numbers, table.signals["lamp"], strict=True)
    ]
    return (("t_s", *names, "lamp"), *rows)


def written(folder: Path, cells: list[list[str]], *, parted: str = ",", end: str = "\r\n") -> Path:
    """Write cells as a table."""
    file = folder / "table.csv"
    file.write_bytes("".join(parted.join(row) + end for row in cells).encode())
    return file


def copied() -> list[list[str]]:
    """Return the cells of the good table, to be spoiled."""
    return [list(row) for row in good_cells()]


def broken(file: Path, machine: pp.Machine = MACHINE) -> dict[str, Finding]:
    """Return what a table does not meet, by what is required of which axis."""
    findings = check_file(file, machine)
    return {f"{f.axis or ''} {f.check}".strip(): f for f in findings if not f.ok}


GERMAN = {ord("."): ",", ord(","): ";"}

DIALECTS: dict[str, Callable[[str], str]] = {
    "as it is": lambda text: text,
    "LF": lambda text: text.replace("\r\n", "\n"),
    "CR": lambda text: text.replace("\r\n", "\r"),
    "semicolon": lambda text: text.replace(",", ";"),
    "tab": lambda text: text.replace(",", "\t"),
    "bar": lambda text: text.replace(",", "|"),
    "decimal comma": lambda text: text.translate(GERMAN),
    "decimal comma and tab": lambda text: text.translate({ord("."): ",", ord(","): "\t"}),
    "byte order mark": lambda text: "\ufeff" + text,
    "comments": lambda text: "# tile, 12\r\n\r\nmade; by; hand\r\n" + text,
    "quoted": lambda text: '"' + text[:-2].replace(",", '","').replace("\r\n", '"\r\n"') + '"\r\n',
    "quoted decimal comma": lambda text: (
        DIALECTS["quoted"](text).replace('","', "\0").replace(".", ",").replace("\0", '","')
    ),
    "blank lines": lambda text: text.replace("\r\n", "\r\n\r\n"),
    "spaces": lambda text: text.replace(",", " , "),
    "no last line end": lambda text: text[:-2],
}


@pytest.mark.parametrize("name", DIALECTS)
def test_a_table_is_read_in_any_dialect(tmp_path: Path, name: str) -> None:
    """Other programs write their own way: the numbers are the same."""
    text = "".join(",".join(row) + "\r\n" for row in good_cells())
    file = tmp_path / "table.csv"
    file.write_bytes(DIALECTS[name](text).encode())
    judged = judge_file(file, MACHINE)
    assert [f for f in judged.findings if not f.ok or not f.decided] == []
    assert judged.unjudged == ()
    assert_allclose(read_csv(file, MACHINE).position, PLAN.setpoints().position, atol=6e-10)


@pytest.mark.parametrize(
    ("column", "heading", "factor", "decimals"),
    [
        (0, "t_ms", 1e3, 0),
        (0, "t_us", 1e6, 0),
        (0, "tick", 1e3, 0),
        (1, "x_pos_m", 1e-3, 12),
        (1, "x_pos_um", 1e3, 6),
        (2, "x_vel_m_s", 1e-3, 12),
        (3, "x_acc_m_s2", 1e-3, 12),
        (5, "c_pos_rad", np.pi / 180, 12),
        (6, "c_vel_rad_s", np.pi / 180, 12),
    ],
)
def test_units_are_told_by_the_headings(
    tmp_path: Path, column: int, heading: str, factor: float, decimals: int
) -> None:
    """A table in metres is the same table."""
    cells = copied()
    cells[0][column] = heading
    for row in cells[1:]:
        row[column] = f"{float(row[column]) * factor:.{decimals}f}"
    file = written(tmp_path, cells)
    assert broken(file) == {}
    read = read_csv(file, MACHINE)
    assert_allclose(read.position, PLAN.setpoints().position, atol=1e-9)
    assert_allclose(read.time, PLAN.setpoints().time, atol=1e-12)


@settings(max_examples=25, deadline=None, suppress_health_check=list(HealthCheck))
@given(
    targets=st.lists(
        st.tuples(st.floats(0.0, 800.0), st.floats(-90.0, 90.0)), min_size=1, max_size=3
    ),
    period=st.sampled_from([0.00005, 0.00025, 0.001, 0.004, 0.0333, 0.25]),
    decimals=st.sampled_from([None, 3, 6]),
    jerk=st.sampled_from([None, 20000.0]),
)
def test_no_table_of_a_plan_has_an_offence(
    tmp_path: Path,
    targets: list[tuple[float, float]],
    period: float,
    decimals: int | None,
    jerk: float | None,
) -> None:
    """At any period and with any decimals: rounding and sampling are no fault of a motion."""
    machine = replace(MACHINE, axes=(MACHINE.axes[0], replace(MACHINE.axes[1], jerk=jerk)))
    plan = planned(machine, *targets)
    file = tmp_path / "table.csv"
    table = plan.setpoints(period=period)
    if table.time.size > 20_000:
        period = 0.001
    given_decimals = dict.fromkeys(RATES, decimals) if decimals is not None else {}
    write_table(
        plan, file, content=Content(RATES, period=period), dialect=Dialect(decimals=given_decimals)
    )
    assert broken(file, machine) == {}


@settings(max_examples=40, deadline=None, suppress_health_check=list(HealthCheck))
@given(
    row=st.integers(5, len(good_cells()) - 6),
    by=st.sampled_from([-400.0, -1.0, 0.5, 900.0]),
)
def test_a_spoiled_position_is_found_in_its_row(tmp_path: Path, row: int, by: float) -> None:
    """The first row of every kind of offence is that row, or the next at most.

    A step that is just allowed shows on the way back; agreement is judged in the row before.
    """
    cells = copied()
    cells[row][1] = f"{float(cells[row][1]) + by:.9f}"
    found = broken(written(tmp_path, cells))
    line = row + 1
    for check in ("x step", "x velocity", "x jerk", "x velocity column, agreement"):
        first = found[check].first
        assert first is not None
        assert first.line in (line - 1, line, line + 1)
        assert_allclose(first.time, (first.line - 2) * 0.001, atol=1e-12)
    position = float(cells[row][1])
    assert ("x travel, high end" in found) == (position > 800)
    assert ("x travel, low end" in found) == (position < 0)
    assert not [name for name in found if name.startswith("c ")]


@pytest.mark.parametrize(
    ("column", "value", "check"),
    [
        (2, "501", "x velocity column"),
        (2, "-3", "x velocity column, agreement"),
        (3, "3001", "x acceleration column"),
        (3, "-2001", "x deceleration column"),
        (3, "77", "x acceleration column, agreement"),
        (4, "60001", "x jerk column"),
        (6, "-200.1", "c velocity column"),
        (9, "2", "rows not 0 or 1"),
        (9, "nan", "rows not 0 or 1"),
        (0, "0.2005", "even period"),
        (0, "0.199", "rising time"),
        (0, "0.150", "rising time"),
    ],
)
def test_a_spoiled_cell_is_found_in_its_row(
    tmp_path: Path, column: int, value: str, check: str
) -> None:
    """Columns of rates, signals and times are judged by themselves."""
    cells = copied()
    # A row in which x speeds up, at half of its velocity.
    row = next(n for n, one in enumerate(cells[1:], 1) if float(one[2]) > 250)
    if column == 0:
        row = 201
    cells[row][column] = value
    first = broken(written(tmp_path, cells))[check].first
    time = float(cells[row][0])
    assert first == Row(row + 1, time)


@pytest.mark.parametrize(
    ("column", "by", "check"),
    [
        (2, 0.01, "x velocity column, agreement"),
        (3, 30.0, "x acceleration column, agreement"),
    ],
)
def test_agreement_is_judged_by_the_jerk_limit(
    tmp_path: Path, column: int, by: float, check: str
) -> None:
    """At 60,000 mm/s³ and 1 ms: j h² / 6 for a velocity, j h / 2 for an acceleration."""
    rest = len(good_cells()) - 20
    for share in (0.99, -0.99, 1.01, -1.01):
        cells = copied()
        cells[rest][column] = f"{share * by:.9f}"
        first = broken(written(tmp_path, cells)).get(check)
        assert (first is not None) == (abs(share) > 1)
        if first is not None:
            assert first.first == Row(rest + 1, float(cells[rest][0]))


def test_a_table_that_begins_or_ends_in_motion_is_found(tmp_path: Path) -> None:
    """A drive that is handed a moving axis steps at once."""
    cells = copied()
    late = written(tmp_path, [cells[0], *cells[100:]])
    assert {"x rest at start", "x velocity column, start"} <= broken(late).keys()
    assert "x rest at end" not in broken(late)
    cut = written(tmp_path, cells[:150])
    assert {"x rest at end", "x velocity column, end"} <= broken(cut).keys()
    assert "x rest at start" not in broken(cut)


def test_a_missing_row_is_a_leap_and_an_uneven_period(tmp_path: Path) -> None:
    """A drive plays rows by its own clock."""
    cells = copied()
    moving = next(n for n, one in enumerate(cells[1:], 1) if float(one[2]) > 400)
    del cells[moving]
    found = broken(written(tmp_path, cells))
    assert {"even period", "x velocity"} <= found.keys()
    assert found["even period"].first == Row(moving + 1, float(cells[moving][0]))


def test_a_column_that_is_no_signal_is_told_and_not_judged(tmp_path: Path) -> None:
    """What is not known is neither good nor bad."""
    cells = copied()
    for number, row in enumerate(cells):
        row.extend(["tile", f"{number / 7:.3f}"] if number else ["note", "flow"])
    judged = judge_file(written(tmp_path, cells), MACHINE)
    assert judged.unjudged == ("note", "flow")
    assert all(f.ok for f in judged.findings)


def test_delimiters_behind_the_last_cell_are_columns_without_a_name(tmp_path: Path) -> None:
    """Spreadsheets write them; where they stand is told, and two of them are no fault."""
    cells = copied()
    count = len(cells[0])
    for number, row in enumerate(cells):
        row.extend(["", ""] if number % 2 else ["", "0"])
    cells[0][count:] = ["", ""]
    judged = judge_file(written(tmp_path, cells), MACHINE)
    assert judged.unjudged == tuple(f"column {count + n} without a name" for n in (1, 2))
    assert all(f.ok for f in judged.findings)


def test_significant_digits_of_the_machine_file_are_no_offence(tmp_path: Path) -> None:
    """Large numbers have fewer decimals than small ones: the coarsest step counts for all."""
    dialect = Dialect(significant=dict.fromkeys(RATES, 5))
    machine = replace(MACHINE, setpoints=pp.SetpointSettings(dialect=dialect))
    file = tmp_path / "table.csv"
    write_table(planned(), file, content=Content(RATES), dialect=dialect)
    assert broken(file, machine) == {}
    assert "c acceleration" in broken(file)
    lines = file.read_text("utf-8").splitlines()
    row = lines[100].split(",")
    row[1] = f"{float(row[1]) + 0.1:.5g}"
    lines[100] = ",".join(row)
    file.write_text("\n".join(lines) + "\n", "utf-8")
    first = broken(file, machine)["x acceleration"].first
    assert first is not None
    assert first.line == 101


def test_stamps_that_are_rounded_are_no_uneven_period(tmp_path: Path) -> None:
    """A third of a millisecond in microseconds is 333, 333, 334."""
    machine = replace(MACHINE, setpoints=pp.SetpointSettings(0.000333))
    table = PLAN.setpoints(period=0.000333)
    rows = [
        [f"{time:.5f}", f"{x:.9f}", f"{c:.9f}"]
        for time, (x, c) in zip(table.time, table.position, strict=True)
    ]
    file = written(tmp_path, [["t_s", "x_pos_mm", "c_pos_deg"], *rows])
    assert broken(file, machine) == {}
    rows[500][0] = f"{float(rows[500][0]) + 0.00005:.5f}"
    file = written(tmp_path, [["t_s", "x_pos_mm", "c_pos_deg"], *rows])
    first = broken(file, machine)["even period"].first
    assert first is not None
    assert first.line == 502


def test_uneven_points_with_velocities_are_judged_by_their_times(tmp_path: Path) -> None:
    """Divided differences are means of derivatives whatever the times."""
    cells = copied()
    random = np.random.default_rng(3)
    kept = np.flatnonzero(random.random(len(cells) - 1) < 0.2) + 1
    chosen = [cells[0], *(cells[row] for row in sorted({1, 2, *kept, len(cells) - 1}))]
    assert broken(written(tmp_path, chosen)) == {}
    chosen[20][1] = f"{float(chosen[20][1]) + 5:.9f}"
    assert broken(written(tmp_path, chosen)).keys() >= {"x velocity column, agreement", "x jerk"}


def test_a_repeated_stamp_among_uneven_points_is_found_alone(tmp_path: Path) -> None:
    """Nothing can be told of what happens in no time, and the rest is judged."""
    cells = copied()
    rows = [1, 2, *(row for row in range(9, len(cells) - 1) if row % 7 < 2), len(cells) - 1]
    file = written(tmp_path, [cells[row] for row in (0, *rows[:50], *rows[49:])])
    findings = check_file(file, MACHINE)
    assert [f.check for f in findings if not f.ok] == ["rising time"]
    assert findings[-2].check == "rising time"
    assert findings[-2].value == 0
    assert findings[-2].first == Row(52, float(cells[rows[49]][0]))
    assert np.isfinite([(f.value, f.limit) for f in findings]).all()


CELL = pp.Machine(
    name="portal",
    axes=(
        pp.Axis("x", travel=(0.0, 800.0), velocity=500.0, acceleration=3000.0),
        pp.Axis("y", travel=(0.0, 400.0), velocity=500.0, acceleration=3000.0),
        pp.Axis("z", travel=(0.0, 200.0), velocity=500.0, acceleration=3000.0),
    ),
    up="+z",
    tool=pp.Tool(radius=10.0, margin=5.0),
    keepouts=(pp.Keepout("post", circle=pp.Circle(400.0, 200.0, 30.0), top=100.0),),
)


@pytest.mark.parametrize(
    ("y", "z", "clear"),
    [(200.0, 106.0, 6.0), (200.0, 104.0, 4.0), (245.5, 50.0, 5.5), (244.0, 50.0, 4.0)],
)
def test_clearance_is_the_distance_of_tool_and_keep_out(
    tmp_path: Path, y: float, z: float, clear: float
) -> None:
    """Over the post by z less its top; beside it by y less both radii."""
    steps = (pp.Line({"x": 700.0}, speed=300.0),)
    machine = replace(CELL, keepouts=())
    plan = pp.plan(machine, pp.Cycle(steps=steps, start={"x": 100.0, "y": y, "z": z}))
    file = tmp_path / "table.csv"
    pp.write_csv(plan, file)
    found = next(f for f in check_file(file, CELL) if f.check == "clearance")
    assert_allclose(found.value, clear, atol=0.002)
    assert found.what == "tool to post"
    assert found.ok == (clear >= 5)
    if not found.ok:
        position = plan.setpoints().position
        gap = np.hypot(position[:, 0] - 400, y - 200) - 40
        near = np.hypot(np.maximum(gap, 0), max(z - 100, 0)) < 5 - 1e-6
        assert found.first is not None
        assert abs(found.first.line - 2 - int(near.argmax())) <= 1


@pytest.mark.parametrize(
    ("y", "clear", "found_clear"),
    [(200.0, -3.0, False), (203.7, 0.7, False), (203.98, 0.98, False), (203.995, 0.995, True)],
)
def test_a_post_between_two_rows_is_found(
    tmp_path: Path, y: float, clear: float, *, found_clear: bool
) -> None:
    """Rows 100 mm apart jump over it, the machine does not.

    At 1 mm/s² on three axes it may bend off by 0.0135 mm in 0.25 s, which is allowed for.
    """
    rows = [[f"{n * 0.25:.2f}", str(x), f"{y:.9f}", "50"] for n, x in enumerate((250, 350, 450))]
    head = ["t_s", "x_pos_mm", "y_pos_mm", "z_pos_mm"]
    slim = replace(
        CELL,
        axes=tuple(replace(axis, acceleration=1.0) for axis in CELL.axes),
        tool=pp.Tool(margin=1.0),
        keepouts=(pp.Keepout("post", circle=pp.Circle(400.0, 200.0, 3.0)),),
    )
    findings = check_file(written(tmp_path, [head, *rows]), slim)
    found = next(f for f in findings if f.check == "clearance")
    assert found.ok == found_clear
    if not found_clear:
        assert found.first == Row(4, 0.5)
        assert_allclose(found.value, clear, atol=1e-9)


@settings(max_examples=20, deadline=None, suppress_health_check=list(HealthCheck))
@given(
    block=st.integers(200, 9000) | st.just(1),
    spoiled=st.lists(
        st.tuples(st.integers(1, 300), st.integers(0, 9), st.floats(-900, 900)), max_size=4
    ),
)
def test_findings_do_not_depend_on_the_size_of_blocks(
    tmp_path: Path, block: int, spoiled: list[tuple[int, int, float]]
) -> None:
    """A table larger than the memory is judged as if it were in memory."""
    cells = copied()[:301]
    for row, column, value in spoiled:
        cells[row][column] = f"{value:.6f}"
    file = written(tmp_path, cells)
    try:
        whole = judge_file(file, MACHINE)
    except pp.InputError:
        with pytest.raises(pp.InputError):
            judge_file(file, MACHINE, block=block)
        return
    assert judge_file(file, MACHINE, block=block) == whole


def test_blocks_judge_uneven_points_alike(tmp_path: Path) -> None:
    """The times between the last rows of a block count in the next."""
    cells = copied()
    random = np.random.default_rng(5)
    long = [*cells[:-1], *(list(cells[-1]) for _ in range(3000))]
    time = np.cumsum(random.choice([0.001, 0.0017, 0.0031], len(long) - 1))
    for at, row in zip(time, long[1:], strict=True):
        row[0] = f"{at:.4f}"
    for number in range(1500, len(long), 100):
        long[number][1] = f"{float(long[number][1]) + random.random():.6f}"
    file = written(tmp_path, long)
    whole = judge_file(file, MACHINE)
    assert sum(not f.ok for f in whole.findings) > 3
    for block in (500, 7001, 40_000):
        assert judge_file(file, MACHINE, block=block) == whole


def test_blocks_judge_the_clearance_alike(tmp_path: Path) -> None:
    """The line between the last row of a block and the first of the next counts."""
    steps = (pp.Line({"x": 700.0}, speed=300.0),)
    machine = replace(CELL, keepouts=())
    plan = pp.plan(machine, pp.Cycle(steps=steps, start={"x": 100.0, "y": 220.0, "z": 50.0}))
    file = tmp_path / "table.csv"
    pp.write_csv(plan, file)
    whole = next(f for f in check_file(file, CELL) if f.check == "clearance")
    parts = judge_file(file, CELL, block=900).findings
    part = next(f for f in parts if f.check == "clearance")
    assert part.first == whole.first
    assert_allclose(part.value, whole.value, rtol=1e-12)


def test_progress_is_told_in_bytes(tmp_path: Path) -> None:
    """A long table takes a while."""
    file = written(tmp_path, copied())
    seen: list[tuple[int, int]] = []
    check_file(file, MACHINE, progress=lambda *done: seen.append(done))
    size = file.stat().st_size
    assert seen[-1] == (size, size)


def test_a_table_without_a_header_is_read_by_given_headings(tmp_path: Path) -> None:
    """Drives take tables of bare numbers."""
    cells = copied()
    file = written(tmp_path, cells[1:])
    dialect = Dialect(header=False)
    judged = judge_file(file, MACHINE, manner=Manner(dialect, headings=cells[0]))
    assert all(f.ok for f in judged.findings)
    with pytest.raises(pp.InputError, match="line 1: 10 columns and no header; expected 7: t_s, "):
        judge_file(file, MACHINE, manner=Manner(dialect))


def test_headings_of_a_dialect_are_known(tmp_path: Path) -> None:
    """A table is read as it was written."""
    cells = copied()
    cells[0][1] = "Axis1"
    file = written(tmp_path, cells, parted=";")
    dialect = Dialect(delimiter=";", names={"x_pos_mm": "Axis1"})
    assert all(f.ok for f in check_file(file, MACHINE, dialect=dialect))


def test_increments_are_positions_of_the_axis(tmp_path: Path) -> None:
    """A drive that counts downward from an offset: the same motion, rounded to its increments."""
    drive = Drive(10_000_000, lead=20.0, direction=-1, offset=55.5)
    machine = replace(MACHINE, axes=(replace(MACHINE.axes[0], drive=drive), MACHINE.axes[1]))
    cells = copied()
    for column, rate in enumerate(("pos_inc", "vel_inc_s", "acc_inc_s2", "jerk_inc_s3"), start=1):
        cells[0][column] = f"x_{rate}"
        for row in cells[1:]:
            value = float(row[column]) + (55.5 if column == 1 else 0.0)
            row[column] = f"{-500_000 * value:.{0 if column == 1 else 3}f}"
    file = written(tmp_path, cells)
    assert broken(file, machine) == {}
    read = read_csv(file, machine)
    assert_allclose(read.position, PLAN.setpoints().position, atol=1.1e-6)
    cells[300][1] = str(int(cells[300][1]) + 500_000)
    first = broken(written(tmp_path, cells), machine)["x velocity"].first
    assert first is not None
    assert first.line in (301, 302)


def test_headings_renamed_in_the_machine_file_are_known(tmp_path: Path) -> None:
    """What export writes, check reads."""
    dialect = Dialect(names={"t_s": "Zeit", "x_pos_mm": "Achse 1"})
    machine = replace(MACHINE, setpoints=pp.SetpointSettings(dialect=dialect))
    cells = copied()
    cells[0][:2] = ["Zeit", "Achse 1"]
    file = written(tmp_path, cells, parted=";")
    assert broken(file, machine) == {}
    assert is_table(file, dialect)
    assert not is_table(file)


HEAD = "t_s,x_pos_mm,c_pos_deg\n"


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (b"", "is empty"),
        (b"\n\n\n", "is empty"),
        (HEAD.encode(), "line 1: has no rows below its header"),
        (HEAD.encode() + b"0,1,2\n0.001,,2\n", 'line 3: column "x_pos_mm" is empty'),
        (HEAD.encode() + b"0,inf,-nan\n", 'column "c_pos_deg" is not a finite number'),
        (HEAD.encode() + b"0,1e999,0\n", 'line 2: column "x_pos_mm" is not a finite number'),
        (HEAD.encode() + b"0,1_0,0\n", '"1_0" is not a number in column "x_pos_mm"'),
        (HEAD.encode() + b"0,0x1,0\n", '"0x1" is not a number'),
        (HEAD.encode() + b"0,1,2,3\n1,2\n", "line 3: 2 cells; the header has 3"),
        (HEAD.encode() + b"0,1,2,3\n1,2\n", "line 2: 4 cells; the header has 3"),
        (HEAD.encode() + b"0,1e8,0\n", "x_pos_mm 1e+08; allowed: -1e+07 to 1e+07 mm"),
        (HEAD.encode() + b"0,1,1\n0,1,1\n0,1,1\n", "t_s: rows 0 s apart"),
        (b"t_s,x_pos_mm,x_pos_m,c_pos_deg\n0,0,0,0\n", "hold the same"),
        (b"t_s,t_ms,x_pos_mm,c_pos_deg\n0,0,0,0\n", "both hold the time"),
        (b"t_s,x_pos_mn,c_pos_deg\n0,0,0\n", 'did you mean "x_pos_mn"?'),
        ("t_s,x_pos_mm".encode("utf-16"), "is UTF-16"),
        (b"t_s," + b"a," * 100_000, "is longer than"),
        (b"t_s," + b",".join(b"a%d" % n for n in range(5000)), "has 5,001 columns; at most"),
        (HEAD.encode() + b"1" * 1_000_000, "line 2: is longer than"),
        (HEAD.encode() + b"0,0,0\n" + b"1" * 100_000 + b"\n0,0,0\n", "line 3: is longer than"),
        (bytes(range(256)) * 100, "is missing"),
        (HEAD.encode() + bytes(range(14, 34)) + b",\n", "line 2: 2 cells; the header has 3"),
        (HEAD.encode() + b"x,y\n" * 5000, "given up at line"),
    ],
)
def test_what_is_no_table_is_refused_with_its_place(
    tmp_path: Path, data: bytes, words: str
) -> None:
    """All faults at once, with file, line and column, and never a traceback."""
    file = tmp_path / "table.csv"
    file.write_bytes(data)
    with pytest.raises(pp.InputError) as refused:
        check_file(file, MACHINE)
    assert words in str(refused.value)
    assert "table.csv" in str(refused.value)
    assert len(str(refused.value)) < 10_000


@settings(max_examples=300, deadline=None, suppress_health_check=list(HealthCheck))
@given(data=st.data())
def test_no_damage_brings_a_traceback(tmp_path: Path, data: st.DataObject) -> None:
    """Cut anywhere, bytes flipped, columns swapped or doubled: findings or faults."""
    cells = [list(row) for row in good_cells()[:60]]
    for _ in range(data.draw(st.integers(0, 2))):
        one, other = data.draw(st.tuples(st.integers(0, 9), st.integers(0, 9)))
        for row in cells:
            row[one], row[other] = (row[other], row[one]) if one < other else (row[one],) * 2
    text = io.StringIO()
    csv.writer(text).writerows(cells)
    raw = bytearray(text.getvalue().encode())
    for place, byte in data.draw(
        st.lists(st.tuples(st.integers(0, len(raw) - 1), st.integers(0, 255)), max_size=6)
    ):
        raw[place] = byte
    cut = data.draw(st.integers(0, len(raw)) | st.just(len(raw)))
    file = tmp_path / "table.csv"
    file.write_bytes(bytes(raw[:cut]))
    try:
        findings = check_file(file, MACHINE)
    except pp.InputError:
        return
    assert all(np.isfinite([f.value, f.margin, f.rounding]).all() for f in findings)


@settings(max_examples=200, deadline=None, suppress_health_check=list(HealthCheck))
@given(body=st.binary(max_size=300), headed=st.booleans())
def test_no_bytes_bring_a_traceback(tmp_path: Path, body: bytes, *, headed: bool) -> None:
    """Whatever the file."""
    file = tmp_path / "table.csv"
    file.write_bytes((HEAD.encode() if headed else b"") + body)
    with contextlib.suppress(pp.InputError):
        check_file(file, MACHINE)
