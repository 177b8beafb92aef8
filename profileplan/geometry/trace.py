"""What does a step follow of a drawing, and where on the machine?

Outlines are in the plan of the machine's horizontal axes: x of a point is the position of the first
of them, y that of the second, z the height above the working height [mm].
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.geometry.drawing import Reading, read_drawing
from profileplan.geometry.order import order
from profileplan.geometry.outlines import chain
from profileplan.geometry.shapes import Outline, Pieces, Similarity

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from profileplan.geometry.drawing import Drawing
    from profileplan.geometry.order import Travel
    from profileplan.inputs import Machine, Trace

EXACT = 1e-3
"""Greatest distance of curves from what stands for them where no tolerance is given [mm]."""

ERROR_SHARE = 0.1
"""The same as a share of the tolerance."""

ROOM = 1e-9
"""Distance [mm] by which rounding may put a point outside of the travel."""

MOST_FAULTS = 20
"""Most outlines outside of the travel that a message lists."""


@dataclass(frozen=True, eq=False)
class Traced:
    """What a step follows.

    Parameters
    ----------
    outlines : tuple of Outline
        In the order traced, placed on the machine, with the ways in and out.
    led : bool
        Whether the first and the last piece of each is a way in and out.
    error : float [mm]
        Greatest distance of the pieces from the curves of the drawing.
    end : mapping
        Axis name → position after the step [mm or deg].
    notes : tuple of str
    """

    outlines: tuple[Outline, ...]
    led: bool
    error: float
    end: Mapping[str, float]
    notes: tuple[str, ...]


def traced(step: Trace, machine: Machine, *, now: Mapping[str, float], travel: Travel) -> Traced:
    """Read a step's drawing, and return what it follows.

    Parameters
    ----------
    step : Trace
    machine : Machine
    now : mapping
        Axis name → position before the step [mm or deg].
    travel : callable
        Times between points in plan, (k, 2) each [s], by which the order is chosen.

    Raises
    ------
    InputError
        The drawing cannot be read, or has parts that the machine or the step cannot follow.
    """
    place = step.place
    error = ERROR_SHARE * step.tolerance or EXACT
    drawing = read_drawing(
        step.drawing,
        Reading(
            layers=step.layers,
            unit=step.unit,
            space=step.space,
            hidden=step.hidden,
            hatches=step.hatches,
            error=error / place.scale,
        ),
    )
    layers = [entity.layer for entity in drawing.entities]
    chained = chain(drawing.pieces, layers, joining=step.joining)
    spot = Similarity(
        np.array([place.x, place.y]), np.radians(place.turn), place.scale, mirrored=place.mirror
    )
    outlines = [_flat(outline.mapped(spot), step) for outline in chained.outlines]
    start = np.array([now[name] for name in machine.horizontal_axes[:2]])
    ordered = order(
        outlines,
        start=np.pad(start, (0, 2 - start.size)),
        travel=travel,
        inside_first=step.inside_first,
        shortest=step.order == "shortest",
    )
    led = tuple(_led(outline, step.lead_in) for outline in ordered)
    faults = [*_curve_faults(step, drawing), *_travel_faults(led, machine, drawing, step)]
    if not led:
        message = "nothing to follow: no line, arc or curve on the layers that are looked at"
        faults = [Fault("", message, drawing.file)]
    if faults:
        raise InputError(faults)
    return Traced(
        outlines=led,
        led=bool(step.lead_in),
        error=drawing.error * place.scale,
        end=_end(step, machine, now, led[-1]),
        notes=drawing.notes,
    )


def _flat(outline: Outline, step: Trace) -> Outline:
    """Return an outline without its height, unless the step follows that as well."""
    if step.drawn_height:
        return outline
    own, level = outline.pieces, np.array([1.0, 1.0, 0.0])
    return replace(outline, pieces=replace(own, start=own.start * level, end=own.end * level))


def _led(outline: Outline, length: float | None) -> Outline:
    """Return an outline with straight ways in and out, along its direction at both ends."""
    if not length:
        return outline
    own = outline.pieces
    first, last = own.directions()
    before, after = own.start[:1].copy(), own.end[-1:].copy()
    before[0, :2] -= length * first[0]
    after[0, :2] += length * last[-1]
    pieces = Pieces(
        np.concatenate([before, own.start, own.end[-1:]]),
        np.concatenate([own.start[:1], own.end, after]),
        np.concatenate([[0.0], own.bulge, [0.0]]),
        np.concatenate([own.source[:1], own.source, own.source[-1:]]),
    )
    return replace(outline, pieces=pieces)


def _curve_faults(step: Trace, drawing: Drawing) -> Iterator[Fault]:
    """Yield what cannot be followed with a stop at every corner."""
    curved = np.flatnonzero(drawing.pieces.bulge)
    if step.tolerance or not curved.size:
        return
    entity = drawing.entities[drawing.pieces.source[curved[0]]]
    sources = np.unique(drawing.pieces.source[curved]).size
    yield Fault(
        f"layer {entity.layer}, handle {entity.handle}",
        f"{entity.kind}: a curve needs a tolerance above 0, and tolerance is 0 mm "
        f"({sources} curved entities in all)",
        drawing.file,
    )


def _travel_faults(
    outlines: tuple[Outline, ...], machine: Machine, drawing: Drawing, step: Trace
) -> Iterator[Fault]:
    """Yield the outlines that leave the travel of an axis, each with the entity that does."""
    names = machine.horizontal_axes[:2]
    limits = np.zeros((2, 2))
    for column, name in enumerate(names):
        limits[:, column] = machine.axis(name).travel
    found = 0
    for number, outline in enumerate(outlines, start=1):
        bounds = outline.pieces.bounds()[:, :, :2]
        below, above = limits[0] - bounds[:, 0], bounds[:, 1] - limits[1]
        beyond = np.stack([below, above], axis=1)
        worst_at = np.unravel_index(int(beyond.argmax()), beyond.shape)
        piece, side, column = (int(index) for index in worst_at)
        worst = float(beyond[piece, side, column])
        if worst <= ROOM:
            continue
        found += 1
        if found > MOST_FAULTS:
            continue
        reached = float(bounds[piece, side, column])
        if column < len(names):
            low, high = machine.axis(names[column]).travel
            message = f"beyond the travel of {names[column]}, {low:g} to {high:g} mm"
            axis = names[column]
        else:
            message, axis = "but this machine has one horizontal axis only", "across"
        entity = drawing.entities[outline.pieces.source[piece]]
        yield Fault(
            f"layer {entity.layer}, handle {entity.handle}",
            f"outline {number} ({entity.kind}) reaches {axis} = {reached:.6g} mm, "
            f"{worst:.6g} mm {message}; see `place` of the step {step.name or step.kind}",
            drawing.file,
        )
    if found > MOST_FAULTS:
        message = f"{found - MOST_FAULTS} more outlines are outside of the travel"
        yield Fault("", message, drawing.file)


def _end(
    step: Trace, machine: Machine, now: Mapping[str, float], outline: Outline
) -> dict[str, float]:
    """Return where the axes are after the last outline, raised if the step does so."""
    end = {**now, **step.at}
    end |= dict(zip(machine.horizontal_axes[:2], outline.end.tolist(), strict=False))
    if machine.up_axis is not None:
        height = float(outline.end[2]) if step.drawn_height else 0.0
        raised = max(step.lift, height) if step.lift else height
        end[machine.up_axis] += machine.up_sign * raised
    return end
