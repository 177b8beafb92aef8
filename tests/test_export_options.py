"""Options of `export`: each reaches the table, goes before the machine file, is named in faults."""

from __future__ import annotations

import csv
import json
import os
import signal
import stat
import subprocess
import sys
import time
from dataclasses import fields as fields_of
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest
from click.testing import CliRunner, Result
from numpy.testing import assert_allclose, assert_array_equal
from scipy.interpolate import CubicHermiteSpline

import profileplan as pp
from profileplan.cli import cli
from profileplan.cli.settings import SECTIONS, SETTINGS
from profileplan.inputs import Dialect
from profileplan.setpoints import files
from profileplan.setpoints import parts as parts_module

MACHINE = """\
name = "kiln portal"
[axes.x]
travel = [-1000, 1000]
velocity = 500
acceleration = 3000
jerk = 60000
[axes.x.drive]
increments = 10_000
lead = 20
gear = [3, 1]
direction = -1
offset = 5.5
also = "x2"
also_offset = -3.2501
[axes.c]
kind = "rotary"
travel = [-720, 720]
velocity = 200
acceleration = 900
jerk = 9000
[axes.c.drive]
increments = 36_000
wrap = 360
"""

CYCLE = """\
machine = "machine.toml"
[start]
x = 0
c = 0
[[steps]]
move = { x = 150.03, c = -45 }
[[steps]]
signal = { valve = true }
[[steps]]
wait = 0.1003
[[steps]]
move = { x = -20, c = 400 }
"""

RATIO = 1500.0
"""Increments of x per mm: 10000 of a turn, 3 turns for 20 mm."""

Array = npt.NDArray[np.float64]


@pytest.fixture
def job(tmp_path: Path) -> Path:
    """Return the cycle file of a job in a folder of its own."""
    folder = tmp_path / "job"
    folder.mkdir()
    (folder / "machine.toml").write_text(MACHINE, encoding="utf-8")
    (folder / "cycle.toml").write_text(CYCLE, encoding="utf-8")
    return folder / "cycle.toml"


def with_settings(job: Path, text: str) -> None:
    """Put a block of settings into the machine file."""
    machine = job.parent / "machine.toml"
    machine.write_text(f"{MACHINE}[setpoints]\n{text}\n", encoding="utf-8")


def run(job: Path, output: Path, *words: str) -> Result:
    """Export a job in this process."""
    words = ("export", str(job), "-o", str(output), *words)
    return CliRunner(env={"COLUMNS": "100"}).invoke(cli, words)


def written(job: Path, output: Path, *words: str) -> Path:
    """Export a job, and return the file that was written."""
    result = run(job, output, *words)
    assert result.exit_code == 0, result.output
    return output


def told(job: Path, output: Path, what: str, *words: str) -> list[dict[str, object]]:
    """Export a job, and return a list of what it says as JSON."""
    result = run(job, output, "--json", *words)
    assert result.exit_code == 0, result.output
    values: list[dict[str, object]] = json.loads(result.stdout)[what]
    return values


def cells(file: Path, delimiter: str = ",") -> list[list[str]]:
    """Return the cells of a table."""
    with file.open(encoding="utf-8", newline="") as stream:
        return list(csv.reader(stream, delimiter=delimiter))


def column(file: Path, heading: str) -> Array:
    """Return the numbers of a column."""
    header, *rows = cells(file)
    return np.array([float(row[header.index(heading)]) for row in rows])


