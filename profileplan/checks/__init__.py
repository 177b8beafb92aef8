"""Whether a finished motion, or a setpoint table, keeps every requirement.

What judges tables is loaded when it is first used: a plan does not need it.
"""

from typing import TYPE_CHECKING

from profileplan.checks.findings import LIMIT_TOLERANCE, QUANTITIES, SHARED, Finding, Row
from profileplan.checks.schedules import check

if TYPE_CHECKING:
    from profileplan.checks.tables import (
        Manner,
        TableJudgement,
        check_file,
        check_table,
        judge_file,
    )

__all__ = [
    "LIMIT_TOLERANCE",
    "QUANTITIES",
    "SHARED",
    "Finding",
    "Manner",
    "Row",
    "TableJudgement",
    "check",
    "check_file",
    "check_table",
    "judge_file",
]


def __getattr__(name: str) -> object:
    """Load what judges tables (PEP 562)."""
    if name not in __all__:
        message = f"module {__name__!r} has no attribute {name!r}"
        raise AttributeError(message)
    from importlib import import_module  # noqa: PLC0415

    return getattr(import_module("profileplan.checks.tables"), name)
