"""Transfers: clear of everything, and as soon as the limits allow."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

import profileplan as pp
from portal import failures

REFERENCE = json.loads(
    (Path(__file__).parent / "published" / "transfer-problems.json").read_text(encoding="utf-8")
)
"""Walls that span the whole width, with the best known times."""

WIDE = 5000.0
SAMPLES = 4001


def axis(name: str, travel: tuple[float, float], limits: tuple[float, ...]) -> pp.Axis:
    """Return an axis with velocity, acceleration and jerk."""
    velocity, acceleration, jerk = limits
    return pp.Axis(name, travel=travel, velocity=velocity, acceleration=acceleration, jerk=jerk)


def wall(name: str, first: float, last: float, top: float | None) -> pp.Keepout:
    """Return a wall across the whole width."""
    corners = ((first, -WIDE), (last, -WIDE), (last, WIDE), (first, WIDE))
    return pp.Keepout(name, outline=corners, top=top)


def box(
    name: str, low: tuple[float, float], high: tuple[float, float], top: float | None
) -> pp.Keepout:
    """Return a box."""
    corners = (low, (high[0], low[1]), high, (low[0], high[1]))
    return pp.Keepout(name, outline=corners, top=top)


GANTRY = pp.Machine(
    name="Gantry",
    up="+z",
    axes=(
        axis("x", (0, 2000), (2000, 12000, 200000)),
        axis("y", (0, 1000), (1500, 9000, 150000)),
        axis("z", (0, 500), (1000, 8000, 120000)),
    ),
)
PICK, PLACE = {"x": 200.0, "y": 300.0, "z": 20.0}, {"x": 1700.0, "y": 600.0, "z": 60.0}


def cell(*keepouts: pp.Keepout, of: pp.Machine = GANTRY, **tool: float) -> pp.Machine:
    """Return the gantry with keep-outs and a tool."""
    return replace(of, keepouts=keepouts, tool=pp.Tool(**tool))  # type: ignore[arg-type]


def plan(machine: pp.Machine, *before: pp.Payload, **keys: object) -> pp.Plan:
    """Return the plan of a transfer from pick to place."""
    step = pp.Transfer(PLACE, **keys)  # type: ignore[arg-type]
    return pp.plan(machine, pp.Cycle(steps=(*before, step), start=PICK))


def sampled(of: pp.Plan) -> np.ndarray:
    """Return dense samples of the motion, (n, d)."""
    return of.trajectory.at(np.linspace(0, of.duration, SAMPLES))


def clearance(of: pp.Plan) -> float:
    """Return the smallest clearance that the check has found [mm]."""
    return next(f.value for f in of.check() if f.check == "clearance")


def stepwise(machine: pp.Machine, top: float) -> float:
    """Return the time of up, across and down one after the other [s]."""
    steps = (pp.Move({"z": top}), pp.Line({"x": PLACE["x"], "y": PLACE["y"]}), pp.Move(PLACE))
    return pp.plan(machine, pp.Cycle(steps=steps, start=PICK)).duration


KERB = box("kerb", (800, 100), (900, 900), 180.0)


@pytest.mark.parametrize("problem", REFERENCE, ids=lambda problem: problem["name"])
def test_a_reference_problem_is_solved_as_well_as_known(problem: dict[str, object]) -> None:
    """At most one percent above the best known time, and below up, across and down."""
    case = json.loads(json.dumps(problem))
    names = "xz" if len(case["start_mm"]) == 2 else "xyz"
    limits = zip(case["velocity_mm_s"], case["acceleration_mm_s2"], case["jerk_mm_s3"], strict=True)
    axes = tuple(
        axis(name, (0, case["roof_mm"]) if name == "z" else (-3000, 3000), own)
        for name, own in zip(names, limits, strict=True)
    )
    walls = tuple(
        wall(f"wall {number}", own["from_mm"], own["to_mm"], own["top_mm"])
        for number, own in enumerate(case["walls"])
    )
    machine = pp.Machine(name="bench", up="+z", axes=axes, keepouts=walls)
    step = pp.Transfer(
        dict(zip(names, case["end_mm"], strict=True)), across="axes" if len(names) == 3 else "line"
    )
    start = dict(zip(names, case["start_mm"], strict=True))
    found = pp.plan(machine, pp.Cycle(steps=(step,), start=start))
    assert failures(found) == []
    assert found.duration <= 1.01 * case["best_known_s"]
    assert found.duration < case["one_after_the_other_s"]
    assert found.duration >= case["slowest_axis_alone_s"] - 1e-5
    least = found.steps[0].least_time
    assert least is not None
    assert_allclose(least, case["slowest_axis_alone_s"], atol=1e-5)


@pytest.mark.parametrize("across", ["line", "axes"])
def test_a_kerb_is_cleared_with_tool_and_margin(across: str) -> None:
    """The check finds the margin kept; the motion is much faster than three moves."""
    machine = cell(KERB, radius=45.0, margin=5.0)
    found = plan(machine, across=across)
    assert failures(found) == []
    assert clearance(found) >= 5.0 - 1e-6
    assert found.duration < 0.8 * stepwise(machine, 185.0)


def test_in_plan_the_way_is_the_straight_line() -> None:
    """Where the axes are not set free."""
    way = sampled(plan(cell(KERB)))[:, :2] - [PICK["x"], PICK["y"]]
    course = np.array([1500.0, 300.0]) / np.hypot(1500, 300)
    assert np.abs(way[:, 0] * course[1] - way[:, 1] * course[0]).max() < 1e-9


def test_free_axes_are_not_slower_than_the_line() -> None:
    """They may do all that the line may."""
    machine = cell(KERB, radius=20.0, margin=2.0)
    assert plan(machine, across="axes").duration <= plan(machine).duration * (1 + 2e-3)


def test_a_part_that_hangs_needs_more_height() -> None:
    """By what it reaches below the tool, over what it reaches sideways."""
    machine = cell(KERB, radius=20.0, margin=5.0)
    without = plan(machine)
    payload = pp.Payload(3.0, radius=150.0, below=60.0)
    with_part = plan(machine, payload)
    assert failures(with_part) == []
    over = np.abs(sampled(with_part)[:, 0] - 850) <= 50
    assert sampled(with_part)[over, 2].min() >= 180 + 60 + 5 - 1e-6
    assert with_part.duration > without.duration


def test_straight_ways_are_straight() -> None:
    """Nothing but the up axis moves below the lift at pick, and below the way to lower at place."""
    found = plan(cell(KERB), lift=40.0, lower=25.0)
    assert failures(found) == []
    way = sampled(found)
    moved = np.abs(way[:, :2] - [PICK["x"], PICK["y"]]).max(axis=1) > 1e-9
    there = np.abs(way[:, :2] - [PLACE["x"], PLACE["y"]]).max(axis=1) <= 1e-9
    assert way[moved & ~there, 2].min() >= min(PICK["z"] + 40, PLACE["z"] + 25) - 1e-6
    first = way[: int(np.argmax(moved)), 2]
    assert first.max() >= PICK["z"] + 40 - 1.0
    assert (way[moved][:50, 2] >= PICK["z"] + 40 - 1e-6).all()


def test_a_height_asked_for_is_the_highest_point() -> None:
    """To a hundredth of a millimetre."""
    found = plan(cell(KERB), height=350.0)
    assert failures(found) == []
    assert_allclose(sampled(found)[:, 2].max(), 350.0, atol=0.02)
    assert found.duration >= plan(cell(KERB)).duration


def test_a_time_asked_for_is_taken() -> None:
    """Clear as before."""
    machine = cell(KERB, radius=20.0, margin=5.0)
    found = plan(machine, time=2.5)
    assert_allclose(found.duration, 2.5, rtol=1e-12)
    assert failures(found) == []


def test_what_is_too_high_is_gone_round() -> None:
    """In plan, at a distance, with the detour's corners rounded by the motion itself."""
    post = box("post", (900, 350), (1000, 550), None)
    found = plan(cell(post, radius=30.0, margin=5.0))
    assert failures(found) == []
    assert clearance(found) >= 5.0 - 1e-6
    straight = plan(cell(radius=30.0, margin=5.0))
    assert found.duration < 1.6 * straight.duration
    velocity = found.trajectory.at(np.linspace(0.2, 0.8, 500) * found.duration, 1)
    assert np.linalg.norm(velocity[:, :2], axis=1).min() > 100, "it does not stop at the corners"