@pytest.mark.parametrize(
    ("words", "begins"),
    [
        (["--delimiter", "semicolon"], b"t_s;x_pos_mm;x_vel_mm_s\r\n0.000;0."),
        (["--delimiter", "tab", "--decimal", "comma"], b"t_s\tx_pos_mm\tx_vel_mm_s\r\n0,000\t0,0"),
        (["--line-end", "lf"], b"t_s,x_pos_mm,x_vel_mm_s\n0.000,"),
        (["--time", "us"], b"t_us,x_pos_mm,x_vel_mm_s\r\n0,0.0"),
        (["--time", "tick", "--decimals", "2"], b"tick,x_pos_mm,x_vel_mm_s\r\n0,0.00,0.00\r\n1,"),
        (["--decimals", "pos=4,vel=0"], b"t_s,x_pos_mm,x_vel_mm_s\r\n0.000,0.0000,0\r\n"),
        (["--no-header"], b"0.000,0.000000000,0.000000\r\n"),
        (["--name", "x_pos_mm=X=1", "--name", "t_s=T"], b"T,X=1,x_vel_mm_s\r\n"),
        (["--comment", "one", "--comment", "2, two"], b"# one\r\n# 2, two\r\nt_s,"),
        (["--comment", "one", "--comment-mark", "//"], b"// one\r\nt_s,"),
        (["--interpolation", "250,-6"], b"t_s,x_pos_mm,x_vel_mm_s\r\n0.00000,"),
        (["--interpolation", "2,-3", "--time", "ms"], b"t_ms,x_pos_mm,x_vel_mm_s\r\n0,"),
    ],
)
def test_each_option_reaches_the_table(job: Path, words: list[str], begins: bytes) -> None:
    """As the machine file's block would have it."""
    machine = job.parent / "machine.toml"
    machine.write_text(MACHINE.split("[axes.c]", maxsplit=1)[0], encoding="utf-8")
    job.write_text(CYCLE.replace(", c = -45", "").replace(", c = 400", "").replace("c = 0\n", ""))
    text = job.read_text().replace("[[steps]]\nsignal = { valve = true }\n", "")
    job.write_text(text)
    file = written(job, job.parent / "t.csv", "--columns", "pos,vel", *words)
    assert file.read_bytes().startswith(begins)


def test_every_field_of_a_dialect_has_an_option() -> None:
    """What only the machine file could say would not be said for one export."""
    assert {setting.field for setting in SETTINGS} == {own.name for own in fields_of(Dialect)}
    shown = {name for names in SECTIONS.values() for name in names}
    assert {setting.field for setting in SETTINGS} <= shown


def test_help_shows_the_options_in_sections(job: Path) -> None:
    """Thirty options in a row are not read."""
    lines = run(job, Path("t.csv"), "--help").stdout.splitlines()
    titles = [line.rstrip(":") for line in lines if line[:1].isalpha() and line.endswith(":")]
    assert titles == [*SECTIONS, "All else"]
    for setting in SETTINGS:
        assert sum(line.startswith(f"  {setting.name} ") for line in lines) == 1


def test_significant_digits_hold_in_every_cell(job: Path) -> None:
    """Each number to half of its last digit, and zero without a sign."""
    exact = written(job, job.parent / "exact.csv", "--decimals", "15")
    few = written(job, job.parent / "few.csv", "--significant", "4")
    header, *rows = cells(few)
    assert_allclose(column(few, "x_vel_mm_s"), column(exact, "x_vel_mm_s"), rtol=5.001e-4)
    mantissas = [cell.split("e")[0].strip("-").replace(".", "") for row in rows for cell in row[1:]]
    assert max(len(mantissa.strip("0")) for mantissa in mantissas) <= 4
    assert not {"-0", "-0.0"} & {cell for row in rows for cell in row}
    assert len(header) == 8


@pytest.mark.parametrize(
    "words", [["--decimals", "0"], ["--significant", "3"], ["--units", "increments"]]
)
def test_no_zero_is_negative(job: Path, words: list[str]) -> None:
    """Small speeds on the way down are rounded to 0; direction -1 turns the sign of zero."""
    for row in cells(written(job, job.parent / "t.csv", *words))[1:]:
        assert not any(cell.startswith("-") and not cell.strip("-0.") for cell in row)


def test_what_is_given_goes_before_the_machine_file(job: Path) -> None:
    """Digits and names are added to those of the file; all else replaces what the file says."""
    with_settings(
        job,
        'delimiter = ";"\nheader = false\nsignificant = { pos = 3 }\ndecimals = { vel = 1 }\n'
        'names = { x_pos_mm = "X", c_pos_deg = "C" }\ncomments = ["from the file"]\n'
        "rows_a_file = 100\naxis_files = true\ntell_joins = true",
    )
    words = ["--header", "--decimals", "pos=2", "--name", "x_pos_mm=NEW", "--comment", "mine"]
    words += ["--rows-a-file", "all", "--one-file", "--columns", "pos,vel", "--no-tell-joins"]
    comment, header, row, *_ = written(job, job.parent / "t.csv", *words).read_text().splitlines()
    assert comment == "# mine"
    assert header == "t_s;NEW;x_vel_mm_s;C;c_vel_deg_s;valve"
    assert row == "0.000;0.00;0.0;0.00;0.0;0"


