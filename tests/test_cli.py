"""The command line: every exit status, JSON, quiet output, files, help that teaches."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from profileplan.cli import cli
from profileplan.setpoints import digits

SAMPLES = Path(__file__).parents[1] / "samples"
LOADER = str(SAMPLES / "kiln-loader" / "cycle.toml")
TURNER = str(SAMPLES / "tile-turner" / "cycle.toml")
BEAD = str(SAMPLES / "sealant-portal" / "bead.csv")
PORTAL = str(SAMPLES / "sealant-portal" / "machine.toml")
FAULTY = str(SAMPLES / "faulty" / "cycle.toml")


def run(*words: str, **environment: str) -> Result:
    """Run the command line in this process."""
    return CliRunner(env={"COLUMNS": "100", **environment}).invoke(cli, words)


def test_plan_of_a_job_that_meets_its_target_ends_with_0() -> None:
    """Scripts go on."""
    result = run("plan", LOADER)
    assert result.exit_code == 0
    assert "cycle time 9.517 s; target 10.2 s met" in result.stdout
    assert "not a safety function" in result.stdout
    assert "the mass of payloads enters forces and torques" in result.stderr


def test_plan_of_a_job_that_misses_its_target_ends_with_1() -> None:
    """Scripts stop, and the engineer reads what would help."""
    result = run("plan", TURNER)
    assert result.exit_code == 1
    assert "MISSED by" in result.stdout
    assert "What would shorten the cycle" in result.stdout


@pytest.mark.parametrize("command", [["plan"], ["check"], ["export", "-o", "table.csv"]])
def test_bad_input_ends_with_2_and_no_result(
    command: list[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """All faults of both files, on stderr, and no file."""
    monkeypatch.chdir(tmp_path)
    result = run(*command, FAULTY)
    assert result.exit_code == 2
    assert result.stdout == ""
    for place in ("axes.x.velocity", "axes.z.travel", "steps[1]", "steps[2].speed", "steps[3]"):
        assert place in result.stderr
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["plan", "none.toml"], "none.toml"),
        (["plan", BEAD], "--machine"),
        (["plan", LOADER, "--speed", "0.1"], "only for a waypoint or outline file"),
        (["plan", BEAD, "-m", PORTAL, "--speed", "-5"], "-5"),
        (["plan", BEAD, "-m", PORTAL, "--speed", "5 kg"], "kg"),
        (["plan", "drawing.dxf", "-m", PORTAL], "drawing.dxf: no such file"),
        (["export", LOADER, "-o", "t.csv", "--period", "5 us"], "period"),
        (["export", TURNER, "-o", "t.csv", "--columns", "pos,torque"], "no axis has mechanics"),
        (["export", LOADER], "--output"),
        (["plan"], "SOURCE"),
        (["plann", LOADER], "plan"),
    ],
)
def test_wrong_words_end_with_2_and_a_message(
    words: list[str], message: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The message names what is wrong; no traceback."""
    monkeypatch.chdir(tmp_path)
    result = run(*words)
    assert result.exit_code == 2, result.output
    assert message in result.stderr
    assert isinstance(result.exception, SystemExit)
    assert not list(tmp_path.iterdir())


def test_a_job_that_cannot_be_planned_ends_with_2(tmp_path: Path) -> None:
    """The step and the least time are named."""
    cycle = tmp_path / "cycle.toml"
    cycle.write_text(
        f'machine = "{PORTAL}"\n[start]\nx = 0\ny = 0\nz = 80\n'
        "[[steps]]\nmove = { x = 700 }\ntime = 0.2\n"
    )
    result = run("plan", str(cycle), "-o", str(tmp_path / "out"))
    assert result.exit_code == 2
    assert "steps[1].time: 0.2 s asked for; the least time" in result.stderr
    assert [cycle] == list(tmp_path.iterdir())


def test_output_goes_to_a_folder_that_is_made(tmp_path: Path) -> None:
    """Page, table and summary, and nothing half-written beside them."""
    folder = tmp_path / "new" / "out"
    result = run("plan", LOADER, "-o", str(folder))
    assert result.exit_code == 0
    names = ["report.html", "setpoints.csv", "summary.json"]
    assert sorted(file.name for file in folder.iterdir()) == names


def test_a_folder_that_cannot_be_made_ends_with_2(tmp_path: Path) -> None:
    """A file stands where the folder should be."""
    (tmp_path / "file").write_text("")
    result = run("plan", LOADER, "-o", str(tmp_path / "file" / "out"))
    assert result.exit_code == 2
    assert "cannot be made" in result.stderr


