"""The version of the program, as every stored figure and every report names it."""

__all__ = ["__version__"]

__version__ = "0.1.0"
