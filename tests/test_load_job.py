"""Jobs: a machine and a cycle that fit each other, from files or from code."""

from collections.abc import Callable
from pathlib import Path

import pytest

from profileplan.errors import Fault, InputError
from profileplan.inputs import (
    Axis,
    Cycle,
    Job,
    Line,
    Machine,
    Move,
    PathStep,
    Payload,
    Signal,
    Step,
    Trace,
    Transfer,
    Wait,
    Waypoint,
    load_job,
)

MACHINE_TEXT = """\
up = "+z"
[axes.x]
travel = [0, 1000]
velocity = 2000
acceleration = 12000
[axes.z]
travel = [0, 400]
velocity = 1000
acceleration = 5000
[axes.turn]
kind = "rotary"
travel = [-180, 180]
velocity = 360
acceleration = 3600
"""

CYCLE_TEXT = """\
machine = "machine.toml"
[start]
x = 0
z = 300
turn = 0
[[steps]]
move = { x = 400, turn = "0.25 rev" }
[[steps]]
wait = 1
"""

MACHINE = Machine(
    "Portal",
    (
        Axis("x", travel=(0, 1000), velocity=2000, acceleration=12000),
        Axis("z", travel=(0, 400), velocity=1000, acceleration=5000),
        Axis("turn", kind="rotary", travel=(-180, 180), velocity=360, acceleration=3600),
    ),
    up="+z",
)
START = {"x": 0.0, "z": 300.0, "turn": 0.0}


def faults(act: Callable[[], object]) -> tuple[Fault, ...]:
    """Return the faults that an act ends with."""
    with pytest.raises(InputError) as caught:
        act()
    return caught.value.faults


