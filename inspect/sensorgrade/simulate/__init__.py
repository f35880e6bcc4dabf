"""Sensors with known truth, for the demo, for planning and for tests."""
