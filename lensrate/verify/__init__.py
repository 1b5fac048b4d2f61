"""Published values recomputed: the checks, their computations by group, and the table of verdicts."""

from .engine import GROUPS, Check, checks, to_table

__all__ = ["GROUPS", "Check", "checks", "to_table"]
