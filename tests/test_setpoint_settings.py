"""What a machine file says of tables and drives, and the tables that come of it."""

from __future__ import annotations

import csv
from fractions import Fraction
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

import profileplan as pp
from junk import junk, toml
from profileplan import setpoints
from profileplan.inputs import Dialect, Drive, Twin
from profileplan.setpoints import Content

TEXT = """\
[axes.x]
travel = [0, 1000]
velocity = 500
acceleration = 2000
[axes.x.drive]
increments = 10_000
lead = "2 cm"
gear = [3, 1]
direction = -1
offset = 5.5
also = "x2"
also_direction = 1
also_offset = "-1 mm"
[axes.c]
kind = "rotary"
travel = [-360, 360]
velocity = 200
acceleration = 900
[axes.c.drive]
increments = 3600
wrap = "1 rev"
[setpoints]
interpolation = { base = 25, exponent = -5 }
columns = ["pos", "vel"]
units = "increments"
delimiter = ";"
decimal = ","
line_end = "lf"
decimals = { vel = 2 }
header = true
names = { x_pos_inc = "X" }
time = "us"
comments = ["portal"]
comment_mark = "!"
rows_a_file = 5000
"""


def machine(folder: Path, text: str) -> pp.Machine:
    """Return the machine of a file."""
    file = folder / "machine.toml"
    file.write_text(text, encoding="utf-8")
    return pp.read_machine(file)


def test_all_settings_are_read(tmp_path: Path) -> None:
    """Each to its value; the drive of a rotary axis turns once in 360 degrees."""
    read = machine(tmp_path, TEXT)
    twin = Twin("x2", direction=1, offset=-1.0)
    assert read.axis("x").drive == Drive(
        10_000, lead=20.0, gear=(3, 1), direction=-1, offset=5.5, also=twin
    )
    assert read.axis("c").drive == Drive(3600, lead=360.0, wrap=360.0)
    assert read.setpoints == pp.SetpointSettings(
        0.00025,
        columns=("pos", "vel"),
        units="increments",
        dialect=Dialect(
            delimiter=";",
            decimal=",",
            line_end="lf",
            decimals={"vel": 2},
            names={"x_pos_inc": "X"},
            time="us",
            comments=("portal",),
            comment_mark="!",
            rows_a_file=5000,
        ),
    )


def test_a_table_is_written_as_the_machine_file_says(tmp_path: Path) -> None:
    """From the file to the increments."""
    read = machine(tmp_path, TEXT)
    start = {"x": 0.0, "c": 0.0}
    plan = pp.plan(read, pp.Cycle(steps=(pp.Move({"x": 100.0, "c": 30.0}),), start=start))
    (part,) = setpoints.write_table(
        plan, tmp_path / "t.csv", content=Content.of(read), dialect=read.setpoints.dialect
    )
    assert part.file.name == "t_001.csv"
    comment, *lines = part.file.read_text(encoding="utf-8").splitlines()
    assert comment == "! portal"
    header, *rows = csv.reader(lines, delimiter=";")
    assert header == [
        *("t_us", "X", "x_vel_inc_s", "x2_pos_inc", "x2_vel_inc_s", "c_pos_inc", "c_vel_inc_s")
    ]
    assert [int(cell) for cell in (rows[-1][1], rows[-1][3], rows[-1][5])] == [
        *(round(-1500 * Fraction("105.5")), 1500 * 99, 300)
    ]
    assert rows[1][0] == "250"


def test_what_is_asked_for_goes_before_the_file(tmp_path: Path) -> None:
    """An option on the command line is the last word."""
    read = machine(tmp_path, TEXT)
    content = Content.of(read, columns=("acc",), period=0.001, units="axis")
    assert content == Content(("acc",), period=0.001)


