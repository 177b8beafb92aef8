"""How does a picture look: ink, sizes of text, numbers on scales?"""

from __future__ import annotations

import warnings
from contextlib import contextmanager
from functools import lru_cache
from typing import TYPE_CHECKING

import matplotlib as mpl
from matplotlib.axis import XAxis
from matplotlib.font_manager import FontProperties
from matplotlib.textpath import TextPath
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator

if TYPE_CHECKING:
    from collections.abc import Iterator

    from matplotlib.axis import Axis
    from matplotlib.typing import RcKeyType

INK, PALE, LINE, WARM = "#1c2733", "#5b6670", "#c3c9cf", "#b5400a"
"""Of text and curves, of what is said aside, of frames, and of what is at a limit."""

LARGE, PLAIN, SMALL, TINY = 12.0, 8.0, 7.0, 6.0
"""Sizes of text on A4 [points]."""

APART, GAP, TALL = 0.3, 0.1, 0.12
"""Least distance of numbers beside each other, their least gap, and the height of one [inches]."""

LONGEST = 9
"""Signs of a number; longer ones are told as "1e+12"."""

POINTS = 72.0
"""In an inch."""

STYLE: dict[RcKeyType, object] = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans", "Verdana", "sans-serif"],
    "font.size": SMALL,
    "text.color": INK,
    # Names are shown as they are: "$" marks no formula.
    "text.parse_math": False,
    "axes.edgecolor": LINE,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.6,
    "xtick.color": LINE,
    "ytick.color": LINE,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": TINY,
    "ytick.labelsize": TINY,
    "xtick.major.size": 2.0,
    "ytick.major.size": 2.0,
    "xtick.major.pad": 2.0,
    "ytick.major.pad": 2.0,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "hatch.color": LINE,
    "hatch.linewidth": 0.4,
    "legend.frameon": False,
    "legend.fontsize": TINY,
    # Text stays text, for search and for readers; names in a file do not change from run to run.
    "svg.fonttype": "none",
    "svg.hashsalt": "profileplan",
    "pdf.fonttype": 42,
}
"""What differs from the library's own defaults."""


@contextmanager
def style() -> Iterator[None]:
    """Draw in our style, whatever else is set; afterwards all is set as it was."""
    with mpl.rc_context(), warnings.catch_warnings():
        # A name in letters that the font lacks is shown with boxes, or by the reader's own font.
        warnings.filterwarnings("ignore", message="Glyph .* missing from", category=UserWarning)
        mpl.rcdefaults()
        mpl.rcParams.update(STYLE)
        yield


@lru_cache(maxsize=4096)
def width_of(text: str, size: float) -> float:
    """Return how wide a line of text is [inches].

    Parameters
    ----------
    text : str
    size : float [points]
    """
    if not text.strip():
        return 0.0
    path = TextPath((0, 0), text, size=size, prop=FontProperties())
    return float(path.get_extents().width) / POINTS


def clean(text: str) -> str:
    """Return words as a picture can hold them, in one line."""
    return "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in text)


def shortened(text: str, size: float, room: float) -> str:
    """Return a line of text, cut off where it has no more room [inches]."""
    text = clean(text)
    while text and width_of(text, size) > room:
        text = text.removesuffix("…")[:-1].rstrip() + "…" if len(text) > 2 else ""
    return text


def number(value: float) -> str:
    """Return a number of a scale, in as few digits as it needs."""
    digits = f"{round(value, 9) + 0.0:.9f}".rstrip("0").removesuffix(".")
    if len(digits) > LONGEST:
        digits = f"{value:.7g}"
    return digits.replace("-", "\N{MINUS SIGN}")


def ticked(axis: Axis, low: float, high: float, length: float, scale: float = 1.0) -> None:
    """Put even numbers on a scale, as many as have room.

    Parameters
    ----------
    axis : matplotlib.axis.Axis
    low, high : float
        Between which they lie.
    length : float
        Of the scale on paper [inches].
    scale : float
        What a number counts.
    """
    across = isinstance(axis, XAxis)
    apart = APART if across else 1.5 * TALL
    slack = 1e-9 * (high - low)
    kept: list[float] = []
    for count in range(max(int(length / apart), 2), 0, -1):
        even = MaxNLocator(nbins=count, steps=[1, 2, 5, 10]).tick_values(low / scale, high / scale)
        values = [float(value) * scale for value in even]
        kept = [value for value in values if low - slack <= value <= high + slack]
        widest = max((width_of(number(value / scale), TINY) for value in kept), default=0.0)
        step = length * (values[1] - values[0]) / (high - low)
        if (widest + GAP if across else TALL) <= step:
            break
    axis.set_major_locator(FixedLocator(kept))
    axis.set_major_formatter(FuncFormatter(lambda value, _: number(value / scale)))
