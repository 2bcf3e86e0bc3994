"""Cost: dead time, efficiency and use of any veto segments."""

from dq.cost.cost import cost_of, measure

__all__ = ["cost_of", "measure"]
