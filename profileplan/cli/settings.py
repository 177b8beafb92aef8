"""Which options say how a table is written, and which fields of a dialect do they stand for?"""

from __future__ import annotations

import re
from typing import TYPE_CHECKING, NamedTuple

import click

if TYPE_CHECKING:
    from collections.abc import Mapping

CSV, TEXT = (".csv",), (".csv", ".jsonl")
FORMS = (".csv", ".jsonl", ".npy", ".parquet")
"""Endings of the files that are written."""

KIND_DIGITS = re.compile(r"\s*(?:(\w+)\s*=)?\s*(\d{1,3})\s*")


class Columns(click.ParamType[tuple[str, ...]]):
    """Kinds of columns in a row: "pos,vel"."""

    name = "text"

    def convert(
        self,
        value: object,
        param: click.Parameter | None,  # noqa: ARG002 - click's interface
        ctx: click.Context | None,  # noqa: ARG002
    ) -> tuple[str, ...]:
        """Return the words; whether they are known tells who uses them."""
        if isinstance(value, tuple):
            return value
        return tuple(word.strip() for word in str(value).split(",") if word.strip())


class Digits(click.ParamType[dict[str, int]]):
    """Digits of all kinds of columns, or of some: "4", "pos=4,vel=2"."""

    name = "digits"

    def convert(
        self, value: object, param: click.Parameter | None, ctx: click.Context | None
    ) -> dict[str, int]:
        """Return kinds with their digits, or end with what is wrong."""
        from profileplan.inputs.dialect import KINDS  # noqa: PLC0415

        found: dict[str, int] = {}
        for part in str(value).split(","):
            match = KIND_DIGITS.fullmatch(part)
            kinds = KINDS if match and match[1] is None else (match[1],) if match else ()
            if not match or not set(kinds) <= set(KINDS) or set(kinds) & set(found):
                self.fail(
                    f'"{value}"; allowed: digits of all, such as 4, or of each kind once, such as '
                    f"pos=4,vel=2; kinds are {', '.join(KINDS)}",
                    param,
                    ctx,
                )
            found |= dict.fromkeys(kinds, int(match[2]))
        return found


