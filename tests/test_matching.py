"""Groups in the shortest order: which place goes with which pick, and in which sequence."""

from __future__ import annotations

import re
from dataclasses import replace
from itertools import permutations
from typing import TYPE_CHECKING

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import profileplan as pp
from portal import failures
from profileplan.errors import InputError, PlanError
from profileplan.inputs import Cycle, Line, Move, Part, Pattern, Payload, Transfer, Wait, expand
from profileplan.inputs.patterns import Free
from profileplan.planning.matching import EXACT, EXACT_ALONE, Ways, shortest

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from profileplan.inputs import Step
    from profileplan.inputs.rules import Positions

ROUNDING = 1e-9
"""Seconds by which sums of the same times may differ."""

MACHINE = """\
name = "Kiln loader"
up = "+z"
axes.x = { travel = [0, 2400], velocity = 2000, acceleration = 6000 }
axes.y = { travel = [0, 1200], velocity = 2000, acceleration = 9000 }
axes.z = { travel = [0, 450], velocity = 1200, acceleration = 8000 }
"""

HEAD = """\
machine = "machine.toml"
start = { x = 0, y = 0, z = 300 }
[[patterns]]
name = "rack"
origin = { x = 300, y = 100, z = 40 }
columns = 3
column_pitch = { x = 500 }
[[patterns]]
name = "car"
origin = { x = 1400, y = 900, z = 30 }
columns = 3
column_pitch = { x = -450 }
[[patterns]]
name = "shelf"
origin = { y = 500 }
rows = 3
row_pitch = { y = 10 }
"""

STEPS = """\
{ name = "to", transfer = { place = "rack" } },
{ name = "on", signal = { vacuum = true } },
{ name = "hangs", payload = { mass = 1.2 } },
{ name = "set", transfer = { place = "car" } },
{ name = "gone", payload = {} },
"""

FIND = re.compile(
    r"^tile 1 to (\d+): order of (\d+) parts: ([\d.]+) s of travel by laws"
    r"(?: instead of ([\d.]+) s)?,? as given; (no order is shorter|at most ([\d.]+) %)"
)

GANTRY = pp.Machine(
    name="Gantry",
    up="+z",
    axes=(
        pp.Axis("x", travel=(0, 2000), velocity=2000, acceleration=12000, jerk=200000),
        pp.Axis("y", travel=(0, 1000), velocity=1500, acceleration=9000, jerk=150000),
        pp.Axis("z", travel=(0, 500), velocity=1000, acceleration=8000, jerk=120000),
    ),
)


def group(steps: str = STEPS, for_each: str = '["rack", "car"]', more: str = "") -> str:
    """Return a group in the shortest order."""
    return (
        f'[[steps]]\nfor_each = {for_each}\nname = "tile"\norder = "shortest"\n{more}\n'
        f"steps = [\n{steps}]\n"
    )


def file_with(folder: Path, steps: str, head: str = HEAD) -> Path:
    """Write a machine file and a cycle file, and return the cycle's."""
    (folder / "machine.toml").write_text(MACHINE, encoding="utf-8")
    cycle = folder / "cycle.toml"
    cycle.write_text(head + steps, encoding="utf-8")
    return cycle


def faults_in(folder: Path, steps: str, head: str = HEAD) -> list[tuple[str, str]]:
    """Return place and message of every fault of a cycle file."""
    with pytest.raises(InputError) as caught:
        pp.load_job(file_with(folder, steps, head))
    return [(fault.place, fault.message) for fault in caught.value.faults]


def random_ways(count: int, seed: int, *, alone: bool = False, share: float = 0.0) -> Ways:
    """Return random times, some of them infinite; alone: each pick is its own place."""
    draw = np.random.default_rng(seed)
    loaded, empty = draw.uniform(0.5, 3, (count, count)), draw.uniform(0.5, 3, [count + 1] * 2)
    loaded[draw.random(loaded.shape) < share] = np.inf
    if alone:
        loaded[~np.eye(count, dtype=bool)] = np.inf
        empty[1:, :-1][np.eye(count, dtype=bool)] = np.inf
    empty[0, -1] = np.inf
    return Ways(loaded, empty)


