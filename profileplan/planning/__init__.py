"""How a cycle is played, how long it takes, what limits it, and what would shorten it."""

from profileplan.planning.cycle import plan
from profileplan.planning.plan import Plan
from profileplan.results import HeldStretch, Lever, Limit, PlannedStep

__all__ = ["HeldStretch", "Lever", "Limit", "Plan", "PlannedStep", "plan"]
