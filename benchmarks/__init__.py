"""Comparisons in one run on one machine: ratios and counts, never absolute times."""
