"""Grades image sensors from raw bench frames."""

__version__ = "0.1.0"
