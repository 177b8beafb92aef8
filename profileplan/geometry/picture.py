"""What does a drawing look like as it is followed? One SVG picture, in text.

Outlines are drawn by lines and circular arcs, as they are followed, with their numbers, starts and
directions, the ways between them, and gaps. What lines and marks mean does not hang on colour. The
picture has neither scripts nor links, and is light or dark as the reader's screen.

On the picture y points downward, and the greater side of the drawing measures SIDE. Source:
Scalable Vector Graphics 1.1, W3C (from memory): an arc whose sweep flag is 0 runs anticlockwise on
the screen.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from html import escape
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from profileplan.errors import Fault, InputError
from profileplan.geometry.listing import joint_pieces
from profileplan.geometry.overlaps import cut

if TYPE_CHECKING:
    from collections.abc import Iterator

    from profileplan.geometry.corridor import Array, Indices
    from profileplan.geometry.listing import Listing
    from profileplan.geometry.shapes import Pieces

MOST_PIECES = 500_000
"""Larger pictures are of no use: it takes viewers too long to show them."""

MOST_NUMBERS = 2000
"""How many outlines have their numbers and the ways to them shown: more hide each other."""

SHARP = math.tan(math.pi / 8)
"""Bulge of a quarter of a circle. Wider arcs are cut: their centres hang on the last digits."""

SIDE = 1000.0
FINE, COARSE = 3, 1
"""Decimals of outlines, a millionth of the greater side, and of marks."""

MARGIN, HEAD, ROW, COLUMN = 40.0, 110.0, 32.0, 400.0
"""Room round the drawing and above it; height and width of an entry of the legend."""

ARROW, APART, MOST_ARROWS = 14.0, 300.0, 8
"""Size of arrows, about how far they are apart, and most of them on an outline."""

LEAST = 5.0
"""Shorter outlines have no arrow: it would be too small to be seen."""

STYLE = """
.paper{fill:#fdfdfb}
.line,.way,.arrow,.dot,.tail,.gap,.scale{fill:none;vector-effect:non-scaling-stroke}
.line{stroke:#1c2733;stroke-width:1.8}
.way{stroke:#66727c;stroke-width:1.2;stroke-dasharray:6 5}
.arrow{stroke:#0b57a4;stroke-width:2}
.dot{stroke:#0b57a4;stroke-width:9;stroke-linecap:round}
.tail{stroke:#0b57a4;stroke-width:7;stroke-linecap:square}
.gap{stroke:#b3261e;stroke-width:2}
.scale{stroke:#1c2733;stroke-width:1.5}
text{font-family:system-ui,sans-serif;font-size:17px;fill:#1c2733}
.head{font-size:22px;font-weight:600}
.number{font-size:18px;font-weight:600;text-anchor:middle;fill:#0b57a4;\
stroke:#fdfdfb;stroke-width:5px;stroke-linejoin:round;paint-order:stroke}
@media (prefers-color-scheme:dark){
.paper{fill:#14181d}
.line,.scale{stroke:#e6e9ec}
.way{stroke:#9aa5ae}
.arrow,.dot,.tail{stroke:#7db7ff}
.gap{stroke:#ff8a80}
text{fill:#e6e9ec}
.number{fill:#7db7ff;stroke:#14181d}
}
"""


def picture(listing: Listing) -> str:
    """Return an SVG picture of what is found in a drawing.

    Parameters
    ----------
    listing : Listing
        With at least one outline.

    Raises
    ------
    InputError
        There are more lines and arcs than a picture can show.
    """
    count = sum(len(outline.pieces) for outline in listing.followed)
    if count > MOST_PIECES:
        message = (
            f"{count:,} lines and arcs are too many for a picture; at most {MOST_PIECES:,} can be "
            "shown: choose layers"
        )
        raise InputError([Fault("", message, listing.file)])
    sheet = _Sheet(listing, *joint_pieces(listing.followed))
    marks = [mark for mark in _marks(sheet) if mark.drawn]
    # The legend stands in two columns, below the scale.
    below = HEAD + sheet.size[1] + 2 * MARGIN
    height = below + math.ceil(len(marks) / 2) * ROW + MARGIN
    zoom = SIDE / max(sheet.width, height)
    body = [
        *(_path(mark.name, mark.drawn) for mark in marks),
        *_numbers(sheet),
        *_words(sheet),
        *_bar(sheet, below - ROW),
        *_legend(sheet, sorted(marks, key=lambda mark: mark.name == "way"), below),
    ]
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" role="img" viewBox="0 0 {_short(sheet.width)} '
        f'{_short(height)}" width="{sheet.width * zoom:.0f}" height="{height * zoom:.0f}">\n'
        f"<title>{_text(listing.file.name)}</title>\n<desc>{_text(listing.brief)}</desc>\n"
        f'<style>{STYLE}</style>\n<rect class="paper" width="100%" height="100%"/>\n'
        + "\n".join(body)
        + "\n</svg>\n"
    )


class _Mark(NamedTuple):
    """One kind of line or mark: its name in STYLE, what is drawn, a sample, and its meaning."""

    name: str
    drawn: str
    sample: str
    meaning: str


@dataclass(frozen=True, eq=False)
class _Sheet:
    """A drawing laid on the picture.

    Parameters
    ----------
    listing : Listing
    pieces : Pieces
        Of all outlines, in the order followed [mm].
    first : (n,) array of int
        The piece that each outline begins with.
    """

    listing: Listing
    pieces: Pieces
    first: Indices

    @cached_property
    def bounds(self) -> Array:
        """The lowest and the highest position in plan, (2, 2) [mm]."""
        own = self.pieces.bounds()[:, :, :2]
        return np.stack([own[:, 0].min(axis=0), own[:, 1].max(axis=0)])

    @cached_property
    def zoom(self) -> float:
        """How much a mm measures on the picture. What has no size in plan is not enlarged."""
        greatest = float((self.bounds[1] - self.bounds[0]).max())
        return SIDE / greatest if greatest > 0 else 1.0

    @cached_property
    def size(self) -> tuple[float, float]:
        """Width and height of the drawing on the picture."""
        wide, high = ((self.bounds[1] - self.bounds[0]) * self.zoom).tolist()
        return wide, high

    @cached_property
    def width(self) -> float:
        """Width of the picture: the legend needs its own."""
        return max(self.size[0], 2 * COLUMN) + 2 * MARGIN

    @cached_property
    def last(self) -> Indices:
        """The piece that each outline ends with, (n,)."""
        return np.append(self.first[1:], len(self.pieces)) - 1

    def __call__(self, points: Array) -> Array:
        """Return where points, (k, 2) or more columns, lie on the picture: (k, 2)."""
        left, top = 0.5 * (self.width - self.size[0]), HEAD
        x = (points[:, 0] - self.bounds[0, 0]) * self.zoom + left
        y = (self.bounds[1, 1] - points[:, 1]) * self.zoom + top
        return np.stack([x, y], axis=1)


def _marks(sheet: _Sheet) -> Iterator[_Mark]:
    """Yield what is drawn, the lowest first."""
    pieces, first, last = sheet.pieces, sheet.first, sheet.last
    starts, ends = sheet(pieces.start[first]), sheet(pieces.end[last])
    few = min(MOST_NUMBERS, len(first))
    ways = "".join(
        f"M{one}L{other}"
        for one, other in zip(_pairs(ends[: few - 1]), _pairs(starts[1:few]), strict=True)
        if one != other
    )
    yield _Mark("way", ways, "M0 0H44", "way from an outline to the next")
    yield _Mark("line", "".join(_traced(sheet)), "M0 0H44", "outline")
    yield _Mark("arrow", _arrows(sheet), "M16 -9L30 0L16 9", "direction")
    unclosed = np.array([not row.closed for row in sheet.listing.outlines])
    yield _Mark("tail", _dots(ends[unclosed]), "M22 0h0", "end of an open outline")
    yield _Mark("dot", _dots(starts), "M22 0h0", "start, numbered in the order followed")
    for joined, path, meaning in (
        (True, "m-9 0a9 9 0 1 0 18 0a9 9 0 1 0 -18 0", "gap that was joined"),
        (False, "m-9 -9l18 18m0 -18l-18 18", "gap left open"),
    ):
        found = [gap.position for gap in sheet.listing.gaps if gap.joined is joined]
        yield _Mark("gap", _stamped(sheet, found, path), f"M22 0{path}", meaning)
    path = "m-10 0l10 -10l10 10l-10 10z"
    found = [branch.position for branch in sheet.listing.branches]
    yield _Mark("gap", _stamped(sheet, found, path), f"M22 0{path}", "branch: more than two meet")


def _traced(sheet: _Sheet) -> Iterator[str]:
    """Yield the path of every outline."""
    whole = sheet.pieces
    wide = np.abs(whole.bulge) > SHARP
    index = np.repeat(np.arange(len(whole)), 1 + wide)
    second = np.concatenate([[False], index[1:] == index[:-1]])
    half = wide[index]
    low, high = np.where(half & second, 0.5, 0.0), np.where(half & ~second, 0.5, 1.0)
    parts = cut(whole, index, low, high)
    begins = np.zeros(len(whole), dtype=bool)
    begins[sheet.first] = True
    begins = begins[index] & ~second
    # Relative coordinates are shorter, and differences of rounded ones add up to these.
    start, end = np.round(sheet(parts.start), FINE), np.round(sheet(parts.end), FINE)
    away = end - start
    rows = zip(
        begins.tolist(),
        *start.T.tolist(),
        *away.T.tolist(),
        parts.bulge.tolist(),
        (parts.radius * sheet.zoom).tolist(),
        strict=True,
    )
    closed = iter([row.closed for row in sheet.listing.outlines])
    loop = False
    for begin, x, y, right, down, bulge, radius in rows:
        if begin:
            yield f"{'Z' if loop else ''}M{_short(x, FINE)} {_short(y, FINE)}"
            loop = next(closed)
        if bulge:
            size = f"{radius:.7g}"
            yield f"a{size} {size} 0 0 {'0' if bulge > 0 else '1'} "
        else:
            yield "l"
        yield f"{_short(right, FINE)} {_short(down, FINE)}"
    yield "Z" if loop else ""


def _arrows(sheet: _Sheet) -> str:
    """Return arrows, evenly along each outline."""
    pieces, first = sheet.pieces, sheet.first
    length = pieces.length * sheet.zoom
    whole = np.add.reduceat(length, first)
    count = np.clip(np.rint(whole / APART), whole >= LEAST, MOST_ARROWS).astype(np.intp)
    outline = np.repeat(np.arange(len(first)), count)
    turn = np.arange(outline.size) - np.repeat(np.cumsum(count) - count, count)
    reached = np.cumsum(length) - length
    # Not in the middle, where the corner of a rectangle often is.
    aim = reached[first[outline]] + (turn + 0.4) / count[outline] * whole[outline]
    index = np.clip(
        np.searchsorted(reached, aim, side="right") - 1, first[outline], sheet.last[outline]
    )
    share = np.clip((aim - reached[index]) / length[index], 0.0, 1.0)
    flat = (pieces.end - pieces.start)[index]
    angle = np.arctan2(flat[:, 1], flat[:, 0]) + (share - 0.5) * pieces.turn[index]
    size = np.minimum(ARROW, 0.08 * whole[outline])
    along = np.stack([np.cos(angle), -np.sin(angle)], axis=1) * size[:, np.newaxis]
    across = np.stack([-along[:, 1], along[:, 0]], axis=1) * 0.65
    tip = sheet(pieces.at(index, share)) + 0.5 * along
    return "".join(
        f"M{one}L{middle}L{other}"
        for one, middle, other in zip(
            _pairs(tip - along + across), _pairs(tip), _pairs(tip - along - across), strict=True
        )
    )


def _numbers(sheet: _Sheet) -> Iterator[str]:
    """Yield numbers beside the starts of the first outlines, outside of closed ones."""
    few = sheet.listing.followed[:MOST_NUMBERS]
    begin = sheet.pieces.chosen(sheet.first[:MOST_NUMBERS])
    tangent, _ = begin.directions()
    # Outside is right of an anticlockwise outline, left of the others.
    right = np.array([-1 if outline.area < 0 else 1 for outline in few])[:, np.newaxis]
    places = sheet(begin.start) + 19 * right * np.stack([tangent[:, 1], tangent[:, 0]], axis=1)
    for number, (x, y) in enumerate(places.tolist(), start=1):
        yield f'<text class="number" x="{_short(x)}" y="{_short(y + 6)}">{number}</text>'
    if len(sheet.first) > MOST_NUMBERS:
        told = f"Numbers and ways are shown of the first {MOST_NUMBERS:,} outlines."
        yield f'<text x="{_short(MARGIN)}" y="90">{told}</text>'


def _words(sheet: _Sheet) -> Iterator[str]:
    """Yield what stands above the drawing."""
    listing = sheet.listing
    room = int((sheet.width - 2 * MARGIN) / 9)
    for style, y, text in (("head", 40, listing.file.name), ("", 66, listing.brief)):
        cut_off = text if len(text) <= room else text[: room - 1] + "…"
        mark = f' class="{style}"' if style else ""
        yield f'<text{mark} x="{_short(MARGIN)}" y="{y}">{_text(cut_off)}</text>'


def _bar(sheet: _Sheet, y: float) -> Iterator[str]:
    """Yield a scale: the longest of 1, 2, 5, 10, ... mm that is shorter than a quarter of SIDE."""
    longest = 0.25 * SIDE / sheet.zoom
    power = 10.0 ** math.floor(math.log10(longest))
    length = max(step * power for step in (1, 2, 5) if step * power <= longest)
    right = MARGIN + length * sheet.zoom
    path = f"M{_short(MARGIN)} {_short(y - 6)}v12m0 -6H{_short(right)}m0 -6v12"
    yield _path("scale", path)
    yield f'<text x="{_short(right + 12)}" y="{_short(y + 6)}">{length:g} mm</text>'


def _legend(sheet: _Sheet, marks: list[_Mark], top: float) -> Iterator[str]:
    """Yield samples of what is drawn, with their meaning."""
    column = 0.5 * (sheet.width - 2 * MARGIN)
    for index, mark in enumerate(marks):
        x = MARGIN + index % 2 * column
        y = top + (index // 2 + 0.5) * ROW
        sample = _path(mark.name, mark.sample)
        yield f'<g transform="translate({_short(x)} {_short(y)})">{sample}'
        yield f'<text x="58" y="6">{_text(mark.meaning)}</text></g>'


def _dots(places: Array) -> str:
    """Return lines without length: their round or square ends are seen."""
    return "".join(f"M{place}h0" for place in _pairs(places))


def _stamped(sheet: _Sheet, positions: list[tuple[float, float]], path: str) -> str:
    """Return a path, that begins relatively, at each of some positions [mm]."""
    places = sheet(np.array(positions).reshape(-1, 2))
    return "".join(f"M{place}{path}" for place in _pairs(places))


def _path(name: str, drawn: str) -> str:
    return f'<path class="{name}" d="{drawn}"/>'


def _pairs(places: Array) -> list[str]:
    return [f"{_short(x)} {_short(y)}" for x, y in zip(*places.T.tolist(), strict=True)]


def _short(value: float, decimals: int = COARSE) -> str:
    """Return a number without needless digits."""
    text = f"{value:.{decimals}f}".rstrip("0").rstrip(".")
    if text.startswith("0."):
        return text[1:]
    if text.startswith("-0"):
        return f"-{text[2:]}" if text != "-0" else "0"
    return text


def _text(words: str) -> str:
    """Return words as XML can hold them."""
    clean = "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in words)
    return escape(clean)
