"""Keelbook prepares the inputs of a productivity account."""

__version__ = "0.1.0"
