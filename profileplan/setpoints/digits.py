"""How do many numbers become text at once, correctly rounded?

A number is scaled to a whole one, whose digits are looked up four at a time. A row of text is made
of words of four bytes; bytes that stay zero are no text and are dropped at the end. So cells
differ in length though all rows of the table of words are equally wide.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from profileplan.motion.polynomials import Array

Whole: TypeAlias = npt.NDArray[np.int64]
Words: TypeAlias = npt.NDArray[np.uint32]

EXACT = 2.0**53
"""From here on not every whole number is a double, so scaling could lose digits."""

SPLITTER = 2.0**27 + 1
"""Cuts a double into two halves of 26 bits."""

MOST_DECIMALS = 15
"""Decimals that can be asked for: 10 to this power is a double."""

FOUR = 10_000


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
    words: list[Words] = []
    for values, cell in zip(columns, cells, strict=True):
        words += _column(values, cell)
    words += _constant(end)
    count = columns[0].size
    table = np.empty((count, len(words)), dtype="<u4")
    for place, word in enumerate(words):
        table[:, place] = word
    return table.tobytes().translate(None, b"\0")


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
        few = product.size and np.maximum(product.max(), -product.min()) < EXACT
        great = np.flatnonzero([] if few else ~(np.abs(product) < EXACT))
        off = np.subtract(product, whole)
        np.abs(off, out=off)
        tie = np.flatnonzero(off == 0.5)
    if tie.size:
        error = _product_error(values[tie], factor, product[tie])
        middle = product[tie]
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


def _column(values: Array | Whole, cell: Cell) -> list[Words]:
    """Return the words of a column, each for all rows; a constant one is a single word."""
    if cell.significant is not None and values.dtype.kind == "f":
        numbers = [_significant(value, cell) for value in values.tolist()]
        return [*_constant(cell.before), *_texts(numbers)]
    great = np.empty(0, dtype=np.intp)
    if values.dtype.kind == "f":
        scaled, great = rounded(values.astype(np.float64, copy=False), cell.decimals)
        whole: Whole = scaled.astype(np.int64)
    else:
        whole = values.astype(np.int64, copy=False)
    negative = whole < 0
    size = np.abs(whole)
    *lead, plus = _constant(b"\0" * (-(len(cell.before) + 1) % 4) + cell.before + b"\0")
    minus = _constant(b"\0" * (-(len(cell.before) + 1) % 4) + cell.before + b"-")[-1]
    signs = np.where(negative, minus, plus)
    factor = 10**cell.decimals
    units = size // factor if cell.decimals else size
    words = [signs, *_units(units)]
    if cell.decimals:
        words += _fraction(size - units * factor, cell)
    if not great.size:
        return [*lead, *words]
    exact = [f"{values[index]:.{cell.decimals}f}" for index in great.tolist()]
    return [*lead, *_replaced(words, great, exact, cell)]


def _units(units: Whole) -> list[Words]:
    """Return the words of whole numbers, from 0 on, without leading zeros."""
    words: list[Words] = []
    last = True
    while last or units.any():
        upper = units // FOUR
        block = units - upper * FOUR
        short = _blocks("unit" if last else "blank")[block]
        words.insert(
            0, np.where(upper > 0, _blocks("full")[block], short) if upper.any() else short
        )
        units, last = upper, False
    return words


def _fraction(parts: Whole, cell: Cell) -> list[Words]:
    """Return the words of the decimal sign and what stands behind it."""
    words: list[Words] = []
    for _ in range(cell.decimals // 4):
        upper = parts // FOUR
        words.insert(0, _blocks("full")[parts - upper * FOUR])
        parts = upper
    return [_points(cell.decimals % 4, cell.point)[parts], *words]


def _replaced(
    words: Sequence[Words], rows: npt.NDArray[np.intp], exact: Sequence[str], cell: Cell
) -> list[Words]:
    """Return words in which some rows have another text; what stands before the number stays."""
    before = b"\0" * (-(len(cell.before) + 1) % 4) + cell.before + b"\0"
    others = [word.copy() for word in words]
    others[0][rows] = _constant(before)[-1]
    for word in others[1:]:
        word[rows] = 0
    for part in _texts([number.replace(".", cell.point.decode()) for number in exact]):
        word = np.zeros_like(others[0])
        word[rows] = part
        others.append(word)
    return others


def _significant(value: float, cell: Cell) -> str:
    """Return a number with some significant digits, without an exponent where that is short."""
    # The sum turns a negative zero into zero.
    return f"{value + 0.0:.{cell.significant}g}".replace(".", cell.point.decode())


def _texts(numbers: Sequence[str]) -> list[Words]:
    """Return the words of texts, one a row."""
    width = max(map(len, numbers), default=0)
    width += -width % 4
    joined = np.array([number.encode() for number in numbers], dtype=f"S{width or 4}")
    return list(joined.view("<u4").reshape(len(numbers), -1).T)


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
def _points(digits: int, point: bytes) -> Words:
    """Return the words of a decimal sign and up to three digits behind it."""
    texts = (
        point + f"{number:0{digits}d}".encode() if digits else point for number in range(10**digits)
    )
    return np.frombuffer(b"".join(part.rjust(4, b"\0") for part in texts), dtype="<u4")
