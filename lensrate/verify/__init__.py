"""Published values recomputed: the checks, their computations by group, and the table of verdicts."""