def test_names_may_be_of_the_machines_other_tables(job: Path) -> None:
    """One machine file serves many cycles and columns; a slip in it is told all the same."""
    names = 'names = { x_acc_mm_s2 = "A", x_pos_inc = "I", t_ms = "T", vacuum = "V", t_s = "time" }'
    with_settings(job, names)
    result = run(job, job.parent / "t.csv", "--columns", "pos")
    assert result.exit_code == 0
    assert cells(job.parent / "t.csv")[0] == ["time", "x_pos_mm", "c_pos_deg", "valve"]
    assert "note: setpoints.names: vacuum heads no column" in result.stderr
    assert "x_pos_inc" not in result.stderr
    with_settings(job, 'names = { x_pos = "X" }')
    result = run(job, job.parent / "t.csv")
    assert result.exit_code == 2
    assert "machine.toml: setpoints.names.x_pos: no such column; there are t_s" in result.stderr


@pytest.mark.parametrize(
    ("words", "message"),
    [
        ("--decimals pos=16", "--decimals pos: 16; allowed: 0 to 15"),
        ("--decimals position=3", "kinds are pos, vel"),
        ("--decimals pos=3,pos=4", "of each kind once"),
        ("--decimals x", "such as pos=4,vel=2"),
        ("--significant vel=0", "--significant vel: 0; allowed: 1 to 17"),
        ("--decimals pos=3 --significant pos=3", "--significant pos: has decimals too"),
        ("--name x_pos_mm", "'--name': \"x_pos_mm\"; allowed"),
        ("--name x_acc=A", "--name x_acc: no such column; there are t_s, x_pos_mm"),
        ("--name vacuum=V", "--name vacuum: no such column"),
        ("--name x_pos_mm=valve", '--name: "valve" heads two columns'),
        ("--comment a\nb", "--comment [1]"),
        ("--interpolation 256,-6", "--interpolation base: 256; allowed: 1 to 255"),
        ("--interpolation 1,-129", "--interpolation exponent: -129; allowed: -128 to 63"),
        ("--interpolation 1,1", "--interpolation period: 10 s"),
        ("--interpolation 250e-6", "such as 250,-6"),
        ("--interpolation 1,-3 --period 0.001", "give it or --period"),
        ("--period 2", "--period: 2 s; allowed"),
        ("--columns pos,torqe", '--columns: "torqe" is not written'),
        ("--rows-a-file 1", "--rows-a-file: 1; allowed: 2 to"),
        ("--rows-a-file 0", "or all"),
        ("--rows-a-file -5", "or all"),
        ("--decimal comma", "--decimal: decimal sign and delimiter are both"),
        ("--error 0.1", "--error: only with --points pvt"),
        ("--longest 0.1", "--longest: only with --points pvt"),
        ("--points pvt --columns pos", "--columns: only with --points ticks"),
        ("--points pvt --error 0", "--error: 0 mm or deg; allowed"),
        ("--points pvt --longest 0.0005", "--longest: 0.0005 s"),
    ],
)
def test_a_fault_names_the_option_and_what_is_allowed(job: Path, words: str, message: str) -> None:
    """Not the field of a record that the user never saw; and no file is written."""
    before = set(job.parent.iterdir())
    result = run(job, job.parent / "t.csv", *words.split(" "))
    assert result.exit_code == 2, result.output
    assert message in result.stderr
    assert isinstance(result.exception, SystemExit)
    assert set(job.parent.iterdir()) == before


def test_a_delimiter_that_is_the_files_decimal_sign_is_named(job: Path) -> None:
    """The option is at fault, though the sign stands in the file."""
    with_settings(job, 'delimiter = ";"\ndecimal = ","')
    result = run(job, job.parent / "t.csv", "--delimiter", "comma")
    assert result.exit_code == 2
    assert 'error: --delimiter: decimal sign and delimiter are both ","' in result.stderr


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("t.npy", ["--decimals", "4"]),
        ("t.parquet", ["--delimiter", "tab"]),
        ("t.jsonl", ["--no-header"]),
        ("t.jsonl", ["--comment", "x"]),
        ("t.npy", ["--tell-joins"]),
    ],
)
def test_options_without_effect_are_refused(job: Path, name: str, words: list[str]) -> None:
    """What would be ignored is said to be."""
    result = run(job, job.parent / name, *words)
    assert result.exit_code == 2
    assert f"{words[0].replace('--no-', '--')}: has no effect on .{name[2:]}" in result.stderr


