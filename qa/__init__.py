"""Evenfield: keeps MR scanners honest."""

__version__ = "0.1.0"
