"""Cycle files: what is read, and every fault at its place."""

import math
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from junk import junk, toml
from profileplan.errors import InputError
from profileplan.inputs import (
    Axis,
    Cycle,
    Line,
    Machine,
    Move,
    PathStep,
    Payload,
    Place,
    Signal,
    Trace,
    Transfer,
    Wait,
    Waypoint,
    read_cycle,
)

# the whole format in one example
EXAMPLE = """\
machine = "machine.toml"       # relative to this file; --machine overrides
target = 2.40                  # s; optional: the cycle time to meet
law = "trapezoidal"            # default for steps: "trapezoidal" | "quintic"

[start]
x = 0
y = 0
z = 300

[[steps]]                      # each axis its own law, arriving together; axes not named stay
name = "over the stack"
move = { x = 400, y = 250 }

[[steps]]                      # straight in space
line = { z = 20 }
speed = 150                    # mm/s along the path; optional

[[steps]]
signal = { vacuum = true }     # digital outputs and their new states; `lead = 0.03` switches before arrival

[[steps]]
wait = 0.08                    # s

[[steps]]
payload = { mass = 3.2, radius = 150, below = 12 }    # what hangs at the tool from here on; {} = nothing

[[steps]]                      # up, across, down; starts across as early as the clearance allows
transfer = { x = 1800, y = 900, z = 35 }

[[steps]]                      # through points without stopping, corners rounded within the tolerance; 0 = exact stop at every point
path = [ { x = 1700, y = 900 }, { x = 1700, y = 400 }, { x = 400, y = 400 } ]    # or path = "points.csv"
tolerance = 2.0                # mm, both ways: no point of the motion farther from what is drawn, no drawn point farther from the motion
speed = 800                    # mm/s at most

[[steps]]                      # follow the outlines of a drawing
trace = "gasket.dxf"
layers = ["BEAD"]              # default: all
place = { x = 300, y = 200, turn = 90 }   # where the drawing's origin lies, degrees anticlockwise
z = 5                          # working height; `lift` = height raised between outlines
tolerance = 0.05
speed = 120
with_signal = "valve"          # on while tracing
"""  # noqa: E501 - as a user writes it


def faults(act: Callable[[], object]) -> list[tuple[str, str]]:
    """Return place and message of every fault that an act ends with."""
    with pytest.raises(InputError) as caught:
        act()
    return [(fault.place, fault.message) for fault in caught.value.faults]


def write(folder: Path, text: str) -> Path:
    """Write a cycle file."""
    path = folder / "cycle.toml"
    path.write_text(text, encoding="utf-8")
    return path


def cycle_of(*steps: str) -> str:
    """Return the text of a cycle with these steps."""
    head = "[start]\nx = 0\nz = 0\nc = 0\n"
    return head + "".join(f"[[steps]]\n{step}\n" for step in steps)


MACHINE = Machine(
    "Portal",
    (
        Axis("x", travel=(0, 1000), velocity=1, acceleration=1),
        Axis("z", travel=(0, 400), velocity=1, acceleration=1),
        Axis("c", kind="rotary", travel=(-180, 180), velocity=1, acceleration=1),
    ),
)


def test_the_whole_format_is_read(tmp_path: Path) -> None:
    """Users start from this example; every value must come through."""
    path = write(tmp_path, EXAMPLE)
    expected = Cycle(
        (
            Move({"x": 400, "y": 250}, name="over the stack"),
            Line({"z": 20}, speed=150),
            Signal({"vacuum": True}),
            Wait(0.08),
            Payload(3.2, radius=150, below=12),
            Transfer({"x": 1800, "y": 900, "z": 35}),
            PathStep(
                (
                    Waypoint({"x": 1700, "y": 900}),
                    Waypoint({"x": 1700, "y": 400}),
                    Waypoint({"x": 400, "y": 400}),
                ),
                tolerance=2.0,
                speed=800,
            ),
            Trace(
                tmp_path / "gasket.dxf",
                layers=("BEAD",),
                place=Place(300, 200, 90),
                at={"z": 5},
                tolerance=0.05,
                speed=120,
                with_signal="valve",
            ),
        ),
        {"x": 0, "y": 0, "z": 300},
        target=2.4,
        law="trapezoidal",
        machine=tmp_path / "machine.toml",
        source=path,
    )
    assert expected == read_cycle(path)


