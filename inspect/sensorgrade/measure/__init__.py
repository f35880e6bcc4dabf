"""Measurements of a sensor, each with its standard uncertainty."""
