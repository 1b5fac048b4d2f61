"""Backwards: kick law and numbers of remnants from a sample, or from a sample that a campaign would give."""