@pytest.mark.parametrize(
    ("old", "new", "place", "words"),
    [
        ("increments = 10_000\n", "", "axes.x.drive.increments", "missing; a whole number"),
        ("increments = 10_000", "increments = 0", "axes.x.drive.increments", "allowed: 1 to"),
        ('lead = "2 cm"\n', "", "axes.x.drive.lead", "missing"),
        ('"2 cm"', '"2 s"', "axes.x.drive.lead", "cm"),
        ("[3, 1]", "[3]", "axes.x.drive.gear", "turns of motor"),
        ("[3, 1]", "3", "axes.x.drive.gear", "an array of whole numbers"),
        ("[3, 1]", "[1.5, 1]", "axes.x.drive.gear", "[1.5, 1]; an array of whole numbers"),
        ('lead = "2 cm"', "lead = 20\nwrap = 100", "axes.x.drive.wrap", "only on a rotary axis"),
        ('also = "x2"\n', "", "axes.x.drive.also_direction", "only with also"),
        ('also = "x2"\n', "", "axes.x.drive.also_offset", "only with also"),
        ('also = "x2"', 'also = "c"', "axes.x.drive.also", "is a name already"),
        ("{ base = 25, ", "{ ", "setpoints.interpolation.base", "missing"),
        (", exponent = -5", "", "setpoints.interpolation.exponent", "missing"),
        ("also_direction = 1", "also_direction = 0", "axes.x.drive.also_direction", "1, -1"),
        ('also = "x2"', 'also = ""', "axes.x.drive.also", "a name"),
        ('wrap = "1 rev"', "wrap = 0.05", "axes.c.drive.wrap", "a whole number is needed"),
        ("base = 25", "base = 256", "setpoints.interpolation.base", "allowed: 1 to 255"),
        ("base = 25", "period = 25", "setpoints.interpolation.period", "unknown key"),
        ("[setpoints]", "[setpoints]\nperiod = 1", "setpoints.interpolation", "one of them"),
        ('["pos", "vel"]', '["pos", "speed"]', "setpoints.columns[2]", 'allowed: "pos"'),
        ('["pos", "vel"]', "[]", "setpoints.columns", "at least one"),
        ('"increments"', '"counts"', "setpoints.units", "axis"),
        ('decimal = ","', 'decimal = ";"', "setpoints.decimal", "allowed"),
        ("{ vel = 2 }", "{ vel = 22 }", "setpoints.decimals.vel", "allowed: 0 to 15"),
        ('time = "us"', 'time = "h"', "setpoints.time", "allowed"),
        ("rows_a_file = 5000", "rows_a_file = 1", "setpoints.rows_a_file", "allowed: 2 to"),
        ("rows_a_file = 5000", "rows_in_file = 5", "setpoints.rows_in_file", "rows_a_file"),
    ],
)
def test_a_slip_is_told_at_its_place(
    tmp_path: Path, old: str, new: str, place: str, words: str
) -> None:
    """With what is allowed."""
    assert old in TEXT
    with pytest.raises(pp.InputError) as refused:
        machine(tmp_path, TEXT.replace(old, new, 1))
    assert any(fault.place == place and words in fault.message for fault in refused.value.faults), (
        str(refused.value)
    )


def test_increments_without_a_drive_are_refused(tmp_path: Path) -> None:
    """An axis without one has no increments."""
    text = "[axes.x]\ntravel = [0, 1]\nvelocity = 1\nacceleration = 1\n"
    with pytest.raises(pp.InputError, match="no axis has a drive"):
        Content.of(machine(tmp_path, text), units="increments")


VALUES = junk(st.sampled_from(["", "x", "1 mm", "\t", "pos"]))

KEYS = [line.split(" = ")[0] for line in TEXT.splitlines() if " = " in line]
"""Every key of the file, in order."""


@given(st.integers(0, len(KEYS) - 1), VALUES)
def test_junk_gives_a_machine_or_input_error(
    tmp_path_factory: pytest.TempPathFactory, place: int, value: object
) -> None:
    """Whatever stands for a value, there is no traceback."""
    lines = TEXT.splitlines()
    at = [index for index, line in enumerate(lines) if " = " in line][place]
    lines[at] = f"{KEYS[place]} = {toml(value)}"
    file = tmp_path_factory.getbasetemp() / "junk.toml"
    file.write_text("\n".join(lines), encoding="utf-8")
    try:
        files = {pp.read_machine(file).source}
    except pp.InputError as error:
        files = {Path(str(fault.file)) for fault in error.faults}
    assert files == {file}
