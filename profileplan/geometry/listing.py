"""What is to be followed in a drawing, and what is wrong with it?

The outlines in the order followed, with the layers they are on, and everything that was joined,
left open or left out. Lengths and coordinates are in mm, seen in plan; lengths count heights too.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.geometry.order import order
from profileplan.geometry.outlines import chain
from profileplan.geometry.shapes import Pieces
from profileplan.inputs.rules import EXTENT

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from profileplan.geometry.corridor import Array, Indices
    from profileplan.geometry.drawing import Drawing, Skipped
    from profileplan.geometry.outlines import Branch, Chained, Gap
    from profileplan.geometry.shapes import Outline


@dataclass(frozen=True)
class Layer:
    """What is found on a layer.

    Parameters
    ----------
    name : str
    entities : int
        How many are drawn and read.
    skipped : int
        How many were left out.
    outlines : int
    length : float [mm]
        Of all its outlines.
    """

    name: str
    entities: int
    skipped: int
    outlines: int
    length: float


@dataclass(frozen=True)
class Listed:
    """One outline.

    Parameters
    ----------
    number : int
        In the order followed, counted from 1.
    layer : str
    closed : bool
    length : float [mm]
    pieces : int
        How many lines and arcs.
    smallest_radius : float, optional [mm]
        None: no arcs.
    start, end : pair of float [mm]
    handle, kind : str
        Of the entity that it begins with.
    """

    number: int
    layer: str
    closed: bool
    length: float
    pieces: int
    smallest_radius: float | None
    start: tuple[float, float]
    end: tuple[float, float]
    handle: str
    kind: str


@dataclass(frozen=True)
class Overlap:
    """What was drawn twice, and is followed once.

    Parameters
    ----------
    handle, kind, layer : str
        Of the entity of which something is left out.
    length : float [mm]
        How much.
    covered_by : str
        Handle of the entity that is followed there.
    """

    handle: str
    kind: str
    layer: str
    length: float
    covered_by: str


@dataclass(frozen=True, eq=False)
class Listing:
    """What is found in a drawing.

    Parameters
    ----------
    file : Path
    unit : str
    scale : float
        mm for a unit.
    unit_source : str
        As for a drawing.
    layers : tuple of Layer
        All that the drawing names.
    outlines : tuple of Listed
    gaps : tuple of Gap
    overlaps : tuple of Overlap
    branches : tuple of Branch
    skipped : tuple of Skipped
    notes : tuple of str
    error : float [mm]
        No outline is farther than this from the curves drawn.
    followed : tuple of Outline
        The outlines themselves, in the same order.
    """

    file: Path
    unit: str
    scale: float
    unit_source: str
    layers: tuple[Layer, ...]
    outlines: tuple[Listed, ...]
    gaps: tuple[Gap, ...]
    overlaps: tuple[Overlap, ...]
    branches: tuple[Branch, ...]
    skipped: tuple[Skipped, ...]
    notes: tuple[str, ...]
    error: float
    followed: tuple[Outline, ...]

    @property
    def length(self) -> float:
        """Length of all outlines [mm]."""
        return sum(layer.length for layer in self.layers)

    @property
    def travel(self) -> float:
        """Length of the straight ways from each outline to the next [mm]."""
        rows = self.outlines
        ends = np.array([row.end for row in rows[:-1]]).reshape(-1, 2)
        starts = np.array([row.start for row in rows[1:]]).reshape(-1, 2)
        return float(_distance(ends, starts).sum())

    @property
    def brief(self) -> str:
        """What is found, in a line."""
        closed = sum(row.closed for row in self.outlines)
        joined = sum(gap.joined for gap in self.gaps)
        parts = [
            _counted(joined, "gap", "joined"),
            _counted(len(self.gaps) - joined, "gap", "left open"),
            _counted(len(self.overlaps), "overlap", "left out"),
            _counted(len(self.branches), "branch point"),
        ]
        text = f"{_counted(len(self.outlines), 'outline') or 'no outline'}, {closed} closed, "
        more = ", ".join(part for part in parts if part)
        return f"{text}{self.length:.1f} mm{f'; {more}' if more else ''}"

    def values(self) -> dict[str, object]:
        """Return all but the outlines' pieces as plain values, ready for JSON."""
        return {
            "file": str(self.file),
            "unit": self.unit,
            "unit_mm": self.scale,
            "unit_source": self.unit_source,
            "length_mm": self.length,
            "travel_mm": self.travel,
            "curve_error_mm": self.error,
            "layers": [
                {
                    "name": layer.name,
                    "entities": layer.entities,
                    "skipped": layer.skipped,
                    "outlines": layer.outlines,
                    "length_mm": layer.length,
                }
                for layer in self.layers
            ],
            "outlines": [_row_values(row) for row in self.outlines],
            "gaps": [
                {
                    **_place(gap.position),
                    "width_mm": gap.width,
                    "layer": gap.layer,
                    "joined": gap.joined,
                }
                for gap in self.gaps
            ],
            "overlaps": [
                {
                    "handle": overlap.handle,
                    "kind": overlap.kind,
                    "layer": overlap.layer,
                    "length_mm": overlap.length,
                    "covered_by": overlap.covered_by,
                }
                for overlap in self.overlaps
            ],
            "branches": [
                {**_place(branch.position), "layer": branch.layer, "ends": branch.ends}
                for branch in self.branches
            ],
            "skipped": [
                {
                    "kind": skipped.kind,
                    "layer": skipped.layer,
                    "reason": skipped.reason,
                    "count": skipped.count,
                }
                for skipped in self.skipped
            ],
            "notes": list(self.notes),
        }


