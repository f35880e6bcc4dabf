"""Defects of a sensor: pixels, lines, clusters, traps; the mask."""
