"""Patterns of places, and the steps that a cycle file gives for each of them."""

from __future__ import annotations

import contextlib
import json
import math
from itertools import pairwise
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
import pytest
from click.testing import CliRunner
from hypothesis import given
from hypothesis import strategies as st

import profileplan as pp
from junk import junk, toml
from profileplan.cli import cli
from profileplan.errors import InputError
from profileplan.inputs import (
    Axis,
    Cycle,
    Line,
    Machine,
    Move,
    Part,
    Pattern,
    Wait,
    expand,
)
from profileplan.planning import plan
from profileplan.summary import summarise

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from profileplan.inputs.patterns import RowOrder

MACHINE = """\
name = "Kiln loader"
axes.x = { travel = [0, 2400], velocity = 2000, acceleration = 6000 }
axes.y = { travel = [0, 1200], velocity = 2000, acceleration = 9000 }
axes.z = { travel = [0, 450], velocity = 1200, acceleration = 8000 }
"""

HEAD = """\
machine = "machine.toml"
start = { x = 0, y = 0, z = 300 }
[[patterns]]
name = "car"
origin = { x = 1500, y = 200, z = 30 }
columns = 2
column_pitch = { x = 160 }
rows = 2
row_pitch = { y = 210 }
[[patterns]]
name = "stack"
origin = { x = 350, y = 300, z = 220 }
layers = 4
layer_pitch = { z = -8 }
"""

GROUP = """\
[[steps]]
move = { x = 100 }
[[steps]]
for_each = ["stack", "car"]
name = "tile"
[[steps.steps]]
move = { place = "stack", offset = { z = 40 } }
[[steps.steps]]
name = "pick"
line = { place = "stack" }
speed = 200
[[steps.steps]]
signal = { vacuum = true }
[[steps.steps]]
path = [{ place = "stack", z = 300 }, { place = "car", offset = { z = 50 }, speed = 900 }]
[[steps.steps]]
wait = 0.1
[[steps]]
name = "home"
move = { x = 0 }
"""


def folder_with(folder: Path, steps: str, head: str = HEAD) -> Path:
    """Write a machine file and a cycle file, and return the cycle's."""
    (folder / "machine.toml").write_text(MACHINE, encoding="utf-8")
    cycle = folder / "cycle.toml"
    cycle.write_text(head + steps, encoding="utf-8")
    return cycle


def faults(act: Callable[[], object]) -> list[tuple[str, str]]:
    """Return place and message of every fault that an act ends with."""
    with pytest.raises(InputError) as caught:
        act()
    return [(fault.place, fault.message) for fault in caught.value.faults]


def faults_in(folder: Path, steps: str, head: str = HEAD) -> list[tuple[str, str]]:
    """Return the faults of a cycle file."""
    return faults(lambda: pp.load_job(folder_with(folder, steps, head)))


Triple: TypeAlias = tuple[float, float, float]


def grid(
    order: RowOrder, counts: tuple[int, ...] = (3, 2, 2), pitch: Triple = (100.0, 50.0, -2.0)
) -> list[tuple[float, ...]]:
    """Return the places of columns, rows and layers from (10, 20, 5)."""
    pattern = Pattern(
        "car",
        {"x": 10.0, "y": 20.0, "z": 5.0},
        **dict(zip(("columns", "rows", "layers"), counts, strict=True)),
        column_pitch={"x": pitch[0]},
        row_pitch={"y": pitch[1]},
        layer_pitch={"z": pitch[2]},
        order=order,
    )
    return [tuple(place.values()) for place in pattern.places()]


def test_places_come_row_by_row_and_layer_by_layer() -> None:
    """Backwards in every second row saves the way back; a layer begins at its first place again."""
    first, second = [(10, 20), (110, 20), (210, 20)], [(10, 70), (110, 70), (210, 70)]
    assert grid("rows") == [(x, y, z) for z in (5, 3) for x, y in first + second]
    assert grid("back and forth") == [(x, y, z) for z in (5, 3) for x, y in first + second[::-1]]


def test_a_pitch_may_lean_over_several_axes() -> None:
    """Cars do not always stand square to the machine."""
    pattern = Pattern("car", {"x": 1.0, "y": 2.0}, rows=2, row_pitch={"x": 0.5, "y": 3.0})
    assert [dict(place) for place in pattern.places()] == [{"x": 1, "y": 2}, {"x": 1.5, "y": 5}]


