"""The version of the program; results name it."""

__version__ = "0.1.0"
