"""Measured figures: accuracy, coverage, false starts, speed and memory. Started by ``tools/bench``."""
