"""Tables of every kind that is written: counters, second drives, bare numbers, parts."""

from __future__ import annotations

import re
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest
from click.testing import CliRunner
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

import profileplan as pp
from drives_and_turns import (
    INCREMENTS,
    MACHINE,
    PLAN,
    broken,
    cells,
    copied,
    found,
    planned,
    with_axis,
    written,
)
from profileplan.checks import Manner, Row, judge_file
from profileplan.cli import cli
from profileplan.inputs import Dialect, Mechanics
from profileplan.setpoints import Content, read_csv, write_json_lines, write_npy, write_table

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from profileplan.inputs.dialect import TimeUnit

# Counters that start from 0 again.

NEAR = (0.001, -0.001)
"""More than half an increment inside and outside of the travel [deg]."""


@settings(max_examples=20, deadline=None, suppress_health_check=list(HealthCheck))
@given(
    start=st.floats(-700, 700),
    targets=st.lists(st.floats(-720, 720), min_size=1, max_size=3),
    period=st.sampled_from([0.001, 0.004, 0.02]),
    block=st.sampled_from([9000, 1 << 20]),
)
def test_a_counter_that_starts_again_is_no_jump(
    tmp_path: Path, start: float, targets: list[float], period: float, block: int
) -> None:
    """The axis goes on turning, and what is read is where it was, in one of the turns."""
    plan = planned(*((0.0, target) for target in targets), start=start)
    file = tmp_path / "table.csv"
    content = replace(INCREMENTS, period=period)
    write_table(plan, file, content=content)
    judged = judge_file(file, MACHINE, block=block)
    assert [f for f in judged.findings if not f.ok] == []
    assert judge_file(file, MACHINE) == judged
    own, read = plan.setpoints(period).position[:, 1], read_csv(file, MACHINE).position[:, 1]
    turns = round((read[0] - own[0]) / 360)
    assert_allclose(read, own + 360 * turns, atol=0.5 / 2000 + 1e-9)
    told = " ".join(judged.notes)
    ends = [(own.min() + 360 * n, own.max() + 360 * n) for n in range(-5, 6)]
    # Where a turn just fits or just not, rounding decides.
    least, most = (sum(low >= -720 + by and high <= 720 - by for low, high in ends) for by in NEAR)
    others = re.search(r"(\d+) other turn", told)
    assert least <= (int(others[1]) if others else 0) + 1 <= max(most, 1)
    if most == 1:
        assert turns == 0


def test_a_leap_of_a_counter_is_found_across_its_start(tmp_path: Path) -> None:
    """A third of a turn in a row is no wrap."""
    rows = copied("increments")
    place = rows[0].index("c_pos_inc")
    counts = np.array([int(row[place]) for row in rows[1:]])
    start = int(np.flatnonzero(np.abs(np.diff(counts)) > 600_000)[0]) + 2
    assert broken(written(tmp_path / "table.csv", rows)) == {}
    rows[start][place] = str((int(rows[start][place]) + 240_000) % 720_000)
    first = broken(written(tmp_path / "table.csv", rows))["c velocity"].first
    assert first == Row(start + 1, float(rows[start][0]))


@pytest.mark.parametrize("block", [9000, 1 << 20])
def test_travel_is_judged_over_all_turns(tmp_path: Path, block: int) -> None:
    """From -45 to 550 degrees and back to -650: no turn keeps a travel from -600 to 560."""
    file = tmp_path / "table.csv"
    write_table(PLAN, file, content=INCREMENTS)
    position = PLAN.setpoints().position[:, 1]
    for low, high, check in (
        (-600.0, 560.0, "c travel, low end"),
        (-655.0, 500.0, "c travel, high end"),
    ):
        machine = with_axis(1, travel=(low, high))
        judged = judge_file(file, machine, block=block)
        over = [f for f in judged.findings if not f.ok]
        assert [f"{f.axis} {f.check}" for f in over] == [check]
        out = (position < low - 0.0003) | (position > high + 0.0003)
        first = over[0].first
        assert first is not None
        assert abs(first.line - 2 - int(out.argmax())) <= 1
        assert_allclose(over[0].value, -650 if check.endswith("low end") else 550, atol=3e-4)


