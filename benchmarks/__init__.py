"""Comparisons that take longer than a test, or whose outcome is a table."""
