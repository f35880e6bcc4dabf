"""Limits, decision rules and what follows from them."""