def test_degrees_that_start_again_are_counted(tmp_path: Path) -> None:
    """Another program may write degrees of one turn: told in a note."""
    rows = copied()
    place = rows[0].index("c_pos_deg")
    for row in rows[1:]:
        row[place] = f"{float(row[place]) % 360:.6f}"
    file = written(tmp_path / "table.csv", rows)
    judged = judge_file(file, MACHINE)
    assert [f for f in judged.findings if not f.ok] == []
    assert any("c_pos_deg starts again after 360 deg" in note for note in judged.notes)
    assert_allclose(read_csv(file, MACHINE).position, PLAN.setpoints().position, atol=1e-6)
    assert "c velocity" in broken(file, with_axis(1, drive=None))


@pytest.mark.parametrize("columns", [("pos",), ("pos", "vel")])
def test_degrees_that_the_axis_can_turn_between_rows_do_not_start_again(
    tmp_path: Path, columns: tuple[str, ...]
) -> None:
    """From 168 to 357 degrees in a second it turned by 189, not by -171."""
    file = tmp_path / "table.csv"
    write_table(planned((10.0, 360.0)), file, content=Content(columns, period=1.0))
    judged = judge_file(file, MACHINE)
    assert not any("starts again" in note for note in judged.notes)
    assert found(judged, "travel, high end", "c").value == 360.0


def test_degrees_beyond_a_turn_do_not_start_again(tmp_path: Path) -> None:
    """A leap by a whole turn there is a leap."""
    rows = copied()
    place = rows[0].index("c_pos_deg")
    far = next(n for n, row in enumerate(rows[1:], 1) if float(row[place]) > 400)
    for row in rows[far:]:
        row[place] = f"{float(row[place]) - 360:.6f}"
    first = broken(written(tmp_path / "table.csv", rows))["c velocity"].first
    assert first == Row(far + 1, float(rows[far][0]))


def test_degrees_that_never_start_again_are_taken_as_they_are(tmp_path: Path) -> None:
    """At 270 degrees an axis that reaches 180 is not at -90."""
    rows = [["t_s", "x_pos_mm", "c_pos_deg"], *([f"0.{n:03d}", "0", "270"] for n in range(9))]
    file = written(tmp_path / "table.csv", rows)
    machine = with_axis(1, travel=(-180.0, 180.0))
    assert broken(file, machine)["c travel, high end"].value == 270
    rows = [["t_s", "x_pos_mm", "c_pos_inc"], *([f"0.{n:03d}", "0", "9000"] for n in range(9))]
    assert broken(written(file, rows), machine) == {}


def test_points_far_apart_turn_as_their_velocities_tell(tmp_path: Path) -> None:
    """At 150 degrees a second an axis turns by 300 in two seconds, not by -60."""
    rows = [["t_s", "x_pos_mm", "x_vel_mm_s", "c_pos_inc", "c_vel_inc_s"]]
    for time, place, speed in ((0, 0, 0), (1, 75, 150), (3, 375, 150), (4, 450, 0)):
        count = -(place + 33.3) * 2000 % 720_000
        rows.append([str(time), "0", "0", f"{count:.0f}", str(-2000 * speed)])
    file = written(tmp_path / "table.csv", rows)
    judged = judge_file(file, MACHINE)
    assert [f for f in judged.findings if not f.ok] == []
    assert_allclose(found(judged, "velocity", "c").value, 150, atol=1e-3)
    assert any("its velocities tell it" in note for note in judged.notes)
    bare = [[row[0], row[1], row[3]] for row in rows[:1] + rows[1:3]]
    written(file, [*bare, ["2", "0", bare[-1][2]]])
    assert any("the shorter way is taken" in note for note in judge_file(file, MACHINE).notes)


# Second drives.


def test_the_second_drive_agrees_with_the_first(tmp_path: Path) -> None:
    """It has its own direction and offset; half an increment of each is rounding."""
    judged = judge_file(written(tmp_path / "table.csv", cells("increments")), MACHINE)
    assert judged.unjudged == ()
    agreement = found(judged, "second drive, agreement", "x")
    assert agreement.ok
    assert_allclose(agreement.limit, 0.0002, rtol=1e-6)
    assert agreement.value <= agreement.limit
    assert found(judged, "second drive, velocity agreement", "x").ok