def test_multiples_of_a_decimal_pitch_stay_decimal() -> None:
    """Or the last of 24 places, 0.1 mm apart, would lie outside of a travel that ends with it."""
    pattern = Pattern("stack", {"z": 0.0}, layers=25, layer_pitch={"z": 0.1})
    assert [place["z"] for place in pattern.places()] == [i / 10 for i in range(25)]


numbers = st.integers(1, 5)
pitches = st.tuples(*[st.integers(1, 1000).flatmap(lambda n: st.sampled_from([n / 8, -n / 8]))] * 3)


@given(st.tuples(numbers, numbers, numbers), pitches)
def test_neighbours_back_and_forth_differ_by_one_pitch(
    counts: tuple[int, int, int], pitch: Triple
) -> None:
    """All places are there, each once, and no way within a layer is longer than a pitch."""
    places = grid("back and forth", counts, pitch)
    assert len(places) == len(set(places)) == math.prod(counts)
    assert set(places) == {
        tuple(np.add((10.0, 20.0, 5.0), np.multiply(number, pitch)).tolist())
        for number in np.ndindex(counts)
    }
    for before, after in pairwise(places):
        way = np.abs(np.subtract(after, before))
        if before[2] == after[2]:
            moved = np.flatnonzero(way)
            assert len(moved) == 1
            assert way[moved] == abs(pitch[moved[0]])


def test_a_group_is_the_same_as_its_steps_written_out(tmp_path: Path) -> None:
    """A group is short for steps that could be written by hand: the plan is the same to the bit."""
    job = pp.load_job(folder_with(tmp_path, GROUP))
    car = [(1500, 200), (1660, 200), (1500, 410), (1660, 410)]
    by_hand: list[pp.inputs.Step] = [Move({"x": 100})]
    for number, (x, y) in enumerate(car, start=1):
        z = 220 - 8 * (number - 1)
        stack = {"x": 350, "y": 300}
        by_hand += [
            Move({**stack, "z": z + 40}, name=f"tile {number}: move 1"),
            Line({**stack, "z": z}, speed=200, name=f"tile {number}: pick"),
            pp.Signal({"vacuum": True}, name=f"tile {number}: signal 3"),
            pp.PathStep(
                (
                    pp.Waypoint({**stack, "z": 300}),
                    pp.Waypoint({"x": x, "y": y, "z": 80}, speed=900),
                ),
                name=f"tile {number}: path 4",
            ),
            Wait(0.1, name=f"tile {number}: wait 5"),
        ]
    by_hand.append(Move({"x": 0}, name="home"))
    assert job.cycle.steps == tuple(by_hand)
    planned = plan(job)
    other = plan(job.machine, Cycle(tuple(by_hand), {"x": 0, "y": 0, "z": 300}))
    assert [step.name for step in planned.steps] == [step.name for step in other.steps]
    for step, same in zip(planned.steps, other.steps, strict=True):
        np.testing.assert_array_equal(step.trajectory.breaks, same.trajectory.breaks)
        np.testing.assert_array_equal(step.trajectory.coefficients, same.trajectory.coefficients)


def test_inline_steps_and_tables_of_steps_are_the_same(tmp_path: Path) -> None:
    """TOML writes an array of tables in two ways."""
    inline = '[[steps]]\nfor_each = "car"\nsteps = [{ move = { place = "car" } }, { wait = 1 }]\n'
    tables = (
        '[[steps]]\nfor_each = ["car"]\n[[steps.steps]]\nmove = { place = "car" }\n'
        "[[steps.steps]]\nwait = 1\n"
    )
    one = pp.load_job(folder_with(tmp_path, inline)).cycle
    assert one == pp.load_job(folder_with(tmp_path, tables)).cycle
    assert [part.name for part in one.parts] == ["part 1", "part 2", "part 3", "part 4"]


def test_axes_beside_a_place_override_it(tmp_path: Path) -> None:
    """A table may take x and y of a place, and go there at a height of its own."""
    steps = '[[steps]]\nfor_each = "car"\nsteps = [{ transfer = { place = "car", z = 300 } }]\n'
    job = pp.load_job(folder_with(tmp_path, steps))
    assert job.cycle.steps[3] == pp.Transfer(
        {"x": 1660, "y": 410, "z": 300}, name="part 4: transfer 1"
    )


