"""The program's version; every record names it."""

__version__ = "0.1.0"
