"""The demo: an invented department, a year of its weeks, and the whole job run on it."""

from qa.demo.build import build_demo

__all__ = ["build_demo"]