def brute(ways: Ways) -> float:
    """Return the least time of all sequences, each added up way by way."""
    count, best = len(ways.loaded), np.inf
    for picks in permutations(range(count)):
        for places in permutations(range(count)):
            total, at = 0.0, 0
            for pick, place in zip(picks, places, strict=True):
                total += ways.empty[at, pick] + ways.loaded[pick, place]
                at = place + 1
            best = min(best, total + ways.empty[at, count])
    return best


@pytest.mark.parametrize("alone", [False, True])
@pytest.mark.parametrize("count", [1, 2, 3, 4])
def test_small_groups_get_the_least_of_all_sequences(count: int, alone: bool) -> None:
    """What is called the shortest must be it; trying all of them shows that."""
    for seed in range(15):
        ways = random_ways(count, seed, alone=alone, share=0.2 if not alone and seed % 2 else 0.0)
        least = brute(ways)
        if np.isfinite(least):
            found = shortest(ways)
            assert float(ways.total(*found.sequence)) == pytest.approx(least, abs=ROUNDING)
            assert found.bound == pytest.approx(least, abs=ROUNDING)


@settings(max_examples=30, deadline=None)
@given(st.integers(2, EXACT_ALONE + 4), st.integers(0, 10_000), st.booleans())
def test_a_sequence_is_between_its_bound_and_that_given(
    count: int,
    seed: int,
    alone: bool,
) -> None:
    """Every pick and place is used once, and no order is made worse."""
    if EXACT < count <= EXACT_ALONE and not alone:
        count += EXACT_ALONE
    ways = random_ways(count, seed, alone=alone)
    found = shortest(ways)
    total, numbers = float(ways.total(*found.sequence)), np.arange(count)
    assert sorted(found.sequence.picks) == sorted(found.sequence.places) == list(range(count))
    assert found.bound - ROUNDING <= total <= float(ways.total(numbers, numbers)) + ROUNDING


def test_a_sequence_that_is_known_to_cost_nothing_is_found() -> None:
    """A hidden sequence of ways without time, all others with, is the least by construction."""
    for seed in range(5):
        draw = np.random.default_rng(seed)
        count = 20
        ways = Ways(draw.uniform(1, 2, [count] * 2), draw.uniform(1, 2, [count + 1] * 2))
        picks, places = draw.permutation(count), draw.permutation(count)
        ways.loaded[picks, places] = 0.0
        ways.empty[[0, *(1 + places)], [*picks, count]] = 0.0
        found = shortest(ways)
        assert float(ways.total(*found.sequence)) == 0.0
        assert found.bound == 0.0


def cycle_of(
    places: Sequence[Sequence[Positions]],
    *,
    of: type[Move | Transfer] = Move,
    radius: float | None = None,
) -> Cycle:
    """Return a cycle of parts with a mass of their own, in the shortest order."""
    steps: list[Step] = []
    parts = []
    for number, at in enumerate(zip(*places, strict=True), start=1):
        name, begin = f"tile {number}", len(steps)
        steps += [
            of(at[0], name=f"{name}: pick"),
            Payload(number, radius=radius, name=f"{name}: hangs"),
        ]
        steps += [of(to, name=f"{name}: place") for to in at[1:]]
        steps += [Payload(name=f"{name}: gone")]
        parts.append(Part(name, begin, len(steps) - 1))
    slots = (0, -1, *range(1, len(places)), -1)
    free = Free((0, len(parts) - 1), slots)
    start = {"x": 0.0, "y": 0.0, "z": 300.0}
    home = of({"x": 0.0, "y": 0.0}, name="home")
    return Cycle((*steps, home), start, parts=tuple(parts), free=(free,))


def random_places(draw: np.random.Generator, count: int) -> list[Positions]:
    """Return places on a table."""
    return [
        {"x": float(x), "y": float(y), "z": 20.0}
        for x, y in draw.uniform([0, 0], [2000, 1000], (count, 2)).round(1)
    ]


