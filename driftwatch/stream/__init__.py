"""Samples and slow quantities in: recordings and simulated resonators."""
