"""Machine files: what is read, and every fault at its place."""

import math
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from junk import junk, toml
from profileplan.errors import InputError
from profileplan.inputs import (
    Axis,
    AxisLimits,
    Circle,
    Dialect,
    Keepout,
    Machine,
    Mechanics,
    SetpointSettings,
    Tool,
    read_machine,
)

# the whole format in one example, and the two axes that it leaves to the reader
EXAMPLE = """\
name = "Kiln loader"
up = "+z"                      # which direction of which axis is up ("-z" where z counts downward); leave out on a flat machine

[axes.x]                       # file order = column order; any names, 1 to 12 axes
kind = "linear"                # default; "rotary" counts in degrees
travel = [0, 2400]             # allowed positions, mm
velocity = 2000                # mm/s
acceleration = 12000           # mm/s², speeding up
deceleration = 9000            # mm/s², slowing down; default: acceleration
jerk = 200000                  # mm/s³; leave out: not limited
resolution = 0.001             # mm a drive increment stands for; optional

[axes.x.mechanics]             # optional
mass = 85

[tool]
radius = 45                    # footprint around the tool point, mm; or outline = [[x, y], ...]
margin = 5                     # clearance kept to anything, mm

[[keepouts]]
name = "kiln car post"
outline = [[900, 0], [960, 0], [960, 80], [900, 80]]   # or circle = {x, y, radius}, or dxf = "cell.dxf" with layer = "POSTS"
top = 180                      # the height up to which it blocks, on the up axis; leave out: to any height

[setpoints]
period = 0.001                 # s
"""  # noqa: E501 - as a user writes it
OTHER_AXES = """
[axes.y]
travel = [0, "1.2 m"]
velocity = "1.5 m/s"
acceleration = "0.5 g"

[axes.c]
kind = "rotary"
travel = ["-0.5 rev", 180]
velocity = "60 rpm"
acceleration = 3600

[axes.z]
travel = [0, 400]
velocity = 1000
acceleration = 5000
"""

SMALL = """\
name = "Portal"
up = "+z"
[axes.x]
travel = [0, 1000]
velocity = 2000
acceleration = 12000
[axes.z]
travel = [0, 400]
velocity = 1000
acceleration = 5000
[axes.c]
kind = "rotary"
travel = [-180, 180]
velocity = 360
acceleration = 3600
[tool]
radius = 45
[[keepouts]]
name = "post"
circle = { x = 1, y = 2, radius = 3 }
[[keepouts]]
name = "wall"
outline = [[0, 0], [1, 0], [0, 1]]
[setpoints]
period = 0.001
"""


def faults(act: Callable[[], object]) -> list[tuple[str, str]]:
    """Return place and message of every fault that an act ends with."""
    with pytest.raises(InputError) as caught:
        act()
    return [(fault.place, fault.message) for fault in caught.value.faults]


def write(folder: Path, text: str) -> Path:
    """Write a machine file."""
    path = folder / "machine.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_the_whole_format_is_read(tmp_path: Path) -> None:
    """Users start from this example; order of the axes and every value must come through."""
    path = write(tmp_path, EXAMPLE + OTHER_AXES)
    machine = read_machine(path)
    expected = Machine(
        "Kiln loader",
        (
            Axis(
                "x",
                travel=(0, 2400),
                velocity=2000,
                acceleration=12000,
                deceleration=9000,
                jerk=200000,
                resolution=0.001,
                mechanics=Mechanics(mass=85),
            ),
            Axis("y", travel=(0, 1200), velocity=1500, acceleration=4903.325),
            Axis("c", kind="rotary", travel=(-180, 180), velocity=360, acceleration=3600),
            Axis("z", travel=(0, 400), velocity=1000, acceleration=5000),
        ),
        up="+z",
        tool=Tool(radius=45, margin=5),
        keepouts=(
            Keepout(
                "kiln car post",
                outline=((900, 0), (960, 0), (960, 80), (900, 80)),
                top=180,
            ),
        ),
        setpoints=SetpointSettings(0.001),
        source=path,
    )
    assert expected == machine
    assert machine.axis_names == ("x", "y", "c", "z")
    assert machine.linear == (True, True, False, True)
    assert machine.up_axis == "z"


