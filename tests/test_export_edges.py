"""What a drive makes of points between them, and files in places where none is expected."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING

import numpy as np
import pytest
from click.testing import CliRunner
from numpy.testing import assert_allclose
from scipy.interpolate import CubicHermiteSpline

import profileplan as pp
from profileplan import setpoints
from profileplan.cli import cli
from profileplan.inputs import Drive
from profileplan.setpoints import Content
from profileplan.setpoints.pace import NUMBERS_AT_A_TIME, blocks

if TYPE_CHECKING:
    from pathlib import Path

AXIS = pp.Axis(
    "x", travel=(-800, 800), velocity=500, acceleration=3000, deceleration=2000, jerk=60000
)
DRIVE = Drive(20_000, lead=20.0, direction=-1)
STEPS = (pp.Move({"x": 300.0}), pp.Wait(0.1), pp.Move({"x": -200.0}))
PLAN = pp.plan(pp.Machine(name="portal", axes=(AXIS,)), pp.Cycle(steps=STEPS, start={"x": 0.0}))


@pytest.mark.parametrize("drives", [{}, {"x": DRIVE}])
@pytest.mark.parametrize("error", [0.5, 0.01, 0.001])
def test_peaks_of_cubics_are_those_that_the_drive_follows(
    drives: dict[str, Drive], error: float
) -> None:
    """Against scipy's cubics between what is read back, at many instants of every span."""
    points = setpoints.pvt(PLAN, error=error, content=Content(drives=drives))
    position, velocity = points.position[:, 0].round(9), points.velocity[:, 0].round(6)
    if drives:
        position, velocity = points.position[:, 0].round(3), points.velocity[:, 0].round(6)
    cubic = CubicHermiteSpline(points.time, position, velocity)
    shares = np.linspace(0.0, 1.0, 2001)[:, np.newaxis] * (1 - 1e-12)
    times = points.time[:-1] + shares * np.diff(points.time)
    speed, rate = cubic(times, 1), cubic(times, 2)
    slows = rate * np.diff(position) < 0
    assert_allclose(points.peaks["velocity"][0], np.abs(speed).max(), rtol=1e-6)
    assert_allclose(points.peaks["acceleration"][0], np.abs(rate[~slows]).max(), rtol=1e-5)
    assert_allclose(points.peaks["deceleration"][0], np.abs(rate[slows]).max(), rtol=1e-5)


JOB = """
machine = "machine.toml"
[start]
x = 0
[[steps]]
move = { x = 300 }
"""

MACHINE = """
[axes.x]
travel = [-800, 800]
velocity = 500
acceleration = 3000
jerk = 60000
"""


def test_cubics_over_a_limit_are_told(tmp_path: Path) -> None:
    """The plan keeps them; where points are held to ticks, cubics cannot, and the status is 1."""
    (tmp_path / "machine.toml").write_text(MACHINE)
    (tmp_path / "cycle.toml").write_text(JOB)
    words = ["export", str(tmp_path / "cycle.toml"), "-o", str(tmp_path / "t.csv")]
    result = CliRunner().invoke(
        cli, [*words, "--points", "pvt", "--period", "0.004", "--error", "0.01", "--json"]
    )
    assert result.exit_code == 1
    reached = json.loads(result.stdout)["cubics"]["x"]["acceleration"]
    assert reached > 3000
    assert f"the drive's cubics reach {reached:.6g}, " in result.stderr
    assert "over 3000; the limit is not kept" in result.stderr


def test_a_link_in_a_circle_gives_way_to_the_table(tmp_path: Path) -> None:
    """It leads nowhere, so nothing is lost."""
    (tmp_path / "machine.toml").write_text(MACHINE)
    (tmp_path / "cycle.toml").write_text(JOB)
    link = tmp_path / "t.csv"
    link.symlink_to(link)
    result = CliRunner().invoke(cli, ["export", str(tmp_path / "cycle.toml"), "-o", str(link)])
    assert result.exit_code == 0, result.output
    assert link.is_file()
    assert not link.is_symlink()


MOTOR = """
[axes.x.mechanics]
mass = 100
lead = 20
[axes.x.motor]
peak_torque = 0.1
"""


@pytest.mark.parametrize("words", [["export", "-o", "t.csv"], ["plan"]])
def test_what_is_not_met_is_told_beside_the_verdict(tmp_path: Path, words: list[str]) -> None:
    """A status of 1 without a word leaves one guessing; the cycle time alone says nothing of it."""
    (tmp_path / "machine.toml").write_text(MACHINE + MOTOR)
    (tmp_path / "cycle.toml").write_text(JOB)
    words = [str(tmp_path / word) if word == "t.csv" else word for word in words]
    result = CliRunner().invoke(cli, [*words, str(tmp_path / "cycle.toml"), "--quiet"])
    assert result.exit_code == 1
    assert "NOT MET: x peak torque: " in result.stderr
    assert "allowed 0.1 N·m, move 1 at " in result.stderr


def test_drives_that_cannot_play_a_cycle_are_told_with_their_file(tmp_path: Path) -> None:
    """Each counter by its name."""
    drive = '[axes.x.drive]\nincrements = 2_000_000_000\nlead = 20\nalso = "x2"\n'
    (tmp_path / "machine.toml").write_text(MACHINE + drive)
    (tmp_path / "cycle.toml").write_text(JOB)
    words = ["export", str(tmp_path / "cycle.toml"), "-o", str(tmp_path / "t.csv")]
    result = CliRunner().invoke(cli, [*words, "--units", "increments"])
    assert result.exit_code == 2
    place = f"error: {tmp_path / 'machine.toml'}: axes.x.drive: "
    assert result.stderr.count(place) == 2
    assert f"{place}x2 counts up to 30000000000 increments" in result.stderr
    assert not (tmp_path / "t.csv").exists()


def test_tables_with_many_columns_are_made_in_lower_blocks() -> None:
    """So that memory is bounded by numbers and not by rows."""
    rows = range(7, 100_000)
    for columns in (1, 13, 121, 10**7):
        made = list(blocks(rows, columns))
        assert [row for some in made for row in some] == list(rows)
        assert max(len(some) * columns for some in made) <= max(NUMBERS_AT_A_TIME, columns)