@pytest.mark.parametrize(
    ("heading", "by", "check"),
    [
        ("x2_pos_inc", 2, "x second drive, agreement"),
        ("x2_pos_inc", -2, "x second drive, agreement"),
        ("x2_vel_inc_s", 1, "x second drive, velocity agreement"),
        ("x2_acc_inc_s2", 1, "x second drive, acceleration agreement"),
    ],
)
def test_a_second_drive_that_is_apart_is_found_in_its_row(
    tmp_path: Path, heading: str, by: int, check: str
) -> None:
    """A gantry whose sides differ is strained."""
    rows = copied("increments")
    place = rows[0].index(heading)
    rows[300][place] = f"{float(rows[300][place]) + by:.10g}"
    over = broken(written(tmp_path / "table.csv", rows))
    assert list(over) == [check]
    assert over[check].first == Row(301, float(rows[300][0]))
    assert over[check].value > abs(by) * 0.0002 * 0.4


def test_a_second_drive_alone_stands_for_its_axis(tmp_path: Path) -> None:
    """Its table may be a file of its own."""
    rows = copied("increments")
    kept = [n for n, name in enumerate(rows[0]) if not name.startswith("x_")]
    file = written(tmp_path / "table.csv", [[row[n] for n in kept] for row in rows])
    judged = judge_file(file, MACHINE)
    assert [f for f in judged.findings if not f.ok] == []
    assert any("judged by its second drive, x2" in note for note in judged.notes)
    own = PLAN.setpoints().position[:, 0]
    assert_allclose(found(judged, "travel, high end", "x").value, own.max(), atol=2e-4)
    assert_allclose(read_csv(file, MACHINE).position[:, 0], own, atol=1.1e-4)


# Bare numbers, other headings, other times.


@pytest.mark.parametrize("units", ["axis", "increments"])
@pytest.mark.parametrize("time", ["s", "ms", "us", "tick"])
@pytest.mark.parametrize(
    ("delimiter", "decimal"), [(",", "."), (";", ","), ("\t", ","), ("|", ".")]
)
def test_a_table_without_a_header_is_what_the_machine_file_says(
    tmp_path: Path, units: str, time: TimeUnit, delimiter: str, decimal: str
) -> None:
    """Columns, units, time and signs of ``[setpoints]``; signals stand last, without names."""
    dialect = Dialect(
        header=False,
        time=time,
        delimiter=delimiter,
        decimal=decimal,
        comments=("tile; 12, ok", "t_s,x_pos_mm,c_pos_deg"),
        comment_mark="!",
    )
    own = pp.SetpointSettings(
        0.002,
        columns=("vel", "pos"),
        units="increments" if units != "axis" else "axis",
        dialect=dialect,
    )
    machine = replace(MACHINE, setpoints=own)
    file = tmp_path / "table.csv"
    write_table(PLAN, file, content=Content.of(machine), dialect=dialect)
    judged = judge_file(file, machine)
    assert [f for f in judged.findings if not f.ok] == []
    assert found(judged, "rows not 0 or 1").what == "signal 1"
    assert_allclose(read_csv(file, machine).time, PLAN.setpoints(0.002).time, atol=1e-12)
    ticks = [note for note in judged.notes if "tick" in note]
    assert bool(ticks) == (time == "tick")


@pytest.mark.parametrize("units", ["axis", "increments"])
def test_loads_stand_where_an_axis_has_mechanics(tmp_path: Path, units: str) -> None:
    """Two drives share one force; an axis without mechanics has no such column."""
    dialect = Dialect(header=False)
    own = pp.SetpointSettings(
        columns=("pos", "force", "vel"),
        units="increments" if units != "axis" else "axis",
        dialect=dialect,
    )
    machine = replace(with_axis(0, mechanics=Mechanics(mass=80.0)), setpoints=own)
    moves = (pp.Move({"x": 200.0, "c": -45.0}),)
    plan = pp.plan(machine, pp.Cycle(steps=moves, start={"x": 0.0, "c": 0.0}))
    file = tmp_path / "table.csv"
    write_table(plan, file, content=Content.of(machine), dialect=dialect)
    judged = judge_file(file, machine)
    assert [f for f in judged.findings if not f.ok] == []
    assert judged.unjudged == ("x_force_N",)