@pytest.mark.parametrize("patterns", [1, 2])
@pytest.mark.parametrize("count", [3, 9, 16])
def test_a_planned_cycle_of_moves_is_never_longer_than_as_given(patterns: int, count: int) -> None:
    """Moves are planned by laws, so what the search promises is what the plan must keep."""
    for seed in range(3):
        draw = np.random.default_rng(seed)
        cycle = cycle_of([random_places(draw, count) for _ in range(patterns)])
        given_order = pp.plan(GANTRY, replace(cycle, free=()))
        plan = pp.plan(GANTRY, cycle)
        assert plan.duration <= given_order.duration + ROUNDING
        told = next(found for note in plan.notes if (found := FIND.match(note)))
        assert plan.duration == pytest.approx(float(told[3]), abs=0.005 + ROUNDING)
        assert given_order.duration == pytest.approx(float(told[4] or told[3]), abs=0.005001)
        assert failures(plan) == []


def test_each_part_keeps_its_name_and_what_hangs_at_the_tool_its_pick() -> None:
    """Reports go by parts in their sequence; a heavy tile does not become a light one elsewhere."""
    draw = np.random.default_rng(3)
    picks, places = random_places(draw, 9), random_places(draw, 9)
    given_cycle = cycle_of([picks, places])
    cycle = pp.plan(GANTRY, given_cycle).job.cycle
    assert [step.name for step in cycle.steps] == [step.name for step in given_cycle.steps]
    assert cycle.parts == given_cycle.parts
    used = []
    for part in cycle.parts:
        pick, hangs, place, gone = cycle.steps[part.first : part.last + 1]
        assert isinstance(pick, Move)
        assert isinstance(hangs, Payload)
        assert isinstance(place, Move)
        assert gone == Payload(name=f"{part.name}: gone")
        assert dict(pick.to) == picks[int(hangs.mass) - 1]
        used.append((int(hangs.mass), places.index(dict(place.to))))
    assert sorted(mass for mass, _ in used) == list(range(1, 10))
    assert sorted(place for _, place in used) == list(range(9))
    assert [mass for mass, _ in used] != list(range(1, 10)), "this order can be shortened"


def test_a_settled_order_is_planned_as_it_is() -> None:
    """The job of a plan says what was planned; planned again it gives the same."""
    draw = np.random.default_rng(4)
    plan = pp.plan(GANTRY, cycle_of([random_places(draw, 5), random_places(draw, 5)]))
    again = pp.plan(plan.job)
    assert again.job.cycle.steps == plan.job.cycle.steps
    assert again.duration == plan.duration
    assert not any(FIND.match(note) for note in again.notes)


def test_transfers_over_and_round_keep_outs_are_ordered_and_pass_all_checks() -> None:
    """A wall makes some ways longer and a pillar to any height is gone round; none may be hit."""
    wall = pp.Keepout("wall", outline=((900, 0), (1000, 0), (1000, 700), (900, 700)), top=250)
    pillar = pp.Keepout("pillar", outline=((600, 400), (700, 400), (700, 500), (600, 500)))
    machine = replace(GANTRY, keepouts=(wall, pillar), tool=pp.Tool(radius=20, margin=5))
    picks: list[Positions] = [
        {"x": x, "y": y, "z": 20.0} for x, y in ((300, 450), (1400, 200), (300, 800), (800, 900))
    ]
    places: list[Positions] = [
        {"x": x, "y": y, "z": 30.0} for x, y in ((1500, 450), (1000, 800), (200, 100), (1800, 300))
    ]
    cycle = cycle_of([picks, places], of=Transfer)
    plan, given_order = pp.plan(machine, cycle), pp.plan(machine, replace(cycle, free=()))
    told = next(found for note in plan.notes if (found := FIND.match(note)))
    assert told[4] is not None, "this order can be shortened"
    assert plan.duration < given_order.duration
    assert failures(plan) == []