def test_limits_left_out_are_filled_in() -> None:
    """A planner needs four numbers, whatever the user wrote."""
    axis = Axis("x", travel=(0, 1), velocity=2, acceleration=3)
    assert axis.limits == AxisLimits(2, 3, 3, math.inf)
    assert axis.unit == "mm"


def test_a_machine_finds_its_axes_by_name() -> None:
    """Looking up an axis that is not there must not give another one."""
    axis = Axis("x", travel=(0, 1), velocity=2, acceleration=3)
    machine = Machine("m", (axis,))
    assert machine.axis("x") is axis
    with pytest.raises(KeyError):
        machine.axis("y")


def test_paths_of_drawings_count_from_the_machine_file(tmp_path: Path) -> None:
    """A job can be planned from any working directory."""
    text = SMALL.replace("circle = { x = 1, y = 2, radius = 3 }", 'dxf = "a/cell.dxf"\nlayer = "L"')
    keepout = read_machine(write(tmp_path, text)).keepouts[0]
    assert keepout == Keepout("post", dxf=tmp_path / "a" / "cell.dxf", layer="L")


def test_names_left_out_are_made_up(tmp_path: Path) -> None:
    """A sketch of a machine need not be named before it can be tried."""
    text = SMALL.replace('name = "Portal"\n', "").replace('name = "wall"\n', "")
    machine = read_machine(write(tmp_path, text))
    assert (machine.name, machine.keepouts[1].name) == ("machine", "keep-out 2")


