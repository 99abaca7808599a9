"""Limits, verdicts and the named rules."""
