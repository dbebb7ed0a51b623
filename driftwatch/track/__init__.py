"""Measurements to the state of a mode over time."""