AXIS_FAULTS = [
    ("velocity = 2000", "velocity = -5", "axes.x.velocity", "-5 mm/s; allowed: above 0"),
    ("velocity = 2000", "velocity = 0", "axes.x.velocity", "0 mm/s; allowed: above 0"),
    ("velocity = 2000", "velocity = 1e-7", "axes.x.velocity", "from 1e-06 to 1e+12 mm/s"),
    ("velocity = 2000", "velocity = 1e13", "axes.x.velocity", "1e+13 mm/s"),
    ("velocity = 2000", "velocity = nan", "axes.x.velocity", "nan mm/s; allowed"),
    ("velocity = 2000", "velocity = inf", "axes.x.velocity", "inf mm/s; allowed"),
    ("velocity = 2000", "velocity = true", "axes.x.velocity", "true; needed: a velocity"),
    ("velocity = 2000", 'velocity = "2 m"', "axes.x.velocity", '"m" is no unit of it'),
    ("velocity = 2000", 'velocity = "1,5 m/s"', "axes.x.velocity", "decimal point"),
    ("velocity = 2000", "velocity = 0x" + "f" * 5000, "axes.x.velocity", "more than 60 digits"),
    ("velocity = 2000", "velocity = 1979-05-27", "axes.x.velocity", "1979-05-27; needed"),
    ("velocity = 2000\n", "", "axes.x.velocity", "missing; a velocity in mm/s is needed"),
    ("= 2000", "= 2000\nvelocty = 1", "axes.x.velocty", 'did you mean "velocity"?'),
    ("= 2000", "= 2000\nqqq = 1", "axes.x.qqq", "unknown key; allowed: kind, travel, velocity"),
    ("= 2000", "= 2000\ndeceleration = -1", "axes.x.deceleration", "-1 mm/s²"),
    ("= 2000", "= 2000\njerk = 0", "axes.x.jerk", "0 mm/s³; allowed: above 0"),
    ("= 2000", "= 2000\nresolution = 0", "axes.x.resolution", "0 mm; allowed: above 0"),
    ("= 2000", "= 2000\nmechanics = 5", "axes.x.mechanics", "5; a table is needed"),
    ("= 2000", '= 2000\nkind = "liner"', "axes.x.kind", 'did you mean "linear"?'),
    ("acceleration = 12000", "acceleration = [1]", "axes.x.acceleration", "an array; needed"),
    ("[0, 1000]", "[1000, 0]", "axes.x.travel", "[1000, 0] mm; the lowest position comes first"),
    ("[0, 1000]", "[5, 5]", "axes.x.travel", "[5, 5] mm"),
    ("[0, 1000]", "[0, 1, 2]", "axes.x.travel", "an array of 3; [lowest, highest] in mm"),
    ("[0, 1000]", "7", "axes.x.travel", "7; [lowest, highest] in mm is needed"),
    ("[0, 1000]", "[0, inf]", "axes.x.travel[2]", "inf mm; allowed: -1e+07 to 1e+07 mm"),
    ("[0, 1000]", "[-2e7, 0]", "axes.x.travel[1]", "-20000000 mm; allowed"),
    ("[0, 1000]", '[0, "1 rev"]', "axes.x.travel[2]", "a length is needed"),
    ("travel = [0, 1000]\n", "", "axes.x.travel", "missing; [lowest, highest] in mm is needed"),
    ("velocity = 360", "velocity = 0", "axes.c.velocity", "0 deg/s; allowed"),
    ("velocity = 360", 'velocity = "1 m/s"', "axes.c.velocity", "an angular velocity is needed"),
    ("[axes.x]", "[axes.speed]", "axes.speed", '"speed" is reserved'),
    ("[axes.x]", "[axes.t_s]", "axes.t_s", '"t_s" is reserved'),
    ("[axes.x]", '[axes." x"]', 'axes." x"', "no space at its ends"),
    ("[axes.x]", '[axes.""]', 'axes.""', "a name has printable characters"),
    ("[axes.x]", '[axes."a\\u0007"]', 'axes."a\N{REPLACEMENT CHARACTER}"', "printable"),
    ("[axes.x]", "[axes]\ny = 5\n[axes.x]", "axes.y", "5; a table is needed"),
]
OTHER_FAULTS = [
    ('up = "+z"', 'up = "z"', "up", '"z"; allowed: a sign and the name of a linear axis: "+x"'),
    ('up = "+z"', 'up = "+c"', "up", '"+c"; allowed'),
    ('up = "+z"', 'up = "+q"', "up", '"+q"; allowed'),
    ('up = "+z"', "up = 3", "up", "3; a text is needed"),
    ('name = "Portal"', "name = 3", "name", "3; a text is needed"),
    ('name = "Portal"', 'name = ""', "name", '""; a name has'),
    ('name = "Portal"', 'nam = "Portal"', "nam", 'did you mean "name"?'),
    ("radius = 45", "radius = -1", "tool.radius", "-1 mm; allowed: 0 to"),
    ("radius = 45", "margin = -1", "tool.margin", "-1 mm; allowed: 0 to 1e+07 mm"),
    ("radius = 45", "radios = 1", "tool.radios", 'did you mean "radius"?'),
    ("radius = 45", "outline = [[0, 0], [1, 1]]", "tool.outline", "2 points; at least 3"),
    ("radius = 45", "outline = [[0, 0], [1, 1], [2, 2]]", "tool.outline", "encloses no area"),
    ("radius = 45", "outline = [[0, 0], [1], [2, 2]]", "tool.outline[2]", "a point [x, y]"),
    ("radius = 45", "outline = [[0, 0], [1, true], [2, 0]]", "tool.outline[2].y", "true; needed"),
    ("radius = 45", "outline = [[0, 0], [1, nan], [2, 0]]", "tool.outline[2].y", "nan mm"),
    ("radius = 45", "outline = 3", "tool.outline", "an array of points [x, y] is needed"),
    (
        "radius = 45",
        "radius = 45\noutline = [[0, 0], [1, 0], [0, 1]]",
        "tool",
        "has radius and outline; at most one",
    ),
    ('name = "wall"', 'name = "post"', "keepouts[2].name", "keepouts[1]"),
    ("radius = 3 }", "radius = 0 }", "keepouts[1].circle.radius", "0 mm; allowed: above 0"),
    ("radius = 3 }", "radius = 3, z = 1 }", "keepouts[1].circle.z", "unknown key"),
    ("y = 2, ", "", "keepouts[1].circle.y", "missing; a length in mm is needed"),
    ("circle = { x = 1, y = 2, radius = 3 }", "", "keepouts[1]", "exactly one of outline, circle"),
    ('name = "wall"', 'name = "wall"\ndxf = "a"\nlayer = "L"', "keepouts[2]", "outline and dxf"),
    ("outline = [[0, 0], [1, 0], [0, 1]]", 'dxf = "a"', "keepouts[2].layer", "missing; a drawing"),
    ('name = "wall"', 'name = "wall"\nlayer = "L"', "keepouts[2].layer", '"L"; only with dxf'),
    ('name = "wall"', 'name = "wall"\ntop = "3 kg"', "keepouts[2].top", "a length is needed"),
    ("period = 0.001", "period = 20e-6", "setpoints.period", "2e-05 s; allowed: above 0, from 5e"),
    ("period = 0.001", "period = 2", "setpoints.period", "2 s; allowed"),
    ("period = 0.001", "period = 0.0003333333333", "setpoints.period", "whole number of nanosec"),
    ("period = 0.001", "perod = 0.001", "setpoints.perod", 'did you mean "period"?'),
    ("[setpoints]", "[setpoint]", "setpoint", 'did you mean "setpoints"?'),
]