@pytest.mark.parametrize(
    ("text", "step"),
    [
        (
            'move = {x = 1}\nlaw = "quintic"\ntime = 2\nname = "n"',
            Move({"x": 1}, law="quintic", time=2, name="n"),
        ),
        ('move = {x = 1}\narrival = "earliest"', Move({"x": 1}, arrival="earliest")),
        (
            'line = {x = 1}\nspeed = "1 m/s"\nlaw = "quintic"\ntime = "2 s"\nname = "n"',
            Line({"x": 1}, speed=1000, law="quintic", time=2, name="n"),
        ),
        ('wait = "80 ms"\nname = "n"', Wait(0.08, name="n")),
        (
            'signal = {a = true, b = false}\nlead = "-30 ms"\nname = "n"',
            Signal({"a": True, "b": False}, lead=-0.03, name="n"),
        ),
        ("payload = {}", Payload()),
        (
            'payload = {mass = "500 g", outline = [[0, 0], [1, 0], [0, 1]]}\nname = "n"',
            Payload(0.5, outline=((0, 0), (1, 0), (0, 1)), name="n"),
        ),
        (
            """path = [{x = 1, c = "0.5 rev", speed = 5, wait = 1, name = "p"}]
            tolerance = "1 mm"
            angle_tolerance = 1
            speed = 3
            time = 4
            law = "quintic"
            """,
            PathStep(
                (Waypoint({"x": 1, "c": 180}, speed=5, wait=1, name="p"),),
                tolerance=1,
                angle_tolerance=1,
                speed=3,
                time=4,
                law="quintic",
            ),
        ),
        (
            'transfer = {x = 1}\nheight = "10 cm"\nlift = 2\nlower = 3\nacross = "axes"\ntime = 4',
            Transfer({"x": 1}, height=100, lift=2, lower=3, across="axes", time=4),
        ),
        (
            'trace = "/d/a.dxf"\nz = "1 cm"\nlift = 2\ninside_first = true\nlead_in = 3\ntime = 4',
            Trace(Path("/d/a.dxf"), at={"z": 10}, lift=2, inside_first=True, lead_in=3, time=4),
        ),
    ],
)
def test_every_key_of_a_step_is_read(tmp_path: Path, text: str, step: object) -> None:
    """Each kind of step takes its own keys, with units or without."""
    assert read_cycle(write(tmp_path, cycle_of(text))).steps == (step,)


def test_points_of_a_file_are_read_beside_the_cycle(tmp_path: Path) -> None:
    """A waypoint file is named relative to the cycle file."""
    (tmp_path / "points.csv").write_text("x;c\n1,5;90\n", encoding="utf-8")
    cycle = read_cycle(write(tmp_path, cycle_of('path = "points.csv"')))
    expected = PathStep((Waypoint({"x": 1.5, "c": 90}),), file=tmp_path / "points.csv")
    assert cycle.steps == (expected,)


