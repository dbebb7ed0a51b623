"""Limits, the alert state machine and grouping: pure functions of values and stream time."""