@pytest.mark.parametrize(("old", "new", "place", "words"), AXIS_FAULTS + OTHER_FAULTS)
def test_a_fault_is_reported_at_its_place(
    tmp_path: Path, old: str, new: str, place: str, words: str
) -> None:
    """One slip gives one fault, with the value found and what is allowed."""
    assert old in SMALL
    path = write(tmp_path, SMALL.replace(old, new, 1))
    found = faults(lambda: read_machine(path))
    assert [place] == [where for where, _ in found]
    assert words in found[0][1]


def test_a_top_needs_an_up_axis(tmp_path: Path) -> None:
    """On a flat machine a height means nothing, and ignoring it would hide a collision."""
    text = SMALL.replace('up = "+z"\n', "").replace('name = "wall"', 'name = "wall"\ntop = 20')
    found = faults(lambda: read_machine(write(tmp_path, text)))
    assert found == [("keepouts[2].top", "20 mm; only on a machine with an up axis: give `up`")]


@pytest.mark.parametrize(
    ("text", "place", "words"),
    [
        ("", "axes", "missing; at least one axis is needed"),
        ("axes = {}", "axes", "0 axes; allowed: 1 to 12"),
        ("axes = 5", "axes", "5; a table is needed"),
        ("x =\ny = 1", "line 1, column 4", "no valid TOML"),
        ("x = [1", "end of document", "no valid TOML"),
        ("a = 1\na = 2\n", "line 2, column 6", "no valid TOML"),
        ("x = " + "[" * 100_000, "", "nested too deep"),
        ("x = " + "9" * 5000, "", "no valid TOML"),
    ],
)
def test_a_file_that_is_no_machine_is_refused(
    tmp_path: Path, text: str, place: str, words: str
) -> None:
    """What is not even a table of axes gets one clear message."""
    found = faults(lambda: read_machine(write(tmp_path, text)))
    assert [place] == [where for where, _ in found]
    assert words in found[0][1]


