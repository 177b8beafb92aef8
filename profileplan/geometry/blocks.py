"""Where is every entity of a drawing drawn, on which layer, under which name?

A layout and the blocks that it draws are a graph without rings. It is passed once, from the layout
down: each block takes the places of all its references at once. Before, it is counted from below
how many entities a block draws with all blocks inside: so each place knows the numbers that its
entities have in drawn order.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import numpy.typing as npt

from profileplan.geometry.entities import Content, axes, read_content
from profileplan.geometry.primitives import Maps, Primitives

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator

    from ezdxf.document import Drawing as Document
    from ezdxf.entities.dxfentity import DXFEntity
    from ezdxf.layouts.blocklayout import BlockLayout
    from ezdxf.layouts.layout import Layout

    from profileplan.geometry.corridor import Array, Indices
    from profileplan.geometry.entities import Reference

MOST_PIECES = 5_000_000
"""How many entities or pieces a drawing may draw."""

FROZEN, OFF, UNPLOTTED, UNASKED = 1, 2, 3, 4

LAYER_REASONS = {
    FROZEN: "on a frozen layer",
    OFF: "on a layer that is switched off",
    UNPLOTTED: "on a layer that is not plotted",
    UNASKED: "on a layer that was not asked for",
}

UNKNOWN_BLOCK = "of a block that is not in the drawing"
EXTERNAL = "an external reference"

RIGHT = 1e-15
"""How far rounding puts sines and cosines of right angles from whole numbers."""

INHERITED = -1
"""Layer of the entities of a block that take that of its reference."""

POINTS_OF_DIMENSIONS = "defpoints"
"""The layer that is never plotted."""


@dataclass(frozen=True, slots=True)
class Entity:
    """One drawn entity, as messages name it.

    Parameters
    ----------
    handle : str
        Its handle; of one inside a block that of the outermost block reference.
    layer : str
        The layer that it is seen on: entities of blocks on layer "0" take that of the reference.
    kind : str
        Its DXF type, such as "ARC"; inside blocks "ARC in block BOLTS".
    """

    handle: str
    layer: str
    kind: str


class Layers:
    """Layers by number: their names, and why nothing on them is drawn.

    Names differ not by their case, as in DXF.

    Parameters
    ----------
    document : Drawing of ezdxf
    hidden : bool
        Whether frozen, off and unplotted layers are drawn too.
    """

    def __init__(self, document: Document, *, hidden: bool) -> None:
        self.names: list[str] = []
        self._numbers: dict[str, int] = {}
        self._states: list[int] = []
        for layer in document.layers:
            number = self.number(layer.dxf.name)
            if hidden:
                continue
            unplotted = not layer.dxf.plot or layer.dxf.name.casefold() == POINTS_OF_DIMENSIONS
            states = ((layer.is_frozen(), FROZEN), (layer.is_off(), OFF), (unplotted, UNPLOTTED))
            self._states[number] = next((state for true, state in states if true), 0)

    def number(self, name: str) -> int:
        """Return the number of a layer, a new one for a new name."""
        folded = name.casefold()
        if folded not in self._numbers:
            self._numbers[folded] = len(self.names)
            self.names.append(name)
            self._states.append(0)
        return self._numbers[folded]

    def __contains__(self, name: str) -> bool:
        return name.casefold() in self._numbers

    def states(self, asked: tuple[str, ...] | None) -> tuple[Indices, Indices]:
        """Return why entities on each layer are not drawn, and references not: two (n,) of int."""
        own = np.array(self._states, dtype=np.intp)
        references = np.where(own == FROZEN, FROZEN, 0)
        if asked is not None:
            chosen = {name.casefold() for name in asked}
            unasked = np.array([name not in chosen for name in self._numbers], dtype=bool)
            own = np.where(unasked, UNASKED, own)
        return own, references


@dataclass(frozen=True, eq=False)
class Blocks:
    """A layout and the blocks that it draws.

    Parameters
    ----------
    root : str
        The layout's own block.
    order : tuple of str
        All of them, each before those that it draws.
    contents : dict of Content
    names, bases : dict
        Names as drawn, and base points (3,).
    """

    root: str
    order: tuple[str, ...]
    contents: dict[str, Content]
    names: dict[str, str]
    bases: dict[str, Array]


def read_blocks(document: Document, layout: Layout, *, hatches: bool, hidden: bool) -> Blocks | str:
    """Return what a layout and its blocks draw, or which blocks draw themselves.

    Parameters
    ----------
    document : Drawing of ezdxf
    layout : Layout of ezdxf
    hatches, hidden : bool
        Whether boundaries of hatches, and invisible entities, are drawn.
    """
    root = layout.block_record_name.casefold()
    names, bases = {root: layout.name}, {root: np.zeros(3)}
    contents: dict[str, Content] = {}
    waiting: list[tuple[str, Iterable[DXFEntity]]] = [(root, layout)]
    while waiting:
        key, entities = waiting.pop()
        own = read_content(entities, hatches=hatches, hidden=hidden)
        known = []
        for reference in own.references:
            inner = reference.block.casefold()
            if inner not in names:
                block: BlockLayout | None = document.blocks.get(reference.block)
                if block is None or block.block is None or block.block_record.is_xref:
                    reason = UNKNOWN_BLOCK if block is None else EXTERNAL
                    own.slots.reason[reference.slot] = reason
                    continue
                names[inner] = block.name
                bases[inner] = np.array([*block.block.dxf.base_point][:3])
                waiting.append((inner, block))
            known.append(reference)
        contents[key] = Content(own.slots, own.primitives, tuple(known), own.misfits)
    order, ring = _ordered(root, contents)
    if ring:
        return ", which draws ".join(f'"{names[key]}"' for key in ring)
    return Blocks(root, tuple(order), contents, names, bases)


def _ordered(root: str, contents: dict[str, Content]) -> tuple[list[str], list[str]]:
    """Return blocks, each before those that it draws, and a ring of blocks where there is one."""
    done: dict[str, None] = {}
    path: dict[str, Iterator[str]] = {root: _inner(contents[root])}
    while path:
        key = next(reversed(path))
        inner = next(path[key], None)
        if inner is None:
            done[key] = None
            del path[key]
        elif inner in path:
            keys = list(path)
            return [], [*keys[keys.index(inner) :], inner]
        elif inner not in done:
            path[inner] = _inner(contents[inner])
    return list(reversed(done)), []


def _inner(content: Content) -> Iterator[str]:
    """Return the blocks that are drawn in another, each once."""
    return iter(dict.fromkeys(reference.block.casefold() for reference in content.references))


def counted(blocks: Blocks) -> tuple[dict[str, int], int]:
    """Return how many entities each block draws with all inside, and how much all draw together.

    Whole numbers without bound: blocks inside blocks soon draw more than any array holds.
    """
    widths: dict[str, int] = {}
    for key in reversed(blocks.order):
        own = blocks.contents[key]
        inside = sum(ref.copies * widths[ref.block.casefold()] for ref in own.references)
        widths[key] = len(own.slots.kind) + inside
    places = dict.fromkeys(blocks.order, 0)
    places[blocks.root] = 1
    whole = 0
    for key in blocks.order:
        own = blocks.contents[key]
        whole += places[key] * max(1, len(own.slots.kind), len(own.primitives))
        for ref in own.references:
            places[ref.block.casefold()] += places[key] * ref.copies
    return widths, whole


class _Places(NamedTuple):
    """Where a block is drawn, k times.

    maps : Maps to mm; first : (k,) array of int, number of its first entity; layer : (k,) array of
    int, layer of the reference; outer : (k,) array of int, slot of the outermost reference.
    """

    maps: Maps
    first: Indices
    layer: Indices
    outer: Indices

    @classmethod
    def joined(cls, parts: list[_Places]) -> _Places:
        if len(parts) == 1:
            return parts[0]
        return cls(
            Maps(
                np.concatenate([part.maps.linear for part in parts]),
                np.concatenate([part.maps.shift for part in parts]),
            ),
            *(np.concatenate([part[column] for part in parts]) for column in range(1, 4)),
        )


@dataclass(frozen=True, eq=False)
class Expansion:
    """All that is drawn, in mm.

    Parameters
    ----------
    parts : tuple of Primitives
        Their sources are numbers of entities.
    numbers : (n,) array of int
        The numbers of the entities drawn, rising.
    entities : (n,) array of Entity
    skipped : Counter
        How many entities are not drawn, by kind, layer and reason.
    misfits : dict of str
        What is wrong with entities, by where.
    """

    parts: tuple[Primitives, ...]
    numbers: Indices
    entities: npt.NDArray[np.object_]
    skipped: Counter[tuple[str, str, str]]
    misfits: dict[tuple[str, str], str]


def expanded(
    blocks: Blocks, layers: Layers, asked: tuple[str, ...] | None, *, scale: float
) -> Expansion:
    """Return what a layout draws with all blocks in it.

    Parameters
    ----------
    blocks : Blocks
    layers : Layers
    asked : tuple of str, optional
        Names of the layers to draw.
    scale : float
        mm for a unit of the drawing.
    """
    return _Expander(blocks, layers, asked).run(scale)


def name_layers(blocks: Blocks, layers: Layers) -> None:
    """Enter the layers that entities name."""
    for content in blocks.contents.values():
        for name in dict.fromkeys(content.slots.layer):
            layers.number(name)


class _Expander:
    """Passes the blocks from the layout down."""

    def __init__(self, blocks: Blocks, layers: Layers, asked: tuple[str, ...] | None) -> None:
        self._blocks, self._layers = blocks, layers
        self._states, self._reference_states = layers.states(asked)
        self._widths, _ = counted(blocks)
        self._places: dict[str, list[_Places]] = {key: [] for key in blocks.order}
        self._parts: list[Primitives] = []
        self._numbers: list[Indices] = []
        self._entities: list[npt.NDArray[np.object_]] = []
        self._skipped: Counter[tuple[str, str, str]] = Counter()
        self._misfits: dict[tuple[str, str], str] = {}

    def run(self, scale: float) -> Expansion:
        """Return what is drawn."""
        none = np.zeros(1, dtype=np.intp)
        whole = Maps(scale * np.eye(3)[np.newaxis], np.zeros((1, 3)))
        self._places[self._blocks.root] = [_Places(whole, none, none, none)]
        for key in self._blocks.order:
            places = self._places.pop(key)
            if places and self._blocks.contents[key].slots.kind:
                self._pass(key, _Places.joined(places))
        numbers = np.concatenate([none[:0], *self._numbers])
        order = np.argsort(numbers, kind="stable")
        entities = np.concatenate([np.empty(0, dtype=object), *self._entities])
        return Expansion(
            tuple(self._parts), numbers[order], entities[order], self._skipped, self._misfits
        )

    def _pass(self, key: str, places: _Places) -> None:
        """Draw a block in all its places."""
        content = self._blocks.contents[key]
        slots, root = content.slots, key == self._blocks.root
        own = np.array(
            [
                INHERITED if name == "0" and not root else self._layers.number(name)
                for name in slots.layer
            ],
            dtype=np.intp,
        )
        layer = np.where(own == INHERITED, places.layer[:, np.newaxis], own)
        referring = np.zeros(len(own), dtype=bool)
        referring[[reference.slot for reference in content.references]] = True
        silent = np.array([reason != "" for reason in slots.reason], dtype=bool)
        state = np.where(referring, self._reference_states[layer], self._states[layer])
        kinds = slots.kind
        if not root:
            kinds = [f"{kind} in block {self._blocks.names[key]}" for kind in kinds]
        self._skip(kinds, slots.reason, layer, np.where((state == 0) & silent, -1, state))
        shown = (state == 0) & ~silent
        first = places.first[:, np.newaxis] + self._offsets(content)
        numbers = np.where(shown & ~referring, first, -1)
        for slot, message in content.misfits:
            if shown[:, slot].any():
                name = self._layers.names[layer[np.argmax(shown[:, slot]), slot]]
                inside = "" if root else f" in block {self._blocks.names[key]}"
                place = f"{slots.kind[slot]} {slots.handle[slot]}{inside}"
                self._misfits[place, name] = message
                numbers[:, slot] = -1
        self._name(kinds, layer, numbers, None if root else places.outer)
        self._parts.append(content.primitives.placed(places.maps, numbers))
        outer = np.arange(len(own)) if root else None
        self._descend(key, places, _Inside(layer, shown, first, outer))

    def _offsets(self, content: Content) -> Indices:
        """Return how many entities of a block are drawn before each: (m,)."""
        width = np.ones(len(content.slots.kind), dtype=np.intp)
        for ref in content.references:
            width[ref.slot] += ref.copies * self._widths[ref.block.casefold()]
        return np.asarray(np.cumsum(width) - width)

    def _skip(self, kinds: list[str], reasons: list[str], layer: Indices, why: Indices) -> None:
        """Count what is not drawn: why is 0 for what is, -1 for the entity's own reason."""
        place, slot = np.nonzero(why)
        code = np.stack([slot, layer[place, slot], why[place, slot]], axis=1)
        if not len(code):
            return
        rows, count = np.unique(code, axis=0, return_counts=True)
        for (own, number, reason), times in zip(rows.tolist(), count.tolist(), strict=True):
            text = reasons[own] if reason < 0 else LAYER_REASONS[reason]
            self._skipped[kinds[own], self._layers.names[number], text] += times

    def _name(
        self, kinds: list[str], layer: Indices, numbers: Indices, outer: Indices | None
    ) -> None:
        """Note the entities drawn; equal ones of a block reference share their record."""
        place, slot = np.nonzero(numbers >= 0)
        names, handles = self._layers.names, self._blocks.contents[self._blocks.root].slots.handle
        drawn = layer[place, slot]
        if outer is None:
            listed = [
                Entity(handles[own], names[number], kinds[own])
                for own, number in zip(slot.tolist(), drawn.tolist(), strict=True)
            ]
            which = np.arange(len(listed))
        else:
            code = (outer[place] * len(names) + drawn) * len(kinds) + slot
            codes, which = np.unique(code, return_inverse=True)
            rest, kind = np.divmod(codes, len(kinds))
            columns = (*(part.tolist() for part in np.divmod(rest, len(names))), kind.tolist())
            listed = [
                Entity(handles[own], names[number], kinds[row])
                for own, number, row in zip(*columns, strict=True)
            ]
        records = np.empty(len(listed), dtype=object)
        records[:] = listed
        self._numbers.append(numbers[place, slot])
        self._entities.append(records[which.ravel()])

    def _descend(self, key: str, places: _Places, inside: _Inside) -> None:
        """Note where the blocks inside are drawn."""
        by_block: dict[str, list[Reference]] = {}
        for reference in self._blocks.contents[key].references:
            by_block.setdefault(reference.block.casefold(), []).append(reference)
        for inner, references in by_block.items():
            local, which, copy = _local(references, self._blocks.bases[inner])
            slot = np.array([reference.slot for reference in references], dtype=np.intp)[which]
            place, row = np.nonzero(inside.shown[:, slot])
            chosen = slot[row]
            # A reference's own number comes first, then those of its copies.
            first = inside.first[place, chosen] + 1 + copy[row] * self._widths[inner]
            outer = places.outer[place] if inside.outer is None else chosen
            maps = places.maps.at(place).after(local.at(row))
            found = _Places(maps, first, inside.layer[place, chosen], outer)
            if place.size:
                self._places[inner].append(found)