def test_from_and_to_restrict_the_places(tmp_path: Path) -> None:
    """A car may be filled in two goes, with something else between them: numbers go on."""
    half = (
        '[[steps]]\nfor_each = "car"\nname = "tile"\n{}\n'
        'steps = [{{ move = {{ place = "car" }} }}]\n'
    )
    text = half.format("to = 3") + "[[steps]]\nwait = 1\n" + half.format("from = 4")
    cycle = pp.load_job(folder_with(tmp_path, text)).cycle
    assert cycle.parts == (
        Part("tile 1", 0, 0),
        Part("tile 2", 1, 1),
        Part("tile 3", 2, 2),
        Part("tile 4", 4, 4),
    )
    assert isinstance(cycle.steps[4], Move)
    assert cycle.steps[4].to["y"] == 410


def test_faults_of_patterns_stand_at_their_place(tmp_path: Path) -> None:
    """All at once, and none of them again in the steps that use the pattern."""
    head = """\
machine = "machine.toml"
start = { x = 0, y = 0, z = 300 }
[[patterns]]
name = "car"
origin = { x = 1500, y = "200 kg" }
columns = 2
rows = 0
row_pitch = { y = 10, z = 4 }
[[patterns]]
name = "car"
origin = { x = 1, u = 4 }
layers = 1.5
layr_pitch = { x = 4 }
order = "row"
[[patterns]]
name = "far"
origin = { x = 9e6 }
columns = 3
column_pitch = { x = 1e6 }
[[patterns]]
name = "many"
origin = { x = 1 }
columns = 1000
column_pitch = { x = 1 }
rows = 1000
row_pitch = { x = 1 }
[[patterns]]
name = "nowhere"
"""
    steps = (
        '[[steps]]\nfor_each = "car"\nsteps = [{ move = { place = "car", offset = { w = 4 } } }]\n'
    )
    found = dict(faults_in(tmp_path, steps, head))
    assert found == {
        "patterns[1].origin.y": '"200 kg"; a length is needed, and "kg" is no unit of it: '
        "allowed are µm, mm, cm, m, in, ft",
        "patterns[1].column_pitch": "missing; 2 columns need the offset to the next, by axis",
        "patterns[1].rows": "0; allowed: 1 to 100,000",
        "patterns[1].row_pitch.z": "the origin has no axis z; it has x, y",
        "patterns[2].name": '"car" is the name of another pattern too',
        "patterns[2].origin.u": "unknown axis; this machine has x, y, z",
        "patterns[2].layers": "1.5; a whole number is needed",
        "patterns[2].layr_pitch": 'unknown key; did you mean "layer_pitch"?',
        "patterns[2].order": '"row"; allowed: "rows", "back and forth"; did you mean "rows"?',
        "patterns[3].column_pitch.x": "1000000; column 3 would be at 11000000 mm or deg; "
        "allowed: -1e+07 to 1e+07 mm or deg",
        "patterns[4]": "1000 × 1000 × 1 are 1,000,000 places; at most 100,000 are allowed",
        "patterns[5].origin": "missing; the axis positions of the first place are needed",
    }


FAULTY_STEPS = {
    '{ move = { place = "cra" } }': (".move.place", 'unknown pattern "cra"; did you mean "car"?'),
    '{ line = { place = "stack" } }': (
        ".line.place",
        '"stack" is not gone through here; for_each has "car"',
    ),
    '{ move = { place = "car", offset = { u = 4 } } }': (
        ".move.offset.u",
        "car has no axis u; it has x, y, z",
    ),
    '{ move = { place = "car", z = 4, offset = { z = 4 } } }': (
        ".move.offset.z",
        "z has a position beside, which overrides the place; leave one out",
    ),
    "{ path = [{ x = 4 }, { offset = { z = 4 } }] }": (
        ".path[2].offset",
        'is added to a place; place = "NAME" is missing',
    ),
    "{ move = { place = 4 } }": (".move.place", "4; a text is needed"),
    '{ for_each = "car", steps = [] }': (
        ".for_each",
        "stands inside of a for_each; groups do not nest",
    ),
    '{ line = { place = "car", x = 2500 } }': (
        ".line.x",
        "2500 mm; outside of the travel, 0 to 2400 mm",
    ),
}


