"""Limits and decision rules: a measurement becomes a verdict."""
