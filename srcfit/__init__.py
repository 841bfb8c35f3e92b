"""Recover the distributed source that drives a one-dimensional member from readings along it."""

__version__ = "0.1.0"