def test_a_table_without_a_header_that_does_not_fit_is_refused(tmp_path: Path) -> None:
    """With what was expected, once."""
    bare = written(tmp_path / "table.csv", cells()[1:])
    usual = replace(MACHINE, setpoints=pp.SetpointSettings(dialect=Dialect(header=False)))
    assert broken(bare, usual) == {}
    for columns in (["pos"], ["pos", "vel", "acc", "jerk"]):
        with pytest.raises(pp.InputError) as refused:
            judge_file(bare, MACHINE, manner=Manner(columns=columns))
        assert len(refused.value.faults) == 1
        count = 1 + 2 * len(columns)
        assert f"line 1: 8 columns and no header; expected {count}: t_s, x_pos_mm," in str(
            refused.value
        )
    with pytest.raises(pp.InputError, match='column "x_pos_mm" is missing'):
        judge_file(bare, MACHINE, manner=Manner(columns=["vel", "acc", "jerk"]))
    spoiled = [[*row[:-1], "0.5"] for row in cells()[1:]]
    with pytest.raises(pp.InputError, match="8 columns and no header; expected 7"):
        judge_file(written(bare, spoiled), usual)
    with pytest.raises(pp.InputError, match="line 1: holds numbers and no headings"):
        judge_file(bare, MACHINE)
    with pytest.raises(pp.InputError, match="line 1: is a header"):
        judge_file(written(bare, cells()), MACHINE, manner=Manner(columns=["pos"]))


@pytest.mark.parametrize("time", ["s", "ms", "us", "tick"])
def test_renamed_headings_below_comments_are_read_back(tmp_path: Path, time: TimeUnit) -> None:
    """By the mapping that they were written with; a comment with a time in it is no header."""
    names = {
        {"s": "t_s", "ms": "t_ms", "us": "t_us", "tick": "tick"}[time]: "Zeit",
        "x_pos_mm": "Achse 1; Soll",
        "c_vel_deg_s": "#drehen",
        "lamp": "licht",
    }
    dialect = Dialect(
        names=names, time=time, delimiter=";", decimal=",", comments=("Zeit; t_s; tick", "x;Zeit;y")
    )
    machine = replace(MACHINE, setpoints=pp.SetpointSettings(dialect=dialect))
    file = tmp_path / "table.csv"
    write_table(PLAN, file, dialect=dialect)
    judged = judge_file(file, machine)
    assert [f for f in judged.findings if not f.ok] == []
    assert judged.unjudged == ()
    assert found(judged, "rows not 0 or 1").what == "lamp"
    text = file.read_text("utf-8")
    line = text.splitlines()[402]
    values = line.split(";")
    values[1] = "700"
    file.write_text(text.replace(line, ";".join(values)), "utf-8")
    first = broken(file, machine)["x step"].first
    assert first is not None
    assert first.line == 403
    assert_allclose(first.time, 0.399, rtol=1e-12)


def test_a_table_in_another_dialect_than_the_machine_file_is_read(tmp_path: Path) -> None:
    """Ours or not: how it looks counts, and what the machine file says where that is open."""
    dialect = Dialect(delimiter=";", decimal=",", names={"x_pos_mm": "Soll"})
    machine = replace(MACHINE, setpoints=pp.SetpointSettings(dialect=dialect))
    assert broken(written(tmp_path / "table.csv", cells()), machine) == {}


# One file an axis, and parts.


@pytest.mark.parametrize("header", [True, False])
def test_the_file_of_one_axis_is_judged_alone(tmp_path: Path, *, header: bool) -> None:
    """A note tells what is not in it, and the clearance if there is anything to hit."""
    dialect = Dialect(axis_files=True, header=header)
    post = pp.Keepout("post", circle=pp.Circle(5000.0, 0.0, 20.0))
    machine = replace(MACHINE, setpoints=pp.SetpointSettings(dialect=dialect), keepouts=(post,))
    write_table(PLAN, tmp_path / "out.csv", dialect=dialect)
    for name, missed in (("x", "c, the clearance"), ("c", "x, the clearance")):
        judged = judge_file(tmp_path / f"out_{name}.csv", machine)
        assert {f.axis for f in judged.findings} == {name, None}
        assert [f for f in judged.findings if not f.ok] == []
        assert judged.notes == (f"holds {name}; not in it, and not judged: {missed}",)
    judged = judge_file(tmp_path / "out_signals.csv", machine)
    assert {f.check for f in judged.findings} == {"even period", "rising time", "rows not 0 or 1"}
    assert all(f.ok for f in judged.findings)
    with pytest.raises(pp.InputError, match="has no positions of c; those of all axes are needed"):
        read_csv(tmp_path / "out_x.csv", machine)


