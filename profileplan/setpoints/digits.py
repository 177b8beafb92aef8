"""How do many numbers become text at once, correctly rounded?

A number is scaled to a whole one, whose digits are looked up four at a time. A row of text is made
of words of four bytes; bytes that stay zero are no text and are dropped at the end. So cells
differ in length though all rows of the table of words are equally wide.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator, Sequence

    from profileplan.motion.polynomials import Array, Flags

Whole: TypeAlias = npt.NDArray[np.int64]
Words: TypeAlias = npt.NDArray[np.uint32]

EXACT = 2.0**53
"""From here on not every whole number is a double, so scaling could lose digits."""

SPLITTER = 2.0**27 + 1
"""Cuts a double into two halves of 26 bits."""

MOST_DECIMALS = 15
"""Decimals that can be asked for: 10 to this power is a double."""

FOUR, THREE = 10_000, 1_000
"""Numbers of four and of three digits."""

MOST_BEHIND = 3
"""Bytes behind a number that share a word with its last digits."""


@dataclass(frozen=True)
class Cell:
    """How the numbers of a column are written.

    Parameters
    ----------
    before : bytes
        What stands before each number: a delimiter, or a key.
    decimals : int
        Digits behind the decimal sign; of whole numbers so many are taken as decimals.
    point : bytes
        The decimal sign, one byte.
    significant : int, optional
        Significant digits in place of ``decimals``.
    """

    before: bytes = b""
    decimals: int = 0
    point: bytes = b"."
    significant: int | None = None


def text(columns: Sequence[Array | Whole], cells: Sequence[Cell], end: bytes = b"\r\n") -> bytes:
    r"""Return rows of numbers as text.

    Parameters
    ----------
    columns : sequence of (n,) arrays
        Finite floats, which are rounded half to even by their exact values; or whole numbers,
        below 2^53, that stand for themselves over 10 to the power of ``decimals``.
    cells : sequence of Cell
        One for each column.
    end : bytes
        What ends a row.

    Examples
    --------
    >>> text([np.array([0.125, -2.0]), np.array([1, 0])], [Cell(decimals=2), Cell(b",")])
    b'0.12,1\r\n-2.00,0\r\n'
    """
    behind = [*(cell.before for cell in cells[1:]), end]
    found: dict[int, list[Words]] = {}
    # Numbers of one kind are scaled and cut together: few calls for many numbers.
    for (_, cell, tail), members in _alike(columns, cells, behind).items():
        own = _columns([columns[index] for index in members], cell, tail)
        found |= zip(members, own, strict=True)
    words = _constant(cells[0].before)
    for index, after in enumerate(behind):
        words += found[index]
        words += _constant(after) if len(after) > MOST_BEHIND else []
    count = columns[0].size
    # Words are gathered side by side and turned at once: that is quicker than one by one.
    table = np.empty((len(words), count), dtype="<u4")
    for place, word in enumerate(words):
        table[place] = word
    return table.T.tobytes().translate(None, b"\0")


def rounded(values: Array, decimals: int) -> tuple[Array, npt.NDArray[np.intp]]:
    """Return values × 10^decimals as whole numbers, and where they are too great for that.

    Parameters
    ----------
    values : (n,) array
    decimals : int
        0 to 15.

    Returns
    -------
    whole : (n,) array
        Rounded half to even, by the exact product; 0 where it is 2^53 or more.
    great : array of int
        Indices of those.

    Notes
    -----
    The product of doubles is off by half of its last bit at most. Below 2^53 that can carry it
    onto the middle between two whole numbers, never across, so only there its error is asked.
    """
    factor = float(10**decimals)
    with np.errstate(over="ignore", invalid="ignore"):
        product = values * factor
        whole = np.rint(product)
        # One pass tells that there are none, as is usual.
        few = whole.size and np.maximum(whole.max(), -whole.min()) < EXACT
        great = np.flatnonzero([] if few else ~(np.abs(whole) < EXACT))
        off = np.abs(np.subtract(product, whole, out=product), out=product)
        tie = np.flatnonzero(off == 0.5)
    if tie.size:
        middle = values[tie] * factor
        error = _product_error(values[tie], factor, middle)
        whole[tie] = np.where(
            error > 0, np.ceil(middle), np.where(error < 0, np.floor(middle), whole[tie])
        )
    if great.size:
        whole[great] = 0.0
    return whole, great


def _product_error(values: Array, factor: float, product: Array) -> Array:
    """Return values × factor - product, exactly.

    Source: Dekker: A floating-point technique for extending the available precision (1971), from
    memory.
    """
    big = values * SPLITTER
    high = big - (big - values)
    low = values - high
    factor_big = factor * SPLITTER
    factor_high = factor_big - (factor_big - factor)
    factor_low = factor - factor_high
    error: Array = low * factor_low - (
        ((product - high * factor_high) - low * factor_high) - high * factor_low
    )
    return error


def _alike(
    columns: Sequence[Array | Whole], cells: Sequence[Cell], behind: Sequence[bytes]
) -> dict[tuple[str, Cell, bytes], list[int]]:
    """Return the columns whose numbers are cut alike: kind, how, what is behind them → indices.

    What is longer than a word has room for is written by itself.
    """
    groups: dict[tuple[str, Cell, bytes], list[int]] = {}
    for index, (values, cell) in enumerate(zip(columns, cells, strict=True)):
        kind = values.dtype.kind
        own = replace(cell, before=b"", significant=cell.significant if kind == "f" else None)
        tail = behind[index] if len(behind[index]) <= MOST_BEHIND else b""
        groups.setdefault((kind, own, tail), []).append(index)
    return groups


def _columns(columns: Sequence[Array | Whole], cell: Cell, tail: bytes) -> Iterator[list[Words]]:
    """Yield the words of columns that are cut alike, each for all rows or a single word."""
    if cell.significant is not None:
        for values in columns:
            yield [*_texts([_significant(value, cell) for value in values.tolist()], tail)]
        return
    numbers = np.stack(columns)
    great = np.zeros((0, 2), dtype=np.intp)
    if numbers.dtype.kind == "f":
        scaled, flat = rounded(numbers.astype(np.float64, copy=False).ravel(), cell.decimals)
        whole: Whole = scaled.astype(np.int64).reshape(numbers.shape)
        great = np.stack(np.unravel_index(flat, numbers.shape), axis=1)
    else:
        whole = numbers.astype(np.int64, copy=False)
    negative = whole < 0
    size = np.abs(whole, out=whole)
    units, fraction = size, _constant(tail)
    if cell.decimals:
        units, parts = _cut(size, 10**cell.decimals)
        fraction = _fraction(parts, cell, tail)
    for row, values in enumerate(columns):
        words = [*_signed(negative[row], units[row]), *(w[row] if w.ndim else w for w in fraction)]
        rows = great[great[:, 0] == row, 1]
        if rows.size:
            exact = [f"{values[index]:.{cell.decimals}f}" for index in rows.tolist()]
            exact = [number.replace(".", cell.point.decode()) for number in exact]
            words = _replaced(words, rows, _texts(exact, tail))
        yield words


def _cut(numbers: Whole, factor: int) -> tuple[Whole, Whole]:
    """Return how often a factor goes into whole numbers, from 0 on, and what is left."""
    often = numbers // factor
    left = often * factor
    return often, np.subtract(numbers, left, out=left)


def _signed(negative: Flags, units: Whole) -> list[Words]:
    """Return the words of the signs and of whole numbers without leading zeros.

    Parameters
    ----------
    negative : (n,) array
        What has a sign.
    units : (n,) array
        The numbers, from 0 on.
    """
    words: list[Words] = []
    signs = bool(negative.any())
    most, zeros = int(units.max(initial=0)), "unit"
    while most >= FOUR:
        upper, block = _cut(units, FOUR)
        words.insert(0, np.where(upper > 0, _blocks("full")[block], _blocks(zeros)[block]))
        units, most, zeros = upper, most // FOUR, "blank"
    if not signs:
        return [_blocks(zeros)[units], *words]
    if most < THREE:
        # A sign and up to three digits are one word.
        return [_signed_blocks(zeros)[units + THREE * negative], *words]
    minus = np.array([0, _constant(b"-")[0]], dtype="<u4")
    return [minus.take(negative.view(np.uint8)), _blocks(zeros)[units], *words]


def _fraction(parts: Whole, cell: Cell, tail: bytes) -> list[Words]:
    """Return the words of the decimal sign, of what stands behind it, and of the number's tail."""
    digits, room = cell.decimals, 4 - len(tail)
    if digits < room:
        return [_ends(digits, cell.point, tail)[parts]]
    words: list[Words] = []
    for width, end in ((room, tail), *((4, b"") for _ in range((digits - room) // 4))):
        parts, block = _cut(parts, 10**width)
        words.insert(0, _ends(width, b"", end)[block])
        digits -= width
    return [_ends(digits, cell.point, b"")[parts], *words]


def _replaced(
    words: Sequence[Words], rows: npt.NDArray[np.intp], others: Sequence[Words]
) -> list[Words]:
    """Return words in which some rows have those of another text."""
    count = max(np.size(word) for word in words)
    kept = [np.broadcast_to(word, count).copy() for word in words]
    for word in kept:
        word[rows] = 0
    for other in others:
        word = np.zeros_like(kept[0])
        word[rows] = other
        kept.append(word)
    return kept


def _significant(value: float, cell: Cell) -> str:
    """Return a number with some significant digits, without an exponent where that is short."""
    # The sum turns a negative zero into zero.
    return f"{value + 0.0:.{cell.significant}g}".replace(".", cell.point.decode())


def _texts(numbers: Sequence[str], tail: bytes) -> list[Words]:
    """Return the words of texts, one a row, each with a tail."""
    texts = [number.encode() + tail for number in numbers]
    width = max(map(len, texts), default=0)
    width += -width % 4
    joined = np.array(texts, dtype=f"S{width or 4}")
    return list(joined.view("<u4").reshape(len(texts), -1).T)


def _constant(content: bytes) -> list[Words]:
    """Return the words of a text that is the same in every row."""
    padded = b"\0" * (-len(content) % 4) + content
    return list(np.frombuffer(padded, dtype="<u4"))


@cache
def _blocks(zeros: str) -> Words:
    """Return the words of the numbers of four digits.

    Parameters
    ----------
    zeros : str
        "full": with leading zeros; "unit": without, but for the last digit; "blank": without, and
        nothing at all for 0.
    """
    numbers = range(FOUR)
    kept: Iterable[str]
    if zeros == "full":
        kept = (f"{number:04d}" for number in numbers)
    else:
        kept = (f"{number:d}" if number or zeros == "unit" else "" for number in numbers)
    return np.frombuffer(b"".join(digits.encode().rjust(4, b"\0") for digits in kept), dtype="<u4")


@cache
def _signed_blocks(zeros: str) -> Words:
    """Return the words of the numbers of three digits, then of the same with a sign before them.

    zeros : as for ``_blocks``, "unit" or "blank".
    """
    kept = [f"{number:d}" if number or zeros == "unit" else "" for number in range(THREE)]
    texts = [*kept, *(f"-{digits}" for digits in kept)]
    return np.frombuffer(b"".join(text.encode().rjust(4, b"\0") for text in texts), dtype="<u4")


@cache
def _ends(digits: int, point: bytes, tail: bytes) -> Words:
    """Return the words of a decimal sign, so many digits and a tail, four bytes at most."""
    texts = (
        point + (f"{number:0{digits}d}".encode() if digits else b"") + tail
        for number in range(10**digits)
    )
    return np.frombuffer(b"".join(part.rjust(4, b"\0") for part in texts), dtype="<u4")
