"""How is a table written for a drive that has its own mind? As its record in the inputs says."""

from profileplan.inputs.dialect import (
    DECIMAL_SIGNS,
    DELIMITERS,
    KINDS,
    LINE_ENDS,
    TIME_DIGITS,
    TIME_HEADINGS,
    TIME_UNITS,
    Dialect,
    LineEnd,
    TimeUnit,
)

__all__ = [
    "DECIMAL_SIGNS",
    "DELIMITERS",
    "KINDS",
    "LINE_ENDS",
    "TIME_DIGITS",
    "TIME_HEADINGS",
    "TIME_UNITS",
    "Dialect",
    "LineEnd",
    "TimeUnit",
]