def test_the_faster_of_over_and_round_is_taken() -> None:
    """A narrow high post is gone round, a long low kerb over."""
    tall = box("post", (900, 420), (930, 450), 480.0)
    over_only = replace(GANTRY, axes=(*GANTRY.axes[:1], *GANTRY.axes[1:]))
    found = plan(cell(tall, of=over_only, radius=10.0, margin=2.0))
    assert failures(found) == []
    assert sampled(found)[:, 2].max() < 480.0
    low = plan(cell(box("kerb", (850, 0), (900, 1000), 100.0)))
    beside = np.abs(sampled(low)[:, 0] - 875) <= 25
    assert sampled(low)[beside, 2].min() >= 100 - 1e-6


@pytest.mark.parametrize(
    ("keepout", "words"),
    [
        (wall("wall", 900, 1000, 600.0), r"wall \(tool and margin\) needs z = 600 mm.*z = 500 mm"),
        (wall("wall", 900, 1000, None), r"wall .* may not be entered at any height.*no way round"),
        (box("nest", (150, 250), (250, 350), 90.0), r"nest .* needs z = 90 mm, and at the start"),
        (box("tray", (1600, 500), (1800, 700), 90.0), r"tray .* z = 90 mm, and at the end it is z"),
    ],
)
def test_where_nothing_clears_the_message_says_what_is_needed(
    keepout: pp.Keepout, words: str
) -> None:
    """The keep-out, the height needed, and the height there is."""
    with pytest.raises(pp.PlanError, match=words):
        plan(cell(keepout))


