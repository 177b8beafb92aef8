"""A portal with two drives on an axis and a counter that starts again, and its table."""

from __future__ import annotations

import tempfile
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING

import profileplan as pp
from profileplan.checks import Manner, judge_file
from profileplan.inputs import Drive, Twin
from profileplan.setpoints import Content, write_table

if TYPE_CHECKING:
    from collections.abc import Sequence

    from profileplan.checks import Finding, TableJudgement
    from profileplan.inputs import Step

TWO = Drive(100_000, lead=20.0, offset=12.5, also=Twin("x2", direction=-1, offset=-3.25))

ROUND = Drive(720_000, lead=360.0, direction=-1, offset=33.3, wrap=360.0)

MACHINE = pp.Machine(
    name="portal",
    axes=(
        pp.Axis(
            "x",
            travel=(-800.0, 800.0),
            velocity=500.0,
            acceleration=3000.0,
            deceleration=2000.0,
            jerk=60000.0,
            drive=TWO,
        ),
        pp.Axis(
            "c",
            kind="rotary",
            travel=(-720.0, 720.0),
            velocity=200.0,
            acceleration=900.0,
            jerk=9000.0,
            drive=ROUND,
        ),
    ),
)

INCREMENTS = Content.of(MACHINE, units="increments")


def planned(*places: tuple[float, float], start: float = 0.0) -> pp.Plan:
    """Plan moves between places of x and c, with a lamp that is lit after the first."""
    first, *others = [pp.Move({"x": x, "c": c}) for x, c in places]
    steps: tuple[Step, ...] = (first, pp.Signal({"lamp": True}), pp.Wait(0.02), *others)
    return pp.plan(MACHINE, pp.Cycle(steps=steps, start={"x": 0.0, "c": start}))


PLAN = planned((200.0, -45.0), (-100.0, 550.0), (0.0, -650.0))


@cache
def cells(units: str = "axis") -> tuple[tuple[str, ...], ...]:
    """Return the cells of the plan's table, header first."""
    with tempfile.TemporaryDirectory() as folder:
        file = Path(folder) / "table.csv"
        write_table(PLAN, file, content=Content.of(MACHINE, units=units))
        return tuple(tuple(line.split(",")) for line in file.read_text("utf-8").splitlines())


def copied(units: str = "axis") -> list[list[str]]:
    """Return these cells, to be spoiled."""
    return [list(row) for row in cells(units)]


def written(file: Path, rows: Sequence[Sequence[str]]) -> Path:
    """Write cells as a table."""
    file.write_text("".join(",".join(row) + "\n" for row in rows), "utf-8")
    return file


def broken(
    file: Path, machine: pp.Machine = MACHINE, manner: Manner | None = None
) -> dict[str, Finding]:
    """Return what a table does not meet, by what is required of which axis."""
    findings = judge_file(file, machine, manner=manner).findings
    return {f"{f.axis or ''} {f.check}".strip(): f for f in findings if not f.ok}


def found(judged: TableJudgement, check: str, axis: str | None = None) -> Finding:
    """Return a finding."""
    return next(f for f in judged.findings if f.check == check and f.axis == axis)


def with_axis(number: int, **changes: object) -> pp.Machine:
    """Return the machine with an axis changed."""
    axes = list(MACHINE.axes)
    axes[number] = replace(axes[number], **changes)  # type: ignore[arg-type]
    return replace(MACHINE, axes=tuple(axes))