LAWS = '"trapezoidal", "quintic"'
STEP_FAULTS = [
    ("move = {x = 1}\nwait = 3", "", "has move and wait; one step does one thing"),
    ("", "", "does nothing; one of move, line, wait, signal, payload, path, transfer, trace"),
    ("mvoe = {x = 1}", "", 'did you mean "move"?'),
    ("move = 5", ".move", "5; a table is needed"),
    ("move = {}", ".move", "names no axis; at least one position is needed"),
    ("move = {x = true}", ".move.x", "true; needed: a length"),
    ("move = {x = nan}", ".move.x", "nan mm or deg; allowed: -1e+07 to 1e+07"),
    ("move = {x = 2e7}", ".move.x", "20000000 mm or deg; allowed"),
    ('move = {x = "1,5 mm"}', ".move.x", "decimal point"),
    ('move = {x = "5 kg"}', ".move.x", '"kg" is no unit of it'),
    ('move = {x = "5 deg"}', ".move.x", "a length is needed"),
    ('move = {c = "5 mm"}', ".move.c", "an angle is needed"),
    ('move = {x = 1}\nlaw = "quintc"', ".law", f'"quintc"; allowed: {LAWS}; did you mean'),
    ('move = {x = 1}\narrival = "late"', ".arrival", 'allowed: "together", "earliest"'),
    ("move = {x = 1}\ntime = 0", ".time", "0 s; allowed: above 0 and at most 1e+06 s"),
    ("move = {x = 1}\ntime = 1e7", ".time", "10000000 s; allowed"),
    ('move = {x = 1}\nname = ""', ".name", '""; a name has printable'),
    ("move = {x = 1}\nname = 3", ".name", "3; a text is needed"),
    ("move = {x = 1}\ntme = 3", ".tme", 'unknown key; did you mean "time"?'),
    ("move = {x = 1}\nspeed = 3", ".speed", "a move is bounded by its axes"),
    ("move = {x = 1}\nspeed = 3", ".speed", "speed belongs to line, path, trace"),
    ("line = {x = 1}\nlift = 3", ".lift", "belongs to transfer, trace; a line takes speed, law"),
    ("line = {x = 1}\nspeed = 0", ".speed", "0 mm/s; allowed: above 0"),
    ("wait = -1", ".wait", "-1 s; allowed: 0 to 1e+06 s"),
    ("wait = true", ".wait", "true; needed: a time"),
    ("wait = 1\nlaw = 3", ".law", "belongs to move, line, path; a wait takes name"),
    ("signal = {}", ".signal", "names no output"),
    ("signal = {a = 1}", ".signal.a", "1; allowed: true or false"),
    ("signal = {speed = true}", ".signal.speed", '"speed" is reserved'),
    ('signal = {" a" = true}', '.signal." a"', "no space at its ends"),
    ("signal = {a = true}\nlead = inf", ".lead", "inf s; allowed: -1e+06 to 1e+06 s"),
    ("payload = 5", ".payload", "5; a table is needed"),
    ("payload = {mass = -1}", ".payload.mass", "-1 kg; allowed: 0 to"),
    ('payload = {mass = "1 mm"}', ".payload.mass", "a mass is needed"),
    ("payload = {mas = 1}", ".payload.mas", 'did you mean "mass"?'),
    ("payload = {radius = -1}", ".payload.radius", "-1 mm"),
    ("payload = {below = -1}", ".payload.below", "-1 mm"),
    ("payload = {outline = [[0, 0]]}", ".payload.outline", "1 points; at least 3"),
    (
        "payload = {radius = 1, outline = [[0, 0], [1, 0], [0, 1]]}",
        ".payload",
        "has radius and outline",
    ),
    ("path = []", ".path", "no points; at least one is needed"),
    ("path = 5", ".path", "5; points, or the name of a waypoint file, are needed"),
    ("path = [{x = 1}, 5]", ".path[2]", "5; a table is needed"),
    ("path = [{x = 1}, {}]", ".path[2]", "names no axis"),
    ("path = [{x = 1}, {speed = 3}]", ".path[2]", "names no axis"),
    ("path = [{x = 1}, {x = inf}]", ".path[2].x", "inf mm or deg; allowed"),
    ("path = [{x = 1, speed = 0}]", ".path[1].speed", "0 mm/s; allowed"),
    ("path = [{x = 1, wait = -1}]", ".path[1].wait", "-1 s; allowed"),
    ("path = [{x = 1, name = true}]", ".path[1].name", "true; a text is needed"),
    ("path = [{x = 1}]\ntolerance = -1", ".tolerance", "-1 mm; allowed: 0 to 1e+07 mm"),
    ("path = [{x = 1}]\nangle_tolerance = -1", ".angle_tolerance", "-1 deg; allowed"),
    ("path = [{x = 1}]\nspeed = -1", ".speed", "-1 mm/s; allowed"),
    ("transfer = {x = 1}\nheight = 1e8", ".height", "100000000 mm; allowed"),
    ("transfer = {x = 1}\nlift = -1", ".lift", "-1 mm; allowed: 0 to"),
    ("transfer = {x = 1}\nlower = -1", ".lower", "-1 mm; allowed: 0 to"),
    ('transfer = {x = 1}\nacross = "lines"', ".across", 'did you mean "line"?'),
    ("trace = 5", ".trace", "5; a text is needed"),
    ('trace = "a"\nlayers = "BEAD"', ".layers", "an array of texts is needed"),
    ('trace = "a"\nlayers = ["BEAD", 5]', ".layers", "an array of texts is needed"),
    ('trace = "a"\nlayers = []', ".layers", "names no layer; leave it out to follow all"),
    ('trace = "a"\nplace = {x = 1, trn = 2}', ".place.trn", 'did you mean "turn"?'),
    ('trace = "a"\nplace = {turn = "1 mm"}', ".place.turn", "an angle is needed"),
    ('trace = "a"\nplace = {y = nan}', ".place.y", "nan mm; allowed"),
    ('trace = "a"\nz = inf', ".z", "inf mm or deg; allowed"),
    ('trace = "a"\ntolerence = 1', ".tolerence", 'unknown key; did you mean "tolerance"?'),
    ('trace = "a"\ntolerance = -1', ".tolerance", "-1 mm; allowed"),
    ('trace = "a"\nheight = 5', ".height", "height belongs to transfer; a trace takes layers"),
    ('trace = "a"\nlift = -1', ".lift", "-1 mm; allowed"),
    ('trace = "a"\nlead_in = -1', ".lead_in", "-1 mm; allowed"),
    ('trace = "a"\ninside_first = 1', ".inside_first", "1; allowed: true or false"),
    ('trace = "a"\nwith_signal = "t_s"', ".with_signal", '"t_s" is reserved'),
]