def test_the_name_of_a_file_tells_that_it_is_of_one_axis(tmp_path: Path) -> None:
    """Else an axis that is missing is a slip."""
    rows = [row[:4] for row in cells()]
    assert broken(written(tmp_path / "out-x.csv", rows)) == {}
    with pytest.raises(pp.InputError, match='column "c_pos_deg" is missing'):
        judge_file(written(tmp_path / "out.csv", rows), MACHINE)
    with pytest.raises(pp.InputError, match='column "c_pos_deg" is missing'):
        judge_file(written(tmp_path / "out_c.csv", rows), MACHINE)


def parts(folder: Path) -> tuple[list[Path], list[int]]:
    """Write the plan's table in parts, and return them and how many rows each has."""
    made = write_table(PLAN, folder / "out.csv", dialect=Dialect(rows_a_file=900, tell_joins=True))
    assert any(not part.starts_at_rest for part in made)
    return [part.file for part in made], [part.rows for part in made]


def test_parts_of_a_table_are_judged_as_one(tmp_path: Path) -> None:
    """A part that ends in motion goes on in the next."""
    files, _ = parts(tmp_path)
    whole = judge_file(written(tmp_path / "whole.csv", cells()), MACHINE)
    for part in (files[0], files[2], files[-1]):
        judged = judge_file(part, MACHINE)
        assert all(f.ok for f in judged.findings)
        assert [f.value for f in judged.findings] == [f.value for f in whole.findings]
        assert f"{files[0].name} to {files[-1].name} are judged as one table" in judged.notes[0]
    seen: list[tuple[int, int]] = []
    judge_file(files[1], MACHINE, progress=lambda *done: seen.append(done), block=9000)
    size = sum(part.stat().st_size for part in files)
    assert seen[-1] == (size, size)
    assert seen == sorted(seen)


def test_an_offence_is_told_with_its_part_and_line(tmp_path: Path) -> None:
    """Lines are those of the part."""
    files, _ = parts(tmp_path)
    lines = files[2].read_text("utf-8").splitlines()
    row = lines[99].split(",")
    row[1] = f"{float(row[1]) + 3:.6f}"
    lines[99] = ",".join(row)
    files[2].write_text("\n".join(lines), "utf-8")
    step = broken(files[0])["x step"]
    assert step.first == Row(100, float(row[0]))
    assert step.what.startswith(files[2].name)
    lines[99] = "rubbish"
    files[2].write_text("\n".join(lines), "utf-8")
    with pytest.raises(pp.InputError, match=rf"{files[2].name}: line 100: 1 cells"):
        judge_file(files[0], MACHINE)


def test_a_part_that_is_no_table_is_told(tmp_path: Path) -> None:
    """Else it would seem that the table ends there."""
    files, _ = parts(tmp_path)
    files[4].write_text("rubbish", "utf-8")
    judged = judge_file(files[1], MACHINE)
    assert judged.notes[0].startswith(f"{files[0].name} to {files[3].name} are judged")
    assert judged.notes[1].startswith(f"{files[4].name} has the name of a part")
    assert not all(f.ok for f in judged.findings)


def test_a_part_that_is_missed_leaves_a_table_that_ends_in_motion(tmp_path: Path) -> None:
    """Nothing is made up in its place."""
    files, _ = parts(tmp_path)
    files[4].unlink()
    assert "c rest at end" in broken(files[0])
    assert "c rest at start" in broken(files[5])


def test_tables_with_numbers_are_not_parts_of_each_other(tmp_path: Path) -> None:
    """Each begins at 0: the runs of three days are three tables."""
    files = [written(tmp_path / f"run_{n:03d}.csv", cells()) for n in (1, 2, 3)]
    files.append(written(tmp_path / "run_004.csv", [["some", "thing"], ["else", "0"]]))
    judged = judge_file(files[1], MACHINE)
    assert judged.notes == ()
    assert all(f.ok for f in judged.findings)


# The command.

