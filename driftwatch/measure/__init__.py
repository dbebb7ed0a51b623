"""Estimators: arrays in, values out. Usable as a library without the rest of the program."""