def test_json_is_the_summary_and_nothing_else(tmp_path: Path) -> None:
    """Standard output can be piped; the file and the output are the same."""
    result = run("plan", LOADER, "--json", "-o", str(tmp_path))
    summary = json.loads(result.stdout)
    assert json.loads((tmp_path / "summary.json").read_text(encoding="utf-8")) == summary
    assert list(summary)[:6] == [
        "cycle_time_s",
        "target_s",
        "meets_target",
        "requirements_met",
        "steps",
        "checks",
    ]
    step = summary["steps"][0]
    assert set(step) >= {
        *("name", "kind", "start_s", "duration_s", "least_time_s", "limited_by", "peaks")
    }
    assert set(step["peaks"]["z"]) == {"velocity", "acceleration", "deceleration", "jerk"}
    assert step["limited_by"][0] == {"axis": "z", "quantity": "jerk"}
    finding = summary["checks"][0]
    assert set(finding) >= {
        *("check", "axis", "value", "limit", "unit", "use", "ok", "time_s", "step")
    }


def test_json_of_check_and_export(tmp_path: Path) -> None:
    """Every table that is printed can be had as JSON."""
    found = json.loads(run("check", TURNER, "--json").stdout)
    assert found["requirements_met"] is False
    assert [f["check"] for f in found["checks"] if not f["ok"]] == ["cycle time"]
    file = tmp_path / "table.csv"
    told = json.loads(run("export", LOADER, "-o", str(file), "--json").stdout)
    rows = len(file.read_text().splitlines()) - 1
    assert (told["file"], told["files"], told["rows"]) == (str(file), [str(file)], rows)


@pytest.mark.parametrize("command", ["plan", "check"])
def test_quiet_is_one_line(command: str) -> None:
    """The verdict alone."""
    result = run(command, LOADER, "--quiet")
    assert len(result.stdout.splitlines()) == 1


def test_a_table_is_checked_by_its_machine(tmp_path: Path) -> None:
    """A table of a faster machine breaks the limits of a slower one: exit status 1."""
    run("plan", LOADER, "-o", str(tmp_path))
    table = str(tmp_path / "setpoints.csv")
    machine = SAMPLES / "kiln-loader" / "machine.toml"
    assert run("check", table, "-m", str(machine)).exit_code == 0
    slower = tmp_path / "slower.toml"
    slower.write_text(machine.read_text().replace("velocity = 2000", "velocity = 1990"))
    result = run("check", table, "-m", str(slower))
    assert result.exit_code == 1
    assert "NO" in result.stdout
    assert run("check", table).exit_code == 2


def test_a_machine_option_goes_before_the_cycle_files_own() -> None:
    """The same cycle on the machine with a turning gripper: its start lacks axis c."""
    turner = str(SAMPLES / "tile-turner" / "machine.toml")
    result = run("plan", LOADER, "-m", turner)
    assert result.exit_code == 2
    assert "start.c" in result.stderr


def test_waypoints_take_speed_and_tolerance() -> None:
    """A file of points alone is a job."""
    slow = json.loads(run("plan", BEAD, "-m", PORTAL, "--speed", "50 mm/s", "--json").stdout)
    fast = json.loads(run("plan", BEAD, "-m", PORTAL, "--speed", "0.5 m/s", "--json").stdout)
    assert slow["cycle_time_s"] > fast["cycle_time_s"]
    loose = json.loads(run("plan", BEAD, "-m", PORTAL, "--tolerance", "1", "--json").stdout)
    tight = json.loads(run("plan", BEAD, "-m", PORTAL, "--json").stdout)
    assert loose["cycle_time_s"] < tight["cycle_time_s"]
    assert loose["steps"][0]["stretches"]


@pytest.mark.parametrize("width", ["60", "80", "100", "140"])
@pytest.mark.parametrize("words", [["plan", TURNER], ["check", TURNER], ["plan", LOADER]])
def test_tables_fit_the_terminal(width: str, words: list[str]) -> None:
    """Text is wrapped, numbers are whole; below 80 columns they set the width."""
    result = run(*words, COLUMNS=width)
    lines = [line for line in result.stdout.splitlines() if str(SAMPLES) not in line]
    assert max(map(len, lines)) <= max(int(width), 80)


def test_no_colour_where_there_is_no_terminal() -> None:
    """A file or a pipe gets plain text; the words say all that colour would."""
    assert "\x1b" not in run("plan", TURNER).output


def test_no_color_is_respected_on_a_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    """NO_COLOR switches colour off even where there is a terminal (no-color.org)."""
    monkeypatch.setattr("click._compat.isatty", lambda _stream: True)
    coloured = CliRunner().invoke(cli, ["plan", TURNER, "-q"], color=True)
    assert "\x1b" in coloured.output
    plain = CliRunner(env={"NO_COLOR": "1"}).invoke(cli, ["plan", TURNER, "-q"], color=True)
    assert "\x1b" not in plain.output
    assert "MISSED" in plain.output


@pytest.mark.parametrize("command", ["plan", "check", "export"])
def test_help_teaches_by_example(command: str) -> None:
    """A user copies the first line."""
    result = run(command, "--help")
    assert result.exit_code == 0
    assert f"profileplan {command} samples/kiln-loader/cycle.toml" in result.stdout


def test_help_and_version() -> None:
    """The exit statuses are part of the interface."""
    assert "Exit status" in run("--help").stdout
    assert run("--version").stdout.startswith("profileplan")


