"""Setpoint tables: rows, columns, signals, rounding, round trip, and files written whole or not."""

from __future__ import annotations

import csv
import math
import os
from typing import TYPE_CHECKING

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

import profileplan as pp
from profileplan import setpoints
from profileplan.setpoints import pace

if TYPE_CHECKING:
    from pathlib import Path

MACHINE = pp.Machine(
    name="portal",
    axes=(
        pp.Axis("x", travel=(-800.0, 800.0), velocity=500.0, acceleration=3000.0, jerk=60000.0),
        pp.Axis("c", kind="rotary", travel=(-90.0, 90.0), velocity=200.0, acceleration=900.0),
    ),
)

CYCLE = pp.Cycle(
    steps=(
        pp.Move({"x": 300.0, "c": -45.0}),
        pp.Signal({"valve": True, "lamp": True}, lead=0.0304),
        pp.Wait(0.1003),
        pp.Signal({"valve": False}),
        pp.Move({"x": -200.0, "c": 30.0}),
    ),
    start={"x": 0.0, "c": 0.0},
)

PLAN = pp.plan(MACHINE, CYCLE)


def rows_of(file: Path) -> list[list[str]]:
    """Return the cells of a CSV file."""
    with file.open(encoding="utf-8", newline="") as stream:
        return list(csv.reader(stream))


def test_rows_stand_at_ticks_and_end_at_rest_on_target() -> None:
    """The last row is the first tick at or after the end."""
    table = PLAN.setpoints(period=0.004)
    assert_allclose(table.time, np.arange(table.time.size) * 0.004, rtol=1e-15)
    assert table.time[-2] < PLAN.duration <= table.time[-1]
    assert table.velocity is not None
    assert table.acceleration is not None
    assert_allclose(table.position[-1], [-200.0, 30.0], atol=1e-12)
    assert_array_equal(table.velocity[-1], 0.0)
    assert_array_equal(table.acceleration[-1], 0.0)


def test_the_trajectory_is_sampled_as_it_is() -> None:
    """No step is pulled to a tick: rows are values of the exact motion."""
    table = PLAN.setpoints(period=0.001)
    inner = table.time < PLAN.duration
    for values, order in ((table.position, 0), (table.velocity, 1), (table.acceleration, 2)):
        assert values is not None
        assert_allclose(values[inner], PLAN.trajectory.at(table.time[inner], order), atol=1e-9)


def test_an_end_on_a_tick_adds_no_row() -> None:
    """Rounding of the duration must not append a period."""
    cycle = pp.Cycle(steps=(pp.Wait(0.1), pp.Wait(0.2)), start={"x": 0.0, "c": 0.0})
    plan = pp.plan(MACHINE, cycle)
    assert plan.duration != 0.3, "0.1 + 0.2 is not 0.3 in binary"
    assert plan.setpoints(period=0.001).time.size == 301


def test_signals_change_in_the_first_row_at_or_after_their_time() -> None:
    """A drive's output switches with a row, never before its time."""
    table = PLAN.setpoints(period=0.001)
    arrival = PLAN.steps[0].end
    for name, time, before in (
        ("valve", arrival - 0.0304, 0.0),
        ("lamp", arrival - 0.0304, 0.0),
        ("valve", PLAN.steps[3].start, 1.0),
    ):
        row = math.ceil(time / 0.001 - 1e-6)
        assert [before, 1 - before] == table.signals[name][row - 1 : row + 1].tolist()


def test_the_header_is_as_the_readme_says(tmp_path: Path) -> None:
    """Users' scripts address columns by these names."""
    file = tmp_path / "table.csv"
    pp.write_csv(PLAN, file, columns=["pos", "vel", "acc", "jerk"])
    assert rows_of(file)[0] == [
        "t_s",
        *("x_pos_mm", "x_vel_mm_s", "x_acc_mm_s2", "x_jerk_mm_s3"),
        *("c_pos_deg", "c_vel_deg_s", "c_acc_deg_s2", "c_jerk_deg_s3"),
        *("valve", "lamp"),
    ]


def test_the_file_is_csv_as_in_rfc_4180(tmp_path: Path) -> None:
    """CR LF after every record, the last one too; UTF-8 without a mark; equal numbers of cells.

    Source: RFC 4180 (2005), section 2.
    """
    file = tmp_path / "table.csv"
    pp.write_csv(PLAN, file)
    raw = file.read_bytes()
    assert raw.endswith(b"\r\n")
    assert raw.count(b"\n") == raw.count(b"\r\n")
    assert not raw.startswith(b"\xef\xbb\xbf")
    assert len({len(row) for row in rows_of(file)}) == 1