FILE = """
name = "portal"
[axes.x]
travel = [-800, 800]
velocity = 500
acceleration = 3000
deceleration = 2000
jerk = 60000
[axes.c]
kind = "rotary"
travel = [-720, 720]
velocity = 200
acceleration = 900
jerk = 9000
"""


def run(*arguments: object) -> tuple[int, str]:
    """Run the command and return its exit status and what it says."""
    result = CliRunner().invoke(cli, ["check", *map(str, arguments)])
    assert result.exception is None or isinstance(result.exception, SystemExit)
    return result.exit_code, result.output


def test_the_command_judges_every_kind_of_table(tmp_path: Path) -> None:
    """With a header or without, with headings of the machine file, of any ending."""
    machine = tmp_path / "machine.toml"
    machine.write_text(FILE, "utf-8")
    bare = written(tmp_path / "bare.csv", cells()[1:])
    assert run(bare, "-m", machine, "--columns", "pos,vel,acc")[0] == 0
    status, told = run(bare, "-m", machine)
    assert (status, "line 1: holds numbers and no headings" in told) == (2, True)
    status, told = run(bare, "-m", machine, "--columns", "pos,val")
    assert (status, '"val"' in told) == (2, True)
    write_npy(PLAN, tmp_path / "table.npy")
    write_json_lines(PLAN, tmp_path / "table.jsonl")
    for form in ("npy", "jsonl"):
        assert run(tmp_path / f"table.{form}", "-m", machine)[0] == 0
    machine.write_text(FILE + "[setpoints]\nheader = false\n", "utf-8")
    assert run(bare, "-m", machine)[0] == 0
    assert run(written(tmp_path / "table.csv", cells()), "-m", machine)[0] == 0
    machine.write_text(FILE + '[setpoints.names]\nt_s = "Zeit"\n', "utf-8")
    renamed = [["Zeit", *cells()[0][1:]], *cells()[1:]]
    assert run(written(tmp_path / "table.csv", renamed), "-m", machine)[0] == 0
    files, _ = parts(tmp_path)
    status, told = run(files[1], "-m", machine)
    assert (status, "are judged as one table" in told) == (0, True)
    status, told = run(tmp_path / "nothing.toml", "--columns", "pos")
    assert (status, "are for setpoint tables" in told) == (2, True)


@pytest.mark.parametrize("change", [str.upper, lambda text: text.replace("t_s,", "time,", 1)])
def test_a_table_without_its_time_is_told_to_be_one(
    tmp_path: Path, change: Callable[[str], str]
) -> None:
    """It is no list of waypoints, whose axes would be unknown."""
    (tmp_path / "machine.toml").write_text(FILE, "utf-8")
    file = written(tmp_path / "table.csv", cells())
    file.write_text(change(file.read_text("utf-8")), "utf-8")
    status, told = run(file, "-m", tmp_path / "machine.toml")
    assert status == 2
    assert 'line 1: column "t_s" is missing, or t_ms, t_us, tick' in told
    assert "unknown axis" not in told


def test_significant_digits_can_be_told(tmp_path: Path) -> None:
    """Of a table that was not written as the machine file says."""
    (tmp_path / "machine.toml").write_text(FILE, "utf-8")
    file = tmp_path / "table.csv"
    write_table(PLAN, file, dialect=Dialect(significant=dict.fromkeys(("pos", "vel", "acc"), 8)))
    words = (file, "-m", tmp_path / "machine.toml", "--quiet")
    assert run(*words)[0] == 1
    assert run(*words, "--significant", "8")[0] == 0
    status, told = run(*words, "--significant", "pos=99")
    assert (status, "--significant pos: 99; allowed: 1 to 17" in told) == (2, True)


def test_a_column_that_is_missing_is_not_taken_for_another_axis(tmp_path: Path) -> None:
    """A heading that is an axis's own was not meant for one whose column is missing."""
    machine = replace(
        MACHINE, axes=tuple(replace(MACHINE.axes[0], name=n, drive=None) for n in "xz")
    )
    file = written(tmp_path / "table.csv", [["t_s", "X", "z_pos_mm"], ["0", "0", "0"]])
    with pytest.raises(pp.InputError) as raised:
        judge_file(file, machine)
    assert 'column "x_pos_mm" is missing' in str(raised.value)
    assert "did you mean" not in str(raised.value)