@pytest.mark.parametrize("shell", ["bash", "zsh", "fish"])
def test_shell_completion_is_there(shell: str) -> None:
    """As README tells to set it up."""
    environment = {**os.environ, "_PROFILEPLAN_COMPLETE": f"{shell}_source"}
    result = subprocess.run(
        [sys.executable, "-m", "profileplan"],
        env=environment,
        capture_output=True,
        text=True,
        check=False,
    )
    assert "_PROFILEPLAN_COMPLETE" in result.stdout


def test_an_interrupt_leaves_nothing_half_written(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Ctrl-C while writing: the old file stays, and the status is neither 0 nor 1."""
    file = tmp_path / "table.csv"
    file.write_text("old")

    def interrupted(*_: object, **__: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(digits, "text", interrupted)
    result = run("export", LOADER, "-o", str(file))
    assert result.exit_code == 130
    assert file.read_text() == "old"
    assert [file] == list(tmp_path.iterdir())


@pytest.mark.parametrize("name", ["bead.csv", "machine.toml"])
def test_what_a_job_is_read_from_is_not_written_over(tmp_path: Path, name: str) -> None:
    """A slip of the hand must not cost the waypoints."""
    for file in (BEAD, PORTAL):
        (tmp_path / Path(file).name).write_bytes(Path(file).read_bytes())
    before = (tmp_path / name).read_bytes()
    words = [str(tmp_path / "bead.csv"), "-m", str(tmp_path / "machine.toml")]
    result = run("export", *words, "-o", str(tmp_path / name))
    assert result.exit_code == 2
    assert "the job is read from this file" in result.stderr
    assert (tmp_path / name).read_bytes() == before


def test_the_least_time_told_is_accepted(tmp_path: Path) -> None:
    """It is rounded up, so that it can be typed back."""
    cycle = tmp_path / "cycle.toml"
    text = f'machine = "{PORTAL}"\n[start]\nx = 0\ny = 0\nz = 80\n[[steps]]\nmove = {{ x = 700 }}\n'
    cycle.write_text(text + "time = 0.2\n")
    told = run("plan", str(cycle)).stderr.split("limits is ")[1].split(" s")[0]
    cycle.write_text(text + f"time = {told}\n")
    assert run("plan", str(cycle)).exit_code == 0


def test_export_of_a_missed_target_says_why_it_ends_with_1(tmp_path: Path) -> None:
    """An exit status without a reason helps nobody."""
    result = run("export", TURNER, "-o", str(tmp_path / "table.csv"), "-q")
    assert result.exit_code == 1
    assert "MISSED" in result.stdout


def test_a_table_too_coarse_to_judge_is_said_to_be(tmp_path: Path) -> None:
    """Two decimals at 1 ms are a jerk of 40 million mm/s³ by rounding alone."""
    table = tmp_path / "table.csv"
    rows = "".join(f"{0.001 * row:.3f},{100 + 0.01 * row:.2f},5,5\n" for row in range(3))
    table.write_text("t_s,x_pos_mm,y_pos_mm,z_pos_mm\n" + rows)
    result = run("check", str(table), "-m", PORTAL)
    assert "cannot be told from so few decimals" in result.stdout
    found = json.loads(run("check", str(table), "-m", PORTAL, "--json").stdout)["checks"]
    assert [f["decided"] for f in found if f["check"] == "jerk" and f["axis"] == "x"] == [False]


def test_a_table_takes_no_speed(tmp_path: Path) -> None:
    """An option that would be ignored is refused."""
    run("export", BEAD, "-m", PORTAL, "-o", str(tmp_path / "t.csv"))
    result = run("check", str(tmp_path / "t.csv"), "-m", PORTAL, "--speed", "5")
    assert result.exit_code == 2
    assert "for waypoints" in result.stderr


def test_help_keeps_its_lines() -> None:
    """Examples are copied line by line."""
    lines = run("--help").stdout.splitlines()
    assert "    profileplan plan samples/kiln-loader/cycle.toml -o out" in lines
    assert not any("\b" in line or "\\b" in line for line in lines)


@pytest.mark.parametrize("target", ["closed", "/dev/full"])
def test_output_that_is_lost_is_no_missed_requirement(target: str) -> None:
    """A closed pipe or a full disk is told apart from exit status 1; no traceback."""
    command = f"{sys.executable} -m profileplan plan {LOADER}"
    tail = "| true; exit ${PIPESTATUS[0]}" if target == "closed" else f"> {target}"
    result = subprocess.run(
        ["/bin/bash", "-c", f"{command} {tail}"], capture_output=True, text=True, check=False
    )
    assert result.returncode in {0, 141} if target == "closed" else result.returncode == 141
    assert "Traceback" not in result.stderr


def test_check_tells_notes_in_json_too() -> None:
    """A script that reads JSON must see what was not judged, or how."""
    result = run("check", LOADER, "--json")
    notes = json.loads(result.stdout)["notes"]
    assert notes
    assert [f"note: {note}" for note in notes] == result.stderr.splitlines()