@pytest.mark.parametrize("step", FAULTY_STEPS)
def test_a_fault_in_a_group_is_told_once(step: str, tmp_path: Path) -> None:
    """At the step as it is written, not for each of the places."""
    place, message = FAULTY_STEPS[step]
    steps = f'[[steps]]\nwait = 1\n[[steps]]\nfor_each = "car"\nsteps = [{{ wait = 0 }}, {step}]\n'
    assert faults_in(tmp_path, steps) == [(f"steps[2].steps[2]{place}", message)]


FAULTY_GROUPS = {
    'for_each = "cra"': ("for_each", 'unknown pattern "cra"; did you mean "car"?'),
    "for_each = []": ("for_each", "an array; a pattern's name, or an array of names, is needed"),
    'for_each = ["car", 4]': ("for_each[2]", "4; the name of a pattern is needed"),
    'for_each = ["car", "car"]': (
        "for_each[2]",
        '"car" stands here twice; each is gone through once',
    ),
    'for_each = "car"\nfrom = 0': ("from", "0; allowed: 1 to 4"),
    'for_each = "car"\nto = 5': ("to", "5; car has 4 places"),
    'for_each = "car"\nfrom = 3\nto = 2': (
        "to",
        "2; before the first place that is gone through, 3",
    ),
    'for_each = "car"\nname = ""': (
        "name",
        '""; a name has printable characters, and no space at its ends',
    ),
}


@pytest.mark.parametrize("group", FAULTY_GROUPS)
def test_a_faulty_group_is_told_at_its_key(group: str, tmp_path: Path) -> None:
    """A slip in what is gone through brings no other faults with it."""
    place, message = FAULTY_GROUPS[group]
    steps = f"[[steps]]\n{group}\nsteps = [{{ wait = 1 }}]\n"
    assert faults_in(tmp_path, steps) == [(f"steps[1].{place}", message)]


ONE_FAULT = {
    "two groups with parts in common": (
        '[[steps]]\nfor_each = "car"\nsteps = [{ name = "put", move = { place = "car" } }]\n' * 2,
        "steps[2].name",
        '"part 1" is a part of steps[1] too; parts are unique',
    ),
    "more of the one than of the other": (
        '[[steps]]\nfor_each = ["high", "car"]\nsteps = [{ wait = 1 }]\n',
        "steps[1].for_each",
        "high has 60000, car has 4 places; gone through together, all have the same number",
    ),
    "a place outside of groups": (
        '[[steps]]\nmove = { place = "car" }\n',
        "steps[1].move.place",
        "only the steps of a for_each go to places; give axis positions",
    ),
    "so many steps that they would fill the memory": (
        '[[steps]]\nfor_each = "high"\nsteps = [{ wait = 0 }, { move = { place = "high" } }]\n',
        "steps[1].steps",
        "60,000 places of 2 steps each; all parts together may have 100,000 steps",
    ),
    "a step named like one of a part": (
        """\
[[steps]]
name = "part 2: wait 1"
wait = 1
[[steps]]
for_each = "car"
steps = [{ wait = 1 }]
""",
        "steps[2].steps[1].name",
        '"part 2: wait 1" stands for steps[1] already; step names are unique',
    ),
}

HIGH = """\
[[patterns]]
name = "high"
origin = { z = 0 }
layers = 60_000
layer_pitch = { z = 0.001 }
"""


@pytest.mark.parametrize("slip", ONE_FAULT)
def test_a_slip_is_one_fault(slip: str, tmp_path: Path) -> None:
    """It is told where it is written, and brings no others with it."""
    steps, place, message = ONE_FAULT[slip]
    assert faults_in(tmp_path, steps, HEAD + HIGH) == [(place, message)]


def test_places_outside_of_the_travel_are_counted(tmp_path: Path) -> None:
    """One fault for a pattern, whichever steps go there, with the first place and their number."""
    head = HEAD.replace("x = 160", "x = 950")
    steps = """\
[[steps]]
for_each = ["stack", "car"]
steps = [
    { move = { place = "stack" } },
    { move = { place = "car", z = 300 } },
    { line = { place = "car" } },
    { line = { place = "car", offset = { z = 425 } } },
    { line = { place = "stack", offset = { z = -200 } } },
]
"""
    assert faults_in(tmp_path, steps, head) == [
        (
            "steps[1].steps[2].move.place",
            "place 2 of car: x = 2450 mm; outside of the travel, 0 to 2400 mm (2 places in all)",
        ),
        (
            "steps[1].steps[4].line.place",
            (
                "place 1 of car with 425 added: z = 455 mm; outside of the travel, 0 to 450 mm "
                "(4 places in all)"
            ),
        ),
        (
            "steps[1].steps[5].line.place",
            "place 4 of stack with -200 added: z = -4 mm; outside of the travel, 0 to 450 mm",
        ),
    ]