@pytest.mark.parametrize("period", [0.00005, 0.000125, 0.001, 0.004, 0.0333, 1.0])
def test_times_are_exact_decimals(tmp_path: Path, period: float) -> None:
    """A tick is written as the whole multiple of the period that it is."""
    file = tmp_path / "table.csv"
    count = pp.write_csv(PLAN, file, period=period, columns=["pos"])
    times = [row[0] for row in rows_of(file)[1:]]
    assert count == len(times)
    nanoseconds = [round(float(time) * 1e9) for time in times]
    assert nanoseconds == [index * round(period * 1e9) for index in range(count)]


def test_reading_back_gives_every_value_within_half_of_the_last_decimal(tmp_path: Path) -> None:
    """Rounding is the only loss of a table."""
    file = tmp_path / "table.csv"
    pp.write_csv(PLAN, file, columns=list(setpoints.COLUMNS))
    read, exact = pp.read_csv(file, MACHINE), PLAN.setpoints()
    assert read.axes == ("x", "c")
    for name, values, wanted in (
        ("pos", read.position, exact.position),
        ("vel", read.velocity, exact.velocity),
        ("acc", read.acceleration, exact.acceleration),
        ("jerk", read.jerk, exact.jerk),
    ):
        assert values is not None
        assert wanted is not None
        half = 0.5 * 10.0 ** -setpoints.COLUMNS[name].decimals
        assert_allclose(values, wanted, rtol=0, atol=half * (1 + 1e-6))
    assert read.signals.keys() == exact.signals.keys()
    for name, states in read.signals.items():
        assert_array_equal(states, exact.signals[name])


def test_no_negative_zero_is_written(tmp_path: Path) -> None:
    """Some drives refuse "-0.000"."""
    file = tmp_path / "table.csv"
    pp.write_csv(PLAN, file, columns=list(setpoints.COLUMNS))
    cells = [cell for row in rows_of(file)[1:] for cell in row]
    assert not [cell for cell in cells if cell.startswith("-") and float(cell) == 0]


