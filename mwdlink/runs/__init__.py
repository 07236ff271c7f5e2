"""Whole jobs: the example scenario, and many inputs at once."""