class _Renaming(click.ParamType[tuple[str, str]]):
    """A heading and its new name: "x_pos_mm=POS_X"."""

    name = "renaming"

    def convert(
        self, value: object, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[str, str]:
        """Return both, or end with what is wrong."""
        heading, sign, name = str(value).partition("=")
        if not (sign and heading and name):
            self.fail(
                f'"{value}"; allowed: a usual heading and its new name, such as x_pos_mm=POS_X',
                param,
                ctx,
            )
        return heading, name


class _Most(click.ParamType[int]):
    """A number of rows, or "all": 0."""

    name = "rows"

    def convert(
        self, value: object, param: click.Parameter | None, ctx: click.Context | None
    ) -> int:
        """Return it, or end with what is wrong."""
        text = str(value)
        if text == "all":
            return 0
        if not text.isascii() or not text.isdigit() or len(text) > 12 or not int(text):
            self.fail(f'"{value}"; allowed: a whole number of rows from 2 on, or all', param, ctx)
        return int(text)


class Interpolation(click.ParamType[tuple[int, int]]):
    """Base and exponent of an interpolation time period: "250,-6"."""

    name = "interpolation"

    def convert(
        self, value: object, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[int, int]:
        """Return both, or end with what is wrong."""
        match = re.fullmatch(r"\s*(\d{1,4})\s*,\s*([+-]?\d{1,4})\s*", str(value), re.ASCII)
        if not match:
            message = f'"{value}"; allowed: base,exponent, such as 250,-6 for 250 × 10^-6 s'
            self.fail(message, param, ctx)
        return int(match[1]), int(match[2])


class Setting(NamedTuple):
    """An option for a field of a dialect: which files have it, what its words stand for."""

    option: str
    field: str
    help: str
    kind: click.ParamType[object] | None = None
    metavar: str | None = None
    forms: tuple[str, ...] = FORMS
    words: Mapping[str, str] = {}
    multiple: bool = False

    @property
    def name(self) -> str:
        """What messages call it."""
        return self.option.split("/")[0]

    def value(self, given: object) -> object:
        """Return the field's value for what was given on the command line."""
        if self.field == "rows_a_file":
            return given or None
        if self.field == "names" and isinstance(given, tuple):
            return dict(given)
        return self.words.get(given, given) if isinstance(given, str) else given


_DELIMITERS = {"comma": ",", "semicolon": ";", "tab": "\t", "bar": "|"}
_SIGNS = {"point": ".", "comma": ","}

SETTINGS = (
    Setting(
        "--delimiter",
        "delimiter",
        "Between two cells.",
        click.Choice(list(_DELIMITERS)),
        forms=CSV,
        words=_DELIMITERS,
    ),
    Setting(
        "--decimal",
        "decimal",
        "The decimal sign.",
        click.Choice(list(_SIGNS)),
        forms=CSV,
        words=_SIGNS,
    ),
    Setting("--line-end", "line_end", "What ends a line.", click.Choice(["crlf", "lf"]), forms=CSV),
    Setting(
        "--time", "time", "Unit of the time, or tick.", click.Choice(["s", "ms", "us", "tick"])
    ),
    Setting(
        "--decimals",
        "decimals",
        "Decimals of all columns or by kind: 4, or pos=4,vel=2.",
        Digits(),
        "KIND=N,...",
        TEXT,
    ),
    Setting(
        "--significant",
        "significant",
        "Significant digits in place of decimals: pos=7.",
        Digits(),
        "KIND=N,...",
        TEXT,
    ),
    Setting("--header/--no-header", "header", "Whether headings are written.", forms=CSV),
    Setting(
        "--name",
        "names",
        "Another heading: x_pos_mm=POS_X. Can be repeated.",
        _Renaming(),
        "HEADING=NAME",
        multiple=True,
    ),
    Setting(
        "--comment",
        "comments",
        "A line before the header. Can be repeated.",
        click.STRING,
        "TEXT",
        CSV,
        multiple=True,
    ),
    Setting(
        "--comment-mark",
        "comment_mark",
        "What such lines begin with; usually #.",
        click.STRING,
        "TEXT",
        CSV,
    ),
    Setting("--axis-files/--one-file", "axis_files", "Whether each axis has a file of its own."),
    Setting(
        "--rows-a-file",
        "rows_a_file",
        "Split after so many rows at most, where the axes stand if they do; or all.",
        _Most(),
        "N",
    ),
    Setting(
        "--tell-joins/--no-tell-joins",
        "tell_joins",
        "Whether a comment in each part says how it joins the one before.",
        forms=(".csv", ".parquet"),
    ),
)
"""The options of a dialect. What their values may be, the dialect itself says."""

SECTIONS = {
    "What is written": ("output", "period", "interpolation", "columns", "units"),
    "How it is written": tuple(setting.field for setting in SETTINGS[:10]),
    "In which files": tuple(setting.field for setting in SETTINGS[10:]),
    "Uneven points": ("points", "error", "longest"),
}
"""Titles in the help → options below them; all others come last."""

PLACES = {setting.field: setting.name for setting in SETTINGS} | {
    name: f"--{name}" for name in ("columns", "units", "period", "error", "longest")
}
"""What a fault is about → the option that it may have been given by."""


class Sorted(click.Command):
    """A command whose options are shown in sections."""

    def format_options(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the options, those of a section together."""
        named = {name for names in SECTIONS.values() for name in names}
        options = [param for param in self.get_params(ctx) if isinstance(param, click.Option)]
        rest = tuple(option.name or "" for option in options if option.name not in named)
        for title, names in {**SECTIONS, "All else": rest}.items():
            own = [option for option in options if option.name in names]
            records = [option.get_help_record(ctx) for option in own]
            with formatter.section(title):
                formatter.write_dl([record for record in records if record])


def dialect_options(command: click.Command) -> click.Command:
    """Return a command with all options of a dialect."""
    for setting in SETTINGS:
        command.params.append(
            click.Option(
                [setting.option, setting.field],
                type=setting.kind,
                default=None,
                metavar=setting.metavar,
                multiple=setting.multiple,
                help=setting.help,
            )
        )
    return command
