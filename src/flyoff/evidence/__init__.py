"""Intervals and paired comparisons over independent units."""