def rows_of(file: Path) -> list[tuple[float, ...]]:
    """Return the rows of a table in any form."""
    if file.suffix == ".npy":
        return [tuple(float(value) for value in row) for row in np.load(file).tolist()]
    if file.suffix == ".parquet":
        parquet = pytest.importorskip("pyarrow.parquet")
        return [tuple(row.values()) for row in parquet.read_table(file).to_pylist()]
    if file.suffix == ".jsonl":
        lines = file.read_text(encoding="utf-8").splitlines()
        return [tuple(json.loads(line).values()) for line in lines]
    return [tuple(float(cell) for cell in row) for row in cells(file)[1:]]


@pytest.mark.parametrize("form", ["csv", "jsonl", "npy", "parquet"])
@pytest.mark.parametrize("more", [[], ["--units", "increments"], ["--points", "pvt"]])
def test_every_form_is_split_alike(job: Path, form: str, more: list[str]) -> None:
    """The same names, rows and joins for each, and together the whole table."""
    if form == "parquet":
        pytest.importorskip("pyarrow")
    if more == ["--points", "pvt"] and form in {"npy", "parquet"}:
        assert "can be" in run(job, job.parent / f"t.{form}", *more).stderr
        return
    most = "10" if "pvt" in more else "300"
    whole = rows_of(written(job, job.parent / f"whole.{form}", *more))
    split = told(job, job.parent / f"t.{form}", "parts", "--rows-a-file", most, *more)
    usual = told(job, job.parent / "usual.csv", "parts", "--rows-a-file", most, *more)
    names = [Path(str(part["file"])).name for part in split]
    assert names == [f"t_{number:03d}.{form}" for number in range(1, len(split) + 1)]
    for key in ("axis", "first_row", "rows", "starts_at_rest"):
        assert [part[key] for part in split] == [part[key] for part in usual]
    assert {part["starts_at_rest"] for part in split} == {True, False}
    assert [row for part in split for row in rows_of(Path(str(part["file"])))] == whole
    by_axis = told(job, job.parent / f"a.{form}", "parts", "--axis-files", *more)
    assert [part["axis"] for part in by_axis] == ["x", "c", "signals"]
    tables = [rows_of(Path(str(part["file"]))) for part in by_axis]
    joined = [(x + c[1:] + s[1:]) for x, c, s in zip(*tables, strict=True)]
    assert joined == whole


def test_joins_in_motion_are_told(job: Path) -> None:
    """A drive that waits between two parts would stop there at once."""
    result = run(job, job.parent / "t.npy", "--rows-a-file", "40")
    values = told(job, job.parent / "t.npy", "parts", "--rows-a-file", "40")
    moving = [Path(str(part["file"])).name for part in values if not part["starts_at_rest"]]
    notes = [line for line in result.stderr.splitlines() if "in motion" in line]
    assert len(moving) > 3
    assert notes[0] == f"note: {moving[0]} goes on from row 40, in motion"
    assert notes[-1] == f"note: … and {len(moving) - 3} more parts in motion"


@pytest.mark.parametrize("most", [2, 3, 40, 41, 333])
def test_no_part_is_a_row_alone(job: Path, most: int) -> None:
    """The machine stands in the first row, but a part that ends there moves nothing."""
    values = told(job, job.parent / "t.npy", "parts", "--rows-a-file", str(most))
    counts = [int(str(part["rows"])) for part in values]
    assert max(counts) <= most
    assert min(counts[:-1]) >= 2
    assert counts[-1] >= (1 if most == 2 else 2)
    assert len(counts) > 1


def test_parquet_tells_joins_in_its_metadata(job: Path) -> None:
    """It has no comments."""
    parquet = pytest.importorskip("pyarrow.parquet")
    written(job, job.parent / "t.parquet", "--rows-a-file", "300", "--tell-joins")
    schema = parquet.read_schema(job.parent / "t_002.parquet")
    assert schema.metadata[b"joins"].startswith(b"goes on from row ")