def test_thirteen_axes_are_too_many(tmp_path: Path) -> None:
    """The bound is part of the file format."""
    axis = "travel = [0, 1]\nvelocity = 1\nacceleration = 1\n"
    text = "".join(f"[axes.a{index}]\n{axis}" for index in range(13))
    found = faults(lambda: read_machine(write(tmp_path, text)))
    assert found == [("axes", "13 axes; allowed: 1 to 12")]


def test_a_file_that_cannot_be_read_is_named(tmp_path: Path) -> None:
    """The three ways a path goes wrong, each with its own words."""
    binary = tmp_path / "binary.toml"
    binary.write_bytes(b'name = "a"\nup = "\xff"\n')
    cases = [
        (tmp_path / "no.toml", "", "no such file"),
        (tmp_path, "", "is a directory; a file is needed"),
        (tmp_path / "a\0b", "", "cannot be read: embedded null byte"),
        (binary, "line 2", "byte 0xff is not UTF-8; the file must be saved as UTF-8"),
    ]
    for path, place, message in cases:
        with pytest.raises(InputError) as caught:
            read_machine(path)
        (fault,) = caught.value.faults
        assert (fault.place, fault.message, fault.file) == (place, message, path)


def test_a_byte_order_mark_is_no_fault(tmp_path: Path) -> None:
    """Some editors put it there unasked."""
    path = tmp_path / "machine.toml"
    path.write_bytes(b"\xef\xbb\xbf" + SMALL.encode())
    assert read_machine(path).name == "Portal"


def test_all_faults_of_a_file_come_at_once(tmp_path: Path) -> None:
    """Nobody wants to run the program once for each slip."""
    text = SMALL
    slips = [
        ("velocity = 2000", "velocity = -5", "axes.x.velocity"),
        ("acceleration = 12000", "acceleraton = 12000", "axes.x.acceleraton"),
        ("velocity = 1000\n", "", "axes.z.velocity"),
        ("[0, 400]", '[0, "x"]', "axes.z.travel[2]"),
        ('kind = "rotary"', "kind = 7", "axes.c.kind"),
        ('up = "+z"', 'up = "+y"', "up"),
        ("radius = 45", "radius = true", "tool.radius"),
        ("radius = 3", "radius = -3", "keepouts[1].circle.radius"),
        ("period = 0.001", "period = 5", "setpoints.period"),
    ]
    for old, new, _ in slips:
        text = text.replace(old, new, 1)
    path = write(tmp_path, text)
    with pytest.raises(InputError) as caught:
        read_machine(path)
    expected = {place for _, _, place in slips} | {"axes.x.acceleration"}
    assert expected == {fault.place for fault in caught.value.faults}
    assert {path} == {fault.file for fault in caught.value.faults}
    assert len(expected) == len(caught.value.faults)


X_AXIS = Axis("x", travel=(0, 1), velocity=1, acceleration=1)


