"""What does a DXF drawing draw: which lines and arcs, in mm, on which layers, and what is left out?

Everything is seen in plan, from above; heights are kept. Frozen, switched-off and unplotted layers
and invisible entities are left out unless they are asked for. What is left out is listed with the
reason; what is wrong with the file, all at once, in an `InputError`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.geometry.blocks import (
    MOST_PIECES,
    Entity,
    Expansion,
    Layers,
    counted,
    expanded,
    name_layers,
    read_blocks,
)
from profileplan.geometry.document import layout_of, listed, open_document, unit_fault, unit_of
from profileplan.geometry.primitives import Drawn, drawn
from profileplan.inputs.rules import near, shown

if TYPE_CHECKING:
    from collections import Counter
    from collections.abc import Iterator

    from ezdxf.document import Drawing as Document

    from profileplan.geometry.blocks import Blocks
    from profileplan.geometry.corridor import Array, Indices
    from profileplan.geometry.shapes import Pieces

__all__ = ["MOST_PIECES", "Drawing", "Entity", "Reading", "Skipped", "read_drawing"]

FARTHEST = 1e7
"""How far from the origin anything may be drawn [mm]: there numbers still resolve 2e-9 mm."""

FARTHEST_CENTRE = 1e10
"""How far centres of arcs may be [mm]: their ends still resolve 2e-6 mm."""

LEAST_ERROR, MOST_ERROR = 1e-6, 1e3
"""Range of the distance that curves may be followed within [mm]."""

MOST_FAULTS = 20
"""How many faults of a file are listed."""

NO_LENGTH = "no length"


@dataclass(frozen=True)
class Skipped:
    """What was left out, once for each kind, layer and reason.

    Parameters
    ----------
    kind, layer, reason : str
    count : int
        How many entities.
    """

    kind: str
    layer: str
    reason: str
    count: int


@dataclass(frozen=True, eq=False)
class Drawing:
    """What a DXF file draws.

    Parameters
    ----------
    file : Path
    unit : str
        Name of the drawing's unit.
    scale : float
        mm for a unit.
    unit_source : str
        Who says so: "drawing" ($INSUNITS), "measurement" ($MEASUREMENT), "given" by the caller, or
        "none": taken as mm.
    pieces : Pieces
        In mm and in drawn order. Pieces of one entity follow each other and share end points.
    entities : tuple of Entity
        Those that the pieces' sources count; each has pieces.
    skipped : tuple of Skipped
    layers : tuple of str
        All layers that the table or entities name.
    notes : tuple of str
        Sentences for the reader of a report.
    error : float
        No piece is farther than this from the curve that it stands for [mm]; 0 where all are exact.
    """

    file: Path
    unit: str
    scale: float
    unit_source: str
    pieces: Pieces
    entities: tuple[Entity, ...]
    skipped: tuple[Skipped, ...]
    layers: tuple[str, ...]
    notes: tuple[str, ...]
    error: float


@dataclass(frozen=True, kw_only=True)
class Reading:
    """How a drawing is to be read.

    Parameters
    ----------
    layers : tuple of str, optional
        The layers to read, in any case; default: all.
    unit : str, optional
        The drawing's unit, whatever it says itself.
    space : str
        "model" or the name of a layout.
    hidden : bool
        Whether frozen, switched-off and unplotted layers and invisible entities are read too.
    hatches : bool
        Whether boundaries of hatches are.
    error : float [mm]
        Greatest distance to ellipses and splines.
    """

    layers: tuple[str, ...] | None = None
    unit: str | None = None
    space: str = "model"
    hidden: bool = False
    hatches: bool = False
    error: float = 1e-3


WHOLE = Reading()
"""The model space as it is seen."""


def read_drawing(file: Path | str, reading: Reading = WHOLE) -> Drawing:
    """Return what a DXF file draws.

    Parameters
    ----------
    file : Path or str
        Any version, text or binary; damaged ones are read as far as possible.
    reading : Reading

    Raises
    ------
    InputError
        With all faults of the file and of how it is to be read.
    """
    path = Path(file)
    faults = [Fault(place, message, path) for place, message in _reading_faults(reading)]
    try:
        opened = open_document(path)
    except InputError as unread:
        raise InputError([*faults, *unread.faults]) from None
    layers = Layers(opened.document, hidden=reading.hidden)
    # What is no finite number is refused once it is known where it is drawn.
    with np.errstate(invalid="ignore", over="ignore"):
        blocks = _blocks(opened.document, layers, reading)
    if isinstance(blocks, list):
        faults += [replace(fault, file=path) for fault in blocks]
    if faults or isinstance(blocks, list):
        raise InputError(faults)
    unit = unit_of(opened.document, reading.unit)
    with np.errstate(invalid="ignore", over="ignore"):
        whole = expanded(blocks, layers, reading.layers, scale=unit.scale)
    found, faults = _drawn(whole, reading.error)
    if faults:
        raise InputError(_shortened([replace(fault, file=path) for fault in faults]))
    pieces, entities = _named(whole, found.pieces)
    skipped = tuple(Skipped(*key, count) for key, count in _left_out(whole, found.pieces).items())
    return Drawing(
        file=path,
        unit=unit.name,
        scale=unit.scale,
        unit_source=unit.source,
        pieces=pieces,
        entities=entities,
        skipped=skipped,
        layers=tuple(layers.names),
        notes=(*opened.notes, *unit.notes),
        error=found.error,
    )


def _reading_faults(reading: Reading) -> Iterator[tuple[str, str]]:
    """Yield what is wrong with how a drawing is to be read, whatever the drawing."""
    if reading.unit is not None and unit_fault(reading.unit):
        yield "unit", unit_fault(reading.unit)
    if not LEAST_ERROR <= reading.error <= MOST_ERROR:
        allowed = f"{LEAST_ERROR:g} to {MOST_ERROR:g} mm"
        yield (
            "error",
            f"curves cannot be followed within {reading.error:g} mm; allowed are {allowed}",
        )


def _blocks(document: Document, layers: Layers, reading: Reading) -> Blocks | list[Fault]:
    """Return what is drawn, not yet expanded, or what is wrong with it."""
    layout = layout_of(document, reading.space)
    if isinstance(layout, str):
        return [Fault("space", layout)]
    blocks = read_blocks(document, layout, hatches=reading.hatches, hidden=reading.hidden)
    if isinstance(blocks, str):
        return [Fault("", f"a block draws itself: {blocks}")]
    name_layers(blocks, layers)
    unknown = [name for name in reading.layers or () if name not in layers]
    faults = [
        Fault("layers", f"there is no layer {shown(name)}; the drawing has {known}{hint}")
        for name in unknown
        for known, hint in [(listed(layers.names), near(name, layers.names))]
    ]
    _, count = counted(blocks)
    if count > MOST_PIECES:
        amount = f"{count:,}" if count < 10**15 else f"more than 10^{len(str(count)) - 1}"
        message = f"with all blocks it draws {amount} entities; at most {MOST_PIECES:,} are allowed"
        faults.append(Fault("", message))
    return faults or blocks


def _drawn(whole: Expansion, error: float) -> tuple[Drawn, list[Fault]]:
    """Return lines and arcs, whose sources are numbers of entities, and what is wrong."""
    faults = [
        Fault(place, f"on layer {shown(layer)} {message}")
        for (place, layer), message in whole.misfits.items()
    ]
    parts = []
    for part in whole.parts:
        sources, values = part.beyond(FARTHEST_CENTRE)
        faults += _far_faults(whole, sources, values)
        parts.append(part.without(sources) if sources.size else part)
    found = drawn(parts, error=error, most=MOST_PIECES, farthest=FARTHEST)
    pieces = found.pieces
    for place, layer in _places(whole, np.unique(found.left)):
        limit = f"cannot be followed within {error:g} mm by at most {MOST_PIECES:,} pieces"
        faults.append(Fault(place, f"on layer {shown(layer)} {limit}"))
    reach = np.maximum(np.abs(pieces.start), np.abs(pieces.end))
    arcs = np.flatnonzero(pieces.bulge)
    # A bulge without bounds makes a radius that is no number, and is refused as such.
    with np.errstate(all="ignore"):
        reach[arcs] = np.abs(pieces.chosen(arcs).bounds()).max(axis=1)
    far = np.flatnonzero(~(reach <= FARTHEST).all(axis=1))
    return found, [*faults, *_far_faults(whole, pieces.source[far], reach[far].max(axis=1))]


def _far_faults(whole: Expansion, sources: Indices, values: Array) -> list[Fault]:
    """Return what is wrong with entities whose coordinates, at most some values, are too great."""
    # The greatest value of each; what is no number counts as greatest.
    order = np.lexsort([np.where(np.isnan(values), np.inf, values), sources])
    last = order[np.append(np.flatnonzero(np.diff(sources[order])), -1)] if order.size else order
    faults = []
    places = _places(whole, sources[last])
    for (place, layer), value in zip(places, values[last].tolist(), strict=True):
        if np.isfinite(value):
            what = f"reaches {value:.6g} mm; at most {FARTHEST:g} mm from the origin are allowed"
        else:
            what = "has a coordinate that is no finite number"
        faults.append(Fault(place, f"on layer {shown(layer)} {what}"))
    return faults


def _places(whole: Expansion, numbers: Indices) -> Iterator[tuple[str, str]]:
    """Yield how messages name entities, and their layers."""
    for entity in whole.entities[np.searchsorted(whole.numbers, numbers)]:
        yield f"{entity.kind} {entity.handle}", entity.layer


def _shortened(faults: list[Fault]) -> list[Fault]:
    """Return not more faults than one wants to read."""
    more = len(faults) - MOST_FAULTS
    if more <= 0:
        return faults
    return [*faults[:MOST_FAULTS], Fault("", f"and {more:,} more", faults[0].file)]


def _named(whole: Expansion, pieces: Pieces) -> tuple[Pieces, tuple[Entity, ...]]:
    """Return pieces whose sources count the entities that have pieces, and these."""
    first = np.diff(pieces.source, prepend=-1) != 0
    found = np.searchsorted(whole.numbers, pieces.source[first])
    return replace(pieces, source=np.cumsum(first) - 1), tuple(whole.entities[found])


def _left_out(whole: Expansion, pieces: Pieces) -> Counter[tuple[str, str, str]]:
    """Return how many entities were left out, by kind, layer and reason."""
    skipped = whole.skipped.copy()
    drawn_ones = np.isin(whole.numbers, pieces.source)
    for entity in whole.entities[~drawn_ones]:
        skipped[entity.kind, entity.layer, NO_LENGTH] += 1
    return skipped