def test_a_way_that_is_blocked_is_not_taken() -> None:
    """Through the gate of a fence the tool goes empty; a wide tile stays on its side."""
    fence = pp.Keepout("fence", outline=((950, -50), (1050, -50), (1050, 800), (950, 800)))
    machine = replace(GANTRY, keepouts=(fence,), tool=pp.Tool(radius=20))
    left, right = {"x": 300.0, "y": 400.0, "z": 20.0}, {"x": 1700.0, "y": 400.0, "z": 20.0}
    cycle = cycle_of([[left, right], [right, left]], of=Transfer, radius=250.0)
    with pytest.raises(PlanError, match="fence"):
        pp.plan(machine, replace(cycle, free=()))
    plan = pp.plan(machine, cycle)
    stops = [step.to["x"] for step in plan.job.cycle.steps if isinstance(step, Transfer)]
    assert stops == [300.0, 300.0, 1700.0, 1700.0, 0.0]
    assert failures(plan) == []
    (note,) = (note for note in plan.notes if note.startswith("tile 1 to 2: order"))
    assert "where there was no way as given" in note


def test_without_a_way_through_all_places_the_plan_says_what_stands_in_it() -> None:
    """The reason is the planner's to tell; the search must not hide it."""
    fence = pp.Keepout("fence", outline=((950, -50), (1050, -50), (1050, 1050), (950, 1050)))
    machine = replace(GANTRY, keepouts=(fence,), tool=pp.Tool(radius=20))
    left, right = {"x": 300.0, "y": 400.0, "z": 20.0}, {"x": 1700.0, "y": 400.0, "z": 20.0}
    for more in (0, 8):
        picks, places = [left, right, *[left] * more], [right, left, *[left] * more]
        with pytest.raises(PlanError, match="fence"):
            pp.plan(machine, cycle_of([picks, places], of=Transfer))


def test_a_file_asks_for_the_shortest_order(tmp_path: Path) -> None:
    """The word of the file must arrive; without it, or with "given", the order is as given."""
    text = group()
    plan = pp.plan(file_with(tmp_path, text))
    told = next(found for note in plan.notes if (found := FIND.match(note)))
    assert (told[1], told[2], told[5]) == ("3", "3", "no order is shorter")
    assert float(told[3]) < float(told[4])
    assert failures(plan) == []
    for word in ('"given"', None):
        line = f"order = {word}" if word else ""
        cycle = pp.load_job(file_with(tmp_path, text.replace('order = "shortest"', line))).cycle
        assert cycle.free == ()
        assert pp.plan(tmp_path / "cycle.toml").duration > plan.duration


def test_of_two_groups_each_is_ordered_and_the_steps_between_stay(tmp_path: Path) -> None:
    """Numbers of parts are those of the cycle, not of the group."""
    two = (
        group(more="to = 2")
        + "[[steps]]\nwait = 0.5\n"
        + group('{ move = { place = "shelf" } },\n', '["shelf"]').replace('"tile"', '"board"')
    )
    cycle = pp.load_job(file_with(tmp_path, two)).cycle
    assert [free.parts for free in cycle.free] == [(0, 1), (2, 4)]
    assert [free.slots for free in cycle.free] == [(0, -1, -1, 1, -1), (0,)]
    plan = pp.plan(tmp_path / "cycle.toml")
    assert sum("no order is shorter" in note for note in plan.notes) == 2
    assert isinstance(plan.job.cycle.steps[10], Wait)


def test_a_pattern_alone_is_visited_in_any_order(tmp_path: Path) -> None:
    """A shelf that is gone to and fro in the file is gone along; the end is by the next step."""
    head = HEAD.replace("rows = 3", "rows = 3\ncolumns = 2\ncolumn_pitch = { y = 400 }")
    text = group('{ line = { place = "shelf" }, speed = 900 },\n', '"shelf"')
    plan = pp.plan(file_with(tmp_path, text + "[[steps]]\nmove = { y = 1200 }\n", head))
    steps = [s.to["y"] for s in plan.job.cycle.steps if isinstance(s, Line)]
    assert steps == [500, 510, 520, 900, 910, 920]