def test_an_up_axis_that_counts_downward_is_the_same() -> None:
    """Mirrored in height."""
    down = replace(
        GANTRY, up="-z", axes=(*GANTRY.axes[:2], axis("z", (-500, 0), (1000, 8000, 120000)))
    )
    mirrored = cell(replace(KERB, top=-180.0), of=down, radius=20.0, margin=5.0)
    step = pp.Transfer({**PLACE, "z": -PLACE["z"]}, lift=10.0)
    found = pp.plan(mirrored, pp.Cycle(steps=(step,), start={**PICK, "z": -PICK["z"]}))
    assert failures(found) == []
    same = plan(cell(KERB, radius=20.0, margin=5.0), lift=10.0)
    assert_allclose(found.duration, same.duration, rtol=1e-6)


def test_a_rotary_axis_turns_on_the_way() -> None:
    """It has all the time of the transfer, but for the straight ways."""
    turning = pp.Axis("c", kind="rotary", travel=(-180, 180), velocity=360, acceleration=3000)
    machine = replace(GANTRY, axes=(*GANTRY.axes, turning))
    step = pp.Transfer({**PLACE, "c": 90.0}, lift=30.0)
    start = {**PICK, "c": 0.0}
    found = pp.plan(cell(KERB, of=machine), pp.Cycle(steps=(step,), start=start))
    assert failures(found) == []
    way = sampled(found)
    turned = np.abs(way[:, 3]) > 1e-9
    assert way[turned, 2].min() >= min(PICK["z"] + 30, PLACE["z"]) - 1e-6
    assert_allclose(way[-1, 3], 90.0, atol=1e-9)


def test_a_transfer_straight_up_is_a_move() -> None:
    """Nothing to go across."""
    step = pp.Transfer({"z": 300.0})
    found = pp.plan(GANTRY, pp.Cycle(steps=(step,), start=PICK))
    move = pp.plan(GANTRY, pp.Cycle(steps=(pp.Move({"z": 300.0}),), start=PICK))
    assert_allclose(found.duration, move.duration, rtol=1e-12)


@pytest.mark.parametrize("seed", range(24))
def test_random_cells_are_cleared(seed: int) -> None:
    """Boxes of any size and height: clear, inside all limits, never slower than three moves."""
    random = np.random.default_rng(seed)
    blocks = []
    for number in range(int(random.integers(1, 6))):
        x, y = random.uniform(350, 1450), random.uniform(100, 800)
        size = random.uniform(20, 120, 2)
        corner = (float(min(x + size[0], 1550)), float(y + size[1]))
        blocks.append(
            box(f"box {number}", (float(x), float(y)), corner, float(random.uniform(50, 400)))
        )
    machine = cell(*blocks, radius=float(random.uniform(1, 30)), margin=float(random.uniform(0, 8)))
    across = str(random.choice(["line", "axes"]))
    found = plan(machine, across=across, lift=float(random.choice([0.0, 15.0])))
    assert failures(found) == []
    top = max(PLACE["z"], *(block.top or 0.0 for block in blocks)) + 8.0
    assert found.duration <= stepwise(machine, top) * (1 + 1e-9)