def test_no_part_is_written_over_what_the_job_is_read_from(job: Path) -> None:
    """The name of a part is not seen on the command line."""
    points = job.parent / "t_001.csv"
    points.write_text("x,c\n0,0\n10,5\n")
    words = ["-m", str(job.parent / "machine.toml"), "--rows-a-file", "300"]
    result = run(points, job.parent / "t.csv", *words)
    assert result.exit_code == 2
    assert "t_001.csv: the job is read from this file" in result.stderr
    assert points.read_text().startswith("x,c")


def test_a_slip_does_not_fill_a_folder(job: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Rows of a long table by two: half as many files."""
    monkeypatch.setattr(parts_module, "MOST_FILES", 20)
    result = run(job, job.parent / "t.csv", "--rows-a-file", "2")
    assert result.exit_code == 2
    assert "--rows-a-file: 2; that makes" in result.stderr
    assert not list(job.parent.glob("t_*"))


def plan_of(job: Path) -> pp.Plan:
    """Return the plan of a job."""
    return pp.plan(job)


@pytest.mark.parametrize("error", [0.5, 0.02, 0.0055])
def test_points_in_increments_keep_their_error(job: Path, error: float) -> None:
    """Cubics between the counts and rates in the file, of both drives of x and of c."""
    words = ["--points", "pvt", "--error", str(error), "--units", "increments"]
    file = job.parent / "points.csv"
    result = run(job, file, "--json", *words)
    assert result.exit_code == 0
    values: dict[str, dict[str, float]] = json.loads(result.stdout)
    header, *_ = cells(file)
    x, x2, c = ([f"{name}_pos_inc", f"{name}_vel_inc_s"] for name in ("x", "x2", "c"))
    assert header == ["t_s", *x, *x2, *c, "valve"]
    plan = plan_of(job)
    at = column(file, "t_s")
    times = np.linspace(0.0, plan.duration, 100_001)
    exact = plan.trajectory.at(times)
    greatest = []
    turns = np.unwrap(column(file, c[0]), period=36_000)
    for place, names, scale, offset in (
        (0, x, -RATIO, 5.5),
        (0, x2, RATIO, -3.2501),
        (1, c, 100, 0),
    ):
        counts = turns if names is c else column(file, names[0])
        assert_array_equal(counts, np.rint(counts))
        cubic = CubicHermiteSpline(at, counts / scale - offset, column(file, names[1]) / scale)
        greatest.append(float(np.abs(cubic(times) - exact[:, place]).max()))
    assert max(greatest) <= error
    assert_allclose(max(greatest[:2]), values["error"]["x"], rtol=1e-3)
    assert_allclose(greatest[2], values["error"]["c"], rtol=1e-3)
    assert values["rounding_share"] == {"x": 0.5 / RATIO, "c": 0.005}


def test_counts_of_points_are_those_nearest_to_the_plan(job: Path) -> None:
    """Each from the plan, so no error is handed on; rates to their last decimal."""
    words = ["--points", "pvt", "--error", "0.01", "--units", "increments", "--decimals", "vel=1"]
    file = written(job, job.parent / "points.csv", *words)
    plan = plan_of(job)
    at = column(file, "t_s")
    exact = plan.trajectory.at(at)
    off = column(file, "x2_pos_inc") - RATIO * (exact[:, 0] - 3.2501)
    assert np.abs(off).max() <= 0.5 + 1e-6
    rates = RATIO * plan.trajectory.at(at, 1)[:, 0]
    assert_allclose(column(file, "x2_vel_inc_s"), rates, rtol=0, atol=0.05 + 1e-6)
    turns = (column(file, "c_pos_inc") - 100 * exact[:, 1]) / 36_000
    assert np.abs(turns - np.rint(turns)).max() <= 0.50001 / 36_000
    assert column(file, "c_pos_inc").min() >= 0
    assert np.abs(np.diff(exact[:, 1])).max() < 180


def test_an_error_below_half_an_increment_is_refused_with_its_share(job: Path) -> None:
    """No points keep it; what rounding takes is told for every drive."""
    words = ["--points", "pvt", "--error", "0.0003", "--units", "increments"]
    result = run(job, job.parent / "points.csv", *words)
    assert result.exit_code == 2
    for heading, step in (("x_pos_inc", "0.000667"), ("x2_pos_inc", "0.000667")):
        assert f"positions of {heading} are rounded to steps of {step} mm" in result.stderr
    assert "c_pos_inc are rounded to steps of 0.01 deg, which alone are off by up to 0.005" in (
        result.stderr
    )
    assert not (job.parent / "points.csv").exists()


def test_points_are_kept_to_their_error_with_few_decimals(job: Path) -> None:
    """What the dialect rounds counts too, and the share is told.

    These digits are too coarse for the accelerations of c, which the status and a note say.
    """
    words = ["--points", "pvt", "--error", "0.02", "--decimals", "pos=2,vel=1"]
    words += ["--time", "ms", "--name", "x_pos_mm=X", "--comment", "points"]
    file = job.parent / "points.csv"
    result = run(job, file, *words)
    assert result.exit_code == 1
    assert "note: c acceleration: between points the drive's cubics reach" in result.stderr
    assert "the limit is not kept; rounding, of positions to steps of 0.01 deg" in result.stderr
    assert "of which rounding up to 0.005;" in result.stdout
    comment, *lines = file.read_text().splitlines()
    assert comment == "# points"
    header, *rows = csv.reader(lines)
    assert header[:3] == ["t_ms", "X", "x_vel_mm_s"]
    numbers = np.array([[float(cell) for cell in row] for row in rows])
    plan = plan_of(job)
    times = np.linspace(0.0, plan.duration, 100_001)
    cubic = CubicHermiteSpline(numbers[:, 0] / 1e3, numbers[:, 1:5:2], numbers[:, 2:6:2])
    assert np.abs(cubic(times) - plan.trajectory.at(times)).max() <= 0.02
    result = run(job, file, "--points", "pvt", "--error", "0.004", "--decimals", "pos=2")
    assert result.exit_code == 2
    assert "allow more than that" in result.stderr


def test_points_of_a_wrapped_axis_are_less_than_half_a_turn_apart(job: Path) -> None:
    """Else the drive could not tell which way."""
    words = ["--points", "pvt", "--error", "500", "--units", "increments"]
    file = written(job, job.parent / "points.csv", *words)
    turned = np.diff(plan_of(job).trajectory.at(column(file, "t_s"))[:, 1])
    assert 90 < np.abs(turned).max() < 180
    result = run(job, file, *words, "--period", "1")
    assert result.exit_code == 2
    assert "c_pos_inc passes half a turn or more" in result.stderr


def test_rows_that_leave_the_sense_of_a_turn_in_doubt_are_told(job: Path) -> None:
    """200 deg/s for a second are more than half a turn."""
    result = run(job, job.parent / "t.csv", "--units", "increments", "--period", "1")
    assert "note: c turns by up to 200 deg between two rows" in result.stderr
    assert "take a period below 0.9 s" in result.stderr
    result = run(job, job.parent / "t.csv", "--units", "increments", "--period", "0.1")
    assert "sense is in doubt" not in result.stderr


def test_rounding_of_significant_digits_and_of_second_drives_is_judged(job: Path) -> None:
    """Four digits of 150 mm are steps of 0.1 mm; the second drive has counts of its own."""
    coarse = told(job, job.parent / "t.csv", "rounding", "--significant", "pos=4")
    found = {(one["axis"], one["quantity"]): one for one in coarse}
    positions = np.pad(column(job.parent / "t.csv", "x_pos_mm"), 3, mode="edge")
    derived = found["x", "velocity"]["derived"]
    assert isinstance(derived, float)
    assert_allclose(derived, np.abs(np.diff(positions)).max() * 1e3, rtol=1e-9)
    assert found["x", "velocity"]["rounding"] == pytest.approx(0.1 / 0.001)
    both = told(job, job.parent / "t.csv", "rounding", "--units", "increments")
    assert [one["axis"] for one in both if one["quantity"] == "velocity"] == ["x", "x2", "c"]
    counts = np.pad(column(job.parent / "t.csv", "x2_pos_inc"), 3, mode="edge")
    second = next(one for one in both if (one["axis"], one["quantity"]) == ("x2", "velocity"))
    assert second["derived"] == pytest.approx(np.abs(np.diff(counts)).max() / RATIO * 1e3)


def test_numbers_that_are_not_rounded_make_no_noise(job: Path) -> None:
    """A .npy table holds doubles; only increments are whole numbers there."""
    with_settings(job, "decimals = { pos = 2 }")
    assert "note: x jerk" in run(job, job.parent / "t.csv").stderr
    assert "note:" not in run(job, job.parent / "t.npy").stderr
    assert told(job, job.parent / "t.npy", "rounding") == []
    counted = told(job, job.parent / "t.npy", "rounding", "--units", "increments")
    assert {one["axis"] for one in counted} == {"x", "x2", "c"}


@pytest.mark.parametrize("name", ["t.csv", "t.jsonl", "t.npy", "t.parquet"])
def test_the_same_job_gives_the_same_bytes(job: Path, name: str) -> None:
    """A table can be compared with the one of last year."""
    if name == "t.parquet":
        pytest.importorskip("pyarrow")
    first = written(job, job.parent / name).read_bytes()
    assert written(job, job.parent / name).read_bytes() == first


@pytest.mark.parametrize("name", ["t.csv", "t.jsonl", "t.npy"])
@pytest.mark.parametrize("sent", [signal.SIGINT, signal.SIGTERM])
@pytest.mark.skipif(sys.platform == "win32", reason="no such signals")
def test_a_signal_while_writing_leaves_the_old_files(job: Path, name: str, sent: int) -> None:
    """Sent when the first temporary file is there: none is left, and the status tells of it."""
    job.write_text(CYCLE.replace("0.1003", "60"))
    old = job.parent / name.replace(".", "_001.")
    old.write_text("old")
    words = ["export", str(job), "-o", str(job.parent / name), "--period", "50 us"]
    before = set(job.parent.iterdir())
    with subprocess.Popen(
        [sys.executable, "-m", "profileplan", *words, "--rows-a-file", "2000000"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    ) as process:
        end = time.monotonic() + 20
        while set(job.parent.iterdir()) == before and time.monotonic() < end:
            time.sleep(0.001)
        process.send_signal(sent)
        output, talk = process.communicate()
    # An interrupt in code that is made from text, as dataclasses are, has Python end itself by
    # SIGINT after all is tidied up: a shell calls that 130 as well.
    assert process.returncode in {130, -signal.SIGINT}
    assert output == ""
    assert talk.endswith("interrupted; no file is half-written\n")
    assert set(job.parent.iterdir()) == before
    assert old.read_text() == "old"


def test_an_interrupt_right_behind_the_making_of_a_file_leaves_none(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Between two instructions: the file is on the disk, and nothing holds it yet."""

    def interrupted(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fdopen", interrupted)
    with pytest.raises(KeyboardInterrupt), files.replacing_all() as opened:
        opened.open(tmp_path / "t.csv")
    assert not list(tmp_path.iterdir())


def test_a_file_that_is_no_folder_is_told(job: Path) -> None:
    """What could not be made is not taken away either."""
    result = run(job, job / "t.csv")
    assert result.exit_code == 2
    assert "t.csv: cannot be written: Not a directory" in result.stderr


def test_a_private_file_stays_private(job: Path) -> None:
    """While it is written, and when it has taken its place."""
    file = written(job, job.parent / "t.csv")
    file.chmod(0o600)
    seen = []
    with files.replacing_all() as opened:
        stream = opened.open(file)
        seen = [stat.S_IMODE(part.stat().st_mode) for part in job.parent.glob(".t.csv.*")]
        opened.close(stream)
    assert [*seen, stat.S_IMODE(file.stat().st_mode)] == [0o600, 0o600]


def test_a_change_of_a_dialect_is_judged_as_a_whole() -> None:
    """Kinds that change between decimals and significant digits have one of them."""
    dialect = Dialect(decimals={"pos": 4, "vel": 2}, names={"a": "b"}, time="ms")
    changed = dialect.changed({"significant": {"pos": 7}, "names": {"c": "d"}})
    assert changed == Dialect(
        decimals={"vel": 2}, significant={"pos": 7}, names={"a": "b", "c": "d"}, time="ms"
    )
    with pytest.raises(pp.InputError, match="has decimals too"):
        dialect.changed({"significant": {"pos": 7}, "decimals": {"pos": 3}})
    for junk in ({"decimals": 5}, {"names": 5}, {"significant": 3, "decimals": {"pos": 1}}):
        with pytest.raises(pp.InputError):
            dialect.changed(junk)