def listing(
    drawing: Drawing, *, joining: float = 0.01, shortest: bool = False, inside_first: bool = False
) -> Listing:
    """Return what is to be followed in a drawing, and what is wrong with it.

    Parameters
    ----------
    drawing : Drawing
    joining : float [mm]
        How far ends that are joined may be apart.
    shortest : bool
        Whether the straight ways between outlines, from the drawing's origin on, are kept short;
        otherwise outlines stay as drawn.
    inside_first : bool
        Whether what lies inside of a closed outline comes before it.

    Raises
    ------
    InputError
        ``joining`` is out of range.
    """
    if not EXTENT.holds(joining):
        message = f"{joining:g} mm; allowed: {EXTENT.describe('mm')}"
        raise InputError([Fault("joining", message, drawing.file)])
    chained = chain(drawing.pieces, [entity.layer for entity in drawing.entities], joining=joining)
    # What each outline takes besides the way to it is the same in any order, so it is left out.
    followed = order(
        chained.outlines,
        start=np.zeros(2),
        travel=_distance,
        inside_first=inside_first,
        shortest=shortest,
    )
    rows = _rows(drawing, followed)
    return Listing(
        file=drawing.file,
        unit=drawing.unit,
        scale=drawing.scale,
        unit_source=drawing.unit_source,
        layers=_layers(drawing, rows),
        outlines=rows,
        gaps=chained.gaps,
        overlaps=_overlaps(drawing, chained),
        branches=chained.branches,
        skipped=drawing.skipped,
        notes=drawing.notes,
        error=drawing.error,
        followed=followed,
    )


def joint_pieces(outlines: Sequence[Outline]) -> tuple[Pieces, Indices]:
    """Return the pieces of outlines, at least one, in a row, and which each begins with: (n,)."""
    own = [outline.pieces for outline in outlines]
    counts = np.array([len(pieces) for pieces in own])
    joint = Pieces(
        np.concatenate([pieces.start for pieces in own]),
        np.concatenate([pieces.end for pieces in own]),
        np.concatenate([pieces.bulge for pieces in own]),
        np.concatenate([pieces.source for pieces in own]),
    )
    return joint, np.cumsum(counts) - counts


def _distance(start: Array, end: Array) -> Array:
    """Return the straight distances between points, (k, 2) each: (k,) [mm]."""
    found: Array = np.hypot(end[:, 0] - start[:, 0], end[:, 1] - start[:, 1])
    return found


def _rows(drawing: Drawing, followed: Sequence[Outline]) -> tuple[Listed, ...]:
    if not followed:
        return ()
    # At once, for there may be very many.
    pieces, first = joint_pieces(followed)
    lengths = np.add.reduceat(pieces.length, first).tolist()
    radii = np.minimum.reduceat(pieces.radius, first).tolist()
    starts = pieces.start[first, :2].tolist()
    last = np.append(first[1:], len(pieces)) - 1
    ends = pieces.end[last, :2].tolist()
    sources = pieces.source[first].tolist()
    found = []
    for index, outline in enumerate(followed):
        entity = drawing.entities[sources[index]]
        (x, y), (end_x, end_y), radius = starts[index], ends[index], radii[index]
        found.append(
            Listed(
                number=index + 1,
                layer=outline.layer,
                closed=outline.closed,
                length=lengths[index],
                pieces=len(outline.pieces),
                smallest_radius=radius if np.isfinite(radius) else None,
                start=(x, y),
                end=(end_x, end_y),
                handle=entity.handle,
                kind=entity.kind,
            )
        )
    return tuple(found)


def _layers(drawing: Drawing, rows: Sequence[Listed]) -> tuple[Layer, ...]:
    entities = Counter(entity.layer for entity in drawing.entities)
    outlines = Counter(row.layer for row in rows)
    skipped: Counter[str] = Counter()
    for left in drawing.skipped:
        skipped[left.layer] += left.count
    lengths: dict[str, float] = {}
    for row in rows:
        lengths[row.layer] = lengths.get(row.layer, 0.0) + row.length
    return tuple(
        Layer(name, entities[name], skipped[name], outlines[name], lengths.get(name, 0.0))
        for name in drawing.layers
    )


def _overlaps(drawing: Drawing, chained: Chained) -> tuple[Overlap, ...]:
    return tuple(
        Overlap(
            handle=drawing.entities[dropped.source].handle,
            kind=drawing.entities[dropped.source].kind,
            layer=dropped.layer,
            length=dropped.length,
            covered_by=drawing.entities[dropped.covered_by].handle,
        )
        for dropped in chained.dropped
    )


def _counted(count: int, word: str, after: str = "") -> str:
    """Return so many things in words; nothing for none."""
    if not count:
        return ""
    return f"{count} {word}{'' if count == 1 else 's'}{f' {after}' if after else ''}"


def _place(position: tuple[float, float]) -> dict[str, object]:
    return {"x_mm": position[0], "y_mm": position[1]}


def _row_values(row: Listed) -> dict[str, object]:
    return {
        "number": row.number,
        "layer": row.layer,
        "closed": row.closed,
        "length_mm": row.length,
        "pieces": row.pieces,
        "smallest_radius_mm": row.smallest_radius,
        "start_x_mm": row.start[0],
        "start_y_mm": row.start[1],
        "end_x_mm": row.end[0],
        "end_y_mm": row.end[1],
        "handle": row.handle,
        "kind": row.kind,
    }