class _Inside(NamedTuple):
    """Of a block in its places, (k, m): layers, what is shown, numbers; slots, in the layout."""

    layer: Indices
    shown: npt.NDArray[np.bool_]
    first: Indices
    outer: Indices | None


def _local(references: list[Reference], base: Array) -> tuple[Maps, Indices, Indices]:
    """Return the maps of all copies of references, which each belongs to, and its number there."""
    numbers = np.array([reference.numbers for reference in references], dtype=np.float64)
    rows = np.array([reference.rows for reference in references], dtype=np.intp)
    columns = np.array([reference.columns for reference in references], dtype=np.intp)
    turn = np.radians(numbers[:, 6])
    cosine, sine = _exact(np.cos(turn)), _exact(np.sin(turn))
    turned = np.zeros((len(numbers), 3, 3))
    turned[:, 0, 0] = turned[:, 1, 1] = cosine
    turned[:, 0, 1], turned[:, 1, 0] = -sine, sine
    turned[:, 2, 2] = 1.0
    frame = axes(numbers[:, 9:12])
    spun = np.einsum("kab,kbc->kac", frame, turned)
    linear = spun * numbers[:, np.newaxis, 3:6]
    which = np.repeat(np.arange(len(references)), rows * columns)
    copy = np.arange(which.size) - np.repeat(
        np.cumsum(rows * columns) - rows * columns, rows * columns
    )
    row, column = np.divmod(copy, columns[which])
    grid = np.stack([column * numbers[which, 8], row * numbers[which, 7], 0.0 * copy], axis=1)
    shift = np.einsum("kab,kb->ka", frame, numbers[:, :3]) - linear @ base
    return (
        Maps(linear[which], shift[which] + np.einsum("kab,kb->ka", spun[which], grid)),
        which,
        copy,
    )


def _exact(values: Array) -> Array:
    """Return sines or cosines where those of right angles are exact."""
    return np.where(
        np.abs(values) < RIGHT, 0.0, np.where(1 - np.abs(values) < RIGHT, np.rint(values), values)
    )
