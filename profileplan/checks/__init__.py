"""Whether a finished motion, or a setpoint table, keeps every requirement."""

from profileplan.checks.findings import LIMIT_TOLERANCE, QUANTITIES, SHARED, Finding
from profileplan.checks.schedules import check
from profileplan.checks.tables import check_table

__all__ = ["LIMIT_TOLERANCE", "QUANTITIES", "SHARED", "Finding", "check", "check_table"]
