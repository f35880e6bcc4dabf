"""Compiled loops over every sample: arrays and numbers only."""