@pytest.mark.parametrize(("step", "place", "words"), STEP_FAULTS)
def test_a_fault_of_a_step_is_reported_at_its_place(
    tmp_path: Path, step: str, place: str, words: str
) -> None:
    """One slip gives one fault; steps are counted from 1, as in the step table."""
    path = write(tmp_path, cycle_of("wait = 1", step))
    found = faults(lambda: read_cycle(path, MACHINE))
    assert [f"steps[2]{place}"] == [where for where, _ in found]
    assert words in found[0][1]


@pytest.mark.parametrize(
    ("text", "place", "words"),
    [
        ("[start]\nx = 0\n", "steps", "missing; at least one step is needed: [[steps]]"),
        ("steps = []\n[start]\nx = 0\n", "steps", "no steps; at least one is needed"),
        ("steps = 5\n[start]\nx = 0\n", "steps", "5; an array of tables is needed"),
        ("steps = [5]\n[start]\nx = 0\n", "steps[1]", "5; a table is needed"),
        ("[[steps]]\nwait = 1", "start", "missing; the position of every axis at the start"),
        ("start = 5\n[[steps]]\nwait = 1", "start", "5; a table is needed"),
        ("target = 0\n" + cycle_of("wait = 1"), "target", "0 s; allowed: above 0"),
        ("target = nan\n" + cycle_of("wait = 1"), "target", "nan s; allowed"),
        ("taget = 1\n" + cycle_of("wait = 1"), "taget", 'did you mean "target"?'),
        ('law = "quint"\n' + cycle_of("wait = 1"), "law", 'did you mean "quintic"?'),
        ("machine = 5\n" + cycle_of("wait = 1"), "machine", "5; a text is needed"),
        (cycle_of("wait = 1").replace("x = 0", "x = nan"), "start.x", "nan mm or deg"),
        (cycle_of("wait = 1").replace("x = 0", "x = []"), "start.x", "an array; needed"),
        (
            cycle_of('wait = 1\nname = "a"', 'wait = 1\nname = "a"'),
            "steps[2].name",
            '"a" stands for steps[1] already; step names are unique',
        ),
        (
            cycle_of('wait = 1\nname = "wait 2"', "wait = 1"),
            "steps[1].name",
            '"wait 2" stands for steps[2] already',
        ),
    ],
)
def test_a_fault_of_the_cycle_is_reported_at_its_place(
    tmp_path: Path, text: str, place: str, words: str
) -> None:
    """What stands above the steps is judged like them."""
    found = faults(lambda: read_cycle(write(tmp_path, text)))
    assert [place] == [where for where, _ in found]
    assert words in found[0][1]


def test_units_of_positions_are_not_judged_without_a_machine(tmp_path: Path) -> None:
    """Only the machine tells which axes are rotary."""
    path = write(tmp_path, cycle_of('move = {x = "5 deg", c = "1 in"}'))
    assert read_cycle(path).steps == (Move({"x": 5, "c": 25.4}),)


def test_faults_of_a_waypoint_file_bear_its_name(tmp_path: Path) -> None:
    """Faults of two files in one message must not be mixed up."""
    (tmp_path / "points.csv").write_text("x\n1\na\n", encoding="utf-8")
    path = write(tmp_path, cycle_of('path = "points.csv"\ntolerance = -1', 'path = "no.csv"'))
    with pytest.raises(InputError) as caught:
        read_cycle(path)
    assert [(fault.file, fault.place) for fault in caught.value.faults] == [
        (tmp_path / "points.csv", "line 3, column x"),
        (path, "steps[1].tolerance"),
        (tmp_path / "no.csv", ""),
    ]