BACK = "".join(f'{{ move = {{ place = "{name}" }} }},\n' for name in ("rack", "car", "rack"))


@pytest.mark.parametrize(
    ("steps", "for_each", "more", "place", "message"),
    [
        (STEPS, '["rack", "car", "shelf"]', "", "order", "for_each has 3"),
        ('{ move = { place = "rack" } },\n', '["rack", "car"]', "", "order", "place of car"),
        (BACK, '["rack", "car"]', "", "steps[3].move", "goes back to rack"),
        (
            '{ path = [{ place = "rack" }, { place = "car" }] },\n',
            '["rack", "car"]',
            "",
            "steps[1].path[2]",
            "in one step",
        ),
        (
            '{ trace = "a.dxf" },\n{ move = { place = "rack" } },\n',
            '"rack"',
            "",
            "steps[1].trace",
            "places only",
        ),
    ],
)
def test_what_cannot_be_free_is_a_fault_at_its_place(
    tmp_path: Path, steps: str, for_each: str, more: str, place: str, message: str
) -> None:
    """Whoever asks for the shortest order learns what in the group forbids it, and where."""
    found = faults_in(tmp_path, group(steps, for_each, more))
    assert [at for at, _ in found] == [f"steps[1].{place}"]
    assert message in found[0][1]


def test_an_unknown_order_and_too_many_parts_are_faults(tmp_path: Path) -> None:
    """A misspelt word and a group that would take hours are told before anything is planned."""
    misspelt = group().replace('"shortest"', '"shortst"')
    ((place, message),) = faults_in(tmp_path, misspelt)
    assert place == "steps[1].order"
    assert "shortest" in message
    head = HEAD.replace("rows = 3", "rows = 61").replace("y = 10 ", "y = 1 ")
    text = group('{ move = { place = "shelf" } },\n', '"shelf"')
    ((place, message),) = faults_in(tmp_path, text, head)
    assert (place, "61 parts" in message, "60" in message) == ("steps[1].order", True, True)


@pytest.mark.parametrize(
    ("parts", "slots", "place"),
    [
        ((1, 0), (0,), "parts"),
        ((0, 60), (0,), "parts"),
        ((0, 1), (-1,), "slots"),
        ((0, 1), (0, 2), "slots"),
        ((0, 1), (0, 1, 0), "slots"),
    ],
)
def test_a_record_of_free_parts_judges_itself(
    parts: tuple[int, int], slots: tuple[int, ...], place: str
) -> None:
    """Records are made by programs too."""
    with pytest.raises(InputError) as caught:
        Free(parts, slots)
    assert [fault.place for fault in caught.value.faults] == [place]


@pytest.mark.parametrize(
    ("free", "place"),
    [(Free((0, 3), (0,)), "free[1].parts"), (Free((0, 1), (0, 1)), "free[1].slots")],
)
def test_a_cycle_judges_which_of_its_parts_are_free(free: Free, place: str) -> None:
    """Parts that are not there, or have other steps, cannot be exchanged."""
    shelf = Pattern("shelf", {"x": 0.0}, columns=3, column_pitch={"x": 10.0})
    made = expand("tile", [shelf], lambda at: [Move(at["shelf"])])
    with pytest.raises(InputError) as caught:
        Cycle(made.steps, {"x": 0.0}, parts=made.parts, free=(free,))
    assert [fault.place for fault in caught.value.faults] == [place]


def test_a_step_that_cannot_be_planned_is_named_as_in_the_file(tmp_path: Path) -> None:
    """The file has two steps; one of number 4 would be looked for in vain."""
    text = group('{ move = { place = "rack" }, time = 0.001 },\n', '"rack"')
    with pytest.raises(PlanError, match=r"steps\[1\]\.steps\[1\]\.time \(tile 1\)"):
        pp.plan(file_with(tmp_path, text))
