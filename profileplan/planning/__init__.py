"""How a cycle is played, how long it takes, what limits it, and what would shorten it."""

from profileplan.planning.cycle import plan
from profileplan.planning.results import HeldStretch, Lever, Limit, Plan, PlannedStep
from profileplan.planning.tasks import RAISE

__all__ = ["RAISE", "HeldStretch", "Lever", "Limit", "Plan", "PlannedStep", "plan"]
