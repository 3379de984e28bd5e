"""Intervals, ratios, differences and tests that know nothing of release."""