def places(act: Callable[[], object]) -> list[tuple[str, str]]:
    """Return file name and place of the faults that an act ends with."""
    return [(Path(str(fault.file)).name, fault.place) for fault in faults(act)]


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Return a folder with a sound machine and a sound cycle."""
    (tmp_path / "machine.toml").write_text(MACHINE_TEXT, encoding="utf-8")
    (tmp_path / "cycle.toml").write_text(CYCLE_TEXT, encoding="utf-8")
    return tmp_path


def test_positions_follow_the_steps() -> None:
    """Each planner begins a step where the one before has ended."""
    steps: tuple[Step, ...] = (
        Move({"turn": 90, "x": 400}),
        Signal({"vacuum": True}),
        Line({"z": 20}),
        Wait(1),
        Payload(3),
        Transfer({"x": 800, "z": 30}),
        PathStep((Waypoint({"x": 1}), Waypoint({"z": 2}), Waypoint({"x": 3}))),
        Trace(Path("a.dxf"), at={"z": 5}),
    )
    job = Job(MACHINE, Cycle(steps, START))
    assert job.positions() == (
        (0, 300, 0),
        (400, 300, 90),
        (400, 300, 90),
        (400, 20, 90),
        (400, 20, 90),
        (400, 20, 90),
        (800, 30, 90),
        (3, 2, 90),
        (3, 2, 90),
    )
    assert job.step_label(5) == "transfer 6"


JOB_FAULTS: list[tuple[Step, str, str]] = [
    (Move({"xx": 1}), "move.xx", 'unknown axis; did you mean "x"?'),
    (Move({"X": 1}), "move.X", 'unknown axis; did you mean "x"?'),
    (Move({"q": 1}), "move.q", "unknown axis; this machine has x, z, turn"),
    (Move({"x": 2500}), "move.x", "2500 mm; outside of the travel, 0 to 1000 mm"),
    (Line({"z": -0.5}), "line.z", "-0.5 mm; outside of the travel, 0 to 400 mm"),
    (Transfer({"turn": 181}), "transfer.turn", "181 deg; outside of the travel, -180 to 180 deg"),
    (Transfer({"x": 1}, height=500), "height", "500 mm; outside of the travel of z, 0 to 400 mm"),
    (
        PathStep((Waypoint({"x": 1}), Waypoint({"x": 1001}))),
        "path[2].x",
        "1001 mm; outside of the travel",
    ),
    (
        PathStep((Waypoint({"x": 1, "sped": 5}),)),
        "path[1].sped",
        'unknown axis or key; did you mean "speed"?',
    ),
    (Line({"turn": 9}, speed=5), "speed", "5 mm/s; counts along linear axes, and only rotary"),
    (PathStep((Waypoint({"turn": 9}),), speed=5), "speed", "only rotary ones are named: turn"),
    (Trace(Path("a"), at={"z": 401}), "z", "401 mm; outside of the travel"),
    (Trace(Path("a"), at={"tolerence": 1}), "tolerence", 'did you mean "tolerance"?'),
    (Trace(Path("a"), with_signal="x_acc_mm_s2"), "with_signal", "is a column of axis x"),
    (Signal({"x_pos_mm": True}), "signal.x_pos_mm", '"x_pos_mm" is a column of axis x'),
    (Signal({"z_force_N": True}), "signal.z_force_N", "is a column of axis z"),
    (Signal({"turn_jerk_deg_s3": True}), "signal.turn_jerk_deg_s3", "is a column of axis turn"),
]


@pytest.mark.parametrize(("step", "place", "words"), JOB_FAULTS)
def test_what_does_not_fit_the_machine_is_refused(step: Step, place: str, words: str) -> None:
    """The same judgement for records built in code as for files."""
    cycle = Cycle((Wait(1), step), START)
    (fault,) = faults(lambda: Job(MACHINE, cycle))
    assert fault.place == f"steps[2].{place}"
    assert words in fault.message


def test_all_that_does_not_fit_comes_at_once() -> None:
    """Every fault of the list above, in one cycle."""
    cycle = Cycle(tuple(step for step, _, _ in JOB_FAULTS), {"x": -1, "z": 0, "q": 0})
    expected = ["start.x", "start.q", "start.turn"]
    expected += [f"steps[{i}].{place}" for i, (_, place, _) in enumerate(JOB_FAULTS, start=1)]
    assert expected == [fault.place for fault in faults(lambda: Job(MACHINE, cycle))]


def test_a_signal_may_have_a_name_that_is_no_column() -> None:
    """Only columns that there can be are in the way: no axis x counts in degrees."""
    cycle = Cycle((Wait(1), Signal({"x_pos_deg": True, "x": True})), START)
    assert Job(MACHINE, cycle).cycle == cycle


def test_a_height_needs_an_up_axis() -> None:
    """Without one there is no telling which way to rise."""
    flat = Machine("m", MACHINE.axes)
    cycle = Cycle((Transfer({"x": 1}, height=5),), START)
    (fault,) = faults(lambda: Job(flat, cycle))
    assert fault.place == "steps[1].height"
    assert "this machine has no up axis" in fault.message


@pytest.mark.parametrize(
    ("steps", "refused"),
    [
        ((Move({"x": 0}),), True),
        ((Wait(0), Signal({"a": True}), Payload(1)), True),
        ((PathStep((Waypoint({"x": 0}), Waypoint({"z": 300}))),), True),
        ((Transfer({"x": 0}),), True),
        ((Wait(1e-3),), False),
        ((Move({"x": 1}),), False),
        ((PathStep((Waypoint({"x": 1}), Waypoint({"x": 0}))),), False),
        ((PathStep((Waypoint({"x": 0}, wait=1),)),), False),
        ((Transfer({"x": 0}, lift=5),), False),
        ((Trace(Path("a.dxf")),), False),
    ],
)
def test_a_job_of_no_length_is_refused(steps: tuple[Step, ...], refused: bool) -> None:
    """A cycle time of 0 s would make every rate infinite."""
    cycle = Cycle(steps, START)
    try:
        messages = [f"takes {len(Job(MACHINE, cycle).cycle.steps)} steps"]
    except InputError as error:
        messages = [fault.message for fault in error.faults]
    nothing = ["nothing to do: no step moves an axis, and no step waits"]
    assert (messages == nothing) is refused


def test_a_cycle_is_loaded_with_its_machine(folder: Path) -> None:
    """The machine is named relative to the cycle file."""
    job = load_job(folder / "cycle.toml")
    assert job.machine.source == folder / "machine.toml"
    assert job.positions() == ((0, 300, 0), (400, 300, 90), (400, 300, 90))


def test_a_machine_that_is_given_overrides_the_one_named(folder: Path) -> None:
    """The same cycle is tried on another machine without touching its file."""
    other = folder / "other.toml"
    other.write_text('name = "Other"\n' + MACHINE_TEXT, encoding="utf-8")
    (folder / "machine.toml").unlink()
    assert load_job(folder / "cycle.toml", machine=other).machine.name == "Other"


def test_a_missing_machine_tells_both_ways_to_give_it(folder: Path) -> None:
    """The user may know only one of them."""
    path = folder / "cycle.toml"
    path.write_text(CYCLE_TEXT.split("\n", 1)[1], encoding="utf-8")
    (fault,) = faults(lambda: load_job(path))
    assert (fault.file, fault.place) == (path, "machine")
    assert 'machine = "machine.toml"' in fault.message
    assert "--machine FILE" in fault.message


def test_speed_and_tolerance_are_not_for_a_cycle(folder: Path) -> None:
    """An option that is ignored would be a lie."""
    found = faults(lambda: load_job(folder / "cycle.toml", speed=1, tolerance=1))
    message = "only for a waypoint or outline file; a cycle gives it in its steps"
    assert found == (Fault("speed", message), Fault("tolerance", message))


def test_faults_of_all_files_come_at_once(folder: Path) -> None:
    """Machine, cycle, waypoint file, and what does not fit: one message."""
    (folder / "points.csv").write_text("x,q\n1,2\nb,3\n1001,4\n", encoding="utf-8")
    text = CYCLE_TEXT.replace("x = 400", "x = 4000").replace("wait = 1", "wait = -1")
    text += '[[steps]]\npath = "points.csv"\n[[steps]]\nmove = {q = 1}\nlaw = 5\n'
    (folder / "cycle.toml").write_text(text, encoding="utf-8")
    assert places(lambda: load_job(folder / "cycle.toml")) == [
        ("cycle.toml", "steps[2].wait"),
        ("points.csv", "line 3, column x"),
        ("cycle.toml", "steps[4].law"),
        ("cycle.toml", "steps[1].move.x"),
        ("points.csv", "column q"),
        ("points.csv", "line 4, column x"),
        ("cycle.toml", "steps[4].move.q"),
    ]
    (folder / "machine.toml").write_text(MACHINE_TEXT.replace("2000", "-1", 1), encoding="utf-8")
    assert places(lambda: load_job(folder / "cycle.toml")) == [
        ("machine.toml", "axes.x.velocity"),
        ("cycle.toml", "steps[2].wait"),
        ("points.csv", "line 3, column x"),
        ("cycle.toml", "steps[4].law"),
    ]


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ("x = 0\n", 'x = "a"\n', ["start.x"]),
        ("x = 0\n", "x = nan\n", ["start.x"]),
        ("[start]\nx = 0\nz = 300\nturn = 0\n", "", ["start"]),
        ("move = { x = 400", "move = { x = nan", ["steps[1].move.x"]),
        ('move = { x = 400, turn = "0.25 rev" }', "move = {}", ["steps[1].move"]),
        ('move = { x = 400, turn = "0.25 rev" }', "path = [{}, {x = 1}]", ["steps[1].path[1]"]),
        ('move = { x = 400, turn = "0.25 rev" }', "path = 5", ["steps[1].path"]),
        ('move = { x = 400, turn = "0.25 rev" }', 'path = "no.csv"', [""]),
        ("wait = 1", 'wait = 1\nname = "move 1"', ["steps[2].name"]),
    ],
)
def test_a_fault_has_no_echo(folder: Path, old: str, new: str, expected: list[str]) -> None:
    """What follows from a fault only would send the user to the wrong place."""
    assert old in CYCLE_TEXT
    path = folder / "cycle.toml"
    path.write_text(CYCLE_TEXT.replace(old, new), encoding="utf-8")
    assert expected == [fault.place for fault in faults(lambda: load_job(path))]


def test_a_waypoint_file_is_a_job_from_its_first_row(folder: Path) -> None:
    """The first row is the start, and one path leads through the others."""
    path = folder / "points.csv"
    path.write_text("x,z,turn,wait\n0,300,0,0.5\n5,,,\n6,200,,1\n", encoding="utf-8")
    job = load_job(path, machine=folder / "machine.toml", speed=100, tolerance=2)
    points = (Waypoint({"x": 5}), Waypoint({"x": 6, "z": 200}, wait=1))
    expected = Cycle(
        (Wait(0.5), PathStep(points, file=path, speed=100, tolerance=2)), START, source=path
    )
    assert expected == job.cycle
    assert job.positions()[-1] == (6, 200, 0)


@pytest.mark.parametrize(
    ("rows", "expected"),
    [
        ("x,z,turn\n0,300,0\n", [("points.csv", "line 2")]),
        ("x,z,turn\n0,,0\n1,2,3\n", [("points.csv", "line 2, column z")]),
        ("x,z\n0,1\n1,2\n", [("points.csv", "line 2, column turn")]),
        ("x,z,turn\n0,500,0\n1,2,3\n", [("points.csv", "line 2, column z")]),
        ("x,z,turn,q\n0,0,0,0\n1,2,3,4\n", [("points.csv", "column q")]),
        ("x,z,turn\n0,0,0\n1,2,181\n", [("points.csv", "line 3, column turn")]),
        ("x,z,turn\n0,0,0\n0,0,0\n", [("points.csv", "")]),
        (
            "x,z,turn\n0,0,a\n1,2,181\n",
            [("points.csv", "line 2, column turn"), ("points.csv", "line 3, column turn")],
        ),
        ("x,z,turn\n", [("points.csv", "")]),
    ],
)
def test_faults_of_a_waypoint_job_stand_in_its_lines(
    folder: Path, rows: str, expected: list[tuple[str, str]]
) -> None:
    """There is no cycle file whose key paths would help."""
    path = folder / "points.csv"
    path.write_text(rows, encoding="utf-8")
    assert expected == places(lambda: load_job(path, machine=folder / "machine.toml"))


def test_a_long_list_of_misfits_is_cut(folder: Path) -> None:
    """A wrong unit puts every row outside of the travel; 20 lines of it are enough."""
    path = folder / "points.csv"
    path.write_text("x,z,turn\n0,0,0\n" + "5000,0,0\n" * 50, encoding="utf-8")
    found = faults(lambda: load_job(path, machine=folder / "machine.toml"))
    assert len(found) == 21
    assert found[20] == Fault("", "… and 30 more", path)


def test_options_of_a_waypoint_job_are_judged_with_its_files(folder: Path) -> None:
    """Options, machine and points: one message."""
    path = folder / "points.csv"
    path.write_text("x\na\n", encoding="utf-8")
    found = faults(lambda: load_job(path, speed=-1, tolerance=-1))
    assert [fault.place for fault in found] == ["", "line 2, column x", "tolerance", "speed"]
    assert "--machine FILE" in found[0].message


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("cycle.json", '".json" files are not read; a cycle (.toml), a waypoint file (.csv)'),
        ("cycle", "has no suffix; a cycle (.toml)"),
    ],
)
def test_other_files_are_refused(tmp_path: Path, name: str, words: str) -> None:
    """The suffix decides, whether or not the file is there."""
    (fault,) = faults(lambda: load_job(tmp_path / name))
    assert fault.file == tmp_path / name
    assert words in fault.message


def test_a_missing_cycle_is_reported_with_a_faulty_machine(folder: Path) -> None:
    """The file that is there is judged nevertheless."""
    (folder / "machine.toml").write_text("[axes]", encoding="utf-8")
    found = places(lambda: load_job(folder / "no.toml", machine=folder / "machine.toml"))
    assert found == [("no.toml", ""), ("machine.toml", "axes")]