def test_rows_written_in_parts_are_those_of_one_table(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A long table is written in parts; the joints must not show."""
    whole, parts = tmp_path / "whole.csv", tmp_path / "parts.csv"
    pp.write_csv(PLAN, whole)
    monkeypatch.setattr(pace, "ROWS_AT_A_TIME", 7)
    seen: list[tuple[int, int]] = []
    count = pp.write_csv(PLAN, parts, progress=lambda *done: seen.append(done))
    assert whole.read_bytes() == parts.read_bytes()
    assert seen[-1] == (count, count)


def test_identical_input_gives_identical_bytes(tmp_path: Path) -> None:
    """A table can be compared with an archived one."""
    for name in ("one.csv", "two.csv"):
        pp.write_csv(pp.plan(MACHINE, CYCLE), tmp_path / name)
    assert (tmp_path / "one.csv").read_bytes() == (tmp_path / "two.csv").read_bytes()


@pytest.mark.parametrize("period", [0.0, -0.001, 1e-6, 2.0, math.nan, math.inf, 0.0010000005])
def test_periods_that_no_drive_has_are_refused(tmp_path: Path, period: float) -> None:
    """The same rule as in a machine file."""
    file = tmp_path / "table.csv"
    with pytest.raises(pp.InputError, match="period"):
        pp.write_csv(PLAN, file, period=period)
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    ("columns", "words"),
    [
        (["pos", "speed"], '"speed" is not written; pos, vel, acc, jerk, force, torque are'),
        (["force"], '"force"; no axis has mechanics'),
        (["pos", "pos"], '"pos" is named twice'),
        ([], "names no column"),
    ],
)
def test_unknown_columns_are_refused(tmp_path: Path, columns: list[str], words: str) -> None:
    """What is not known is not written as something else."""
    with pytest.raises(pp.InputError, match=words):
        pp.write_csv(PLAN, tmp_path / "table.csv", columns=columns)


def test_a_table_that_cannot_be_completed_leaves_the_old_one(tmp_path: Path) -> None:
    """A drive must never find half a table."""
    file = tmp_path / "table.csv"
    file.write_text("old")

    def stop(_done: int, _total: int) -> None:
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        pp.write_csv(PLAN, file, progress=stop)
    assert file.read_text() == "old"
    assert [file] == list(tmp_path.iterdir())


def test_a_folder_that_is_not_there_is_told(tmp_path: Path) -> None:
    """One message with the file and the reason."""
    with pytest.raises(pp.InputError, match=r"table\.csv: cannot be written"):
        pp.write_csv(PLAN, tmp_path / "missing" / "table.csv")


GOOD = "t_s,x_pos_mm,c_pos_deg\r\n0,0,0\r\n0.001,0,0\r\n"


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "is empty"),
        ("t_s,x_pos_mm,c_pos_deg\n", "no rows"),
        ("t_s,x_pos_mm\n0,0\n", 'column "c_pos_deg" is missing'),
        ("t_s,x_pos_mm,c_pos_deg,t_s\n0,0,0,0\n", 'column "t_s" stands twice'),
        (GOOD + "0.002,0\n", "line 4: 2 cells; the header has 3"),
        (GOOD + "0.002,zero,0\n", 'line 4: "zero" is not a number'),
        (GOOD + "0.002,nan,0\n", 'line 4: column "x_pos_mm" is not a finite number'),
        (GOOD + "0.002,1e306,0\n", "line 4: x_pos_mm 1e+306; allowed: -1e+07 to 1e+07 mm"),
        (GOOD + "0.001,0,0\n", "line 4: t_s does not rise"),
        ("t_s,x_pos_mm,c_pos_deg\n0.002,0,0\n0.001,9,0\n", "line 3: t_s does not rise"),
        ("t_s,x_pos_mm,c_pos_deg\n0,0,0\n5e-324,9,0\n", "rows 0 s apart"),
        (GOOD + "x,0,0\n" * 50, "and 30 more"),
        ('t_s,"x_pos_mm,c_pos_deg\n0,0,0\n', "is no valid CSV"),
    ],
)
def test_faulty_tables_are_refused_with_line_and_reason(
    tmp_path: Path, text: str, words: str
) -> None:
    """Never a traceback, whatever the file."""
    file = tmp_path / "table.csv"
    file.write_text(text)
    with pytest.raises(pp.InputError) as refused:
        pp.read_csv(file, MACHINE)
    assert words in str(refused.value)
    assert "table.csv" in str(refused.value)


def test_files_that_are_no_text_are_refused(tmp_path: Path) -> None:
    """Bytes that are no UTF-8, and a file that is not there."""
    file = tmp_path / "table.csv"
    file.write_bytes(b"t_s\xff\xfe\x00")
    with pytest.raises(pp.InputError, match="line 1: byte 0xff is not UTF-8"):
        pp.read_csv(file, MACHINE)
    with pytest.raises(pp.InputError, match="no such file"):
        pp.read_csv(tmp_path / "none.csv", MACHINE)


def test_names_with_commas_and_quotes_are_quoted(tmp_path: Path) -> None:
    """RFC 4180, section 2, rules 5 to 7."""
    name = 'valve, "left"'
    steps = (pp.Signal({name: True}), pp.Wait(0.01))
    plan = pp.plan(MACHINE, pp.Cycle(steps=steps, start={"x": 0.0, "c": 0.0}))
    file = tmp_path / "table.csv"
    pp.write_csv(plan, file)
    assert rows_of(file)[0][-1] == name
    assert list(pp.read_csv(file, MACHINE).signals) == [name]


def test_spaces_in_a_header_and_blank_lines_are_no_fault(tmp_path: Path) -> None:
    """Other programs write them."""
    file = tmp_path / "table.csv"
    file.write_text("t_s, x_pos_mm, c_pos_deg\n0,1.5,0\n\n0.001,1.25,0\n\n")
    assert_array_equal(pp.read_csv(file, MACHINE).position[:, 0], [1.5, 1.25])


def test_the_last_decimal_is_that_of_the_finest_position(tmp_path: Path) -> None:
    """A first row of whole numbers says nothing of the others."""
    file = tmp_path / "table.csv"
    file.write_text("t_s,x_pos_mm,c_pos_deg\n0,0,0\n0.001,1.25e-3,0\n0.002,0.5,0\n")
    assert_allclose(pp.read_csv(file, MACHINE).position_step, 1e-5)


def test_a_signal_that_no_row_shows_is_named() -> None:
    """A pulse of 0.3 ms is not in a table of 1 ms."""
    on, off = pp.Signal({"puff": True}), pp.Signal({"puff": False})
    steps = (pp.Wait(0.0005), on, pp.Wait(0.0003), off, pp.Wait(0.1))
    plan = pp.plan(MACHINE, pp.Cycle(steps=steps, start={"x": 0.0, "c": 0.0}))
    assert [event.state for event in setpoints.unplayed(plan, 0.001)] == [True]
    assert setpoints.unplayed(plan, 0.0001) == ()


def test_a_link_stays_a_link_and_a_mode_stays(tmp_path: Path) -> None:
    """Writing a table changes the file's content, not what it is."""
    target, link = tmp_path / "target.csv", tmp_path / "link.csv"
    target.write_text("old")
    target.chmod(0o600)
    link.symlink_to(target)
    pp.write_csv(PLAN, link)
    assert link.is_symlink()
    assert target.stat().st_mode & 0o777 == 0o600
    assert target.read_text() != "old"


def test_a_pipe_is_written_to_as_it_is(tmp_path: Path) -> None:
    """A device or a pipe is not replaced by a file."""
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    reader = os.open(pipe, os.O_RDONLY | os.O_NONBLOCK)
    try:
        steps = (pp.Wait(0.002),)
        plan = pp.plan(MACHINE, pp.Cycle(steps=steps, start={"x": 0.0, "c": 0.0}))
        pp.write_csv(plan, pipe)
        assert os.read(reader, 3) == b"t_s"
    finally:
        os.close(reader)
    assert not pipe.is_file()