def test_all_faults_of_a_file_come_at_once(tmp_path: Path) -> None:
    """Every slip of the long list above, in one file, gives its own fault."""
    steps = [step for step, _, _ in STEP_FAULTS]
    path = write(tmp_path, "target = -1\nqq = 1\n" + cycle_of(*steps))
    expected = {
        f"steps[{index}]{place}" for index, (_, place, _) in enumerate(STEP_FAULTS, start=1)
    } | {"target", "qq"}
    assert expected == {place for place, _ in faults(lambda: read_cycle(path, MACHINE))}


@pytest.mark.parametrize(
    ("act", "place", "words"),
    [
        (lambda: Move({}), "move", "names no axis"),
        (lambda: Move({"x": math.nan}), "move.x", "nan mm or deg"),
        (lambda: Line({"x": 1}, speed=-1), "speed", "-1 mm/s"),
        (lambda: Wait(-1), "wait", "-1 s; allowed: 0 to 1e+06 s"),
        (lambda: Wait(math.inf), "wait", "inf s"),
        (lambda: Signal({}), "signal", "names no output"),
        (lambda: Signal({"wait": True}), "signal.wait", "is reserved"),
        (lambda: Payload(-1), "payload.mass", "-1 kg"),
        (lambda: PathStep(()), "path", "no points"),
        (lambda: Waypoint({"x": 1}, wait=-1), "wait", "-1 s"),
        (lambda: Transfer({"x": 1}, lift=-1), "lift", "-1 mm"),
        (lambda: Place(turn=math.nan), "turn", "nan deg"),
        (lambda: Trace(Path("a"), lead_in=-1), "lead_in", "-1 mm"),
        (lambda: Cycle((), {"x": 0}), "steps", "no steps; at least one is needed"),
        (lambda: Cycle((Wait(1),), {}), "start", "names no axis"),
        (lambda: Cycle((Wait(1),), {"x": 0}, target=0), "target", "0 s; allowed: above 0"),
    ],
)
def test_records_built_in_code_are_judged_by_the_same_rules(
    act: Callable[[], object], place: str, words: str
) -> None:
    """A library user gets the messages that a file would get."""
    found = faults(act)
    assert [place] == [where for where, _ in found]
    assert words in found[0][1]


def test_records_do_not_share_what_they_were_made_of() -> None:
    """A frozen step that changes with the caller's dict would be frozen in name only."""
    to = {"x": 1.0}
    step = Move(to)
    to["x"] = 2.0
    assert step.to == {"x": 1.0}
    with pytest.raises(TypeError):
        step.to["x"] = 3.0  # type: ignore[index]


def test_a_step_without_a_name_is_called_by_kind_and_number() -> None:
    """Reports and messages need a word for every step."""
    cycle = Cycle((Move({"x": 1}), Wait(1, name="settle")), {"x": 0})
    assert [cycle.step_label(0), cycle.step_label(1)] == ["move 1", "settle"]


WORDS = (
    "move line wait signal payload path transfer trace x z speed time name tolerance outline "
    "radius place layers law lift"
)
KEYS = st.sampled_from([*WORDS.split(), ""])
TEXTS = st.sampled_from(["5 mm", "1,5 m/s", "quintic", "no.csv", "a\u0000b", "", "90 deg"])
JUNK = junk(KEYS | TEXTS)


@given(
    start=JUNK,
    steps=st.lists(st.dictionaries(KEYS, JUNK, max_size=4), max_size=4) | JUNK,
    machine=st.sampled_from([MACHINE, None]),
)
def test_junk_gives_a_cycle_or_input_error(
    tmp_path_factory: pytest.TempPathFactory, start: object, steps: object, machine: Machine | None
) -> None:
    """Whatever stands in a file, there is no traceback."""
    path = tmp_path_factory.getbasetemp() / "junk-cycle.toml"
    path.write_text(f"start = {toml(start)}\nsteps = {toml(steps)}\n", encoding="utf-8")
    try:
        found = len(read_cycle(path, machine).steps)
    except InputError as error:
        found = len(error.faults)
    assert found > 0
