"""Whether a finished motion, or a setpoint table, keeps every requirement.

What judges tables is loaded when it is first used: a plan does not need it.
"""

from typing import TYPE_CHECKING

from profileplan.checks.findings import LIMIT_TOLERANCE, QUANTITIES, SHARED, Finding, Row
from profileplan.checks.schedules import check
from profileplan.lazy import loader

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

_HOMES = {"tables": ("Manner", "TableJudgement", "check_file", "check_table", "judge_file")}

__getattr__ = loader(__name__, _HOMES)