def test_all_axes_that_a_place_is_outside_with_are_told(tmp_path: Path) -> None:
    """They share the key that is at fault, and none of them hides another."""
    head = HEAD.replace("x = 1500, y = 200", "x = 2500, y = 1300")
    steps = '[[steps]]\nfor_each = "car"\nsteps = [{ move = { place = "car" } }]\n'
    ((place, message),) = faults_in(tmp_path, steps, head)
    assert place == "steps[1].steps[1].move.place"
    assert "place 1 of car: x = 2500 mm; outside" in message
    assert "place 1 of car: y = 1300 mm; outside" in message


def test_an_axis_may_be_called_place(tmp_path: Path) -> None:
    """Names of axes are free; only the steps of a group read the word otherwise."""
    (tmp_path / "cycle.toml").write_text(
        "[start]\nplace = 0\n[[steps]]\nmove = { place = '5 cm' }\n", encoding="utf-8"
    )
    machine = Machine("Slide", (Axis("place", travel=(0, 100), velocity=1, acceleration=1),))
    cycle = pp.read_cycle(tmp_path / "cycle.toml", machine)
    assert cycle.steps == (Move({"place": 50}),)


@given(st.data())
def test_no_group_ends_in_a_traceback(
    tmp_path_factory: pytest.TempPathFactory, data: st.DataObject
) -> None:
    """Whatever stands in a group, faults are told as faults."""
    words = st.sampled_from(
        [
            "for_each",
            "steps",
            "place",
            "offset",
            "move",
            "path",
            "car",
            "stack",
            "from",
            "z",
            "name",
        ]
    )
    value = data.draw(st.dictionaries(words, junk(words), max_size=5))
    text = "".join(f"{toml(key)} = {toml(item)}\n" for key, item in value.items())
    extra = "" if "for_each" in value else 'for_each = "car"\n'
    path = folder_with(tmp_path_factory.mktemp("junk"), f"[[steps]]\n{extra}{text}")
    with contextlib.suppress(InputError):
        pp.load_job(path)


def test_a_group_is_built_in_code_too() -> None:
    """What a file can do, a script can; and the parts go where the steps go."""
    stack = Pattern("stack", {"x": 350.0, "z": 220.0}, layers=3, layer_pitch={"z": -8.0})
    made = expand("tile", [stack], lambda at: [Move(at["stack"]), Wait(0.1)], index=1, first=2)
    assert made.parts == (Part("tile 2", 1, 2), Part("tile 3", 3, 4))
    assert made.steps[0] == Move({"x": 350, "z": 212}, name="tile 2: move 1")
    cycle = Cycle((Wait(1), *made.steps), {"x": 0, "z": 300}, parts=made.parts)
    assert cycle.step_label(4) == "tile 3: wait 2"


def test_faults_of_code_are_told_like_those_of_a_file() -> None:
    """A script's slip is refused at the call that makes it."""
    one, two = Pattern("one", {"x": 0.0}), Pattern("two", {"x": 0.0}, rows=2, row_pitch={"x": 1.0})
    assert faults(lambda: expand("tile", [], lambda _: [Wait(1)])) == [
        ("for_each", "no pattern; at least one is needed")
    ]
    assert [place for place, _ in faults(lambda: expand("tile", [one, two], lambda _: []))] == [
        "for_each"
    ]
    assert faults(lambda: expand("tile", [two], lambda _: [])) == [
        ("steps", "no steps for tile 1; at least one is needed")
    ]
    assert faults(lambda: expand("tile", [two], lambda _: [Wait(0)], last=3)) == [
        ("last", "3; two has 2 places")
    ]
    assert [
        place
        for place, _ in faults(
            lambda: Cycle((Wait(1),), {"x": 0}, parts=(Part("a", 0, 1), Part("a", 0, 0)))
        )
    ] == ["parts[2].name", "parts[1].last", "parts[2].first"]


