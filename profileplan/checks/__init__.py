"""Whether a finished motion, or a setpoint table, keeps every requirement."""

from profileplan.checks.findings import LIMIT_TOLERANCE, QUANTITIES, SHARED, Finding, Row
from profileplan.checks.schedules import check
from profileplan.checks.tables import TableJudgement, check_file, check_table, judge_file

__all__ = [
    "LIMIT_TOLERANCE",
    "QUANTITIES",
    "SHARED",
    "Finding",
    "Row",
    "TableJudgement",
    "check",
    "check_file",
    "check_table",
    "judge_file",
]