@pytest.mark.parametrize(
    ("act", "place", "words"),
    [
        (
            lambda: Axis("x", travel=(0, 1), velocity=-5, acceleration=1),
            "velocity",
            "-5 mm/s; allowed: above 0, from 1e-06 to 1e+12 mm/s",
        ),
        (
            lambda: Axis("x", travel=(0, 1), velocity=1, acceleration=1, jerk=math.inf),
            "jerk",
            "inf mm/s³",
        ),
        (lambda: Axis("name", travel=(0, 1), velocity=1, acceleration=1), "", "is reserved"),
        (lambda: Axis("x", travel=(1, 0), velocity=1, acceleration=1), "travel", "[1, 0] mm"),
        (lambda: Circle(0, math.nan, 1), "y", "nan mm"),
        (lambda: Keepout("k"), "", "exactly one of"),
        (lambda: Tool(margin=-1), "margin", "-1 mm"),
        (lambda: Tool(radius=1, outline=((0, 0), (1, 0), (0, 1))), "", "radius and outline"),
        (lambda: SetpointSettings(math.pi / 10), "period", "whole number of nanoseconds"),
        (lambda: Machine("m", ()), "axes", "0 axes; allowed: 1 to 12"),
        (lambda: Machine("m", (X_AXIS, X_AXIS)), "axes.x", '"x" is the name of axes.x too'),
        (lambda: Machine("m", (X_AXIS,), up="x"), "up", '"x"; allowed'),
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
    """A frozen record that changes with the caller's dict would be frozen in name only."""
    raw = {"x_pos_mm": "X"}
    dialect = Dialect(names=raw)
    raw["x_pos_mm"] = "Y"
    assert dialect.names == {"x_pos_mm": "X"}


PROGRAM = """
import sys
from profileplan.errors import InputError
from profileplan.inputs import read_machine
try:
    read_machine(sys.argv[1])
except InputError as error:
    print(error.faults[0].place)
print([name for name in ("numpy", "click", "shapely", "ezdxf", "scipy") if name in sys.modules])
"""


def test_a_bad_file_is_refused_before_anything_heavy_is_loaded(tmp_path: Path) -> None:
    """A typing mistake must be answered at once."""
    path = write(tmp_path, SMALL.replace("velocity", "velocty", 1))
    result = subprocess.run(
        [sys.executable, "-c", PROGRAM, str(path)], capture_output=True, text=True, check=True
    )
    assert result.stdout == "axes.x.velocity\n[]\n"


VALID = {
    "name": "Portal",
    "up": "+z",
    "axes": {
        "x": {"travel": [0, 1], "velocity": 1, "acceleration": 1, "kind": "linear"},
        "z": {"travel": [0, 1], "velocity": "1 m/s", "acceleration": 1, "jerk": 5},
    },
    "tool": {"outline": [[0, 0], [1, 0], [0, 1]], "margin": 0},
    "keepouts": [{"name": "a", "circle": {"x": 0, "y": 0, "radius": 1}, "top": 3}],
    "setpoints": {"period": 0.001},
}

WORDS = st.sampled_from(
    ["x", "axes", "travel", "up", "kind", "name", "tool", "outline", "dxf", "5 mm", "1,5 m/s", ""]
) | st.text("ab\u00e9 .[]\U0001f600", max_size=5)
JUNK = junk(WORDS)


def with_junk(node: object, place: list[int], thing: object) -> object:
    """Return a structure with junk at one place; the numbers choose the way to it."""
    if not place or not isinstance(node, (dict, list)) or not node:
        return thing
    chosen = place[0] % len(node)
    if isinstance(node, list):
        return [
            with_junk(item, place[1:], thing) if index == chosen else item
            for index, item in enumerate(node)
        ]
    return {
        key: with_junk(item, place[1:], thing) if index == chosen else item
        for index, (key, item) in enumerate(node.items())
    }


@given(place=st.lists(st.integers(0, 5), min_size=1, max_size=5), thing=JUNK)
def test_junk_at_any_place_gives_a_machine_or_input_error(
    tmp_path_factory: pytest.TempPathFactory, place: list[int], thing: object
) -> None:
    """Whatever stands anywhere in a file, there is no traceback."""
    structure = with_junk(VALID, place, thing)
    assert isinstance(structure, dict)
    path = tmp_path_factory.getbasetemp() / "junk.toml"
    lines = (f"{toml(key)} = {toml(value)}" for key, value in structure.items())
    path.write_text("\n".join(lines), encoding="utf-8")
    try:
        files = {read_machine(path).source}
    except InputError as error:
        files = {Path(str(fault.file)) for fault in error.faults}
    assert files == {path}


@given(st.binary(max_size=40))
def test_any_bytes_give_a_machine_or_input_error(
    tmp_path_factory: pytest.TempPathFactory, data: bytes
) -> None:
    """A wrong file given by mistake may hold anything."""
    path = tmp_path_factory.getbasetemp() / "bytes.toml"
    path.write_bytes(data)
    with pytest.raises(InputError):
        read_machine(path)
