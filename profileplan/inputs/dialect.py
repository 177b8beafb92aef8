"""How is a table written for a drive that has its own mind about delimiters, signs and headings?"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import KW_ONLY, dataclass, field, fields
from types import MappingProxyType
from typing import Literal, TypeAlias

from profileplan.inputs.rules import Judge, shown

TimeUnit: TypeAlias = Literal["s", "ms", "us", "tick"]
LineEnd: TypeAlias = Literal["crlf", "lf"]

TIME_UNITS: tuple[TimeUnit, ...] = ("s", "ms", "us", "tick")
DELIMITERS = (",", ";", "\t", "|")
DECIMAL_SIGNS = (".", ",")
LINE_ENDS: Mapping[str, bytes] = {"crlf": b"\r\n", "lf": b"\n"}
TIME_HEADINGS: Mapping[str, str] = {"s": "t_s", "ms": "t_ms", "us": "t_us", "tick": "tick"}
"""Unit of time → heading of its column."""

TIME_DIGITS: Mapping[str, int] = {"s": 9, "ms": 6, "us": 3}
"""Unit of time → decimals of a nanosecond in it."""

KINDS = ("pos", "vel", "acc", "jerk", "force", "torque")
"""Kinds of columns whose decimals can be chosen."""

MOST_DECIMALS = 15
MOST_DIGITS = 17
"""Significant digits that tell every double from its neighbours."""

ADDED = ("decimals", "significant", "names")
"""What is added to by a change, and not replaced."""

LEAST_ROWS = 2
MOST_ROWS_A_FILE = 1_000_000_000


@dataclass(frozen=True)
class Dialect:
    """How a table is written. As it stands, the table is the one that README describes.

    Parameters
    ----------
    delimiter : {",", ";", tab, "|"}
        What stands between two cells.
    decimal : {".", ","}
        The decimal sign; not the delimiter.
    line_end : {"crlf", "lf"}
        What ends a line.
    decimals : mapping
        Kind of column (pos, vel, acc, jerk, force, torque) → decimals, where others than usual are
        wanted.
    significant : mapping
        Kind of column → significant digits in place of decimals; such numbers are written slowly,
        and with an exponent where they are very small or large.
    header : bool
        Whether headings are written.
    names : mapping
        Usual heading → heading that is written.
    time : {"s", "ms", "us", "tick"}
        Unit of the time, or the number of the tick.
    comments : tuple of str
        Lines before the header.
    comment_mark : str
        What they begin with.
    axis_files : bool
        Whether each axis has a file of its own.
    rows_a_file : int, optional
        Rows that a file has at most.
    tell_joins : bool
        Whether a comment in each part of a table says how it joins the one before.
    """

    _: KW_ONLY
    delimiter: str = ","
    decimal: str = "."
    line_end: LineEnd = "crlf"
    decimals: Mapping[str, int] = field(default_factory=dict, hash=False)
    significant: Mapping[str, int] = field(default_factory=dict, hash=False)
    header: bool = True
    names: Mapping[str, str] = field(default_factory=dict, hash=False)
    time: TimeUnit = "s"
    comments: tuple[str, ...] = ()
    comment_mark: str = "#"
    axis_files: bool = False
    rows_a_file: int | None = None
    tell_joins: bool = False

    def __post_init__(self) -> None:
        judge = Judge()
        judge.choice("delimiter", self.delimiter, DELIMITERS)
        judge.choice("decimal", self.decimal, DECIMAL_SIGNS)
        if self.decimal == self.delimiter:
            message = f"decimal sign and delimiter are both {shown(self.decimal)}; they must differ"
            judge.note("decimal", message)
        judge.choice("line_end", self.line_end, tuple(LINE_ENDS))
        judge.choice("time", self.time, tuple(TIME_HEADINGS))
        for place in ("header", "axis_files", "tell_joins"):
            judge.boolean(place, getattr(self, place))
        if self.rows_a_file is not None:
            judge.whole("rows_a_file", self.rows_a_file, LEAST_ROWS, MOST_ROWS_A_FILE)
        for place, least, most in (("decimals", 0, MOST_DECIMALS), ("significant", 1, MOST_DIGITS)):
            object.__setattr__(
                self, place, _judged_digits(judge, place, getattr(self, place), least, most)
            )
        for kind in self.significant:
            if kind in self.decimals:
                judge.note(f"significant.{kind}", "has decimals too; at most one is allowed")
        object.__setattr__(self, "names", _judged_names(judge, self.names))
        object.__setattr__(self, "comments", tuple(self.comments))
        for index, line in enumerate(self.comments, start=1):
            _judge_line(judge, f"comments[{index}]", line)
        _judge_line(judge, "comment_mark", self.comment_mark)
        judge.finish()

    def changed(self, changes: Mapping[str, object]) -> Dialect:
        """Return this dialect with other values of some of its fields.

        Digits and names are added to those that it has; a kind of column that is given decimals
        loses its significant digits, and the other way round.

        Raises
        ------
        InputError
            With the faults of the values, at the names of their fields.

        Examples
        --------
        >>> dict(Dialect(decimals={"pos": 4}).changed({"decimals": {"vel": 2}}).decimals)
        {'pos': 4, 'vel': 2}
        """
        values = {own.name: getattr(self, own.name) for own in fields(self)}
        for name, value in changes.items():
            if name in ADDED and isinstance(value, Mapping):
                values[name] = {**values[name], **value}
            else:
                values[name] = value
        for name, other in (("decimals", "significant"), ("significant", "decimals")):
            given, kept = changes.get(name), changes.get(other)
            if isinstance(given, Mapping) and isinstance(values[other], Mapping):
                still = kept if isinstance(kept, Mapping) else {}
                values[other] = {
                    kind: count
                    for kind, count in values[other].items()
                    if kind not in given or kind in still
                }
        return Dialect(**values)

    @property
    def end(self) -> bytes:
        """What ends a line."""
        return LINE_ENDS[self.line_end]


def _judged_names(judge: Judge, names: object) -> Mapping[str, str]:
    """Judge new names of headings, and return them frozen."""
    if not isinstance(names, Mapping):
        judge.note("names", f"{shown(names)}; headings with their new names are needed")
        return MappingProxyType({})
    for heading, name in names.items():
        judge.name(f"names.{heading}", name)
    return MappingProxyType(dict(names))


def _judge_line(judge: Judge, place: str, line: object) -> None:
    if not isinstance(line, str) or not line.isprintable():
        judge.note(place, f"{shown(line)}; one line of printable text is needed")


def _judged_digits(
    judge: Judge, place: str, digits: object, least: int, most: int
) -> Mapping[str, int]:
    """Judge numbers of digits by kinds of columns, and return them frozen."""
    if not isinstance(digits, Mapping):
        judge.note(place, f"{shown(digits)}; kinds of columns with digits are needed")
        return MappingProxyType({})
    for kind, count in digits.items():
        judge.choice(place, kind, KINDS)
        judge.whole(f"{place}.{kind}", count, least, most)
    return MappingProxyType(dict(digits))
