"""The version of the package, where every room can read it."""

__version__ = "0.1.0"