def test_the_summary_tells_how_long_parts_take(tmp_path: Path) -> None:
    """Scripts read the time of every part; cycles without parts have no such keys."""
    planned = plan(folder_with(tmp_path, GROUP))
    values = json.loads(json.dumps(summarise(planned)))
    assert [part["name"] for part in values["parts"]] == [f"tile {i}" for i in (1, 2, 3, 4)]
    steps = values["steps"]
    for number, part in enumerate(values["parts"]):
        own = steps[1 + 5 * number : 6 + 5 * number]
        assert part["start_s"] == own[0]["start_s"]
        assert math.isclose(part["duration_s"], sum(step["duration_s"] for step in own))
    durations = {part["name"]: part["duration_s"] for part in values["parts"]}
    assert values["slowest_part"] == max(durations, key=lambda name: durations[name])
    assert math.isclose(values["mean_part_s"], sum(durations.values()) / 4)
    alone = plan(folder_with(tmp_path, "[[steps]]\nwait = 1\n"))
    assert not {"parts", "slowest_part", "mean_part_s"} & summarise(alone).keys()


def test_the_step_table_has_the_first_and_the_slowest_part(tmp_path: Path) -> None:
    """A table of 24 tiles is too long to read; steps of no part are few, and stay."""
    path = folder_with(tmp_path, GROUP)
    shown = CliRunner(env={"COLUMNS": "120"}).invoke(cli, ["plan", str(path)]).stdout
    values = summarise(plan(path))
    assert values["slowest_part"] == "tile 4"
    for name in ("move 1", "tile 1: pick", "tile 4: pick", "home"):
        assert f" {name} " in shown
    assert "tile 2" not in shown
    assert "10 rows of other parts left out; --json has all" in shown
    mean = values["mean_part_s"]
    assert f"4 parts, {mean:.3f} s each on average; slowest: tile 4, " in shown


def test_signals_that_switch_too_early_are_told_at_the_step_as_written(tmp_path: Path) -> None:
    """The number of an expanded step would be found nowhere in the file."""
    steps = (
        '[[steps]]\nfor_each = "car"\nsteps = [{ signal = { v = true }, lead = 1 }, { wait = 1 }]\n'
    )
    with pytest.raises(pp.PlanError, match=r"steps\[1\]\.steps\[1\]\.lead \(part 1\): 1 s puts it"):
        plan(folder_with(tmp_path, steps))


def test_steps_that_are_alike_are_planned_as_if_alone() -> None:
    """A motion is planned once for all repetitions; each keeps its own name, start and limits."""
    machine = Machine("Slide", (Axis("x", travel=(0, 500), velocity=1000, acceleration=5000),))
    to_and_fro = (Move({"x": 300}), Line({"x": 0}, speed=200), Line({"x": 300}), Line({"x": 0}))
    planned = plan(machine, Cycle(to_and_fro * 3, {"x": 0}))
    alone = plan(machine, Cycle(to_and_fro, {"x": 0}))
    for index, step in enumerate(planned.steps):
        same = alone.steps[index % 4]
        assert step.name == f"{step.kind} {index + 1}"
        assert math.isclose(step.start, same.start + index // 4 * alone.duration, abs_tol=1e-12)
        assert step.limited_by == same.limited_by
        np.testing.assert_array_equal(step.trajectory.coefficients, same.trajectory.coefficients)


def test_steps_with_another_payload_are_not_alike() -> None:
    """What hangs at the tool changes the height at which an obstacle is passed."""
    wall = pp.Keepout("wall", outline=((400, -9), (420, -9), (420, 9), (400, 9)), top=100)
    machine = Machine(
        "Slide",
        (
            Axis("x", travel=(0, 800), velocity=1000, acceleration=5000),
            Axis("z", travel=(0, 400), velocity=500, acceleration=3000),
        ),
        up="+z",
        keepouts=(wall,),
    )
    start, over, load = (
        {"x": 0.0, "z": 0.0},
        pp.Transfer({"x": 800}),
        pp.Payload(1, radius=5, below=150),
    )
    steps = (over, pp.Transfer({"x": 0}), load, over, pp.Transfer({"x": 0}), pp.Payload(), over)
    bare, *_, loaded, _, _, again = plan(machine, Cycle(steps, start)).steps
    alone = plan(machine, Cycle((load, over), start)).steps[1]
    assert loaded.duration == alone.duration > bare.duration == again.duration
