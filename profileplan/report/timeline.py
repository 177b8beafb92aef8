"""What happens when: steps, signals and what hangs at the tool, as stretches of time?"""

from __future__ import annotations

import math
from itertools import groupby
from typing import TYPE_CHECKING, NamedTuple

from profileplan.inputs import Wait
from profileplan.report import rows

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from profileplan.report.scene import Scene
    from profileplan.results import PlannedCycle

MOST_BLOCKS = 400
"""Blocks of a row of the timeline; of more, those that are near each other are drawn as one."""


TICKS = 8
"""About so many times are written under the timeline."""


class Block(NamedTuple):
    """A stretch of time in the timeline.

    mark : by what name it is known in the page; kind : "step", "wait", "on" or "held"; start, end
    [s]; left, width : where it is drawn, in percent.
    """

    mark: str
    kind: str
    text: str
    start: float
    end: float
    left: str
    width: str

    @property
    def label(self) -> str:
        """What is read aloud."""
        return f"{self.text}, {self.start:.3f} to {self.end:.3f} s"


class Lane(NamedTuple):
    """A row of the timeline."""

    name: str
    blocks: Sequence[Block]


def lanes(planned: PlannedCycle, scene: Scene) -> Iterator[Lane]:
    """Yield the rows of the timeline."""
    whole = planned.duration or 1.0

    def block(mark: str, kind: str, text: str, times: tuple[float, float]) -> Block:
        left, width = 100 * times[0] / whole, 100 * (times[1] - times[0]) / whole
        return Block(mark, kind, text, *times, f"{left:.4f}", f"{width:.4f}")

    def lane(name: str, blocks: list[Block]) -> Lane:
        if len(blocks) <= MOST_BLOCKS:
            return Lane(name, blocks)
        fused = []
        for _, group in groupby(blocks, lambda own: int(own.start / whole * MOST_BLOCKS)):
            first, *more = group
            last = more[-1] if more else first
            kind = first.kind if all(own.kind == first.kind for own in more) else "step"
            text = first.text if first.text == last.text else f"{first.text} … {last.text}"
            fused.append(block(first.mark, kind, text, (first.start, last.end)))
        return Lane(name, fused)

    asked = planned.job.cycle.steps
    steps = [
        block(
            rows.step_mark(index),
            "wait" if isinstance(asked[index], Wait) else "step",
            step.name,
            (step.start, step.end),
        )
        for index, step in enumerate(planned.steps)
        if step.duration > 0
    ]
    yield lane("steps", steps)
    for number, name in enumerate(planned.signals):
        times = enumerate(_on(planned, name))
        yield lane(name, [block(f"signal-{number}-{turn}", "on", name, own) for turn, own in times])
    held = [
        block(f"payload-{turn}", "held", _held_text(own.mass), (own.start, own.end))
        for turn, own in enumerate(scene.hanging)
    ]
    if held:
        yield lane("payload", held)


def _held_text(mass: float) -> str:
    return f"{mass:g} kg" if mass else "part"


def _on(planned: PlannedCycle, name: str) -> Iterator[tuple[float, float]]:
    """Yield from when to when a signal is on [s]."""
    start: float | None = None
    for event in planned.events:
        if event.signal != name:
            continue
        if event.state and start is None:
            start = event.time
        elif not event.state and start is not None:
            yield start, event.time
            start = None
    if start is not None:
        yield start, planned.duration


def ticks(duration: float) -> Iterator[dict[str, str]]:
    """Yield round times and where they stand in percent."""
    if duration <= 0:
        return
    raw = duration / TICKS
    decade = 10.0 ** math.floor(math.log10(raw))
    spacing = next(factor * decade for factor in (1, 2, 5, 10) if factor * decade >= raw)
    # The last time would stand out of the page if it were at its very end.
    for number in range(int(0.985 * duration / spacing) + 1):
        yield {"left": f"{100 * number * spacing / duration:.4f}", "text": f"{number * spacing:g}"}


def pace(planned: PlannedCycle) -> float:
    """Return by how much an arrow key shifts the time [s]: a tick of the setpoints, or more."""
    duration = planned.duration
    return min(max(planned.job.machine.setpoints.period, duration / 100_000), duration / 100) or 1.0
